"""Every row of datasets/handbook_cases.csv through `respond`, to 1e-9 of its value.

The values are formulas of the handbooks named in the rows; each was verified there by a numerical
solution that shares nothing with the package.
"""

import csv
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq

import srcfit

FILE = Path(__file__).parent.parent / "datasets" / "handbook_cases.csv"
E_I, L, P, W = 1.68e6, 4.0, 1e4, 2e3
DAY = 86400.0


def rows():
    with FILE.open(encoding="utf-8") as lines:
        return list(csv.DictReader(line for line in lines if not line.startswith("#")))


def beam(left, right, length=L, supports=(), **more):
    return srcfit.make_member({
        "kind": "beam", "length": f"{length!r} m", "bending_stiffness": f"{E_I!r} N*m^2",
        "left": left, "right": right,
        "support": [{"at": f"{at!r} m", "kind": "pinned"} for at in supports], **more,
    })  # fmt: skip


def at(member, x, source, lumped=(), quantity="response"):
    return float(srcfit.respond(member, [x], source, lumped, quantity)[0])


def uniform(value):
    return lambda x: np.full(np.shape(x), float(value))


def none(x):
    return np.zeros(np.shape(x))


def rising(x):
    return W * x / L


def falling(x):
    return W * (1 - x / L)


def simple():
    return beam("pinned", "pinned")


def cantilever():
    return beam("clamped", "free")


def fixed():
    return beam("clamped", "clamped")


def propped():
    return beam("clamped", "pinned")


def spans(count):
    return beam("pinned", "pinned", count * L, [L * i for i in range(1, count)])


def three_span_peak():
    # slope of w x (l^3/40 - 0.4 l x^2/6 + x^3/24)/EI is zero
    z = [r.real for r in np.roots([1 / 6, -0.2, 0.0, 1 / 40]) if abs(r.imag) < 1e-12]
    return L * next(v for v in z if 0 < v < 1)


def first_span_only(x):
    return np.where(x < L, W, 0.0)


WINKLER = 2e6
BETA = (WINKLER / (4 * E_I)) ** 0.25


def infinite_beam():
    # exp(-31) from the load to either end: the cut changes the deflection by less than 1e-12
    length = 2 * 31 / BETA
    member = beam("free", "free", length, foundation=f"{WINKLER!r} N/m^2")
    return at(member, length / 2 + 1.0, none, [(length / 2, P)])


def half_beam():
    member = beam("free", "free", 31 / BETA, foundation=f"{WINKLER!r} N/m^2")
    return at(member, 0.0, none, [(0.0, P)], "slope")


# k 180 W/(m K), diameter 10 mm, h 25 W/(m2 K), length 100 mm, base 80 K above the air: these
# round numbers reproduce both printed values of the fin to 14 digits
FIN = {"k": 180.0, "d": 0.01, "h": 25.0, "l": 0.1, "base": 80.0}


def fin(right):
    k, d, h = FIN["k"], FIN["d"], FIN["h"]
    return srcfit.make_member({
        "kind": "conductor", "length": "0.1 m", "conductance": f"{k * np.pi * d**2 / 4!r} W*m/K",
        "loss": f"{h * np.pi * d!r} W/(m*K)", "ambient": "20 degC",
        "left": {"value": "100 degC"}, "right": right,
    })  # fmt: skip


def fin_efficiency():
    ideal = FIN["h"] * np.pi * FIN["d"] * FIN["l"] * FIN["base"]
    return at(fin("insulated"), 0.0, none, quantity="flux") / ideal


def pin_fin():
    tip = FIN["h"] * np.pi * FIN["d"] ** 2 / 4
    end = {"transfer": f"{tip!r} W/K", "ambient": "20 degC"}
    return at(fin(end), 0.0, none, quantity="flux")


def slab(right):
    return srcfit.make_member({
        "kind": "wall", "length": "30 mm", "conductivity": "20 W/(m*K)", "ambient": "0 degC",
        "left": "insulated", "right": right,
    })  # fmt: skip


def slab_rise():
    member = slab({"value": "0 degC"})
    return at(member, 0.0, uniform(5e5)) - at(member, 0.03, uniform(5e5))


def surface_rise():
    member = slab({"transfer": "500 W/(m^2*K)", "ambient": "0 degC"})
    return at(member, 0.03, uniform(5e5)) - 273.15


def sphere_rise():
    member = srcfit.make_member({
        "kind": "sphere", "inner_radius": "0 m", "outer_radius": "30 mm",
        "conductivity": "20 W/(m*K)", "right": {"value": "0 degC"},
    })  # fmt: skip
    return at(member, 0.0, uniform(5e5)) - at(member, 0.03, uniform(5e5))


