"""Cases built by hand, so that the reader of tables is tested apart from the case file."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from srcfit.case.model import Case, ColumnSpec, PositionSpec, SourceSpec, StrengthSpec, TableSpec
from srcfit.member import End, Member, Profile
from srcfit.members import MEMBERS


def member(kind: str = "beam", length: float = 30.0, frequency: float | None = None) -> Member:
    """A member of which only the kind, the ends' places and the frequency matter here."""
    profiles = {"p": Profile((0.0, length), (1.0,))}
    free = End("free")
    return Member(MEMBERS[kind], 0.0, length, profiles, free, free, frequency=frequency)


def column(name: Any = "w", kind: str = "deflection", unit: Any = "mm", **more: Any) -> ColumnSpec:
    """One column specification; `name` may be a list."""
    names = (name,) if isinstance(name, str) else tuple(name)
    more.setdefault("group", names[0])
    more.setdefault("sd", None if "sd_column" in more else 1e-4)
    return ColumnSpec(names, kind, unit=unit, **more)


def case(
    folder: Path,
    file: str | Path,
    *columns: ColumnSpec,
    position: PositionSpec | None = None,
    of: Member | None = None,
    **more: Any,
) -> Case:
    """A case with one table."""
    place = position or PositionSpec("x", "m")
    table = TableSpec(Path(file), place, columns or (column(),), **more)
    source = SourceSpec("kN/m", "kN", "m")
    return Case("test", folder, None, of or member(), {}, (table,), source, StrengthSpec())


def table_case(folder: Path, data: bytes | str, *columns: ColumnSpec, **more: Any) -> Case:
    """A case whose one table holds `data`."""
    (folder / "t.csv").write_bytes(data if isinstance(data, bytes) else data.encode())
    return case(folder, "t.csv", *columns, **more)
