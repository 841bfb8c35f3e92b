"""A member with one of its properties changed, for carrying property uncertainty into answers."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np

from srcfit.errors import CaseError
from srcfit.member import End, Member, Profile, Restraint, Support, Unknown


def perturbed(member: Member, key: str, sigmas: float) -> Member:
    """The member with the property `key` of `member.uncertainty` moved by `sigmas` times its sd.

    Parameters
    ----------
    key : str
        A coefficient, or a path such as ``left.rotation_spring``, ``support.1.stiffness``.

    Raises
    ------
    CaseError
        When the key names no property that can be moved.
    """
    amount = member.uncertainty[key]

    def moved(value: float) -> float:
        return (
            value * (1 + sigmas * amount.amount)
            if amount.relative
            else value + sigmas * amount.amount
        )

    first, _, rest = key.partition(".")
    if first in ("left", "right") and rest:
        if first == "left":
            return replace(member, left=_end(member.left, rest, moved))
        return replace(member, right=_end(member.right, rest, moved))
    if first == "support" and rest:
        number, _, what = rest.partition(".")
        supports = list(member.supports)
        supports[int(number) - 1] = _support(supports[int(number) - 1], what, moved)
        return replace(member, supports=tuple(supports))
    if first in ("hinge", "interface") and rest:
        return _inner(member, first, rest, moved)
    if key == "ambient":
        return replace(member, ambient=moved(member.ambient))
    profiles = dict(member.profiles)
    for symbol, keys in member.kind.operator.items():
        if key in keys and symbol in profiles:
            profiles[symbol] = _scaled(profiles[symbol], amount.amount, amount.relative, sigmas)
            continue
    if all(profiles[s] is member.profiles[s] for s in profiles):
        raise CaseError(f"nothing on the member is called {key!r}", "member.uncertainty")
    return replace(member, profiles=profiles)


def _scaled(profile: Profile, amount: float, relative: bool, sigmas: float) -> Profile:
    def curve(value: Any) -> Any:
        if callable(value):
            if relative:
                return lambda x: np.asarray(value(x)) * (1 + sigmas * amount)
            return lambda x: np.asarray(value(x)) + sigmas * amount
        return value * (1 + sigmas * amount) if relative else value + sigmas * amount

    return Profile(profile.edges, tuple(curve(v) for v in profile.values))


Mover = Callable[[float], float]


def _restraint(restraint: Restraint, what: str, moved: Mover) -> Restraint:
    if what in ("value", "settlement", "rotation", "ambient"):
        value = restraint.value
        return restraint if isinstance(value, Unknown) else replace(restraint, value=moved(value))
    return replace(restraint, stiffness=moved(restraint.stiffness))


def _end(end: End, what: str, moved: Mover) -> End:
    if what in ("rotation", "rotation_spring"):
        return replace(end, rotation=_restraint(end.rotation, what, moved))
    return replace(end, response=_restraint(end.response, what, moved))


def _support(support: Support, what: str, moved: Mover) -> Support:
    return replace(support, restraint=_restraint(support.restraint, what, moved))


def _inner(member: Member, first: str, rest: str, moved: Mover) -> Member:
    number = int(rest.partition(".")[0]) - 1
    if first == "hinge":
        hinges = list(member.hinges)
        hinges[number] = replace(hinges[number], spring=moved(hinges[number].spring))
        return replace(member, hinges=tuple(hinges))
    interfaces = list(member.interfaces)
    interfaces[number] = replace(
        interfaces[number], resistance=moved(interfaces[number].resistance)
    )
    return replace(member, interfaces=tuple(interfaces))
