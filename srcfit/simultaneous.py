"""The factor that makes a pointwise band hold at all places at once.

A pointwise band holds at any one place with the stated probability. All places at once are held
by a wider one: the half-width times factor / quantile, where the factor is the quantile of the
largest |deviation| / sd over all places. It follows from the correlation of the posterior, by
draws. Source: the sup-quantile of a Gaussian vector; Sidak (1967), J. Am. Stat. Assoc. 62, 626,
bounds it by independent places.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh

from srcfit.bands import Answers
from srcfit.evidence import Weighted, at_one, grid, weigh
from srcfit.priors import CAUTIOUS, SCALE, pieces
from srcfit.problem import Array, Problem, Questions
from srcfit.solvers.frame import Asked, ask, frame
from srcfit.solvers.spectrum import bases, route, spectrum

DRAWS, SEED = 5000, 1967  # one fixed stream: the same posterior gives the same factor
MOST = 400  # places that are looked at; more are thinned evenly, neighbours being alike
PAIRED = 48  # places whose differences are drawn
SLIGHT = 1e-9  # part of the largest eigenvalue that is left out
NEAR = 1e-3  # places that move together but for this part of their sd are one


@dataclass(frozen=True)
class Together:
    """How the deviations of a band's places hang together.

    Attributes
    ----------
    places : (p,) int
        Numbers of the places that are looked at, among those that were asked for.
    correlation : (p, p)
    dof : float or None
        Degrees of freedom of an unstated noise.
    pointwise : float
        Quantile of the band at any one place.
    """

    places: NDArray[np.intp]
    correlation: Array
    dof: float | None
    pointwise: float

    def factor(self, level: float) -> float:
        """Quantile of the largest |deviation| / sd over all places, at least the pointwise one."""
        return max(sup_quantile(self.correlation, level, self.dof), self.pointwise)

    def rivals(self, value: Array, sd: Array, level: float) -> NDArray[np.bool_]:
        """Places that may have the largest density, (p,).

        All differences between two places hold at once with the probability `level`; a place
        that is below the largest estimate by more than its difference allows is none.

        Parameters
        ----------
        value, sd : (p,) at `places`
        """
        covariance = self.correlation * np.outer(sd, sd)
        best = int(np.argmax(value))
        variance = covariance[best, best] + np.diag(covariance) - 2 * covariance[best]
        few = np.unique(np.linspace(0, len(sd) - 1, PAIRED).astype(int))
        apart = pair_quantile(covariance[np.ix_(few, few)], level, self.dof)
        gap = value[best] - value
        return np.asarray(gap <= apart * np.sqrt(np.maximum(variance, 0.0)))


def correlations(problem: Problem, cells: Questions, answers: Answers) -> Together | None:
    """How the band of a problem hangs together; None where there is no band.

    Parameters
    ----------
    problem : Problem
    cells : Questions
        One row a place.
    answers : Answers
        Of the problem: level, noise and, of a plain band, the choice.
    """
    if answers.reason or not problem.smooth:
        return None
    fr = frame(problem)
    if not len(fr.free) or fr.nu == 0:
        return None
    pick = np.unique(np.linspace(0, len(cells.cells) - 1, MOST).astype(int))
    asked = ask(fr, Questions(cells.cells[pick], cells.columns[pick]))
    covariance = spread(asked, _families(problem, answers))
    sd = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    told = asked.determined & (sd > 0)
    if not told.any():
        return None
    dof = None if problem.stated else max(fr.readings - answers.fit.effective_dof, 1.0)
    correlation = (covariance / np.outer(np.where(sd > 0, sd, 1), np.where(sd > 0, sd, 1)))[
        np.ix_(told, told)
    ]
    return Together(pick[told], correlation, dof, answers.quantile)


def _draws(covariance: Array, dof: float | None) -> Array:
    """Draws (N, p) of N(0, covariance), or of Student's t with `dof`."""
    sd = np.sqrt(np.diag(covariance))
    lam, V = eigh(covariance / np.outer(sd, sd), check_finite=False)
    keep = lam > SLIGHT * lam[-1]
    rng = np.random.default_rng(SEED)
    factor = sd[:, None] * V[:, keep] * np.sqrt(lam[keep])
    z = rng.normal(size=(DRAWS, int(keep.sum()))) @ factor.T
    return np.asarray(z if dof is None else z / np.sqrt(rng.chisquare(dof, DRAWS) / dof)[:, None])


