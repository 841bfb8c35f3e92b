"""Unit text to SI and back, only at the borders of the program.

A small reader takes a unit text apart into names and whole powers, so that no text is ever
evaluated. Angles are carried as a dimension of their own, which is ignored except where hertz are
due (a rate in rad/s or rpm would be wrong there by 2 pi).
"""

from __future__ import annotations

import math
import re
from collections import deque
from collections.abc import Mapping
from functools import lru_cache

from srcfit.errors import UnitError
from srcfit.unit_names import (
    ACCELERATION,
    BASE,
    LENGTH,
    NONE,
    PLAIN,
    BadTextError,
    Dims,
    Unit,
    named,
)

LONGEST_TEXT = 80
LARGEST_POWER = 9
AMOUNTS = ("mol", "kg", "Bq")
NAMED: Mapping[str, str] = {
    "1": "a plain number", "m": "a length", "m^2": "an area", "s": "a time", "K": "a temperature",
    "kg": "a mass", "kg/m": "a mass per length", "N": "a force", "N/m": "a force per length",
    "N/m^2": "a force per area", "N*m": "a moment", "N*m^2": "a stiffness in force × length²",
    "N/m^3": "a force per volume", "1/m": "a curvature", "W": "a heat flow",
    "W/m": "heat per length", "W/m^2": "a heat flux", "W/m^3": "heat per volume",
    "W*m/K": "conductivity × area", "W/(m*K)": "a conductivity or a loss per length",
    "W/(m^3*K)": "a loss per volume", "W/K": "heat flow per kelvin",
    "W/(m^2*K)": "heat flux per kelvin", "J/(m*K)": "heat capacity per length",
    "J/(m^3*K)": "heat capacity per volume", "1/s": "a rate", "m/s": "a length per time",
    "m^2/s": "an area per time", "m^3/s": "a volume per time", "mol/m^3": "a concentration",
    "kg*m": "an inertia per length", "K/W": "a thermal resistance",
}  # fmt: skip

_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?")
_ALLOWED = re.compile(r"[A-Za-zµ°ε%‰0-9_.*/^()+\- ]*")
_TOKEN = re.compile(
    r"\s*(?:(?P<name>[A-Za-zµ°ε%‰][A-Za-zµ°ε%‰_]*)(?P<tight>[+-]?\d+)?"
    r"|(?P<ten>10\s*(?:\^|\*\*)\s*[+-]?\d+|\d(?:\.\d*)?[eE][+-]?\d+)"
    r"|(?P<one>1(?=\s*/))|(?P<power>(?:\^|\*\*)\s*(?:[+-]?\d+|\([+-]?\d+\)))"
    r"|(?P<mark>[*/()]))"
)
_SUPER = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻", "0123456789+-")
_MARKS = str.maketrans(
    {"μ": "µ", "·": "*", "⋅": "*", "×": "*", "−": "-", "\N{NO-BREAK SPACE}": " "}
)


def _plain_text(text: str) -> str:
    raised = re.sub(r"[⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻]+", lambda m: "^" + m[0].translate(_SUPER), text)
    plain = raised.translate(_MARKS).replace("℃", "°C").replace("℉", "°F")
    return re.sub(r"(?<![A-Za-z])(?:[Dd]eg|°) ?([CF])(?![A-Za-z])", r"deg\1", plain).strip()


def _tokens(text: str) -> list[tuple[str, str]]:
    """Marks, names, powers and powers of ten of a unit text."""
    found: list[tuple[str, str]] = []
    at = 0
    while at < len(text):
        match = _TOKEN.match(text, at)
        if match is None:
            raise BadTextError(f'"{text[at:]}" cannot be read as a unit')
        if match["name"]:
            found.append(("name", match["name"]))
        if match["tight"] or match["power"]:
            found.append(("power", re.sub(r"[\s^*()]", "", match["tight"] or match["power"])))
        for kind in ("ten", "one", "mark"):
            if match[kind]:
                found.append((kind, match[kind]))
        at = match.end()
    return found


