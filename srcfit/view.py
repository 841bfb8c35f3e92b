"""What readings of one quantity see of a member, at any places and without a case file.

The same numbers as `forward` gives for a case, for readings of one quantity held in arrays.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from srcfit.errors import ReadingsError
from srcfit.grid import cell_weights
from srcfit.holds import ADDED, restrained, restraint_forces
from srcfit.influence import influence, interval_integrals
from srcfit.kernel import prescribed
from srcfit.member import RIGID, Array, End, Member, Profile, Restraint, Unknown
from srcfit.members import MEMBERS
from srcfit.nulls import Nulls
from srcfit.problem import Grid, Problem
from srcfit.quantities import functionals
from srcfit.state import chain

BEYOND = 0.05  # how far the plain string reaches beyond the places, in units of their span
BLOCK = 500  # places on one chain: its cost grows with the square of their number


@dataclass(frozen=True)
class View:
    """What readings of one quantity, times a factor, see of cells and unknown amounts.

    Unknown amounts are those prescribed as unknown, then the free motions of a member that
    nothing holds, each measured by the response at one fixed place.
    """

    member: Member
    edges: Array
    quantity: str
    factor: float = 1.0

    @property
    def base(self) -> float:
        """Reference of the response, which is read absolutely."""
        return self.member.ambient if self.member.kind.relative else 0.0

    @property
    def unknowns(self) -> list[tuple[str, Unknown]]:
        """Amounts prescribed as unknown, less the ambient."""
        return [(name, v) for name, v in prescribed(self.member) if isinstance(v, Unknown)]

    def rows(self, x: Array) -> tuple[Array, Array, Array]:
        """Rows over cells (n, m) and unknown amounts (n, k), and the known part (n,)."""
        places, back = np.unique(x, return_inverse=True)
        blocks = np.array_split(places, -(-len(places) // BLOCK))
        parts = zip(*(self._block(block) for block in blocks), strict=True)
        cells, columns, known = (self.factor * np.concatenate(part)[back] for part in parts)
        return cells, columns, known + (self.base if self.quantity == "response" else 0.0)

    def _block(self, x: Array) -> tuple[Array, Array, Array]:
        held, free = restrained(self.member)
        line = chain(held, np.concatenate([self.edges, x]))
        lines = influence(line, functionals(line, self.quantity, x))
        cells = np.add.reduceat(interval_integrals(lines), self._first(line.x), axis=1)
        known, columns = np.zeros(len(x)), [np.zeros((len(x), 0))]
        forces = restraint_forces(lines)[1]
        for (_, amount), column in zip(prescribed(self.member), forces.T, strict=True):
            if isinstance(amount, Unknown):
                columns.append(column[:, None])
            else:
                known += amount * column
        if free:
            nulls = Nulls(self.member, line)
            holds = [s.at for s in held.supports if s.word == ADDED]
            at = nulls.value(np.array(holds))
            columns.append(nulls.read(self.quantity, x) @ np.linalg.inv(at).T)
        return cells, np.hstack(columns), known

    def _first(self, nodes: Array) -> NDArray[np.int64]:
        """First interval of each cell."""
        cell = np.searchsorted(self.edges, (nodes[1:] + nodes[:-1]) / 2) - 1
        return np.searchsorted(np.clip(cell, 0, None), np.arange(len(self.edges) - 1))

    def balance(self) -> Array | None:
        """Integrals of the free motions over each cell (d, m); None where the member is held."""
        held, free = restrained(self.member)
        if not free:
            return None
        nulls = Nulls(self.member, chain(held, self.edges))
        parts = (nulls.at * nulls.free.weights).sum(axis=2)
        return np.asarray(np.add.reduceat(parts, self._first(nulls.free.x), axis=1))

    def problem(self, x: Array, y: Array, Z: Array, weight: Array, sd: float | None) -> Problem:
        """The whitened problem of readings `y` at `x`.

        What is known beforehand about an unknown amount becomes a row after the readings.

        Parameters
        ----------
        x, y : (n,) places [m] and readings (SI)
        Z : (n, j) covariates, one more unpenalised column each
        weight : (n,) readings have the sd `sd` / sqrt(weight)
        sd : float or None
            None: not stated; the problem is whitened as if it were 1.

        Raises
        ------
        ReadingsError
            When knowledge about an unknown amount meets readings without a stated sd.
        """
        cells, columns, known = self.rows(x)
        unknowns, balance = self.unknowns, self.balance()
        scale = np.sqrt(weight) / (sd or 1.0)
        rows = np.column_stack([cells, columns, Z, y - known]) * scale[:, None]
        m, k = cells.shape[1], columns.shape[1]
        knowledge = []
        for j, (name, amount) in enumerate(unknowns):
            if amount.sd is None:
                continue
            if sd is None:
                raise ReadingsError(
                    "what is known about it cannot be weighed against readings of unknown sd",
                    name, "state the sd of the readings",
                )  # fmt: skip
            row = np.zeros(rows.shape[1])
            row[m + j], row[-1] = 1 / amount.sd, amount.guess / amount.sd
            knowledge.append(row)
        rows = np.vstack([rows, *knowledge])
        names = [name for name, _ in unknowns]
        names += [f"free motion {i + 1}" for i in range(k - len(unknowns))]
        names += [f"covariate {i + 1}" for i in range(Z.shape[1])]
        grid = Grid(self.edges, cell_weights(self.member, self.edges), np.ones(m, dtype=bool))
        return Problem(
            rows[:, :m], rows[:, m:-1], rows[:, -1], grid, tuple(names),
            constant=balance is None, balance=balance, pseudo=len(knowledge),
            stated=sd is not None, places=x,
        )  # fmt: skip

    def absolute(self, amounts: Array) -> dict[str, float]:
        """Amounts prescribed as unknown by name, the ambient included; further ones are left."""
        names = [name for name, _ in self.unknowns]
        shift = [0.0 if name.endswith("rotation") else self.base for name in names]
        return {n: float(a + b) for n, a, b in zip(names, amounts, shift, strict=False)}


def look(member: Member, name: str, cells: int, distance: float | None = None) -> View:
    """The view of a member on equal cells by a sensor kind or a quantity.

    Parameters
    ----------
    name : str
        A sensor kind of the member, or a quantity of `kernel.kernel`.
    cells : int
    distance : float, optional
        Depth below the axis [m], for strains of a beam.

    Raises
    ------
    ReadingsError
        For strains without a distance.
    """
    edges = np.linspace(member.start, member.end, cells + 1)
    spec = next((s for s in member.kind.sensors if s.name == name), None)
    if spec is None or not spec.needs_distance:
        return View(member, edges, name if spec is None else spec.quantity)
    if distance is None:
        raise ReadingsError(
            "it needs the depth below the axis", f"quantity {name!r}", "give `distance`"
        )
    return View(member, edges, spec.quantity, distance)


def string(x: Array) -> Member:
    """A string of unit tension past all positions, its ends held at unknown heights."""
    span = float(np.ptp(x)) or 1.0
    start, end = float(x.min()) - BEYOND * span, float(x.max()) + BEYOND * span
    held = End("value", Restraint(RIGID, Unknown()))
    tension = Profile((start, end), (1.0,))
    return Member(MEMBERS["cable"], start, end, {"p": tension}, held, held)
