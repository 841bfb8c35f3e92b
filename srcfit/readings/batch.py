"""One column specification and its table -> readings, each kept or with its reason."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import Case, ColumnSpec, TableSpec
from srcfit.errors import ReadingsError
from srcfit.readings import times
from srcfit.readings.blanks import Places, Shown
from srcfit.readings.columns import Ask, Column, block_units, read_column, selected
from srcfit.readings.table import Table, title
from srcfit.readings.text import Cell, clean, is_blank
from srcfit.units import coherent

Array = NDArray[np.float64]
UNFINISHED = "unfinished last line"
_UNDRIVEN = "a complex number, but the member is not driven"


@dataclass(frozen=True)
class Batch:
    """Readings of one column of one specification, n rows, in file order.

    Attributes
    ----------
    spec : index into `Case.columns`
    name : header text of the column
    line, x, value, raw, sd, time : (n,) arrays; `value` in SI before `sign`, after baseline and
        correction; `raw` in SI as read; `number` as it stands, in its own unit
    unit : unit text of each row, or one for all
    reason : mapping row -> why it is excluded
    rough : rows read from ``~`` numbers
    """

    spec: int
    name: str
    line: NDArray[np.int64]
    x: Array
    value: NDArray[Any]
    raw: NDArray[Any]
    number: Array
    sd: Array
    time: Array
    unit: list[str] | str
    reason: dict[int, str]
    rough: list[int] = field(default_factory=list)
    changes: list[tuple[int, str, str]] = field(default_factory=list)
    decimal: str = ""


def table_batches(
    case: Case, spec: TableSpec, table: Table, places: Places, first: int, stated: str | None
) -> list[Batch]:
    """Readings of every column specification of a table.

    Parameters
    ----------
    case, spec, table, places
    first : index of the table's first specification in `Case.columns`
    stated : decimal mark that the case states, or None
    """
    time = _times(spec, table)
    rows = [selected(table, {**spec.where, **c.where}) for c in spec.columns]
    for column, found in zip(spec.columns, rows, strict=True):
        if not found and table.rows:
            raise _nothing_selected(table, {**spec.where, **column.where}, column.key)
    shown = Shown.of(table, spec, rows, places)
    twice = _duplicates(table)
    out: list[Batch] = []
    for n, column in enumerate(spec.columns):
        si = case.member.kind.sensor(column.kind).unit
        reader = _Reader(case.member.driven, si, spec, column, table, stated)
        for name in column.columns:
            kept = shown.rows(n, name, rows[n])
            batch = reader.batch(first + n, name, rows[n], kept, places, time)
            lines = shown.empty_lines(table, n, name)
            empty = {k: lines[i] for k, i in enumerate(kept) if i in lines}
            batch.reason.update(empty)
            batch.x[list(empty)] = math.nan
            _exclude(batch, spec, table, kept, column, twice)
            out.append(batch)
    return out


def _times(spec: TableSpec, table: Table) -> Array:
    if spec.time is None:
        return np.full(len(table.rows), math.nan)
    header = spec.time.column
    where = f"{table.name}, column {header!r} ({spec.key}.time)"
    return times.seconds(table.cells(header), spec.time.format, header, where)


def _nothing_selected(table: Table, where: Mapping[str, str], key: str) -> ReadingsError:
    parts = ", ".join(f'{h} = "{t}"' for h, t in where.items())
    there = [
        f"{h!r} holds {', '.join(map(repr, list(dict.fromkeys(table.texts(h)))[:6]))}"
        for h in where
    ]
    return ReadingsError(
        f"no row has {parts} ({'; '.join(there)})", table.name, f"correct `where` ({key})"
    )


def _duplicates(table: Table) -> dict[int, int]:
    """Rows that repeat an earlier row cell by cell -> the line of the first one."""
    if len(set(map(tuple, table.rows))) == len(table.rows):
        return {}
    seen: dict[tuple[str | float, ...], int] = {}
    out: dict[int, int] = {}
    for i, row in enumerate(table.rows):
        line = seen.setdefault(tuple(row), table.line[i])
        if line != table.line[i]:
            out[i] = line
    return out


@dataclass(frozen=True)
class _Reader:
    """Reads the columns of one specification."""

    driven: bool
    si: str
    spec: TableSpec
    column: ColumnSpec
    table: Table
    stated: str | None

    def read(
        self, header: str, rows: list[int], *, si: str = "", unit: str | None = None
    ) -> Column:
        """One of the further columns: a correction, a phase."""
        ask = Ask(header, si, self.column.key, unit)
        return read_column(self.table, ask, rows, self.stated)

    def batch(
        self, number: int, name: str, rows: list[int], kept: list[int], places: Places, time: Array
    ) -> Batch:
        """Readings of one column."""
        base = self._baseline_rows()
        every = sorted({*rows, *base})
        ask = Ask(
            name, self.si, self.column.key, self.column.unit, self.column.unit_column, self.driven
        )
        main = read_column(self.table, ask, every, self.stated)
        reason = dict(main.reason)
        value = self._complex(main.value.copy(), reason, every)
        raw = value.copy()
        saturated(self.column, self.si, self.driven, raw, reason)
        if self.column.baseline:
            value = self._relative(value, reason, rows, base)
        sd = self._sd(main, reason, rows)
        x, lacking = places.of(name, kept)
        index = {i: k for k, i in enumerate(kept)}
        why = {index[i]: text for i, text in reason.items() if i in index}
        for k, text in lacking.items():
            why.setdefault(k, text)
        unit = main.unit if isinstance(main.unit, str) else [main.unit[i] for i in kept]
        rough = [index[i] for i in [*main.rough, *places.rough] if i in index]
        when = time[kept]
        if self.spec.time is None and len(self.column.columns) > 1:
            when = np.full(len(kept), times.stamp(name))
        if self.spec.time is not None and self.column.drift != 0.0:
            for row in np.flatnonzero(np.isnan(when)):
                why.setdefault(int(row), "its time cannot be read")
        line = np.asarray(self.table.line, dtype=np.int64)[kept]
        shown = np.asarray(main.raw.real[kept], dtype=float)
        return Batch(number, name, line, x, value[kept], raw[kept], shown, sd[kept], when, unit,
                     why, sorted(set(rough)), main.changes, main.decimal)  # fmt: skip

    def _baseline_rows(self) -> list[int]:
        baseline = self.column.baseline
        if baseline is None:
            return []
        rows = selected(self.table, {**self.spec.where, **baseline.where})
        if not rows:
            raise _nothing_selected(self.table, baseline.where, f"{self.column.key}.baseline")
        return rows

    def _complex(
        self, value: NDArray[Any], reason: dict[int, str], rows: list[int]
    ) -> NDArray[Any]:
        """Complex amplitudes of a driven member; elsewhere a complex number is no reading."""
        spec = self.column
        if not self.driven:
            if np.iscomplexobj(value):
                odd = np.nan_to_num(value.imag) != 0
                reason |= dict.fromkeys(np.flatnonzero(odd).tolist(), _UNDRIVEN)
                value[odd] = np.nan
                value = value.real.copy()
            return value
        if spec.phase is not None:
            phase = self.read(spec.phase.column, rows, si="rad", unit=spec.phase.unit)
            for i, text in phase.reason.items():
                reason.setdefault(i, f"its phase: {text}")
            return np.asarray(value * np.exp(1j * phase.value))
        if spec.component is not None and np.iscomplexobj(value):
            for at in np.flatnonzero(np.nan_to_num(value.imag) != 0):
                reason[int(at)] = f"a complex number in a column of {spec.component} parts"
        turn = 1j if spec.component == "imaginary" else 1.0
        return np.asarray(value * turn, dtype=complex)

    def _relative(
        self, value: NDArray[Any], reason: dict[int, str], rows: list[int], base: list[int]
    ) -> NDArray[Any]:
        """Less the same gauge's baseline, and less the correction."""
        spec = self.column
        assert spec.baseline is not None
        match = self.table.texts(spec.baseline.match)
        zero = _by_match(value, reason, match, base)
        other: Column | None = None
        if spec.correction is not None:
            unit = spec.correction.unit
            other = self.read(
                spec.correction.column, sorted({*rows, *base}), si=coherent(unit), unit=unit
            )
            other_zero = _by_match(other.value, other.reason, match, base)
        out = value.copy()
        for i in rows:
            if match[i] not in zero:
                reason.setdefault(i, f"no usable baseline of {spec.baseline.match} {match[i]!r}")
                continue
            out[i] = value[i] - zero[match[i]]
            if other is None or spec.correction is None:
                continue
            if i in other.reason or match[i] not in other_zero:
                text = other.reason.get(i, "no usable baseline")
                reason.setdefault(i, f"its correction {spec.correction.column!r}: {text}")
                continue
            out[i] -= spec.correction.per * (other.value[i] - other_zero[match[i]])
        return out

    def _sd(self, main: Column, reason: dict[int, str], rows: list[int]) -> Array:
        spec = self.column
        size = len(self.table.rows)
        if spec.sd_column is None:
            return np.full(size, math.nan if spec.sd is None else spec.sd)
        ask = Ask(spec.sd_column, self.si, f"{spec.key}.sd_column", difference=True)
        found = read_column(self.table, replace(ask, plain=True), rows, self.stated)
        sd = np.asarray(found.raw.real * main.scale, dtype=float)
        self._check_sd_unit(ask, main, rows)
        for i in rows:
            if i in found.reason:
                reason.setdefault(i, f"its sd: {found.reason[i]}")
            elif not sd[i] > 0 and i not in reason:
                reason[i] = "its sd is not positive"
        return sd

    def _check_sd_unit(self, ask: Ask, main: Column, rows: list[int]) -> None:
        """A unit stated for the sd must be the one of its column."""
        stops = [b.first for b in self.table.blocks[1:]] + [len(self.table.rows)]
        for block, unit, stop in zip(
            self.table.blocks, block_units(self.table, ask), stops, strict=True
        ):
            if unit is None:
                continue
            scale = main.scale[[i for i in rows if block.first <= i < stop]]
            if np.any(np.abs(scale - unit.scale) > 1e-9 * unit.scale):
                raise ReadingsError(
                    f"{ask.header!r} is in {unit.text!r}, which is not the unit of its column",
                    f"{self.table.name}, line {block.line}",
                    f"give the sd in the column's unit ({ask.key})",
                )


