"""What the readings tell: resolution, the weight of each reading, another strength.

All of it follows from the factors of the estimate itself (`smoother`), without another inversion.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.bands import Fit
from srcfit.errors import Finding, Level, as_percent
from srcfit.member import Array
from srcfit.problem import Questions
from srcfit.recovery import Number
from srcfit.results import Shown, known, position_scale
from srcfit.smoother import Smoother, colours, smoother
from srcfit.solve import Solved, one_roughness
from srcfit.solvers import SOLVERS
from srcfit.whitening import linked_rows, parts_of

BLIND = 0.2  # part of its noise that the mean level must move a reading by
MANY = 3  # heavy readings beside the heaviest that no longer are a matter of single readings
LEAST = 1e-9  # part of a cell's density that is rounding
DECADES = {"weaker": -1.0, "stronger": 1.0}


@dataclass(frozen=True)
class Told:
    """What the readings tell of the source, in SI; z zones, n used readings, m cells.

    Attributes
    ----------
    main : Smoother
        Of the total and the zones, each part of a complex amplitude by itself.
    rows : (parts, 1 + z) int
        Row of the total and the zones among the answers.
    resolution : (m,)
        Length that one independent piece of knowledge covers at each cell [m]; nan where there
        is no smooth part.
    zone_resolution, beside : (z,)
        The same over each zone, and the part of its estimate that comes from outside of it.
    shift : (1 + z, n)
        How far each reading alone moves the total and the zones (real parts).
    decade : mapping weaker, stronger -> ((1 + z,) answers, effective dof)
        nan where nothing was smoothed.
    """

    main: Smoother
    rows: NDArray[np.intp]
    resolution: Array
    zone_resolution: Array
    beside: Array
    shift: Array
    decade: dict[str, tuple[Array, float]]

    @cached_property
    def noise(self) -> Array:
        """Variance that the noise gives each estimate, (parts, 1 + z)."""
        return self.main.noise_variance().reshape(self.rows.shape)


def tell(solved: Solved) -> Told:
    """What the readings tell of a source that was recovered."""
    blocks, every = solved.asked.blocks, solved.asked.questions
    first = np.r_[blocks["total"], blocks["zones"]]
    count = len(every.cells) // solved.asked.parts
    rows = np.stack([first + p * count for p in range(solved.asked.parts)])
    fit, z = solved.answers.fit, len(first)
    main = smoother(solved.problem, fit, _rows(every, rows.ravel()))
    resolution, zones, beside = _resolved(solved, main, rows)
    around = smoother(solved.problem, _around(solved, fit), _rows(every, first))
    decade = {name: around.moved(step) for name, step in DECADES.items()}
    found = linked_rows(solved.forward, solved.links)
    shift = _per_reading(solved, main.shifts(colours(found.before, found.lag)))[:z]
    return Told(main, rows, resolution, zones, beside, shift, decade)


def _rows(questions: Questions, rows: NDArray[np.intp]) -> Questions:
    return Questions(questions.cells[rows], questions.columns[rows])


def _around(solved: Solved, fit: Fit) -> Fit:
    """The fit with rungs on both sides of its strength: a stated one stands on a single rung."""
    if len(fit.ladders) != 1 or len(fit.ladders[0].strengths) > 1:
        return fit
    tau = fit.ladders[0].strengths[0] * np.array([0.1, 1.0, 10.0])
    ladder = SOLVERS["tikhonov"](
        solved.problem, roughness=one_roughness(solved.forward.case), strengths=tau
    )  # fmt: skip
    return replace(fit, ladders=(ladder,), weights=(np.eye(3)[1],))


def _per_reading(solved: Solved, rows: Array) -> Array:
    """Sums over the parts of each reading, (..., n)."""
    number, _ = parts_of(solved.forward)
    found = np.zeros((len(solved.forward.rows), len(rows)))
    np.add.at(found, number, rows.T)
    return found.T


def _resolved(
    solved: Solved, main: Smoother, rows: NDArray[np.intp]
) -> tuple[Array, Array, Array]:
    """Resolution of the cells and the zones, and what zones take from beside them.

    The averaging kernel R = d f^ / d f says how the estimate mixes the true source. R_ii over the
    cell's length is the density of independent pieces of knowledge there, and its reciprocal
    the length that one of them covers: the width of the kernel, were it a box of its own height.
    Sources: Backus & Gilbert (1968), Geophys. J. R. Astron. Soc. 16, 169 (averaging kernels);
    Purser & Huang (1993), J. Appl. Meteorol. 32, 1092 (density of data).
    """
    grid, zones = solved.forward.grid, solved.forward.case.source.zones
    m, blank = len(grid.free), np.full(len(zones), np.nan)
    if not main.parts:
        return np.full(m, np.nan), blank, blank
    every, start = solved.asked.questions, solved.asked.blocks["cells"].start
    cells = Questions(every.cells[start : start + m], every.columns[start : start + m])
    T = smoother(solved.problem, main.fit, cells).matrix()
    told = np.einsum("in,ni->i", T, solved.problem.A[:, :m])
    whole = float(grid.widths[grid.free].sum())
    density = np.maximum(told / grid.widths, 1 / whole)
    width = np.where(grid.free, 1 / density, np.nan)
    inside = [(grid.middles > z.start) & (grid.middles < z.end) & grid.free for z in zones]
    sizes = [float(grid.widths[i].sum() / max(told[i].sum(), LEAST)) if i.any() else np.nan
             for i in inside]  # fmt: skip
    seen = np.abs(main.matrix()[1 : rows.shape[1]] @ solved.problem.A[:, :m])
    beside = [
        float(row[~i].sum() / row.sum()) if row.sum() > 0 else np.nan
        for row, i in zip(seen, inside, strict=True)
    ]
    return width, np.minimum(sizes, whole), np.array(beside)


def columns(solved: Solved, told: Told) -> tuple[dict[str, Array], dict[str, Array]]:
    """One more column for source.csv and one for readings.csv, in the user's units."""
    source, readings = solved.forward.case.source, solved.forward.readings
    shift = np.full(len(readings), np.nan)
    shift[solved.forward.rows] = told.shift[0] * solved.asked.factor[0]
    resolution = told.resolution * position_scale(solved)
    return (
        {f"resolution [{source.position_unit}]": resolution},
        {f"shift_total [{source.total_unit}]": shift},
    )


