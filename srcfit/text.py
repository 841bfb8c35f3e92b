"""Results as plain text for a terminal: aligned tables, rounded as the GUM asks."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Mapping, Sequence
from typing import Any
from unicodedata import category, east_asian_width

from srcfit.rounding import (
    UNDETERMINED,
    brief,
    chance_text,
    held_word,
    interval,
    minus,
    peak_sentence,
    plus_minus,
    twin,
    twin_interval,
    with_unit,
)

WIDTH = 96
ROUNDING = 1e-6  # part of the largest amount of a balance that is rounding
LEVELS = ("serious", "caution", "note")

Summary = Mapping[str, Any]


def clean(text: object) -> str:
    """`text` on one line without control or direction characters, safe to print."""
    return "".join(c if category(c)[0] != "C" else " " for c in str(text))


def width(text: str) -> int:
    """Columns that `text` takes on a terminal."""
    return sum(0 if category(c)[0] == "M" else 1 + (east_asian_width(c) in "WF") for c in text)


def table(header: Sequence[str], rows: Iterable[Sequence[object]], right: str = "") -> str:
    """An aligned table with two blanks between columns.

    Parameters
    ----------
    header : sequence of str
        Headers; no rule and no header is printed when all of them are empty.
    rows : sequences of anything, each as long as `header`
    right : str
        One letter a column: "r" aligns it to the right.
    """
    body = [[clean(cell) for cell in row] for row in rows]
    lines = [list(header), *body] if any(header) else body
    wide = [max(map(width, column)) for column in zip(*lines, strict=True)] if lines else []
    right = right.ljust(len(wide), "l")
    return "\n".join(
        "  ".join(
            " " * (w - width(c)) + c if side == "r" else c + " " * (w - width(c))
            for c, w, side in zip(line, wide, right, strict=False)
        ).rstrip()
        for line in lines
    )


def section(title: str, body: str) -> str:
    """A titled part with its lines set in by two blanks; empty when there is no body."""
    return f"{title}\n{textwrap.indent(body, '  ')}" if body else ""


def bullets(lines: Iterable[str]) -> str:
    """Wrapped sentences, one a bullet."""
    return "\n".join(
        textwrap.fill(clean(line), WIDTH, initial_indent="- ", subsequent_indent="  ")
        for line in lines
    )


def join(*parts: str) -> str:
    """Parts that are not empty, with a blank line between them."""
    return "\n\n".join(part for part in parts if part)


def recovery_text(
    summary: Summary, limit_unit: str = "", balance: Mapping[str, float] | None = None
) -> str:
    """The table at the end of `srcfit recover`.

    Parameters
    ----------
    summary : mapping
        As in summary.json.
    limit_unit : str
        Unit of the limit, where one is asked about.
    balance : mapping, optional
        Equilibrium of the estimate, see `Recovery.balance`.

    Returns
    -------
    str
        Title, what was read and how, every number with its standard uncertainty and interval,
        the limit's verdict, the equilibrium, the findings and the cautions.
    """
    return join(
        _opening(summary),
        _numbers(summary),
        section("Peak", _everywhere(summary)),
        _alone(summary),
        section("Limit", _limit(summary, limit_unit)),
        section("Balance", balance_text(balance, summary["units"]["total"]) if balance else ""),
        section("Findings", findings_text(summary["findings"])),
        section("Cautions", bullets(summary["cautions"])),
    )


def balance_text(balance: Mapping[str, float], unit: str) -> str:
    """Equilibrium as a small table: what acts is carried by ends and supports and along."""
    words = {"source": "source", "reactions": "ends and supports", "along": "along the member",
             "difference": "difference"}  # fmt: skip
    size = max(abs(v) for v in balance.values())
    shares = {k: v if abs(v) > ROUNDING * size else 0.0 for k, v in balance.items()}
    rows = [(words[k], f"{brief(v, 6)} {unit}") for k, v in shares.items()]
    return minus(table(("", ""), rows, "lr"))


def findings_text(findings: Iterable[Mapping[str, str]]) -> str:
    """Findings, the serious ones first, one a bullet."""
    order = sorted(findings, key=lambda f: LEVELS.index(f["level"]))
    return bullets(f"{f['level']}: {f['sentence']} ({f['code']})" for f in order)


def _opening(summary: Summary) -> str:
    fit, strength = summary["fit"], summary["strength"]
    value = brief(strength["value"], 4)
    percent = f"{100 * summary['level']:g} %"
    chosen = f"strength {value}, chosen by {strength['choose']}" if value else "strength averaged"
    rows = [
        ("readings", f"{fit['used']} used of {fit['read']}"),
        ("method", f"{strength['solver']}, {chosen}, {_dof(strength['effective_dof'])}"),
        ("intervals", f"{strength.get('interval', 'cautious')} band, {percent}"),
        ("noise", _noise(summary)),
    ]
    return join(clean(summary["title"]), table(("", ""), rows))


def _dof(value: float | None) -> str:
    return (
        f"{brief(value, 3)} effective degrees of freedom" if value is not None else "dof unknown"
    )


def _noise(summary: Summary) -> str:
    noise = summary["noise"]
    sds = ((g, with_unit(brief(g["sd"]), g["unit"])) for g in noise["groups"])
    groups = ", ".join(
        f"{g['group']} {sd}{' (estimated)' if g['estimated'] else ''}" for g, sd in sds
    )
    scale = brief(noise["scale"])
    seen = f"; residuals {scale} times that" if scale else ""
    return f"sd {groups}{seen}" if groups else f"scale {scale}"


def _numbers(summary: Summary) -> str:
    units = summary["units"]
    at, total, source = units["position"], units["total"], units["source"]
    rows = _rows("total", "", summary["total"], total)
    for z in summary["zones"] or ():
        place = f"{brief(z['from'], 6)} to {brief(z['to'], 6)} {at}"
        rows += _rows(f"zone {z['name']}", place, z, total, _share(z))
    if summary["background"]:
        rows += _rows("background", "", summary["background"], source)
    for p in summary["lumped"] or ():
        rows += _rows(f"lumped {p['name']}", _at(p["at"], at), p, total)
    rows += [_peak(summary["peak"], at, source)] if summary["peak"] else []
    for n in summary["nuisances"] or ():
        rows += _rows(n["name"], "", n, n["unit"])
    for r in summary["reactions"] or ():
        rows += _rows(held_word(r["name"], r["kind"]), _at(r["at"], at), r, r["unit"])
    level = f"{100 * summary['level']:g} % interval"
    return table(("", "where", "value ± sd", level, "data share"), rows, "llrrr")


def _rows(
    name: str, where: str, number: Mapping[str, Any], unit: str, share: str = ""
) -> list[tuple[str, ...]]:
    """A row of the table; of a driven member the imaginary part in one of its own below."""
    told = plus_minus(number, unit)
    rows: list[tuple[str, ...]] = [(name, where, told, interval(number, unit), share)]
    beside = twin(number, unit)
    if beside and told != UNDETERMINED:
        rows.append(("  imaginary part", "", beside, twin_interval(number, unit), ""))
    return rows


def _at(place: float | None, unit: str) -> str:
    return f"{brief(place, 6)} {unit}" if place is not None else ""


def _share(zone: Mapping[str, Any]) -> str:
    share = zone["data_share"]
    return f"{100 * share:.0f} %" if share is not None else ""


def _peak(peak: Mapping[str, Any], at: str, source: str) -> tuple[str, str, str, str, str]:
    """The peak has no sd of its own: its interval sets the last decimal place."""
    lower, upper = peak["lower"], peak["upper"]
    known = lower is not None and upper is not None
    spread = {"value": peak["value"], "lower": lower, "upper": upper,
              "sd": (upper - lower) / 4 if known else None}  # fmt: skip
    first, last = peak["position_lower"], peak["position_upper"]
    place = _at(peak["position"], at)
    if first is not None and last is not None:
        place += f" ({brief(first, 4)} to {brief(last, 4)})"
    told = plus_minus(spread, source).split(" ± ")[0]
    told = told if told == UNDETERMINED or not known else with_unit(told, source)
    return "peak", place, told, interval(spread, source), ""


def _everywhere(summary: Summary) -> str:
    units = summary["units"]
    told = peak_sentence(summary, units["source"], units["position"])
    if not told:
        return ""
    which = (
        'The row "peak" above is read off the narrower band for any one place; where size and '
        "place must both hold, use these limits."
    )
    return bullets([f"{told} {which}"])


def _alone(summary: Summary) -> str:
    """What the readings say without smoothness."""
    alone = summary.get("alone") or {}
    if not alone.get("told"):
        return ""
    lead = textwrap.fill(alone["assumed"], WIDTH)
    return section(lead, bullets(alone["told"]))


def _limit(summary: Summary, unit: str) -> str:
    limit = summary["limit"]
    if not limit:
        return ""
    chance = limit["probability"]
    if chance is None:
        return bullets(
            [f"{limit['zone']} at most {brief(limit['at_most'], 6)} {unit}: {UNDETERMINED}"]
        )
    sure = f"with probability {chance_text(chance, summary['level'])}"
    amount = f"{brief(limit['at_most'], 6)} {unit}".rstrip()
    estimate = f"{brief(limit['estimate'])} {unit}".rstrip()
    return bullets([
        f"{limit['zone']} at most {amount}: {limit['verdict']} (estimate {estimate}; kept {sure})"
    ])  # fmt: skip
