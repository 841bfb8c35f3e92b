"""The `[readings]` table to table and column specifications; the files are read elsewhere."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path as File
from typing import Any, Literal

from srcfit import units
from srcfit.case.lines import Path
from srcfit.case.model import (
    Baseline,
    ColumnSpec,
    Correction,
    PhaseSpec,
    PositionSpec,
    Step,
    TableSpec,
    TimeSpec,
)
from srcfit.case.reader import Reader, show
from srcfit.case.schema import (
    BaselineTable,
    ColumnTable,
    CorrectionTable,
    PhaseTable,
    PositionTable,
    ReadingsTable,
    StepTable,
    TimeTable,
    check,
)
from srcfit.errors import UnitError
from srcfit.member import MemberKind, SensorSpec, Unknown

ROOT: Path = ("readings",)


def read_tables(
    reader: Reader, data: Mapping[str, Any], kind: MemberKind, driven: bool
) -> tuple[TableSpec, ...]:
    """All tables of readings; what is wrong with them is noted."""
    top = check(reader, ReadingsTable, data, ROOT)
    if top.table is None:
        found = [_table(reader, ROOT, top, kind, driven)]
    else:
        for key in ("file", "position", "column", "where", "time"):
            if getattr(top, key) is not None:
                reader.wrong((*ROOT, key), f"every [[readings.table]] has its own `{key}`",
                             "move it into the tables")  # fmt: skip
        found = []
        for i, item in enumerate(top.table):
            path = (*ROOT, "table", i)
            table = check(reader, ReadingsTable, item, path)
            if table.table is not None:
                reader.wrong((*path, "table"), "a table holds no tables", "leave it out")
            found.append(_table(reader, path, table, kind, driven))
        if not found:
            reader.wrong((*ROOT, "table"), "there is no table", "add [[readings.table]]")
    return _grouped(reader, [t for t in found if t is not None])


def _table(
    reader: Reader, path: Path, table: ReadingsTable, kind: MemberKind, driven: bool
) -> TableSpec | None:
    file = _file(reader, (*path, "file"), table.file)
    if table.file is None:
        reader.missing(path, "file")
    position = _position(reader, path, table.position, kind)
    time = _time(reader, path, table.time)
    columns = []
    if not table.column:
        listing = show((*(p for p in path if isinstance(p, str)), "column"))
        reader.wrong(path, f"{show(path)} has no column", f"add [[{listing}]]")
    for i, item in enumerate(table.column or []):
        here = (*path, "column", i)
        column = _Column(reader, here, kind, driven).read(item, time is not None)
        if column is not None:
            columns.append(column)
    if file is None or position is None:
        return None
    where = _where(reader, (*path, "where"), table.where)
    return TableSpec(file, position, tuple(columns), where, time, show(path), reader.line(path))


def _file(reader: Reader, path: Path, value: object) -> File | None:
    if isinstance(value, (str, File)) and str(value):
        return reader.folder / value
    if value is not None:
        reader.wrong(path, f"{value!r} is no file name", "write it in quotes")
    return None


def _position(reader: Reader, path: Path, data: object, kind: MemberKind) -> PositionSpec | None:
    if data is None:
        reader.missing(path, "position", 'write position = { column = "…", unit = "m" }')
        return None
    here = (*path, "position")
    table = check(reader, PositionTable, data, here)
    unit = table.unit or ("m" if kind.name == "general" and table.unit_column is None else None)
    _one_of(reader, here, "unit", table.unit, "unit_column", table.unit_column)
    _unit(reader, (*here, "unit"), unit, "m")
    if (table.file is None) != (table.gauge is None):
        lacking = "gauge" if table.gauge is None else "file"
        reader.missing(here, lacking, "places in another file need `file` and `gauge`")
    if table.column is None:
        return None
    return PositionSpec(
        table.column,
        unit,
        table.unit_column,
        0.0 if table.origin is None else reader.quantity((*here, "origin"), table.origin, "m"),
        bool(table.reversed),
        _file(reader, (*here, "file"), table.file),
        table.gauge,
    )


def _time(reader: Reader, path: Path, data: object) -> TimeSpec | None:
    if data is None:
        return None
    table = check(reader, TimeTable, data, (*path, "time"))
    return TimeSpec(table.column or "", table.format)


def _where(reader: Reader, path: Path, data: object) -> dict[str, str]:
    """Column -> text."""
    found: dict[str, str] = {}
    for key, value in data.items() if isinstance(data, Mapping) else ():
        if isinstance(value, str):
            found[key] = value
        else:
            reader.wrong(
                (*path, key), f"{value!r} is no text", "write it in quotes, as in the file"
            )
    return found


def _one_of(reader: Reader, path: Path, a: str, first: object, b: str, second: object) -> None:
    if first is not None and second is not None:
        reader.wrong((*path, b), f"`{a}` and `{b}` exclude each other", "leave one of them out")


def _unit(
    reader: Reader, path: Path, unit: str | None, si_unit: str, difference: bool = False
) -> None:
    """Note a unit that is not known or of the wrong dimension."""
    if unit is None:
        return
    try:
        units.factor(unit, si_unit, reader.place(path), difference=difference)
    except UnitError as error:
        reader.problems.append(error)


class _Column:
    """One `[[readings.column]]` while it is read: the reader, its place, its member kind."""

    def __init__(self, reader: Reader, path: Path, kind: MemberKind, driven: bool) -> None:
        self.reader, self.path, self.kind, self.driven = reader, path, kind, driven

    def at(self, *keys: str | int) -> Path:
        return (*self.path, *keys)

    def read(self, data: object, timed: bool) -> ColumnSpec | None:
        reader = self.reader
        table = check(reader, ColumnTable, data, self.path)
        names = self.names(table)
        sensor = self.sensor(table)
        if sensor is None or not names:
            return None
        unit = self.unit(table, sensor)
        sd, estimate = self.spread(table, sensor)
        positive, sign = self.direction(table, sensor)
        return ColumnSpec(
            columns=names,
            kind=sensor.name,
            group=table.group or "",
            unit=unit,
            unit_column=table.unit_column,
            sd=sd,
            sd_column=table.sd_column,
            estimate_sd=estimate,
            correlation=self.correlation(table),
            positive=positive,
            sign=sign,
            offset=reader.amount(self.at("offset"), table.offset, sensor.unit, difference=True),
            scale=self.scale(table),
            drift=self.drift(table, sensor, timed),
            step=self.step(table, sensor),
            distance=self.distance(table, sensor),
            gauge_length=self.gauge(table),
            phase=self.phase(table),
            component=self.component(table),
            range=self.range(table, sensor),
            exclude=self.exclude(table),
            exclude_lines=self.exclude_lines(table),
            where=_where(reader, self.at("where"), table.where),
            baseline=self.baseline(table),
            correction=self.correction(table, sensor),
            key=show(self.path),
            line=reader.line(self.path),
        )

    def names(self, table: ColumnTable) -> tuple[str, ...]:
        names = (table.column,) if isinstance(table.column, str) else tuple(table.column or ())
        if table.column is not None and (not names or not all(n.strip() for n in names)):
            self.reader.wrong(self.at("column"), "it names no column", "write its header text")
            return ()
        for i, name in enumerate(names):
            if name in names[:i]:
                self.reader.wrong(self.at("column", i), f"{name!r} is listed twice")
        return names

    def sensor(self, table: ColumnTable) -> SensorSpec | None:
        known = [s.name for s in self.kind.sensors]
        if table.kind is None:
            return None
        if not self.reader.choose(
            self.at("kind"), table.kind, known, f"sensor kind of a {self.kind.name}"
        ):
            return None
        return self.kind.sensor(table.kind)

    def unit(self, table: ColumnTable, sensor: SensorSpec) -> str | None:
        _one_of(self.reader, self.path, "unit", table.unit, "unit_column", table.unit_column)
        _unit(self.reader, self.at("unit"), table.unit, sensor.unit, self.driven)
        if table.unit is None and table.unit_column is None and self.kind.name == "general":
            return sensor.unit
        return table.unit

    def spread(self, table: ColumnTable, sensor: SensorSpec) -> tuple[float | None, bool]:
        """The stated sd, and whether it is to be estimated."""
        _one_of(self.reader, self.path, "sd", table.sd, "sd_column", table.sd_column)
        if table.sd is None and table.sd_column is None:
            self.reader.missing(
                self.path, "sd", 'write sd = "0.1 mm" or the like, `sd_column`, or sd = "estimate"'
            )
        if table.sd is None:
            return None, False
        if table.sd == "estimate":
            return None, True
        if isinstance(table.sd, str) and "%" in table.sd and table.unit != "%":
            self.reader.wrong(self.at("sd"), f"{table.sd!r} does not say what it is a part of",
                              "give it in the readings' unit, or by `sd_column`")  # fmt: skip
            return None, False
        path = self.at("sd")
        return self.reader.quantity(path, table.sd, sensor.unit, difference=True, above=0), False

    def direction(self, table: ColumnTable, sensor: SensorSpec) -> tuple[str, int]:
        """The word of `positive` and its sign."""
        if table.positive is None:
            return "", 1
        words = (*sensor.directions, "reversed")
        what = f"direction of {'an' if sensor.name[0] in 'aeiou' else 'a'} {sensor.name}"
        if not self.reader.choose(self.at("positive"), table.positive, words, what):
            return "", 1
        return table.positive, 1 if table.positive == words[0] and len(words) > 1 else -1

    def correlation(self, table: ColumnTable) -> float | Literal["estimate"]:
        if table.correlation is None:
            return 0.0
        if table.correlation == "estimate":
            return "estimate"
        value = self.reader.quantity(self.at("correlation"), table.correlation, "1")
        if abs(value) >= 1:
            self.reader.wrong(self.at("correlation"), f"{value:g} is not between -1 and 1")
        return value

    def scale(self, table: ColumnTable) -> float | Unknown:
        path = self.at("scale")
        found = self.reader.amount(path, table.scale, "1", default=1.0, guess=1.0)
        if found == 0 or (isinstance(found, Unknown) and found.guess == 0):
            self.reader.wrong(path, "a scale of 0 leaves nothing", "1 means true readings")
        return found

    def drift(self, table: ColumnTable, sensor: SensorSpec, timed: bool) -> float | Unknown:
        if table.drift is not None and not timed:
            self.reader.wrong(self.at("drift"), "a drift needs the time of each reading",
                              "add `time` to the table of readings")  # fmt: skip
        unit = f"({_per(sensor.unit)})/s"
        return self.reader.amount(self.at("drift"), table.drift, unit, difference=True)

    def step(self, table: ColumnTable, sensor: SensorSpec) -> Step | None:
        if table.step is None:
            return None
        path = self.at("step")
        step = check(self.reader, StepTable, table.step, path)
        at = self.reader.quantity((*path, "at"), step.at, "m")
        beside = {"guess": step.guess, "sd": step.sd}
        value = "unknown" if step.value is None else step.value
        here = (*path, "value")
        return Step(
            at, self.reader.amount(here, value, sensor.unit, beside=beside, difference=True)
        )

    def distance(self, table: ColumnTable, sensor: SensorSpec) -> float | None:
        path = self.at("distance")
        if not sensor.needs_distance:
            if table.distance is not None:
                self.reader.wrong(path, f"a {sensor.name} here has no distance", "leave it out")
            return None
        if table.distance is None:
            self.reader.missing(self.path, "distance", "give the gauge's depth below the axis")
            return None
        found = self.reader.quantity(path, table.distance, "m")
        if found == 0:
            self.reader.wrong(path, "a gauge on the axis reads no bending")
        return found

    def gauge(self, table: ColumnTable) -> float:
        if table.gauge_length is None:
            return 0.0
        return self.reader.quantity(self.at("gauge_length"), table.gauge_length, "m", least=0)

    def phase(self, table: ColumnTable) -> PhaseSpec | None:
        if table.phase is None:
            return None
        path = self.at("phase")
        self.needs_drive(path)
        phase = check(self.reader, PhaseTable, table.phase, path)
        _unit(self.reader, (*path, "unit"), phase.unit, "rad")
        _one_of(self.reader, self.path, "phase", phase, "component", table.component)
        return PhaseSpec(phase.column or "", phase.unit or "rad")

    def component(self, table: ColumnTable) -> Literal["real", "imaginary"] | None:
        path = self.at("component")
        if table.component is None:
            return None
        self.needs_drive(path)
        self.reader.choose(path, table.component, ("real", "imaginary"), "component")
        return "imaginary" if table.component == "imaginary" else "real"

    def needs_drive(self, path: Path) -> None:
        if not self.driven:
            self.reader.wrong(
                path, "it goes only with a driven member", "add `frequency` to [member]"
            )

    def range(self, table: ColumnTable, sensor: SensorSpec) -> tuple[float, float] | None:
        if table.range is None:
            return None
        path = self.at("range")
        pair = _pair(self.reader, path, table.range, sensor.unit, self.driven)
        return pair

    def exclude(self, table: ColumnTable) -> tuple[tuple[float, float], ...]:
        found = (
            _pair(self.reader, self.at("exclude", i), item, "m")
            for i, item in enumerate(table.exclude or [])
        )
        return tuple(pair for pair in found if pair is not None)

    def exclude_lines(self, table: ColumnTable) -> frozenset[int]:
        for i, line in enumerate(table.exclude_lines or []):
            if line < 1:
                self.reader.wrong(self.at("exclude_lines", i), f"there is no line {line}",
                                  "lines are counted from 1")  # fmt: skip
        return frozenset(table.exclude_lines or ())

    def baseline(self, table: ColumnTable) -> Baseline | None:
        if table.baseline is None:
            return None
        path = self.at("baseline")
        found = check(self.reader, BaselineTable, table.baseline, path)
        return Baseline(_where(self.reader, (*path, "where"), found.where), found.match or "")

    def correction(self, table: ColumnTable, sensor: SensorSpec) -> Correction | None:
        if table.correction is None:
            return None
        path = self.at("correction")
        found = check(self.reader, CorrectionTable, table.correction, path)
        if table.baseline is None:
            self.reader.wrong(path, "a correction needs a baseline", "add `baseline`")
        if found.unit is None or found.column is None:
            return None
        try:
            base = units.coherent(found.unit, self.reader.place((*path, "unit")))
        except UnitError as error:
            self.reader.problems.append(error)
            return None
        unit = f"({_per(sensor.unit)})/({base})"
        per = self.reader.quantity((*path, "per"), found.per, unit)
        return Correction(found.column, found.unit, per)


def _per(unit: str) -> str:
    """A unit text that may stand in brackets; "1" may not."""
    return "m/m" if unit == "1" else unit


def _pair(
    reader: Reader, path: Path, value: Any, unit: str, difference: bool = False
) -> tuple[float, float] | None:
    """Two quantities, the first less than the second."""
    if not isinstance(value, (list, tuple)) or len(value) != 2:
        reader.wrong(path, f"{value!r} is no pair", "write it as [from, to]")
        return None
    a = reader.quantity((*path, 0), value[0], unit, difference=difference)
    b = reader.quantity((*path, 1), value[1], unit, difference=difference)
    if b <= a:
        reader.wrong(path, f"{value[1]!r} is not more than {value[0]!r}")
    return a, b


def _grouped(reader: Reader, tables: list[TableSpec]) -> tuple[TableSpec, ...]:
    """Give every column its group, and a group's columns the same nuisances."""
    named = [_named(t, tables) for t in tables]
    groups: dict[str, list[ColumnSpec]] = {}
    for column in (c for t in named for c in t.columns):
        groups.setdefault(column.group, []).append(column)
    for name, columns in groups.items():
        _agree(reader, name, columns)
    return tuple(
        replace(t, columns=tuple(_shared(c, groups[c.group]) for c in t.columns)) for t in named
    )