def sup_quantile(covariance: Array, level: float, dof: float | None = None) -> float:
    """Quantile of max |z_i| / sd_i, z ~ N(0, covariance), or of Student's t with `dof`."""
    z = _draws(covariance, dof) / np.sqrt(np.diag(covariance))
    return float(np.quantile(np.abs(z).max(axis=1), level))


def pair_quantile(covariance: Array, level: float, dof: float | None = None) -> float:
    """Quantile of max |z_i - z_j| / sd of that difference, over all pairs."""
    z, largest = _draws(covariance, dof), np.zeros(DRAWS)
    variance = np.diag(covariance)
    for i in range(1, len(variance)):
        sd = np.sqrt(np.maximum(variance[i] + variance[:i] - 2 * covariance[i, :i], 0.0))
        told = sd > NEAR * np.sqrt(variance[i])
        if told.any():
            off = np.abs(z[:, i, None] - z[:, :i][:, told]) / sd[told]
            largest = np.maximum(largest, off.max(axis=1))
    return float(np.quantile(largest, level))


def spread(asked: Asked, families: Sequence[Weighted]) -> Array:
    """Covariance (q, q) of the questions under a mixture (law of total covariance)."""
    parts = [_one(asked, w) for w in families]
    mean = np.sum([m @ w.weights for w, (_, m) in zip(families, parts, strict=True)], axis=0)
    total = np.sum([within for within, _ in parts], axis=0)
    for w, (_, m) in zip(families, parts, strict=True):
        off = (m - mean[:, None]) * np.sqrt(w.weights)
        total = total + off @ off.T
    return np.asarray(total)


def _one(asked: Asked, w: Weighted) -> tuple[Array, Array]:
    """Weighted covariance (q, q) within one family, and its means (q, t) but for the common part.

    As `evidence.conditional`, for all pairs of questions.
    """
    sp, fr, size = w.spectrum, w.spectrum.frame, len(w.spectrum.V)
    G = asked.G if isinstance(asked.G, np.ndarray) else asked.G.toarray()
    T = G @ (sp.K[:, :size] @ sp.V) - asked.H @ (sp.S[size:, :size] @ sp.V)
    mean = T @ (w.sigma**2 * w.shrink * sp.y[:, None])
    weight = w.weights * w.noise
    square = float(weight @ w.sigma**2)
    within = float(weight.sum()) * asked.H @ asked.H.T
    if sp.right is not None:
        whole = G @ sp.factor - asked.H @ (fr.UA @ sp.factor)
        seen = whole @ sp.right.T
        unseen = whole - seen @ sp.right
        within = within + square * unseen @ unseen.T
        return within + (seen * (w.shrink @ (weight * w.sigma**2))) @ seen.T, mean
    assert sp.base.C is not None
    steps = G @ sp.steps
    cross = (G @ sp.K[:, size:]) @ asked.H.T
    prior = sp.family.scale * G @ sp.base.C @ G.T + steps @ steps.T
    prior = prior - cross - cross.T + asked.H @ sp.S[size:, size:] @ asked.H.T
    return within + square * prior - (T * (w.shrink @ (weight * w.sigma**4))) @ T.T, mean


def _families(problem: Problem, answers: Answers) -> list[Weighted]:
    """Those that the band's width comes from."""
    fr = frame(problem)
    if answers.choice is None:
        keys = [SCALE, *((f.base, f.length) for f in CAUTIOUS)]
        products = bases(fr, keys, route(fr))
        steps = pieces(problem.grid, zones=True)
        spectra = [spectrum(fr, f, products, steps, right=True) for f in CAUTIOUS]
        return weigh(spectra, grid(fr, products), answers.level, answers.fit.noise**2)
    ladder = answers.fit.ladders[0]
    fam = ladder.family
    products = bases(fr, [(fam.base, fam.length)], "svd")
    sp = spectrum(fr, fam, products, np.zeros((len(fr.free), 0)), right=True)
    return [at_one(sp, answers.choice.strength, answers.fit.noise**2)]
