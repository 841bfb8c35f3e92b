"""Every member kind keeps the contract; a new one is tested by being in MEMBERS."""

import math
import pickle
import time

import numpy as np
import pytest

import srcfit
from srcfit.case import load_case, make_member
from srcfit.case.template import template
from srcfit.errors import CaseError
from srcfit.member import RIGID, Member, Unknown
from srcfit.members import MEMBERS
from srcfit.members.general import GENERAL_4
from srcfit.quantities import QUANTITIES

KINDS = [*MEMBERS.values(), GENERAL_4]

# keys, sensors: the names that users know; [required], [optional], [sensors]
NAMES = {
    "rod": ("axial_stiffness", "foundation mass", "displacement strain force"),
    "cable": ("tension", "foundation mass", "deflection rotation force"),
    "conductor": ("conductance", "loss heat_capacity", "temperature heat_flow"),
    "beam": (
        "bending_stiffness", "foundation tension shear_stiffness mass",
        "deflection rotation curvature strain moment shear reaction",
    ),
    "shaft": ("torsional_stiffness", "restraint inertia", "twist twist_rate torque"),
    "wall": ("conductivity", "loss heat_capacity", "temperature heat_flux"),
    "cylinder": ("conductivity", "loss heat_capacity", "temperature heat_flux"),
    "sphere": ("conductivity", "loss heat_capacity", "temperature heat_flux"),
    "column": ("diffusivity", "porosity decay", "concentration flux"),
    "aquifer": ("transmissivity", "leakage storage", "head flow"),
    "radial_aquifer": ("transmissivity", "leakage storage", "head flow"),
    "general": ("p", "q r", "response slope flux"),
}  # fmt: skip


def test_all_kinds_are_there():
    assert list(MEMBERS) == list(NAMES)


@pytest.mark.parametrize("kind", MEMBERS.values(), ids=lambda k: k.name)
def test_names_that_users_know(kind):
    required, optional, sensors = (text.split() for text in NAMES[kind.name])
    assert [c.key for c in kind.coefficients if c.required] == required
    assert {c.key for c in kind.coefficients if not c.required} == set(optional)
    assert [s.name for s in kind.sensors] == sensors


@pytest.mark.parametrize("kind", KINDS, ids=lambda k: f"{k.name}{k.order}")
def test_a_kind_is_whole(kind):
    keys = {c.key for c in kind.coefficients}
    assert {k for product in kind.operator.values() for k in product} == keys
    assert ("p" if kind.order == 2 else "p2") in kind.operator
    for sensor in kind.sensors:
        assert sensor.quantity == "reaction" or kind.order in QUANTITIES[sensor.quantity][0]
        assert len(sensor.directions) in (0, 2)
    words = " ".join(kind.cautions).lower()
    assert "not for alarms" in words or "do not use it for alarms" in words
    assert "not detected" in words
    assert len(kind.cautions) >= 3
    for spec in kind.coefficients:
        assert spec.meaning


@pytest.mark.parametrize("name", MEMBERS)
def test_the_template_of_every_kind_loads(name, tmp_path):
    path = tmp_path / "case.toml"
    path.write_text(template(name), encoding="utf-8")
    case = load_case(path)
    assert case.member.kind.name == name
    assert case.columns[0].kind in [s.name for s in case.member.kind.sensors]
    assert len(case.source.zones) == 1
    assert "invented" in template(name)


@pytest.mark.parametrize("name", MEMBERS)
def test_members_pickle_small(name):
    member = make_member({"kind": name, **MEMBERS[name].demo["member"]})
    packed = pickle.dumps(member)
    assert len(packed) < 20_000
    again = pickle.loads(packed)
    x = np.linspace(member.start, member.end, 7)
    for symbol, profile in member.profiles.items():
        assert np.array_equal(again.profiles[symbol](x), profile(x))


def test_no_template_for_an_unknown_kind():
    with pytest.raises(CaseError, match="did you mean `beam`"):
        template("beem")


def test_make_member_is_quick_after_the_first_call():
    mapping = {
        "kind": "beam", "length": "4 m", "bending_stiffness": "1.68 MN*m^2",
        "left": "pinned", "right": "pinned",
    }  # fmt: skip
    make_member(mapping)
    best = math.inf
    for _ in range(5):
        start = time.perf_counter()
        member = make_member(mapping)
        best = min(best, time.perf_counter() - start)
    assert best < 5e-3
    assert (member.start, member.end) == (0.0, 4.0)
    assert member.profiles["p2"].values == (1.68e6,)
    assert member.left.response.stiffness == RIGID
    assert member.left.rotation.stiffness == 0


