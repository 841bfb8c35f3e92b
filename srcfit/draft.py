"""A case drafted from a table of readings: every guess is marked, every gap is named."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

from srcfit.case.template import template
from srcfit.errors import ReadingsError
from srcfit.member import MemberKind
from srcfit.members import MEMBERS
from srcfit.readings.guess import Guesses, Place, Reading, guess
from srcfit.readings.sheets import File, load
from srcfit.units import amount_of

GUESS, BLANK = "GUESS", "TO FILL IN"
_TABLES = frozenset((".csv", ".txt", ".tsv", ".dat"))
_MOST_BYTES = 1_000_000
_MOST_FILES = 20


@dataclass(frozen=True)
class Draft:
    """A case file's text, and what remains to be filled in, in words."""

    text: str
    remaining: tuple[str, ...]


@dataclass
class _Lines:
    """Lines of the `[readings]` part and what they leave open."""

    text: list[str] = field(default_factory=list)
    todo: list[str] = field(default_factory=list)

    def put(self, line: str, mark: str = "", why: str = "") -> None:
        remark = f"# {mark}: {why}" if mark else ""
        self.text.append(f"{line:<43} {remark}" if remark else line)
        if mark == BLANK:
            self.todo.append(why)


def draft(kind: str, table: str | Path, folder: str | Path = ".") -> Draft:
    """Draft a case for a table of readings.

    Parameters
    ----------
    kind : str
        Name of a member kind.
    table : path
        A table of readings: text, spreadsheet or Parquet. Its first lines are looked at.
    folder : path
        Where the case file will stand; the table is named by its path from there.

    Returns
    -------
    Draft
        `load_case` accepts its text; numbers of the member are those of `srcfit new KIND`.

    Raises
    ------
    ReadingsError
        The table is missing or holds no names above rows of numbers.
    """
    spec, path = MEMBERS[kind], Path(table)
    found = guess(load(path, path.name, "--from"), spec, _neighbours(path))
    lines = _readings(spec, found, _relative(path, folder))
    member = _member(spec, found, template(kind), lines)
    text = _assembled(template(kind), path, member, lines)
    return Draft(text, tuple(dict.fromkeys(lines.todo)))


def _neighbours(path: Path) -> dict[str, File]:
    """Small tables beside this one: one of them may hold the places of gauges."""
    near = [
        p for p in sorted(path.resolve().parent.iterdir())
        if p.suffix.lower() in _TABLES and p.name != path.name and p.is_file()
        and p.stat().st_size < _MOST_BYTES
    ]  # fmt: skip
    found = {}
    for other in near[:_MOST_FILES]:
        try:
            found[other.name] = load(other, other.name, "--from")
        except ReadingsError:
            continue
    return found


def _relative(path: Path, folder: str | Path) -> str:
    try:
        return Path(os.path.relpath(path.resolve(), Path(folder).resolve())).as_posix()
    except ValueError:  # another drive
        return path.resolve().as_posix()


