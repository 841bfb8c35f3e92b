"""Joint Gaussians of many linear questions, at one rung of one family or without a smooth part.

`evidence` needs each question by itself; constraints and unknown places tie questions together.
A law knows the mean of every question and the covariance between any two sets of them.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from srcfit.evidence import Weighted, conditional
from srcfit.problem import Array, Questions
from srcfit.solvers.frame import Asked, Frame
from srcfit.solvers.ladder import Ladder

Numbers = NDArray[np.intp]
Covariance = Callable[[Numbers, Numbers], Array]

# families of less weight are left out where one law stands for each family
SLIGHT = 0.01


def numbered(*kinds: Questions) -> tuple[Questions, tuple[Numbers, ...]]:
    """Questions of several kinds one after the other, and the numbers of each kind."""
    ends = np.cumsum([0, *(len(k.cells) for k in kinds)])
    every = Questions(np.vstack([k.cells for k in kinds]), np.vstack([k.columns for k in kinds]))
    return every, tuple(np.arange(a, b) for a, b in pairwise(ends))


@dataclass(frozen=True)
class Law:
    """Gaussian of q questions.

    Attributes
    ----------
    weight : float
        Its share in an average of laws.
    mean, variance : (q,)
    between : callable
        Covariance (i, j) between the questions of two sets of numbers.
    label : tuple
        (family, rung) or so: laws with the same label are the same.
    """

    weight: float
    mean: Array
    variance: Array
    between: Covariance
    label: tuple[str, int] = ("", 0)


Maker = Callable[[int, float], Law]


def laws(asked: Asked, w: Weighted) -> Maker:
    """Laws of one family; what all rungs share is computed once.

    Returns
    -------
    callable (rung, weight) -> Law
    """
    means, variances = conditional(asked, w)
    covariance = _by_factor(asked, w) if w.spectrum.right is not None else _by_kernel(asked, w)

    def law(t: int, weight: float) -> Law:
        label = (w.spectrum.family.name, t)
        return Law(weight, means[:, t], variances[:, t], covariance(t), label)

    return law


def made(families: Sequence[Weighted], asked: Asked) -> list[tuple[Weighted, Maker]]:
    """Families with the makers of their laws."""
    return [(w, laws(asked, w)) for w in families]


def typical(families: Sequence[tuple[Weighted, Maker]]) -> list[Law]:
    """One law for each family that matters, at its mean strength."""
    found = []
    for w, law in families:
        weight = float(w.weights.sum())
        if weight >= SLIGHT:
            mean = np.log(w.sigma) @ w.weights / weight
            t = int(np.argmin(np.abs(np.log(w.sigma) - mean)))
            found.append(law(t, weight))
    total = sum(law.weight for law in found)
    return [replace(law, weight=law.weight / total) for law in found]


def several(families: Sequence[tuple[Weighted, Maker]], count: int) -> list[Law]:
    """At most `count` laws, in proportion to the weights of all families and rungs."""
    ends = np.cumsum(np.concatenate([w.weights for w, _ in families]))
    places = (np.arange(count) + 0.5) / count * ends[-1]
    picked, times = np.unique(np.searchsorted(ends, places), return_counts=True)
    start, found = 0, []
    for w, law in families:
        mine = (picked >= start) & (picked < start + len(w.weights))
        rungs = zip(picked[mine] - start, times[mine], strict=True)
        found += [law(int(t), float(c) / count) for t, c in rungs]
        start += len(w.weights)
    return found


def _by_factor(asked: Asked, w: Weighted) -> Callable[[int], Covariance]:
    """Covariances as sums of positive terms, in the coordinates of the prior's factor."""
    sp, fr = w.spectrum, w.spectrum.frame
    assert sp.right is not None
    L = sp.factor
    whole = asked.G @ L - asked.H @ (fr.UA @ L)
    seen = whole @ sp.right.T
    unseen = whole - seen @ sp.right

    def at(t: int) -> Covariance:
        square, shrink, noise = w.sigma[t] ** 2, w.shrink[:, t], w.noise[t]

        def between(i: Numbers, j: Numbers) -> Array:
            prior = unseen[i] @ unseen[j].T + (seen[i] * shrink) @ seen[j].T
            return np.asarray(noise * (asked.H[i] @ asked.H[j].T + square * prior))

        return between

    return at


def _by_kernel(asked: Asked, w: Weighted) -> Callable[[int], Covariance]:
    """Covariances as prior less what the readings took away."""
    sp, size = w.spectrum, len(w.spectrum.V)
    T = asked.G @ (sp.K[:, :size] @ sp.V) - asked.H @ (sp.S[size:, :size] @ sp.V)
    by_own = np.asarray(asked.G @ sp.K[:, size:])
    stepped = np.asarray(asked.G @ sp.steps)
    assert sp.base.C is not None
    C, scale = sp.base.C, sp.family.scale

    def at(t: int) -> Covariance:
        square, shrink, noise = w.sigma[t] ** 2, w.shrink[:, t], w.noise[t]

        def between(i: Numbers, j: Numbers) -> Array:
            H, K = asked.H[i], asked.H[j]
            if len(i) > len(j):
                return between(j, i).T
            prior = scale * np.asarray((asked.G[j] @ np.asarray(asked.G[i] @ C).T).T)
            prior = prior + stepped[i] @ stepped[j].T
            prior = prior - by_own[i] @ K.T - H @ by_own[j].T + H @ sp.S[size:, size:] @ K.T
            told = (T[i] * (square * shrink)) @ T[j].T
            return np.asarray(noise * (H @ K.T + square * (prior - told)))

        return between

    return at


def without_source(fr: Frame, asked: Asked, noise: float) -> Law:
    """The law of the unpenalised columns alone; `noise` is the sd of the whitened noise."""

    def between(i: Numbers, j: Numbers) -> Array:
        return np.asarray(noise**2 * asked.H[i] @ asked.H[j].T)

    return Law(1.0, asked.H @ fr.Ud, noise**2 * (asked.H**2).sum(axis=1), between)


def cut(asked: Asked, ladder: Ladder, at: int, noise: float) -> Law:
    """The law of a truncated solution: the shapes that are kept are unpenalised."""
    fr, kept = ladder.frame, ladder.fill[:, at] > 0
    shapes = ladder.shapes[0] @ ladder.shapes[1][:, kept]
    rows = np.hstack([asked.H, asked.G @ shapes - asked.H @ (fr.UA @ shapes)])
    mean = asked.H @ fr.Ud + rows[:, asked.H.shape[1] :] @ ladder.y[kept]

    def between(i: Numbers, j: Numbers) -> Array:
        return np.asarray(noise**2 * rows[i] @ rows[j].T)

    return Law(1.0, mean, noise**2 * (rows**2).sum(axis=1), between)
