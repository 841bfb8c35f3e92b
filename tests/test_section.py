"""Section forces as answers with intervals, and the equilibrium that is printed."""

import numpy as np
import pandas as pd
import pytest
from referees import beams
from test_forward import case_of

import srcfit
from srcfit.cli import main
from srcfit.solve import solve

BEAM = {
    "kind": "beam", "length": "8 m", "bending_stiffness": "20 MN*m^2", "left": "clamped",
    "right": "pinned", "support": [{"at": "5 m", "kind": "pinned"}],
}  # fmt: skip
SOLID = beams.Beam(8.0, 20e6, left=beams.CLAMPED, right=beams.PINNED,
                   supports=((5.0, beams.RIGID, 0.0),))  # fmt: skip


def load(x):
    return 12e3 + 5e3 * np.sin(x)


def beam_case(folder, **source):
    places = np.linspace(0.4, 7.6, 19).round(6)
    bent = beams.bend(SOLID, [(0, 5, load), (5, 8, load)], [(2.5, 9e3)], places=places)
    w, M = bent.at("deflection", places), bent.at("moment", places)
    rng = np.random.default_rng(4)
    sd = 0.01 * np.abs(w).max(), 0.01 * np.abs(M).max()
    rows = [
        (x, a + sd[0] * rng.normal(), b + sd[1] * rng.normal())
        for x, a, b in zip(places.tolist(), w.tolist(), M.tolist(), strict=True)
    ]
    columns = [
        {"column": "w", "kind": "deflection", "unit": "m", "sd": f"{float(sd[0])!r} m"},
        {"column": "M", "kind": "moment", "unit": "N*m", "sd": f"{float(sd[1])!r} N*m"},
    ]
    source = {"unit": "kN/m", "cells": 80, "lumped": [{"name": "p", "at": "2.5 m"}]} | source
    return case_of(folder, BEAM, columns, rows, source), bent


def test_moment_and_shear_of_a_beam(tmp_path):
    case, bent = beam_case(tmp_path)
    found = srcfit.recover(case)
    table = found.section
    assert list(table) == [
        "x [m]", "moment [kN*m]", "moment_sd [kN*m]", "moment_lower [kN*m]",
        "moment_upper [kN*m]", "shear [kN]", "shear_sd [kN]", "shear_lower [kN]",
        "shear_upper [kN]",
    ]  # fmt: skip
    x = table["x [m]"].to_numpy()
    assert {0.0, 2.5, 5.0, 8.0} <= set(x.round(9))
    right = np.append(np.diff(x) > 0, True)
    for name, unit in (("moment", "kN*m"), ("shear", "kN")):
        truth = np.where(right, bent.at(name, x), bent.at(name, x - 1e-7)) / 1e3
        lower, upper = (table[f"{name}_{end} [{unit}]"] for end in ("lower", "upper"))
        assert ((lower <= truth) & (truth <= upper)).mean() >= 0.95
        assert (upper - lower).max() < 0.35 * np.ptp(truth)
    # the clamped end's couple is the moment there, a reaction the jump of the shear
    reactions = {(r["name"], r["kind"]): r for r in found.summary()["reactions"]}
    couple = reactions["left", "moment"]
    assert couple["value"] == pytest.approx(table["moment [kN*m]"].iloc[0], rel=1e-9)
    assert couple["sd"] == pytest.approx(table["moment_sd [kN*m]"].iloc[0], rel=1e-6)
    end = reactions["right", "shear force"] if ("right", "shear force") in reactions else (
        next(r for (name, kind), r in reactions.items() if name == "right" and kind != "moment")
    )  # fmt: skip
    assert end["value"] == pytest.approx(-table["shear [kN]"].iloc[-1], rel=1e-9)
    saved = found.save(tmp_path / "out")
    assert pd.read_csv(saved / "section.csv").shape == table.shape


def test_the_estimate_bears_its_section_forces(tmp_path):
    """Every row of the table against `respond` under the recovered source."""
    case, _ = beam_case(tmp_path)
    found = srcfit.recover(case)
    cells = found.source
    edges = np.append(cells["from [m]"], cells["to [m]"].iloc[-1])
    f = cells["estimate [kN/m]"].to_numpy() * 1e3
    x = found.section["x [m]"].to_numpy()
    at = np.concatenate([(edges[1:] + edges[:-1]) / 2])

    def density(s):
        return f[np.clip(np.searchsorted(edges, s) - 1, 0, len(at) - 1)]

    lumped = [(2.5, found.summary()["lumped"][0]["value"] * 1e3)]
    for name, unit in (("moment", "kN*m"), ("shear", "kN")):
        wanted = srcfit.respond(case.member, x, density, lumped, name) / 1e3
        size = np.abs(wanted).max()
        got = found.section[f"{name} [{unit}]"].to_numpy()
        right = np.append(np.diff(x) > 0, True)
        np.testing.assert_allclose(got[right], wanted[right], atol=1e-7 * size)
        # left of a force at one place and of a support: the jump is the force, the reaction
        jump = dict(zip(x[~right], got[1:][~right[:-1]] - got[:-1][~right[:-1]], strict=True))
        reaction = next(r for r in found.summary()["reactions"] if r["at"] == 5.0)
        force = {2.5: -lumped[0][1] / 1e3, 5.0: reaction["value"]}
        assert jump == pytest.approx(force if name == "shear" else {2.5: 0, 5.0: 0}, abs=1e-6)


