"""Offset and drift as nuisances: the thermometer calibration of the GUM.

JCGM 100:2008 (GUM), H.3, Table H.6: y1 = -0.1712, s(y1) = 0.0029, y2 = 0.00218, s(y2) = 0.00067,
r = -0.930, b(30) = -0.1494, u(b(30)) = 0.0041; to more digits by 15-digit least squares.
"""

import csv
from pathlib import Path

import numpy as np
import pytest

import srcfit
from srcfit.bands import cautious
from srcfit.problem import Grid, Problem, Questions

FILE = Path(__file__).parent.parent / "datasets" / "gum_h3.csv"
START = 20.0
PRINTED = {  # value, standard uncertainty, half of the last printed digit of each
    "y1": (-0.1712, 0.0029, 0.5e-4),
    "y2": (0.00218, 0.00067, 0.5e-5),
    "b(30)": (-0.1494, 0.0041, 0.5e-4),
}
DIGITS = {
    "y1": (-0.17120379013135, 0.00287759783515995),
    "y2": (0.00218269773988728, 0.000667938773227832),
    "b(30)": (-0.149376812732477, 0.00413859575285495),
}


def calibration():
    with FILE.open(encoding="utf-8") as lines:
        rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    return tuple(np.array([float(r[k]) for r in rows]) for k in ("t_degC", "b_degC"))


def check(name, value, sd):
    printed, uncertainty, half = PRINTED[name]
    assert value == pytest.approx(printed, abs=half)
    assert sd == pytest.approx(uncertainty, abs=half)
    assert (value, sd) == pytest.approx(DIGITS[name], rel=1e-9)


def test_offset_and_drift():
    t, b = calibration()
    B = np.stack([np.ones_like(t), t - START], axis=1)
    grid = Grid(np.array([0.0, 1.0]), np.ones(1), np.zeros(1, dtype=bool))
    problem = Problem(
        np.zeros((len(b), 1)), B, b, grid, ("offset", "drift"),
        constant=False, smooth=False, stated=False,
    )  # fmt: skip
    columns = np.array([[1.0, 0.0], [0.0, 1.0], [1.0, 10.0], [1.0, 1.0]])
    answers = cautious(problem, Questions(np.zeros((4, 1)), columns))
    for i, name in enumerate(DIGITS):
        check(name, answers.value[i], answers.sd[i])
    # correlation from the variance of the sum
    s1, s2, _, both = answers.sd
    assert (both**2 - s1**2 - s2**2) / (2 * s1 * s2) == pytest.approx(-0.930429603093446, rel=1e-8)
    assert answers.fit.noise == pytest.approx(0.00349756396350528, rel=1e-9)


def test_two_unknown_ends(tmp_path):
    # an idle rod of 10 m is a straight line between its ends: t - 20 degC as a place in m makes
    # the left end y1 and the right end b(30)
    t, b = calibration()
    rows = [f"{x!r},{y!r}" for x, y in zip((t - START).tolist(), b.tolist(), strict=True)]
    (tmp_path / "b.csv").write_text("x,b\n" + "\n".join(rows) + "\n", encoding="utf-8")
    case = srcfit.make_case(
        {
            "title": "Calibration line",
            "member": {
                "kind": "rod", "length": "10 m", "axial_stiffness": "1 MN",
                "left": {"value": "unknown"}, "right": {"value": "unknown"},
            },
            "readings": {
                "file": "b.csv", "position": {"column": "x", "unit": "m"},
                "column": [{"column": "b", "kind": "displacement", "unit": "m", "sd": "estimate"}],
            },
            "source": {"unit": "N/m", "smooth": False, "lumped": [{"name": "none", "at": "10 m"}]},
        },
        tmp_path,
    )  # fmt: skip
    found = {n["name"]: n for n in srcfit.recover(case).summary()["nuisances"]}
    for name, key in (("y1", "left.value"), ("b(30)", "right.value")):
        check(name, found[key]["value"], found[key]["sd"])


def test_offset_and_drift_from_a_table_with_times(tmp_path):
    # a held rod that nothing loads: what its readings show is offset and drift; an hour stands
    # for a kelvin and the first row, 20 degC, is only there to start the clock
    t, b = calibration()
    when = np.datetime64("2026-01-01T00:00:00") + np.round(3600e3 * (t - START)).astype(int) * (
        np.timedelta64(1, "ms")
    )
    rows = [f"1,{w},{y!r}" for w, y in zip(when.astype(str), b.tolist(), strict=True)]
    rows.insert(0, "1,2026-01-01T00:00:00.000,0")
    (tmp_path / "b.csv").write_text("x,time,b\n" + "\n".join(rows) + "\n", encoding="utf-8")
    case = srcfit.make_case(
        {
            "title": "Drift",
            "member": {
                "kind": "rod", "length": "2 m", "axial_stiffness": "1 MN",
                "left": "fixed", "right": "fixed",
            },
            "readings": {
                "file": "b.csv", "position": {"column": "x", "unit": "m"},
                "time": {"column": "time", "format": "%Y-%m-%dT%H:%M:%S.%f"},
                "column": [{
                    "column": "b", "kind": "displacement", "unit": "m", "sd": "estimate",
                    "offset": "unknown", "drift": "unknown", "exclude_lines": [2],
                }],
            },
            "source": {"unit": "N/m", "smooth": False, "lumped": [{"name": "none", "at": "2 m"}]},
        },
        tmp_path,
    )  # fmt: skip
    found = {n["name"]: n for n in srcfit.recover(case).summary()["nuisances"]}
    check("y1", found["offset:b"]["value"], found["offset:b"]["sd"])
    drift = found["drift:b"]
    per_hour = {"m/s": 3600.0, "m/h": 1.0}[drift["unit"]]
    check("y2", drift["value"] * per_hour, drift["sd"] * per_hour)
