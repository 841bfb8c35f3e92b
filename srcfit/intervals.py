"""Exact propagation over short intervals: pure numbers, nothing about members.

Over an interval of unit length z' = B z + e g(t), e the last unit vector, g given at the Gauss
places. Smooth B: Gauss collocation with eight stages (order 16). Constant B: its power series.

Sources: Hairer, Norsett & Wanner, Solving Ordinary Differential Equations I, II.7 (collocation);
Moler & Van Loan, SIAM Rev. 45 (2003) 3 (series of the exponential, good where B is small).
"""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Matrix = NDArray[Any]
STAGES = 8
TERMS = 28  # of the power series
LARGEST = 3.0  # norm of B up to which they are enough: 3**28 / 28! is 1e-16


@cache
def gauss() -> tuple[Array, Array, Array]:
    """Nodes, weights on [0, 1] and the collocation matrix of the Gauss method."""
    place, weight = (np.asarray(v, float) for v in np.polynomial.legendre.leggauss(STAGES))
    c: Array = (place + 1) / 2
    b: Array = weight / 2
    powers = np.arange(1, STAGES + 1)
    # a[i, j] = integral of the j-th Lagrange polynomial from 0 to c[i]
    moments = (c[:, None] ** (powers - 1)).T, (c[:, None] ** powers / powers).T
    a = np.asarray(np.linalg.solve(*moments).T, dtype=np.float64)
    return c, b, a


@cache
def _series() -> tuple[Array, Array, Array]:
    """Constants of the series, k = 0 ... TERMS - 1, l_j the Lagrange polynomials at Gauss places.

    powers[k, i] = c_i**k; ends[k, j] = integral of (1 - t)**k l_j over [0, 1];
    inner[k, i, j] = integral of (c_i - t)**k l_j from 0 to c_i.
    """
    c, _, _ = gauss()
    t, w = (np.asarray(v, float) for v in np.polynomial.legendre.leggauss(TERMS))
    t, w = (t + 1) / 2, w / 2
    k = np.arange(TERMS)

    def lagrange(x: Array) -> Array:
        apart = c[:, None] - c + np.eye(STAGES)
        factor = (x[..., None, None] - c) / apart
        factor[..., np.arange(STAGES), np.arange(STAGES)] = 1.0
        values: Array = factor.prod(axis=-1)
        return values

    ends = np.einsum("q,qk,qj->kj", w, (1 - t)[:, None] ** k, lagrange(t))
    at = c[:, None] * t
    weight = w * (c[:, None] - at)[..., None].transpose(2, 0, 1) ** k[:, None, None]
    inner = np.einsum("kiq,iqj,i->kij", weight, lagrange(at), c)
    return c ** k[:, None], ends, inner


def collocated(B: Matrix) -> tuple[Matrix, Matrix]:
    """Propagation with B (N, s, n, n) at the Gauss places.

    Returns
    -------
    step : (N, n, n + s) state at the end per state at the start and per g at the Gauss places
    rows : (N, s, n + s) first component at the Gauss places, likewise
    """
    _, weight, collocation = gauss()
    count, _, n, _ = B.shape
    # (I - a (x) B) Z = 1 (x) I for the stage values Z
    lhs = -np.einsum("ij,kjmn->kimjn", collocation, B).reshape(count, STAGES * n, STAGES * n)
    lhs += np.eye(STAGES * n)
    # unit states at the left node, and unit forces on the last component at each Gauss place
    unit = np.concatenate(
        [np.tile(np.eye(n), (STAGES, 1)), np.kron(collocation, np.eye(n)[:, -1:])], 1
    )
    Z = np.linalg.solve(lhs, np.broadcast_to(unit, (count, *unit.shape)))
    Z = Z.reshape(count, STAGES, n, n + STAGES)
    step = np.einsum("j,kjmn,kjnl->kml", weight, B, Z)
    step[:, :, :n] += np.eye(n)
    step[:, -1, n:] += weight
    return step, Z[:, :, 0]


def exponential(B: Matrix) -> tuple[Matrix, Matrix]:
    """Propagation with a constant B (N, n, n) of norm up to LARGEST; returns as `collocated`."""
    powers, ends, inner = _series()
    n = B.shape[-1]
    terms = np.empty((TERMS, *B.shape), dtype=B.dtype)
    terms[0] = np.eye(n)
    for k in range(1, TERMS):
        np.matmul(terms[k - 1], B / k, out=terms[k])
    ahead = np.tensordot(terms[..., -1], ends, axes=(0, 0))
    step = np.concatenate([terms.sum(axis=0), ahead], axis=2)
    top = terms[:, :, 0]
    here = np.tensordot(top, powers, axes=(0, 0)).transpose(0, 2, 1)
    own = np.tensordot(top[..., -1], inner, axes=(0, 0))
    return step, np.concatenate([here, own], axis=2)
