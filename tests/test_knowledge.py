"""What is said about sign, ceiling and monotone stretches, and what recover does with them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import referee
from test_forward import case_of

import srcfit
from srcfit import knowledge
from srcfit.errors import SolveError
from srcfit.solve import solve

L, EI = 8.0, 2e7
BEAM = {
    "kind": "beam", "length": "8 m", "bending_stiffness": "20 MN*m^2", "left": "pinned",
    "right": "pinned",
}  # fmt: skip


def block(x):
    """20 kN/m on the middle two metres."""
    return 20e3 * ((x > 3) & (x < 5))


def beam_case(folder, source, shape=block, *, n=15, sd=0.05, seed=0, member=BEAM):
    edges, x = np.linspace(0, L, 161), np.linspace(0.4, 7.6, n)
    middles = (edges[1:] + edges[:-1]) / 2
    w = 1e3 * referee.beam(edges, x, EI)[0] @ shape(middles)
    w = w + sd * np.random.default_rng(seed).normal(size=n)
    columns = [{"column": "w", "kind": "deflection", "unit": "mm", "sd": f"{sd} mm"}]
    ends = (("left", 0, 3), ("middle", 3, 5))
    zones = [{"name": name, "from": f"{a} m", "to": f"{b} m"} for name, a, b in ends]
    source = {"unit": "kN/m", "cells": 80, "zones": zones, **source}
    return case_of(folder, member, columns, list(zip(x, w, strict=True)), source)


def findings(found):
    return {f["code"]: (f["level"], f["sentence"]) for f in found.summary()["findings"]}


def test_a_sign_that_bites_is_said_with_its_places(tmp_path):
    found = srcfit.recover(beam_case(tmp_path, {"sign": "nonnegative"}))
    said = findings(found)
    level, sentence = said["sign-active"]
    assert level == "note"
    assert "the smooth part on " in sentence
    # what the total would be is what a recovery without the sign gives
    free = srcfit.recover(beam_case(tmp_path, {})).total
    assert f"the total would be {free['value']:.4g} ± " in sentence
    assert said["sampled-intervals"][0] == "note"
    assert "sign-contradicted" not in said
    assert "few-draws" not in said
    # the truth
    left, middle = found.summary()["zones"]
    assert left["lower"] == 0
    assert middle["lower"] <= 40 <= middle["upper"]
    assert found.total["lower"] <= 40 <= found.total["upper"]
    assert (found.source.filter(like="lower") >= 0).all(axis=None)


def test_a_sign_against_the_readings_is_serious(tmp_path):
    found = srcfit.recover(beam_case(tmp_path, {"sign": "nonnegative"}, lambda x: -block(x)))
    level, sentence = findings(found)["sign-contradicted"]
    assert level == "serious"
    for word in ("the total -", "zone 'middle' -", "`positive`"):
        assert word in sentence
    # draws cannot move so deep behind the walls, and that is said, not hidden
    assert "could not move" in findings(found)["few-draws"][1]
    assert found.total["value"] == pytest.approx(0, abs=1e-6)


def test_a_ceiling_too_low_is_serious(tmp_path):
    found = srcfit.recover(beam_case(tmp_path, {"sign": "nonnegative", "ceiling": "10 kN/m"}))
    assert findings(found)["sign-contradicted"][0] == "serious"
    upper = found.source.filter(like="upper")
    assert upper.max(axis=None) <= 10 * (1 + 1e-12)


def test_a_ceiling_that_is_right_is_not(tmp_path):
    found = srcfit.recover(beam_case(tmp_path, {"sign": "nonnegative", "ceiling": "25 kN/m"}))
    assert "sign-contradicted" not in findings(found)


def test_monotone_stretches_are_kept(tmp_path):
    rising = [{"from": "0 m", "to": "8 m", "trend": "rising"}]
    found = srcfit.recover(beam_case(tmp_path, {"monotone": rising}, lambda x: 2e3 * x, n=12))
    estimate = found.source["estimate [kN/m]"].to_numpy()
    assert (np.diff(estimate) >= -1e-9 * estimate.max()).all()
    assert found.total["lower"] <= 64 <= found.total["upper"]
    assert "sign-contradicted" not in findings(found)


def test_a_level_that_the_readings_do_not_tell(tmp_path):
    """A uniform load moves a datum on a member that lies on springs alone: the sign is unused."""
    rod = {"kind": "conductor", "length": "1 m", "conductance": "1 W*m/K", "loss": "2 W/(m*K)",
           "ambient": "20 degC", "left": "insulated", "right": "insulated"}  # fmt: skip
    columns = [{"column": "T", "kind": "temperature", "unit": "degC", "sd": "0.1 K",
                "offset": "unknown"}]  # fmt: skip
    x = np.linspace(0.05, 0.95, 12)
    rows = list(zip(x, 25 + np.random.default_rng(0).normal(size=12) * 0.1, strict=True))
    source = {"unit": "W/m", "cells": 40, "sign": "nonnegative"}
    said = findings(srcfit.recover(case_of(tmp_path, rod, columns, rows, source)))
    assert said["constraint-unused"][0] == "serious"


def test_few_draws_are_said(tmp_path):
    case = beam_case(tmp_path, {"sign": "nonnegative"})
    found = solve(case, srcfit.read(case))
    assert found.held is not None
    enough = knowledge.sampled(found, found.held)
    assert [f.code for f in enough] == ["sampled-intervals"]
    rough = replace(found.held, effective=np.full(len(found.held.effective), 90.0))
    few = knowledge.sampled(found, rough)[1]
    assert few.code == "few-draws"
    assert "worth only 90 independent ones" in few.sentence
    assert "11 %" in few.sentence
    lost = knowledge.sampled(found, replace(found.held, refused=0.05))[1]
    assert "5.0 % of the trajectories were lost" in lost.sentence


def test_property_uncertainty_and_a_sign_go_together(tmp_path):
    plain = srcfit.recover(beam_case(tmp_path, {"sign": "nonnegative"})).total
    member = {**BEAM, "uncertainty": {"bending_stiffness": "20 %"}}
    unsure = srcfit.recover(beam_case(tmp_path, {"sign": "nonnegative"}, member=member)).total
    assert unsure["value"] == pytest.approx(plain["value"], rel=0.05)
    # a fifth of 40 kN, in quadrature
    assert unsure["sd"] == pytest.approx(np.hypot(plain["sd"], 8), rel=0.2)
    assert unsure["lower"] >= 0


def test_no_source_keeps_everything(tmp_path):
    """What balances a known heater cannot be positive: the message says what to mend."""
    rod = {"kind": "conductor", "length": "1 m", "conductance": "1 W*m/K", "left": "insulated",
           "right": "insulated"}  # fmt: skip
    columns = [{"column": "T", "kind": "temperature", "unit": "K", "sd": "0.1 K"}]
    x = np.linspace(0.05, 0.95, 12)
    rows = list(zip(x, 300 + np.sin(3 * x), strict=True))
    source = {"unit": "W/m", "cells": 40, "sign": "nonnegative",
              "known": [{"at": "0.5 m", "value": "2 W"}]}  # fmt: skip
    with pytest.raises(SolveError) as caught:
        srcfit.recover(case_of(tmp_path, rod, columns, rows, source))
    assert "sign" in str(caught.value)