def facts(solved: Solved, told: Told) -> dict[str, Any]:
    """Further keys of summary.json: one decade of strength, zones' resolution, heavy readings."""
    zones = [z.name for z in solved.forward.case.source.zones]
    readings, scale = solved.forward.readings, position_scale(solved)
    # with inequalities or doubtful places the answer is no longer the ladder's own
    plain = solved.held is None and not solved.places
    decade: dict[str, Any] = {}
    for name, (_, dof) in told.decade.items():
        values = [known(v) for v in moved(solved, told, name)]
        decade[name] = None if not (plain and np.isfinite(dof)) else {
            "total": values[0],
            "zones": [{"name": z, "value": v} for z, v in zip(zones, values[1:], strict=True)],
            "effective_dof": dof,
        }  # fmt: skip
    heaviest = []
    factor = solved.asked.factor[told.rows[0]]
    names: list[str | None] = [None, *zones]
    for question, shift in zip(names, told.shift * factor[:, None], strict=True):
        if np.isfinite(shift).any():
            i = int(np.nanargmax(np.abs(shift)))
            row = solved.forward.rows[i]
            heaviest.append(
                {"zone": question, "file": readings.file[row], "line": int(readings.line[row]),
                 "shift": float(shift[i])}
            )  # fmt: skip
    return {
        "decade": decade,
        "resolution": [
            {"name": z, "width": known(w * scale), "beside": known(b)}
            for z, w, b in zip(zones, told.zone_resolution, told.beside, strict=True)
        ],
        "heaviest": heaviest,
    }  # fmt: skip


def moved(solved: Solved, told: Told, name: str) -> Array:
    """Total and zones one decade of strength away, in the user's unit, (1 + z,)."""
    asked, rows = solved.asked, told.rows[0]
    values = told.decade[name][0] + np.real(asked.constant[rows]) + asked.shift[rows]
    return np.asarray(values * asked.factor[rows])


def findings(solved: Solved, shown: Shown, told: Told) -> list[Finding]:
    """What resolution, single readings and the strength leave to say."""
    found = _narrow(solved, told) + _at_nodes(solved) + _unseen(solved)
    if solved.held is None and not solved.places:
        total = shown.numbers("total")[0]
        found += _heavy(solved, told, total) + _leaning(solved, told, total)
    return found


def _narrow(solved: Solved, told: Told) -> list[Finding]:
    """Zones narrower than what the readings resolve there, unless their edges are known."""
    grid, scale = solved.forward.grid, position_scale(solved)
    unit = solved.forward.case.source.position_unit
    jumps = np.flatnonzero(np.diff(grid.free.astype(int))) + 1
    edges = np.concatenate([grid.edges[[0, -1]], grid.breaks, grid.edges[jumps]])
    near = 1e-6 * (grid.edges[-1] - grid.edges[0])
    zones = solved.forward.case.source.zones
    listed = []
    for zone, width, beside in zip(zones, told.zone_resolution, told.beside, strict=True):
        sure = all(np.abs(edges - e).min() < near for e in (zone.start, zone.end))
        size = zone.end - zone.start
        if not sure and size < width:
            listed.append(
                f"zone {zone.name} is {size * scale:.3g} {unit} wide, the readings resolve "
                f"{width * scale:.2g} {unit} there, and {as_percent(beside)} of the weight of "
                "its value lies beside it"
            )
    if not listed:
        return []
    told_of = "; ".join(listed)
    return [
        Finding(
            "zone-finer-than-resolution", "note",
            f"{told_of[0].upper()}{told_of[1:]}: judge it together with its neighbours, place "
            "readings closer together, or declare its edges as `breaks` if they are known.",
        )
    ]  # fmt: skip


