"""A case file, or the same keys as a mapping, to a checked Case."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping
from pathlib import Path as File
from typing import Any

from srcfit.case.lines import key_lines
from srcfit.case.member import amount_in, as_toml, kind_of, read_member
from srcfit.case.model import Case, TableSpec
from srcfit.case.reader import NAN, Reader
from srcfit.case.readings import read_tables
from srcfit.case.schema import CaseTable, check
from srcfit.case.source import read_source, read_strength
from srcfit.errors import CaseError
from srcfit.members import MEMBERS


def load_case(path: str | File) -> Case:
    """Read and check a case file.

    Parameters
    ----------
    path : str or Path
        A TOML file; paths in it are relative to its folder.

    Returns
    -------
    Case
        In SI.

    Raises
    ------
    CaseError
        Naming file, line and key of everything that cannot be used.

    Examples
    --------
    >>> from pathlib import Path
    >>> from tempfile import TemporaryDirectory
    >>> from srcfit import load_case
    >>> from srcfit.case.template import template
    >>> with TemporaryDirectory() as folder:
    ...     path = Path(folder) / "case.toml"
    ...     _ = path.write_text(template("beam"), "utf-8")  # what `srcfit new beam` prints
    ...     case = load_case(path)
    >>> case.member.kind.name, case.member.length, case.columns[0].kind
    ('beam', 9.0, 'deflection')
    """
    file = File(path)
    text = _text(file)
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise _syntax(file, error) from None
    except RecursionError:
        raise CaseError("the case is nested too deeply", file.name) from None
    reader = Reader(file.parent, file.name, key_lines(text), files=[file])
    return _case(reader, data, file)


def make_case(mapping: Mapping[str, Any], folder: str | File = ".") -> Case:
    """Check a case given as a mapping with the keys of a case file.

    Parameters
    ----------
    mapping : mapping
    folder : str or Path
        Folder that relative paths start from.

    Returns
    -------
    Case
        In SI.

    Raises
    ------
    CaseError
        Naming the key of everything that cannot be used.

    Examples
    --------
    >>> from srcfit import make_case
    >>> case = make_case({
    ...     "member": {"kind": "rod", "length": "3 m", "axial_stiffness": "20 MN", "left": "fixed",
    ...                "right": "free"},
    ...     "readings": {"file": "pile.csv", "position": {"column": "x", "unit": "m"},
    ...                  "column": [{"column": "strain", "kind": "strain", "unit": "ue",
    ...                              "sd": "2 ue"}]},
    ...     "source": {"unit": "kN/m"},
    ... })
    >>> case.columns[0].sd, case.source.total_unit
    (2e-06, 'kN')
    """
    return _case(Reader(File(folder)), as_toml(mapping), None)


def _text(file: File) -> str:
    try:
        raw = file.read_bytes()
    except OSError as error:
        raise CaseError(
            f"the case cannot be read: {error.strerror}", str(file), "check its name"
        ) from None
    try:
        return raw.decode("utf-8-sig").replace("\r\n", "\n")
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        raise CaseError(
            "the case is no UTF-8 text", f"{file.name}:{line}", "save it as UTF-8"
        ) from None


def _syntax(file: File, error: tomllib.TOMLDecodeError) -> CaseError:
    """A fault of the TOML text with its line."""
    words = str(error)
    match = re.search(r"\s*\(at line (\d+), column (\d+)\)", words)
    where = f"{file.name}:{match[1]}" if match else file.name
    what = words[: match.start()] if match else words
    return CaseError(
        f"the text is no valid TOML: {what[:1].lower()}{what[1:]}",
        where,
        f"look near column {match[2]}" if match else "look at its end",
    )


def _case(reader: Reader, data: Mapping[str, Any], path: File | None) -> Case:
    table = check(reader, CaseTable, data, ())
    member_data, readings = table.member or {}, table.readings or {}
    source_data = table.source or {}
    amount = amount_in(member_data, _texts(source_data, readings))
    member = read_member(reader, member_data, amount) if table.member is not None else None
    kind = member.kind if member else kind_of(Reader(), member_data, amount)
    tables: tuple[TableSpec, ...] = ()
    source = None
    if kind is not None:
        driven = "frequency" in member_data
        span = (member.start, member.end) if member else (NAN, NAN)
        reader.plain = kind.name == "general"
        if table.readings is not None:
            tables = read_tables(reader, readings, kind, driven)
        source = read_source(reader, source_data, kind, span, driven, tables)
    reader.plain = False
    strength = read_strength(reader, table.strength or {})
    reader.finish()
    assert member is not None
    assert source is not None
    return Case(
        title=table.title or (path.stem if path else member.kind.title),
        folder=reader.folder,
        path=path,
        member=member,
        member_text=dict(member_data),
        tables=tables,
        source=source,
        strength=strength,
        files=tuple(reader.files),
    )


def _texts(
    source: Mapping[str, Any], readings: Mapping[str, Any]
) -> tuple[tuple[object, str], ...]:
    """Unit texts that may tell the amount of a column, with what is expected of them."""
    kind = MEMBERS["column"]
    found: list[tuple[object, str]] = [
        (source.get("unit"), kind.source_unit),
        (source.get("total_unit"), kind.total_unit),
    ]
    tables = readings.get("table") or [readings]
    for table in tables if isinstance(tables, list) else []:
        columns = table.get("column") if isinstance(table, Mapping) else None
        for column in columns if isinstance(columns, list) else []:
            for sensor in kind.sensors if isinstance(column, Mapping) else ():
                if column.get("kind") == sensor.name:
                    found.append((column.get("unit"), sensor.unit))
    return tuple(found)
