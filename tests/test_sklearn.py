"""The scikit-learn face: its own contract, and the same numbers as the rest of the project."""

import doctest
import os
import pickle
import subprocess
import sys
from math import pi
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import referee
from sklearn.base import clone
from sklearn.linear_model import LinearRegression
from sklearn.model_selection import GridSearchCV, KFold, cross_val_score
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import FunctionTransformer
from sklearn.utils.estimator_checks import estimator_checks_generator

import srcfit
import srcfit.sklearn
from srcfit.errors import MemberError, ReadingsError, SolveError
from srcfit.holds import restrained
from srcfit.sklearn import SourceRegressor
from srcfit.view import look

WIRE = {"kind": "cable", "length": "10 m", "tension": "50 N", "left": "fixed", "right": "fixed"}
BEAM = {
    "kind": "beam", "length": "12 m", "bending_stiffness": "30 MN*m^2", "left": "pinned",
    "right": "pinned",
}  # fmt: skip
GROUND_BEAM = {
    "kind": "beam", "length": "30 m", "bending_stiffness": "768 MN*m^2",
    "foundation": "12 MN/m^2", "left": "free", "right": "free",
}  # fmt: skip
BUSBAR = {
    "kind": "conductor", "length": "2 m", "conductance": "0.8 W*m/K", "loss": "3 W/(m*K)",
    "ambient": "20 degC", "left": {"value": "55 degC"}, "right": {"value": "48 degC"},
}  # fmt: skip


def column(x):
    return np.asarray(x, dtype=float)[:, None]


def middles(model):
    return (model.edges_[1:] + model.edges_[:-1]) / 2


def noisy_wire(n=40, sd=0.01, seed=1):
    """Places, readings and the true source of a wire under a smooth load."""
    x = np.linspace(0.2, 9.8, n)

    def source(s):
        return 5 + 3 * np.sin(2 * pi * s / 10)

    sag = srcfit.respond(srcfit.make_member(WIRE), x, source)
    return x, sag + sd * np.random.default_rng(seed).normal(size=n), source


ALONE = "check_array_api_input"  # works only where SciPy was told so before it was loaded
ESTIMATORS = (SourceRegressor(), SourceRegressor(roughness=2, choose="gcv", cells=40))
# every check that scikit-learn has for such an estimator; none is expected to fail
CHECKS = [pair for e in ESTIMATORS for pair in estimator_checks_generator(e)]


def name_of(value):
    return getattr(value, "func", value).__name__ if callable(value) else None


@pytest.mark.parametrize(
    ("estimator", "check"), [p for p in CHECKS if name_of(p[1]) != ALONE], ids=name_of
)
def test_the_contract_of_an_estimator(estimator, check):
    check(estimator)


def test_the_rest_of_the_contract_where_other_arrays_are_switched_on():
    assert [name_of(c) for _, c in CHECKS].count(ALONE) == len(ESTIMATORS)
    code = (
        "from sklearn.utils.estimator_checks import estimator_checks_generator as every\n"
        "from srcfit.sklearn import SourceRegressor\n"
        f"for e, c in every(SourceRegressor()):\n    if c.func.__name__ == {ALONE!r}:\n"
        "        c(e); print('passed')"
    )
    root = Path(srcfit.__file__).parent.parent
    env = os.environ | {"SCIPY_ARRAY_API": "1", "PYTHONPATH": str(root)}
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=env)
    assert done.stdout == "passed\n", done.stderr


def test_the_example_in_the_docstring_runs():
    found = doctest.testmod(srcfit.sklearn)
    assert found.attempted >= 7
    assert found.failed == 0


def test_a_clone_learns_the_same():
    x, sag, _ = noisy_wire()
    model = SourceRegressor(WIRE, cells=50, sd=0.01, choose="gcv").fit(column(x), sag)
    twin = clone(model)
    assert not hasattr(twin, "source_")
    assert twin.get_params() == model.get_params()
    np.testing.assert_array_equal(twin.fit(column(x), sag).source_, model.source_)
    member = clone(SourceRegressor(srcfit.make_member(WIRE), cells=50, sd=0.01, choose="gcv"))
    np.testing.assert_array_equal(member.fit(column(x), sag).source_, model.source_)


