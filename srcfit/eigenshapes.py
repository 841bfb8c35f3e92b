"""Shapes of an element of high degree, and a member's coefficients on it.

Inside an element u is a sum of nodal polynomials and of integrated Legendre polynomials (twice
integrated for order 4); where the section shears, gamma = u' - psi is a sum of Legendre
polynomials of its own, so that a large shear stiffness does no harm.

Source: Szabo & Babuska, Introduction to Finite Element Analysis (2011), ch. 2 and 3.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import NDArray

from srcfit.errors import MemberError
from srcfit.member import Array, Member
from srcfit.state import inner_edges, operator, profile, special_places

Index = NDArray[np.int64]
Tables = dict[str, Array]  # field (u, slope, bend, shear) -> its values per unknown
Fields = dict[str, Array]
Coefficients = Callable[[Member, Array], tuple[Fields, Fields]]  # of the energy and of the weight

SPARE = 12  # Gauss places beyond the degree: coefficients up to degree 2 * SPARE are exact
ROUGH = 1e-10  # what may be left of a coefficient beyond the degree that is exact
CUTS = 14  # how often a piece is halved for the sake of its coefficients


def reference(order: int, degree: int, t: Array) -> tuple[Array, ...]:
    """Values and derivatives (order // 2 of them) of the shapes of u on [-1, 1].

    Columns: u, psi at the left, u, psi at the right (psi per unit of the half length), bubbles.
    """
    P = legendre.legvander(t, degree)
    if order == 2:
        n = np.arange(2, degree + 1)
        size = np.sqrt((2 * n - 1) / 2)
        bubble = (P[:, n] - P[:, n - 2]) / (2 * size)
        ends = np.stack([(1 - t) / 2, (1 + t) / 2], axis=1)
        slope = np.tile([-0.5, 0.5], (len(t), 1))
        return np.hstack([ends, bubble]), np.hstack([slope, size * P[:, n - 1]])
    n = np.arange(2, degree - 1)
    size = np.sqrt((2 * n + 1) / 2)
    up, down = (P[:, n + 2] - P[:, n]) / (2 * n + 3), (P[:, n] - P[:, n - 2]) / (2 * n - 1)
    bubble = size / (2 * n + 1) * (up - down)
    tilt = size / (2 * n + 1) * (P[:, n + 1] - P[:, n - 1])
    a, b = (1 - t) / 2, (1 + t) / 2
    ends = np.stack([a**2 * (2 + t), 2 * a**2 * b, b**2 * (2 - t), -2 * b**2 * a], axis=1)
    slope = np.stack(
        [-3 * a * b, (1 - t) * (-1 - 3 * t) / 4, 3 * a * b, (1 + t) * (3 * t - 1) / 4], axis=1
    )
    curve = np.stack([1.5 * t, (3 * t - 1) / 2, -1.5 * t, (3 * t + 1) / 2], axis=1)
    return (
        np.hstack([ends, bubble]),
        np.hstack([slope, tilt]),
        np.hstack([curve, size * P[:, n]]),
    )


def _legendre(degree: int, t: Array) -> tuple[Array, Array]:
    """Orthonormal Legendre polynomials of degree 0 .. degree - 1 and their derivatives."""
    size = np.sqrt(np.arange(degree) + 0.5)
    slopes = legendre.legder(np.eye(degree), axis=0) if degree > 1 else np.zeros((1, 1))
    P = legendre.legvander(t, degree - 1)
    turns: Array = P[:, : len(slopes)] @ slopes * size
    return P * size, turns


def tables(order: int, shears: bool, degree: int, t: Array, half: Array) -> Tables:
    """Fields per unknown at the places t of [-1, 1], for elements of half length `half` (E,).

    Each table is (E, len(t), d). Unknowns of an element: those of its left and right node,
    bubbles, and for members that shear the coefficients of gamma.
    """
    by = half[:, None, None]
    if order == 2:
        value, slope = (a[None] for a in reference(2, degree, t))
        return {"u": np.broadcast_to(value, (len(half), *value.shape[1:])), "slope": slope / by}
    value, slope, curve = (np.repeat(a[None], len(half), 0) for a in reference(4, degree, t))
    for table in (value, slope, curve):
        table[:, :, [1, 3]] *= by
    if not shears:
        return {"u": value, "slope": slope / by, "bend": curve / by**2}
    gamma, turn = _legendre(degree, t)
    left, right = _legendre(degree, np.array([-1.0, 1.0]))[0]
    found = []
    for table in (value, slope, curve):  # u' = psi + gamma at the nodes
        more = table[:, :, 1:2] * left + table[:, :, 3:4] * right
        found.append(np.concatenate([table, more], axis=2))
    value, slope, curve = found
    own = np.zeros_like(slope)
    own[:, :, -degree:] = gamma
    bend = curve / by**2
    bend[:, :, -degree:] -= turn / by
    return {"u": value, "slope": slope / by, "bend": bend, "shear": own}


def carried(shapes: Tables, x: Array, edges: Array, elements: Index, master: Index) -> Tables:
    """Tables with four nodal blocks: the nodes that carry left and right, then left and right.

    The first two are rigid continuations to the element's own nodes, the last two motions of
    those nodes against them. One carrier for both is a rigid motion of the element, exactly.
    """
    half = 2 if "bend" in shapes else 1
    carrier = master[elements], master[elements + 1]
    reach = [edges[elements + side] - edges[carrier[side]] for side in (0, 1)]
    same = (carrier[0] == carrier[1])[:, None, None]
    found: Tables = {}
    for name, table in shapes.items():
        own = [table[:, :, half * side : half * (side + 1)] for side in (0, 1)]
        moved = [block.copy() for block in own]
        whole = np.zeros_like(moved[0])
        if half == 2:
            for block, offset in zip(moved, reach, strict=True):
                block[:, :, 1] += offset[:, None] * block[:, :, 0]
            if name == "slope":
                whole[:, :, 1] = 1.0
        if name == "u":
            whole[:, :, 0] = 1.0
            whole[:, :, 1:] = (x - edges[carrier[0]][:, None])[:, :, None]
        first, second = np.where(same, whole, moved[0]), np.where(same, 0.0, moved[1])
        found[name] = np.concatenate([first, second, *own, table[:, :, 2 * half :]], axis=2)
    return found


def coefficients(member: Member, x: Array) -> tuple[Fields, Fields]:
    """Coefficients of the energy and of the weight r, per field, area weight included.

    Raises
    ------
    MemberError
        Where p, p2, shear or r is not positive, or compression exceeds the shear stiffness.
    """
    energy, weight = _plain(member, x)
    if "shear" in energy:
        excess = -energy["slope"] >= energy["shear"]
        if excess.any():
            raise MemberError(
                f"compression exceeds the shear stiffness at {float(x[excess].ravel()[0]):.6g} m, "
                "so the member buckles in ever shorter waves and has no lowest mode",
                "member",
                "check tension and shear_stiffness",
            )
    return energy, weight


def compression(member: Member, x: Array) -> tuple[Fields, Fields]:
    """Coefficients of the energy without compression, and of the compression, per field."""
    energy, _ = _plain(member, x)
    push = np.maximum(-energy["slope"], 0.0)
    # a trace of foundation keeps movements apart that nothing resists and compression ignores
    trace = 1e-12 * float(energy["bend"].mean()) / member.length**4
    kept = {**energy, "slope": np.maximum(energy["slope"], 0.0), "u": energy["u"] + trace}
    return kept, {"slope": push}


def _plain(member: Member, x: Array) -> tuple[Fields, Fields]:
    k = operator(member, x)
    r = profile(member, "r", x, 1.0) * member.area(x)
    if member.kind.order == 2:
        energy = {"slope": k["p"], "u": k["q"]}
    else:
        energy = {"bend": k["p2"], "slope": k["p1"], "u": k["p0"]}
        if "shear" in k:
            energy["shear"] = k["shear"]
    first = "p" if member.kind.order == 2 else "p2"
    for symbol, value in ((first, k[first]), ("shear", k.get("shear")), ("r", r)):
        if value is not None and not (value > 0).all():
            where = float(x[~(value > 0)].ravel()[0])
            raise MemberError(
                f"the coefficient {symbol} is not positive at {where:.6g} m",
                "member",
                "give a positive one",
            )
    return energy, {"u": r}


def smooth_edges(member: Member) -> Array:
    """Edges of stretches without special places on which all coefficients are smooth."""
    stops = [place for place, _, _ in special_places(member)]
    edges: Array = np.unique([member.start, *inner_edges(member), *stops, member.end])
    gap = np.diff(edges) > 4e-15 * np.abs(edges).max()
    edges = edges[np.concatenate([[True], gap])]
    edges[-1] = member.end
    if all(p.stepped for p in member.profiles.values()):
        return edges
    c, _ = legendre.leggauss(2 * SPARE + 2)
    lower = np.linalg.inv(legendre.legvander(c, len(c) - 1))
    done, a, b = [edges], edges[:-1], edges[1:]
    for _ in range(CUTS):
        x = (a + b)[:, None] / 2 + (b - a)[:, None] / 2 * c
        rough = np.zeros(len(a), dtype=bool)
        energy, weight = coefficients(member, x)
        for value in (*energy.values(), *weight.values()):
            tail = np.abs(value @ lower.T[:, -2:]).max(axis=1)
            noise = 1e-14 * np.abs(x).max(axis=1) / (b - a)  # of a function of a rounded place
            rough |= tail > (ROUGH + noise) * np.abs(value).max(axis=1)
        if not rough.any():
            break
        middle = (a[rough] + b[rough]) / 2
        done.append(middle)
        a, b = np.concatenate([a[rough], middle]), np.concatenate([middle, b[rough]])
    return np.unique(np.concatenate(done))
