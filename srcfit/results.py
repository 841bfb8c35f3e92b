"""From SI answers to the tables and the summary in the user's units."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from srcfit.answers import detection, peak, per, verdict, zone_sizes
from srcfit.criteria import CRITERIA
from srcfit.member import Array
from srcfit.recovery import Number
from srcfit.solve import Solved, strength_unit
from srcfit.units import factor
from srcfit.unknowns import place_text, response_unit

if TYPE_CHECKING:
    import pandas as pd


class Shown:
    """Answers in the user's units, by block; an added variance (property uncertainty) included."""

    def __init__(self, solved: Solved, extra_variance: Array) -> None:
        a, asked = solved.answers, solved.asked
        sd = np.hypot(a.sd, np.sqrt(extra_variance))
        self.value = (a.value + asked.constant + asked.shift) * asked.factor
        self.sd = sd * np.abs(asked.factor)
        half = a.quantile * self.sd
        self.lower, self.upper = self.value - half, self.value + half
        self.share = a.data_share
        self._blocks = solved.asked.blocks

    def numbers(self, block: str) -> list[Number]:
        """The block's numbers, None for what is undetermined."""
        where = self._blocks[block]
        columns = (self.value[where], self.sd[where], self.lower[where], self.upper[where])
        return [Number(*(known(v) for v in row)) for row in zip(*columns, strict=True)]

    def shares(self, block: str) -> list[float | None]:
        """Data share of the block's numbers."""
        return [known(v) for v in self.share[self._blocks[block]]]

    def block(self, block: str) -> tuple[Array, Array, Array, Array, Array]:
        """value, sd, lower, upper, share of a block as arrays."""
        where = self._blocks[block]
        return (
            self.value[where], self.sd[where], self.lower[where], self.upper[where],
            self.share[where],
        )  # fmt: skip


def known(value: Any) -> float | None:
    """A float, or None for nan."""
    number = float(np.real(value))
    return number if np.isfinite(number) else None


def number_map(n: Number) -> dict[str, float | None]:
    """As in summary.json."""
    return {"value": n.value, "sd": n.sd, "lower": n.lower, "upper": n.upper}


def position_scale(solved: Solved) -> float:
    """How many position units make a metre."""
    return per(solved.forward.case.source.position_unit, "m")


def source_table(solved: Solved, shown: Shown) -> pd.DataFrame:
    """One row per cell."""
    import pandas as pd

    source, grid = solved.forward.case.source, solved.forward.grid
    P, U, scale = source.position_unit, source.unit, position_scale(solved)
    value, sd, lower, upper, share = shown.block("cells")
    held = ~grid.free
    return pd.DataFrame(
        {
            f"x [{P}]": grid.middles * scale,
            f"estimate [{U}]": np.where(held, 0.0, value),
            f"sd [{U}]": np.where(held, 0.0, sd),
            f"lower [{U}]": np.where(held, 0.0, lower),
            f"upper [{U}]": np.where(held, 0.0, upper),
            "data_share": np.where(held, np.nan, share),
            f"from [{P}]": grid.edges[:-1] * scale,
            f"to [{P}]": grid.edges[1:] * scale,
        }
    )


def zones_table(solved: Solved, shown: Shown) -> pd.DataFrame:
    """One row per zone."""
    import pandas as pd

    case = solved.forward.case
    source = case.source
    P, U, T, scale = source.position_unit, source.unit, source.total_unit, position_scale(solved)
    value, sd, lower, upper, share = shown.block("zones")
    per_size = per(U, case.member.kind.source_unit) / per(T, case.member.kind.total_unit)
    return pd.DataFrame(
        {
            "name": [z.name for z in source.zones],
            f"from [{P}]": [z.start * scale for z in source.zones],
            f"to [{P}]": [z.end * scale for z in source.zones],
            f"value [{T}]": value,
            f"sd [{T}]": sd,
            f"lower [{T}]": lower,
            f"upper [{T}]": upper,
            f"mean [{U}]": value / zone_sizes(case) * per_size,
            "data_share": share,
        }
    )


