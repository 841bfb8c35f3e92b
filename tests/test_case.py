"""Good cases: what they say arrives in SI, with the defaults that are promised."""

import json
import math
import pickle
import tomllib
from pathlib import Path

import numpy as np
import pytest

from srcfit.case import load_case, make_case, make_member
from srcfit.case.lines import key_lines
from srcfit.case.model import (
    Baseline,
    Correction,
    Knowledge,
    Known,
    Limit,
    Lumped,
    PhaseSpec,
    Step,
)
from srcfit.case.source import most_cells
from srcfit.case.vary import vary
from srcfit.member import RIGID, Unknown

HERE = Path(__file__).parent
EXPORTS = sorted((HERE / "exports").glob("*.toml"))
CHECKED = HERE.parent / "datasets" / "cautious_band_check.json"

WORKED = """\
title = "Ground beam under stacked goods"

[member]
kind = "beam"
length = "30 m"
bending_stiffness = "768 MN*m^2"
foundation = "12 MN/m^2"
left = "free"
right = "free"
uncertainty = { foundation = "10 %" }

[[member.support]]
at = "24 m"
kind = "pinned"
settlement = "unknown"

[readings]
file = "settlement.csv"
position = { column = "x", unit = "m" }
[[readings.column]]
column = "w"
kind = "deflection"
unit = "mm"
sd = "0.10 mm"
group = "levelling"
offset = "unknown"
positive = "down"

[source]
unit = "kN/m"
cells = 200
sign = "nonnegative"
zones = [ { name = "bay 1", from = "0 m", to = "6 m" } ]
lumped = [ { name = "crane", at = "26 m" } ]
breaks = [ "17 m", "21 m" ]
known = [ { from = "0 m", to = "30 m", value = "4 kN/m" } ]
total = { value = "920 kN", sd = "20 kN" }
limit = { zone = "bay 1", at_most = "70 kN/m" }

[strength]
solver = "tikhonov"
roughness = "averaged"
choose = "averaged"
level = 0.95
"""

BEAM = {
    "kind": "beam", "length": "30 m", "bending_stiffness": "768 MN*m^2", "left": "pinned",
    "right": "pinned",
}  # fmt: skip
COLUMN = {"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.1 mm"}
READINGS = {"file": "a.csv", "position": {"column": "x", "unit": "m"}, "column": [COLUMN]}


def case(member=BEAM, column=None, source=None, strength=None, readings=None):
    whole = {**READINGS, **(readings or {})}
    if column is not None:
        whole["column"] = [{**COLUMN, **column}]
    return make_case({
        "member": member, "readings": whole, "source": source or {}, "strength": strength or {},
    })  # fmt: skip


def column_of(**keys):
    return case(column=keys).columns[0]


def test_the_worked_case(tmp_path):
    path = tmp_path / "case.toml"
    path.write_text(WORKED)
    found = load_case(path)
    assert found.title == "Ground beam under stacked goods"
    assert (found.folder, found.path, found.files) == (tmp_path, path, (path,))
    member = found.member
    assert member.profiles["p2"].values == (768e6,)
    assert member.profiles["p0"].values == (12e6,)
    assert member.uncertainty["foundation"].amount == pytest.approx(0.1)
    assert member.uncertainty["foundation"].relative
    assert member.supports[0].at == 24.0
    assert member.supports[0].restraint.stiffness == RIGID
    assert member.supports[0].restraint.value == Unknown()
    assert found.member_text["foundation"] == "12 MN/m^2"
    table = found.tables[0]
    assert table.file == tmp_path / "settlement.csv"
    assert (table.position.column, table.position.unit) == ("x", "m")
    column = found.columns[0]
    assert (column.columns, column.kind, column.group) == (("w",), "deflection", "levelling")
    assert column.sd == pytest.approx(1e-4)
    assert (column.positive, column.sign) == ("down", 1)
    assert column.offset == Unknown()
    assert column.line == WORKED[: WORKED.index("[[readings.column]]")].count("\n") + 1
    source = found.source
    assert (source.unit, source.total_unit, source.position_unit) == ("kN/m", "kN", "m")
    assert source.sign == "nonnegative"
    assert source.breaks == (17.0, 21.0)
    assert source.lumped == (Lumped("crane", 26.0),)
    assert source.known == (Known(0.0, 30.0, 4000.0),)
    assert source.total == Knowledge(920e3, 20e3)
    assert source.limit == Limit("bay 1", 70e3, True)
    assert found.strength.level == 0.95
    assert pickle.loads(pickle.dumps(found)) == found


