"""What a case reads and asks, before anything is solved."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from srcfit.case.model import Case, ColumnSpec, Known, Lumped
from srcfit.kernel import prescribed
from srcfit.member import Unknown
from srcfit.readings.model import Readings
from srcfit.rounding import brief
from srcfit.text import bullets, clean, findings_text, join, section, table
from srcfit.units import factor
from srcfit.unknowns import restraint_label

Facts = Mapping[str, Any]
MOST_EXCLUDED = 40


def shown(value: Any, unit: str, si_unit: str, *, difference: bool = False) -> Any:
    """An SI amount, or an array of them, in `unit`."""
    scale, offset = factor(unit, si_unit, "unit", difference=difference)
    return (value - offset) / scale


def inspect(case: Case, readings: Readings) -> dict[str, Any]:
    """Facts about a case and its readings.

    Returns
    -------
    mapping
        title, case, member, understood (sentences), inputs, fit (read and used), columns (one
        mapping a column and group: counts, excluded by reason, ranges), excluded, asks, findings.
    """
    rows = range(len(readings))
    return {
        "title": case.title,
        "case": str(case.path) if case.path is not None else None,
        "member": _plain(case.member_text),
        "member_in_words": _member(case),
        "understood": list(readings.understood),
        "inputs": [{"file": f, "sha256": h} for f, h in readings.inputs.items()],
        "fit": {"read": len(readings), "used": int(readings.used.sum())},
        "columns": [
            _column(case, readings, spec, i) for i, spec in enumerate(case.columns)
        ],
        "excluded": [
            {"file": readings.file[i], "line": int(readings.line[i]), "reason": readings.reason[i]}
            for i in rows if not readings.used[i]
        ],
        "asks": _asks(case),
        "findings": [
            {"code": f.code, "level": f.level, "sentence": f.sentence} for f in readings.findings
        ],
    }  # fmt: skip


def _member(case: Case) -> str:
    """Kind, extent, ends and what stands between them."""
    member, at = case.member, case.source.position_unit
    extent = " to ".join(brief(shown(x, at, "m"), 6) for x in (member.start, member.end))
    inside = {"support": member.supports, "hinge": member.hinges, "interface": member.interfaces}
    words = [
        f"{member.kind.name} from {extent} {at}",
        f"left {member.left.word}, right {member.right.word}",
        *(f"{name}s at {_places(case, items)} {at}" for name, items in inside.items() if items),
    ]
    if member.driven:
        words.append(f"driven at {brief(member.frequency, 6)} Hz")
    return "; ".join(words)


def _places(case: Case, items: Sequence[Any]) -> str:
    unit = case.source.position_unit
    return ", ".join(brief(shown(item.at, unit, "m"), 6) for item in items)


def _plain(value: object) -> Any:
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(v) for v in value]
    return value if value is None or isinstance(value, (str, int, float)) else str(value)


def _column(case: Case, readings: Readings, spec: ColumnSpec, number: int) -> dict[str, Any]:
    """Counts and ranges of one column of the case."""
    here = np.flatnonzero(readings.spec == number)
    used = here[readings.used[here]]
    si = case.member.kind.sensor(spec.kind).unit
    units = list(dict.fromkeys(readings.unit[i] for i in here))
    unit = units[0] if len(units) == 1 else (spec.unit or si)
    at = case.source.position_unit
    values = [shown(float(np.real(readings.value[i])), unit, si) for i in used]
    places = [shown(float(readings.x[i]), at, "m") for i in used]
    sds = [shown(float(readings.sd[i]), unit, si, difference=True) for i in used]
    reasons = Counter(readings.reason[i] for i in here if not readings.used[i])
    return {
        "column": ", ".join(spec.columns), "group": spec.group, "kind": spec.kind, "unit": unit,
        "position_unit": at, "read": len(here), "used": len(used), "excluded": dict(reasons),
        "x": _range(places), "value": _range(values), "sd": _range(sds),
        "sd_estimated": spec.estimate_sd, "positive": spec.positive or None,
        "unknown": _unknowns(spec),
    }  # fmt: skip


def _range(values: list[float]) -> list[float] | None:
    """Smallest and largest, None without a number."""
    finite = [v for v in values if np.isfinite(v)]
    return [min(finite), max(finite)] if finite else None


def _unknowns(spec: ColumnSpec) -> list[str]:
    """Nuisances of a column that the readings must tell."""
    step = spec.step.amount if spec.step is not None else None
    amounts = {"offset": spec.offset, "scale": spec.scale, "drift": spec.drift, "step": step}
    return [name for name, amount in amounts.items() if isinstance(amount, Unknown)]


def _asks(case: Case) -> dict[str, Any]:
    """What the case wants to know and what it states, in the user's units."""
    source, strength, kind = case.source, case.strength, case.member.kind

    def at(x: float) -> Any:
        return shown(x, source.position_unit, "m")

    def total(value: float) -> Any:
        return shown(value, source.total_unit, kind.total_unit)

    def density(value: float) -> Any:
        return shown(value, source.unit, kind.source_unit)

    def known(part: Known) -> dict[str, Any]:
        point = part.start == part.end
        value = total(part.value) if point else density(part.value)
        return {"from": at(part.start), "to": at(part.end), "value": value,
                "unit": source.total_unit if point else source.unit}  # fmt: skip

    def lumped(part: Lumped) -> dict[str, Any]:
        between = None if part.between is None else [at(x) for x in part.between]
        place = None if part.at is None else at(part.at)
        return {"name": part.name, "at": place, "between": between, "width": at(part.width)}

    limit = source.limit
    return {
        "units": {"position": source.position_unit, "source": source.unit,
                  "total": source.total_unit},
        "cells": source.cells, "sign": source.sign, "smooth": source.smooth,
        "background": source.background,
        "zones": [{"name": z.name, "from": at(z.start), "to": at(z.end)} for z in source.zones],
        "breaks": [at(x) for x in source.breaks],
        "lumped": [lumped(part) for part in source.lumped],
        "known": [known(part) for part in source.known],
        "zero": [[at(a), at(b)] for a, b in source.zero],
        "total": None if source.total is None else {
            "value": total(source.total.value), "sd": total(source.total.sd)},
        "limit": None if limit is None else {
            "zone": limit.zone,
            "at_most": density(limit.at_most) if limit.density else total(limit.at_most),
            "unit": source.unit if limit.density else source.total_unit},
        "unknown": [restraint_label(case, name)[0] for name, amount in prescribed(case.member)
                    if isinstance(amount, Unknown)],
        "strength": {"solver": strength.solver, "roughness": strength.roughness,
                     "choose": strength.choose, "level": strength.level},
    }  # fmt: skip


