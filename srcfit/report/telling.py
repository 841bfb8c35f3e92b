"""What tells the answer: resolution, heavy readings, other strengths, shares of the variance."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from srcfit.captions import unit
from srcfit.frames import header, number, numbers
from srcfit.recovery import Recovery
from srcfit.report.html import Num, name, num, safe, table
from srcfit.report.numbers import shown
from srcfit.report.tables import share, with_unit
from srcfit.rounding import brief, round_like

Row = list[str | Num]
WHOLE = "whole member"


def _asked(zone: Any) -> str:
    return WHOLE if zone is None else name(zone)


def resolution(recovery: Recovery) -> str:
    """One paragraph on what length the readings resolve."""
    if not header(recovery.source, "resolution"):
        return ""
    width = numbers(recovery.source, "resolution")
    known = width[np.isfinite(width)]
    if not len(known):
        return ""
    P, ends = unit(recovery, "position"), np.quantile(known, [0.1, 0.5, 0.9])
    low, middle, high = (brief(v, 2) for v in ends)
    return "<p>" + shown(
        f"The readings resolve about {middle} {P} ({low} to {high} {P} over most of the member): "
        "each such length holds one independent piece of knowledge. Finer detail of the curve is "
        "smoothness, not reading."
    ) + "</p>"  # fmt: skip


def decade(recovery: Recovery) -> str:
    """Total and zones at a tenth and at ten times the strength."""
    both = recovery.facts.get("decade") or {}
    weaker, stronger = both.get("weaker"), both.get("stronger")
    if not weaker or not stronger:
        return ""
    facts, T = recovery.facts, unit(recovery, "total")
    here = [facts.get("total") or {}, *(facts.get("zones") or [])]
    moved = [_values(part) for part in (weaker, stronger)]
    labels = [WHOLE, *(name(z.get("name")) for z in facts.get("zones") or [])]
    rows: list[Row] = []
    for label, now, low, high in zip(labels, here, *moved, strict=True):
        cells = (low, now.get("value"), high)
        rows.append([label, *(num(v, round_like(v, now.get("sd"))) for v in cells)])
    dof = (facts.get("strength") or {}).get("effective_dof")
    rows.append(
        ["effective degrees of freedom", *(num(v, brief(v, 3)) for v in (
            weaker.get("effective_dof"), dof, stronger.get("effective_dof")))]
    )  # fmt: skip
    heads = ["part", "a tenth of the smoothing", with_unit("as reported", T),
             "ten times the smoothing"]  # fmt: skip
    return table("table-decade", "What another strength would say", heads, rows)


def _values(part: Mapping[str, Any]) -> list[Any]:
    return [part.get("total"), *(z.get("value") for z in part.get("zones") or [])]


def heaviest(recovery: Recovery) -> str:
    """The reading that moves the total and each zone most."""
    found: Sequence[Mapping[str, Any]] = recovery.facts.get("heaviest") or []
    widths = {z.get("name"): z for z in recovery.facts.get("resolution") or []}
    P, T = unit(recovery, "position"), unit(recovery, "total")
    rows: list[Row] = []
    for one in found:
        zone = one.get("zone")
        width = widths.get(zone, {}) if zone is not None else {}
        rows.append(
            [_asked(zone), f"{name(one.get('file'))} line {safe(one.get('line'))}",
             num(one.get("shift"), brief(one.get("shift"), 3)),
             num(width.get("width"), brief(width.get("width"), 2)), share(width.get("beside"))]
        )  # fmt: skip
    heads = ["part", "moved most by", with_unit("by", T), with_unit("resolved there", P),
             "weight beside it"]  # fmt: skip
    return table("table-heaviest", "What each answer hangs on", heads, rows)


def shares(recovery: Recovery) -> str:
    """Where the variance of the total and of each zone comes from."""
    found: Sequence[Mapping[str, Any]] = recovery.facts.get("shares") or []
    if not found:
        return ""
    keys = list(found[0].get("properties") or {})
    rows: list[Row] = [
        [_asked(one.get("zone")), *(
            _part(v) for v in (
                one.get("noise"), one.get("smoothing"),
                *((one.get("properties") or {}).get(k) for k in keys),
            )
        )]
        for one in found
    ]  # fmt: skip
    heads = ["part", "noise of the readings", "smoothing", *keys]
    return table("table-shares", "Where the uncertainty comes from (shares of variance)", heads,
                 rows)  # fmt: skip


def _part(value: Any) -> Num:
    v = number(value)
    return num(v, f"{100 * v:.0f} %" if np.isfinite(v) else "")