@pytest.mark.parametrize("path", EXPORTS, ids=lambda p: p.stem)
def test_cases_of_the_exports_load(path):
    found = load_case(path)
    assert found.columns
    assert all(t.file.exists() for t in found.tables)


def test_there_are_cases_of_exports():
    assert len(EXPORTS) == 9


@pytest.mark.parametrize("item", json.loads(CHECKED.read_text())["cases"], ids=lambda c: c["name"])
def test_members_of_the_checked_cases_build(item):
    member = make_member(item["member"])
    assert member.length in (30.0, 10.0, 2.4)


@pytest.mark.parametrize("path", EXPORTS, ids=lambda p: p.stem)
def test_every_key_has_its_line(path):
    text = path.read_text(encoding="utf-8")
    lines, rows = key_lines(text), text.split("\n")

    def walk(value, place):
        assert place in lines
        items = value.items() if isinstance(value, dict) else ()
        for key, item in items:
            row = rows[lines[(*place, key)] - 1]
            assert key in row or isinstance(item, (dict, list))
            walk(item, (*place, key))
        for i, item in enumerate(value if isinstance(value, list) else ()):
            walk(item, (*place, i))

    walk(tomllib.loads(text), ())


def test_lines_of_awkward_toml():
    text = (
        'a.b = 1  # c = 2\n"x.y" = """\nz = 3\n"""\n[t."u v"]\nk = [ # [\n  { p = "}" },\n'
        "  { p = ']' , q = [1,\n2] } ]\n\n[[s]]\n[[s.r]]\nw = 1979-05-27\n[[s]]\n[[s.r]]\nw = 2\n"
    )
    tomllib.loads(text)
    lines = key_lines(text)
    expected = {
        ("a", "b"): 1, ("x.y",): 2, ("t", "u v"): 5, ("t", "u v", "k"): 6,
        ("t", "u v", "k", 0, "p"): 7, ("t", "u v", "k", 1, "q"): 8,
        ("t", "u v", "k", 1, "q", 1): 9,
        ("s", 0): 11, ("s", 0, "r", 0, "w"): 13, ("s", 1, "r", 0, "w"): 16,
    }  # fmt: skip
    assert {k: lines[k] for k in expected} == expected


# -- readings -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("word", "sign"), [("down", 1), ("up", -1), ("reversed", -1)]
)  # fmt: skip
def test_directions(word, sign):
    column = column_of(positive=word)
    assert (column.positive, column.sign) == (word, sign)


def test_keys_of_a_column_arrive_in_si():
    column = case(
        column={
            "kind": "strain", "unit": "ue", "sd": "2 ue", "distance": "0.95 m",
            "gauge_length": "5 cm", "range": ["-5000 ue", "5000 ue"], "correlation": "estimate",
            "exclude": [["67 cm", "68 cm"]], "exclude_lines": [12, 14],
            "where": {"block": "M01"}, "baseline": {"where": {"block": "REF"}, "match": "serial"},
            "correction": {"column": "T_C", "unit": "degF", "per": "4.5 ue/K"},
            "offset": {"unknown": True, "sd": "3 ue"}, "scale": {"unknown": True, "sd": "1 %"},
            "drift": "2 ue/h", "step": {"at": "22 m"}, "positive": "reversed",
        },
        readings={"time": {"column": "t", "format": "%d.%m.%Y"}},
    ).columns[0]  # fmt: skip
    assert (column.sd, column.distance, column.gauge_length) == pytest.approx((2e-6, 0.95, 0.05))
    assert column.range == pytest.approx((-5e-3, 5e-3))
    assert column.correlation == "estimate"
    assert column.exclude[0] == pytest.approx((0.67, 0.68))
    assert column.exclude_lines == {12, 14}
    assert column.where == {"block": "M01"}
    assert column.baseline == Baseline({"block": "REF"}, "serial")
    assert column.correction == Correction("T_C", "degF", pytest.approx(4.5e-6))
    assert column.offset == Unknown(0.0, pytest.approx(3e-6))
    assert column.scale == Unknown(1.0, pytest.approx(0.01))
    assert column.drift == pytest.approx(2e-6 / 3600)
    assert column.step == Step(22.0, Unknown())
    assert column.sign == -1


