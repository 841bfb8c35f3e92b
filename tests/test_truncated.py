"""Draws and strict bounds under inequalities: quadrature, rejection, a convex solver."""

from __future__ import annotations

from dataclasses import replace

import cvxpy
import numpy as np
import pytest
from scipy.integrate import dblquad, quad
from scipy.optimize import brentq
from scipy.stats import multivariate_normal, norm, truncnorm
from simulation_constraints import knowledge

from srcfit.bands import cautious
from srcfit.constraints import constrained
from srcfit.errors import SolveError
from srcfit.laws import Law, without_source
from srcfit.limits import limits
from srcfit.problem import Grid, Problem, Questions
from srcfit.solvers.frame import ask, frame
from srcfit.strict import bounds, inside, most_probable, reduced
from srcfit.truncated import Gaussians, draw, effective, shortest

CHAINS, ROUNDS = 400, 20


def law(mean, S):
    """A Gaussian of its own coordinates."""
    return Law(1.0, mean, np.diag(S).copy(), lambda i, j: S[np.ix_(i, j)])


def some(seed, d):
    """Mean and covariance of d unknowns that depend on each other, partly beyond zero."""
    rng = np.random.default_rng(seed)
    L = rng.normal(size=(d, d)) + np.eye(d)
    S = L @ L.T / d
    return 0.5 * rng.normal(size=d) * np.sqrt(np.diag(S)), S


def sample(mean, S, rows, least, seed=0, rounds=ROUNDS, chains=CHAINS):
    """Draws (s, d) and the effective sample size of each unknown."""
    d = len(mean)
    r = reduced(law(mean, S), np.arange(d), np.arange(d), rows, least)
    of = Gaussians(mean[None], r.factor[None], rows, least)
    which = np.zeros(chains, dtype=np.intp)
    found = draw(
        of, which, np.ones(chains), inside(r)[None], np.random.default_rng(seed),
        rounds=rounds, burn=3,
    )  # fmt: skip
    assert found.refused == 0
    assert (found.x @ rows.T >= least - 1e-9).all()
    return found.x.reshape(-1, d), effective(found.x, which)


def off(x, told, mean):
    """How many standard errors the mean of draws is off."""
    return np.abs(x.mean(axis=0) - mean) / (x.std(axis=0) / np.sqrt(told))


def test_two_unknowns_by_quadrature():
    mean, S = some(1, 2)
    density = multivariate_normal(mean, S).pdf

    def moment(p, q):
        return dblquad(lambda y, x: x**p * y**q * density([x, y]), 0, 12, 0, 12,
                       epsabs=1e-11, epsrel=1e-10)[0]  # fmt: skip

    whole = moment(0, 0)
    truth = {(p, q): moment(p, q) / whole for p, q in ((1, 0), (0, 1), (2, 0), (1, 1), (0, 2))}
    # the part beyond the walls is also a known function: quadrature is good to 1e-9
    assert whole == pytest.approx(multivariate_normal(-mean, S).cdf([0, 0]), rel=1e-6)
    x, told = sample(mean, S, np.eye(2), np.zeros(2))
    assert told.min() > 2000
    for (p, q), value in truth.items():
        part = x[:, 0] ** p * x[:, 1] ** q
        assert off(part[:, None], told.min(), value)[0] < 4


def test_three_unknowns_by_quadrature():
    mean, S = some(2, 3)
    density = multivariate_normal(mean, S).pdf

    # Gauss rules in three directions: the density is smooth inside the walls
    node, weight = np.polynomial.legendre.leggauss(80)
    node, weight = 5 * (node + 1), 5 * weight
    grid = np.stack(np.meshgrid(node, node, node, indexing="ij"), axis=-1)
    mass = density(grid) * np.einsum("i,j,k->ijk", weight, weight, weight)
    truth = np.einsum("ijkd,ijk->d", grid, mass) / mass.sum()
    orthant = multivariate_normal.cdf(np.zeros(3), -mean, S, abseps=1e-9, releps=1e-9)
    assert mass.sum() == pytest.approx(orthant, rel=1e-6)
    x, told = sample(mean, S, np.eye(3), np.zeros(3))
    assert off(x, told, truth).max() < 4


