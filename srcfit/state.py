"""State form z' = A(x) z + b f of every member, and its exact propagation from node to node.

Order 2: z = (u, F), F = p u'. Order 4: z = (u, psi, M, V), psi = u' unless the section shears.
The member is cut into short intervals; over each the transfer matrix is exact to rounding. No
product of transfer matrices over long stretches is ever formed: `kernel`
carries orthonormal bases instead.

What happens over one interval: see `intervals`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.errors import MemberError
from srcfit.intervals import LARGEST, STAGES, collocated, exponential, gauss
from srcfit.member import Array, Member

Matrix = NDArray[Any]
LONGEST = 1.0  # longest interval in units of the local decay length: error under 1e-18
NEAR_AXIS = 1e-9  # start of the chain beside a singular end, in units of the length
GROWTH = 1.6  # largest ratio of distances to a singular end over one interval
MOST_NODES = 200_000


@dataclass(frozen=True)
class Pin:
    """A condition at a point: `row` @ z = 0 on both sides, z jumps along `column`."""

    row: Array
    column: Array


@dataclass(frozen=True)
class Chain:
    """Nodes along the member and what carries the state from each to the next.

    A place with a point condition (support, hinge, interface) has two nodes, with an interval of
    no length between them. States are scaled: z = scale * (what `phi` acts on).

    Attributes
    ----------
    x : (N,) node places [m], ascending
    phi : (N - 1, n, n) transfer matrices of the scaled state
    pins : mapping interval -> Pin (rows and columns for the scaled state)
    places, weights : (N - 1, s) Gauss places and weights (area weight included) of each interval
    stages : (N - 1, s, n) response at the Gauss places as a row on the state at the left node
    load : (N - 1, n, s) state at the right node per source density at the Gauss places
    inner : (N - 1, s, s) response at the Gauss places per source density there, from rest
    scale : (n,) natural size of each state component
    tips : area weight between a singular end and the first or last node
    """

    member: Member
    x: Array
    phi: Matrix
    pins: dict[int, Pin]
    places: Array
    weights: Array
    stages: Matrix
    load: Matrix
    inner: Matrix
    scale: Array
    tips: tuple[float, float] = (0.0, 0.0)

    @property
    def order(self) -> int:
        """Number of state components."""
        return len(self.scale)

    def node(self, x: Array) -> NDArray[np.int64]:
        """Nodes at the places `x`: at a double node the right one."""
        first = self.x[0]
        found = np.searchsorted(self.x, np.maximum(x, first), side="right") - 1
        near = np.minimum(found + 1, len(self.x) - 1)
        off = np.abs(self.x[found] - x) > np.abs(self.x[near] - x)
        node: NDArray[np.int64] = np.where(off, near, found)
        return node


def profile(member: Member, symbol: str, x: Array, default: float = 0.0) -> Array:
    """The coefficient `symbol` at places inside the pieces (`default` where not given)."""
    given = member.profiles.get(symbol)
    return np.full(np.shape(x), default) if given is None else given(x)


def operator(member: Member, x: Array, mu: float = 0.0) -> dict[str, Matrix]:
    """Coefficients of L - mu r at `x`, area weight, damping and drive included."""
    w = member.area(x)
    loss = 1 + 1j * member.damping if member.driven and member.damping else 1.0
    r = profile(member, "r", x, 1.0)
    inertia = mu * r
    if member.driven and member.kind.drive == "inertia":
        inertia = inertia + member.omega**2 * profile(member, "r", x)
    elif member.driven:
        inertia = inertia - 1j * member.omega * profile(member, "r", x)
    inertia = inertia + member.lam * r
    if member.kind.order == 2:
        stiff = 1.0 if member.kind.name == "cable" else loss
        p = profile(member, "p", x) * w * stiff
        return {"p": p, "q": (loss * profile(member, "q", x) - inertia) * w}
    found = {
        "p2": loss * profile(member, "p2", x),
        "p1": profile(member, "p1", x),
        "p0": loss * profile(member, "p0", x) - inertia,
    }
    if "shear" in member.profiles:
        found["shear"] = loss * profile(member, "shear", x)
    return found


def state_matrix(member: Member, x: Array, mu: float = 0.0) -> Matrix:
    """A(x) of z' = A z, shape x.shape + (n, n)."""
    k = operator(member, x, mu)
    n = member.kind.order
    kind = complex if any(np.iscomplexobj(v) for v in k.values()) else float
    A = np.zeros((*np.shape(x), n, n), dtype=kind)
    if n == 2:
        A[..., 0, 1] = 1 / k["p"]
        A[..., 1, 0] = k["q"]
        return A
    shear = k.get("shear")
    slope_psi = 1.0 if shear is None else 1 / (1 + k["p1"] / shear)
    A[..., 0, 1] = slope_psi
    if shear is not None:
        A[..., 0, 3] = slope_psi / shear
    A[..., 1, 2] = -1 / k["p2"]
    A[..., 2, 1] = -k["p1"] * slope_psi
    A[..., 2, 3] = 1.0 if shear is None else 1 - k["p1"] * slope_psi / shear
    A[..., 3, 0] = k["p0"]
    return A


