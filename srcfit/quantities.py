"""What can be read of a member: each quantity as a row on the state, at any place."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.errors import MemberError
from srcfit.holds import support_intervals
from srcfit.influence import Term
from srcfit.member import Array, Member
from srcfit.state import Chain, operator

Row = Callable[[Member, Array, dict[str, Any]], list[Any]]


def _slope(member: Member, w: Array, k: dict[str, Any]) -> list[Any]:
    if member.kind.order == 2:
        return [0.0, 1 / k["p"]]
    if "shear" not in k:
        return [0.0, 1.0, 0.0, 0.0]
    share = 1 / (1 + k["p1"] / k["shear"])
    return [0.0, share, 0.0, share / k["shear"]]


def _flux(member: Member, w: Array, k: dict[str, Any]) -> list[Any]:
    if member.kind.order == 4:
        return [0.0, 0.0, 0.0, 1.0]
    return [0.0, -1.0 if member.kind.name == "radial_aquifer" else -1 / w]


def _response(member: Member, w: Array, k: dict[str, Any]) -> list[Any]:
    return [1.0] + [0.0] * (member.kind.order - 1)


QUANTITIES: dict[str, tuple[tuple[int, ...], Row]] = {
    # name: (orders that have it, row on the state)
    "response": ((2, 4), _response),
    "slope": ((2, 4), _slope),
    "rotation": ((4,), lambda member, w, k: [0.0, 1.0, 0.0, 0.0]),
    "curvature": ((4,), lambda member, w, k: [0.0, 0.0, 1 / k["p2"], 0.0]),
    "moment": ((4,), lambda member, w, k: [0.0, 0.0, 1.0, 0.0]),
    "shear": ((4,), lambda member, w, k: [0.0, 0.0, 0.0, 1.0]),
    "flux": ((2, 4), _flux),
    "force": ((2,), lambda member, w, k: [0.0, 1.0]),
    "torque": ((2,), lambda member, w, k: [0.0, 1.0]),
}


def functionals(
    line: Chain, quantity: str, x: Any, before: NDArray[np.bool_] | None = None
) -> list[list[Term]]:
    """The functional `quantity` at each place of `x`: the right limit, at the end the left.

    Where `before` is true: the left limit.

    Raises
    ------
    MemberError
        When the member has no such quantity, or no reaction at a place.
    """
    member = line.member
    places = np.atleast_1d(np.asarray(x, dtype=float))
    if quantity == "reaction":
        return [_reaction(line, float(place)) for place in places]
    orders, row = QUANTITIES.get(quantity, ((), None))
    if row is None or member.kind.order not in orders:
        known = [name for name, (has, _) in QUANTITIES.items() if member.kind.order in has]
        raise MemberError(
            f"a {member.kind.name} has no quantity {quantity!r}",
            "quantity",
            "choose one of " + ", ".join([*known, "reaction"]),
        )
    node = line.node(places)
    left = node == len(line.x) - 1
    if before is not None:
        node = np.where(before, np.searchsorted(line.x, line.x[node]), node)
        left = left | before
    # coefficients jump at edges: look just inside the side that is meant
    nudge = np.where(left, -1e-12, 1e-12) * member.length
    entries = row(member, member.area(line.x[node]), operator(member, line.x[node] + nudge))
    rows = np.stack([np.broadcast_to(np.asarray(e), places.shape) for e in entries], axis=1)
    return [[Term(int(k), r, bool(e))] for k, r, e in zip(node, rows, left, strict=True)]


def functional(line: Chain, quantity: str, x: float) -> list[Term]:
    """One functional; see `functionals`."""
    return functionals(line, quantity, x)[0]


def _reaction(line: Chain, x: float) -> list[Term]:
    """Reaction at an end or a support: the jump of the last state component there."""
    member, last = line.member, line.order - 1
    unit = np.zeros(line.order)
    unit[last] = 1.0
    near = 1e-9 * member.length
    if abs(x - member.start) <= near and not member.left.axis:
        return [Term(0, unit, True)]
    if abs(x - member.end) <= near and not member.right.axis:
        return [Term(len(line.x) - 1, -unit)]
    for support, interval in zip(member.supports, support_intervals(line), strict=True):
        if abs(x - support.at) <= near:
            return [Term(interval + 1, unit), Term(interval, -unit)]
    places = ", ".join(f"{s.at:g}" for s in member.supports) or "none"
    raise MemberError(
        f"there is no support at x = {x:g} m", "quantity 'reaction'",
        f"ask at an end or at a support (supports: {places})",
    )  # fmt: skip
