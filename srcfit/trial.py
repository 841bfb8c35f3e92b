"""The table of a trial source: stretches, lumped parts, or the cells of an earlier recovery."""

from __future__ import annotations

import csv
import json
import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from srcfit.case.model import Case, Known, Lumped
from srcfit.errors import ReadingsError
from srcfit.grid import overlap, spread
from srcfit.member import Member
from srcfit.units import factor

NEAR = 1e-6
HEADER = re.compile(r"\s*([A-Za-z_]+)\s*(?:\[([^\]]*)\])?\s*")
Amount = complex | None
FORMS = "`from`, `to`, `value`; `at`, `strength`; or `x`, `estimate` of a source.csv"


@dataclass(frozen=True)
class Trial:
    """A source to try, in SI.

    Attributes
    ----------
    parts : tuple of Known
        Densities over stretches and strengths at single places (start == end).
    unread : tuple of str
        Columns of the file that were not used.
    amounts : mapping nuisance name -> amount
        As reported by an earlier recovery; the others are taken at their guess.
    """

    parts: tuple[Known, ...]
    unread: tuple[str, ...] = ()
    amounts: Mapping[str, complex] = field(default_factory=dict)


def read_source(path: str | Path, case: Case) -> Trial:
    """Read a trial source from a comma-separated table in UTF-8.

    Of a driven member ``value_imag [kN/m]`` (strength_imag, estimate_imag) beside the last of
    these columns adds the imaginary part.

    Parameters
    ----------
    path : path
        Its header names columns with their units in brackets: ``from [m]``, ``to [m]`` and
        ``value [kN/m]`` for stretches, ``at [m]`` and ``strength [kN]`` for lumped parts, or
        ``x [m]`` and ``estimate [kN/m]``, where x are the middles of cells that fill the member.
        Or the folder of an earlier recovery: its smooth part, lumped parts and nuisances.
    case : Case

    Raises
    ------
    ReadingsError, UnitError
        Naming file, line and column of what cannot be used.
    """
    if Path(path).is_dir():
        return _earlier(Path(path), case)
    header, rows = _table(Path(path))
    names = {m[1]: (i, m[2] or "") for i, t in enumerate(header) if (m := HEADER.fullmatch(t))}
    cells = "estimate" if "estimate" in names else "value"
    every: list[tuple[str, ...]] = [("from", "to", cells), ("at", "strength"), ("x", "estimate")]
    forms = [form for form in every if all(name in names for name in form)]
    if not forms:
        raise ReadingsError("it has none of the columns of a source", f"{path}:1", f"give {FORMS}")
    if forms[0] == ("from", "to", cells):
        forms = [f for f in forms if f[0] != "x"]
    kind = case.member.kind
    si = {"value": kind.source_unit, "estimate": kind.source_unit, "strength": kind.total_unit}
    parts: list[Known] = []
    twins: set[str] = set()
    for form in forms:
        columns = [_column(path, rows, name, *names[name], si.get(name, "m")) for name in form]
        twin = f"{form[-1]}_imag"
        if case.member.driven and twin in names:
            imaginary = _column(path, rows, twin, *names[twin], si[form[-1]])
            columns[-1] = [_complex(*z) for z in zip(columns[-1], imaginary, strict=True)]
            twins.add(twin)
        parts += _parts(str(path), case.member, form, [n for n, _ in rows], columns)
    if not parts:
        raise ReadingsError("it has no rows with numbers", str(path), f"give {FORMS}")
    taken = {name for form in forms for name in form} | twins
    return Trial(tuple(parts), tuple(h.strip() for h in header if _name(h) not in taken))


def _earlier(folder: Path, case: Case) -> Trial:
    """The source of an earlier recovery of this case, with its lumped parts and nuisances."""
    smooth = read_source(folder / "source.csv", case)
    place = folder / "summary.json"
    try:
        summary = json.loads(place.read_text(encoding="utf-8"))
        rows, amounts = (_amounts(summary[key]) for key in ("lumped", "nuisances"))
    except (OSError, ValueError, KeyError, TypeError) as error:
        how = "give a folder that `srcfit recover` wrote, or a table"
        raise ReadingsError("it is no summary of a recovery", f"source {place}", how) from error
    unknown = [name for name, value in (rows | amounts).items() if value is None]
    lumped = {part.name: part for part in case.source.lumped if part.at is not None}
    if unknown or set(rows) != set(lumped):
        odd = ", ".join(unknown or set(rows) ^ set(lumped))
        what = f"{odd} is not determined there" if unknown else f"it differs in its parts: {odd}"
        raise ReadingsError(what, f"source {place}", "give a table of the source instead")
    scale = factor(case.source.total_unit, case.member.kind.total_unit, "source.total_unit")[0]
    parts = [_lumped(case.member, lumped[name], scale * value) for name, value in rows.items()]
    return Trial((*smooth.parts, *parts), (), amounts)


