"""The whitened linear problem that solvers, criteria and bands work on. Plain data.

d = A f + B beta + e, e ~ N(0, s**2 I), s = 1 where the noise is stated.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Grid:
    """Cells of the source.

    Attributes
    ----------
    edges : (m + 1,) float
        Cell edges [m], ascending; zone edges, breaks, zero stretches and lumped widths are edges.
    weights : (m,) float
        Integral of the area weight over each cell (the cell's length for line members).
    free : (m,) bool
        Cells that carry a smooth part (False: held at zero).
    zones : tuple of (start, end)
        Declared zones [m] (questions; the source may jump near their edges).
    breaks : tuple of float
        Places where the source is known to jump [m].
    features : (m', k) or None
        Further shapes on the free cells that the source may have, found in the readings, those
        that change sign being what is open about the one before; None where not looked for.
    parts : {1, 2}
        2 where the source is a complex amplitude: cells of the real part come first, then those
        of the imaginary part, alike and independent beforehand.
    """

    edges: Array
    weights: Array
    free: NDArray[np.bool_]
    zones: tuple[tuple[float, float], ...] = ()
    breaks: tuple[float, ...] = ()
    parts: int = 1
    features: Array | None = None

    @property
    def featured(self) -> bool:
        """Whether the readings demanded any feature."""
        return self.features is not None and self.features.shape[1] > 0

    @property
    def middles(self) -> Array:
        """Cell middles [m], (m,)."""
        return (self.edges[1:] + self.edges[:-1]) / 2

    @property
    def widths(self) -> Array:
        """Cell lengths [m], (m,)."""
        return np.diff(self.edges)

    @property
    def unknown(self) -> NDArray[np.bool_]:
        """Columns of `Problem.A` that carry a smooth part, (parts * m,)."""
        return np.tile(self.free, self.parts)

    @property
    def constants(self) -> Array:
        """Constant of each part over the free cells, (parts * m', parts)."""
        return self.per_part(np.ones((int(self.free.sum()), 1)))

    def per_part(self, matrix: Array) -> Array:
        """The same matrix for each part, the rest 0."""
        return matrix if self.parts == 1 else np.asarray(np.kron(np.eye(self.parts), matrix))


@dataclass(frozen=True)
class Problem:
    """Whitened linear problem, n rows (readings and pseudo-readings), m cells, k columns.

    Of a source with two parts (complex amplitudes) m counts the cells of both, and rows and
    columns of complex readings and unknowns stand once for each of their parts.

    Attributes
    ----------
    A : (n, m)
        Response of each row to unit density on each cell; columns of cells that are not free
        are zero.
    B : (n, k)
        Unpenalised columns: lumped parts, nuisances, null modes (in the order of `names`).
    d : (n,)
        Whitened readings minus known parts.
    grid : Grid
    names : tuple of str, length k
    constant : bool
        Whether the smooth part has its own unpenalised constant (A 1 is then one more
        unpenalised column, one for each part); False on balanced members and where
        `smooth = false`.
    smooth : bool
        False: no smooth part at all (bands and solvers use `B` and the constant only).
    balance : (m,) or (j, m) float or None
        Rows that the source must be orthogonal to (singular members): balance @ f = 0.
    pseudo : int
        The last `pseudo` rows are knowledge, not readings (not counted in dof or residuals).
    stated : bool
        True when the noise is stated; False: s is unknown and integrated out.
    places : (n,) or None
        Place of each row along the member [m], for folds of neighbours (None: row order).
    along : (m, k + 1) or None
        Density that each column of `B`, and at last what is known, adds to the source to balance
        it (singular members); `B` and `d` hold its response already.
    """

    A: Array
    B: Array
    d: Array
    grid: Grid
    names: tuple[str, ...] = ()
    constant: bool = True
    smooth: bool = True
    balance: Array | None = None
    pseudo: int = 0
    stated: bool = True
    places: Array | None = None
    along: Array | None = None


@dataclass(frozen=True)
class Questions:
    """Linear questions: value = cells @ f + columns @ beta, one row each.

    Attributes
    ----------
    cells : (q, m)
        Weight of each cell's density (for an integral: the cell's part of the area weight).
    columns : (q, k)
        Weight of each unpenalised column of `Problem.B`.
    """

    cells: Array
    columns: Array
