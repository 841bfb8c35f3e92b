"""The page of a comparison: what changed first, then the reasons, in the order of a recovery's."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from srcfit.captions import extent, percent, source_word, unit
from srcfit.changeplots import draw_all
from srcfit.changewords import amount, between, headline, signed
from srcfit.comparison import Comparison
from srcfit.frames import header, number, numbers, pretty, texts
from srcfit.plots import Drawn
from srcfit.report import tables
from srcfit.report.assumptions import column, signs
from srcfit.report.data import source_data
from srcfit.report.html import Num, clean, figure, listing, name, num, safe, section, table
from srcfit.report.method import method_text
from srcfit.report.numbers import minus, shown
from srcfit.report.page import document, in_notebook, with_figures
from srcfit.report.sections import cautions, findings, first_findings, held, span, strip, zone_item
from srcfit.report.tables import Row, estimate, estimate_heads, share, with_unit
from srcfit.rounding import brief, plus_minus

CAPTIONS = {
    "change": "Change of the source along the member, which is drawn below it to scale.",
    "campaigns": "Readings of both campaigns, and what came of them.",
}
STEPS = (
    (
        "From two campaigns to one change",
        "The member answers linearly, so the change of the source, B − A, is found in one problem "
        "and not as the difference of two answers. Readings of the same sensor are subtracted: a "
        "datum that both share, noise that the sensor keeps and most of what is uncertain about "
        "the member drop out. Where too few sensors are common, both sources are unknown and the "
        "change is a question to them.",
    ),
    (
        "The floor of the band",
        "What the readings cannot see is taken to vary as much as a source of the stated mean "
        "density might, not as the change that was found: one that is lost in the noise would "
        "otherwise make its own interval too narrow.",
    ),
    (
        "Shown, or missed",
        "A change is shown where its interval leaves out zero. What may have been missed is the "
        "change, spread evenly over the zone, that these sensors would have shown in 95 of 100 "
        "campaigns, after the detection limit of L. A. Currie, Limits for qualitative detection "
        "and quantitative determination, Analytical Chemistry 40 (1968) 586–593. Each zone is "
        "judged by itself: of twenty without any change one may be shown by chance.",
    ),
)


SHOWN = {True: "yes", False: "no", None: "cannot tell"}


def answer(comparison: Comparison) -> str:
    """One sentence that a client understands, the zones, the campaigns, what to know first."""
    body = f'<p class="answer">{_sentence(comparison)}</p>'
    parts = _sorted([*comparison.facts["zones"], *comparison.facts["lumped"]])
    if parts:
        scale = span(parts)
        items = "".join(_part(comparison, p, scale) for p in parts)
        body += f'<ul class="zones">{items}</ul>'
    return section("answer", "Answer", body + _campaigns(comparison) + first_findings(comparison))


def _sentence(comparison: Comparison) -> str:
    return headline(
        comparison, strong=lambda t: f"<strong>{shown(t)}</strong>", name=name,
        say=lambda t: shown(clean(t)),
    )  # fmt: skip


def _sorted(parts: Sequence[Mapping[str, Any]]) -> list[Mapping[str, Any]]:
    """Parts that show a change first, each kind by the size of the change."""

    def rank(part: Mapping[str, Any]) -> tuple[bool, bool, float]:
        size = np.nan_to_num(number(part["value"]))
        return not part["shown"], part["shown"] is None, -abs(float(size))

    return sorted(parts, key=rank)


def _part(comparison: Comparison, part: Mapping[str, Any], scale: tuple[float, float]) -> str:
    T, P = unit(comparison, "total"), unit(comparison, "position")
    where = brief(part.get("at"), 6)
    if "from" in part:
        where = f"{brief(part['from'], 6)} to {brief(part['to'], 6)}"
    told = shown(signed(amount(part, T)))
    doubt = "" if part["shown"] else f'<span class="weak">{shown(_verdict(part, T))}</span>'
    return zone_item(part, shown(minus(f"{where} {P}")), told, strip(part, scale),
                     between(part, T) or "–", doubt)  # fmt: skip


def _verdict(part: Mapping[str, Any], unit_text: str) -> str:
    if part["shown"] is None:
        return "the readings cannot tell"
    if part["missed"] is None:
        return "no change shown; any may be missed"
    return f"no change shown; up to {brief(part['missed'], 2)} {unit_text} may be missed"


def _campaigns(comparison: Comparison) -> str:
    pairs = []
    for side in ("a", "b"):
        facts = comparison.facts[side]
        title = name(facts["title"] or facts["case"] or "no title")
        count = f"{facts['used']} of {facts['read']} readings used"
        pairs.append((side.upper(), f"{title}: {safe(count)}"))
    return listing(pairs)


def change(comparison: Comparison) -> str:
    """The change with its band over the member."""
    lead = (
        f"<p>The change of the {safe(source_word(comparison))} from A to B, and the band that "
        f"holds it at any one place with {percent(comparison)} confidence. Where the band leaves "
        "out zero a change stands out at that place; the zones are judged by their own "
        "intervals.</p>"
    )
    body = lead + figure("change") + tables.cells(comparison)
    return section("change", "Change", body)


def readings(comparison: Comparison) -> str:
    """Both campaigns' readings and their differences."""
    facts = comparison.facts
    fit = facts["fit"]
    lead = f"{facts['paired']} sensors were read in both campaigns and their readings subtracted."
    if facts["by"] == "stack":
        lead = (
            f"All {fit['rows']} readings were taken together; {facts['paired']} sensors were read "
            "in both campaigns."
        )
    if fit["chi_square"] is not None and fit["dof"] is not None:
        lead += (
            f" Chi-square is {brief(fit['chi_square'])} on {brief(fit['dof'])} degrees of freedom."
        )
    body = f"<p>{shown(clean(lead))}</p>{figure('campaigns')}{_excluded(comparison)}"
    return section("readings", "Readings", body + _readings_table(comparison))


