"""What holds a member: null modes of one that nothing holds, restraints and their forces."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from srcfit.errors import MemberError
from srcfit.influence import FreePartError, Influence, bases
from srcfit.member import RIGID, Array, Member, Restraint, Support
from srcfit.state import Chain, Matrix, chain, operator, special_places

SINGULAR = 1e-9
STILL = 1e-9  # displacement beside the state's largest component that is none
ADDED = "hold"  # word of a support that was added to a member nothing holds


def free_motions(line: Chain) -> Matrix:
    """Scaled states at all nodes (d, N, n) of motions that nothing resists; d = 0 when held.

    Where a part moves by itself that motion comes alone: others may be left when it is held.
    """
    try:
        both = bases(line)
    except FreePartError as part:
        return _of_part(line, part)[None]
    # a free motion lies in both bases; the node where they meet best shows it most clearly
    W, Y = np.linalg.qr(both.W)[0], np.linalg.qr(both.Y)[0]
    half = line.order // 2
    meet = np.linalg.svd(np.concatenate([W, Y], axis=2), compute_uv=False)[:, half:]
    count = (meet < SINGULAR).sum(axis=1)
    if not count.any():
        return np.zeros((0, len(line.x), line.order))
    most = np.flatnonzero(count == count.max())
    node = int(most[np.argmin(meet[most, half - count.max()])])
    _, size, vh = np.linalg.svd(np.concatenate([W[node], -Y[node]], axis=1))
    states = vh[size < SINGULAR][:, :half].conj() @ W[node].T
    c = np.linalg.lstsq(both.W[node], states.T)[0].T
    b = np.linalg.lstsq(both.Y[node], states.T)[0].T
    modes = np.empty((len(states), len(line.x), line.order), dtype=both.Y.dtype)
    modes[:, node:] = _rightward(both.W, both.to_right, c, node)
    modes[:, : node + 1] = _leftward(both.Y, both.to_left, b, node)
    return modes


def _of_part(line: Chain, part: FreePartError) -> Matrix:
    """States (N, n) of the motion of a part that a point condition lets turn or slip by itself.

    The jump that the condition leaves free is then itself a state of the part: the part takes the
    whole jump, and the member beyond is at rest.
    """
    here = part.interval + 1 - part.ahead
    column = line.pins[part.interval].column
    amount = np.linalg.lstsq(part.basis[here], column)[0][None]
    states = np.zeros((len(line.x), line.order), dtype=part.basis.dtype)
    if part.ahead:
        states[: here + 1] = _leftward(part.basis, part.back, amount, here)[0]
    else:
        states[here:] = _rightward(part.basis, part.back, amount, here)[0]
    return states


def _rightward(W: Matrix, to_right: Matrix, c: Matrix, node: int) -> Matrix:
    """States (d, N - node, n) from `node` on of coefficients c (d, h) in W there."""
    found = [c @ W[node].T]
    for k in range(node, len(W) - 1):
        c = c @ to_right[k].T
        found.append(c @ W[k + 1].T)
    return np.stack(found, axis=1)


def _leftward(Y: Matrix, to_left: Matrix, b: Matrix, node: int) -> Matrix:
    """States (d, node + 1, n) up to `node` of coefficients b (d, h) in Y there."""
    found = [b @ Y[node].T]
    for k in range(node, 0, -1):
        b = b @ to_left[k - 1].T
        found.append(b @ Y[k - 1].T)
    return np.stack(found[::-1], axis=1)


def restraint_forces(lines: Influence) -> tuple[list[str], Matrix]:
    """What each functional reads per unit prescribed amount at each restraint.

    Returns
    -------
    names : list of str
        ``left.value``, ``left.rotation``, ``right.value``, ``right.rotation``, ``support.1`` ...
    columns : (n, len(names))
        Also, by reciprocity, the reaction of that restraint to the functional's own load.
    """
    member, scale = lines.chain.member, lines.chain.scale
    last = lines.chain.order - 1
    ends = np.array([0]), np.array([len(lines.chain.x) - 1])
    at_left, at_right = lines.ahead(ends[0])[0] * scale, lines.after(ends[1])[0] * scale
    names, columns = [], []
    for word, end, state, side in (
        ("left", member.left, at_left, 1.0),
        ("right", member.right, at_right, -1.0),
    ):
        if end.response.stiffness != 0 and not end.axis:
            names.append(f"{word}.value")
            columns.append(side * state[:, last])
        if end.rotation.stiffness != 0:
            names.append(f"{word}.rotation")
            columns.append(-side * state[:, 2])
    number = 0
    for support, interval in zip(member.supports, support_intervals(lines.chain), strict=True):
        if support.word == ADDED:  # carries nothing and is nobody's question
            continue
        number += 1
        names.append(f"support.{number}")
        inside = np.array([interval]), np.array([interval + 1])
        step = lines.ahead(inside[1])[0] - lines.after(inside[0])[0]
        columns.append(step[:, last] * scale[last])
    empty = np.zeros((len(lines), 0))
    return names, np.stack(columns, axis=1) if columns else empty


def support_intervals(line: Chain) -> list[int]:
    """The interval of no length of each support, in order."""
    found = []
    for support in line.member.supports:
        here = np.flatnonzero((line.x[:-1] == line.x[1:]) & (np.abs(line.x[:-1] - support.at)
                              <= 1e-12 * max(1.0, abs(support.at))))  # fmt: skip
        found += [k for k in here if _is_support(line, int(k))]
    return [int(k) for k in found]


def _is_support(line: Chain, interval: int) -> bool:
    """Whether the double node is a support's, not a hinge's or an interface's."""
    pin = line.pins.get(interval)
    if pin is not None:
        return bool(pin.row[0] != 0)
    return bool(line.phi[interval][-1, 0] != 0)