def test_the_face_is_lazy_and_survives_imports_of_its_modules():
    assert srcfit.make_member is make_member
    import srcfit.kernel as module_or_function

    assert callable(module_or_function)
    assert callable(srcfit.kernel)
    with pytest.raises(AttributeError, match="no attribute 'kernels'"):
        _ = srcfit.kernels
    assert set(srcfit.__all__) <= set(dir(srcfit))


# -- ends ---------------------------------------------------------------------------------------

ROD = {"kind": "rod", "length": "2 m", "axial_stiffness": "3 N", "right": "free"}
BAR = {"kind": "conductor", "length": "2 m", "conductance": "3 W*m/K", "right": "insulated"}
BEAM = {"kind": "beam", "length": "2 m", "bending_stiffness": "3 N*m^2", "right": "free"}


def left(base, end, **more):
    return make_member({**base, "left": end, **more}).left


@pytest.mark.parametrize(
    ("base", "end", "more", "stiffness", "value"),
    [
        (ROD, "fixed", {}, RIGID, 0.0),
        (ROD, "free", {}, 0.0, 0.0),
        (ROD, "insulated", {}, 0.0, 0.0),
        (ROD, {"value": "3 mm"}, {}, RIGID, 0.003),
        (ROD, {"value": "unknown"}, {}, RIGID, Unknown()),
        (ROD, {"value": "unknown", "guess": "1 mm", "sd": "2 mm"}, {}, RIGID, Unknown(1e-3, 2e-3)),
        (ROD, {"spring": "2 MN/m"}, {}, 2e6, 0.0),
        (BAR, "fixed", {"ambient": "20 degC"}, RIGID, 293.15),
        (BAR, "closed", {}, 0.0, 0.0),
        (BAR, {"value": "55 degC"}, {}, RIGID, 328.15),
        (BAR, {"value": "unknown"}, {}, RIGID, Unknown()),
        (BAR, {"value": "unknown"}, {"ambient": "20 degC"}, RIGID, Unknown(293.15)),
        (
            BAR, {"value": "unknown", "guess": "30 degC", "sd": "5 degC"}, {}, RIGID,
            Unknown(303.15, 5.0),
        ),
        (BAR, {"transfer": "12 W/K", "ambient": "20 degC"}, {}, 12.0, 293.15),
        (BAR, {"transfer": "12 W/K"}, {"ambient": "68 degF"}, 12.0, 293.15),
    ],
)  # fmt: skip
def test_ends_of_order_2(base, end, more, stiffness, value):
    found = left(base, end, **more).response
    assert found.stiffness == stiffness
    if isinstance(value, Unknown):
        assert found.value.guess == pytest.approx(value.guess)
        assert found.value.sd == (None if value.sd is None else pytest.approx(value.sd))
    else:
        assert found.value == pytest.approx(value)


@pytest.mark.parametrize(
    ("end", "response", "rotation"),
    [
        ("pinned", (RIGID, 0.0), (0.0, 0.0)),
        ("clamped", (RIGID, 0.0), (RIGID, 0.0)),
        ("free", (0.0, 0.0), (0.0, 0.0)),
        ("guided", (0.0, 0.0), (RIGID, 0.0)),
        ({"deflection_spring": "4 MN/m"}, (4e6, 0.0), (0.0, 0.0)),
        (
            {"deflection_spring": "rigid", "rotation_spring": "2 MN*m"},
            (RIGID, 0.0), (2e6, 0.0),
        ),
        ({"rotation_spring": "2 kN*m/rad"}, (0.0, 0.0), (2e3, 0.0)),
        ({"kind": "pinned", "rotation_spring": "2 kN*m"}, (RIGID, 0.0), (2e3, 0.0)),
        ({"kind": "pinned", "settlement": "3 mm"}, (RIGID, 0.003), (0.0, 0.0)),
        ({"kind": "pinned", "settlement": "unknown"}, (RIGID, Unknown()), (0.0, 0.0)),
        (
            {"kind": "pinned", "settlement": "unknown", "sd": "2 mm"},
            (RIGID, Unknown(0.0, 0.002)), (0.0, 0.0),
        ),
        ({"kind": "clamped", "rotation": "unknown"}, (RIGID, 0.0), (RIGID, Unknown())),
        ({"kind": "clamped", "rotation": "2 mrad"}, (RIGID, 0.0), (RIGID, 0.002)),
        (
            {"kind": "clamped", "rotation": {"unknown": True, "sd": "1 mrad"}},
            (RIGID, 0.0), (RIGID, Unknown(0.0, 0.001)),
        ),
    ],
)  # fmt: skip
def test_ends_of_order_4(end, response, rotation):
    found = left(BEAM, end)
    assert (found.response.stiffness, found.response.value) == response
    assert (found.rotation.stiffness, found.rotation.value) == rotation


