"""Green's kernel, its derived quantities, and the whole response to a given source.

u(x) = integral of G(x, s) f(s) w(s) ds. On a singular member (null modes) the generalised kernel
is given, on the complement of the null modes with weight r. How the numbers come about: see
`influence`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from srcfit.eigen import refuse_buckled
from srcfit.errors import MemberError
from srcfit.holds import restrained, restraint_forces
from srcfit.influence import at_nodes, influence, interval_integrals
from srcfit.intervals import gauss
from srcfit.member import Array, Member, Unknown
from srcfit.nulls import Nulls
from srcfit.quantities import functionals
from srcfit.state import Chain, Matrix, chain, inner_edges, profile, special_places

Source = Callable[[Array], Any]
PANELS = 100  # a source given as a function is first looked at on so many stretches


def prescribed(member: Member) -> list[tuple[str, float | Unknown]]:
    """Prescribed amounts in the order of `influence.restraint_forces`, less the ambient."""
    found: list[tuple[str, float | Unknown]] = []
    base = member.ambient if member.kind.relative and not member.driven else 0.0

    def less(value: float | Unknown) -> float | Unknown:
        if isinstance(value, Unknown):
            return Unknown(value.guess - base, value.sd)
        return value - base

    for word, end in (("left", member.left), ("right", member.right)):
        if end.response.stiffness != 0 and not end.axis:
            found.append((f"{word}.value", less(end.response.value)))
        if end.rotation.stiffness != 0:
            found.append((f"{word}.rotation", end.rotation.value))
    for number, support in enumerate(member.supports, start=1):
        found.append((f"support.{number}", less(support.restraint.value)))
    return found


def _known(value: float | Unknown) -> float:
    return value.guess if isinstance(value, Unknown) else value


def _checked(member: Member, x: Any, name: str) -> Array:
    places = np.atleast_1d(np.asarray(x, dtype=float))
    slack = 1e-9 * member.length
    wrong = ~((places >= member.start - slack) & (places <= member.end + slack))
    if wrong.any():
        raise MemberError(
            f"{name} = {places[wrong][0]:g} m is not on the member",
            name,
            f"keep it between {member.start:g} and {member.end:g} m",
        )
    inside: Array = np.clip(places, member.start, member.end)
    return inside


def kernel(member: Member, x: Any, s: Any, quantity: str = "response") -> Matrix:
    """Homogeneous Green's kernel, or its derived quantity.

    Parameters
    ----------
    member : Member
    x : (n,) places of the reading [m]
    s : (k,) places of the unit source [m]
    quantity : str
        response, slope, rotation, curvature, moment, shear, flux (radial kinds: per area;
        radial_aquifer: total), force, torque or reaction: those the member has.

    Returns
    -------
    (n, k) array
        Quantity at x per unit lumped source at s (SI); the generalised kernel on a singular
        member. At a jump the right limit in x, at the right end the left one.

    Raises
    ------
    MemberError
        For places off the member, quantities it does not have, and a beam that buckles.

    Examples
    --------
    The sag in the middle of a 4 m beam for a force of 1 N there is L^3 / (48 EI):

    >>> from srcfit import kernel, make_member
    >>> beam = make_member({"kind": "beam", "length": "4 m", "bending_stiffness": "1.68 MN*m^2",
    ...                     "left": "pinned", "right": "pinned"})
    >>> round(float(kernel(beam, [2.0], [2.0])[0, 0]) * 48 * 1.68e6 / 4**3, 9)
    1.0
    >>> kernel(beam, [1.0, 2.0], [2.0], "moment").round(9)
    array([[0.5],
           [1. ]])
    """
    refuse_buckled(member)
    x, s = _checked(member, x, "x"), _checked(member, s, "s")
    held, free = restrained(member)
    if not free:
        line = chain(held, np.concatenate([x, s]))
        return at_nodes(influence(line, functionals(line, quantity, x)), line.node(s))
    return _generalised(member, held, x, s, quantity)


def _quadrature(member: Member) -> tuple[Array, Array]:
    """Places and weights (area weight included) fine enough for responses to null modes."""
    c, b, _ = gauss()
    stops = [member.start, *inner_edges(member), *(p for p, _, _ in special_places(member))]
    edges = np.unique([*stops, member.end, *np.linspace(member.start, member.end, 13)])
    h = np.diff(edges)
    places = edges[:-1, None] + h[:, None] * c
    return places.ravel(), (h[:, None] * b * member.area(places)).ravel()


def _generalised(member: Member, held: Member, x: Array, s: Array, quantity: str) -> Matrix:
    """Project the held member's kernel onto the complement of the null modes, on both sides."""
    t, weight = _quadrature(held)
    line = chain(held, np.concatenate([x, s, t]))
    nulls = Nulls(member, line)
    asked = functionals(line, quantity, x), functionals(line, "response", np.concatenate([s, t]))
    lines, n = influence(line, [*asked[0], *asked[1]]), len(x)
    G = at_nodes(lines, line.node(s))[:n]
    psi = nulls.against(lines)  # what the held member answers to r phi
    read, psi_s, psi_t = psi[:n], psi[n : n + len(s)], psi[n + len(s) :]
    phi_t = nulls.value(t) * weight * profile(member, "r", t, 1.0)
    phi = nulls.read(quantity, x)
    inner = read - phi @ (phi_t @ psi_t).T
    found: Matrix = G - phi @ psi_s.T - inner @ nulls.value(s)
    return found


