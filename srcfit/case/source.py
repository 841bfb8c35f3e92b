"""The `[source]` and `[strength]` tables."""

from __future__ import annotations

import os
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import dataclass
from itertools import combinations
from pathlib import Path as File
from typing import Any, get_args

from srcfit import units
from srcfit.case.lines import Path
from srcfit.case.model import (
    Choose,
    Knowledge,
    Known,
    Limit,
    Lumped,
    Monotone,
    Sign,
    SourceSpec,
    StrengthSpec,
    TableSpec,
    Zone,
)
from srcfit.case.reader import Reader, each
from srcfit.case.schema import (
    KnownTable,
    LimitTable,
    LumpedTable,
    MonotoneTable,
    SourceTable,
    StrengthTable,
    TotalTable,
    ZoneTable,
    check,
)
from srcfit.errors import UnitError
from srcfit.member import MemberKind
from srcfit.unit_texts import header_unit

ROOT: Path = ("source",)
FEWEST_CELLS = 3
DENSE_MATRICES = 6  # square matrices of cells by cells held at once
CONTRADICTION = 5.0  # standard deviations
AVERAGES = ("averaged", "adaptive")
INTERVALS = ("cautious", "calibrated", "plain")


def most_cells() -> int:
    """The largest number of cells whose dense matrices fit into half of the memory."""
    memory = 4 * 2**30
    with suppress(AttributeError, ValueError, OSError):
        memory = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    with suppress(ValueError, OSError):  # a container may be allowed less than there is
        memory = min(memory, int(File("/sys/fs/cgroup/memory.max").read_text()))
    return int((memory / 2 / (8 * DENSE_MATRICES)) ** 0.5)


def read_source(
    reader: Reader,
    data: Mapping[str, Any],
    kind: MemberKind,
    span: tuple[float, float],
    driven: bool,
    tables: tuple[TableSpec, ...],
) -> SourceSpec:
    """What is asked of the source; what is wrong with it is noted."""
    table = check(reader, SourceTable, data, ROOT)
    unit = _unit(reader, "unit", table.unit, kind.source_unit)
    total_unit = _unit(
        reader, "total_unit", table.total_unit, kind.total_unit,
        units.total_unit(unit, "m", kind.geometry),
    )  # fmt: skip
    at = tables[0].position if tables else None
    first = (at.unit or header_unit(at.column, "m")) if at else None
    position_unit = _unit(reader, "position_unit", table.position_unit, "m", first or "m")
    ask = _Asked(reader, kind, span)
    zones = ask.zones(table.zones)
    sign = _sign(reader, table.sign, driven)
    ceiling = _ceiling(reader, table.ceiling, kind, sign)
    monotone = ask.monotone(table.monotone)
    for key, given in (("ceiling", ceiling is not None), ("monotone", bool(monotone))):
        if driven and given:
            reader.wrong((*ROOT, key), "the amplitudes of a driven member have no order",
                         "leave it out")  # fmt: skip
    total = ask.total(table.total)
    if total is not None:
        _contradiction(reader, sign, total)
    found = SourceSpec(
        unit=unit,
        total_unit=total_unit,
        position_unit=position_unit,
        cells=_cells(reader, table.cells),
        zones=zones,
        breaks=ask.breaks(table.breaks),
        lumped=ask.lumped(table.lumped),
        smooth=table.smooth is not False,
        background=_background(reader, table.background),
        known=ask.known(table.known),
        zero=ask.zero(table.zero),
        sign=sign,
        total=total,
        limit=ask.limit(table.limit, zones),
        ceiling=ceiling,
        monotone=monotone,
    )
    _something_left(reader, found, table, span)
    return found


def _unit(reader: Reader, key: str, given: str | None, si_unit: str, default: str = "") -> str:
    """A display unit, the default where it is left out or wrong."""
    default = default or si_unit
    if given is None:
        return default
    try:
        units.factor(given, si_unit, reader.place((*ROOT, key)))
    except UnitError as error:
        reader.problems.append(error)
        return si_unit
    return given