def test_a_pickle_predicts_the_same_and_carries_no_readings():
    x, sag, _ = noisy_wire(n=400)
    model = SourceRegressor(WIRE, cells=30).fit(column(x), sag)
    text = pickle.dumps(model)
    assert len(text) < 10_000  # the matrix alone would be 96 kB
    np.testing.assert_array_equal(
        pickle.loads(text).predict(column(x[:9])), model.predict(column(x[:9]))
    )


def through_recover(tmp_path, member, kind, unit, values, places, sd, source_unit):
    rows = [f"{a!r},{b!r}" for a, b in zip(places.tolist(), values.tolist(), strict=True)]
    (tmp_path / "r.csv").write_text("\n".join(["x,v", *rows]) + "\n")
    reading = {"column": "v", "kind": kind, "unit": unit, "sd": sd}
    return srcfit.recover(
        srcfit.make_case(
            {
                "title": "t", "member": member, "source": {"unit": source_unit, "cells": 60},
                "readings": {
                    "file": "r.csv", "position": {"column": "x", "unit": "m"}, "column": [reading],
                },
                "strength": {"roughness": 1, "choose": "evidence"},
            },
            folder=tmp_path,
        )
    )  # fmt: skip


@pytest.mark.parametrize(
    ("member", "kind", "unit", "sd", "source", "source_unit"),
    [
        (GROUND_BEAM, "deflection", "m", 1e-4, lambda s: 4e4 + 5e4 * ((s > 6) & (s < 12)), "N/m"),
        (BUSBAR, "temperature", "K", 0.05, lambda s: 30 + 200 * np.exp(-((s - 1) ** 2) / 0.02),
         "W/m"),
    ],
    ids=["ground beam", "busbar"],
)  # fmt: skip
def test_the_same_estimate_as_recover(tmp_path, member, kind, unit, sd, source, source_unit):
    made = srcfit.make_member(member)
    places = made.length * np.linspace(0.03, 0.97, 24)
    values = srcfit.respond(made, places, source)
    values = values + sd * np.random.default_rng(5).normal(size=24)
    whole = through_recover(
        tmp_path, member, kind, unit, values, places, f"{sd} {unit}", source_unit
    )
    model = SourceRegressor(member, quantity=kind, cells=60, sd=sd).fit(column(places), values)
    table = whole.source
    estimate = table[next(c for c in table if c.startswith("estimate"))].to_numpy()
    size = np.abs(estimate).max()
    np.testing.assert_allclose(model.source_, estimate, rtol=0, atol=1e-9 * size)
    assert model.strength_ == pytest.approx(whole.summary()["strength"]["value"], rel=1e-9)
    rows = whole.readings
    predicted = rows[next(c for c in rows if c.startswith("predicted"))].to_numpy()
    np.testing.assert_allclose(model.predict(column(places)), predicted, rtol=0, atol=1e-6 * sd)


@pytest.mark.parametrize("roughness", [0, 1, 2])
def test_the_estimate_is_the_minimum(roughness):
    """Second way: matrices of the beam by finite elements, and one large least-squares system."""
    rng = np.random.default_rng(2)
    x, cells, sd = np.linspace(0.6, 11.4, 15), 24, 2e-5
    y = 1e-3 * np.sin(pi * x / 12) + sd * rng.normal(size=15)
    Z, weight = rng.normal(size=(15, 1)), rng.uniform(0.5, 3.0, 15)
    tau = {0: 1e-7, 1: 1e-6, 2: 1e-5}[roughness]
    model = SourceRegressor(BEAM, cells=cells, roughness=roughness, strength=tau, sd=sd)
    model.fit(np.column_stack([x, Z]), y, sample_weight=weight)

    edges, h = np.linspace(0, 12, cells + 1), 12 / cells
    A, _ = referee.beam(edges, x, 30e6)
    w = np.sqrt(weight)[:, None] / sd
    D = np.diff(np.eye(cells), n=roughness, axis=0) * h ** (0.5 - roughness)
    penalty = np.sqrt(tau) * np.hstack([D @ (np.eye(cells) - (roughness == 0) / cells),
                                        np.zeros((len(D), 1))])  # fmt: skip
    system = np.vstack([w * np.hstack([A, Z]), penalty])
    norms = np.linalg.norm(system, axis=0)
    right = np.append(w[:, 0] * y, np.zeros(len(D)))
    found = np.linalg.lstsq(system / norms, right, rcond=1e-15)[0] / norms
    np.testing.assert_allclose(model.source_, found[:-1], atol=1e-5 * np.abs(found).max())
    np.testing.assert_allclose(model.coef_, found[-1:], rtol=1e-6)