def test_a_radius_of_0_is_the_axis():
    solid = {
        "kind": "cylinder", "inner_radius": "0 m", "outer_radius": "5 cm",
        "conductivity": "2 W/(m*K)", "right": {"value": "20 degC"},
    }  # fmt: skip
    assert make_member(solid).left.axis
    assert make_member({**solid, "left": "axis"}).left.axis
    assert make_member({**solid, "left": "insulated"}).left.axis
    with pytest.raises(CaseError, match="nothing can be held at radius 0"):
        make_member({**solid, "left": "fixed", "ambient": "20 degC"})
    with pytest.raises(CaseError, match="no axis at this end"):
        make_member({**solid, "inner_radius": "1 cm", "left": "axis"})


@pytest.mark.parametrize(("side", "expected"), [("left", -0.5), ("right", 0.5)])
def test_mixed_ends_of_general_members(side, expected):
    # a u + b p u' = 0: the restraint's force is p u' at the left end, -p u' at the right one
    other = {"left": "right", "right": "left"}[side]
    member = make_member(
        {"kind": "general", "order": 2, "start": 1, "end": 2, "p": 1,
         side: {"a": 1, "b": 2}, other: "free"}
    )  # fmt: skip
    assert getattr(member, side).response.stiffness == expected
    rigid = make_member(
        {"kind": "general", "order": 2, "start": 1, "end": 2, "p": 1,
         side: {"a": 1, "b": 0}, other: "free"}
    )  # fmt: skip
    assert getattr(rigid, side).response.stiffness == RIGID


@pytest.mark.parametrize(("side", "b", "slope", "start"), [("left", -2, 1 / 6, 1 / 3),
                                                           ("right", 2, 5 / 6, 0.0)])  # fmt: skip
def test_a_mixed_end_by_the_closed_form(side, b, slope, start):
    # -u'' = 1 on [1, 2], u + b u' = 0 at one end, u = 0 at the other
    other = {"left": "right", "right": "left"}[side]
    member = make_member(
        {"kind": "general", "order": 2, "start": 1, "end": 2, "p": 1,
         side: {"a": 1, "b": b}, other: "fixed"}
    )  # fmt: skip
    x = np.array([1.0, 1.5, 2.0])
    found = srcfit.respond(member, x, np.ones_like)
    assert found == pytest.approx(start + slope * (x - 1) - (x - 1) ** 2 / 2, abs=1e-14)


def test_decay_acts_on_the_concentration_itself():
    # u'' = 4 u, u(0) = 2 (the ambient), u'(1) = 0: not a decay towards the ambient
    member = make_member({
        "kind": "column", "length": "1 m", "diffusivity": "1 m^2/s", "decay": "4 1/s",
        "ambient": "2 mol/m^3", "left": "fixed", "right": "closed",
    })  # fmt: skip
    x = np.array([0.0, 0.5, 1.0])
    found = srcfit.respond(member, x, np.zeros_like)
    assert found == pytest.approx(2 * np.cosh(2 * (1 - x)) / np.cosh(2), rel=1e-12)


def test_supports_hinges_and_interfaces_are_in_order():
    beam = make_member({
        **BEAM, "left": "free", "length": "9 m",
        "support": [
            {"at": "6 m", "kind": "spring", "stiffness": "2 kN/m", "settlement": "1 mm"},
            {"at": "3 m", "kind": "pinned", "settlement": "unknown", "sd": "4 mm"},
        ],
        "hinge": [{"at": "4 m"}, {"at": "2 m", "spring": "5 N*m"}],
    })  # fmt: skip
    assert [(s.at, s.key) for s in beam.supports] == [(3.0, "support.2"), (6.0, "support.1")]
    assert beam.supports[0].restraint.value == Unknown(0.0, 0.004)
    assert beam.supports[1].restraint.stiffness == 2000.0
    assert beam.supports[1].restraint.value == 0.001
    assert [(h.at, h.spring) for h in beam.hinges] == [(2.0, 5.0), (4.0, 0.0)]
    wall = make_member({
        "kind": "wall", "length": "1 m", "conductivity": "1 W/(m*K)", "left": "fixed",
        "right": "free", "ambient": "20 degC",
        "interface": [{"at": "0.5 m", "resistance": "0.1 m^2*K/W"}],
        "support": [{"at": "0.7 m", "kind": "fixed"}, {"at": "0.2 m", "kind": "fixed",
                                                       "settlement": "5 degC"}],
    })  # fmt: skip
    assert [(i.at, i.resistance) for i in wall.interfaces] == [(0.5, 0.1)]
    assert [s.restraint.value for s in wall.supports] == pytest.approx([278.15, 293.15])


