"""How many eigenvalues of L0 phi = lambda r phi lie below a number: an exact count.

The states that satisfy the left end are carried along the member as an orthonormal basis (see
`influence`); its upper half U holds responses, its lower half forces. Node after node is then
eliminated from the quadratic form of L0 - mu r. Between two nodes the form that is left on the
first one is U' J B^-1 U_next, B the block of the transfer matrix from forces to responses; its
negative eigenvalues are counted. The intervals are so short (one decay length or wavelength over
2 pi) that none of them, held at both nodes, has an eigenvalue below mu itself. For order 2 this
is the count of the zeros of the solution.

Source: Wittrick & Williams, Q. J. Mech. Appl. Math. 24 (1971) 263; Sturm's oscillation theorem
(order 2) and its kin for order 4: Greenberg & Marletta, ACM TOMS 23 (1997) 453.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from srcfit.influence import Bases, bases
from srcfit.member import Array, Member
from srcfit.state import Chain, chain

# pairs the responses (u, psi) with the forces (V, -M) that do work on them
WORK = np.array([[0.0, 1.0], [-1.0, 0.0]])


def bare(member: Member) -> Member:
    """The member at rest: not driven, not damped, lambda = 0."""
    return replace(member, frequency=None, damping=0.0, lam=0.0)


def number_below(member: Member, mu: float) -> int:
    """Number of eigenvalues of L0 phi = lambda r phi below `mu`, multiple ones counted fully.

    Parameters
    ----------
    member : Member
        Frequency, damping and lambda are ignored.
    mu : float
        Any number that is not, to rounding, an eigenvalue itself.

    Returns
    -------
    int

    Raises
    ------
    MemberError
        When the member is too long or a coefficient too rough to follow.
    """
    # as lambda and not as the shift, so that the stretch beside a singular end feels it too
    line = chain(replace(bare(member), lam=float(mu)))
    both = bases(line)
    held = _held(line)
    half = line.order // 2
    U = both.Y[:-1, :half]
    ahead = (line.phi @ both.Y[:-1])[:, :half]
    plain = np.diff(line.x) > 0
    plain[[k for k in held if k < len(plain)]] = False
    total = int(_eliminated(U[plain], ahead[plain], line.phi[plain, :half, half:]).sum())
    for k in np.flatnonzero(~plain):
        total += _at_special(line, both, int(k), held.get(int(k), ()))
    return total + _at_end(line, both)


def _held(line: Chain) -> dict[int, tuple[int, ...]]:
    """Responses (0: u, 1: psi) that are held at a node, and so are no unknowns of the form."""
    left = line.member.left
    stiffness = (left.response.stiffness, left.rotation.stiffness)[: line.order // 2]
    held = {0: tuple(i for i, k in enumerate(stiffness) if np.isinf(k))}
    same_place = np.append(np.diff(line.x) == 0, False)
    for k in np.flatnonzero(same_place):
        pin = line.pins.get(int(k))
        if pin is not None and pin.row[0] != 0:
            held[int(k) + 1] = (0,)
        elif line.order == 4 and 0 in held.get(int(k), ()):
            held[int(k) + 1] = (0,)  # a hinge on a support
    return {node: which for node, which in held.items() if which}


def _eliminated(U: Array, ahead: Array, B: Array) -> NDArray[np.int64]:
    """Negative eigenvalues of U' J B^-1 U_next of each interval."""
    sign = np.prod([np.sign(np.linalg.det(part)) for part in (U, ahead, B)], axis=0)
    found: NDArray[np.int64] = np.where(sign < 0, 1, 0)
    if U.shape[1] == 2:
        trace = np.einsum("kij,kij->k", U, WORK @ np.linalg.solve(B, ahead))
        found[(sign > 0) & (trace < 0)] = 2
    return found


def _at_special(line: Chain, both: Bases, k: int, held: tuple[int, ...]) -> int:
    """What is eliminated at a node with held responses, or at a point condition."""
    half = line.order // 2
    phi, Y = line.phi[k], both.Y[k]
    U, pin = Y[:half], line.pins.get(k)
    if line.x[k + 1] > line.x[k]:
        if len(held) == half:
            return 0
        c = U[1 - held[0]]  # the one direction that is free
        form = (U @ c) @ WORK @ np.linalg.solve(phi[:half, half:], (phi @ Y)[:half] @ c)
        return int(form < 0)
    if half == 1:  # an interface: a sign change across it is a zero inside the resistance
        return int(pin is None and not held and U[0, 0] * (phi @ Y)[0, 0] * phi[0, 1] < 0)
    gap = phi[1, 2]
    if (pin is None and gap == 0) or (pin is not None and pin.row[0] != 0):
        return 0  # a support: no unknown is left behind
    # a hinge: the rotation on its left is eliminated while u is kept
    c = U[1] if held else np.array([U[0, 1], -U[0, 0]])
    turn, moment = U[1] @ c, Y[2] @ c
    return int(turn * (turn + gap * moment) < 0 if pin is None else turn * moment > 0)


def _at_end(line: Chain, both: Bases) -> int:
    """Negative eigenvalues of the form that is left on the right end."""
    half, scale = line.order // 2, line.scale
    U, F = both.Y[-1][:half], both.Y[-1][half:]
    if half == 1:
        u, force = both.W[-1][:, 0]  # what the end asks for: force = -spring * u
        return int(u != 0 and U[0, 0] * (F[0, 0] - force / u * U[0, 0]) < 0)
    right = line.member.right
    spring = np.array([right.response.stiffness, right.rotation.stiffness])
    rigid = np.isinf(spring)
    if rigid.all():
        return 0
    size = scale[:2] / scale[[3, 2]]
    rest = WORK @ F + np.where(rigid, 0.0, spring * size)[:, None] * U
    if rigid.any():
        row = U[int(np.argmax(rigid))]
        c = np.array([row[1], -row[0]])
        return int((U @ c) @ (rest @ c) < 0)
    if np.linalg.det(U) * np.linalg.det(rest) < 0:
        return 1
    return 2 if np.sum(U * rest) < 0 else 0