def text(facts: Facts) -> str:
    """Facts of `inspect` as tables for a terminal."""
    fit = facts["fit"]
    left = fit["read"] - fit["used"]
    tally = f"{fit['used']} of {fit['read']} readings are used"
    return join(
        f"{clean(facts['title'])}\n{clean(facts['member_in_words'])}",
        section("Files", bullets(facts["understood"])),
        section(f"Readings: {tally}", _columns_text(facts["columns"])),
        section(f"Excluded: {left}", _excluded_text(facts)),
        section("Asked", _asks_text(facts["asks"])),
        section("Findings", findings_text(facts["findings"])),
        "Values are in the member's own sign, after baseline and correction.",
    )


def _columns_text(columns: list[Facts]) -> str:
    rows = [
        (c["group"], _short(c["column"]), c["kind"], f"{c['used']}/{c['read']}",
         f"{_ends(c['x'])} {c['position_unit']}", f"{_ends(c['value'])} {c['unit']}",
         f"{_ends(c['sd']) if c['sd'] else 'estimated'}", c["positive"] or "",
         ", ".join(c["unknown"])) for c in columns
    ]  # fmt: skip
    header = ("group", "column", "kind", "used", "places", "values", "sd", "positive", "unknown")
    return table(header, rows, "lllrrrr")


def _short(names: str) -> str:
    """Names of a column, or the first and the last of many."""
    parts = names.split(", ")
    return names if len(parts) < 4 else f"{parts[0]} .. {parts[-1]} ({len(parts)})"


def _ends(pair: list[float] | None) -> str:
    if pair is None:
        return "none"
    low, high = (brief(v, 5) for v in pair)
    return low if low == high else f"{low} to {high}"


def _excluded_text(facts: Facts) -> str:
    rows = [(f"{e['file']}:{e['line']}", e["reason"]) for e in facts["excluded"]]
    more = len(rows) - MOST_EXCLUDED
    body = table(("", ""), rows[:MOST_EXCLUDED])
    return f"{body}\nand {more} more (all of them with --json)" if more > 0 else body


def _asks_text(asks: Facts) -> str:
    at, density, total = (asks["units"][k] for k in ("position", "source", "total"))
    rows = [("source", f"in {density}, total in {total}, {asks['cells']} cells")]
    rows += [("sign", asks["sign"])] if asks["sign"] != "any" else []
    if not asks["smooth"]:
        rows.append(("smooth part", "none" + (", one background" if asks["background"] else "")))
    rows += [
        (f"zone {z['name']}", f"{brief(z['from'], 6)} to {brief(z['to'], 6)} {at}")
        for z in asks["zones"]
    ]
    rows += [("breaks", f"{', '.join(brief(x, 6) for x in asks['breaks'])} {at}")] * bool(
        asks["breaks"]
    )
    rows += [(f"lumped {p['name']}", _place(p, at)) for p in asks["lumped"]]
    rows += [("known", _known_text(k, at)) for k in asks["known"]]
    rows += [("zero", f"{brief(a, 6)} to {brief(b, 6)} {at}") for a, b in asks["zero"]]
    if asks["total"]:
        t = asks["total"]
        rows.append(("known total", f"{brief(t['value'])} ± {brief(t['sd'])} {total}"))
    if asks["limit"]:
        t = asks["limit"]
        rows.append(("limit", f"{t['zone']} at most {brief(t['at_most'], 4)} {t['unit']}"))
    if asks["unknown"]:
        rows.append(("unknown amounts", ", ".join(asks["unknown"])))
    s = asks["strength"]
    how = f"{s['solver']}, roughness {s['roughness']}, strength {s['choose']}"
    rows.append(("method", f"{how}, {100 * s['level']:g} % intervals"))
    return table(("", ""), rows)


def _place(part: Facts, unit: str) -> str:
    if part["at"] is None:
        return f"between {brief(part['between'][0], 6)} and {brief(part['between'][1], 6)} {unit}"
    wide = f", {brief(part['width'])} {unit} wide" if part["width"] else ""
    return f"at {brief(part['at'], 6)} {unit}{wide}"


def _known_text(part: Facts, at: str) -> str:
    value = f"{brief(part['value'], 4)} {part['unit']}"
    if part["from"] == part["to"]:
        return f"{value} at {brief(part['from'], 6)} {at}"
    return f"{value} on {brief(part['from'], 6)} to {brief(part['to'], 6)} {at}"
