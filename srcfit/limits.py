"""What is known of the source as inequalities: sign, ceiling, monotone stretches.

Estimates keep them on every cell. Draws keep them on coarser coordinates, the mean densities of
some thirty pieces and the lumped parts: what is kept on the cells is kept there too, and chains
move freely in so few coordinates. What is finer than a piece is known from the prior alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from srcfit.answers import Asked, ask
from srcfit.case.model import SourceSpec
from srcfit.elimination import Elimination
from srcfit.forward import Forward
from srcfit.member import Array
from srcfit.problem import Grid, Questions

# pieces of equal length that the free cells are parted into, and how many may result once they
# are cut at drawn edges as well
PIECES, MOST = 32, 64


@dataclass(frozen=True)
class Limits:
    """Inequalities rows @ (f, beta) >= least, on what the balance leaves of the unknowns.

    Attributes
    ----------
    rows, least : Questions, (p,)
        On cells and columns.
    touched : (p, m) bool
        The cells that each inequality is about.
    coordinates : Questions
        Mean densities of pieces, then lumped parts if they have a sign: d of them.
    piece : (m,) int
        The coordinate that each cell lies in, -1 for cells held at zero.
    walls, wall_least : (w, d), (w,)
        The same inequalities on coordinates.
    low, high : (q,)
        What each question of the case can be at all.
    words : str
        What was declared, for sentences.
    """

    rows: Questions
    least: Array
    touched: NDArray[np.bool_]
    coordinates: Questions
    piece: NDArray[np.intp]
    walls: Array
    wall_least: Array
    low: Array
    high: Array
    words: str


@dataclass(frozen=True)
class Parts:
    """Stretches of cells in order: their middles [m] and mean densities as rows over the cells.

    Rows of stretches held at zero are zero.
    """

    middles: Array
    means: Array

    @property
    def free(self) -> NDArray[np.bool_]:
        """Stretches that are not held at zero."""
        return np.asarray(self.means.any(axis=1))


def limits(forward: Forward, asked: Asked, balanced: Elimination) -> Limits | None:
    """The inequalities of a case; None where nothing is declared."""
    source, grid = forward.case.source, forward.grid
    if source.sign == "any" and source.ceiling is None and not source.monotone:
        return None
    coarse = _coarse(grid, source)
    fine = Parts(grid.middles, np.diag(grid.free.astype(float))) if source.smooth else coarse
    lumped = [i for i, c in enumerate(forward.columns) if c.kind == "lumped"]
    loads = np.eye(len(forward.columns))[lumped if source.sign != "any" else []]
    turn = -1.0 if source.sign == "nonpositive" else 1.0
    on_fine, least = _inequalities(source, fine)
    about = on_fine @ fine.means
    touched = np.vstack([about, np.zeros((len(loads), about.shape[1]))]) != 0
    rows, least = _rows(balanced, about, turn * loads, least)
    on_coarse, wall_least = _inequalities(source, coarse)
    means = coarse.means[coarse.free]
    coordinates, offset = _rows(balanced, means, loads, np.zeros(len(means)))
    d, w = len(means), len(on_coarse)
    walls = np.zeros((w + len(loads), d + len(loads)))
    walls[:w, :d] = on_coarse[:, coarse.free]
    walls[w:, d:] = turn * np.eye(len(loads))
    piece = np.full(len(grid.free), -1)
    if d:
        piece[grid.free] = np.argmax(means[:, grid.free] > 0, axis=0)
    low, high = _ranges(forward, asked)
    return Limits(
        rows, least, touched, coordinates, piece, walls,
        np.append(wall_least, np.zeros(len(loads))) + walls @ offset, low, high, _words(source),
    )  # fmt: skip


def _rows(
    balanced: Elimination, cells: Array, columns: Array, least: Array
) -> tuple[Questions, Array]:
    """Rows on cells, then rows on columns, and their least, less what is known of them."""
    m, k = cells.shape[1], columns.shape[1]
    both = np.vstack([cells, np.zeros((len(columns), m))])
    beside = np.vstack([np.zeros((len(cells), k)), columns])
    left, over, known = balanced.apply(both, beside)
    return Questions(left, over), np.append(least, np.zeros(len(columns))) - known


def _inequalities(source: SourceSpec, parts: Parts) -> tuple[Array, Array]:
    """Rows over the densities of stretches, and the least that they may be."""
    x, each, order = parts.middles, np.eye(len(parts.middles)), np.zeros((0, len(parts.middles)))
    stretches = [
        np.flatnonzero((x > s.start) & (x < s.end) & parts.free)[:: 1 if s.rising else -1]
        for s in source.monotone
        if source.smooth
    ]
    for inside in stretches:
        order = np.concatenate([order, each[inside[1:]] - each[inside[:-1]]])
    rows, least = [order], [np.zeros(len(order))]
    # of a stretch that rises its first bounds the others below, its last above
    shared = sum((np.isin(np.arange(len(x)), inside) for inside in stretches), np.zeros(len(x)))
    lowest, highest = parts.free.copy(), parts.free.copy()
    for inside in stretches:
        lowest[[i for i in inside[1:] if shared[i] == 1]] = False
        highest[[i for i in inside[:-1] if shared[i] == 1]] = False
    if source.sign != "any":
        up = source.sign == "nonnegative"
        rows.append(each[lowest] if up else -each[highest])
        least.append(np.zeros(len(rows[-1])))
    if source.ceiling is not None:
        rows.append(-each[highest])
        least.append(np.full(len(rows[-1]), -source.ceiling))
    return np.concatenate(rows), np.concatenate(least)


def _coarse(grid: Grid, source: SourceSpec) -> Parts:
    """Pieces: runs of cells between drawn edges, none longer than a part of the free length."""
    if not source.smooth:
        share = grid.weights * grid.free
        one = np.asarray([grid.middles.mean()]), share[None] / max(share.sum(), 1e-300)
        return Parts(*one) if grid.free.any() else Parts(np.zeros(0), np.zeros((0, len(share))))
    needed = [e for s in source.monotone for e in (s.start, s.end)]
    drawn = [*needed, *grid.breaks, *(e for zone in grid.zones for e in zone)]
    pieces = _cut(grid, drawn)
    if len(pieces) > MOST:
        pieces = _cut(grid, needed)
    means = np.zeros((len(pieces), len(grid.free)))
    for row, cells in zip(means, pieces, strict=True):
        row[cells] = grid.weights[cells] / grid.weights[cells].sum() * grid.free[cells]
    middles = [(grid.edges[c[0]] + grid.edges[c[-1] + 1]) / 2 for c in pieces]
    return Parts(np.array(middles), means)


def _cut(grid: Grid, drawn: list[float]) -> list[NDArray[np.intp]]:
    """Cells of each piece."""
    turns = np.flatnonzero(np.diff(grid.free)) + 1
    nearest = [int(np.argmin(np.abs(grid.edges - e))) for e in drawn]
    ends = np.unique([0, *turns, *nearest, len(grid.free)])
    longest = float(grid.widths[grid.free].sum()) / PIECES
    found = []
    for a, b in pairwise(ends):
        count = 1
        if grid.free[a]:
            count = int(np.ceil((grid.edges[b] - grid.edges[a]) / longest - 1e-9))
        found += [c for c in np.array_split(np.arange(a, b), min(count, b - a)) if len(c)]
    return found


def _ranges(forward: Forward, asked: Asked) -> tuple[Array, Array]:
    """What each question of the case can be at all, known parts from the balance left out."""
    source, grid, columns = forward.case.source, forward.grid, forward.columns
    m, k = len(grid.free), len(columns)
    plain = asked
    if forward.balance is not None:
        nothing = Elimination(None, np.zeros((m, k + 1)), np.eye(k, k + 1), ())
        plain = ask(forward, nothing)
    least, most = np.full(m + k, -np.inf), np.full(m + k, np.inf)
    signed = np.append(grid.free, np.array([c.kind == "lumped" for c in columns], dtype=bool))
    if source.sign == "nonnegative":
        least[signed] = 0.0
    if source.sign == "nonpositive":
        most[signed] = 0.0
    if source.ceiling is not None:
        most[:m] = np.minimum(most[:m], source.ceiling)
    weights = np.concatenate([plain.questions.cells * grid.free, plain.questions.columns], axis=1)
    ends = [
        np.where(weights != 0, weights, 0.0) * np.where(weights == 0, 0.0, bound)
        for bound in (least, most)
    ]
    moved = plain.constant - asked.constant
    low, high = np.minimum(*ends).sum(axis=1), np.maximum(*ends).sum(axis=1)
    return low + moved, high + moved


def _words(source: SourceSpec) -> str:
    words = {"nonnegative": "not negative", "nonpositive": "not positive"}
    found = [words[source.sign]] if source.sign != "any" else []
    found += ["below its ceiling"] if source.ceiling is not None else []
    found += ["monotone where declared"] if source.monotone else []
    return " and ".join(found)
