"""The calibrated band: the same for any order, sign and unit; its coverage on some layouts."""

import numpy as np
import pytest
import simulation_matrix as matrix
from simulation import SHAPES

import srcfit
from srcfit.bands import averaged, cautious, judge, weighed
from srcfit.calibration import calibrated, tune
from srcfit.evidence import conditional
from srcfit.problem import Grid, Problem, Questions
from srcfit.references import COUNT, mixture, references
from srcfit.repeats import answered, shared
from srcfit.solvers.frame import ask, frame


def example(stated=True, n=20, noise=0.01, member="cable"):
    fine, x, blank, questions = matrix.layout(matrix.MEMBERS[member], n, matrix.FIVE)
    u = fine @ SHAPES["two blocks"](x)
    sd = noise * np.abs(u).max()
    d = (u + sd * np.random.default_rng(3).normal(size=n)) / sd
    problem = Problem(blank.A / sd, blank.B, d, blank.grid, places=blank.places, stated=stated)
    return problem, questions


def moved(problem, rows, sign):
    return Problem(
        sign[:, None] * problem.A[rows], problem.B[rows], sign * problem.d[rows], problem.grid,
        places=problem.places[rows], stated=problem.stated,
    )  # fmt: skip


@pytest.mark.parametrize("stated", [True, False])
def test_order_and_signs_of_readings_change_nothing(stated):
    problem, questions = example(stated)
    rng = np.random.default_rng(0)
    rows, sign = rng.permutation(20), rng.choice([-1.0, 1.0], 20)
    one, two = (calibrated(p, questions) for p in (problem, moved(problem, rows, sign)))
    np.testing.assert_allclose(two.sd, one.sd, rtol=1e-7)
    np.testing.assert_allclose(
        two.value, one.value, rtol=1e-7, atol=1e-9 * np.abs(one.value).max()
    )


def test_units_change_nothing():
    problem, questions = example()
    grid = problem.grid
    k, f = 1000.0, 0.37  # millimetres, and another unit of the source
    other = Grid(
        grid.edges * k, grid.weights * k, grid.free, tuple((a * k, b * k) for a, b in grid.zones)
    )
    scaled = Problem(problem.A / f, problem.B, problem.d, other, places=problem.places * k)
    one = calibrated(problem, questions)
    two = calibrated(scaled, Questions(questions.cells * k, questions.columns))
    np.testing.assert_allclose(two.sd, one.sd * f * k, rtol=1e-9)


@pytest.mark.parametrize("stated", [True, False])
def test_many_at_once_are_the_same_as_one(stated):
    problem, questions = example(stated)
    fr = frame(problem)
    asked = ask(fr, questions)
    ground = weighed(fr, spread=True)
    value, _, _ = averaged(fr, asked, ground)
    families = shared(asked, [w.spectrum for w in ground.averaged], ground.sigma)
    many = answered(asked, families, matrix.sets_of(fr, problem.d[:, None]))
    np.testing.assert_allclose(many.value[:, 0], value, rtol=1e-9)
    within = sum(conditional(asked, w)[1] @ w.weights for w in ground.averaged)
    np.testing.assert_allclose(many.variance[:, 0], within, rtol=1e-6)


def test_a_number_that_only_noise_blurs_keeps_its_interval():
    """Total of a beam on springs, read well: both bands are z times the noise."""
    problem, questions = example(n=40, noise=0.02, member="foundation beam 5")
    one, two = cautious(problem, questions), calibrated(problem, questions)
    assert two.sd[-1] == pytest.approx(one.sd[-1], rel=0.1)


def test_a_level_that_is_higher_widens_the_band():
    problem, questions = example()
    half = [calibrated(problem, questions, level=p) for p in (0.68, 0.95, 0.99)]
    wide = [a.upper - a.value for a in half]
    assert (wide[0] < wide[1]).all()
    assert (wide[1] < wide[2]).all()


