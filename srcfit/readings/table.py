"""Records -> table: the header line, its units rows, repeated blocks, rows of data."""

from __future__ import annotations

import difflib
import unicodedata
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from srcfit import unit_texts as convert
from srcfit.errors import ReadingsError
from srcfit.readings.numbers import MISSING, UnreadableError, amount, normal, why_not
from srcfit.readings.text import (
    DELIMITERS,
    Cell,
    Lines,
    Records,
    clean,
    is_blank,
    records,
    split,
)

_HEADER_ROWS = 5
_TRIED = 2000


@dataclass(frozen=True)
class Wanted:
    """What a table must hold: named columns and what they are for.

    Attributes
    ----------
    keys : mapping header text -> key of the case file that names it
    measured : mapping header text -> SI unit, for the columns that hold numbers with a unit
    optional : a header text that is used if it is there
    """

    keys: Mapping[str, str]
    measured: Mapping[str, str] = field(default_factory=dict)
    optional: str = ""


@dataclass(frozen=True)
class Block:
    """One header block: rows from `first` on stand in its columns.

    Attributes
    ----------
    line : physical line of the names
    first : index of the first row of the table that belongs to it
    index : mapping header text -> column number
    width : number of columns
    units : mapping header text -> (text of the units row, its line)
    """

    line: int
    first: int
    index: Mapping[str, int]
    width: int
    units: Mapping[str, tuple[str, int]]


@dataclass(frozen=True)
class Table:
    """Rows of data of one file.

    Attributes
    ----------
    name : file name as given in the case
    blocks : header blocks, ascending in `first`
    line : physical line of each row
    rows : cells of each row
    broken : mapping row -> why its cells cannot be told apart
    unfinished : row that the file's end cuts off between two cells, or None
    cut : (row, column) of a last cell without a line end after it, or None
    headers : every header text of the first block
    early : lines above the header that look like rows of it
    story : what was understood, in words
    delimiter : what parts the cells; empty for spreadsheets and Parquet files
    read : cells of the columns asked for so far
    """

    name: str
    blocks: tuple[Block, ...]
    line: Sequence[int]
    rows: list[list[Cell]]
    broken: Mapping[int, str]
    unfinished: int | None
    cut: tuple[int, int] | None
    headers: tuple[str, ...]
    early: tuple[int, ...]
    story: str
    delimiter: str = ""
    read: dict[str, list[Cell]] = field(default_factory=dict, compare=False, repr=False)

    def cells(self, name: str) -> list[Cell]:
        """Cells of one named column, "" where a row is too short."""
        if name not in self.read:
            self.read[name] = self._cells(name)
        return self.read[name]

    def _cells(self, name: str) -> list[Cell]:
        out: list[Cell] = []
        stops = [b.first for b in self.blocks[1:]] + [len(self.rows)]
        for block, stop in zip(self.blocks, stops, strict=True):
            i = block.index[title(name)]
            out += [row[i] if i < len(row) else "" for row in self.rows[block.first : stop]]
        return out

    def texts(self, name: str) -> list[str]:
        """Cleaned texts of one named column."""
        return [clean(c) for c in self.cells(name)]


def title(cell: Cell) -> str:
    """Header text for comparing."""
    return unicodedata.normalize("NFC", clean(cell)).strip('"').strip()


def matches(cells: Sequence[Cell], wanted: Wanted) -> int:
    """How many of the named columns a record has."""
    texts = {title(c) for c in cells}
    return sum(name in texts for name in wanted.keys)


def sniff(lines: Lines, wanted: Wanted, declared: str, name: str) -> str:
    """The delimiter with which a line has all named columns.

    Raises
    ------
    ReadingsError
        No line has them all: the nearest line, the missing column and the nearest text.
    """
    tried: tuple[str, ...] = tuple(dict.fromkeys([*declared, *DELIMITERS]))
    best: tuple[int, int, str] = (-1, 0, "")
    for i in _likely(lines.text, wanted):
        found = [d for d in tried if matches(_first(lines.text, i, d), wanted) == len(wanted.keys)]
        if declared in found:
            return declared
        if found:
            return max(found, key=lambda d: _steady(lines.text, i, d))
    for delimiter in tried:
        for line, cells, _ in records(lines.text[:_TRIED], delimiter):
            count = matches(cells, wanted)
            if count == len(wanted.keys):
                return delimiter
            if count > best[0]:
                best = (count, line, delimiter)
    raise _no_header(lines, wanted, best, tried, name)


