"""Noise told by the readings: against known noise, and against direct maximisation."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from scipy.optimize import minimize_scalar
from scipy.stats import truncnorm
from test_solvers import cable

from srcfit.noise import (
    LAGS,
    STAND_INS,
    estimate_lag,
    estimate_noise,
    rescaled,
    restricted,
    stand_ins,
)


def two_groups(seed, ratio=4.0, n=80):
    """A cable read by two instruments, the second `ratio` times as noisy; whitened by a guess."""
    pb = cable(seed, noise=0.004, n=n)
    clean = cable(seed, noise=1e-13, n=n)
    u = clean.d * (pb.B[0, 0] / clean.B[0, 0])
    groups = np.arange(n) % 2
    noise = (pb.d - u) * np.where(groups == 1, ratio, 1.0)
    guess = np.array([30.0, 5.0])
    by = guess[groups]
    return (
        replace(pb, A=pb.A / by[:, None], B=pb.B / by[:, None], d=(u + noise) / by, stated=False),
        groups,
        np.array([1.0, ratio]) / guess,
    )


def test_group_sds_are_found():
    ratios = []
    for seed in range(5):
        pb, groups, truth = two_groups(seed)
        ratios.append(estimate_noise(pb, groups) / truth)
    # 40 readings each: one sd of an estimate is about 12 %
    np.testing.assert_allclose(np.mean(ratios, axis=0), 1, atol=0.15)
    np.testing.assert_allclose(ratios, 1, atol=0.45)


def test_fixed_point_is_the_maximum_of_the_restricted_likelihood():
    pb, groups, _ = two_groups(3)
    one = np.zeros(len(groups), dtype=int)
    even = rescaled(pb, groups, np.array([1 / 30.0, 4 / 5.0]))
    found = float(estimate_noise(even, one)[0])

    def minus(log_factor):
        scaled = rescaled(even, one, np.array([np.exp(log_factor)]))
        return -(restricted(scaled) - len(one) * log_factor)

    best = np.exp(minimize_scalar(minus, bounds=(-1.5, 1.5), method="bounded").x)
    assert found == pytest.approx(best, rel=0.03)


def test_stated_rows_keep_their_noise():
    pb, groups, truth = two_groups(1)
    first = rescaled(pb, groups, np.array([truth[0], 1.0]))
    only_second = np.where(groups == 1, 0, -1)
    found = estimate_noise(first, only_second)
    assert found.shape == (1,)
    assert found[0] == pytest.approx(truth[1], rel=0.35)


def test_a_group_too_small_to_tell():
    pb, groups, truth = two_groups(2)
    groups = groups.copy()
    groups[7] = 2
    found = estimate_noise(pb, groups)
    assert np.isnan(found[2])
    np.testing.assert_allclose(found[:2] / truth, 1, atol=0.45)


def correlated(seed, lag, n=120):
    """Likelihood of any lag for readings with first-order autoregressive noise."""
    pb = cable(seed, noise=0.01, n=n)
    clean = cable(seed, noise=1e-13, n=n)
    u = clean.d * (pb.B[0, 0] / clean.B[0, 0])
    e = pb.d - u
    for i in range(1, n):
        e[i] = lag * e[i - 1] + np.sqrt(1 - lag**2) * e[i]
    rows = np.column_stack([pb.A, pb.B, u + e])

    def likelihood(lags):
        out = rows.copy()
        out[1:] = (rows[1:] - lags[0] * rows[:-1]) / np.sqrt(1 - lags[0] ** 2)
        white = replace(pb, A=out[:, :-2], B=out[:, -2:-1], d=out[:, -1])
        return restricted(white) - 0.5 * (n - 1) * np.log1p(-(lags[0] ** 2))

    return likelihood


@pytest.mark.parametrize("lag", [0.0, 0.5])
def test_lag_is_found(lag):
    found = [estimate_lag(correlated(seed, lag), np.array([True])).mean() for seed in range(4)]
    # one sd of a lag-1 correlation from 120 readings is about 0.09
    assert np.mean(found) == pytest.approx(lag, abs=0.15)
    assert max(found) <= LAGS[-1]


def test_lag_that_is_not_asked_for_stays_zero():
    found = estimate_lag(correlated(0, 0.5), np.array([False]))
    assert not found.any()


@pytest.mark.parametrize(("centre", "sd"), [(0.45, 0.08), (0.1, 0.2), (1.2, 0.3)])
def test_stand_ins_are_means_of_equal_parts(centre, sd):
    """Against scipy's truncated normal law: means of five equal parts, and the mean of all."""
    found = stand_ins(-0.5 * ((np.array(LAGS) - centre) / sd) ** 2)
    law = truncnorm((LAGS[0] - centre) / sd, (LAGS[-1] - centre) / sd, centre, sd)
    ends = law.ppf(np.linspace(0, 1, STAND_INS + 1))
    means = [law.expect(lb=a, ub=b) * STAND_INS for a, b in pairwise(ends)]
    np.testing.assert_allclose(found, means, atol=2e-3)
    assert found.mean() == pytest.approx(law.mean(), abs=2e-3)


def test_a_flat_likelihood_prefers_no_correlation():
    np.testing.assert_allclose(stand_ins(np.zeros(len(LAGS))), [0.09, 0.27, 0.45, 0.63, 0.81],
                               atol=1e-3)  # fmt: skip
