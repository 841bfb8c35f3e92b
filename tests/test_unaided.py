"""What the readings alone allow: optimal, covering, and said plainly where they say nothing."""

from dataclasses import replace

import numpy as np
import pytest
import worked
from scipy.optimize import minimize

import srcfit
from srcfit.problem import Grid, Problem, Questions
from srcfit.unaided import alone, bounded, signed

Z = 1.959964


def small(n=5, m=8, k=1, seed=0):
    """A problem with few cells, a nuisance, and two integrals asked."""
    rng = np.random.default_rng(seed)
    edges = np.linspace(0.0, m, m + 1)
    A = np.exp(-(((np.linspace(0.5, m - 0.5, n)[:, None] - edges[:-1] - 0.5) / 1.5) ** 2)) * 3
    grid = Grid(edges, np.ones(m), np.ones(m, dtype=bool))
    problem = Problem(A, rng.normal(size=(n, k)), rng.normal(size=n) + A.sum(1), grid,
                      tuple(f"n{i}" for i in range(k)))  # fmt: skip
    rows = np.array([np.ones(m), (np.arange(m) < 4).astype(float)])
    return problem, Questions(rows, np.zeros((2, k)))


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("reach", [0.3, 3.0])
def test_no_linear_estimate_has_a_smaller_worst_case(seed, reach):
    """By duality (Donoho 1994) the best half-width is the largest q'h that hides in the noise:

    |h| <= M about its mean and |A (c + h) + B b| <= z; found by sequential quadratic programming.
    """
    problem, questions = small(seed=seed)
    lower, upper = bounded(alone(problem, questions, z=Z), reach)
    m, k = problem.A.shape[1], problem.B.shape[1]
    for i, q in enumerate(questions.cells):

        def seen(v):
            return problem.A @ (v[0] + v[1 : m + 1]) + problem.B @ v[m + 1 :]

        found = minimize(
            lambda v, q=q: -(q @ (v[0] + v[1 : m + 1])), np.zeros(1 + m + k), method="SLSQP",
            bounds=[(None, None)] + [(-reach, reach)] * m + [(None, None)] * k,
            constraints={"type": "ineq", "fun": lambda v: Z**2 - (seen(v) ** 2).sum()},
            options={"maxiter": 1000, "ftol": 1e-12},
        )  # fmt: skip
        # whatever hides is a bound from below, the estimate's own worst case one from above
        assert (seen(found.x) ** 2).sum() <= Z**2 * (1 + 1e-6)
        assert -found.fun * (1 - 1e-6) <= (upper[i] - lower[i]) / 2 <= -found.fun * 1.01


def test_any_source_within_reach_is_covered():
    """The worst source there is (all at the walls, where the bias is largest), 2000 noises."""
    problem, questions = small()
    reach, rng = 1.0, np.random.default_rng(4)
    base = alone(problem, questions, z=Z)
    w = []
    for i in range(2):
        ends = [np.array(bounded(replace(base, d=d), reach)).mean(axis=0)[i]
                for d in np.eye(len(problem.d))]  # fmt: skip
        w.append(np.array(ends))
    half = [(b - a) / 2 for a, b in zip(*bounded(base, reach), strict=True)]
    for i, q in enumerate(questions.cells):
        worst = reach * np.sign(problem.A.T @ w[i] - q)
        f = 5.0 + worst
        d = problem.A @ f + problem.B @ [2.0] + rng.normal(size=(2000, len(problem.d)))
        held = np.abs(d @ w[i] - q @ f) <= half[i]
        assert held.mean() >= 0.95


def test_what_the_readings_do_not_see_has_no_interval():
    """A nuisance that looks like the constant: the total is not told, at any reach."""
    problem, questions = small()
    twin = replace(problem, B=problem.A.sum(axis=1)[:, None])
    lower, upper = bounded(alone(twin, questions, z=Z), 1.0)
    assert np.isnan(lower).all()
    assert np.isnan(upper).all()


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("seed", range(3))
def test_bounds_under_a_sign_are_the_least_and_the_largest(sign, seed):
    """Against sequential quadratic programming over the same set (Stark 1992)."""
    problem, questions = small(seed=seed)
    problem = replace(problem, d=sign * np.abs(problem.d))
    ends = signed(alone(problem, questions, z=Z, signed=[]), np.full(2, 2.0), sign)
    U = problem.B / np.linalg.norm(problem.B)
    X, d = problem.A - U @ (U.T @ problem.A), problem.d - (U @ (U.T @ problem.d[:, None]))[:, 0]
    m = X.shape[1]
    box = [(0, None)] * m if sign > 0 else [(None, 0)] * m

    def misfit(f):
        return ((X @ f - d) ** 2).sum()

    options = {"maxiter": 2000, "ftol": 1e-13}
    start = minimize(misfit, sign * np.ones(m), method="SLSQP", bounds=box, options=options)
    most = start.fun + Z**2
    for i, q in enumerate(questions.cells):
        for side, end in zip((1.0, -1.0), ends, strict=True):
            found = minimize(
                lambda f, q=q, side=side: side * (q @ f), start.x, method="SLSQP", bounds=box,
                constraints={"type": "ineq", "fun": lambda f: most - misfit(f)}, options=options,
            )  # fmt: skip
            assert end[i] == pytest.approx(side * found.fun, abs=0.02 * max(abs(found.fun), 1.0))


def test_what_hides_from_every_reading_has_no_upper_bound():
    problem, questions = small()
    A = problem.A.copy()
    A[:, 0] = 0.0
    lower, upper = signed(alone(replace(problem, A=A), questions, z=Z, signed=[]), np.ones(2))
    assert np.isfinite(lower).all()
    assert np.isinf(upper).all()


