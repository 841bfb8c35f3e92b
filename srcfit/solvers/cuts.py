"""Truncated solutions: the ladder is over the number of shapes that are kept.

`eigenbasis` keeps the first N shapes r phi_n of the member; `svd_cut` keeps the N shapes that
the readings see best. Source: Hansen (1987), BIT 27, 534 (truncated SVD).
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import solve_triangular

from srcfit.errors import SolveError
from srcfit.priors import factor, family, null_columns
from srcfit.problem import Array, Problem
from srcfit.solvers.frame import Frame, frame
from srcfit.solvers.ladder import Ladder
from srcfit.solvers.spectrum import thin_svd

# shapes seen less than this part of the best seen one, or of their own norm, are left out
UNSEEN = 1e-12
DEEPEST = 400


def svd_cut(
    problem: Problem, *, roughness: int | float | str = 1, basis: Array | None = None
) -> Ladder:
    """Ladder over the number of singular modes kept of the problem in the penalty's coordinates.

    Parameters and returns as in `tikhonov`; `strengths` are 0, 1, 2 ...
    """
    chosen = family(roughness, problem.grid)
    fr = frame(problem, null_columns(chosen.base, problem.grid))
    S = factor(chosen.base, chosen.length, problem.grid)
    V, s, Wt = thin_svd(fr.QA @ S, right=True)
    assert Wt is not None
    kept = int((s > UNSEEN * s.max(initial=0.0)).sum())
    kept = min(kept, max(fr.nu - 1, 0), DEEPEST)
    return _cut(fr, "svd-cut", roughness, fr.rows(V[:, :kept]), S, (Wt[:kept] / s[:kept, None]).T)


def eigenbasis(
    problem: Problem, *, roughness: int | float | str = 1, basis: Array | None = None
) -> Ladder:
    """Ladder over the number of eigenfunctions kept, in their own order.

    Parameters
    ----------
    problem : Problem
    roughness : as in `tikhonov`; only measures the roughness norm
    basis : (m, N)
        Cell averages of r phi_n.

    Raises
    ------
    SolveError
        When no basis is given.
    """
    if basis is None:
        raise SolveError("the eigenbasis solver needs the member's modes", "strength.solver")
    fr = frame(problem)
    parts = problem.grid.parts
    # real and imaginary part of one mode stand side by side
    pairs = np.kron(np.asarray(basis)[problem.grid.free], np.eye(parts))
    shapes: Array = np.concatenate([pairs[part::parts] for part in range(parts)])
    F = fr.QA @ shapes
    size = np.linalg.norm(F, axis=0)
    norms = np.where(size > 0, size, 1.0)
    # a mode that the earlier ones already explain is left out
    seen = np.abs(np.diag(np.linalg.qr(F / norms, mode="r")))
    most = min(len(seen), max(fr.nu - 1, 0), DEEPEST)
    use = np.flatnonzero((seen > UNSEEN) & (size[: len(seen)] > UNSEEN * size.max(initial=0.0)))
    use = use[:most]
    P, R = np.linalg.qr(F[:, use])
    right: Array = np.zeros((0, 0))
    if len(use):
        right = np.asarray(solve_triangular(R, np.eye(len(use))), dtype=float)
    return _cut(fr, "eigenbasis", roughness, fr.rows(P), shapes[:, use], right)


def _cut(
    fr: Frame, solver: str, roughness: int | float | str, Z: Array, left: Array, right: Array
) -> Ladder:
    """Ladder that keeps the first 0, 1, 2 ... columns (pairs for two parts) of modes Z."""
    y = Z.T @ fr.problem.d
    kept = np.arange(0, Z.shape[1] + 1, fr.problem.grid.parts)
    fill = (np.arange(len(y))[:, None] < kept[None, :]).astype(float)
    left_over = fr.problem.d - fr.U @ fr.Ud
    measure = family(roughness, fr.problem.grid)
    amounts = fill * y[:, None]
    return Ladder(
        solver=solver,
        family=measure,
        frame=fr,
        strengths=kept / fr.problem.grid.parts,
        Z=Z,
        y=y,
        rest=left_over - Z @ y,
        fill=fill,
        shapes=(left, right),
        amounts=amounts,
        roughness=_roughness(fr, measure.base, measure.length, left @ (right @ amounts)),
        log_evidence=np.full(len(kept), np.nan),
    )


def _roughness(fr: Frame, base: str, length: float, f: Array) -> Array:
    """Roughness norms (t,) of sources f (m', t), about their unpenalised part."""
    if not len(f):
        return np.zeros(f.shape[1])
    S = factor(base, length, fr.problem.grid)
    null = np.hstack([fr.problem.grid.constants, null_columns(base, fr.problem.grid)])
    z = np.linalg.lstsq(np.hstack([S, null]), f, rcond=None)[0]
    return np.asarray(np.linalg.norm(z[: S.shape[1]], axis=0))
