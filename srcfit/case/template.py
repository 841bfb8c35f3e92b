"""A commented case to fill in, one for every member kind."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from srcfit.case.reader import suggest
from srcfit.errors import CaseError
from srcfit.member import CoefficientSpec, MemberKind
from srcfit.members import MEMBERS

SPAN_KEYS = ("order", "length", "inner_radius", "outer_radius", "start", "end")


def template(kind: str) -> str:
    """The text of a case file with invented numbers, each to be replaced by one's own.

    Parameters
    ----------
    kind : str
        Name of a member kind.

    Returns
    -------
    str
        A TOML text that `load_case` accepts as it stands; its readings are due in a file
        ``readings.csv`` beside it.

    Raises
    ------
    CaseError
        When there is no such kind.
    """
    found = MEMBERS.get(kind)
    if found is None:
        raise CaseError(f"{kind!r} is no member kind", "", suggest(kind, list(MEMBERS)))
    parts = [
        [
            f"# {found.title}.",
            "# Every number here is invented: replace it by your own. Lines that begin with # are",
            "# remarks and keys that may be left out.",
            f"title = {_toml(found.demo['title'])}",
        ],
        _member(found),
        _readings(found),
        _source(found),
        _strength(),
    ]
    return "\n\n".join("\n".join(lines) for lines in parts) + "\n"


def _toml(value: Any) -> str:
    """A value as TOML text."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{k} = {_toml(v)}" for k, v in value.items()) + " }"
    if isinstance(value, str):
        return '"' + value.replace("\\", "\\\\").replace('"', '\\"') + '"'
    return repr(value)


def _line(key: str, value: Any, remark: str = "", *, active: bool = True) -> str:
    text = f"{'' if active else '# '}{key} = {_toml(value)}"
    return f"{text:<43} # {remark}" if remark else text


def _member(kind: MemberKind) -> list[str]:
    demo: Mapping[str, Any] = kind.demo["member"]  # type: ignore[assignment]
    lines = ["[member]", _line("kind", kind.name)]
    lines += [_line(key, demo[key]) for key in SPAN_KEYS if key in demo]
    for spec in kind.coefficients:
        value = demo.get(spec.key, _blank(spec))
        remark = spec.meaning + (f" [{spec.unit}]" if spec.unit != "1" else "")
        lines.append(_line(spec.key, value, remark, active=spec.key in demo))
    if kind.relative:
        unit = {"K": "degC"}.get(kind.response_unit, kind.response_unit)
        blank = f"20 {unit}".replace("amount", "mol")
        lines.append(
            _line("ambient", demo.get("ambient", blank), f"{kind.response} of the surroundings",
                  active="ambient" in demo)
        )  # fmt: skip
    lines.append("# ends: " + ", ".join(kind.end_words) + ", or " + _end_tables(kind))
    lines += [_line(side, demo[side]) for side in ("left", "right") if side in demo]
    first = next(c.key for c in kind.coefficients if c.required)
    lines.append(
        _line("uncertainty", {first: "5 %"}, "standard uncertainty, carried into every interval",
              active=False)
    )  # fmt: skip
    return lines


def _blank(spec: CoefficientSpec) -> str:
    return f"… {spec.unit}" if spec.unit != "1" else "…"


def _end_tables(kind: MemberKind) -> str:
    if kind.order == 4:
        return "{ deflection_spring = …, rotation_spring = … }"
    if kind.relative:
        return "{ value = … } or { transfer = …, ambient = … }"
    return "{ value = … } or { spring = … }"


def _readings(kind: MemberKind) -> list[str]:
    column: Mapping[str, Any] = kind.demo["column"]  # type: ignore[assignment]
    others = ", ".join(s.name for s in kind.sensors)
    remarks = {
        "column": "text of the column's header",
        "kind": f"one of {others}",
        "sd": 'standard deviation of one reading, or "estimate"',
        "positive": "the direction in which the readings count",
    }
    lines = [
        "[readings]",
        _line("file", "readings.csv"),
        _line("position", {"column": "x [m]", "unit": "m"}),
        "",
        "[[readings.column]]",
    ]
    lines += [_line(key, value, remarks.get(key, "")) for key, value in column.items()]
    lines.append(
        _line("offset", "unknown", "where the zero of the readings is not known", active=False)
    )
    return lines


def _source(kind: MemberKind) -> list[str]:
    demo: Mapping[str, Any] = kind.demo["source"]  # type: ignore[assignment]
    name, start, end = demo["zone"]
    zone = f'{{ name = "{name}", from = "{start}", to = "{end}" }}'
    lines = [
        "[source]",
        _line("unit", demo["unit"], "of the answer"),
        _line("cells", demo["cells"]),
        _line("sign", demo.get("sign", "any"), "any, nonnegative or nonpositive"),
        f"zones = [ {zone} ]",
        "# breaks = [ … ]                           # places where the source is known to jump",
        "# lumped = [ { name = …, at = … } ]        # sources at a place",
        "# known = [ { from = …, to = …, value = … } ]",
        "# ceiling = …                              # the largest density that is possible",
        '# monotone = [ { from = …, to = …, trend = "falling" } ]   # or "rising"',
    ]
    return lines


def _strength() -> list[str]:
    return [
        "[strength]",
        _line("roughness", "adaptive", "or averaged (smooth curves), 0, 1, 2, a length"),
        _line("choose", "averaged", "or evidence, gcv, l-curve, discrepancy … or a number"),
        _line("level", 0.95, "of the intervals"),
    ]
