"""Which further reading would tell apart what the readings leave mixed.

Candidates are the sensor kinds of the member along it, and its reactions. Each is a row over
cells and unknowns like any other reading, and one more row changes a posterior covariance by a
rank-one update: var(q) falls by cov(q, c)**2 / (var(c) + s**2). Source: Golub & Van Loan, Matrix
Computations (Sherman & Morrison's formula).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from srcfit import checks
from srcfit.bands import undetermined
from srcfit.elimination import eliminate
from srcfit.errors import Finding, as_percent
from srcfit.evidence import Weighted, conditional, grid, weigh
from srcfit.forward import along
from srcfit.member import Array
from srcfit.priors import CAUTIOUS, SCALE, pieces
from srcfit.problem import Problem, Questions
from srcfit.results import Shown, position_scale
from srcfit.solve import Solved
from srcfit.solvers.frame import UNIFORM, Frame, ask, frame, unpenalised
from srcfit.solvers.spectrum import bases, route, spectrum
from srcfit.units import factor

NOTHING = 1e-9  # part of the largest row of a kind that is rounding (a shear at a free end)
PLACES = 31  # along the member
SEES = 1e-6  # part of the size of its terms below which a row sees nothing of what is mixed
ALIKE = 1.5  # kinds in use are preferred where another is better by no more than this
PREFIXES = {1e6: "M", 1e3: "k", 1.0: "", 1e-3: "m", 1e-6: "u"}
PREFIXED = {"m", "rad", "N", "N*m", "W", "W/m^2"}
HELPS = 0.7  # a reading is worth naming that brings an sd down to this part of itself


def findings(solved: Solved, shown: Shown) -> list[Finding]:
    """Unknowns that cannot, or hardly, be told apart, and the reading that would mend it."""
    forward, problem = solved.forward, solved.problem
    groups = undetermined(problem)
    found = checks.inseparable(forward, groups, [would_separate(solved, g) for g in groups])
    columns = [c for c in forward.columns if c.kind == "nuisance"]
    by_name = dict(zip(problem.names, problem.B.T, strict=False))
    size = np.abs(solved.asked.factor[solved.asked.blocks["nuisances"]])
    noise = solved.answers.fit.noise
    alone = [
        f * noise / max(float(np.linalg.norm(by_name[c.name])), 1e-300)
        for c, f in zip(columns, size, strict=True)
    ]
    return found + checks.nearly_inseparable(
        [c.name for c in columns], [c.unit for c in columns],
        [n.sd for n in shown.numbers("nuisances")], alone, lambda name: would_tell(solved, name),
    )  # fmt: skip


@dataclass(frozen=True)
class Candidates:
    """Readings that might be added, c of them, in SI.

    Attributes
    ----------
    kind : tuple of c sensor kinds
    x : (c,)
    sd : (c,) noise: that of the readings of that kind, else as precise as the others
    used : (c,) whether readings of that kind are there already
    questions : Questions, c rows
    """

    kind: tuple[str, ...]
    x: Array
    sd: Array
    used: NDArray[np.bool_]
    questions: Questions


def candidates(solved: Solved) -> Candidates | None:
    """Every sensor kind of the member along it; they share no nuisance with the readings.

    None where no reading of any kind feels the source or an unknown.
    """
    forward = solved.forward
    edges, kind = forward.grid.edges, forward.case.member.kind
    even = np.linspace(edges[0], edges[-1], PLACES)
    supports = [s.at for s in forward.case.member.supports]
    x = np.union1d(edges[np.abs(edges[:, None] - even).argmin(axis=0)], supports)
    kinds = np.array([s.kind for s in forward.specs()])
    depth = next((s.distance for s in forward.specs() if s.distance is not None), None)
    noise = solved.sd * (1.0 if solved.problem.stated else solved.answers.fit.noise)
    reach = np.linalg.norm(np.abs(forward.A), axis=1)
    precise = float(np.median(noise[reach > 0] / reach[reach > 0])) if reach.any() else 0.0
    parts: list[tuple[str, Array, float, Array, Array]] = []
    rows: dict[str, tuple[Array, Array]] = {}
    for sensor in kind.sensors:
        if sensor.quantity == "reaction":
            at = [i for i, r in enumerate(forward.reactions) if r.kind != "moment"]
            cells, columns = forward.reaction_cells[at], forward.reaction_columns[at]
            place, lever = np.array([forward.reactions[i].at for i in at]), 1.0
        elif sensor.needs_distance and depth is None:
            continue
        else:
            if sensor.quantity not in rows:
                rows[sensor.quantity] = along(forward, sensor.quantity, x)[:2]
            cells, columns = rows[sensor.quantity]
            place, lever = x, (depth or 0.0) if sensor.needs_distance else 1.0
        size = np.hypot(*(np.linalg.norm(part, axis=1) for part in (cells, columns)))
        felt = np.flatnonzero(size > NOTHING * size.max(initial=0.0))
        if not len(felt):
            continue
        cells, columns, place = cells[felt], columns[felt], place[felt]
        own = noise[kinds == sensor.name]
        typical = float(np.median(np.linalg.norm(lever * cells, axis=1)))
        sd = float(np.median(own)) if len(own) else precise * typical
        if sd > 0:
            parts.append((sensor.name, place, sd, lever * cells, lever * columns))
    if not parts:
        return None
    names = [name for name, place, *_ in parts for _ in place]
    cells, columns, _ = eliminate(forward).apply(
        np.concatenate([p[3] for p in parts]), np.concatenate([p[4] for p in parts])
    )
    return Candidates(
        tuple(names),
        np.concatenate([p[1] for p in parts]),
        np.concatenate([np.full(len(p[1]), p[2]) for p in parts]),
        np.isin(names, kinds),
        Questions(cells, columns),
    )


def family(fr: Frame, level: float) -> Weighted:
    """One cautious family over its strengths, to judge covariances by."""
    drawn = pieces(fr.problem.grid, zones=True)
    first = CAUTIOUS[1]
    products = bases(fr, [SCALE, (first.base, first.length)], route(fr))
    found = spectrum(fr, first, products, drawn, right=True)
    return weigh([found], grid(fr, products), level if np.isfinite(level) else None)[0]


def _variances(fr: Frame, w: Weighted, questions: Questions) -> Array:
    """Posterior variances (q,), averaged over strengths; undetermined parts left out."""
    return np.asarray(conditional(ask(fr, questions), w)[1] @ w.weights)


def _frame(solved: Solved) -> Frame:
    """The fit's own frame, where it has no shapes beyond the constant."""
    own = [la.frame for la in solved.answers.fit.ladders[:1] if not la.frame.extra.shape[1]]
    return own[0] if own else frame(solved.problem)