def decay_rate(member: Member, x: Array, mu: float = 0.0) -> Array:
    """Largest rate [1/m] at which solutions grow, decay or oscillate near `x`."""
    k = operator(member, x, mu)
    if member.kind.order == 2:
        return np.sqrt(np.abs(k["q"] / k["p"]))
    p2 = np.abs(k["p2"])
    rate = np.maximum((np.abs(k["p0"]) / p2) ** 0.25, np.sqrt(np.abs(k["p1"]) / p2))
    if "shear" in k:
        rate = np.maximum(rate, np.sqrt(np.abs(k["p0"] / k["shear"])))
    return rate


def scales(member: Member, x: Array, h: Array | float, mu: float = 0.0) -> Array:
    """Natural size of each state component over a length h, shape x.shape + (n,)."""
    k = operator(member, x, mu)
    if member.kind.order == 2:
        p = np.abs(k["p"])
        return np.stack([np.ones_like(p), p / h], axis=-1)
    p2 = np.abs(k["p2"])
    slack = h**3 / p2 + (h / np.abs(k["shear"]) if "shear" in k else 0.0)
    return np.stack([np.ones_like(p2), p2 * 0 + 1 / h, p2 / h**2, 1 / slack], axis=-1)


def special_places(member: Member) -> list[tuple[float, str, Any]]:
    """Places with a point condition, ascending."""
    found: list[tuple[float, str, Any]] = [(s.at, "support", s) for s in member.supports]
    found += [(h.at, "hinge", h) for h in member.hinges]
    found += [(i.at, "interface", i) for i in member.interfaces]
    return sorted(found, key=lambda item: item[0])


def inner_edges(member: Member) -> Array:
    """Edges of all coefficient pieces inside the member."""
    edges = {e for p in member.profiles.values() for e in p.edges}
    return np.array(sorted(e for e in edges if member.start < e < member.end))


def _toward_axis(near: float, far: float, end: float) -> Array:
    """Places between `near` and `far` whose distances to `end` grow by at most GROWTH."""
    a, b = abs(near - end), abs(far - end)
    count = int(np.ceil(np.log(b / a) / np.log(GROWTH)))
    places: Array = end + np.sign(far - end) * np.geomspace(a, b, count + 1)[1:-1]
    return places


def _resolved(member: Member, a: Array, b: Array, mu: float) -> NDArray[np.bool_]:
    """Whether smooth coefficients are polynomials of low degree, to rounding, over [a, b]."""
    if all(p.stepped for p in member.profiles.values()) and member.kind.geometry == "line":
        return np.ones(len(a), dtype=bool)
    c, _, _ = gauss()
    k = operator(member, a[:, None] + (b - a)[:, None] * c, mu)
    good = np.ones(len(a), dtype=bool)
    lower = np.polynomial.legendre.legvander(2 * c - 1, STAGES - 1)
    for name, value in k.items():
        curve = 1 / value if name in ("p", "p2", "shear") else value
        size = np.linalg.solve(lower, curve.T)
        largest = np.abs(curve).max(axis=1)
        good &= (np.abs(size[-2:]).max(axis=0) <= 1e-9 * largest) | (largest == 0)
    # beside a singular end the last digits of x are all that is left: cutting finer gains nothing
    return good | (b - a < 1e-6 * member.length)