def _parts(text: str) -> list[tuple[str, int]]:
    """Names with their powers, e.g. "W/(m*K)" -> W 1, m -1, K -1; plain numbers as names."""
    tokens = deque(_tokens(text))
    parts = _product(tokens)
    if tokens:
        raise BadTextError("the brackets do not match")
    return parts


def _product(tokens: deque[tuple[str, str]]) -> list[tuple[str, int]]:
    parts = _power(tokens)
    divided = False
    while tokens and tokens[0][1] != ")":
        word = tokens[0][1]
        if word in ("*", "/"):
            tokens.popleft()
        elif divided:
            raise BadTextError(
                "a product after a division can be read in two ways",
                'write brackets, as in "W/(m*K)"',
            )
        divided = word == "/"
        parts += [(name, -power if divided else power) for name, power in _power(tokens)]
    return parts


def _power(tokens: deque[tuple[str, str]]) -> list[tuple[str, int]]:
    kind, word = tokens.popleft() if tokens else ("", "")
    if word == "(":
        parts = _product(tokens)
        if not tokens:
            raise BadTextError("the brackets do not match")
        tokens.popleft()
    elif kind in ("name", "ten", "one"):
        parts = [(word, 1)]
    else:
        raise BadTextError(f'"{word}" stands at a wrong place' if word else "it is not complete")
    if tokens and tokens[0][0] == "power":
        power = int(tokens.popleft()[1])
        if not 0 < abs(power) <= LARGEST_POWER:
            raise BadTextError(f"the power {power} is out of bounds")
        parts = [(name, old * power) for name, old in parts]
    return parts


def _ten(word: str) -> float:
    """A power of ten, as in "10^-6" or "1e-6"."""
    text = re.sub(r"\s", "", word).replace("**", "^")
    return float(text.replace("10^", "1e"))


@lru_cache(maxsize=2000)
def _parse(text: str) -> Unit:
    """The unit of a text; raises BadTextError."""
    if len(text) > LONGEST_TEXT:
        raise BadTextError("the unit is too long")
    plain = _plain_text(text)
    if not _ALLOWED.fullmatch(plain):
        raise BadTextError(f'"{text}" has characters that no unit has')
    if plain in ("", "1", "-"):
        return Unit(1.0, NONE)
    parts = _parts(plain)
    scale, dims = 1.0, NONE
    for name, power in parts:
        unit = Unit(_ten(name), NONE) if name[0].isdigit() else named(name)
        try:
            scale *= unit.scale**power
        except OverflowError:
            scale = math.inf
        dims = tuple(a + power * b for a, b in zip(dims, unit.dims, strict=True))
    if not (math.isfinite(scale) and scale > 0):
        raise BadTextError("its size is out of all bounds")
    alone = len(parts) == 1 and parts[0][1] == 1 and parts[0][0] in PLAIN
    return Unit(scale, dims, PLAIN[parts[0][0]].offset if alone else 0.0)


def parse(text: str, where: str) -> Unit:
    """The unit that `text` names.

    Raises
    ------
    UnitError
        When the text is no unit.
    """
    try:
        return _parse(text)
    except BadTextError as bad:
        shown = text if len(text) <= LONGEST_TEXT else text[:LONGEST_TEXT] + "…"
        what, how = (*bad.args, "")[:2]
        raise UnitError(f'"{shown}" is no unit: {what}', where, how) from None


def _bare(dims: Dims) -> Dims:
    """Dimensions without the angle."""
    return (*dims[:6], 0, dims[7])


def _match(given: Dims, expected: Dims) -> str | None:
    """None where the dimensions differ; the amount that `expected` leaves open, else ""."""
    if _bare(given) == _bare(expected):
        return ""
    power = expected[7]
    if power:
        for amount in AMOUNTS:
            filled = tuple(
                e + power * a for e, a in zip(expected, _parse(amount).dims, strict=True)
            )
            if _bare(given) == _bare((*filled[:7], 0)):
                return amount
    return None