def mixed(problem: Problem, names: Sequence[str]) -> Array:
    """Amounts (k',) of the combination of named unpenalised unknowns that no reading sees."""
    N = unpenalised(problem)
    norms = np.linalg.norm(N, axis=0)
    norms[norms == 0] = 1.0
    every = [*([UNIFORM] * problem.grid.parts if problem.constant else []), *problem.names]
    which = [i for i, name in enumerate(every) if name in names]
    v = np.zeros(len(every))
    v[which] = np.linalg.svd(N[:, which] / norms[which])[2][-1] / norms[which]
    return v


def seen(problem: Problem, questions: Questions, v: Array) -> Array:
    """What each question sees (c,) of a combination; 0 where its parts cancel to rounding."""
    b, size = questions.columns, np.abs(questions.columns)
    if problem.constant:
        cells, level = questions.cells[:, problem.grid.unknown], problem.grid.constants
        b, size = np.hstack([cells @ level, b]), np.hstack([np.abs(cells) @ level, size])
    value = b @ v
    return np.where(np.abs(value) > SEES * (size @ np.abs(v)), value, 0.0)


def would_separate(solved: Solved, names: Sequence[str]) -> str:
    """Sentence that names the reading that best separates unknowns that none tells apart yet.

    Along the combination v that no reading sees, a candidate c tells the unknown q by what
    q - (q'v / c'v) c leaves uncertain, which no longer depends on v, and by its own noise.
    """
    problem, forward = solved.problem, solved.forward
    target = next((n for n in names if n in problem.names), None)
    if forward.driven or problem.grid.parts > 1 or not len(forward.rows) or target is None:
        return ""
    asked, fr = candidates(solved), _frame(solved)
    v = mixed(problem, names)
    sees = np.zeros(0) if asked is None else seen(problem, asked.questions, v)
    clear = np.flatnonzero(sees)
    if asked is None or not len(clear):
        return "No one further reading of the kinds that this member has would separate them."
    own = problem.names.index(target)
    ratio = (v[len(v) - len(problem.names) + own] / sees[clear])[:, None]
    unit = np.eye(len(problem.names))[[own]]
    left = Questions(-ratio * asked.questions.cells[clear],
                     unit - ratio * asked.questions.columns[clear])  # fmt: skip
    if len(fr.free) and fr.nu:
        variance = _variances(fr, family(fr, solved.answers.level), left)
    else:
        variance = (ask(fr, left).H ** 2).sum(axis=1)
    after = np.full(len(sees), np.inf)
    after[clear] = np.sqrt(variance + ratio[:, 0] ** 2 * asked.sd[clear] ** 2)
    best = _best(after, asked.used)
    column = next(c for c in forward.columns if c.name == target)
    sd = _rounded(float(after[best]), column.unit, column.si_unit)
    return (
        f"{_reading(solved, asked, best, names)} would separate them: {target} would then be "
        f"known to about {sd}."
    )


