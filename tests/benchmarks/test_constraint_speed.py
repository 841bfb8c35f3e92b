"""Speed under a sign at 200 readings and 400 cells, beside scipy's non-negative least squares.

One BLAS thread, process time; the peer runs in the same test, in turns. Run with
`pytest tests/benchmarks --benchmark-only`.
"""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import nnls
from simulation_constraints import knowledge
from test_inverse_speed import CELLS, READINGS, default_case, once
from threadpoolctl import threadpool_limits

from srcfit import constraints
from srcfit.bands import cautious
from srcfit.constraints import constrained
from srcfit.priors import factor
from srcfit.solvers import SOLVERS
from srcfit.solvers.nonnegative import multipliers

pytestmark = pytest.mark.benchmark(timer=time.process_time, min_rounds=5, warmup=True)
SEED = np.random.SeedSequence(1)


@pytest.fixture(scope="module", autouse=True)
def _one_thread():
    with threadpool_limits(limits=1):
        yield


def signed_case(narrow):
    """The smooth source of the other benchmarks, or one that is zero on nine tenths."""
    problem, questions = default_case()
    if narrow:
        f = 5.0 * (np.abs(problem.grid.middles - 0.5) < 0.05)
        u = problem.A @ f
        size = 200 / u.max()
        d = size * u + np.random.default_rng(0).normal(size=READINGS)
        problem = replace(problem, A=size * problem.A, d=d)
    return problem, questions, knowledge(problem, questions, sign="nonnegative")


@pytest.mark.parametrize("narrow", [False, True], ids=["smooth", "narrow"])
def test_bands_under_a_sign(benchmark, narrow):
    problem, questions, known = signed_case(narrow)

    def whole():
        free = cautious(problem, questions)
        return constrained(problem, questions, known, free, SEED)

    answers, held = benchmark(whole)
    assert len(answers.value) == CELLS + 10
    assert held.draws > 0
    assert benchmark.stats.stats.median <= 1.5  # seconds, bands without the sign included


def test_exact_estimate_beside_a_library(benchmark, monkeypatch):
    """One strength: the solution alone against `nnls` on the rows of data and penalty."""
    problem, questions, known = signed_case(True)
    ladder = SOLVERS["tikhonov"](problem)
    at = len(ladder.strengths) // 2
    free = cautious(problem, questions, centre=(ladder, at))
    asked = []
    monkeypatch.setattr(
        constraints, "multipliers", lambda *given: asked.append(given) or multipliers(*given)
    )
    mine = constrained(
        problem, questions, known, free, SEED, centre=(ladder, at), band=False
    )[0].value[:CELLS]  # fmt: skip
    L = factor("roughness-1", 0.0, problem.grid)
    penalty = ladder.strengths[at] ** 0.5 * np.linalg.pinv(L - L.mean(axis=0))
    rows = np.vstack([problem.A, penalty])
    right = np.append(problem.d, np.zeros(len(penalty)))
    theirs = nnls(rows, right)[0]
    np.testing.assert_allclose(mine, theirs, atol=1e-5 * theirs.max())
    benchmark(multipliers, *asked[0])
    times = [(once(multipliers, *asked[0]), once(nnls, rows, right)) for _ in range(9)]
    own, library = np.median(times, axis=0)
    benchmark.extra_info["ratio to nnls"] = own / library
    assert own <= 2 * library
