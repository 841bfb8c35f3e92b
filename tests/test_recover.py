"""Whole recoveries: units, order of rows, choices, knowledge, property uncertainty, findings."""

import numpy as np
import pytest

import srcfit
from srcfit.errors import SolveError

PLACES = np.linspace(0.5, 11.5, 14)
MEMBER = {
    "kind": "beam", "length": "12 m", "bending_stiffness": "30 MN*m^2", "left": "pinned",
    "right": "pinned", "foundation": "0.2 MN/m^2",
}  # fmt: skip


def load(x):
    """A block on a gentle slope [N/m]."""
    return 2e3 * (1 + x / 12) + 6e3 * ((x > 3) & (x < 6))


def truth():
    """Deflections [m] with 0.05 mm noise."""
    w = srcfit.respond(srcfit.make_member(MEMBER), PLACES, load)
    return w + 5e-5 * np.random.default_rng(3).normal(size=len(PLACES))


def mapping(tmp_path, member=MEMBER, scale=1e3, unit="mm", x_scale=1.0, x_unit="m", order=None,
            source=None, **strength):  # fmt: skip
    """A case mapping in the given units, its file written."""
    order = np.arange(len(PLACES)) if order is None else order
    rows = [f"{PLACES[i] * x_scale!s},{truth()[i] * scale!s}" for i in order]
    name = f"r{abs(hash((unit, x_unit, tuple(order))))}.csv"
    (tmp_path / name).write_text("\n".join(["x,w", *rows]) + "\n")
    column = {"column": "w", "kind": "deflection", "unit": unit, "sd": "0.05 mm"}
    source = source or {
        "unit": "kN/m", "cells": 80,
        "zones": [{"name": "block", "from": "3 m", "to": "6 m"}, {"name": "rest", "from": "6 m",
                  "to": "12 m"}],
    }  # fmt: skip
    return {
        "title": "t", "member": member, "source": source, "strength": strength,
        "readings": {
            "file": name, "position": {"column": "x", "unit": x_unit}, "column": [column],
        },
    }  # fmt: skip


def solve(tmp_path, **options):
    """Recover and return the summary."""
    return srcfit.recover(srcfit.make_case(mapping(tmp_path, **options), folder=tmp_path))


def numbers(recovery, scale=1.0):
    """Every reported number of a recovery in one array, in kN."""
    s = recovery.summary()
    parts = [s["total"], *s["zones"], *s["reactions"]]
    return scale * np.array([p[k] for p in parts for k in ("value", "sd", "lower", "upper")])


def test_units_change_nothing(tmp_path):
    """Metres or millimetres, newtons or kilonewtons: the same answer to 1e-9."""
    base = solve(tmp_path)
    member = {**MEMBER, "length": "12000 mm", "bending_stiffness": "3e10 kN*mm^2",
              "foundation": "0.2 N/mm^2"}  # fmt: skip
    other = solve(
        tmp_path, member=member, scale=1.0, unit="m", x_scale=1e3, x_unit="mm",
        source={"unit": "N/mm", "total_unit": "N", "cells": 80,
                "zones": [{"name": "block", "from": "3000 mm", "to": "6000 mm"},
                          {"name": "rest", "from": "6000 mm", "to": "12000 mm"}]},
    )  # fmt: skip
    first, second = numbers(base), numbers(other)
    second *= 1e-3
    np.testing.assert_allclose(second, first, rtol=1e-9, atol=1e-9 * np.abs(first).max())
    a, b = base.ladder, other.ladder
    rough = (a["family"] == "roughness 1").to_numpy()
    for column in ("residual_norm", "effective_dof", "gcv", "leave-one-out"):
        np.testing.assert_allclose(b[column][rough], a[column][rough], rtol=1e-7)
    # kN/m and N/mm are one unit, so the strength differs by the unit of length only
    np.testing.assert_allclose(b["strength"][rough], 1e3 * a["strength"][rough], rtol=1e-7)


def test_row_order_changes_nothing(tmp_path):
    """Shuffled rows give the same answer."""
    order = np.random.default_rng(1).permutation(len(PLACES))
    first, second = numbers(solve(tmp_path)), numbers(solve(tmp_path, order=order))
    np.testing.assert_allclose(second, first, rtol=1e-8, atol=1e-8 * np.abs(first).max())


def test_truth_in_the_intervals(tmp_path):
    """One draw, far from the edge: total 36 + 18 kN, block 26.25 kN (from the source itself)."""
    s = solve(tmp_path).summary()
    assert s["total"]["lower"] < 54.0 < s["total"]["upper"]
    assert s["zones"][0]["lower"] < 26.25 < s["zones"][0]["upper"]
    assert s["noise"]["scale"] < 2
    assert s["fit"] == {**s["fit"], "read": 14, "used": 14}


@pytest.mark.parametrize("solver", ["tikhonov", "eigenbasis", "svd-cut"])
@pytest.mark.parametrize("choose", ["averaged", "gcv", "l-curve", "discrepancy", "k-fold", "risk"])
def test_solvers_and_criteria(tmp_path, solver, choose):
    """Every solver with every criterion answers near the truth, or says why it cannot."""
    case = srcfit.make_case(mapping(tmp_path, solver=solver, choose=choose), folder=tmp_path)
    silent = choose == "l-curve" and solver != "eigenbasis"  # no corner on these readings
    if silent:
        with pytest.raises(SolveError, match="no corner"):
            srcfit.recover(case)
        return
    s = srcfit.recover(case).summary()
    assert s["strength"]["solver"] == solver
    assert s["total"]["lower"] < 54.0 < s["total"]["upper"]
    assert (s["strength"]["value"] is None) == (choose == "averaged" and solver == "tikhonov")