def test_a_noise_free_source_comes_back():
    """Predictions at new places are those of the true source; the source itself to 1 %.

    First differences make an estimate level at the ends; so is this source.
    """
    member = srcfit.make_member(WIRE)
    x, new = np.linspace(0.1, 9.9, 60), np.linspace(0, 10, 37)

    def source(s):
        return 5 + 3 * np.cos(2 * pi * s / 10)

    model = SourceRegressor(member, sd=1e-7)
    model.fit(column(x), srcfit.respond(member, x, source))
    true = srcfit.respond(member, new, source)
    np.testing.assert_allclose(model.predict(column(new)), true, atol=1e-6 * true.max())
    np.testing.assert_allclose(model.source_, source(middles(model)), atol=0.01 * 8)
    assert model.score(column(new), true) > 1 - 1e-9


def by_hand(x, y, folds, **options):
    """Mean R2 over folds, without scikit-learn's search."""
    found = []
    for train, test in folds.split(x):
        model = SourceRegressor(WIRE, cells=40, **options).fit(x[train], y[train])
        left = y[test] - model.predict(x[test])
        found.append(1 - left @ left / ((y[test] - y[test].mean()) ** 2).sum())
    return np.mean(found)


def test_a_grid_search_finds_the_best_strength_and_roughness():
    x, sag, _ = noisy_wire(sd=0.03)
    folds = KFold(3, shuffle=True, random_state=0)
    grid = {"strength": np.geomspace(1e-9, 1e3, 4), "roughness": np.array([1, 2])}
    search = GridSearchCV(SourceRegressor(WIRE, cells=40), grid, cv=folds, error_score="raise")
    search.fit(column(x), sag)
    scores = {
        (tau, r): by_hand(column(x), sag, folds, strength=tau, roughness=int(r))
        for tau in grid["strength"] for r in grid["roughness"]
    }  # fmt: skip
    best = max(scores, key=scores.get)
    assert (search.best_params_["strength"], search.best_params_["roughness"]) == best
    assert search.best_score_ == pytest.approx(scores[best], rel=1e-9)
    assert search.best_score_ > scores[grid["strength"][0], 1] + 1e-6
    assert search.best_estimator_.source_.shape == (40,)


def test_cross_validation_predicts_readings_to_within_their_noise():
    """R2 of each fold is beyond that of errors of twice the noise."""
    sd, folds = 0.01, KFold(5, shuffle=True, random_state=1)
    x, sag, _ = noisy_wire(n=60, sd=sd)
    model = SourceRegressor(WIRE, cells=60)
    scores = cross_val_score(model, column(x), sag, cv=folds)
    least = [1 - (2 * sd) ** 2 / sag[test].var() for _, test in folds.split(x)]
    assert scores.shape == (5,)
    assert (scores > least).all()
    np.testing.assert_array_equal(cross_val_score(model, column(x), sag, cv=folds), scores)


def test_a_pipeline_brings_positions_to_metres():
    x, sag, _ = noisy_wire()
    direct = SourceRegressor(WIRE, cells=40).fit(column(x), sag)
    chain = make_pipeline(FunctionTransformer(lambda X: X * 1e-3), SourceRegressor(WIRE, cells=40))
    chain.fit(column(x) * 1e3, sag)
    np.testing.assert_allclose(
        chain.predict(column(x) * 1e3), direct.predict(column(x)), rtol=1e-9
    )