BAR = {
    "kind": "conductor", "length": "2 m", "conductance": "0.4 W*m/K", "left": "free",
    "right": "free",
}  # fmt: skip


def test_temperatures_are_absolute_and_their_spreads_are_not():
    found = case(
        BAR,
        {
            "kind": "temperature", "unit": "degF", "sd": "0.9 degF", "offset": "1.8 degF",
            "range": ["-999 degC", "150 degC"], "step": {"at": "1 m", "value": "0.6 degC"},
        },
        {"unit": "W/m"},
    ).columns[0]  # fmt: skip
    assert found.sd == pytest.approx(0.5)
    assert found.offset == pytest.approx(1.0)
    assert found.range == pytest.approx((-725.85, 423.15))
    assert found.step.amount == pytest.approx(0.6)


def test_driven_columns():
    wall = {
        "kind": "wall", "length": "1 m", "conductivity": "1.6 W/(m*K)", "frequency": "1 1/d",
        "left": {"value": "unknown"}, "right": "insulated",
    }  # fmt: skip
    phased = {
        "kind": "temperature", "unit": "degC", "sd": "0.01 K", "range": ["0 degC", "9 degC"],
        "phase": {"column": "p", "unit": "deg"},
    }  # fmt: skip
    column = case(wall, phased, {"unit": "W/m^3"}).columns[0]
    assert column.phase == PhaseSpec("p", "deg")
    assert column.range == (0.0, 9.0)
    parts = {"kind": "temperature", "unit": "K", "sd": "0.01 K", "component": "imaginary"}
    assert case(wall, parts, {"unit": "W/m^3"}).columns[0].component == "imaginary"


def test_several_tables_and_default_groups():
    def table(file, *columns):
        return {"file": file, "position": {"column": "x", "unit": "ft"}, "column": list(columns)}

    wide = {**COLUMN, "column": ["G1", "G2", "G3"]}
    turn = {"column": "w", "kind": "rotation", "unit": "mrad", "sd": "0.1 mrad"}
    found = make_case({
        "member": BEAM,
        "readings": {"table": [
            table("a.csv", COLUMN, wide, turn),
            table("b.csv", {**COLUMN, "sd": "estimate"}, {**COLUMN, "group": "g"},
                  {**COLUMN, "group": "g", "offset": "unknown"}),
        ]},
    })  # fmt: skip
    assert [t.key for t in found.tables] == ["readings.table[1]", "readings.table[2]"]
    assert [c.group for c in found.columns] == [
        "w (deflection) (a.csv)", "G1..G3", "w (rotation) (a.csv)", "w (deflection) (b.csv)",
        "g", "g",
    ]  # fmt: skip
    assert found.columns[3].estimate_sd
    # an offset is common to its group
    assert [c.offset for c in found.columns[4:]] == [Unknown(), Unknown()]
    assert found.source.position_unit == "ft"
    assert found.columns[5].key == "readings.table[2].column[3]"


def test_positions_in_another_file():
    found = case(readings={"position": {
        "file": "places.csv", "gauge": "name", "column": "x", "unit": "m", "origin": "12.4 km",
        "reversed": True,
    }}).tables[0].position  # fmt: skip
    assert (found.file, found.gauge) == (Path("places.csv"), "name")
    assert found.origin == pytest.approx(12400.0)
    assert found.reversed


# -- source and strength ------------------------------------------------------------------------


def test_defaults_of_source_and_strength():
    found = case()
    source, strength = found.source, found.strength
    assert (source.unit, source.total_unit, source.cells) == ("N/m", "N", 200)
    assert (source.sign, source.smooth, source.background) == ("any", True, False)
    assert (strength.solver, strength.roughness, strength.choose) == (
        "tikhonov", "averaged", "averaged",
    )  # fmt: skip
    assert (strength.level, strength.interval) == (0.95, "cautious")
    assert found.title == "Beam under lateral load"


@pytest.mark.parametrize(
    ("keys", "expected"),
    [
        ({"roughness": 1}, {"roughness": 1}),
        ({"roughness": "3 ft"}, {"roughness": 0.9144}),
        ({"choose": 0.25}, {"choose": 0.25}),
        ({"choose": "leave-one-out"}, {"choose": "leave-one-out"}),
        ({"level": 0.9}, {"level": 0.9}),
        ({"interval": "plain"}, {"interval": "plain"}),
        ({"solver": "svd-cut"}, {"solver": "svd-cut"}),
    ],
)
def test_keys_of_strength(keys, expected):
    found = case(strength=keys).strength
    for key, value in expected.items():
        assert getattr(found, key) == (pytest.approx(value) if isinstance(value, float) else value)


