"""Checks of a recovery, each a finding only where it matters.

Every function takes plain numbers and gives a list of findings, empty when there is nothing to
say. `recover` calls them in turn.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence

import numpy as np

from srcfit.balance import Balance
from srcfit.eigen import modes
from srcfit.eigencount import number_below
from srcfit.errors import Finding, as_percent
from srcfit.forward import Forward
from srcfit.member import Member
from srcfit.readings.reader import OFF
from srcfit.robust import Noise
from srcfit.state import Matrix
from srcfit.units import factor
from srcfit.whitening import sequences

SURE = 0.001  # probability below which a residual pattern is called more than chance
DISAGREE = 30.0  # ratio of strengths between criteria that is worth a sentence
RESTS = 0.5  # part of the readings that should be left to estimate their noise from
TOLD = 0.5  # share of the answer that the readings should tell
BLURRED = 20.0  # how much worse a nuisance is told than with the source known
CLOSE = 0.05  # relative distance of eigenvalues (twice that of frequencies) worth a sentence
CLOSED = 1e-6  # relative gap of the balance that is rounding


def noise(
    chi_square: float, dof: float, stated: bool, chance: float = float("nan")
) -> list[Finding]:
    """Stated noise against the residuals.

    `chance` as of `misfit.chance`; without it the chi-square test with `dof`.
    """
    if not stated or dof <= 0:
        return []
    from scipy.special import chdtr, chdtrc

    scale = float(np.sqrt(chi_square / dof))
    if np.isnan(chance):
        chance = float(chdtrc(dof, chi_square)) if dof >= 1 else 1.0
    if chance < SURE:
        return [
            Finding(
                "noise-contradicted", "serious",
                f"The residuals are {scale:.2g} times as large as the stated noise lets expect "
                f"(chi-square {chi_square:.3g} for {dof:.3g} degrees of freedom): the noise is "
                "larger, or the member, an end, a support or a sensor is not as described; "
                "check those before trusting the intervals.",
            )
        ]  # fmt: skip
    if dof >= 1 and chdtr(dof, chi_square) < SURE:
        return [
            Finding(
                "noise-overstated", "caution",
                f"The residuals are only {scale:.2g} times the stated noise (chi-square "
                f"{chi_square:.4g} for {dof:.3g} degrees of freedom): the stated noise is too "
                "large and the intervals wider than they need be.",
            )
        ]  # fmt: skip
    return []


def noise_from_rest(used: int, dof: float, stated: bool) -> list[Finding]:
    """A noise estimated from little: most of what the readings tell went into the source.

    Seen on a cable whose readings stand two diffusion lengths apart: 220 of 299 degrees of freedom
    in the source, the noise found 0.8 to 1 times as large as it was.
    """
    if stated or dof >= RESTS * used:
        return []
    return [
        Finding(
            "noise-from-rest", "caution",
            f"The noise was estimated, but {used - dof:.0f} of {used} degrees of freedom of the "
            "readings went into the source: a rough source and noise look alike here, and the "
            "intervals may be too narrow; state `sd` (and `correlation`), from readings repeated "
            "at one place if there is no other way.",
        )
    ]  # fmt: skip


def correlated(forward: Forward, standardised: Matrix, noise: Noise) -> list[Finding]:
    """Lag-1 correlation of the standardised residuals along the member, group by group.

    `noise` is what the residuals were whitened with; down-weighted readings do not count.
    """
    found = []
    chains = sequences(forward)
    for g, name in enumerate(forward.groups):
        mine = [m[noise.weight[m] == 1] for number, m in chains if number == g]
        e = standardised[np.concatenate(mine)]
        n = len(e) * (2 if forward.driven else 1)
        if n < 10 or not e.any():
            continue
        pairs = [(standardised[m[1:]] * standardised[m[:-1]].conj()).real.sum() for m in mine]
        seen = float(sum(pairs) / (np.abs(e) ** 2).sum())
        if seen > 3.1 / np.sqrt(n):  # one-sided, one in a thousand for independent noise
            found.append(
                Finding(
                    "residuals-correlated", "caution",
                    f"Neighbouring residuals of {name!r} resemble each other (lag-1 correlation "
                    f"{seen:.2f} over {n} readings, beyond the {noise.lag[g]:.2f} that was "
                    "modelled): the intervals are too narrow; give the group `correlation = "
                    "\"estimate\"`, or look for something the member lacks.",
                )
            )  # fmt: skip
    return found


def edge(index: int, count: int, name: str) -> list[Finding]:
    """The chosen strength at the end of its ladder."""
    if 0 < index < count - 1:
        return []
    which = "weak" if index == 0 else "strong"
    return [
        Finding(
            "ladder-edge", "caution",
            f"The strength chosen by {name} stands at the {which} end of its ladder: the readings "
            "call for more or less smoothing than was tried, so look at the noise and the source "
            "unit.",
        )
    ]  # fmt: skip


def disagreement(values: Mapping[str, float | None], chosen: str) -> list[Finding]:
    """Criteria whose strengths lie far apart, where the answer follows one of them."""
    known = {name: v for name, v in values.items() if v is not None and v > 0}
    if len(known) < 2:
        return []
    low, high = min(known, key=known.__getitem__), max(known, key=known.__getitem__)
    ratio = known[high] / known[low]
    if ratio <= DISAGREE:
        return []
    return [
        Finding(
            "criteria-disagree", "note",
            f"The criteria disagree about the strength by a factor of {ratio:.2g} ({low} weakest, "
            f"{high} strongest), and the answer follows {chosen} alone: \"averaged\" would weigh "
            "all strengths.",
        )
    ]  # fmt: skip


def told(names: Sequence[str], shares: Sequence[float | None]) -> list[Finding]:
    """Zones whose answer comes mainly from what was assumed beforehand."""
    weak = [
        f"{name} ({as_percent(share)})"
        for name, share in zip(names, shares, strict=True)
        if share is not None and share < TOLD
    ]
    if not weak:
        return []
    return [
        Finding(
            "zone-told-by-prior", "caution",
            "The readings tell less than half of the answer for "
            + ", ".join(weak)
            + ": it rests mainly on smoothness and the mean level; more readings there, or less "
            "noise, would change that.",
        )
    ]  # fmt: skip


def inseparable(
    forward: Forward, groups: Sequence[Sequence[str]], advice: Sequence[str] = ()
) -> list[Finding]:
    """Unknowns that the readings cannot tell apart, by name; `advice` says what would."""
    return [
        Finding(
            "inseparable", "serious",
            "The readings cannot tell apart " + _listed(names) + ": only a combination of them is "
            "determined, so every number that depends on them is left empty; state one of them, "
            "declare where there is no source (`zero`), or add a reading that sees them "
            f"differently. {text}".rstrip(),
        )
        for names, text in zip(groups, advice or [""] * len(groups), strict=True)
    ]  # fmt: skip


def nearly_inseparable(
    names: Sequence[str], units: Sequence[str], sd: Sequence[float | None],
    alone: Sequence[float], advise: Callable[[str], str] | None = None,
) -> list[Finding]:  # fmt: skip
    """Nuisances that the readings tell far worse than they would if the source were known.

    `sd` is that of the answer, `alone` that with the source known; both in the unit given.
    `advise` says which reading would help one of them.
    """
    blurred = [
        (name, f"{name} (sd {s:.2g} {unit}; {a:.1g} {unit} if the source were known)")
        for name, unit, s, a in zip(names, units, sd, alone, strict=True)
        if s is not None and s > BLURRED * a
    ]
    if not blurred:
        return []
    weak = [text for _, text in blurred]
    advice = "" if advise is None else " ".join(advise(name) for name, _ in blurred)
    return [
        Finding(
            "nearly-inseparable", "caution",
            "Nearly inseparable from the source: " + _listed(weak) + "; part of it may stand in "
            "the source, and the other way round, so state it or add a reading that sees only one "
            f"of them. {advice}".rstrip(),
        )
    ]  # fmt: skip


def _listed(names: Sequence[str]) -> str:
    words = list(names)
    return words[0] if len(words) == 1 else ", ".join(words[:-1]) + " and " + words[-1]


def singular(forward: Forward) -> list[Finding]:
    """The operator has null modes."""
    if forward.balance is None:
        return []
    member = forward.case.member
    if member.driven or member.lam:
        return _at_eigenvalue(member)
    names = [c.name for c in forward.columns if c.kind == "null"]
    amount = "its amount was" if len(names) == 1 else "their amounts were"
    weights = forward.grid.weights * forward.grid.free
    rows = forward.balance[:, : len(weights)]
    off = weights - np.linalg.lstsq(rows.T, weights, rcond=None)[0] @ rows
    total = "it does no work on that motion"
    if np.abs(off).max() <= 1e-9 * weights.max():
        beyond = any(part.value for part in forward.case.source.known)
        total = "its total balances the known parts" if beyond else "its total is zero"
    return [
        Finding(
            "singular-member", "caution",
            f"Nothing holds back {_listed(names)}: the source was taken as balanced ({total}), "
            f"and {amount} fitted to the readings.",
        )
    ]  # fmt: skip


def _at_eigenvalue(member: Member) -> list[Finding]:
    if member.driven:
        return [
            Finding(
                "resonance", "caution",
                f"The member is driven at a natural frequency of its own, {member.frequency:.10g} "
                "Hz, without damping: a steady response exists only where the source does no work "
                "on that mode. The source was taken so, and the mode's amplitude was fitted as "
                "unknown; state `damping`, or read at another frequency, to learn that part.",
            )
        ]  # fmt: skip
    return [
        Finding(
            "singular-member", "caution",
            f"lambda = {member.lam:.10g} is an eigenvalue of the member: a response exists only "
            "for sources without a share in its mode. The source was taken so, and the mode's "
            "amplitude was fitted as unknown.",
        )
    ]  # fmt: skip


def resonance(forward: Forward) -> list[Finding]:
    """A natural frequency (or an eigenvalue) close to the one at which the member is driven."""
    member = forward.case.member
    oscillating = member.driven and member.kind.drive == "inertia" and "r" in member.profiles
    target = member.omega**2 if oscillating else member.lam
    if forward.balance is not None or target == 0:
        return []
    reach = CLOSE * abs(target)
    count = number_below(member, target + 1.0001 * reach)
    values = modes(member, max(count, 1)).eigenvalues
    near = values[np.argmin(np.abs(values - target))]
    off = abs(float(near / target) - 1)
    if off > CLOSE:
        return []
    if not oscillating:
        return [
            Finding(
                "near-eigenvalue", "caution",
                f"lambda = {target:.6g} lies within {as_percent(off, 1)} of the eigenvalue "
                f"{near:.6g}: an error of the coefficients of that size turns the answer over.",
            )
        ]  # fmt: skip
    gain = 1 / np.hypot(off, member.damping)
    damped = "the loss factor" if member.damping > off else "that distance"
    return [
        Finding(
            "near-resonance", "caution",
            f"{member.frequency:.6g} Hz is close to the member's natural frequency "
            f"{np.sqrt(near) / (2 * np.pi):.6g} Hz: one mode answers about {gain:.2g} times as "
            f"strongly as at rest, and {damped} sets how much; small errors of mass, stiffness or "
            "damping there weigh as much in the answer.",
        )
    ]  # fmt: skip


def balanced(result: Balance, unit: str, scale: float) -> list[Finding]:
    """Equilibrium of the recovered source."""
    if result.gap <= CLOSED:
        return []
    return [
        Finding(
            "balance", "serious",
            f"The balance does not close: source {result.source * scale:.6g} {unit}, reactions "
            f"and end flows {result.reactions * scale:.6g} {unit}, foundation or loss "
            f"{result.loss * scale:.6g} {unit}.",
        )
    ]  # fmt: skip


def exclusions(forward: Forward) -> list[Finding]:
    """How many readings were left out, and why; those that lie off the member, by line."""
    readings = forward.readings
    reasons: dict[str, int] = {}
    off = []
    for i, (used, reason) in enumerate(zip(readings.used, readings.reason, strict=True)):
        if not used:
            kind = re.sub(r" of line \d+$", "", reason.partition(" (")[0])
            reasons[kind] = reasons.get(kind, 0) + 1
            if kind == OFF:
                off.append(i)
    if not reasons:
        return []
    total = sum(reasons.values())
    listed = "; ".join(f"{count} × {reason}" for reason, count in reasons.items())
    left = "1 reading was" if total == 1 else f"{total} readings were"
    found = [Finding("excluded", "note", f"{left} left out: {listed}; see readings.csv.")]
    return _off_member(forward, off) + found


def _off_member(forward: Forward, off: Sequence[int]) -> list[Finding]:
    """A place off the member is more often a wrong length, unit or origin than a stray sensor."""
    if not off:
        return []
    readings, case = forward.readings, forward.case
    unit = case.source.position_unit
    scale = 1 / factor(unit, "m", "source.position_unit")[0]
    named = ", ".join(
        f"{readings.file[i]} line {readings.line[i]} at {readings.x[i] * scale:.6g} {unit}"
        for i in off[:3]
    )
    more = f" and {len(off) - 3} more" if len(off) > 3 else ""
    lie = "1 reading lies" if len(off) == 1 else f"{len(off)} readings lie"
    reach = f"{case.member.start * scale:.6g} to {case.member.end * scale:.6g} {unit}"
    return [
        Finding(
            "off-member", "caution",
            f"{lie} off the member, which reaches from {reach} ({named}{more}): check the "
            "member's length, and the unit and origin of the positions.",
        )
    ]  # fmt: skip


def few(n: int, unknown: int) -> list[Finding]:
    """Too few readings for intervals."""
    if n - unknown >= 3:
        return []
    return [
        Finding(
            "few-readings", "serious",
            f"{n} readings for {unknown} unknowns (the mean level of the source, lumped parts, "
            "offsets, settlements and the like) leave fewer than three to judge the fit by: the "
            "intervals are left empty; add readings.",
        )
    ]  # fmt: skip
