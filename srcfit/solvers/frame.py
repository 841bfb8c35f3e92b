"""What every solver and family shares: the unpenalised columns projected out, once.

    d = A f + N beta + e,    N = [A 1, B] (A 1 only where the source has its own constant, one
                                          column for each part of the source)

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
# questions that weigh more than this part of all cells are quicker as a dense matrix
FULL = 0.2
ROUNDED = 1e-10
UNIFORM = "uniform source"


@dataclass(frozen=True)
class Complement:
    """Basis Q of all rows orthogonal to r columns, kept as r reflectors (I - Y T Y').

    Source: Schreiber & Van Loan (1989), SIAM J. Sci. Stat. Comput. 10, 53 (compact WY form).
    """

    Y: Array
    T: Array

    def lift(self, parts: Array) -> Array:
        """Q parts, (n, ...)."""
        r, n = len(self.T), len(self.Y)
        full = np.zeros((n, *parts.shape[1:]))
        full[r:] = parts
        return np.asarray(full - self.Y @ (self.T @ (self.Y[r:].T @ parts)))

    def drop(self, rows: Array) -> Array:
        """Q' rows, (n - r, ...)."""
        r = len(self.T)
        return np.asarray(rows[r:] - self.Y[r:] @ (self.T.T @ (self.Y.T @ rows)))


def complement(U: Array) -> Complement:
    """Reflectors of orthonormal columns U (n, r)."""
    r = U.shape[1]
    if r == 0:
        return Complement(np.zeros((len(U), 0)), np.zeros((0, 0)))
    h, tau = np.linalg.qr(U, mode="raw")
    Y = np.tril(h.T, -1) + np.eye(len(U), r)
    T = np.diag(tau)
    for i in range(1, r):
        T[:i, i] = -tau[i] * (T[:i, :i] @ (Y[:, :i].T @ Y[:, i]))
    return Complement(Y, T)


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
        Orthonormal basis of the unpenalised columns; the constants' own directions are the last
        `own` of them.
    own : int
        How many directions of their own the constants add to the other columns.
    basis : Complement or (n, v)
        Orthonormal basis Q of all else that the source can reach (v = n - r unless
        n > m' + r), see `rows`.
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
    own: int
    basis: Complement | Array
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

    def rows(self, parts: Array) -> Array:
        """Q parts: from the basis (v, ...) back to the rows (n, ...)."""
        if isinstance(self.basis, Complement):
            return self.basis.lift(parts)
        return np.asarray(self.basis @ parts)


@dataclass(frozen=True)
class Asked:
    """Questions in the frame: value = G f + H U'(d - A f), plus what is undetermined.

    Attributes
    ----------
    G : (q, m') sparse or dense
        Weights of the free cells, balanced where the member is.
    H : (q, r)
        Weights of the unpenalised directions.
    size : (q,)
        Sum of the absolute weights of the free cells.
    determined : (q,) bool
        False where the readings cannot tell the question's unpenalised part.
    """

    G: csr_array | Array
    H: Array
    size: Array
    determined: np.ndarray[tuple[int], np.dtype[np.bool_]]


def unpenalised(problem: Problem, extra: Array | None = None) -> Array:
    """Columns N (n, k'): the constants' response first (if any), `extra` shapes, then B."""
    on_free = problem.A[:, problem.grid.unknown]
    parts = [on_free @ problem.grid.constants] if problem.constant else []
    if extra is not None and extra.shape[1]:
        parts.append(on_free @ extra)
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
    free = np.flatnonzero(problem.grid.unknown) if problem.smooth else np.zeros(0, dtype=np.intp)
    balanced = _balanced(problem, free)
    if extra is not None and balanced is not None:
        # shapes that are no more than a null mode have nothing left
        left = balanced @ extra
        extra = left[:, np.linalg.norm(left, axis=0) > RANK * np.linalg.norm(extra, axis=0)]
    N = unpenalised(problem, extra)
    norms = np.linalg.norm(N, axis=0)
    norms[norms == 0] = 1.0
    N = N / norms
    U, own = _span(N, problem.grid.parts if problem.constant else 0)
    R = U.T @ N
    P, s, Rt = np.linalg.svd(R, full_matrices=False)
    solve = (Rt.T / s) @ P.T / norms[:, None] if len(s) else np.zeros((N.shape[1], 0))
    A = problem.A[:, free] if balanced is None else problem.A[:, free] @ balanced
    UA, Ud = U.T @ A, U.T @ problem.d
    beyond = problem.d - U @ Ud
    basis: Complement | Array
    if n - U.shape[1] <= len(free):
        basis = complement(U)
        QA, Qd = basis.drop(A), basis.drop(beyond)
        rest = np.zeros(n)
    else:
        # more readings than cells: only the directions that the source can reach
        basis = np.linalg.qr(np.hstack([U, A]))[0][:, U.shape[1] :]
        QA, Qd = basis.T @ A, basis.T @ beyond
        rest = beyond - basis @ Qd
    return Frame(
        problem=problem,
        free=free,
        U=U,
        own=own,
        basis=basis,
        QA=QA,
        Qd=Qd,
        UA=UA,
        Ud=Ud,
        solve=solve,
        reach=Rt,
        norms=norms,
        rest=rest,
        nu=n - U.shape[1],
        extra=np.zeros((len(free), 0)) if extra is None else extra,
        balanced=balanced,
    )


def _span(N: Array, constants: int) -> tuple[Array, int]:
    """Orthonormal basis of unit columns N, the directions that only the first add put last."""
    basis = _basis(N[:, constants:])
    own = 0
    for column in N[:, :constants].T:
        beyond = column - basis @ (basis.T @ column)
        beyond = beyond - basis @ (basis.T @ beyond)
        size = float(np.linalg.norm(beyond))
        if size > RANK:
            basis = np.hstack([basis, beyond[:, None] / size])
            own += 1
    return basis, own


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
    modes = (rows / np.tile(problem.grid.weights, problem.grid.parts)[free]).T
    return np.asarray(np.eye(len(free)) - modes @ np.linalg.solve(rows @ modes, rows))


def _sums(rows: Array, constants: Array) -> Array:
    """Rows times constants; 0 where they cancel but for rounding (moments of a level load)."""
    sums, size = rows @ constants, np.abs(rows) @ constants
    return np.where(np.abs(sums) > ROUNDED * size, sums, 0.0)


def ask(fr: Frame, questions: Questions) -> Asked:
    """Bring questions into the frame: unpenalised weights b become h = N+' b."""
    from scipy.sparse import csr_array

    problem = fr.problem
    on_free = np.asarray(questions.cells)[:, problem.grid.unknown]
    parts = [_sums(on_free, problem.grid.constants)] if problem.constant else []
    if fr.extra.shape[1]:
        parts.append(on_free @ fr.extra)
    b = np.hstack([*parts, questions.columns])
    scaled = b / fr.norms
    off = np.linalg.norm(scaled - (scaled @ fr.reach.T) @ fr.reach, axis=1)
    determined = off <= REACHED * np.linalg.norm(scaled, axis=1)
    dense = np.asarray(questions.cells)[:, fr.free]
    G: csr_array | Array = dense if fr.balanced is None else dense @ fr.balanced
    if fr.balanced is None and np.count_nonzero(dense) < FULL * dense.size:
        G = csr_array(dense)
    return Asked(G, b @ fr.solve, np.abs(dense).sum(axis=1), determined)