def mazure():
    # T 100 m2/d, c 500 d; 35 leakage lengths stand for the half plane
    length = float(35 * np.sqrt(100.0 * 500.0))
    member = srcfit.make_member({
        "kind": "aquifer", "length": f"{length!r} m", "transmissivity": f"{100 / DAY!r} m^2/s",
        "leakage": f"{1 / (500 * DAY)!r} 1/s", "ambient": "0 m",
        "left": {"value": "1 m"}, "right": "closed",
    })  # fmt: skip
    return at(member, 0.0, none, quantity="flux") * DAY


def thiele():
    # Thiele modulus 2: decay = 4 D / L^2; effectiveness = inflow / (decay C0 L)
    member = srcfit.make_member({
        "kind": "column", "length": "1 m", "diffusivity": "1e-6 m^2/s", "decay": "4e-6 1/s",
        "left": {"value": "3 mol/m^3"}, "right": "closed",
    })  # fmt: skip
    return at(member, 0.0, none, quantity="flux") / (4e-6 * 3)


def penetration():
    # the depth at which a closed end sees exactly no oxygen left; D 1, C0 300, R 80
    def left_over(depth):
        member = srcfit.make_member({
            "kind": "column", "length": f"{depth!r} m", "diffusivity": "1 m^2/s",
            "left": {"value": "300 mol/m^3"}, "right": "closed",
        })  # fmt: skip
        return at(member, depth, uniform(-80.0))

    return brentq(left_over, 2.0, 3.5, xtol=1e-13)


def bar():
    member = srcfit.make_member({
        "kind": "rod", "length": "4 m", "axial_stiffness": "100 MN",
        "left": "fixed", "right": "free",
    })  # fmt: skip
    return at(member, 4.0, uniform(1e4))


SS, CANT, FIX, PROP = "simply supported", "cantilever", "fixed-fixed", "propped cantilever"
FULL = uniform(W)
HANDBOOK = {
    (f"{SS}, P at centre", "max deflection"): lambda: at(simple(), 2.0, none, [(2.0, P)]),
    (f"{SS}, P at a=1", "deflection at load"): lambda: at(simple(), 1.0, none, [(1.0, P)]),
    (f"{SS}, uniform w", "max deflection"): lambda: at(simple(), 2.0, FULL),
    (f"{SS}, triangular 0..w", "max deflection (x=0.519329L)"): lambda: at(
        simple(), L * np.sqrt(1 - np.sqrt(8 / 15)), rising
    ),
    (f"{SS}, triangular 0..w", "reactions left"): lambda: at(
        simple(), 0.0, rising, quantity="reaction"
    ),
    (f"{CANT}, P at tip", "tip slope"): lambda: at(cantilever(), L, none, [(L, P)], "slope"),
    (f"{CANT}, uniform w", "tip slope"): lambda: at(cantilever(), L, FULL, quantity="slope"),
    (f"{CANT}, triangular, max at clamp", "tip deflection"): lambda: at(cantilever(), L, falling),
    (f"{CANT}, end moment 5 kNm", "tip deflection"): lambda: at(
        cantilever(), L, none, [(L, 5e3, "couple")]
    ),
    # end moments are hogging, so negative here; the handbooks print their size
    (f"{FIX}, P at centre", "end moment"): lambda: -at(fixed(), 0.0, none, [(2.0, P)], "moment"),
    (f"{FIX}, uniform w", "end moment"): lambda: -at(fixed(), L, FULL, quantity="moment"),
    (f"{FIX}, triangular 0..w", "moment at w end"): lambda: (
        -at(fixed(), L, rising, quantity="moment")
    ),
    (f"{PROP}, uniform w", "prop reaction"): lambda: at(propped(), L, FULL, quantity="reaction"),
    (f"{PROP}, uniform w", "clamp moment"): lambda: -at(propped(), 0.0, FULL, quantity="moment"),
    (f"{PROP}, P at centre", "max deflection (x=L/sqrt5 from prop)"): lambda: at(
        propped(), L - L / np.sqrt(5), none, [(2.0, P)]
    ),
    (f"{PROP}, triangular max at clamp", "prop reaction"): lambda: at(
        propped(), L, falling, quantity="reaction"
    ),
    ("two equal spans, uniform w", "end reaction"): lambda: at(
        spans(2), 0.0, FULL, quantity="reaction"
    ),
    ("two equal spans, uniform w", "max deflection"): lambda: at(
        spans(2), L * (1 + np.sqrt(33)) / 16, FULL
    ),
    ("two equal spans, one loaded", "reaction middle"): lambda: at(
        spans(2), L, first_span_only, quantity="reaction"
    ),
    ("three equal spans, uniform w", "end reaction"): lambda: at(
        spans(3), 0.0, FULL, quantity="reaction"
    ),
    ("three equal spans, uniform w", "max deflection end span (x=0.446l)"): lambda: at(
        spans(3), three_span_peak(), FULL
    ),
    ("infinite beam on Winkler foundation k=2e6, P", "deflection at x=1 m"): infinite_beam,
    ("semi-infinite beam on Winkler foundation, end P", "end slope"): half_beam,
    ("same", "efficiency"): fin_efficiency,
    ("pin fin, convecting tip", "heat flow"): pin_fin,
    ("slab half-thickness 30mm, q=5e5 W/m3, k=20", "centre rise"): slab_rise,
    ("solid sphere R=30mm", "centre rise"): sphere_rise,
    ("slab, convection h=500", "surface rise"): surface_rise,
    ("leaky aquifer half-plane (Mazure), c=500 d", "inflow at x=0 per m head"): mazure,
    ("1st-order reaction in slab, Thiele 2", "effectiveness"): thiele,
    ("zero-order O2 uptake, D=1 C0=300 R=80", "penetration depth"): penetration,
    ("bar fixed-free, uniform axial q=1e4", "end displacement"): bar,
}


