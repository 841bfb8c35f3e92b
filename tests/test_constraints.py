"""Estimates under sign, ceiling and monotone stretches against a general-purpose solver."""

from __future__ import annotations

import tomllib
from dataclasses import replace

import cvxpy
import numpy as np
import pytest
import referee
from scipy.optimize import nnls
from simulation_constraints import knowledge, simulate, tally
from test_examples import EXAMPLES, TRUTHS, numbers

import srcfit
from srcfit import constraints
from srcfit.bands import cautious
from srcfit.case.model import Monotone
from srcfit.constraints import constrained
from srcfit.errors import SolveError
from srcfit.priors import factor
from srcfit.problem import Grid, Problem, Questions
from srcfit.solvers import SOLVERS, nonnegative
from srcfit.solvers.nonnegative import many, missed, multipliers

CELLS, SEED = 40, np.random.SeedSequence(5)
FALLING = Monotone(0.3, 1.0, rising=False)
# what is known, and a source that makes it bite
KNOWN = {
    "nonnegative": {"sign": "nonnegative"},
    "nonpositive": {"sign": "nonpositive"},
    "ceiling": {"sign": "nonnegative", "ceiling": 0.8},
    "monotone": {"monotone": (FALLING,)},
    "all": {"sign": "nonnegative", "ceiling": 0.8, "monotone": (FALLING,)},
}


def block(x):
    return ((x > 0.4) & (x < 0.6)).astype(float)


def beam(seed=0, *, n=15, noise=0.003, lumped=False, shape=block, turn=1.0):
    """A pinned beam under a block, with a load of unknown size and a datum offset if asked for."""
    edges, x = np.linspace(0, 1, CELLS + 1), np.linspace(0.04, 0.97, n)
    middles = (edges[1:] + edges[:-1]) / 2
    A, point = referee.beam(edges, x, 1.0, lumped=[0.75] if lumped else [])
    B = np.hstack([point, np.full((n, 1), np.abs(A).sum(axis=1).max())]) if lumped else A[:, :0]
    u = turn * (A @ shape(middles) + B @ [0.0, 0.02][: B.shape[1]])
    sd = noise * np.abs(u).max()
    d = (u + sd * np.random.default_rng(seed).normal(size=n)) / sd
    grid = Grid(edges, np.diff(edges), np.ones(CELLS, dtype=bool), ((0.4, 0.6),))
    names = ("crane",) if lumped else ()
    return Problem(A / sd, B / sd, d, grid, (*names, "offset:a")[: B.shape[1]], places=x)


def every(problem):
    """Every cell, every column and the total."""
    (_, m), (_, k) = problem.A.shape, problem.B.shape
    cells = np.vstack([np.eye(m), np.zeros((k, m)), problem.grid.weights])
    return Questions(cells, np.vstack([np.zeros((m, k)), np.eye(k), np.zeros((1, k))]))


def rung(problem, at=0.5):
    """A rung of the ladder of first differences."""
    ladder = SOLVERS["tikhonov"](problem)
    return ladder, int(at * len(ladder.strengths))


def walls(known, problem):
    """Inequalities R (f, beta) >= least written once more, from what was declared."""
    m, k = problem.A.shape[1], problem.B.shape[1]
    each, rows, least = np.eye(m, m + k), [], []
    turn = {"nonnegative": 1, "nonpositive": -1}.get(known.get("sign"), 0)
    if turn:
        rows.append(turn * each)
        least.append(np.zeros(m))
        if "crane" in problem.names:
            rows.append(turn * np.eye(m + k)[m : m + 1])
            least.append(np.zeros(1))
    if "ceiling" in known:
        rows.append(-each)
        least.append(np.full(m, -known["ceiling"]))
    if "monotone" in known:
        inside = np.flatnonzero(problem.grid.middles > FALLING.start)
        rows.append(each[inside[:-1]] - each[inside[1:]])
        least.append(np.zeros(len(inside) - 1))
    return np.vstack(rows), np.concatenate(least)


