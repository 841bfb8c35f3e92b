"""Signs and what was taken for granted, printed back."""

from __future__ import annotations

from typing import Any

from srcfit.captions import percent
from srcfit.case.model import ColumnSpec
from srcfit.frames import pretty
from srcfit.member import Unknown
from srcfit.recovery import Recovery, Result
from srcfit.report.html import clean, listing, name, safe, section
from srcfit.report.numbers import shown
from srcfit.rounding import brief


def band(recovery: Recovery) -> str:
    """Which band the intervals are: calibrated, cautious or plain."""
    facts = recovery.facts.get("strength") or {}
    return safe(facts.get("interval") or recovery.case.strength.interval)


def assumptions(recovery: Recovery) -> str:
    """Signs and what was taken for granted, printed back."""
    body = f"<h3>Signs</h3>{signs(recovery)}<h3>Columns</h3>"
    body += "".join(column(c) for c in recovery.case.columns)
    body += f"<h3>Asked of the source</h3>{listing(_asked(recovery, recovery.case.source))}"
    return section("assumptions", "Signs and assumptions", body)


def signs(recovery: Result) -> str:
    """What is positive, as a list."""
    kind = recovery.case.member.kind
    radial = kind.geometry != "line" or kind.name == "radial_aquifer"
    grows = (
        "from the inner to the outer radius" if radial else "from the left end to the right end"
    )
    told = [
        f"x grows {grows}.",
        f"A positive source pushes the {clean(kind.response)} in its positive direction.",
    ]
    if kind.order == 4:
        told.append(
            "Positive is down for a beam's load and deflection; a sagging moment is positive; a "
            "reaction is positive when it opposes a positive load."
        )
    elif kind.relative:
        told.append("A flux is positive towards growing x.")
    elif kind.name in ("rod", "cable", "shaft"):
        told.append("A force is positive in tension, a torque with growing twist.")
    if recovery.case.member.driven:
        told.append("Complex amplitudes with time factor exp(+iωt); their real parts are shown.")
    return f"<ul>{''.join(f'<li>{safe(s)}</li>' for s in told)}</ul>"


def column(column: ColumnSpec) -> str:
    """One column of a table as it was understood."""
    turned = "turned round to the member's own sign" if column.sign < 0 else "as they are"
    pairs = [
        ("kind", safe(column.kind)),
        ("group", name(column.group)),
        ("unit", safe(pretty(column.unit) if column.unit else "as the table states")),
        ("positive", safe(f"{column.positive or 'the member’s own direction'}: values {turned}")),
    ]
    for key in ("offset", "scale", "drift"):
        value = getattr(column, key)
        if isinstance(value, Unknown):
            pairs.append((key, "unknown, found from the readings"))
        elif value != (1.0 if key == "scale" else 0.0):
            pairs.append((key, shown(f"{brief(value, 6)} (SI)")))
    if column.step is not None:
        pairs.append(("step", shown(f"beyond x = {brief(column.step.at, 6)} m")))
    if column.gauge_length:
        pairs.append(("gauge length", shown(f"{brief(column.gauge_length, 6)} m")))
    if column.distance is not None:
        pairs.append(("distance below the axis", shown(f"{brief(column.distance, 6)} m")))
    if column.correlation:
        pairs.append(("correlation of neighbours", safe(column.correlation)))
    heads = ", ".join(name(c) for c in column.columns[:6])
    more = f" and {len(column.columns) - 6} more" if len(column.columns) > 6 else ""
    return f'<div class="column"><h4>{heads}{more}</h4>{listing(pairs)}</div>'


def _asked(recovery: Recovery, asked: Any) -> list[tuple[str, str]]:
    per = {
        "sign": asked.sign,
        "cells": asked.cells,
        "smooth part": "yes" if asked.smooth else "no",
    }
    pairs = [(k, safe(v)) for k, v in per.items()]
    for key in ("zones", "breaks", "known", "zero", "lumped"):
        count = len(getattr(asked, key))
        if count:
            pairs.append((key, f"{count} declared"))
    if asked.total is not None:
        pairs.append(("total", "known beforehand, with its uncertainty"))
    uncertain = recovery.case.member.uncertainty
    if uncertain:
        pairs.append(("uncertain properties", ", ".join(safe(k) for k in uncertain)))
    pairs.append(("interval", safe(f"{band(recovery)} band, {percent(recovery)}")))
    return pairs
