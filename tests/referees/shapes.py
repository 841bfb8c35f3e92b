"""What both finite-element referees share: meshes and hierarchical shape functions.

Inner shapes are repeated integrals of Legendre polynomials, so that the stiffness matrix of an
element is nearly diagonal and high degrees stay accurate.

Source of the method: Szabo & Babuska, Finite Element Analysis (1991), ch. 2 and 3.
"""

from __future__ import annotations

import itertools
from functools import cache

import numpy as np
from numpy.polynomial import Legendre, Polynomial
from numpy.polynomial.legendre import leggauss, legval

RIGID = float("inf")


def mesh(start, end, places, size):
    """Nodes: every place, and no element longer than `size`."""
    stops = np.unique([start, end, *(p for p in places if start < p < end)])
    parts = [
        np.linspace(a, b, max(int(np.ceil((b - a) / size)), 1) + 1)[:-1]
        for a, b in itertools.pairwise(stops)
    ]
    return np.concatenate([*parts, [end]])


def lookup(pieces, x):
    """Value at `x` of a number or of pieces (from, to, value)."""
    if np.isscalar(pieces):
        return pieces
    return next(v for a, b, v in pieces if a <= x <= b)


def gauss(a, b, count):
    """Gauss places and weights on [a, b]."""
    t, w = leggauss(count)
    return (a + b) / 2 + (b - a) / 2 * t, (b - a) / 2 * w


@cache
def _lagrange(degree, derivative):
    """Legendre coefficients, one column a shape: two end values, then bubbles."""
    ends = [Polynomial([0.5, -0.5]), Polynomial([0.5, 0.5])]
    bubbles = [Legendre.basis(j).integ(lbnd=-1) for j in range(1, degree)]
    return _coefficients([s.convert(kind=Legendre) for s in ends] + bubbles, derivative)


@cache
def _hermite(degree, derivative):
    """Legendre coefficients, one column a shape: value and slope at both ends, then bubbles."""
    ends = [
        Polynomial([2, -3, 0, 1]) / 4,
        Polynomial([1, -1, -1, 1]) / 4,
        Polynomial([2, 3, 0, -1]) / 4,
        Polynomial([-1, -1, 1, 1]) / 4,
    ]
    bubbles = [Legendre.basis(j).integ(2, lbnd=-1) for j in range(2, degree - 1)]
    return _coefficients([s.convert(kind=Legendre) for s in ends] + bubbles, derivative)


def _coefficients(shapes, derivative):
    derived = [s.deriv(derivative) if derivative else s for s in shapes]
    size = max(len(s.coef) for s in derived)
    return np.stack([np.pad(s.coef, (0, size - len(s.coef))) for s in derived], axis=1)


def lagrange(degree, t, derivative, half):
    """(len(t), shapes): a derivative by x of each shape at the local places t in [-1, 1]."""
    return legval(t, _lagrange(degree, derivative)).T / half**derivative


def hermite(degree, t, derivative, half):
    """The same for beams; slopes at the ends are by x, `half` is half the element's length."""
    found = legval(t, _hermite(degree, derivative)).T / half**derivative
    found[:, [1, 3]] *= half
    return found


def load_pieces(density, a, b):
    """The parts (from, to, function) of a density that lie in the element [a, b]."""
    for start, end, value in density:
        lo, hi = max(start, a), min(end, b)
        if hi > lo + 1e-14 * max(abs(lo), abs(hi)):
            yield lo, hi, value if callable(value) else (lambda x, v=value: v + 0 * x)