def test_a_linear_effect_beside_the_source_is_found():
    x, sag, _ = noisy_wire(sd=0.0)
    warm = np.random.default_rng(7).normal(size=len(x))
    frame = pd.DataFrame({"x": x, "warm": warm, "datum": 1.0})
    model = SourceRegressor(WIRE, sd=1e-6).fit(frame, sag + 0.02 * warm - 0.3)
    np.testing.assert_allclose(model.coef_, [0.02, -0.3], rtol=1e-4)
    assert list(model.feature_names_in_) == ["x", "warm", "datum"]
    assert model.undetermined_ == ()


def test_unknowns_that_cannot_be_told_apart_are_named():
    x, sag, _ = noisy_wire()
    Z = np.column_stack([x, np.ones_like(x), 2 * np.ones_like(x)])
    model = SourceRegressor(WIRE, cells=30).fit(Z, sag + 1.0)
    assert model.undetermined_ == (("covariate 1", "covariate 2"),)
    assert model.coef_ @ [1, 2] == pytest.approx(1.0, abs=0.05)


def test_weights_are_precisions():
    """Weight 4 is half the sd; weight 0 leaves a reading out; repeats equal weight 2."""
    x, sag, _ = noisy_wire()
    options = {"cells": 30, "strength": 1e-3, "sd": 0.01}
    whole = SourceRegressor(WIRE, **options).fit(column(x), sag, np.full(40, 4.0))
    half = SourceRegressor(WIRE, **options | {"sd": 0.005}).fit(column(x), sag)
    np.testing.assert_allclose(whole.source_, half.source_, rtol=1e-9)
    twice = np.where(np.arange(40) < 10, 2, 1)
    weighted = SourceRegressor(WIRE, **options).fit(column(x), sag, twice)
    repeated = SourceRegressor(WIRE, **options).fit(column(np.repeat(x, twice)), sag.repeat(twice))
    np.testing.assert_allclose(weighted.source_, repeated.source_, rtol=1e-8)
    kept = np.arange(40) % 3 > 0
    some = SourceRegressor(WIRE, cells=30).fit(column(x), sag, kept.astype(float))
    fewer = SourceRegressor(WIRE, cells=30).fit(column(x[kept]), sag[kept])
    np.testing.assert_allclose(some.source_, fewer.source_, rtol=1e-9)
    with pytest.raises(ValueError, match="sample_weight must not be negative"):
        SourceRegressor(WIRE).fit(column(x), sag, -np.ones(40))


def test_the_size_of_the_noise_is_found():
    """Relative to the chi distribution's spread of 1/sqrt(2 * 75) = 8 %."""
    x, sag, _ = noisy_wire(n=80, sd=0.02)
    model = SourceRegressor(WIRE, cells=60).fit(column(x), sag)
    assert model.sd_ == pytest.approx(0.02, rel=0.25)
    scaled = SourceRegressor(WIRE, cells=60).fit(column(x), sag * 1e6)
    np.testing.assert_allclose(scaled.source_, model.source_ * 1e6, rtol=1e-7)


def test_ends_of_unknown_value_are_told():
    member = BUSBAR | {"left": {"value": "unknown"}, "right": {"value": "unknown"}}
    x = np.linspace(0.02, 1.98, 40)
    heat = srcfit.respond(srcfit.make_member(BUSBAR), x, lambda s: 40 + 0 * s)
    model = SourceRegressor(member, quantity="temperature", sd=1e-6).fit(column(x), heat)
    assert model.unknowns_ == pytest.approx(
        {"left.value": 328.15, "right.value": 321.15}, abs=1e-3
    )
    assert model.predict([[0.0], [2.0]]) == pytest.approx([328.15, 321.15], abs=1e-3)


def test_what_is_known_about_an_end_is_weighed_against_the_readings():
    """An end said to be at 60 degC within 1 mK overrides readings of 1 K noise."""
    end = {"value": "unknown", "guess": "60 degC", "sd": "0.001 K"}
    member = BUSBAR | {"left": end}
    x = np.linspace(0.05, 1.95, 20)
    heat = srcfit.respond(srcfit.make_member(BUSBAR), x, lambda s: 40 + 0 * s)
    model = SourceRegressor(member, sd=1.0).fit(column(x), heat)
    assert model.unknowns_["left.value"] == pytest.approx(333.15, abs=0.01)
    with pytest.raises(ReadingsError, match=r"left.value: .* state the sd"):
        SourceRegressor(member).fit(column(x), heat)


