"""What holds a member: null modes of one that nothing holds, restraints and their forces."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from srcfit.influence import Bases, Influence, bases
from srcfit.member import RIGID, Member, Restraint, Support
from srcfit.state import Chain, Matrix, chain, operator, special_places

SINGULAR = 1e-9
ADDED = "hold"  # word of a support that was added to a member nothing holds


def null_states(line: Chain, both: Bases) -> Matrix:
    """States at all nodes (d, N, n) of the d null modes; d = 0 for a regular operator."""
    # a null mode lies in both bases; the node where they meet best shows it most clearly
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
    for k in range(node, len(line.x)):
        modes[:, k] = c @ both.W[k].T
        if k + 1 < len(line.x):
            c = c @ both.to_right[k].T
    for k in range(node, -1, -1):
        modes[:, k] = b @ both.Y[k].T
        if k > 0:
            b = b @ both.to_left[k - 1].T
    return modes


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


def restrained(member: Member) -> tuple[Member, Matrix | None, Chain | None]:
    """The member, held at as many places as it has null modes (none for a regular one).

    For a balanced source these holds carry no force, so the response differs from the free
    member's by null modes only.

    Returns
    -------
    member : Member, with supports added
    modes : (d, N, n) scaled states of the null modes on `chain`, or None
    chain : Chain, or None
    """
    if _surely_held(member):
        return member, None, None
    # odd fractions: a hold should not fall on a user's own place
    odd = member.start + member.length * np.linspace(0.0137, 0.9871, 23)
    line = chain(member, odd)
    modes = null_states(line, bases(line))
    if len(modes) == 0:
        return member, None, None
    left = modes[:, :, 0].copy()
    allowed = np.isin(line.x, odd) & ~np.isin(line.x, [p for p, _, _ in special_places(member)])
    # of places that serve alike the one in the middle: far from singular ends
    aside = np.abs(line.x - (member.start + member.end) / 2) / member.length
    added = []
    for _ in range(len(modes)):
        size = np.where(allowed, np.abs(left).max(axis=0) * (1 - 0.01 * aside), -1.0)
        best = int(np.argmax(size))
        column = left[:, best]
        left = left - np.outer(column, column.conj() @ left) / (np.abs(column) ** 2).sum()
        added.append(float(line.x[best]))
    held = tuple(Support(at, ADDED, Restraint(RIGID)) for at in added)
    supports = tuple(sorted((*member.supports, *held), key=lambda s: s.at))
    return replace(member, supports=supports), modes, line