def _readings_table(comparison: Comparison) -> str:
    frame = comparison.readings
    words = [k for k in ("campaign", "group", "kind", "unit") if header(frame, k)]
    wanted = ("x", "value", "A", "B", "difference", "difference_imag", "sd", "predicted",
               "standardised")  # fmt: skip
    present = [k for k in wanted if header(frame, k)]
    names = [[pretty(t) if k == "unit" else t for t in texts(frame, k)] for k in words]
    columns = [numbers(frame, k) for k in present]
    digits = {"sd": 2, "standardised": 2}
    rows: list[Row] = [
        [*(name(c[i]) for c in names),
         *(num(c[i], digits=digits.get(k, 6)) for k, c in zip(present, columns, strict=True))]
        for i in range(len(frame))
    ]  # fmt: skip
    heads = [*words, *(with_unit(k, unit(comparison, "position")) if k == "x" else
                       k.replace("_imag", ", imaginary part") for k in present)]  # fmt: skip
    return table("table-readings", "Every sensor", heads, rows, fold=True)


def _excluded(comparison: Comparison) -> str:
    rows: list[Row] = [
        [side.upper(), name(e["file"]), num(e["line"], str(e["line"])), safe(e["reason"])]
        for side in ("a", "b")
        for e in comparison.facts[side]["excluded"]
    ]
    heads = ["campaign", "file", "line", "reason"]
    return table("table-excluded", "Readings not used", heads, rows, fold=len(rows) > 20)


def amounts(comparison: Comparison) -> str:
    """All answers as tables."""
    note = (
        "<p>A and B are what each campaign says by itself; the change is found from both together "
        "and need not be their difference. Standard uncertainties and intervals of the change are "
        f"those of the {_band(comparison)} band; they are not additive, because neighbouring "
        "zones share their doubt.</p>"
    )
    body = note + _zones(comparison) + tables.background(comparison)
    for key, head, first in (
        ("reactions", held(comparison), ("name", "at", "kind")),
        ("nuisances", "Nuisances", ("name", "of")),
    ):
        body += tables.with_own_units(comparison, key, f"{head}: change from A to B", first)
    return section("numbers", "Numbers", body)


def _band(comparison: Comparison) -> str:
    smooth = comparison.case.source.smooth
    return "plain" if smooth and comparison.case.strength.interval == "plain" else "cautious"


def _zones(comparison: Comparison) -> str:
    """Zones and lumped parts, what is shown first, then the whole member."""
    facts, driven = comparison.facts, comparison.case.member.driven
    T, P = unit(comparison, "total"), unit(comparison, "position")
    whole = {"from": extent(comparison)[0], "to": extent(comparison)[1]} | facts["total"]
    rows: list[Row] = []
    for part in [*_sorted([*facts["zones"], *facts["lumped"]]), whole]:
        label = name(part["name"]) if "name" in part else "whole member"
        at = part.get("at")
        place = [num(part.get("from", at), digits=6), num(part.get("to", at), digits=6)]
        own = [_own(part[k]) for k in ("a", "b")]
        rows.append([label, *place, *own, *estimate(part, driven), SHOWN[part["shown"]],
                     num(part["missed"], brief(part["missed"], 2)),
                     share(part.get("data_share"))])  # fmt: skip
    heads = [
        "part",
        with_unit("from", P),
        with_unit("to", P),
        with_unit("A", T),
        with_unit("B", T),
    ]
    change_heads = estimate_heads(comparison, unit(comparison, "total"))
    heads += [change_heads[0].replace("value", "change"), *change_heads[1:]]
    heads += ["change shown", with_unit("may be missed", T), "data’s share"]
    return table("table-zones", "Change by zone, what is shown first", heads, rows)


