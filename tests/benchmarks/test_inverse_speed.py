"""Speed of the inverse core at 200 readings and 400 cells, in symmetric eigendecompositions.

The unit is `scipy.linalg.eigh` of a 200 x 200 matrix in the same run, one BLAS thread, process
time, so that a busy machine matters little. Run with `pytest tests/benchmarks --benchmark-only`.
"""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np
import pytest
from scipy.linalg import eigh
from threadpoolctl import threadpool_limits

from srcfit.bands import cautious
from srcfit.calibration import calibrated
from srcfit.criteria import CRITERIA
from srcfit.features import featured
from srcfit.priors import factor
from srcfit.problem import Grid, Problem, Questions
from srcfit.solvers import SOLVERS

READINGS, CELLS = 200, 400
pytestmark = pytest.mark.benchmark(timer=time.process_time, min_rounds=7, warmup=True)


@pytest.fixture(scope="module", autouse=True)
def _one_thread():
    with threadpool_limits(limits=1):
        yield


def median_time(work, rounds=9):
    work()
    times = []
    for _ in range(rounds):
        start = time.process_time()
        work()
        times.append(time.process_time() - start)
    return float(np.median(times))


@pytest.fixture(scope="module")
def unit():
    """Seconds of one symmetric eigendecomposition of size 200."""
    X = np.random.default_rng(0).normal(size=(READINGS, READINGS))
    return median_time(lambda: eigh(X + X.T), rounds=25)


def default_case(noise=0.005):
    """A heated fin with nine zones; questions: every cell, the zones, the total."""
    edges = np.linspace(0, 1, CELLS + 1)
    x = np.linspace(0, 1, READINGS + 2)[1:-1]
    mid = (edges[1:] + edges[:-1]) / 2
    low, high = np.minimum(x[:, None], mid), np.maximum(x[:, None], mid)
    A = np.sinh(5 * low) * np.sinh(5 * (1 - high)) / (5 * np.sinh(5)) / CELLS
    u = A @ (2 + np.sin(5 * mid) + (abs(mid - 0.5) < 0.1))
    sd = noise * u.max()
    d = (u + sd * np.random.default_rng(0).normal(size=READINGS)) / sd
    zones = tuple((i / 10, (i + 1) / 10) for i in range(9))
    grid = Grid(edges, np.diff(edges), np.ones(CELLS, dtype=bool), zones)
    rows = [grid.weights * ((mid > a) & (mid < b)) for a, b in (*zones, (0.0, 1.0))]
    cells = np.vstack([np.eye(CELLS), *rows])
    problem = Problem(A / sd, np.zeros((READINGS, 0)), d, grid, places=x)
    return problem, Questions(cells, cells[:, :0])


def whole_ladder(problem):
    """200 strengths, every criterion, leave-one-out residuals."""
    ladder = SOLVERS["tikhonov"](problem)
    scores = [criterion(ladder) for criterion in CRITERIA.values()]
    return ladder, scores


def test_ladder_with_all_criteria(benchmark, unit):
    problem, _ = default_case()
    ladder, _ = benchmark(whole_ladder, problem)
    assert len(ladder.strengths) == 200
    assert benchmark.stats.stats.median <= 8 * unit


def test_ladder_is_no_slower_than_a_library_with_leave_one_out_alone(benchmark):
    from sklearn.linear_model import RidgeCV

    problem, _ = default_case()
    ladder, _ = benchmark(whole_ladder, problem)
    X = problem.A @ factor("roughness-1", 0.0, problem.grid)
    ridge = RidgeCV(alphas=ladder.strengths)
    # in turns, so that a busy machine slows both alike
    ours, library = zip(
        *[(once(whole_ladder, problem), once(ridge.fit, X, problem.d)) for _ in range(15)],
        strict=True,
    )
    assert np.median(ours) <= np.median(library)


def once(work, *args):
    start = time.process_time()
    work(*args)
    return time.process_time() - start


def test_whole_default(benchmark, unit):
    problem, questions = default_case()
    answers = benchmark(cautious, problem, questions)
    assert len(answers.value) == CELLS + 10
    assert benchmark.stats.stats.median <= 35 * unit


@pytest.mark.parametrize("sharp", [True, False], ids=["tiny noise", "unknown noise"])
def test_exact_route(benchmark, unit, sharp):
    problem, questions = default_case(1e-5 if sharp else 0.005)
    benchmark(cautious, replace(problem, stated=sharp), questions)
    assert benchmark.stats.stats.median <= 60 * unit


def test_calibrated_band(benchmark, unit):
    """400 reference sources on top of the default; one in sixteen cells has its own factor."""
    problem, questions = default_case()
    benchmark(calibrated, problem, questions, runs=[slice(0, CELLS)])
    assert benchmark.stats.stats.median <= 90 * unit


def test_search_for_features(benchmark, unit):
    """Some nine hundred shapes beside seven families, the default's own weighing included."""
    problem, _ = default_case()
    benchmark(featured, problem)
    assert benchmark.stats.stats.median <= 60 * unit
