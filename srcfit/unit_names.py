"""Names of units with their sizes: the commonest in a table, every other one looked up in pint.

The table spares the slow import of pint in most runs; a test holds every entry of it, with every
prefix, against pint.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

Dims = tuple[int, ...]
BASE = ("m", "kg", "s", "K", "mol", "A", "rad", "amount")
NONE: Dims = (0,) * len(BASE)


@dataclass(frozen=True)
class Unit:
    """A unit: SI = scale * value + offset, with the powers of `BASE`."""

    scale: float
    dims: Dims
    offset: float = 0.0


def unit(scale: float, offset: float = 0.0, **powers: int) -> Unit:
    """A unit from its size and the powers of its base units."""
    return Unit(scale, tuple(powers.get(name, 0) for name in BASE), offset)


POUND = 0.45359237
GRAVITY = 9.80665
POUND_FORCE = POUND * GRAVITY
FOOT = 0.3048
FORCE = {"kg": 1, "m": 1, "s": -2}
PRESSURE = {"kg": 1, "m": -1, "s": -2}
PER_LENGTH = {"kg": 1, "s": -2}

LENGTH = unit(1, m=1).dims
ACCELERATION = unit(1, m=1, s=-2).dims

# names that take a decimal prefix
PREFIXED: Mapping[str, Unit] = {
    "m": unit(1, m=1),
    "g": unit(1e-3, kg=1),
    "s": unit(1, s=1),
    "K": unit(1, K=1),
    "mol": unit(1, mol=1),
    "A": unit(1, A=1),
    "rad": unit(1, rad=1),
    "N": unit(1, **FORCE),
    "Pa": unit(1, **PRESSURE),
    "Nm": unit(1, kg=1, m=2, s=-2),
    "J": unit(1, kg=1, m=2, s=-2),
    "W": unit(1, kg=1, m=2, s=-3),
    "Hz": unit(1, s=-1),
    "Bq": unit(1, s=-1),
    "L": unit(1e-3, m=3),
    "l": unit(1e-3, m=3),
    "strain": unit(1),
    "Strain": unit(1),
    "ε": unit(1),
}
PREFIXES: Mapping[str, float] = {
    "n": 1e-9, "u": 1e-6, "µ": 1e-6, "m": 1e-3, "c": 1e-2, "d": 1e-1, "da": 10.0,
    "h": 1e2, "k": 1e3, "M": 1e6, "G": 1e9, "T": 1e12, "p": 1e-12,
    "micro": 1e-6, "milli": 1e-3, "kilo": 1e3,
}  # fmt: skip

# names that stand alone
PLAIN: Mapping[str, Unit] = {
    "%": unit(1e-2),
    "‰": unit(1e-3),
    "ppm": unit(1e-6),
    "percent": unit(1e-2),
    "ue": unit(1e-6),
    "µe": unit(1e-6),
    "me": unit(1e-3),
    "deg": unit(math.pi / 180, rad=1),
    "°": unit(math.pi / 180, rad=1),
    "degC": unit(1, 273.15, K=1),
    "°C": unit(1, 273.15, K=1),
    "celsius": unit(1, 273.15, K=1),
    "degree_Celsius": unit(1, 273.15, K=1),
    "degF": unit(5 / 9, 273.15 - 32 * 5 / 9, K=1),
    "°F": unit(5 / 9, 273.15 - 32 * 5 / 9, K=1),
    "fahrenheit": unit(5 / 9, 273.15 - 32 * 5 / 9, K=1),
    "degree_Fahrenheit": unit(5 / 9, 273.15 - 32 * 5 / 9, K=1),
    "kelvin": unit(1, K=1),
    "bar": unit(1e5, **PRESSURE),
    "mbar": unit(1e2, **PRESSURE),
    "min": unit(60, s=1),
    "h": unit(3600, s=1),
    "hr": unit(3600, s=1),
    "d": unit(86400, s=1),
    "day": unit(86400, s=1),
    "t": unit(1000, kg=1),
    "lb": unit(POUND, kg=1),
    "kgf": unit(GRAVITY, **FORCE),
    "tf": unit(1000 * GRAVITY, **FORCE),
    "lbf": unit(POUND_FORCE, **FORCE),
    "kip": unit(1000 * POUND_FORCE, **FORCE),
    "kips": unit(1000 * POUND_FORCE, **FORCE),
    "in": unit(FOOT / 12, m=1),
    "inch": unit(FOOT / 12, m=1),
    "ft": unit(FOOT, m=1),
    "yd": unit(3 * FOOT, m=1),
    "psi": unit(POUND_FORCE / (FOOT / 12) ** 2, **PRESSURE),
    "ksi": unit(1000 * POUND_FORCE / (FOOT / 12) ** 2, **PRESSURE),
    "psf": unit(POUND_FORCE / FOOT**2, **PRESSURE),
    "ksf": unit(1000 * POUND_FORCE / FOOT**2, **PRESSURE),
    "plf": unit(POUND_FORCE / FOOT, **PER_LENGTH),
    "klf": unit(1000 * POUND_FORCE / FOOT, **PER_LENGTH),
    "amount": unit(1, amount=1),
}
# read elsewhere as something that a case file hardly means
REFUSED: Mapping[str, str] = {
    "ton": "write t or tf (1000 kg, as a mass or a force), short_ton or long_ton",
    "tons": "write t or tf (1000 kg, as a mass or a force), short_ton or long_ton",
    "C": "for degrees Celsius write degC",
    "F": "for degrees Fahrenheit write degF",
    "e": "for microstrain write ue",
}


class BadTextError(Exception):
    """A unit text that cannot be read: what is wrong, how to mend it."""


@cache
def _registry() -> Any:
    import pint

    return pint.UnitRegistry()


_PINT_BASE = {
    "meter": "m", "kilogram": "kg", "second": "s", "kelvin": "K", "mole": "mol", "ampere": "A",
    "radian": "rad", "count": "",
}  # fmt: skip


def _from_pint(name: str) -> Unit:
    """Look one name (never an expression) up in pint."""
    unknown = BadTextError(
        f'the unit "{name}" is not known', "check its spelling and its capitals"
    )
    if not re.fullmatch(r"[A-Za-zµ°_]{1,40}", name):
        raise unknown
    registry = _registry()
    try:
        one = registry.Quantity(1.0, registry.parse_units(name))
        if not one._is_multiplicative:
            raise unknown
        base = one.to_base_units()
        powers: dict[str, int] = {}
        for part, power in base._units.items():
            powers[_PINT_BASE[part]] = int(power)
            if power != int(power):
                raise unknown
        scale = float(base.magnitude)
    except Exception:  # pint raises many types, bare AssertionError among them
        raise unknown from None
    powers.pop("", None)
    return unit(scale, **powers)


@cache
def named(name: str) -> Unit:
    """The unit of one name, with its prefix."""
    if name in PLAIN:
        return PLAIN[name]
    if name in PREFIXED:
        return PREFIXED[name]
    if name in REFUSED:
        raise BadTextError(f'the unit "{name}" can be read in several ways', REFUSED[name])
    for prefix, factor in PREFIXES.items():
        rest = name.removeprefix(prefix)
        if rest != name and rest in PREFIXED:
            return Unit(factor * PREFIXED[rest].scale, PREFIXED[rest].dims)
    return _from_pint(name)
