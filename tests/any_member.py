"""Random members of every kind as mappings: coefficients in steps, ends, supports, hinges ...

Every kind of `MEMBERS` is drawn by what it says of itself, so a new kind is tested by being there.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

from hypothesis import strategies as st

from srcfit.members import MEMBERS
from srcfit.members.general import GENERAL_4

KINDS = {**MEMBERS, "general of order 4": GENERAL_4}
# keys that act only at a frequency, or that the tests of stiffness leave alone
IDLE = {"mass", "inertia", "heat_capacity", "storage", "r", "porosity"}
# power of the length that sizes a coefficient against the leading one
REACH = {"p1": 2, "tension": 2, "shear_stiffness": 2}


@dataclass(frozen=True)
class Drawn:
    """A random member: its mapping, and what is the same for the tests.

    `stiff` are the keys of coefficients and springs that only make the member stiffer.
    """

    kind: object
    given: dict
    span: tuple[float, float]
    stiff: tuple[str, ...]
    points: tuple[float, ...] = field(default=())

    def places(self, shares):
        """Places at shares of the length."""
        a, b = self.span
        return [a + (b - a) * t for t in shares]


def sizes(low, high):
    """Positive numbers between powers of ten, rounded to four digits."""
    return st.floats(low, high).map(lambda e: float(f"{10**e:.3e}"))


SHARES = st.integers(1, 99).map(lambda n: n / 100 + 0.0013)


@st.composite
def profiles(draw, span, unit, low, high, most=4, zero=False):
    """One quantity, or a table of steps; `zero` lets pieces be 0 (a partial foundation)."""
    a, b = span
    value = sizes(low, high)
    if zero:
        value = st.one_of(value, st.just(0.0))
    cuts = sorted(draw(st.sets(SHARES, max_size=most - 1)))
    edges = [a, *(a + (b - a) * t for t in cuts), b]
    values = [draw(value) for _ in edges[1:]]

    def text(v, u):
        return f"{v!r} {u}"

    if len(values) == 1:
        return text(values[0], unit)
    return [
        [text(lo, "m"), text(hi, "m"), text(v, unit)]
        for lo, hi, v in zip(edges[:-1], edges[1:], values, strict=True)
    ]


@st.composite
def ends_of_2(draw, kind, scale):
    words = [w for w in kind.end_words if w not in ("axis", "regular")]
    word = draw(st.sampled_from([*words, "spring"]))
    if word != "spring":
        return word
    k = f"{draw(sizes(-1, 1)) * scale!r} {kind.spring_unit}"
    if not kind.relative:
        return {"spring": k}
    return {"transfer": k, "ambient": "0 " + kind.response_unit.replace("amount", "mol")}


@st.composite
def ends_of_4(draw, scale, length, kind):
    word = draw(st.sampled_from([*kind.end_words, "elastic"]))
    if word != "elastic":
        return word
    found = {}
    for key, unit, size in (
        ("deflection_spring", kind.spring_unit, scale / length**3),
        ("rotation_spring", kind.rotation_spring_unit, scale / length),
    ):
        if draw(st.booleans()):
            found[key] = f"{draw(sizes(-1, 2)) * size!r} {unit}"
    return found or "free"


@st.composite
def members(draw, kind=None):
    """A random member."""
    # beams have most to go wrong
    name = draw(st.sampled_from([*KINDS, "beam", "beam"])) if kind is None else kind
    kind = KINDS[name]
    given = {"kind": kind.name}
    if kind.name == "general":
        given["order"] = kind.order
        span = (0.0, draw(sizes(-1, 1)))
        given["start"], given["end"] = span
    elif kind.geometry == "line" and kind.name != "radial_aquifer":
        span = (0.0, draw(sizes(-1, 1.5)))
        given["length"] = f"{span[1]!r} m"
    else:
        inner = draw(st.one_of(st.just(0.0), sizes(-2, -0.3)))
        outer = inner + draw(sizes(-1.5, 0.5))
        span = (inner, outer)
        given["inner_radius"], given["outer_radius"] = f"{inner!r} m", f"{outer!r} m"
    length = span[1] - span[0]
    stiff = _coefficients(draw, kind, given, span, length)
    if kind.relative:
        given["ambient"] = "0 " + kind.response_unit.replace("amount", "mol")
    order4 = kind.order == 4
    size = 10.0**3
    for side in ("left", "right"):
        if side == "left" and kind.geometry != "line" and span[0] == 0:
            continue
        end = ends_of_4(size, length, kind) if order4 else ends_of_2(kind, size / length)
        given[side] = draw(end)
    points = _inside(draw, kind, given, span, length, size)
    return Drawn(kind, given, span, tuple(stiff), points=tuple(points))


def _coefficients(draw, kind, given, span, length):
    """Draw every coefficient; the keys that stiffen are returned."""
    stiff = []
    leading = kind.operator["p2" if kind.order == 4 else "p"]
    power = kind.order
    for spec in kind.coefficients:
        if spec.key in IDLE:
            continue
        lead = spec.key in leading
        if not lead and not draw(st.booleans()):
            continue
        # sizes that let bedding, tension and shear matter over the length
        reach = 0 if lead else REACH.get(spec.key, power)
        scale = 3.0 - reach * math.log10(length)
        unit = "" if kind.name == "general" else spec.unit
        low, high = (scale - 1, scale + 1) if lead else (scale - 2, scale + 2.5)
        zero = not lead and not spec.positive
        value = draw(profiles(span, unit or "1", low, high, zero=zero))
        if kind.name == "general":
            value = _plain(value)
        given[spec.key] = value
        stiff.append(spec.key)
    return stiff


def _plain(value):
    """The same for `general`: numbers without units."""
    if isinstance(value, str):
        return float(value.split()[0])
    return [[float(v.split()[0]) for v in row] for row in value]


def _inside(draw, kind, given, span, length, size):
    """Supports, springs, hinges and interfaces inside the span; their places."""
    shares = sorted(draw(st.sets(SHARES, max_size=3)))
    places = [span[0] + length * t for t in shares]
    words = ("fixed", "spring") if kind.relative else ("pinned", "spring")
    other = "hinge" if kind.order == 4 else "interface"
    for at in places:
        what = draw(st.sampled_from([*words, other]))
        place = f"{at!r} m"
        if what == "spring":
            k = draw(sizes(-1, 1)) * size / length ** (kind.order - 1)
            item = {"at": place, "kind": "spring", "stiffness": f"{k!r} {kind.spring_unit}"}
        elif what == "hinge":
            k = draw(st.one_of(st.just(0.0), sizes(-1, 1))) * size / length
            item = {"at": place, "spring": f"{k!r} {kind.rotation_spring_unit}"}
        elif what == "interface":
            # resistance in units of spring_unit^-1
            r = draw(sizes(-1.5, 1)) / (size / length)
            item = {"at": place, "resistance": f"{r!r} ({kind.spring_unit})^-1"}
        else:
            item = {"at": place, "kind": what}
        given.setdefault("support" if what in words else what, []).append(item)
    return places
