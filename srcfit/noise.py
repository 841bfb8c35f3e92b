"""Noise that the readings must tell: standard deviations by group, correlation of neighbours.

Both come from the restricted likelihood of the whitened rows: the standard deviations at its
maximum under a few families of the source, the correlation under all families of the estimate and
as a few values that stand for all, because a source that the readings see almost one by one is
hard to tell from correlated noise.
Source: Harville (1977), J. Am. Stat. Assoc. 72, 320 (the fixed point for variances); Prais &
Winsten (1954) for the whitening of first-order autoregressive noise.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from srcfit.evidence import FAINTEST, Weighted, grid, mean_noise, weigh
from srcfit.priors import SCALE, SMOOTH, STEPPED, Family, estimate_families, pieces
from srcfit.problem import Array, Problem
from srcfit.solvers.frame import Frame, frame, unpenalised
from srcfit.solvers.ladder import penalised
from srcfit.solvers.spectrum import bases, route, spectrum

Groups = NDArray[np.intp]

ROUNDS, CLOSE = 40, 5e-3
# a group needs this many readings beyond what the fit spends on it
FEWEST = 2.0
LAGS = (0.0, 0.15, 0.3, 0.45, 0.6, 0.75, 0.9)
# equally probable values that stand for all correlations, and the steps between 0 and the largest
STAND_INS, STEPS = 5, 900


def estimate_noise(problem: Problem, groups: Groups) -> Array:
    """Standard deviation of each group's whitened rows.

    The fixed point s_g**2 = sum of squared residuals / (readings - their hat values) of the
    restricted likelihood, averaged over rungs by evidence.

    Parameters
    ----------
    problem : Problem
        Rows of the groups in question whitened by any first guess, the others by their noise.
    groups : (n,) int
        Group of each row, 0, 1, 2 ...; -1 for rows whose noise is stated and for knowledge.

    Returns
    -------
    (g,) factors of the first guess; nan for a group too small to tell.
    """
    count = int(groups.max(initial=-1)) + 1
    factors = np.full(count, _first_guess(problem, groups))
    told = np.ones(count, dtype=bool)
    for _ in range(ROUNDS):
        before = factors.copy()
        squares, spent = _residuals(rescaled(problem, groups, factors))
        for g in range(count):
            rows = groups[: len(squares)] == g
            left = float(rows.sum() - spent[rows].sum())
            told[g] = left >= FEWEST
            if told[g]:
                factors[g] *= max(float(np.sqrt(squares[rows].sum() / left)), FAINTEST)
        if np.abs(np.log(factors / before)).max(initial=0.0) < CLOSE:
            break
    return np.where(told, factors, np.nan)


def rescaled(problem: Problem, groups: Groups, factors: Array) -> Problem:
    """The problem with each group's rows divided by its factor, the noise taken as stated."""
    by = np.where(groups < 0, 1.0, np.append(factors, 1.0)[groups])[:, None]
    d = problem.d / by[:, 0]
    return replace(problem, A=problem.A / by, B=problem.B / by, d=d, stated=True)


def estimate_lag(likelihood: Callable[[Array], float], unknown: NDArray[np.bool_]) -> Array:
    """Lag-1 correlations of neighbours that stand for all probable ones, in each unknown group.

    No correlation from 0 to the largest of `LAGS` is preferred beforehand; their probability is
    the likelihood, and every stand-in is the mean of an equal part of it. Their mean is that of
    all: the largest likelihood alone jumps between the ends where it is flat.

    Parameters
    ----------
    likelihood : callable
        Log restricted likelihood of the readings with the (g,) lag-1 correlations it is given.
    unknown : (g,) bool

    Returns
    -------
    (STAND_INS, g) ascending correlations, 0 where they are not asked for; never negative.
    """
    lags, found = np.zeros(len(unknown)), np.zeros((STAND_INS, len(unknown)))
    for g in map(int, np.flatnonzero(unknown)):
        scores = []
        for lag in LAGS:
            lags[g] = lag
            scores.append(likelihood(lags.copy()))
        found[:, g] = stand_ins(np.array(scores))
        lags[g] = found[:, g].mean()
    return found


