"""Draws from Gaussians held inside linear inequalities, and the shortest intervals of draws.

Exact Hamiltonian dynamics: in the coordinates in which the Gaussian is round, a point with a
random velocity moves on an ellipse and is reflected where it meets a wall. Nothing is tuned and
nothing is refused, and many chains move at once; each chain may have its own Gaussian (a family
of the source at one strength), the walls are the same in the coordinates that they share.

Source: Pakman & Paninski (2014), J. Comput. Graph. Stat. 23, 518.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from srcfit.problem import Array

Numbers = NDArray[np.intp]

# tan(t / 2) of a quarter turn, which forgets where it came from where there are no walls
QUARTER = 1.0
# a trajectory with more reflections than this is not taken (it takes as many backwards, so the
# draws keep their distribution)
MOST_REFLECTIONS = 1000
# numbers held at once: arrays that stay in the cache, and below what is mapped anew each time
AT_ONCE = 12_000
TINY = 1e-300


@dataclass(frozen=True)
class Gaussians:
    """r Gaussians of d coordinates and p walls that they share.

    Attributes
    ----------
    mean : (r, d)
    factor : (r, d, d)
        Covariance factor factor'.
    rows : (p, d), least : (p,)
        rows @ x >= least.
    """

    mean: Array
    factor: Array
    rows: Array
    least: Array


@dataclass(frozen=True)
class Drawn:
    """Draws (rounds, n, d) of n chains, and how many trajectories of all were not taken."""

    x: Array
    refused: float


def draw(
    of: Gaussians, which: Numbers, scale: Array, start: Array, rng: np.random.Generator,
    *, rounds: int, burn: int,
) -> Drawn:  # fmt: skip
    """Draws of many chains.

    Parameters
    ----------
    of : Gaussians
    which : (n,) int
        The Gaussian of each chain.
    scale : (n,)
        Its standard deviations are multiplied by this (an unknown noise).
    start : (r, d)
        A point inside the walls for each Gaussian.
    rounds, burn : int
        Trajectories kept, and trajectories before them.
    """
    speeds = rng.normal(size=(burn + rounds, len(which), of.mean.shape[1]))
    x, refused = np.empty(speeds.shape), 0
    size = max(1, AT_ONCE // (len(of.least) + of.mean.shape[1]))
    for some in np.array_split(np.arange(len(which)), -(-len(which) // size)):
        mean, factor = of.mean[which[some]], of.factor[which[some]] * scale[some, None, None]
        normal = np.einsum("pd,nde->npe", of.rows, factor)
        y = np.linalg.solve(factor, (start[which[some]] - mean)[:, :, None])[:, :, 0].astype(float)
        ends, lost = _travel(y, speeds[:, some], normal, mean @ of.rows.T - of.least)
        x[:, some] = mean + np.einsum("nde,rne->rnd", factor, ends)
        refused += lost
    return Drawn(x[burn:], refused / speeds.shape[0] / len(which))


def _travel(y: Array, speeds: Array, normal: Array, ahead: Array) -> tuple[Array, int]:
    """Ends (rounds, n, d) of quarter turns, one after the other, and how many were not taken.

    Walls are at normal @ y + ahead = 0. Turns t are kept as tan(t / 2), for which a wall is met at
    a root of a quadratic. Each chain begins its next turn as soon as it has ended the last.
    """
    n, d = y.shape
    gram = np.einsum("npe,nqe->npq", normal, normal)
    length = np.einsum("npp->np", gram)
    turned = np.concatenate([normal, gram], axis=2)
    ends, refused = np.empty(speeds.shape), 0
    live, turn, hits = np.arange(n), np.zeros(n, dtype=np.intp), np.zeros(n, dtype=np.intp)
    # a chain's place and speed, each with its components along all walls beside it
    place, speed = (_beside(normal, part) for part in (y, speeds[0]))
    before, left = y.copy(), np.full(n, QUARTER)
    while len(live):
        tau, wall = _first_wall(place[:, d:], speed[:, d:], ahead[live])
        ended = ~(tau < left)
        tau = np.minimum(tau, left)
        half = 1 / (1 + tau**2)
        cos, sin = ((1 - tau**2) * half)[:, None], (2 * tau * half)[:, None]
        place, speed = place * cos + speed * sin, speed * cos - place * sin
        left = (left - tau) / (1 + left * tau)
        meets = np.flatnonzero(~ended)
        chain, at = live[meets], wall[meets]
        by = 2 * speed[meets, d + at] / length[chain, at]
        speed[meets] -= by[:, None] * turned[chain, at]
        hits += ~ended
        lost = hits > MOST_REFLECTIONS
        if lost.any():
            place[lost, :d], refused = before[lost], refused + int(lost.sum())
            # a chain that cannot leave its start is given up
            stuck = lost & (turn == 0)
            ends[:, live[stuck]] = before[stuck]
            turn[stuck] = len(speeds) - 1
            refused += int(stuck.sum()) * (len(speeds) - 1)
            ended |= lost
        if not ended.any():
            continue
        done = np.flatnonzero(ended)
        ends[turn[done], live[done]] = before[done] = place[done, :d]
        turn[done] += 1
        hits[done], left[done] = 0, QUARTER
        more = done[turn[done] < len(speeds)]
        chain = live[more]
        place[more] = _beside(normal[chain], place[more, :d])
        speed[more] = _beside(normal[chain], speeds[turn[more], chain])
        keep = turn < len(speeds)
        if not keep.all():
            live, turn, hits, left = live[keep], turn[keep], hits[keep], left[keep]
            place, speed, before = place[keep], speed[keep], before[keep]
    return ends, refused


def _beside(normal: Array, part: Array) -> Array:
    """Vectors (n, d) with their components along all walls beside them, (n, d + p)."""
    return np.concatenate([part, np.einsum("npd,nd->np", normal, part)], axis=1)


def _first_wall(on: Array, off: Array, ahead: Array) -> tuple[Array, Numbers]:
    """tan(t / 2) at which each chain meets its first wall, and that wall's number.

    On the way a wall is at on cos t + off sin t + ahead, now not negative.
    """
    square = on * on
    square += off * off
    square -= ahead * ahead
    root = np.sqrt(np.maximum(square, 0.0))
    root += np.abs(off)
    np.maximum(root, TINY, out=root)
    # 1 / tau: the smaller root where the wall comes nearer, else the one on the way back
    nears = off < 0
    inverse = np.where(nears, root, on - ahead)
    inverse /= np.where(nears, np.maximum(on + ahead, TINY), root)
    inverse *= square >= 0
    wall = np.argmax(inverse, axis=1)
    nearest = inverse[np.arange(len(wall)), wall]
    tau = np.full(len(wall), np.inf)
    np.divide(1.0, nearest, out=tau, where=nearest > 0)
    return tau, wall


def effective(values: Array, which: Numbers) -> Array:
    """Effective sample size (q,) of values (rounds, n, q) of n chains.

    How many independent draws would tell the mean as well: from the scatter of the means of
    chains that share a Gaussian.
    """
    n = len(which)
    spread, scatter = (np.zeros(values.shape[2]) for _ in range(2))
    for r in np.unique(which):
        mine = values[:, which == r]
        count = mine.shape[1]
        if count < 2:
            continue
        spread = spread + count / n * mine.var(axis=(0, 1))
        scatter = scatter + count / n**2 * mine.mean(axis=0).var(axis=0, ddof=1)
    everything = float(values.shape[0] * n)
    told = np.full(len(spread), everything)
    np.divide(spread, scatter, out=told, where=scatter > 0)
    return np.asarray(np.minimum(told, everything))


def shortest(values: Array, level: float, low: Array) -> tuple[Array, Array]:
    """Shortest intervals (q,), (q,) that hold a share `level` of draws (s, q).

    They begin at a draw, or at the least value that is possible, `low` (q,).
    """
    ordered = np.sort(values, axis=0)
    count = len(ordered)
    holds = min(int(np.ceil(level * count)), count)
    starts = ordered[: count - holds + 1].copy()
    starts[0] = np.where(np.isfinite(low), np.minimum(low, starts[0]), starts[0])
    ends = ordered[holds - 1 :]
    best = np.argmin(ends - starts, axis=0)
    each = np.arange(values.shape[1])
    return starts[best, each], ends[best, each]
