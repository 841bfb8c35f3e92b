"""The numbers behind the page's live charts, as plain JSON."""

from __future__ import annotations

import base64
import json
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.axes import fit_curve, here, panels, turned
from srcfit.captions import choices_of, extent, per_metre, source_word, unit
from srcfit.frames import flags, ladder_of, number, numbers, pretty, texts
from srcfit.recovery import Recovery, Result
from srcfit.report.html import clean
from srcfit.rounding import brief, plus_minus

Array = NDArray[np.float64]
READINGS = 4000  # points of a chart, evenly picked beyond
FITS = 120_000  # predicted readings kept for the strength slider
LINES = 1000  # influence lines
PLACES = 121  # points of an influence line


def chart_data(recovery: Recovery) -> dict[str, Any]:
    """Everything the live charts draw.

    Returns
    -------
    mapping
        Plain JSON values; large arrays are base64 texts of little-endian float32 (`f32`) or of
        int16 with one scale per row (`i16`).
    """
    kept = _kept(recovery)
    return {
        "units": {k: unit(recovery, k) for k in ("position", "source", "total", "strength")},
        "word": source_word(recovery),
        "extent": [_six(v) for v in extent(recovery)],
        "source": _source(recovery),
        "panels": [_panel(recovery, kind, u, kept) for kind, u in panels(recovery)],
        "ladder": _ladder(recovery, kept),
        "influence": _influence(recovery, kept),
    }


def source_data(result: Result) -> dict[str, Any]:
    """What the page's script needs of a result that has a source alone, and no ladder."""
    return {
        "units": {k: unit(result, k) for k in ("position", "source", "total")},
        "word": source_word(result),
        "extent": [_six(v) for v in extent(result)],
        "source": _source(result),
        "panels": [],
        "ladder": {"strengths": [], "labels": [], "totals": [], "cells": "", "fits": "",
                   "rows": [], "curve": {"strength": [], "a": [], "b": []}, "marks": [],
                   "start": 0},
        "influence": {"x": [], "rows": [], "scale": [], "lines": "", "units": []},
    }  # fmt: skip


def as_json(data: Any) -> str:
    """JSON that cannot end the element it stands in."""
    text = json.dumps(data, separators=(",", ":"), ensure_ascii=True, allow_nan=False)
    return text.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026")


def _six(value: Any) -> float | None:
    v = number(value)
    return float(f"{v:.6g}") if np.isfinite(v) else None


def _list(values: Any) -> list[float | None]:
    return [_six(v) for v in np.asarray(values)]


def _f32(values: Any) -> str:
    array = np.real(np.asarray(values)).astype("<f4")
    return base64.b64encode(np.ascontiguousarray(array).tobytes()).decode("ascii")


def _kept(recovery: Recovery) -> NDArray[np.int64]:
    """Row numbers of the used readings that the charts show."""
    used = np.flatnonzero(flags(recovery.readings))
    if len(used) > READINGS:
        used = used[np.unique(np.linspace(0, len(used) - 1, READINGS).astype(int))]
    return used


def _source(recovery: Result) -> dict[str, Any]:
    frame = recovery.source
    lumped = [
        {"name": clean(r.get("name")), "at": _six(r.get("at")),
         "text": plus_minus(r, unit(recovery, "total"))}
        for r in recovery.facts.get("lumped") or []
    ]  # fmt: skip
    zones = recovery.zones
    return {
        "edges": _list(np.append(numbers(frame, "from"), numbers(frame, "to")[-1:])),
        "estimate": _list(numbers(frame, "estimate")),
        "lower": _list(numbers(frame, "lower")),
        "upper": _list(numbers(frame, "upper")),
        "zones": [
            {"name": clean(n), "from": _six(a), "to": _six(b), "mean": _six(m)}
            for n, a, b, m in zip(
                texts(zones, "name"),
                *(numbers(zones, k) for k in ("from", "to", "mean")),
                strict=True,
            )
        ],
        "lumped": [row for row in lumped if row["at"] is not None],
        "total": plus_minus(recovery.facts.get("total") or {}, unit(recovery, "total")),
    }


def _panel(
    recovery: Recovery, kind: str, unit_text: str, kept: NDArray[np.int64]
) -> dict[str, Any]:
    frame = recovery.readings
    used, x = flags(frame), numbers(frame, "x")
    inside = here(recovery, kind, unit_text)
    scale, shift = turned(recovery)
    rows = np.array([i for i in kept if inside[i] and np.isfinite(x[i])], dtype=int)
    rows = rows[np.argsort(x[rows], kind="stable")]
    curve = fit_curve(recovery, kind, unit_text)
    lines, groups = texts(frame, "line"), texts(frame, "group")
    value, predicted = (scale * numbers(frame, k) + shift for k in ("value", "predicted"))
    shown = {"value": value, "sd": scale * numbers(frame, "sd"), "predicted": predicted,
             "standardised": numbers(frame, "standardised")}  # fmt: skip
    left = np.flatnonzero(inside & ~used & np.isfinite(x + value))
    off = [(x[i], value[i]) for i in left]
    return {
        "off": [[_six(a), _six(b)] for a, b in off[:READINGS]],
        "kind": clean(kind), "unit": clean(pretty(unit_text)), "rows": [int(i) for i in rows],
        "x": _list(x[rows]), "line": [lines[i] for i in rows],
        "group": [clean(groups[i]) for i in rows],
        **{k: _list(column[rows]) for k, column in shown.items()},
        "curve": None if curve is None else _list(curve),
        "curveX": None if curve is None else _list(recovery.pictures.x * per_metre(recovery)),
    }  # fmt: skip


