"""The cautious band of a source that is known to keep inequalities.

The estimate is the exact constrained one at the evidence-weighted mean strength of each family,
averaged over families. The interval of a question is the hull of draws under the cautious
families and of strict bounds under steeper ones (see `envelope`), around the estimate and around
their own centre; the distances between estimate and centres, with and without steps at the drawn
edges, widen it as in `bands`. The interval without the inequalities is meant for any source, so
theirs goes beyond it only so far (`ROOM`). Where the inequalities take next to nothing from the
unconstrained posterior, the closed forms of `bands` stand and nothing is drawn.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from srcfit.bands import Answers, Centre, Fit, Ground, noise_at, wary, weighed
from srcfit.envelope import by_bounds, by_draws, draws
from srcfit.evidence import Weighted, at_one, mean_noise, weigh
from srcfit.laws import SLIGHT, Law, cut, laws, made, numbered, several, typical, without_source
from srcfit.limits import Limits
from srcfit.problem import Array, Problem, Questions
from srcfit.solvers.frame import Frame, ask, frame
from srcfit.solvers.ladder import ALONE
from srcfit.solvers.nonnegative import multipliers
from srcfit.solvers.spectrum import bases, spectrum
from srcfit.strict import most_probable, reduced

Numbers = NDArray[np.intp]

# the inequalities may take this much from the unconstrained posterior before it is given up
SPARE = 1e-3
# laws that draws come from
LAWS = 12
TIGHT = 1e-7  # relative slack of a wall that is met
# strict bounds reckon with a source that varies by half of STEEP times its level where it acts;
# at walls along at least this part of the free length they may pass the band without inequalities
STEEP, PART = 4.0, 0.03
# but no side passes it by more than the estimate moved, or by this part of its half-width: where
# it misses a source that keeps the inequalities, it rarely misses it by more
ROOM = 0.5
TINY = 1e-300


@dataclass(frozen=True)
class Held:
    """What the inequalities did.

    Attributes
    ----------
    free : Answers
        The answers without them.
    draws : int
        0 where the closed forms stand.
    effective : (q,)
        Effective sample size of each question's draws (empty without draws).
    refused : float
        Share of the trajectories that were not taken.
    tight : (m,) bool
        Cells that the estimate has at a wall.
    excess : float
        How much the smallest penalised misfit grew, in units of the noise.
    drawn, strict : (2, q)
        The two intervals whose hull was taken (empty without draws).
    reason : str
        Why the inequalities were not used; empty where they were.
    """

    free: Answers
    draws: int
    effective: Array
    refused: float
    tight: NDArray[np.bool_]
    excess: float
    drawn: Array
    strict: Array
    reason: str = ""


@dataclass(frozen=True)
class Setting:
    """The problem, the case's questions, and those by which the estimate is found.

    Attributes
    ----------
    inner : Questions
        Coordinates, walls, inequalities, cells and columns; their numbers are `on`, `walls`,
        `rows`, `cells`, `columns`. With cells and columns any question is answered.
    outer : Questions
        Coordinates, walls and the case's questions (numbers `user`), for the band.
    """

    problem: Problem
    questions: Questions
    limits: Limits
    fr: Frame
    inner: Questions
    outer: Questions
    on: Numbers
    walls: Numbers
    rows: Numbers
    cells: Numbers
    columns: Numbers
    user: Numbers


@dataclass(frozen=True)
class Band:
    """Laws of the band: for draws, for strict bounds, and for centres without drawn steps.

    `at_walls`: strict bounds stand by themselves, also beyond the band without inequalities.
    """

    several: list[Law]
    typical: list[Law]
    plain_steps: list[Law]
    at_walls: bool


def constrained(
    problem: Problem,
    questions: Questions,
    limits: Limits,
    free: Answers,
    rng: np.random.SeedSequence,
    *,
    level: float = 0.95,
    centre: Centre | None = None,
    narrow: bool = False,
    along: Sequence[slice] = (),
    band: bool = True,
) -> tuple[Answers, Held]:
    """Answers under inequalities, with their cautious band.

    Parameters
    ----------
    problem : Problem
    questions : Questions
    limits : Limits
    free : Answers
        The answers without the inequalities.
    rng : SeedSequence
        The same seed gives the same draws.
    level : float
    centre : (Ladder, int), optional
        Take the estimate from this rung; by default it is averaged over families by evidence.
    narrow : bool
        The band of the rung `centre` alone in place of the cautious one.
    along : sequence of slice
        Blocks of questions that vary smoothly from one to the next (section forces along a
        member): only some of each get strict bounds of their own.
    band : bool
        False: only the values are wanted.

    Raises
    ------
    SolveError
        When no source keeps all inequalities, or an exact solution fails its checks.
    """
    s = _setting(problem, questions, limits)
    m, none = len(problem.grid.free), np.zeros((2, 0))
    idle = Held(free, 0, np.zeros(0), 0.0, np.zeros(m, dtype=bool), 0.0, none, none)
    if not ask(s.fr, s.inner).determined[np.concatenate([s.on, s.rows])].all():
        return free, replace(idle, reason="the readings do not determine the level of the source")
    alone = not len(s.fr.free) or s.fr.nu == 0
    ground = None if alone or narrow else weighed(s.fr)
    value, spent, excess = _estimate(s, _estimators(s, ground, centre, free.fit.noise))
    if not band:
        clipped = np.clip(_answered(s, value), limits.low, limits.high)
        return replace(free, value=np.where(free.determined, clipped, np.nan)), idle
    of_band = _band(s, ground, centre, free.fit.noise, value)
    if excess == 0 and _outside(s, of_band.several) < SPARE:
        return _within(free, limits), idle
    answers, held = _banded(s, free, value, of_band, level, rng, along)
    met = _met(s, value)
    tight = met[met.sum(axis=1) == 1].any(axis=0)
    fit = _fit(s, free.fit, value, spent)
    return replace(_within(answers, limits), fit=fit), replace(held, tight=tight, excess=excess)


def _setting(problem: Problem, questions: Questions, limits: Limits) -> Setting:
    (_, m), (_, k) = problem.A.shape, problem.B.shape
    on = limits.coordinates
    walls = Questions(limits.walls @ on.cells, limits.walls @ on.columns)
    cells = Questions(np.eye(m), np.zeros((m, k)))
    columns = Questions(np.zeros((k, m)), np.eye(k))
    inner, numbers = numbered(on, walls, limits.rows, cells, columns)
    outer, (_, _, user) = numbered(on, walls, questions)
    at, at_walls, rows, at_cells, at_columns = numbers
    return Setting(
        problem, questions, limits, frame(problem), inner, outer, at, at_walls, rows, at_cells,
        at_columns, user,
    )  # fmt: skip


def _estimators(
    s: Setting, ground: Ground | None, centre: Centre | None, noise: float
) -> list[Law]:  # fmt: skip
    """Laws of the inner questions that the estimate is averaged over."""
    if ground is not None and centre is None:
        used = [_whole(s, ground, w) for w in ground.averaged if w.weights.sum() >= SLIGHT]
        return typical(made(used, ask(s.fr, s.inner)))
    if centre is not None and len(s.fr.free):
        return [_rung(centre, s.inner)]
    return [without_source(s.fr, ask(s.fr, s.inner), noise)]


def _band(
    s: Setting, ground: Ground | None, centre: Centre | None, noise: float, value: Array
) -> Band:
    """Laws of the band, at the level of the estimate `value`."""
    if ground is None:
        alone = _estimators(replace(s, inner=s.outer), None, centre, noise)
        return Band(alone, alone, [], True)
    size, outer, noise = _level(s, value), ask(s.fr, s.outer), mean_noise(ground.averaged)
    families = wary(s.fr, ground, size, ground.drawn, spread=True)
    ready = made(families, outer)
    steep, at_walls = _steep(s, size, typical(ready))
    steeper = weigh([w.spectrum for w in families], ground.sigma, steep, noise)
    plain_steps = []
    if ground.drawn.shape != ground.known.shape:
        known = wary(s.fr, ground, steep, ground.known, spread=True)
        plain_steps = typical(made(known, ask(s.fr, s.inner)))
    strict = typical(made(steeper, outer))
    return Band(several(ready, LAWS), strict, plain_steps, at_walls)


def _whole(s: Setting, ground: Ground, w: Weighted) -> Weighted:
    """A family of the estimate with all that covariances need."""
    if w.spectrum.base.C is not None:
        return w
    family = w.spectrum.family
    sp = spectrum(s.fr, family, ground.products, ground.drawn, right=True)
    return replace(w, spectrum=sp)


def _rung(centre: Centre, questions: Questions) -> Law:
    """The law of one rung of a ladder."""
    ladder, at = centre
    fr, noise = ladder.frame, noise_at(ladder, at)
    asked = ask(fr, questions)
    if ladder.solver != "tikhonov":
        return cut(asked, ladder, at, noise)
    family = ladder.family
    products = bases(fr, [(family.base, family.length)], "svd")
    sp = spectrum(fr, family, products, np.zeros((len(fr.free), 0)), right=True)
    return laws(asked, at_one(sp, float(ladder.strengths[at]), noise**2))(0, 1.0)


def _level(s: Setting, value: Array) -> float:
    """Mean of |source| over the free cells."""
    free, weights = s.problem.grid.free, s.problem.grid.weights
    return float(np.abs(value[s.cells])[free] @ weights[free] / weights[free].sum())


def _steep(s: Setting, size: float, cautious: Sequence[Law]) -> tuple[float, bool]:
    """The level that strict bounds reckon with, and whether the source stands at walls.

    Both are those of the most probable cautious source.
    """
    known, grid = s.limits, s.problem.grid
    lengths = np.bincount(known.piece[grid.free], grid.weights[grid.free])
    share = lengths / lengths.sum()
    d, held, acts = len(share), 0.0, 0.0
    for law in cautious:
        r = reduced(law, s.on, s.on, known.walls, known.wall_least)
        point, u, _ = most_probable(r)
        density = np.abs(point[:d])
        held += law.weight * float((known.walls[u > 0, :d] != 0).any(axis=0) @ share)
        acts += law.weight * float(density**2 @ share) / max(float(density @ share), TINY)
    return max(size, STEEP * acts), held >= PART


def _met(s: Setting, value: Array) -> NDArray[np.bool_]:
    """The cells of each inequality that is met, (p, m)."""
    slack = value[s.rows] - s.limits.least
    met = slack <= TIGHT * max(float(np.abs(slack).max(initial=0.0)), TINY)
    return np.asarray(s.limits.touched & met[:, None])


def _estimate(s: Setting, estimate: Sequence[Law]) -> tuple[Array, Array, float]:
    """Averaged constrained values of the inner questions.

    With them the freedom lost at each reading, and the growth of the misfit.
    """
    value, spent, excess = np.zeros(len(s.inner.cells)), np.zeros(s.fr.readings), 0.0
    for law in estimate:
        z = law.mean[s.rows] - s.limits.least
        found = law.mean.copy()
        if (z < 0).any():
            M = law.between(s.rows, s.rows)
            u = multipliers(M, z)
            held = np.flatnonzero(u > 0)
            by = law.between(np.arange(len(found)), s.rows[held])
            found = found + by @ u[held]
            # rows that are met are met exactly
            found[s.rows[held]] = s.limits.least[held]
            excess += law.weight * float(u @ M @ u)
            k = _at_readings(s, by)
            spent += law.weight * (k * np.linalg.lstsq(M[np.ix_(held, held)], k.T)[0].T).sum(1)
        value += law.weight * found
    return value, spent, excess


def _at_readings(s: Setting, values: Array) -> Array:
    """What the readings would be for values (N, ...) of the inner questions."""
    A, B, n = s.problem.A, s.problem.B, s.fr.readings
    return np.asarray(A[:n] @ values[s.cells] + B[:n] @ values[s.columns])


def _answered(s: Setting, values: Array) -> Array:
    """Values of the case's questions for values of the inner ones."""
    q = s.questions
    return np.asarray(q.cells @ values[s.cells] + q.columns @ values[s.columns])


