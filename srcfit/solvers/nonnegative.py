"""Exact solutions under inequalities, in the coordinates of a Gaussian's rows.

A Gaussian of mean m and covariance S is to be brought to its most probable point under
R x >= least. With q = R m - least and M = R S R' the multipliers u solve the complementarity
problem

    w = M u + q >= 0,   u >= 0,   u'w = 0,        and the point is m + S R' u.

A primal-dual active set solves it in a few factorisations; where it runs in circles, non-negative
least squares of the dual takes over. What comes back has been checked: rows are measured in
their own standard deviations, and an answer that misses by more than 1e-8 of the largest distance
is an error, never a result.

Sources: Hintermueller, Ito & Kunisch (2003), SIAM J. Optim. 13, 865 (primal-dual active set);
Lawson & Hanson, Solving Least Squares Problems (1974), ch. 23 (least distance programming).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import LinAlgError, cho_factor, cho_solve, eigh

from srcfit.errors import SolveError
from srcfit.problem import Array

# Karush-Kuhn-Tucker residual that is let through, relative to the largest distance
CLOSE = 1e-8
ROUNDS = 60
# rows whose variance is this small a part of the largest have none
FIXED = 1e-24


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
        u = _dual(C, z)
    gap = missed(C, z, u)
    if gap > CLOSE:
        raise SolveError(
            f"the estimate under its constraints did not converge (residual {gap:.1e} of the "
            f"largest distance, {CLOSE:g} allowed)",
            "source",
            "use fewer cells, or leave the constraint out",
        )
    return np.asarray(u / scale)


def many(M: Array, q: Array) -> Array:
    """Multipliers (n, p) of many problems with one covariance M (p, p) and means q (n, p).

    Raises
    ------
    SolveError
        As in `multipliers`.
    """
    scale = _scale(M, q.min(axis=0))
    C, z = M / np.outer(scale, scale), q / scale
    u, settled = _together(C, z)
    for i in np.flatnonzero(~settled):
        u[i] = multipliers(C, z[i])
    return np.asarray(u / scale)


def missed(C: Array, z: Array, u: Array) -> float:
    """Largest violation of w >= 0, u >= 0 and u'w = 0, over the largest |z| (at least 1)."""
    w = C @ u + z
    size = max(1.0, float(np.abs(z).max(initial=0.0)))
    worst = max(float((-w).max(initial=0.0)), float((-u).max(initial=0.0)))
    both = float(np.minimum(np.abs(w), np.abs(u)).max(initial=0.0))
    return max(worst, both) / size


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


def _together(C: Array, z: Array) -> tuple[Array, NDArray[np.bool_]]:
    """The active sets of many problems at once: multipliers (n, p) and which of them settled."""
    n, p = z.shape
    active, found, settled = z < 0, np.zeros((n, p)), np.zeros(n, dtype=bool)
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


def _dual(C: Array, z: Array) -> Array:
    """Non-negative least squares of the dual: the shortest y with G y >= -z, C = G G'."""
    from scipy.optimize import nnls

    size, V = eigh(C, check_finite=False)
    keep = size > 1e-15 * size[-1]
    G = V[:, keep] * np.sqrt(size[keep])
    E = np.vstack([G.T, -z[None, :]])
    try:
        y, _ = nnls(E, np.append(np.zeros(G.shape[1]), 1.0), maxiter=50 * len(z) + 1000)
    except RuntimeError:
        y = np.zeros(len(z))
    left = 1.0 + float(z @ y)
    if left <= CLOSE:
        raise SolveError(
            "no source keeps all the constraints at once",
            "source",
            "mend `sign`, `ceiling`, `monotone`, `total` or `known`",
        )
    return _polished(C, z, y / left)


def _polished(C: Array, z: Array, u: Array) -> Array:
    """The same active rows solved for once more, if that is closer."""
    held = np.flatnonzero(u > 0)
    again = np.zeros(len(u))
    again[held] = np.linalg.lstsq(C[np.ix_(held, held)], -z[held], rcond=None)[0]
    return again if missed(C, z, again) < missed(C, z, u) else u
