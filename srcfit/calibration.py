"""The calibrated band: the cautious one brought to the width that this layout needs.

The cautious band keeps its promise on average with room to spare; how much depends on the member,
the sensors and the noise. So the whole procedure is repeated on simulated readings of reference
sources (see `references`) at the user's own sensors, noise and drawn edges, and each answer's
half-width becomes

    factor * sqrt(v + v_c + 3 max(|m - m_c|, |m - m_0|)**2),

v and v_c the variances of the estimate and of the cautious prior within their rungs. The factor
is sqrt(b**2 + (z n)**2): n the noise of the answer and b its bias in the same units, b at a
quantile of the reference sources beyond the level that is promised, since nobody's source is
drawn from that mixture and the promise should hold for unlike ones.

Source: calibration by simulation after Rubin (1984), Ann. Stat. 12, 1151; the quantile as in split
conformal prediction, Vovk, Gammerman & Shafer, Algorithmic Learning in a Random World (2005).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from srcfit.bands import (
    FEWEST,
    Answers,
    Ground,
    Judged,
    assembled,
    averaged,
    judge,
    weighed,
    without_source,
)
from srcfit.evidence import level_scale, mean_noise
from srcfit.priors import SCALE
from srcfit.problem import Array, Problem, Questions
from srcfit.references import SEED, references
from srcfit.repeats import Many, Sets, Shared, answered, shared
from srcfit.solvers.frame import Asked, Complement, Frame, ask, frame

Indices = NDArray[np.intp]
# part of the promised misses that the reference sources may make
SHARE = 0.3
# weight of the distance between the centres, by which a missed feature shows itself
APART = 3.0
# every how many rungs of sigma a repeat is averaged over
STRIDE = 2
# how many questions of a run get a factor of their own; the others lie between
ALONG = 25
# relative width below which a number is rounding
NOTHING = 1e-12


def calibrated(
    problem: Problem,
    questions: Questions,
    *,
    level: float = 0.95,
    runs: Sequence[slice] = (),
) -> Answers:
    """Answers with the calibrated band around the evidence-averaged estimate.

    Parameters
    ----------
    problem : Problem
    questions : Questions
    level : float
        Probability that an interval promises to hold.
    runs : sequence of slice
        Blocks of questions that follow the member: their factors are found at some places and
        interpolated between.

    Returns
    -------
    Answers
    """
    fr = frame(problem)
    asked = ask(fr, questions)
    if not len(fr.free) or fr.nu == 0:
        return without_source(fr, asked, level)
    ground = weighed(fr, spread=True)
    value, fit, size = averaged(fr, asked, ground)
    judged = judge(fr, asked, ground, value, size)
    parts = (value, judged.sd, judged.m_c, judged.m_0, judged.s_c, judged.data_share)
    cautious = assembled(fr, asked, parts, fit, size, level)
    if fr.nu < FEWEST:
        return cautious
    picked = _picked(asked, runs)
    tuned = tune(fr, _some(asked, picked), ground, judged, level, cautious.quantile)
    own_set = Sets(fr.Ud[:, None], fr.Qd[:, None], np.array([fr.rest @ fr.rest]))
    half = tuned.half_widths(own_set, np.array([size]))[1][:, 0]
    own = cautious.quantile * cautious.sd[picked]
    ratio = np.where(own > 0, half / np.where(own > 0, own, 1.0), 1.0)
    sd = cautious.sd * np.interp(np.arange(len(value)), picked, ratio)
    half = cautious.quantile * sd
    lower, upper = cautious.value - half, cautious.value + half
    return replace(cautious, sd=sd, lower=lower, upper=upper, band="calibrated")


def _picked(asked: Asked, runs: Sequence[slice]) -> Indices:
    """Numbers of the questions that get a factor of their own, ascending."""
    alone = np.ones(len(asked.H), dtype=bool)
    for run in runs:
        where = np.arange(len(alone))[run]
        alone[where] = False
        if len(where):
            alone[where[np.linspace(0, len(where) - 1, ALONG).astype(int)]] = True
    picked = np.flatnonzero(alone & asked.determined)
    return picked if len(picked) else np.zeros(1, dtype=np.intp)


def _some(asked: Asked, picked: Indices) -> Asked:
    return Asked(asked.G[picked], asked.H[picked], asked.size[picked], asked.determined[picked])


@dataclass(frozen=True)
class Tuned:
    """The procedure at one layout, ready for any readings of its noise.

    Attributes
    ----------
    families : of the estimate, cautious with steps at all drawn edges, and at the breaks alone
    factor : (q,)
    """

    asked: Asked
    families: tuple[list[Shared], ...]
    factor: Array

    def answers(self, given: Sets, size: Array) -> tuple[Many, Many, Many]:
        """The estimate and both cautious means for sets of readings and mean levels (S,)."""
        return _answers(self.asked, self.families, given, size)

    def half_widths(self, given: Sets, size: Array) -> tuple[Array, Array]:
        """Values and half-widths (q, S) for sets of readings and mean levels (S,)."""
        values, widths = _spread(*self.answers(given, size))
        return values, self.factor[:, None] * widths


def tune(
    fr: Frame, asked: Asked, ground: Ground, judged: Judged, level: float, quantile: float
) -> Tuned:
    """Find the factor of each question by simulation.

    Every reference source is read twice, with the same noise of either sign: the mean of the two
    answers shows its bias, half their difference the noise. `quantile`: of the noise, two-sided.
    """
    sigma = ground.sigma[::STRIDE]
    families = tuple(
        shared(asked, [w.spectrum for w in weighted], sigma)
        for weighted in (ground.averaged, judged.drawn, judged.known)
    )
    trials, sources = _trials(fr, ground)
    size = levels(fr, sources)
    values, widths = _spread(*_answers(asked, families, trials, np.tile(size, 2)))
    truth = asked.G @ sources
    # a question without any error at all (a balanced total) is kept by rounding alone
    sure = widths <= NOTHING * np.abs(truth).max(axis=1, initial=0.0)[:, None]
    off = np.where(sure, 0.0, values - np.tile(truth, 2)) / np.where(sure, 1.0, widths)
    first, second = np.split(off, 2, axis=1)
    bias = np.quantile(np.abs(first + second) / 2, 1 - SHARE * (1 - level), axis=1)
    noise = np.sqrt(np.mean((first - second) ** 2, axis=1)) / 2
    return Tuned(asked, families, np.hypot(bias, quantile * noise))


def _answers(
    asked: Asked, families: Sequence[Sequence[Shared]], given: Sets, level: Array
) -> tuple[Many, Many, Many]:
    best = answered(asked, families[0], given)
    drawn, known = (answered(asked, f, given, level, best.noise) for f in families[1:])
    return best, drawn, known


def _spread(best: Many, drawn: Many, known: Many) -> tuple[Array, Array]:
    """Values and what their half-widths are multiples of, (q, S)."""
    off = np.maximum(np.abs(best.value - drawn.value), np.abs(best.value - known.value))
    return best.value, np.sqrt(best.variance + drawn.variance + APART * off**2)


def _trials(fr: Frame, ground: Ground) -> tuple[Sets, Array]:
    """Simulated readings (2 S sets) and their sources (m', S), as large as the user's own."""
    noise = mean_noise(ground.averaged)
    lam = np.linalg.eigvalsh(ground.products[SCALE].S[: len(fr.Qd), : len(fr.Qd)])
    told = np.maximum(lam, 0.0) * level_scale(fr, ground.products) ** 2 / noise
    sources = references(fr.problem.grid, float((told / (1 + told)).sum()))
    if fr.balanced is not None:
        sources = fr.balanced @ sources
    QD, UD = fr.QA @ sources, fr.UA @ sources
    own = slice(len(UD) - fr.own, None)
    energy = (QD**2).sum(axis=0) + (UD[own] ** 2).sum(axis=0)
    seen = float(fr.Qd @ fr.Qd + fr.rest @ fr.rest + fr.Ud[own] @ fr.Ud[own]) or noise * fr.nu
    kept = energy > NOTHING * energy.max(initial=0.0)
    size = np.sqrt(seen / energy[kept])
    QD, UD = QD[:, kept] * size, UD[:, kept] * size
    errors = np.sqrt(noise) * _errors(fr, len(size))
    UE = fr.U.T @ errors
    beyond = errors - fr.U @ UE
    if isinstance(fr.basis, Complement):
        QE, rest = fr.basis.drop(beyond), np.zeros(len(size))
    else:
        QE = fr.basis.T @ beyond
        rest = ((beyond - fr.basis @ QE) ** 2).sum(axis=0)
    both = Sets(np.hstack([UD + UE, UD - UE]), np.hstack([QD + QE, QD - QE]), np.tile(rest, 2))
    return both, sources[:, kept] * size


def _errors(fr: Frame, count: int) -> Array:
    """Unit errors (n, count) that follow their readings wherever these stand in the table.

    Rows are ordered by what they say of one arbitrary source; a reading of the other sign has the
    other error.
    """
    rng = np.random.default_rng(SEED)
    problem = fr.problem
    mark = problem.A[:, fr.free] @ rng.standard_normal(len(fr.free))
    order = np.lexsort((np.abs(problem.d), np.abs(mark)))
    errors = np.empty((len(mark), count))
    errors[order] = rng.standard_normal((len(mark), count))
    return errors * np.where(mark < 0, -1.0, 1.0)[:, None]


def levels(fr: Frame, sources: Array) -> Array:
    """Mean of |source| of each, (S,); of complex amplitudes of their moduli."""
    grid = fr.problem.grid
    weights = grid.weights[grid.free]
    size = np.linalg.norm(sources.reshape(grid.parts, len(weights), -1), axis=0)
    return np.asarray(weights @ size / weights.sum())
