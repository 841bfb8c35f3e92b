"""What is asked of a problem, and the answers in the user's units.

Every number reported is a linear question to the source and the unknowns: total, zones, single
cells, lumped parts, nuisances, background, reactions. `ask` lines them up; `Asked` says where
each stands, so that bands can treat all of them alike.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import Case, Sign
from srcfit.elimination import Elimination, eliminate
from srcfit.forward import Forward, along
from srcfit.grid import overlap, spread
from srcfit.member import Array
from srcfit.problem import Grid, Questions
from srcfit.state import Matrix
from srcfit.units import factor, multiply_text, same_dimension
from srcfit.unknowns import Column

NOTHING = 1e-10  # part of the largest below which a row is rounding
CURRIE = 1.6448536269514722  # one-sided 5 % point of the normal distribution
RAYLEIGH = 2.447746830680816  # 5 % point of the modulus of two normal errors
RICE = 3.9297882418563925  # modulus that exceeds RAYLEIGH with 95 % probability


@dataclass(frozen=True)
class Asked:
    """The questions of a case and where each block of them stands.

    Attributes
    ----------
    questions : Questions
        q rows; of complex amplitudes 2 q: those of the real parts, then those of the imaginary.
    blocks : mapping block name -> slice (total, zones, lumped, nuisances, background, reactions,
        nulls, section quantities, cells), within the first q rows
    constant : (q,) known part (SI) added to each answer, complex for complex amplitudes
    factor, shift : (q,) user unit = (SI + shift) * factor
    """

    questions: Questions
    blocks: Mapping[str, slice]
    constant: Matrix
    factor: Array
    shift: Array

    @property
    def parts(self) -> int:
        """Rows of each question: 2 for complex amplitudes."""
        return len(self.questions.cells) // len(self.constant)

    def runs(self, *names: str) -> list[slice]:
        """Where blocks stand among all rows, both parts of complex amplitudes."""
        found = [self.blocks[name] for name in names]
        starts = [p * len(self.constant) for p in range(self.parts)]
        return [slice(at + b.start, at + b.stop) for at in starts for b in found]

    def together(self, values: Array) -> Matrix:
        """Values of all rows as one number a question, the known part left out."""
        if self.parts == 1:
            return values
        real, imaginary = values.reshape(2, -1)
        return np.asarray(real + 1j * imaginary)

    def widest(self, values: Array) -> Array:
        """The larger one of both parts (an sd), (q,)."""
        return np.asarray(values.reshape(self.parts, -1).max(axis=0))


def ask(forward: Forward, balanced: Elimination | None = None) -> Asked:
    """Line up every question of the case; `balanced` is what `eliminate` gives."""
    balanced = eliminate(forward) if balanced is None else balanced
    case, grid = forward.case, forward.grid
    m, k = forward.A.shape[1], forward.B.shape[1]
    lumped = [i for i, c in enumerate(forward.columns) if c.kind == "lumped"]
    nuisances = [i for i, c in enumerate(forward.columns) if c.kind == "nuisance"]
    nulls = [i for i, c in enumerate(forward.columns) if c.kind == "null"]
    total_unit = per(case.source.total_unit, case.member.kind.total_unit)
    density_unit = per(case.source.unit, case.member.kind.source_unit)
    parts: list[tuple[str, Any, Any, Any, Any, Any]] = []
    whole = np.zeros((1, k))
    whole[0, lumped] = 1.0
    parts.append(("total", grid.weights[None] * grid.free, whole, 0.0, total_unit, 0.0))
    cells, columns = _zones(forward)
    parts.append(("zones", cells, columns, 0.0, total_unit, 0.0))
    parts.append(("lumped", np.zeros((len(lumped), m)), np.eye(k)[lumped], 0.0, total_unit, 0.0))
    scale, shift = _nuisance_units([forward.columns[i] for i in nuisances])
    none = np.zeros((len(nuisances), m))
    parts.append(("nuisances", none, np.eye(k)[nuisances], 0.0, scale, shift))
    level = (grid.weights * grid.free / max((grid.weights * grid.free).sum(), 1e-300))[None]
    asked = int(case.source.background and not case.source.smooth)
    parts.append(("background", level[:asked], np.zeros((asked, k)), 0.0, density_unit, 0.0))
    units = [per(r.unit, r.si_unit) for r in forward.reactions]
    rows = forward.reaction_cells, forward.reaction_columns
    parts.append(("reactions", *rows, forward.reaction_known, units, 0.0))
    parts.append(("nulls", np.zeros((len(nulls), m)), np.eye(k)[nulls], 0.0, 1.0, 0.0))
    for force in section_forces(case):
        cells, columns, known = along(forward, force.quantity, *section_places(forward))
        at, beside = _without_rounding(cells), _without_rounding(columns)
        parts.append((force.name, at, beside, known, per(force.unit, force.si_unit), 0.0))
    parts.append(("cells", np.eye(m), np.zeros((m, k)), 0.0, density_unit, 0.0))
    return _joined(parts, balanced, forward.grid)


def _without_rounding(rows: Array) -> Array:
    """Rows of nothing but rounding (a moment at a free end) as the zeros they stand for."""
    size = np.abs(rows).max(axis=1, initial=0.0)
    return np.where((size > NOTHING * size.max(initial=0.0))[:, None], rows, 0.0)


@dataclass(frozen=True)
class SectionForce:
    """A force, couple or flow inside the member, reported along it in `unit`."""

    name: str
    quantity: str
    unit: str
    si_unit: str


def section_forces(case: Case) -> tuple[SectionForce, ...]:
    """Moment and shear of a beam; of other members what their flow or force is called."""
    kind, total = case.member.kind, case.source.total_unit
    if kind.order == 4:
        couple = multiply_text(total, case.source.position_unit)
        si = multiply_text(kind.total_unit, "m")
        return (SectionForce("moment", "moment", couple, si),
                SectionForce("shear", "shear", total, kind.total_unit))  # fmt: skip
    sensor = next(s for s in kind.sensors if s.quantity in ("flux", "force", "torque"))
    unit = total if same_dimension(total, sensor.unit) else sensor.unit
    return (SectionForce(sensor.name, sensor.quantity, unit, sensor.unit),)


def section_places(forward: Forward) -> tuple[Array, NDArray[np.bool_]]:
    """Places of the section forces [m], ascending, and where the left limit is meant.

    Cell edges; supports and forces at one place twice, just left and just right of them.
    """
    member, source = forward.case.member, forward.case.source
    near = 1e-9 * member.length
    jumps = [s.at for s in member.supports]
    jumps += [p.at for p in source.lumped if p.at is not None and p.width == 0]
    jumps += [p.start for p in source.known if p.start == p.end]
    inner = np.unique([p for p in jumps if member.start + near < p < member.end - near])
    inner = inner[np.append(True, np.diff(inner) > near)[: len(inner)]]
    edges = forward.grid.edges
    gap = np.abs(edges[:, None] - inner).min(axis=1, initial=np.inf)
    places = np.concatenate([edges[gap > near], inner, inner])
    before = np.arange(len(places)) >= len(places) - len(inner)
    order = np.lexsort((~before, places))
    return places[order], before[order]


def _joined(
    parts: list[tuple[str, Any, Any, Any, Any, Any]], balanced: Elimination, grid: Grid
) -> Asked:
    blocks, start = {}, 0
    for name, cells, *_ in parts:
        blocks[name] = slice(start, start + len(cells))
        start += len(cells)
    constant, size, shift = (
        np.concatenate([np.broadcast_to(np.asarray(p[i]), len(p[1])) for p in parts])
        for i in (3, 4, 5)
    )
    cells, columns = (np.concatenate([p[i] for p in parts]) for i in (1, 2))
    cells, columns, known = balanced.apply(cells, columns)
    constant = constant + known
    if grid.parts == 2:
        constant = constant.astype(complex)
        cells, columns = _both(cells), _both(columns)
    return Asked(Questions(cells, columns), blocks, constant, np.real(size), np.real(shift))


def _both(rows: Matrix) -> Array:
    """Rows on complex amplitudes as rows on their real and imaginary parts."""
    return np.asarray(np.block([[rows.real, -rows.imag], [rows.imag, rows.real]]))


def _nuisance_units(columns: list[Column]) -> tuple[list[float], list[float]]:
    """Factor and shift of each nuisance to its reported unit."""
    scale, shift = [], []
    for c in columns:
        size, zero = factor(c.unit, c.si_unit, c.name, difference=not c.absolute)
        scale.append(1 / size)
        shift.append(c.shift - zero)
    return scale, shift


def per(unit: str, si_unit: str, *, difference: bool = True) -> float:
    """How many of the user's unit make one SI unit."""
    return 1 / factor(unit, si_unit, "unit", difference=difference)[0]