def _surely_held(member: Member) -> bool:
    """Whether a glance tells that a steady member has no null mode, however soft it is."""
    if member.driven or member.lam or member.hinges:
        return False
    x = member.start + member.length * np.linspace(0.0137, 0.9871, 23)
    k = {name: np.real(v) for name, v in operator(member, x).items()}
    rate = k["q"] if member.kind.order == 2 else k["p0"]
    if (rate < 0).any() or (k.get("p1", rate) < 0).any():
        return False
    ends = member.left, member.right
    if any(r.stiffness < 0 for e in ends for r in (e.response, e.rotation)):
        return False
    if member.kind.order == 2:
        held = any(e.response.stiffness > 0 for e in ends) or bool(member.supports)
        return held or bool((rate > 0).any())
    clamped = any(e.response.stiffness > 0 and e.rotation.stiffness > 0 for e in ends)
    held_places = sum(e.response.stiffness > 0 for e in ends) + len(member.supports)
    return clamped or held_places > 1 or bool((rate > 0).any())


def restrained(member: Member) -> tuple[Member, int]:
    """The member, held at as many places as it has free motions (none for a regular one).

    For a balanced source these holds carry no force, so the response differs from the free
    member's by null modes only.

    Returns
    -------
    member : Member, with supports added
    count : int
        Number of null modes.

    Raises
    ------
    MemberError
        When a part is free and too short to be held.
    """
    if _surely_held(member):
        return member, 0
    odd, held = _odd_places(member), member
    while True:
        line = chain(held, odd)
        modes = free_motions(line)
        count = len(held.supports) - len(member.supports)
        if len(modes) == 0:
            return held, count
        at = _hold(line, modes, odd)
        if at is None:
            raise MemberError(
                "a part of the member between two hinges, supports or ends is free to move and "
                "too short to be followed",
                "member",
                "take the points together, or hold the part by a support, an end or a spring",
            )
        added = Support(at, ADDED, Restraint(RIGID))
        held = replace(held, supports=tuple(sorted((*held.supports, added), key=lambda s: s.at)))


def _odd_places(member: Member) -> Array:
    """Places where a hold may go: at odd fractions, since it should not fall on a user's own.

    Some lie between any two neighbouring point conditions.
    """
    inner = [p for p, _, _ in special_places(member)]
    stops = np.unique([member.start, *inner, member.end])
    between = stops[:-1, None] + np.diff(stops)[:, None] * np.array([0.0713, 0.3719, 0.9317])
    whole = member.start + member.length * np.linspace(0.0137, 0.9871, 23)
    return np.unique(np.concatenate([whole, between.ravel()]))


def _hold(line: Chain, modes: Matrix, odd: Array) -> float | None:
    """Where a hold stops most of the motions; None where it could stop nothing."""
    member = line.member
    allowed = np.isin(line.x, odd) & ~np.isin(line.x, [p for p, _, _ in special_places(member)])
    # of places that serve alike the one in the middle: far from singular ends
    aside = np.abs(line.x - (member.start + member.end) / 2) / member.length
    moved = np.abs(modes[:, :, 0]).max(axis=0)
    size = np.where(allowed, moved * (1 - 0.01 * aside), -1.0)
    best = int(np.argmax(size))
    enough = size[best] > STILL * np.abs(modes).max()
    return float(line.x[best]) if enough else None