def saturated(
    column: ColumnSpec, si: str, driven: bool, raw: NDArray[Any], reason: dict[int, str]
) -> None:
    """Values at or beyond an end of `range`, and temperatures at absolute zero."""
    shown = np.abs(raw) if driven and column.component is None else raw.real
    shown = raw.imag if column.component == "imaginary" else shown
    if column.range is not None:
        low, high = column.range
        near = 1e-9 * (high - low) if np.isfinite(high - low) else 0.0
        for i in np.flatnonzero((shown <= low + near) | (shown >= high - near)):
            end = "lower" if shown[i] <= low + near else "upper"
            reason.setdefault(int(i), f"at or beyond the {end} end of `range`")
    if si == "K" and not driven:
        for i in np.flatnonzero(shown <= 1e-6):
            reason.setdefault(int(i), "at or below absolute zero")


def _by_match(
    value: NDArray[Any], reason: Mapping[int, str], match: list[str], rows: list[int]
) -> dict[str, complex]:
    """Mean usable value per gauge among the baseline rows."""
    pool: dict[str, list[complex]] = {}
    for i in rows:
        if i not in reason and value[i] == value[i]:
            pool.setdefault(match[i], []).append(value[i].item())
    return {name: sum(found) / len(found) for name, found in pool.items()}


