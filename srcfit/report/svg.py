"""A drawn figure made fit to stand inside the page.

The page's content policy forbids style attributes, so they become presentation attributes;
colours become variables of the page, so that figures follow a dark background; ids get a prefix.
"""

from __future__ import annotations

import re
from html import escape

THEME = {
    "#000000": "var(--ink,#000000)",
    "#0072b2": "var(--blue,#0072b2)",
    "#d55e00": "var(--vermillion,#d55e00)",
    "#6b6b6b": "var(--grey,#6b6b6b)",
    "#c9c9c9": "var(--rule,#c9c9c9)",
    "#ffffff": "var(--paper,#ffffff)",
    "#bcd9ea": "var(--band,#bcd9ea)",
    "#e9eef2": "var(--body,#e9eef2)",
    "#eef0f2": "var(--wash,#eef0f2)",
}
_STYLE = re.compile(r' style="([^"]*)"')
_ID = re.compile(r' id="([^"]*)"')
_COLOUR = re.compile(r"#[0-9a-f]{6}\b")


def inline(svg: str, name: str, text: str) -> str:
    """`svg` as an element of the page.

    Parameters
    ----------
    svg : str
        A whole SVG document as `plots.draw_all` gives it.
    name : str
        Prefix of the ids inside, unique on the page.
    text : str
        Text alternative.
    """
    body = svg[svg.index("<svg") :]
    body = re.sub(r"<metadata>.*?</metadata>", "", body, flags=re.S)
    body = re.sub(r"<defs>\s*<style.*?</style>\s*</defs>", "", body, flags=re.S)
    body = re.sub(r"<!--.*?-->", "", body, flags=re.S)
    body = _STYLE.sub(_attributes, body)
    body = re.sub(r' transform="rotate\(-?0 [^"]*\)"', "", body)
    body = _prefix(body, name)
    body = re.sub(r">\s+<", "><", re.sub(r"(?<=\d) \n(?=[LQC])", " ", body)).strip()
    box = re.search(r'viewBox="([^"]*)"', body)
    frame = box.group(1) if box else "0 0 100 100"
    head = (
        f'<svg xmlns="http://www.w3.org/2000/svg" xmlns:xlink="http://www.w3.org/1999/xlink" '
        f'viewBox="{frame}" role="img" aria-label="{escape(text)}" stroke-linejoin="round" '
        f'class="drawn" data-figure="{name}" fill="var(--ink,#000000)">'
    )
    return head + body[body.index(">") + 1 :]


def _attributes(match: re.Match[str]) -> str:
    """Style declarations as attributes, colours as variables; the font is the page's."""
    out = []
    for declaration in match.group(1).split(";"):
        key, _, value = (part.strip() for part in declaration.partition(":"))
        if key and key != "font-family":
            out.append(f' {key}="{_COLOUR.sub(lambda m: THEME.get(m.group(), m.group()), value)}"')
    return "".join(out)


def _prefix(body: str, name: str) -> str:
    """Drop ids that nothing refers to, prefix the others."""
    named = set(re.findall(r"url\(#([^)]*)\)", body)) | set(re.findall(r'href="#([^"]*)"', body))
    body = _ID.sub(lambda m: f' id="{name}-{m.group(1)}"' if m.group(1) in named else "", body)
    body = re.sub(r"url\(#([^)]*)\)", rf"url(#{name}-\1)", body)
    return re.sub(r'href="#([^"]*)"', rf'href="#{name}-\1"', body)
