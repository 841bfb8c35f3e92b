"""Member kinds described for people and for machines."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from typing import Any

from srcfit.member import MemberKind, SensorSpec
from srcfit.members.general import GENERAL_2, GENERAL_4
from srcfit.text import WIDTH, bullets, join, section, table

ENDS_2 = (
    ('"fixed"', "the response is 0, or the ambient where it refers to one"),
    ('"free", "insulated", "closed"', "no flux"),
    ('"axis"', "the regular end at radius 0 (the default there)"),
    ('"regular"', "the regular end where p falls to 0"),
    ("{ value = ... }", 'prescribed; value = "unknown" leaves it to the readings'),
    ("{ spring = ... }", "elastic: force = spring × response"),
    (
        "{ transfer = ..., ambient = ... }",
        "convective: flux out = transfer × (response − ambient)",
    ),
)
ENDS_4 = (
    ('"pinned"', "no deflection, no moment"),
    ('"clamped"', "no deflection, no rotation"),
    ('"free"', "no moment, no shear"),
    ('"guided"', "no rotation, no shear"),
    ("{ deflection_spring = ..., rotation_spring = ... }", 'elastic; each may be "rigid"'),
    ('{ kind = "pinned", settlement = ... }', 'moved; "unknown" leaves it to the readings'),
    ('{ kind = "clamped", rotation = ... }', 'a clamp that gives; "unknown" likewise'),
)
SPRING, TRANSFER = ENDS_2[-2:]
GENERAL_END = ("{ a = ..., b = ... }", "a u + b (p u') = 0")


def kinds_text(kinds: Mapping[str, MemberKind]) -> str:
    """One line a kind: its name, what responds and what drives it."""
    rows = [
        (k.name, k.title, f"{k.response} [{k.response_unit}]", k.source_unit, k.total_unit)
        for k in kinds.values()
    ]
    listed = table(("kind", "", "response", "source", "total"), rows)
    return f"{listed}\n\n`srcfit kinds KIND` shows what one of them takes."


def end_words(kind: MemberKind) -> list[tuple[str, str]]:
    """What may stand for `left` and `right`, with its meaning."""
    ends = list(ENDS_2 if kind.order == 2 else ENDS_4)
    known = set(kind.end_words)
    ends = [e for e in ends if e[0].startswith("{") or known & set(e[0].split('"')[1::2])]
    if kind.name == "general":
        return [e for e in (*ends, GENERAL_END) if e != TRANSFER] if kind.order == 2 else ends
    return [e for e in ends if e != (SPRING if kind.relative else TRANSFER)]


def member_keys(kind: MemberKind) -> list[dict[str, Any]]:
    """Keys of `[member]` besides `kind`, `left` and `right`: coefficients and places."""
    if kind.name == "general":
        places = [
            ("order", "", "2 or 4"),
            ("start", "m", "first place"),
            ("end", "m", "last place"),
        ]
    elif kind.geometry == "line":
        places = [("length", "m", "distance between the ends")]
    else:
        places = [("inner_radius", "m", "0 m for a solid body"), ("outer_radius", "m", "")]
    keys = [_key(key, unit, True, None, meaning) for key, unit, meaning in places]
    keys += [_key(c.key, c.unit, c.required, c.default, c.meaning) for c in kind.coefficients]
    if kind.relative:
        meaning = "reference of the response; required with a loss or an end that uses it"
        keys.append(_key("ambient", kind.response_unit, False, None, meaning))
    if kind.name == "general":
        keys.append(_key("lambda", "1", False, 0.0, "L u = ... - lambda r u"))
    else:
        keys.append(_key("frequency", "Hz", False, None, "drives the member at this frequency"))
    if kind.drive == "inertia" and kind.name != "general":
        keys.append(_key("damping", "1", False, 0.0, "loss factor of a driven member"))
    meaning = "relative standard uncertainty of each key named"
    return [*keys, _key("uncertainty", "", False, None, meaning)]


def _key(
    key: str, unit: str, required: bool, default: float | None, meaning: str
) -> dict[str, Any]:
    return {"key": key, "unit": unit, "required": required, "default": default,
            "meaning": meaning}  # fmt: skip


def kind_facts(kind: MemberKind) -> dict[str, Any]:
    """The same as `kind_text` for machines; `general` has its order 4 in `other_order`."""
    sensors = [
        {"kind": s.name, "unit": s.unit, "needs_distance": s.needs_distance,
         "positive": list(s.directions)} for s in kind.sensors
    ]  # fmt: skip
    facts: dict[str, Any] = {
        "kind": kind.name, "title": kind.title, "order": kind.order, "geometry": kind.geometry,
        "response": kind.response, "response_unit": kind.response_unit,
        "source_unit": kind.source_unit, "total_unit": kind.total_unit,
        "keys": member_keys(kind),
        "ends": [{"write": write, "meaning": meaning} for write, meaning in end_words(kind)],
        "spring_unit": kind.spring_unit, "rotation_spring_unit": kind.rotation_spring_unit or None,
        "sensors": sensors, "cautions": list(kind.cautions),
    }  # fmt: skip
    return facts | {"other_order": kind_facts(GENERAL_4)} if kind is GENERAL_2 else facts


def kind_text(kind: MemberKind) -> str:
    """All that a member of this kind takes: keys, units, ends, sensor kinds, cautions."""
    whole = join(
        textwrap.fill(f"{kind.name}: {kind.title}", WIDTH),
        table(("", ""), _units(kind)),
        section("Keys of [member]", table(("", "", "", ""), _rows(member_keys(kind)))),
        section("Ends, left and right", table(("", ""), end_words(kind))),
        section("Sensor kinds", table(("", "", ""), map(_sensor, kind.sensors))),
    )
    if kind is GENERAL_2:
        return join(whole, kind_text(GENERAL_4))
    closing = f"`srcfit new {kind.name}` writes a case to fill in."
    return join(whole, section("Cautions", bullets(kind.cautions)), closing)


def _units(kind: MemberKind) -> list[tuple[str, str]]:
    springs = [u for u in (kind.spring_unit, kind.rotation_spring_unit) if u]
    return [
        ("response", f"{kind.response} [{kind.response_unit}]"),
        ("source", f"[{kind.source_unit}], its total [{kind.total_unit}]"),
        ("transfer" if kind.relative else "springs", f"[{'] and ['.join(springs)}]"),
    ]


def _rows(keys: list[dict[str, Any]]) -> list[tuple[str, str, str, str]]:
    def needed(key: Mapping[str, Any]) -> str:
        if key["required"] or key["default"] is None:
            return "required" if key["required"] else "optional"
        return f"optional ({key['default']:g})"

    return [
        (k["key"], f"[{k['unit']}]" if k["unit"] else "", needed(k), k["meaning"]) for k in keys
    ]


def _sensor(sensor: SensorSpec) -> tuple[str, str, str]:
    notes = [f"positive: {' or '.join(sensor.directions)}"] if sensor.directions else []
    notes += ["needs `distance`"] * sensor.needs_distance
    return sensor.name, f"[{sensor.unit}]", ", ".join(notes)