def _cut(member: Member, nodes: Array, mu: float) -> Array:
    """Insert nodes until every interval is short against the decay length and smooth."""
    for _ in range(40):
        a, b = nodes[:-1], nodes[1:]
        inside = a[:, None] + (b - a)[:, None] * np.array([0.02, 0.5, 0.98])
        rate = decay_rate(member, inside, mu).max(axis=1)
        parts = np.maximum(np.ceil((b - a) * rate / LONGEST), 1)
        if parts.sum() > MOST_NODES:
            raise MemberError(
                f"the member is about {parts.sum():.3g} decay lengths long, more than "
                f"{MOST_NODES} intervals can follow",
                "member",
                "model a shorter stretch of it",
            )
        parts = np.where((parts == 1) & ~_resolved(member, a, b, mu), 2, parts).astype(int)
        if (parts == 1).all():
            return nodes
        step = np.arange(parts.sum()) - np.repeat(np.cumsum(parts) - parts, parts)
        share = step / np.repeat(parts, parts)
        nodes = np.append(np.repeat(a, parts) + share * np.repeat(b - a, parts), b[-1])
    raise MemberError(
        "a coefficient is not smooth enough to follow", "member", "give its jumps as steps"
    )


def _nodes(member: Member, points: Array, mu: float) -> Array:
    first, last = member.start, member.end
    reach = NEAR_AXIS * member.length
    lo = first + reach if member.left.axis else first
    hi = last - reach if member.right.axis else last
    special = [place for place, _, _ in special_places(member)]
    nodes = np.unique(np.concatenate([[lo, hi], inner_edges(member), special, points]))
    nodes = nodes[(nodes >= lo) & (nodes <= hi)]
    extra = []
    if member.left.axis:
        extra.append(_toward_axis(lo, hi if hi < last else last, first))
    if member.right.axis:
        extra.append(_toward_axis(hi, lo, last))
    if extra:
        nodes = np.unique(np.concatenate([nodes, *extra]))
        nodes = nodes[(nodes >= lo) & (nodes <= hi)]
    # places that differ by rounding only are one node
    gap = np.diff(nodes) > 4e-15 * max(abs(first), abs(last))
    nodes = nodes[np.concatenate([[True], gap])]
    nodes[-1] = hi
    return _cut(member, nodes, mu)


def _point(member: Member, what: str, item: Any) -> tuple[Matrix | None, Pin | None]:
    """Transfer matrix (None: a pin) of a point condition, in physical units."""
    n = member.kind.order
    loss = 1 + 1j * member.damping if member.driven and member.damping else 1.0
    unit = np.eye(n)
    if what == "support":
        if np.isinf(item.restraint.stiffness):
            return None, Pin(unit[0], unit[-1])
        k = item.restraint.stiffness * loss * float(member.area(np.array(item.at)))
        return unit + k * np.outer(unit[-1], unit[0]), None
    if what == "hinge":
        if item.spring == 0:
            return None, Pin(unit[2], unit[1])
        return unit - np.outer(unit[1], unit[2]) / (item.spring * loss), None
    area = float(member.area(np.array(item.at)))
    return unit + item.resistance / area * np.outer(unit[0], unit[1]), None