def _cells(reader: Reader, given: int | None) -> int:
    if given is None:
        return SourceSpec.cells
    most = most_cells()
    if given < FEWEST_CELLS:
        reader.wrong(
            (*ROOT, "cells"), f"{given} cells are too few", f"give at least {FEWEST_CELLS}"
        )
    elif given > most:
        reader.wrong((*ROOT, "cells"), f"{given} cells are more than this machine's memory holds",
                     f"give at most {most}")  # fmt: skip
    return given


def _sign(reader: Reader, given: str | None, driven: bool) -> Sign:
    words: tuple[Sign, ...] = get_args(Sign)
    if given is None or not reader.choose((*ROOT, "sign"), given, words, "sign"):
        return "any"
    if driven and given != "any":
        reader.wrong((*ROOT, "sign"), "the amplitudes of a driven member have no sign",
                     'write "any", or leave it out')  # fmt: skip
    return next(w for w in words if w == given)


def _ceiling(reader: Reader, given: object, kind: MemberKind, sign: Sign) -> float | None:
    """The largest density that is possible."""
    if given is None:
        return None
    found = reader.quantity((*ROOT, "ceiling"), given, kind.source_unit)
    if sign == "nonnegative" and found <= 0:
        reader.wrong((*ROOT, "ceiling"), f"{given!r} leaves nothing to a source that cannot be "
                     "negative", "make it positive")  # fmt: skip
    return found


def _background(reader: Reader, given: str | None) -> bool:
    if given is None:
        return False
    return reader.choose((*ROOT, "background"), given, ("unknown",), "background")


def _contradiction(reader: Reader, sign: Sign, total: Knowledge) -> None:
    """A sign that a known total rules out."""
    beyond = {"any": 0.0, "nonnegative": -total.value, "nonpositive": total.value}[sign]
    if beyond > CONTRADICTION * total.sd:
        reader.wrong((*ROOT, "sign"), f'"{sign}" contradicts the known total by more than '
                     f"{CONTRADICTION:g} standard deviations", "mend one of them")  # fmt: skip


def _something_left(
    reader: Reader, found: SourceSpec, table: SourceTable, span: tuple[float, float]
) -> None:
    """Note a case in which no source is left to be found."""
    if not found.smooth and not table.lumped and not found.background:
        reader.wrong((*ROOT, "smooth"), "without a smooth part nothing is left to be found",
                     'add `lumped` or background = "unknown"')  # fmt: skip
    if found.smooth and not table.lumped and not found.background:
        reached = span[0]
        for start, end in sorted(found.zero):
            if start > reached:
                return
            reached = max(reached, end)
        if found.zero and reached >= span[1]:
            reader.wrong((*ROOT, "zero"), "it covers the whole member: nothing is left to find",
                         "leave a stretch out, or add `lumped`")  # fmt: skip


