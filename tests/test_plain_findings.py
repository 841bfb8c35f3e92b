"""What a healthy case leaves unsaid, and how findings on single rows are worded."""

import numpy as np
import pytest

import srcfit
from srcfit import checks

MEMBER = {"kind": "beam", "length": "12 m", "bending_stiffness": "30 MN*m^2", "left": "pinned",
          "right": "pinned", "foundation": "0.2 MN/m^2"}  # fmt: skip
PLACES = np.linspace(0.5, 11.5, 14)


def readings():
    w = srcfit.respond(srcfit.make_member(MEMBER), PLACES, lambda x: 2e3 * (1 + x / 12))
    return 1e3 * w + 0.05 * np.random.default_rng(3).normal(size=len(PLACES))


def recover(folder, *more, w=None, **strength):
    rows = [
        f"{x:.3f},{v:.5f}" for x, v in zip(PLACES, readings() if w is None else w, strict=True)
    ]
    (folder / "w.csv").write_text("\n".join(["x [m],w [mm]", *rows, *more, ""]))
    column = {"column": "w [mm]", "kind": "deflection", "sd": "0.05 mm", "positive": "down"}
    return srcfit.recover(srcfit.make_case({
        "member": MEMBER, "source": {"unit": "kN/m", "cells": 60}, "strength": strength,
        "readings": {"file": "w.csv", "position": {"column": "x [m]"}, "column": [column]},
    }, folder))  # fmt: skip


def said(found):
    return {f["code"]: f for f in found.findings}


def test_a_healthy_case_has_no_findings(tmp_path):
    """Criteria that land elsewhere are no news while all strengths are averaged."""
    assert not recover(tmp_path).findings


def test_criteria_that_disagree_are_said_where_one_is_followed(tmp_path):
    found = recover(tmp_path, choose="gcv")
    choices = [v for v in found.summary()["strength"]["choices"].values() if v]
    told = said(found).get("criteria-disagree")
    assert max(choices) / min(choices) > 30
    assert told is not None
    assert "the answer follows gcv alone" in told["sentence"]


def test_a_reading_off_the_member_is_named_with_its_place(tmp_path):
    told = said(recover(tmp_path, "1250,0.4"))
    assert told["off-member"]["level"] == "caution"
    assert "(w.csv line 16 at 1250 m)" in told["off-member"]["sentence"]
    assert "from 0 to 12 m" in told["off-member"]["sentence"]
    assert told["excluded"]["sentence"].startswith("1 reading was left out: 1 × off the member;")


def test_duplicates_are_counted_together(tmp_path):
    rows = [f"{x:.3f},{v:.5f}" for x, v in zip(PLACES, readings(), strict=True)][:2]
    told = said(recover(tmp_path, *rows))["excluded"]["sentence"]
    assert told.startswith("2 readings were left out: 2 × an exact duplicate;")


def test_a_total_with_an_outlier_carries_the_same_uncertainty_of_properties(tmp_path, monkeypatch):
    """Both totals of the sentence include what the stiffness leaves open."""
    monkeypatch.setitem(MEMBER, "uncertainty", {"foundation": "30 %", "bending_stiffness": "30 %"})
    w = readings()
    w[7] += 1.5
    found = recover(tmp_path, w=w)
    text = said(found)["outlier"]["sentence"]
    there, here = (
        float(part.split("±")[1].split()[0]) for part in text.split("would be")[1].split("instead")
    )
    assert here == pytest.approx(found.total["sd"], rel=0.05)
    properties = sum(found.summary()["shares"][0]["properties"].values())
    assert properties > 0.3
    assert there > here * np.sqrt(properties) * 0.99


def test_a_noise_that_cannot_be_told_from_the_source_is_said():
    """Most of what the readings tell went into the source, and the noise was left to the rest."""
    (told,) = checks.noise_from_rest(299, 77.0, stated=False)
    assert "222 of 299 degrees of freedom" in told.sentence
    assert not checks.noise_from_rest(299, 77.0, stated=True)
    assert not checks.noise_from_rest(20, 12.0, stated=False)
