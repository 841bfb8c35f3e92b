"""Bayesian bands of a penalised estimate cover on average: theory recomputed.

Wahba (1983), J. R. Stat. Soc. B 45, 133; Nychka (1988), J. Am. Stat. Assoc. 83, 1134. For a source
seen through an operator of order a, penalty on the m-th derivative and the strength of least mean
square error, posterior variance over mean square error tends to 1 / ((1 - q)(1 + q/2)) with
q = (2a + 1) / (2 (a + m)): 32/27 and average coverage 0.967 for plain smoothing (a = 0, m = 2),
4.24 and 0.9999 for a second-order member (a = 2, m = 1). So 0.95 must not be expected exactly.
"""

import numpy as np
import pytest
from scipy.stats import norm
from threadpoolctl import threadpool_limits

import srcfit
from srcfit.evidence import at_one, conditional
from srcfit.priors import family, null_columns
from srcfit.problem import Grid, Problem, Questions
from srcfit.solvers.frame import ask, frame
from srcfit.solvers.spectrum import bases, spectrum
from srcfit.solvers.tikhonov import tikhonov

CELLS = 128


# both meet the conditions that the penalty sets at the ends, so that those do not slow the limit
def wave(x):
    return np.exp(np.cos(2 * np.pi * x))


def bump(x):
    return np.exp(-(((x - 0.5) / 0.12) ** 2) / 2)


def seen(a, x):
    """What the readings see of a unit density on each cell."""
    if a == 0:
        return np.eye(len(x))
    member = srcfit.make_member({
        "kind": "conductor", "length": "1 m", "conductance": "1 W*m/K", "loss": "1 W/(m*K)",
        "ambient": "0 degC", "left": "insulated", "right": "insulated",
    })  # fmt: skip
    return srcfit.kernel(member, x, x) / len(x)


def posterior_variance(problem, m, strength):
    chosen, count = family(m, problem.grid), len(problem.grid.free)
    fr = frame(problem, null_columns(chosen.base, problem.grid))
    products = bases(fr, [(chosen.base, chosen.length)], "svd")
    sp = spectrum(fr, chosen, products, np.zeros((count, 0)))
    asked = ask(fr, Questions(np.eye(count), np.zeros((count, 0))))
    return conditional(asked, at_one(sp, strength, 1.0))[1][:, 0]


@pytest.mark.parametrize(
    ("a", "m", "source", "sd", "strengths"),
    [
        (0, 2, bump, 0.03, (1e-4, 1e1)),
        (0, 1, wave, 0.3, (1e-2, 1e2)),
        (2, 1, wave, 1e-4, (1e0, 1e4)),
    ],
)
def test_average_coverage(a, m, source, sd, strengths):
    edges = np.linspace(0, 1, CELLS + 1)
    grid = Grid(edges, np.diff(edges), np.ones(CELLS, dtype=bool))
    K, f = seen(a, grid.middles), source(grid.middles)

    def problem(y):
        return Problem(K / sd, np.zeros((CELLS, 0)), y / sd, grid, constant=True)

    tau = np.geomspace(*strengths, 30)
    with threadpool_limits(1):
        # estimates are linear in the readings, so that bias and variance are had without drawing
        each = [tikhonov(problem(e), roughness=m, strengths=tau).estimates for e in np.eye(CELLS)]
        S = np.stack(each, axis=1)  # (cell, reading, strength)
        bias = np.einsum("ijt,j->it", S, K @ f) - f[:, None]
        spread = sd**2 * (S**2).sum(axis=1)
        error = (bias**2 + spread).mean(axis=0)
        best = int(error.argmin())
        assert 0 < best < len(tau) - 1  # the ladder holds the best strength
        variance = posterior_variance(problem(K @ f), m, float(tau[best]))
        # the best strength lies between rungs, at the vertex of a parabola
        near = slice(best - 1, best + 2)
        vertex = np.polynomial.Polynomial.fit(np.log(tau[near]), error[near], 2)
        place = vertex.deriv().roots()[0]
        at_best = posterior_variance(problem(K @ f), m, float(np.exp(place)))
    q = (2 * a + 1) / (2 * (a + m))
    ratio = 1 / ((1 - q) * (1 + q / 2))
    assert at_best.mean() / vertex(place) == pytest.approx(ratio, rel=0.08)  # finite sizes
    b, v = bias[:, best] / np.sqrt(spread[:, best]), np.sqrt(variance / spread[:, best])
    held = np.mean(norm.cdf(1.959964 * v - b) - norm.cdf(-1.959964 * v - b))
    assert held == pytest.approx(2 * norm.cdf(1.959964 * np.sqrt(ratio)) - 1, abs=0.01)
