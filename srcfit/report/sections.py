"""The sections of the page in their order: the answer first, then its reasons."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from srcfit.captions import extent, member_word, percent, section_curves, source_word, unit
from srcfit.frames import flags, number
from srcfit.recovery import Recovery, Result
from srcfit.report import tables, telling
from srcfit.report.assumptions import assumptions, band
from srcfit.report.data import LINES, READINGS
from srcfit.report.html import clean, figure, name, nested, safe, section
from srcfit.report.method import CAUTIONS, method_text
from srcfit.report.numbers import interval, minus, plus_minus, shown
from srcfit.rounding import (
    NO_INTERVAL,
    UNDETERMINED,
    brief,
    chance_text,
    peak_sentence,
    twin,
    twin_interval,
)

LEVELS = ("serious", "caution", "note")


def answer(recovery: Recovery) -> str:
    """One sentence that a client understands, the zones, the verdict, and what to know first."""
    body = f'<p class="answer">{total_sentence(recovery)}</p>'
    zones = recovery.facts.get("zones") or []
    if zones:
        scale = span(zones)
        body += f'<ul class="zones">{"".join(_zone(recovery, z, scale) for z in zones)}</ul>'
    body += _verdict(recovery) + first_findings(recovery)
    return section("answer", "Answer", body)


def total_sentence(recovery: Recovery) -> str:
    """The total with its interval, or that it is not determined."""
    facts, T = recovery.facts, unit(recovery, "total")
    total, word = facts.get("total") or {}, source_word(recovery)
    x0, x1 = extent(recovery)
    where = f"between {brief(x0)} and {brief(x1)} {unit(recovery, 'position')}"
    amount = plus_minus(total, T)
    kind = member_word(recovery)
    if amount == UNDETERMINED:
        return shown(
            f"These readings cannot tell the total {word} on this {clean(kind)} {where}; the "
            "findings say why and what would help."
        )
    known = " beyond the known parts" if recovery.case.source.known else ""
    lead = f"The total {word} on this {safe(kind)} {shown(where)}{known} is "
    lead += f"<strong>{shown(amount)}</strong>"
    if twin(total, T):
        lead += f" in phase and <strong>{shown(twin(total, T))}</strong> a quarter cycle ahead"
    ends = interval(total, T)
    if ends == NO_INTERVAL:
        return f"{lead}; there is no interval for it."
    low, high = ends.split(" to ", 1)
    part = "the part in phase lies " if twin(total, T) else ""
    where = f"{part}between {shown(low)} and {shown(high)}"
    if twin_interval(total, T):
        low, high = twin_interval(total, T)[2:-1].split(" to ", 1)
        where += f", the other between {shown(low)} and {shown(high)}"
    return f"{lead}: with {percent(recovery)} confidence {where}."


def span(zones: Sequence[Mapping[str, Any]]) -> tuple[float, float]:
    """Range that holds zero, every zone's value and its interval."""
    ends = [number(z.get(k)) for z in zones for k in ("value", "lower", "upper")]
    known = [0.0, *(v for v in ends if np.isfinite(v))]
    low, high = min(known), max(known)
    return (low, high) if high > low else (low, low + 1.0)


def strip(zone: Mapping[str, Any], scale: tuple[float, float]) -> str:
    """A zone's value as a dot on its interval, all zones on one scale; zero as a tick."""

    def at(value: Any) -> float:
        return 4 + 192 * (number(value) - scale[0]) / (scale[1] - scale[0])

    zero, dot, ends = (
        at(0.0),
        at(zone.get("value")),
        (at(zone.get("lower")), at(zone.get("upper"))),
    )
    marks = f'<path d="M{zero:.1f} 1V13" stroke="var(--grey)"/>'
    if np.isfinite(ends).all():
        marks += (
            f'<path d="M{ends[0]:.1f} 7H{ends[1]:.1f}" stroke="var(--band)" stroke-width="8"/>'
        )
    if np.isfinite(dot):
        marks += f'<path d="M{dot:.1f} 2V12" stroke="var(--blue)" stroke-width="3"/>'
    return f'<svg viewBox="0 0 200 14" preserveAspectRatio="none" aria-hidden="true">{marks}</svg>'