def would_tell(solved: Solved, name: str) -> str:
    """Sentence that names the reading that would best tell a nuisance that the source blurs."""
    problem = solved.problem
    if solved.forward.driven or problem.grid.parts > 1 or name not in problem.names:
        return ""
    asked, fr = candidates(solved), _frame(solved)
    if asked is None or not len(fr.free) or fr.nu == 0:
        return ""
    unit = np.zeros((1, problem.B.shape[1]))
    unit[0, problem.names.index(name)] = 1.0
    w = family(fr, solved.answers.level)
    cells, columns = asked.questions.cells, asked.questions.columns
    none = np.zeros((1, cells.shape[1]))
    own = float(_variances(fr, w, Questions(none, unit))[0])
    variance = _variances(fr, w, asked.questions)
    # the covariance from the variances of sum and difference, both of one size
    scale = (np.sqrt(variance) / np.sqrt(own))[:, None]
    more = _variances(fr, w, Questions(cells, columns + scale * unit))
    less = _variances(fr, w, Questions(cells, columns - scale * unit))
    joint = (more - less) / np.where(scale[:, 0] > 0, 4 * scale[:, 0], np.inf)
    left = np.clip(1 - joint**2 / (own * (variance + asked.sd**2)), 0.0, 1.0)
    best = _best(np.sqrt(left), asked.used)
    if np.sqrt(left[best]) > HELPS:
        return "No one further reading would tell it much better."
    part = np.sqrt(left[best])
    return (
        f"{_reading(solved, asked, best, [name])} would cut the sd of {name} to "
        f"{as_percent(part)} of what it is."
    )


def _best(after: Array, used: NDArray[np.bool_]) -> int:
    """The smallest; one of a kind in use where that is nearly as small."""
    best, known = int(np.argmin(after)), np.where(used, after, np.inf)
    again = int(np.argmin(known))
    return again if known[again] <= ALIKE * after[best] else best


def _reading(solved: Solved, asked: Candidates, best: int, names: Sequence[str]) -> str:
    """The candidate in words: its kind, how well it is read, and where."""
    forward = solved.forward
    kind, x = asked.kind[best], asked.x[best] * position_scale(solved)
    unit = forward.case.member.kind.sensor(kind).unit
    like = (r for r, s in zip(forward.rows, forward.specs(), strict=True) if s.kind == kind)
    sd = _rounded(float(asked.sd[best]), next((forward.readings.unit[r] for r in like), ""), unit)
    groups = {s.group for s in forward.specs() if s.kind == kind}
    shared = [n for n in names if n.partition(":")[2].partition("@")[0] in groups]
    free = f" that does not share {shared[0]}" if shared else ""
    article = "An" if kind[0] in "aeiou" else "A"
    place = f"near x = {x:.3g} {forward.case.source.position_unit}"
    return f"{article} {kind} reading of sd {sd} {place}{free}"


def _rounded(amount: float, unit: str, si_unit: str) -> str:
    """An sd in the user's unit, two digits; in SI with a prefix where there is none."""
    if unit:
        amount = amount / factor(unit, si_unit, "unit", difference=True)[0]
    elif si_unit in PREFIXED:
        size = next((p for p in PREFIXES if amount >= p / 10), min(PREFIXES))
        amount, unit = amount / size, f"{PREFIXES[size]}{si_unit}"
    else:
        unit = "" if si_unit == "1" else si_unit
    return f"{float(f'{amount:.2g}'):g} {unit}".rstrip()