def quoted(text: str) -> str:
    """A text as one TOML string on one line, whatever is in it."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _readings(kind: MemberKind, found: Guesses, file: str) -> _Lines:
    out = _Lines()
    out.put("[readings]")
    out.put(f"# {file}: {found.story}".replace("\n", " "))
    out.put(f"file = {quoted(file)}")
    if found.unclear:
        out.put('# decimal = "."', BLANK, f'`decimal`: {found.unclear}; set it to "." or ","')
    _position(out, found.place, file)
    spread = [name for name, key in found.notes if key == "sd_column"]
    lone = len(found.readings) == 1 and len(found.readings[0].headers) == 1 and len(spread) == 1
    for reading in found.readings:
        _column(out, kind, reading, spread[0] if lone else "")
    if not found.readings:
        missing = Reading(("…",), kind.sensors[0].name, None, "")
        out.todo.append("`column`: no column was recognised as readings of this kind of member")
        _column(out, kind, missing, "")
    for reading in found.also:
        _further(out, reading)
    _others(out, found)
    return out


def _position(out: _Lines, place: Place, file: str) -> None:
    if place.gauge:
        beside = (Path(file).parent / place.file).as_posix()
        text = (f"file = {quoted(beside)}, gauge = {quoted(place.gauge)}, "
                f"column = {quoted(place.header)}")  # fmt: skip
    else:
        text = f"column = {quoted(place.header or '…')}"
    unit = f"unit = {quoted(place.unit or 'm')}"
    if place.unit_column is not None:
        unit = f"unit_column = {quoted(place.unit_column)}"
    extra = _origin(place)
    line = f"position = {{ {text}, {unit}{extra} }}"
    if not place.header:
        out.put(line, BLANK, "`position`: no column of positions was recognised; set `column`, or "
                "name the table with the places of the gauges: file, gauge, column")  # fmt: skip
    elif place.unit is None and place.unit_column is None:
        out.put(line, BLANK, f"`position`: the file states no unit of {quoted(place.header)}; "
                "m is only a guess")  # fmt: skip
    else:
        out.put(line, GUESS, place.why)
    if extra:
        out.put(f"# GUESS:{extra.removeprefix(',')}: from the positions of the file")


def _origin(place: Place) -> str:
    """Keys that bring far-off chainages and negative depths onto the member."""
    x = place.x
    if not len(x):
        return ""
    if x.max() <= 0 and x.min() < 0:
        return ", reversed = true"
    far = place.chainage or x.min() > 3 * max(float(x.max() - x.min()), 1e-12)
    return f', origin = "{x.min():.9g} m"' if far and x.min() else ""


def _column(out: _Lines, kind: MemberKind, reading: Reading, spread: str) -> None:
    sensor = kind.sensor(reading.kind)
    out.put("")
    out.put("[[readings.column]]")
    names = [quoted(h) for h in reading.headers]
    name = quoted(reading.where[1]) if reading.where else names[0]
    out.put(f"column = {names[0] if len(names) == 1 else '[ ' + ', '.join(names) + ' ]'}")
    if reading.where:
        out.put(f"where = {{ {quoted(reading.where[0])} = {quoted(reading.where[1])} }}")
        out.put(f"group = {quoted(reading.where[1])}")
    others = ", ".join(s.name for s in kind.sensors)
    out.put(f'kind = "{reading.kind}"', GUESS, f"{reading.why or 'the response'}; one of {others}")
    _unit(out, kind, reading)
    if spread:
        out.put(f"sd_column = {quoted(spread)}", GUESS, "named like a standard deviation")
    else:
        out.put('sd = "estimate"', BLANK, f"`sd` of {name}: the standard deviation of one "
                'reading with its unit; "estimate" leaves it to the readings')  # fmt: skip
    if sensor.needs_distance:
        out.put('distance = "1 m"', BLANK, f"`distance` of {name}: depth of the gauges below "
                "the axis; 1 m is invented")  # fmt: skip
    if sensor.directions:
        first, second = sensor.directions
        why = f'as the readings count, or "{second}"; left out: {first}'
        out.put(f'# positive = "{first}"', "CHECK", why)


def _unit(out: _Lines, kind: MemberKind, reading: Reading) -> None:
    name = quoted(reading.headers[0])
    if reading.unit_column is not None:
        out.put(f"unit_column = {quoted(reading.unit_column)}", GUESS, "its texts are units")
    elif reading.unit is not None and len(reading.headers) == 1:
        out.put(f"unit = {quoted(reading.unit)}", GUESS, "as the file states it")
    elif reading.unit is not None:
        out.put(f"# unit = {quoted(reading.unit)}", "CHECK", "the file states it, read block by "
                "block")  # fmt: skip
    elif kind.name == "general":
        out.put('unit = "1"', GUESS, "the file states none: plain numbers")
    else:
        plain = kind.sensor(reading.kind).unit in ("1", "")
        effect = (
            "until then the numbers count as they stand" if plain else "it cannot be read before"
        )
        out.put(f"# unit = {quoted(_example(kind, reading.kind))}", BLANK,
                f"`unit` of {name}: the file states none; {effect}")  # fmt: skip


def _example(kind: MemberKind, sensor: str) -> str:
    demo: Mapping[str, str] = kind.demo["column"]  # type: ignore[assignment]
    if demo["kind"] == sensor:
        return demo["unit"]
    return "ue" if sensor == "strain" else kind.sensor(sensor).unit


def _further(out: _Lines, reading: Reading) -> None:
    names = " ".join(map(quoted, reading.headers))
    unit = f", unit = {quoted(reading.unit)}" if reading.unit else ""
    out.put("")
    out.put(f"# CHECK: {names} fits too ({reading.why}). If it holds readings of this member:")
    out.put("# [[readings.column]]")
    out.put(f"# column = {quoted(reading.headers[0])}")
    out.put(f"# kind = {quoted(reading.kind)}{unit.replace(', ', chr(10) + '# ')}")
    out.put('# sd = "estimate"')


_HINTS = {
    "time": "times; needed only for drift: time = {{ column = {} }}",
    "phase": "a phase? then `column` is an amplitude: phase = {{ column = {}, unit = \"deg\" }} "
             "beside it, and `frequency` in [member]",
    "sd_column": "a standard deviation? sd_column = {} instead of sd",
    "where": "picks rows? where = {{ {} = \"…\" }} takes those with one text only",
    "twice": "stands more than once in the header and cannot be named",
    "": "not used",
}  # fmt: skip


def _others(out: _Lines, found: Guesses) -> None:
    if found.notes:
        out.put("")
        out.put("# Other columns of the file:")
    plain = [quoted(n) for n, key in found.notes if not key]
    for name, key in found.notes:
        if key:
            out.put(f"# {quoted(name)}: {_HINTS[key].format(quoted(name))}")
    if plain:
        shown = ", ".join(plain[:30]) + (f" and {len(plain) - 30} more" if plain[30:] else "")
        out.put(f"# {shown}: not used")


def _member(kind: MemberKind, found: Guesses, text: str, lines: _Lines) -> str:
    """The member and source of the template, as long as the positions reach."""
    member = text[text.index("[member]") : text.index("[readings]")]
    size = _extent(found.place)
    lines.todo.append("[member]: numbers and ends are invented ones; replace all of them")
    if size is None:
        return _amounts(kind, found, member)
    low, high = size
    keys = ("start", "end") if "start = " in member else ("inner_radius", "outer_radius")
    if kind.geometry == "line" and kind.name != "general":
        member = _set(member, "length", f'"{high:.9g} m"', "the last position; the member may be "
                      "longer")  # fmt: skip
    elif kind.name == "general":
        member = _set(member, keys[0], f"{min(low, 0.0):.9g}", "from the positions")
        member = _set(member, keys[1], f"{high:.9g}", "the last position")
    else:
        member = _set(member, keys[1], f'"{high:.9g} m"', "the last position")
        inner = re.search(r'inner_radius = "([0-9.e-]+) m"', member)
        if inner and float(inner[1]) > low:
            member = _set(member, keys[0], f'"{low:.9g} m"', "the first position")
    return _amounts(kind, found, member)


def _set(member: str, key: str, value: str, why: str) -> str:
    line = f"{key} = {value}"
    return re.sub(rf"^{key} = .*$", lambda _: f"{line:<43} # {GUESS}: {why}", member, count=1,
                  flags=re.MULTILINE)  # fmt: skip


def _extent(place: Place) -> tuple[float, float] | None:
    """First and last place on the member in metres; None when they are not known."""
    x = place.x
    if not len(x):
        return None
    keys = _origin(place)
    if "reversed" in keys:
        x = -x
    if "origin" in keys:
        x = x - x.min()
    low, high = float(x.min()), float(x.max())
    return (max(low, 0.0), high) if high > 0 else None


def _amounts(kind: MemberKind, found: Guesses, text: str) -> str:
    """The amount (mol, kg, Bq) that the readings are in."""
    unit = next((r.unit for r in found.readings if r.unit), None)
    if "amount" not in kind.response_unit or unit is None:
        return text
    amount = amount_of(unit, kind.response_unit)
    return text if amount in ("", "mol") else re.sub(r"\bn?mol\b", amount, text)


def _assembled(text: str, path: Path, member: str, lines: _Lines) -> str:
    source = text[text.index("[source]") :]
    if "mol" in source and "mol" not in member:
        new = re.search(r"\b(Bq|kg)\b", member)
        source = re.sub(r"\bn?mol\b", new[0] if new else "mol", source)
    zones = '# zones = [ { name = "…", from = "…", to = "…" } ]'
    source = re.sub(r"^zones = .*$", lambda _: f"{zones}  # {BLANK}: the stretches you ask about",
                    source, count=1, flags=re.MULTILINE)  # fmt: skip
    lines.todo.append("`zones` in [source]: the stretches you ask about; and its `unit`")
    head = [
        text[: text.index("\n")],
        f"# Drafted from {quoted(path.name)}. Lines marked {GUESS} were found in the file: judge",
        f"# them. Lines marked {BLANK}, and all numbers of [member], are yours to set:",
        *(f"# - {item}" for item in dict.fromkeys(lines.todo)),
        f"title = {quoted(path.stem)}",
    ]
    return "\n".join([*head, "", member + "\n".join(lines.text), "", source])