def dimension(si_unit: str) -> str:
    """Words for the dimension of an SI unit text, e.g. "a force per length, as in N/m"."""
    if "amount" in si_unit:
        return f"like {si_unit}, the amount in mol, kg or Bq"
    dims = _parse(si_unit).dims
    for text, name in NAMED.items():
        if _bare(_parse(text).dims) == _bare(dims):
            return name if text == "1" else f"{name}, as in {si_unit}"
    return f"like {si_unit}"


def _require(unit: Unit, text: str, si_unit: str, where: str) -> None:
    expected = _parse(si_unit)
    if _match(unit.dims, expected.dims) is None:
        gap = tuple(e - g for e, g in zip(expected.dims, unit.dims, strict=True))
        how = f"give {dimension(si_unit)}"
        if _bare(gap) == ACCELERATION:
            how += "; it is a mass where a force is due: write kN, kgf, tf or lbf"
        raise UnitError(f'"{text}" has the wrong dimension', where, how)
    if si_unit == "Hz" and unit.dims[6]:
        raise UnitError(
            f'"{text}" is an angular rate',
            where,
            "give cycles per second in Hz or per time in 1/d",
        )


def factor(
    unit: str, si_unit: str, where: str, *, difference: bool = False
) -> tuple[float, float]:
    """Scale and offset of a unit: SI = scale * value + offset.

    Parameters
    ----------
    unit : str
        Unit text, e.g. "kN/m", "degF", "m²".
    si_unit : str
        SI unit text of the expected dimension; the word "amount" in it stands for mol, kg or Bq.
    where : str
        Place for messages.
    difference : bool
        Spreads and differences of temperatures: no offset.

    Raises
    ------
    UnitError
        When the unit is not known or has another dimension.
    """
    found = parse(unit, where)
    _require(found, unit, si_unit, where)
    return found.scale / _parse(si_unit).scale, 0.0 if difference else found.offset


def split(text: str, where: str) -> tuple[float, str]:
    """Number and unit text of a quantity, e.g. "768 MN*m^2" -> 768.0, "MN*m^2"."""
    short = text if len(text) <= LONGEST_TEXT else text[:LONGEST_TEXT] + "…"
    plain = text.strip().replace("−", "-")
    match = _NUMBER.match(plain)
    if match is None or len(text) > LONGEST_TEXT + 40:
        raise UnitError(
            f'"{short}" does not begin with a number', where, 'write it as in "2.5 kN/m"'
        )
    rest = plain[match.end() :]
    if re.match(r",\s*\d|\s+\d+(?![\d.]*\s*[\^/eE*])", rest):
        raise UnitError(
            f'"{short}" is no number that can be read with certainty', where,
            "use a decimal point and no mark between thousands",
        )  # fmt: skip
    value = float(match[0])
    if not math.isfinite(value):
        raise UnitError(f'"{short}" is out of all bounds', where)
    return value, rest.strip()


def quantity(text: object, unit: str, where: str, *, difference: bool = False) -> float:
    """A quantity in SI.

    Parameters
    ----------
    text : str
        Number and unit, e.g. "768 MN*m^2", "20 degC", "10 %". A bare number is accepted only
        where no unit is due.
    unit : str
        SI unit text of the expected dimension, e.g. "N*m^2"; "1" for a plain number.
    where : str
        Place for messages.
    difference : bool
        True for spreads, offsets and other differences of temperatures.

    Returns
    -------
    float

    Raises
    ------
    UnitError
        When the unit is missing, unknown or of another dimension; names the dimension expected.
    """
    plain = _bare(_parse(unit).dims) == NONE
    if isinstance(text, (int, float)) and not isinstance(text, bool):
        if plain and math.isfinite(text):
            return float(text)
        raise UnitError(
            f"the number {text!r} has no unit", where, f"give {dimension(unit)}, in quotes"
        )
    if not isinstance(text, str):
        raise UnitError(f"{text!r} is no quantity", where, f"give {dimension(unit)}, in quotes")
    value, unit_text = split(text, where)
    if not unit_text and not plain:
        raise UnitError(f'"{text}" has no unit', where, f"give {dimension(unit)}")
    scale, offset = factor(unit_text, unit, where, difference=difference)
    result = scale * value + offset
    if not math.isfinite(result):
        raise UnitError(f'"{text}" is out of all bounds', where)
    return result


