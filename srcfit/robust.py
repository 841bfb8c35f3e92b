"""The noise of a forward model: sd and correlation, stated or estimated, and gross outliers.

A gross outlier (module `outliers`) gets a noise of its own, as large as its distance from what
the others say, so that its pull falls as one over that distance: the weight redescends. All other
readings keep weight 1 exactly, and where nothing is gross nothing changes at all. Unsure readings,
which a narrow source would explain as well, keep their full weight too: a hot joint is not to
vanish.

Source: Thompson (1985), J. R. Stat. Soc. B 47, 53 (restricted likelihood of such a noise).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from srcfit.elimination import Elimination, eliminate
from srcfit.forward import Forward
from srcfit.noise import estimate_lag, estimate_noise, restricted
from srcfit.outliers import CHI, Columns, View, gross, propose, views
from srcfit.problem import Array, Problem
from srcfit.solvers.ladder import ALONE
from srcfit.whitening import Links, Rows, linked_rows, links, parts_of, sequences, whitened

Mask = NDArray[np.bool_]

# rounds until weights, sd and correlation stand still to within CLOSE
ROUNDS, CLOSE = 30, 0.01
# least weight: an sd a hundred thousand times as large
FAINTEST = 1e-10


@dataclass(frozen=True)
class Noise:
    """Noise of n used readings in g groups.

    Attributes
    ----------
    sd : (n,) standard deviation (SI), stated or estimated
    lag : (g,) lag-1 correlation
    weight : (n,) 1, less for gross outliers: they count with sd / sqrt(weight)
    unsure : (n,) bool, far from the others, but kept: a narrow source would look the same
    settled : bool
        False where the rounds between weights, sd and correlation did not come to rest.
    others : tuple of Noise
        Where a correlation was estimated: equally probable ones that stand for all, with the sd
        that each asks for; `lag` is their mean.
    """

    sd: Array
    lag: Array
    weight: Array
    unsure: Mask
    settled: bool = True
    others: tuple[Noise, ...] = ()

    @classmethod
    def given(cls, sd: Array, lag: Array) -> Noise:
        """Of a known sd and correlation, without outliers."""
        return cls(sd, lag, np.ones(len(sd)), np.zeros(len(sd), dtype=bool))

    @property
    def alone(self) -> Noise:
        """The same without others."""
        return replace(self, others=())

    def weighing(self, weight: Array) -> Noise:
        """The same, and its others, with other weights (n,)."""
        others = tuple(o.weighing(weight) for o in self.others)
        return replace(self, weight=weight, others=others)


@dataclass(frozen=True)
class Doubt:
    """What became of suspected rows, n readings.

    Attributes
    ----------
    weight : (n,)
        1 for all sound rows.
    unsure : (n,) bool
        Far from the others, but a narrow source would explain it as well: full weight.
    settled : bool
        False: the weights did not stand still.
    """

    weight: Array
    unsure: Mask
    settled: bool = True


def noise_of(forward: Forward, balanced: Elimination | None = None) -> Noise:
    """Noise to whiten with: sd and correlation stated or estimated, outliers down-weighted.

    Where one common sd is all that is unknown, any first guess serves: bands integrate it out.
    """
    balanced = eliminate(forward) if balanced is None else balanced
    sd, lag = forward.sd.copy(), np.nan_to_num(forward.lag)
    unknown = ~np.isfinite(sd)
    if unknown.any():
        size = np.abs(forward.y[unknown])
        sd[unknown] = max(float(np.median(size)), float(size.max()) * 1e-3) or 1.0
    several = len(np.unique(forward.group[unknown])) + int(not unknown.all()) > 1
    by_group, by_lag = several and bool(unknown.any()), bool(np.isnan(forward.lag).any())
    now, lags = Noise.given(sd, lag), lag[None]
    for _ in range(ROUNDS):
        before = now
        if by_group:
            sd = _sds(forward, before, unknown, balanced)
        if by_lag:
            lags = _lags(forward, replace(before, sd=sd), balanced)
            lag = lags.mean(axis=0)
        found = _doubt(forward, sd, lag, balanced)
        now = Noise(sd, lag, found.weight, found.unsure, found.settled)
        if (by_group + by_lag == 0) or _alike(before, now, by_group and by_lag):
            break
    else:
        now = replace(now, settled=False)
    each = [replace(now, lag=one) for one in lags if by_lag and np.ptp(lags, axis=0).any()]
    if by_group:
        each = [replace(n, sd=_sds(forward, n, unknown, balanced)) for n in each]
    return replace(now, others=tuple(each))


def _alike(a: Noise, b: Noise, entangled: bool) -> bool:
    """Whether nothing moves any more; sd or correlation alone depend on the weights only."""
    same = np.array_equal(a.weight == 1, b.weight == 1)
    moved = np.abs(np.log(a.weight / b.weight)).max()
    if entangled or moved:
        moved = max(moved, np.abs(np.log(a.sd / b.sd)).max(), np.abs(a.lag - b.lag).max())
    return bool(same and moved <= CLOSE)


def _sds(forward: Forward, noise: Noise, unknown: Mask, balanced: Elimination) -> Array:
    """Standard deviations with those of the groups in question estimated."""
    numbers = np.unique(forward.group[unknown])
    problem = whitened(forward, noise.sd, noise.lag, balanced, noise.weight)
    group = np.where(unknown, np.searchsorted(numbers, forward.group), -1)
    rows = np.full(len(problem.d), -1, dtype=np.intp)
    reading = parts_of(forward)[0]
    rows[: len(reading)] = group[reading]
    found = estimate_noise(problem, rows)[np.clip(group, 0, None)]
    return np.asarray(np.where(unknown & np.isfinite(found), noise.sd * found, noise.sd))


def _lags(forward: Forward, noise: Noise, balanced: Elimination) -> Array:
    """Correlations (k, g) with those in question estimated: k values that stand for all."""
    sizes = np.zeros(len(forward.groups), dtype=np.intp)
    for g, members in sequences(forward):
        sizes[g] = max(sizes[g], len(members))

    def likelihood(trial: Array) -> float:
        both = np.where(asked, trial, forward.lag)
        problem = whitened(forward, noise.sd, both, balanced, noise.weight)
        chain = linked_rows(forward, links(forward, both, noise.weight))
        return restricted(problem) + chain.volume

    asked = np.isnan(forward.lag)
    return np.where(asked, estimate_lag(likelihood, asked & (sizes >= 3)), forward.lag)


def _doubt(forward: Forward, sd: Array, lag: Array, balanced: Elimination) -> Doubt:
    """Weights of all readings for a given sd and correlation."""

    def given(weight: Array) -> tuple[Problem, Links]:
        problem = whitened(forward, sd, lag, balanced, weight)
        return problem, linked_rows(forward, links(forward, lag, weight))

    sign = {"nonnegative": 1, "nonpositive": -1}.get(forward.case.source.sign, 0)
    return doubt(given, parts_of(forward)[0], len(sd), 0 if forward.driven else sign)


def doubt(
    given: Callable[[Array], tuple[Problem, Links]], number: Rows, n: int, sign: int = 0
) -> Doubt:
    """Weights of n readings.

    Parameters
    ----------
    given : callable
        Problem and links of its rows for (n,) weights.
    number : (rows,) int
        Reading of each row.
    sign : {1, 0, -1}
        The only sign that the source may have; 0 where it may have either.
    """
    distance, far = propose(*given(np.ones(n)), sign)
    unsure, weight = np.zeros(n, dtype=bool), np.ones(n)
    unsure[number[far]] = True
    np.minimum.at(weight, number, 1 / np.maximum(distance, 1.0))
    for _ in range(ROUNDS if (weight < 1).any() else 0):
        problem, chain = given(weight)
        # of a complex reading the part that lies farther decides
        new = np.ones(n)
        np.minimum.at(new, number, revised(problem, chain, weight[number]))
        moved = np.abs(np.log(new / weight)).max()
        weight = new
        if moved <= CLOSE:
            return Doubt(weight, unsure)
    return Doubt(weight, unsure, not (weight < 1).any())


def revised(problem: Problem, links: Links, weight: Array) -> Array:
    """Weights (n,) of the down-weighted rows anew: 1 for those that prove not to be gross.

    The distance of each from what all others say does not depend on its own weight; it is
    averaged over rungs by evidence.
    """
    rows = np.flatnonzero(weight < 1)
    columns, found = Columns(links, weight), views(problem)
    U, squares, fr = columns.seen(found[0].fr.U), columns.squares, found[0].fr
    own = 1 / weight[rows] - 1
    s2 = _variance(found, weight, problem.stated)
    square, spread = np.zeros(len(rows)), np.zeros(len(rows))
    for v, each in zip(found, s2, strict=True):
        q = v.sizes(U, columns.seen(v.Z), squares)[rows]
        away = (columns.seen(v.residual)[rows] / q) ** 2 / each
        others = np.maximum(1 / q - own[:, None], 1.0)
        square = square + away @ v.weights
        spread = spread + others @ v.weights
    bound = gross(len(weight), None if problem.stated else fr.nu - len(rows) - 1)
    out = weight.copy()
    shifted = 1 / (1 + np.maximum(square - spread, 0.0))
    out[rows] = np.where(square > bound**2 * spread, np.maximum(shifted, FAINTEST), 1.0)
    return out


def _variance(found: Sequence[View], weight: Array, stated: bool) -> list[Array]:
    """Variance (t,) of the whitened noise at each rung of each view.

    A stated one is larger only where most of the sound rows say so: a wrong member makes no
    outliers.
    """
    if not stated:
        return [np.maximum(v.energy / v.fr.nu, np.finfo(float).tiny) for v in found]
    sound = np.flatnonzero(weight == 1)
    squares = np.sum([v.residual[sound] ** 2 @ v.weights for v in found], axis=0)
    spent = np.sum([v.Z[sound] ** 2 @ (v.fill @ v.weights) for v in found], axis=0)
    left = 1 - (found[0].fr.U[sound] ** 2).sum(axis=1) - spent
    told = left > ALONE
    one = float(np.median(squares[told] / left[told])) / CHI if told.any() else 1.0
    return [np.full(len(v.weights), max(one, 1.0)) for v in found]
