"""From a case and its readings to the linear problem: what each reading sees of each unknown.

reading = A f + B beta + known + noise, all in SI. A: densities on the cells, each cell integrated
exactly along the reading's influence line. B: lumped parts, nuisances, null modes. The whitened
`Problem` is built when asked for, so that noise can be stated or estimated.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import Case, ColumnSpec
from srcfit.eigen import refuse_buckled
from srcfit.errors import SolveError
from srcfit.grid import make_grid, overlap, spread
from srcfit.holds import restrained, restraint_forces
from srcfit.influence import Influence, Term, at_nodes, influence, interval_integrals
from srcfit.kernel import prescribed
from srcfit.member import Array, Member, Unknown
from srcfit.nulls import Nulls
from srcfit.problem import Grid
from srcfit.quantities import functional, functionals
from srcfit.readings.model import Readings
from srcfit.sensors import samples, sensor_terms
from srcfit.state import Chain, Matrix, chain, inner_edges, special_places
from srcfit.units import multiply_text
from srcfit.unknowns import (
    Column,
    Reaction,
    base,
    corrected,
    lags,
    place_text,
    reading_nuisances,
    response_unit,
    restraint_label,
    stack,
)


@dataclass(frozen=True)
class Forward:
    """The linear model of a case, in SI; n used readings, m cells, k columns, q reactions.

    Attributes
    ----------
    rows : (n,) row numbers of the used readings
    A : (n, m), B : (n, k), y : (n,) readings less everything known
    known : (n,) response to ambient, prescribed amounts and known parts
    sd : (n,) stated standard deviation, nan where it is to be estimated
    group : (n,) number of each reading's group in `groups`
    lag : (g,) lag-1 correlation of each group, nan where it is to be estimated
    order : (n,) position of each reading in its group's sequence along the member
    reactions : tuple of q Reaction; `reaction_cells` (q, m), `reaction_columns` (q, k),
        `reaction_known` (q,)
    balance : (d, m + k + 1) rows over densities, columns and 1 that vanish for balanced sources;
        None when regular
    nulls : null modes of a singular member, None when regular
    line, lines : Chain and Influence (sensors first, then reactions)
    """

    case: Case
    readings: Readings
    grid: Grid
    rows: NDArray[np.int64]
    A: Matrix
    B: Matrix
    y: Matrix
    known: Matrix
    sd: Array
    group: NDArray[np.int64]
    groups: tuple[str, ...]
    lag: Array
    columns: tuple[Column, ...]
    reactions: tuple[Reaction, ...]
    reaction_cells: Matrix
    reaction_columns: Matrix
    reaction_known: Matrix
    balance: Matrix | None
    nulls: Nulls | None
    line: Chain
    lines: Influence

    @property
    def driven(self) -> bool:
        """Whether everything is a complex amplitude (kernels may be real all the same)."""
        return self.case.member.driven

    @property
    def places(self) -> Array:
        """Place of each used reading [m], (n,)."""
        return np.asarray(self.readings.x[self.rows], dtype=float)

    def specs(self) -> list[ColumnSpec]:
        """The column spec of each used reading."""
        return [self.case.columns[self.readings.spec[r]] for r in self.rows]


def build(
    case: Case, readings: Readings, *, edges: Sequence[float] = (), spare: bool = False
) -> Forward:
    """Build the linear model of a case.

    Parameters
    ----------
    edges : sequence of float
        Further places where cells are cut [m].
    spare : bool
        Whether there may be more unknowns than readings (places that are to be compared).

    Raises
    ------
    SolveError
        When there are fewer used readings than unknown nuisances + 1.
    MemberError
        When a beam buckles under its compression.
    """
    refuse_buckled(case.member)
    rows = np.flatnonzero(readings.used)
    grid = make_grid(case, edges)
    specs = [case.columns[readings.spec[r]] for r in rows]
    line, asked, nulls, reactions, null_columns = _lines(case, readings, rows, specs, grid)
    lines, n = influence(line, asked), len(rows)
    cells, columns, member_columns, known = _model(case, grid, line, lines)
    own, own_columns = reading_nuisances(case, readings, rows, specs)
    padded = np.zeros((len(lines) - n, own_columns.shape[1]))
    columns += own
    if nulls is not None:
        columns += [Column(name, "null") for name in nulls.names(partial(place_text, case))]
    B = np.concatenate(
        [member_columns, np.concatenate([own_columns, padded]), null_columns], axis=1
    )
    absolute = base(case.member) * _absolute(case.member, specs)
    y = corrected(readings, rows, specs) - known[:n] - absolute
    if not spare:
        _enough(case, n, columns)
    group_names = tuple(dict.fromkeys(s.group for s in specs))
    balance = None if nulls is None else _balance(nulls, grid, case, len(columns))
    return Forward(
        case, readings, grid, rows, cells[:n], B[:n], y, known[:n] + absolute, readings.sd[rows],
        np.array([group_names.index(s.group) for s in specs], dtype=int), group_names,
        lags(specs, group_names), tuple(columns), reactions, cells[n:], B[n:], known[n:],
        balance, nulls, line, lines,
    )  # fmt: skip


def _model(
    case: Case, grid: Grid, line: Chain, lines: Influence
) -> tuple[Matrix, list[Column], Matrix, Matrix]:
    """What functionals see of each cell, lumped part and unknown amount, and what is known."""
    cells = _per_cell(line, grid, interval_integrals(lines)) * grid.free
    loads, load_columns = _lumped(case, line, lines)
    given, unknown, unknown_columns = _restraints(case, lines)
    columns = np.concatenate([load_columns, unknown_columns], axis=1)
    return cells, [*loads, *unknown], columns, given + _known_parts(case, line, lines)


def along(
    forward: Forward, quantity: str, x: Array, before: NDArray[np.bool_] | None = None
) -> tuple[Matrix, Matrix, Matrix]:
    """A quantity along the member as rows over cells and columns, and its known part.

    Free motions of a member that nothing holds are columns too; nuisances of readings are 0.

    Parameters
    ----------
    quantity : str
        As in `kernel.kernel`.
    x : (g,) places that are nodes of the forward's chain (cell edges are) [m]
    before : (g,) where the left limit is wanted

    Returns
    -------
    cells (g, m), columns (g, k), known (g,), in SI; the ambient is left out.
    """
    line = forward.line
    lines = influence(line, functionals(line, quantity, x, before))
    cells, _, columns, known = _model(forward.case, forward.grid, line, lines)
    null = np.zeros((len(x), 0))
    if forward.nulls is not None:
        null = forward.nulls.read(quantity, x, before)
    padded = np.zeros((len(x), forward.B.shape[1] - columns.shape[1] - null.shape[1]))
    return cells, np.concatenate([columns, padded, null], axis=1), known


def _enough(case: Case, n: int, columns: list[Column]) -> None:
    unknown = sum(c.kind != "null" and c.sd is None for c in columns)
    if n < unknown + 1:
        names = ", ".join(c.name for c in columns if c.kind != "null")
        listed = f" ({names})" if names else ""
        raise SolveError(
            f"{n} usable readings cannot tell {unknown} unknowns{listed}",
            str(case.path or "case"),
            "add readings, or state some of the unknowns",
        )  # fmt: skip


def _lines(
    case: Case, readings: Readings, rows: NDArray[np.int64], specs: list[ColumnSpec], grid: Grid
) -> tuple[Chain, list[list[Term]], Nulls | None, tuple[Reaction, ...], Matrix]:
    """Functionals of all used sensors and of all reactions, and what they read of null modes."""
    member = case.member
    held, free = restrained(member)
    jumps = [p for p, _, _ in special_places(held)]
    kinks = np.unique([*grid.edges, *inner_edges(member), *jumps])
    spots = [
        samples(member, float(readings.x[r]), s.gauge_length, kinks)
        for r, s in zip(rows, specs, strict=True)
    ]
    loads = [p.at for p in case.source.lumped if p.at is not None]
    known = [e for part in case.source.known for e in (part.start, part.end)]
    points = np.concatenate([grid.edges, loads, known, *(place for place, _ in spots)])
    line = chain(held, points)

    def asked(line: Chain) -> list[list[Term]]:
        sensors = [
            (s.kind, place, weight, s.distance)
            for s, (place, weight) in zip(specs, spots, strict=True)
        ]
        return [*sensor_terms(line, sensors), *_reactions(case, line)[1]]

    found, reactions = asked(line), _reactions(case, line)[0]
    if not free:
        return line, found, None, reactions, np.zeros((len(found), 0))
    nulls = Nulls(member, line)
    reads = np.array([nulls.reading(terms) for terms in asked(nulls.free)])
    return line, found, nulls, reactions, reads


def _reactions(case: Case, line: Chain) -> tuple[tuple[Reaction, ...], list[list[Term]]]:
    """Every reaction, end couple and end flow that the member's restraints can carry."""
    found, terms = [], []
    member, total = case.member, case.source.total_unit
    order, kind = member.kind.order, member.kind
    flow = "force" if order == 4 else kind.flux_name or "force"
    units = total, kind.total_unit
    couple = multiply_text(total, case.source.position_unit), "N*m"
    for word, end, place in (
        ("left", member.left, member.start),
        ("right", member.right, member.end),
    ):
        if end.response.stiffness != 0 and not end.axis:
            found.append(Reaction(word, place, flow, *units))
            terms.append(functional(line, "reaction", place))
        if end.rotation.stiffness != 0:
            found.append(Reaction(word, place, "moment", *couple))
            terms.append(functional(line, "moment", place))
    for number, support in enumerate(member.supports, start=1):
        found.append(Reaction(f"support.{number}", support.at, flow, *units))
        terms.append(functional(line, "reaction", support.at))
    return tuple(found), terms