def respond(
    member: Member,
    x: Any,
    source: Source | Any,
    lumped: Sequence[tuple[Any, ...]] = (),
    quantity: str = "response",
) -> Matrix:
    """The whole, absolute response at `x`: ends, ambient and settlements included.

    Parameters
    ----------
    member : Member
    x : (n,) places [m]; for ``quantity="reaction"`` ends or supports
    source : callable or (m,) array
        Source density (SI) as a function of an array of places, or values on m equal cells.
        A function is sampled at 800 places and then ever closer where it bends or jumps; parts
        narrower than a thousandth of the member are better given as `lumped`.
    lumped : sequence of (place, strength) or, for beams, (place, strength, "couple")
    quantity : str
        As in `kernel`.

    Returns
    -------
    (n,) array, SI

    Raises
    ------
    MemberError
        For places off the member, quantities it does not have, an unbalanced source on a
        singular member, and a beam that buckles.

    Examples
    --------
    A bar whose ends are held at 20 degC, heated by 100 W/m: 20 degC + f x (L - x) / (2 k A).

    >>> from srcfit import make_member, respond
    >>> bar = make_member({"kind": "conductor", "length": "2 m", "conductance": "0.5 W*m/K",
    ...                    "ambient": "20 degC", "left": "fixed", "right": "fixed"})
    >>> (respond(bar, [0.0, 1.0], lambda x: 100.0 + 0.0 * x) - 273.15).round(6)
    array([ 20., 120.])
    >>> respond(bar, [0.0], [0.0], lumped=[(0.5, 8.0)], quantity="flux").round(6)
    array([-6.])
    """
    refuse_buckled(member)
    x = _checked(member, x, "x")
    loads = [_load(member, item) for item in lumped]
    at = _checked(member, [p for p, _, _ in loads], "lumped place") if loads else np.zeros(0)
    held, free = restrained(member)
    edges, density = _source(member, source)
    t, weight = _quadrature(held) if free else (np.zeros(0), np.zeros(0))
    line = chain(held, np.concatenate([x, at, edges, t]))
    f = density(line.places)
    asked = functionals(line, quantity, x)
    lines = influence(line, [*asked, *functionals(line, "response", t)])
    found = interval_integrals(lines, f).sum(axis=1)
    for place, (_, strength, component) in zip(line.node(at), loads, strict=True):
        found = found + strength * at_nodes(lines, np.array([place]), component)[:, 0]
    names, columns = restraint_forces(lines)
    given = dict(prescribed(member))
    for name, column in zip(names, columns.T, strict=True):
        found = found + _known(given[name]) * column
    if free:
        found = _complement(member, line, found, f, loads, at, (quantity, x, t, weight))
    result = found[: len(x)]
    if quantity == "response" and member.kind.relative and not member.driven:
        result = result + member.ambient
    answer: Matrix = result
    return answer