def penalised(problem, strength):
    """The objective |X y - e|**2 over y = (f, beta), f = constant + L z, and its map from z."""
    L = factor("roughness-1", 0.0, problem.grid)
    m, k, c = len(L), problem.B.shape[1], L.shape[1]
    to = np.zeros((m + k, c + 1 + k))
    to[:m, :c], to[:m, c] = L, 1.0
    to[m:, c + 1 :] = np.eye(k)
    X = np.vstack([np.hstack([problem.A, problem.B]) @ to, np.eye(c, c + 1 + k) * strength**0.5])
    return X, np.append(problem.d, np.zeros(c)), to


def judged(problem, known, at=0.5):
    """Estimate (f, beta) of the package, its objective's X, e and map, and the walls."""
    questions = every(problem)
    # columns other than "crane" are no lumped parts
    limits = knowledge(problem, questions, **known)
    ladder, i = rung(problem, at)
    free = cautious(problem, questions, centre=(ladder, i))
    answers, _ = constrained(
        problem, questions, limits, free, SEED, centre=(ladder, i), band=False
    )  # fmt: skip
    return answers.value[:-1], *penalised(problem, ladder.strengths[i]), *walls(known, problem)


CASES = [(name, lumped) for name in KNOWN for lumped in (False, True)]


@pytest.mark.parametrize(("name", "lumped"), CASES)
@pytest.mark.parametrize("at", [0.3, 0.6])
def test_estimates_against_an_interior_point_solver(name, lumped, at):
    turn = -1.0 if name == "nonpositive" else 1.0
    y, X, e, to, R, least = judged(beam(1, lumped=lumped, turn=turn), KNOWN[name], at)
    z = cvxpy.Variable(X.shape[1])
    # the objective by its own scale, so that the solver's tolerances mean the same everywhere
    size = np.linalg.norm(e)
    task = cvxpy.Problem(
        cvxpy.Minimize(cvxpy.sum_squares((X @ z - e) / size)), [R @ to @ z >= least]
    )
    task.solve("CLARABEL", tol_gap_abs=1e-13, tol_gap_rel=1e-13, tol_feas=1e-12)
    found = to @ z.value
    assert (R @ found - least < 1e-6).any()  # something is held
    np.testing.assert_allclose(y, found, atol=2e-5 * np.abs(found).max())


@pytest.mark.parametrize(("name", "lumped"), CASES)
def test_estimates_meet_the_conditions_of_an_optimum(name, lumped):
    """Karush-Kuhn-Tucker: walls kept, the gradient a non-negative sum of rows that are met."""
    turn = -1.0 if name == "nonpositive" else 1.0
    y, X, e, to, R, least = judged(beam(2, lumped=lumped, turn=turn), KNOWN[name])
    slack = R @ y - least
    assert slack.min() >= -1e-10 * np.abs(y).max()
    z = np.linalg.lstsq(to, y, rcond=None)[0]
    gradient, scale = X.T @ (X @ z - e), np.abs(X.T) @ np.abs(e)
    met = slack <= 1e-9 * np.abs(y).max()
    assert met.any()
    # a direction in which a wall is met pushes back, and only outwards
    rows = (R[met] @ to).T
    size = np.abs(X.T @ e).max()
    pushes, _ = nnls(rows / scale[:, None], gradient / scale, maxiter=10_000)
    assert np.abs(rows @ pushes - gradient).max() <= 1e-8 * size


def test_where_nothing_is_held_the_closed_form_stands():
    problem = beam(3, n=40, shape=lambda x: 3 + x)
    questions = every(problem)
    free = cautious(problem, questions)
    limits = knowledge(problem, questions, ceiling=1e3)
    answers, held = constrained(problem, questions, limits, free, SEED)
    assert held.draws == 0
    for name in ("value", "lower", "upper"):
        np.testing.assert_array_equal(getattr(answers, name), getattr(free, name))


