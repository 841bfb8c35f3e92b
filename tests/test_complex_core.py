"""Complex amplitudes as two real parts: the core against dense complex arithmetic."""

import numpy as np
import pytest

from srcfit.bands import cautious, undetermined
from srcfit.evidence import at_one, conditional
from srcfit.priors import CAUTIOUS, covariance, pieces
from srcfit.problem import Grid, Problem, Questions
from srcfit.solvers import SOLVERS
from srcfit.solvers.frame import ask, frame
from srcfit.solvers.spectrum import bases, spectrum

ROWS, CELLS = 14, 30


def both(matrix):
    """A complex matrix as the real one that acts on real and imaginary parts."""
    return np.block([[matrix.real, -matrix.imag], [matrix.imag, matrix.real]])


def amplitudes(seed=1, scale=40.0):
    rng = np.random.default_rng(seed)
    edges = np.linspace(0, 2.0, CELLS + 1)
    x = np.linspace(0.1, 1.9, ROWS)
    s = (edges[1:] + edges[:-1]) / 2
    # the heat wave in a long bar
    k = np.sqrt(1j * 6.0)
    A = scale * np.exp(-k * np.abs(x[:, None] - s)) / k * np.diff(edges)
    B = np.exp(2j * rng.random(ROWS))[:, None]
    f = (1 + 0.5j) * np.sin(2 * s) + 0.3j
    d = A @ f + B @ [0.4 - 1j] + rng.normal(size=ROWS) + 1j * rng.normal(size=ROWS)
    return A, B, d, edges, x


def problem(A, B, d, edges, x, **kw):
    grid = Grid(
        edges, np.diff(edges), np.ones(CELLS, dtype=bool), ((0.4, 0.9),), parts=2, **kw
    )  # fmt: skip
    real = np.concatenate([d.real, d.imag])
    return Problem(both(A), both(B), real, grid, ("a", "a"), places=np.tile(x, 2))


def questions():
    rng = np.random.default_rng(3)
    cells, columns = rng.normal(size=(4, CELLS)), rng.normal(size=(4, 1))
    return cells, columns, Questions(np.kron(np.eye(2), cells), np.kron(np.eye(2), columns))


def complex_posterior(A, N, d, C, sigma, g, b):
    """Mean and variance of each part of g f + b beta: Gauss-Markov in complex arithmetic."""
    K = sigma**2 * A @ C @ A.conj().T + np.eye(len(d))
    Ki = np.linalg.inv(K)
    info = N.conj().T @ Ki @ N
    beta = np.linalg.solve(info, N.conj().T @ Ki @ d)
    f = sigma**2 * C @ A.conj().T @ Ki @ (d - N @ beta)
    r = b - sigma**2 * g @ C @ A.conj().T @ Ki @ N
    inner = sigma**2 * C - sigma**4 * C @ A.conj().T @ Ki @ A @ C
    variance = np.einsum("qi,ij,qj->q", g, inner, g.conj())
    variance = variance + np.einsum("qi,ij,qj->q", r, np.linalg.inv(info), r.conj())
    return g @ f + b @ beta, variance.real


@pytest.mark.parametrize("by", ["eigh", "svd"])
def test_mean_and_variance_are_those_of_complex_arithmetic(by):
    A, B, d, edges, x = amplitudes()
    pb = problem(A, B, d, edges, x)
    cells, columns, q = questions()
    fr, sigma = frame(pb), 0.7
    fam = CAUTIOUS[0]
    drawn = pieces(pb.grid, zones=True)
    products = bases(fr, [(fam.base, fam.length)], by)
    asked = ask(fr, q)
    one = at_one(spectrum(fr, fam, products, drawn, right=by == "svd"), sigma**-2.0, 1.0)
    mean, variance = (v[:, 0] for v in conditional(asked, one))
    half = Grid(edges, np.diff(edges), pb.grid.free, pb.grid.zones)
    inside = pieces(half, zones=True)
    C = covariance(fam.base, fam.length, half) * fam.scale + fam.steps * inside @ inside.T
    N = np.column_stack([A.sum(axis=1), B])
    b = np.column_stack([cells.sum(axis=1), columns])
    wanted, spread = complex_posterior(A, N, d, C, sigma, cells, b)
    # eigh squares the signal-to-noise ratio: fast-route errors are stated in `spectrum`
    np.testing.assert_allclose(mean[:4] + 1j * mean[4:], wanted, rtol=1e-8)
    np.testing.assert_allclose(variance[:4], spread, rtol=1e-7)
    np.testing.assert_allclose(variance[4:], spread, rtol=1e-7)


