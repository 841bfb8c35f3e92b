"""Unit texts. Sizes are checked against pint, name by name; the table never replaces it unseen."""

import math
import subprocess
import sys
import time
import tomllib

import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from srcfit import units
from srcfit.errors import UnitError
from srcfit.members import MEMBERS
from srcfit.unit_names import PLAIN, PREFIXED, PREFIXES, named

REGISTRY = pint.UnitRegistry()
# names that pint lacks or reads otherwise, with what each stands for
OURS = {
    "°": "degree", "°C": "delta_degC", "°F": "delta_degF", "degC": "delta_degC",
    "degF": "delta_degF", "celsius": "delta_degC", "fahrenheit": "delta_degF",
    "degree_Celsius": "delta_degC", "degree_Fahrenheit": "delta_degF", "ue": "1e-6", "µe": "1e-6",
    "me": "1e-3", "‰": "1e-3", "kips": "kip", "psf": "lbf/ft**2", "ksf": "kip/ft**2",
    "plf": "lbf/ft", "klf": "kip/ft",
}  # fmt: skip
DIMENSIONLESS = {"strain", "Strain", "ε"}


def pint_says(text):
    """Scale and (mass, length, time, temperature, amount) powers by pint."""
    found = REGISTRY.Quantity(1, REGISTRY.parse_units(text)) if text[0].isalpha() else None
    if found is None:
        found = REGISTRY.Quantity(text)
    base = found.to_base_units()
    powers = {str(k): v for k, v in base._units.items()}
    return base.magnitude, tuple(
        powers.get(name, 0) for name in ("meter", "kilogram", "second", "kelvin", "mole")
    )


def ours(text):
    unit = units.parse(text, "")
    return unit.scale, unit.dims[:5]


@pytest.mark.parametrize("name", [n for n in PLAIN if n != "amount"])
def test_plain_names_agree_with_pint(name):
    scale, dims = pint_says(OURS.get(name, name))
    assert ours(name)[0] == pytest.approx(scale, rel=1e-12, abs=0)
    assert ours(name)[1] == dims


@pytest.mark.parametrize("name", [n for n in PREFIXED if n not in DIMENSIONLESS | {"Nm"}])
def test_prefixed_names_agree_with_pint(name):
    compared = 0
    for prefix in ("", *PREFIXES):
        if len(prefix) > 2 or prefix + name in PLAIN:
            continue
        scale, dims = pint_says(prefix + name)
        assert ours(prefix + name)[0] == pytest.approx(scale, rel=1e-12, abs=0), prefix + name
        assert ours(prefix + name)[1] == dims, prefix + name
        compared += 1
    assert compared >= 10