@dataclass(frozen=True)
class _Asked:
    """Reads places and amounts of the source, in the kind's units and on the member's span."""

    reader: Reader
    kind: MemberKind
    span: tuple[float, float]

    def place(self, path: Path, value: object) -> float:
        """A place on the member; one that misses an end by rounding is put there."""
        found = self.reader.quantity(path, value, "m")
        start, end = self.span
        near = 1e-9 * (end - start)
        if found < start - near or found > end + near:
            self.reader.wrong(path, f"{value!r} is not on the member",
                              f"it reaches from {start:g} m to {end:g} m")  # fmt: skip
        return start if abs(found - start) <= near else end if abs(found - end) <= near else found

    def stretch(self, path: Path, start: object, end: object) -> tuple[float, float]:
        a, b = self.place((*path, "from"), start), self.place((*path, "to"), end)
        if b <= a:
            self.reader.wrong((*path, "to"), f"{end!r} does not lie beyond {start!r}")
        return a, b

    def pair(self, path: Path, value: Any) -> tuple[float, float] | None:
        if not isinstance(value, (list, tuple)) or len(value) != 2:
            self.reader.wrong(path, f"{value!r} is no stretch", "write it as [from, to]")
            return None
        a, b = self.place((*path, 0), value[0]), self.place((*path, 1), value[1])
        if b <= a:
            self.reader.wrong(path, f"{value[1]!r} does not lie beyond {value[0]!r}")
        return a, b

    def distinct(self, path: Path, names: list[str | None]) -> None:
        for i, name in enumerate(names):
            if name in names[:i]:
                self.reader.wrong((*path, i, "name"), f"the name {name!r} is taken already",
                                  "give each its own")  # fmt: skip

    def zones(self, value: object) -> tuple[Zone, ...]:
        names: list[str | None] = []

        def one(path: Path, data: object) -> Zone:
            table = check(self.reader, ZoneTable, data, path)
            names.append(table.name)
            return Zone(table.name or "", *self.stretch(path, table.start, table.to))

        found: Any = each(self.reader, (*ROOT, "zones"), value, one)
        self.distinct((*ROOT, "zones"), names)
        return tuple(found)

    def breaks(self, value: object) -> tuple[float, ...]:
        def one(path: Path, item: object) -> float:
            found = self.place(path, item)
            if found == self.span[0] or found == self.span[1]:
                self.reader.wrong(path, f"{item!r} is an end of the member", "leave it out")
            return found

        found: Any = each(self.reader, (*ROOT, "breaks"), value, one)
        return tuple(sorted(set(found)))

    def lumped(self, value: object) -> tuple[Lumped, ...]:
        names: list[str | None] = []

        def one(path: Path, data: object) -> Lumped:
            table = check(self.reader, LumpedTable, data, path)
            names.append(table.name)
            width = 0.0
            if table.width is not None:
                width = self.reader.quantity((*path, "width"), table.width, "m", least=0)
            at = None if table.at is None else self.place((*path, "at"), table.at)
            between = None
            if table.between is not None:
                between = self.pair((*path, "between"), table.between)
            if (table.at is None) == (table.between is None):
                self.reader.wrong(path, "it needs either `at` or `between`", "give one of them")
            low, high = (at, at) if at is not None else between or (self.span[0], self.span[1])
            slack = 1e-9 * (self.span[1] - self.span[0])
            room = min(low - self.span[0], self.span[1] - high) + slack
            if width > 0 and width / 2 > room:
                self.reader.wrong((*path, "width"), "it reaches beyond an end of the member",
                                  "make it narrower")  # fmt: skip
            return Lumped(table.name or "", at, between, width)

        found: Any = each(self.reader, (*ROOT, "lumped"), value, one)
        self.distinct((*ROOT, "lumped"), names)
        return tuple(found)

    def known(self, value: object) -> tuple[Known, ...]:
        def one(path: Path, data: object) -> Known | None:
            table = check(self.reader, KnownTable, data, path)
            here = (*path, "value")
            if table.at is not None:
                if table.start is not None or table.to is not None:
                    self.reader.wrong(path, "`at` excludes `from` and `to`", "leave one out")
                at = self.place((*path, "at"), table.at)
                return Known(at, at, self.reader.quantity(here, table.value, self.kind.total_unit))
            for key, given in (("from", table.start), ("to", table.to)):
                if given is None:
                    self.reader.missing(path, key, "give `from` and `to`, or `at`")
            start, end = self.stretch(path, table.start, table.to)
            density = self.reader.quantity(here, table.value, self.kind.source_unit)
            return Known(start, end, density)

        found: Any = each(self.reader, (*ROOT, "known"), value, one)
        return tuple(found)

    def zero(self, value: object) -> tuple[tuple[float, float], ...]:
        found: Any = each(self.reader, (*ROOT, "zero"), value, self.pair)
        return tuple(found)

    def monotone(self, value: object) -> tuple[Monotone, ...]:
        def one(path: Path, data: object) -> Monotone:
            table = check(self.reader, MonotoneTable, data, path)
            start, end = self.stretch(path, table.start, table.to)
            if table.trend is not None:
                words = ("rising", "falling")
                self.reader.choose((*path, "trend"), table.trend, words, "trend")
            return Monotone(start, end, table.trend == "rising")

        found: Any = each(self.reader, (*ROOT, "monotone"), value, one)
        for a, b in combinations(found, 2):
            if a.rising != b.rising and max(a.start, b.start) < min(a.end, b.end):
                self.reader.wrong((*ROOT, "monotone"), "a rising and a falling stretch overlap",
                                  "let one begin where the other ends")  # fmt: skip
        return tuple(found)

    def total(self, data: object) -> Knowledge | None:
        if data is None:
            return None
        path = (*ROOT, "total")
        table = check(self.reader, TotalTable, data, path)
        unit = self.kind.total_unit
        return Knowledge(
            self.reader.quantity((*path, "value"), table.value, unit),
            self.reader.quantity((*path, "sd"), table.sd, unit, above=0),
        )

    def limit(self, data: object, zones: tuple[Zone, ...]) -> Limit | None:
        if data is None:
            return None
        path = (*ROOT, "limit")
        table = check(self.reader, LimitTable, data, path)
        if table.zone is not None:
            self.reader.choose((*path, "zone"), table.zone, [z.name for z in zones], "zone")
        here = (*path, "at_most")
        density = self._is_density(here, table.at_most)
        unit = self.kind.source_unit if density else self.kind.total_unit
        return Limit(table.zone or "", self.reader.quantity(here, table.at_most, unit), density)

    def _is_density(self, path: Path, value: object) -> bool:
        """Whether a limit is one of the mean density; when in doubt it is."""
        if not isinstance(value, str):
            return True
        try:
            _, unit = units.split(value, "")
            return not units.same_dimension(unit, self.kind.total_unit)
        except UnitError:
            return True


