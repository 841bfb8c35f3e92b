"""Ladders against refits, published solutions and general libraries."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import referee

from srcfit.errors import SolveError
from srcfit.priors import factor
from srcfit.problem import Grid, Problem, Questions
from srcfit.solvers import SOLVERS

M, N = 60, 25


def cable(seed=0, noise=0.005, *, nuisance=True, n=N, m=M):
    edges = np.linspace(0, 5.0, m + 1)
    x = np.linspace(0.1, 4.9, n)
    A = referee.fin(edges, x, 2.0, 1.5)
    mid = (edges[1:] + edges[:-1]) / 2
    u = A @ (1 + np.exp(-((mid - 2) ** 2))) + 0.2
    sd = noise * u.max()
    d = (u + sd * np.random.default_rng(seed).normal(size=n)) / sd
    B = np.ones((n, 1)) / sd if nuisance else np.zeros((n, 0))
    names = ("offset:a",) if nuisance else ()
    g = Grid(edges, np.diff(edges), np.ones(m, dtype=bool))
    return Problem(A / sd, B, d, g, names, places=x)


def sines(pb, count=20):
    e = pb.grid.edges / pb.grid.edges[-1]
    k = np.arange(1, count + 1) * np.pi
    return (
        np.sqrt(2)
        * (np.cos(np.outer(e[:-1], k)) - np.cos(np.outer(e[1:], k)))
        / (k * np.diff(e)[:, None])
    )


def ladder(name, pb, **more):
    return SOLVERS[name](pb, basis=sines(pb), **more)


def differences(g, order):
    """Rows D with D'D = Q, built directly, not from the package's closed-form factors."""
    x, h = g.middles, g.widths
    if order == 0:
        # about the unpenalised constant
        return np.diag(np.sqrt(h))
    gaps = np.diff(x)
    first = np.diff(np.eye(len(x)), axis=0) / gaps[:, None]
    if order == 1:
        return first * np.sqrt(gaps)[:, None]
    between = (gaps[1:] + gaps[:-1]) / 2
    return np.diff(first, axis=0) / np.sqrt(between)[:, None]


@pytest.mark.parametrize("order", [0, 1, 2])
def test_tikhonov_equals_augmented_least_squares(order):
    """Reference: the stacked least-squares problem, solved by scipy for each strength."""
    pb = cable()
    la = SOLVERS["tikhonov"](pb, roughness=order)
    D = differences(pb.grid, order)
    for t in (40, 100, 160):
        tau = la.strengths[t]
        k = 2
        penalty = np.hstack([np.sqrt(tau) * D, np.zeros((len(D), k))])
        if order == 0:
            # variation and constant apart
            top = np.hstack([pb.A, pb.A.sum(axis=1)[:, None], pb.B])
        else:
            top, penalty = np.hstack([pb.A, pb.B]), penalty[:, :-1]
        full = np.vstack([top, penalty])
        rhs = np.concatenate([pb.d, np.zeros(len(penalty))])
        sol = np.linalg.lstsq(full, rhs, rcond=1e-15)[0]
        f = sol[:M] + (sol[M] if order == 0 else 0)
        scale = np.abs(f).max()
        np.testing.assert_allclose(la.estimates[:, t], f, atol=1e-7 * scale)
        np.testing.assert_allclose(la.columns[:, t], sol[-1:], rtol=1e-7)
        np.testing.assert_allclose(la.residuals[:, t], pb.d - top @ sol, atol=1e-7)
        assert la.roughness[t] == pytest.approx(np.linalg.norm(D @ sol[:M]), rel=1e-7)
        hat = top @ np.linalg.pinv(full)[:, :N]
        np.testing.assert_allclose(la.hat[:, t], np.diag(hat), atol=1e-6)


@pytest.mark.parametrize("name", list(SOLVERS))
def test_leave_one_out_equals_refits(name):
    pb = cable()
    la = ladder(name, pb)
    t = {"tikhonov": 90}.get(name, 6)
    for i in (0, 7, N - 1):
        rows = np.delete(np.arange(N), i)
        less = replace(pb, A=pb.A[rows], B=pb.B[rows], d=pb.d[rows], places=pb.places[rows])
        if name == "tikhonov":
            other = SOLVERS[name](less, strengths=la.strengths[[t]])
            at = 0
        elif name == "eigenbasis":
            other, at = ladder(name, less), t
        else:
            # a cut's modes depend on the readings: keep them and refit their amounts
            left, right = la.shapes
            shapes = (left @ right)[:, :t]
            U = np.hstack([pb.A @ shapes, pb.A.sum(axis=1)[:, None], pb.B])
            c = np.linalg.lstsq(U[rows], pb.d[rows], rcond=None)[0]
            assert la.leave_one_out[i, t] == pytest.approx(pb.d[i] - U[i] @ c, rel=1e-6)
            continue
        fit = pb.A[i] @ other.estimates[:, at] + pb.B[i] @ other.columns[:, at]
        assert la.leave_one_out[i, t] == pytest.approx(pb.d[i] - fit, rel=1e-6, abs=1e-8)


@pytest.mark.parametrize("name", list(SOLVERS))
def test_every_ladder_keeps_its_contract(name):
    pb = cable()
    la = ladder(name, pb)
    t = len(la.strengths)
    assert la.solver == name
    assert la.estimates.shape == (M, t)
    assert la.columns.shape == (1, t)
    assert la.residuals.shape == la.hat.shape == la.leave_one_out.shape == (N, t)
    assert la.dof.shape == la.residual_norms.shape == la.roughness.shape == (t,)
    assert la.log_evidence.shape == (t,)
    np.testing.assert_allclose(
        la.residuals, pb.d[:, None] - pb.A @ la.estimates - pb.B @ la.columns, atol=1e-6
    )
    assert (la.dof > 2 - 1e-9).all()
    assert (la.dof < N).all()
    order = np.argsort(la.dof)
    assert (np.diff(la.residual_norms[order]) <= 1e-9 * la.residual_norms.max()).all()
    q = Questions(np.vstack([pb.grid.weights, np.zeros(M)]), np.array([[0.0], [1.0]]))
    np.testing.assert_allclose(la.answers(q)[0], pb.grid.weights @ la.estimates, rtol=1e-7)
    np.testing.assert_allclose(la.answers(q)[1], la.columns[0], rtol=1e-7)


def test_ladder_spans_smooth_to_one_degree_left():
    la = SOLVERS["tikhonov"](cable())
    assert len(la.strengths) == 200
    assert la.dof[-1] == pytest.approx(2, abs=0.1)
    assert N - la.dof[0] == pytest.approx(1, abs=0.3)


def test_cut_over_modes_is_least_squares_on_the_first_modes():
    pb = cable()
    basis = sines(pb)
    la = SOLVERS["eigenbasis"](pb, basis=basis)
    U = np.hstack([pb.A @ basis[:, :5], pb.A.sum(axis=1)[:, None], pb.B])
    c = np.linalg.lstsq(U, pb.d, rcond=None)[0]
    np.testing.assert_allclose(la.estimates[:, 5], basis[:, :5] @ c[:5] + c[5], rtol=1e-7)
    assert la.dof[5] == pytest.approx(7)


def test_unseen_mode_is_left_out():
    pb = cable()
    basis = sines(pb)
    doubled = np.column_stack([basis[:, :3], 2 * basis[:, 1], basis[:, 3:]])
    a = SOLVERS["eigenbasis"](pb, basis=basis)
    b = SOLVERS["eigenbasis"](pb, basis=doubled)
    np.testing.assert_allclose(a.estimates[:, 5], b.estimates[:, 5], rtol=1e-6)


def test_eigenbasis_needs_modes():
    with pytest.raises(SolveError, match="modes"):
        SOLVERS["eigenbasis"](cable())


def test_cells_held_at_zero_stay_zero():
    pb = cable()
    free = np.ones(M, dtype=bool)
    free[10:25] = False
    bare = replace(pb, A=pb.A * free, grid=replace(pb.grid, free=free))
    for name in SOLVERS:
        assert (ladder(name, bare).estimates[~free] == 0).all()
    assert factor("roughness-1", 0, bare.grid).shape == (45, 44)


@pytest.mark.parametrize("tiny", [1e-15, 1e15])
@pytest.mark.parametrize("name", list(SOLVERS))
def test_tiny_units(name, tiny):
    pb = cable()
    other = replace(pb, A=pb.A / tiny)
    t = {"tikhonov": 90}.get(name, 6)
    a, b = ladder(name, pb), ladder(name, other)
    np.testing.assert_allclose(b.estimates[:, t], a.estimates[:, t] * tiny, rtol=1e-7)


def test_phillips_problem():
    """Phillips (1962), J. ACM 9, 84: known source behind a smoothing kernel.

    The kernel 1 + cos(pi (x - s) / 3) is integrated over each cell in closed form; the data are
    Phillips' closed form, so discretisation and inversion are both in the error.
    """
    m, n = 120, 60
    s = np.linspace(-3, 3, m + 1)
    x = np.linspace(-6, 6, n)
    low = np.clip(s[None, :-1], x[:, None] - 3, x[:, None] + 3)
    high = np.clip(s[None, 1:], x[:, None] - 3, x[:, None] + 3)
    k = np.pi / 3
    A = (high - low) - (np.sin(k * (x[:, None] - high)) - np.sin(k * (x[:, None] - low))) / k
    y = (6 - np.abs(x)) * (1 + 0.5 * np.cos(k * x)) + 9 / (2 * np.pi) * np.sin(k * np.abs(x))
    sd = 1e-3
    mid = (s[1:] + s[:-1]) / 2
    d = (y + sd * np.random.default_rng(5).normal(size=n)) / sd
    pb = Problem(A / sd, np.zeros((n, 0)), d, Grid(s, np.diff(s), np.ones(m, dtype=bool)))
    la = SOLVERS["tikhonov"](pb, roughness=2)
    best = int(np.argmax(la.log_evidence))
    error = np.abs(la.estimates[:, best] - (1 + np.cos(k * mid))).max()
    assert error < 0.02
