"""Lumped parts of unknown place: probabilities by quadrature, places and honesty where two fit."""

from __future__ import annotations

import re
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
import referee
from scipy.integrate import dblquad, quad
from test_forward import case_of

import srcfit
from srcfit import knowledge
from srcfit.places import solve
from srcfit.placing import log_both_below, place_of, probabilities, stand_ins
from srcfit.problem import Grid, Problem
from srcfit.results import Shown

L, EI = 8.0, 2e7
BEAM = {
    "kind": "beam", "length": "8 m", "bending_stiffness": "20 MN*m^2", "left": "pinned",
    "right": "pinned",
}  # fmt: skip


def alone(columns, d, beside=0):
    """Only columns: `beside` known ones, then candidates."""
    n = len(d)
    grid = Grid(np.array([0.0, 1.0]), np.ones(1), np.zeros(1, dtype=bool))
    names = tuple(f"c{i}" for i in range(columns.shape[1]))
    return Problem(np.zeros((n, 1)), columns, d, grid, names, constant=False, smooth=False)


def string(x, places):
    """Deflection of a string of unit length and tension under unit forces."""
    low, high = np.minimum(x[:, None], places), np.maximum(x[:, None], places)
    return low * (1 - high)


X = np.array([0.15, 0.3, 0.45, 0.8])
# no two of them beyond the outer readings, where loads look alike
PLACES = np.linspace(0.1, 0.82, 9)


@pytest.mark.parametrize("sign", [0, 1, -1])
def test_probabilities_of_one_place_by_quadrature(sign):
    """Every strength is as probable as any other, measured by what the readings see of it."""
    sd = 0.01
    G = string(X, PLACES) / sd
    d = string(X, np.array([0.37]))[:, 0] * 0.5 / sd + np.array([0.3, -1.1, 0.4, 0.8])
    found = probabilities(alone(G, d), np.arange(9)[:, None], None, sign)
    ends = {0: (-40, 40), 1: (0, 40), -1: (-40, 0)}[sign]
    whole = []
    for b in G.T:
        size = np.linalg.norm(b)
        best = d @ b / size  # the strength in units of what is seen of it
        rest = d @ d - best**2
        # from the nearest strength that is allowed, so that nothing underflows
        top = min(max(best, ends[0]), ends[1])
        part = quad(
            lambda s, m=best, t=top: np.exp(((t - m) ** 2 - (s - m) ** 2) / 2), *ends,
            points=[top + k for k in (-3, -1, 1, 3) if ends[0] < top + k < ends[1]],
            epsabs=1e-13, epsrel=1e-11, limit=400,
        )[0]  # fmt: skip
        rest += (top - best) ** 2
        whole.append((rest, part))
    rest, part = np.array(whole).T
    truth = np.exp(-(rest - rest.min()) / 2) * part
    truth /= truth.sum()
    np.testing.assert_allclose(found, truth, rtol=1e-6, atol=1e-12)


def test_probabilities_of_two_places_by_quadrature():
    sd = 0.02
    G = string(X, PLACES) / sd
    d = string(X, np.array([0.25, 0.7])) @ [0.6, 0.3] / sd + np.array([0.5, -0.2, -0.8, 0.3])
    pairs = np.array([(i, j) for i in range(9) for j in range(9)])
    twice = np.hstack([G, G])
    found = probabilities(alone(twice, d), pairs + np.array([0, 9]), None, 0)
    # at one place two loads cannot be told apart
    same = pairs[:, 0] == pairs[:, 1]
    assert (found[same] == 0).all()
    truth = np.zeros(len(pairs))
    for n, (i, j) in enumerate(pairs):
        if i != j:
            Q, _ = np.linalg.qr(G[:, [i, j]])
            y = Q.T @ d
            part = dblquad(
                lambda t, s, y=y: np.exp(-((s - y[0]) ** 2 + (t - y[1]) ** 2) / 2),
                y[0] - 9, y[0] + 9, y[1] - 9, y[1] + 9, epsabs=1e-9,
            )[0]  # fmt: skip
            truth[n] = np.exp(-(d @ d - y @ y) / 2) * part
    truth /= truth.sum()
    np.testing.assert_allclose(found, truth, rtol=1e-6, atol=1e-9)