def readings_table(solved: Solved) -> pd.DataFrame:
    """Every row read; those used with prediction and residuals."""
    import pandas as pd

    forward = solved.forward
    readings, n = forward.readings, len(forward.readings)
    scale, shift = reading_units(solved)
    residual, left = (np.full(n, np.nan, dtype=forward.y.dtype) for _ in range(2))
    standardised = np.full(n, np.nan)
    residual[forward.rows] = recoloured(solved, solved.answers.fit.residual)
    left[forward.rows] = solved.answers.fit.leave_one_out * solved.sd
    standardised[forward.rows] = solved.answers.fit.standardised
    sd = readings.sd.copy()
    sd[forward.rows] = solved.sd * (1 if solved.problem.stated else solved.answers.fit.noise)
    shown = {
        "file": readings.file, "line": readings.line, "group": readings.group,
        "kind": readings.kind, "unit": readings.unit,
        f"x [{forward.case.source.position_unit}]": readings.x * position_scale(solved),
        "value": np.real(readings.value) * scale + shift, "sd": sd * scale, "used": readings.used,
        "reason": readings.reason,
        "predicted": np.real(readings.value - residual) * scale + shift,
        "residual": np.real(residual) * scale, "standardised": standardised,
        "leave_one_out": np.real(left) * scale,
    }  # fmt: skip
    if np.iscomplexobj(readings.value):
        shown["value_imag"] = np.imag(readings.value) * scale
    return pd.DataFrame(shown)


def reading_units(solved: Solved) -> tuple[Array, Array]:
    """Scale and shift from SI to each row's own unit."""
    case, readings = solved.forward.case, solved.forward.readings
    scale, shift = np.ones(len(readings)), np.zeros(len(readings))
    cache: dict[tuple[str, str], tuple[float, float]] = {}
    for i, (unit, kind) in enumerate(zip(readings.unit, readings.kind, strict=True)):
        si = case.member.kind.sensor(kind).unit
        if (unit, si) not in cache:
            per_unit, offset = factor(unit or si, si, "unit", difference=case.member.driven)
            cache[unit, si] = 1 / per_unit, -offset / per_unit
        scale[i], shift[i] = cache[unit, si]
    return scale, shift


def recoloured(solved: Solved, white: Array) -> Array:
    """Residuals in SI from whitened ones: the correlation put back."""
    forward, lag, out = solved.forward, solved.lag, white.copy()
    x = forward.readings.x[forward.rows]
    for g in np.flatnonzero(lag):
        members = np.flatnonzero(forward.group == g)
        members = members[np.argsort(x[members], kind="stable")]
        for before, here in pairwise(members):
            keep = lag[g]
            out[here] = keep * out[before] + np.sqrt(1 - keep**2) * white[here]
    result: Array = out * solved.sd
    return result


FAMILY_NAMES = {"first differences": "roughness 1"}


