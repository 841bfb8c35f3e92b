"""Coefficients that stand in a file: one column of places, one of values, linear between rows."""

from __future__ import annotations

import csv
import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from srcfit.errors import CaseError
from srcfit.member import Array

MOST_ROWS = 2000


@dataclass(frozen=True)
class Line:
    """A straight line from (x0, y0) to (x1, y1)."""

    x0: float
    y0: float
    x1: float
    y1: float

    def __call__(self, x: Array) -> Array:
        """Values at the places `x`."""
        t = (np.asarray(x, dtype=float) - self.x0) / (self.x1 - self.x0)
        return self.y0 + (self.y1 - self.y0) * t


@dataclass(frozen=True)
class Columns:
    """Two columns of a file with their units as the header states them (None: it does not)."""

    position: tuple[float, ...]
    value: tuple[float, ...]
    lines: tuple[int, ...]
    position_unit: str | None
    unit: str | None


def read_columns(path: Path, position: str, value: str, where: str) -> Columns:
    """Read two columns of a delimited text file.

    The first line that names both columns is the header; "EI [MN*m^2]" or "EI (MN*m^2)" is a
    column EI with its unit. Decimal commas are understood where commas do not part the columns.

    Raises
    ------
    CaseError
        When the file cannot be read, has no such columns, or a cell that is no number.
    """
    rows = _rows(path, where)
    named = ((i, _find(c, position), _find(c, value)) for i, (_, c) in enumerate(rows))
    at, x, y = next(((i, x, y) for i, x, y in named if None not in (x, y)), (0, None, None))
    if x is None or y is None:
        raise CaseError(
            f"{path.name} has no line that names both columns `{position}` and `{value}`",
            where,
            f"its first line is {', '.join(rows[0][1])!r}" if rows else "it is empty",
        )
    header, body = rows[at][1], rows[at + 1 :]
    if not body:
        raise CaseError(f"{path.name} has no rows under its header", where)
    if len(body) > MOST_ROWS:
        raise CaseError(
            f"{path.name} has {len(body)} rows, more than {MOST_ROWS}", where, "thin it out"
        )
    return Columns(
        tuple(_number(cells, x, line, path, where) for line, cells in body),
        tuple(_number(cells, y, line, path, where) for line, cells in body),
        tuple(line for line, _ in body),
        _unit_of(header[x], position),
        _unit_of(header[y], value),
    )


def _rows(path: Path, where: str) -> list[tuple[int, list[str]]]:
    """Cells of every line that is neither blank nor a comment, with its number."""
    try:
        raw = path.read_bytes()
    except OSError as error:
        raise CaseError(
            f"the file {str(path)!r} cannot be read: {error.strerror}", where, "check its name"
        ) from None
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = raw.decode("cp1252", errors="replace")
    numbered = enumerate(re.split(r"\r\n|\r|\n", text), start=1)
    lines = [(n, t) for n, t in numbered if t.strip() and not t.startswith("#")]
    sample = lines[0][1] if lines else ""
    mark = max(";\t,", key=sample.count)
    return [(n, [c.strip() for c in next(csv.reader([t], delimiter=mark))]) for n, t in lines]


def _find(cells: list[str], name: str) -> int | None:
    """The column called `name`, with or without a unit in brackets after it."""
    if name in cells:
        return cells.index(name)
    bare = [re.sub(r"\s*[\[(].*[\])]$", "", c) for c in cells]
    return bare.index(name) if bare.count(name) == 1 else None


def _unit_of(cell: str, name: str) -> str | None:
    match = re.search(r"[\[(](.*)[\])]$", cell)
    return match[1].strip() if match else None


def _number(cells: list[str], at: int, line: int, path: Path, where: str) -> float:
    text = cells[at] if at < len(cells) else ""
    try:
        found = float(re.sub(r"^([+-]?\d+),(\d+)", r"\1.\2", text))
    except ValueError:
        found = float("nan")
    if not np.isfinite(found):
        raise CaseError(f"{path.name}, line {line}: {text!r} is no number", where)
    return found
