"""Rods, cables, fins, walls, columns, aquifers and radial bodies by elements of high degree.

-(w p u')' + w q u = w f with the area weight w = 1, 2 pi x or 4 pi x**2. Coefficients may be
complex (members driven at one frequency).
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.linalg import splu

from .shapes import gauss, lagrange, load_pieces, lookup, mesh

AREAS = {
    "line": lambda x: np.ones_like(x),
    "cylinder": lambda x: 2 * np.pi * x,
    "sphere": lambda x: 4 * np.pi * x**2,
}


@dataclass(frozen=True)
class Line:
    """A member of order 2; p and q are numbers, pieces (from, to, value) or functions of x.

    `left` and `right` are (spring or RIGID, value): flux out per area = spring * (u - value), so
    (0, 0) is free. `supports` holds (at, spring or RIGID, value), `interfaces` (at, resistance).
    """

    start: float
    end: float
    p: object
    q: object = 0.0
    left: tuple = (0.0, 0.0)
    right: tuple = (0.0, 0.0)
    supports: tuple = ()
    interfaces: tuple = ()
    geometry: str = "line"

    def places(self):
        """Places that must be nodes."""
        pieces = [c for c in (self.p, self.q) if isinstance(c, (list, tuple))]
        edges = [e for c in pieces for a, b, _ in c for e in (a, b)]
        return [*edges, *(s[0] for s in self.supports), *(i[0] for i in self.interfaces)]


@dataclass(frozen=True)
class Solved:
    """The solved member."""

    line: Line
    nodes: np.ndarray
    numbers: np.ndarray
    amounts: np.ndarray
    degree: int
    reactions: dict

    def derivative(self, x, order):
        """A derivative of u at x: right limit, at the right end the left."""
        x = np.atleast_1d(np.asarray(x, dtype=float))
        element = np.clip(np.searchsorted(self.nodes, x, side="right") - 1, 0, len(self.nodes) - 2)
        a, b = self.nodes[element], self.nodes[element + 1]
        half = (b - a) / 2
        values = lagrange(self.degree, (x - (a + b) / 2) / half, order, half[:, None])
        return np.einsum("ij,ij->i", values, self.amounts[self.numbers[element]])

    def at(self, name, x):
        """response, slope or force (= p u', not times the area) at x."""
        x = np.atleast_1d(np.asarray(x, dtype=float))
        if name == "response":
            return self.derivative(x, 0)
        if name == "slope":
            return self.derivative(x, 1)
        span = self.line.end - self.line.start
        side = np.minimum(x + 1e-9 * span, self.line.end - 1e-9 * span)
        return coefficient(self.line.p, side) * self.derivative(x, 1)


def coefficient(given, x):
    """Values of a coefficient at the places x."""
    if callable(given):
        return given(x)
    return np.array([lookup(given, v) for v in x])


def settle(line, density=(), lumped=(), degree=10, size=None, places=()):
    """Solve the member.

    Parameters
    ----------
    density : (from, to, number or function of x) pieces of the source
    lumped : (at, amount), amounts in the unit of the total
    degree, size : degree and longest length of the elements
    places : further places that must be nodes
    """
    area = AREAS[line.geometry]
    loads = [*(e for a, b, _ in density for e in (a, b)), *(p for p, _ in lumped)]
    size = size or (line.end - line.start) / 8
    nodes = mesh(line.start, line.end, [*line.places(), *loads, *places], size)
    count, inner = len(nodes), degree - 1
    doubled = {int(np.argmin(abs(nodes - at))): res for at, res in line.interfaces}
    before = np.arange(count)
    after = before.copy()
    for number, node in enumerate(doubled, start=count):
        after[node] = number
    first = count + len(doubled)
    numbers = np.array([
        [after[e], before[e + 1], *(first + e * inner + np.arange(inner))]
        for e in range(count - 1)
    ])  # fmt: skip
    probe = np.array([coefficient(c, nodes[:1] + 1e-9 * size)[0] for c in (line.p, line.q)])
    kind = complex if np.iscomplexobj(probe) else float
    total = first + (count - 1) * inner
    parts, F = [], np.zeros(total, dtype=kind)  # parts of K: (block of numbers, values)
    for e, (a, b) in enumerate(itertools.pairwise(nodes)):
        here, middle, half = numbers[e], (a + b) / 2, (b - a) / 2
        x, w = gauss(a, b, degree + 4)
        N0, N1 = (lagrange(degree, (x - middle) / half, d, half) for d in (0, 1))
        wa = w * area(x)
        stiff = (N1.T * (wa * coefficient(line.p, x))) @ N1
        parts.append((here, stiff + (N0.T * (wa * coefficient(line.q, x))) @ N0))
        for lo, hi, value in load_pieces(density, a, b):
            x, w = gauss(lo, hi, degree + 12)
            F[here] += lagrange(degree, (x - middle) / half, 0, half).T @ (w * area(x) * value(x))

    def node_of(at):
        return int(np.argmin(abs(nodes - at)))

    for at, P in lumped:
        F[before[node_of(at)]] += P
    for node, resistance in doubled.items():
        conductance = area(nodes[node]) / resistance
        parts.append(([before[node], after[node]], conductance * np.array([[1, -1], [-1, 1]])))
    springs = [(0, *line.left), (count - 1, *line.right)]
    springs += [(before[node_of(at)], spring, value) for at, spring, value in line.supports]
    springs = [
        (n, s if np.isinf(abs(s)) or n not in (0, count - 1) else s * area(nodes[n]), v)
        for n, s, v in springs
    ]
    return _finish(line, nodes, numbers, degree, _assembled(parts, total), F, springs)


def _assembled(parts, total):
    rows = np.concatenate([np.repeat(block, len(block)) for block, _ in parts])
    columns = np.concatenate([np.tile(block, len(block)) for block, _ in parts])
    values = np.concatenate([value.ravel() for _, value in parts])
    return sparse.csc_array((values, (rows, columns)), shape=(total, total))


def _finish(line, nodes, numbers, degree, K, F, springs):
    held = {n: v for n, spring, v in springs if np.isinf(abs(spring))}
    elastic = np.zeros(len(F), dtype=np.result_type(K.dtype, *(type(s) for _, s, _ in springs)))
    pull = F.astype(elastic.dtype)
    for n, spring, value in springs:
        if not np.isinf(abs(spring)):
            elastic[n] += spring
            pull[n] += spring * value
    stiff = (K + sparse.diags_array(elastic)).tocsc()
    free = np.setdiff1d(np.arange(len(F)), list(held))
    amounts = np.zeros(len(F), dtype=elastic.dtype)
    amounts[list(held)] = list(held.values())
    scale = sparse.diags_array(1 / np.sqrt(np.abs(stiff.diagonal()[free])))
    A = (scale @ stiff[free][:, free] @ scale).tocsc()
    right = scale @ (pull - stiff @ amounts)[free]
    factor = splu(A)
    solved = factor.solve(right)
    solved += factor.solve(right - A @ solved)  # one step of refinement
    amounts[free] = scale @ solved
    residual = F - K @ amounts
    reactions = {
        float(nodes[n]): residual[n] if np.isinf(abs(spring)) else spring * (amounts[n] - value)
        for n, spring, value in springs
    }
    return Solved(line, nodes, numbers, amounts, degree, reactions)