# -- coefficients -------------------------------------------------------------------------------


def test_a_column_multiplies_its_coefficients():
    column = make_member({
        "kind": "column", "length": "0.3 m", "diffusivity": "6e-10 m^2/s", "decay": "2e-6 1/s",
        "porosity": [["0 m", "0.1 m", "0.8"], ["0.1 m", "0.3 m", "0.5"]],
        "left": {"value": "150 Bq/m^3"}, "right": "closed",
    })  # fmt: skip
    x = np.array([0.05, 0.2])
    assert column.profiles["p"](x) == pytest.approx(np.array([4.8e-10, 3e-10]), abs=0)
    assert column.profiles["q"](x) == pytest.approx(np.array([1.6e-6, 1e-6]), abs=0)
    assert column.profiles["r"](x) == pytest.approx(np.array([0.8, 0.5]))
    # the units follow the amount that the case speaks of; decay acts on u itself
    assert column.kind.response_unit == "Bq/m^3"
    assert column.kind.source_unit == "Bq/(m^3*s)"
    assert column.kind.sensor("flux").unit == "Bq/(m^2*s)"
    assert column.ambient == 0


def test_a_coefficient_from_a_file(tmp_path):
    (tmp_path / "ei.csv").write_text("x [m];EI (kN*m^2)\n0;1,5\n1;2,5\n1;4\n2;4\n")
    member = make_member(
        {**BEAM, "left": "free", "bending_stiffness": {
            "file": tmp_path / "ei.csv", "position": "x", "value": "EI"}}
    )  # fmt: skip
    profile = member.profiles["p2"]
    assert profile.edges == (0.0, 1.0, 2.0)
    x = np.array([0.0, 0.5, 0.999999, 1.0, 1.5, 2.0])
    expected = np.where(x < 1, 1500 + 1000 * x, 4000.0)
    assert profile(x) == pytest.approx(expected)
    assert not profile.stepped


@pytest.mark.parametrize(
    ("text", "more", "words"),
    [
        ("x,EI\n0,1\n2,1\n", {}, "states the unit"),
        ("x [m],EI [N*m^2]\n0,1\n1,1\n", {}, "reach from 0 m to 1 m only"),
        ("x [m],EI [N*m^2]\n0,1\n2,\n", {}, "line 3: '' is no number"),
        ("x [m],EI [N*m^2]\n0,1\n2,0\n", {}, "not positive everywhere"),
        ("x [m],EI [N]\n0,1\n2,1\n", {}, "wrong dimension"),
        ("x [m],EI [N*m^2]\n0,1\n2,1\n", {"unit": "kN*m^2"}, "the file's header"),
        ("a,b\n0,1\n2,1\n", {}, "no line that names both columns"),
        ("x [m],EI [N*m^2]\n", {}, "no rows"),
        (None, {}, "cannot be read"),
    ],
)
def test_a_bad_file_of_a_coefficient(tmp_path, text, more, words):
    if text is not None:
        (tmp_path / "ei.csv").write_text(text)
    data = {"file": str(tmp_path / "ei.csv"), "position": "x", "value": "EI", **more}
    with pytest.raises(CaseError, match=r"member\.bending_stiffness") as caught:
        make_member({**BEAM, "left": "free", "bending_stiffness": data})
    assert words in str(caught.value)


