"""Averaging over families and strengths by their evidence.

Every family is taken at a grid of sigma (in units of the noise's sd where that is not stated),
with a prior uniform in ln sigma; the weights are the normalised restricted likelihoods. Means
and variances of linear questions are those of the mixture (law of total variance).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from srcfit.priors import REACH, RUNGS, SCALE, above_floor, natural, sigma_grid
from srcfit.problem import Array
from srcfit.solvers.frame import Asked, Frame
from srcfit.solvers.ladder import log_evidence, misfit
from srcfit.solvers.spectrum import Base, Spectrum

# an unstated noise is looked for between this part of what the unpenalised columns leave and all
FAINTEST = 1e-6
# questions whose smooth part is this small a part of its weight have none (balanced totals)
SILENT = 1e-14


@dataclass(frozen=True)
class Weighted:
    """One family on its grid of sigma.

    Attributes
    ----------
    sigma : (t,)
        In units of the noise's sd.
    noise : (t,)
        Variance of the noise at each rung, in whitened units (1 where it is stated).
    log_evidence, weights : (t,)
    shrink : (c, t)
        1 / (1 + sigma**2 lam).
    """

    spectrum: Spectrum
    sigma: Array
    noise: Array
    log_evidence: Array
    weights: Array
    shrink: Array


def level_scale(fr: Frame, products: Mapping[tuple[str, float], Base]) -> float:
    """Scale of sigma: |P d| / sqrt(|P A 1|**2 + tr P A C A'), P without the nuisances B."""
    base = products[SCALE]
    size = len(fr.Qd)
    spread = float(np.trace(base.S[:size, :size]))
    energy = float(fr.Qd @ fr.Qd + fr.rest @ fr.rest)
    if fr.own:
        own = slice(-fr.own, None)
        energy += float(fr.Ud[own] @ fr.Ud[own])
        level = fr.UA[own] @ fr.problem.grid.constants
        spread += float(np.trace(base.S[own, own]) + (level**2).sum())
    if spread <= 0:
        return 1.0
    # readings that are exactly 0: the noise takes the place of the signal
    return float(np.sqrt((energy if energy > 0 else fr.nu) / spread))


def grid(fr: Frame, products: Mapping[tuple[str, float], Base]) -> Array:
    """Sigmas of every family, (t,); in units of the noise's sd where that is not stated."""
    scale = level_scale(fr, products)
    if fr.problem.stated:
        return sigma_grid(scale)
    loudest = float(np.sqrt((fr.Qd @ fr.Qd + fr.rest @ fr.rest) / fr.nu)) or 1.0
    low, high = scale / loudest / REACH, scale / loudest / FAINTEST * REACH
    per_rung = 2 * np.log(REACH) / (RUNGS - 1)
    return np.geomspace(low, high, int(np.ceil(np.log(high / low) / per_rung)) + 1)


def weigh(
    spectra: Sequence[Spectrum],
    sigma: Array,
    level: float | None = None,
    noise: float | None = None,
) -> list[Weighted]:
    """Evidence weights of some families over one grid, summing to 1 over all of them.

    Parameters
    ----------
    spectra : sequence of Spectrum
    sigma : (t,)
    level : float, optional
        Mean level of the source: sigmas under the cautious floor are left out.
    noise : float, optional
        Variance of the whitened noise where it is known from elsewhere.
    """
    raw = [
        _rungs(sp, sigma * natural(sp.family.base, sp.frame.problem.grid), noise) for sp in spectra
    ]
    kept = [
        np.ones(len(sigma), dtype=bool)
        if level is None
        else above_floor(w.sigma * np.sqrt(w.noise), level)
        for w in raw
    ]
    best = max(float(w.log_evidence[k].max()) for w, k in zip(raw, kept, strict=True))
    weights = [
        np.where(k, np.exp(np.minimum(w.log_evidence - best, 0.0)), 0.0)
        for w, k in zip(raw, kept, strict=True)
    ]
    total = sum(float(part.sum()) for part in weights)
    return [replace(w, weights=part / total) for w, part in zip(raw, weights, strict=True)]


def _rungs(sp: Spectrum, sigma: Array, given: float | None) -> Weighted:
    """One family on its grid, not yet weighed against others."""
    fr, tau, beyond = sp.frame, sigma**-2.0, float(sp.rest @ sp.rest)
    if fr.problem.stated:
        given = 1.0
    noise = misfit(sp.lam, sp.y, beyond, tau) / fr.nu
    if given:
        noise = np.full(len(sigma), given)
    evidence = log_evidence(fr, sp.lam, sp.y, beyond, tau, given)
    shrink = 1 / (1 + sp.lam[:, None] * sigma**2)
    return Weighted(sp, sigma, noise, evidence, np.ones(len(sigma)), shrink)


def mean_noise(families: Sequence[Weighted]) -> float:
    """Evidence-averaged variance of the whitened noise."""
    return sum(float(w.weights @ w.noise) for w in families)


def at_one(sp: Spectrum, strength: float, noise: float) -> Weighted:
    """One family at one strength, with all the weight and a given variance of the noise."""
    return _rungs(sp, np.array([strength**-0.5]), noise)


def mean_source(families: Sequence[Weighted]) -> Array:
    """Evidence-averaged variation of the source on the free cells, before balancing, (m',)."""
    total: Array = np.zeros(families[0].spectrum.K.shape[0])
    for w in families:
        sp = w.spectrum
        amounts = sp.y * (w.shrink @ (w.weights * w.sigma**2))
        total = total + sp.K[:, : len(sp.V)] @ (sp.V @ amounts)
    return total


def means(fr: Frame, asked: Asked, f: Array) -> Array:
    """Values (q,) of questions for a variation f of the source (unpenalised parts refitted)."""
    return np.asarray(asked.G @ f + asked.H @ (fr.Ud - fr.UA @ f))


def moments(asked: Asked, families: Sequence[Weighted]) -> tuple[Array, Array]:
    """Mean and variance (q,) of each question under the mixture (law of total variance)."""
    parts = [(w, *conditional(asked, w)) for w in families]
    mean = np.sum([m @ w.weights for w, m, _ in parts], axis=0)
    variance = np.sum([(v + (m - mean[:, None]) ** 2) @ w.weights for w, m, v in parts], axis=0)
    return np.asarray(mean), np.asarray(variance)


def conditional(asked: Asked, w: Weighted) -> tuple[Array, Array]:
    """Mean and variance (q, t) of each question at each rung of one family."""
    sp = w.spectrum
    T = transfer(asked, sp)
    mean = asked.H @ sp.frame.Ud
    mean = mean[:, None] + T @ (w.sigma**2 * w.shrink * sp.y[:, None])
    return mean, w.noise * spreads(asked, sp, T, w.sigma, w.shrink)


def transfer(asked: Asked, sp: Spectrum) -> Array:
    """T = g~'C A'QV (q, c) with g~ = g - A'h: what each mode's amount adds to each question.

    The mean is h'd + sigma**2 T D y, D = 1 / (1 + sigma**2 lam).
    """
    size = len(sp.V)
    return np.asarray(asked.G @ (sp.K[:, :size] @ sp.V) - asked.H @ (sp.S[size:, :size] @ sp.V))


def spreads(asked: Asked, sp: Spectrum, T: Array, sigma: Array, shrink: Array) -> Array:
    """Variance (q, t) of each question at each rung, for noise of variance 1.

    |h|**2 + sigma**2 g~'C g~ - sigma**4 T**2 D, or the same as a sum of positive terms in the
    coordinates of the covariance's factor.
    """
    fr, size = sp.frame, len(sp.V)
    unpenalised = (asked.H**2).sum(axis=1)[:, None]
    if sp.right is not None:
        L = sp.factor
        whole = asked.G @ L - asked.H @ (fr.UA @ L)
        seen = whole @ sp.right.T
        unseen = ((whole - seen @ sp.right) ** 2).sum(axis=1)[:, None]
        spread = sigma**2 * (unseen + seen**2 @ shrink)
    else:
        cross = (asked.G @ sp.K[:, size:]) * asked.H
        prior = prior_variance(asked, sp) - 2 * cross.sum(axis=1)
        prior = prior + ((asked.H @ sp.S[size:, size:]) * asked.H).sum(axis=1)
        spread = sigma**2 * prior[:, None] - T**2 @ (sigma**4 * shrink)
    return np.asarray(unpenalised + np.maximum(spread, 0.0))


def prior_variance(asked: Asked, sp: Spectrum) -> Array:
    """Variance (q,) of G f for sigma = 1, the constant held fixed."""
    G, base = asked.G, sp.base
    if base.L is not None:
        variance = ((G @ base.L) ** 2).sum(axis=1)
    else:
        assert base.C is not None
        GC = G @ base.C
        product = G * GC if isinstance(G, np.ndarray) else G.multiply(GC)
        variance = np.asarray(product.sum(axis=1)).ravel()
    return np.asarray(sp.family.scale * variance + ((G @ sp.steps) ** 2).sum(axis=1))


def data_share(asked: Asked, families: Sequence[Weighted]) -> Array:
    """1 - posterior / prior variance (q,) of each question's smooth part, weighted by evidence.

    The mean level is held fixed: then the readings' part in the constant's own direction tells
    about the source too. nan where the question has no smooth part.
    """
    total: Array = np.zeros(len(asked.H))
    for w in families:
        sp, fr, size = w.spectrum, w.spectrum.frame, len(w.spectrum.V)
        prior = prior_variance(asked, sp)
        square = w.sigma**2 * w.shrink
        T = asked.G @ (sp.K[:, :size] @ sp.V)
        told = T**2 @ square
        if fr.own:
            told = told + _by_constants(asked, sp, T, w.sigma, square)
        share = np.full(len(prior), np.nan)
        # the square of a question's whole weight bounds its variance
        some = prior > SILENT * asked.size**2
        share[some] = (told[some] @ w.weights) / prior[some]
        total = total + share
    return np.asarray(np.clip(total, 0.0, 1.0))


def _by_constants(asked: Asked, sp: Spectrum, T: Array, sigma: Array, square: Array) -> Array:
    """What the readings tell of G f through the constants' own directions, (q, t)."""
    own, size = slice(-sp.frame.own, None), len(sp.V)
    seen = sp.S[own, :size] @ sp.V
    cross = np.asarray(asked.G @ sp.K[:, own]).T[:, :, None]
    cross = cross - np.stack([(T * row) @ square for row in seen])
    spread = sp.S[own, own][:, :, None] - np.einsum("ic,jc,ct->ijt", seen, seen, square)
    spread = spread + np.eye(len(seen))[:, :, None] * sigma**-2
    if len(seen) == 1:
        return np.asarray(cross[0] ** 2 / np.maximum(spread[0, 0], np.finfo(float).tiny))
    solved = np.linalg.solve(spread.transpose(2, 0, 1), cross.transpose(2, 0, 1))
    return np.asarray(np.einsum("iqt,tiq->qt", cross, solved))