def _zone(recovery: Recovery, zone: Mapping[str, Any], scale: tuple[float, float]) -> str:
    T, P = unit(recovery, "total"), unit(recovery, "position")
    place = shown(minus(f"{brief(zone.get('from'), 6)} to {brief(zone.get('to'), 6)} {P}"))
    amount = shown(f"{plus_minus(zone, T)} {twin(zone, T)}".rstrip())
    ends = interval(zone, T)
    both = f"{ends} {twin_interval(zone, T)}".rstrip()
    share = number(zone.get("data_share"))
    weak = np.isfinite(share) and share < 0.5
    doubt = '<span class="weak">mainly the prior’s</span>' if weak else ""
    both = both if ends != NO_INTERVAL else "–"
    return zone_item(zone, place, f"{amount}{doubt}", strip(zone, scale), both)


def zone_item(
    zone: Mapping[str, Any], place: str, amount: str, drawn: str, ends: str, below: str = ""
) -> str:
    """A zone's line in the answer: name and place, amount, strip, interval (a plain text)."""
    return (
        f'<li><span class="zone">{name(zone.get("name"))} <small>{place}</small>{below}</span>'
        f'<span class="amount">{amount}</span>{drawn}<span class="range">{shown(ends)}</span></li>'
    )


def _verdict(recovery: Recovery) -> str:
    limit = recovery.facts.get("limit")
    if not limit:
        return ""
    chance = number(limit.get("probability"))
    most = limit.get("at_most")
    asked = recovery.case.source.limit
    kind = "total" if asked is not None and not asked.density else "source"
    text = str(most) if isinstance(most, str) else f"{brief(most)} {unit(recovery, kind)}"
    odds = ""
    if np.isfinite(chance):
        level = number(recovery.facts.get("level") or 0.95)
        odds = f" The probability that it is kept is {chance_text(chance, level)}."
        if limit.get("verdict") == "undecided":
            odds += " The readings do not decide it: take it for neither kept nor exceeded."
    return (
        f'<p class="verdict">Limit of {shown(text)} in {name(limit.get("zone"))}: '
        f"<strong>{safe(limit.get('verdict') or 'no verdict')}</strong>.{shown(odds)}</p>"
    )


def first_findings(recovery: Result) -> str:
    """How many findings of each level there are, with the way to them."""
    found = recovery.facts.get("findings") or []
    counts = {level: sum(f.get("level") == level for f in found) for level in LEVELS}
    words = {"serious": ("serious finding",) * 2, "caution": ("caution", "cautions"),
             "note": ("note", "notes")}  # fmt: skip
    parts = [
        f"{n} {words[k][n > 1]}{'s' if k == 'serious' and n > 1 else ''}"
        for k, n in counts.items()
        if n
    ]
    if not parts:
        return "<p>There are no findings against this answer.</p>"
    return f'<p>Before you use it: <a href="#findings">{" and ".join(parts)}</a>.</p>'


def member(recovery: Recovery) -> str:
    """The member to scale with its sensors."""
    body = f"{figure('member')}<details><summary>The member as it was described</summary>"
    body += f"{nested(recovery.case.member_text)}</details>"
    return section("member", "Member", body)


def source(recovery: Recovery) -> str:
    """Source with its band, zones and lumped parts."""
    lead = (
        f"<p>The estimate, and the band that holds the source at any one place with "
        f"{percent(recovery)} confidence. Dotted lines are the edges of zones."
        f"{_driven(recovery)}</p>"
    )
    told = peak_sentence(recovery.facts, unit(recovery, "source"), unit(recovery, "position"))
    if told:
        lead += f"<p>{shown(clean(told))}</p>"
    body = lead + figure("source") + telling.resolution(recovery) + tables.cells(recovery)
    return section("source", "Source", body)