@pytest.mark.parametrize(("d", "seed"), [(2, 3), (3, 4), (4, 5), (5, 6)])
def test_draws_against_rejection(d, seed):
    """Walls aslant and more of them than unknowns; plain draws that keep them are the judge."""
    mean, S = some(seed, d)
    rng = np.random.default_rng(seed + 100)
    rows = np.vstack([np.eye(d), rng.normal(size=(2, d))])
    least = rows @ mean - 0.7 * np.sqrt(np.einsum("pd,de,pe->p", rows, S, rows))
    plain = rng.multivariate_normal(mean, S, size=2_000_000 if d > 3 else 400_000)
    plain = plain[(plain @ rows.T >= least).all(axis=1)]
    assert len(plain) > 10_000
    x, told = sample(mean, S, rows, least, seed)
    both = np.sqrt(1 / told + 1 / len(plain))
    assert (np.abs(x.mean(axis=0) - plain.mean(axis=0)) < 4 * both * plain.std(axis=0)).all()
    spread = x.std(axis=0) / plain.std(axis=0)
    assert (np.abs(spread - 1) < 4 * both).all()
    for p in (0.025, 0.5, 0.975):  # and in shares below the quantiles
        share = (x < np.quantile(plain, p, axis=0)).mean(axis=0)
        assert (np.abs(share - p) < 4 * both * np.sqrt(p * (1 - p)) + 1e-3).all()


def test_deep_in_the_tail():
    """Five standard deviations beyond the wall, where rejection finds nothing."""
    mean, S = np.array([-5.0, 0.3]), np.array([[1.0, 0.0], [0.0, 1.0]])
    x, told = sample(mean, S, np.eye(2)[:1], np.zeros(1))
    truth = truncnorm(5, np.inf, loc=-5)
    assert off(x[:, :1], told[:1], truth.mean())[0] < 4
    assert x[:, 0].std() == pytest.approx(truth.std(), rel=0.05)
    assert x[:, 1].mean() == pytest.approx(0.3, abs=0.05)


def test_effective_size_of_what_is_known():
    """Independent draws are worth their number; a chain that never moves is worth one draw."""
    rng = np.random.default_rng(0)
    which = np.zeros(200, dtype=np.intp)
    alone = rng.normal(size=(30, 200, 1))
    assert effective(alone, which)[0] == pytest.approx(6000, rel=0.3)
    still = np.repeat(alone[:1], 30, axis=0)
    assert effective(still, which)[0] == pytest.approx(200, rel=0.02)
    # an autoregressive chain: (1 - a) / (1 + a) of its draws
    a, x = 0.8, np.zeros((400, 200, 1))
    for t in range(1, 400):
        x[t] = a * x[t - 1] + np.sqrt(1 - a**2) * rng.normal(size=(200, 1))
    assert effective(x[50:], which)[0] == pytest.approx(350 * 200 / 9, rel=0.3)


def test_shortest_intervals():
    x = np.random.default_rng(1).exponential(size=(40_000, 1))
    low, high = shortest(x, 0.95, np.zeros(1))
    # the density falls: the shortest interval begins at the wall
    assert low[0] == 0
    assert high[0] == pytest.approx(-np.log(0.05), rel=0.02)
    y = np.random.default_rng(2).normal(size=(40_000, 1))
    low, high = shortest(y, 0.9, np.full(1, -np.inf))
    assert (low[0], high[0]) == pytest.approx((-1.645, 1.645), abs=0.1)
    assert ((y >= low) & (y <= high)).mean() >= 0.9


