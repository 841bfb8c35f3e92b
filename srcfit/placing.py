"""Where lumped parts of unknown place stand: how probable each place is.

Every candidate place is one more unpenalised column. What it changes in a family's restricted
likelihood is a formula in the family's own modes, so that all places, strengths and families are
weighed with one decomposition a family:

    ln p(place) = (v' S^-1 v - ln det S + ln det S_0) / 2,    v = b' P d,  S = b' P b,  S_0 = b' b,

with b the columns of the parts at that place (other unpenalised columns projected out) and P the
inverse of the readings' covariance. Places are equally probable beforehand, and so are strengths,
measured by what the readings see of them.

Source: Harville (1977), J. Am. Stat. Assoc. 72, 320, for the restricted likelihood.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from srcfit.bands import wary, weighed
from srcfit.priors import above_floor
from srcfit.problem import Array, Problem
from srcfit.solvers.frame import Frame, frame
from srcfit.solvers.ladder import misfit

Numbers = NDArray[np.intp]

# columns that the others explain but for this part of their square are not seen
UNSEEN = 1e-10
TINY = 1e-300
ROUNDED = 1e-13  # part of a column that is no more than rounding
# correlations beyond this are taken for it; probabilities below that are rounding
LIKE, FAINT = 1 - 1e-12, 1e-13


@dataclass(frozen=True)
class Stretch:
    """A stretch of places [m] and how probable it is."""

    start: float
    end: float
    probability: float


@dataclass(frozen=True)
class Place:
    """Where one part stands.

    Attributes
    ----------
    name : str
    at : float
        The most probable place [m].
    lower, upper : float
        Ends of the most probable places that hold the asked probability together.
    stretches : tuple of Stretch
        What those places consist of; more than one where they are apart.
    at_end : bool
        Whether the most probable place is an end of where it was looked for.
    """

    name: str
    at: float
    lower: float
    upper: float
    stretches: tuple[Stretch, ...]
    at_end: bool


def probabilities(
    problem: Problem, columns: NDArray[np.intp], size: float | None, sign: int
) -> Array:
    """Probability of each combination of candidate places, (g,).

    Parameters
    ----------
    problem : Problem
        With one column for each part at each candidate place.
    columns : (g, k) int
        Columns of the k parts in each combination.
    size : float or None
        Mean level of the source, for the cautious families; None: the families of the estimate.
    sign : {-1, 0, 1}
        Sign that the strengths are known to have.
    """
    candidate = np.zeros(problem.B.shape[1], dtype=bool)
    candidate[columns] = True
    base = replace(
        problem, B=problem.B[:, ~candidate], along=_without(problem.along, ~candidate),
        names=tuple(n for n, c in zip(problem.names, candidate, strict=True) if not c),
    )  # fmt: skip
    fr = frame(base)
    number = np.cumsum(candidate) - 1
    beside = problem.B[:, candidate]
    beside = beside - fr.U @ (fr.U.T @ beside)
    readings = problem.d - fr.U @ fr.Ud
    scores = _scores(fr, beside, readings, number[columns], size, sign)
    return np.asarray(np.exp(scores - scores.max()) / np.exp(scores - scores.max()).sum())


def _without(along: Array | None, keep: NDArray[np.bool_]) -> Array | None:
    return None if along is None else along[:, np.append(keep, True)]


def _scores(
    fr: Frame, beside: Array, readings: Array, columns: Numbers, size: float | None, sign: int
) -> Array:
    """Log probability (g,) of each combination, up to a constant."""
    if not len(fr.free):
        alone = _Modes(np.zeros((0, 1)), np.zeros((0, beside.shape[1])), np.zeros(0))
        energy = np.array([float(readings @ readings)])
        found = _gain(fr, alone, beside, readings, columns, energy, sign)
        return np.asarray(found[:, 0])
    ground = weighed(fr)
    families = ground.averaged
    if size is not None:
        families = wary(fr, ground, size, ground.drawn, spread=False)
    total = np.full((len(columns), 1), -np.inf)
    for w in families:
        sp = w.spectrum
        modes = _Modes(1 - w.shrink, sp.Z.T @ beside, sp.y)
        energy = misfit(sp.lam, sp.y, float(sp.rest @ sp.rest), w.sigma**-2.0)
        gain = _gain(fr, modes, beside, readings, columns, energy, sign)
        kept = np.ones(len(w.sigma), dtype=bool)
        if size is not None:
            kept = above_floor(w.sigma * np.sqrt(w.noise), size)
        # not by weights, which vanish where only the part itself explains the readings
        whole = np.where(kept, gain + w.log_evidence, -np.inf)
        total = np.logaddexp(total, np.logaddexp.reduce(whole, axis=1)[:, None])
    return np.asarray(total[:, 0])


@dataclass(frozen=True)
class _Modes:
    """What the c modes of a family take away (c, t), and their parts in columns and readings."""

    taken: Array
    columns: Array
    readings: Array


def _gain(
    fr: Frame, modes: _Modes, beside: Array, readings: Array, columns: Numbers, energy: Array,
    sign: int,
) -> Array:  # fmt: skip
    """Growth of the log likelihood (g, t) of one family's rungs by the columns' parts."""
    from scipy.special import log_ndtr

    g, k = columns.shape
    plain, seen = np.zeros((g, k, k)), np.zeros((g, len(energy), k, k))
    v = np.zeros((g, len(energy), k))
    for i in range(k):
        b, y = beside[:, columns[:, i]], modes.columns[:, columns[:, i]]
        v[:, :, i] = (b.T @ readings)[:, None] - (y.T * modes.readings) @ modes.taken
        for j in range(i, k):
            c, z = beside[:, columns[:, j]], modes.columns[:, columns[:, j]]
            plain[:, i, j] = plain[:, j, i] = (b * c).sum(axis=0)
            left = plain[:, i, j][:, None] - (y * z).T @ modes.taken
            seen[:, :, i, j] = seen[:, :, j, i] = left
    known = np.linalg.det(plain)
    scale = np.prod(np.diagonal(plain, axis1=1, axis2=2), axis=1)
    bad = known <= UNSEEN * np.maximum(scale, TINY)
    plain[bad], seen[bad] = np.eye(k), np.eye(k)
    # a rung so loud that the smooth part takes all of a column away leaves rounding of it
    seen = seen + ROUNDED * plain[:, None]
    told = np.linalg.solve(seen, v[..., None])[..., 0]
    won = (v * told).sum(axis=2)
    volume = np.log(np.linalg.det(plain))[:, None] - np.log(np.linalg.det(seen))
    if fr.problem.stated:
        gain = 0.5 * (won + volume)
    else:
        left = np.maximum(energy - won, TINY)
        gain = 0.5 * (volume + fr.nu * np.log(energy) - (fr.nu - k) * np.log(left))
    if sign:
        noise = 1.0 if fr.problem.stated else energy / fr.nu
        covariance = np.linalg.inv(seen)
        size = np.sqrt(np.diagonal(covariance, axis1=2, axis2=3))
        level = sign * told / (size * np.sqrt(np.reshape(noise, (1, -1, 1))))
        if k == 1:
            gain = gain + log_ndtr(level[:, :, 0])
        else:
            rho = covariance[:, :, 0, 1] / (size[:, :, 0] * size[:, :, 1])
            gain = gain + log_both_below(level[:, :, 0], level[:, :, 1], rho)
    return np.where(bad[:, None], -np.inf, gain)


def log_both_below(h: Array, k: Array, rho: Array) -> Array:
    """Logarithm of the probability that two normal numbers of correlation rho are below h and k.

    Where it is below rounding, the product of both probabilities takes its place.
    Source: Owen (1956), Ann. Math. Stat. 27, 1075.
    """
    from scipy.special import log_ndtr, ndtr, owens_t

    h, k = (np.where(np.abs(x) < TINY, TINY, x) for x in (h, k))
    rho = np.clip(rho, -LIKE, LIKE)
    root = np.sqrt(1 - rho**2)
    both = (ndtr(h) + ndtr(k)) / 2 - np.where(h * k < 0, 0.5, 0.0)
    both = both - owens_t(h, (k - rho * h) / (h * root)) - owens_t(k, (h - rho * k) / (k * root))
    product = log_ndtr(h) + log_ndtr(k)
    return np.asarray(np.where(both > FAINT, np.log(np.maximum(both, FAINT)), product))


def place_of(
    name: str, places: Array, probability: Array, level: float, ends: tuple[float, float]
) -> Place:  # fmt: skip
    """The place of one part from the probabilities of equally spaced places, ascending."""
    order = np.argsort(-probability, kind="stable")
    count = int(np.searchsorted(np.cumsum(probability[order]), level) + 1)
    chosen = np.zeros(len(places), dtype=bool)
    chosen[order[:count]] = True
    half = (places[1] - places[0]) / 2 if len(places) > 1 else 0.0
    turns = np.flatnonzero(np.diff(np.concatenate([[False], chosen, [False]]).astype(int)))
    stretches = tuple(
        Stretch(
            max(float(places[a] - half), ends[0]), min(float(places[b - 1] + half), ends[1]),
            float(probability[a:b].sum()),
        )
        for a, b in turns.reshape(-1, 2)
    )  # fmt: skip
    best = int(order[0])
    at = float(places[best])
    return Place(
        name, at, stretches[0].start, stretches[-1].end, stretches, at in ends
    )  # fmt: skip


def stand_ins(weight: Array, count: int) -> tuple[Numbers, Array]:
    """A few combinations that stand for all, and their shares: every equal part of the whole."""
    ends = np.cumsum(weight)
    picked = np.searchsorted(ends, (np.arange(count) + 0.5) / count * ends[-1])
    which, times = np.unique(picked, return_counts=True)
    return which, times / count


def combinations(columns: Sequence[Numbers]) -> Numbers:
    """Columns of every combination of candidate places, (g, k)."""
    grids = np.meshgrid(*columns, indexing="ij")
    return np.stack([part.ravel() for part in grids], axis=1)