@pytest.mark.parametrize("unit", ["degC", "degF", "°C", "Deg C", "deg F"])
def test_absolute_temperatures_agree_with_pint(unit):
    plain = {"°C": "degC", "Deg C": "degC", "deg F": "degF"}.get(unit, unit)
    for value in (-40.0, 0.0, 20.0, 451.0):
        expected = REGISTRY.Quantity(value, plain).to("kelvin").magnitude
        assert units.quantity(f"{value} {unit}", "K", "") == pytest.approx(
            expected, rel=1e-12, abs=0
        )
        step = REGISTRY.Quantity(value, f"delta_{plain}").to("kelvin").magnitude
        found = units.quantity(f"{value} {unit}", "K", "", difference=True)
        assert found == pytest.approx(step, rel=1e-12, abs=0)


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("768 MN*m^2", "N*m^2", 768e6),
        ("12 MN/m²", "N/m^2", 12e6),
        ("3 kN/m2", "N/m^2", 3000.0),
        ("2.5 W/m/K", "W/(m*K)", 2.5),
        ("2.5 W/(m·K)", "W/(m*K)", 2.5),
        ("2.5 W m^-1 K^-1", "W/(m*K)", 2.5),
        ("2.5 W m⁻¹ K⁻¹", "W/(m*K)", 2.5),
        ("10 kNm", "N*m", 1e4),
        ("1.11 W/(m*degC)", "W/(m*K)", 1.11),
        ("-5 ue", "1", -5e-6),
        ("7 µε", "1", 7e-6),
        ("7 uStrain", "1", 7e-6),
        ("1.5 mm/m", "1", 1.5e-3),
        ("5 10^-6", "1", 5e-6),
        ("10 %", "1", 0.1),
        ("0.6", "1", 0.6),
        ("2 deg", "rad", 2 * math.pi / 180),
        ("1 ksf", "N/m^2", 47880.25898033584),  # 1000 * 0.45359237 * 9.80665 / 0.3048**2
        ("3 tf/m", "N/m", 3 * 9806.65),
        ("5 mm/d", "m/s", 0.005 / 86400),
        ("1 1/d", "1/s", 1 / 86400),
        ("11.5 uHz", "Hz", 11.5e-6),
        ("4 pCi/L", "Bq/m^3", 148.0),  # 3.7e10 Bq per curie, by way of pint
        ("4 mm/yr", "m/s", 0.004 / (365.25 * 86400)),  # by way of pint
        ("4 N*m", "N*m/rad", 4.0),
        ("−3 kPa", "Pa", -3000.0),
        ("0.5 t/m", "kg/m", 500.0),
        (2, "1", 2.0),
    ],
)
def test_quantities(text, unit, value):
    assert units.quantity(text, unit, "key") == pytest.approx(value, rel=1e-12, abs=0)


@pytest.mark.parametrize(
    ("text", "unit", "words"),
    [
        ("768", "N*m^2", "has no unit; give a stiffness in force × length²"),
        (768, "N*m^2", "has no unit"),
        (True, "1", "is no quantity"),
        (None, "m", "is no quantity"),
        ("3 t/m", "N/m", "it is a mass where a force is due"),
        ("3 lb/ft", "N/m", "it is a mass where a force is due"),
        ("3 ton", "N", "several ways; write t or tf"),
        ("20 C", "K", "for degrees Celsius write degC"),
        ("5 e", "1", "for microstrain write ue"),
        ("3 W/m K", "W/(m*K)", "two ways; write brackets"),
        ("1 500 mm", "m", "no mark between thousands"),
        ("1,5 m", "m", "use a decimal point"),
        ("1e999 m", "m", "out of all bounds"),
        ("m", "m", "does not begin with a number"),
        ("5 9**9**9", "m", "is no unit"),
        ("5 m^10", "m", "out of bounds"),
        ("5 __import__('os').system('ls')", "m", "characters that no unit has"),
        ("5 lambda: 0", "m", "characters that no unit has"),
        ("5 furlung", "m", 'the unit "furlung" is not known'),
        ("5 dB", "1", "is not known"),
        ("5 (m", "m", "brackets do not match"),
        ("5 m)", "m", "brackets do not match"),
        ("5 m/", "m", "not complete"),
        ("60 rpm", "Hz", "angular rate"),
        ("6 rad/s", "Hz", "angular rate"),
        ("5 kg/m^2", "amount/m^3", "the amount in mol, kg or Bq"),
        ("5 " + "m*" * 60 + "m", "m", "does not begin with a number"),
    ],
)
def test_bad_quantities_are_named(text, unit, words):
    with pytest.raises(UnitError) as caught:
        units.quantity(text, unit, "member.length")
    assert str(caught.value).startswith("member.length: ")
    assert words in str(caught.value)


@given(st.text(max_size=200))
@settings(max_examples=300, deadline=None)
def test_any_text_gives_a_finite_number_or_a_unit_error(text):
    start = time.perf_counter()
    for tried in (text, "3 " + text):
        message = ""
        try:
            assert math.isfinite(units.quantity(tried, "N/m", "key"))
        except UnitError as error:
            message = str(error)
        assert message == "" or message.startswith("key: ")
    assert time.perf_counter() - start < 2


