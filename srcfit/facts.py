"""The mapping of summary.json, in the user's units."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from srcfit.answers import peak, per, smooth_sizes
from srcfit.member import Array
from srcfit.readingsalone import ends
from srcfit.readingsalone import facts as alone_facts
from srcfit.results import Shown, known, number_map, position_scale, reading_units
from srcfit.solve import Solved, strength_unit
from srcfit.unknowns import reaction_label, response_unit
from srcfit.verdicts import detection_facts, limit_facts

MEANS = 0.1  # part of the error of the peak's size that goes to means


def facts(
    solved: Solved, shown: Shown, findings: Sequence[Mapping[str, str]], seed: Any, version: str
) -> dict[str, Any]:
    """The mapping of summary.json."""
    forward = solved.forward
    case = forward.case
    source = case.source
    fit = fit_facts(solved)
    lumped: list[dict[str, Any]] = [
        {"name": c.name, "at": None if p.at is None else p.at * position_scale(solved)}
        | dict[str, Any](number_map(n)) | _whereabouts(solved, c.name)
        for c, p, n in zip(
            [c for c in forward.columns if c.kind == "lumped"], source.lumped,
            shown.numbers("lumped"), strict=True,
        )
    ]  # fmt: skip
    zones = zone_facts(solved, shown)
    total: dict[str, Any] = number_map(shown.numbers("total")[0]) | ends(shown.alone, 0)
    readings = forward.readings
    return {
        "schema": 1,
        "version": version,
        "title": case.title,
        "units": {
            "position": source.position_unit, "source": source.unit, "total": source.total_unit,
            "response": response_unit(case), "strength": _strength_facts(solved)[1],
        },
        "strength": _strength_facts(solved)[0],
        "noise": noise_facts(solved, fit["chi_square"], fit["dof"]),
        "fit": fit,
        "total": total,
        "zones": zones,
        "background": next((number_map(n) for n in shown.numbers("background")), None),
        "peak": peak_facts(solved, shown),
        "lumped": lumped,
        "nuisances": [
            {"name": c.name} | number_map(n) | {"unit": c.unit}
            for c, n in zip(
                [c for c in forward.columns if c.kind == "nuisance"], shown.numbers("nuisances"),
                strict=True,
            )
        ],
        "reactions": reaction_facts(solved, shown),
        "simultaneous": {
            "factor": known(shown.factor), "pointwise": known(solved.answers.quantile),
        },
        "alone": alone_facts(shown.alone, case, total, zones),
        "limit": limit_facts(solved, shown),
        "detection": detection_facts(solved, [*lumped, *zones]),
        "findings": list(findings),
        "excluded": [
            {"file": readings.file[i], "line": int(readings.line[i]), "reason": readings.reason[i]}
            for i in np.flatnonzero(~readings.used)
        ],
        "inputs": [{"file": f, "sha256": h} for f, h in readings.inputs.items()],
        "level": case.strength.level,
        "seed": seed,
        "cautions": list(case.member.kind.cautions),
    }  # fmt: skip


def _whereabouts(solved: Solved, name: str) -> dict[str, float | None]:
    """Interval of the place of a lumped part; null where its place was given."""
    place, scale = solved.places.get(name), position_scale(solved)
    if place is None:
        return {"at_lower": None, "at_upper": None}
    return {"at_lower": place.lower * scale, "at_upper": place.upper * scale}


def _strength_facts(solved: Solved) -> tuple[dict[str, Any], str]:
    case, choice, ladder = solved.forward.case, solved.choice, solved.ladder
    unit, scale = ("1", 1.0)
    if ladder is not None and ladder.solver == "tikhonov":
        unit, scale = strength_unit(solved.forward.case, ladder.family)
    values = {
        name: (c.strength * scale if c.index >= 0 else None) for name, c in solved.choices.items()
    }
    return {
        "solver": case.strength.solver,
        "choose": case.strength.choose,
        "value": None if choice is None else choice.strength * scale,
        "effective_dof": known(solved.answers.fit.effective_dof),
        "choices": values,
        "interval": solved.answers.band,
    }, unit


def fit_facts(solved: Solved) -> dict[str, Any]:
    """How many readings, and how they fit."""
    forward = solved.forward
    chi_square = float((np.abs(solved.answers.fit.residual) ** 2).sum())
    if not solved.problem.stated:
        chi_square /= solved.answers.fit.noise**2 if solved.answers.fit.noise else 1.0
    return {
        "read": len(forward.readings),
        "used": len(forward.rows),
        "chi_square": known(chi_square),
        # of a complex reading both parts count
        "dof": known(solved.readings - solved.answers.fit.effective_dof),
    }


def noise_facts(solved: Solved, chi_square: float | None, dof: float | None) -> dict[str, Any]:
    """Stated or estimated noise, group by group, in the readings' units."""
    forward = solved.forward
    scale, _ = reading_units(solved)
    groups = []
    for g, name in enumerate(forward.groups):
        members = np.flatnonzero(forward.group == g)
        row = forward.rows[members[0]]
        estimated = bool(~np.isfinite(forward.sd[members]).all())
        sd = float(np.median(solved.sd[members]) * scale[row])
        groups.append(
            {
                "group": name,
                "kind": forward.readings.kind[row],
                "sd": sd * (1.0 if solved.problem.stated else float(solved.answers.fit.noise)),
                "unit": forward.readings.unit[row],
                "estimated": estimated,
                "correlation": float(solved.lag[g]),
            }
        )
    ratio = None
    if chi_square is not None and dof is not None and dof > 0:
        ratio = float(np.sqrt(chi_square / dof))
    named = {
        word: [
            {"file": forward.readings.file[r], "line": int(forward.readings.line[r]),
             "weight": float(solved.noise.weight[i])}
            for i, r in enumerate(forward.rows) if which[i]
        ]
        for word, which in (
            ("outliers", solved.noise.weight < 1), ("doubtful", solved.noise.unsure),
        )
    }  # fmt: skip
    return {"stated": solved.problem.stated, "scale": ratio, "groups": groups} | named


