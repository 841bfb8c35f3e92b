"""Null modes of a member that nothing holds, beside the chain of the held one."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from srcfit.holds import null_states, support_intervals
from srcfit.influence import Influence, Term, bases, interval_integrals
from srcfit.member import Array, Member
from srcfit.quantities import functionals
from srcfit.state import Chain, Matrix, chain, profile


class Nulls:
    """Null modes of a singular member on the chain of the held one, orthonormal with r w."""

    def __init__(self, member: Member, line: Chain) -> None:
        free = chain(member, line.x)
        self.line, self.free = line, free
        states = null_states(free, bases(free))
        self.density = profile(member, "r", free.places, 1.0)
        self.spread = self.density * free.weights
        at = np.einsum("ksd,jkd->jks", free.stages, states[:, :-1])
        gram = np.einsum("iks,ks,jks->ij", at.conj(), self.spread, at)
        root = np.linalg.inv(np.linalg.cholesky(gram))
        self.states, self.at = (
            np.einsum("ij,jkd->ikd", root, states),
            np.einsum("ij,jks->iks", root, at),
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
