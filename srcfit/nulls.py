"""Null modes of a member that nothing holds, beside the chain of the held one."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from srcfit.holds import ADDED, support_intervals
from srcfit.influence import Influence, Term, influence, interval_integrals
from srcfit.member import Array, Member
from srcfit.quantities import functionals
from srcfit.state import Chain, Matrix, chain, profile

ALIKE = 1e-6  # largest difference of a null mode from the shape it is called by


def _released(line: Chain) -> Matrix:
    """Scaled states at the free member's nodes (d, N, n) when each hold in turn moves by one.

    No force is needed for that: these are null modes. By reciprocity the response to a moved
    support is the influence line of its reaction.
    """
    unit = np.eye(line.order)[-1]
    supports = zip(line.member.supports, support_intervals(line), strict=True)
    holds = [k for support, k in supports if support.word == ADDED]
    lines = influence(line, [[Term(k + 1, unit), Term(k, -unit)] for k in holds])
    # the free member has no node pairs at the holds
    nodes = np.setdiff1d(np.arange(len(line.x)), [k + 1 for k in holds])
    found: Matrix = lines.ahead(nodes).transpose(1, 0, 2)
    return found


UNIFORM = {"rod": "shift", "cable": "shift", "shaft": "twist"}


def _name(line: Chain, shape: Matrix, place: Callable[[float], str]) -> str:
    """A free motion in words, from its responses (N,) at the nodes."""
    member = line.member
    v = np.real(shape / shape[np.argmax(np.abs(shape))])
    if np.ptp(v) <= ALIKE:
        if member.kind.order == 2 and member.kind.name not in UNIFORM:
            return f"a uniform level of the {member.kind.response}"
        return f"a uniform {UNIFORM.get(member.kind.name, 'shift')} of the member"
    if member.driven or member.lam or member.kind.order == 2:
        return "a free vibration of the member" if member.driven else "a free motion of the member"
    stops = [member.start, *(h.at for h in member.hinges), member.end]
    parts = [v[(line.x >= a) & (line.x <= b)] for a, b in pairwise(stops)]
    resting = [bool(np.abs(part).max() <= ALIKE) for part in parts]
    if not any(resting) and _off_straight(line.x, v) <= ALIKE:
        return "a rigid rotation of the member"
    moving = [k for k, rests in enumerate(resting) if not rests]
    if len(parts) == 1:
        return "a free motion of the member"
    if len(moving) == 1:
        ends = place(stops[moving[0]]), place(stops[moving[0] + 1])
        return f"a rotation of the part from {ends[0]} to {ends[1]}"
    folds = sorted({k for part in moving for k in (part, part + 1)} & set(range(1, len(parts))))
    return "a folding at " + " and ".join(place(stops[k]) for k in folds)


def _off_straight(x: Array, v: Array) -> float:
    """Largest distance of values from their straight line."""
    return float(np.abs(v - np.polyval(np.polyfit(x, v, 1), x)).max())


class Nulls:
    """Null modes of a singular member on the chain of the held one, orthonormal with r w.

    A uniform motion, if there is one, comes first; then a rotation, if there is one.
    """

    def __init__(self, member: Member, line: Chain) -> None:
        free = chain(member, line.x)
        self.line, self.free = line, free
        states = _released(line)
        self.density = profile(member, "r", free.places, 1.0)
        self.spread = self.density * free.weights
        at = np.einsum("ksd,jkd->jks", free.stages, states[:, :-1])
        gram = np.einsum("iks,ks,jks->ij", at.conj(), self.spread, at)
        root = np.linalg.inv(np.linalg.cholesky(gram))
        turn = self._plain_first(np.einsum("ij,jks->iks", root, at)) @ root
        self.states, self.at = (
            np.einsum("ij,jkd->ikd", turn, states),
            np.einsum("ij,jks->iks", turn, at),
        )

    def _plain_first(self, at: Matrix) -> Matrix:
        """Unitary (d, d) that turns orthonormal modes so that plain motions come first."""
        found: list[Matrix] = []
        middle = (self.spread * self.free.places).sum() / self.spread.sum()
        for shape in (np.ones(self.spread.shape), self.free.places - middle):
            c = np.einsum("jks,ks,ks->j", at.conj(), self.spread, shape)
            off = shape - np.einsum("j,jks->ks", c, at)
            if (self.spread * np.abs(off) ** 2).sum() <= ALIKE**2 * (self.spread * shape**2).sum():
                found.append(c)
        return np.asarray(np.linalg.qr(np.stack([*found, *np.eye(len(at))], axis=1))[0].T)

    def names(self, place: Callable[[float], str]) -> tuple[str, ...]:
        """Each null mode in words; `place` writes a place in the user's unit."""
        found = [_name(self.free, state[:, 0], place) for state in self.states]
        again = [found[:i].count(name) for i, name in enumerate(found)]
        return tuple(
            f"{name} ({n + 1})" if n else name for name, n in zip(found, again, strict=True)
        )

    def value(self, x: Array) -> Matrix:
        """Null modes at places, (d, len(x))."""
        found: Matrix = self.states[:, self.free.node(x), 0] * self.free.scale[0]
        return found

    def mean(self, start: float, end: float) -> Matrix:
        """Averages of the null modes over a stretch whose ends are nodes, area-weighted, (d,)."""
        middle = (self.free.x[1:] + self.free.x[:-1]) / 2
        weights = self.free.weights * ((middle > start) & (middle < end))[:, None]
        found: Matrix = np.einsum("dks,ks->d", self.at, weights) / weights.sum()
        return found

    def read(self, quantity: str, x: Array, before: NDArray[np.bool_] | None = None) -> Matrix:
        """A quantity of the null modes at places, (len(x), d); limits as in `functionals`."""
        rows = [self.reading(terms) for terms in functionals(self.free, quantity, x, before)]
        return np.array(rows).reshape(len(x), len(self.states))

    def reading(self, terms: Sequence[Term]) -> Matrix:
        """A functional of the null modes, its terms on the chain `free`, (d,)."""
        total = np.zeros(len(self.states), dtype=self.states.dtype)
        for term in terms:
            total = total + (self.states[:, term.node] * self.free.scale) @ term.row
        return total

    def against(self, lines: Influence) -> Matrix:
        """Integrals of r w phi times influence lines, (n, d)."""
        real = np.diff(self.line.x) > 0
        mine = np.diff(self.free.x) > 0
        found = []
        for phi in self.at:
            density = np.zeros(self.line.weights.shape, dtype=phi.dtype)
            density[real] = (phi * self.density)[mine]
            found.append(interval_integrals(lines, density).sum(axis=1))
        return np.stack(found, axis=1)

    def forces(self) -> Matrix:
        """Reactions of the null modes at restraints, (d, k), in the order of `kernel.prescribed`.

        What a unit amount prescribed there does to the balance of the source.
        """
        member, scale = self.free.member, self.free.scale
        last, found = len(scale) - 1, []
        for end, node, side in ((member.left, 0, 1.0), (member.right, -1, -1.0)):
            state = self.states[:, node] * scale
            if end.response.stiffness != 0 and not end.axis:
                found.append(side * state[:, last])
            if end.rotation.stiffness != 0:
                found.append(-side * state[:, 2])
        for interval in support_intervals(self.free):
            step = self.states[:, interval + 1, last] - self.states[:, interval, last]
            found.append(step * scale[last])
        empty = np.zeros((len(self.states), 0))
        return np.stack(found, axis=1) if found else empty