def test_bounds_under_a_sign_hold():
    """Blocks on the foundation beam of the worked cases, 60 noises: total and zone, 95 %."""
    case = worked.CASES[0]
    problem = worked.problem(case)
    questions = worked.questions(case, problem)
    keep = np.flatnonzero(questions.cells.any(axis=1))[[0, -1]]
    questions = Questions(questions.cells[keep], questions.columns[keep])
    x = problem.grid.middles
    f = 20e3 + 60e3 * ((x > 6) & (x < 12))
    rng, held = np.random.default_rng(2), []
    for _ in range(60):
        d = problem.A @ f + rng.normal(size=len(problem.d))
        lower, upper = signed(
            alone(replace(problem, d=d), questions, z=Z, signed=[]), np.full(len(keep), 5e4)
        )
        truth = questions.cells @ f
        held.append((lower <= truth) & (truth <= upper))
    assert np.mean(held, axis=0).min() >= 0.87  # three standard errors of 60 draws: 0.085


# --- in a whole recovery ------------------------------------------------------------------------

PLACES = np.linspace(1.0, 29.0, 15)
MEMBER = {
    "kind": "beam", "length": "30 m", "bending_stiffness": "768 MN*m^2",
    "foundation": "12 MN/m^2", "left": "free", "right": "free",
}  # fmt: skip


def recovered(folder, scale=1.0, unit="kN/m", total_unit="kN", **source):
    w = srcfit.respond(srcfit.make_member(MEMBER), PLACES, lambda x: 40e3 + 0 * x)
    w = w + 1e-4 * np.random.default_rng(1).normal(size=len(PLACES))
    rows = [f"{x!r},{1e3 * v!r}" for x, v in zip(PLACES.tolist(), w.tolist(), strict=True)]
    (folder / "w.csv").write_text("\n".join(["x,w", *rows, ""]))
    asked = {
        "unit": unit, "total_unit": total_unit, "cells": 60,
        "zones": [{"name": "wide", "from": "0 m", "to": "12 m"},
                  {"name": "narrow", "from": "18 m", "to": "20 m"}], **source,
    }  # fmt: skip
    return srcfit.recover(srcfit.make_case({
        "member": MEMBER, "source": asked,
        "readings": {"file": "w.csv", "position": {"column": "x", "unit": "m"},
                     "column": [{"column": "w", "kind": "deflection", "unit": "mm",
                                 "sd": "0.1 mm"}]},
    }, folder))  # fmt: skip


def test_the_total_and_wide_zones_are_looked_at(tmp_path):
    found = recovered(tmp_path)
    facts = found.facts
    total, (wide, narrow) = facts["total"], facts["zones"]
    assert total["data_lower"] < 1200 < total["data_upper"]
    assert wide["data_lower"] < wide["lower"] < wide["upper"] < wide["data_upper"]
    assert (narrow["data_lower"], narrow["data_upper"]) == (None, None)
    assert list(found.zones.columns[-2:]) == ["data_lower [kN]", "data_upper [kN]"]
    assert found.zones["data_lower [kN]"].tolist()[0] == pytest.approx(wide["data_lower"])
    assert np.isnan(found.zones["data_lower [kN]"].tolist()[1])
    alone = facts["alone"]
    band = found.source[["lower [kN/m]", "upper [kN/m]"]].to_numpy()
    assert alone["within"] >= (band.max() - band.min()) / 2
    assert "twice the reach of the band" in alone["assumed"]
    assert [t.split(":")[0] for t in alone["told"]] == ["total", "zone wide"]
    page = (found.save(tmp_path / "out") / "report.html").read_text()
    assert "Without smoothness" in page


def test_units_change_nothing(tmp_path):
    one, other = recovered(tmp_path).facts, recovered(tmp_path, unit="N/mm", total_unit="N").facts
    for key in ("data_lower", "data_upper"):
        assert other["total"][key] == pytest.approx(1e3 * one["total"][key], rel=1e-6)
    assert other["alone"]["within"] == pytest.approx(one["alone"]["within"], rel=1e-6)


def test_a_declared_sign_takes_the_place_of_a_reach(tmp_path):
    facts = recovered(tmp_path, sign="nonnegative").facts
    assert facts["alone"]["within"] is None
    assert facts["alone"]["sign"] == "nonnegative"
    assert "nothing but the declared sign" in facts["alone"]["assumed"]
    for one in (facts["total"], facts["zones"][0]):
        assert 0 < one["data_lower"] < one["value"] < one["data_upper"]


def test_where_the_readings_say_nothing_it_is_said():
    from srcfit.readingsalone import ReadingsAlone, sentences

    n = {"value": 10.0, "sd": 1.0, "lower": 8.0, "upper": 12.0}
    nan, inf = float("nan"), float("inf")
    lower, upper = np.array([nan, -inf, 5.0, 7.9, -30.0]), np.array([nan, inf, inf, 12.3, 40.0])
    found = ReadingsAlone(lower, upper, np.ones(5, dtype=bool), 3.0)
    told = sentences(found, list("abcde"), [n] * 5, "kN")
    assert told[:2] == [f"{k}: anything; the answer rests on smoothness alone" for k in "ab"]
    assert told[2] == "c: at least 5.0 kN, and no limit on the other side"
    assert told[3] == "d: 7.9 to 12.3 kN; smoothness adds next to nothing"
    assert told[4].endswith("5.7 % as wide and rests on the source being smooth between readings")
