"""Text of one cell -> number, or the reason why it is none.

Understood: decimal point or comma, thousands parted by comma, point, apostrophe or blank,
exponents, ``2 1/4"``, ``5' 3 1/2"``, chainages such as ``12+400.000``, ``a+bi``, and ``~3393``
(rough). Not numbers: marks for a missing value, ``<180`` (below detection), dates.
A separator that can be read in two ways (``1,234``) is settled by its neighbours, never guessed.
"""

from __future__ import annotations

import cmath
import math
import re
from dataclasses import dataclass

_BODY = r"(?:[0-9][0-9,.']*|[.,][0-9]+)"
_EXP = r"(?:[eEdD][+-]?[0-9]+)?"
PLAIN = re.compile(r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")
_REAL = re.compile(rf"([+-]?) ?((?:[0-9]{{1,3}}(?: [0-9]{{3}})+[.,]?[0-9]*)|{_BODY})({_EXP})")
_COMPLEX = re.compile(
    rf"\(? ?(?:([+-]? ?{_BODY}{_EXP})? ?([+-]) ?)?({_BODY}{_EXP})? ?\*?[ij] ?\)?"
)
_POLAR = re.compile(rf"({_BODY}{_EXP}) ?∠ ?([+-]?{_BODY}) ?°?")
_CHAINAGE = re.compile(r"(?:[A-Za-z]{1,4}\.? ?)?([0-9]{1,4}) ?\+ ?([0-9]{2,3}(?:[.,][0-9]+)?)")
_LENGTH = re.compile(
    rf"([+-]?) ?(?:({_BODY}) ?(?:'|ft\.?|feet|foot)(?: ?- ?| ?))?"
    rf"(?:(?:([0-9]+)(?: ?- ?| ))?([1-9][0-9]*)/([1-9][0-9]*)|({_BODY}))?"
    r"(?: ?(\"|in\.?|inch|inches))?"
)
_ROUGH = re.compile(r"(?:~|≈|≅|ca\.?|approx\.?|about|etwa) ?(?=[-+.,0-9])", re.IGNORECASE)
_UNIT = re.compile(rf"([+-]?{_BODY}{_EXP}) ?((?:[^\W\d_]|[°%‰])[^<>=?!]*)")
_MONTH = r"(?:jan|feb|mar|mär|apr|mai|may|jun|jul|aug|sep|oct|okt|nov|dec|dez)[^\W\d_]*\.?"
_DATE = re.compile(
    r"[0-9]{1,4}[./-][0-9]{1,2}[./-][0-9]{1,4}.*|[0-9]{1,2}[:.][0-9]{2}:[0-9]{2}.*|"
    rf"[0-9]{{1,2}}\.?[ -]?{_MONTH}(?:[ -][0-9]{{2,4}})?|{_MONTH}[ -]?[0-9]{{1,4}}",
    re.IGNORECASE,
)
MISSING = frozenset((
    "-", "--", "---", "----", ".", "..", "*", "**", "***", "****", "*****", "******", "?", "??",
    "#", "x", "nan", "-nan", "na", "n/a", "n.a.", "#n/a", "#na", "null", "nil", "none", "nul",
    "inf", "+inf", "-inf", "infinity", "-infinity", "#inf", "1.#inf", "-1.#inf", "1.#qnan",
    "1.#ind", "-1.#ind", "#div/0!", "#value!", "#ref!", "#num!", "#name?", "#null!", "####",
    "#####", "######", "fehler", "error", "err", "fault", "fail", "overflow", "over", "ovr",
    "ovrld", "ol", "o.l.", "underflow", "open", "missing", "void", "invalid", "bad", "k.a.",
    "ungültig", "fehlt",
))  # fmt: skip
_BELOW = frozenset((
    "lod", "<lod", "bdl", "b.d.l.", "bd", "nd", "n.d.", "n.n.", "u.d.l.", "nwg.", "n.w.",
    "<mdl", "<loq",
))  # fmt: skip
_GLYPHS = str.maketrans(
    {"−": "-", "–": "-", "‐": "-", "‑": "-", "\u00a0": " ", "\u202f": " ", "\u2009": " ",
     "’": "'", "′": "'", "‘": "'", "″": '"', "”": '"', "“": '"', "⁄": "/", "\ufeff": "",
     "½": " 1/2", "¼": " 1/4", "¾": " 3/4", "⅛": " 1/8", "⅜": " 3/8", "⅝": " 5/8", "⅞": " 7/8"}
)  # fmt: skip
INCH = 0.0254


class UnreadableError(ValueError):
    """A cell that is no reading; its text is the reason."""


@dataclass(frozen=True)
class Amount:
    """A number read from a cell.

    `metres`: it stood with inch or foot marks and is already in metres. `rough`: it stood with
    ``~``. `suffix`: a text after the number that may be its unit.
    """

    value: float | complex
    metres: bool = False
    rough: bool = False
    suffix: str = ""


def normal(text: str) -> str:
    """Plain signs and single blanks; an apostrophe before the text (spreadsheets) off."""
    text = text.strip()
    if not text.isascii():
        text = text.translate(_GLYPHS).strip()
    if "  " in text or "\t" in text or "\n" in text:
        text = " ".join(text.split())
    return text[1:] if text[:1] == "'" and text[1:2] in "+-.0123456789" else text


def _groups(text: str) -> bool:
    """Whether digits are parted into threes by one kind of separator (or not at all)."""
    if text.isdigit() or not text:
        return True
    marks = {c for c in text if not c.isdigit()}
    if len(marks) != 1:
        return False
    first, *rest = text.split(marks.pop())
    return 1 <= len(first) <= 3 and all(len(g) == 3 for g in rest)


def real(text: str, decimal: str) -> float | None:
    """A real number with this decimal mark, None when it is none."""
    if decimal == "." and PLAIN.fullmatch(text):
        return float(text)
    match = _REAL.fullmatch(text)
    if match is None:
        return None
    sign, body, power = match.groups()
    whole, _, part = body.partition(decimal)
    if (part and not part.isdigit()) or not _groups(whole) or not (whole or part):
        return None
    digits = "".join(c for c in whole if c.isdigit())
    return float(f"{sign}{digits or 0}.{part or 0}{power.replace('d', 'e').replace('D', 'e')}")


def mark_of(text: str) -> str:
    """Decimal mark that a number's text proves.

    "." or ","; "" when it shows none; "?." or "?," when that one separator may part thousands.
    """
    for shape in (_chainage_mark, _real_mark, _complex_mark):
        mark = shape(text)
        if mark is not None:
            return mark
    return ""


def _real_mark(text: str) -> str | None:
    match = _REAL.fullmatch(_ROUGH.sub("", text))
    if match is None:
        return None
    body, power = match[2], match[3]
    points, commas = body.count("."), body.count(",")
    if not points and not commas:
        return ""
    if points and commas:
        mark = max(".,", key=body.rfind)
        return mark if real(body, mark) is not None else ""
    mark = "." if points else ","
    if points + commas > 1:
        other = "," if points else "."
        return other if _groups(body) else ""
    first, last = body.split(mark)
    if len(last) == 3 and first.isdigit() and len(first) <= 3 and first[0] != "0" and not power:
        return "?" + mark
    return mark


def _complex_mark(text: str) -> str | None:
    match = _COMPLEX.fullmatch(text) if text[-1:] in "ij)" else None
    if match is None:
        return None
    marks = [_real_mark(part.replace(" ", "")) or "" for part in (match[1], match[3]) if part]
    return next((m for m in marks if m in (".", ",")), marks[0] if marks else "")


def _chainage_mark(text: str) -> str | None:
    match = _CHAINAGE.fullmatch(text) if "+" in text[1:] else None
    if match is None:
        return None
    return next((c for c in match[2] if c in ".,"), "")


def _complex(text: str, decimal: str) -> complex | None:
    polar = _POLAR.fullmatch(text)
    if polar:
        size, angle = (real(p, decimal) for p in polar.groups())
        return None if size is None or angle is None else cmath.rect(size, math.radians(angle))
    match = _COMPLEX.fullmatch(text) if text[-1:] in "ij)" else None
    if match is None:
        return None
    re_text, sign, im_text = match.groups()
    left = real(re_text.replace(" ", ""), decimal) if re_text else 0.0
    right = real(im_text, decimal) if im_text else 1.0
    if left is None or right is None:
        return None
    return complex(left, -right if sign == "-" else right)


def _chainage(text: str, decimal: str) -> float | None:
    match = _CHAINAGE.fullmatch(text)
    if match is None:
        return None
    rest = real(match[2].lstrip("0") or "0", decimal)
    digits = len(re.split("[.,]", match[2])[0])
    return None if rest is None else int(match[1]) * 10.0**digits + rest


def _length(text: str, decimal: str) -> Amount | None:
    match = _LENGTH.fullmatch(text)
    if match is None:
        return None
    sign, feet, whole, top, bottom, inches, mark = match.groups()
    if top and not (mark or feet) and int(bottom) not in (2, 4, 8, 16, 32, 64):
        return None
    if not (feet or top or (mark and inches)) or (feet and inches and not mark):
        return None
    part = float(whole or 0) + int(top) / int(bottom) if top else 0.0
    if inches:
        part = real(inches, decimal) if real(inches, decimal) is not None else math.nan  # type: ignore[assignment]
    foot = real(feet, decimal) if feet else 0.0
    if foot is None or part != part or (feet and part >= 12) or (top and int(top) >= int(bottom)):
        return None
    size = -1.0 if sign == "-" else 1.0
    if not (mark or feet):
        return Amount(size * part)
    return Amount(size * (12 * foot + part) * INCH, metres=True)


def why_not(text: str) -> str:
    """Why a text is no number, in words."""
    shown = repr(text if len(text) <= 30 else text[:27] + "...")
    low = text.lower()
    if not text:
        return "the cell is empty"
    if low in MISSING:
        return f"{shown} marks a missing value"
    if text[0] in "<≤" or low in _BELOW:
        return f"below detection ({shown})"
    if text[0] in ">≥":
        return f"above the range of the instrument ({shown})"
    if "\n" in text:
        return "a quoted cell runs over the line's end"
    if _DATE.fullmatch(text):
        return f"{shown} is a date, not a number (spreadsheets turn numbers into dates)"
    return f"{shown} is no number"


def amount(text: str, decimal: str, place: bool = False) -> Amount:
    """Number in a cell whose text went through `normal`.

    Parameters
    ----------
    text : str
    decimal : {".", ","}
    place : bool
        Whether chainages are understood.

    Raises
    ------
    UnreadableError
        With the reason.
    """
    rough = _ROUGH.match(text)
    if rough:
        text = text[rough.end() :]
    value: float | complex | None = real(text, decimal)
    found = None if value is None else Amount(value)
    if found is None and place and "+" in text:
        value = _chainage(text, decimal)
        found = None if value is None else Amount(value)
    if found is None and text.lower() not in MISSING:
        value = _complex(text, decimal)
        found = _length(text, decimal) if value is None else Amount(value)
    if found is None:
        found = _with_unit(text, decimal)
    if not cmath.isfinite(found.value):
        raise UnreadableError(f"{text!r} is too large for a number")
    return Amount(found.value, found.metres, bool(rough), found.suffix)


def _with_unit(text: str, decimal: str) -> Amount:
    match = _UNIT.fullmatch(text)
    value = real(match[1], decimal) if match and not _DATE.fullmatch(text) else None
    if match is None or value is None:
        raise UnreadableError(why_not(text))
    return Amount(value, suffix=match[2].strip())