def test_stated_strength_is_followed(tmp_path):
    """A number for `choose` is the strength itself, in the reported unit."""
    base = solve(tmp_path, choose="evidence").summary()
    again = solve(tmp_path, choose=base["strength"]["value"]).summary()
    assert again["strength"]["value"] == pytest.approx(base["strength"]["value"], rel=1e-9)
    assert again["total"]["value"] == pytest.approx(base["total"]["value"], rel=1e-7)


def test_plain_interval_is_narrower(tmp_path):
    """The plain band of one strength is the named alternative."""
    wide = solve(tmp_path).summary()["zones"][0]
    plain = solve(tmp_path, choose="evidence", interval="plain").summary()["zones"][0]
    assert plain["sd"] < wide["sd"]


def test_estimated_noise(tmp_path):
    """Without a stated noise it is estimated, and intervals use Student's t."""
    case = mapping(tmp_path)
    case["readings"]["column"][0]["sd"] = "estimate"
    s = srcfit.recover(srcfit.make_case(case, folder=tmp_path)).summary()
    assert s["noise"]["stated"] is False
    group = s["noise"]["groups"][0]
    assert group["estimated"] is True
    assert 0.02 < group["sd"] < 0.15
    assert s["total"]["lower"] < 54.0 < s["total"]["upper"]


def test_property_uncertainty_widens(tmp_path):
    """An uncertain stiffness adds its own share, added in quadrature."""
    sure = solve(tmp_path).summary()["total"]
    unsure = solve(tmp_path, member={**MEMBER, "uncertainty": {"bending_stiffness": "30 %"}})
    total = unsure.summary()["total"]
    assert total["value"] == pytest.approx(sure["value"])
    assert total["sd"] > 1.5 * sure["sd"]
    assert any(f["code"] == "property-dominates" for f in unsure.findings)


def test_known_total_sharpens(tmp_path):
    """A known total is a reading of its own."""
    source = {"unit": "kN/m", "cells": 80, "total": {"value": "54 kN", "sd": "0.1 kN"}}
    free = solve(tmp_path, source={"unit": "kN/m", "cells": 80}).summary()["total"]
    known = solve(tmp_path, source=source).summary()["total"]
    assert known["sd"] < 0.5 * free["sd"]
    assert abs(known["value"] - 54) < 0.5


def test_wrong_noise_is_contradicted(tmp_path):
    """Noise stated ten times too small is a serious finding, where the model cannot bend to it."""
    source = {"unit": "kN/m", "cells": 80, "smooth": False, "background": "unknown",
              "lumped": [{"name": "block", "at": "4.5 m", "width": "3 m"}]}  # fmt: skip
    case = mapping(tmp_path, source=source)
    case["readings"]["column"][0]["sd"] = "0.005 mm"
    found = srcfit.recover(srcfit.make_case(case, folder=tmp_path)).findings
    assert any(f["code"] == "noise-contradicted" and f["level"] == "serious" for f in found)


def test_same_inputs_same_numbers(tmp_path):
    """Two runs agree to the last bit; the seed is recorded."""
    case = srcfit.make_case(mapping(tmp_path), folder=tmp_path)
    first, second = srcfit.recover(case, rng=7), srcfit.recover(case, rng=7)
    assert first.summary() == second.summary()
    assert first.summary()["seed"] == 7
    assert first.source.equals(second.source)


def test_input_files_stay_untouched(tmp_path):
    """Reading and recovering leave the input as it was."""
    case = srcfit.make_case(mapping(tmp_path), folder=tmp_path)
    before = {p: p.read_bytes() for p in tmp_path.iterdir()}
    srcfit.recover(case).save(tmp_path / "out")
    assert all(p.read_bytes() == text for p, text in before.items())


def test_pictured_rungs_are_the_ladders(tmp_path):
    """Strengths and totals of the pictured rungs are those of the ladder, in its unit."""
    recovery = solve(tmp_path)
    rough = recovery.ladder[recovery.ladder["family"] == "roughness 1"]
    strengths = recovery.pictures.strengths
    assert np.isin(np.round(np.log(strengths), 9), np.round(np.log(rough["strength"]), 9)).all()
    cells = recovery.pictures.rungs @ np.diff(recovery.pictures.x)
    np.testing.assert_allclose(cells, recovery.pictures.totals, rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("roughness", [0, 1, 2])
def test_estimates_explain_the_residuals_on_a_free_member(roughness):
    """An insulated wall: claimed residuals are those of the estimate itself."""
    from srcfit.solvers import SOLVERS
    from srcfit.view import look

    member = srcfit.make_member(
        {"kind": "wall", "length": "1 m", "conductivity": "2 W/(m*K)", "ambient": "300 K",
         "left": "insulated", "right": "insulated"}
    )  # fmt: skip
    x = np.linspace(0.05, 0.95, 12)
    y = srcfit.respond(member, x, lambda x: 100 * (x - 0.5)) + 4.0
    nothing = np.zeros((len(x), 0))
    problem = look(member, "temperature", 30).problem(x, y, nothing, np.ones(len(x)), 0.01)
    ladder = SOLVERS["tikhonov"](problem, roughness=roughness)
    left = problem.d[:, None] - problem.A @ ladder.estimates - problem.B @ ladder.columns
    np.testing.assert_allclose(left, ladder.all_residuals, atol=1e-6 * np.abs(problem.d).max())
