"""What the readings alone allow for totals and wide zones: no smoothness is assumed.

Without a sign the readings bound an integral of the source only as far as it is a combination of
what they see. The linear estimate w'd is found whose worst case is smallest,

    half-width(w) = M sum |A'w - q| + z |w|,    N'w = q_N,

over all sources whose density keeps within M of its mean; constant and nuisances (N) are free.
With a sign, the least and the largest integral is found over all sources of that sign that fit
the readings as well as the best one does, but for z**2 in chi-square; no M is needed.

Sources: Donoho (1994), Ann. Stat. 22, 238 (affine minimax intervals); Stark (1992), J. Geophys.
Res. 97, 14055 (strict bounds under a sign); Lawson & Hanson, Solving Least Squares Problems
(1974), ch. 23 (non-negative least squares).
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.linalg import LinAlgWarning, null_space, solve

from srcfit.problem import Array, Problem, Questions

# turns of the reweighted search for w; part of the largest residual below which corners are round
TURNS, CORNER = 30, 1e-7
ROUNDING = 1e-15
REACHED = 1e-6  # part of a question's unpenalised weight that may be missed
# bounds under a sign: weight of the row that fixes the integral, steps, growth that is no bound,
# and relative closeness of the distance
FIXED, STEPS, FAR, CLOSE = 1e3, 40, 1e3, 5e-3


@dataclass(frozen=True)
class Alone:
    """A whitened problem without its prior: n rows, m' free cells.

    Attributes
    ----------
    A : (n, m'), N : (n, k) response to densities and to unknowns that may be anything
    L : (n, l) response to lumped parts of the declared sign
    d : (n,)
    q : (j, m'), q_free : (j, k), q_lumped : (j, l) questions
    z : quantile
    """

    A: Array
    N: Array
    L: Array
    d: Array
    q: Array
    q_free: Array
    q_lumped: Array
    z: float


def alone(
    problem: Problem, questions: Questions, *, z: float, noise: float = 1.0, drop: int = 0,
    signed: Sequence[int] | None = None,
) -> Alone:  # fmt: skip
    """Take the prior away from a problem of one part.

    Parameters
    ----------
    z : float
        Quantile of the interval.
    noise : float
        Standard deviation of the whitened noise.
    drop : int
        Last rows (knowledge about the source) that are left out.
    signed : sequence of int, optional
        Columns of `Problem.B` that have the declared sign, as the density has; without a sign the
        source's constant is free instead.
    """
    free, n = np.flatnonzero(problem.grid.free), len(problem.d) - drop
    A, B, d = (part[:n] / noise for part in (problem.A[:, free], problem.B, problem.d))
    q, b = questions.cells[:, free], questions.columns
    if signed is not None:
        other = np.setdiff1d(np.arange(B.shape[1]), signed)
        lumped = np.array(signed, dtype=np.intp)
        return Alone(A, B[:, other], B[:, lumped], d, q, b[:, other], b[:, lumped], z)
    if problem.constant:
        B, b = np.hstack([A.sum(1)[:, None], B]), np.hstack([q.sum(1)[:, None], b])
    return Alone(A, B, B[:, :0], d, q, b, b[:, :0], z)


def bounded(p: Alone, reach: float) -> tuple[Array, Array]:
    """Intervals (j,) over all sources whose density keeps within `reach` of its mean.

    nan where the readings do not tell the question's unpenalised part.
    """
    A = p.A
    basis = np.eye(len(A))
    if len(A) > A.shape[1] + p.N.shape[1]:
        basis = np.linalg.qr(np.hstack([A, p.N]))[0]
    A, N = basis.T @ A, basis.T @ p.N
    norms = np.linalg.norm(N, axis=0)
    N = N / np.where(norms > 0, norms, 1.0)
    beside = null_space(N.T) if N.shape[1] else np.eye(len(A))
    lower, upper = np.full((2, len(p.q)), np.nan)
    q_free = p.q_free / np.where(norms > 0, norms, 1.0)
    for i, (q, fixed) in enumerate(zip(p.q, q_free, strict=True)):
        if not (q.any() or fixed.any()):
            lower[i] = upper[i] = 0.0  # a balanced total
            continue
        v = np.linalg.lstsq(N.T, fixed, rcond=REACHED)[0]
        if np.linalg.norm(N.T @ v - fixed) > REACHED * np.linalg.norm(fixed):
            continue
        w = basis @ _least_worst(A, q, v, beside, reach, p.z)
        half = reach * np.abs(p.A.T @ w - q).sum() + p.z * np.linalg.norm(w)
        lower[i], upper[i] = w @ p.d - half, w @ p.d + half
    return lower, upper


def _least_worst(A: Array, q: Array, start: Array, beside: Array, reach: float, z: float) -> Array:
    """Estimate start + beside y with the least reach sum |A'v - q| + z |v|, by reweighting."""
    # any v at all gives an interval that holds: how exactly the best is met only costs width
    side, off = A.T @ beside, A.T @ start - q
    v, best, least = start, start, np.inf
    for turn in range(TURNS):
        r = A.T @ v - q
        size = reach * np.abs(r).sum() + z * float(np.linalg.norm(v))
        if size < least:
            best, least = v, size
        largest = float(np.abs(r).max())
        if largest <= ROUNDING * float(np.abs(q).max()):
            break  # nothing is left that a source could hide in
        round_off = max(CORNER, 0.5**turn) * largest
        weight = reach / np.maximum(np.abs(r), round_off)
        pull = z / max(float(np.linalg.norm(v)), ROUNDING * float(np.abs(q).max()))
        M = (side.T * weight) @ side
        M[np.diag_indices(len(M))] += pull + ROUNDING * np.trace(M)
        with warnings.catch_warnings():
            # repeats at one place leave M all but singular: see above
            warnings.simplefilter("ignore", LinAlgWarning)
            y = solve(M, -(side.T * weight) @ off - pull * (beside.T @ start), assume_a="pos")
        v = start + beside @ y
    return best


def signed(p: Alone, widths: Array, sign: float = 1.0) -> tuple[Array, Array]:
    """Intervals (j,) over all sources of one sign that fit as well as the best does.

    Parameters
    ----------
    widths : (j,)
        Half-widths to start the search with.
    sign : +1 or -1

    Returns
    -------
    lower, upper : (j,)
        -inf or inf where nothing limits the integral on that side.
    """
    from scipy.optimize import nnls

    X = sign * np.hstack([p.A, p.L])
    Q, d = sign * np.hstack([p.q, p.q_lumped]), p.d
    if p.N.shape[1]:
        U, s, _ = np.linalg.svd(p.N, full_matrices=False)
        U = U[:, s > REACHED * s[0]]
        X, d = X - U @ (U.T @ X), d - U @ (U.T @ d)
    if len(X) > X.shape[1] + 1:
        R = np.asarray(np.linalg.qr(np.hstack([X, d[:, None]]), mode="r"))
        X, d = R[:, :-1], R[:, -1]
    x, norm = nnls(X, d)
    found = [_ends(X, d, q, float(q @ x), float(norm) ** 2, p.z, float(w))
             for q, w in zip(Q, widths, strict=True)]  # fmt: skip
    lower, upper = np.array(found).reshape(-1, 2).T
    return lower, upper


def _ends(
    X: Array, d: Array, q: Array, middle: float, least: float, z: float, width: float
) -> tuple[float, float]:
    """Least and largest q'x with |X x - d|**2 <= least + z**2, x >= 0."""
    from scipy.optimize import nnls

    if not q.any():
        return 0.0, 0.0
    width = width if width > 0 else max(abs(middle), 1.0)

    def far(step: float) -> float:
        """Root of the growth of chi-square where q'x is so many widths off: convex in the step."""
        rows = np.vstack([X, FIXED / width * q])
        norm = nnls(rows, np.append(d, FIXED / width * middle + FIXED * step))[1]
        return float(np.sqrt(max(norm**2 - least, 0.0)))

    def end(side: float) -> float:
        low, high, step = 0.0, np.inf, 1.0
        for _ in range(STEPS):
            found = far(side * step)
            if abs(found - z) <= CLOSE * z:
                break
            low, high = (step, high) if found < z else (low, step)
            if np.isinf(high) and step > FAR:
                return side * np.inf
            guess = step * float(np.clip(z / max(found, 1e-9), 0.1, 4.0))
            middling = 4 * step if np.isinf(high) else (low + high) / 2
            step = guess if low < guess < high else middling
        return middle + side * step * width

    return end(-1.0), end(1.0)
