"""What each figure shows, in one or two sentences with numbers: the figures' text alternatives."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.frames import flags, ladder_of, number, numbers, pretty, texts, unit_of
from srcfit.recovery import Recovery, Result
from srcfit.rounding import NO_INTERVAL, UNDETERMINED, brief, interval, minus, plus_minus

Array = NDArray[np.float64]
SOURCE_WORDS = {
    "rod": "load", "cable": "load", "beam": "load", "shaft": "torque", "conductor": "heat source",
    "wall": "heat source", "cylinder": "heat source", "sphere": "heat source",
    "column": "production", "aquifer": "recharge", "radial_aquifer": "recharge",
}  # fmt: skip


def source_word(recovery: Result) -> str:
    """What the trade calls the source of this member kind."""
    return SOURCE_WORDS.get(recovery.case.member.kind.name, "source")


def member_word(recovery: Result) -> str:
    """Plain name of the member's kind for a sentence."""
    kind = recovery.case.member.kind.name
    return "member" if kind == "general" else kind.replace("_", " ")


def percent(recovery: Result) -> str:
    """Level of the intervals as a text like ``95 %``."""
    return f"{brief(100 * number(recovery.facts.get('level') or 0.95))} %"


def unit(recovery: Result, name: str) -> str:
    """Unit of position, source, total, response or strength; a dimensionless one is empty."""
    return pretty(str((recovery.facts.get("units") or {}).get(name) or ""))


def describe_member(recovery: Result) -> str:
    """Kind, extent, ends, supports and sensors of the member."""
    member, place = recovery.case.member, unit(recovery, "position")
    x0, x1 = extent(recovery)
    counts = {k: len(getattr(member, f"{k}s")) for k in ("support", "hinge", "interface")}
    parts = [f"{n} {k}{'s' if n > 1 else ''}" for k, n in counts.items() if n]
    extra = f", with {' and '.join(parts)} between" if parts else ""
    kinds = {k: n for k, n in count_kinds(recovery).items() if k}
    sensors = " and ".join(f"{n} of {k}" for k, n in kinds.items()) or "none"
    return minus(
        f"{member.kind.title} from {brief(x0)} to {brief(x1)} {place}: left end "
        f"{member.left.word}, right end {member.right.word}{extra}. Readings used: {sensors}."
    )


def extent(recovery: Result) -> tuple[float, float]:
    """Places of the two ends in the user's position unit, from the first and last cell."""
    start, end = numbers(recovery.source, "from"), numbers(recovery.source, "to")
    return (float(start[0]), float(end[-1])) if len(start) else (0.0, 0.0)


def per_metre(recovery: Result) -> float:
    """Position units in one metre."""
    x0, x1 = extent(recovery)
    length = recovery.case.member.length
    return (x1 - x0) / length if length and x1 > x0 else 1.0


def count_kinds(recovery: Result) -> Mapping[str, int]:
    """Used readings per sensor kind, in order of appearance."""
    used = flags(recovery.readings)
    kinds = texts(recovery.readings, "kind")
    return {k: int(sum(u for u, o in zip(used, kinds, strict=True) if o == k))
            for k in dict.fromkeys(kinds)}  # fmt: skip


def describe_source(recovery: Recovery) -> str:
    """Peak, total and how wide the band is."""
    facts, word = recovery.facts, source_word(recovery)
    total = facts.get("total") or {}
    text = f"Total {word}: {plus_minus(total, unit(recovery, 'total'))}"
    ends = interval(total)
    text += f" ({percent(recovery)} interval {ends})." if ends != NO_INTERVAL else "."
    peak = facts.get("peak")
    if peak:
        at, u = brief(peak.get("position")), unit(recovery, "source")
        text += (
            f" The smooth part is largest near {at} {unit(recovery, 'position')}: "
            f"{brief(peak.get('value'))} {u}"
        )
        low, high = brief(peak.get("lower")), brief(peak.get("upper"))
        text += f", between {low} and {high} {u}." if low and high else "."
    elif len(recovery.source):
        values = numbers(recovery.source, "estimate")
        text += f" Densities run from {brief(_least(values))} to {brief(_most(values))}."
    return minus(text)


def _least(values: Any) -> float:
    return float(np.nanmin(values)) if np.isfinite(values).any() else float("nan")


def _most(values: Any) -> float:
    return float(np.nanmax(values)) if np.isfinite(values).any() else float("nan")


@dataclass(frozen=True)
class SectionCurve:
    """A force, couple or flow inside the member along it, in its unit; nan: not determined."""

    name: str
    unit: str
    x: Array
    value: Array
    sd: Array
    lower: Array
    upper: Array


