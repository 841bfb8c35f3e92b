"""Numbers for people: at most two significant digits of the uncertainty (GUM, JCGM 100, 7.2.6)."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from decimal import ROUND_HALF_EVEN, Decimal
from math import floor, isfinite, log10
from typing import Any

import numpy as np

UNDETERMINED = "not determined"
NO_INTERVAL = "no interval"


def round_pair(value: float | None, sd: float | None) -> tuple[str, str]:
    """A value and its standard deviation as texts that end at the same decimal place.

    Parameters
    ----------
    value, sd : float or None
        In one unit. Without a usable `sd` the value keeps four significant digits.

    Returns
    -------
    (str, str)
        Plain decimals, or both with one common power of ten for very large and small numbers.
        Empty texts stand for what is not determined.

    Notes
    -----
    Two significant digits of `sd`, the value to the same place: JCGM 100:2008, 7.2.6.
    """
    number, spread = _real(value), _real(sd)
    if number is None:
        return "", ""
    if spread is None or spread <= 0:
        return _significant(number, 4), "" if spread is None else "0"
    last = int(f"{spread:.1e}".split("e")[1]) - 1
    power = _common_power(max(abs(number), spread))
    return _fixed(number, last, power), _fixed(spread, last, power)


def round_like(value: float | None, sd: float | None, scale: float | None = None) -> str:
    """`value` rounded to the decimal place that `sd` sets; `scale` is the number it stands by."""
    number, spread, beside = _real(value), _real(sd), _real(scale)
    if number is None:
        return ""
    if spread is None or spread <= 0:
        return _significant(number, 4)
    last = int(f"{spread:.1e}".split("e")[1]) - 1
    return _fixed(number, last, _common_power(max(abs(beside or number), spread)))


def brief(value: Any, digits: int = 3) -> str:
    """`value` with so many significant digits; empty when it is none."""
    number = _real(value)
    return "" if number is None else _significant(number, digits)


def plus_minus(number: Mapping[str, Any], unit: str = "") -> str:
    """Text like ``918.4 ± 9.2 kN`` of a mapping with value and sd (standard uncertainty)."""
    value, sd = round_pair(number.get("value"), number.get("sd"))
    if not value:
        return UNDETERMINED
    return minus(with_unit(f"{value} ± {sd}" if sd else value, unit))


def twin(number: Mapping[str, Any], unit: str = "") -> str:
    """Text like ``i(0.54 ± 0.98 kN)`` of a driven member's imaginary part; empty without one.

    The standard uncertainty of either part is the same.
    """
    part = number.get("imaginary")
    if _real(part) is None or isinstance(part, Mapping):
        return ""
    return f"i({plus_minus({'value': part, 'sd': number.get('sd')}, unit)})"


def twin_interval(number: Mapping[str, Any], unit: str = "") -> str:
    """Text like ``i(-0.3 to 2.5 kN)`` of a driven member's imaginary part; empty without one."""
    part, ends = number.get("imaginary"), ("imaginary_lower", "imaginary_upper")
    if _real(part) is None or isinstance(part, Mapping):
        return ""
    own = {"value": part, "sd": number.get("sd"), "lower": number.get(ends[0]),
           "upper": number.get(ends[1])}  # fmt: skip
    told = interval(own, unit)
    return "" if told == NO_INTERVAL else f"i({told})"


def interval(number: Mapping[str, Any], unit: str = "") -> str:
    """Text like ``900.3 to 936.5 kN`` of a mapping with lower and upper."""
    sd, value = number.get("sd"), number.get("value")
    ends = [round_like(number.get(k), sd, value) for k in ("lower", "upper")]
    if not all(ends):
        return NO_INTERVAL
    return minus(with_unit(f"{ends[0]} to {ends[1]}", unit))


def with_unit(text: str, unit: str) -> str:
    """A number's text with its unit, if it has one."""
    return text if unit in ("", "1") else f"{text} {unit}"


def held_word(name: str, kind: str) -> str:
    """What an end or a support takes, in the words of the trade, as in ``outflow left``.

    `kind` as in summary.json: force, moment, torque, or a flow or flux of something.
    """
    words = {"moment": "moment", "torque": "torque"}
    word = "reaction" if kind.endswith("force") else words.get(kind, "outflow")
    return f"{word} {name}"


def chance_text(chance: float, level: float = 0.95) -> str:
    """A probability as a percentage that stands on the same side of `level` as the number.

    Three significant digits, more only where rounding would hide that it misses the level.
    """
    if chance < 0.001 or chance > 0.999:
        return "below 0.1 %" if chance < 0.5 else "above 99.9 %"
    for digits in range(3, 16):
        text = f"{100 * chance:.{digits}g}"
        ends = (float(text) / 100 - edge for edge in (level, 1 - level))
        true = (chance - edge for edge in (level, 1 - level))
        if all(a * b > 0 or a == b for a, b in zip(ends, true, strict=True)):
            break
    return f"{text} %"


def peak_sentence(facts: Mapping[str, Any], unit: str, position: str) -> str:
    """What holds for the size and the place of the largest density at once; empty without it."""
    peak, together = facts.get("peak") or {}, facts.get("simultaneous") or {}
    joint = peak.get("joint")
    if not joint or not together.get("factor"):
        return ""
    spread = {**joint, "value": peak["value"], "sd": (joint["upper"] - joint["lower"]) / 4}
    wider = together["factor"] / together["pointwise"]
    first, last = (minus(brief(joint[f"position_{k}"], 4)) for k in ("lower", "upper"))
    place = f"at {first}" if first == last else f"between {first} and {last}"
    size = "smallest (most negative)" if peak["value"] < 0 else "largest"
    if peak.get("imaginary") is not None:
        size = "largest (by modulus)"
    return (
        f"With {100 * facts['level']:.10g} % confidence, for size and place at once: the {size} "
        f"density is between {interval(spread, unit).replace(' to ', ' and ')} and stands {place} "
        f"{position}. The band that holds at all places at once is {brief(wider, 2)} times as "
        "wide as that for any one place."
    )


def listed(words: Sequence[str]) -> str:
    """Words as a list in a sentence."""
    return words[0] if len(words) == 1 else ", ".join(words[:-1]) + " and " + words[-1]


def minus(text: str) -> str:
    """The same text with true minus signs before digits."""
    import re

    return re.sub(r"(?<![\w.])-(?=\d)|(?<=e)-(?=\d)", "\u2212", text)


def _real(value: Any) -> float | None:
    if value is None:
        return None
    try:
        number = float(np.real(value))
    except (TypeError, ValueError):
        return None
    return number if isfinite(number) else None


def _common_power(size: float) -> int:
    """0 for sizes written plainly, else the power of ten to take out."""
    power = floor(log10(size)) if size > 0 else 0
    return 0 if -4 <= power < 7 else power


def _fixed(number: float, last: int, power: int) -> str:
    place = Decimal(1).scaleb(last)
    exact = Decimal(repr(number)).quantize(place, rounding=ROUND_HALF_EVEN)
    text = f"{exact.scaleb(-power):f}" if last - power < 0 else f"{exact.scaleb(-power):.0f}"
    text = text[1:] if text.startswith("-") and not text.strip("-0.") else text
    return f"{text}e{power}" if power else text


def _significant(number: float, digits: int) -> str:
    if number == 0:
        return "0"
    last = int(f"{number:.{digits - 1}e}".split("e")[1]) - digits + 1
    text = _fixed(number, last, _common_power(abs(number)))
    head, _, power = text.partition("e")
    if "." in head:
        head = head.rstrip("0").rstrip(".")
    return f"{head}e{power}" if power else head