@pytest.mark.parametrize("name", list(KNOWN))
def test_intervals_keep_what_is_known(name):
    turn = -1.0 if name == "nonpositive" else 1.0
    problem = beam(4, lumped=True, turn=turn)
    questions = every(problem)
    limits = knowledge(problem, questions, **KNOWN[name])
    answers, held = constrained(problem, questions, limits, cautious(problem, questions), SEED)
    assert held.draws > 0
    assert (answers.lower <= answers.value).all()
    assert (answers.value <= answers.upper).all()
    assert (answers.upper > answers.lower).all()
    f = slice(0, CELLS)
    if name == "nonpositive":
        assert answers.upper[f].max() <= 0
        assert answers.upper[CELLS] <= 0
    elif name != "monotone":
        assert answers.lower[f].min() >= 0
        assert answers.lower[CELLS] >= 0
        assert answers.lower[-1] >= 0
    if name in ("ceiling", "all"):
        assert answers.upper[f].max() <= 0.8
        assert answers.upper[-1] <= 0.8  # of a beam of length 1


def test_nonpositive_mirrors_nonnegative():
    up, down = beam(5), beam(5)
    down = replace(down, d=-down.d)
    found = []
    for problem, sign in ((up, "nonnegative"), (down, "nonpositive")):
        questions = every(problem)
        limits = knowledge(problem, questions, sign=sign)
        found.append(
            constrained(problem, questions, limits, cautious(problem, questions), SEED)[0]
        )
    np.testing.assert_allclose(found[0].value, -found[1].value, rtol=1e-9, atol=1e-12)
    # draws are other ones
    width = found[0].upper - found[0].lower
    assert np.abs(found[0].upper + found[1].lower).max() <= 0.15 * width.max()


def test_units_change_nothing():
    first = beam(6, lumped=True)
    second = replace(first, A=first.A / 1e3, B=first.B / 1e3)
    found = []
    for problem in (first, second):
        questions = every(problem)
        limits = knowledge(problem, questions, sign="nonnegative")
        found.append(
            constrained(problem, questions, limits, cautious(problem, questions), SEED)[0]
        )
    for name in ("value", "lower", "upper"):
        a, b = (getattr(answers, name) for answers in found)
        np.testing.assert_allclose(1e3 * a, b, rtol=1e-6, atol=1e-6 * np.abs(b).max())


def test_the_same_seed_gives_the_same_numbers():
    problem = beam(7)
    questions = every(problem)
    limits, free = knowledge(problem, questions, sign="nonnegative"), cautious(problem, questions)
    one, two, other = (
        constrained(problem, questions, limits, free, np.random.SeedSequence(seed))[0]
        for seed in (1, 1, 2)
    )
    np.testing.assert_array_equal(one.upper, two.upper)
    np.testing.assert_array_equal(one.lower, two.lower)
    np.testing.assert_array_equal(one.value, other.value)
    assert (one.sd != other.sd).any()


def test_the_sign_of_an_eigenvector_changes_no_draw(monkeypatch):
    """Libraries differ in the signs of eigenvectors."""
    from srcfit import strict

    problem = beam(8)
    questions = every(problem)
    limits, free = knowledge(problem, questions, sign="nonnegative"), cautious(problem, questions)
    one = constrained(problem, questions, limits, free, SEED)[0]
    plain = strict.eigh

    def turned(matrix, **given):
        lam, V = plain(matrix, **given)
        return lam, V * np.where(np.arange(len(lam)) % 2, -1.0, 1.0)

    monkeypatch.setattr(strict, "eigh", turned)
    two = constrained(problem, questions, limits, free, SEED)[0]
    for name in ("lower", "upper", "sd"):
        a, b = getattr(one, name), getattr(two, name)
        np.testing.assert_allclose(a, b, rtol=1e-6, atol=1e-6 * np.abs(a).max())