@pytest.mark.parametrize("d", [2, 3, 5])
def test_strict_bounds_against_a_convex_solver(d):
    mean, S = some(d + 10, d)
    rows, least = np.vstack([np.eye(d), np.ones(d)]), np.append(np.zeros(d), 0.3)
    questions = np.random.default_rng(d).normal(size=(3, d))
    # three questions beside the unknowns, with a remainder that no wall touches
    T = np.vstack([np.eye(d), questions])
    extra = np.diag(np.append(np.zeros(d), [0.0, 0.2, 0.5]))
    whole = law(T @ mean, T @ S @ T.T + extra)
    asked = np.arange(d, d + 3)
    r = reduced(whole, asked, np.arange(d), rows, least)
    np.testing.assert_allclose(r.slope, questions, atol=1e-7)
    np.testing.assert_allclose(r.rest, [0, 0.2, 0.5], atol=1e-7)
    np.testing.assert_allclose(r.factor @ r.factor.T, S, atol=1e-10)
    quantile = 1.96
    centre, up, down = bounds(r, np.arange(3), quantile)
    half = np.linalg.inv(np.linalg.cholesky(S))
    b, e = cvxpy.Variable(d), cvxpy.Variable()
    distance = cvxpy.sum_squares(half @ (b - mean))
    walls = [rows @ b >= least]
    task = cvxpy.Problem(cvxpy.Minimize(distance), walls)
    smallest = task.solve("CLARABEL", tol_gap_rel=1e-11, tol_gap_abs=1e-11)
    np.testing.assert_allclose(centre, questions @ b.value, atol=1e-5)
    assert most_probable(r)[2] == pytest.approx(smallest, rel=1e-6)
    for i in range(3):
        within = [*walls, distance + cvxpy.square(e) <= smallest + quantile**2]
        value = questions[i] @ b + np.sqrt([0, 0.2, 0.5][i]) * e
        most = cvxpy.Problem(cvxpy.Maximize(value), within).solve("CLARABEL")
        least_value = cvxpy.Problem(cvxpy.Minimize(value), within).solve("CLARABEL")
        # the squared distance is met to 2e-3 of its limit
        assert up[i] == pytest.approx(most - centre[i], rel=5e-3, abs=2e-3)
        assert down[i] == pytest.approx(centre[i] - least_value, rel=5e-3, abs=2e-3)


def test_without_walls_strict_bounds_are_the_closed_form():
    mean, S = some(7, 3)
    r = reduced(law(mean, S), np.arange(3), np.arange(3), np.eye(3), mean - 50)
    centre, up, down = bounds(r, np.arange(3), 1.96)
    np.testing.assert_allclose(centre, mean)
    np.testing.assert_allclose(up, 1.96 * np.sqrt(np.diag(S)), rtol=2e-3)
    np.testing.assert_allclose(down, up, rtol=2e-3)


def test_no_room_between_the_walls():
    mean, S = some(8, 2)
    rows, least = np.array([[1.0, 0.0], [-1.0, 0.0]]), np.array([1.0, 0.0])
    with pytest.raises(SolveError, match="no source keeps all the constraints at once"):
        inside(reduced(law(mean, S), np.arange(2), np.arange(2), rows, least))


def lumps(noise=1.0, d=(1.0, 2.5, 0.4, 1.2), stated=True):
    """Two loads and a datum offset, no smooth part: three unknowns, everything Gaussian."""
    B = np.array([[1.0, 0.4, 1.0], [0.6, 0.9, 1.0], [0.2, 0.7, 1.0], [0.1, 0.3, 1.0]]) / noise
    grid = Grid(np.array([0.0, 1.0]), np.ones(1), np.zeros(1, dtype=bool))
    return Problem(
        np.zeros((4, 1)), B, np.array(d) / noise, grid, ("a", "b", "offset:c"),
        constant=False, smooth=False, stated=stated,
    )  # fmt: skip


def signed(problem, questions):
    """The inequalities where two of three columns are lumped parts."""
    from types import SimpleNamespace

    from srcfit.case.model import SourceSpec
    from srcfit.elimination import Elimination

    kinds = ("lumped", "lumped", "nuisance")
    forward = SimpleNamespace(
        case=SimpleNamespace(
            source=SourceSpec("N/m", "N", "m", sign="nonnegative", smooth=False)
        ),
        grid=problem.grid, balance=None,
        columns=[SimpleNamespace(kind=k, name=n) for k, n in zip(kinds, "abc", strict=True)],
    )  # fmt: skip
    asked = SimpleNamespace(questions=questions, constant=np.zeros(len(questions.cells)))
    nothing = Elimination(None, np.zeros((1, 4)), np.eye(3, 4), ())
    return limits(forward, asked, nothing)


