"""Intervals of many questions under inequalities: the hull of draws and strict bounds.

- The shortest interval that holds the asked share of draws from the posterior held inside the
  inequalities. By itself it is pushed off the walls by the sheer number of cells that might leave
  them, and misses sources that are zero over long stretches.
- The strict bound: the least and the largest value over all sources that keep the inequalities
  and whose penalised misfit exceeds the smallest one by no more than the square of the quantile.
  Without inequalities that is the interval of the closed form itself.

Sources: Pakman & Paninski (2014), J. Comput. Graph. Stat. 23, 518, for the draws; Rust & Burrus,
Mathematical Programming and the Numerical Solution of Linear Equations (1972), and Stark (1992),
J. Geophys. Res. 97, 14055, for strict bounds.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from srcfit.laws import Law
from srcfit.limits import Limits
from srcfit.problem import Array, Questions
from srcfit.strict import Reduced, bounds, inside, most_probable, reduced, scattered
from srcfit.truncated import Gaussians, draw, effective, shortest

Numbers = NDArray[np.intp]

# chains, trajectories of each and trajectories before them
CHAINS, ROUNDS, BURN = 120, 6, 3
# with so few coordinates so many times the trajectories cost nothing
FEW, MORE = 5, 4
# strict bounds that are found in a block of questions along the member
PICKED = 25


@dataclass(frozen=True)
class Draws:
    """Draws (s, q) of q questions, their effective sample sizes (q,), the share not taken."""

    values: Array
    effective: Array
    refused: float


def draws(
    laws: Sequence[Law],
    asked: Numbers,
    on: Numbers,
    limits: Limits,
    rng: np.random.SeedSequence,
    scales: Callable[[np.random.Generator, int], Array],
) -> Draws:
    """Draws of the questions `asked` from laws in proportion to their weights.

    Parameters
    ----------
    on : numbers of the coordinates of `limits`
    scales : callable (generator, n)
        Factors (n,) of the standard deviations of n chains (an unstated noise).
    """
    each = [reduced(law, asked, on, limits.walls, limits.wall_least) for law in laws]
    numbers = np.random.default_rng(rng)
    counts = np.maximum(np.round([CHAINS * r.weight for r in each]), 2).astype(int)
    which = np.repeat(np.arange(len(each)), counts)
    scale = scales(numbers, len(which))
    of = Gaussians(
        np.stack([r.centre for r in each]), np.stack([r.factor for r in each]),
        limits.walls, limits.wall_least,
    )  # fmt: skip
    rounds = ROUNDS * (MORE if len(on) < FEW else 1)
    start = np.stack([inside(r) for r in each])
    points = draw(of, which, scale, start, numbers, rounds=rounds, burn=BURN)
    values = np.empty((rounds, len(which), len(asked)))
    for i, r in enumerate(each):
        mine = which == i
        values[:, mine] = scattered(r, points.x[:, mine], scale[mine], numbers)
    # chains that stay where they are tell nothing
    told = effective(values, which) * (1 - points.refused)
    return Draws(values.reshape(-1, len(asked)), told, points.refused)


def by_draws(found: Draws, level: float, limits: Limits) -> Array:
    """Shortest intervals (2, q) of draws."""
    return np.stack(shortest(found.values, level, limits.low))


def by_bounds(
    laws: Sequence[Law],
    questions: Questions,
    asked: Numbers,
    on: Numbers,
    limits: Limits,
    quantile: float,
    along: Sequence[slice],
) -> tuple[Array, Array, Array]:
    """Centres and strict bounds of questions, averaged over laws as means and variances are.

    Densities of single cells take the bounds of their piece and, in quadrature, what is finer.
    In a block along the member some questions are bounded, and the ratio of bound and sd is
    interpolated between them.

    Returns
    -------
    centre, up, down : (q,)
        How far the bounds are above and below the centre.
    """
    piece = _pieces(questions, limits)
    wide = np.flatnonzero(piece < 0)
    picked = _picked(wide, along)
    found = []
    for law in laws:
        r = reduced(law, np.concatenate([asked, on]), on, limits.walls, limits.wall_least)
        sd = np.sqrt(law.variance[asked])
        used = np.unique(piece[piece >= 0])
        _, *reach = bounds(r, np.concatenate([picked, len(asked) + used]), quantile)
        both = [_spread_out(r, x, sd, piece, wide, picked, used, quantile, along) for x in reach]
        found.append((most_probable(r)[0][: len(asked)], *both))
    weight = np.array([law.weight for law in laws])
    centres, ups, downs = (np.stack([f[i] for f in found]) for i in range(3))
    centre = weight @ centres
    apart = quantile**2 * (centres - centre) ** 2
    return centre, np.sqrt(weight @ (ups**2 + apart)), np.sqrt(weight @ (downs**2 + apart))


def _pieces(questions: Questions, limits: Limits) -> Numbers:
    """The piece of each question that is the density of one cell; -1 for all others."""
    alone = ((questions.cells != 0).sum(axis=1) == 1) & ~questions.columns.any(axis=1)
    cell = np.argmax(questions.cells != 0, axis=1)
    return np.where(alone, limits.piece[cell], -1)


def _picked(wide: Numbers, along: Sequence[slice]) -> Numbers:
    """Questions that get strict bounds of their own."""
    some = np.zeros(max(int(wide.max(initial=-1)) + 1, *(b.stop for b in along), 0), dtype=bool)
    some[wide] = True
    for block in along:
        some[block] = False
        some[_nodes(block)] = True
    return np.flatnonzero(some)


def _nodes(block: slice) -> Numbers:
    """Numbers of the questions of a block that stand for it."""
    count = min(PICKED, block.stop - block.start)
    return np.unique(np.linspace(block.start, block.stop - 1, count).round().astype(np.intp))


def _spread_out(
    r: Reduced, reach: Array, sd: Array, piece: Numbers, wide: Numbers, picked: Numbers,
    used: Numbers, quantile: float, along: Sequence[slice],
) -> Array:  # fmt: skip
    """Reaches of all questions from those of the picked ones and of the pieces."""
    out = np.zeros(len(sd))
    out[picked] = reach[: len(picked)]
    for block in along:
        nodes = _nodes(block)
        ratio = np.divide(out[nodes], sd[nodes], out=np.zeros(len(nodes)), where=sd[nodes] > 0)
        here = np.arange(block.start, block.stop)
        out[block] = np.interp(here, nodes, ratio) * sd[block]
    fine = np.flatnonzero(piece >= 0)
    own = reach[len(picked) + np.searchsorted(used, piece[fine])]
    out[fine] = np.sqrt(own**2 + quantile**2 * r.rest[fine])
    return out
