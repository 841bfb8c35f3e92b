"""The whitened problem of a forward model: noise, its correlation, and knowledge as extra rows.

Complex amplitudes are taken apart: rows of the real parts come first, then those of the imaginary
parts; cells and columns likewise. The noise is that of each part.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from srcfit.elimination import Elimination, eliminate
from srcfit.forward import Forward
from srcfit.member import Array
from srcfit.problem import Problem
from srcfit.state import Matrix

Rows = NDArray[np.intp]


def whitened(
    forward: Forward,
    sd: Array | None = None,
    lag: Array | None = None,
    balanced: Elimination | None = None,
) -> Problem:
    """The whitened problem with the stated noise, or with `sd` (n,) and `lag` (g,) in its place.

    Unknowns with prior knowledge, and a known total, become rows after the readings. `balanced`
    is what `elimination.eliminate` gives (found here when left out).
    """
    sd = forward.sd if sd is None else sd
    lag = np.nan_to_num(forward.lag) if lag is None else lag
    balanced = eliminate(forward) if balanced is None else balanced
    m, case = forward.A.shape[1], forward.case
    rows = np.concatenate([forward.A, forward.B, forward.y[:, None]], axis=1) / sd[:, None]
    rows = _decorrelated(forward, rows, lag)
    readings, pseudo = (
        _apart(forward, _reduced(balanced, part, m)) for part in (rows, _knowledge(forward))
    )
    number, part = parts_of(forward)
    n, parts = len(forward.rows), forward.grid.parts
    stacked = np.concatenate([readings[part * n + number], pseudo])
    source, singular = case.source, forward.balance is not None
    x = forward.readings.x[forward.rows]
    return Problem(
        stacked[:, : parts * m], stacked[:, parts * m : -1], stacked[:, -1], forward.grid,
        balanced.names * parts,
        constant=not singular and (source.smooth or source.background),
        smooth=source.smooth,
        balance=None if balanced.rows is None else forward.grid.per_part(balanced.rows),
        pseudo=len(pseudo),
        # a common factor of all sds is integrated out, but only where none of them is stated
        stated=bool(np.isfinite(forward.sd).any()),
        places=np.concatenate([x[number], np.zeros(len(pseudo))]),
        along=_along(forward, balanced.density) if singular else None,
    )  # fmt: skip


def parts_of(forward: Forward) -> tuple[Rows, Rows]:
    """Reading number and part (0 real, 1 imaginary) of each row that is a reading.

    A column of one `component` has no row of the other.
    """
    n = len(forward.rows)
    if not forward.driven:
        return np.arange(n), np.zeros(n, dtype=np.intp)
    component = np.array([s.component or "both" for s in forward.specs()])
    real, imaginary = (np.flatnonzero(component != other) for other in ("imaginary", "real"))
    return np.concatenate([real, imaginary]), np.repeat([0, 1], [len(real), len(imaginary)])


def together(forward: Forward, values: Array) -> Matrix:
    """Values of the problem's rows (readings only) as one number a reading: complex where driven.

    The part that a reading does not have is 0.
    """
    if not forward.driven:
        return values
    number, part = parts_of(forward)
    found = np.zeros(len(forward.rows), dtype=complex)
    np.add.at(found, number, np.where(part == 0, 1.0, 1j) * values)
    return found


def sequences(forward: Forward) -> list[tuple[int, Rows]]:
    """(group, readings in order along the member) of what may be correlated."""
    x = forward.readings.x[forward.rows]
    component = np.array([s.component or "" for s in forward.specs()])
    found = []
    for g in range(len(forward.groups)):
        for part in dict.fromkeys(component[forward.group == g]):
            members = np.flatnonzero((forward.group == g) & (component == part))
            found.append((g, members[np.argsort(x[members], kind="stable")]))
    return found


def _knowledge(forward: Forward) -> Matrix:
    """Rows over (cells, columns, known amount) of what is known beforehand."""
    m, k = forward.A.shape[1], forward.B.shape[1]
    rows = []
    for j, column in enumerate(forward.columns):
        if column.sd is not None:
            row = np.zeros(m + k + 1)
            row[m + j], row[-1] = 1 / column.sd, column.guess / column.sd
            rows.append(row)
    total = forward.case.source.total
    if total is not None:
        row = np.zeros(m + k + 1)
        row[:m] = forward.grid.weights * forward.grid.free
        row[m : m + k] = [float(c.kind == "lumped") for c in forward.columns]
        row[-1] = total.value
        rows.append(row / total.sd)
    return np.array(rows).reshape(len(rows), m + k + 1)


def _reduced(balanced: Elimination, rows: Matrix, m: int) -> Matrix:
    """Rows over (cells, columns, known amount) as rows over what remains of the unknowns."""
    cells, columns, known = balanced.apply(rows[:, :m], rows[:, m:-1])
    return np.concatenate([cells, columns, (rows[:, -1] - known)[:, None]], axis=1)


def _apart(forward: Forward, rows: Matrix) -> Matrix:
    """Rows over (unknowns, 1) for the real parts of readings and unknowns, then the imaginary."""
    if not forward.driven:
        return rows
    m = len(forward.grid.free)
    blocks = rows[:, :m], rows[:, m:-1], rows[:, -1:]
    real = [np.concatenate([b.real, -b.imag], axis=1) for b in blocks[:2]]
    imaginary = [np.concatenate([b.imag, b.real], axis=1) for b in blocks[:2]]
    return np.concatenate([
        np.concatenate([*real, blocks[2].real], axis=1),
        np.concatenate([*imaginary, blocks[2].imag], axis=1),
    ])  # fmt: skip


def _along(forward: Forward, density: Array) -> Array:
    """Density that each remaining unknown (of each part), and at last what is known, brings."""
    known = np.zeros(forward.grid.parts * len(density))
    known[: len(density)] = density[:, -1]
    return np.concatenate([forward.grid.per_part(density[:, :-1]), known[:, None]], axis=1)


def _decorrelated(forward: Forward, rows: Matrix, lag: Array) -> Matrix:
    """Rows of a first-order autoregressive group, made independent along the member."""
    if not lag.any():
        return rows
    out = rows.copy()
    for g, members in sequences(forward):
        step = rows[members[1:]] - lag[g] * rows[members[:-1]]
        out[members[1:]] = step / np.sqrt(1 - lag[g] ** 2)
    return out