def zone_facts(solved: Solved, shown: Shown) -> list[dict[str, Any]]:
    """Zones as in summary.json."""
    scale = position_scale(solved)
    return [
        {"name": z.name, "from": z.start * scale, "to": z.end * scale}
        | number_map(n)
        | {"data_share": share}
        | ends(shown.alone, i)
        for i, (z, n, share) in enumerate(
            zip(
                solved.forward.case.source.zones, shown.numbers("zones"), shown.shares("zones"),
                strict=True,
            ),
            start=1,
        )
    ]  # fmt: skip


def reaction_facts(solved: Solved, shown: Shown) -> list[dict[str, Any]]:
    """Reactions and end flows as in summary.json."""
    case, scale = solved.forward.case, position_scale(solved)
    both = zip(solved.forward.reactions, shown.numbers("reactions"), strict=True)
    return [
        {"name": reaction_label(case, r), "at": r.at * scale, "kind": r.kind, "unit": r.unit}
        | number_map(n)
        for r, n in both
    ]


def peak_facts(solved: Solved, shown: Shown) -> dict[str, Any] | None:
    """Peak as in summary.json; `joint` holds for its size and its place at once."""
    if not solved.problem.smooth:
        return None
    value, _, lower, upper, _ = shown.block("cells")
    grid, twin = solved.forward.grid, shown.twin("cells", "imaginary").get("imaginary")
    x = grid.middles * position_scale(solved)
    found = peak(x, value, lower, upper, grid.free, twin)
    if found is None:
        return None
    return found | {"joint": _joint(solved, shown, x, found["value"])}


def _joint(solved: Solved, shown: Shown, x: Array, value: float) -> dict[str, float] | None:
    """Interval of the size and places of the peak that hold together, each at half the error.

    The largest density is at least every mean, and a mean is often told far better than any one
    place: `MEANS` of the size's error goes to limits of the means of member and zones.
    """
    level, grid = solved.forward.case.strength.level, solved.forward.grid
    estimate, twin = shown.block("cells")[0], shown.twin("cells", "imaginary").get("imaginary")
    each, turn = (1 - level) / 2, -1.0 if value < 0 else 1.0
    least = None if shown.driven else _least_mean(solved, shown, turn, MEANS * each)
    size = each if least is None else (1 - MEANS) * each
    whole = peak(x, estimate, *shown.everywhere(1 - size), grid.free, twin)
    if whole is None:
        return None
    rivals = x[shown.rivals(turn, 1 - each) & grid.free]
    ends = sorted([turn * whole["lower"], turn * whole["upper"]])
    if least is not None:
        ends[0] = min(max(ends[0], least), ends[1])
    lower, upper = sorted([turn * ends[0], turn * ends[1]])
    # the band that bounds the size bounds the place too: the place keeps to both
    return {
        "lower": lower, "upper": upper,
        "position_lower": max(float(rivals.min()), whole["position_lower"]),
        "position_upper": min(float(rivals.max()), whole["position_upper"]),
    }  # fmt: skip


def _least_mean(solved: Solved, shown: Shown, turn: float, error: float) -> float | None:
    """What the largest mean density of the smooth part, times `turn`, is at least.

    Of the member and of every zone, less what lumped parts may hold of it; each of these limits
    has an equal part of `error`, so that all hold at once (Bonferroni). In the user's unit; None
    where no mean is told.
    """
    from scipy.special import ndtri, stdtrit

    if shown.together is None:
        return None
    sizes, parts = smooth_sizes(solved.forward)
    if solved.places:  # which zone a part of unknown place stands in is not known
        sizes, parts = sizes[:1], parts[:1]
    where = np.flatnonzero(sizes > 0)
    if not len(where):
        return None
    chance = 1 - error / (len(where) + parts.shape[1])
    dof = shown.together.dof
    quantile = float(ndtri(chance) if dof is None else stdtrit(dof, chance))
    ratio = quantile / solved.answers.quantile

    def limits(block: str, side: float) -> Array:
        """What the numbers times `turn` are at least (side -1) or at most (1)."""
        value, _, lower, upper, _ = shown.block(block)
        end = upper if side * turn > 0 else lower
        return np.asarray(turn * (value + ratio * (end - value)))

    whole = np.concatenate([limits("total", -1.0), limits("zones", -1.0)])[where]
    rest = np.where(parts > 0, parts * limits("lumped", 1.0), 0.0).sum(axis=1)[where]
    case = solved.forward.case
    kind, source = case.member.kind, case.source
    unit = per(source.unit, kind.source_unit) / per(source.total_unit, kind.total_unit)
    means = (whole - rest) / sizes[where] * unit
    return float(np.nanmax(means)) if np.isfinite(means).any() else None
