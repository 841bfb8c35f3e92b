"""From SI answers to numbers and tables in the user's units."""

from __future__ import annotations

from dataclasses import replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from srcfit.answers import per, section_forces, section_places, zone_sizes
from srcfit.criteria import CRITERIA
from srcfit.member import Array
from srcfit.problem import Questions
from srcfit.readingsalone import ReadingsAlone, readings_alone
from srcfit.recovery import Number
from srcfit.simultaneous import Together, correlations
from srcfit.solve import Solved, strength_unit
from srcfit.state import Matrix
from srcfit.units import factor
from srcfit.whitening import coloured, parts_of, together

if TYPE_CHECKING:
    import pandas as pd


class Shown:
    """Answers in the user's units, by block; an added variance (property uncertainty) included.

    Complex amplitudes: `value` is the real part, `imaginary` the other; sd and the half-width of
    the interval are those of the part that is told less well, and hold for either.
    """

    def __init__(self, solved: Solved, extra_variance: Array) -> None:
        a, asked = solved.answers, solved.asked
        sd = asked.widest(np.hypot(a.sd, np.sqrt(extra_variance)))
        value = (asked.together(a.value) + asked.constant + asked.shift) * asked.factor
        self.driven = asked.parts == 2
        self.value: Array = np.real(value)
        self.imaginary: Array = np.imag(value)
        self.sd: Array = sd * np.abs(asked.factor)
        self.lower, self.upper = _interval(solved, np.sqrt(extra_variance), self.value)
        self._solved, self._reach, self.extra = solved, _reach(solved), extra_variance
        self.share = -asked.widest(-a.data_share)
        self._blocks = solved.asked.blocks

    def numbers(self, block: str) -> list[Number]:
        """The block's numbers, None for what is undetermined."""
        where = self._blocks[block]
        columns = (self.value[where], self.sd[where], self.lower[where], self.upper[where])
        plain = [
            Number(known(value), known(sd), known(lower), known(upper))
            for value, sd, lower, upper in zip(*columns, strict=True)
        ]
        if not self.driven:
            return plain
        twins = zip(self.imaginary[where], *self._beside(where), strict=True)
        return [
            replace(n, imaginary=known(v), imaginary_lower=known(low), imaginary_upper=known(high),
                    driven=True)
            for n, (v, low, high) in zip(plain, twins, strict=True)
        ]  # fmt: skip

    @cached_property
    def together(self) -> Together | None:
        """How the free cells' band hangs together, all parts; None without a band."""
        solved, rows = self._solved, self._solved.asked.questions
        free, count = self._free(), len(solved.asked.constant)
        cells = np.concatenate([free + p * count for p in range(solved.asked.parts)])
        asked = Questions(rows.cells[cells], rows.columns[cells])
        return correlations(solved.problem, asked, solved.answers)

    def _free(self) -> NDArray[np.intp]:
        """Numbers of the questions to the cells that carry a smooth part."""
        where = self._blocks["cells"]
        return np.arange(where.start, where.stop)[self._solved.forward.grid.free]

    @cached_property
    def factor(self) -> float:
        """Quantile that makes the cells' band hold at all places at once; nan without one."""
        level = self._solved.forward.case.strength.level
        return float("nan") if self.together is None else self.together.factor(level)

    def everywhere(self, level: float | None = None) -> tuple[Array, Array]:
        """Lower and upper of the cells' band that holds at all places at once."""
        where, ratio = self._blocks["cells"], self.factor
        if level is not None and self.together is not None:
            ratio = self.together.factor(level)
        ratio /= self._solved.answers.quantile
        value, least, most = self.value[where], self._reach[0][where], self._reach[1][where]
        lower = value - ratio * (value - self.lower[where])
        upper = value + ratio * (self.upper[where] - value)
        return np.maximum(lower, least), np.minimum(upper, most)

    def rivals(self, turn: float, level: float) -> NDArray[np.bool_]:
        """Cells that may have the largest density (of `turn` -1 the smallest), (m,)."""
        cells = self._blocks["cells"]
        found = np.zeros(cells.stop - cells.start, dtype=bool)
        if self.together is None or self.driven:
            return ~found
        at = self._free()[self.together.places]
        sd = (self.upper[at] - self.lower[at]) / (2 * self._solved.answers.quantile)
        found[at - cells.start] = self.together.rivals(turn * self.value[at], sd, level)
        return found

    @cached_property
    def alone(self) -> ReadingsAlone:
        """What the readings alone say of the total and of each wide zone."""
        _, _, lower, upper, _ = self.block("cells")
        return readings_alone(self._solved, self.extra, lower, upper)

    def _beside(self, where: slice) -> tuple[Array, Array]:
        """Ends of the intervals of imaginary parts: as wide as those of the real parts."""
        half = self.upper[where] - self.value[where]
        return self.imaginary[where] - half, self.imaginary[where] + half

    def twin(self, block: str, name: str, factor: Any = 1.0) -> dict[str, Array]:
        """Imaginary parts of a block as one more column of a table; nothing where not driven."""
        return {name: self.imaginary[self._blocks[block]] * factor} if self.driven else {}

    def twin_bounds(
        self, block: str, lower: str, upper: str, factor: Any = 1.0
    ) -> dict[str, Array]:
        """Ends of their intervals as two more columns; nothing where not driven."""
        if not self.driven:
            return {}
        low, high = self._beside(self._blocks[block])
        return {lower: low * factor, upper: high * factor}

    def shares(self, block: str) -> list[float | None]:
        """Data share of the block's numbers."""
        return [known(v) for v in self.share[self._blocks[block]]]

    def block(self, block: str) -> tuple[Array, Array, Array, Array, Array]:
        """value, sd, lower, upper, share of a block as arrays."""
        where = self._blocks[block]
        return (
            self.value[where], self.sd[where], self.lower[where], self.upper[where],
            self.share[where],
        )  # fmt: skip


