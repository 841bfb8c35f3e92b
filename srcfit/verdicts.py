"""Yes, no or undecided: what the answers say about a limit, and whether a part is detected."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from srcfit.answers import CURRIE, detection, per, verdict, zone_sizes
from srcfit.case.model import Case
from srcfit.errors import Finding
from srcfit.results import Shown
from srcfit.rounding import brief, listed
from srcfit.solve import Solved


def limit_facts(solved: Solved, shown: Shown) -> dict[str, Any] | None:
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
    from scipy.special import chndtr, ndtr, stdtr

    # constraints make intervals uneven: the side towards the limit counts
    ratio = (at_most - estimate) / sd
    end = n.upper if ratio > 0 else n.lower
    if solved.held is not None and end is not None and n.value != end:
        ratio = solved.answers.quantile * (at_most - estimate) / abs(end * per_size - estimate)
    dof = solved.readings - solved.answers.fit.effective_dof
    chance = float(ndtr(ratio) if solved.problem.stated else stdtr(max(dof, 1.0), ratio))
    if n.imaginary is not None:  # the modulus is judged
        other = float(n.imaginary * per_size)
        chance = float(chndtr((at_most / sd) ** 2, 2, (estimate**2 + other**2) / sd**2))
        facts |= {"imaginary": other}
    return facts | {
        "estimate": estimate, "probability": chance,
        "verdict": verdict(chance, case.strength.level),
    }  # fmt: skip


def detection_facts(solved: Solved, parts: Sequence[Mapping[str, Any]]) -> list[dict[str, Any]]:
    """Critical level and detection limit of each named part, as in summary.json.

    Where the noise is not stated Student's t takes the place of the normal distribution.
    """
    from scipy.special import stdtrit

    quantile = CURRIE
    if not solved.problem.stated:
        dof = solved.readings - solved.answers.fit.effective_dof
        quantile = float(stdtrit(max(dof, 1.0), 0.95))
    sign = solved.forward.case.source.sign
    return [
        detection(p["name"], p["value"], p["sd"], p.get("imaginary"), quantile, sign)
        for p in parts
    ]


def findings(case: Case, facts: Mapping[str, Any]) -> list[Finding]:
    """What is not detected, and a limit that stays undecided."""
    return [*_undetected(case, facts["detection"]), *_undecided(case, facts["limit"])]


def _undetected(case: Case, detected: Sequence[Mapping[str, Any]]) -> list[Finding]:
    unit = case.source.total_unit
    missed = [
        f"{d['name']} (up to {brief(d['limit'], 2)} {unit} may be there unseen)"
        for d in detected if d["detected"] is False
    ]  # fmt: skip
    if not missed:
        return []
    return [
        Finding(
            "not-detected", "note",
            f"No source is detected in {listed(missed)}: not detected is not absent, so compare "
            "that with what matters.",
        )
    ]  # fmt: skip


def _undecided(case: Case, limit: Mapping[str, Any] | None) -> list[Finding]:
    if limit is None or limit["verdict"] != "undecided":
        return []
    level = case.strength.level
    return [
        Finding(
            "limit-undecided", "caution",
            f"Whether {limit['zone']} keeps its limit is undecided: a probability between "
            f"{100 * (1 - level):.10g} % (exceeded) and {100 * level:.10g} % (kept) decides "
            "nothing; more or better readings near the zone would.",
        )
    ]  # fmt: skip
