"""The averaged estimate and the cautious one for many simulated readings at once.

The layout's decomposition does not depend on the readings, so that a repeat costs a few columns
in matrix products. The formulas are those of `evidence`, with one more index.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from srcfit.evidence import spreads, transfer
from srcfit.priors import FLOOR, natural
from srcfit.problem import Array
from srcfit.solvers.frame import Asked
from srcfit.solvers.spectrum import Spectrum


@dataclass(frozen=True)
class Sets:
    """S sets of whitened readings in a frame.

    Attributes
    ----------
    UD, QD : (r, S), (v, S)
        Their parts in the unpenalised directions and in the basis Q.
    rest : (S,)
        Sum of squares that neither reaches.
    """

    UD: Array
    QD: Array
    rest: Array


@dataclass(frozen=True)
class Shared:
    """What every set shares in one family: rungs, and what they do to the questions asked.

    Attributes
    ----------
    sigma : (t,)
    shrink : (c, t)
    T : (q, c) as of `evidence.transfer`
    spread : (q, t) as of `evidence.spreads`
    """

    spectrum: Spectrum
    sigma: Array
    shrink: Array
    T: Array
    spread: Array


@dataclass(frozen=True)
class Many:
    """Answers to q questions for S sets.

    Attributes
    ----------
    value, variance : (q, S)
        Mean, and the variance within rungs averaged over them.
    noise : (S,)
        Variance of the whitened noise.
    """

    value: Array
    variance: Array
    noise: Array


def shared(asked: Asked, spectra: Sequence[Spectrum], sigma: Array) -> list[Shared]:
    """Rungs of each family and what they do to the questions; `sigma` as of `evidence.weigh`."""
    found = []
    for sp in spectra:
        own = sigma * natural(sp.family.base, sp.frame.problem.grid)
        shrink = 1 / (1 + sp.lam[:, None] * own**2)
        T = transfer(asked, sp)
        found.append(Shared(sp, own, shrink, T, spreads(asked, sp, T, own, shrink)))
    return found


def answered(
    asked: Asked, families: Sequence[Shared], given: Sets, level: Array | None = None,
    noise: Array | None = None,
) -> Many:  # fmt: skip
    """Answers averaged over families and rungs by the evidence of each set.

    Parameters
    ----------
    level : (S,), optional
        Mean level of each set's source: sigmas under the cautious floor are left out.
    noise : (S,), optional
        Variance of the whitened noise where it is known from elsewhere.
    """
    fr = families[0].spectrum.frame
    if noise is None and fr.problem.stated:
        noise = np.ones(len(given.rest))
    modes = [f.spectrum.V.T @ given.QD for f in families]
    rungs = [_rungs(f, y, given, level, noise) for f, y in zip(families, modes, strict=True)]
    best = np.max([e.max(axis=1) for e, _ in rungs], axis=0)[:, None]
    raw = [np.exp(e - best) for e, _ in rungs]
    whole = sum(w.sum(axis=1) for w in raw)[:, None]
    value: Array = asked.H @ given.UD
    variance: Array = np.zeros_like(value)
    found = np.zeros(len(given.rest))
    for f, y, part, (_, spread) in zip(families, modes, raw, rungs, strict=True):
        weights = part / whole
        value = value + f.T @ (y * (f.shrink @ (weights * f.sigma**2).T))
        variance = variance + f.spread @ (weights * spread).T
        found += (weights * spread).sum(axis=1)
    return Many(value, variance, found)


def _rungs(
    f: Shared, y: Array, given: Sets, level: Array | None, noise: Array | None
) -> tuple[Array, Array]:
    """Log evidence and variance of the noise at each rung, both (S, t)."""
    fr = f.spectrum.frame
    beyond = given.rest
    if f.spectrum.V.shape[1] < len(given.QD):
        beyond = beyond + ((given.QD - f.spectrum.V @ y) ** 2).sum(axis=0)
    energy = (y**2).T @ f.shrink + beyond[:, None]
    volume = 0.5 * np.log(f.shrink).sum(axis=0)
    if noise is None:
        spread = energy / fr.nu
        evidence = volume - 0.5 * fr.nu * np.log(np.maximum(energy, np.finfo(float).tiny))
    else:
        spread = np.broadcast_to(noise[:, None], energy.shape)
        evidence = volume - 0.5 * energy / noise[:, None]
    if level is not None:
        size = f.sigma * np.sqrt(spread)
        kept = size >= FLOOR * level[:, None]
        kept[~kept.any(axis=1), int(np.argmax(f.sigma))] = True
        evidence = np.where(kept, evidence, -np.inf)
    return evidence, spread
