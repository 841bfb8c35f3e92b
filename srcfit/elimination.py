"""What the balance of a singular member asks of the source, eliminated from the unknowns.

A member with null modes has a steady response only to sources that the modes do not feel (the
Fredholm alternative): R (f, beta, 1) = 0 over densities, lumped parts and known parts. The smooth
part gives way: f = P f~ - M (R M)^-1 (R_beta beta + R_1), with P the projection onto densities
without a share in the null modes and M the null modes themselves as densities. Without a smooth
part as many lumped parts (or the background) as there are null modes follow from the others.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr

from srcfit.errors import SolveError
from srcfit.forward import Forward
from srcfit.member import Array
from srcfit.state import Matrix

NOTHING = 1e-11  # relative size of what only rounding leaves of a question
ASTRAY = 1e-8  # relative size of what cannot be balanced


@dataclass(frozen=True)
class Elimination:
    """f and beta as functions of k' unknowns that remain.

    Attributes
    ----------
    project : (m, m) or None
        Projection of the smooth part; None where nothing is asked of it.
    density : (m, k' + 1)
        What each remaining unknown, and at last what is known, adds to the density.
    amounts : (k, k' + 1)
        The same for the amounts beta.
    names : tuple of str, length k'
    rows : (d, m) or None
        Balance rows of the smooth part.
    """

    project: Array | None
    density: Array
    amounts: Array
    names: tuple[str, ...]
    rows: Array | None = None

    def apply(self, cells: Matrix, columns: Matrix) -> tuple[Matrix, Matrix, Matrix]:
        """Rows over (f, beta) as rows over (f~, what remains), and their known part."""
        both = cells @ self.density + columns @ self.amounts
        size = np.abs(cells) @ np.abs(self.density) + np.abs(columns) @ np.abs(self.amounts)
        both = np.where(np.abs(both) > NOTHING * size, both, 0.0)
        if self.project is not None:
            left = cells @ self.project
            some = np.abs(left).max(axis=1) > NOTHING * np.abs(cells).max(axis=1, initial=0.0)
            cells = np.where(some[:, None], left, 0.0)
        return cells, both[:, :-1], both[:, -1]


def eliminate(forward: Forward) -> Elimination:
    """What remains of the unknowns of a forward model once its source is balanced.

    Raises
    ------
    SolveError
        When nothing is left that could balance the source.
    """
    m, k = forward.A.shape[1], forward.B.shape[1]
    names = tuple(c.name for c in forward.columns)
    if forward.balance is None:
        return Elimination(None, np.zeros((m, k + 1)), np.eye(k, k + 1), names)
    rows = np.real(forward.balance)
    if forward.case.source.smooth and forward.grid.free.any():
        return _smooth(forward, rows, names)
    return _lumped(forward, rows, names)


def _smooth(forward: Forward, rows: Array, names: tuple[str, ...]) -> Elimination:
    m, k = forward.A.shape[1], forward.B.shape[1]
    on_cells = rows[:, :m]
    modes = (on_cells / forward.grid.weights).T
    seen = on_cells @ modes
    if np.linalg.matrix_rank(seen, rtol=ASTRAY) < len(rows):
        raise _astray(forward)
    density = -modes @ np.linalg.solve(seen, rows[:, m:])
    project = np.eye(m) - modes @ np.linalg.solve(seen, on_cells)
    return Elimination(project, density, np.eye(k, k + 1), names, on_cells)


def _lumped(forward: Forward, rows: Array, names: tuple[str, ...]) -> Elimination:
    """Without a smooth part: the unknowns are a background (if asked for) and the columns."""
    m, k = forward.A.shape[1], forward.B.shape[1]
    source, free = forward.case.source, forward.grid.free.astype(float)
    level = free[:, None] if source.background else np.zeros((m, 0))
    extra = level.shape[1]
    asked = np.concatenate([rows[:, :m] @ level, rows[:, m:-1]], axis=1)
    size = max(float(np.abs(rows).max()), np.finfo(float).tiny)
    _, R, order = qr(asked, pivoting=True)
    rank = int((np.abs(np.diag(R)) > ASTRAY * size).sum())
    given, rest = np.sort(order[:rank]), np.sort(order[rank:])
    follow = -np.linalg.lstsq(
        asked[:, given], np.concatenate([asked[:, rest], rows[:, -1:]], axis=1), rcond=None
    )[0]
    off = asked[:, given] @ follow[:, -1] + rows[:, -1]
    if np.abs(off).max() > ASTRAY * max(float(np.abs(rows[:, -1]).max()), ASTRAY * size):
        raise _astray(forward)
    every = np.zeros((extra + k, len(rest) + 1))
    every[rest, np.arange(len(rest))] = 1.0
    every[given] = follow
    known = ("background",) * extra + names
    return Elimination(
        None, level @ every[:extra], every[extra:], tuple(known[i] for i in rest)
    )  # fmt: skip


def _astray(forward: Forward) -> SolveError:
    return SolveError(
        "nothing holds the member, and nothing that is unknown about the source could balance "
        "what acts on it",
        str(forward.case.path or "case"),
        "hold the member, or let a smooth or lumped part of the source be unknown",
    )
