"""The whitened problem of a forward model: noise, its correlation, and knowledge as extra rows.

Complex amplitudes are taken apart: rows of the real parts come first, then those of the imaginary
parts; cells and columns likewise. The noise is that of each part.
"""

from __future__ import annotations

from dataclasses import dataclass

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
    weight: Array | None = None,
) -> Problem:
    """The whitened problem with the stated noise, or with `sd` (n,) and `lag` (g,) in its place.

    Unknowns with prior knowledge, and a known total, become rows after the readings. `balanced`
    is what `elimination.eliminate` gives (found here when left out). A reading of `weight` w
    counts as one whose standard deviation is sd / sqrt(w).
    """
    sd = forward.sd if sd is None else sd
    lag = np.nan_to_num(forward.lag) if lag is None else lag
    weight = np.ones(len(sd)) if weight is None else weight
    balanced = eliminate(forward) if balanced is None else balanced
    m, case = forward.A.shape[1], forward.case
    rows = np.concatenate([forward.A, forward.B, forward.y[:, None]], axis=1)
    rows = _decorrelated(rows * (np.sqrt(weight) / sd)[:, None], links(forward, lag, weight))
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


@dataclass(frozen=True)
class Links:
    """How the noise of n readings hangs together, each with at most one neighbour before it.

    Attributes
    ----------
    before : (n,) int
        Number of the neighbour before; -1 where there is none.
    lag : (n,)
        Correlation with it, 0 where there is none.
    """

    before: Rows
    lag: Array

    @property
    def volume(self) -> float:
        """Log determinant of the whitening."""
        return -0.5 * float(np.log1p(-(self.lag**2)).sum())


def links(forward: Forward, lag: Array, weight: Array) -> Links:
    """Neighbours of each reading in its sequence, and their correlation.

    A down-weighted reading stands alone; those on either side of it are two steps apart.
    """
    before, kept = np.full(len(forward.rows), -1), np.zeros(len(forward.rows))
    for g, members in sequences(forward) if lag.any() else ():
        sound = np.flatnonzero(weight[members] == 1)
        before[members[sound[1:]]] = members[sound[:-1]]
        kept[members[sound[1:]]] = lag[g] ** np.diff(sound)
    return Links(before, kept)


def linked_rows(forward: Forward, found: Links) -> Links:
    """The same for the problem's rows: those of the real parts first, then the imaginary ones."""
    number, part = parts_of(forward)
    row = np.full((2, len(forward.rows)), -1)
    row[part, number] = np.arange(len(number))
    before = found.before[number]
    return Links(np.where(before < 0, -1, row[part, before]), found.lag[number])


def sequences(forward: Forward) -> list[tuple[int, Rows]]:
    """(group, readings in order along the member) of what may be correlated.

    One sequence for each column of a group and each pass along the member: the first readings at
    their places, then the second ones, and so on. Repeats at one place are independent.
    """
    x, spec = forward.places, forward.readings.spec[forward.rows]
    found = []
    for g in range(len(forward.groups)):
        for column in dict.fromkeys(spec[forward.group == g].tolist()):
            members = np.flatnonzero((forward.group == g) & (spec == column))
            members = members[np.argsort(x[members], kind="stable")]
            turn = _occurrence(x[members])
            found += [(g, members[turn == k]) for k in range(int(turn.max()) + 1)]
    return found


def _occurrence(x: Array) -> Rows:
    """How many equal entries stand before each one, in ascending entries."""
    number = np.arange(len(x))
    first = np.concatenate([[True], np.diff(x) > 0])
    return np.asarray(number - np.maximum.accumulate(np.where(first, number, 0)))


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


def _decorrelated(rows: Matrix, found: Links) -> Matrix:
    """Rows of first-order autoregressive noise, made independent along their sequences."""
    here = np.flatnonzero(found.lag)
    if not len(here):
        return rows
    out, lag = rows.copy(), found.lag[here, None]
    out[here] = (rows[here] - lag * rows[found.before[here]]) / np.sqrt(1 - lag**2)
    return out


def coloured(forward: Forward, white: Matrix, found: Links) -> Matrix:
    """Standardised residuals (n,) from whitened ones: the correlation put back."""
    out = white.copy()
    for _, members in sequences(forward) if found.lag.any() else ():
        for i in members[found.lag[members] != 0]:
            keep = found.lag[i]
            out[i] = keep * out[found.before[i]] + np.sqrt(1 - keep**2) * white[i]
    return out
