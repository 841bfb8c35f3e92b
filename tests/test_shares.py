"""Shares of variance: they sum to 1, and linearisation holds against drawn properties."""

from dataclasses import replace

import numpy as np
import pytest

import srcfit
from srcfit import shares
from srcfit.case.vary import vary
from srcfit.places import solve
from srcfit.readings import read

MEMBER = {
    "kind": "beam", "length": "12 m", "bending_stiffness": "30 MN*m^2", "left": "pinned",
    "right": {"deflection_spring": "20 MN/m", "rotation_spring": "2 MN*m"},
    "foundation": "0.2 MN/m^2",
}  # fmt: skip
ZONES = [{"name": "left half", "from": "0 m", "to": "6 m"},
         {"name": "right half", "from": "6 m", "to": "12 m"}]  # fmt: skip


def case(folder, uncertainty, **source):
    x = np.linspace(0.5, 11.5, 14)
    member = {**MEMBER, "uncertainty": uncertainty}
    load = srcfit.respond(srcfit.make_member(MEMBER), x, lambda x: 2e3 + 3e3 * (x > 6))
    w = 1e3 * load + 0.05 * np.random.default_rng(2).normal(size=len(x))
    rows = [f"{a:g},{v:.6f}" for a, v in zip(x, w, strict=True)]
    (folder / "w.csv").write_text("\n".join(["x,w", *rows]) + "\n")
    column = {"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.05 mm"}
    return srcfit.make_case(
        {"member": member,
         "readings": {"file": "w.csv", "position": {"column": "x", "unit": "m"},
                      "column": [column]},
         "source": {"unit": "kN/m", "cells": 60, "zones": ZONES, **source}}, folder=folder,
    )  # fmt: skip


UNSURE = {"bending_stiffness": "6 %", "right.deflection_spring": "20 %", "foundation": "15 %"}


def test_shares_sum_to_one_and_to_the_reported_variance(tmp_path):
    """Every row: noise, smoothing and each property, 1 in all; sd is that of the whole."""
    sure = srcfit.recover(case(tmp_path, {})).summary()
    found = srcfit.recover(case(tmp_path, UNSURE)).summary()
    assert [s["zone"] for s in found["shares"]] == [None, "left half", "right half"]
    numbers = [found["total"], *found["zones"]]
    own = [sure["total"], *sure["zones"]]
    for share, whole, alone in zip(found["shares"], numbers, own, strict=True):
        assert set(share["properties"]) == set(UNSURE)
        parts = [share["noise"], share["smoothing"], *share["properties"].values()]
        assert min(parts) >= 0
        assert sum(parts) == pytest.approx(1, abs=1e-12)
        # what no property adds is the variance without any uncertain property
        left = (share["noise"] + share["smoothing"]) * whole["sd"] ** 2
        assert left == pytest.approx(alone["sd"] ** 2, rel=1e-9)


def test_linearised_shares_against_drawn_properties(tmp_path):
    """sd of total and zones over 250 recoveries with drawn properties, to 3.5 sampling errors.

    The sampling error of an sd over n draws is 1 / sqrt(2 n) of it.
    """
    given = case(tmp_path, UNSURE)
    readings = read(given)
    found = solve(given, readings, criteria=False)
    known = shares.properties(found, np.random.SeedSequence(0))
    draws = 250
    rng = np.random.default_rng(8)
    values = np.empty((draws, 3))
    for i in range(draws):
        member = given.member
        for key in UNSURE:
            member = vary(member, key, float(rng.normal()))
        again = solve(replace(given, member=member), readings, criteria=False)
        values[i] = again.answers.value[:3]
    seen = values.std(axis=0, ddof=1)
    np.testing.assert_allclose(seen, np.sqrt(known.variance[:3]), rtol=3.5 / np.sqrt(2 * draws))


def test_a_property_that_dominates_one_zone_is_named_with_it(tmp_path):
    """A soft right end moves what stands beside it: the finding names what it dominates."""
    found = srcfit.recover(case(tmp_path, {"right.deflection_spring": "60 %"}))
    told = [f["sentence"] for f in found.findings if f["code"] == "property-dominates"]
    summary = found.summary()
    big = [
        s["zone"] for s in summary["shares"] if s["properties"]["right.deflection_spring"] > 0.5
    ]
    assert big
    assert len(told) == 1
    for zone in big:
        assert ("the total" if zone is None else f"zone {zone}") in told[0]
    assert "the uncertainty of right.deflection_spring" in told[0]


def test_nothing_is_said_of_a_property_without_weight(tmp_path):
    """A hundredth of a per cent of stiffness: no finding, and its bend is nobody's business."""
    found = srcfit.recover(case(tmp_path, {"bending_stiffness": "0.01 %"}))
    assert not {"property-dominates", "property-not-linear"} & {f["code"] for f in found.findings}


def test_a_bent_effect_is_said_where_it_matters():
    """A share of a third that bends by half is named; one of a hundredth is not."""
    share = shares.Share(None, 0.5, 0.1, {"k": 0.35, "h": 0.01}, {"k": 0.5, "h": 3.0})
    told = shares.findings([share])
    assert [f.code for f in told] == ["property-not-linear"]
    assert "of k on the total bends by 50 % over one standard deviation" in told[0].sentence
    turned = shares.findings([replace(share, bend={"k": 2.0, "h": 0.0})])
    assert "of k on the total turns round within one standard" in turned[0].sentence


def test_an_effect_that_turns_round_adds_its_variance():
    """y = y0 - k abs(z), z normal: its mean square about y0 is that of both directions."""
    k = 2.0
    known = shares.Properties({"k": np.array([0.0])}, {"k": np.array([-2 * k])}, 1)
    z = np.random.default_rng(3).normal(size=400_000)
    assert known.variance[0] == pytest.approx(np.mean((k * np.abs(z)) ** 2), rel=0.02)


def test_a_driven_member_has_its_shares(tmp_path):
    """Complex amplitudes: one row a question, of the part that is told less well."""
    x = np.linspace(0.5, 11.5, 14)
    member = {**MEMBER, "mass": "100 kg/m", "frequency": "3 Hz", "damping": 0.05,
              "uncertainty": {"mass": "10 %"}}  # fmt: skip
    plain = {k: v for k, v in member.items() if k != "uncertainty"}
    w = 1e3 * srcfit.respond(srcfit.make_member(plain), x, lambda x: 2e3 + 0 * x)
    w = w + 0.05 * (np.random.default_rng(1).normal(size=(2, len(x))) * [[1], [1j]]).sum(axis=0)
    rows = [f"{a:g},{v.real:.6f}{v.imag:+.6f}i" for a, v in zip(x, w, strict=True)]
    (tmp_path / "w.csv").write_text("\n".join(["x,w", *rows]) + "\n")
    given = srcfit.make_case(
        {"member": member,
         "readings": {"file": "w.csv", "position": {"column": "x", "unit": "m"},
                      "column": [{"column": "w", "kind": "deflection", "unit": "mm",
                                  "sd": "0.05 mm"}]},
         "source": {"unit": "kN/m", "cells": 60, "zones": ZONES}}, folder=tmp_path,
    )  # fmt: skip
    found = srcfit.recover(given)
    summary = found.summary()
    for share in summary["shares"]:
        total = share["noise"] + share["smoothing"] + sum(share["properties"].values())
        assert total == pytest.approx(1)
    assert found.readings["shift_total [kN]"].notna().all()
    assert found.source["resolution [m]"].notna().all()