def inside(recovery: Recovery) -> str:
    """Moment and shear, or the flow or force, along the member."""
    kind = recovery.case.member.kind
    words = " and ".join(c.name for c in section_curves(recovery))
    if not words:
        lead = "This result holds no forces or flows inside the member."
        return section("inside", "Inside the member", f"<p>{lead}</p>")
    lead = (
        f"The {safe(words)} that the recovered source makes inside the member, each place with "
        f"its {percent(recovery)} interval."
    )
    if kind.order == 4:
        lead += " A sagging moment is positive."
    if recovery.case.member.supports:
        lead += " Dotted lines are supports; the table has both sides of each."
    if recovery.case.source.known:
        lead += " The known parts of the source are included."
    body = f"<p>{lead}{_driven(recovery)}</p>{figure('section')}{tables.inside(recovery)}"
    return section("inside", "Inside the member", body)


def _driven(recovery: Result) -> str:
    """What the charts of a driven member show."""
    if not recovery.case.member.driven:
        return ""
    return " The charts show real parts, in phase with the reference; the tables have both."


def readings(recovery: Recovery) -> str:
    """Readings, fit, residuals, noise."""
    fit = recovery.facts.get("fit") or {}
    scale = (recovery.facts.get("noise") or {}).get("scale")
    lead = f"{safe(fit.get('used'))} of {safe(fit.get('read'))} readings are used."
    if brief(scale):
        lead += (
            f" Their residuals are {shown(brief(scale, 3))} times as large as the noise "
            "lets expect (1 is just right)."
        )
    lead += _thinned(recovery)
    tail = tables.noise(recovery) + telling.heaviest(recovery) + tables.excluded(recovery)
    tail += tables.readings(recovery)
    return section("readings", "Readings and fit", f"<p>{lead}</p>{figure('readings')}{tail}")


def _thinned(recovery: Recovery) -> str:
    """What the live charts leave out of very many readings."""
    used = int(flags(recovery.readings).sum())
    parts = []
    if used > READINGS:
        parts.append(f"the charts show {READINGS} of {used} used readings, evenly picked")
    if used > LINES:
        parts.append(f"influence lines are kept for {LINES} of them")
    if not parts:
        return ""
    return f" To keep this page small, {' and '.join(parts)}; the tables on disk have all."


def strength(recovery: Recovery) -> str:
    """The ladder with its slider, the L-curve, the criteria."""
    facts = recovery.facts.get("strength") or {}
    value, choose = brief(facts.get("value")), str(facts.get("choose"))
    dof = brief(facts.get("effective_dof"), 3)
    if not len(recovery.ladder):
        lead = (
            "Nothing was smoothed: the source has only lumped parts and a constant, and they "
            "follow from the readings without a strength."
        )
    elif choose == "averaged":
        lead = (
            "The answer is <em>averaged</em>: no single strength is picked, but the estimates of "
            "all strengths and of several families of roughness are averaged, each weighted by "
            "its evidence, that is by how probable it makes the readings."
        )
    else:
        text = f"The strength {value} was chosen by {choose}" if value else f"Chosen by {choose}"
        lead = f"{shown(text)}."
    lead += f" It spends {shown(dof)} effective degrees of freedom." if dof else ""
    more = (
        "Too weak a strength follows the noise, too strong a one flattens the source. Where the "
        "criteria agree, and where the totals hardly move along the ladder, the choice matters "
        "little."
    )
    body = f"<p>{lead}</p><p>{more}</p>{figure('l-curve')}{telling.decade(recovery)}"
    body += tables.criteria(recovery)
    return section("strength", "Strength", body)


def influence(recovery: Recovery) -> str:
    """Influence lines and modes."""
    lead = (
        "<p>An influence line says how much one reading would change for a unit source at each "
        "place. Where all lines are small the readings cannot see.</p>"
    )
    body = lead + figure("influence") + tables.influence(recovery)
    body += (
        "<h3>Modes</h3><p>A source shaped like a high mode hardly moves the member: what the "
        "readings tell about it drowns in the noise first.</p>"
    )
    return section("influence", "Influence", body + figure("modes") + tables.modes(recovery))