@pytest.mark.parametrize("roughness", [0, 1, 2, 0.5])
def test_ladder_is_that_of_complex_arithmetic(roughness):
    """Estimates, hat values and evidence of one strength against dense complex least squares."""
    A, B, d, edges, x = amplitudes()
    pb = problem(A, B, d, edges, x)
    half = Grid(edges, np.diff(edges), pb.grid.free, pb.grid.zones)
    tau = np.array([0.3, 2.0])
    ladder = SOLVERS["tikhonov"](pb, roughness=roughness, strengths=tau)
    C = covariance(ladder.family.base, ladder.family.length, half)
    N = np.column_stack([A.sum(axis=1), B])
    if roughness == 2:
        N = np.column_stack([N, A @ half.middles])
    evidence = []
    for t, strength in enumerate(tau):
        K = A @ C @ A.conj().T / strength + np.eye(len(d))
        Ki = np.linalg.inv(K)
        P = Ki - Ki @ N @ np.linalg.solve(N.conj().T @ Ki @ N, N.conj().T @ Ki)
        hat = np.eye(len(d)) - P
        residual = P @ d
        np.testing.assert_allclose(
            ladder.residuals[:ROWS, t] + 1j * ladder.residuals[ROWS:, t], residual, rtol=1e-7
        )
        np.testing.assert_allclose(ladder.hat[:, t], np.tile(np.diag(hat).real, 2), rtol=1e-7)
        # the volume of a complex reading counts twice; with sd of each part 1 it has variance 2
        info = np.linalg.slogdet(N.conj().T @ Ki @ N)[1]
        evidence.append(-np.linalg.slogdet(K)[1] - info - (d.conj() @ P @ d).real / 2)
    np.testing.assert_allclose(np.diff(ladder.log_evidence), np.diff(evidence), rtol=1e-6)


def test_turning_the_phase_turns_every_answer():
    A, B, d, edges, x = amplitudes()
    _, _, q = questions()
    a = cautious(problem(A, B, d, edges, x), q)
    b = cautious(problem(A, B, 1j * d, edges, x), q)
    value = a.value[:4] + 1j * a.value[4:]
    np.testing.assert_allclose(b.value[:4] + 1j * b.value[4:], 1j * value, rtol=1e-7)
    np.testing.assert_allclose(b.s_c, np.roll(a.s_c, 4), rtol=1e-7)
    np.testing.assert_allclose(a.data_share[:4], a.data_share[4:], rtol=1e-7)
    assert a.level == pytest.approx(b.level, rel=1e-7)
    assert a.fit.effective_dof == pytest.approx(b.fit.effective_dof, rel=1e-7)


def test_cuts_keep_both_parts_of_a_shape():
    A, B, d, edges, x = amplitudes()
    pb = problem(A, B, d, edges, x)
    s = pb.grid.middles
    basis = np.cos(np.pi * np.arange(8) * s[:, None] / 2)
    ladder = SOLVERS["eigenbasis"](pb, basis=basis)
    assert ladder.strengths.tolist() == list(range(len(ladder.strengths)))
    N = np.column_stack([A.sum(axis=1), B, A @ basis[:, 1:4]])
    beta = np.linalg.lstsq(N, d, rcond=None)[0]
    f = beta[0] + basis[:, 1:4] @ beta[2:]
    # the first mode is the constant itself
    kept = ladder.estimates[:, 3]
    np.testing.assert_allclose(kept[:CELLS] + 1j * kept[CELLS:], f, rtol=1e-7)
    cut = SOLVERS["svd-cut"](pb)
    turned = SOLVERS["svd-cut"](problem(A, B, 1j * d, edges, x))
    one, other = cut.estimates[:, 4], turned.estimates[:, 4]
    np.testing.assert_allclose(
        other[:CELLS] + 1j * other[CELLS:], 1j * (one[:CELLS] + 1j * one[CELLS:]), rtol=1e-6
    )


def test_what_no_reading_tells_apart_is_named_once():
    A, _, d, edges, x = amplitudes()
    same = A.sum(axis=1)[:, None] * np.exp(0.7j)
    assert undetermined(problem(A, same, d, edges, x)) == (("uniform source", "a"),)
