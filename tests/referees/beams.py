"""Beams by Hermite finite elements of any degree from 3 (cubic), loads integrated exactly.

(EI u'')'' - (T u')' + k u = f. Signs: M = -EI u'' (sagging positive), V = M' + T u',
a reaction is positive when it opposes a positive load, a couple turns with u' > 0.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, field

import numpy as np

from .shapes import RIGID, gauss, hermite, load_pieces, lookup, mesh


@dataclass(frozen=True)
class End:
    """Springs of one end (RIGID holds) and the values they are drawn to."""

    deflection: float = 0.0
    rotation: float = 0.0
    settlement: float = 0.0
    turn: float = 0.0


FREE, PINNED, CLAMPED, GUIDED = End(), End(RIGID), End(RIGID, RIGID), End(0.0, RIGID)
ENDS = {"free": FREE, "pinned": PINNED, "clamped": CLAMPED, "guided": GUIDED}


@dataclass(frozen=True)
class Beam:
    """A beam; stiffness, foundation and tension are numbers or pieces (from, to, value).

    `supports` holds (at, spring or RIGID, settlement), `hinges` (at, spring).
    """

    length: float
    stiffness: object
    foundation: object = 0.0
    tension: object = 0.0
    left: End = FREE
    right: End = FREE
    supports: tuple = ()
    hinges: tuple = ()

    def places(self):
        """Places that must be nodes."""
        pieces = [p for p in (self.stiffness, self.foundation, self.tension) if not np.isscalar(p)]
        edges = [e for p in pieces for a, b, _ in p for e in (a, b)]
        return [*edges, *(s[0] for s in self.supports), *(h[0] for h in self.hinges)]


@dataclass(frozen=True)
class Bent:
    """The solved beam."""

    beam: Beam
    nodes: np.ndarray
    degree: int
    numbers: np.ndarray
    amounts: np.ndarray
    reactions: dict = field(default_factory=dict)

    def derivative(self, x, order):
        """A derivative of the deflection at x: right limit, at the right end the left."""
        element = np.clip(np.searchsorted(self.nodes, x, side="right") - 1, 0, len(self.nodes) - 2)
        a, b = self.nodes[element], self.nodes[element + 1]
        half = (b - a) / 2
        values = hermite(self.degree, (x - (a + b) / 2) / half, order, half[:, None])
        return np.einsum("ij,ij->i", values, self.amounts[self.numbers[element]])

    def at(self, name, x):
        """deflection, rotation, curvature, moment or shear at x."""
        x = np.atleast_1d(np.asarray(x, dtype=float))
        if name == "deflection":
            return self.derivative(x, 0)
        if name == "rotation":
            return self.derivative(x, 1)
        if name == "curvature":
            return -self.derivative(x, 2)
        # a coefficient jumps at a node: take the side of the derivative
        side = np.minimum(x + 1e-9 * self.beam.length, self.beam.length - 1e-9)
        EI = np.array([lookup(self.beam.stiffness, s) for s in side])
        if name == "moment":
            return -EI * self.derivative(x, 2)
        T = np.array([lookup(self.beam.tension, s) for s in side])
        return -EI * self.derivative(x, 3) + T * self.derivative(x, 1)


def bend(beam, density=(), lumped=(), couples=(), degree=9, size=None, places=()):
    """Solve the beam.

    Parameters
    ----------
    density : (from, to, number or function of x) pieces of the load
    lumped, couples : (at, amount)
    degree : degree of the elements, 3 (cubic) or more
    size : longest element
    places : further places that must be nodes
    """
    loads = [*(e for a, b, _ in density for e in (a, b)), *(p for p, _ in (*lumped, *couples))]
    nodes = mesh(0.0, beam.length, [*beam.places(), *loads, *places], size or beam.length / 8)
    count, inner = len(nodes), degree - 3
    hinged = {int(np.argmin(abs(nodes - at))): spring for at, spring in beam.hinges}
    # numbers: deflection of each node, slope left and right of it (one unless hinged), bubbles
    before = 2 * np.arange(count) + 1
    after = before.copy()
    extra = 2 * count + np.arange(len(hinged))
    for number, node in zip(extra, hinged, strict=True):
        after[node] = number
    first = 2 * count + len(hinged)
    numbers = np.array([
        [2 * e, after[e], 2 * e + 2, before[e + 1], *(first + e * inner + np.arange(inner))]
        for e in range(count - 1)
    ])  # fmt: skip
    total = first + (count - 1) * inner
    middles = (nodes[1:] + nodes[:-1]) / 2
    kind = np.result_type(float, *(
        np.asarray(lookup(k, x)) for k in (beam.stiffness, beam.foundation) for x in middles
    ), *(np.asarray(v(nodes)) for _, _, v in density if callable(v)))  # fmt: skip
    K, F = np.zeros((total, total), dtype=kind), np.zeros(total, dtype=kind)
    for e, (a, b) in enumerate(itertools.pairwise(nodes)):
        here, middle, half = numbers[e], (a + b) / 2, (b - a) / 2
        x, w = gauss(a, b, degree + 1)
        N0, N1, N2 = (hermite(degree, (x - middle) / half, d, half) for d in (0, 1, 2))
        K[np.ix_(here, here)] += (
            lookup(beam.stiffness, middle) * (N2.T * w) @ N2
            + lookup(beam.tension, middle) * (N1.T * w) @ N1
            + lookup(beam.foundation, middle) * (N0.T * w) @ N0
        )
        for lo, hi, value in load_pieces(density, a, b):
            x, w = gauss(lo, hi, degree + 12)
            F[here] += hermite(degree, (x - middle) / half, 0, half).T @ (w * value(x))

    def node_of(at):
        return int(np.argmin(abs(nodes - at)))

    for at, P in lumped:
        F[2 * node_of(at)] += P
    for at, C in couples:
        F[before[node_of(at)]] += C
    for node, spring in hinged.items():
        pair = [before[node], after[node]]
        K[np.ix_(pair, pair)] += spring * np.array([[1, -1], [-1, 1]])

    springs = [(2 * node_of(at), stiff, drawn) for at, stiff, drawn in beam.supports]
    for node, end, slope in ((0, beam.left, after[0]), (count - 1, beam.right, before[-1])):
        springs += [(2 * node, end.deflection, end.settlement), (slope, end.rotation, end.turn)]
    return _finish(beam, nodes, degree, numbers, K, F, springs)


def _finish(beam, nodes, degree, numbers, K, F, springs):
    """Hold the rigid unknowns, solve, and read the reactions off the residual."""
    pull = F.copy()
    stiff = K.copy()
    held = {number: drawn for number, spring, drawn in springs if np.isinf(spring)}
    for number, spring, drawn in springs:
        if not np.isinf(spring):
            stiff[number, number] += spring
            pull[number] += spring * drawn
    free = np.setdiff1d(np.arange(len(F)), list(held))
    amounts = np.zeros(len(F), dtype=K.dtype)
    amounts[list(held)] = list(held.values())
    # scale to a unit diagonal: slopes, deflections and bubbles have different sizes
    scale = 1 / np.sqrt(np.abs(np.diag(stiff)[free]))
    A = stiff[np.ix_(free, free)] * scale * scale[:, None]
    right = scale * (pull - stiff @ amounts)[free]
    solved = np.linalg.solve(A, right)
    solved += np.linalg.solve(A, right - A @ solved)  # one step of refinement
    amounts[free] = scale * solved
    residual = F - K @ amounts  # what the restraints carry
    reactions = {}
    last = 2 * (len(nodes) - 1)
    for number, spring, drawn in springs:
        force = residual[number] if np.isinf(spring) else spring * (amounts[number] - drawn)
        if number % 2 == 0 and number <= last:
            reactions[float(nodes[number // 2])] = force
        else:
            reactions["left couple" if number == 1 else "right couple"] = force
    return Bent(beam, nodes, degree, numbers, amounts, reactions)
