"""`kernel` against solvers that share nothing with it.

Referees: finite elements of high degree (`referees.beams`, `referees.second_order`), products of
transfer matrices with 50 and more digits (`referees.digits`), scipy's collocation `solve_bvp`.
"""

import numpy as np
import pytest
from pairs import RIGID, beam, close, member_of_order_2, merged, random_beam, steps
from referees import beams, digits, second_order
from scipy.integrate import solve_bvp

import srcfit

ROWS = {"slope": [0, 1, 0, 0], "moment": [0, 0, 1, 0], "shear": [0, 0, 0, 1]}


@pytest.mark.parametrize("seed", range(6))
def test_random_beam(seed):
    member, stepped, solid, x, s = random_beam(seed)
    found = srcfit.kernel(member, x, s)
    close(found, np.array(digits.kernel(stepped, x, s), dtype=float), 1e-10)
    columns = [
        beams.bend(solid, lumped=[(p, 1.0)], places=x, size=1.0, degree=7).at("deflection", x)
        for p in s
    ]
    close(found, np.array(columns).T, 1e-8)
    for quantity, row in ROWS.items():
        expected = np.array(digits.kernel(stepped, x, s, read=row), dtype=float)
        close(srcfit.kernel(member, x, s, quantity), expected, 1e-9)
    grid = np.linspace(0, member.length, 40)
    G = srcfit.kernel(member, grid, grid)
    close(G, G.T, 1e-12)


@pytest.mark.parametrize("seed", range(6))
def test_random_conductor(seed):
    rng = np.random.default_rng(100 + seed)
    length = float(rng.uniform(1, 30))
    p, q = steps(rng, length, 3, 0.1, 10), steps(rng, length, 3, 0.01, 10)
    left, right = (float(rng.choice([RIGID, 0.0, 0.8])) for _ in range(2))
    a, b, c = (length * np.array([0.21, 0.5, 0.83])).tolist()
    points = ((a, "spring", 2.5), (b, "interface", 0.8), (c, "held", 0.0))
    points = points if seed % 2 else points[:2]
    member = member_of_order_2(p, q, length, left, right, points)
    pieces = tuple((x, y, {"p": e, "q": f}) for x, y, (e, f) in merged(p, q))
    stepped = digits.Stepped(2, pieces, (left,), (right,), points)
    x = (length * np.array([0.0, 0.1, 0.48, 0.6, 0.95, 1.0])).tolist()
    s = (length * np.array([0.3, 0.55, 0.9])).tolist()
    found = srcfit.kernel(member, x, s)
    close(found, np.array(digits.kernel(stepped, x, s), dtype=float), 1e-10)
    flux = -np.array(digits.kernel(stepped, x, s, read=[0, 1]), dtype=float)
    close(srcfit.kernel(member, x, s, "flux"), flux, 1e-10)
    grid = np.linspace(0, length, 40)
    G = srcfit.kernel(member, grid, grid)
    close(G, G.T, 1e-12)


@pytest.mark.parametrize("tension", [0.0, -3e5, 4e5])
def test_beam_that_shears(tension):
    member = beam(
        length="3 m", bending_stiffness="2 MN*m^2", shear_stiffness="4 MN", left="pinned",
        right="clamped", foundation="0.3 MN/m^2", tension=f"{tension!r} N",
    )  # fmt: skip
    piece = (0.0, 3.0, {"p2": 2e6, "p1": tension, "p0": 3e5, "shear": 4e6})
    stepped = digits.Stepped(4, (piece,), (RIGID, 0.0), (RIGID, RIGID))
    x, s = [0.0, 0.4, 1.9, 3.0], [0.7, 2.2]
    close(srcfit.kernel(member, x, s), np.array(digits.kernel(stepped, x, s), dtype=float), 1e-11)
    rows = {
        "rotation": [0, 1, 0, 0],
        "moment": [0, 0, 1, 0],
        "shear": [0, 0, 0, 1],
        "curvature": [0, 0, 1 / 2e6, 0],
        # M' = V - T u' and u' = psi + M'/S
        "slope": [0, 1 / (1 + tension / 4e6), 0, 1 / (4e6 + tension)],
    }
    for quantity, row in rows.items():
        expected = np.array(digits.kernel(stepped, x, s, read=row), dtype=float)
        close(srcfit.kernel(member, x, s, quantity), expected, 1e-10)


def test_long_foundation_beam_is_stable():
    # 200 decay lengths: exp(200) is 1e87
    k, EI, length = 4e6, 1e6, 200.0
    member = beam(length="200 m", bending_stiffness="1 MN*m^2", foundation="4 MN/m^2")
    stepped = digits.Stepped(
        4, ((0.0, length, {"p2": EI, "p1": 0.0, "p0": k}),), (0.0, 0.0), (0.0, 0.0)
    )
    x, s = [0.0, 0.5, 99.0, 101.0, 150.0, 200.0], [0.2, 100.0, 199.0]
    found = srcfit.kernel(member, x, s)
    expected = np.array(digits.kernel(stepped, x, s), dtype=float)
    close(found, expected, 1e-11)
    # a total load is carried by the ground: k times the integral of the deflection is 1
    cells = np.linspace(0, length, 20001)
    u = srcfit.kernel(member, [100.0], cells)[0]
    assert k * np.trapezoid(u, cells) == pytest.approx(1.0, rel=1e-6)


