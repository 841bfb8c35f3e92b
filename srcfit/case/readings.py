"""The `[readings]` table to table and column specifications; the files are read elsewhere."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path as File
from typing import Any, Literal

from srcfit.case.columns import ColumnReader, check_unit, one_of, read_where
from srcfit.case.lines import Path
from srcfit.case.model import (
    ColumnSpec,
    PositionSpec,
    TableSpec,
    TimeSpec,
)
from srcfit.case.reader import Reader, show
from srcfit.case.schema import (
    PositionTable,
    ReadingsTable,
    TimeTable,
    check,
)
from srcfit.member import MemberKind

ROOT: Path = ("readings",)


def read_tables(
    reader: Reader, data: Mapping[str, Any], kind: MemberKind, driven: bool
) -> tuple[TableSpec, ...]:
    """All tables of readings; what is wrong with them is noted."""
    top = check(reader, ReadingsTable, data, ROOT)
    if top.table is None:
        found = [_table(reader, ROOT, top, kind, driven)]
    else:
        for key in ("file", "position", "column", "where", "time", "decimal"):
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
        column = ColumnReader(reader, here, kind, driven).read(item, time is not None)
        if column is not None:
            columns.append(column)
    if file is None or position is None:
        return None
    where = read_where(reader, (*path, "where"), table.where)
    return TableSpec(
        file, position, tuple(columns), where, time, show(path), reader.line(path),
        _decimal(reader, (*path, "decimal"), table.decimal),
    )  # fmt: skip


def _decimal(reader: Reader, path: Path, value: str | None) -> Literal[".", ","] | None:
    """The decimal mark of a file in which nothing else tells it from one between thousands."""
    if value is not None and value not in (".", ","):
        reader.wrong(path, f"{value!r} is no decimal mark", 'write "." or ","')
    return "." if value == "." else "," if value == "," else None


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
    one_of(reader, here, "unit", table.unit, "unit_column", table.unit_column)
    check_unit(reader, (*here, "unit"), unit, "m")
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
