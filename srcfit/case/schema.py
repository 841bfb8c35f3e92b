"""The keys of a case file, table by table, and the check of their plain types.

Every field may be absent here; `needed` names those that must not be, so that all faults of a
table are found in one pass and the rest of it is still read.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache
from typing import Any, ClassVar, TypeVar

from pydantic import BaseModel, ConfigDict, Field, ValidationError, create_model

from srcfit.case.lines import Path
from srcfit.case.reader import Reader
from srcfit.members import MEMBERS
from srcfit.members.general import GENERAL_4

Text = str | None
Quantity = Any  # "768 MN*m^2"; checked by `Reader.quantity`


class Table(BaseModel):
    """One table of a case."""

    model_config = ConfigDict(
        defer_build=True, extra="forbid", strict=True, arbitrary_types_allowed=True
    )
    needed: ClassVar[tuple[str, ...]] = ()


class CaseTable(Table):
    """The whole file."""

    needed = ("member", "readings")
    title: Text = None
    member: dict[str, Any] | None = None
    readings: dict[str, Any] | None = None
    source: dict[str, Any] | None = None
    strength: dict[str, Any] | None = None


class SupportTable(Table):
    """`[[member.support]]`."""

    needed = ("at", "kind")
    at: Quantity = None
    kind: Text = None
    stiffness: Quantity = None
    settlement: Quantity = None
    value: Quantity = None
    guess: Quantity = None
    sd: Quantity = None


class HingeTable(Table):
    """`[[member.hinge]]`."""

    needed = ("at",)
    at: Quantity = None
    spring: Quantity = None


class InterfaceTable(Table):
    """`[[member.interface]]`."""

    needed = ("at", "resistance")
    at: Quantity = None
    resistance: Quantity = None


class ValueEnd(Table):
    """An end with a prescribed response."""

    value: Quantity = None
    guess: Quantity = None
    sd: Quantity = None


class SpringEnd(Table):
    """An elastic end of order 2."""

    spring: Quantity = None


class TransferEnd(Table):
    """A convective end."""

    transfer: Quantity = None
    ambient: Quantity = None


class MixedEnd(Table):
    """a u + b p u' = 0."""

    needed = ("a", "b")
    a: Quantity = None
    b: Quantity = None


class BeamEnd(Table):
    """An end of order 4."""

    kind: Text = None
    deflection_spring: Quantity = None
    rotation_spring: Quantity = None
    settlement: Quantity = None
    rotation: Quantity = None
    sd: Quantity = None


class CurveTable(Table):
    """A coefficient that stands in a file."""

    needed = ("file", "position", "value")
    file: Any = None
    position: Text = None
    value: Text = None
    position_unit: Text = None
    unit: Text = None


class ReadingsTable(Table):
    """`[readings]` or one `[[readings.table]]`."""

    file: Any = None
    position: dict[str, Any] | None = None
    where: dict[str, Any] | None = None
    time: dict[str, Any] | None = None
    decimal: Text = None
    column: list[Any] | None = None
    table: list[Any] | None = None


class PositionTable(Table):
    """`position` of a table of readings."""

    needed = ("column",)
    column: Text = None
    unit: Text = None
    unit_column: Text = None
    origin: Quantity = None
    reversed: bool | None = None
    file: Any = None
    gauge: Text = None


class TimeTable(Table):
    """`time` of a table of readings."""

    needed = ("column",)
    column: Text = None
    format: Text = None


class ColumnTable(Table):
    """`[[readings.column]]`."""

    needed = ("column", "kind")
    column: str | list[str] | None = None
    kind: Text = None
    group: Text = None
    unit: Text = None
    unit_column: Text = None
    sd: Quantity = None
    sd_column: Text = None
    correlation: Quantity = None
    positive: Text = None
    offset: Quantity = None
    scale: Quantity = None
    drift: Quantity = None
    step: Quantity = None
    distance: Quantity = None
    gauge_length: Quantity = None
    phase: dict[str, Any] | None = None
    component: Text = None
    range: list[Any] | None = None
    exclude: list[Any] | None = None
    exclude_lines: list[int] | None = None
    where: dict[str, Any] | None = None
    baseline: dict[str, Any] | None = None
    correction: dict[str, Any] | None = None


class StepTable(Table):
    """`step` of a column."""

    needed = ("at",)
    at: Quantity = None
    value: Quantity = None
    unknown: bool | None = None
    guess: Quantity = None
    sd: Quantity = None


class PhaseTable(Table):
    """`phase` of a column."""

    needed = ("column", "unit")
    column: Text = None
    unit: Text = None


class BaselineTable(Table):
    """`baseline` of a column."""

    needed = ("where", "match")
    where: dict[str, Any] | None = None
    match: Text = None


class CorrectionTable(Table):
    """`correction` of a column."""

    needed = ("column", "unit", "per")
    column: Text = None
    unit: Text = None
    per: Quantity = None