def _at_nodes(solved: Solved) -> list[Finding]:
    """Readings that the source cannot move, and that tell of no other unknown either."""
    forward, level = solved.forward, solved.answers.level
    if not solved.problem.smooth or not level > 0:
        return []
    reach = np.abs(forward.A).sum(axis=1) * level / solved.sd
    lone = np.abs(forward.B).sum(axis=1) == 0
    blind = np.flatnonzero((reach < BLIND) & lone)
    if not len(blind):
        return []
    are = "reading sees" if len(blind) == 1 else "readings see"
    return [
        Finding(
            "sensor-at-node", "note",
            f"{len(blind)} {are} next to nothing of the source "
            f"({_lines(solved, map(int, blind))}): at its mean level it could not move them by a "
            "fifth of their noise, for they stand where the member is held or hardly answers; "
            "they would tell more elsewhere.",
        )
    ]  # fmt: skip


def _unseen(solved: Solved) -> list[Finding]:
    """Zones that move no reading at the mean level of the source."""
    forward, level = solved.forward, solved.answers.level
    if not solved.problem.smooth or not level > 0 or not len(forward.rows):
        return []
    listed = []
    for zone in forward.case.source.zones:
        inside = (forward.grid.middles > zone.start) & (forward.grid.middles < zone.end)
        if not (inside & forward.grid.free).any():
            continue
        most = float((np.abs(forward.A[:, inside].sum(axis=1)) * level / solved.sd).max())
        if most < 1:
            listed.append(
                f"zone {zone.name} moves no reading by more than {most:.1g} of its noise"
            )
    if not listed:
        return []
    text = "; ".join(listed)
    return [
        Finding(
            "zone-unseen", "caution",
            f"Even at the source's mean level {text}: the readings stand at its nodes; read "
            "another quantity, or at places that it moves.",
        )
    ]  # fmt: skip


def _heavy(solved: Solved, told: Told, total: Number) -> list[Finding]:
    """Readings that move the total by more than half its interval."""
    if total.value is None or total.lower is None or total.upper is None:
        return []
    half = (total.upper - total.lower) / 2
    shift = told.shift[0] * solved.asked.factor[0]
    heavy = np.flatnonzero(np.abs(shift) > max(half, 0.0))
    if half <= 0 or not len(heavy):
        return []
    unit = solved.forward.case.source.total_unit
    worst = heavy[np.argmax(np.abs(shift[heavy]))]
    first = (
        f"{_lines(solved, [int(worst)])} alone moves the total by {abs(shift[worst]):.3g} {unit}, "
        f"more than the half-width of its interval ({half:.3g} {unit})"
    )
    others = [int(i) for i in heavy if i != worst]
    if len(others) >= MANY:
        text = (
            f"{len(heavy)} readings move the total by more than the half-width of its interval "
            f"({half:.3g} {unit}) each, most of all {_lines(solved, [int(worst)])} (by "
            f"{abs(shift[worst]):.3g} {unit}): they contradict each other, so the noise is larger "
            "than stated or the member is not as described; do not use the total before that is "
            "mended."
        )
        return [Finding("influential-reading", "caution", text)]
    if others:
        first += f"; so does {_lines(solved, others)}"
    # where readings are few, many a sound one moves the total by that much
    level: Level = "caution" if abs(shift[worst]) > 2 * half else "note"
    return [
        Finding(
            "influential-reading", level,
            f"{first}: check that reading before you use the total, which would be "
            f"{total.value - shift[worst]:.4g} {unit} without it.",
        )
    ]  # fmt: skip


def _leaning(solved: Solved, told: Told, total: Number) -> list[Finding]:
    """A total that leaves its interval within one decade of strength."""
    if total.lower is None or total.upper is None:
        return []
    unit = solved.forward.case.source.total_unit
    listed = []
    for name, words in (("weaker", "a tenth of"), ("stronger", "ten times")):
        value = float(moved(solved, told, name)[0])
        if np.isfinite(value) and not total.lower <= value <= total.upper:
            listed.append(f"{value:.4g} {unit} with {words} the smoothing")
    if not listed:
        return []
    return [
        Finding(
            "total-leans-on-strength", "caution",
            f"The total would be {' and '.join(listed)}, outside its interval "
            f"({total.lower:.4g} to {total.upper:.4g} {unit}): it leans on the strength, so look "
            "at what the criteria choose before you use it.",
        )
    ]  # fmt: skip


def _lines(solved: Solved, which: Iterable[int]) -> str:
    """Files and lines of used readings, eight at most."""
    readings, rows = solved.forward.readings, solved.forward.rows[list(which)]
    listed = ", ".join(f"{readings.file[r]} line {readings.line[r]}" for r in rows[:8])
    return listed + (f" and {len(rows) - 8} more" if len(rows) > 8 else "")
