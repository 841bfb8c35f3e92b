"""How probable the residuals are: weighted sums of chi-squares, and alarms that are false."""

import csv

import numpy as np
import pytest
from scipy.stats import chi2
from test_examples_repeated import make_demo, repeated

import srcfit
from srcfit.misfit import chance, exceeded
from srcfit.solve import solve


def drawn(weights, x):
    """P(sum of w chi-squares > x) from two million draws."""
    z = np.random.default_rng(5).standard_normal((2_000_000, len(weights))) ** 2
    return float((z @ np.asarray(weights) > x).mean())


def approximate(weights, x):
    w = np.asarray(weights)[:, None]
    return exceeded(np.array([x]), *((w**s).sum(axis=0) for s in (1, 2, 3)))[0]


@pytest.mark.parametrize(("x", "tail"), [(0.7, 0.5064), (2.0, 0.1240)])
def test_imhofs_first_table(x, tail):
    """Weights 0.6, 0.3, 0.1: table 1 of Imhof (1961), quoted from memory, confirmed by draws."""
    weights = (0.6, 0.3, 0.1)
    assert drawn(weights, x) == pytest.approx(tail, abs=0.002)
    assert approximate(weights, x) == pytest.approx(tail, abs=0.02)


def test_whole_degrees_of_freedom_are_a_chi_square():
    for count, x in ((1, 10.8), (5, 3.0), (20, 45.0)):
        assert approximate([1.0] * count + [0.0] * 4, x) == pytest.approx(chi2.sf(x, count))


def test_far_tails_are_right_to_a_factor_of_three():
    rng = np.random.default_rng(2)
    for count in (2, 5, 12):
        w = rng.uniform(0, 1, count) ** 3
        for seen in (3.0, 6.0, 9.0):
            x = w.sum() + seen * np.sqrt(2 * (w**2).sum())
            true = drawn(w, x)
            if true > 5e-5:
                assert 1 / 3 < approximate(w, x) / true < 3


def test_nothing_left_is_no_reason():
    assert approximate([0.0, 0.0], 1.0) == 1.0


def test_alarms_are_rare_when_all_is_as_stated(tmp_path):
    """60 draws of the ground beam: none is called contradicted (0.06 expected at one in 1,000)."""
    x, w = make_demo.ground_beam()
    head, name = ("x [m]", "w [mm]"), "ground_beam/case.toml"
    odds = []
    for table, rows in repeated(name, head, x, 1e3 * w, 0.1, 60):
        with (tmp_path / table["readings"]["file"]).open("w", newline="") as out:
            csv.writer(out).writerows(rows)
        case = srcfit.make_case(table, tmp_path)
        odds.append(chance(solve(case, srcfit.read(case), criteria=False).answers.fit))
    assert min(odds) > 0.001
    assert 0.2 < np.median(odds) < 0.8  # nor are they all but sure
