"""Exact solutions under inequalities, in the coordinates of a Gaussian's rows.

A Gaussian of mean m and covariance S is to be brought to its most probable point under
R x >= least. With q = R m - least and M = R S R' the multipliers u solve the complementarity
problem

    w = M u + q >= 0,   u >= 0,   u'w = 0,        and the point is m + S R' u.

A primal-dual active set solves it in a few factorisations; where it runs in circles or rows depend
on each other, a dual active set that changes one row at a time takes over. What comes back has
been checked: rows are measured in their own standard deviations, and an answer that misses by more
than 1e-8 of the largest distance is an error, never a result.

Sources: Hintermueller, Ito & Kunisch (2003), SIAM J. Optim. 13, 865 (primal-dual active set);
Goldfarb & Idnani (1983), Math. Program. 27, 1 (dual active set).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import LinAlgError, cho_factor, cho_solve

from srcfit.errors import SolveError
from srcfit.problem import Array

Numbers = NDArray[np.intp]

# Karush-Kuhn-Tucker residual that is let through, relative to the largest distance
CLOSE = 1e-8
ROUNDS = 30
# rows broken by less are kept; a row that the held ones explain but for this part depends on them
ROUNDING, DEPENDENT = 1e-12, 1e-11
# rows whose variance is this small a part of the largest have none
FIXED = 1e-24
FEW_BITS = 32 * np.finfo(float).eps
NONE = np.zeros(0, dtype=np.intp)


def multipliers(M: Array, q: Array) -> Array:
    """Multipliers u (p,) of one problem.

    Parameters
    ----------
    M : (p, p)
        Covariance of the rows R x.
    q : (p,)
        Their means less the least that is allowed.

    Raises
    ------
    SolveError
        When no point keeps all rows, or the checks after the solution fail.
    """
    scale = _scale(M, q)
    C, z = M / np.outer(scale, scale), q / scale
    u = _active_set(C, z)
    if u is None or missed(C, z, u) > CLOSE:
        u = _checked(C, z, _one_by_one(C, z))
    return np.asarray(u / scale)


def many(M: Array, q: Array, start: Array | None = None) -> Array:
    """Multipliers (n, p) of many problems with one covariance M (p, p) and means q (n, p).

    Parameters
    ----------
    start : (n, p), optional
        Multipliers of problems like these.

    Raises
    ------
    SolveError
        As in `multipliers`.
    """
    scale = _scale(M, q.min(axis=0))
    C, z = M / np.outer(scale, scale), q / scale
    begin = z < 0 if start is None else start > 0
    u, settled = _together(C, z, begin)
    for i in np.flatnonzero(~settled):
        u[i] = _checked(C, z[i], _one_by_one(C, z[i], np.flatnonzero(begin[i])))
    return np.asarray(u / scale)


def _checked(C: Array, z: Array, u: Array) -> Array:
    gap = missed(C, z, u)
    if gap > CLOSE:
        raise SolveError(
            f"the estimate under its constraints did not converge (residual {gap:.1e} of the "
            f"largest distance, {CLOSE:g} allowed)",
            "source",
            "use fewer cells, or leave the constraint out",
        )
    return u


def missed(C: Array, z: Array, u: Array) -> float:
    """Largest violation of w >= 0, u >= 0 and u'w = 0, over the largest |z| (at least 1).

    What the numbers' own rounding leaves of sums as large as these is no violation.
    """
    w = C @ u + z
    size = max(1.0, float(np.abs(z).max(initial=0.0)), _noise(C, u) / CLOSE)
    worst = max(float((-w).max(initial=0.0)), float((-u).max(initial=0.0)))
    both = float(np.minimum(np.abs(w), np.abs(u)).max(initial=0.0))
    return max(worst, both) / size


def _noise(C: Array, u: Array) -> float:
    """Rounding of the sums C u."""
    return float(FEW_BITS * (np.abs(C) @ np.abs(u)).max(initial=0.0))


def _scale(M: Array, q: Array) -> Array:
    """Standard deviations of the rows; 1 for rows that are fixed, which must hold as they are."""
    variance = np.diag(M).copy()
    fixed = variance <= FIXED * max(float(variance.max(initial=0.0)), np.finfo(float).tiny)
    if (q[fixed] < 0).any():
        raise SolveError(
            "what is known of the source leaves no room for one of its constraints",
            "source",
            "mend `sign`, `ceiling`, `monotone` or `known`",
        )
    variance[fixed] = 1.0
    return np.asarray(np.sqrt(variance))


def _active_set(C: Array, z: Array) -> Array | None:
    """Primal-dual active set; None where it does not settle."""
    active = z < 0
    for _ in range(ROUNDS):
        u = np.zeros(len(z))
        held = np.flatnonzero(active)
        try:
            factored = cho_factor(C[np.ix_(held, held)], check_finite=False)
        except LinAlgError:
            return None
        u[held] = cho_solve(factored, -z[held], check_finite=False)
        w = C @ u + z
        after = np.where(active, u > 0, w < 0)
        if (after == active).all():
            return u
        active = after
    return None


def _together(C: Array, z: Array, begin: NDArray[np.bool_]) -> tuple[Array, NDArray[np.bool_]]:
    """The active sets of many problems at once: multipliers (n, p) and which of them settled."""
    n, p = z.shape
    active, found, settled = begin.copy(), np.zeros((n, p)), np.zeros(n, dtype=bool)
    live = np.arange(n)
    for _ in range(ROUNDS):
        on = active[live]
        K = np.where(on[:, :, None] & on[:, None, :], C, np.eye(p))
        try:
            u = np.linalg.solve(K, np.where(on, -z[live], 0.0)[:, :, None])[:, :, 0]
        except np.linalg.LinAlgError:
            break
        w = u @ C + z[live]
        after = np.where(on, u > 0, w < 0)
        done = (after == on).all(axis=1)
        found[live[done]] = u[done]
        size = np.maximum(1.0, np.abs(z[live]).max(axis=1))
        settled[live[done]] = (np.abs(np.where(on, w, 0.0)).max(axis=1) <= CLOSE * size)[done]
        active[live] = after
        live = live[~done]
        if not len(live):
            break
    return found, settled


def _one_by_one(C: Array, z: Array, begin: Numbers = NONE) -> Array:
    """Dual active set: the row that is broken most comes in, rows that no longer push go out.

    Every step brings the point further from the mean, so that it cannot run in circles; rows that
    depend on others are swapped, never held beside them. It may begin at rows held elsewhere.
    """
    u, held = _pushing(C, z, begin)
    size = max(1.0, float(np.abs(z).max(initial=0.0)))
    for _ in range(50 * len(z) + 1000):
        w = C @ u + z
        w[held] = 0.0
        new = int(np.argmin(w))
        if w[new] >= -max(ROUNDING * size, _noise(C, u)):
            break
        while True:
            r = cho_solve(cho_factor(C[np.ix_(held, held)]), C[held, new]) if len(held) else w[:0]
            # what of the new row the held ones do not say
            own = float(C[new, new] - C[held, new] @ r)
            full = -float(C[new] @ u + z[new]) / own if own > DEPENDENT else np.inf
            least = np.divide(u[held], r, out=np.full(len(held), np.inf), where=r > 0)
            out = int(np.argmin(least)) if len(held) else -1
            step = min(full, float(least[out]) if len(held) else np.inf)
            if not np.isfinite(step):
                raise SolveError(
                    "no source keeps all the constraints at once",
                    "source",
                    "mend `sign`, `ceiling`, `monotone`, `total` or `known`",
                )
            u[new] += step
            u[held] -= step * r
            if step == full:
                held = np.append(held, new)
                break
            u[held[out]] = 0.0
            held = np.delete(held, out)
        u = np.maximum(u, 0.0)
    return _polished(C, z, u)


def _pushing(C: Array, z: Array, held: Numbers) -> tuple[Array, Numbers]:
    """Multipliers of those of the rows that push by themselves, and these rows."""
    u = np.zeros(len(z))
    while len(held):
        try:
            by = cho_solve(cho_factor(C[np.ix_(held, held)], check_finite=False), -z[held])
        except LinAlgError:
            return u, NONE
        if (by >= 0).all():
            u[held] = by
            break
        held = held[by > 0]
    return u, held


def _polished(C: Array, z: Array, u: Array) -> Array:
    """The same active rows solved for once more, if that is closer."""
    held = np.flatnonzero(u > 0)
    again = np.zeros(len(u))
    again[held] = np.linalg.lstsq(C[np.ix_(held, held)], -z[held], rcond=None)[0]
    return again if missed(C, z, again) < missed(C, z, u) else u