def transfer(member: Member, a: Array, b: Array, mu: float = 0.0) -> tuple[Matrix, ...]:
    """Propagation over the intervals [a, b] by collocation.

    Returns
    -------
    phi : (N, n, n) transfer matrices (physical units)
    places : (N, s) Gauss places; weights : (N, s) their weights times the area weight
    stages : (N, s, n) response at the Gauss places as rows on the state at `a`
    load : (N, n, s) state at `b` per source density at the Gauss places, from rest at `a`
    inner : (N, s, s) response at the Gauss places per source density there, from rest at `a`
    """
    c, weight, _ = gauss()
    h = b - a
    places = a[:, None] + h[:, None] * c
    n = member.kind.order
    d = scales(member, (a + b) / 2, h, mu)
    ratio = h[:, None, None] * (d[:, None, :] / d[:, :, None])
    constant = all(p.stepped for p in member.profiles.values()) and member.kind.geometry == "line"
    step, rows = None, None
    if constant:
        B = state_matrix(member, (a + b) / 2, mu) * ratio
        if np.abs(B).sum(axis=2).max(initial=0.0) <= LARGEST:
            step, rows = exponential(B)
    if step is None or rows is None:
        step, rows = collocated(state_matrix(member, places, mu) * ratio[:, None])
    area = member.area(places)
    phi = step[:, :, :n] * (d[:, :, None] / d[:, None, :])
    force = (-h[:, None] * area / d[:, -1:])[:, None, :]
    load = step[:, :, n:] * d[:, :, None] * force
    inner = rows[:, :, n:] * d[:, None, :1] * force
    stages = rows[:, :, :n] / d[:, None, :]
    return phi, places, weight * h[:, None] * area, stages, load, inner


def chain(member: Member, points: Any = (), mu: float = 0.0) -> Chain:
    """Cut the member into nodes (all `points` among them) and propagate between them.

    Parameters
    ----------
    member : Member
    points : array of float
        Places [m] that must be nodes; those outside the member are left out.
    mu : float
        Shift: the operator is L - mu r.

    Returns
    -------
    Chain

    Raises
    ------
    MemberError
        When the member is too long or a coefficient too rough to follow.
    """
    plain = _nodes(member, np.asarray(points, dtype=float).ravel(), mu)
    phi, places, weights, stages, load, inner = transfer(member, plain[:-1], plain[1:], mu)
    n = member.kind.order
    parts = [phi, places, weights, stages, load, inner]
    middle = np.linspace(member.start, member.end, 41)[1:-1]
    rate = float(decay_rate(member, middle, mu).max())
    reach = min(member.length, 1 / rate) if rate > 0 else member.length
    scale = np.exp(np.log(scales(member, middle, reach, mu)).mean(axis=0))
    special = special_places(member)
    # an interval of no length goes in before the one that begins at the place
    at = [int(np.argmin(np.abs(plain - place))) for place, _, _ in special]
    points = [_point(member, what, item) for _, what, item in special]
    pins = {k + i: pin for i, (k, (_, pin)) in enumerate(zip(at, points, strict=True)) if pin}
    if special:
        unit = [np.eye(n) if matrix is None else matrix for matrix, _ in points]
        parts[0] = np.insert(_as(phi, np.array(unit)), at, np.array(unit), axis=0)
        parts[1:] = [np.insert(part, at, 0.0, axis=0) for part in parts[1:]]
        parts[1][[k + i for i, k in enumerate(at)]] = plain[at][:, None]
    x = np.insert(plain, at, plain[at])
    phi, places, weights, stages, load, inner = parts
    return Chain(
        member, x, phi * (scale / scale[:, None]), pins, places, weights,
        stages * scale, load / scale[:, None], inner, scale, _tips(member, plain[0], plain[-1]),
    )  # fmt: skip


def _tips(member: Member, first: float, last: float) -> tuple[float, float]:
    """Area weight between the ends and the chain (nothing unless an end is singular)."""
    c, b, _ = gauss()
    gaps = ((member.start, first - member.start), (last, member.end - last))
    left, right = (float(gap * (b * member.area(at + gap * c)).sum()) for at, gap in gaps)
    return left, right


def _as(old: Matrix, new: Matrix) -> Matrix:
    """`old` in a type that holds `new` too."""
    return old.astype(np.result_type(old, new), copy=False)