def test_a_correlation_length_of_one_metre_is_not_an_order():
    assert isinstance(case(strength={"roughness": "1 m"}).strength.roughness, float)
    assert isinstance(case(strength={"roughness": 1}).strength.roughness, int)


def test_parts_of_a_source():
    found = case(source={
        "unit": "lbf/ft",
        "lumped": [{"name": "a", "between": ["3 m", "5 m"], "width": "50 cm"},
                   {"name": "b", "at": "30.0000000000001 m"}],
        "known": [{"at": "4 m", "value": "3 kN"}, {"from": "0 m", "to": "9 m", "value": "1 kN/m"},
                  {"from": "5 m", "to": "12 m", "value": "1 kN/m"}],
        "zero": [["0 m", "2 m"], ["28 m", "30 m"]],
        "zones": [{"name": "z", "from": "0 m", "to": "30 m"}],
        "limit": {"zone": "z", "at_most": "80 kN"},
        "smooth": False,
        "position_unit": "ft",
    }).source  # fmt: skip
    assert found.total_unit == "lbf"
    assert found.lumped == (Lumped("a", None, (3.0, 5.0), 0.5), Lumped("b", 30.0))
    assert found.known[0] == Known(4.0, 4.0, 3000.0)
    assert len(found.known) == 3
    assert found.zero == ((0.0, 2.0), (28.0, 30.0))
    assert found.limit == Limit("z", 80e3, False)
    assert found.position_unit == "ft"


@pytest.mark.parametrize(
    ("kind", "unit", "total"),
    [("cylinder", "kW/m^3", "kW/m"), ("sphere", "W/m^3", "W"), ("wall", "W/cm^3", "W/cm^2")],
)
def test_default_total_units(kind, unit, total):
    span = {"length": "1 m"} if kind == "wall" else {"inner_radius": "1 cm", "outer_radius": "1 m"}
    member = {"kind": kind, "conductivity": "1 W/(m*K)", "left": "free", "right": "free", **span}
    column = {"kind": "temperature", "unit": "K", "sd": "0.1 K"}
    assert case(member, column, {"unit": unit}).source.total_unit == total


@pytest.mark.parametrize(
    ("amount", "unit", "source"),
    [("Bq", "Bq/m^3", {}), ("kg", "mg/L", {}), ("mol", "mmol/L", {"unit": "nmol/(m^3*s)"})],
)
def test_a_column_speaks_of_one_amount(amount, unit, source):
    member = {
        "kind": "column", "length": "0.3 m", "diffusivity": "6e-10 m^2/s", "left": "fixed",
        "right": "closed",
    }  # fmt: skip
    found = case(member, {"kind": "concentration", "unit": unit, "sd": f"1 {unit}"}, source)
    assert found.member.kind.response_unit == f"{amount}/m^3"
    assert found.source.total_unit.startswith(source.get("unit", f"{amount}/")[:3].strip("/"))


def test_general_cases_take_plain_numbers():
    member = {"kind": "general", "order": 2, "start": -1, "end": 1, "p": "1 - x**2",
              "left": "regular", "right": "regular", "q": 2}  # fmt: skip
    found = case(
        member,
        {"kind": "response", "unit": None, "sd": 0.01, "exclude": [[0.5, 0.6]]},
        {"zones": [{"name": "z", "from": -0.5, "to": 0.5}], "known": [{"at": 0, "value": 2}]},
        readings={"position": {"column": "x"}},
    )
    assert found.columns[0].unit == "1"
    assert found.columns[0].exclude == ((0.5, 0.6),)
    assert found.tables[0].position.unit == "m"
    assert found.source.zones[0].start == -0.5
    assert found.source.known == (Known(0.0, 0.0, 2.0),)


def test_most_cells_is_a_sensible_number():
    assert 1000 < most_cells() < 200_000
    assert most_cells() == math.floor(most_cells())


# -- uncertainty --------------------------------------------------------------------------------