def _outside(s: Setting, spread: Sequence[Law]) -> float:
    """What the inequalities take from the unconstrained posterior, at most (sum over walls)."""
    from scipy.special import ndtr

    total = 0.0
    for law in spread:
        sd = np.sqrt(np.maximum(law.variance[s.walls], np.finfo(float).tiny))
        total += law.weight * float(ndtr((s.limits.wall_least - law.mean[s.walls]) / sd).sum())
    return total


def _banded(
    s: Setting, free: Answers, inner: Array, band: Band, level: float,
    rng: np.random.SeedSequence, along: Sequence[slice],
) -> tuple[Answers, Held]:  # fmt: skip
    """Interval of each of the case's questions."""
    limits, dof = s.limits, s.fr.readings - free.fit.effective_dof

    def scales(generator: np.random.Generator, count: int) -> Array:
        if s.problem.stated:
            return np.ones(count)
        return np.asarray(np.sqrt(max(dof, 1.0) / generator.chisquare(max(dof, 1.0), count)))

    value = np.clip(_answered(s, inner), limits.low, limits.high)
    points = draws(band.several, s.user, s.on, limits, rng, scales)
    drawn = by_draws(points, level, limits)
    centre, up, down = by_bounds(
        band.typical, s.questions, s.user, s.on, limits, free.quantile, along
    )
    m_0 = _centres(s, band.plain_steps) if band.plain_steps else centre
    apart = free.quantile * np.abs(centre - m_0)
    off = free.quantile * np.maximum(np.abs(value - centre), np.abs(value - m_0))
    around = ((centre, apart), (value, off))
    strict = np.stack(
        [
            np.min([c - np.hypot(down, d) for c, d in around], axis=0),
            np.max([c + np.hypot(up, d) for c, d in around], axis=0),
        ]
    )
    if not band.at_walls:
        strict = np.stack([np.maximum(strict[0], free.lower), np.minimum(strict[1], free.upper)])
    room = np.maximum(np.abs(value - free.value), ROOM * (free.upper - free.lower) / 2)
    lower = np.fmax(np.minimum(drawn[0], strict[0]), free.lower - room)
    upper = np.fmin(np.maximum(drawn[1], strict[1]), free.upper + room)
    lower, upper = np.minimum(lower, value), np.maximum(upper, value)
    sd = np.sqrt(((points.values - value) ** 2).mean(axis=0))
    if free.reason:
        sd = lower = upper = np.full(len(value), np.nan)
    numbers = (value, sd, lower, upper, centre, m_0, points.values.std(axis=0))
    value, sd, lower, upper, m_c, m_0, s_c = (
        np.where(free.determined, part, np.nan) for part in numbers
    )
    answers = replace(
        free, value=value, sd=sd, lower=lower, upper=upper, m_c=m_c, m_0=m_0, s_c=s_c
    )  # fmt: skip
    held = Held(
        free, len(points.values), points.effective, points.refused, np.zeros(0, dtype=bool),
        0.0, drawn, strict,
    )  # fmt: skip
    return answers, held


def _centres(s: Setting, plain_steps: Sequence[Law]) -> Array:
    """Averaged most probable values of the case's questions under laws of the inner ones."""
    walls, least = s.limits.walls, s.limits.wall_least
    every = np.arange(len(s.inner.cells))
    total = np.zeros(len(every))
    for law in plain_steps:
        total += law.weight * most_probable(reduced(law, every, s.on, walls, least))[0]
    return _answered(s, total)


def _within(answers: Answers, limits: Limits) -> Answers:
    """Answers with intervals that end where the inequalities end."""
    lower, upper = (np.clip(a, limits.low, limits.high) for a in (answers.lower, answers.upper))
    return replace(answers, lower=lower, upper=upper, low=limits.low, high=limits.high)


def _fit(s: Setting, free: Fit, value: Array, spent: Array) -> Fit:
    """How the constrained estimate fits the readings."""
    residual = s.problem.d[: s.fr.readings] - _at_readings(s, value)
    hat = np.clip(free.hat - spent, 0.0, 1.0)
    left = np.where(1 - hat > ALONE, 1 - hat, np.nan)
    return replace(free, residual=residual, hat=hat, leave_one_out=residual / left)