def findings(recovery: Result) -> str:
    """What the user must know and do, the most serious first."""
    found = recovery.facts.get("findings") or []
    ranked = sorted(found, key=lambda f: _rank(f.get("level")))
    items = "".join(
        f'<li class="{_level(f.get("level"))}"><strong>{_level(f.get("level"))}</strong> '
        f"<code>{safe(f.get('code'))}</code> {shown(clean(f.get('sentence')))}</li>"
        for f in ranked
    )
    body = f'<ul class="findings">{items}</ul>' if items else "<p>None.</p>"
    return section("findings", "Findings", body)


def _rank(level: Any) -> int:
    return LEVELS.index(level) if level in LEVELS else len(LEVELS)


def _level(level: Any) -> str:
    return level if level in LEVELS else "note"


def numbers(recovery: Recovery) -> str:
    """All answers as tables."""
    parts = (
        tables.zones(recovery),
        telling.shares(recovery),
        tables.background(recovery),
        tables.lumped(recovery),
        tables.detection(recovery),
        tables.with_own_units(recovery, "reactions", held(recovery), ("name", "at", "kind")),
        tables.with_own_units(recovery, "nuisances", "Other unknowns", ("name",)),
    )
    note = (
        f"<p>Standard uncertainties and intervals are those of the {band(recovery)} band; they "
        "are not additive, because neighbouring zones share their doubt.</p>"
    )
    return section("numbers", "Numbers", note + "".join(parts) + _alone(recovery))


def held(recovery: Result) -> str:
    """Heading of what ends and supports take."""
    kinds = {str(r.get("kind")) for r in recovery.facts.get("reactions") or []}
    mechanical = all(k.endswith(("force", "moment", "torque")) for k in kinds)
    return "Reactions" if mechanical else "Outflow at the ends"


def _alone(recovery: Recovery) -> str:
    """What the readings allow without smoothness."""
    alone = recovery.facts.get("alone") or {}
    if not alone.get("told"):
        return ""
    items = "".join(f"<li>{shown(clean(t))}</li>" for t in alone["told"])
    lead = f"<h3>Without smoothness</h3><p>{shown(clean(alone['assumed']))}:</p>"
    return f"{lead}<ul>{items}</ul>"


def method(recovery: Recovery) -> str:
    """How it was done, with sources."""
    del recovery  # the same for every member
    return section("method", "Method", method_text())


def inputs(recovery: Recovery) -> str:
    """Files with their hashes, version and seed."""
    facts = recovery.facts
    rows = "".join(
        f"<li>{name(i.get('file'))}<br><code>sha256 {safe(i.get('sha256'))}</code></li>"
        for i in facts.get("inputs") or []
    )
    line = f"srcfit {safe(facts.get('version'))}, seed {safe(facts.get('seed'))}."
    return section(
        "inputs", "Inputs", f"<p>{line} The same inputs give the same numbers.</p><ul>{rows}</ul>"
    )


def cautions(recovery: Result) -> str:
    """The member's own cautions and the general ones."""
    own = [clean(c) for c in recovery.facts.get("cautions") or recovery.case.member.kind.cautions]
    every = dict.fromkeys([*own, *CAUTIONS])
    items = "".join(f"<li>{safe(c)}</li>" for c in every)
    return section("cautions", "Cautions", f"<ul>{items}</ul>")


SECTIONS: dict[str, Callable[[Recovery], str]] = {
    "answer": answer,
    "findings": findings,
    "member": member,
    "source": source,
    "inside": inside,
    "readings": readings,
    "strength": strength,
    "influence": influence,
    "numbers": numbers,
    "assumptions": assumptions,
    "method": method,
    "inputs": inputs,
    "cautions": cautions,
}
