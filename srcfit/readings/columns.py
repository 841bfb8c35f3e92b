"""Named columns of a table -> numbers in SI, row by row, each unreadable one with its reason."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit import unit_texts as convert
from srcfit.errors import ReadingsError
from srcfit.readings.numbers import (
    INCH,
    PLAIN,
    Amount,
    UnreadableError,
    amount,
    mark_of,
    normal,
    why_not,
)
from srcfit.readings.table import Table, title
from srcfit.readings.text import Cell, clean
from srcfit.unit_texts import Unit

Array = NDArray[np.float64]
_INCHES = (INCH, 12 * INCH)
_MISFIT = "its unit {} is not the column's {}"


@dataclass(frozen=True)
class Column:
    """A column in SI.

    Attributes
    ----------
    value : (rows,) float or complex, nan where there is no number
    raw : (rows,) float or complex, the numbers as they stand
    reason : mapping row -> why there is no number
    unit : unit text of each row, or one text for all
    scale : (rows,) SI per unit
    rough : rows whose number stands with ``~``
    changes : (line, old unit, new unit) where a header block changes the unit
    decimal : the decimal mark, "" when nothing shows it
    """

    value: NDArray[Any]
    raw: NDArray[Any]
    reason: dict[int, str]
    unit: list[str] | str
    scale: Array
    rough: list[int] = field(default_factory=list)
    changes: list[tuple[int, str, str]] = field(default_factory=list)
    decimal: str = ""


@dataclass(frozen=True)
class Ask:
    """How one column is to be read.

    Attributes
    ----------
    header : header text
    si : SI unit of what it measures
    key : key of the case file, for messages
    unit : unit text of the case, if it states one
    unit_column : header text of the column with a unit per row
    difference : whether numbers are differences (no offset)
    place : whether chainages are understood
    plain : whether the numbers are taken as they stand, without a unit
    """

    header: str
    si: str
    key: str
    unit: str | None = None
    unit_column: str | None = None
    difference: bool = False
    place: bool = False
    plain: bool = False


@dataclass(frozen=True)
class Marks:
    """What the numbers of a column tell of their decimal mark.

    Attributes
    ----------
    proven : decimal marks that some number proves
    unclear : a number that can be read in two ways, empty when there is none
    fixed : whether every number may have a point and three digits after it
    """

    proven: frozenset[str]
    unclear: str
    fixed: bool


def decimal_of(cells: Iterable[Cell]) -> Marks:
    """Decimal marks that a column's numbers prove, and one that can be read in two ways."""
    marks: set[str] = set()
    unclear, fixed = "", True
    for cell in cells:
        if isinstance(cell, float):
            continue
        if "," not in cell and "." in marks and cell.count(".") == 1:
            continue  # proves no more than is known
        if "." not in cell and "," not in cell:
            fixed = fixed and not cell.strip(" +-").isdigit()
            continue
        mark = mark_of(normal(cell))
        if mark[:1] == "?":
            unclear = unclear or cell.strip()
            fixed = fixed and mark == "?."
        elif mark:
            marks.add(mark)
    return Marks(frozenset(marks), unclear, fixed)


def settle(table: Table, header: str, stated: str | None) -> str:
    """Decimal mark of a column: ".", ",", "" (none shown) or "both" (each cell shows its own).

    Raises
    ------
    ReadingsError
        A number such as ``1,234`` can be read in two ways and nothing else in the file helps.
    """
    if stated:
        return stated
    own = decimal_of(table.cells(header))
    if len(own.proven) == 1:
        return next(iter(own.proven))
    if own.proven:
        return "both"
    if not own.unclear:
        return ""
    everywhere: frozenset[str] = frozenset()
    for column in zip(*_square(table), strict=True):
        everywhere |= decimal_of(column).proven
    if len(everywhere) == 1:
        return next(iter(everywhere))
    # tables with commas or blanks between their cells hardly ever part thousands by points
    if own.fixed and not everywhere and table.delimiter in (",", " ", "  "):
        return "."
    raise _two_ways(table, header, own.unclear)