def _interval(solved: Solved, extra: Array, value: Array) -> tuple[Array, Array]:
    """Ends of the intervals in the user's units; constraints make them uneven.

    An added sd widens each side in quadrature, and no end leaves what is possible at all.
    """
    a, asked = solved.answers, solved.asked
    below, above = (
        asked.widest(np.hypot(reach, a.quantile * extra))
        for reach in (a.value - a.lower, a.upper - a.value)
    )
    size = np.abs(asked.factor)
    lower, upper = value - below * size, value + above * size
    least, most = _reach(solved)
    return np.maximum(lower, least), np.minimum(upper, most)


def _reach(solved: Solved) -> tuple[Array, Array]:
    """What each number can be at all, in the user's units."""
    a, asked = solved.answers, solved.asked
    if a.low is None or a.high is None:
        return np.full(len(asked.constant), -np.inf), np.full(len(asked.constant), np.inf)
    least, most = (
        (end + np.real(asked.constant) + asked.shift) * asked.factor for end in (a.low, a.high)
    )
    return least, most


def known(value: Any) -> float | None:
    """A float, or None for nan."""
    number = float(np.real(value))
    return number if np.isfinite(number) else None


def number_map(n: Number) -> dict[str, float | None]:
    """As in summary.json; of a driven member with the twin key `imaginary` and its interval."""
    plain = {"value": n.value, "sd": n.sd, "lower": n.lower, "upper": n.upper}
    if not n.driven:
        return plain
    twins = {"_lower": n.imaginary_lower, "_upper": n.imaginary_upper}
    return plain | {"imaginary": n.imaginary} | {f"imaginary{k}": v for k, v in twins.items()}


def position_scale(solved: Solved) -> float:
    """How many position units make a metre."""
    return per(solved.forward.case.source.position_unit, "m")


def source_table(solved: Solved, shown: Shown) -> pd.DataFrame:
    """One row per cell."""
    import pandas as pd

    source, grid = solved.forward.case.source, solved.forward.grid
    P, U, scale = source.position_unit, source.unit, position_scale(solved)
    value, sd, lower, upper, share = shown.block("cells")
    held = ~grid.free
    return pd.DataFrame(
        {
            f"x [{P}]": grid.middles * scale,
            f"estimate [{U}]": np.where(held, 0.0, value),
            f"sd [{U}]": np.where(held, 0.0, sd),
            f"lower [{U}]": np.where(held, 0.0, lower),
            f"upper [{U}]": np.where(held, 0.0, upper),
            "data_share": np.where(held, np.nan, share),
            f"from [{P}]": grid.edges[:-1] * scale,
            f"to [{P}]": grid.edges[1:] * scale,
        }
        | _everywhere(shown, U, held)
        | shown.twin("cells", f"estimate_imag [{U}]", ~held)
        | shown.twin_bounds("cells", f"lower_imag [{U}]", f"upper_imag [{U}]", ~held)
    )


