"""The energy a and the weight b of a member on elements of high degree.

Order 2: a(u, u) = integral of w (p u'^2 + q u^2) + springs, b(u, u) = integral of w r u^2.
Order 4: a = integral of p2 psi'^2 + S gamma^2 + p1 u'^2 + p0 u^2 + springs, psi = u' - gamma;
gamma = 0 unless the section shears.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre

from srcfit.eigenshapes import SPARE, Coefficients, Index, Tables, carried, coefficients, tables
from srcfit.member import Array, Member
from srcfit.state import operator, special_places

Entries = tuple[Index, Index, Array]
SLIVER = 1e-2  # length against its neighbours' below which an element is carried along


@dataclass(frozen=True)
class Mesh:
    """Element edges (E + 1,) and their polynomial degrees (E,)."""

    edges: Array
    degree: Index


@dataclass(frozen=True)
class Numbering:
    """Unknowns at the nodes, before those that are held are taken out.

    Attributes
    ----------
    left, right : (E + 1, h) unknowns (u; psi) on the left and the right of each node
    springs : tuple of (unknowns, signs, stiffness): energy = stiffness * (signs @ unknowns)**2
    held : unknowns that are held at 0
    count : number of nodal unknowns
    """

    left: Index
    right: Index
    springs: tuple[tuple[tuple[int, ...], tuple[float, ...], float], ...]
    held: tuple[int, ...]
    count: int


@dataclass(frozen=True)
class Group:
    """All elements of one degree.

    Attributes
    ----------
    elements : (E,) their numbers
    unknowns : (E, d) numbers of their unknowns; -1: held
    places : (E, g) Gauss places
    tables : field -> (E, g, d)
    energy, weight : field -> (E, g) coefficient times Gauss weight
    """

    elements: Index
    unknowns: Index
    places: Array
    tables: Tables
    energy: Mapping[str, Array]
    weight: Mapping[str, Array]


@dataclass(frozen=True)
class Form:
    """A member's energy and weight on a mesh, `size` unknowns; `master` as in `_masters`."""

    member: Member
    mesh: Mesh
    master: Index | None
    groups: tuple[Group, ...]
    springs: tuple[tuple[Index, Array, float], ...]
    size: int


def _number(member: Member, edges: Array) -> Numbering:
    """Unknowns of the nodes, and what ends, supports, hinges and interfaces do to them."""
    half = member.kind.order // 2
    count = len(edges)
    left = np.arange(count * half).reshape(count, half)
    right = left.copy()
    springs: list[tuple[tuple[int, ...], tuple[float, ...], float]] = []
    held: list[int] = []
    total = count * half

    def restrain(unknown: int, stiffness: float) -> None:
        if np.isinf(stiffness):
            held.append(unknown)
        elif stiffness != 0:
            springs.append(((unknown,), (1.0,), stiffness))

    for place, what, item in special_places(member):
        node = int(np.argmin(np.abs(edges - place)))
        area = float(member.area(np.array(item.at)))  # springs of radial kinds are per area
        if what == "support":
            restrain(int(left[node, 0]), item.restraint.stiffness * area)
            continue
        stiffness = item.spring if what == "hinge" else _inverse(item.resistance) * area
        if np.isinf(stiffness):
            continue
        part = half - 1  # a hinge parts psi, an interface u
        right[node, part] = total
        springs.append(((int(left[node, part]), total), (1.0, -1.0), stiffness))
        total += 1
    for node, end, side in ((0, member.left, right), (count - 1, member.right, left)):
        if end.axis:
            if _repels(member, side is right):
                held.append(int(side[node, 0]))
            continue
        area = float(member.area(np.array(member.start if side is right else member.end)))
        restrain(int(side[node, 0]), end.response.stiffness * area)
        if half == 2:
            restrain(int(side[node, 1]), end.rotation.stiffness)
    return Numbering(left, right, tuple(springs), tuple(held), total)


def _inverse(resistance: float) -> float:
    return np.inf if resistance == 0 else 1 / resistance


def _repels(member: Member, at_left: bool) -> bool:
    """Whether q grows so fast towards a singular end that a bounded response is 0 there."""
    if member.kind.order == 4:
        return False
    near = 1e-7 * member.length
    x = np.array([member.start + near if at_left else member.end - near])
    k = operator(member, x)
    return bool(k["q"][0] * near**2 > 1e-3 * k["p"][0])


