"""A borehole through an ice cap: real depths and real noise on a layered wall.

Data: datasets/real/ice_borehole_devon.csv (Devon Ice Cap, 1973). What heats the ice is not known
independently, so the source of the second test is invented; its readings have the depths and the
errors of the real ones. Conductivities of firn and ice: usual values, from memory.
"""

from pathlib import Path

import numpy as np
import pytest
from test_forward import case_of

import srcfit
from srcfit.solve import solve

DATA = Path(__file__).parent.parent / "datasets" / "real" / "ice_borehole_devon.csv"
ICE = {
    "kind": "wall", "length": "300 m", "ambient": "0 degC",
    "conductivity": [["0 m", "20 m", "0.9 W/(m*K)"], ["20 m", "60 m", "1.7 W/(m*K)"],
                     ["60 m", "300 m", "2.2 W/(m*K)"]],
    "left": {"value": "unknown"}, "right": {"value": "unknown"},
}  # fmt: skip
SOURCE = {
    "unit": "mW/m^3", "cells": 90,
    "zones": [{"name": "upper", "from": "0 m", "to": "100 m"},
              {"name": "bed", "from": "200 m", "to": "300 m"}],
}  # fmt: skip


def profile():
    rows = [r.split(",") for r in DATA.read_text().splitlines() if not r.startswith("#")][1:]
    return np.array(rows, dtype=float).T


def errors():
    """Deviations of the real readings from a smooth curve, at their full size."""
    x, T = profile()
    left = T - np.polynomial.Chebyshev.fit(x, T, 10)(x)
    return left * np.sqrt(len(x) / (len(x) - 11))


def column(sd):
    return [{"column": "T", "kind": "temperature", "unit": "degC", "sd": sd}]


def test_noise_of_the_borehole(tmp_path):
    """The stated uncertainty is 0.01 degC; the residuals find it back."""
    x, T = profile()
    rows = zip(x.tolist(), T.tolist(), strict=True)
    found = srcfit.recover(case_of(tmp_path, ICE, column("estimate"), rows, SOURCE))
    group = found.summary()["noise"]["groups"][0]
    assert group["estimated"]
    assert 0.008 < group["sd"] < 0.015
    assert len(x) == found.summary()["fit"]["used"] == 42
    codes = {f["code"] for f in found.findings}
    assert "residuals-correlated" not in codes
    stated = srcfit.recover(
        case_of(tmp_path, ICE, column("0.01 K"), zip(x.tolist(), T.tolist(), strict=True), SOURCE)
    )
    assert "noise-contradicted" not in {f["code"] for f in stated.findings}
    # the heat that passes: 2.2 W/(m K) times the slope of a straight line through the deepest ice
    deep = x > 250
    slope = np.polyfit(x[deep], T[deep], 1)[0]
    bed = next(r for r in stated.summary()["reactions"] if r["name"] == "right")
    assert bed["unit"] == "mW/m^2" or bed["unit"].startswith("mW")
    assert abs(bed["value"] + 2.2 * slope * 1e3) < 15


def heat(x):
    """Invented size; shape of deformation heating, depth to the fourth power (Glen's law, n = 3).

    The firn cools a little [W/m3].
    """
    return 1.2e-3 * (x / 300) ** 4 - 0.4e-3 * np.exp(-x / 40)


def integral(a, b):
    x = np.linspace(a, b, 20001)
    return np.trapezoid(heat(x), x) * 1e3


@pytest.mark.parametrize("sd", ["0.011 K", "estimate"])
def test_invented_heat_with_real_errors(tmp_path, sd):
    """40 reshuffled draws of the real errors; nominal 95 %."""
    x, _ = profile()
    member = srcfit.make_member(
        {**ICE, "left": {"value": "-23.2 degC"}, "right": {"value": "-18.4 degC"}}
    )
    clean = srcfit.respond(member, x, heat) - 273.15
    real = errors()
    rng = np.random.default_rng(8)
    truth = [integral(0, 300), integral(0, 100), integral(200, 300), -23.2]
    held = np.zeros(4)
    for _ in range(40):
        noisy = clean + rng.permutation(real) * rng.choice([-1, 1], len(x))
        rows = zip(x.tolist(), noisy.tolist(), strict=True)
        case = case_of(tmp_path, ICE, column(sd), rows, SOURCE)
        s = solve(case, srcfit.read(case), criteria=False)
        blocks = s.asked.blocks
        at = [0, blocks["zones"].start, blocks["zones"].start + 1, blocks["nuisances"].start]
        scale, shift = s.asked.factor[at], s.asked.shift[at]
        lower, upper = ((v[at] + shift) * scale for v in (s.answers.lower, s.answers.upper))
        held += (lower <= truth) & (truth <= upper)
    assert (held >= 34).all(), held  # 40 at 95 %: fewer than 34 once in a thousand
