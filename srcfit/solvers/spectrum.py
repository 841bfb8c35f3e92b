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
    """Products of one base kernel: K = C T' (m', v + r), S = T K, T = [QA; UA].

    Beside them C itself (eigh) or its factor (svd).
    """

    K: Array
    S: Array
    C: Array | None
    factor: Array | None


@dataclass(frozen=True)
class Spectrum:
    """Modes of one family, c of them.

    Attributes
    ----------
    lam : (c,)
        Variance of each mode of the readings for sigma = 1.
    V : (v, c)
        Modes in the basis Q; `Z` (n, c) = Q V in the rows.
    y : (c,)
        The readings' part in each mode.
    rest : (n,)
        Readings beyond the unpenalised columns and the modes.
    K, S : products of the family's covariance with T = [QA; UA], as in `Base`
    C : (m', m') or None
        Covariance (eigh route).
    factor : (m', j) or None
        Factor of the covariance (svd route); `right` (c, j) are its directions that the modes
        see: f = factor @ right' z puts sqrt(lam) z into the modes.
    """

    frame: Frame
    family: Family
    lam: Array
    V: Array
    Z: Array
    y: Array
    rest: Array
    K: Array
    S: Array
    C: Array | None
    factor: Array | None
    right: Array | None

    def source(self, amounts: Array) -> Array:
        """Variation of the source (m', ...) = C A'Z amounts, for (c, ...) amounts of each mode."""
        size = self.V.shape[0]
        f = self.K[:, :size] @ (self.V @ amounts)
        return f if self.frame.balanced is None else self.frame.balanced @ f


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
    grid = fr.problem.grid
    found: dict[tuple[str, float], Base] = {}
    for name, length in keys:
        if (name, length) in found:
            continue
        if by == "svd" or name.startswith("roughness"):
            L = factor(name, length, grid)
            TL = T @ L
            C = L @ L.T if by == "eigh" else None
            found[name, length] = Base(L @ TL.T, TL @ TL.T, C, L if by == "svd" else None)
        else:
            C = covariance(name, length, grid)
            K = C @ T.T
            found[name, length] = Base(K, T @ K, C, None)
    return found


def spectrum(
    fr: Frame, family: Family, products: Mapping[tuple[str, float], Base], pieces: Array
) -> Spectrum:
    """Decompose one family; steps enter as a low-rank addition to the base's products."""
    base = products[family.base, family.length]
    steps = np.sqrt(family.steps) * pieces if family.steps and pieces.shape[1] else None
    K, S, size = family.scale * base.K, family.scale * base.S, len(fr.Qd)
    if steps is not None:
        seen = np.vstack([fr.QA, fr.UA]) @ steps
        K, S = K + steps @ seen.T, S + seen @ seen.T
    C = L = right = None
    if base.factor is None:
        assert base.C is not None
        lam, V = eigh(S[:size, :size], driver="evd", check_finite=False)
        lam = np.maximum(lam, 0.0)
        C = family.scale * base.C if steps is None else family.scale * base.C + steps @ steps.T
    else:
        L = np.sqrt(family.scale) * base.factor
        L = L if steps is None else np.hstack([L, steps])
        V, s, right = _thin_svd(fr.QA @ L)
        lam = s**2
    Z = fr.Q @ V
    y = V.T @ fr.Qd
    rest = fr.rest if V.shape[1] == size else fr.rest + fr.Q @ (fr.Qd - V @ y)
    return Spectrum(fr, family, lam, V, Z, y, rest, K, S, C, L, right)


def _thin_svd(F: Array) -> tuple[Array, Array, Array]:
    """Thin SVD of a (usually wide) matrix, by a QR of its longer side first."""
    if F.shape[1] <= F.shape[0]:
        V, s, Wt = svd(F, full_matrices=False, check_finite=False)
        return V, s, Wt
    G, R = np.linalg.qr(F.T)
    V, s, Wt = svd(R.T, full_matrices=False, check_finite=False)
    return V, s, Wt @ G.T
