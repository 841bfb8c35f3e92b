"""The factor that makes a pointwise band hold at all places at once.

A pointwise band holds at any one place with the stated probability. All places at once are held
by a wider one: the half-width times factor / quantile, where the factor is the quantile of the
largest |deviation| / sd over all places. It follows from the correlation of the posterior, by
draws. Source: the sup-quantile of a Gaussian vector; Sidak (1967), J. Am. Stat. Assoc. 62, 626,
bounds it by independent places.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.linalg import eigh

from srcfit.bands import Answers
from srcfit.evidence import Weighted, at_one, grid, weigh
from srcfit.priors import CAUTIOUS, SCALE, pieces
from srcfit.problem import Array, Problem, Questions
from srcfit.solvers.frame import Asked, ask, frame
from srcfit.solvers.spectrum import bases, route, spectrum

DRAWS, SEED = 5000, 1967  # one fixed stream: the same posterior gives the same factor
MOST = 400  # places that are looked at; more are thinned evenly, neighbours being alike
SLIGHT = 1e-7  # part of the largest eigenvalue that is left out


def factor(problem: Problem, cells: Questions, answers: Answers, level: float) -> float:
    """Quantile of the largest |deviation| / sd over all cells, at least the pointwise one.

    Parameters
    ----------
    problem : Problem
    cells : Questions
        One row a place.
    answers : Answers
        Of the problem: level, noise and, of a plain band, the choice.
    level : float

    Returns
    -------
    float
        nan where there is no band.
    """
    if answers.reason or not problem.smooth:
        return float("nan")
    fr = frame(problem)
    if not len(fr.free) or fr.nu == 0:
        return float("nan")
    pick = np.unique(np.linspace(0, len(cells.cells) - 1, MOST).astype(int))
    asked = ask(fr, Questions(cells.cells[pick], cells.columns[pick]))
    covariance = spread(asked, _families(problem, answers))
    told = asked.determined & (np.diag(covariance) > 0)
    if not told.any():
        return float("nan")
    dof = None if problem.stated else max(fr.readings - answers.fit.effective_dof, 1.0)
    found = sup_quantile(covariance[np.ix_(told, told)], level, dof)
    return max(found, answers.quantile)


def sup_quantile(covariance: Array, level: float, dof: float | None = None) -> float:
    """Quantile of max |z_i| / sd_i, z ~ N(0, covariance), or of Student's t with `dof`."""
    sd = np.sqrt(np.diag(covariance))
    lam, V = eigh(covariance / np.outer(sd, sd), check_finite=False)
    keep = lam > SLIGHT * lam[-1]
    rng = np.random.default_rng(SEED)
    z = rng.normal(size=(DRAWS, int(keep.sum()))) @ (V[:, keep] * np.sqrt(lam[keep])).T
    largest = np.abs(z).max(axis=1)
    if dof is not None:
        largest = largest / np.sqrt(rng.chisquare(dof, DRAWS) / dof)
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
