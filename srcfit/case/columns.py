"""One `[[readings.column]]` to its specification."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

from srcfit import units
from srcfit.case.lines import Path
from srcfit.case.model import Baseline, ColumnSpec, Correction, PhaseSpec, Step
from srcfit.case.reader import Reader, show
from srcfit.case.schema import (
    BaselineTable,
    ColumnTable,
    CorrectionTable,
    PhaseTable,
    StepTable,
    check,
)
from srcfit.errors import UnitError
from srcfit.member import MemberKind, SensorSpec, Unknown


def read_where(reader: Reader, path: Path, data: object) -> dict[str, str]:
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


def one_of(reader: Reader, path: Path, a: str, first: object, b: str, second: object) -> None:
    """Note two keys that exclude each other."""
    if first is not None and second is not None:
        reader.wrong((*path, b), f"`{a}` and `{b}` exclude each other", "leave one of them out")


def check_unit(
    reader: Reader, path: Path, unit: str | None, si_unit: str, difference: bool = False
) -> None:
    """Note a unit that is not known or of the wrong dimension."""
    if unit is None:
        return
    try:
        units.factor(unit, si_unit, reader.place(path), difference=difference)
    except UnitError as error:
        reader.problems.append(error)


@dataclass(frozen=True)
class ColumnReader:
    """Where a column stands and whose member it belongs to, while it is read."""

    reader: Reader
    path: Path
    kind: MemberKind
    driven: bool

    def at(self, *keys: str | int) -> Path:
        """A path below the column's."""
        return (*self.path, *keys)

    def read(self, data: object, timed: bool) -> ColumnSpec | None:
        """The column, or None after noting what is wrong with it."""
        reader = self.reader
        table = check(reader, ColumnTable, data, self.path)
        names = self._names(table)
        sensor = self._sensor(table)
        if sensor is None or not names:
            return None
        unit = self._unit(table, sensor)
        sd, estimate = self._spread(table, sensor)
        positive, sign = self._direction(table, sensor)
        return ColumnSpec(
            columns=names,
            kind=sensor.name,
            group=table.group or "",
            unit=unit,
            unit_column=table.unit_column,
            sd=sd,
            sd_column=table.sd_column,
            estimate_sd=estimate,
            correlation=self._correlation(table),
            positive=positive,
            sign=sign,
            offset=reader.amount(self.at("offset"), table.offset, sensor.unit, difference=True),
            scale=self._scale(table),
            drift=self._drift(table, sensor, timed),
            step=self._step(table, sensor),
            distance=self._distance(table, sensor),
            gauge_length=self._gauge(table),
            phase=self._phase(table),
            component=self._component(table),
            range=self._range(table, sensor),
            exclude=self._exclude(table),
            exclude_lines=self._exclude_lines(table),
            where=read_where(reader, self.at("where"), table.where),
            baseline=self._baseline(table),
            correction=self._correction(table, sensor),
            key=show(self.path),
            line=reader.line(self.path),
        )

    def _names(self, table: ColumnTable) -> tuple[str, ...]:
        names = (table.column,) if isinstance(table.column, str) else tuple(table.column or ())
        if table.column is not None and (not names or not all(n.strip() for n in names)):
            self.reader.wrong(self.at("column"), "it names no column", "write its header text")
            return ()
        for i, name in enumerate(names):
            if name in names[:i]:
                self.reader.wrong(self.at("column", i), f"{name!r} is listed twice")
        return names

    def _sensor(self, table: ColumnTable) -> SensorSpec | None:
        known = [s.name for s in self.kind.sensors]
        if table.kind is None:
            return None
        if not self.reader.choose(
            self.at("kind"), table.kind, known, f"sensor kind of a {self.kind.name}"
        ):
            return None
        return self.kind.sensor(table.kind)

    def _unit(self, table: ColumnTable, sensor: SensorSpec) -> str | None:
        one_of(self.reader, self.path, "unit", table.unit, "unit_column", table.unit_column)
        check_unit(self.reader, self.at("unit"), table.unit, sensor.unit, self.driven)
        if table.unit is None and table.unit_column is None and self.kind.name == "general":
            return sensor.unit
        return table.unit

    def _spread(self, table: ColumnTable, sensor: SensorSpec) -> tuple[float | None, bool]:
        """The stated sd, and whether it is to be estimated."""
        one_of(self.reader, self.path, "sd", table.sd, "sd_column", table.sd_column)
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

    def _direction(self, table: ColumnTable, sensor: SensorSpec) -> tuple[str, int]:
        """The word of `positive` and its sign."""
        if table.positive is None:
            return "", 1
        words = (*sensor.directions, "reversed")
        what = f"direction of {'an' if sensor.name[0] in 'aeiou' else 'a'} {sensor.name}"
        if not self.reader.choose(self.at("positive"), table.positive, words, what):
            return "", 1
        return table.positive, 1 if table.positive == words[0] and len(words) > 1 else -1

    def _correlation(self, table: ColumnTable) -> float | Literal["estimate"]:
        if table.correlation is None:
            return 0.0
        if table.correlation == "estimate":
            return "estimate"
        value = self.reader.quantity(self.at("correlation"), table.correlation, "1")
        if abs(value) >= 1:
            self.reader.wrong(self.at("correlation"), f"{value:g} is not between -1 and 1")
        return value

    def _scale(self, table: ColumnTable) -> float | Unknown:
        path = self.at("scale")
        found = self.reader.amount(path, table.scale, "1", default=1.0, guess=1.0)
        if found == 0 or (isinstance(found, Unknown) and found.guess == 0):
            self.reader.wrong(path, "a scale of 0 leaves nothing", "1 means true readings")
        return found

    def _drift(self, table: ColumnTable, sensor: SensorSpec, timed: bool) -> float | Unknown:
        if table.drift is not None and not timed:
            self.reader.wrong(self.at("drift"), "a drift needs the time of each reading",
                              "add `time` to the table of readings")  # fmt: skip
        unit = units.divide_text(sensor.unit, "s")
        return self.reader.amount(self.at("drift"), table.drift, unit, difference=True)

    def _step(self, table: ColumnTable, sensor: SensorSpec) -> Step | None:
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

    def _distance(self, table: ColumnTable, sensor: SensorSpec) -> float | None:
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

    def _gauge(self, table: ColumnTable) -> float:
        if table.gauge_length is None:
            return 0.0
        return self.reader.quantity(self.at("gauge_length"), table.gauge_length, "m", least=0)

    def _phase(self, table: ColumnTable) -> PhaseSpec | None:
        if table.phase is None:
            return None
        path = self.at("phase")
        self._needs_drive(path)
        phase = check(self.reader, PhaseTable, table.phase, path)
        check_unit(self.reader, (*path, "unit"), phase.unit, "rad")
        one_of(self.reader, self.path, "phase", phase, "component", table.component)
        return PhaseSpec(phase.column or "", phase.unit or "rad")

    def _component(self, table: ColumnTable) -> Literal["real", "imaginary"] | None:
        path = self.at("component")
        if table.component is None:
            return None
        self._needs_drive(path)
        self.reader.choose(path, table.component, ("real", "imaginary"), "component")
        return "imaginary" if table.component == "imaginary" else "real"

    def _needs_drive(self, path: Path) -> None:
        if not self.driven:
            self.reader.wrong(
                path, "it goes only with a driven member", "add `frequency` to [member]"
            )

    def _range(self, table: ColumnTable, sensor: SensorSpec) -> tuple[float, float] | None:
        if table.range is None:
            return None
        path = self.at("range")
        return _pair(
            self.reader, path, table.range, sensor.unit, difference=self.driven, marks=True
        )

    def _exclude(self, table: ColumnTable) -> tuple[tuple[float, float], ...]:
        found = (
            _pair(self.reader, self.at("exclude", i), item, "m")
            for i, item in enumerate(table.exclude or [])
        )
        return tuple(pair for pair in found if pair is not None)

    def _exclude_lines(self, table: ColumnTable) -> frozenset[int]:
        for i, line in enumerate(table.exclude_lines or []):
            if line < 1:
                self.reader.wrong(self.at("exclude_lines", i), f"there is no line {line}",
                                  "lines are counted from 1")  # fmt: skip
        return frozenset(table.exclude_lines or ())

    def _baseline(self, table: ColumnTable) -> Baseline | None:
        if table.baseline is None:
            return None
        path = self.at("baseline")
        found = check(self.reader, BaselineTable, table.baseline, path)
        return Baseline(read_where(self.reader, (*path, "where"), found.where), found.match or "")

    def _correction(self, table: ColumnTable, sensor: SensorSpec) -> Correction | None:
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
        unit = units.divide_text(sensor.unit, base)
        per = self.reader.quantity((*path, "per"), found.per, unit)
        return Correction(found.column, found.unit, per)


def _pair(
    reader: Reader, path: Path, value: Any, unit: str, **how: bool
) -> tuple[float, float] | None:
    """Two quantities, the first less than the second."""
    if not isinstance(value, (list, tuple)) or len(value) != 2:
        reader.wrong(path, f"{value!r} is no pair", "write it as [from, to]")
        return None
    a = reader.quantity((*path, 0), value[0], unit, **how)
    b = reader.quantity((*path, 1), value[1], unit, **how)
    if b <= a:
        reader.wrong(path, f"{value[1]!r} is not more than {value[0]!r}")
    return a, b
