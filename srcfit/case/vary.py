"""A member with one of its uncertain amounts moved, to see what that does to an answer."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from srcfit.case.profiles import Product, Shifted, products
from srcfit.member import Curve, End, Member, Profile, Restraint, Unknown

Change = Callable[[float], float]
STIFFNESSES = ("spring", "transfer", "deflection_spring", "rotation_spring", "stiffness")


def vary(member: Member, key: str, sigmas: float = 1.0) -> Member:
    """The member with the amount `key` moved by so many of its standard uncertainties.

    Parameters
    ----------
    member : Member
        As made by `make_member` or `load_case`.
    key : str
        A key of ``member.uncertainty``, e.g. "foundation" or "support.1.stiffness".
    sigmas : float
        How far to move it.

    Raises
    ------
    KeyError
        When the member states no uncertainty of `key`.
    """
    u = member.uncertainty[key]

    def change(value: float) -> float:
        return value + sigmas * u.amount * (value if u.relative else 1.0)

    if key in member.coefficients:
        moved = _moved(member.coefficients[key], u.relative, sigmas * u.amount)
        coefficients = {**member.coefficients, key: moved}
        return replace(
            member, coefficients=coefficients, profiles=products(member.kind, coefficients)
        )
    if key == "damping":
        return replace(member, damping=change(member.damping))
    if key == "ambient":
        return _warmer(member, change)
    place, _, what = key.rpartition(".")
    if place == "left":
        return replace(member, left=_end(member.left, what, change))
    if place == "right":
        return replace(member, right=_end(member.right, what, change))
    return replace(
        member,
        supports=tuple(
            replace(s, restraint=_restraint(s.restraint, what, change)) if s.key == place else s
            for s in member.supports
        ),
        hinges=tuple(
            replace(h, spring=change(h.spring)) if h.key == place else h for h in member.hinges
        ),
        interfaces=tuple(
            replace(i, resistance=change(i.resistance)) if i.key == place else i
            for i in member.interfaces
        ),
    )


def _moved(profile: Profile, relative: bool, step: float) -> Profile:
    """A coefficient times 1 + step, or plus step."""

    def one(value: float | Curve) -> float | Curve:
        if not relative:
            return Shifted(value, step) if callable(value) else value + step
        return Product((1 + step, value)) if callable(value) else value * (1 + step)

    return Profile(profile.edges, tuple(one(v) for v in profile.values))


def _end(end: End, what: str, change: Change) -> End:
    if what in ("rotation", "rotation_spring"):
        return replace(end, rotation=_restraint(end.rotation, what, change))
    return replace(end, response=_restraint(end.response, what, change))


def _restraint(restraint: Restraint, what: str, change: Change) -> Restraint:
    if what in STIFFNESSES:
        return replace(restraint, stiffness=change(restraint.stiffness))
    value = restraint.value
    return restraint if isinstance(value, Unknown) else replace(restraint, value=change(value))


def _warmer(member: Member, change: Change) -> Member:
    """Another ambient, with everything that refers to it."""

    def moved(restraint: Restraint) -> Restraint:
        return _restraint(restraint, "ambient", change) if restraint.to_ambient else restraint

    drawn = any(c.to_ambient for c in member.kind.coefficients)
    return replace(
        member,
        ambient=change(member.ambient) if drawn else member.ambient,
        left=replace(member.left, response=moved(member.left.response)),
        right=replace(member.right, response=moved(member.right.response)),
        supports=tuple(replace(s, restraint=moved(s.restraint)) for s in member.supports),
    )