def _zones(forward: Forward) -> tuple[Array, Array]:
    """Rows of the zones over cells and columns; a lumped part counts where it stands."""
    case, grid = forward.case, forward.grid
    member, zones = case.member, case.source.zones
    cells = np.zeros((len(zones), len(grid.free)))
    columns = np.zeros((len(zones), forward.B.shape[1]))
    for i, zone in enumerate(zones):
        cells[i] = overlap(member, grid.edges, zone.start, zone.end) * grid.free
        for j, part in enumerate(case.source.lumped):
            assert part.at is not None
            if part.width == 0:
                inside = zone.start <= part.at < zone.end
                columns[i, j] = inside or zone.end == part.at == member.end
            else:
                start, end = spread(part)
                ends = np.array([member.start, member.end])
                low, high = max(start, zone.start), min(end, zone.end)
                share = overlap(member, ends, low, max(low, high))[0]
                columns[i, j] = share / overlap(member, ends, start, end)[0]
    return cells, columns


def smooth_sizes(forward: Forward) -> tuple[Array, Array]:
    """Sizes (1 + z,) that the smooth part takes up of the member and of each zone.

    Also the parts (1 + z, p) of every lumped amount that count there.
    """
    cells, columns = _zones(forward)
    lumped = [i for i, c in enumerate(forward.columns) if c.kind == "lumped"]
    sizes = np.append((forward.grid.weights * forward.grid.free).sum(), cells.sum(axis=1))
    return sizes, np.vstack([np.ones(len(lumped)), columns[:, lumped]])