def _masters(member: Member, edges: Array, at: Numbering) -> Index:
    """Node that each node is carried by: itself, or its neighbour across a sliver.

    The stiffness of a sliver would drown everything else in rounding. Its far node is therefore
    described by how it moves against a rigid continuation of the near one.
    """
    master = np.arange(len(edges))
    h = np.diff(edges)
    beside = np.maximum(np.append(h[1:], 0.0), np.insert(h[:-1], 0, 0.0))
    loaded = {*at.held, *(n for which, _, _ in at.springs for n in which)}
    plain = [
        not loaded & {int(n) for n in (*a, *b)} for a, b in zip(at.left, at.right, strict=True)
    ]
    for e in np.flatnonzero(h < SLIVER * beside):
        if plain[e + 1]:
            master[e + 1] = master[e]
        elif plain[e] and master[e] == e and e not in master[:e]:
            master[e] = e + 1
    return master


def _nodal(at: Numbering, elements: Index, master: Index | None) -> Index:
    """Unknowns of the nodal blocks of elements; -1: none."""
    near, far = at.right[elements], at.left[elements + 1]
    if master is None:
        return np.hstack([near, far])
    left, right = master[elements], master[elements + 1]

    def of(node: Index) -> Index:
        return np.where((node <= elements)[:, None], at.right[node], at.left[node])

    return np.hstack([
        of(left),
        np.where((left == right)[:, None], -1, of(right)),
        np.where((left == elements)[:, None], -1, near),
        np.where((right == elements + 1)[:, None], -1, far),
    ])  # fmt: skip


def _renumber(at: Numbering, mesh: Mesh, inner: Index) -> tuple[Index, int]:
    """New numbers of all unknowns in the order of their places, -1 for held ones (and for -1)."""
    size = at.count + int(inner.sum())
    where = np.empty(size)
    where[at.left] = where[at.right] = np.arange(len(mesh.edges))[:, None]
    where[at.count :] = np.repeat(np.arange(len(inner)) + 0.5, inner)
    free = np.setdiff1d(np.arange(size), at.held)
    new = np.full(size + 1, -1)
    new[free[np.argsort(where[free], kind="stable")]] = np.arange(len(free))
    return new, len(free)


def build(member: Member, mesh: Mesh, what: Coefficients = coefficients) -> Form:
    """The energy and the weight of `member` on `mesh`.

    Raises
    ------
    MemberError
        Where a coefficient that must be positive is not.
    """
    order, shears = member.kind.order, "shear" in member.profiles
    at = _number(member, mesh.edges)
    inner = mesh.degree + 1 - order + (mesh.degree if shears else 0)
    first = at.count + np.cumsum(inner) - inner
    new, size = _renumber(at, mesh, inner)
    masters = _masters(member, mesh.edges, at)
    master = None if (masters == np.arange(len(masters))).all() else masters
    groups = []
    for degree in np.unique(mesh.degree):
        elements = np.flatnonzero(mesh.degree == degree)
        t, weight = legendre.leggauss(int(degree) + SPARE)
        half = np.diff(mesh.edges)[elements] / 2
        places = mesh.edges[elements][:, None] + half[:, None] * (1 + t)
        own = first[elements][:, None] + np.arange(inner[elements[0]])
        energy, mass = what(member, places)
        gauss = half[:, None] * weight
        groups.append(Group(
            elements, new[np.hstack([_nodal(at, elements, master), own])], places,
            _shapes(member, mesh, elements, t, master),
            {name: value * gauss for name, value in energy.items()},
            {name: value * gauss for name, value in mass.items()},
        ))  # fmt: skip
    springs = tuple(
        (new[list(which)], np.array(signs), stiffness) for which, signs, stiffness in at.springs
    )
    return Form(member, mesh, master, tuple(groups), springs, size)


def _shapes(member: Member, mesh: Mesh, elements: Index, t: Array, master: Index | None) -> Tables:
    a, half = mesh.edges[elements], np.diff(mesh.edges)[elements] / 2
    degree = int(mesh.degree[elements[0]])
    found = tables(member.kind.order, "shear" in member.profiles, degree, t, half)
    if master is None:
        return found
    return carried(found, a[:, None] + half[:, None] * (1 + t), mesh.edges, elements, master)


