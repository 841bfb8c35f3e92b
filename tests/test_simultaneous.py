"""Bands that hold at all places at once: covariance, quantile, coverage; the peak they tell."""

from dataclasses import replace

import numpy as np
import pytest
import worked
from scipy.stats import norm

from srcfit.bands import cautious
from srcfit.evidence import at_one
from srcfit.problem import Questions
from srcfit.simultaneous import (
    Together,
    _families,
    correlations,
    pair_quantile,
    spread,
    sup_quantile,
)
from srcfit.solvers.frame import ask, frame
from srcfit.solvers.spectrum import bases, spectrum


def cells(problem):
    """Density of every free cell as questions."""
    free = np.flatnonzero(problem.grid.free)
    m, k = problem.A.shape[1], problem.B.shape[1]
    return Questions(np.eye(m)[free], np.zeros((len(free), k)))


@pytest.mark.parametrize("case", worked.CASES[:4], ids=lambda c: c.get("name", "")[:20])
def test_its_variances_are_those_of_the_band(case):
    problem = worked.problem(case)
    answers = cautious(problem, cells(problem))
    asked = ask(frame(problem), cells(problem))
    covariance = spread(asked, _families(problem, answers))
    told = answers.determined
    assert (correlations(problem, cells(problem), answers) is None) == (not told.any())
    np.testing.assert_allclose(np.sqrt(np.diag(covariance))[told], answers.s_c[told], rtol=1e-6)
    low = np.linalg.eigvalsh(covariance)[0]
    assert low > -1e-9 * np.diag(covariance).max()


@pytest.mark.parametrize("by", ["eigh", "svd"])
def test_its_covariance_by_plain_conditioning(by):
    """One family at one strength: the Gaussian conditional written out with full matrices.

    A constant that nothing is known of is one with a very large prior variance.
    """
    problem = worked.problem(worked.CASES[0])
    fr = frame(problem)
    from srcfit.priors import CAUTIOUS, covariance, pieces

    fam, steps = CAUTIOUS[0], pieces(problem.grid, zones=True)
    products = bases(fr, [(fam.base, fam.length)], by)
    w = at_one(spectrum(fr, fam, products, steps, right=True), 1e-7, 1.0)
    w = replace(w, weights=np.ones(1))
    found = spread(ask(fr, cells(problem)), [w])
    C = fam.scale * covariance(fam.base, fam.length, problem.grid) + fam.steps * steps @ steps.T
    A, N = problem.A[:, problem.grid.free], problem.B
    one = np.ones((A.shape[1], 1))
    prior = 1e7 * C
    noise = np.eye(len(A))
    big = 1e13
    if problem.constant:
        prior = prior + big * one @ one.T
    noise = noise + 1e3 * big * N @ N.T if N.shape[1] else noise
    gain = prior @ A.T
    want = prior - gain @ np.linalg.solve(A @ gain + noise, gain.T)
    np.testing.assert_allclose(found, want, atol=2e-3 * np.diag(want).max())


def test_the_quantile_of_independent_and_of_equal_places():
    """Sidak (1967): n independent places need the pointwise level 0.95**(1/n); equal ones none."""
    for n in (3, 20):
        want = norm.ppf((1 + 0.95 ** (1 / n)) / 2)
        assert sup_quantile(np.diag(np.arange(1.0, n + 1)), 0.95) == pytest.approx(want, abs=0.06)
    assert sup_quantile(np.ones((5, 5)), 0.95) == pytest.approx(norm.ppf(0.975), abs=0.06)
    heavy = sup_quantile(np.ones((1, 1)), 0.95, dof=5.0)
    assert heavy == pytest.approx(2.5706, abs=0.1)  # Student's t, any table


def test_all_places_at_once_are_held_as_often_as_promised():
    """Sources drawn from the model itself, 400 times: the whole band holds in 95 % of them.

    The pointwise band holds the whole source far more seldom; tolerance three standard errors.
    """
    problem = worked.problem(worked.CASES[0])
    fr = frame(problem)
    from srcfit.priors import CAUTIOUS, pieces

    fam, steps = CAUTIOUS[0], pieces(problem.grid, zones=True)
    products = bases(fr, [(fam.base, fam.length)], "svd")
    sp = spectrum(fr, fam, products, steps, right=True)
    asked, A = ask(fr, cells(problem)), problem.A[:, problem.grid.free]
    sigma = 2e4
    one = replace(at_one(sp, sigma**-2, 1.0), weights=np.ones(1))
    covariance = spread(asked, [one])
    sd, k = np.sqrt(np.diag(covariance)), sup_quantile(covariance, 0.95)
    rng, whole, pointwise = np.random.default_rng(8), 0, 0
    from srcfit.evidence import conditional

    for _ in range(400):
        f = 5e4 + sigma * sp.factor @ rng.normal(size=sp.factor.shape[1])
        d = A @ f + problem.B @ rng.normal(size=problem.B.shape[1]) + rng.normal(size=len(A))
        again = frame(replace(problem, d=d))
        drawn = spectrum(again, fam, products, steps, right=True)
        w = at_one(drawn, sigma**-2, 1.0)
        mean = conditional(ask(again, cells(problem)), w)[0][:, 0]
        off = np.abs(mean - f) / sd
        whole += off.max() <= k
        pointwise += off.max() <= 1.96
    assert whole / 400 == pytest.approx(0.95, abs=0.033)
    assert pointwise / 400 < 0.6


def test_no_band_no_factor():
    problem = worked.problem(worked.CASES[0])
    answers = cautious(problem, cells(problem))
    none = replace(answers, reason="only 2 readings beyond the unpenalised unknowns")
    assert correlations(problem, cells(problem), none) is None
    found = correlations(problem, cells(problem), answers)
    assert found.factor(0.95) > answers.quantile
    np.testing.assert_allclose(np.diag(found.correlation), 1.0)


def test_the_quantile_of_all_differences_is_the_studentised_range():
    """Tukey: max |z_i - z_j| / sqrt(2) of n independent places; upper 5 % point q / sqrt(2).

    q(0.95; 3, inf) = 3.314 and q(0.95; 10, inf) = 4.474 (any table of the studentised range).
    """
    for n, q in ((3, 3.314), (10, 4.474)):
        assert pair_quantile(np.eye(n), 0.95) == pytest.approx(q / np.sqrt(2), abs=0.05)


def test_the_true_top_is_among_the_rivals():
    """Smooth Gaussian curves around a bump, 100 times: the place of the top is kept in 95 %."""
    x = np.linspace(0, 1, 24)
    R = np.exp(-(((x[:, None] - x) / 0.15) ** 2)) * 0.999 + 0.001 * np.eye(24)
    truth, sd = 4 * np.exp(-(((x - 0.4) / 0.2) ** 2)), np.full(24, 0.5)
    hang = Together(np.arange(24), R, None, 1.96)
    L, rng = np.linalg.cholesky(R), np.random.default_rng(6)
    masks = [hang.rivals(truth + 0.5 * L @ rng.normal(size=24), sd, 0.95) for _ in range(100)]
    assert np.mean([m[np.argmax(truth)] for m in masks]) >= 0.89
    assert np.mean(masks) < 0.4  # and most other places are ruled out
