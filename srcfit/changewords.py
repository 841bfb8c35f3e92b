"""What a comparison of two campaigns says, in sentences: for a terminal, the page, the figures."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from srcfit.captions import member_word, percent, source_word, unit
from srcfit.comparison import Comparison
from srcfit.frames import number, numbers, pretty, texts, unit_of
from srcfit.rounding import (
    NO_INTERVAL,
    UNDETERMINED,
    brief,
    interval,
    listed,
    minus,
    plus_minus,
    twin,
    twin_interval,
)

Number = Mapping[str, Any]
Words = Callable[[str], str]
NAMED = 3  # zones named one by one in the first sentence; further ones are counted


def parts(facts: Mapping[str, Any]) -> list[tuple[str, Number]]:
    """(name, numbers) of each zone and each lumped part."""
    return [(str(part["name"]), part) for part in (*facts["zones"], *facts["lumped"])]


def statements(facts: Mapping[str, Any]) -> list[str]:
    """One sentence for the total, each zone and each lumped part: what is shown, what is not."""
    unit_text = facts["units"]["total"]
    named = [("total", facts["total"])]
    named += [(f"zone {z['name']}", z) for z in facts["zones"]]
    named += [(f"lumped {p['name']}", p) for p in facts["lumped"]]
    return [f"{name}: {_statement(n, unit_text)}" for name, n in named]


def _statement(n: Number, unit_text: str) -> str:
    if n["shown"] is None:
        return "the readings cannot tell its change"
    change = signed(amount(n, unit_text))
    if n["shown"]:
        return f"{change}: a change is shown"
    lead = f"{change}: no change is shown"
    if n["missed"] is None:
        return f"{lead}, but these sensors may have missed any"
    return f"{lead}, but one of up to {brief(n['missed'], 2)} {unit_text} may have been missed"


def amount(n: Number, unit_text: str) -> str:
    """Value ± sd; of a driven member with its imaginary part."""
    told, beside = plus_minus(n, unit_text), twin(n, unit_text)
    return f"{told} and {beside}" if beside and told != UNDETERMINED else told


def signed(text: str) -> str:
    """The same with a plus sign before a positive change."""
    return f"+{text}" if text[:1].isdigit() and text.split(" ")[0].strip("0.") else text


def between(n: Number, unit_text: str) -> str:
    """Both ends of the interval, of a driven member those of both parts; empty without one."""
    told, beside = interval(n, unit_text), twin_interval(n, unit_text)
    if told == NO_INTERVAL:
        return ""
    return f"{told} and {beside}" if beside else told


# --- the answer in one sentence -----------------------------------------------------------------


def headline(
    comparison: Comparison, *, strong: Words = str, name: Words = str, say: Words = str
) -> str:
    """What changed, where, by how much, and what could have been missed, in one sentence.

    Parameters
    ----------
    comparison : Comparison
    strong, name, say : functions text -> text
        How amounts, the user's names and all other words are written.
    """
    facts, T = comparison.facts, unit(comparison, "total")
    subject = f"the {source_word(comparison)} on this {member_word(comparison)}"
    every = parts(facts)
    seen = sorted((p for p in every if p[1]["shown"]), key=lambda p: -_size(p[1]))
    quiet = [p for p in every if p[1]["shown"] is False]
    level = f"with {percent(comparison)} confidence "

    def told(n: Number) -> str:
        ends, lead = between(n, T), level if n is first else ""
        return strong(signed(amount(n, T))) + (say(f" ({lead}{ends})") if ends else "")

    total = facts["total"]
    first = seen[0][1] if seen else total
    if not seen and not total["shown"]:
        return _nothing(comparison, subject, quiet, every, name=name, say=say)
    lead = say(f"From A to B {subject} changed ")
    if seen:
        each = [f"{say('by ')}{told(n)}{say(' in ')}{name(label)}" for label, n in seen[:NAMED]]
        more = len(seen) - NAMED
        each += [say(f"in {more} further {'part' if more == 1 else 'parts'}")] if more > 0 else []
        lead += listed(each)
        if total["shown"]:
            lead += say(", in total by ") + told(total)
        elif total["shown"] is None:
            lead += say("; how it changed in total the readings cannot tell")
        else:
            lead += say(f"; in total no change is shown{_missed(total, T)}")
    else:
        lead += say("in total by ") + told(total)
        lead += say(", but the readings do not show where") if every else ""
    if quiet:
        where = _named([label for label, _ in quiet], name, say)
        lead += say("; no change is shown in ") + where
        lead += say(f", where {_missed_in(quiet, T)} may have been missed")
    return lead + "."


def _size(n: Number) -> float:
    return float(np.hypot(number(n["value"]), number(n.get("imaginary") or 0.0)))


def _named(labels: Sequence[str], name: Words, say: Words) -> str:
    if len(labels) <= NAMED:
        return listed([name(n) for n in labels])
    return say(f"the other {len(labels)} parts")


def _missed(n: Number, unit_text: str) -> str:
    if n["missed"] is None:
        return ", and any change may have been missed"
    return f", but up to {brief(n['missed'], 2)} {unit_text} may have been missed"


def _missed_in(quiet: Sequence[tuple[str, Number]], unit_text: str) -> str:
    """How much could have been missed in parts that show no change, in their order."""
    sizes = [number(n["missed"]) for _, n in quiet]
    if not np.isfinite(sizes).all():
        return "any change"
    told = [brief(v, 2) for v in sizes]
    if len(set(told)) == 1:
        return f"up to {told[0]} {unit_text}"
    if len(told) <= NAMED:
        return f"up to {listed(told)} {unit_text}"
    low, high = brief(min(sizes), 2), brief(max(sizes), 2)
    return f"between {low} and {high} {unit_text} (listed below)"


def _nothing(
    comparison: Comparison, subject: str, quiet: Sequence[tuple[str, Number]],
    every: Sequence[tuple[str, Number]], *, name: Words, say: Words,
) -> str:  # fmt: skip
    """The sentence when no change is shown anywhere."""
    total, T = comparison.facts["total"], unit(comparison, "total")
    lead = f"No change of {subject} is shown from A to B"
    if not quiet:
        if total["shown"] is None:
            return say(f"These readings cannot tell how {subject} changed from A to B; the "
                       "findings say why and what would help.")  # fmt: skip
        return say(f"{lead}{_missed(total, T)}.")
    where = (
        _named([label for label, _ in quiet], name, say)
        if len(quiet) <= NAMED
        else say(f"any of {len(quiet)} parts")
    )
    inside = f"{_missed_in(quiet, T)} there"
    if total["shown"] is None:
        lead, tail = (
            f"{lead} in ",
            f", but {inside} may have been missed; in total the readings cannot tell",
        )
    elif total["missed"] is None:
        lead, tail = f"{lead}, neither in total nor in ", ", but any change may have been missed"
    else:
        lead += ", neither in total nor in "
        whole = f"up to {brief(total['missed'], 2)} {T} in total"
        tail = f", but {whole} and {inside} may have been missed"
    rest = len(every) - len(quiet)
    if rest:
        tail += f"; in {rest} further {'part' if rest == 1 else 'parts'} the readings cannot tell"
    return say(lead) + where + say(f"{tail}.")


# --- text alternatives --------------------------------------------------------------------------


def describe_change(comparison: Comparison) -> str:
    """The answer, and where the density changed most."""
    text, frame = headline(comparison), comparison.source
    value = numbers(frame, "estimate")
    if not np.isfinite(value).any():
        return minus(text)
    top = int(np.nanargmax(np.abs(value)))
    pairs = {"value": "estimate", "sd": "sd", "lower": "lower", "upper": "upper"}
    row = {key: numbers(frame, column)[top] for key, column in pairs.items()}
    ends = interval(row, unit(comparison, "source"))
    more = f" ({percent(comparison)} interval {ends})" if ends != NO_INTERVAL else ""
    P, U = unit(comparison, "position"), unit(comparison, "source")
    return minus(
        f"{text} The density changed most near {brief(numbers(frame, 'x')[top])} {P}: "
        f"{signed(plus_minus(row, U))}{more}."
    )


def describe_campaigns(comparison: Comparison) -> str:
    """How many sensors are common, and how well the differences are met."""
    frame, facts = comparison.readings, comparison.facts
    z, x = numbers(frame, "standardised"), numbers(frame, "x")
    how = f"{facts['paired']} sensors of both campaigns, and their differences B − A"
    if facts["by"] == "stack":
        how = (
            f"{facts['a']['used']} readings of A and {facts['b']['used']} of B, of which "
            f"{facts['paired']} are of common sensors; residuals below"
        )
    parts = [how]
    if np.isfinite(z).any():
        worst = int(np.nanargmax(np.abs(z)))
        parts.append(
            f"standardised residuals have a root mean square of "
            f"{brief(float(np.sqrt(np.nanmean(z**2))), 2)}, the largest is {brief(z[worst], 2)} "
            f"at x = {brief(x[worst])} {pretty(unit_of(frame, 'x'))} "
            f"({texts(frame, 'group')[worst]})"
        )
    gap = numbers(frame, "difference")
    if np.isfinite(gap).any():
        top = int(np.nanargmax(np.abs(gap)))
        parts.append(
            f"the largest difference is {signed(brief(gap[top]))} "
            f"{pretty(texts(frame, 'unit')[top])} at x = {brief(x[top])} "
            f"{pretty(unit_of(frame, 'x'))}"
        )
    return minus("; ".join(parts) + ".")
