"""One family in the frame: the eigenvalues and modes of its projected covariance A C A'.

Two routes to the same numbers. `eigh` decomposes Q'A C A'Q; its errors grow with the square of
the signal-to-noise ratio (1e-9 of a standard deviation at a noise of 0.5 % of the signal). `svd`
decomposes Q'A S with C = S S' and its variances are sums of positive terms; about twice the cost.

Source: Rasmussen & Williams (2006), ch. 2; Golub & Van Loan, Matrix Computations, for both routes.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.linalg import eigh, svd

from srcfit.priors import Family, covariance, factor
from srcfit.problem import Array
from srcfit.solvers.frame import Frame

Route = Literal["eigh", "svd"]
# signal-to-noise ratio beyond which the square of it spoils the eigenvalues
SHARP = 2e3


@dataclass(frozen=True)
class Base:
    """One base kernel C and its products with T = [QA; UA], v + r rows.

    Attributes
    ----------
    K : (m', v + r), C T'
    S : (v + r, v + r), T C T'
    C : (m', m') or None
        The covariance (eigh route).
    L, TL : (m', j), (v + r, j) or None
        Its factor, C = L L', and T L (svd route).
    """

    K: Array
    S: Array
    C: Array | None = None
    L: Array | None = None
    TL: Array | None = None


@dataclass(frozen=True)
class Spectrum:
    """Modes of one family, c of them.

    Attributes
    ----------
    base : Base
    steps : (m', j)
        C = scale * base + steps steps'; without columns where the family has none.
    lam : (c,)
        Variance of each mode of the readings for sigma = 1.
    V : (v, c)
        Modes in the basis Q; `Z` (n, c) = Q V in the rows.
    y : (c,)
        The readings' part in each mode.
    rest : (n,)
        Readings beyond the unpenalised columns and the modes.
    K, S : products of the family's covariance, as in `Base`
    right : (c, j) or None
        Directions of the factor that the modes see (svd route, where asked for):
        f = factor @ right' z puts sqrt(lam) z into the modes.
    """

    frame: Frame
    family: Family
    base: Base
    steps: Array
    lam: Array
    V: Array
    Z: Array
    y: Array
    rest: Array
    K: Array
    S: Array
    right: Array | None

    @property
    def factor(self) -> Array:
        """Factor of the family's covariance, (m', j); svd route only."""
        assert self.base.L is not None
        return np.hstack([np.sqrt(self.family.scale) * self.base.L, self.steps])


def route(fr: Frame) -> Route:
    """The cheaper route that is exact enough for the noise."""
    if not fr.problem.stated:
        return "svd"
    signal = np.sqrt((fr.Qd @ fr.Qd + fr.rest @ fr.rest) / max(fr.nu, 1))
    return "svd" if signal > SHARP else "eigh"


def bases(
    fr: Frame, keys: Iterable[tuple[str, float]], by: Route
) -> dict[tuple[str, float], Base]:
    """Products of each base kernel (name, length), computed once for all families that use it."""
    T = np.vstack([fr.QA, fr.UA])
    return {key: _base(fr, T, *key, by) for key in dict.fromkeys(keys)}


def _base(fr: Frame, T: Array, name: str, length: float, by: Route) -> Base:
    grid = fr.problem.grid
    if by == "svd":
        L = factor(name, length, grid)
        TL = T @ L
        return Base(L @ TL.T, TL @ TL.T, L=L, TL=TL)
    C = covariance(name, length, grid)
    K = C @ T.T
    return Base(K, T @ K, C=C)


def spectrum(
    fr: Frame,
    family: Family,
    products: Mapping[tuple[str, float], Base],
    pieces: Array,
    *,
    right: bool = False,
) -> Spectrum:
    """Decompose one family; steps enter as a low-rank addition to the base's products.

    Parameters
    ----------
    fr : Frame
    family : Family
    products : of `bases`
    pieces : (m', j)
        Indicators of the pieces within which the source may step.
    right : bool
        Also find the right singular vectors where the route is svd (for variances).
    """
    base = products[family.base, family.length]
    K, S, size = base.K, base.S, len(fr.Qd)
    if family.scale != 1:
        K, S = family.scale * K, family.scale * S
    steps = np.sqrt(family.steps) * pieces if family.steps else pieces[:, :0]
    seen = np.vstack([fr.QA @ steps, fr.UA @ steps])
    if steps.shape[1]:
        K, S = K + steps @ seen.T, S + seen @ seen.T
    Wt = None
    if base.TL is None:
        lam, V = eigh(S[:size, :size], driver="evd", check_finite=False)
        lam = np.maximum(lam, 0.0)
    else:
        F = np.hstack([np.sqrt(family.scale) * base.TL[:size], seen[:size]])
        V, s, Wt = thin_svd(F, right=right)
        lam = s**2
    Z = fr.rows(V)
    y = V.T @ fr.Qd
    rest = fr.rest if V.shape[1] == size else fr.rest + fr.rows(fr.Qd - V @ y)
    return Spectrum(fr, family, base, steps, lam, V, Z, y, rest, K, S, Wt)


def thin_svd(F: Array, *, right: bool) -> tuple[Array, Array, Array | None]:
    """Thin SVD of a (usually wide) matrix; the right vectors only where they are asked for."""
    if F.size == 0:
        return np.zeros((len(F), 0)), np.zeros(0), np.zeros((0, F.shape[1]))
    if F.shape[1] <= F.shape[0]:
        V, s, Wt = svd(F, full_matrices=False, check_finite=False)
        return V, s, Wt if right else None
    if not right:
        lower = np.asarray(np.linalg.qr(F.T, mode="r")).T
        V, s, _ = svd(lower, check_finite=False)
        return V, s, None
    G, R = np.linalg.qr(F.T)
    V, s, Wt = svd(R.T, check_finite=False)
    return V, s, Wt @ G.T
