"""Sensor kinds: what each reads of the state, at a point or over a gauge length.

`SENSORS` is gathered from the member kinds: to add a sensor kind, add its `SensorSpec` to a member
file (and, for a new quantity, its row to `quantities.QUANTITIES`).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from srcfit.influence import Term
from srcfit.member import Array, Member, SensorSpec
from srcfit.members import MEMBERS
from srcfit.quantities import functionals
from srcfit.state import Chain

SENSORS: dict[str, dict[str, SensorSpec]] = {
    name: {s.name: s for s in kind.sensors} for name, kind in MEMBERS.items()
}
"""Member kind -> sensor kind -> what it reads."""


def samples(member: Member, x: float, gauge: float, edges: Array) -> tuple[Array, Array]:
    """Places and weights (sum 1) whose weighted mean is the average over the gauge length.

    Three Gauss places on each stretch between cell edges: what one cell does to a reading is
    smooth between them. A gauge that reaches beyond an end averages over the part on the member.

    Parameters
    ----------
    x : float
        Middle of the gauge [m].
    gauge : float
        Gauge length [m], 0 for a point.
    edges : (k,) float
        Cell edges and other places where responses have kinks [m].
    """
    if gauge == 0:
        return np.array([x]), np.ones(1)
    low, high = max(x - gauge / 2, member.start), min(x + gauge / 2, member.end)
    inside = edges[(edges > low) & (edges < high)]
    stops = np.unique(np.concatenate([[low], inside, [high]]))
    place, weight = np.polynomial.legendre.leggauss(3)
    h = np.diff(stops)
    places = stops[:-1, None] + h[:, None] * (place + 1) / 2
    return places.ravel(), (h[:, None] * weight / 2).ravel() / (high - low)


def sensor_terms(
    line: Chain, sensors: Sequence[tuple[str, Array, Array, float | None]]
) -> list[list[Term]]:
    """The functionals of sensors on a chain whose nodes hold all of their places.

    Parameters
    ----------
    sensors : sequence of (kind, places, weights, distance)

    Raises
    ------
    MemberError
        When the member has no such quantity there (a reaction away from a support).
    """
    kind = line.member.kind
    specs = [kind.sensor(name) for name, *_ in sensors]
    found: list[list[Term]] = [[] for _ in sensors]
    for quantity in dict.fromkeys(s.quantity for s in specs):
        mine = [i for i, s in enumerate(specs) if s.quantity == quantity]
        every = functionals(line, quantity, np.concatenate([sensors[i][1] for i in mine]))
        owner = [i for i in mine for _ in sensors[i][1]]
        weights = np.concatenate([sensors[i][2] for i in mine])
        for i, weight, terms in zip(owner, weights, every, strict=True):
            factor = (sensors[i][3] or 0.0) if specs[i].needs_distance else 1.0
            size = factor * weight
            found[i] += [t if size == 1 else Term(t.node, t.row * size, t.before) for t in terms]
    return found
