"""What the readings alone say about the total and the wide zones of a case."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.answers import per
from srcfit.case.model import Case
from srcfit.member import Array
from srcfit.problem import Questions
from srcfit.rounding import brief, interval, with_unit
from srcfit.solve import Solved
from srcfit.unaided import alone, bounded, signed

# zones that take up this part of the member are wide; no more than so many are looked at, and no
# grids finer than this
WIDE, MOST, FINEST = 0.2, 20, 500
TWICE = 2.0  # how far the density may go, in units of the band's largest reach about its mean
MUCH, LITTLE = 0.8, 0.25  # parts of the width that the readings alone leave
SEEN = 0.02  # part of the width of the interval above that it may stick out without a word


@dataclass(frozen=True)
class ReadingsAlone:
    """Intervals in the user's units, of the total first, then of every zone.

    Attributes
    ----------
    lower, upper : (1 + z,)
        nan where none was looked for (`looked`), or where the readings say nothing; -inf or inf
        where they put no limit on that side.
    looked : (1 + z,) bool
    within : float or None
        How far the density was let go from its mean; None where a sign is declared instead.
    """

    lower: Array
    upper: Array
    looked: NDArray[np.bool_]
    within: float | None


def readings_alone(solved: Solved, extra: Array, lower: Array, upper: Array) -> ReadingsAlone:
    """Look at the total and at the wide zones.

    Nothing is looked for where amplitudes are complex, places of lumped parts unknown, intervals
    empty, or the grid very fine.

    Parameters
    ----------
    extra : (q,) variance that uncertain properties add (SI)
    lower, upper : (m,) band of the cells in the user's unit
    """
    case, a, asked = solved.forward.case, solved.answers, solved.asked
    source, grid, zones = case.source, solved.problem.grid, case.source.zones
    wide = [True, *(z.end - z.start >= (WIDE - 1e-9) * case.member.length for z in zones)]
    looked = np.array(wide) & (np.cumsum(wide) <= MOST)
    found = np.full((2, len(wide)), np.nan)
    free = grid.free
    useless = grid.parts == 2 or not solved.problem.smooth or a.reason or solved.places
    if useless or not 0 < int(free.sum()) <= FINEST or not np.isfinite(lower[free]).all():
        return ReadingsAlone(found[0], found[1], np.zeros(len(wide), dtype=bool), None)
    blocks = asked.blocks
    rows = np.append(blocks["total"].start, np.arange(*blocks["zones"].indices(10**9)))[looked]
    questions = Questions(asked.questions.cells[rows], asked.questions.columns[rows])
    names = {c.name for c in solved.forward.columns if c.kind == "lumped"}
    own = [i for i, name in enumerate(solved.problem.names) if name in names]
    sign = {"any": 0.0, "nonnegative": 1.0, "nonpositive": -1.0}[source.sign]
    p = alone(
        solved.problem, questions, z=a.quantile, noise=float(a.fit.noise) or 1.0,
        drop=int(source.total is not None), signed=own if sign else None,
    )  # fmt: skip
    within = None
    if sign:
        ends = signed(p, a.quantile * np.nan_to_num(a.sd[rows]), sign)
    else:
        within = _within(lower[free], upper[free], grid.weights[free])
        ends = bounded(p, within / per(source.unit, case.member.kind.source_unit))
    half = (ends[1] - ends[0]) / 2
    more = a.quantile * np.sqrt(extra[rows])
    wider = np.where(np.isfinite(half), np.hypot(half, more) - half, more)
    moved = np.real(asked.constant[rows]) + asked.shift[rows]
    found[0, looked] = (ends[0] - wider + moved) * asked.factor[rows]
    found[1, looked] = (ends[1] + wider + moved) * asked.factor[rows]
    return ReadingsAlone(found[0], found[1], looked, within)


def _within(lower: Array, upper: Array, weights: Array) -> float:
    """Twice the band's largest reach about the mean of its middle."""
    mean = float((lower + upper) / 2 @ weights / weights.sum())
    return TWICE * float(np.maximum(upper - mean, mean - lower).max())


def facts(
    found: ReadingsAlone, case: Case, total: Mapping[str, Any], zones: Sequence[Mapping[str, Any]]
) -> dict[str, Any]:  # fmt: skip
    """As in summary.json: what was assumed, and what it says in words."""
    source = case.source
    names = ["total", *(f"zone {z['name']}" for z in zones)]
    told = sentences(found, names, [total, *zones], source.total_unit)
    if not told:
        return {"within": None, "sign": None, "assumed": "", "told": []}
    sign = source.sign if found.within is None else None
    return {
        "within": found.within, "sign": sign, "assumed": assumed(found, source.unit), "told": told
    }  # fmt: skip


def ends(found: ReadingsAlone, i: int) -> dict[str, float | None]:
    """Interval number i as in summary.json; null where there is no limit, or none was sought."""
    pair = (float(found.lower[i]), float(found.upper[i]))
    lower, upper = (v if np.isfinite(v) else None for v in pair)
    return {"data_lower": lower, "data_upper": upper}


def sentences(
    found: ReadingsAlone, names: Sequence[str], numbers: Sequence[Mapping[str, Any]], unit: str
) -> list[str]:
    """How much of each answer the readings alone give, in words.

    Parameters
    ----------
    names : of the total and of each zone
    numbers : their value, sd, lower and upper
    """
    return [
        _sentence(name, n, float(low), float(high), unit)
        for name, n, low, high, looked in zip(
            names, numbers, found.lower, found.upper, found.looked, strict=True
        )
        if looked and n["lower"] is not None and not high <= low  # a balanced total is no news
    ]  # fmt: skip


def assumed(found: ReadingsAlone, density: str) -> str:
    """What stands behind the sentences."""
    if found.within is None:
        return "Without smoothness, assuming nothing but the declared sign, the readings allow"
    return (
        "Without smoothness (the density anywhere within "
        f"{with_unit(brief(found.within, 2), density)} of its mean, twice the reach of the band), "
        "the readings allow"
    )


def _sentence(name: str, n: Mapping[str, Any], low: float, high: float, unit: str) -> str:
    if np.isnan(low) or np.isnan(high) or (np.isinf(low) and np.isinf(high)):
        return f"{name}: anything; the answer rests on smoothness alone"
    spread = {"sd": n["sd"], "value": n["value"]}
    if np.isinf(low) or np.isinf(high):
        kept, word = (high, "at most") if np.isinf(low) else (low, "at least")
        edge = interval({**spread, "lower": kept, "upper": kept}, unit).split(" to ", 1)[1]
        return f"{name}: {word} {edge}, and no limit on the other side"
    ratio = (n["upper"] - n["lower"]) / (high - low)
    wide = {"lower": low, "upper": high, "value": n["value"], "sd": max(n["sd"], (high - low) / 4)}
    lead = f"{name}: {interval(wide, unit)}"
    beyond = max(low - n["lower"], n["upper"] - high) > SEEN * (n["upper"] - n["lower"])
    if beyond:
        lead += " (an estimate of its own, so it need not contain the interval above)"
    if ratio >= MUCH:
        return f"{lead}; smoothness adds next to nothing"
    return f"{lead}; the interval above is {brief(100 * ratio, 2)} % as wide" + (
        "" if ratio >= LITTLE else " and rests on the source being smooth between readings"
    )
