"""What every solver and family shares: the unpenalised columns projected out, once.

    d = A f + N beta + e,    N = [A 1, B] (A 1 only where the source has its own constant)

The rows are turned into an orthonormal basis [Q, U]: `U` holds the columns N, Q the rest.
Questions b'beta + g'f are answered by h = N+' b and the rest of g, see `ask`.
Source: Harville (1977), J. Am. Stat. Assoc. 72, 320 (restricted likelihood, error contrasts).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from srcfit.problem import Array, Problem, Questions

if TYPE_CHECKING:
    from scipy.sparse import csr_array

# columns are scaled to unit norm before the rank test, so this is free of units
RANK = 1e-7
REACHED = 1e-6
UNIFORM = "uniform source"


@dataclass(frozen=True)
class Frame:
    """A problem with its unpenalised columns projected out.

    n rows, m' free cells, k' unpenalised columns of rank r.

    Attributes
    ----------
    problem : Problem
    free : (m',) int
        Numbers of the cells that carry the smooth part (empty where there is none).
    U : (n, r)
        Orthonormal basis of the unpenalised columns; the constant's own direction is the last
        where `own` is true.
    own : bool
        Whether the constant adds a direction of its own to the other columns.
    Q : (n, v)
        Orthonormal basis of all else that the source can reach (v = n - r unless n > m' + r).
    QA, Qd : (v, m'), (v,)
    UA, Ud : (r, m'), (r,)
    solve : (k', r)
        beta = solve @ U' (d - A f), the shortest where the columns are dependent.
    reach : (r, k')
        Row space of the scaled columns.
    norms : (k',)
        Norms of the columns.
    rest : (n,)
        Part of the readings that neither `U` nor Q reaches.
    nu : int
        n - r: readings beyond the unpenalised unknowns.
    extra : (m', j)
        Unpenalised shapes beyond the constant.
    balanced : (m', m') or None
        Projection onto balanced sources (singular members), already in QA and UA.
    """

    problem: Problem
    free: np.ndarray[tuple[int], np.dtype[np.intp]]
    U: Array
    own: bool
    Q: Array
    QA: Array
    Qd: Array
    UA: Array
    Ud: Array
    solve: Array
    reach: Array
    norms: Array
    rest: Array
    nu: int
    extra: Array
    balanced: Array | None

    @property
    def readings(self) -> int:
        """Number of rows that are readings (the others are knowledge)."""
        return len(self.problem.d) - self.problem.pseudo


@dataclass(frozen=True)
class Asked:
    """Questions in the frame: value = G f + H U'(d - A f), plus what is undetermined.

    Attributes
    ----------
    G : (q, m') sparse or dense
        Weights of the free cells, balanced where the member is.
    H : (q, r)
        Weights of the unpenalised directions.
    determined : (q,) bool
        False where the readings cannot tell the question's unpenalised part.
    """

    G: csr_array | Array
    H: Array
    determined: np.ndarray[tuple[int], np.dtype[np.bool_]]


def unpenalised(problem: Problem, extra: Array | None = None) -> Array:
    """Columns N (n, k'): the constant's response first (if any), `extra` shapes, then B."""
    parts = [problem.A[:, problem.grid.free].sum(axis=1)[:, None]] if problem.constant else []
    if extra is not None and extra.shape[1]:
        parts.append(problem.A[:, problem.grid.free] @ extra)
    return np.hstack([*parts, problem.B])


def frame(problem: Problem, extra: Array | None = None) -> Frame:
    """Project the unpenalised columns out of a problem.

    Parameters
    ----------
    problem : Problem
    extra : (m', j), optional
        Further unpenalised shapes on the free cells (null space of a roughness order).
    """
    n = len(problem.d)
    free = np.flatnonzero(problem.grid.free) if problem.smooth else np.zeros(0, dtype=np.intp)
    N = unpenalised(problem, extra)
    norms = np.linalg.norm(N, axis=0)
    norms[norms == 0] = 1.0
    N = N / norms
    U, own = _span(N, problem.constant)
    R = U.T @ N
    P, s, Rt = np.linalg.svd(R, full_matrices=False)
    solve = (Rt.T / s) @ P.T / norms[:, None] if len(s) else np.zeros((N.shape[1], 0))
    balanced = _balanced(problem, free)
    A = problem.A[:, free] if balanced is None else problem.A[:, free] @ balanced
    UA, Ud = U.T @ A, U.T @ problem.d
    left_d = problem.d - U @ Ud
    if n - U.shape[1] <= len(free):
        Q = np.linalg.qr(U, mode="complete")[0][:, U.shape[1] :] if U.size else np.eye(n)
        QA = Q.T @ A
    else:
        # more readings than cells: only the directions that the source can reach
        Q = np.linalg.qr(np.hstack([U, A]))[0][:, U.shape[1] :]
        QA = Q.T @ A
    Qd = Q.T @ left_d
    return Frame(
        problem=problem,
        free=free,
        U=U,
        own=own,
        Q=Q,
        QA=QA,
        Qd=Qd,
        UA=UA,
        Ud=Ud,
        solve=solve,
        reach=Rt,
        norms=norms,
        rest=left_d - Q @ Qd,
        nu=n - U.shape[1],
        extra=np.zeros((len(free), 0)) if extra is None else extra,
        balanced=balanced,
    )


def _span(N: Array, constant: bool) -> tuple[Array, bool]:
    """Orthonormal basis of unit columns N, the direction that only the first adds put last."""
    others = N[:, 1:] if constant else N
    basis = _basis(others)
    if not constant:
        return basis, False
    first = N[:, 0] - basis @ (basis.T @ N[:, 0])
    first = first - basis @ (basis.T @ first)
    size = float(np.linalg.norm(first))
    if size <= RANK:
        return basis, False
    return np.hstack([basis, first[:, None] / size]), True


def _basis(N: Array) -> Array:
    """Orthonormal basis of the columns, dependent ones left out by a relative rank test."""
    if not N.shape[1]:
        return np.zeros((len(N), 0))
    P, s, _ = np.linalg.svd(N, full_matrices=False)
    return np.asarray(P[:, s > RANK * s[0]]) if s[0] > 0 else np.zeros((len(N), 0))


def _balanced(problem: Problem, free: np.ndarray[tuple[int], np.dtype[np.intp]]) -> Array | None:
    """Projection of cell values onto sources that the balance rows do not see.

    Orthogonal in the inner product with the cells' weights: what is taken away is a combination
    of the null modes.
    """
    if problem.balance is None or not len(free):
        return None
    rows = np.atleast_2d(problem.balance)[:, free]
    modes = (rows / problem.grid.weights[free]).T
    return np.asarray(np.eye(len(free)) - modes @ np.linalg.solve(rows @ modes, rows))


def ask(fr: Frame, questions: Questions) -> Asked:
    """Bring questions into the frame: unpenalised weights b become h = N+' b."""
    from scipy.sparse import csr_array

    problem = fr.problem
    on_free = np.asarray(questions.cells)[:, problem.grid.free]
    parts = [on_free.sum(axis=1)[:, None]] if problem.constant else []
    if fr.extra.shape[1]:
        parts.append(on_free @ fr.extra)
    b = np.hstack([*parts, questions.columns])
    scaled = b / fr.norms
    off = np.linalg.norm(scaled - (scaled @ fr.reach.T) @ fr.reach, axis=1)
    determined = off <= REACHED * np.linalg.norm(scaled, axis=1)
    G: csr_array | Array = np.asarray(questions.cells)[:, fr.free]
    G = csr_array(G) if fr.balanced is None else G @ fr.balanced
    return Asked(G=G, H=b @ fr.solve, determined=determined)
