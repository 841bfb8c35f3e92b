"""Influence lines of anything that can be read on a member, from the state form.

The kernel is never built from growing exponentials. From each end an orthonormal basis of the
states that satisfy the end's conditions is carried along the member: Y from the left, W from the
right. A unit load at a place splits into a part in W (right of it) and a part in Y (left of it),
and the coefficients of the two parts only decay as they are carried away from the load.

The operator is self-adjoint, so the influence line of any quantity H at x (the reading per unit
source at s) is itself a response: to a unit force for the response, a couple for the rotation,
a kink for the moment, a gap for the shear. One routine, `influence`, gives all of them.

Source: Ascher, Mattheij & Russell, Numerical Solution of Boundary Value Problems (1995), ch. 4
(decoupling by orthonormal bases); reciprocity after Maxwell and Betti.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.errors import MemberError
from srcfit.intervals import gauss
from srcfit.member import Array, Member
from srcfit.state import NEAR_AXIS, Chain, Matrix, operator

LOOSE = 1e-11  # size of what a point condition does to states that it does not touch
CARRIED = 0.5  # change of the state, as a norm, after which a basis is made orthonormal again


@dataclass(frozen=True)
class Bases:
    """Bases of the states that satisfy the left (Y) and the right (W) conditions at each node.

    `to_left` and `to_right` carry the coefficients across each interval.
    """

    Y: Matrix
    W: Matrix
    to_left: Matrix
    to_right: Matrix


@dataclass(frozen=True)
class Term:
    """One term of a functional: row @ z at a node.

    `before`: read on the left of a load at the same place (default: on its right).
    """

    node: int
    row: Matrix
    before: bool = False


@dataclass(frozen=True)
class Influence:
    """Influence lines of some functionals, n of them, on a chain.

    Attributes
    ----------
    both : Bases
    right_of, left_of : (N, n, h) coefficients in W and Y of the parts right and left of the loads
    before : (n,) whether the functional is read on the left of a load at the same place
    """

    chain: Chain
    both: Bases
    right_of: Matrix
    left_of: Matrix
    before: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.before)

    def after(self, node: NDArray[np.int64]) -> Matrix:
        """Scaled states just right of nodes, (len(node), n, k)."""
        found = self.right_of[node] @ self.both.W[node].transpose(0, 2, 1)
        inner = node < len(self.chain.x) - 1
        k = node[inner]
        back = self.left_of[k + 1] @ self.both.to_left[k].transpose(0, 2, 1)
        found[inner] += back @ self.both.Y[k].transpose(0, 2, 1)
        return found

    def ahead(self, node: NDArray[np.int64]) -> Matrix:
        """Scaled states just left of nodes, (len(node), n, k)."""
        found = self.left_of[node] @ self.both.Y[node].transpose(0, 2, 1)
        inner = node > 0
        k = node[inner]
        on = self.right_of[k - 1] @ self.both.to_right[k - 1].transpose(0, 2, 1)
        found[inner] += on @ self.both.W[k].transpose(0, 2, 1)
        return found


def _end_basis(member: Member, which: str) -> Matrix:
    """States (columns, physical) that satisfy the conditions of one end."""
    end = member.left if which == "left" else member.right
    side = 1.0 if which == "left" else -1.0
    n = member.kind.order
    loss = 1 + 1j * member.damping if member.driven and member.damping else 1.0
    if n == 2 and end.axis:
        return np.array([[1.0], [side * _tip(member, which)]])
    if n == 2:
        place = np.array(member.start if which == "left" else member.end)
        k = end.response.stiffness * float(member.area(place))  # radial kinds: per area
        return np.array([[0.0], [1.0]]) if np.isinf(k) else np.array([[1.0], [side * k * loss]])
    basis = np.zeros((4, 2), dtype=type(loss))
    k, c = end.response.stiffness, end.rotation.stiffness
    if np.isinf(k):
        basis[3, 0] = 1.0
    else:
        basis[0, 0], basis[3, 0] = 1.0, side * k * loss
    if np.isinf(c):
        basis[2, 1] = 1.0
    else:
        basis[1, 1], basis[2, 1] = 1.0, -side * c * loss
    return basis


def _tip(member: Member, which: str) -> Any:
    """Flux that the loss beside a singular end feeds: integral of q from the end to the chain."""
    c, b, _ = gauss()
    reach = NEAR_AXIS * member.length
    place = member.start + reach * c if which == "left" else member.end - reach * c
    return reach * (b * operator(member, place)["q"]).sum()


def _orthonormal(columns: Matrix) -> tuple[Matrix, Matrix]:
    """Thin QR of one or two columns by Gram-Schmidt with a repeat (cheaper than LAPACK here)."""
    a = columns[:, 0]
    size = np.sqrt(np.vdot(a, a).real)
    a = a / size
    if columns.shape[1] == 1:
        return a[:, None], np.array([[size]], dtype=columns.dtype)
    b = columns[:, 1]
    first = np.vdot(a, b)
    b = b - first * a
    again = np.vdot(a, b)
    b = b - again * a
    rest = np.sqrt(np.vdot(b, b).real)
    q = np.empty_like(columns)
    q[:, 0], q[:, 1] = a, b / rest
    return q, np.array([[size, first + again], [0.0, rest]], dtype=columns.dtype)


class FreePartError(MemberError):
    """A part beside a point condition moves by itself: what of a basis was carried so far.

    Attributes
    ----------
    interval : int
        That of the point condition.
    ahead : int
        1: the part lies left of it, 0: right.
    basis, back : as in `Bases`, filled up to the condition
    """

    def __init__(
        self, line: Chain, interval: int, ahead: int, basis: Matrix, back: Matrix
    ) -> None:
        side = "left" if ahead else "right"
        super().__init__(
            f"the part of the member {side} of {line.x[interval]:.6g} m is free to move by itself",
            "member",
            "hold it by a support, an end or a spring",
        )
        self.interval, self.ahead, self.basis, self.back = interval, ahead, basis, back


def _through_pin(basis: Matrix, row: Array, column: Array) -> tuple[Matrix, Matrix] | None:
    """States of `basis` with row @ z = 0, plus any jump along `column`.

    Returns the new basis and the matrix that takes coefficients in it back to the old basis; None
    where every state of the basis meets the condition.
    """
    held = row @ basis
    if np.abs(held).max() < LOOSE:
        return None
    null = np.linalg.qr(held.conj()[:, None], mode="complete")[0][:, 1:]
    q, r = _orthonormal(np.concatenate([basis @ null, column[:, None]], axis=1))
    back = np.concatenate([null, np.zeros((len(null), 1))], axis=1) @ np.linalg.inv(r)
    return q, back


def bases(line: Chain) -> Bases:
    """Carry the bases along the chain, in both directions.

    Raises
    ------
    FreePartError
        Where a part beside a point condition moves by itself.
    """
    scale, n = line.scale, line.order
    half, count = n // 2, len(line.x)
    start = _end_basis(line.member, "left") / scale[:, None]
    stop = _end_basis(line.member, "right") / scale[:, None]
    kind = np.result_type(line.phi, start, stop)
    Y, W = (np.empty((count, n, half), dtype=kind) for _ in range(2))
    to_left, to_right = (np.empty((count - 1, half, half), dtype=kind) for _ in range(2))
    backward = np.linalg.inv(line.phi)
    Y[0], W[-1] = _orthonormal(start.astype(kind))[0], _orthonormal(stop.astype(kind))[0]
    _carry(line, line.phi, range(count - 1), 1, Y, to_left)
    _carry(line, backward, range(count - 2, -1, -1), 0, W, to_right)
    return Bases(Y, W, to_left, to_right)


def _carry(
    line: Chain, step: Matrix, intervals: range, ahead: int, basis: Matrix, back: Matrix
) -> None:
    """Fill `basis` node by node, and `back`, the maps of coefficients the other way.

    Over short stretches the columns are carried as they are (maps are 1); before they lose their
    independence they are made orthonormal again.
    """
    unit = np.eye(back.shape[1])
    growth = np.sqrt((np.abs(step - np.eye(line.order)) ** 2).sum(axis=(1, 2)))
    turned: list[int] = []
    skew = 0.0
    for k in intervals:
        here, there = k + 1 - ahead, k + ahead
        pin = line.pins.get(k)
        if pin is not None:
            through = _through_pin(basis[here], pin.row, pin.column)
            if through is None:
                back[turned] = np.linalg.inv(back[turned])
                raise FreePartError(line, k, ahead, basis, back)
            basis[there], back[k] = through
            skew = 0.0
            continue
        skew += growth[k]
        basis[there] = step[k] @ basis[here]
        if skew > CARRIED:
            basis[there], back[k] = _orthonormal(basis[there])
            turned.append(k)
            skew = 0.0
        else:
            back[k] = unit
    back[turned] = np.linalg.inv(back[turned])


def influence(line: Chain, functionals: Sequence[Sequence[Term]]) -> Influence:
    """Influence lines of functionals, each a sum of terms at nodes.

    Parameters
    ----------
    line : Chain
    functionals : n sequences of Term, rows physical

    Returns
    -------
    Influence
    """
    both = bases(line)
    rows = [(i, t.node, t.row) for i, terms in enumerate(functionals) for t in terms]
    owner = np.array([r[0] for r in rows], dtype=int)
    node = np.array([r[1] for r in rows], dtype=int)
    jumps = _jump(np.array([r[2] for r in rows]).reshape(len(rows), line.order)) / line.scale
    c, b = _split(both, node, jumps)
    n, count, half = len(functionals), len(line.x), line.order // 2
    kind = np.result_type(both.Y, c)
    right_c, left_b = (np.zeros((count, n, half), dtype=kind) for _ in range(2))
    np.add.at(right_c, (node, owner), c)
    np.add.at(left_b, (node, owner), b)
    for k in range(count - 1):
        right_c[k + 1] += right_c[k] @ both.to_right[k].T
    for k in range(count - 1, 0, -1):
        left_b[k - 1] += left_b[k] @ both.to_left[k - 1].T
    before = np.array([any(t.before for t in f) for f in functionals], dtype=bool)
    return Influence(line, both, right_c, left_b, before)


def _split(both: Bases, node: NDArray[np.int64], jumps: Matrix) -> tuple[Matrix, Matrix]:
    """Coefficients in W (right) and Y (left) of unit jumps at nodes."""
    if len(node) == 0:
        half = both.Y.shape[2]
        return np.zeros((0, half)), np.zeros((0, half))
    system = np.concatenate([both.W[node], -both.Y[node]], axis=2)
    found = np.linalg.solve(system, jumps[:, :, None])[:, :, 0]
    half = both.Y.shape[2]
    return found[:, :half], found[:, half:]


def _jump(rows: Matrix) -> Matrix:
    """The state jump whose response is the influence line of row @ z (reciprocity)."""
    if rows.shape[1] == 2:
        return np.stack([rows[:, 1], -rows[:, 0]], axis=1)
    u, psi, moment, shear = rows.T
    return np.stack([shear, -moment, psi, -u], axis=1)


def deflect(line: Chain, f: Matrix, lumped: Sequence[tuple[int, Any]] = ()) -> Matrix:
    """Homogeneous response to one source: states at all nodes, both limits.

    Parameters
    ----------
    line : Chain
    f : (N - 1, s) source density at the Gauss places
    lumped : (node, strength) pairs

    Returns
    -------
    (2, N, n) array
        Physical states: limits from the left and from the right.
    """
    unit = np.zeros(line.order)
    unit[0] = 1.0
    tips = [(node, tip * f[interval, interval]) for tip, node, interval in _tips(line)]
    terms = [Term(node, strength * unit) for node, strength in [*lumped, *tips]]
    # the source of an interval, from rest at its left node, is a jump at its right node
    jumps = np.einsum("kns,ks->kn", line.load, f) * line.scale
    live = np.flatnonzero(np.abs(jumps).max(axis=1))
    terms += [Term(int(k) + 1, -_jump(jumps[k : k + 1])[0]) for k in live]
    lines = influence(line, [terms])
    everywhere = np.arange(len(line.x))
    low, high = lines.ahead(everywhere)[:, 0], lines.after(everywhere)[:, 0]
    low[live + 1] += jumps[live] / line.scale
    found: Matrix = np.stack([low, high]) * line.scale
    return found


def at_nodes(lines: Influence, node: NDArray[np.int64], component: int = 0) -> Matrix:
    """Influence lines (or another state component) at nodes, (n, len(node)).

    Where two limits differ: on the side that a load at that place has to the functional.
    """
    size = lines.chain.scale[component]
    low = lines.ahead(node)[:, :, component].T
    high = lines.after(node)[:, :, component].T
    found: Matrix = np.where(lines.before[:, None], high, low) * size
    return found


def interval_integrals(lines: Influence, density: Matrix | None = None) -> Matrix:
    """Integral of each influence line over each interval, (n, N - 1).

    `density` (N - 1, s): values at the Gauss places to multiply with; the area weight is included.
    """
    weights = lines.chain.weights if density is None else lines.chain.weights * density
    rows = np.einsum("ks,ksd->kd", weights, lines.chain.stages)
    both, right_of, left_of = lines.both, lines.right_of[:-1], lines.left_of[1:]
    ahead = np.einsum("kd,kdh->kh", rows, both.W[:-1])
    back = np.einsum("kd,kdg,kgh->kh", rows, both.Y[:-1], both.to_left)
    found: Matrix = (right_of @ ahead[:, :, None] + left_of @ back[:, :, None])[:, :, 0].T
    # what lies between a singular end and the chain acts at its first or last node
    for tip, node, interval in _tips(lines.chain):
        size = 1.0 if density is None else density[interval, interval]
        found[:, interval] += tip * size * at_nodes(lines, np.array([node]))[:, 0]
    return found


def _tips(line: Chain) -> list[tuple[float, int, int]]:
    """(area weight, node, interval) of the stretches beside singular ends."""
    both = ((line.tips[0], 0, 0), (line.tips[1], len(line.x) - 1, -1))
    return [item for item in both if item[0] > 0]
