"""Least squares and standard errors against certified values.

NIST Statistical Reference Datasets (StRD), linear regression (public domain): the unpenalised core
of every recovery (nuisances, lumped sources, backgrounds) is the same least squares.
"""

import csv
from pathlib import Path

import numpy as np
import pytest

from srcfit.bands import cautious
from srcfit.problem import Grid, Problem, Questions

FOLDER = Path(__file__).parent.parent / "datasets" / "nist"
DEGREES = {
    "norris": (0, 1), "pontius": (0, 1, 2), "noint1": (1,), "noint2": (1,),
    "wampler1": range(6), "wampler2": range(6), "wampler3": range(6), "wampler4": range(6),
}  # fmt: skip
# the wampler sets are made to be ill-conditioned (2e13 on the raw powers of x)
TOLERANCE = {name: 1e-7 if name.startswith("wampler") else 1e-9 for name in DEGREES}
TOO_FEW = {"noint2"}  # three readings and one unknown: the product gives no intervals


def table(name):
    with (FOLDER / f"{name}.csv").open(encoding="utf-8") as lines:
        return list(csv.DictReader(line for line in lines if not line.startswith("#")))


def certified(name):
    """Estimates, standard deviations (recomputed with 60 digits) and the residual's."""
    rows = [r for r in table("certified") if r["dataset"] == name]
    # certified to 15 digits; where NIST prints no standard deviation, the recomputed one
    sd = [float(r["sd"] or r["sd_recomputed"]) for r in rows]
    return np.array([float(r["est"]) for r in rows]), np.array(sd), float(rows[0]["rsd"])


def solved(name):
    rows = table(name)
    x, y = (np.array([float(r[k]) for r in rows]) for k in "xy")
    B = np.stack([x**j for j in DEGREES[name]], axis=1)
    count = B.shape[1]
    grid = Grid(np.array([0.0, 1.0]), np.ones(1), np.zeros(1, dtype=bool))
    problem = Problem(
        np.zeros((len(y), 1)), B, y, grid, tuple(f"b{j}" for j in DEGREES[name]),
        constant=False, smooth=False, stated=False,
    )  # fmt: skip
    return cautious(problem, Questions(np.zeros((count, 1)), np.eye(count))), len(y)


def test_every_dataset_is_used():
    assert {r["dataset"] for r in table("certified")} == set(DEGREES)


@pytest.mark.parametrize("name", DEGREES)
def test_estimates_and_standard_errors(name):
    estimate, sd, spread = certified(name)
    answers, count = solved(name)
    assert answers.value == pytest.approx(estimate, rel=TOLERANCE[name], abs=0)
    if name in TOO_FEW:
        assert answers.reason
        assert np.isnan(answers.sd).all()
        return
    if spread == 0:  # an exact polynomial: what is left is rounding
        assert (answers.sd < 1e-7 * np.abs(estimate)).all()
        return
    assert answers.sd == pytest.approx(sd, rel=TOLERANCE[name], abs=0)
    assert answers.fit.noise == pytest.approx(spread, rel=1e-9, abs=0)
    assert answers.fit.effective_dof == pytest.approx(len(estimate), abs=1e-9)
    # Student's t, two-sided 95 %, with n - k degrees of freedom (printed tables, from memory)
    t = {34: 2.032, 37: 2.026, 15: 2.131, 10: 2.228}[count - len(estimate)]
    assert answers.quantile == pytest.approx(t, abs=1e-3)
    assert answers.upper - answers.value == pytest.approx(answers.quantile * answers.sd)