def _load(member: Member, item: tuple[Any, ...]) -> tuple[float, Any, int]:
    """(place, strength, state component it works on) of a lumped load."""
    if len(item) == 3 and item[2] == "couple" and member.kind.order == 4:
        return float(item[0]), item[1], 1
    if len(item) != 2:
        raise MemberError(
            f"the lumped load {item!r} is not understood", "lumped",
            'give (place, strength), or for beams (place, strength, "couple")',
        )  # fmt: skip
    return float(item[0]), item[1], 0


def _source(member: Member, source: Source | Any) -> tuple[Array, Source]:
    """Panel edges and the density as a function of places."""
    if not callable(source):
        value = np.atleast_1d(np.asarray(source))
        edges = np.linspace(member.start, member.end, len(value) + 1)

        def cells(places: Array) -> Any:
            return value[np.clip(np.searchsorted(edges, places) - 1, 0, len(value) - 1)]

        return edges, cells

    def density(places: Array) -> Any:
        found = np.asarray(source(places.ravel()))
        return np.broadcast_to(found, places.size).reshape(places.shape)

    return _panels(member, density), density


def _panels(member: Member, density: Source) -> Array:
    """Edges of panels on which the source is a polynomial of degree 7, or that are tiny."""
    c, _, _ = gauss()
    lower = np.polynomial.legendre.legvander(2 * c - 1, len(c) - 1)
    # eight samples a panel: a source narrower than that could slip through
    edges = np.unique([*np.linspace(member.start, member.end, PANELS + 1), *inner_edges(member)])
    done: list[Array] = [edges]
    a, b = edges[:-1], edges[1:]
    largest = 0.0
    for _ in range(45):  # a jump is closed in to 1e-13 of the length
        value = density(a[:, None] + (b - a)[:, None] * c)
        largest = max(largest, float(np.abs(value).max()))
        size = np.linalg.solve(lower, value.T)
        rough = np.abs(size[-2:]).max(axis=0) * (b - a) > 1e-14 * largest * member.length
        if not rough.any():
            break
        middle = (a[rough] + b[rough]) / 2
        done.append(middle)
        a, b = np.concatenate([a[rough], middle]), np.concatenate([middle, b[rough]])
    return np.unique(np.concatenate(done))


def _complement(
    member: Member, line: Chain, found: Matrix, f: Matrix, loads: list[tuple[float, Any, int]],
    at: Array, asked: tuple[str, Array, Array, Array],
) -> Matrix:  # fmt: skip
    """Check the balance of the source and take the null modes out of the response."""
    quantity, x, t, weight = asked
    nulls = Nulls(member, line)
    real, mine = np.diff(line.x) > 0, np.diff(nulls.free.x) > 0
    parts = f[real] * line.weights[real] * nulls.at[:, mine]
    balance, size = parts.sum(axis=(1, 2)), np.abs(parts).sum(axis=(1, 2))
    for place, (_, strength, component) in zip(nulls.free.node(at), loads, strict=True):
        part = strength * nulls.states[:, place, component] * nulls.free.scale[component]
        balance, size = balance + part, size + np.abs(part)
    for force, (_, value) in zip(nulls.forces().T, prescribed(member), strict=True):
        balance, size = balance + _known(value) * force, size + np.abs(_known(value) * force)
    if (np.abs(balance) > 1e-8 * np.maximum(size, 1e-300)).any():
        raise MemberError(
            "the member is free to move or drift as a whole and the source is not balanced, so "
            "there is no steady response",
            "member",
            "balance the source, or add a support, a foundation or a loss",
        )
    response = found[len(x) :]
    share = nulls.value(t) @ (weight * profile(member, "r", t, 1.0) * response)
    return found[: len(x)] - nulls.read(quantity, x) @ share
