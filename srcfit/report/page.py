"""The whole page: one file that opens offline and runs nothing but its own two scripts."""

from __future__ import annotations

import base64
import hashlib
import re
from collections.abc import Mapping
from functools import lru_cache
from importlib import resources
from typing import Any

from srcfit.plots import Drawn, draw_all
from srcfit.recovery import Recovery, Result
from srcfit.report import tables
from srcfit.report.data import as_json, chart_data
from srcfit.report.html import clean, name, safe
from srcfit.report.numbers import shown
from srcfit.report.sections import SECTIONS, answer, findings
from srcfit.report.svg import inline

LIVE = {"source": "source", "readings": "readings", "l-curve": "strength",
        "influence": "influence"}  # fmt: skip
CAPTIONS = {
    "member": "The member to scale; deeper where it is stiffer.",
    "source": "Source along the member.",
    "section": "Forces or flows inside the member with their interval, point by point.",
    "readings": "Readings and the response of the recovered source; residuals below.",
    "l-curve": "L-curve: each point is one strength of the ladder.",
    "influence": "Influence lines.",
    "modes": "First modes of the member.",
}


def render(recovery: Recovery, drawn: Mapping[str, Drawn] | None = None) -> str:
    """The report as one self-contained HTML document.

    Parameters
    ----------
    recovery : Recovery
    drawn : mapping, optional
        What `plots.draw_all` gave, to save drawing twice.

    Returns
    -------
    str
        Opens offline; a content policy lets no other script, style or address in.
    """
    drawn = drawn or draw_all(recovery)
    body = "\n".join(section(recovery) for section in SECTIONS.values())
    title = str(recovery.facts.get("title") or recovery.case.title or "Recovery")
    return document(
        recovery, title, with_figures(body, drawn, CAPTIONS), chart_data(recovery)
    )  # fmt: skip


def document(result: Result, title: str, body: str, data: Mapping[str, Any]) -> str:
    """A whole page around its sections, with the numbers of its live charts."""
    style = _asset("uPlot.min.css") + _asset("page.css")
    scripts = (_asset("uPlot.iife.min.js"), _asset("page.js"))
    policy = (
        "default-src 'none'; img-src data:; base-uri 'none'; form-action 'none'; "
        f"script-src {' '.join(map(_hash, scripts))}; style-src {_hash(style)}"
    )
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{policy}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta name="color-scheme" content="light dark">\n<link rel="icon" href="data:,">\n'
        f"<title>{safe(title)}</title>\n<style>{style}</style>\n</head>\n<body>\n"
        '<a class="skip" href="#answer">Skip to the answer</a>\n'
        f"<header><p>{safe(result.case.member.kind.title)}</p><h1>{name(title)}</h1></header>\n"
        f'<div class="frame">{_contents(body)}\n<main>\n{body}\n</main></div>\n'
        f"<footer><p>srcfit {safe(result.facts.get('version'))}</p></footer>\n"
        f'<script type="application/json" id="data">{as_json(data)}</script>\n'
        + "".join(f"<script>{s}</script>\n" for s in scripts)
        + "</body>\n</html>\n"
    )


def fragment(recovery: Recovery) -> str:
    """The answer, the zones, the findings and the source's figure, for a notebook.

    Returns
    -------
    str
        HTML without scripts and styles of its own.
    """
    title = str(recovery.facts.get("title") or recovery.case.title)
    body = answer(recovery) + findings(recovery) + tables.zones(recovery)
    return in_notebook(title, body, draw_all(recovery, ("source",))["source"])


def in_notebook(title: str, body: str, drawn: Drawn) -> str:
    """Sections and a figure without anchors, links and ids, under a title."""
    plain = re.sub(r'<a class="anchor".*?</a>', "", body)
    plain = re.sub(r'<a href="#findings">(.*?)</a>', r"\1", plain)
    plain = re.sub(r' (?:id|aria-labelledby)="[^"]*"', "", plain)
    tag = hashlib.sha256(drawn.svg.encode()).hexdigest()[:8]
    picture = inline(drawn.svg, f"srcfit-{tag}", drawn.text)
    return f'<div class="srcfit"><h3>{name(title)}</h3>{plain}{picture}</div>'


def _contents(body: str) -> str:
    heads = re.findall(r'<h2 id="([a-z-]+)-title">([^<]*)<', body)
    items = "".join(f'<li><a href="#{anchor}">{title}</a></li>' for anchor, title in heads)
    return f'<nav aria-label="Contents"><ol>{items}</ol></nav>'


def with_figures(body: str, drawn: Mapping[str, Drawn], captions: Mapping[str, str]) -> str:
    """`body` with each drawn figure in its place."""
    return re.sub(
        r"<!--figure ([a-z-]+)-->", lambda m: _figure(m[1], drawn[m[1]], captions[m[1]]), body
    )  # fmt: skip


def _figure(key: str, picture: Drawn, caption: str) -> str:
    """One figure: the drawing, the place of the live chart, the text alternative, downloads."""
    bitmap = base64.b64encode(picture.png).decode("ascii")
    vector = inline(picture.svg, key, picture.text)
    live = f'<div class="live" id="live-{LIVE[key]}" hidden></div>' if key in LIVE else ""
    kind = "still replaced" if key in LIVE else "still"
    return (
        f'<figure id="figure-{key}">{live}'
        f'<div class="{kind}"><div class="scroll" tabindex="0" role="region" '
        f'aria-label="Figure: {caption}">{vector}</div></div>'
        f"<figcaption>{caption} {shown(clean(picture.text))} "
        f'<span class="get"><a download="{key}.png" href="data:image/png;base64,{bitmap}">'
        f"PNG<span class='unseen'> of the figure {key}</span></a></span></figcaption></figure>"
    )


@lru_cache(maxsize=8)
def _asset(file: str) -> str:
    text = resources.files("srcfit.report").joinpath("assets", file).read_text(encoding="utf-8")
    return text.replace("\r\n", "\n").replace("</script", "<\\/script")


def _hash(text: str) -> str:
    digest = hashlib.sha256(text.encode("utf-8")).digest()
    return f"'sha256-{base64.b64encode(digest).decode('ascii')}'"