class SourceTable(Table):
    """`[source]`."""

    unit: Text = None
    total_unit: Text = None
    position_unit: Text = None
    cells: int | None = None
    zones: list[Any] | None = None
    breaks: list[Any] | None = None
    lumped: list[Any] | None = None
    smooth: bool | None = None
    background: Text = None
    known: list[Any] | None = None
    zero: list[Any] | None = None
    sign: Text = None
    ceiling: Quantity = None
    monotone: list[Any] | None = None
    total: dict[str, Any] | None = None
    limit: dict[str, Any] | None = None


class ZoneTable(Table):
    """One of `zones`."""

    needed = ("name", "from", "to")
    name: Text = None
    start: Quantity = Field(default=None, alias="from")
    to: Quantity = None


class LumpedTable(Table):
    """One of `lumped`."""

    needed = ("name",)
    name: Text = None
    at: Quantity = None
    between: list[Any] | None = None
    width: Quantity = None


class KnownTable(Table):
    """One of `known`."""

    needed = ("value",)
    start: Quantity = Field(default=None, alias="from")
    to: Quantity = None
    at: Quantity = None
    value: Quantity = None


class MonotoneTable(Table):
    """One of `monotone`."""

    needed = ("from", "to", "trend")
    start: Quantity = Field(default=None, alias="from")
    to: Quantity = None
    trend: Text = None


class TotalTable(Table):
    """`total` of the source."""

    needed = ("value", "sd")
    value: Quantity = None
    sd: Quantity = None


class LimitTable(Table):
    """`limit` of the source."""

    needed = ("zone", "at_most")
    zone: Text = None
    at_most: Quantity = None


class StrengthTable(Table):
    """`[strength]`."""

    solver: Text = None
    roughness: Quantity = None
    choose: Quantity = None
    level: Quantity = None
    interval: Text = None


class MemberTable(Table):
    """`[member]`; the coefficients of the kind are added by `member_table`."""

    kind: Text = None
    left: Any = None
    right: Any = None
    support: list[Any] | None = None
    uncertainty: dict[str, Any] | None = None


@cache
def member_table(name: str, order: int) -> type[MemberTable]:
    """The keys of `[member]` for one member kind."""
    kind = GENERAL_4 if name == "general" and order == 4 else MEMBERS[name]
    keys = [c.key for c in kind.coefficients]
    needed = [c.key for c in kind.coefficients if c.required]
    if kind.name == "general":
        keys += ["order", "start", "end", "lambda", "response_unit", "source_unit"]
        needed += ["start", "end"]
    else:
        span = ["length"] if kind.geometry == "line" else ["inner_radius", "outer_radius"]
        needed += span
        keys += [*span, "frequency"]
        keys += ["damping"] if kind.drive == "inertia" else []
    keys += ["ambient"] if kind.relative else []
    keys += ["hinge"] if kind.order == 4 else ["interface"]
    fields: dict[str, Any] = {f"k_{key}": (Any, Field(default=None, alias=key)) for key in keys}
    table = create_model(f"{kind.name}_{kind.order}", __base__=MemberTable, **fields)
    table.needed = tuple(needed)
    return table


T = TypeVar("T", bound=Table)


def check(reader: Reader, model: type[T], data: object, path: Path) -> T:
    """A table with its plain types checked; what is wrong is noted and left out of it."""
    if not isinstance(data, Mapping):
        reader.wrong(path, f"{data!r} is no table", "write it as { key = value, … }")
        return model()
    for key in model.needed:
        if data.get(key) is None:
            reader.missing(path, key)
    good = {str(key): value for key, value in data.items()}
    try:
        return model.model_validate(good)
    except ValidationError as error:
        for item in error.errors(include_url=False):
            if good.pop(str(item["loc"][0]), None) is not None:
                _note(reader, model, item, path)
    return model.model_validate(good)


def keys_of(model: type[Table]) -> list[str]:
    """The keys of a table as they are written."""
    return [f.alias or name for name, f in model.model_fields.items()]


WANTED = {
    "string": "text in quotes", "bool": "true or false", "int": "a whole number",
    "list": "a list in brackets, as in [ … ]", "dict": "a table, as in { key = value, … }",
}  # fmt: skip


def _note(reader: Reader, model: type[Table], item: Any, path: Path) -> None:
    """One finding of the type check in our words."""
    key = item["loc"][0]
    here = (*path, key)
    if item["type"] == "extra_forbidden":
        reader.unknown_key(here, keys_of(model))
        return
    if isinstance(item["input"], (list, dict)) and item["loc"][1:] and key == "exclude_lines":
        here = (*here, *item["loc"][1:])
    wanted = WANTED.get(item["type"].split("_")[0])
    if wanted:
        reader.wrong(here, f"{_short(item['input'])} stands where {wanted} is due")
    else:
        reader.wrong(here, f"{_short(item['input'])} cannot be used: {item['msg'].lower()}")


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "…"
