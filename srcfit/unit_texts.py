"""Unit texts met in tables -> SI, by way of `srcfit.units`."""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import lru_cache

from srcfit.errors import ReadingsError, UnitError
from srcfit.units import factor

_BRACKETS = re.compile(r"[\[(]([^\[\]()]*)[\])]")
# what tables call a unit beyond the names of `units`, by the SI unit of the quantity
_ALSO = {
    "K": {"f": "degF", "c": "degC", "k": "K", "deg f": "degF", "deg c": "degC", "deg. c": "degC",
          "deg. f": "degF", "grad c": "degC", "celsius": "degC", "fahrenheit": "degF"},
    "rad": {"grad": "deg", "degrees": "deg"},
    "m": {"in.": "in", "ft.": "ft"},
}  # fmt: skip
_GRADIAN = "grad"  # written small it may be a hundredth of a right angle: left to `units`


@dataclass(frozen=True)
class Unit:
    """A unit text and its way to SI: SI = scale * number + offset."""

    text: str
    scale: float
    offset: float

    def same(self, other: Unit) -> bool:
        """Whether both give the same SI value for any number."""
        near = 1e-9 * abs(self.scale)
        return abs(self.scale - other.scale) <= near and abs(self.offset - other.offset) <= 1e-6


@lru_cache(maxsize=4096)
def find(text: str, si: str, difference: bool = False) -> Unit | None:
    """The unit named by a text of a table; None when it is none of that dimension."""
    if not text or len(text) > 40:
        return None
    also = "" if text == _GRADIAN else _ALSO.get(si, {}).get(text.lower(), "")
    for name in (also, text) if also else (text,):
        try:
            scale, offset = factor(name, si, text, difference=difference)
        except UnitError:
            continue
        return Unit(text, scale, offset)
    return None


def case_name(text: str, si: str) -> str:
    """The name that a case file takes for a unit text of a table."""
    return _ALSO.get(si, {}).get(text.lower(), text)


@lru_cache(maxsize=4096)
def known(text: str) -> bool:
    """Whether a text is a unit of any dimension (channel letters and "min" do not count)."""
    if not re.search(r"[^\W\d_]|[°%]", text) or len(text) > 40:
        return False
    if re.fullmatch("[A-Za-ln-z]|min", text):
        return False
    try:
        factor(text, text, text)
    except UnitError:
        return False
    return True


def need(text: str, si: str, where: str, difference: bool = False) -> Unit:
    """The unit named by a text, or an error that says where it stands."""
    unit = find(text, si, difference)
    if unit is None:
        raise ReadingsError(
            f"{text!r} is no unit that fits {si or '1'}", where, "set `unit` to the right one"
        )
    return unit


def in_header(header: str, si: str, difference: bool = False) -> tuple[Unit | None, str]:
    """The unit in a header's brackets, and the text of one that is of another dimension."""
    other = ""
    for text in (t.strip() for t in _BRACKETS.findall(header)):
        if text.isdigit():  # a channel number
            continue
        unit = find(text, si, difference)
        if unit is not None:
            return unit, ""
        if known(text):
            other = text
    return None, other


def header_unit(header: str, si: str) -> str | None:
    """The unit in a header's brackets under the name that a case file takes; None without one."""
    unit, _ = in_header(header, si)
    return case_name(unit.text, si) if unit else None


def bare(text: str) -> str:
    """Text of a units row without brackets around it."""
    match = _BRACKETS.fullmatch(text.strip())
    return match[1].strip() if match else text.strip()