def shapes_at(form: Form, group: Group, row: int, t: Array) -> Tables:
    """Tables (1, len(t), d) of one element, the `row`-th of a group, at places t of [-1, 1]."""
    return _shapes(form.member, form.mesh, group.elements[row : row + 1], t, form.master)


def fields(form: Form, amounts: Array) -> dict[str, list[Array]]:
    """Fields of modes at the Gauss places of each group, lists of (E, g, count)."""
    full = np.vstack([amounts, np.zeros((1, amounts.shape[1]))])  # row -1: held unknowns
    found: dict[str, list[Array]] = {}
    for group in form.groups:
        own = full[group.unknowns]
        for name, table in group.tables.items():
            found.setdefault(name, []).append(table @ own)
    return found


def gram(form: Form, amounts: Array) -> tuple[Array, Array, Array]:
    """Energies a(i, j) and weights b(i, j) of modes, and the sums |a|(i) without their signs.

    Energies come from the fields, so that what strains nothing has none, to rounding squared.
    """
    count = amounts.shape[1]
    energy, weight, size = np.zeros((count, count)), np.zeros((count, count)), np.zeros(count)
    for name, values in fields(form, amounts).items():
        for group, value in zip(form.groups, values, strict=True):
            flat = value.reshape(-1, count)
            if name in group.energy:
                loaded = flat * group.energy[name].reshape(-1, 1)
                energy += flat.T @ loaded
                size += np.abs(flat * loaded).sum(axis=0)
            if name in group.weight:
                weight += flat.T @ (flat * group.weight[name].reshape(-1, 1))
    full = np.vstack([amounts, np.zeros((1, count))])
    for unknowns, signs, stiffness in form.springs:
        stretch = signs @ full[unknowns]
        energy += stiffness * np.outer(stretch, stretch)
        size += abs(stiffness) * stretch**2
    return energy, weight, size


def residual(form: Form, amounts: Array, value: Array) -> Array:
    """Residuals (value b - a) phi of modes (unknowns, count), from their fields."""
    count = amounts.shape[1]
    full = np.vstack([amounts, np.zeros((1, count))])
    found = np.zeros_like(full)
    here = fields(form, amounts)
    for k, group in enumerate(form.groups):
        part = np.zeros((*group.unknowns.shape, count))
        for name, table in group.tables.items():
            load = np.zeros_like(here[name][k])
            if name in group.weight:
                load += group.weight[name][:, :, None] * here[name][k] * value
            if name in group.energy:
                load -= group.energy[name][:, :, None] * here[name][k]
            part += table.transpose(0, 2, 1) @ load
        np.add.at(found, group.unknowns, part)
    for unknowns, signs, stiffness in form.springs:
        found[unknowns] -= stiffness * np.outer(signs, signs @ full[unknowns])
    return found[:-1]


def matrices(form: Form) -> tuple[Entries, Entries]:
    """Entries (rows, columns, values) of the energy and the weight; repeats are to be added."""
    energy: list[Entries] = []
    weight: list[Entries] = []
    for group in form.groups:
        rows = np.repeat(group.unknowns[:, :, None], group.unknowns.shape[1], 2)
        columns = rows.transpose(0, 2, 1)
        keep = (rows >= 0) & (columns >= 0)
        for found, known in ((energy, group.energy), (weight, group.weight)):
            value = np.zeros(rows.shape)
            for name, c in known.items():
                table = group.tables[name]
                value += table.transpose(0, 2, 1) @ (c[:, :, None] * table)
            found.append((rows[keep], columns[keep], value[keep]))
    for unknowns, signs, stiffness in form.springs:
        free = unknowns >= 0
        which, sign = unknowns[free], signs[free]
        pair = np.repeat(which, len(which)), np.tile(which, len(which))
        energy.append((*pair, stiffness * np.outer(sign, sign).ravel()))
    return _joined(energy), _joined(weight)


def _joined(parts: list[Entries]) -> Entries:
    rows, columns, values = (np.concatenate(part) for part in zip(*parts, strict=True))
    return rows, columns, values