def _two_ways(table: Table, header: str, shown: str) -> ReadingsError:
    lines = (n for n, c in zip(table.line, table.cells(header), strict=True) if shown in str(c))
    return ReadingsError(
        f"{shown!r} can be read with a decimal mark or with parted thousands",
        f"{table.name}, line {next(lines, 0)}, column {header!r}",
        'set `decimal` in the readings table to "," or "."',
    )


def _square(table: Table) -> Iterable[list[Cell]]:
    width = max(b.width for b in table.blocks)
    return ([*row[:width], *[""] * (width - len(row))] for row in table.rows)


def read_numbers(
    table: Table, ask: Ask, rows: Sequence[int], stated: str | None
) -> tuple[Array, dict[int, Amount], dict[int, str], str]:
    """Numbers of the selected rows as they stand.

    Returns
    -------
    (rows,) float, nan where there is no plain number; row -> what is more than a plain number;
    row -> why there is none; the decimal mark
    """
    cells = table.cells(ask.header)
    found = np.full(len(cells), np.nan)
    more: dict[int, Amount] = {}
    reason: dict[int, str] = {}
    decimal = settle(table, ask.header, stated)
    point = decimal in (".", "")
    for i in rows:
        cell = cells[i]
        if isinstance(cell, float):
            found[i] = cell
            if not np.isfinite(cell):
                reason[i] = why_not("" if cell != cell else "inf")
            continue
        text = cell.strip()
        if point and PLAIN.fullmatch(text):
            found[i] = float(text)
            continue
        text = normal(text)
        mark = mark_of(text) if decimal == "both" else decimal
        if mark[:1] == "?":
            raise _two_ways(table, ask.header, text)
        try:
            item = amount(text, mark or ".", ask.place)
        except UnreadableError as error:
            reason[i] = str(error)
            continue
        if isinstance(item.value, float) and not (item.metres or item.rough or item.suffix):
            found[i] = item.value
        else:
            more[i] = item
    for at in np.flatnonzero(np.isinf(found)):
        reason.setdefault(int(at), "too large for a number")
    found[np.isinf(found)] = np.nan
    return found, more, reason, decimal


def block_units(table: Table, ask: Ask) -> list[Unit | None]:
    """Unit of a column in each header block, as case, header brackets and units row state it.

    Raises
    ------
    ReadingsError
        They contradict each other.
    """
    case = convert.need(ask.unit, ask.si, ask.key, ask.difference) if ask.unit else None
    bracket, other = convert.in_header(ask.header, ask.si, ask.difference)
    out: list[Unit | None] = []
    for block in table.blocks:
        stated = [(case, f"`{ask.key}`")] if case else []
        head = f"the header in line {block.line}"
        if bracket:
            stated.append((bracket, head))
        elif other:
            raise _contradiction(table, ask, other, block.line)
        text, line = block.units.get(title(ask.header), ("", 0))
        row = convert.find(text, ask.si, ask.difference)
        if row:
            stated.append((row, f"the units row in line {line}"))
        elif text:
            raise _contradiction(table, ask, text, line)
        for unit, where in stated[1:]:
            first, place = stated[0]
            if first and unit and not first.same(unit):
                raise ReadingsError(
                    f"{place} states {first.text!r} for {ask.header!r}, but {where} states "
                    f"{unit.text!r}",
                    table.name,
                    f"correct the unit ({ask.key})",
                )
        out.append(stated[0][0] if stated else None)
    return out


def _contradiction(table: Table, ask: Ask, text: str, line: int) -> ReadingsError:
    return ReadingsError(
        f"the unit {text!r} of {ask.header!r} does not fit a quantity in {ask.si or '1'}",
        f"{table.name}, line {line}",
        f"name another column or kind ({ask.key})",
    )