def _ladder(recovery: Recovery, kept: NDArray[np.int64]) -> dict[str, Any]:
    """Rungs for the slider, the L-curve and the criteria's choices on both."""
    pictures = recovery.pictures
    strengths = rung_strengths(recovery)
    row_of = {row: k for k, row in enumerate(pictures.influence_of)}
    columns = [row_of[int(i)] for i in kept if int(i) in row_of]
    fits = np.real(np.asarray(pictures.fits))
    most = max(FITS // max(len(columns), 1), 2)
    pick = np.arange(len(strengths))
    if len(pick) > most:
        pick = np.unique(np.linspace(0, len(strengths) - 1, most).astype(int))
    complete = fits.ndim == 2 and fits.shape == (len(strengths), len(pictures.influence_of))
    if complete:
        scale, shift = (part[list(pictures.influence_of)] for part in turned(recovery))
        fits = scale * fits + shift
    rows = ladder_of(recovery.ladder)
    strength, a, b = (numbers(rows, k) for k in ("strength", "residual_norm", "roughness_norm"))
    good = (strength > 0) & (a > 0) & (b > 0)
    choices = choices_of(recovery)
    return {
        "strengths": _list(strengths[pick]),
        "labels": [brief(v) for v in strengths[pick]],
        "totals": [brief(v, 4) for v in np.real(pictures.totals)[pick]],
        "cells": _f32(np.real(pictures.rungs)[pick]) if len(pick) else "",
        "fits": _f32(fits[pick][:, columns]) if complete and columns else "",
        "rows": [int(i) for i in kept if int(i) in row_of] if complete else [],
        "curve": {"strength": _list(strength[good]), "a": _list(np.log10(a[good])),
                  "b": _list(np.log10(b[good]))},
        "marks": [{"name": clean(k), "strength": _six(v)} for k, v in choices.items()],
        "start": _start(recovery, strengths[pick], choices),
    }  # fmt: skip


def rung_strengths(recovery: Recovery) -> Array:
    """Strengths of `pictures.rungs` in the unit of the ladder."""
    return np.asarray(recovery.pictures.strengths, dtype=float)


def _start(recovery: Recovery, strengths: Array, choices: dict[str, float]) -> int:
    """The rung nearest to the chosen strength; evidence's choice when averaged."""
    facts = recovery.facts.get("strength") or {}
    wanted = number(facts.get("value"))
    if not wanted > 0:
        wanted = choices.get(str(facts.get("choose")), choices.get("evidence", np.nan))
    if not len(strengths) or not wanted > 0:
        return len(strengths) // 2
    return int(np.argmin(np.abs(np.log(strengths) - np.log(wanted))))


def _influence(recovery: Recovery, kept: NDArray[np.int64]) -> dict[str, Any]:
    """Influence lines of the shown readings as int16, one scale per row."""
    pictures = recovery.pictures
    lines = np.real(np.atleast_2d(pictures.influence))
    row_of = {row: k for k, row in enumerate(pictures.influence_of)}
    rows = [int(i) for i in kept if int(i) in row_of]
    if len(rows) > LINES:
        rows = [rows[i] for i in np.unique(np.linspace(0, len(rows) - 1, LINES).astype(int))]
    x = np.asarray(pictures.x) * per_metre(recovery)
    step = np.unique(np.linspace(0, len(x) - 1, min(PLACES, len(x))).astype(int))
    if not rows or not lines.size:
        return {"x": [], "rows": [], "scale": [], "lines": "", "units": []}
    picked = lines[[row_of[i] for i in rows]][:, step]
    top = np.abs(picked).max(axis=1)
    top = np.where(top > 0, top, 1.0)
    small = np.round(picked / top[:, None] * 32767).astype("<i2")
    kinds = texts(recovery.readings, "kind")
    return {
        "x": _list(x[step]), "rows": rows, "scale": _list(top / 32767),
        "lines": base64.b64encode(np.ascontiguousarray(small).tobytes()).decode("ascii"),
        "units": [influence_unit(recovery, kinds[i]) for i in rows],
    }  # fmt: skip


def influence_unit(recovery: Recovery, kind: str) -> str:
    """SI unit of an influence line: the sensor's per that of the total."""
    member = recovery.case.member.kind
    sensor = next((s.unit for s in member.sensors if s.name == kind), "1")
    return f"{pretty(sensor) or '1'} per {pretty(member.total_unit) or '1'}"
