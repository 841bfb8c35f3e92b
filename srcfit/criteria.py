"""Criteria: which rung of a ladder, judged by the ladder alone.

Each criterion maps a ladder to scores (t,), the smallest is best; nan where it has nothing to
say. `choose` picks the rung and says whether the choice can be trusted.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from srcfit.problem import Array
from srcfit.solvers.ladder import ALONE, Ladder

Rows = NDArray[np.intp]

# Lukas (2006) robust GCV: 1 is GCV itself, smaller guards more against too rough a source
ROBUSTNESS = 0.3
FOLDS, CROWD = 10, 10
# folds worked on at a time, for the sake of memory
BATCH = 50
# ladders of this many rungs are fine enough to interpolate a score
FINE = 100
# a corner turns at least this sharply, and both branches span at least this ratio
CORNER = 1.0
BRANCH = 1.5
# parts of the L-curve where the point hardly moves have no direction
STANDS = 1e-3


@dataclass(frozen=True)
class Choice:
    """The rung that a criterion picks.

    Attributes
    ----------
    criterion : str
    index : int
        Rung; -1 where the criterion has nothing to say.
    strength, score : float
        nan where there is none.
    valid : bool
        False: no choice, or one at the edge of the ladder.
    note : str
        Why not, in a few words.
    """

    criterion: str
    index: int
    strength: float
    score: float
    valid: bool
    note: str


def _squares(ladder: Ladder) -> Array:
    return np.asarray(ladder.residual_norms**2)


def gcv(ladder: Ladder) -> Array:
    """Generalised cross-validation: n |r|**2 / (n - dof)**2.

    Source: Golub, Heath & Wahba (1979), Technometrics 21, 215.
    """
    n = ladder.readings
    left = n - ladder.dof
    scores = np.full(len(left), np.inf)
    np.divide(n * _squares(ladder), left**2, out=scores, where=left > ALONE * n)
    return scores


def robust_gcv(ladder: Ladder) -> Array:
    """Robust GCV: GCV * (g + (1 - g) tr(H**2) / n), g = 0.3.

    Source: Lukas (2006), Inverse Problems 22, 1883.
    """
    n = ladder.readings
    twice = ladder.Z[:n] ** 2 @ ladder.fill**2
    mean = (twice.sum(axis=0) + (ladder.frame.U[:n] ** 2).sum()) / n
    return np.asarray(gcv(ladder) * (ROBUSTNESS + (1 - ROBUSTNESS) * mean))


def leave_one_out(ladder: Ladder) -> Array:
    """Mean squared leave-one-out residual (Allen 1974); readings that stand alone are skipped."""
    left = ladder.leave_one_out
    told = ~np.isnan(left[:, -1]) | ~np.isnan(left[:, 0])
    if not told.any():
        return np.full(left.shape[1], np.nan)
    scores = (left[told] ** 2).mean(axis=0)
    return np.where(np.isnan(scores), np.inf, scores)


def folds(ladder: Ladder) -> list[Rows]:
    """Row numbers of each fold: runs of neighbours of about equal size.

    Ten folds, and more where a fold would hold more than ten readings.
    """
    places = ladder.frame.problem.places
    n = ladder.readings
    order = np.arange(n) if places is None else np.argsort(places[:n], kind="stable")
    return [np.asarray(part) for part in np.array_split(order, min(max(FOLDS, -(-n // CROWD)), n))]


def k_fold(ladder: Ladder) -> Array:
    """Mean squared residual of runs of neighbours left out together, without refits.

    The residuals of a left-out block b are (I - H_bb)^-1 r_b, H_bb the block of the hat matrix.
    A block that alone tells some unpenalised unknown cannot be predicted and is skipped.
    Of a fine ladder every third rung is computed, the others are interpolated.
    """
    t = len(ladder.strengths)
    every = 3 if t >= FINE else 1
    rungs = np.unique(np.append(np.arange(0, t, every), t - 1))
    scores = _k_fold(ladder, rungs)
    return np.asarray(np.interp(np.arange(t), rungs, scores))


def _k_fold(ladder: Ladder, rungs: Rows) -> Array:
    """Scores at some rungs."""
    total, told = np.zeros(len(rungs)), 0
    fill, residuals = ladder.fill[:, rungs], ladder.residuals[:, rungs]
    U = ladder.frame.U
    predicted = [b for b in folds(ladder) if np.linalg.norm(U[b], 2) ** 2 < 1 - ALONE]
    for size in {len(b) for b in predicted}:
        alike = np.stack([b for b in predicted if len(b) == size])
        i, j = np.triu_indices(size)
        for rows in np.array_split(alike, -(-len(alike) // BATCH)):
            pairs = ladder.Z[rows[:, i]] * ladder.Z[rows[:, j]]
            upper = pairs @ fill + (U[rows[:, i]] * U[rows[:, j]]).sum(axis=2)[:, :, None]
            blocks = np.empty((size, size, len(rows), len(rungs)))
            blocks[i, j] = blocks[j, i] = -upper.transpose(1, 0, 2)
            total += _left_out(blocks, residuals[rows].transpose(1, 0, 2))
        told += alike.size
    return total / told if told else np.full(len(total), np.nan)


def _left_out(minus_hat: Array, residuals: Array) -> Array:
    """Sums of squares (t,) of (I - H)^-1 r over the blocks, (b, b, blocks, t) and (b, blocks, t).

    Gauss elimination of all blocks and rungs at once; the blocks are small and positive definite.
    inf where a reading is all but interpolated.
    """
    own = np.arange(len(minus_hat))
    minus_hat[own, own] += 1
    bad = minus_hat[own, own].min(axis=(0, 1)) <= ALONE
    for k in own:
        alone = minus_hat[k, k] <= ALONE
        bad |= alone.any(axis=0)
        minus_hat[k, k][alone] = 1.0
        share = minus_hat[k + 1 :, k] / minus_hat[k, k]
        minus_hat[k + 1 :, k + 1 :] -= share[:, None] * minus_hat[k, k + 1 :]
        residuals[k + 1 :] -= share * residuals[k]
    for k in own[::-1]:
        residuals[k] -= (minus_hat[k, k + 1 :] * residuals[k + 1 :]).sum(axis=0)
        residuals[k] /= minus_hat[k, k]
    return np.where(bad, np.inf, (residuals**2).sum(axis=(0, 1)))


def discrepancy(ladder: Ladder) -> Array:
    """Distance of the residuals from the stated noise: |ln(|r|**2 / n)|.

    The residuals shrink steadily with the strength, so the level n is met once (Morozov 1966);
    comparing with n - dof instead would be met again at no smoothing at all and is not done.
    nan without a stated noise, and where the whole ladder lies on one side of the noise.
    """
    ratio = _squares(ladder) / max(ladder.readings, 1)
    scores = np.full(len(ratio), np.nan)
    if not ladder.frame.problem.stated or not (ratio.min() <= 1 <= ratio.max()):
        return scores
    positive = ratio > 0
    scores[positive] = np.abs(np.log(ratio[positive]))
    scores[~positive] = np.inf
    return scores


def risk(ladder: Ladder) -> Array:
    """Unbiased estimate of the predictive risk, |r|**2 + 2 dof - n; nan without a stated noise.

    Source: Mallows (1973), Technometrics 15, 661.
    """
    if not ladder.frame.problem.stated:
        return np.full(len(ladder.strengths), np.nan)
    return np.asarray(_squares(ladder) + 2 * ladder.dof - ladder.readings)


def evidence(ladder: Ladder) -> Array:
    """Minus the restricted log likelihood; nan for cuts, which have no prior to weigh."""
    return -ladder.log_evidence


def curvature(ladder: Ladder) -> Array:
    """Curvature (t,) of the log-log L-curve, positive at a corner; nan where it has no direction.

    Of the circle through three neighbouring points (Menger).
    """
    out = np.full(len(ladder.strengths), np.nan)
    rho, eta = ladder.residual_norms, ladder.roughness
    good = np.flatnonzero((rho > 0) & (eta > 0))
    if len(good) < 3:
        return out
    points = np.stack([np.log(rho[good]), np.log(eta[good])], axis=1)
    before, after = np.diff(points[:-1], axis=0), np.diff(points[1:], axis=0)
    chord = before + after
    lengths = [np.linalg.norm(v, axis=1) for v in (before, after, chord)]
    moves = np.minimum(lengths[0], lengths[1]) > STANDS * max(
        float(np.median(lengths[2])), np.finfo(float).tiny
    )
    cross = before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0]
    # penalties run towards smoothness (rho grows), cuts away from it
    turn = cross if rho[good[-1]] >= rho[good[0]] else -cross
    inner = good[1:-1]
    out[inner[moves]] = (2 * turn / (lengths[0] * lengths[1] * lengths[2] + 1e-300))[moves]
    return out


def l_curve(ladder: Ladder) -> Array:
    """Minus the curvature of the L-curve; all nan where the curve has no corner.

    A corner is an inner maximum of the curvature, at least 1, with a branch on either side over
    which the roughness (above) and the residuals (beyond) grow by half or more.
    Source: Hansen & O'Leary (1993), SIAM J. Sci. Comput. 14, 1487.
    """
    bend = curvature(ladder)
    nothing = np.full(len(bend), np.nan)
    if np.isnan(bend).all():
        return nothing
    at = int(np.nanargmax(bend))
    rho, eta = ladder.residual_norms, ladder.roughness
    known = np.flatnonzero(~np.isnan(bend))
    inner = known[0] < at < known[-1]
    branches = eta.max() >= BRANCH * eta[at] and rho.max() >= BRANCH * rho[at]
    return -bend if inner and bend[at] >= CORNER and branches else nothing


CRITERIA: Mapping[str, Callable[[Ladder], Array]] = {
    "l-curve": l_curve,
    "gcv": gcv,
    "robust-gcv": robust_gcv,
    "leave-one-out": leave_one_out,
    "k-fold": k_fold,
    "discrepancy": discrepancy,
    "risk": risk,
    "evidence": evidence,
}

_SILENT = {
    "l-curve": "the L-curve has no corner",
    "discrepancy": "the noise is not stated, or no strength meets it",
    "risk": "the noise is not stated",
    "evidence": "cuts have no evidence",
}


def choose(ladder: Ladder, criterion: str) -> Choice:
    """The rung with the smallest score.

    Where that lies at an edge of the ladder, the smoothest inner minimum is taken instead and the
    note says so; without an inner minimum the choice stays at the edge and is not valid.

    Parameters
    ----------
    ladder : Ladder
    criterion : str
        A key of CRITERIA.
    """
    scores = CRITERIA[criterion](ladder)
    finite = np.isfinite(scores)
    if not finite.any():
        note = _SILENT.get(criterion, "too few readings for this criterion")
        return Choice(criterion, -1, float("nan"), float("nan"), False, note)
    scores = np.where(finite, scores, np.inf)
    at, note, valid = int(np.argmin(scores)), "", True
    if at in (0, len(scores) - 1) and len(scores) > 1:
        inner = _inner_minima(scores)
        valid, note = bool(len(inner)), "the smallest score is at the edge of the ladder"
        if valid:
            smoothest = np.argmin(ladder.dof[inner])
            at, note = int(inner[smoothest]), note + "; the smoothest inner minimum is taken"
    return Choice(criterion, at, float(ladder.strengths[at]), float(scores[at]), valid, note)


def _inner_minima(scores: Array) -> Rows:
    """Rungs whose score is below that of both neighbours."""
    inner = (scores[1:-1] < scores[:-2]) & (scores[1:-1] < scores[2:])
    return np.flatnonzero(inner) + 1


def agree(choices: Iterable[Choice]) -> float:
    """Largest ratio between the strengths of choices that are not silent (1 if fewer than two)."""
    chosen = [c.strength for c in choices if c.index >= 0 and c.strength > 0]
    return float(max(chosen) / min(chosen)) if len(chosen) > 1 else 1.0
