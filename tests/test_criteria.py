"""Criteria against refits, known optima and their own definitions."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from test_solvers import N, cable, ladder

from srcfit.criteria import (
    CRITERIA,
    Choice,
    agree,
    choose,
    curvature,
    folds,
    gcv,
    k_fold,
    leave_one_out,
    robust_gcv,
)
from srcfit.solvers import SOLVERS


@pytest.mark.parametrize("solver", list(SOLVERS))
@pytest.mark.parametrize("name", list(CRITERIA))
def test_every_criterion_on_every_ladder(name, solver):
    la = ladder(solver, cable())
    scores = CRITERIA[name](la)
    assert scores.shape == la.strengths.shape
    choice = choose(la, name)
    assert choice.criterion == name
    if choice.index < 0:
        assert choice.note
        assert not choice.valid
        assert np.isnan(choice.strength)
    else:
        assert choice.strength == la.strengths[choice.index]
        assert choice.score == scores[choice.index]


def test_gcv_and_robust_gcv_by_their_formulas():
    la = ladder("tikhonov", cable())
    t = 80
    A = la.frame.problem.A
    hat_rows = np.array(
        [
            _fit(replace(la.frame.problem, d=e), la.strengths[[t]])
            for e in np.eye(N)
        ]
    ).T  # fmt: skip
    r = (np.eye(N) - hat_rows) @ la.frame.problem.d
    n = len(A)
    expected = n * (r @ r) / (n - np.trace(hat_rows)) ** 2
    assert gcv(la)[t] == pytest.approx(expected, rel=1e-8)
    mean_square = np.trace(hat_rows @ hat_rows) / n
    assert robust_gcv(la)[t] == pytest.approx(expected * (0.3 + 0.7 * mean_square), rel=1e-8)


def _fit(pb, tau):
    la = SOLVERS["tikhonov"](pb, strengths=tau)
    return pb.d - la.residuals[:, 0]


def test_k_fold_equals_refits():
    pb = cable()
    la = SOLVERS["tikhonov"](pb, strengths=SOLVERS["tikhonov"](pb).strengths[[60, 120]])
    total = np.zeros(2)
    for rows in folds(la):
        keep = np.setdiff1d(np.arange(N), rows)
        less = replace(pb, A=pb.A[keep], B=pb.B[keep], d=pb.d[keep], places=None)
        other = SOLVERS["tikhonov"](less, strengths=la.strengths)
        fit = pb.A[rows] @ other.estimates + pb.B[rows] @ other.columns
        total += ((pb.d[rows][:, None] - fit) ** 2).sum(axis=0)
    np.testing.assert_allclose(k_fold(la), total / N, rtol=1e-6)


def test_folds_are_neighbours_by_place():
    pb = cable()
    order = np.random.default_rng(0).permutation(N)
    la = SOLVERS["tikhonov"](
        replace(pb, A=pb.A[order], B=pb.B[order], d=pb.d[order], places=pb.places[order])
    )
    found = folds(la)
    assert len(found) == 10
    assert sorted(np.concatenate(found)) == list(range(N))
    for rows in found:
        assert np.ptp(pb.places[order][rows]) < 0.5
    np.testing.assert_allclose(k_fold(la), k_fold(SOLVERS["tikhonov"](pb)), rtol=1e-4)


def test_fine_ladders_interpolate_k_fold_closely():
    pb = cable()
    full = SOLVERS["tikhonov"](pb)
    exact = np.concatenate(
        [k_fold(SOLVERS["tikhonov"](pb, strengths=part)) for part in np.split(full.strengths, 4)]
    )
    np.testing.assert_allclose(k_fold(full), exact, rtol=0.02)


def test_discrepancy_meets_the_noise():
    la = ladder("tikhonov", cable())
    at = choose(la, "discrepancy").index
    assert la.residual_norms[at] ** 2 == pytest.approx(N, rel=0.1)


def test_discrepancy_does_not_choose_no_smoothing():
    """With n - dof in place of n the rule would be met at no smoothing; the guard keeps n."""
    for seed in range(10):
        la = ladder("tikhonov", cable(seed))
        assert choose(la, "discrepancy").index != 0


def test_noise_criteria_are_silent_without_noise():
    la = ladder("tikhonov", replace(cable(), stated=False))
    for name in ("discrepancy", "risk"):
        choice = choose(la, name)
        assert choice.index == -1
        assert "not stated" in choice.note
    for name in ("gcv", "leave-one-out", "k-fold", "evidence"):
        assert choose(la, name).index >= 0


def test_discrepancy_is_silent_when_the_noise_is_out_of_reach():
    pb = cable()
    for factor in (1e-4, 1e4):
        other = replace(pb, A=pb.A * factor, B=pb.B * factor, d=pb.d * factor)
        assert choose(ladder("tikhonov", other), "discrepancy").index == -1


def test_risk_estimates_the_risk_without_bias():
    """Mean over draws of the unbiased risk against the mean squared error of the fit."""
    estimated, true = [], []
    for seed in range(100):
        pb = cable(seed, nuisance=False)
        clean = cable(seed, noise=1e-12, nuisance=False)
        u = clean.d * np.abs(clean.A).max() ** -1 * np.abs(pb.A).max()
        la = SOLVERS["tikhonov"](pb, strengths=np.array([1e-3, 1.0]) * 1e2)
        estimated.append(CRITERIA["risk"](la))
        fit = pb.d[:, None] - la.residuals
        true.append(((fit - u[:, None]) ** 2).sum(axis=0))
    spread = np.std(np.array(estimated) - true, axis=0) / np.sqrt(100)
    difference = np.mean(np.array(estimated) - true, axis=0)
    assert (np.abs(difference) < 4 * spread).all()


def test_evidence_picks_a_strength_near_the_best():
    ratios = []
    for seed in range(20):
        pb = cable(seed)
        la = ladder("tikhonov", pb)
        truth = 1 + np.exp(-((pb.grid.middles - 2) ** 2))
        errors = np.linalg.norm(la.estimates - truth[:, None], axis=0)
        ratios.append(errors[choose(la, "evidence").index] / errors.min())
    # twice the best possible error is what one strength by evidence usually costs
    assert np.median(ratios) < 2


def test_l_curve_finds_a_corner_only_where_there_is_one():
    sharp = ladder("tikhonov", cable(3, noise=0.03))
    bend = curvature(sharp)
    assert np.nanmax(bend) > 0
    # without any source the curve has no branch of growing residuals
    pb = cable(3)
    noise_only = replace(pb, d=np.random.default_rng(0).normal(size=N))
    choice = choose(ladder("tikhonov", noise_only), "l-curve")
    assert choice.index == -1
    assert choice.note == "the L-curve has no corner"


def test_curvature_of_a_circle():
    """The formula on a known curve: a circle of radius 2 in log-log has curvature 1/2."""
    la = ladder("tikhonov", cable())
    angle = np.linspace(np.pi, 1.5 * np.pi, len(la.strengths))
    rho, eta = np.exp(2 * np.cos(angle)), np.exp(2 * np.sin(angle))
    drawn = replace(la, roughness=eta)
    drawn.__dict__["residual_norms"] = rho
    np.testing.assert_allclose(curvature(drawn)[1:-1], 0.5, rtol=1e-3)


def test_edge_choice_is_not_valid():
    la = ladder("tikhonov", cable())
    rising = replace(la, log_evidence=-np.arange(200.0))
    choice = choose(rising, "evidence")
    assert (choice.index, choice.valid) == (0, False)
    assert "edge" in choice.note
    bowl = np.arange(200.0)
    bowl[150] = 100
    inner = choose(replace(la, log_evidence=-bowl), "evidence")
    assert (inner.index, inner.valid) == (150, True)
    assert "inner minimum" in inner.note


def test_reading_that_stands_alone_is_skipped():
    """A nuisance told by one reading only: that reading cannot be predicted from the others."""
    pb = cable()
    B = np.column_stack([pb.B, np.eye(N)[4]])
    la = SOLVERS["tikhonov"](replace(pb, B=B, names=("a", "b")))
    assert np.isnan(la.leave_one_out[4]).all()
    rows = np.delete(np.arange(N), 4)
    less = SOLVERS["tikhonov"](
        replace(pb, A=pb.A[rows], B=pb.B[rows], d=pb.d[rows]), strengths=la.strengths
    )
    np.testing.assert_allclose(leave_one_out(la), leave_one_out(less), rtol=1e-6)
    assert np.isfinite(k_fold(la)).all()


def test_agree():
    def one(strength, index=1):
        return Choice("x", index, strength, 0.0, True, "")

    assert agree([one(2.0), one(20.0), one(float("nan"), -1)]) == pytest.approx(10)
    assert agree([one(2.0)]) == 1