def _likely(lines: Sequence[str], wanted: Wanted) -> list[int]:
    """Indices of lines that hold all names somewhere."""
    names = list(wanted.keys)
    out = []
    for i, line in enumerate(lines):
        if names[0].split(" ")[0].split('"')[0] in line:
            text = title(line.replace('""', '"'))
            if all(n in text for n in names):
                out.append(i)
    return out


def _first(lines: Sequence[str], i: int, delimiter: str) -> list[Cell]:
    found = next(iter(records(lines[i : i + 50], delimiter)), None)
    return found[1] if found else []


def _steady(lines: Sequence[str], i: int, delimiter: str) -> int:
    """How many of the next lines have as many cells as the header line."""
    width = len(_first(lines, i, delimiter))
    return sum(len(c) == width for _, c, _ in records(lines[i + 1 : i + 60], delimiter))


def _no_header(
    lines: Lines, wanted: Wanted, best: tuple[int, int, str], tried: Sequence[str], name: str
) -> ReadingsError:
    count, line, delimiter = best
    if count > 0:
        return no_column(
            name, wanted, [title(c) for c in _first(lines.text, line - 1, delimiter)], line
        )
    early = [title(c) for d in tried for t in lines.text[:50] for c in split(t, d)]
    return no_column(name, wanted, early, None)


def no_column(name: str, wanted: Wanted, there: Sequence[str], line: int | None) -> ReadingsError:
    """The error for named columns that no header line has.

    Parameters
    ----------
    name : file name
    wanted : Wanted
    there : texts of the line that has most of them, or of all early lines
    line : that line, or None
    """
    missing = [n for n in wanted.keys if n not in there] or list(wanted.keys)
    pool = sorted({t for t in there if t and t not in wanted.keys and len(t) < 80})
    lower = {t.casefold(): t for t in pool}
    pairs = [
        (n, lower[m])
        for n in missing
        for m in difflib.get_close_matches(n.casefold(), lower, 1, 0.5)
    ]
    column, near = pairs[0] if pairs else (missing[0], "")
    hint = f" (nearest: {near!r})" if near else ""
    if not near and line:
        hint = f" (the line has {', '.join(map(repr, pool[:6]))})"
    return ReadingsError(
        f"no header line has all named columns: {column!r} is missing{hint}",
        f"{name}, line {line}" if line else name,
        f"set {wanted.keys[column]} to a header text of the file",
    )


def _index(cells: Sequence[Cell], wanted: Wanted, line: int, name: str) -> dict[str, int]:
    """Column number of every named column; one that stands twice is an error."""
    texts = [title(c) for c in cells]
    for text in wanted.keys:
        if texts.count(text) > 1:
            raise ReadingsError(
                f"the header has {text!r} {texts.count(text)} times",
                f"{name}, line {line}",
                f"rename one of these columns in a copy of the file ({wanted.keys[text]})",
            )
    also = [wanted.optional] if wanted.optional in texts else []
    return {text: texts.index(text) for text in [*wanted.keys, *also] if text}


def _measuring(cells: Sequence[Cell], index: Mapping[str, int], wanted: Wanted) -> dict[str, str]:
    """Texts under the columns that hold numbers, blank ones left out."""
    pairs = ((n, clean(cells[index[n]])) for n in wanted.measured if index[n] < len(cells))
    return {n: text for n, text in pairs if text}


def is_number(text: str) -> bool:
    """Whether a text is a number or a place with either decimal mark."""
    for decimal in ".,":
        try:
            amount(normal(text), decimal, place=True)
        except UnreadableError:
            continue
        return True
    return False


def heading(cells: Sequence[Cell], index: Mapping[str, int], wanted: Wanted) -> bool:
    """Whether a row below the names still belongs to the header block."""
    texts = _measuring(cells, index, wanted)
    if not texts or any(is_number(t) for t in texts.values()):
        return False
    if any(_unit_like(t, wanted.measured[n]) for n, t in texts.items()):
        return True
    return all(
        t.lower() not in MISSING and why_not(t).endswith("is no number") for t in texts.values()
    )


def _unit_like(text: str, si: str) -> bool:
    return convert.find(convert.bare(text), si) is not None or convert.known(convert.bare(text))


def build(found: Records, wanted: Wanted, name: str) -> Table:
    """Find the header and its repeats, and part rows of data from the rest."""
    start = next(
        (i for i, c in enumerate(found.cells) if matches(c, wanted) == len(wanted.keys)), None
    )
    if start is None:
        best = max(range(min(len(found.cells), 50)), key=lambda i: matches(found.cells[i], wanted))
        raise no_column(name, wanted, [title(c) for c in found.cells[best]], found.line[best])
    return _Builder(found, wanted, name, start).table()


