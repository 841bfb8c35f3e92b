"""Small pieces of HTML; every text of the user's passes through `safe`."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from html import escape
from typing import Any

from srcfit.frames import number
from srcfit.report.numbers import brief, minus, shown

# Direction overrides could make a name read as another; other control characters are no text.
_CONTROL = re.compile("[\x00-\x08\x0b-\x1f\x7f-\x9f\u200e\u200f\u202a-\u202e\u2066-\u2069\ufeff]")


@dataclass(frozen=True)
class Num:
    """A number in a table: what is shown, and the full value for sorting and copying."""

    text: str
    value: float


def clean(text: Any) -> str:
    """`text` without control and direction characters."""
    return _CONTROL.sub("", str(text))


def safe(text: Any) -> str:
    """`text` escaped for HTML, without control and direction characters."""
    return escape(clean(text))


def name(text: Any) -> str:
    """A user's name for something, isolated so that its writing direction stays its own."""
    return f"<bdi>{safe(text)}</bdi>"


def figure(key: str) -> str:
    """A place where the page puts the drawn figure `key`; no user's text can look like it."""
    return f"<!--figure {key}-->"


def num(value: Any, text: str | None = None, digits: int = 4) -> Num:
    """A table cell of a number; `text` is its rounded form."""
    v = number(value)
    return Num(brief(v, digits) if text is None else text, v)


def section(anchor: str, title: str, body: str) -> str:
    """A section of the page with a permanent anchor."""
    return (
        f'<section id="{anchor}" aria-labelledby="{anchor}-title"><h2 id="{anchor}-title">'
        f'{title}<a class="anchor" href="#{anchor}" aria-label="Link to this section: {title}">'
        f"#</a></h2>\n{body}\n</section>"
    )


def table(
    anchor: str, caption: str, heads: Sequence[str], rows: Sequence[Sequence[str | Num]],
    *, fold: bool = False, most: int = 2000,
) -> str:  # fmt: skip
    """A table that can be sorted and copied; long ones are folded away.

    Parameters
    ----------
    anchor : str
        Permanent id.
    caption : str
        Plain text.
    heads : sequence of str
        Plain texts.
    rows : sequence of rows
        Cells are `Num` or HTML.
    fold : bool
        Behind a summary that opens it.
    most : int
        Rows beyond this number are left to the CSV files, and the caption says so.
    """
    if not rows:
        return ""
    if len(rows) > most:
        caption += f": the first {most} of {len(rows)} rows, all of them in the CSV file"
    right = [' class="n"' if isinstance(c, Num) else "" for c in rows[0]]
    head = "".join(f'<th scope="col"{r}>{safe(h)}</th>' for h, r in zip(heads, right, strict=True))
    body = "".join(
        f"<tr>{''.join(_cell(c, i) for i, c in enumerate(r))}</tr>" for r in rows[:most]
    )
    inner = (
        f'<div class="scroll" tabindex="0" role="region" aria-label="{safe(caption)}">'
        f'<table id="{anchor}" class="data"><caption>{safe(caption)}</caption>'
        f"<thead><tr>{head}</tr></thead><tbody>{body}</tbody></table></div>"
    )
    if fold:
        return f"<details><summary>{safe(caption)} ({len(rows)} rows)</summary>{inner}</details>"
    return inner


def _cell(cell: str | Num, column: int) -> str:
    if isinstance(cell, Num):
        if cell.value != cell.value:
            return f'<td class="n">{shown(cell.text) or "–"}</td>'
        return f'<td class="n" data-v="{cell.value:.10g}">{shown(cell.text)}</td>'
    return f'<th scope="row">{cell}</th>' if column == 0 else f"<td>{cell}</td>"


def listing(pairs: Sequence[tuple[str, str]]) -> str:
    """A definition list of plain keys and HTML values."""
    inner = "".join(f"<div><dt>{safe(k)}</dt><dd>{v}</dd></div>" for k, v in pairs)
    return f"<dl>{inner}</dl>" if pairs else ""


def nested(value: Any) -> str:
    """What a case file said, as HTML: tables and lists inside one another."""
    if isinstance(value, Mapping):
        return listing([(str(k), nested(v)) for k, v in value.items()])
    if isinstance(value, (list, tuple)):
        if all(not isinstance(v, (Mapping, list, tuple)) for v in value):
            return ", ".join(safe(v) for v in value)
        return "<ul>" + "".join(f"<li>{nested(v)}</li>" for v in value) + "</ul>"
    if isinstance(value, float):
        return safe(minus(f"{value:.10g}"))
    return safe(value)