@pytest.mark.parametrize("geometry", ["cylinder", "sphere"])
@pytest.mark.parametrize("inner", [0.0, 0.02])
def test_radial(geometry, inner):
    outer, k, h, loss = 0.07, 15.0, 200.0, 3e4
    solid = {"left": "insulated"} if inner else {}
    member = srcfit.make_member({
        "kind": geometry, "inner_radius": f"{inner!r} m", "outer_radius": "0.07 m",
        "conductivity": "15 W/(m*K)", "loss": "30 kW/(m^3*K)", "ambient": "20 degC",
        "right": {"transfer": "200 W/(m^2*K)", "ambient": "5 degC"}, **solid,
    })  # fmt: skip
    line = second_order.Line(
        inner, outer, k, loss, right=(h, -15.0), geometry=geometry
    )  # fmt: skip

    def heat(r):
        return 1e6 * np.exp(-30 * r)

    r = np.array([inner, 0.03, 0.05, 0.07])
    solved = second_order.settle(
        line, [(inner, outer, heat)], [(0.04, 500.0)], degree=14, places=r
    )
    found = srcfit.respond(member, r, heat, [(0.04, 500.0)])
    close(found - 293.15, solved.at("response", r), 1e-9)
    flux = srcfit.respond(member, r[1:], heat, [(0.04, 500.0)], "flux")
    close(flux, -solved.at("force", r[1:]), 1e-9)


def test_smooth_coefficients():
    p, q = "1 + 0.5*sin(3*x)", "2*exp(-x)"
    member = srcfit.make_member({
        "kind": "general", "order": 2, "start": 0.0, "end": 2.0, "p": p, "q": q,
        "left": "fixed", "right": {"a": 1.5, "b": 2.0},
    })  # fmt: skip

    def slope(x, z):
        return np.array([
            z[1] / (1 + 0.5 * np.sin(3 * x)), 2 * np.exp(-x) * z[0] - np.cos(2 * x),
        ])  # fmt: skip

    def ends(a, b):
        return np.array([a[0], 1.5 * b[0] + 2.0 * b[1]])

    mesh = np.linspace(0, 2, 200)
    solved = solve_bvp(slope, ends, mesh, np.zeros((2, 200)), tol=1e-11, max_nodes=100_000)
    x = np.array([0.3, 1.0, 2.0])
    found = srcfit.respond(member, x, lambda x: np.cos(2 * x))
    close(found, solved.sol(x)[0], 1e-9)
    line = second_order.Line(
        0.0, 2.0, lambda x: 1 + 0.5 * np.sin(3 * x), lambda x: 2 * np.exp(-x),
        left=(RIGID, 0.0), right=(0.75, 0.0),
    )  # fmt: skip
    s = np.array([0.5, 1.4])
    columns = [
        second_order.settle(line, lumped=[(v, 1.0)], degree=14, places=x).at("response", x)
        for v in s
    ]
    close(srcfit.kernel(member, x, s), np.array(columns).T, 1e-10)


def test_driven_conductor():
    member = srcfit.make_member({
        "kind": "conductor", "length": "1.5 m", "conductance": "0.4 W*m/K", "loss": "2 W/(m*K)",
        "heat_capacity": "3 kJ/(m*K)", "frequency": "2 mHz", "ambient": "20 degC",
        "left": "fixed", "right": "insulated",
    })  # fmt: skip
    q = 2.0 + 1j * 2 * np.pi * 2e-3 * 3e3
    line = second_order.Line(0.0, 1.5, 0.4, q, left=(RIGID, 0.0))
    x, s = np.array([0.2, 0.9, 1.5]), [0.4, 1.2]
    columns = [
        second_order.settle(line, lumped=[(v, 1.0)], degree=14, places=x).at("response", x)
        for v in s
    ]
    close(srcfit.kernel(member, x, s), np.array(columns).T, 1e-10)


def test_driven_beam():
    # 12 Hz on a beam of 40 kg/m: p0 = k - omega^2 m, here negative
    member = beam(
        length="4 m", bending_stiffness="1.68 MN*m^2", foundation="0.1 MN/m^2", mass="40 kg/m",
        frequency="12 Hz", left="pinned", right="clamped",
    )  # fmt: skip
    p0 = 1e5 - (2 * np.pi * 12) ** 2 * 40
    stepped = digits.Stepped(
        4, ((0.0, 4.0, {"p2": 1.68e6, "p1": 0.0, "p0": p0}),), (RIGID, 0.0), (RIGID, RIGID)
    )
    x, s = [0.5, 1.7, 3.3], [1.0, 2.9]
    expected = np.array(digits.kernel(stepped, x, s), dtype=float)
    close(srcfit.kernel(member, x, s).real, expected, 1e-10)


def test_referees_agree():
    # the two beam referees share only the equation
    for seed in (10, 11):
        _, stepped, solid, x, s = random_beam(seed)
        columns = [
            beams.bend(solid, lumped=[(p, 1.0)], places=x, size=1.0, degree=7).at("shear", x)
            for p in s
        ]
        shear = np.array(digits.kernel(stepped, x, s, read=[0, 0, 0, 1]), dtype=float)
        close(np.array(columns).T, shear, 1e-6)