def _amounts(rows: list[dict[str, Any]]) -> dict[str, Any]:
    return {row["name"]: _complex(row["value"], row.get("imaginary")) for row in rows}


def _complex(real: Amount, imaginary: Amount) -> Amount:
    """One complex amount of two parts; the real one alone where there is no other."""
    return real if real is None or imaginary is None else real + 1j * imaginary


def _lumped(member: Member, part: Lumped, strength: complex) -> Known:
    assert part.at is not None
    if part.width == 0:
        return Known(part.at, part.at, strength)
    start, end = spread(part)
    size = overlap(member, np.array([member.start, member.end]), start, end)[0]
    return Known(start, end, strength / float(size))


def _name(header: str) -> str:
    match = HEADER.fullmatch(header)
    return match[1] if match else header


def _table(path: Path) -> tuple[list[str], list[tuple[int, list[str]]]]:
    """Header and the numbered rows of a file that are not blank."""
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            reader = csv.reader(file, strict=True)
            rows = [(reader.line_num, row) for row in reader if any(c.strip() for c in row)]
    except OSError as error:
        what = f"it cannot be read ({(error.strerror or str(error)).lower()})"
        raise ReadingsError(what, f"source {path}", "check the path") from error
    except (UnicodeDecodeError, csv.Error) as error:
        what = "it is no comma-separated table in UTF-8"
        raise ReadingsError(what, f"source {path}", f"give {FORMS}") from error
    if not rows:
        raise ReadingsError("it is empty", f"source {path}", f"give {FORMS}")
    return rows[0][1], rows[1:]


def _column(
    path: str | Path, rows: list[tuple[int, list[str]]], name: str, place: int, unit: str, si: str
) -> list[Amount]:
    """Cells of a column in SI; None where empty."""
    if not unit:
        how = f'write the unit in brackets, as in "{name} [{si}]"'
        raise ReadingsError(f'the column "{name}" has no unit', f"{path}:1", how)
    scale, offset = factor(unit, si, f'{path}:1: column "{name} [{unit}]"')
    found: list[Amount] = []
    for line, row in rows:
        text = row[place].strip() if place < len(row) else ""
        try:
            value = float(text) if text else None
        except ValueError:
            value = math.nan
        if value is not None and not math.isfinite(value):
            where = f'{path}:{line}: column "{name}"'
            raise ReadingsError(f'"{text}" is no number', where, "write it as in 12.5")
        found.append(None if value is None else scale * value + offset)
    return found


def _parts(
    path: str, member: Member, form: tuple[str, ...], lines: list[int],
    columns: list[list[Amount]],
) -> Iterator[Known]:  # fmt: skip
    """Parts of one form, each row whole or empty; places checked against the member."""
    whole: list[tuple[int, list[Any]]] = []
    for line, cells in zip(lines, zip(*columns, strict=True), strict=True):
        given = [c for c in cells if c is not None]
        if given and len(given) < len(form):
            missing = ", ".join(f for f, c in zip(form, cells, strict=True) if c is None)
            raise ReadingsError(f"the row lacks {missing}", f"{path}:{line}", "fill it in")
        if given:
            whole.append((line, given))
    if form[0] == "x":
        return _cells(path, member, whole)
    return (_part(path, member, line, row) for line, row in whole)


def _part(path: str, member: Member, line: int, row: list[Any]) -> Known:
    start, end, value = (row[0], row[-2], row[-1])
    slack = NEAR * member.length
    if min(start, end) < member.start - slack or max(start, end) > member.end + slack:
        how = f"keep places between {member.start:g} and {member.end:g} m"
        raise ReadingsError("the part reaches beyond the member", f"{path}:{line}", how)
    if len(row) == 3 and not start < end:
        raise ReadingsError("`from` is not below `to`", f"{path}:{line}", "swap or mend them")
    start, end = (float(np.clip(p, member.start, member.end)) for p in (start, end))
    return Known(start, end, value)


def _cells(path: str, member: Member, rows: list[tuple[int, list[Any]]]) -> Iterator[Known]:
    """Cells whose middles are given; they have to fill the member."""
    edge = member.start
    for line, (middle, value) in rows:
        after = 2 * middle - edge
        if not edge < after <= member.end + NEAR * member.length:
            how = "give `from`, `to` and `value` where places are not the middles of joined cells"
            what = f"x = {middle:g} m is no middle of a cell that begins at {edge:g} m"
            raise ReadingsError(what, f"{path}:{line}", how)
        yield Known(edge, min(after, member.end), value)
        edge = after
    if rows and abs(edge - member.end) > NEAR * member.length:
        how = "give `from`, `to` and `value`, or every cell up to the end"
        what = f"the cells end at {edge:g} m, the member at {member.end:g} m"
        raise ReadingsError(what, f"{path}:{rows[-1][0]}", how)