class _Builder:
    """One pass over the records after the header's; lives only while a table is built."""

    def __init__(self, found: Records, wanted: Wanted, name: str, start: int) -> None:
        self.found, self.wanted, self.name, self.start = found, wanted, name, start
        self.blocks: list[Block] = []
        self.kept: list[int] = []
        self.repeats: set[tuple[Cell, ...]] = set()
        self.preamble = [tuple(c) for c in found.cells[:start]]

    def table(self) -> Table:
        cells = self.found.cells
        i = self._block(self.start)
        sign = cells[self.start][next(iter(self.blocks[0].index.values()))]
        while i < len(cells):
            row = cells[i]
            if sign in row and matches(row, self.wanted) == len(self.wanted.keys):
                self._drop_preamble()
                i = self._block(i)
                continue
            if not all(map(is_blank, row)) and tuple(row) not in self.repeats:
                self.kept.append(i)
            i += 1
        return self._finish()

    def _block(self, i: int) -> int:
        """Take the names in record i and what belongs to them; the next record's index."""
        names, line = self.found.cells[i], self.found.line[i]
        index = _index(names, self.wanted, line, self.name)
        units: dict[str, tuple[str, int]] = {}
        j = i + 1
        while j < len(self.found.cells) and j <= i + _HEADER_ROWS:
            row = self.found.cells[j]
            if not heading(row, index, self.wanted):
                break
            for n, text in _measuring(row, index, self.wanted).items():
                if n not in units and _unit_like(text, self.wanted.measured[n]):
                    units[n] = (convert.bare(text), self.found.line[j])
            self.repeats.add(tuple(row))
            j += 1
        width = len(names)
        while width and not clean(names[width - 1]):
            width -= 1
        self.blocks.append(Block(line, len(self.kept), index, width, units))
        return j

    def _drop_preamble(self) -> None:
        """Lines just before a repeated header that stood before the first one."""
        while self.kept and tuple(self.found.cells[self.kept[-1]]) in self.preamble:
            self.kept.pop()

    def _finish(self) -> Table:
        found, kept = self.found, self.kept
        rows = [found.cells[i] for i in kept]
        line = [found.line[i] for i in kept]
        broken = {k: found.broken[i] for k, i in enumerate(kept) if i in found.broken}
        unfinished: int | None = None
        cut: tuple[int, int] | None = None
        if rows and not found.finished and kept[-1] == len(found.cells) - 1:
            usual = len(rows[-2]) if len(rows) > 1 else self.blocks[-1].width
            if len(rows[-1]) < usual or len(rows) - 1 in broken:
                unfinished = len(rows) - 1
            else:
                cut = (len(rows) - 1, len(rows[-1]) - 1)
        broken |= self._misfits(rows, unfinished)
        return Table(
            self.name, tuple(self.blocks), line, rows, broken, unfinished, cut,
            tuple(title(c) for c in found.cells[self.start]), self._early(), self._story(),
            found.delimiter,
        )  # fmt: skip

    def _early(self) -> tuple[int, ...]:
        """Lines above the header with a number in every column that measures."""
        index, measured = self.blocks[0].index, self.wanted.measured
        rows = enumerate(self.found.cells[: self.start])
        return tuple(
            self.found.line[i]
            for i, row in rows
            if len(_measuring(row, index, self.wanted)) == len(measured)
            and all(map(is_number, _measuring(row, index, self.wanted).values()))
        )

    def _misfits(self, rows: list[list[Cell]], unfinished: int | None) -> dict[int, str]:
        """Rows with more cells than the header (or fewer, where blanks part the cells)."""
        out: dict[int, str] = {}
        gaps = self.found.delimiter in ("  ", " ")
        stops = [b.first for b in self.blocks[1:]] + [len(rows)]
        for block, stop in zip(self.blocks, stops, strict=True):
            for k in range(block.first, stop):
                size = len(rows[k])
                if (size > block.width and any(map(clean, rows[k][block.width :]))) or (
                    gaps and size < block.width and k != unfinished
                ):
                    out[k] = f"the row has {size} cells where the header has {block.width}"
        return out

    def _story(self) -> str:
        """What was understood of this file, in words."""
        first = self.blocks[0]
        parts = [self.found.manner]
        if self.start:
            parts.append(f"{self.start} line{'s' * (self.start > 1)} before the header")
        parts.append(f"names in line {first.line}")
        if first.units:
            lines = sorted({line for _, line in first.units.values()})
            parts.append(f"units in line {', '.join(map(str, lines))}")
        if len(self.blocks) > 1:
            again = ", ".join(str(b.line) for b in self.blocks[1:])
            parts.append(f"header again in line {again}")
        return "; ".join(parts)
