"""Features that the readings demand: found where they are, not where there is none."""

import csv
import sys
from pathlib import Path

import numpy as np
import pytest
import simulation_matrix as matrix
from scipy.stats import multivariate_normal
from simulation import SHAPES

import srcfit
from srcfit.bands import cautious, weighed
from srcfit.errors import SrcfitError
from srcfit.features import _tried, featured, shapes
from srcfit.priors import covariance
from srcfit.problem import Problem, Questions
from srcfit.solvers.frame import frame

ROOT = Path(__file__).parent.parent
sys.path.insert(0, str(ROOT / "datasets"))

import make_demo  # noqa: E402


def example(shape, n=40, noise=0.003, member="conductor mL = 4", seed=0, stated=True):
    fine, x, blank, questions = matrix.layout(matrix.MEMBERS[member], n, matrix.FIVE)
    u = fine @ shape(x)
    sd = noise * np.abs(u).max()
    d = (u + sd * np.random.default_rng(seed).normal(size=n)) / sd
    problem = Problem(blank.A / sd, blank.B, d, blank.grid, places=blank.places, stated=stated)
    return problem, questions, shape(x).reshape(matrix.CELLS, matrix.FINER).mean(axis=1)


@pytest.mark.parametrize("stated", [True, False])
def test_a_narrow_load_is_found_where_it_is(stated):
    """0.3 + 3 between 0.47 and 0.53: held, and its cells far nearer to the truth."""
    problem, questions, truth = example(SHAPES["narrow load"], stated=stated)
    found = featured(problem)
    column = found.grid.features[:, 0]
    inside = problem.grid.middles[column > column.max() / 2]
    assert inside.min() > 0.44
    assert inside.max() < 0.56
    rows = np.vstack([questions.cells, np.eye(matrix.CELLS)])
    one, two = (cautious(p, Questions(rows, rows[:, :0])) for p in (problem, found))
    assert (np.abs(two.value - rows @ truth) < two.upper - two.value)[:6].all()
    assert two.sd[2] < one.sd[2]
    off = [np.linalg.norm(a.value[6:] - truth) for a in (one, two)]
    assert off[1] < 0.6 * off[0]


def test_sources_without_features_have_none():
    """No feature in a level or a half wave: 0 of 120 (odds of 20 to 1 would allow some)."""
    count = 0
    for name in ("constant", "half wave"):
        for member in ("cable", "pinned beam", "foundation beam 5"):
            for seed in range(20):
                problem, *_ = example(SHAPES[name], 20, 0.01, member, seed)
                count += featured(problem).grid.featured
    assert count <= 2


def test_noise_alone_makes_no_feature():
    problem, *_ = example(np.ones_like, 30, 0.01)
    rng = np.random.default_rng(1)
    count = 0
    for _ in range(60):
        noise = Problem(problem.A, problem.B, rng.normal(size=30), problem.grid)
        count += featured(noise).grid.featured
    # odds of 20 to 1: three in 60 would be no surprise
    assert count <= 4


def test_evidence_of_a_feature_against_the_normal_density():
    """One family and strength, one feature: the ratio of two multivariate normal densities."""
    problem, *_ = example(SHAPES["two blocks"], 15, 0.02)
    fr = frame(problem)
    ground = weighed(fr)
    sp = next(w.spectrum for w in ground.averaged if w.spectrum.family.name == "Matern 0.2")
    sigma, size = ground.sigma[30:31], 0.7
    x = problem.grid.middles
    feature = shapes(x, np.array([0.2]), np.array([0.5]))[:, :1]
    likely, _, plain = _tried([sp], sigma, fr.QA @ feature, size)
    # rows orthogonal to the response of a constant, by an independent basis
    level = problem.A @ np.ones(len(x))
    basis = np.linalg.svd(level[:, None])[0][:, 1:]
    A, d = basis.T @ problem.A, basis.T @ problem.d
    C = np.eye(14) + sigma[0] ** 2 * A @ covariance("matern", 0.2, problem.grid) @ A.T
    a = (A @ feature)[:, 0]
    normal = [multivariate_normal(np.zeros(14), C)] + [
        multivariate_normal(np.zeros(14), C + (times * size) ** 2 * np.outer(a, a))
        for times in (2.0, 10.0)
    ]
    base, *others = (n.logpdf(d) for n in normal)
    assert likely[0] - plain == pytest.approx(np.logaddexp(*others) - np.log(2) - base, rel=1e-8)