def section_curves(recovery: Recovery) -> list[SectionCurve]:
    """Moment and shear of a beam, the flow or force of another member; of driven ones real."""
    frame = recovery.section
    if frame is None:
        return []
    heads = [str(h).partition(" [")[0] for h in frame.columns]
    x = numbers(frame, "x")
    return [
        SectionCurve(
            name.replace("_", " "), pretty(unit_of(frame, name)), x, numbers(frame, name),
            *(numbers(frame, f"{name}_{end}") for end in ("sd", "lower", "upper")),
        )
        for name in heads if f"{name}_sd" in heads
    ]  # fmt: skip


def describe_section(recovery: Recovery) -> str:
    """The largest and the least of each curve with their uncertainty and place."""
    curves = section_curves(recovery)
    if not curves:
        return "There are no forces inside the member to show."
    return " ".join(_extremes(recovery, c) for c in curves)


def _extremes(recovery: Recovery, curve: SectionCurve) -> str:
    word = f"{curve.name[0].upper()}{curve.name[1:]}"
    if not np.isfinite(curve.value).any():
        return f"{word}: {UNDETERMINED}."
    place = unit(recovery, "position")
    ends = [
        plus_minus({"value": curve.value[i], "sd": curve.sd[i]}, curve.unit)
        + f" at x = {brief(curve.x[i])} {place}"
        for i in (int(np.nanargmax(curve.value)), int(np.nanargmin(curve.value)))
    ]
    return minus(f"{word}: at most {ends[0]}, at least {ends[1]}.")


def describe_readings(recovery: Recovery) -> str:
    """How well the readings are met: counts, spread and largest standardised residual."""
    frame, fit = recovery.readings, recovery.facts.get("fit") or {}
    z, weight = numbers(frame, "standardised"), numbers(frame, "weight")
    text = f"{fit.get('used')} of {fit.get('read')} readings used"
    full = z[~(weight < 1)]  # one that hardly counts says little of the fit
    if np.isfinite(full).any():
        worst = int(np.nanargmax(np.abs(z)))
        low = int((weight < 1).sum())
        less = f" (without {low} down-weighted)" if low else ""
        text += (
            f"; standardised residuals have a root mean square of "
            f"{brief(float(np.sqrt(np.nanmean(full**2))), 2)}{less}, the largest of all is "
            f"{brief(z[worst], 2)} at x = {brief(numbers(frame, 'x')[worst])} "
            f"{pretty(unit_of(frame, 'x'))} (line {texts(frame, 'line')[worst]})"
        )
    chi, dof = brief(fit.get("chi_square")), brief(fit.get("dof"))
    return minus(text + (f". Chi-square {chi} on {dof} degrees of freedom." if chi else "."))


def describe_l_curve(recovery: Recovery) -> str:
    """Range of the ladder and where each criterion stands on it."""
    rows = numbers(ladder_of(recovery.ladder), "strength")
    choices = choices_of(recovery)
    if not len(rows):
        return "There is no ladder of strengths."
    text = f"{len(rows)} strengths from {brief(_least(rows))} to {brief(_most(rows))}"
    if choices:
        low, high = min(choices, key=lambda k: choices[k]), max(choices, key=lambda k: choices[k])
        text += (
            f"; of {len(choices)} criteria the weakest choice is {low} ({brief(choices[low])}), "
            f"the strongest {high} ({brief(choices[high])})"
        )
    dof = brief((recovery.facts.get("strength") or {}).get("effective_dof"))
    return minus(
        text + (f". The answer spends {dof} effective degrees of freedom." if dof else ".")
    )


def choices_of(recovery: Recovery) -> dict[str, float]:
    """Criterion -> strength that it chooses, those that choose one."""
    found = (recovery.facts.get("strength") or {}).get("choices") or {}
    values = {str(k): number(v) for k, v in found.items()}
    return {k: v for k, v in values.items() if np.isfinite(v) and v > 0}


def describe_influence(recovery: Recovery) -> str:
    """How many influence lines there are and where the source is felt least."""
    lines = np.abs(np.real(np.atleast_2d(recovery.pictures.influence)))
    if not lines.size:
        return "There are no influence lines."
    top = lines.max(axis=1, keepdims=True)
    felt = (lines / np.where(top > 0, top, 1.0)).max(axis=0)
    x = recovery.pictures.x * per_metre(recovery)
    least = int(np.argmin(felt))
    return minus(
        f"{len(lines)} influence lines, each divided by its own largest value. A source at "
        f"{brief(x[least])} {unit(recovery, 'position')} is felt least: at most "
        f"{brief(100 * felt[least], 2)} % of a reading's largest response."
    )


def describe_modes(recovery: Recovery) -> str:
    """The first eigenvalues."""
    values = [brief(v) for v in np.real(recovery.pictures.eigenvalues)]
    if not values:
        return "There are no modes to show."
    return minus(f"First {len(values)} modes of the member, eigenvalues {', '.join(values)}.")


DESCRIPTIONS: dict[str, Callable[[Recovery], str]] = {
    "member": describe_member,
    "source": describe_source,
    "section": describe_section,
    "readings": describe_readings,
    "l-curve": describe_l_curve,
    "influence": describe_influence,
    "modes": describe_modes,
}