def _own(n: Mapping[str, Any]) -> Num:
    return num(n["value"], plus_minus(n))


def assumptions(comparison: Comparison) -> str:
    """What was held common, the shared noise, the floor, signs and columns."""
    facts = comparison.facts
    common = ", ".join(name(c) for c in facts["common"]) or "none declared"
    how = "differences of common sensors"
    if facts["by"] == "stack":
        how = "all readings together, both sources unknown"
    shared = facts["shared_noise"]
    noise = "none: the noise of the campaigns is independent"
    if shared:
        noise = f"correlation {shared:g} between the campaigns, sensor by sensor"
    uncertain = ", ".join(safe(k) for k in comparison.case.member.uncertainty)
    floor = (
        f"a mean change of {brief(facts['reckoned'])} {unit(comparison, 'source')} is reckoned "
        "with where the readings do not tell"
    )
    pairs = [
        ("the same in both", "the member, its supports and stiffness, and the list of zones"),
        ("nuisances held common", common),
        ("method", safe(how)),
        ("noise shared by both", shown(noise)),
        ("floor of the band",
         shown(clean(floor)) if comparison.case.source.smooth else "none: no smooth part"),
        ("uncertain properties",
         f"{uncertain}: the same in both campaigns" if uncertain else "none stated"),
        ("interval", safe(f"{_band(comparison)} band, {percent(comparison)}")),
    ]  # fmt: skip
    body = f"<h3>Of the comparison</h3>{listing(pairs)}<h3>Signs</h3>{signs(comparison)}"
    body += "<p>A positive change means more in B than in A.</p>"
    for side, case in zip("AB", comparison.cases, strict=True):
        body += f"<h3>Columns of {side}</h3>" + "".join(column(c) for c in case.columns)
    return section("assumptions", "Assumptions and signs", body)


def method(comparison: Comparison) -> str:
    """How the change was found, then how any source is found."""
    del comparison  # the same for every comparison
    own = "".join(f"<h3>{safe(head)}</h3><p>{safe(text)}</p>" for head, text in STEPS)
    return section("method", "Method", own + method_text())


def inputs(comparison: Comparison) -> str:
    """Files of both campaigns with their hashes, version and seed."""
    facts = comparison.facts
    line = f"srcfit {safe(facts['version'])}, seed {safe(facts['seed'])}."
    body = f"<p>{line} The same inputs and options give the same numbers.</p>"
    for side in ("a", "b"):
        items = "".join(
            f"<li>{name(i['file'])}<br><code>sha256 {safe(i['sha256'])}</code></li>"
            for i in facts[side]["inputs"]
        )
        body += f"<h3>{side.upper()}</h3><ul>{items}</ul>"
    return section("inputs", "Inputs", body)


CHANGE_SECTIONS: dict[str, Callable[[Comparison], str]] = {
    "answer": answer,
    "findings": findings,
    "change": change,
    "readings": readings,
    "numbers": amounts,
    "assumptions": assumptions,
    "method": method,
    "inputs": inputs,
    "cautions": cautions,
}


def render_change(comparison: Comparison, drawn: Mapping[str, Drawn] | None = None) -> str:
    """The report of a comparison as one self-contained HTML document.

    Parameters
    ----------
    comparison : Comparison
    drawn : mapping, optional
        What `changeplots.draw_all` gave, to save drawing twice.

    Returns
    -------
    str
        Under the same content policy as the page of a recovery.
    """
    drawn = drawn or draw_all(comparison)
    body = "\n".join(part(comparison) for part in CHANGE_SECTIONS.values())
    title = str(comparison.facts.get("title") or "Comparison")
    return document(
        comparison, title, with_figures(body, drawn, CAPTIONS), source_data(comparison)
    )


def change_fragment(comparison: Comparison) -> str:
    """The answer, the findings, the zones and the figure of the change, for a notebook."""
    body = answer(comparison) + findings(comparison) + _zones(comparison)
    title = str(comparison.facts.get("title") or "Comparison")
    return in_notebook(title, body, draw_all(comparison, ("change",))["change"])
