"""The whole response against finite elements, and reciprocity between unlike sensors.

Maxwell-Betti reciprocity is common practice, no source.
"""

import itertools

import numpy as np
import pytest
from pairs import RIGID, beam, close, member_of_order_2, none, random_beam
from referees import beams, second_order

import srcfit


def test_settled_springy_hinged_beam():
    member = beam(
        length="30 m",
        bending_stiffness=[["0 m", "10 m", "700 MN*m^2"], ["10 m", "30 m", "800 MN*m^2"]],
        foundation="0.5 MN/m^2", tension="2 MN",
        left={"kind": "pinned", "settlement": "3 mm"},
        right={"kind": "clamped", "rotation": "2 mrad"},
        support=[
            {"at": "12 m", "kind": "spring", "stiffness": "5 MN/m", "settlement": "4 mm"},
            {"at": "20 m", "kind": "pinned", "settlement": "-6 mm"},
        ],
        hinge=[{"at": "15 m", "spring": "40 MN*m"}],
    )  # fmt: skip
    solid = beams.Beam(
        30.0, [(0.0, 10.0, 7e8), (10.0, 30.0, 8e8)], 5e5, 2e6,
        beams.End(RIGID, 0.0, 3e-3), beams.End(RIGID, RIGID, 0.0, 2e-3),
        ((12.0, 5e6, 4e-3), (20.0, RIGID, -6e-3)), ((15.0, 4e7),),
    )  # fmt: skip

    def load(x):
        return 1e4 * (1 + np.sin(x / 5))

    x = np.array([0.0, 4.0, 14.0, 18.0, 25.0])
    lumped, couples = [(6.0, 3e4)], [(22.0, 5e4)]
    solved = beams.bend(solid, [(0.0, 30.0, load)], lumped, couples, 11, 2.0, x)
    acting = [*lumped, (22.0, 5e4, "couple")]
    for ours, theirs in (
        ("response", "deflection"), ("slope", "rotation"), ("moment", "moment"), ("shear", "shear")
    ):  # fmt: skip
        close(srcfit.respond(member, x, load, acting, ours), solved.at(theirs, x), 1e-9)
    places = [0.0, 12.0, 20.0, 30.0]
    reactions = srcfit.respond(member, places, load, acting, "reaction")
    close(reactions, [solved.reactions[p] for p in places], 1e-9)


def test_conductor_with_ambients_and_interface():
    member = srcfit.make_member({
        "kind": "conductor", "length": "2 m", "ambient": "20 degC",
        "conductance": [["0 m", "0.7 m", "2 W*m/K"], ["0.7 m", "2 m", "0.5 W*m/K"]],
        "loss": "0.9 W/(m*K)", "left": {"value": "55 degC"},
        "right": {"transfer": "1.5 W/K", "ambient": "5 degC"},
        "interface": [{"at": "1.2 m", "resistance": "0.8 K/W"}],
        "support": [
            {"at": "0.4 m", "kind": "spring", "stiffness": "0.3 W/K", "settlement": "10 degC"}
        ],
    })  # fmt: skip
    line = second_order.Line(
        0.0, 2.0, [(0.0, 0.7, 2.0), (0.7, 2.0, 0.5)], 0.9, (RIGID, 35.0), (1.5, -15.0),
        ((0.4, 0.3, -10.0),), ((1.2, 0.8),),
    )  # fmt: skip
    x = np.array([0.1, 0.6, 1.1, 1.3, 2.0])
    solved = second_order.settle(line, [(0.0, 2.0, 12.0)], [(0.9, 7.0)], 12, places=x)
    found = srcfit.respond(member, x, lambda x: 12 + 0 * x, [(0.9, 7.0)])
    close(found - 293.15, solved.at("response", x), 1e-10)


def test_convergence_of_constant_cells():
    # a smooth source replaced by its middle values on m equal cells: error of order m^-2
    member = beam(
        length="4 m", bending_stiffness="1.68 MN*m^2", foundation="0.2 MN/m^2", left="pinned",
        right="clamped",
    )  # fmt: skip
    x = np.array([0.9, 2.1, 3.2])

    def load(x):
        return 1e4 * np.sin(1.3 * x + 0.4)

    exact = srcfit.respond(member, x, load)
    counts = np.array([8, 16, 32, 64])
    errors = []
    for m in counts:
        middles = (np.arange(m) + 0.5) * 4 / m
        errors.append(np.abs(srcfit.respond(member, x, load(middles)) - exact).max())
    rate = -np.polyfit(np.log(counts), np.log(errors), 1)[0]
    assert rate == pytest.approx(2.0, abs=0.05)
    solid = beams.Beam(4.0, 1.68e6, 2e5, 0.0, beams.PINNED, beams.CLAMPED)
    close(exact, beams.bend(solid, [(0.0, 4.0, load)], places=x).at("deflection", x), 1e-10)


