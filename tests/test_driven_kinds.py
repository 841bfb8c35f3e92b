"""Every kind driven at one frequency, end to end: an invented complex source is found back."""

import csv

import numpy as np
import pytest
from test_driven import text

import srcfit
from srcfit.case.model import Known
from srcfit.grid import overlap
from srcfit.members import MEMBERS
from srcfit.prediction import predict
from srcfit.trial import Trial
from srcfit.units import factor

# what stores (or moves) per length or volume, the size of the member, and a frequency that matters
DRIVES = {
    "rod": ("mass", "40 kg/m", 120.0), "cable": ("mass", "2 kg/m", 0.7),
    "conductor": ("heat_capacity", "3 kJ/(m*K)", 2e-3), "beam": ("mass", "400 kg/m", 3.0),
    "shaft": ("inertia", "2 kg*m", 30.0), "wall": ("heat_capacity", "2 MJ/(m^3*K)", 2e-5),
    "cylinder": ("heat_capacity", "2 MJ/(m^3*K)", 1e-3),
    "sphere": ("heat_capacity", "2 MJ/(m^3*K)", 1e-3), "column": (None, None, 2e-7),
    "aquifer": ("storage", "0.1", 2e-7), "radial_aquifer": ("storage", "0.001", 1e-5),
    "general": (None, None, None),
}  # fmt: skip


def test_every_kind_has_its_drive():
    assert set(DRIVES) == set(MEMBERS)


@pytest.mark.parametrize("kind", [k for k, v in DRIVES.items() if v[2] is not None])
def test_driven(tmp_path, kind):
    spec = MEMBERS[kind]
    key, value, frequency = DRIVES[kind]
    demo = spec.demo
    member = {"kind": kind, **demo["member"], "frequency": f"{frequency!r} Hz"}
    if key:
        member[key] = value
    if spec.drive == "inertia":
        member["damping"] = 0.05
    column = {k: v for k, v in demo["column"].items() if k != "positive"}
    unit = column["unit"]
    column["unit"] = {"degC": "K"}.get(unit, unit)
    name, low, high = demo["source"]["zone"]
    source = {"unit": demo["source"]["unit"], "cells": 60,
              "zones": [{"name": name, "from": low, "to": high}]}  # fmt: skip
    made = srcfit.make_member(member)
    x = made.start + made.length * (np.arange(24) + 0.5) / 24

    def case(values):
        with (tmp_path / "r.csv").open("w", newline="", encoding="utf-8") as out:
            csv.writer(out).writerows(
                [["x", column["column"]], *zip(x.tolist(), map(text, values), strict=True)]
            )
        position = {"column": "x", "unit": "m"}
        return srcfit.make_case({
            "title": kind, "member": member, "source": source,
            "readings": {"file": "r.csv", "position": position, "column": [column]},
        }, folder=tmp_path)  # fmt: skip

    blank = case(np.zeros(24, dtype=complex))
    zone = blank.source.zones[0]
    stretches = ((made.start, zone.start, 0.5 + 0.2j), (zone.start, zone.end, 1.0 - 0.6j),
                 (zone.end, made.end, 0.5 + 0.2j))  # fmt: skip
    parts = tuple(Known(a, b, v) for a, b, v in stretches if a < b)
    bare = srcfit.read(blank)
    predicted = predict(blank, bare, Trial(parts)).readings
    clean = (predicted["predicted"] + 1j * predicted["predicted_imag"]).to_numpy()
    rest = predict(blank, bare, Trial(())).readings
    held = (rest["predicted"] + 1j * rest["predicted_imag"]).to_numpy()  # by prescribed ends
    clean = clean - held
    sd = float(predicted["sd"].iloc[0])
    size = 60 * sd / np.abs(clean).max()
    assert np.abs(clean.imag).max() > 0.01 * np.abs(clean).max()
    rng = np.random.default_rng(2)
    found = srcfit.recover(
        case(held + size * clean + sd * (rng.normal(size=24) + 1j * rng.normal(size=24)))
    )
    per = factor(blank.source.total_unit, spec.total_unit, "total")[0]
    weights = {}
    ends = np.array([made.start, made.end])
    for label, a, b in (("total", made.start, made.end), ("zone", zone.start, zone.end)):
        weights[label] = (
            size
            / per
            * sum(
                v * overlap(made, ends, max(lo, a), max(max(lo, a), min(hi, b)))[0]
                for lo, hi, v in stretches
            )
        )
    for number, truth in ((found.total, weights["total"]),
                          (found.summary()["zones"][0], weights["zone"])):  # fmt: skip
        half = number["upper"] - number["value"]
        assert abs(number["value"] - truth.real) <= 1.3 * half
        assert abs(number["imaginary"] - truth.imag) <= 1.3 * half
    assert abs(found.balance["difference"]) < 1e-6 * max(map(abs, found.balance.values()))
    serious = [f for f in found.findings if f["level"] == "serious"]
    assert not serious, serious