def test_factors_between_places_are_interpolated():
    problem, questions = example()
    cells = np.vstack([questions.cells, np.eye(len(problem.grid.free))])
    every = Questions(cells, cells[:, :0])
    all_alone, in_a_run = (
        calibrated(problem, every),
        calibrated(problem, every, runs=[slice(6, 106)]),
    )
    np.testing.assert_allclose(in_a_run.sd[:6], all_alone.sd[:6], rtol=1e-12)
    ratio = in_a_run.sd[6:] / all_alone.sd[6:]
    assert np.median(np.abs(ratio - 1)) < 0.1
    assert ratio.min() > 0.6
    assert ratio.max() < 1.7


def test_reference_sources():
    grid = Grid(np.linspace(0, 2, 81), np.full(80, 0.025), np.arange(80) >= 10, ((0.5, 1.0),))
    found = references(grid, 5.0)
    assert found.shape == (70, COUNT)
    assert np.isfinite(found).all()
    assert (np.abs(found).max(axis=0) > 0).mean() > 0.9
    np.testing.assert_array_equal(found, references(grid, 5.0))
    few, many = mixture(5.0), mixture(80.0)
    assert (few.narrow, few.most) == (pytest.approx(0.03), 3)
    assert (many.narrow, many.most) == (pytest.approx(0.01), 10)
    # the zone starts at the tenth free cell
    edges = np.abs(np.diff(found, axis=0)).sum(axis=1)
    assert edges[9] > 2 * np.median(edges)


def test_coverage_and_width():
    """29 shapes; at 95 % nominal, 60 draws each: averages over 1,740 draws to within 0.01."""
    shapes = {**SHAPES, **matrix.AFTER}
    for member in ("cable", "pinned beam", "foundation beam 5"):
        found = [matrix.run(matrix.MEMBERS[member], 40, 0.003, shapes, 60)]
        held = np.stack([f["calibrated"][0] for f in found[0].values()])
        assert 0.95 < held[:, :-1].mean() < 0.995, member
        assert held[:, :-1].mean(axis=1).min() > 0.6, member
        assert held[:, -1].mean() > 0.92, member
        assert matrix.narrower(found) < 0.85, member


def test_half_widths_of_the_module_and_of_the_simulation_agree():
    problem, questions = example()
    fr = frame(problem)
    asked = ask(fr, questions)
    ground = weighed(fr, spread=True)
    value, _, size = averaged(fr, asked, ground)
    tuned = tune(fr, asked, ground, judge(fr, asked, ground, value, size), 0.95, matrix.Z)
    half = tuned.half_widths(matrix.sets_of(fr, problem.d[:, None]), np.array([size]))[1][:, 0]
    band = calibrated(problem, questions)
    np.testing.assert_allclose(band.upper - band.value, half, rtol=1e-9)


CASE = {
    "member": {"kind": "cable", "length": "10 m", "tension": "5 kN", "left": "fixed",
               "right": "fixed"},
    "source": {"unit": "N/m", "cells": 40, "zones": [{"name": "a", "from": "2 m", "to": "6 m"}]},
}  # fmt: skip


def test_asked_for_in_a_case(tmp_path):
    x = np.linspace(0.5, 9.5, 19)
    w = 1000 * 20 * x * (10 - x) / (2 * 5000) + np.random.default_rng(0).normal(0, 0.5, 19)
    rows = "".join(f"{a},{b:.3f}\n" for a, b in zip(x, w, strict=True))
    (tmp_path / "w.csv").write_text("x [m],w [mm]\n" + rows)
    readings = {
        "file": "w.csv", "position": {"column": "x [m]", "unit": "m"},
        "column": [{"column": "w [mm]", "kind": "deflection", "sd": "0.5 mm"}],
    }  # fmt: skip

    def run(**strength):
        case = srcfit.make_case({**CASE, "readings": readings, "strength": strength}, tmp_path)
        return srcfit.recover(case)

    wide, tuned = run(), run(interval="calibrated")
    assert wide.facts["strength"]["interval"] == "cautious"
    assert tuned.facts["strength"]["interval"] == "calibrated"
    assert tuned.total["value"] == wide.total["value"]
    assert tuned.total["lower"] < 200 < tuned.total["upper"]
    tuned.save(tmp_path / "out")
    assert "of the calibrated band" in (tmp_path / "out" / "report.html").read_text("utf-8")
    # a strength that was chosen has no average to calibrate: what ran is what is said
    assert run(interval="calibrated", choose="gcv").facts["strength"]["interval"] == "cautious"