@pytest.mark.parametrize("seed", range(3))
def test_rotation_and_couple_are_reciprocal(seed):
    # rotation at x by a unit load at s = deflection at s by a unit couple at x
    member, _, _, x, s = random_beam(seed)
    x = x[1:-1]
    rotation = srcfit.kernel(member, x, s, "slope")
    columns = [srcfit.respond(member, s, none, [(place, 1.0, "couple")]) for place in x]
    close(rotation, np.array(columns), 1e-10)


def test_strain_gauge_and_pair_of_couples_are_reciprocal():
    # mean curvature over a gauge by a unit load at s = deflection at s by opposite couples of
    # size 1/g at the gauge's ends
    member, _, _, _, _ = random_beam(4)
    a, b = 0.6 * member.length, 0.7 * member.length
    t, w = np.polynomial.legendre.leggauss(24)
    cuts = np.unique([a, b, *(e for p in member.profiles.values() for e in p.edges if a < e < b)])
    s = np.array([0.1, 0.4, 0.85]) * member.length
    mean = np.zeros(3)
    for lo, hi in itertools.pairwise(cuts):
        places = (lo + hi) / 2 + (hi - lo) / 2 * t
        mean += (hi - lo) / 2 * w @ srcfit.kernel(member, places, s, "curvature") / (b - a)
    size = 1 / (b - a)
    pair = srcfit.respond(member, s, none, [(a, size, "couple"), (b, -size, "couple")])
    close(mean, pair, 1e-10)


def test_flux_and_dipole_are_reciprocal():
    # flux at x by a unit source at s: minus p times the slope in x of the response at s by a
    # source at x, here by a seventh-order polynomial through places near x
    member = member_of_order_2([(0.0, 2.0, 0.4)], [(0.0, 2.0, 2.0)], 2.0, RIGID, 0.8)
    nodes = 0.7 + 0.05 * np.cos(np.pi * (np.arange(8) + 0.5) / 8)
    s = np.array([0.2, 1.5])
    G = srcfit.kernel(member, s, nodes)
    slopes = [np.polynomial.Chebyshev.fit(nodes, row, 7).deriv()(0.7) for row in G]
    close(srcfit.kernel(member, [0.7], s, "flux")[0], -0.4 * np.array(slopes), 1e-8)


def test_springs_of_radial_members_are_per_area():
    member = srcfit.make_member({
        "kind": "cylinder", "inner_radius": "0.02 m", "outer_radius": "0.07 m",
        "conductivity": "15 W/(m*K)", "ambient": "20 degC", "left": "insulated",
        "right": {"transfer": "200 W/(m^2*K)", "ambient": "20 degC"},
        "support": [{"at": "0.04 m", "kind": "spring", "stiffness": "90 W/(m^2*K)"}],
    })  # fmt: skip
    pull = 90 * 2 * np.pi * 0.04  # the referee's inner springs are per metre of height
    line = second_order.Line(
        0.02, 0.07, 15.0, right=(200.0, 0.0), supports=((0.04, pull, 0.0),), geometry="cylinder"
    )
    r = np.array([0.02, 0.05, 0.07])
    solved = second_order.settle(line, [(0.02, 0.07, 1e5)], degree=14, places=r)
    found = srcfit.respond(member, r, lambda r: 1e5 + 0 * r)
    close(found - 293.15, solved.at("response", r), 1e-10)
    # what the spring and the surface carry is the whole heat, per metre of height
    carried = srcfit.respond(member, [0.04, 0.07], lambda r: 1e5 + 0 * r, quantity="reaction")
    close(carried, [solved.reactions[0.04], solved.reactions[0.07]], 1e-10)
    assert carried.sum() == pytest.approx(1e5 * np.pi * (0.07**2 - 0.02**2), rel=1e-10)