def _exclude(
    batch: Batch, spec: TableSpec, table: Table, kept: list[int], column: ColumnSpec,
    twice: Mapping[int, int],
) -> None:  # fmt: skip
    """Reasons that belong to whole rows, in order of weight."""
    why = batch.reason
    place = {i: k for k, i in enumerate(kept)} if table.broken or twice else {}
    for i, text in table.broken.items():
        if i in place:
            k = place[i]
            why[k], batch.x[k], batch.value[k] = text, math.nan, math.nan
    leave_out(batch, column.exclude_lines, {place[i]: n for i, n in twice.items() if i in place})
    if kept and kept[-1] == table.unfinished:
        _unfinished(batch, spec, table)
    if kept and table.cut is not None and kept[-1] == table.cut[0]:
        measured = [batch.name, column.sd_column, column.phase and column.phase.column]
        if spec.position.file is None:
            measured.append(spec.position.column)
        if any(_shortened(table, name) for name in measured if name):
            why[len(kept) - 1] = UNFINISHED


def leave_out(batch: Batch, lines: Iterable[int], twice: Mapping[int, int]) -> None:
    """Readings on lines that the case excludes, and those of exact duplicates of earlier rows."""
    for k, line in twice.items():
        batch.reason.setdefault(k, f"an exact duplicate of line {line}")
    wanted = list(lines)
    for at in np.flatnonzero(np.isin(batch.line, wanted)) if wanted else ():
        batch.reason[int(at)] = "its line is in `exclude_lines`"


def _unfinished(batch: Batch, spec: TableSpec, table: Table) -> None:
    """The last row ends without a line end before its last cell: what is whole stays shown."""
    last = len(table.rows[-1]) - 1
    index = table.blocks[-1].index
    batch.reason[len(batch.line) - 1] = UNFINISHED
    if index[title(batch.name)] >= last:
        batch.value[-1] = math.nan
    if index.get(title(spec.position.column), -1) >= last:
        batch.x[-1] = math.nan


def _shortened(table: Table, name: str) -> bool:
    """Whether the last number, without a line end, lacks decimals that all others have."""
    if table.cut is None or table.blocks[-1].index[title(name)] != table.cut[1]:
        return False
    return shortened(table.cells(name))


def shortened(cells: Sequence[Cell]) -> bool:
    """Whether the last cell is empty, or lacks decimals that all others have."""
    parts = [decimals(str(c)) for c in cells if clean(c)]
    if is_blank(cells[-1]):
        return True
    return len(parts) > 3 and len(set(parts[:-1])) == 1 and parts[-1] < parts[0]


def decimals(text: str) -> int:
    """Digits after the last point or comma."""
    text = text.strip()
    at = max(text.rfind("."), text.rfind(","))
    return len(text) - at - 1 if at >= 0 else 0