@given(st.text(alphabet="mNkgsKWdeC0123456789*/^()-+ .²·µ°%", max_size=40))
@settings(max_examples=500, deadline=None)
def test_text_that_looks_like_a_unit_never_hangs(text):
    try:
        scale, offset = units.factor(text, "m", "key")
    except UnitError:
        return
    assert scale > 0
    assert offset == 0


@given(
    st.floats(-1e9, 1e9),
    st.sampled_from(["mm", "in", "ft", "km", "yd"]),
)
def test_factor_is_what_quantity_applies(value, unit):
    scale, offset = units.factor(unit, "m", "")
    assert offset == 0
    found = units.quantity(f"{value!r} {unit}", "m", "")
    assert found == pytest.approx(scale * value, rel=1e-12, abs=1e-300)


def test_any_amount_but_only_one_at_a_time():
    for text, amount in (("mmol/L", "mol"), ("mg/L", "kg"), ("kBq/m^3", "Bq")):
        assert units.amount_of(text, "amount/m^3") == amount
        assert units.factor(text, "amount/m^3", "")[0] > 0
    assert units.amount_of("kg/m^2", "amount/m^3") == ""
    assert units.amount_of("not a unit !", "amount/m^3") == ""


@pytest.mark.parametrize(
    ("source", "geometry", "total"),
    [
        ("kN/m", "line", "kN"),
        ("lbf/ft", "line", "lbf"),
        ("N*m/m", "line", "N*m"),
        ("W/m^3", "line", "W/m^2"),
        ("W/m^3", "cylinder", "W/m"),
        ("W/m^3", "sphere", "W"),
        ("mol/(m^3*s)", "line", "mol/(m^2*s)"),
        ("m/s", "line", "m^2/s"),
        ("mm/d", "cylinder", "m^3/d"),
        ("klf", "line", "klf*m"),
        ("1", "line", "m"),
    ],
)
def test_total_units_read_well_and_have_the_right_dimension(source, geometry, total):
    assert units.total_unit(source, "m", geometry) == total
    length = {"line": "m", "cylinder": "m^2", "sphere": "m^3"}[geometry]
    given_dims = units.parse(f"({source})*{length}" if source != "1" else length, "").dims
    assert units.parse(total, "").dims == given_dims


@pytest.mark.parametrize("kind", MEMBERS.values(), ids=lambda k: k.name)
def test_every_unit_of_a_member_kind_is_understood(kind):
    total = units.total_unit(kind.source_unit, "m", kind.geometry)
    assert units.parse(total, "").dims == units.parse(kind.total_unit, "").dims
    texts = [kind.response_unit, kind.source_unit, kind.total_unit, kind.spring_unit]
    texts += [c.unit for c in kind.coefficients] + [s.unit for s in kind.sensors]
    for text in texts:
        assert units.factor(text, text, "") == (1.0, 0.0), text
        assert units.dimension(text)


def test_texts_of_products_and_quotients():
    assert units.multiply_text("kN/m", "m") == "kN"
    assert units.divide_text("1", "W/(m^2*K)") == "m^2*K/W"
    assert units.divide_text("mm", "d") == "mm/d"
    assert units.divide_text("mm", "1") == "mm"
    assert units.coherent("degF") == "K"
    assert units.coherent("mm/in") == "1"
    assert units.same_dimension("kip", "N")
    assert not units.same_dimension("lb", "N")


def test_common_units_need_no_pint():
    code = (
        "import sys; from srcfit import units;"
        "units.quantity('768 MN*m^2','N*m^2',''); units.quantity('20 degC','K','');"
        "units.quantity('2 kip/ft','N/m','');"
        "print('pint' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"


def test_toml_escapes_do_not_reach_the_unit():
    text = tomllib.loads('a = "5 \\u00b5m"')["a"]
    assert units.quantity(text, "m", "") == pytest.approx(5e-6)


def test_named_is_remembered():
    assert named("kN") is named("kN")