def amount_of(unit: str, si_unit: str) -> str:
    """The amount ("mol", "kg" or "Bq") that `unit` puts in the place of "amount" in `si_unit`.

    Empty when `unit` cannot be read or has another dimension.
    """
    try:
        return _match(_parse(unit).dims, _parse(si_unit).dims) or ""
    except BadTextError:
        return ""


def coherent(unit: str, where: str = "") -> str:
    """SI unit text of the dimension of `unit`, in base units, e.g. "mm" -> "m"."""
    dims = parse(unit, where).dims
    return _text([(name, power) for name, power in zip(BASE, dims, strict=True)])


def same_dimension(unit: str, si_unit: str, where: str = "") -> bool:
    """Whether `unit` has the dimension of `si_unit`."""
    return _match(parse(unit, where).dims, _parse(si_unit).dims) is not None


def _text(parts: list[tuple[str, int]]) -> str:
    """Names with powers as a readable unit text."""
    powers: dict[str, int] = {}
    for name, power in parts:
        powers[name] = powers.get(name, 0) + power

    def shown(names: list[str]) -> str:
        return "*".join(n if abs(powers[n]) == 1 else f"{n}^{abs(powers[n])}" for n in names)

    above = [n for n, p in powers.items() if p > 0]
    below = [n for n, p in powers.items() if p < 0]
    if not below:
        return shown(above) or "1"
    bottom = shown(below)
    return f"{shown(above) or '1'}/{f'({bottom})' if len(below) > 1 else bottom}"


def multiply_text(unit_a: str, unit_b: str) -> str:
    """Product of two unit texts, e.g. "kN/m" and "m" -> "kN"."""
    parts = [p for text in (unit_a, unit_b) if text != "1" for p in _parts(_plain_text(text))]
    return _text([(n, p) for n, p in parts if n != "1"])


def divide_text(unit_a: str, unit_b: str) -> str:
    """Quotient of two unit texts, e.g. "mm" and "d" -> "mm/d"."""
    return unit_a if unit_b == "1" else multiply_text(unit_a, f"({unit_b})^-1")


def total_unit(source_unit: str, length_unit: str = "m", geometry: str = "line") -> str:
    """Unit text of the integral of a source: times length, area (cylinder) or volume (sphere).

    The length is cancelled against the one in the source's own unit where there is one, so that
    "lbf/ft" gives "lbf" whatever `length_unit` is.
    """
    power = {"line": 1, "cylinder": 2, "sphere": 3}[geometry]
    if source_unit.strip() in ("", "1"):
        return _text([(length_unit, power)])
    parts = [p for p in _parts(_plain_text(source_unit)) if p[0] != "1"]
    lengths = [i for i, (n, _) in enumerate(parts) if not n[0].isdigit() and _is_length(n)]
    below = [i for i in lengths if parts[i][1] < 0]
    if below:
        return _text([*parts, (parts[below[0]][0], power)])
    # a length above the line, as in mm/d: the product is clearer in the length unit alone
    raised = sum(parts[i][1] for i in lengths)
    rest = [p for i, p in enumerate(parts) if i not in lengths]
    return _text([*rest, (length_unit, raised + power)])


def _is_length(name: str) -> bool:
    return named(name).dims == LENGTH