def _named(table: TableSpec, tables: list[TableSpec]) -> TableSpec:
    """Default groups: the column, "first..last" for a list, made distinct by kind and file."""
    columns = []
    for column in table.columns:
        if not column.group:
            name = _default(column)
            rest = [(t, c) for t in tables for c in t.columns if (c.group or _default(c)) == name]
            if any(c.kind != column.kind for _, c in rest):
                name += f" ({column.kind})"
            if any(t is not table and t.file != table.file for t, _ in rest):
                name += f" ({table.file.name})"
            column = replace(column, group=name)
        columns.append(column)
    return replace(table, columns=tuple(columns))


def _default(column: ColumnSpec) -> str:
    first, last = column.columns[0], column.columns[-1]
    return first if len(column.columns) == 1 else f"{first}..{last}"


SHARED = {"offset": 0.0, "scale": 1.0, "drift": 0.0, "step": None, "correlation": 0.0}


def _agree(reader: Reader, name: str, columns: list[ColumnSpec]) -> None:
    """Note where columns of one group contradict each other."""
    first = columns[0]
    for column in columns[1:]:
        path = _path_of(column)
        if column.kind != first.kind:
            reader.wrong((*path, "group"), f"the group {name!r} holds {first.kind} already",
                         f"give the {column.kind} readings a group of their own")  # fmt: skip
            return
        if column.estimate_sd != first.estimate_sd:
            reader.wrong((*path, "sd"), f"the group {name!r} has both stated and estimated sd",
                         "a group's sd is either stated or estimated")  # fmt: skip
    for key, default in SHARED.items():
        stated = [c for c in columns if getattr(c, key) != default]
        for column in stated[1:]:
            if getattr(column, key) != getattr(stated[0], key):
                reader.wrong((*_path_of(column), key),
                             f"the group {name!r} has another {key} already",
                             "a group has one; give this column a group of its own")  # fmt: skip


def _path_of(column: ColumnSpec) -> Path:
    """The path that `show` made the column's key from."""
    found: list[str | int] = []
    for part in column.key.replace("]", "").split("."):
        word, _, number = part.partition("[")
        found += [word, int(number) - 1] if number else [word]
    return tuple(found)


def _shared(column: ColumnSpec, columns: list[ColumnSpec]) -> ColumnSpec:
    """The column with what any other column of its group states of their common nuisances."""
    changes: dict[str, Any] = {}
    for key, default in SHARED.items():
        stated = [getattr(c, key) for c in columns if getattr(c, key) != default]
        if stated:
            changes[key] = stated[0]
    return replace(column, **changes) if changes else column