def gaussian(seed, p, rank):
    """Covariance of p rows of a Gaussian of `rank` unknowns, and means of which some are short."""
    rng = np.random.default_rng(seed)
    R = rng.normal(size=(p, rank))
    # a point that keeps all rows exists: the mean moved by something
    return R @ R.T, R @ rng.normal(size=rank) * 3 + rng.uniform(0, 1, size=p)


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize(("p", "rank"), [(6, 6), (30, 30), (40, 12)])
def test_multipliers_against_an_interior_point_solver(seed, p, rank):
    M, q = gaussian(seed, p, rank)
    u = multipliers(M, q)
    size = np.sqrt(np.diag(M))
    assert missed(M / np.outer(size, size), q / size, u * size) <= 1e-8
    v = cvxpy.Variable(p, nonneg=True)
    half = np.linalg.cholesky(M + 1e-13 * np.trace(M) * np.eye(p))
    task = cvxpy.Problem(cvxpy.Minimize(cvxpy.sum_squares(half.T @ v) / 2 + q @ v))
    task.solve("CLARABEL", tol_gap_abs=1e-12, tol_gap_rel=1e-12, tol_feas=1e-12)
    # multipliers need not be unique, the point is
    np.testing.assert_allclose(M @ u, M @ v.value, atol=1e-5 * np.abs(M @ u).max())


@pytest.mark.parametrize("seed", range(8))
def test_the_second_way_agrees_with_the_first(seed):
    M, q = gaussian(seed, 25, 25)
    size = np.sqrt(np.diag(M))
    C, z = M / np.outer(size, size), q / size
    first, second = nonnegative._active_set(C, z), nonnegative._one_by_one(C, z)
    assert first is not None
    np.testing.assert_allclose(C @ first, C @ second, atol=1e-8 * np.abs(C @ first).max())


def test_many_problems_at_once():
    M, _ = gaussian(1, 20, 20)
    q = np.stack([gaussian(seed, 20, 20)[1] for seed in range(30)])
    each = np.stack([multipliers(M, row) for row in q])
    np.testing.assert_allclose(many(M, q), each, atol=1e-9 * np.abs(each).max())


def test_rows_said_twice_and_rows_without_room():
    M, q = gaussian(2, 10, 10)
    twice = np.repeat(np.arange(10), 2)
    u = multipliers(M[np.ix_(twice, twice)], q[twice])
    once = multipliers(M, q)
    np.testing.assert_allclose(u[::2] + u[1::2], once, atol=1e-6 * once.max())
    # x >= 1 and -x >= 0
    with pytest.raises(SolveError, match="no source keeps all the constraints at once"):
        multipliers(np.array([[1.0, -1.0], [-1.0, 1.0]]), np.array([-1.0, 0.0]))
    # a row that cannot move and is broken
    with pytest.raises(SolveError, match="leaves no room"):
        multipliers(np.diag([1.0, 0.0]), np.array([1.0, -0.1]))


def test_what_did_not_converge_is_an_error(monkeypatch):
    M, q = gaussian(3, 10, 10)
    wrong = 1e-6 * np.ones(10)
    monkeypatch.setattr(nonnegative, "_active_set", lambda C, z: None)
    multipliers(M, q)  # the second way takes over
    monkeypatch.setattr(nonnegative, "_one_by_one", lambda C, z: wrong)
    with pytest.raises(SolveError, match="did not converge"):
        multipliers(M, q)


def test_an_exact_estimate_that_fails_reaches_the_caller(monkeypatch):
    problem = beam(9)
    questions = every(problem)
    limits, free = knowledge(problem, questions, sign="nonnegative"), cautious(problem, questions)

    def fails(M, q):
        raise SolveError("the estimate under its constraints did not converge", "source", "mend")

    monkeypatch.setattr(constraints, "multipliers", fails)
    with pytest.raises(SolveError, match="did not converge"):
        constrained(problem, questions, limits, free, SEED)


@pytest.mark.parametrize(("member", "n", "noise"), [("pinned beam", 12, 0.003),
                                                    ("conductor mL = 4", 12, 0.02)])  # fmt: skip
