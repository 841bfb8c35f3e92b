"""Speed of the kernel: 200 readings and 400 cells on a ten-span stepped beam.

The unit is `numpy.linalg.eigh` of a symmetric 400 x 400 matrix in the same run, one BLAS thread,
process time. Run with `pytest tests/benchmarks --benchmark-only`.
"""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np
import pytest
from test_forward import case_of
from test_hard_members import ten_spans
from threadpoolctl import threadpool_limits

import srcfit
from srcfit.forward import build
from srcfit.influence import influence, interval_integrals
from srcfit.quantities import functionals
from srcfit.state import chain

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
    """Seconds of one symmetric eigendecomposition of size 400."""
    X = np.random.default_rng(0).normal(size=(CELLS, CELLS))
    return median_time(lambda: np.linalg.eigh(X + X.T))


def kernel_matrix(member, x, edges):
    """Responses (n, m) at x to unit density on each cell (nodes between cells summed up)."""
    line = chain(member, np.concatenate([edges, x]))
    lines = influence(line, functionals(line, "response", x))
    middle = (line.x[1:] + line.x[:-1]) / 2
    cell = np.clip(np.searchsorted(edges, middle) - 1, 0, len(edges) - 2)
    first = np.searchsorted(cell, np.arange(len(edges) - 1))
    return np.add.reduceat(interval_integrals(lines), first, axis=1)


def beam_case(tmp_path):
    (member, _), length = ten_spans()
    x = np.linspace(0, length, READINGS + 2)[1:-1]
    columns = [{"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.1 mm"}]
    plain = {"kind": "beam", "length": f"{length!r} m", "bending_stiffness": "5 GN*m^2",
             "left": "pinned", "right": "pinned"}  # fmt: skip
    source = {"unit": "kN/m", "cells": CELLS}
    case = case_of(tmp_path, plain, columns, [(float(v), 1.0) for v in x], source)
    return replace(case, member=member), x


def test_chain_influence_and_matrix(benchmark, unit):
    (member, _), length = ten_spans()
    x, edges = np.linspace(0, length, READINGS + 2)[1:-1], np.linspace(0, length, CELLS + 1)
    A = benchmark(kernel_matrix, member, x, edges)
    assert A.shape == (READINGS, CELLS)
    ratio = median_time(lambda: kernel_matrix(member, x, edges)) / unit
    benchmark.extra_info["eigendecompositions"] = ratio
    assert ratio <= 3


def test_whole_forward_model(benchmark, unit, tmp_path):
    """Reactions, restraints and the bookkeeping of the case included."""
    case, _ = beam_case(tmp_path)
    readings = srcfit.read(case)
    forward = benchmark(build, case, readings)
    assert forward.A.shape == (READINGS, CELLS)
    ratio = median_time(lambda: build(case, readings)) / unit
    benchmark.extra_info["eigendecompositions"] = ratio
    assert ratio <= 3


def test_both_ways_give_one_matrix(tmp_path):
    case, x = beam_case(tmp_path)
    forward = build(case, srcfit.read(case))
    A = kernel_matrix(case.member, x, forward.grid.edges)
    np.testing.assert_allclose(forward.A, A, atol=1e-12 * np.abs(A).max())