def _everywhere(shown: Shown, unit: str, held: Any) -> dict[str, Array]:
    """Band that holds at all places at once, as two more columns."""
    lower, upper = shown.everywhere()
    return {
        f"lower_everywhere [{unit}]": np.where(held, 0.0, lower),
        f"upper_everywhere [{unit}]": np.where(held, 0.0, upper),
    }


def zones_table(solved: Solved, shown: Shown) -> pd.DataFrame:
    """One row per zone."""
    import pandas as pd

    case = solved.forward.case
    source = case.source
    P, U, T, scale = source.position_unit, source.unit, source.total_unit, position_scale(solved)
    value, sd, lower, upper, share = shown.block("zones")
    per_size = per(U, case.member.kind.source_unit) / per(T, case.member.kind.total_unit)
    return pd.DataFrame(
        {
            "name": [z.name for z in source.zones],
            f"from [{P}]": [z.start * scale for z in source.zones],
            f"to [{P}]": [z.end * scale for z in source.zones],
            f"value [{T}]": value,
            f"sd [{T}]": sd,
            f"lower [{T}]": lower,
            f"upper [{T}]": upper,
            f"mean [{U}]": value / zone_sizes(case) * per_size,
            "data_share": share,
        }
        | shown.twin("zones", f"value_imag [{T}]")
        | shown.twin_bounds("zones", f"lower_imag [{T}]", f"upper_imag [{T}]")
        | shown.twin("zones", f"mean_imag [{U}]", per_size / zone_sizes(case))
        | {
            f"data_{end} [{T}]": np.where(np.isfinite(v), v, np.nan)[1:]
            for end, v in (("lower", shown.alone.lower), ("upper", shown.alone.upper))
        }
    )


def section_table(solved: Solved, shown: Shown) -> pd.DataFrame:
    """Section forces (moment and shear, or the flow) along the member.

    At supports and forces at one place two rows: just left and just right of it. Empty
    where the readings do not tell them.
    """
    import pandas as pd

    forward = solved.forward
    at = section_places(forward)[0] * position_scale(solved)
    columns: dict[str, Any] = {f"x [{forward.case.source.position_unit}]": at}
    for force in section_forces(forward.case):
        value, sd, lower, upper, _ = shown.block(force.name)
        parts = {"": value, "_sd": sd, "_lower": lower, "_upper": upper}
        columns |= {f"{force.name}{end} [{force.unit}]": part for end, part in parts.items()}
        columns |= shown.twin(force.name, f"{force.name}_imag [{force.unit}]")
        bounds = (f"{force.name}_{end}_imag [{force.unit}]" for end in ("lower", "upper"))
        columns |= shown.twin_bounds(force.name, *bounds)
    return pd.DataFrame(columns)


def readings_table(solved: Solved) -> pd.DataFrame:
    """Every row read; those used with prediction and residuals."""
    import pandas as pd

    forward = solved.forward
    readings, n = forward.readings, len(forward.readings)
    scale, shift = reading_units(solved)
    case, kind = forward.case, complex if forward.driven else float
    residual, left, score = (np.full(n, np.nan, dtype=kind) for _ in range(3))
    fit = solved.answers.fit
    residual[forward.rows] = recoloured(solved, fit.residual)
    weight = np.full(n, np.nan)
    weight[forward.rows] = solved.noise.weight
    left[forward.rows] = (
        together(forward, fit.leave_one_out) * solved.sd / np.sqrt(solved.noise.weight)
    )
    score[forward.rows] = standardised(solved)
    sd = readings.sd.copy()
    sd[forward.rows] = solved.sd * (1 if solved.problem.stated else solved.answers.fit.noise)
    predicted = readings.value - residual
    shown: dict[str, Any] = {
        "file": readings.file, "line": readings.line, "group": readings.group,
        "kind": readings.kind, "unit": readings.unit,
        f"x [{forward.case.source.position_unit}]": readings.x * position_scale(solved),
        "value": np.real(readings.value) * scale + shift, "sd": sd * scale, "used": readings.used,
        "reason": readings.reason, "predicted": np.real(predicted) * scale + shift,
        "residual": np.real(residual) * scale, "standardised": np.real(score),
        "leave_one_out": np.real(left) * scale,
    }  # fmt: skip
    if not forward.driven:
        return pd.DataFrame(shown | {"weight": weight})
    twins = {"value": readings.value, "predicted": predicted, "residual": residual,
             "standardised": score, "leave_one_out": left}  # fmt: skip
    component = np.array([case.columns[i].component or "" for i in readings.spec])
    for name, amount in twins.items():
        size = 1.0 if name == "standardised" else scale
        # a column of one component says nothing of the other
        shown[name] = np.where(component == "imaginary", np.nan, shown[name])
        shown[f"{name}_imag"] = np.where(component == "real", np.nan, np.imag(amount) * size)
    return pd.DataFrame(shown | {"weight": weight})


