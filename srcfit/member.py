"""What a member is: kinds, coefficients along it, ends, supports. Plain data, all in SI.

A kind (one file each in `members/`) is data about a whole class of members; a `Member` is one
of them with its numbers. `case` builds members from text; `state` turns them into the state form.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Curve = Callable[[Array], Array]
Geometry = Literal["line", "cylinder", "sphere"]
Drive = Literal["inertia", "capacity"]

RIGID = float("inf")


@dataclass(frozen=True)
class Unknown:
    """An amount that the readings must tell; `sd` is what is known beforehand (None: nothing)."""

    guess: float = 0.0
    sd: float | None = None


@dataclass(frozen=True)
class Profile:
    """A coefficient along the member: constant or smooth on each piece.

    Attributes
    ----------
    edges : tuple of float, length k + 1
        Piece edges [m], ascending, from the member's start to its end.
    values : tuple of (float or callable), length k
        A number, or a function of an array of places, one per piece.
    """

    edges: tuple[float, ...]
    values: tuple[float | Curve, ...]

    @property
    def stepped(self) -> bool:
        """Whether every piece is constant."""
        return not any(callable(v) for v in self.values)

    def __call__(self, x: Array, side: Literal["left", "right"] = "right") -> Array:
        """Values at `x`; at an edge the limit from the `side` (at the member's ends the inner)."""
        x = np.asarray(x, dtype=float)
        piece = np.searchsorted(self.edges, x, side="right" if side == "right" else "left") - 1
        piece = np.clip(piece, 0, len(self.values) - 1)
        out = np.empty(x.shape)
        for i, value in enumerate(self.values):
            here = piece == i
            out[here] = value(x[here]) if callable(value) else value
        return out


@dataclass(frozen=True)
class Restraint:
    """What holds one degree of freedom: force = stiffness * (amount - value).

    Attributes
    ----------
    stiffness : float
        0 leaves it free, `RIGID` (inf) holds it; may be negative only in `general`.
    value : float or Unknown
        The amount it is held or drawn to, absolute (a held temperature in K, the ambient of a
        convective end, a settlement [m], a rotation [rad]).
    to_ambient : bool
        Whether `value` is the member's ambient and moves with it.
    """

    stiffness: float = 0.0
    value: float | Unknown = 0.0
    to_ambient: bool = False


@dataclass(frozen=True)
class End:
    """One end: the restraint of the response and, for order 4, that of the rotation.

    `axis` marks the regular end at a singular point (radius 0, p -> 0): no condition but
    boundedness. `word` is the name used in the case file, printed back.
    """

    word: str
    response: Restraint = field(default_factory=Restraint)
    rotation: Restraint = field(default_factory=Restraint)
    axis: bool = False


@dataclass(frozen=True)
class Support:
    """A restraint of the response inside the span; `value` is the settlement (or held response).

    `key` is its place in the case file, e.g. "support.1" (order of the file, not of `at`).
    """

    at: float
    word: str
    restraint: Restraint
    key: str = ""


@dataclass(frozen=True)
class Hinge:
    """A hinge (order 4): moment = -spring * jump of the rotation (sagging positive)."""

    at: float
    spring: float = 0.0
    key: str = ""


@dataclass(frozen=True)
class Interface:
    """A resistance (order 2): jump of the response = -resistance * flux there (per area)."""

    at: float
    resistance: float
    key: str = ""


@dataclass(frozen=True)
class Uncertainty:
    """Standard uncertainty of one coefficient, spring or prescribed value."""

    amount: float
    relative: bool


@dataclass(frozen=True)
class CoefficientSpec:
    """One key of a member table: its SI unit, and what is assumed when it is left out.

    Required ones and those marked `positive` must be positive, others not negative unless
    `signed`; `to_ambient` marks a loss that draws the response to the ambient.
    """

    key: str
    unit: str
    required: bool = False
    default: float | None = None
    signed: bool = False
    meaning: str = ""
    positive: bool = False
    at_most: float | None = None
    to_ambient: bool = False


@dataclass(frozen=True)
class SensorSpec:
    """A sensor kind of a member kind: reading = factor * quantity, in the SI unit `unit`.

    `quantity` is one of response, slope, rotation, curvature, moment, shear, flux, force, torque,
    reaction; `strain` of a beam multiplies curvature by the reading's `distance`. `directions`
    are the words for the positive and the negative direction, where such words make sense.
    """

    name: str
    quantity: str
    unit: str
    needs_distance: bool = False
    directions: tuple[str, ...] = ()


@dataclass(frozen=True)
class MemberKind:
    """A class of members: data only.

    Attributes
    ----------
    order : {2, 4}
    geometry : area weight of the equation: line 1, cylinder 2 pi x, sphere 4 pi x**2
    operator : symbol ("p", "q", "r"; "p2", "p1", "p0", "r", "shear") -> the coefficient keys
        whose product it is (missing optional keys count as their default, 1 for factors)
    drive : how `frequency` enters: "inertia" (-omega**2 r u) or "capacity" (+ i omega r u)
    relative : whether the response refers to `ambient` (temperature, head, concentration)
    total_unit : SI unit of the integral of the source
    """

    name: str
    title: str
    order: Literal[2, 4]
    geometry: Geometry
    coefficients: tuple[CoefficientSpec, ...]
    operator: Mapping[str, tuple[str, ...]]
    response: str
    response_unit: str
    source_unit: str
    total_unit: str
    sensors: tuple[SensorSpec, ...]
    spring_unit: str
    rotation_spring_unit: str = ""
    drive: Drive = "inertia"
    relative: bool = False
    positive_words: tuple[str, str] = ("down", "up")
    end_words: tuple[str, ...] = ()
    flux_name: str = ""
    flux_unit: str = ""
    demo: Mapping[str, object] = field(default_factory=dict)
    cautions: tuple[str, ...] = ()

    def sensor(self, name: str) -> SensorSpec:
        """The sensor kind called `name`."""
        return next(s for s in self.sensors if s.name == name)


@dataclass(frozen=True)
class Member:
    """One member with its numbers, in SI.

    Attributes
    ----------
    start, end : float
        Places of the two ends [m]; 0 and the length, or the two radii.
    profiles : mapping symbol -> Profile
        Order 2: "p", "q", "r" in -(p u')' + q u - lam r u = f; order 4: "p2", "p1", "p0", "r" and,
        when the section shears, "shear". Without the area weight of radial kinds; "p" and the
        stiffnesses always present, the others only where given.
    left, right : End
    supports, hinges, interfaces : tuples, ascending in `at`
    ambient : float
        Reference of the response, absolute [K, m, amount/m3]; 0 for the other kinds.
    lam : float
        lambda of the operator (`general` only; driven members use `frequency`).
    frequency : float or None
        Driving frequency [Hz]; `damping` is the loss factor.
    uncertainty : mapping key path -> Uncertainty
    coefficients : mapping key -> Profile
        The coefficients as given, by their key in the case file; `profiles` are their products.
    """

    kind: MemberKind
    start: float
    end: float
    profiles: Mapping[str, Profile]
    left: End
    right: End
    supports: tuple[Support, ...] = ()
    hinges: tuple[Hinge, ...] = ()
    interfaces: tuple[Interface, ...] = ()
    ambient: float = 0.0
    lam: float = 0.0
    frequency: float | None = None
    damping: float = 0.0
    uncertainty: Mapping[str, Uncertainty] = field(default_factory=dict)
    coefficients: Mapping[str, Profile] = field(default_factory=dict)

    @property
    def length(self) -> float:
        """Distance between the ends [m]."""
        return self.end - self.start

    @property
    def omega(self) -> float:
        """Angular driving frequency [rad/s], 0 when not driven."""
        return 2 * np.pi * self.frequency if self.frequency else 0.0

    @property
    def driven(self) -> bool:
        """Whether responses and sources are complex amplitudes."""
        return self.frequency is not None

    def area(self, x: Array) -> Array:
        """Area weight w(x) of the equation: 1, 2 pi x or 4 pi x**2."""
        x = np.asarray(x, dtype=float)
        if self.kind.geometry == "cylinder":
            return 2 * np.pi * x
        return 4 * np.pi * x**2 if self.kind.geometry == "sphere" else np.ones_like(x)
