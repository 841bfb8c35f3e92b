"""`kernel` against closed forms (textbook formulas, derived again; common practice)."""

import itertools

import numpy as np
import pytest
from pairs import RIGID, beam, close, member_of_order_2
from referees import beams

import srcfit
from srcfit.errors import MemberError

X = np.linspace(0.0, 1.0, 13)
LOW, HIGH = np.minimum(X[:, None], X), np.maximum(X[:, None], X)


def test_string():
    member = srcfit.make_member({
        "kind": "cable", "length": "3 m", "tension": "5 kN", "left": "fixed", "right": "fixed",
    })  # fmt: skip
    close(srcfit.kernel(member, 3 * X, 3 * X), 3 * LOW * (1 - HIGH) / 5e3, 1e-10)


def test_rod_fixed_free():
    member = srcfit.make_member({
        "kind": "rod", "length": "2 m", "axial_stiffness": "8 MN", "left": "fixed",
        "right": "free",
    })  # fmt: skip
    close(srcfit.kernel(member, 2 * X, 2 * X), 2 * LOW / 8e6, 1e-10)
    # p u' left of the source is 1, right of it 0
    force = srcfit.kernel(member, [0.5], [0.3, 0.9], "force")
    close(force, [[0.0, 1.0]], 1e-12)


@pytest.mark.parametrize("right", [RIGID, 0.0, 3.0])
@pytest.mark.parametrize("left", [RIGID, 0.0, 0.7])
def test_fin(left, right):
    p, q, length = 0.4, 2.5, 1.7
    m = np.sqrt(q / p)

    def from_end(spring, y):
        # solution that meets the end, and its slope, as parts of e^(m length)
        a, b = (0.0, 1.0) if spring == RIGID else (1.0, spring / (p * m))
        c, s = np.cosh(m * y), np.sinh(m * y)
        return a * c + b * s, m * (a * s + b * c)

    x = length * X
    (u, du), (v, dv) = from_end(left, x), from_end(right, length - x)
    wronskian = p * (du * v + u * dv)[0]
    i, j = np.indices((13, 13))
    expected = u[np.minimum(i, j)] * v[np.maximum(i, j)] / wronskian
    member = member_of_order_2([(0.0, length, p)], [(0.0, length, q)], length, left, right)
    found = srcfit.kernel(member, x, x)
    assert np.abs(found - expected).max() <= 1e-10 * np.abs(expected).max()


BEAMS = {  # unit length and stiffness; a the nearer place to the left end, b the farther
    ("pinned", "pinned"): lambda a, b: a * (1 - b) * (1 - a**2 - (1 - b) ** 2) / 6,
    ("clamped", "free"): lambda a, b: a**2 * (3 * b - a) / 6,
    ("clamped", "clamped"): lambda a, b: a**2 * (1 - b) ** 2 * (3 * b - a - 2 * a * b) / 6,
    ("clamped", "guided"): lambda a, b: a**2 * (6 * b - 3 * b**2 - 2 * a) / 12,
    ("pinned", "guided"): lambda a, b: a * (6 * b - 3 * b**2 - a**2) / 6,
}


@pytest.mark.parametrize("ends", BEAMS)
def test_beam_closed_forms(ends):
    member = beam(length="5 m", bending_stiffness="3 MN*m^2", left=ends[0], right=ends[1])
    close(srcfit.kernel(member, 5 * X, 5 * X), BEAMS[ends](LOW, HIGH) * 125 / 3e6, 1e-10)


def test_winkler_infinite():
    # Hetenyi (1946), ch. 2, from memory; 30 decay lengths stand for infinity
    k, EI = 2e6, 1.68e6
    b = (k / (4 * EI)) ** 0.25
    length = 60 / b
    member = beam(length=f"{length!r} m", bending_stiffness="1.68 MN*m^2", foundation="2 MN/m^2")
    r = np.linspace(0, 8, 20) / b
    found = srcfit.kernel(member, length / 2 + r, [length / 2])[:, 0]
    close(found, b / (2 * k) * np.exp(-b * r) * (np.cos(b * r) + np.sin(b * r)), 1e-10)
    moment = srcfit.kernel(member, length / 2 + r, [length / 2], "moment")[:, 0]
    close(moment, np.exp(-b * r) * (np.cos(b * r) - np.sin(b * r)) / (4 * b), 1e-10)


def test_insulated_wall_generalised():
    # Neumann function orthogonal to constants: (x^2 + s^2)/2 - max(x, s) + 1/3 on [0, 1]
    member = srcfit.make_member({
        "kind": "wall", "length": "1 m", "conductivity": "1 W/(m*K)",
        "left": "insulated", "right": "insulated",
    })  # fmt: skip
    expected = (X[:, None] ** 2 + X**2) / 2 - HIGH + 1 / 3
    close(srcfit.kernel(member, X, X), expected, 1e-10)


def test_free_beam_generalised():
    # held at two places by the referee, then freed of its rigid part by projection
    member = beam(length="2 m", bending_stiffness="3 N*m^2")
    x, s = np.array([0.0, 0.3, 1.1, 2.0]), np.array([0.2, 0.9, 1.7])
    t, w = np.polynomial.legendre.leggauss(40)
    modes = [lambda y: 0 * y + np.sqrt(0.5), lambda y: (y - 1) * np.sqrt(1.5)]

    def projected(held, values):
        def along(y):
            return held.at("deflection", y)

        nodes = [0.0, *s, 2.0]
        out = values.copy()
        for mode in modes:
            amount = sum(
                (b - a) / 2 * np.sum(w * mode(y) * along(y))
                for a, b in itertools.pairwise(nodes)
                for y in [(a + b) / 2 + (b - a) / 2 * t]
            )
            out -= amount * mode(x)
        return out

    expected = []
    for place in s:
        balance = [(0.0, 2.0, lambda y, p=place: -sum(mode(p) * mode(y) for mode in modes))]
        held = beams.Beam(2.0, 3.0, left=beams.PINNED, right=beams.PINNED)
        solved = beams.bend(held, balance, [(place, 1.0)], places=[*x, *s], degree=9)
        expected.append(projected(solved, solved.at("deflection", x)))
    close(srcfit.kernel(member, x, s), np.array(expected).T, 1e-9)


def test_unbalanced_source_is_refused():
    with pytest.raises(MemberError):
        srcfit.respond(beam(length="2 m", bending_stiffness="3 N*m^2"), [1.0], lambda x: 1 + 0 * x)


def test_general_with_lambda():
    # -u'' - 5 u = delta on [0, 1], u = 0 at both ends: sin products
    member = srcfit.make_member({
        "kind": "general", "order": 2, "start": 0.0, "end": 1.0, "p": 1.0, "lambda": 5.0,
        "left": "fixed", "right": "fixed",
    })  # fmt: skip
    m = np.sqrt(5.0)
    close(
        srcfit.kernel(member, X, X),
        np.sin(m * LOW) * np.sin(m * (1 - HIGH)) / (m * np.sin(m)),
        1e-11,
    )