def judge(f, ends, told):
    """`ends` hold 95 % of the density f, and no other interval that does is much shorter."""
    top = quad(lambda x: x * f(x), 0, 30, epsabs=1e-10)[0]
    sd = np.sqrt(quad(lambda x: (x - top) ** 2 * f(x), 0, 30, epsabs=1e-10)[0])
    low, high = ends
    assert quad(f, low, high)[0] == pytest.approx(0.95, abs=0.015)
    best = min(
        brentq(lambda b, a=a: quad(f, a, b)[0] - 0.95, a, 40) - a
        for a in np.linspace(0, max(0.0, low + sd / 2), 12)
        if quad(f, a, 40)[0] > 0.9501
    )
    assert high - low == pytest.approx(best, abs=8 * sd / np.sqrt(told) + 0.02 * sd)


def test_two_loads_and_a_datum_by_quadrature():
    """Three unknowns from end to end: the draws' intervals are those of the exact posterior."""
    problem = lumps(noise=0.7)
    rows = np.array([[1.0, 0, 0], [0, 1.0, 0], [0, 0, 1.0], [1.0, 1.0, 0]])
    questions = Questions(np.zeros((4, 1)), rows)
    free = cautious(problem, questions)
    answers, held = constrained(
        problem, questions, signed(problem, questions), replace(free, reason=""),
        np.random.SeedSequence(3),
    )  # fmt: skip
    # least squares and its covariance
    S = np.linalg.inv(problem.B.T @ problem.B)
    mean = S @ problem.B.T @ problem.d
    fr = frame(problem)
    closed = without_source(fr, ask(fr, questions), 1.0)
    np.testing.assert_allclose(closed.mean[:3], mean, rtol=1e-10)
    np.testing.assert_allclose(closed.between(np.arange(3), np.arange(3)), S, rtol=1e-9)
    # marginal of a load under the walls: its own density times what is left for the other load
    ab, two = mean[:2], S[:2, :2]

    def density(i):
        j = 1 - i
        slope, rest = two[i, j] / two[i, i], two[j, j] - two[i, j] ** 2 / two[i, i]
        own = norm(ab[i], np.sqrt(two[i, i]))

        def f(x):
            return own.pdf(x) * norm.cdf((ab[j] + slope * (x - ab[i])) / np.sqrt(rest))

        whole = quad(f, 0, 30, epsabs=1e-12)[0]
        return lambda x: f(x) / whole

    for i in range(2):
        judge(density(i), held.drawn[:, i], float(held.effective[i]))
        assert answers.lower[i] <= held.drawn[0, i]
        assert answers.upper[i] >= held.drawn[1, i]
    assert held.effective.min() > 500
    # the loads' sum has no wall of its own, only what they have
    assert answers.lower[3] >= 0


def test_unstated_noise_widens_the_draws():
    questions = Questions(np.zeros((3, 1)), np.eye(3))
    found = []
    for stated in (True, False):
        problem = replace(lumps(noise=0.4), stated=stated)
        free = replace(cautious(problem, questions), reason="")
        held = constrained(
            problem, questions, signed(problem, questions), free, np.random.SeedSequence(1)
        )[1]  # fmt: skip
        noise = free.fit.noise
        found.append((held.drawn[1] - held.drawn[0]) / noise)
    # one degree of freedom: Student's t has far longer tails than the normal distribution
    assert found[1][2] > 1.5 * found[0][2]


def test_knowledge_is_what_the_case_declares():
    edges = np.linspace(0, 1, 11)
    grid = Grid(edges, np.diff(edges), np.arange(10) > 1)
    problem = Problem(np.zeros((2, 10)), np.zeros((2, 0)), np.zeros(2), grid)
    questions = Questions(np.vstack([np.eye(10), 0.1 * np.ones(10)]), np.zeros((11, 0)))
    found = knowledge(problem, questions, sign="nonnegative", ceiling=3.0)
    np.testing.assert_array_equal(found.low, 0)
    np.testing.assert_allclose(found.high, [0, 0, *[3.0] * 8, 2.4])  # cells held at zero are 0
    assert found.words == "not negative and below its ceiling"
    # piecewise means: no wall is lost, none is invented
    f = np.random.default_rng(0).normal(size=10) * grid.free
    fine = found.rows.cells @ f >= found.least
    coarse = found.walls @ (found.coordinates.cells @ f) >= found.wall_least
    assert coarse.all() or not fine.all()