def read_strength(reader: Reader, data: Mapping[str, Any]) -> StrengthSpec:
    """How the strength is chosen."""
    root: Path = ("strength",)
    table = check(reader, StrengthTable, data, root)
    values: dict[str, Any] = {}
    solvers = ("tikhonov", "eigenbasis", "svd-cut")
    if table.solver is not None and reader.choose(
        (*root, "solver"), table.solver, solvers, "solver"
    ):
        values["solver"] = table.solver
    if table.interval is not None and reader.choose(
        (*root, "interval"), table.interval, INTERVALS, "kind of interval"
    ):
        values["interval"] = table.interval
    if table.roughness is not None:
        values["roughness"] = _roughness(reader, (*root, "roughness"), table.roughness)
    if table.choose is not None:
        values["choose"] = _choose(reader, (*root, "choose"), table.choose)
    if table.level is not None:
        values["level"] = level = reader.quantity((*root, "level"), table.level, "1")
        if not 0 < level < 1 and level == level:
            reader.wrong((*root, "level"), f"{level:g} is not between 0 and 1", "write it as 0.95")
    return StrengthSpec(**values)


def _roughness(reader: Reader, path: Path, value: object) -> Any:
    """An order, a correlation length, "averaged" or "adaptive"."""
    if value in AVERAGES:
        return value
    if isinstance(value, (int, float)) and not isinstance(value, bool):
        if value in (0, 1, 2) and isinstance(value, int):
            return value
        how = 'write 0, 1, 2, "averaged", "adaptive", or a correlation length as in "3 m"'
        reader.wrong(path, f"{value!r} is no roughness", how)
        return "averaged"
    if isinstance(value, str) and not value[:1].isdigit():
        reader.choose(path, value, AVERAGES, "roughness")
        return "averaged"
    # a float, also when the number is whole: 1 as an int means first differences
    return float(reader.quantity(path, value, "m", above=0))


def _choose(reader: Reader, path: Path, value: object) -> Any:
    """A criterion, or the strength itself."""
    words = get_args(Choose)
    if isinstance(value, (int, float)) and not isinstance(value, bool):
        if not 0 < value < float("inf"):
            reader.wrong(path, f"{value!r} is no strength", "give a number above 0")
        return float(value)
    return value if reader.choose(path, value, words, "criterion") else "averaged"