def stand_ins(scores: Array) -> Array:
    """Means (STAND_INS,) of equal parts of a probability, its logarithm told at `LAGS`."""
    from scipy.interpolate import CubicSpline

    lag = np.linspace(LAGS[0], LAGS[-1], STEPS + 1)
    log = CubicSpline(LAGS, scores)(lag)
    chance = np.exp(log - log.max())
    chance /= chance.sum()
    end = np.cumsum(chance)
    edges = np.linspace(0, 1, STAND_INS + 1)[:, None]
    # how much of each step lies in each part
    part = np.minimum(end, edges[1:]) - np.maximum(end - chance, edges[:-1])
    part = np.maximum(part, 0.0)
    return np.asarray(part @ lag / part.sum(axis=1))


def restricted(problem: Problem) -> float:
    """Log restricted likelihood of the whitened rows, averaged over families and strengths.

    Comparable between whitenings W of the same readings once ln|det W| is added.
    """
    fr, found = many(problem)
    if found:
        best = max(float(w.log_evidence.max()) for w in found)
        average = sum(float(np.exp(w.log_evidence - best).sum()) for w in found)
    else:
        left = problem.d - fr.U @ fr.Ud
        energy = float(left @ left)
        best = -0.5 * (energy if problem.stated else fr.nu * float(np.log(energy)))
        average = 1.0
    N = unpenalised(problem) / fr.norms
    sizes = np.linalg.svd(N, compute_uv=False)[: fr.U.shape[1]]
    return float(best + np.log(average) - np.log(sizes).sum() - np.log(fr.norms).sum())


def _families(problem: Problem) -> tuple[tuple[Family, ...], Array]:
    drawn = pieces(problem.grid, zones=True)
    return (SMOOTH[0], STEPPED[0]) if drawn.shape[1] else (SMOOTH[0], SMOOTH[1]), drawn


def few(problem: Problem) -> tuple[Frame, list[Weighted]]:
    """The problem under a few families; none where it has no smooth part."""
    return _under(problem, *_families(problem))


def many(problem: Problem) -> tuple[Frame, list[Weighted]]:
    """The problem under all families of the estimate; none where it has no smooth part.

    A correlation wants them all: to a family that the source does not obey, what it cannot follow
    smoothly is rough, and so is white noise, which then fits better than correlated noise.
    """
    drawn = pieces(problem.grid, zones=True)
    return _under(problem, estimate_families(drawn), drawn)


def _under(
    problem: Problem, families: Sequence[Family], drawn: Array
) -> tuple[Frame, list[Weighted]]:
    """The problem under some families, with steps within drawn pieces."""
    fr = frame(problem)
    if not len(fr.free):
        return fr, []
    keys = [SCALE, *((f.base, f.length) for f in families)]
    products = bases(fr, keys, route(fr))
    spectra = [spectrum(fr, f, products, drawn) for f in families]
    return fr, weigh(spectra, grid(fr, products))


def _residuals(problem: Problem) -> tuple[Array, Array]:
    """Evidence-averaged squared residuals and hat values of the readings."""
    fr, found = few(problem)
    if not found:
        left = (problem.d - fr.U @ fr.Ud)[: fr.readings]
        return left**2, (fr.U[: fr.readings] ** 2).sum(axis=1)
    squares, spent = np.zeros(fr.readings), np.zeros(fr.readings)
    for w in found:
        ladder = penalised(w.spectrum, w.sigma**-2.0)
        squares = squares + ladder.residuals**2 @ w.weights
        spent = spent + ladder.hat @ w.weights
    return squares, spent


def _first_guess(problem: Problem, groups: Groups) -> float:
    """One common factor: the noise of the groups' rows alone, integrated over all strengths."""
    own = np.flatnonzero(groups >= 0)
    A, B, d = problem.A[own], problem.B[own], problem.d[own]
    alone = replace(problem, A=A, B=B, d=d, pseudo=0, stated=False, places=None)
    fr = frame(alone)
    if fr.nu < 3 or not len(fr.free) or not alone.d.any():
        return 1.0
    _, found = few(alone)
    return float(np.sqrt(mean_noise(found)))