def test_a_member_that_nothing_holds_keeps_its_free_motion():
    """A free beam, tilted: balanced source and predictions of the whole shape."""
    free = srcfit.make_member(
        {"kind": "beam", "length": "10 m", "bending_stiffness": "30 MN*m^2", "left": "free",
         "right": "free"}
    )  # fmt: skip
    x, new = np.linspace(0.2, 9.8, 25), np.linspace(0, 10, 21)

    def shape(x):
        load = srcfit.respond(free, x, lambda s: 1e4 * np.cos(2 * pi * s / 10))
        return load + 0.01 + 0.002 * x

    model = SourceRegressor(free, cells=100, sd=1e-9).fit(column(x), shape(x))
    np.testing.assert_allclose(model.predict(column(new)), shape(new), atol=1e-8)
    widths = np.diff(model.edges_)
    assert abs(model.source_ @ widths) < 1e-6 * np.abs(model.source_) @ widths
    np.testing.assert_allclose(
        model.source_, 1e4 * np.cos(2 * pi * middles(model) / 10), atol=300
    )  # fmt: skip


def test_free_motions_are_measured_by_the_response_at_two_places():
    """A rigid line through 1 at one place and 0 at the other, whatever else is asked."""
    free = srcfit.make_member(
        {"kind": "beam", "length": "10 m", "bending_stiffness": "30 MN*m^2", "left": "free",
         "right": "free"}
    )  # fmt: skip
    view = look(free, "response", 20)
    a, b = (s.at for s in restrained(free)[0].supports)
    x = np.linspace(0, 10, 7)
    lines = np.column_stack([(x - b) / (a - b), (x - a) / (b - a)])
    np.testing.assert_allclose(view.rows(x)[1], lines, atol=1e-10)
    np.testing.assert_allclose(view.rows(x[3:4])[1], lines[3:4], atol=1e-10)


def test_a_settled_pin_of_a_beam_that_can_still_turn_stays_where_it_is():
    member = srcfit.make_member(
        {"kind": "beam", "length": "10 m", "bending_stiffness": "30 MN*m^2", "left": "free",
         "right": "free", "support": [{"at": "8 m", "kind": "pinned", "settlement": "30 mm"}]}
    )  # fmt: skip
    x = np.linspace(0.2, 9.8, 25)
    w = 0.03 + 0.004 * (x - 8)
    model = SourceRegressor(member, cells=50, sd=1e-6).fit(column(x), w)
    assert model.predict([[8.0]]) == pytest.approx([0.03], abs=1e-12)
    np.testing.assert_allclose(model.predict(column(x)), w, atol=1e-7)


def test_strains_and_slopes_are_read_as_they_are():
    member = srcfit.make_member(BEAM)
    x = np.linspace(0.3, 11.7, 40)

    def load(s):
        return 2e3 * (1 - np.cos(2 * pi * s / 12))  # level at the ends

    bend = srcfit.respond(member, x, load, quantity="curvature")
    model = SourceRegressor(member, quantity="strain", distance=0.25, sd=1e-9)
    model.fit(column(x), 0.25 * bend)
    np.testing.assert_allclose(model.source_, load(middles(model)), atol=0.02 * 4e3)
    turn = srcfit.respond(member, x, load, quantity="slope")
    other = SourceRegressor(member, quantity="slope", sd=1e-9).fit(column(x), turn)
    np.testing.assert_allclose(other.source_, load(middles(other)), atol=0.02 * 4e3)
    with pytest.raises(ReadingsError, match="give `distance`"):
        SourceRegressor(member, quantity="strain").fit(column(x), bend)
    with pytest.raises(MemberError, match="has no quantity 'torque'"):
        SourceRegressor(member, quantity="torque").fit(column(x), bend)


