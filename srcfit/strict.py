"""What one Gaussian of many questions becomes under inequalities: draws, centres, strict bounds.

The inequalities stand on few coordinates (see `limits`); every question is a linear function of
the coordinates plus a remainder that they do not touch.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh

from srcfit.errors import SolveError
from srcfit.laws import Law
from srcfit.problem import Array
from srcfit.solvers.nonnegative import many, multipliers

Numbers = NDArray[np.intp]

# eigenvalues of the coordinates' correlation below this part of the largest are rounding
ROUNDING = 1e-13
# chains start so many standard deviations inside the walls, or as far as there is room
INSIDE = (0.1, 0.01, 1e-3, 1e-5)
# strict bounds: tolerance of the squared distance, turns, and growth at which a bound is the wall
CLOSE, TURNS, FAR = 2e-3, 16, 1e4


@dataclass(frozen=True)
class Reduced:
    """One law on d coordinates b, and q questions as value = mean + slope (b - centre) + rest.

    Attributes
    ----------
    weight : float
    centre, S, factor : (d,), (d, d), (d, d)
        Mean and covariance of the coordinates, S = factor factor'.
    mean, slope, rest : (q,), (q, d), (q,)
        `rest` is the variance of the remainder.
    walls, least : (w, d), (w,)
        walls b >= least.
    """

    weight: float
    centre: Array
    S: Array
    factor: Array
    mean: Array
    slope: Array
    rest: Array
    walls: Array
    least: Array


def reduced(law: Law, asked: Numbers, on: Numbers, walls: Array, least: Array) -> Reduced:
    """Bring a law to its coordinates: `asked` and `on` are the numbers of both in the law."""
    size = np.sqrt(np.maximum(law.variance[on], np.finfo(float).tiny))
    lam, V = eigh(law.between(on, on) / np.outer(size, size), check_finite=False)
    lam = np.maximum(lam, ROUNDING * lam[-1])
    # the symmetric root: the sign of an eigenvector changes no draw
    factor = size[:, None] * (V * np.sqrt(lam)) @ V.T
    slope = law.between(asked, on) / size @ (V / lam) @ V.T / size
    S = factor @ factor.T
    told = ((slope @ factor) ** 2).sum(axis=1)
    # what is a function of the coordinates has no remainder but rounding
    rest = np.maximum(law.variance[asked] - told, 0.0)
    rest[rest < 1e-9 * law.variance[asked]] = 0.0
    return Reduced(
        law.weight, law.mean[on], S, factor, law.mean[asked], slope, rest, walls, least
    )  # fmt: skip


def inside(r: Reduced) -> Array:
    """A point (d,) that is a little inside the walls, close to the most probable one.

    Raises
    ------
    SolveError
        When there is no room between the walls.
    """
    M, q = r.walls @ r.S @ r.walls.T, r.walls @ r.centre - r.least
    size = np.sqrt(np.diag(M))
    for margin in INSIDE:
        try:
            u = multipliers(M, q - margin * size)
        except SolveError:
            if margin == INSIDE[-1]:
                raise
            continue
        return np.asarray(r.centre + r.S @ (r.walls.T @ u))
    raise AssertionError


def most_probable(r: Reduced) -> tuple[Array, Array, float]:
    """Values (q,) at the most probable point inside the walls, its multipliers (w,), its distance.

    The distance from the mean is squared, in standard deviations.
    """
    M = r.walls @ r.S @ r.walls.T
    u = multipliers(M, r.walls @ r.centre - r.least)
    return r.mean + r.slope @ (r.S @ (r.walls.T @ u)), u, float(u @ M @ u)


def bounds(r: Reduced, which: Numbers, quantile: float) -> tuple[Array, Array, Array]:
    """Strict bounds of some questions.

    The least and the largest value over all points inside the walls whose squared distance from
    the mean (in standard deviations) exceeds the smallest by no more than quantile**2.

    Parameters
    ----------
    which : (k,) int
        Numbers of the questions among those of `r`.

    Returns
    -------
    centre, up, down : (k,)
        Value at the most probable point, and how far the bounds are above and below it.
    """
    value, held, least = most_probable(r)
    centre, pull = value[which], r.walls.T @ held
    slope = np.concatenate([r.slope[which], -r.slope[which]])
    rest = np.tile(r.rest[which], 2)
    sd = np.sqrt(((slope @ r.factor) ** 2).sum(axis=1) + rest)
    reach = np.zeros(len(sd))
    live = np.flatnonzero(sd > 0)
    push = quantile / np.where(sd > 0, sd, 1.0)
    low, high = np.zeros(len(sd)), np.full(len(sd), np.inf)
    M, first = r.walls @ r.S @ r.walls.T, push.copy()
    last = np.tile(held, (len(sd), 1))
    for _ in range(TURNS):
        s, by = slope[live], push[live][:, None]
        u = many(M, (r.centre + by * (s @ r.S)) @ r.walls.T - r.least, last[live])
        last[live] = u
        way = by * s + u @ r.walls
        far = ((way @ r.factor) ** 2).sum(axis=1) + push[live] ** 2 * rest[live] - least
        moved = (s * ((way - pull) @ r.S)).sum(axis=1) + push[live] * rest[live]
        stuck = moved <= reach[live] + 1e-4 * sd[live]
        grown = np.isinf(high[live]) & (push[live] > 1.5 * first[live]) & stuck
        reach[live] = moved
        short = far < quantile**2
        low[live] = np.where(short, push[live], low[live])
        high[live] = np.where(short, high[live], push[live])
        settled = (np.abs(far - quantile**2) <= CLOSE * quantile**2) | grown
        settled |= push[live] > FAR * first[live]
        guess = push[live] * np.clip(quantile / np.sqrt(np.maximum(far, 1e-300)), 0.1, 5.0)
        middle = np.where(np.isinf(high[live]), guess, (low[live] + high[live]) / 2)
        fits = (guess > low[live]) & (guess < high[live])
        push[live] = np.where(fits, guess, middle)
        live = live[~settled]
        if not len(live):
            break
    half = len(which)
    return centre, reach[:half], reach[half:]


def scattered(
    r: Reduced, points: Array, scale: Array, rng: np.random.Generator
) -> Array:  # fmt: skip
    """Draws of all questions (..., q) from draws of the coordinates (..., n, d)."""
    values = r.mean + (points - r.centre) @ r.slope.T
    # noise for every question, so that which of them have a remainder changes no other's draws
    noise = rng.normal(size=values.shape)
    return np.asarray(values + noise * np.sqrt(r.rest) * scale[:, None])