def _per_cell(line: Chain, grid: Grid, intervals: Matrix) -> Matrix:
    """Sum interval columns into cell columns."""
    middle = (line.x[1:] + line.x[:-1]) / 2
    cell = np.clip(np.searchsorted(grid.edges, middle) - 1, 0, len(grid.free) - 1)
    first = np.searchsorted(cell, np.arange(len(grid.free)))
    found: Matrix = np.add.reduceat(intervals, first, axis=1)
    return found


def _stretch(line: Chain, lines: Influence, start: float, end: float) -> Matrix:
    """Response of each functional to unit density on [start, end], (n,)."""
    middle = (line.x[1:] + line.x[:-1]) / 2
    inside = (middle > start) & (middle < end)
    density = np.where(inside[:, None], 1.0, 0.0) * np.ones(line.weights.shape)
    found: Matrix = interval_integrals(lines, density).sum(axis=1)
    return found


def _at(line: Chain, lines: Influence, place: float) -> Matrix:
    """Response of each functional to a unit lumped source, (n,)."""
    found: Matrix = at_nodes(lines, line.node(np.array([place])))[:, 0]
    return found


def _lumped(case: Case, line: Chain, lines: Influence) -> tuple[list[Column], Matrix]:
    source, member = case.source, case.member
    columns, rows = [], []
    for part in source.lumped:
        if part.at is None:
            raise SolveError(
                f"the lumped part {part.name!r} has no place", "source.lumped",
                "give its place with `at`",
            )  # fmt: skip
        columns.append(Column(part.name, "lumped", source.total_unit, member.kind.total_unit))
        if part.width == 0:
            rows.append(_at(line, lines, part.at))
        else:
            start, end = spread(part)
            size = overlap(member, np.array([member.start, member.end]), start, end)[0]
            rows.append(_stretch(line, lines, start, end) / size)
    return columns, stack(rows, len(lines))