def zone_sizes(case: Case) -> Array:
    """Area-weighted size of each zone, (z,): a zone's mean density is its integral over this."""
    ends = np.array([case.member.start, case.member.end])
    sizes = [overlap(case.member, ends, z.start, z.end)[0] for z in case.source.zones]
    return np.array(sizes, dtype=float)


def peak(
    middles: Array, estimate: Array, lower: Array, upper: Array, free: NDArray[np.bool_],
    imaginary: Array | None = None,
) -> dict[str, float] | None:  # fmt: skip
    """Peak of the smooth part: largest |estimate|, interval [largest lower, largest upper].

    Its places are all x whose upper bound reaches the largest lower bound. All in one unit;
    None where there is no smooth part or no band. Of complex amplitudes the places are judged by
    the modulus, and the interval is that of either part.
    """
    if not free.any() or not np.isfinite(lower[free]).all():
        return None
    if imaginary is not None:
        return _complex_peak(middles[free], estimate[free], imaginary[free], upper[free])
    x, f = middles[free], estimate[free]
    best = int(np.argmax(np.abs(f)))
    turn = -1.0 if f[best] < 0 else 1.0
    low, high = (lower, upper) if turn > 0 else (-upper, -lower)
    low, high = low[free], high[free]
    bound = sorted([turn * low.max(), turn * high.max()])
    places = x[high >= low.max()]
    return {
        "value": float(f[best]),
        "lower": float(bound[0]),
        "upper": float(bound[1]),
        "position": float(x[best]),
        "position_lower": float(places.min()),
        "position_upper": float(places.max()),
    }


def _complex_peak(x: Array, real: Array, imaginary: Array, upper: Array) -> dict[str, float]:
    half, size = upper - real, np.hypot(real, imaginary)
    best = int(np.argmax(size))
    places = x[size + half >= (size - half).max()]
    return {
        "value": float(real[best]),
        "lower": float(real[best] - half[best]),
        "upper": float(real[best] + half[best]),
        "imaginary": float(imaginary[best]),
        "imaginary_lower": float(imaginary[best] - half[best]),
        "imaginary_upper": float(imaginary[best] + half[best]),
        "position": float(x[best]),
        "position_lower": float(places.min()),
        "position_upper": float(places.max()),
    }


def detection(
    name: str, value: float | None, sd: float | None, imaginary: float | None = None,
    quantile: float = CURRIE, sign: Sign = "any",
) -> dict[str, Any]:  # fmt: skip
    """Critical level and detection limit of one part, 5 % error of either kind.

    Parameters
    ----------
    quantile : float
        One-sided 5 % point of the estimate's error over `sd`.
    sign : str
        The direction that counts: that of the declared sign, either one where none is declared.

    Notes
    -----
    Of a complex amplitude the modulus is judged (Rayleigh and Rice distributions).
    Source: Currie (1968), Analytical Chemistry 40, 586; ISO 11929.
    """
    if value is None or sd is None:
        return {"name": name, "critical": None, "limit": None, "detected": None}
    critical, limit = quantile * sd, 2 * quantile * sd
    size = abs(value) if sign == "any" else -value if sign == "nonpositive" else value
    if imaginary is not None:
        critical, limit, size = RAYLEIGH * sd, RICE * sd, float(np.hypot(value, imaginary))
    return {"name": name, "critical": critical, "limit": limit, "detected": size > critical}


def verdict(kept: float, level: float) -> str:
    """Word for the probability that a limit is kept."""
    if kept >= level:
        return "kept"
    return "exceeded" if kept <= 1 - level else "undecided"
