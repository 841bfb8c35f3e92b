"""Sensor kinds: what each reads of the state, at a point or over a gauge length.

`SENSORS` is gathered from the member kinds: to add a sensor kind, add its `SensorSpec` to a member
file (and, for a new quantity, its row to `quantities.QUANTITIES`).
"""

from __future__ import annotations

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
    line: Chain, kind: str, places: Array, weights: Array, distance: float | None
) -> list[Term]:
    """The functional of one sensor on a chain whose nodes hold all of `places`.

    Raises
    ------
    MemberError
        When the member has no such quantity there (a reaction away from a support).
    """
    spec = line.member.kind.sensor(kind)
    factor = (distance or 0.0) if spec.needs_distance else 1.0
    found = functionals(line, spec.quantity, places)
    return [
        Term(term.node, term.row * (factor * weight), term.before)
        for terms, weight in zip(found, weights, strict=True)
        for term in terms
    ]