def test_two_signed_loads_at_unknown_places_by_quadrature():
    """The chance that both strengths have the sign, correlated as they are."""
    sd = 0.05
    G = string(X, PLACES) / sd
    d = string(X, np.array([0.4, 0.6])) @ [0.3, 0.1] / sd + np.array([0.5, -0.2, -0.8, 0.3])
    pairs = np.array([(i, j) for i in range(9) for j in range(9) if i != j])
    twice = np.hstack([G, G])
    found = probabilities(alone(twice, d), pairs + np.array([0, 9]), None, 1)
    truth = np.zeros(len(pairs))
    rng = np.random.default_rng(0).normal(size=(2, 40_000))
    for n, (i, j) in enumerate(pairs):
        b = G[:, [i, j]]
        S = np.linalg.inv(b.T @ b)
        told = S @ b.T @ d
        both = (told[:, None] + np.linalg.cholesky(S) @ rng > 0).all(axis=0).mean()
        truth[n] = np.exp(-(d @ d - told @ b.T @ d) / 2) * both
    truth /= truth.sum()
    np.testing.assert_allclose(found, truth, atol=3e-3 * truth.max() + 2e-4)


def test_two_normal_numbers_below_two_limits():
    """Against the published integral and a library, also far out and nearly alike."""
    from scipy.stats import multivariate_normal

    rng = np.random.default_rng(1)
    h, k, rho = *rng.normal(size=(2, 200)) * 2, rng.uniform(-0.999, 0.999, 200)
    found = np.exp(log_both_below(h, k, rho))
    for i in range(0, 200, 10):
        S = [[1, rho[i]], [rho[i], 1]]
        truth = multivariate_normal.cdf([h[i], k[i]], cov=S, abseps=1e-10, releps=1e-10)
        assert found[i] == pytest.approx(truth, abs=1e-8)
    assert np.exp(log_both_below(*np.array([[0.0], [0.0], [0.5]])))[0] == pytest.approx(1 / 3)
    far = log_both_below(np.array([-20.0]), np.array([-10.0]), np.array([0.3]))
    assert np.isfinite(far).all()


def test_stretches_of_places():
    x = np.linspace(0, 10, 21)
    p = np.exp(-((x - 2) ** 2) / 0.5) + 0.5 * np.exp(-((x - 8) ** 2) / 0.5)
    place = place_of("a", x, p / p.sum(), 0.95, (0.0, 10.0))
    assert place.at == 2.0
    assert not place.at_end
    assert len(place.stretches) == 2
    first, second = place.stretches
    assert first.start < 2 < first.end < second.start < 8 < second.end
    assert (place.lower, place.upper) == (first.start, second.end)
    assert first.probability / second.probability == pytest.approx(
        2, rel=0.15
    )  # each less its tails
    assert 0.95 <= first.probability + second.probability <= 1


def test_stand_ins_keep_shares():
    weight = np.array([0.02, 0.5, 0.0, 0.4, 0.08])
    which, share = stand_ins(weight, 50)
    assert share.sum() == pytest.approx(1)
    np.testing.assert_allclose(share, weight[which], atol=0.02)
    assert 2 not in which


def crane_case(folder, at, *, known=True, sd=0.05, seed=0, between=("0.5 m", "7.5 m"), x=None):
    """A crane of about 50 kN at an unknown place of a beam, deflections in mm."""
    x = np.linspace(1, 7, 5) if x is None else np.asarray(x, float)
    edges = np.linspace(0, L, 81)
    w = 1e3 * referee.beam(edges, x, EI, lumped=[at])[1][:, 0] * 50e3
    w = w + sd * np.random.default_rng(seed).normal(size=len(x))
    columns = [{"column": "w", "kind": "deflection", "unit": "mm", "sd": f"{sd} mm"}]
    source = {
        "unit": "kN/m", "cells": 40, "smooth": False,
        "lumped": [{"name": "crane", "between": list(between)}],
        "zones": [{"name": "left half", "from": "0 m", "to": "4 m"}],
    }  # fmt: skip
    if known:
        source["total"] = {"value": "50 kN", "sd": "1 kN"}
    return case_of(folder, BEAM, columns, list(zip(x, w, strict=True)), source)


def test_a_crane_is_found(tmp_path):
    case = crane_case(tmp_path, 2.9, known=False, sd=0.02)
    found = srcfit.recover(case)
    lumped = found.summary()["lumped"][0]
    assert lumped["at"] == pytest.approx(2.9, abs=0.15)
    assert lumped["lower"] < 50 < lumped["upper"]
    assert not any(f["code"].startswith("place") for f in found.summary()["findings"])


