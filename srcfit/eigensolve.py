"""The lowest modes of a member's energy against a weight, on elements refined as they need it."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import scipy.linalg as sla
from numpy.polynomial import legendre
from numpy.typing import NDArray

from srcfit.eigenform import Entries, Form, Mesh, build, fields, gram, matrices, residual
from srcfit.eigenshapes import SPARE, Coefficients, smooth_edges
from srcfit.errors import MemberError
from srcfit.member import Array, Member

LOWEST = 4  # lowest degree of an element
STRETCH = 4 * np.pi  # phase of the highest mode over one element
HIGHEST = 32  # degree beyond which an element is halved instead
LEFT_OVER = 1e-17  # share of a mode's energy allowed in the two highest polynomials of an element
ROUNDED = 1e-14  # share that is taken for rounding when refinement does not halve it
ROUNDS = 40
MOST = 30_000  # unknowns
DENSE = 600  # unknowns above which the matrices are sparse
SHIFT = 1e-4  # shift in units of the highest eigenvalue: keeps high modes apart
NEIGHBOURS = 1e-5  # relative gap of modes that are separated together


def solve(
    member: Member, count: int, what: Coefficients, finer: float
) -> tuple[Form, Array, Array]:
    """The `count` lowest eigenvalues and modes of a(u, v) = lambda b(u, v).

    Parameters
    ----------
    member : Member, at rest
    count : int
    what : coefficients or compression
        Gives the coefficients of a and b.
    finer : float
        Factor on the number of elements to start with.

    Returns
    -------
    form, eigenvalues (count,) ascending, amounts (unknowns, count) with b(i, i) = 1

    Raises
    ------
    MemberError
        When a coefficient cannot be used, a is not bounded below, or the mesh does not settle.
    """
    low, high = characteristic(member, what), _reached(member, what, (count + 2) * np.pi)
    mesh = _first_mesh(member, what, high, finer)
    shift = low + SHIFT * high
    before = np.inf
    for _ in range(ROUNDS):
        form = build(member, mesh, what)
        if form.size > MOST:
            break
        amounts, shift = _lowest(form, count, shift)
        amounts, value, size = _polished(form, amounts)
        left_over = _left_over(form, amounts, size + low)
        worst = float(left_over.max())
        if worst <= LEFT_OVER or before / 2 < worst <= ROUNDED:
            return form, value, amounts * _signs(form, amounts)
        mesh, before = _refined(member, mesh, left_over), worst
    raise MemberError(
        "the modes do not settle as the elements are refined", "member",
        "give the jumps of its coefficients as steps, or ask for fewer modes",
    )  # fmt: skip


def _wavenumber(member: Member, x: Array, mu: float, what: Coefficients) -> Array:
    """Wavenumber [1/m] of a mode of eigenvalue mu where stiffness and weight alone decide."""
    energy, weight = what(member, x)
    if member.kind.order == 2:
        return np.sqrt(mu * weight["u"] / energy["slope"])
    if "slope" in weight:
        return np.sqrt(mu * weight["slope"] / energy["bend"])
    lead = mu * weight["u"]
    shear = lead / energy["shear"] / 2 if "shear" in energy else 0.0
    return np.sqrt(shear + np.sqrt(shear**2 + lead / energy["bend"]))


def _phase(member: Member, edges: Array, mu: float, what: Coefficients) -> Array:
    """Phase of a mode of eigenvalue mu over each stretch between `edges`."""
    t, weight = legendre.leggauss(24)
    h = np.diff(edges) / 2
    x = edges[:-1, None] + h[:, None] * (1 + t)
    found: Array = h * (_wavenumber(member, x, mu, what) @ weight)
    return found


def _reached(member: Member, what: Coefficients, phase: float) -> float:
    """Eigenvalue at which the member spans the given phase."""
    edges, mu = smooth_edges(member), 1.0
    for _ in range(200):
        now = float(_phase(member, edges, mu, what).sum())
        if abs(now / phase - 1) < 1e-3:
            break
        mu *= (phase / now) ** 2
    return mu


def characteristic(member: Member, what: Coefficients) -> float:
    """Size of the first eigenvalues that stiffness and weight alone would give."""
    return _reached(member, what, np.pi)


def _first_mesh(member: Member, what: Coefficients, mu: float, finer: float) -> Mesh:
    edges = smooth_edges(member)
    parts = np.ceil(finer * _phase(member, edges, mu, what) / STRETCH)
    stretches = zip(edges[:-1], edges[1:], np.maximum(parts, 1), strict=True)
    cut = [np.linspace(a, b, int(n) + 1)[:-1] for a, b, n in stretches]
    edges = np.concatenate([*cut, edges[-1:]])
    half = _phase(member, edges, mu, what) / 2
    # the coefficients of exp(i half t) fall below 1e-11 about where (e half / 2 j)**j does
    j = np.arange(1, 2 * HIGHEST)
    small = j * np.log(np.e * np.maximum(half, 1e-3)[:, None] / (2 * j)) < np.log(1e-11)
    return Mesh(edges, np.clip(1 + j[np.argmax(small, axis=1)], LOWEST, HIGHEST))


def _refined(member: Member, mesh: Mesh, left_over: Array) -> Mesh:
    """Higher degrees where something is left over, halves (or grades) where they are highest."""
    edges, degree = [mesh.edges[:1]], []
    last = len(left_over) - 1
    for e, share in enumerate(left_over):
        a, b, n = mesh.edges[e], mesh.edges[e + 1], int(mesh.degree[e])
        at_left, at_right = e == 0 and member.left.axis, e == last and member.right.axis
        if share > LEFT_OVER and n >= HIGHEST - (10 if at_left or at_right else 2):
            part = 0.15 if at_left else 0.85 if at_right else 0.5
            edges.append(np.array([a + part * (b - a), b]))
            degree += [HIGHEST - 12] * 2
        else:
            edges.append(np.array([b]))
            degree.append(n if share <= LEFT_OVER else min(n + 6, HIGHEST))
    return Mesh(np.concatenate(edges), np.array(degree))


def _lowest(form: Form, count: int, shift: float) -> tuple[Array, float]:
    """Modes of the lowest eigenvalues by inverting a + shift b, and the shift that was enough."""
    energy, weight = matrices(form)
    count = min(count, form.size - 2)
    find = _dense if form.size <= DENSE else _sparse
    for _ in range(60):
        found = find(form, energy, weight, count, shift)
        if found is None:
            shift *= 8
            continue
        inverse, vectors, invert = found
        if 1 / inverse.max() < shift / 2:  # the first eigenvalue is close to the edge, -shift
            shift *= 2
            continue
        amounts = vectors[:, ::-1] / np.sqrt(inverse[::-1])
        # once more, as a correction: what rounding left in the highest polynomials goes
        amounts, value, _ = _polished(form, amounts)
        return amounts + invert(residual(form, amounts, value)), shift
    raise MemberError(
        "the member's energy is not bounded below, so it has no lowest mode", "member",
        "check the signs of its coefficients and springs, and the compression",
    )  # fmt: skip


# 1 / (eigenvalue + shift) ascending, vectors, and what applies the inverse of a + shift b
Inverse = tuple[Array, Array, Callable[[Array], Array]]


def _dense(
    form: Form, energy: Entries, weight: Entries, count: int, shift: float
) -> Inverse | None:
    K, M = (np.zeros((form.size, form.size)) for _ in range(2))
    for matrix, (rows, columns, value) in ((K, energy), (M, weight)):
        np.add.at(matrix, (rows, columns), value)
    lifted = K + shift * M
    try:
        factor = sla.cho_factor(lifted)
        which = (form.size - count, form.size - 1)
        inverse, vectors = sla.eigh(M, lifted, subset_by_index=which)
    except np.linalg.LinAlgError:
        return None
    return inverse, vectors, lambda right: np.asarray(sla.cho_solve(factor, right))


def _sparse(
    form: Form, energy: Entries, weight: Entries, count: int, shift: float
) -> Inverse | None:
    from scipy.sparse import csc_array
    from scipy.sparse.linalg import ArpackError, LinearOperator, eigsh, splu

    K, M = (csc_array((v, (i, j)), shape=(form.size, form.size)) for i, j, v in (energy, weight))
    lifted = (K + shift * M).tocsc()
    factor = splu(lifted, permc_spec="NATURAL", diag_pivot_thresh=0.0)
    if (factor.perm_r != np.arange(form.size)).any() or (factor.U.diagonal() <= 0).any():
        return None
    solver = LinearOperator(K.shape, matvec=factor.solve, dtype=float)
    start = np.cos(np.arange(form.size))  # fixed, so that every run gives the same modes
    try:
        inverse, vectors = eigsh(M, count, M=lifted, Minv=solver, which="LA", v0=start, tol=0)
    except ArpackError:
        return _dense(form, energy, weight, count, shift)
    order = np.argsort(inverse)
    return inverse[order], vectors[:, order], lambda right: np.asarray(factor.solve(right))


def _polished(form: Form, amounts: Array) -> tuple[Array, Array, Array]:
    """Make modes orthonormal and uncoupled; eigenvalues and sizes |a| from their fields.

    After Ogita & Aishima, Japan J. Indust. Appl. Math. 35 (2018) 1007; neighbours too close for
    that are separated by a small eigenvalue problem of their own.
    """
    energy, weight, _ = gram(form, amounts)
    turn = _within_blocks(energy, weight)
    amounts, energy, weight = amounts @ turn, turn.T @ energy @ turn, turn.T @ weight @ turn
    amounts = amounts + amounts @ _mixing(energy, weight)
    energy, weight, size = gram(form, amounts)
    value = np.diag(energy) / np.diag(weight)
    order = np.argsort(value, kind="stable")
    return amounts[:, order], value[order], size[order]


def _mixing(energy: Array, weight: Array) -> Array:
    """First-order correction of modes (columns) that are nearly orthonormal and uncoupled."""
    value = np.diag(energy) / np.diag(weight)
    gap = value[None, :] - value[:, None]
    near = _near(value)
    away = (energy - value * weight) / np.where(near, 1.0, gap)
    found: Array = np.where(near, -(weight - np.eye(len(weight))) / 2, away)
    return found


def _near(value: Array) -> NDArray[np.bool_]:
    size = np.maximum(np.abs(value)[None, :], np.abs(value)[:, None])
    found: NDArray[np.bool_] = np.abs(value[None, :] - value[:, None]) <= NEIGHBOURS * size
    return found


def _within_blocks(energy: Array, weight: Array) -> Array:
    """Block-diagonal change of modes that separates neighbours which are strongly mixed."""
    value = np.diag(energy) / np.diag(weight)
    gap = value[None, :] - value[:, None]
    mixed = np.abs(energy - value * weight) > 0.02 * np.abs(gap)
    linked = np.triu(mixed | mixed.T | _near(value), 1)
    turn = np.diag(1 / np.sqrt(np.diag(weight)))
    start = 0
    while start < len(value):
        stop = start + 1
        while stop < len(value) and linked[start:stop, stop:].any():
            stop += 1
        if stop > start + 1:
            block = slice(start, stop)
            shifted = energy[block, block] - value[block].mean() * weight[block, block]
            turn[block, block] = sla.eigh(shifted, weight[block, block])[1]
        start = stop
    return turn


def _left_over(form: Form, amounts: Array, size: Array) -> Array:
    """Largest share, over the modes, of energy in the two highest polynomials of each element."""
    found = np.zeros(len(form.mesh.degree))
    strains = ("slope",) if form.member.kind.order == 2 else ("bend", "shear")
    here = fields(form, amounts)
    for k, group in enumerate(form.groups):
        degree = int(form.mesh.degree[group.elements[0]])
        t, weight = legendre.leggauss(degree + SPARE)
        P = legendre.legvander(t, degree) * np.sqrt(np.arange(degree + 1) + 0.5)
        for name in strains:
            if name not in here:
                continue
            top = degree - (2 if name == "bend" else 1)
            part = (P[:, top - 1 : top + 1] * weight[:, None]).T @ here[name][k]
            # the mean of the coefficient, by the energy's Gauss weights of the whole element
            stiff = group.energy[name].sum(axis=1) / 2
            share = (stiff[:, None, None] * part**2).sum(axis=1) / size
            found[group.elements] = np.maximum(found[group.elements], share.max(axis=1))
    return found


def _signs(form: Form, amounts: Array) -> Array:
    """Sign of each mode at the first place from the left where it is not 0."""
    found = fields(form, amounts)["u"]
    place = np.concatenate([group.places.ravel() for group in form.groups])
    value = np.concatenate([part.reshape(-1, amounts.shape[1]) for part in found])
    value = value[np.argsort(place, kind="stable")]
    there = np.abs(value) > 1e-6 * np.abs(value).max(axis=0)
    signs: Array = np.sign(value[np.argmax(there, axis=0), np.arange(value.shape[1])])
    return signs
