"""Families, pieces and the floor; roughness norms against integrals."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from srcfit.priors import (
    CAUTIOUS,
    SMOOTH,
    STEPPED,
    above_floor,
    covariance,
    estimate_families,
    factor,
    family,
    natural,
    null_columns,
    pieces,
    sigma_grid,
)
from srcfit.problem import Grid


def grid(m=60, *, zero=(), zones=(), breaks=(), length=2.0, even=True):
    edges = np.linspace(0, 1, m + 1)
    edges = length * (edges if even else edges**1.3)
    middles = (edges[1:] + edges[:-1]) / 2
    free = np.ones(m, dtype=bool)
    for a, b in zero:
        free &= (middles < a) | (middles > b)
    return Grid(edges, np.diff(edges), free, tuple(zones), tuple(breaks))


@pytest.mark.parametrize("even", [True, False])
@pytest.mark.parametrize("order", [0, 1, 2])
def test_factor_turns_the_penalty_into_a_norm(order, even):
    """f = S z + null space, and z'z is the discrete integral of the squared derivative."""
    g = grid(12, even=even)
    S = factor(f"roughness-{order}", 0.0, g)
    x, h = g.middles, g.widths
    f = np.random.default_rng(order).normal(size=12)
    null = np.hstack([np.ones((12, 1)), null_columns(f"roughness-{order}", g)])
    basis = np.hstack([S, null]) if order else S
    z = np.linalg.solve(basis, f)[: S.shape[1]]
    slopes, gaps = np.diff(f) / np.diff(x), np.diff(x)
    if order == 0:
        expected = h @ f**2
    elif order == 1:
        expected = gaps @ slopes**2
    else:
        between = (gaps[1:] + gaps[:-1]) / 2
        expected = between @ (np.diff(slopes) / between) ** 2
    assert z @ z == pytest.approx(expected, rel=1e-10)


@pytest.mark.parametrize("order", [1, 2])
def test_roughness_norm_converges_to_the_integral(order):
    """Second order in the cell size, for a smooth source; scipy's quad as the referee."""
    derivative = {1: lambda x: 3 * np.cos(3 * x), 2: lambda x: -9 * np.sin(3 * x)}[order]
    exact = quad(lambda x: derivative(x) ** 2, 0, 2)[0]
    errors = []
    for m in (40, 80):
        g = grid(m)
        x = g.middles
        slopes = np.diff(np.sin(3 * x)) / np.diff(x)
        S = factor(f"roughness-{order}", 0.0, g)
        null = np.hstack([np.ones((m, 1)), null_columns(f"roughness-{order}", g)])
        z = np.linalg.solve(np.hstack([S, null]), np.sin(3 * x))[: S.shape[1]]
        assert slopes.shape == (m - 1,)
        errors.append(abs(z @ z - exact) / exact)
    # the ends lose half a cell (a full one for order 2): first order there
    assert errors[1] < 0.6 * errors[0] < 0.1


def test_covariances_follow_their_formulas():
    g = grid(30, zero=[(0.5, 0.9)], even=False)
    x = g.middles[g.free]
    length = g.widths[g.free].sum()
    r = abs(x[:, None] - x) / length
    np.testing.assert_allclose(covariance("markov", 0.2, g), np.exp(-r / 0.2))
    t = np.sqrt(3) * r / 0.1
    np.testing.assert_allclose(covariance("matern", 0.1, g), (1 + t) * np.exp(-t))
    first = covariance("roughness-1", 0, g)
    np.testing.assert_allclose(first, np.minimum(x[:, None], x) - x[0], atol=1e-14)


@pytest.mark.parametrize("fam", [*SMOOTH, *STEPPED, *CAUTIOUS], ids=lambda f: f.name)
def test_factor_and_covariance_agree(fam):
    g = grid(40, zones=[(0.4, 1.0)])
    L = factor(fam.base, fam.length, g)
    np.testing.assert_allclose(L @ L.T, covariance(fam.base, fam.length, g), atol=1e-12)


@pytest.mark.parametrize("base", ["roughness-0", "roughness-1", "roughness-2", "markov", "matern"])
def test_stretching_the_member_changes_nothing_but_the_unit(base):
    a, b = (covariance(base, 0.2, grid(length=v)) * natural(base, grid(length=v)) ** 2
            for v in (2.0, 2000.0))  # fmt: skip
    np.testing.assert_allclose(a, b, rtol=1e-10, atol=1e-12 * abs(a).max())


def sets(P):
    return {tuple(np.flatnonzero(column)) for column in P.T}


def test_pieces():
    m = 20
    every = grid(m)
    assert pieces(every, zones=True).shape == (m, 0)
    zoned = grid(m, zones=[(0.4, 1.0), (0.4, 1.0), (1.0, 1.2)])
    assert sets(pieces(zoned, zones=True)) == {tuple(range(4, 10)), (10, 11)}
    assert pieces(zoned, zones=False).shape == (m, 0)
    # a zone equal to a stretch counts once
    broken = grid(m, zones=[(0.4, 1.0)], breaks=[0.4, 1.0])
    expected = {(0, 1, 2, 3), tuple(range(4, 10)), tuple(range(10, 20))}
    assert sets(pieces(broken, zones=True)) == expected
    assert pieces(broken, zones=True).shape == (m, 3)
    assert sets(pieces(broken, zones=False)) == expected
    # stretches between zero cells, numbered on the free cells; breaks cut them
    bare = grid(m, zero=[(0.5, 0.9)], breaks=[1.4])
    n = int(bare.free.sum())
    assert sets(pieces(bare, zones=False)) == {
        (0, 1, 2, 3, 4), tuple(range(5, 10)), tuple(range(10, n))
    }  # fmt: skip


def test_breaks_at_the_ends_and_a_zone_without_free_cells():
    g = grid(10, breaks=[0.0, 2.0], zones=[(0.0, 0.4)], zero=[(0.0, 0.4)])
    assert sets(pieces(g, zones=True)) == {tuple(range(8))}


def test_families_with_steps_need_pieces():
    assert estimate_families(np.zeros((5, 0))) == SMOOTH
    assert estimate_families(np.ones((5, 1))) == SMOOTH + STEPPED


def test_family_by_order_or_length():
    g = grid(length=2.0, zero=[(0.0, 0.5)])
    assert family("averaged", g) == SMOOTH[0]
    assert family(1, g).base == "roughness-1"
    assert family(0.3, g).length == pytest.approx(0.3 / 1.5)


def test_floor_and_grid():
    sigma = sigma_grid(5.0)
    assert len(sigma) == 61
    assert sigma[0] == pytest.approx(0.05)
    assert sigma[-1] == pytest.approx(500)
    assert np.ptp(np.diff(np.log(sigma))) < 1e-12
    kept = above_floor(sigma, 4.0)
    assert sigma[kept].min() >= 2.0 > sigma[~kept].max()
    assert above_floor(sigma, 1e9).sum() == 1
    assert above_floor(sigma, 1e9)[-1]