def ladder_table(solved: Solved) -> pd.DataFrame:
    """One row per family and rung."""
    import pandas as pd

    parts = []
    answers = solved.answers
    ladders = list(zip(answers.fit.ladders, answers.fit.weights, strict=True))
    if solved.ladder is not None and all(la is not solved.ladder for la, _ in ladders):
        ladders.insert(0, (solved.ladder, np.full(len(solved.ladder.strengths), np.nan)))
    for ladder, weights in ladders:
        unit, scale = strength_unit(solved.forward.case, ladder.family)
        name = FAMILY_NAMES.get(ladder.family.name, ladder.family.name)
        averaged = len(answers.fit.ladders) > 1 and ladder is not solved.ladder
        cut = ladder.solver != "tikhonov"
        parts.append(
            pd.DataFrame(
                {
                    "family": f"{name} (averaged)" if averaged and name == "roughness 1" else name,
                    "strength": ladder.strengths * (1 if cut else scale),
                    "residual_norm": ladder.residual_norms,
                    "roughness_norm": ladder.roughness / np.sqrt(scale),
                    "effective_dof": ladder.dof,
                    **{key: score(ladder) for key, score in CRITERIA.items()},
                    "weight": weights,
                    "strength_unit": "1" if cut else unit,
                }
            )
        )
    if not parts:
        names = ["residual_norm", "roughness_norm", "effective_dof", *CRITERIA, "weight"]
        return pd.DataFrame(columns=["family", "strength", *names, "strength_unit"])
    table = pd.concat(parts, ignore_index=True)
    return table.replace([np.inf, -np.inf], np.nan)


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
        | dict[str, Any](number_map(n))
        for c, p, n in zip(
            [c for c in forward.columns if c.kind == "lumped"], source.lumped,
            shown.numbers("lumped"), strict=True,
        )
    ]  # fmt: skip
    zones = zone_facts(solved, shown)
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
        "total": number_map(shown.numbers("total")[0]),
        "zones": zones,
        "background": next((number_map(n) for n in shown.numbers("background")), None),
        "peak": _peak(solved, shown),
        "lumped": lumped,
        "nuisances": [
            {"name": c.name} | number_map(n) | {"unit": c.unit}
            for c, n in zip(
                [c for c in forward.columns if c.kind == "nuisance"], shown.numbers("nuisances"),
                strict=True,
            )
        ],
        "reactions": reaction_facts(solved, shown),
        "limit": _limit(solved, shown),
        "detection": [detection(p["name"], p["value"], p["sd"]) for p in [*lumped, *zones]],
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
        "dof": known(len(forward.rows) - solved.answers.fit.effective_dof),
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
    return {"stated": solved.problem.stated, "scale": ratio, "groups": groups}


def zone_facts(solved: Solved, shown: Shown) -> list[dict[str, Any]]:
    """Zones as in summary.json."""
    scale = position_scale(solved)
    return [
        {"name": z.name, "from": z.start * scale, "to": z.end * scale}
        | number_map(n)
        | {"data_share": share}
        for z, n, share in zip(
            solved.forward.case.source.zones, shown.numbers("zones"), shown.shares("zones"),
            strict=True,
        )
    ]  # fmt: skip


def reaction_facts(solved: Solved, shown: Shown) -> list[dict[str, Any]]:
    """Reactions and end flows as in summary.json."""
    case, scale = solved.forward.case, position_scale(solved)
    facts = []
    for r, n in zip(solved.forward.reactions, shown.numbers("reactions"), strict=True):
        name = r.name
        if name.startswith("support."):
            name = f"support:{place_text(case, r.at)}"
        facts.append(
            {"name": name, "at": r.at * scale, "kind": r.kind, "unit": r.unit} | number_map(n)
        )
    return facts


def _peak(solved: Solved, shown: Shown) -> dict[str, float] | None:
    if not solved.problem.smooth:
        return None
    value, _, lower, upper, _ = shown.block("cells")
    grid = solved.forward.grid
    return peak(grid.middles * position_scale(solved), value, lower, upper, grid.free)


def _limit(solved: Solved, shown: Shown) -> dict[str, Any] | None:
    """Verdict on the limit: `probability` is that of the limit being kept."""
    case = solved.forward.case
    limit = case.source.limit
    if limit is None:
        return None
    index = [z.name for z in case.source.zones].index(limit.zone)
    n = shown.numbers("zones")[index]
    kind, source = case.member.kind, case.source
    unit, si = (
        (source.unit, kind.source_unit) if limit.density else (source.total_unit, kind.total_unit)
    )
    at_most = limit.at_most * per(unit, si)
    facts: dict[str, Any] = {"zone": limit.zone, "at_most": at_most}
    if n.value is None or n.sd is None:
        return facts | {"estimate": None, "probability": None, "verdict": None}
    size = zone_sizes(case)[index] if limit.density else 1.0
    per_size = per(unit, si) / per(source.total_unit, kind.total_unit) / size
    estimate, sd = float(n.value * per_size), float(n.sd * per_size)
    from scipy.special import ndtr, stdtr

    ratio = (at_most - estimate) / sd
    dof = len(solved.forward.rows) - solved.answers.fit.effective_dof
    chance = float(ndtr(ratio) if solved.problem.stated else stdtr(max(dof, 1.0), ratio))
    return facts | {
        "estimate": estimate, "probability": chance,
        "verdict": verdict(chance, case.strength.level),
    }  # fmt: skip