def test_general_members_take_expressions_numbers_and_functions():
    base = {
        "kind": "general",
        "order": 2,
        "start": 0.0,
        "end": 2,
        "left": "fixed",
        "right": "free",
    }
    x = np.linspace(0.1, 1.9, 5)
    for p, expected in (
        ("1 + x**2", 1 + x**2),
        ("exp(-x) * sqrt(x + 1)", np.exp(-x) * np.sqrt(x + 1)),
        ("2*pi", np.full(5, 2 * np.pi)),
        (3, np.full(5, 3.0)),
        (lambda places: 1 + places, 1 + x),
        ([[0, 1, "x + 1"], [1, 2, 5.0]], np.where(x < 1, x + 1, 5.0)),
    ):
        member = make_member({**base, "p": p})
        assert member.profiles["p"](x) == pytest.approx(expected)
    assert make_member({**base, "p": 1, "lambda": 2.5}).lam == 2.5
    order4 = {**base, "order": 4, "left": "clamped", "right": "free"}
    del order4["kind"]
    fourth = make_member({"kind": "general", **order4, "p2": 2, "p0": "1 - x"})
    assert fourth.kind.order == 4
    assert set(fourth.profiles) == {"p2", "p0"}


def test_general_members_take_units_for_show():
    member = make_member({
        "kind": "general", "order": 2, "start": 0, "end": 1, "p": 1, "left": "fixed",
        "right": "free", "response_unit": "mm", "source_unit": "kN/m",
    })  # fmt: skip
    kind = member.kind
    assert srcfit.units.same_dimension(kind.response_unit, "m")
    assert srcfit.units.same_dimension(kind.source_unit, "N/m")
    assert srcfit.units.same_dimension(kind.total_unit, "N")
    assert srcfit.units.same_dimension(kind.sensor("slope").unit, "1")


@pytest.mark.parametrize(
    ("p", "left", "good"),
    [("x", "regular", True), ("x", "fixed", False), ("1 + x", "regular", False)],
)
def test_regular_ends_are_where_p_vanishes(p, left, good):
    mapping = {
        "kind": "general", "order": 2, "start": 0, "end": 1, "p": p, "left": left,
        "right": "fixed",
    }  # fmt: skip
    if good:
        assert make_member(mapping).left.axis
        return
    with pytest.raises(CaseError, match=r"member\.left: "):
        make_member(mapping)


@pytest.mark.parametrize(
    "text",
    [
        "__import__('os')", "x.real", "(lambda: 1)()", "[1][0]", "x if x else 1", "exp",
        "sin(x, x)", "x^2", "1 +", "((((x", "x == 1", "f(x)", "'a'", "0x10", "1_000", "x" * 301,
        "9**9**9**9", "1/0", "eval(x)", "x; x", "", "π",
    ],
)  # fmt: skip
def test_expressions_are_formulas_only(text):
    with pytest.raises(CaseError, match=r"member\.p: "):
        make_member({
            "kind": "general", "order": 2, "start": 0, "end": 1, "p": text, "left": "fixed",
            "right": "free",
        })  # fmt: skip


# -- drive and ambient --------------------------------------------------------------------------


def test_driven_members_have_amplitudes():
    wall = make_member({
        "kind": "wall", "length": "1 m", "conductivity": "1.6 W/(m*K)", "loss": "1 W/(m^3*K)",
        "heat_capacity": "2 MJ/(m^3*K)", "frequency": "1 1/d", "left": {"value": "2 degC"},
        "right": {"transfer": "5 W/(m^2*K)", "ambient": "20 degC"},
    })  # fmt: skip
    assert wall.driven
    assert wall.omega == pytest.approx(2 * np.pi / 86400)
    assert wall.left.response.value == 2.0  # an amplitude: no 273.15
    assert wall.right.response.value == 0.0  # steady surroundings have none
    assert wall.ambient == 0.0


@pytest.mark.parametrize(
    "mapping",
    [
        {**BAR, "loss": "2 W/(m*K)", "left": "free"},
        {**BAR, "left": "fixed"},
        {**BAR, "left": {"transfer": "2 W/K"}},
        {"kind": "aquifer", "length": "9 m", "transmissivity": "1 m^2/s", "leakage": "1e-6 1/s",
         "left": "free", "right": "free"},
    ],
)  # fmt: skip
def test_an_ambient_that_is_referred_to_is_due(mapping):
    with pytest.raises(CaseError, match=r"the key `ambient` is missing from \[member\]"):
        make_member(mapping)
    unit = "m" if mapping["kind"] == "aquifer" else "degC"
    member = make_member({**mapping, "ambient": f"12 {unit}"})
    assert member.ambient == pytest.approx(12 if unit == "m" else 285.15)


def test_an_ambient_that_nobody_refers_to_is_not_due():
    assert make_member({**BAR, "left": {"value": "50 degC"}}).ambient == 0.0
    assert make_member({**BAR, "left": "free", "loss": "0 W/(m*K)"}).ambient == 0.0


def test_members_are_members():
    assert isinstance(make_member({**ROD, "left": "fixed"}), Member)