def reading_units(solved: Solved) -> tuple[Array, Array]:
    """Scale and shift from SI to each row's own unit."""
    case, readings = solved.forward.case, solved.forward.readings
    scale, shift = np.ones(len(readings)), np.zeros(len(readings))
    cache: dict[tuple[str, str], tuple[float, float]] = {}
    for i, (unit, kind) in enumerate(zip(readings.unit, readings.kind, strict=True)):
        si = case.member.kind.sensor(kind).unit
        if (unit, si) not in cache:
            per_unit, offset = factor(unit or si, si, "unit", difference=case.member.driven)
            cache[unit, si] = 1 / per_unit, -offset / per_unit
        scale[i], shift[i] = cache[unit, si]
    return scale, shift


def standardised(solved: Solved) -> Matrix:
    """Distance of each used reading from the fit in standard deviations, (n,).

    That of a down-weighted reading is from what all others say, at the noise of its group.
    """
    fit, weight = solved.answers.fit, solved.noise.weight[parts_of(solved.forward)[0]]
    score = fit.standardised
    low = np.flatnonzero(weight < 1)
    w, hat = weight[low], fit.hat[low]
    others = hat / ((1 - hat) * w)
    score[low] = fit.leave_one_out[low] / (fit.noise * np.sqrt(w * (1 + others)))
    return together(solved.forward, score)


def recoloured(solved: Solved, white: Array) -> Matrix:
    """Residuals in SI from whitened ones: parts put together, correlation and weights undone."""
    whole = coloured(solved.forward, together(solved.forward, white), solved.links)
    result: Matrix = whole * solved.sd / np.sqrt(solved.noise.weight)
    return result


FAMILY_NAMES = {"first differences": "roughness 1"}


def ladder_table(solved: Solved) -> pd.DataFrame:
    """One row per family and rung."""
    import pandas as pd

    parts = []
    answers = solved.answers
    ladders = list(zip(answers.fit.ladders, answers.fit.weights, strict=True))
    if solved.ladder is not None and all(la is not solved.ladder for la, _ in ladders):
        ladders.insert(0, (solved.ladder, np.full(len(solved.ladder.strengths), np.nan)))
    for ladder, weights in ladders:
        unit, scale = strength_unit(solved.forward.case, ladder.family)
        name = FAMILY_NAMES.get(ladder.family.name, ladder.family.name)
        averaged = len(answers.fit.ladders) > 1 and ladder is not solved.ladder
        cut = ladder.solver != "tikhonov"
        parts.append(
            pd.DataFrame(
                {
                    "family": f"{name} (averaged)" if averaged and name == "roughness 1" else name,
                    "strength": ladder.strengths * (1 if cut else scale),
                    "residual_norm": ladder.residual_norms,
                    "roughness_norm": ladder.roughness / np.sqrt(scale),
                    "effective_dof": ladder.dof,
                    **{key: score(ladder) for key, score in CRITERIA.items()},
                    "weight": weights,
                    "strength_unit": "1" if cut else unit,
                }
            )
        )
    if not parts:
        names = ["residual_norm", "roughness_norm", "effective_dof", *CRITERIA, "weight"]
        return pd.DataFrame(columns=["family", "strength", *names, "strength_unit"])
    table = pd.concat(parts, ignore_index=True)
    return table.replace([np.inf, -np.inf], np.nan)
