"""Intervals for any linear question about the source: the cautious band and the plain one.

The cautious band keeps the best estimate m and takes its width from a cautious prior: as if the
source might vary by at least half its own mean within a tenth of the member, and jump at the
edges that were drawn, whether or not they are exact. With m_c, s_c the mean and standard
deviation under that prior, and m_0 the mean under the same prior with steps at the known breaks
only, the interval is

    m +- z sqrt(s_c**2 + max(|m - m_c|, |m - m_0|)**2).

The plain band is that of one strength, chosen by one criterion; it is too narrow wherever the
source is rougher than the penalty expects.
Sources: Wahba (1983), J. R. Stat. Soc. B 45, 133, and Nychka (1988), J. Am. Stat. Assoc. 83,
1134, for what bands of this kind can promise.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import qr

from srcfit.criteria import Choice, choose
from srcfit.errors import SolveError
from srcfit.evidence import (
    Weighted,
    at_one,
    conditional,
    data_share,
    grid,
    mean_noise,
    mean_source,
    means,
    moments,
    weigh,
)
from srcfit.priors import CAUTIOUS, SCALE, estimate_families, pieces
from srcfit.problem import Array, Problem, Questions
from srcfit.solvers.frame import UNIFORM, Asked, Frame, ask, frame, unpenalised
from srcfit.solvers.ladder import ALONE, Ladder, penalised
from srcfit.solvers.spectrum import Base, bases, route, spectrum
from srcfit.solvers.tikhonov import tikhonov

Centre = tuple[Ladder, int]
# intervals need this many readings beyond the unpenalised unknowns
FEWEST = 3


@dataclass(frozen=True)
class Fit:
    """How the estimate fits the n readings; all whitened and averaged by evidence.

    Attributes
    ----------
    residual, leave_one_out, hat : (n,)
        leave_one_out is nan where nothing but the reading itself tells some unknown.
    noise : float
        Standard deviation of the whitened noise: 1 where it is stated.
    ladders : tuple of Ladder
        One per family of the average (or the one that the estimate was taken from).
    weights : tuple of (t,)
        Weight of each rung of each ladder, 1 in all.
    """

    residual: Array
    leave_one_out: Array
    hat: Array
    noise: float
    ladders: tuple[Ladder, ...] = ()
    weights: tuple[Array, ...] = ()

    @property
    def effective_dof(self) -> float:
        """Trace of the hat matrix at the readings, unpenalised columns included."""
        return float(self.hat.sum())

    @property
    def standardised(self) -> Array:
        """Residuals over their own standard deviations, (n,)."""
        free = np.where(1 - self.hat > ALONE, 1 - self.hat, np.nan)
        return np.asarray(self.residual / (self.noise * np.sqrt(free)))


@dataclass(frozen=True)
class Answers:
    """Answers to q questions, and how the readings fit.

    Attributes
    ----------
    value, sd, lower, upper : (q,)
        nan where the readings cannot tell; sd is the half-width over `quantile`.
    m_c, m_0, s_c : (q,)
        Cautious mean, the same with steps at the known breaks only, cautious sd.
    data_share : (q,)
        How much of the smooth part's prior variance the readings took away; nan where the
        question has none.
    determined : (q,) bool
        Whether the readings tell the question's unpenalised part.
    reason : str
        Why there are no intervals at all; empty where there are.
    level : float
        Mean of |source| over the free cells.
    quantile : float
        z, or Student's t where the noise is not stated.
    fit : Fit
    choice : Choice or None
        The plain band's choice.
    low, high : (q,) or None
        What each question can be at all, where constraints say so: intervals end there.
    band : {"calibrated", "cautious", "plain"}
        What the intervals are.
    """

    value: Array
    sd: Array
    lower: Array
    upper: Array
    m_c: Array
    m_0: Array
    s_c: Array
    data_share: Array
    determined: NDArray[np.bool_]
    reason: str
    level: float
    quantile: float
    fit: Fit
    choice: Choice | None = None
    low: Array | None = None
    high: Array | None = None
    band: str = "cautious"


def cautious(
    problem: Problem,
    questions: Questions,
    *,
    level: float = 0.95,
    centre: Centre | None = None,
    at_least: float = 0.0,
) -> Answers:
    """Answers with the cautious band.

    Parameters
    ----------
    problem : Problem
    questions : Questions
    level : float
        Probability that an interval promises to hold.
    centre : (Ladder, int), optional
        Take the estimate from this rung; by default it is averaged over families by evidence.
    at_least : float
        Mean level to reckon with where the estimate's own is smaller.

    Returns
    -------
    Answers
    """
    fr = frame(problem)
    asked = ask(fr, questions)
    if not len(fr.free) or fr.nu == 0:
        return without_source(fr, asked, level)
    ground = weighed(fr)
    if centre is None:
        value, fit, size = averaged(fr, asked, ground)
    else:
        ladder, at = centre
        value, fit = ladder.answers(questions)[:, at], rung_fit(ladder, at)
        size = mean_level(fr, ladder.estimates[fr.free, at])
    size = max(size, at_least)
    judged = judge(fr, asked, ground, value, size)
    parts = (value, judged.sd, judged.m_c, judged.m_0, judged.s_c, judged.data_share)
    return assembled(fr, asked, parts, fit, size, level)


@dataclass(frozen=True)
class Judged:
    """Cautious judgement of q answers.

    Attributes
    ----------
    m_c, m_0, s_c, data_share, off : (q,)
        As of `Answers`; the distance of the estimate from the cautious means.
    drawn, known : lists of Weighted
        The cautious families with steps at all drawn edges, and at the known breaks alone.
    """

    m_c: Array
    m_0: Array
    s_c: Array
    data_share: Array
    off: Array
    drawn: list[Weighted]
    known: list[Weighted]

    @property
    def sd(self) -> Array:
        """Half-width of the cautious band over the quantile, (q,)."""
        return np.sqrt(self.s_c**2 + self.off**2)


def averaged(fr: Frame, asked: Asked, ground: Ground) -> tuple[Array, Fit, float]:
    """Values (q,) of the evidence-averaged estimate, its fit and its mean level."""
    value = means(fr, asked, mean_source(ground.averaged))
    return value, averaged_fit(ground.averaged), level_of(fr, ground)


def level_of(fr: Frame, ground: Ground) -> float:
    """Mean level of the evidence-averaged estimate."""
    return mean_level(fr, _density(fr, mean_source(ground.averaged)))


def judge(fr: Frame, asked: Asked, ground: Ground, value: Array, size: float) -> Judged:
    """Judge values (q,) by what a cautious prior of mean level `size` makes of the readings."""
    drawn = wary(fr, ground, size, ground.drawn, spread=True)
    m_c, variance = moments(asked, drawn)
    known, m_0 = drawn, m_c
    if ground.drawn.shape != ground.known.shape:
        known = wary(fr, ground, size, ground.known, spread=False)
        m_0 = means(fr, asked, mean_source(known))
    off = np.maximum(np.abs(value - m_c), np.abs(value - m_0))
    return Judged(m_c, m_0, np.sqrt(variance), data_share(asked, drawn), off, drawn, known)


@dataclass(frozen=True)
class Ground:
    """Families of one problem, weighed by evidence.

    Attributes
    ----------
    averaged : list of Weighted
        Those that the estimate is averaged over.
    products : of `spectrum.bases`, for these and for the cautious families
    sigma : (t,)
    drawn, known : (m', j)
        Pieces within which the source may step: at all edges, and at the known breaks only.
    """

    averaged: list[Weighted]
    products: dict[tuple[str, float], Base]
    sigma: Array
    drawn: Array
    known: Array


def weighed(fr: Frame, *, spread: bool = False) -> Ground:
    """Weigh the families of the estimate; `spread`: with all that variances need."""
    cells = fr.problem.grid
    drawn, known = pieces(cells, zones=True), pieces(cells, zones=False)
    families = estimate_families(drawn)
    keys = [SCALE, *((f.base, f.length) for f in (*families, *CAUTIOUS))]
    products = bases(fr, keys, route(fr))
    sigma = grid(fr, products)
    found = [spectrum(fr, f, products, drawn, right=spread) for f in families]
    return Ground(weigh(found, sigma), products, sigma, drawn, known)


def wary(fr: Frame, ground: Ground, size: float, steps: Array, *, spread: bool) -> list[Weighted]:
    """The cautious families over steps within pieces, weighed above the floor of a mean level.

    A source that may be rough would take an unstated noise for its own: the noise is that of the
    estimate. `spread`: with all that variances and covariances need.
    """
    spectra = [spectrum(fr, f, ground.products, steps, right=spread) for f in CAUTIOUS]
    return weigh(spectra, ground.sigma, size, mean_noise(ground.averaged))


def plain(
    problem: Problem,
    questions: Questions,
    *,
    choose_by: str = "evidence",
    roughness: int | float | str = 1,
    level: float = 0.95,
    strength: float | None = None,
) -> Answers:
    """Answers with the band of one strength: the named alternative to `cautious`.

    The strength is chosen by a criterion, or stated.

    Raises
    ------
    SolveError
        When the criterion has nothing to say about this problem.
    """
    stated = None if strength is None else np.array([strength])
    ladder = tikhonov(problem, roughness=roughness, strengths=stated)
    fr, asked = ladder.frame, ask(ladder.frame, questions)
    if not len(fr.free) or fr.nu == 0:
        return without_source(fr, asked, level)
    if strength is None:
        choice = choose(ladder, choose_by)
    else:
        choice = Choice("stated", 0, strength, float("nan"), True, "")
    if choice.index < 0:
        how = "choose another criterion or leave strength.choose out"
        raise SolveError(f"{choose_by} cannot choose here: {choice.note}", "strength.choose", how)
    at, fam = choice.index, ladder.family
    products = bases(fr, [(fam.base, fam.length)], "svd")
    sp = spectrum(fr, fam, products, np.zeros((len(fr.free), 0)), right=True)
    one = at_one(sp, choice.strength, noise_at(ladder, at) ** 2)
    value, variance = (part[:, 0] for part in conditional(asked, one))
    sd = np.sqrt(variance)
    parts = (value, sd, value, value, sd, data_share(asked, [one]))
    size = mean_level(fr, ladder.estimates[fr.free, at])
    found = assembled(fr, asked, parts, rung_fit(ladder, at), size, level, choice)
    return replace(found, band="plain")


def undetermined(problem: Problem) -> tuple[tuple[str, ...], ...]:
    """Names of the unpenalised unknowns that the readings cannot tell apart, one tuple each.

    The source's own constant is called "uniform source". A tuple of one name: no reading sees it.
    """
    U = unpenalised(problem)
    constants = [UNIFORM] * problem.grid.parts if problem.constant else []
    names = [*constants, *problem.names]
    fr = frame(problem)
    rank = fr.U.shape[1]
    if rank == len(names):
        return ()
    _, R, order = qr(U / fr.norms, mode="economic", pivoting=True)
    mixed = np.linalg.lstsq(R[:rank, :rank], R[:rank, rank:], rcond=None)[0]
    found = []
    for j, column in enumerate(mixed.T):
        alike = [int(order[i]) for i in np.flatnonzero(np.abs(column) > 1e-6)]
        found.append(tuple(names[i] for i in sorted([int(order[rank + j]), *alike])))
    # the two parts of a complex amplitude have one name
    return tuple(dict.fromkeys(tuple(dict.fromkeys(group)) for group in found))


def _density(fr: Frame, variation: Array) -> Array:
    """Source density on the free cells, the constant and what balances the rest included."""
    f = variation if fr.balanced is None else fr.balanced @ variation
    amounts, along = fr.solve @ (fr.Ud - fr.UA @ variation), fr.problem.along
    if along is not None:
        k = along.shape[1] - 1
        f = f + (along[:, :-1] @ amounts[len(amounts) - k :] + along[:, -1])[fr.free]
    if fr.problem.constant:
        constants = fr.problem.grid.constants
        f = f + constants @ amounts[: constants.shape[1]]
    return np.asarray(f)


def mean_level(fr: Frame, density: Array) -> float:
    """Mean of |source| over the free cells; of complex amplitudes the moduli."""
    grid = fr.problem.grid
    weights = grid.weights[grid.free]
    size = np.linalg.norm(density.reshape(grid.parts, -1), axis=0)
    return float(size @ weights / weights.sum())


def noise_at(ladder: Ladder, at: int) -> float:
    """Sd of the whitened noise at one rung: 1 where it is stated."""
    if ladder.frame.problem.stated:
        return 1.0
    left = ladder.readings - float(ladder.dof[at])
    return float(ladder.residual_norms[at] / np.sqrt(left)) if left > ALONE else float("nan")


def averaged_fit(families: Sequence[Weighted]) -> Fit:
    """Fit of the average over families and rungs."""
    ladders = tuple(penalised(w.spectrum, w.sigma**-2.0) for w in families)
    weights = tuple(w.weights for w in families)

    def average(name: str) -> Array:
        values = np.hstack([getattr(la, name) for la in ladders])
        known = np.isfinite(values) * np.concatenate(weights)
        told = known.sum(axis=1)
        # nan where most of the weight lies on rungs that cannot tell the row
        told[told < 0.5] = np.nan
        return np.asarray((np.nan_to_num(values) * known).sum(axis=1) / told)

    noise = float(np.sqrt(mean_noise(families)))
    residual, left, hat = (average(name) for name in ("residuals", "leave_one_out", "hat"))
    return Fit(residual, left, hat, noise, ladders, weights)


def rung_fit(ladder: Ladder, at: int) -> Fit:
    """Fit of one rung."""
    weights = np.eye(len(ladder.strengths))[at]
    three = (ladder.residuals[:, at], ladder.leave_one_out[:, at], ladder.hat[:, at])
    return Fit(*three, noise_at(ladder, at), (ladder,), (weights,))


def assembled(
    fr: Frame,
    asked: Asked,
    parts: tuple[Array, Array, Array, Array, Array, Array],
    fit: Fit,
    size: float,
    level: float,
    choice: Choice | None = None,
) -> Answers:
    """Intervals from value, spread, m_c, m_0, s_c and data share; nan where undetermined."""
    told = asked.determined
    value, sd, m_c, m_0, s_c, share = (np.where(told, part, np.nan) for part in parts)
    reason = ""
    if fr.nu < FEWEST:
        reason = f"only {fr.nu} readings beyond the unpenalised unknowns"
        sd = np.full(len(value), np.nan)
    dof = None if fr.problem.stated else fr.readings - fit.effective_dof
    quantile = quantile_of(level, dof)
    return Answers(
        value=value,
        sd=sd,
        lower=value - quantile * sd,
        upper=value + quantile * sd,
        m_c=m_c,
        m_0=m_0,
        s_c=s_c,
        data_share=share,
        determined=told,
        reason=reason,
        level=size,
        quantile=quantile,
        fit=fit,
        choice=choice,
    )


def quantile_of(level: float, dof: float | None) -> float:
    """Two-sided normal quantile, or Student's with `dof` degrees of freedom (at least one)."""
    from scipy.special import ndtri, stdtrit

    p = (1 + level) / 2
    return float(ndtri(p) if dof is None else stdtrit(max(dof, 1.0), p))


def without_source(fr: Frame, asked: Asked, level: float) -> Answers:
    """Least squares for the unpenalised columns alone: no smooth part, or nothing left for it."""
    n = fr.readings
    residual = (fr.problem.d - fr.U @ fr.Ud)[:n]
    hat = (fr.U[:n] ** 2).sum(axis=1)
    left = n - float(hat.sum())
    noise = 1.0
    if not fr.problem.stated:
        noise = float(np.sqrt(residual @ residual / left)) if left > ALONE else float("nan")
    free = np.where(1 - hat > ALONE, 1 - hat, np.nan)
    value = asked.H @ fr.Ud
    sd = noise * np.linalg.norm(asked.H, axis=1)
    constants = (fr.solve @ fr.Ud)[: fr.problem.grid.parts]
    uniform = float(np.linalg.norm(constants)) if fr.problem.constant else 0.0
    parts = (value, sd, value, value, sd, np.full(len(value), np.nan))
    return assembled(fr, asked, parts, Fit(residual, residual / free, hat, noise), uniform, level)
