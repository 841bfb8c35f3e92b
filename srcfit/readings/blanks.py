"""Where the places of readings stand, and which blank cells are listed as readings."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import TableSpec
from srcfit.readings.table import Table
from srcfit.readings.text import clean, is_blank

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Places:
    """Places of a table's rows (or of its columns, by gauge), x in m.

    Attributes
    ----------
    x : (rows,) float; None where places belong to columns
    gauges : mapping gauge -> x; None where places stand in the rows
    names : gauge name of each row; None where the column's header is the gauge
    """

    reason: Mapping[int, str]
    x: Array | None = None
    gauges: Mapping[str, float] | None = None
    names: list[str] | None = None
    source: str = ""
    rough: tuple[int, ...] = ()

    def of(self, column: str, rows: list[int]) -> tuple[Array, dict[int, str]]:
        """Places and reasons of the given rows in the given column, by position in `rows`."""
        if self.x is not None:
            at = {k: self.reason[i] for k, i in enumerate(rows) if i in self.reason}
            return self.x[rows], at
        names = [column] * len(rows) if self.names is None else [self.names[i] for i in rows]
        known = self.gauges or {}
        x = np.array([known.get(n, math.nan) for n in names], dtype=float)
        lack = {k: f"no position of gauge {n!r} in {self.source}" for k, n in enumerate(names)
                if n not in known}  # fmt: skip
        return x, lack


@dataclass(frozen=True)
class Shown:
    """Which blank cells are listed.

    A blank cell is a dropout where its own specification reads the row, or where the row has a
    place and nothing at all; in a row that another specification reads it is no reading. A row
    without a place and without any reading (a footer) is listed once.
    """

    blank: Mapping[tuple[int, str], NDArray[np.bool_]]
    own: list[NDArray[np.bool_]]
    any: NDArray[np.bool_]
    placed: NDArray[np.bool_]
    claimed: dict[int, tuple[int, str]]

    @classmethod
    def of(cls, table: Table, spec: TableSpec, rows: list[list[int]], places: Places) -> Shown:
        """Look at the cells of all specifications; `rows` are those each one selects."""
        size = len(table.rows)
        blank: dict[tuple[int, str], NDArray[np.bool_]] = {}
        own = [np.zeros(size, dtype=bool) for _ in spec.columns]
        for n, column in enumerate(spec.columns):
            keep = np.zeros(size, dtype=bool)
            keep[rows[n]] = True
            for name in column.columns:
                empty = np.array([is_blank(c) for c in table.cells(name)], dtype=bool)
                blank[n, name] = empty
                own[n] |= ~empty & keep
        filled = np.any(own, axis=0) if own else np.zeros(size, dtype=bool)
        placed = np.zeros(size, dtype=bool)
        if places.x is not None:
            placed[:] = True
            placed[list(places.reason)] = False
        elif places.names is not None:
            placed = np.array([bool(n) for n in places.names], dtype=bool)
        claimed: dict[int, tuple[int, str]] = {}
        for n, column in enumerate(spec.columns):
            for i in rows[n]:
                if not placed[i] and not filled[i]:
                    claimed.setdefault(i, (n, column.columns[0]))
        return cls(blank, own, filled, placed, claimed)

    def empty_lines(self, table: Table, n: int, name: str) -> dict[int, str]:
        """Rows listed once in this column because they have no place and no reading."""
        out = {}
        for i, owner in self.claimed.items():
            if owner == (n, name):
                text = " ".join(t for t in map(clean, table.rows[i]) if t)
                out[i] = f"no reading in this line ({text[:40]!r})"
        return out

    def rows(self, n: int, name: str, rows: list[int]) -> list[int]:
        """The rows of one column that are listed as readings."""
        blank = self.blank[n, name]
        return [
            i for i in rows
            if not blank[i] or self.own[n][i] or (self.placed[i] and not self.any[i])
            or self.claimed.get(i) == (n, name)
        ]  # fmt: skip