def test_units_and_order_change_nothing():
    problem, questions, _ = example(SHAPES["narrow load"])
    rows = np.random.default_rng(0).permutation(40)
    moved = Problem(
        problem.A[rows] / 0.37, problem.B[rows], problem.d[rows], problem.grid,
        places=problem.places[rows],
    )  # fmt: skip
    one, two = (cautious(featured(p), questions) for p in (problem, moved))
    np.testing.assert_allclose(two.value, 0.37 * one.value, rtol=1e-7)
    np.testing.assert_allclose(two.sd, 0.37 * one.sd, rtol=1e-6)


def test_coverage_and_gain():
    """29 shapes on a conductor, 40 readings, 0.3 %, 3 draws each."""
    every = {**SHAPES, **matrix.AFTER}
    held, width, error = matrix.adaptive(
        matrix.MEMBERS["conductor mL = 4"], 40, 0.003, every, draws=3
    )
    assert held[1, :, :5].mean() > 0.97
    assert held[1, :, :5].mean() > held[0, :, :5].mean() - 0.01
    assert width.mean() < 1.0
    assert np.exp(np.log(error).mean()) < 0.85


def busbar(folder, strength=None, uncertainty=None, **source):
    """The example of the hot joint with its noise drawn again."""
    x, T = make_demo.busbar()
    T = T + np.random.default_rng(4).normal(0, 0.4, len(x))
    with (folder / "t.csv").open("w", newline="", encoding="utf-8") as out:
        csv.writer(out).writerows(
            [("x [m]", "T [degC]"), *zip(x.tolist(), T.tolist(), strict=True)]
        )
    return srcfit.make_case(
        {
            "member": {
                "kind": "conductor", "length": "2.4 m", "conductance": "0.385 W*m/K",
                "loss": "2.42 W/(m*K)", "ambient": "32 degC", "left": {"value": "55 degC"},
                "right": {"value": "51 degC"}, "uncertainty": uncertainty or {},
            },
            "readings": {
                "file": "t.csv", "position": {"column": "x [m]", "unit": "m"},
                "column": [{"column": "T [degC]", "kind": "temperature", "sd": "0.4 K"}],
            },
            "source": {
                "unit": "W/m", "cells": 120,
                "zones": [{"name": "joint B", "from": "1.15 m", "to": "1.55 m"}], **source,
            },
            "strength": strength or {},
        },
        folder,
    )  # fmt: skip


def test_hot_joint_of_a_busbar(tmp_path):
    """76.4 W in the zone, 56 W of it within 0.1 m around 1.35 m (see datasets/make_demo.py)."""
    plain = srcfit.recover(busbar(tmp_path))
    hints = [f["sentence"] for f in plain.findings if f["code"] == "feature-demanded"]
    assert len(hints) == 1
    both = hints[0].split("zone joint B would be ")[1].split(" W)")[0].split(" instead of ")
    assert both[0] != both[1]
    assert len({len(n.partition(".")[2]) for n in both}) == 1  # rounded alike
    found = srcfit.recover(busbar(tmp_path, {"roughness": "adaptive"}))
    codes = [f["code"] for f in found.findings]
    assert "feature-found" in codes
    assert "feature-demanded" not in codes
    zone, before = found.facts["zones"][0], plain.facts["zones"][0]
    assert zone["lower"] < 76.4 < zone["upper"]
    assert abs(zone["value"] - 76.4) < abs(before["value"] - 76.4)
    assert zone["upper"] - zone["lower"] < 0.9 * (before["upper"] - before["lower"])
    with_loss = srcfit.recover(busbar(tmp_path, {"roughness": "adaptive"}, {"loss": "5 %"}))
    assert with_loss.facts["zones"][0]["value"] == pytest.approx(zone["value"], rel=1e-9)
    share = with_loss.facts["shares"][0]
    assert share["noise"] + share["smoothing"] + sum(
        share["properties"].values()
    ) == pytest.approx(1)


def test_with_a_sign_and_calibrated(tmp_path):
    strength = {"roughness": "adaptive", "interval": "calibrated"}
    for source, band in (({}, "calibrated"), ({"sign": "nonnegative"}, "cautious")):
        found = srcfit.recover(busbar(tmp_path, strength, **source))
        assert found.facts["strength"]["interval"] == band
        zone = found.facts["zones"][0]
        assert zone["lower"] < 76.4 < zone["upper"]


def test_an_unknown_word_is_refused(tmp_path):
    with pytest.raises(SrcfitError, match="adaptive"):
        busbar(tmp_path, {"roughness": "adaptiv"})
