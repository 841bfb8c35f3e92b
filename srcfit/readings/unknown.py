"""A table of which nothing is known: its line of names, its columns of numbers, their units."""

from __future__ import annotations

import re
from dataclasses import dataclass

from srcfit import unit_texts as convert
from srcfit.errors import ReadingsError, UnitError
from srcfit.readings.sheets import File, manners, open_table
from srcfit.readings.table import Table, Wanted, is_number, title
from srcfit.readings.text import Cell, Records, clean
from srcfit.units import factor

_BRACKETS = re.compile(r"[\[(][^\[\]()]*[\])]")
_SAMPLE = 200
_INCHES = re.compile(r"[0-9]\s*(?:\"|″|”|'')|[0-9] [0-9]+/[0-9]+")


@dataclass(frozen=True)
class Sheet:
    """A table whose names are all known, and which of its columns hold numbers."""

    table: Table
    names: tuple[str, ...]
    numeric: frozenset[str]
    twice: tuple[str, ...]


def open_unknown(file: File) -> Sheet:
    """Find the header of a table of which nothing is known, and open it.

    Raises
    ------
    ReadingsError
        No header line stands above rows with numbers.
    """
    tried = [(*_header(found), found) for found in manners(file)]
    score, at, found = max(tried, key=lambda t: t[0])
    if score <= 0 or at is None:
        raise ReadingsError(
            "no line of names stands above rows of numbers", file.name,
            "give the columns names in the line above the first row",
        )  # fmt: skip
    cells = [title(c) for c in found.cells[at]]
    names = tuple(n for n in cells if n and cells.count(n) == 1)
    rows = found.cells[at + 1 : at + 1 + _SAMPLE]
    numeric = frozenset(n for n in names if _numbers(rows, cells.index(n)))
    keys = dict.fromkeys(names, "readings.column")
    wanted = Wanted(keys, dict.fromkeys(sorted(numeric), "1"))
    twice = tuple(dict.fromkeys(n for n in cells if n and cells.count(n) > 1))
    return Sheet(open_table(file, wanted), names, numeric, twice)


def _header(found: Records) -> tuple[int, int | None]:
    """How much of a table these records are, and the index of the line of names."""
    counts = [sum(is_number(clean(c)) for c in row if c == c) for row in found.cells]
    sizes = [len(row) for row, n in zip(found.cells, counts, strict=True) if n and len(row) > 1]
    if not sizes:
        return 0, None
    width = max(sorted(set(sizes)), key=sizes.count)
    rows = [i for i, r in enumerate(found.cells) if len(r) == width and counts[i]]
    usual = sorted(counts[i] for i in rows)[len(rows) // 2]
    first = next(i for i in rows if 2 * counts[i] >= usual)
    at = first - 1
    while at > max(0, first - 4) and _below_names(found.cells[at]):
        at -= 1
    score = sum(counts[i] for i in rows)
    good = at >= 0 and not counts[at] and len(found.cells[at]) >= width - 1
    return (score, at) if good else (0, None)


def _below_names(row: list[Cell]) -> bool:
    """Whether a row is one of units, or of one word again and again."""
    texts = [t for t in map(clean, row) if t]
    if not texts or (len(texts) > 2 and len(set(texts)) == 1):
        return True
    return sum(convert.known(convert.bare(t)) for t in texts) >= max(1, len(texts) // 2)


def _numbers(rows: list[list[Cell]], column: int) -> bool:
    """Whether most cells of a column are numbers."""
    texts = [t for t in (clean(r[column]) for r in rows if column < len(r)) if t]
    return bool(texts) and sum(map(is_number, texts)) >= 0.5 * len(texts)


def words_of(header: str) -> list[str]:
    """Words of a header text, small, without brackets."""
    text = _BRACKETS.sub(" ", header).lower().lstrip("#% ")
    return [w for w in re.split(r"[\s_.,:;/\-]+", text) if w]


def unit_of(sheet: Sheet, header: str, si: str) -> str | None:
    """The unit that the header, a units row or the cells of a column state; None if they do not.

    Raises
    ------
    LookupError
        They state one of another dimension.
    """
    bracket, other = convert.in_header(header, si)
    row = sheet.table.blocks[0].units.get(header, ("", 0))[0]
    text = bracket.text if bracket else row or other
    if not text:
        last = words_of(header)[-1:]
        tail = re.split(r"[\s_]+", _BRACKETS.sub("", header).strip())[-1]
        text = tail if last and len(words_of(header)) > 1 and _a_unit(tail, si) else ""
    if not text and si == "m" and sum(bool(_INCHES.search(str(c))) for c in some(sheet, header)):
        return "in"
    if not text:
        return None
    for name in (text, convert.case_name(text, si)):
        try:
            factor(name, si, "unit")
        except UnitError:
            continue
        return name
    raise LookupError(text)


def _a_unit(text: str, si: str) -> bool:
    """Whether the last word of a header is a unit: of this dimension, or plainly of another."""
    return convert.find(text, si) is not None or (len(text) > 1 and convert.known(text))


def some(sheet: Sheet, header: str) -> list[Cell]:
    """The first cells of a column."""
    return sheet.table.cells(header)[:_SAMPLE]
