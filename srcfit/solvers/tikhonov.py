"""Penalised least squares: minimise |d - A f - B beta|**2 + tau f'Qf over a ladder of tau.

One SVD of the projected problem in the penalty's own coordinates gives every strength.
Source: Elden (1982), BIT 22, 487 (standard form by projection); Tikhonov & Arsenin (1977).
"""

from __future__ import annotations

import numpy as np

from srcfit.priors import factor, family, null_columns
from srcfit.problem import Array, Problem
from srcfit.solvers.frame import frame
from srcfit.solvers.ladder import Ladder, filtered
from srcfit.solvers.spectrum import thin_svd

RUNGS = 200
# the ladder spans at most this ratio to the largest eigenvalue
DEEPEST = 1e-19
MARGIN = 30.0


def tikhonov(
    problem: Problem,
    *,
    roughness: int | float | str = 1,
    basis: Array | None = None,
    strengths: Array | None = None,
) -> Ladder:
    """Ladder of penalised estimates.

    Parameters
    ----------
    problem : Problem
    roughness : {0, 1, 2}, float or "averaged"
        Order of the derivative whose square is integrated over x, or a correlation length [m]
        (Matern 3/2); "averaged" stands for order 1.
    basis : ignored
    strengths : (t,), optional
        tau; by default 200 values that U what the readings can see.

    Returns
    -------
    Ladder
    """
    chosen = family(roughness, problem.grid)
    fr = frame(problem, null_columns(chosen.base, problem.grid))
    S = factor(chosen.base, chosen.length, problem.grid)
    F = _times(fr.QA, S, chosen.base if problem.grid.parts == 1 else "")
    V, s, _ = thin_svd(F, right=False)
    tau = _strengths(s**2, fr.nu) if strengths is None else np.asarray(strengths, dtype=float)
    return filtered(fr, chosen, s**2, fr.rows(V), V.T @ fr.Qd, (S, F.T, V), tau)


def _times(A: Array, S: Array, base: str) -> Array:
    """A S; first differences are a sum over all cells beyond."""
    if base != "roughness-1":
        return A @ S
    beyond = np.cumsum(A[:, ::-1], axis=1)[:, -2::-1]
    return np.asarray(beyond * S[-1])


def _strengths(lam: Array, nu: int) -> Array:
    """Log grid of tau, roughest first.

    It runs from where less than about 3 % of a mode is fitted down to where one reading's worth
    of freedom is left: beyond that no criterion can judge a fit.
    """
    top = float(lam.max(initial=0.0))
    if top == 0:
        return np.ones(1)
    tau = np.geomspace(top * DEEPEST, top * MARGIN, 2 * RUNGS)
    left = nu - (lam[:, None] / (lam[:, None] + tau)).sum(axis=0)
    low = tau[int(np.argmax(left >= min(1.0, nu / 2)))]
    return np.geomspace(low, top * MARGIN, RUNGS)