def _absolute(member: Member, specs: list[ColumnSpec]) -> Array:
    """1 for readings of the response itself (they include the ambient), else 0."""
    return np.array([float(member.kind.sensor(s.kind).quantity == "response") for s in specs])


def _restraints(case: Case, lines: Influence) -> tuple[Matrix, list[Column], Matrix]:
    """Response to known prescribed amounts; columns of the unknown ones."""
    names, forces = restraint_forces(lines)
    given = dict(zip(names, forces.T, strict=True))
    reference = base(case.member)
    known = np.zeros(len(lines), dtype=forces.dtype)
    columns, rows = [], []
    for name, amount in prescribed(case.member):
        if isinstance(amount, Unknown):
            label, si_unit = restraint_label(case, name)
            turned = name.endswith("rotation")
            unit = si_unit if turned else response_unit(case)
            shift = 0.0 if turned else reference
            columns.append(
                Column(
                    label,
                    "nuisance",
                    unit,
                    si_unit,
                    shift,
                    amount.guess,
                    amount.sd,
                    case.member.kind.relative and not turned,
                )
            )
            rows.append(given[name])
        else:
            known = known + amount * given[name]
    return known, columns, stack(rows, len(lines))


def _known_parts(case: Case, line: Chain, lines: Influence) -> Matrix:
    total = np.zeros(len(lines), dtype=lines.left_of.dtype)
    for part in case.source.known:
        one = (
            _at(line, lines, part.start)
            if part.start == part.end
            else _stretch(line, lines, part.start, part.end)
        )
        total = total + part.value * one
    return total


def _balance(nulls: Nulls, grid: Grid, case: Case, k: int) -> Matrix:
    """Rows over (cells, columns, 1) that vanish for balanced sources, (d, m + k + 1)."""
    m, source = len(grid.free), case.source
    middle = (nulls.free.x[1:] + nulls.free.x[:-1]) / 2
    cell = np.clip(np.searchsorted(grid.edges, middle) - 1, 0, m - 1)
    kind = np.result_type(float, *(part.value for part in source.known))
    rows = np.zeros((len(nulls.at), m + k + 1), dtype=kind)
    for d, part in enumerate((nulls.at * nulls.free.weights).sum(axis=2)):
        np.add.at(rows[d, :m], cell, part)
    rows[:, :m] *= grid.free
    for j, lump in enumerate(source.lumped):
        assert lump.at is not None
        if lump.width == 0:
            rows[:, m + j] = nulls.value(np.array([lump.at]))[:, 0]
        else:
            rows[:, m + j] = nulls.mean(*spread(lump))
    unknown = m + len(source.lumped)
    for force, (_, amount) in zip(nulls.forces().T, prescribed(case.member), strict=True):
        if isinstance(amount, Unknown):
            rows[:, unknown] = force
            unknown += 1
        else:
            rows[:, -1] += amount * force
    for known in source.known:
        if known.start == known.end:
            rows[:, -1] += known.value * nulls.value(np.array([known.start]))[:, 0]
        else:
            ends = np.array([case.member.start, case.member.end])
            size = overlap(case.member, ends, known.start, known.end)[0]
            rows[:, -1] += known.value * size * nulls.mean(known.start, known.end)
    return rows