def test_without_a_member_the_source_is_minus_the_second_derivative():
    x = 1e3 + np.linspace(0, 4, 80)
    y = 7 - 2 * (x - 1e3) + np.sin(x - 1e3)
    model = SourceRegressor(sd=1e-6).fit(column(x), y)
    inner = np.abs(middles(model) - 1002) < 1.8
    t = middles(model)[inner] - 1e3
    np.testing.assert_allclose(model.source_[inner], np.sin(t), atol=0.02)
    low, high = model.edges_[[0, -1]]
    assert (low, high) == pytest.approx((999.8, 1004.2))
    np.testing.assert_array_equal(
        model.predict([[low - 50], [high + 50]]), model.predict([[low], [high]])
    )
    line = LinearRegression().fit(column(x), y)
    assert model.score(column(x), y) > line.score(column(x), y)


@pytest.mark.parametrize("solver", ["eigenbasis", "svd-cut"])
def test_cuts_are_searched_like_strengths(solver):
    x, sag, _ = noisy_wire(sd=0.001)
    model = SourceRegressor(WIRE, cells=60, solver=solver, choose="gcv").fit(column(x), sag)
    assert model.strength_ == int(model.strength_)
    stated = clone(model).set_params(strength=int(model.strength_)).fit(column(x), sag)
    np.testing.assert_array_equal(stated.source_, model.source_)
    total = model.source_ @ np.diff(model.edges_)
    assert total == pytest.approx(50.0, rel=0.05)
    with pytest.raises(SolveError, match="cuts have no evidence"):
        SourceRegressor(WIRE, cells=60, solver=solver).fit(column(x), sag)


def test_many_places_are_predicted_as_few_are():
    """1203 places go in three blocks; the order and the company of a place do not matter."""
    x, sag, _ = noisy_wire()
    model = SourceRegressor(WIRE, cells=30).fit(column(x), sag)
    many = np.random.default_rng(0).uniform(0, 10, 1203)
    whole = model.predict(column(many))
    some = np.concatenate([model.predict(column(part)) for part in np.array_split(many, 20)])
    np.testing.assert_allclose(whole, some, rtol=1e-10, atol=1e-12)


def test_readings_that_the_unpenalised_unknowns_explain_leave_nothing_to_choose():
    member = srcfit.make_member(WIRE)
    x = np.linspace(1, 9, 9)
    model = SourceRegressor(member, cells=20).fit(column(x), np.zeros(9))
    assert not model.source_.any()
    assert np.isnan(model.strength_)
    assert model.sd_ == 0


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"cells": 2}, "'cells' parameter"),
        ({"cells": 20.0}, "'cells' parameter"),
        ({"roughness": 3}, "'roughness' parameter"),
        ({"roughness": -0.5}, "'roughness' parameter"),
        ({"choose": "averaged"}, "'choose' parameter"),
        ({"solver": "magic"}, "'solver' parameter"),
        ({"strength": -1.0}, "'strength' parameter"),
        ({"strength": 0}, "strength must be above 0"),
        ({"sd": 0.0}, "'sd' parameter"),
        ({"member": "beam"}, "'member' parameter"),
    ],
)
def test_a_parameter_that_means_nothing_is_refused(options, words):
    x, sag, _ = noisy_wire()
    with pytest.raises(ValueError, match=words):
        SourceRegressor(**{"member": WIRE} | options).fit(column(x), sag)


def test_what_cannot_be_done_is_said():
    x, sag, _ = noisy_wire()
    model = SourceRegressor(WIRE, cells=20).fit(column(x), sag)
    with pytest.raises(ValueError, match=r"the position 12 m .* from 0 to 10 m"):
        model.predict([[5.0], [12.0]])
    with pytest.raises(ValueError, match="the position -1 m"):
        SourceRegressor(WIRE).fit(column(x - 1.2), sag)
    driven = WIRE | {"mass": "1 kg/m", "frequency": "3 Hz"}
    with pytest.raises(ValueError, match="driven member"):
        SourceRegressor(driven).fit(column(x), sag)
    with pytest.raises(SolveError, match=r"discrepancy cannot choose .* noise is not stated"):
        SourceRegressor(WIRE, choose="discrepancy").fit(column(x), sag)
