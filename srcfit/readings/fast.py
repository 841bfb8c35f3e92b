"""Large plain tables through pandas, with the same result as the careful way.

The first part of the file is read the careful way and settles header, units and marks; the rest
is taken over only if every needed cell is a plain number and every row has as many cells as the
first. Whatever does not fit gives None, and the careful way reads the whole file.
"""

from __future__ import annotations

import io
import warnings
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import Case, ColumnSpec, TableSpec
from srcfit.errors import ReadingsError
from srcfit.readings.batch import Batch, leave_out, saturated, shortened, table_batches
from srcfit.readings.columns import Ask, decimal_of, row_units
from srcfit.readings.places import row_places, turned
from srcfit.readings.sheets import File, text_table
from srcfit.readings.table import Table, Wanted, title
from srcfit.readings.text import Lines, decode, ends_in_words
from srcfit.readings.watch import status_columns

Array = NDArray[np.float64]
Bytes = NDArray[np.uint8]
SMALLEST = 400_000
_HEAD = 32_768
_ODD = bytes([*range(9), 11, 12, *range(14, 32), 127])  # control characters


@dataclass(frozen=True)
class _Head:
    """Bytes of a file (with a line end at last), its first part read, where its rows begin."""

    data: bytes
    table: Table
    start: int
    delimiter: str


def fast_batches(
    case: Case, spec: TableSpec, file: File, wanted: Wanted, first: int, stated: str | None
) -> tuple[Table, list[Batch]] | None:
    """Readings of a large plain table, or None where the careful way is needed.

    Parameters
    ----------
    case, spec, file, wanted
    first : index of the table's first specification in `Case.columns`
    stated : decimal mark that the case states, or None
    """
    if len(file.data) < SMALLEST or not _simple(case, spec):
        return None
    try:
        head = _head(file, wanted)
        if head is None:
            return None
        places = row_places(spec, head.table, stated)
        small = table_batches(case, spec, head.table, places, first, stated)
    except ReadingsError:
        return None  # the careful way says it, with the whole file in view
    mark = _mark(head, wanted, stated)
    if mark is None or any(b.rough or b.changes or not isinstance(b.unit, str) for b in small):
        return None
    numbers = _numbers(head, wanted, mark)
    if numbers is None:
        return None
    columns, starts = numbers
    count = len(starts)
    line = head.table.line[0] + np.arange(count, dtype=np.int64)
    twice = _duplicates(head.data, columns, starts, int(line[0]))
    table = replace(head.table, line=range(int(line[0]), int(line[0]) + count), rows=[], read={})
    if not file.data.endswith(b"\n"):
        table = replace(table, cut=(count - 1, table.blocks[0].width - 1))
    builder = _Builder(case, spec, head.table, columns, line, stated)
    out = [builder.batch(b, case.columns[b.spec]) for b in small]
    for batch in out:
        leave_out(batch, case.columns[batch.spec].exclude_lines, twice)
    return table, out


def _simple(case: Case, spec: TableSpec) -> bool:
    """Whether every value is one number of its row and nothing else decides about it."""
    place = spec.position
    plain = not (case.member.driven or spec.where or spec.time or place.file or place.unit_column)
    return plain and all(
        not (c.unit_column or c.phase or c.component or c.where or c.baseline or c.correction)
        for c in spec.columns
    )


def _head(file: File, wanted: Wanted) -> _Head | None:
    """The first rows read the careful way; None where the bytes are not plain."""
    data = file.data
    if len(data.translate(None, _ODD)) != len(data):
        return None
    crlf = data.count(b"\r\n") if b"\r" in data else 0
    whole = data.endswith(b"\n")
    if (crlf and data.count(b"\r") != crlf) or (not crlf and b"\r" in data):
        return None
    if crlf and data.count(b"\n") != crlf:
        return None
    if data.isascii():
        encoding, part = "ASCII", data[: data.rfind(b"\n", 0, _HEAD) + 1].decode()
    else:
        text, encoding = decode(data, file.name)
        part = text[: text.rfind("\n", 0, _HEAD) + 1]
    ends = ends_in_words(crlf, 0, 0) if crlf else "LF"
    rows = part.replace("\r\n", "\n").split("\n")[:-1]
    table, delimiter = text_table(Lines(rows, encoding, ends, True), wanted, file.name)
    fit = {len(r) for r in table.rows} == {table.blocks[0].width} and not table.broken
    together = list(table.line) == list(range(table.line[0], len(rows) + 1)) if fit else False
    flagged = status_columns(table.headers)  # only the careful way looks at flags
    if flagged or not together or len(table.blocks) != 1 or delimiter not in (";", "\t", ",", "|"):
        return None
    start = 0
    for _ in range(table.line[0] - 1):
        start = data.index(b"\n", start) + 1
    if data.find(b'"', start) >= 0 or not (whole or _uncut(data, table, delimiter)):
        return None
    return _Head(data if whole else data + b"\n", table, start, delimiter)


def _uncut(data: bytes, table: Table, delimiter: str) -> bool:
    """Whether a last line without a line end is surely no shorter than the first rows."""
    last = data[data.rfind(b"\n") + 1 :].decode(errors="replace").split(delimiter)
    index = table.blocks[0].index
    names = [n for n, i in index.items() if i == table.blocks[0].width - 1]
    return len(last) == table.blocks[0].width and not any(
        shortened([*table.cells(n), last[-1]]) for n in names
    )


