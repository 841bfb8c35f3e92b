"""The tables of the page: everything that the charts show, as numbers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from srcfit.captions import choices_of, per_metre, percent, section_curves, unit
from srcfit.frames import flags, header, number, numbers, pretty, pretty_header, texts
from srcfit.recovery import Recovery, Result
from srcfit.report.data import influence_unit
from srcfit.report.html import Num, name, num, safe, table
from srcfit.rounding import UNDETERMINED, brief, plus_minus, round_like, round_pair

Row = list[str | Num]
IMAGINARY = ("value_imag", "predicted_imag", "residual_imag")  # driven members


def with_unit(text: str, unit_text: str) -> str:
    """Header of a column: name and unit in brackets."""
    shown = pretty(unit_text)
    return f"{text} [{shown}]" if shown else text


def estimate(row: Mapping[str, Any], driven: bool = False) -> list[Num]:
    """Cells of value, standard uncertainty and both ends of the interval, rounded together.

    Of a driven member the imaginary part stands after the real part, and so do its ends.
    """
    value, sd = round_pair(row.get("value"), row.get("sd"))

    def like(*keys: str) -> list[Num]:
        return [num(row.get(k), round_like(row.get(k), row.get("sd"), row.get("value")))
                for k in keys]  # fmt: skip

    first, spread = num(row.get("value"), value or UNDETERMINED), num(row.get("sd"), sd)
    if not driven:
        return [first, spread, *like("lower", "upper")]
    ends = like("lower", "upper", "imaginary_lower", "imaginary_upper")
    return [first, *like("imaginary"), spread, *ends]


def estimate_heads(recovery: Result, unit_text: str) -> list[str]:
    """Headers of the cells of `estimate`."""
    ends = [f"{percent(recovery)} {word}" for word in ("from", "to")]
    if not recovery.case.member.driven:
        return [with_unit("value", unit_text), "standard uncertainty", *ends]
    parts = ("real part", "imaginary part")
    both = [f"{part}, {end}" for part in parts for end in ends]
    return [*(with_unit(part, unit_text) for part in parts), "standard uncertainty", *both]


def share(value: Any) -> Num:
    """A data share as a percentage."""
    v = number(value)
    return num(v, f"{brief(100 * v, 2)} %" if np.isfinite(v) else "")


def zones(recovery: Recovery) -> str:
    """Zones, the whole and the background."""
    facts, P, driven = recovery.facts, unit(recovery, "position"), recovery.case.member.driven
    means = dict(zip(texts(recovery.zones, "name"), numbers(recovery.zones, "mean"), strict=True))
    rows: list[Row] = [
        [name(z.get("name")), num(z.get("from")), num(z.get("to")), *estimate(z, driven),
         _mean(z, means.get(str(z.get("name")))), share(z.get("data_share"))]
        for z in facts.get("zones") or []
    ]  # fmt: skip
    blank: list[Num] = [num(None)] * 2
    rows.append(
        ["whole member", *blank, *estimate(facts.get("total") or {}, driven), num(None), num(None)]
    )
    heads = ["zone", with_unit("from", P), with_unit("to", P)]
    heads += estimate_heads(recovery, unit(recovery, "total"))
    heads += [with_unit("mean", unit(recovery, "source")), "share of the data"]
    return table("table-zones", "Totals by zone", heads, rows)


def _mean(zone: Mapping[str, Any], mean: float | None) -> Num:
    """Mean density of a zone, rounded as its value is."""
    value, sd = number(zone.get("value")), number(zone.get("sd"))
    if mean is None or not value:
        return num(mean)
    return num(mean, round_like(mean, abs(sd * mean / value)))


def background(recovery: Result) -> str:
    """The constant background density."""
    row = recovery.facts.get("background")
    if not row or row.get("value") is None:
        return ""
    driven = recovery.case.member.driven
    heads = ["part", *estimate_heads(recovery, unit(recovery, "source"))]
    return table("table-background", "Background", heads, [["background", *estimate(row, driven)]])


def lumped(recovery: Result) -> str:
    """Lumped parts with their places."""
    driven = recovery.case.member.driven
    rows: list[Row] = [
        [name(r.get("name")), num(r.get("at")), *estimate(r, driven)]
        for r in recovery.facts.get("lumped") or []
    ]
    heads = ["lumped part", with_unit("at", unit(recovery, "position"))]
    heads += estimate_heads(recovery, unit(recovery, "total"))
    return table("table-lumped", "Lumped parts", heads, rows)


def with_own_units(recovery: Result, key: str, caption: str, first: Sequence[str]) -> str:
    """A table of estimates that carry their own unit: nuisances, reactions.

    Of a comparison with what each campaign says by itself.
    """
    driven = recovery.case.member.driven
    sides = [k for k in ("a", "b") if any(k in r for r in recovery.facts.get(key) or [])]
    rows: list[Row] = []
    for r in recovery.facts.get(key) or []:
        lead: Row = [name(r.get(first[0]))]
        lead += [num(r.get(k)) if k == "at" else safe(r.get(k)) for k in first[1:]]
        own = [r.get(k) or {} for k in sides]
        lead += [num(n.get("value"), plus_minus(n) if n else "–") for n in own]
        rows.append([*lead, *estimate(r, driven), safe(pretty(str(r.get("unit") or "")))])
    heads = [with_unit(k, unit(recovery, "position")) if k == "at" else k for k in first]
    heads += [k.upper() for k in sides]
    return table(
        f"table-{key}", caption, [*heads, *estimate_heads(recovery, ""), "unit"], rows
    )  # fmt: skip


def detection(recovery: Recovery) -> str:
    """Decision threshold and detection limit of each lumped part."""
    T = unit(recovery, "total")
    rows: list[Row] = [
        [name(r.get("name")), num(r.get("critical"), brief(r.get("critical"), 2)),
         num(r.get("limit"), brief(r.get("limit"), 2)),
         "detected" if r.get("detected") else "not detected"]
        for r in recovery.facts.get("detection") or []
    ]  # fmt: skip
    heads = [
        "part",
        with_unit("decision threshold", T),
        with_unit("detection limit", T),
        "verdict",
    ]
    return table("table-detection", "Detection (not detected is not absent)", heads, rows)


def cells(recovery: Result) -> str:
    """The source cell by cell."""
    frame = recovery.source
    amounts = ("estimate", "estimate_imag", "lower", "upper", "lower_imag", "upper_imag")
    order = ("x", *amounts[:2], "sd", *amounts[2:], "data_share", "resolution")
    names = [n for n in order if header(frame, n)]
    columns = [numbers(frame, n) for n in names]
    sd = numbers(frame, "sd")
    rows: list[Row] = []
    for i in range(len(frame)):
        row: Row = []
        for key, column in zip(names, columns, strict=True):
            if key == "data_share":
                row.append(share(column[i]))
            elif key in amounts:
                row.append(num(column[i], round_like(column[i], sd[i])))
            else:
                row.append(num(column[i], digits=5 if key == "x" else 2))
        rows.append(row)
    heads = [pretty_header(header(frame, n) or n).replace("_", " ") for n in names]
    for old, new in (("estimate imag", "imaginary part"), (" imag", ", imaginary part")):
        heads = [h.replace(old, new) for h in heads]
    return table("table-source", "Source, cell by cell", heads, rows, fold=True)


def inside(recovery: Recovery) -> str:
    """Forces or flows inside the member, place by place."""
    frame = recovery.section
    curves = section_curves(recovery)
    if frame is None or not curves:
        return ""
    heads = [pretty_header(header(frame, "x") or "x")]
    rows: list[Row] = [[num(v, digits=5)] for v in curves[0].x]
    for c in curves:
        key = c.name.replace(" ", "_")
        amounts = {"": c.value, " from": c.lower, " to": c.upper}
        for word, end in (("", ""), (" from", "_lower"), (" to", "_upper")):
            if header(frame, f"{key}{end}_imag"):
                amounts[f", imaginary part{word}"] = numbers(frame, f"{key}{end}_imag")
        heads += [with_unit(f"{c.name}{word}", c.unit) for word in amounts]
        for i, row in enumerate(rows):
            row += [num(v[i], round_like(v[i], c.sd[i])) for v in amounts.values()]
    return table("table-inside", "Inside the member, place by place", heads, rows, fold=True)


def readings(recovery: Recovery) -> str:
    """Every row read, used or not."""
    frame = recovery.readings
    files = texts(frame, "file")
    several = len(set(files)) > 1
    words = {k: texts(frame, k) for k in ("line", "group", "kind", "unit", "reason")}
    used, x, sd = flags(frame), numbers(frame, "x"), numbers(frame, "sd")
    amounts = ("value", "predicted", "residual", "leave_one_out")
    columns = {k: numbers(frame, k) for k in amounts}
    z = numbers(frame, "standardised")
    twins = [n for n in IMAGINARY if header(frame, n)]
    beside = [numbers(frame, n) for n in twins]
    moves = header(frame, "shift_total")
    shift = numbers(frame, "shift_total") if moves else None
    rows: list[Row] = []
    for i in range(len(frame)):
        row: Row = [safe(words["line"][i])]
        row += [name(files[i])] if several else []
        row += [name(words["group"][i]), safe(words["kind"][i]), safe(pretty(words["unit"][i]))]
        row += [num(x[i], digits=6), num(columns["value"][i], digits=6)]
        row += [num(sd[i], digits=2), "yes" if used[i] else f"no: {name(words['reason'][i])}"]
        row += [
            num(columns[k][i], round_like(columns[k][i], sd[i])) for k in ("predicted", "residual")
        ]
        row += [num(z[i], digits=2), num(columns["leave_one_out"][i], digits=3)]
        row += [num(part[i], round_like(part[i], sd[i])) for part in beside]
        row += [] if shift is None else [num(shift[i], digits=2)]
        rows.append(row)
    heads = ["line", *(["file"] if several else []), "group", "kind", "unit"]
    heads += [
        pretty_header(header(frame, "x") or "x"),
        "value",
        "sd",
        "used",
        "predicted",
        "residual",
    ]
    heads += ["residual / sd", "leave-one-out residual"]
    heads += [f"{n.removesuffix('_imag')}, imaginary part" for n in twins]
    heads += [with_unit("moves the total by", unit(recovery, "total"))] if moves else []
    return table("table-readings", "Every reading", heads, rows, fold=True)


def criteria(recovery: Recovery) -> str:
    """What each criterion chooses."""
    chosen = str((recovery.facts.get("strength") or {}).get("choose"))
    found = (recovery.facts.get("strength") or {}).get("choices") or {}
    values = choices_of(recovery)
    rows: list[Row] = [
        [safe(k) + (" (in use)" if k == chosen else ""),
         num(values.get(k), brief(values.get(k)) or "no choice")]
        for k in map(str, found)
    ]  # fmt: skip
    heads = ["criterion", with_unit("strength", unit(recovery, "strength"))]
    return table("table-criteria", "Choices of the criteria", heads, rows)


def influence(recovery: Recovery) -> str:
    """Where each reading feels the source most."""
    lines = np.real(np.atleast_2d(recovery.pictures.influence))
    if not lines.size:
        return ""
    place = recovery.pictures.x * per_metre(recovery)
    frame = recovery.readings
    line, kind, x = texts(frame, "line"), texts(frame, "kind"), numbers(frame, "x")
    rows: list[Row] = []
    for k, i in enumerate(recovery.pictures.influence_of):
        top = int(np.argmax(np.abs(lines[k])))
        there = num(lines[k][top], digits=3)
        row: Row = [safe(line[i]), safe(kind[i]), num(x[i]), num(place[top]), there]
        rows.append([*row, safe(influence_unit(recovery, kind[i]))])
    P = unit(recovery, "position")
    heads = ["line", "kind", with_unit("x", P), with_unit("feels most at", P), "there", "SI unit"]
    return table("table-influence", "Where each reading feels the source most", heads, rows,
                 fold=True)  # fmt: skip


def noise(recovery: Recovery) -> str:
    """Noise of each group, stated or estimated."""
    rows: list[Row] = []
    for g in (recovery.facts.get("noise") or {}).get("groups") or []:
        row: Row = [name(g.get("group")), safe(g.get("kind")), num(g.get("sd"), digits=2)]
        known = "estimated from the readings" if g.get("estimated") else "stated"
        rows.append([*row, safe(pretty(str(g.get("unit") or ""))), known])
    heads = ["group", "kind", "sd of one reading", "unit", "how known"]
    return table("table-noise", "Noise", heads, rows)


def modes(recovery: Recovery) -> str:
    """The first eigenvalues."""
    values = np.real(np.asarray(recovery.pictures.eigenvalues))
    rows: list[Row] = [[str(i + 1), num(v)] for i, v in enumerate(values)]
    return table("table-modes", "Eigenvalues (SI)", ["mode", "eigenvalue"], rows, fold=True)


def excluded(recovery: Recovery) -> str:
    """Readings that were not used."""
    rows: list[Row] = [
        [name(e.get("file")), num(e.get("line"), str(e.get("line"))), safe(e.get("reason"))]
        for e in recovery.facts.get("excluded") or []
    ]
    return table("table-excluded", "Readings not used", ["file", "line", "reason"], rows,
                 fold=len(rows) > 20)  # fmt: skip
