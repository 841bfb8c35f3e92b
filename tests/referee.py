"""Independent forward matrices for tests: Hermite finite elements and closed-form kernels.

Nothing here is shared with the package: beams are assembled from cubic Hermite elements with the
consistent load of a uniform line load per cell, conductors and cables come from the textbook
kernel of -(k u')' + p u = f between held ends, integrated over each cell in closed form.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_banded

Array = NDArray[np.float64]

HELD = {"pinned": (0,), "clamped": (0, 1), "free": (), "guided": (1,)}


def _element(h: float, EI: float, k: float) -> tuple[Array, Array]:
    """Stiffness (4, 4) and consistent unit line load (4,) of a cubic Hermite beam element."""
    bend = np.array(
        [
            [12, 6 * h, -12, 6 * h],
            [6 * h, 4 * h**2, -6 * h, 2 * h**2],
            [-12, -6 * h, 12, -6 * h],
            [6 * h, 2 * h**2, -6 * h, 4 * h**2],
        ]
    )
    mass = np.array(
        [
            [156, 22 * h, 54, -13 * h],
            [22 * h, 4 * h**2, 13 * h, -3 * h**2],
            [54, 13 * h, 156, -22 * h],
            [-13 * h, -3 * h**2, -22 * h, 4 * h**2],
        ]
    )
    load = np.array([h / 2, h**2 / 12, h / 2, -(h**2) / 12])
    return EI / h**3 * bend + k * h / 420 * mass, load


def beam(
    edges: Array,
    readings: Array,
    EI: float,
    *,
    foundation: float = 0.0,
    left: str = "pinned",
    right: str = "pinned",
    lumped: Sequence[float] = (),
    longest: float | None = None,
) -> tuple[Array, Array]:
    """Deflections at `readings` per unit line load on each cell, and per unit force at `lumped`.

    Returns (n, m) and (n, len(lumped)).
    """
    length = edges[-1] - edges[0]
    pieces = [
        np.linspace(a, b, int(np.ceil((b - a) / (longest or length / 240) - 1e-9)) + 1)[:-1]
        for a, b in pairwise(edges)
    ]
    nodes = np.append(np.concatenate(pieces), edges[-1])
    size = 2 * len(nodes)
    ab = np.zeros((7, size))
    loads = np.zeros((size, len(edges) - 1))
    cell = np.searchsorted(edges, (nodes[1:] + nodes[:-1]) / 2) - 1
    for e, h in enumerate(np.diff(nodes)):
        K, q = _element(float(h), EI, foundation)
        i = 2 * e
        for a in range(4):
            for b in range(4):
                ab[3 + a - b, i + b] += K[a, b]
        loads[i : i + 4, cell[e]] += q
    forces = _shapes(nodes, np.asarray(lumped, dtype=float)).T
    rhs = np.hstack([loads, forces])
    big = abs(ab).max()
    held = list(HELD[left]) + [size - 2 + dof for dof in HELD[right]]
    for dof in held:
        for offset in range(-3, 4):
            if 0 <= dof + offset < size:
                ab[3 - offset, dof + offset] = 0.0
                ab[3 + offset, dof] = 0.0
        ab[3, dof] = big
        rhs[dof] = 0.0
    u = _shapes(nodes, np.asarray(readings)) @ solve_banded((3, 3), ab, rhs)
    return u[:, : len(edges) - 1], u[:, len(edges) - 1 :]


def _shapes(nodes: Array, places: Array) -> Array:
    """Hermite interpolation (len(places), 2 * len(nodes)) of the deflection."""
    out = np.zeros((len(places), 2 * len(nodes)))
    element = np.clip(np.searchsorted(nodes, places, side="right") - 1, 0, len(nodes) - 2)
    h = nodes[element + 1] - nodes[element]
    t = (places - nodes[element]) / h
    row = np.arange(len(places))
    out[row, 2 * element] = 1 - 3 * t**2 + 2 * t**3
    out[row, 2 * element + 1] = h * (t - 2 * t**2 + t**3)
    out[row, 2 * element + 2] = 3 * t**2 - 2 * t**3
    out[row, 2 * element + 3] = h * (t**3 - t**2)
    return out


def edges_of(length: float, cells: int, extra: Sequence[float] = ()) -> Array:
    """About `cells` equal cells cut at the `extra` places."""
    grid = np.linspace(0.0, length, cells + 1)
    places = np.sort(np.concatenate([grid, np.asarray(extra, dtype=float)]))
    return places[np.concatenate([[True], np.diff(places) > 1e-9 * length])]


def fin(edges: Array, readings: Array, k: float, loss: float) -> Array:
    """Response (n, m) of -(k u')' + loss u = f between ends held at 0, unit f on each cell."""
    x0, length = edges[0], edges[-1] - edges[0]
    x = np.asarray(readings)[:, None] - x0
    a, b = edges[None, :-1] - x0, edges[None, 1:] - x0
    if loss == 0:
        # G = s (L - x) / (k L) for s < x, x (L - s) / (k L) beyond
        low, high = np.minimum(b, x), np.maximum(a, x)
        left = np.where(low > a, (low**2 - a**2) / 2, 0.0) * (length - x)
        right = np.where(b > high, ((length - high) ** 2 - (length - b) ** 2) / 2, 0.0) * x
        return np.asarray((left + right) / (k * length))
    m = np.sqrt(loss / k)
    low, high = np.clip(x, a, b), np.clip(x, a, b)
    left = (np.cosh(m * low) - np.cosh(m * a)) / m * np.sinh(m * (length - x))
    right = (np.cosh(m * (length - high)) - np.cosh(m * (length - b))) / m * np.sinh(m * x)
    return np.asarray((left + right) / (k * m * np.sinh(m * length)))


def held_ends(readings: Array, length: float, k: float, loss: float) -> Array:
    """Response (n, 2) to a unit value held at the left and at the right end."""
    m = np.sqrt(loss / k)
    x = np.asarray(readings)
    return np.stack([np.sinh(m * (length - x)), np.sinh(m * x)], axis=1) / np.sinh(m * length)
