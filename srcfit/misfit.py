"""How probable residuals as large as those seen are, where the fit follows most readings.

Of the readings' part in mode i the fit leaves w_i = 1 - fill_i. If noise and prior are as stated,
that part over the noise has variance 1 / w_i, and the sum of squared residuals is distributed as
sum of w_i times independent chi-squares of one degree of freedom. Its mean is the residual degrees
of freedom, but it is a chi-square of so many only where each w_i is 0 or 1.
Source of the three-moment approximation: Imhof (1961), Biometrika 48, 419, section 3.
"""

from __future__ import annotations

import numpy as np

from srcfit.bands import Fit
from srcfit.problem import Array
from srcfit.solvers.ladder import Ladder

SLIGHT = 1e-6  # weight of a rung below which it is not looked at


def chance(fit: Fit) -> float:
    """Probability of residuals at least as large as seen, averaged over rungs by evidence.

    nan where nothing was smoothed.
    """
    told = [(rungs(la)[w > SLIGHT], w[w > SLIGHT]) for la, w in
            zip(fit.ladders, fit.weights, strict=True)]  # fmt: skip
    weights = np.concatenate([w for _, w in told]) if told else np.zeros(0)
    if not weights.sum() > 0:
        return float("nan")
    return float(np.concatenate([p for p, _ in told]) @ weights / weights.sum())


def rungs(ladder: Ladder) -> Array:
    """The same at each rung of a ladder, (t,)."""
    left = 1 - ladder.fill
    beyond = max(ladder.frame.nu - len(left), 0)  # directions that no mode reaches
    moments = [(left**s).sum(axis=0) + beyond for s in (1, 2, 3)]
    seen = ladder.y**2 @ left**2 + ladder.rest @ ladder.rest
    return exceeded(seen, *moments)


def exceeded(seen: Array, first: Array, second: Array, third: Array) -> Array:
    """P(sum of w chi-squares > seen) from the sums of w, w**2 and w**3, (t,)."""
    from scipy.special import chdtrc

    some = second > 0
    second, third = np.where(some, second, 1.0), np.where(some, third, 1.0)
    freedom = second**3 / third**2
    at = (seen - first) * np.sqrt(freedom / second) + freedom
    # nothing left to fit: nothing to judge by
    return np.where(some, chdtrc(freedom, np.maximum(at, 0.0)), 1.0)