UNCERTAIN = {
    "kind": "beam", "length": "9 m",
    "bending_stiffness": [["0 m", "4 m", "10 N*m^2"], ["4 m", "9 m", "20 N*m^2"]],
    "foundation": "5 N/m^2",
    "left": {"kind": "pinned", "rotation_spring": "2 N*m", "settlement": "1 mm"},
    "right": {"deflection_spring": "7 N/m"},
    "support": [{"at": "6 m", "kind": "spring", "stiffness": "3 N/m"},
                {"at": "3 m", "kind": "spring", "stiffness": "4 N/m"}],
    "hinge": [{"at": "5 m", "spring": "6 N*m"}],
}  # fmt: skip


def uncertain(key, amount):
    return make_member({**UNCERTAIN, "uncertainty": {key: amount}})


@pytest.mark.parametrize(
    ("key", "amount", "read", "expected"),
    [
        ("bending_stiffness", "10 %", lambda m: m.profiles["p2"].values, (12.0, 24.0)),
        ("bending_stiffness", "1 N*m^2", lambda m: m.profiles["p2"].values, (12.0, 22.0)),
        ("foundation", "1 N/m^2", lambda m: m.profiles["p0"].values, (7.0,)),
        ("left.rotation_spring", "25 %", lambda m: [m.left.rotation.stiffness], [3.0]),
        ("left.settlement", "1 mm", lambda m: [m.left.response.value], [0.003]),
        ("right.deflection_spring", "50 %", lambda m: [m.right.response.stiffness], [14.0]),
        ("support.1.stiffness", "50 %", lambda m: [s.restraint.stiffness for s in m.supports],
         [4.0, 6.0]),
        ("hinge.1.spring", "50 %", lambda m: [m.hinges[0].spring], [12.0]),
    ],
)  # fmt: skip
def test_uncertain_amounts_can_be_moved(key, amount, read, expected):
    member = uncertain(key, amount)
    assert read(vary(member, key, 2.0)) == pytest.approx(expected)
    assert read(vary(member, key, 0.0)) == pytest.approx(read(member))


def test_a_moved_ambient_takes_along_what_refers_to_it():
    member = make_member({
        "kind": "conductor", "length": "2 m", "conductance": "1 W*m/K", "loss": "1 W/(m*K)",
        "ambient": "20 degC", "left": "fixed",
        "right": {"transfer": "2 W/K", "ambient": "10 degC"}, "uncertainty": {"ambient": "2 degC"},
    })  # fmt: skip
    moved = vary(member, "ambient")
    assert moved.ambient == pytest.approx(295.15)
    assert moved.left.response.value == pytest.approx(295.15)
    assert moved.right.response.value == pytest.approx(283.15)


def test_a_moved_factor_moves_its_products():
    member = make_member({
        "kind": "column", "length": "1 m", "diffusivity": "2 m^2/s", "porosity": "0.5",
        "decay": "3 1/s", "left": "closed", "right": "closed", "uncertainty": {"porosity": "20 %"},
    })  # fmt: skip
    moved = vary(member, "porosity")
    assert [moved.profiles[s].values[0] for s in "pqr"] == pytest.approx([1.2, 1.8, 0.6])


def test_a_moved_curve_keeps_its_shape():
    member = make_member({
        "kind": "general", "order": 2, "start": 0, "end": 1, "p": "1 + x", "left": "fixed",
        "right": "free", "uncertainty": {"p": "10 %"},
    })  # fmt: skip
    x = np.array([0.2, 0.9])
    assert vary(member, "p").profiles["p"](x) == pytest.approx(1.1 * (1 + x))
    absolute = make_member({
        "kind": "general", "order": 2, "start": 0, "end": 1, "p": "1 + x", "left": "fixed",
        "right": "free", "uncertainty": {"p": 0.2},
    })  # fmt: skip
    assert vary(absolute, "p").profiles["p"](x) == pytest.approx(1.2 + x)


def test_nested_uncertainty_is_the_same_as_a_quoted_path():
    nested = make_member({**UNCERTAIN, "uncertainty": {"left": {"rotation_spring": "25 %"}}})
    assert nested.uncertainty == uncertain("left.rotation_spring", "25 %").uncertainty


def test_a_bom_and_crlf_do_no_harm(tmp_path):
    path = tmp_path / "case.toml"
    path.write_bytes(b"\xef\xbb\xbf" + WORKED.replace("\n", "\r\n").encode())
    assert load_case(path).columns[0].line == 20
