"""Numbers as the page and the command line print them."""

from __future__ import annotations

from html import escape
from typing import Any

from srcfit.frames import RAISED
from srcfit.rounding import brief, interval, minus, plus_minus, round_like, round_pair

__all__ = ["brief", "interval", "minus", "pair", "plus_minus", "round_like", "round_pair", "shown"]


def shown(text: str) -> str:
    """A text for HTML: true minus signs, powers of ten and of units raised, rest escaped."""
    import re

    safe = re.sub(r"(?<=[A-Za-z])\^(-?\d)", lambda m: m[1].translate(RAISED), escape(text))
    safe = minus(safe)
    return re.sub(r"(?<=\d)e(\u2212?)(\d+)", "\u202f×\u202f10<sup>\\1\\2</sup>", safe)


def pair(number: dict[str, Any], unit: str = "") -> str:
    """HTML of value ± standard uncertainty with its unit."""
    return shown(plus_minus(number, unit))