def row_units(
    table: Table, ask: Ask, rows: Sequence[int]
) -> tuple[list[Unit | None], dict[int, str], list[tuple[int, str, str]]]:
    """Unit of each selected row, reasons where there is none, changes between blocks."""
    out: list[Unit | None] = [None] * len(table.rows)
    reason: dict[int, str] = {}
    if ask.unit_column is not None:
        texts = table.texts(ask.unit_column)
        fallback = convert.need(ask.unit, ask.si, ask.key, ask.difference) if ask.unit else None
        for i in rows:
            text = convert.bare(texts[i])
            out[i] = convert.find(text, ask.si, ask.difference) if text else fallback
            if out[i] is None:
                reason[i] = f"{text!r} is no unit that fits {ask.si or '1'}" if text else "no unit"
        return out, reason, []
    blocks: list[Unit | None] = (
        [None for _ in table.blocks] if ask.plain else block_units(table, ask)
    )
    if ask.plain or (ask.si in ("", "1") and not any(blocks)):
        blocks = [Unit("1", 1.0, 0.0) for _ in blocks]
    stops = [b.first for b in table.blocks[1:]] + [len(table.rows)]
    for block, unit, stop in zip(table.blocks, blocks, stops, strict=True):
        if unit is None:
            raise ReadingsError(
                f"nothing states the unit of {ask.header!r}",
                f"{table.name}, line {block.line}",
                f"set `unit` ({ask.key})",
            )
        out[block.first : stop] = [unit] * (stop - block.first)
    pairs = zip(blocks, blocks[1:], table.blocks[1:], strict=False)
    changes = [(b.line, o.text, n.text) for o, n, b in pairs if o and n and not o.same(n)]
    return out, reason, changes


def read_column(table: Table, ask: Ask, rows: Sequence[int], stated: str | None) -> Column:
    """A column in SI.

    Parameters
    ----------
    table : Table
    ask : Ask
    rows : rows to read; the others stay nan without a reason
    stated : decimal mark that the case states, or None

    Raises
    ------
    ReadingsError
        No unit, contradicting units, or numbers that can be read in two ways.
    """
    raw, more, reason, decimal = read_numbers(table, ask, rows, stated)
    units, lacking, changes = row_units(table, ask, rows)
    for i, text in lacking.items():
        reason.setdefault(i, text)
    scale, offset = _sizes(units)
    value = scale * raw + offset
    if any(isinstance(item.value, complex) for item in more.values()):
        raw, value = raw.astype(complex), value.astype(complex)
    rough: list[int] = []
    for i, item in more.items():
        unit = units[i]
        misfit = _misfit(item, unit, ask) if unit else ""
        if unit is None or misfit:
            reason.setdefault(i, misfit)
            continue
        raw[i] = item.value
        value[i] = item.value if item.metres else unit.scale * item.value + unit.offset
        if item.rough:
            rough.append(i)
    words = {u.text for u in {id(u): u for u in units}.values() if u}
    unit_text = words.pop() if len(words) == 1 else [u.text if u else "" for u in units]
    return Column(value, raw, reason, unit_text, scale, rough, changes, decimal)


def _sizes(units: Sequence[Unit | None]) -> tuple[Array, Array]:
    """Scale and offset of each row; nan without a unit."""
    known = {id(u): u for u in units}
    sizes = {k: (u.scale, u.offset) if u else (np.nan, np.nan) for k, u in known.items()}
    if len(sizes) == 1:
        ((scale, offset),) = sizes.values()
        return np.full(len(units), scale), np.full(len(units), offset)
    pairs = np.array([sizes[id(u)] for u in units], dtype=float).reshape(-1, 2)
    return pairs[:, 0].copy(), pairs[:, 1].copy()


def _misfit(item: Amount, unit: Unit, ask: Ask) -> str:
    """Why an amount with inch marks or a unit beside it does not fit its column."""
    if item.metres and not (ask.si == "m" and any(abs(unit.scale - s) < 1e-9 for s in _INCHES)):
        return _MISFIT.format("(inch or foot marks)", repr(unit.text))
    if item.suffix:
        own = convert.find(item.suffix, ask.si, ask.difference)
        if own is None:
            return f"'{item.value:g} {item.suffix}' is no number"
        if not own.same(unit):
            return _MISFIT.format(repr(item.suffix), repr(unit.text))
    return ""


def selected(table: Table, where: Mapping[str, str]) -> list[int]:
    """Rows whose cells have the texts of `where` (all rows without it)."""
    keep = np.ones(len(table.rows), dtype=bool)
    for header, text in where.items():
        want = clean(text)
        keep &= np.array([t == want for t in table.texts(header)], dtype=bool)
    return [int(i) for i in np.flatnonzero(keep)]