ORDER_2 = {
    "rod": ({"axial_stiffness": "20 MN", "left": "fixed", "right": "free"}, "displacement", "mm",
            "kN/m", "force [kN]"),
    "conductor": ({"conductance": "0.4 W*m/K", "loss": "2 W/(m*K)", "ambient": "20 degC",
                   "left": "fixed", "right": "insulated"}, "temperature", "degC", "W/m",
                  "heat_flow [W]"),
    "shaft": ({"torsional_stiffness": "2 MN*m^2", "left": "fixed", "right": "free"}, "twist",
              "mrad", "kN*m/m", "torque [kN*m]"),
}  # fmt: skip


@pytest.mark.parametrize("kind", ORDER_2)
def test_flow_or_force_of_order_2(tmp_path, kind):
    keys, sensor, unit, source, name = ORDER_2[kind]
    member = {"kind": kind, "length": "3 m", **keys}
    columns = [{"column": "u", "kind": sensor, "unit": unit, "sd": "0.1 mm" if unit == "mm" else
                ("0.1 K" if unit == "degC" else "0.1 mrad")}]  # fmt: skip
    rows = [(x, 20 + 3 * np.sin(x)) for x in np.linspace(0.1, 2.9, 12)]
    found = srcfit.recover(case_of(tmp_path, member, columns, rows, {"unit": source, "cells": 40}))
    assert list(found.section)[1] == name
    value = found.section[name]
    free_end = abs(value.iloc[-1])
    assert free_end < 1e-9 * value.abs().max()
    left = found.summary()["reactions"][0]
    sign = -1 if kind == "conductor" else 1
    assert left["value"] == pytest.approx(sign * value.iloc[0], rel=1e-9)


def test_equilibrium_is_printed(tmp_path, capsys):
    case, _ = beam_case(tmp_path)
    solved = solve(case, srcfit.read(case))
    assert solved.answers.value[0] > 0
    text = f"""
[member]
kind = "beam"
length = "8 m"
bending_stiffness = "20 MN*m^2"
left = "clamped"
right = "pinned"
[[member.support]]
at = "5 m"
kind = "pinned"
[readings]
file = "readings.csv"
position = {{ column = "x", unit = "m" }}
[[readings.column]]
column = "w"
kind = "deflection"
unit = "m"
sd = "{float(solved.sd[0])!r} m"
[source]
unit = "kN/m"
known = [ {{ from = "0 m", to = "8 m", value = "2 kN/m" }} ]
"""
    (tmp_path / "case.toml").write_text(text)
    out = tmp_path / "result"
    assert main(["recover", str(tmp_path / "case.toml"), "-o", str(out)]) == 0
    said = capsys.readouterr().out
    lines = said[said.index("Balance") :].splitlines()[1:5]
    names = [line.strip().rsplit("  ", 1)[0].strip() for line in lines]
    numbers = [float(line.split()[-2]) for line in lines]
    assert names == ["source", "ends and supports", "along the member", "difference"]
    assert numbers[0] == pytest.approx(numbers[1], rel=1e-4)
    assert numbers[2:] == [0, 0]
    assert main(["predict", str(tmp_path / "case.toml"), "--source", str(out)]) == 0
    again = capsys.readouterr().out
    assert lines[0] in again.splitlines()


def test_nothing_is_printed_where_nothing_is_determined(tmp_path):
    """A free beam on bedding with an unknown datum: uniform load and datum are alike."""
    member = {"kind": "beam", "length": "8 m", "bending_stiffness": "20 MN*m^2",
              "foundation": "3 MN/m^2", "left": "free", "right": "free"}  # fmt: skip
    columns = [{"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.1 mm",
                "offset": "unknown"}]  # fmt: skip
    rows = [(x, 1 + np.sin(x)) for x in np.linspace(0.2, 7.8, 12)]
    source = {"unit": "kN/m", "cells": 40}
    found = srcfit.recover(case_of(tmp_path, member, columns, rows, source))
    assert found.balance is None
    # a level load bends nothing: moments are told all the same
    assert found.section["moment [kN*m]"].notna().all()
    assert found.section["shear [kN]"].notna().all()