def test_intervals_hold_for_sources_that_are_zero_elsewhere(member, n, noise):
    """A part of `simulation_constraints`: 16 draws, shapes that stand at the wall almost all over.

    99 % of the zones are covered in the whole table; five zones of one draw are not independent.
    """
    shapes = ("narrow load", "two blocks", "two narrow blocks", "half wave")
    found = tally(list(simulate(member, n, noise, 4, 11, shapes)))
    assert found.zones >= 0.93
    assert found.worst >= 0.8
    assert found.total >= 0.85
    assert found.touched >= 0.95  # what is zero may be zero
    assert found.least >= 0
    assert found.width <= 1  # and something is gained by knowing the sign


@pytest.mark.parametrize("interval", ["cautious", "calibrated"])
def test_knowing_the_sign_of_a_ring_costs_no_width(interval):
    """A ring stands on a small part of its disc; as strong all over, it would be far more."""
    name = "infiltration_ring/case.toml"
    with (EXAMPLES / name).open("rb") as file:
        table = tomllib.load(file)
    table["strength"] = {"interval": interval}
    free, known = (
        numbers(srcfit.recover(srcfit.make_case(case, (EXAMPLES / name).parent)).summary())
        for case in (table, table | {"source": table["source"] | {"sign": "nonnegative"}})
    )
    for key, truth in TRUTHS[name].items():
        assert known[key]["lower"] <= truth <= known[key]["upper"], key
        width, other = (found[key]["upper"] - found[key]["lower"] for found in (known, free))
        assert width <= 1.1 * other, key


@pytest.mark.parametrize(("shape", "n"), [("narrow load", 12), ("two narrow blocks", 40)])
def test_no_side_goes_far_beyond_the_interval_without_the_sign(shape, n):
    """By no more than the estimate moved, or than half of that interval's half-width."""
    passed = 0
    for draw in simulate("conductor mL = 4", n, 0.003, 2, 3, (shape,)):
        room = np.maximum(np.abs(draw.value - draw.free.value), draw.free_width / 4)
        slack = 1e-9 * draw.truth[5]
        assert (draw.upper <= np.maximum(draw.value, draw.free.upper + room) + slack).all()
        assert (draw.lower >= np.minimum(draw.value, draw.free.lower - room) - slack).all()
        passed += (draw.upper > draw.free.upper).sum()
    assert passed  # it may go beyond


@pytest.mark.parametrize("seed", range(8))
def test_combinations_of_knowledge(seed):
    """Signs, ceilings and stretches that meet, met or contradicted: all kept, nothing silent."""
    rng = np.random.default_rng(seed)
    cut = rng.uniform(0.2, 0.8)
    known = {
        "sign": "nonnegative", "ceiling": rng.choice([0.5, 1.5]),
        "monotone": (Monotone(0.0, cut, rising=True), Monotone(cut, 1.0, rising=False)),
    }  # fmt: skip
    keys = [key for key in known if rng.random() < 0.7] or ["sign"]
    known = {key: known[key] for key in keys}
    shapes = (block, lambda x: 1 + 0 * x, lambda x: np.exp(-3 * x), lambda x: x - 0.3)
    problem = beam(seed, n=int(rng.choice([8, 30])), shape=shapes[seed % 4], lumped=seed % 2 == 1)
    problem = replace(problem, stated=seed % 3 > 0)
    questions = every(problem)
    limits, free = knowledge(problem, questions, **known), cautious(problem, questions)
    answers, _ = constrained(problem, questions, limits, free, SEED)
    told = np.isfinite(answers.lower)
    assert told.any()
    assert (answers.lower <= answers.value)[told].all()
    assert (answers.value <= answers.upper)[told].all()
    assert (answers.lower >= limits.low)[told].all()
    assert (answers.upper <= limits.high)[told].all()
    f, size = answers.value[:CELLS], np.abs(answers.value[:CELLS]).max()
    if "monotone" in known:
        inside = problem.grid.middles
        assert (np.diff(f[inside < cut]) >= -1e-9 * size).all()
        assert (np.diff(f[inside > cut]) <= 1e-9 * size).all()