def test_two_places_that_fit_are_both_told(tmp_path):
    """Read at midspan only, of known size: a load at a and one at L - a look the same."""
    case = crane_case(tmp_path, 2.0, x=[4.0, 4.0, 4.0, 4.0])
    found = srcfit.recover(case)
    summary = found.summary()
    bimodal = [f for f in summary["findings"] if f["code"] == "place-bimodal"]
    assert len(bimodal) == 1
    assert bimodal[0]["level"] == "caution"
    sentence = bimodal[0]["sentence"]
    assert "more than one place" in sentence
    # as probable as each other
    shares = [int(number) for number in re.findall(r"\((\d+)\s?%\)", sentence)]
    assert len(shares) == 2
    assert abs(shares[0] - shares[1]) <= 6
    assert sum(shares) >= 90
    # what depends on the place is as wide as both places ask for
    left = summary["zones"][0]
    assert left["lower"] <= 0.5
    assert left["upper"] >= 49.5
    total = summary["total"]
    assert total["value"] == pytest.approx(50, abs=1.5)
    assert total["upper"] - total["lower"] < 6


def test_nothing_is_said_of_the_place_of_what_is_not_detected(tmp_path):
    """Two places and an amount of half its sd: the part may stand anywhere; no news."""
    case = crane_case(tmp_path, 2.0, x=[4.0, 4.0, 4.0, 4.0])
    solved = solve(case, srcfit.read(case), rng=np.random.SeedSequence(0))
    shown = Shown(solved, np.zeros(len(solved.answers.value)))
    assert [f.code for f in knowledge.places(solved, shown)] == ["place-bimodal"]
    part = replace(shown.numbers("lumped")[0], sd=2 * shown.numbers("lumped")[0].value)
    faint = SimpleNamespace(numbers=lambda block: [part])
    assert not knowledge.places(solved, faint)


def test_a_place_at_the_end_of_its_stretch_is_told(tmp_path):
    case = crane_case(tmp_path, 2.0, between=("4 m", "7 m"), sd=0.02)
    codes = [f["code"] for f in srcfit.recover(case).summary()["findings"]]
    assert "place-at-end" in codes


def test_place_intervals_hold():
    """A load on a smooth one, thirty times; the interval of the place promises 95 %."""
    rng = np.random.default_rng(4)
    edges, x = np.linspace(0, 1, 41), np.linspace(0.05, 0.95, 12)
    candidates = np.linspace(0.1, 0.9, 61)
    A, G = referee.beam(edges, x, 1.0, lumped=list(candidates))
    grid = Grid(edges, np.diff(edges), np.ones(40, dtype=bool))
    held, widths = 0, []
    for _ in range(30):
        at, size = rng.uniform(0.2, 0.8), rng.uniform(0.2, 0.6)
        w = A @ (1 + 0.3 * np.sin(5 * grid.middles))
        w = w + size * referee.beam(edges, x, 1.0, lumped=[at])[1][:, 0]
        sd = 0.0003 * np.abs(w).max()
        d = (w + sd * rng.normal(size=12)) / sd
        problem = Problem(A / sd, G / sd, d, grid, tuple(map(str, range(61))), places=x)
        p = probabilities(problem, np.arange(61)[:, None], 1.0, 1)
        place = place_of("a", candidates, p, 0.95, (0.1, 0.9))
        held += any(s.start <= at <= s.end for s in place.stretches)
        widths.append(place.upper - place.lower)
    assert held >= 26  # of 30: 28.5 are promised, 26 or more happen with 98 %
    assert np.median(widths) < 0.25


def test_unknown_noise_on_a_dense_fibre(tmp_path):
    """Rungs so loud that the smooth part explains all readings leave nothing of a column."""
    rng = np.random.default_rng(0)
    x = np.arange(0.5, 60, 1.0)
    T = 21 + 13.5 * ((x > 28) & (x < 31)) + rng.normal(0, 0.3, len(x))
    member = {
        "kind": "conductor", "length": "60 m", "conductance": "0.243 W*m/K",
        "loss": "1.11 W/(m*K)", "ambient": "12 degC", "left": "insulated", "right": "insulated",
    }  # fmt: skip
    columns = [{"column": "w", "kind": "temperature", "unit": "degC", "sd": "estimate"}]
    source = {
        "unit": "W/m", "cells": 120, "lumped": [{"name": "joint", "between": ["25 m", "35 m"]}],
    }  # fmt: skip
    case = case_of(tmp_path, member, columns, list(zip(x, T, strict=True)), source)
    lumped = srcfit.recover(case).summary()["lumped"][0]
    assert 25 <= lumped["at"] <= 35
    assert np.isfinite([lumped["value"], lumped["lower"], lumped["upper"]]).all()