def test_every_row_is_computed_and_every_computation_has_a_row():
    assert {(r["case"], r["quantity"]) for r in rows()} == set(HANDBOOK)


@pytest.mark.parametrize("row", rows(), ids=lambda r: f"{r['case']}: {r['quantity']}")
def test_handbook_row(row):
    found = HANDBOOK[row["case"], row["quantity"]]()
    assert found == pytest.approx(float(row["value"]), rel=1e-9, abs=0)


@pytest.mark.parametrize("place", [0.0, 4.0, 8.0])
def test_settlement_of_the_middle_support(place):
    # two spans, middle support down by d: forces 3 EI d / l^3, -6 EI d / l^3, 3 EI d / l^3
    # (slope-deflection method, common practice, no source)
    member = srcfit.make_member({
        "kind": "beam", "length": "8 m", "bending_stiffness": "1.68 MN*m^2",
        "left": "pinned", "right": "pinned",
        "support": [{"at": "4 m", "kind": "pinned", "settlement": "10 mm"}],
    })  # fmt: skip
    force = 3 * E_I * 0.010 / L**3
    expected = -2 * force if place == 4.0 else force
    assert at(member, place, none, quantity="reaction") == pytest.approx(expected, rel=1e-9)


def test_turned_clamp():
    # a clamp turned by 1 mrad on a cantilever only tilts it
    member = srcfit.make_member({
        "kind": "beam", "length": "4 m", "bending_stiffness": "1.68 MN*m^2",
        "left": {"kind": "clamped", "rotation": "1 mrad"}, "right": "free",
    })  # fmt: skip
    assert at(member, 4.0, none) == pytest.approx(4e-3, rel=1e-9)


def test_couple_inside_a_simple_beam():
    # C at a: M jumps by C, reactions -C/L and C/L, and M(a-) = -C a / L (statics)
    found = srcfit.respond(simple(), [1.0], none, [(1.0, 6e3, "couple")], "moment")
    assert float(found[0]) == pytest.approx(6e3 - 6e3 / 4, rel=1e-9)
    ends = srcfit.respond(simple(), [0.0, 4.0], none, [(1.0, 6e3, "couple")], "reaction")
    assert ends == pytest.approx([-1.5e3, 1.5e3], rel=1e-9)


def test_solid_cylinder_rise():
    # q R^2/(4 k); the slab has 2, the sphere 6 (Incropera & DeWitt, sec. 3.5, from memory)
    member = srcfit.make_member({
        "kind": "cylinder", "inner_radius": "0 m", "outer_radius": "30 mm",
        "conductivity": "20 W/(m*K)", "right": {"value": "0 degC"},
    })  # fmt: skip
    rise = at(member, 0.0, uniform(5e5)) - at(member, 0.03, uniform(5e5))
    assert rise == pytest.approx(5e5 * 0.03**2 / 80, rel=1e-9)


def test_thiem_drawdown():
    # Q/(2 pi T) ln(R/r) (Thiem 1906, from memory): pumping as a lumped source at the well
    member = srcfit.make_member({
        "kind": "radial_aquifer", "inner_radius": "0.2 m", "outer_radius": "300 m",
        "transmissivity": "0.004 m^2/s", "ambient": "25 m", "left": "closed", "right": "fixed",
    })  # fmt: skip
    found = srcfit.respond(member, [0.2, 10.0, 300.0], none, [(0.2, -0.01)])
    down = 0.01 / (2 * np.pi * 0.004) * np.log(300 / np.array([0.2, 10.0, 300.0]))
    assert found == pytest.approx(25 - down, rel=1e-10)