def _mark(head: _Head, wanted: Wanted, stated: str | None) -> str | None:
    """The one decimal mark of all needed columns; None where the first rows do not prove it."""
    if stated:
        return stated if stated != head.delimiter else None
    proven = [decimal_of(head.table.cells(name)) for name in wanted.keys]
    marks = frozenset[str]().union(*(m.proven for m in proven))
    if len(marks) > 1 or any(m.unclear and not m.proven for m in proven):
        return None
    if marks:
        mark = next(iter(marks))
        return None if mark == head.delimiter else mark
    others = {b"."} if head.delimiter == "," else {b".", b","}
    return None if any(head.data.find(m, head.start) >= 0 for m in others) else "."


def _numbers(
    head: _Head, wanted: Wanted, mark: str
) -> tuple[dict[str, Array], NDArray[np.int64]] | None:
    """Needed columns as numbers and where each row begins; None where a row does not fit."""
    import pandas as pd

    index = {name: head.table.blocks[0].index[name] for name in wanted.keys}
    starts = _row_starts(head)
    if starts is None:
        return None
    buffer = io.BytesIO(head.data)
    buffer.seek(head.start)
    exact: dict[str, Any] = {}
    if tuple(int(p) for p in pd.__version__.split(".")[:2]) < (3, 1):
        exact["float_precision"] = "round_trip"  # the default of older versions is an ulp off
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            frame = pd.read_csv(
                buffer, sep=head.delimiter, header=None, usecols=sorted(set(index.values())),
                dtype=np.float64, na_filter=False, decimal=mark, quoting=3, engine="c",
                skip_blank_lines=False, skipinitialspace=True, encoding_errors="replace", **exact,
            )  # fmt: skip
        except (ValueError, OverflowError):
            return None
    out = {name: frame[i].to_numpy() for name, i in index.items()}
    if len(frame) != len(starts) or not all(np.isfinite(v).all() for v in out.values()):
        return None
    return out, starts


def _row_starts(head: _Head) -> NDArray[np.int64] | None:
    """Where each row begins, if every row has as many delimiters as the header; else None."""
    body: Bytes = np.frombuffer(head.data, dtype=np.uint8, offset=head.start)
    at = np.flatnonzero((body == 10) | (body == ord(head.delimiter)))
    width = head.table.blocks[0].width
    if len(at) % width:
        return None
    row = body[at].reshape(-1, width) == 10
    if not row[:, -1].all() or row[:, :-1].any():
        return None
    ends = at[width - 1 :: width]
    starts = np.empty_like(ends)
    starts[0], starts[1:] = 0, ends[:-1] + 1
    return starts + head.start


def _duplicates(
    data: bytes, columns: dict[str, Array], starts: NDArray[np.int64], first: int
) -> dict[int, int]:
    """Rows whose bytes repeat an earlier row -> the line of the first one."""
    mixed = np.zeros(len(starts), dtype=np.uint64)
    for values in columns.values():  # the sum with zero makes one number of both zeros
        mixed = mixed * np.uint64(0x9E3779B97F4A7C15) + (values + 0.0).view(np.uint64)
    ordered = np.sort(mixed)
    repeated = ordered[1:][ordered[1:] == ordered[:-1]]
    if not len(repeated):
        return {}
    seen: dict[bytes, int] = {}
    out: dict[int, int] = {}
    near = np.minimum(np.searchsorted(repeated, mixed), len(repeated) - 1)
    for i in np.flatnonzero(repeated[near] == mixed).tolist():
        stop = starts[i + 1] if i + 1 < len(starts) else len(data)
        line = seen.setdefault(data[starts[i] : stop].rstrip(b"\r\n"), first + i)
        if line != first + i:
            out[i] = line
    return out


@dataclass(frozen=True)
class _Builder:
    """Makes the batch of a whole file from the one of its first rows."""

    case: Case
    spec: TableSpec
    head: Table
    columns: dict[str, Array]
    line: NDArray[np.int64]
    stated: str | None

    def batch(self, small: Batch, column: ColumnSpec) -> Batch:
        """The whole column."""
        si = self.case.member.kind.sensor(column.kind).unit
        scale, offset = self._unit(Ask(small.name, si, column.key, column.unit))
        number = self.columns[title(small.name)]
        value = scale * number + offset
        reason: dict[int, str] = {}
        saturated(column, si, False, value, reason)
        nothing = np.full(len(number), np.nan)
        sd = np.full(len(number), np.nan if column.sd is None else column.sd)
        if column.sd_column is not None:
            sd = self.columns[title(column.sd_column)] * scale
            for k in np.flatnonzero(~(sd > 0)):
                reason.setdefault(int(k), "its sd is not positive")
        return replace(
            small, line=self.line, x=self._places(), value=value, raw=value, number=number,
            sd=sd, time=nothing, reason=reason,
        )  # fmt: skip

    def _places(self) -> Array:
        place = self.spec.position
        scale, offset = self._unit(Ask(place.column, "m", self.spec.key, place.unit))
        return turned(scale * self.columns[title(place.column)] + offset, place)

    def _unit(self, ask: Ask) -> tuple[float, float]:
        units: Sequence[Any] = row_units(self.head, ask, [0])[0]
        return units[0].scale, units[0].offset
