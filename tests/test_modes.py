"""Mode functions, null modes, buckling, and the kernel as the series of its modes."""

import itertools
import time
from dataclasses import replace

import numpy as np
import pytest
from eigenproblems import (
    BESSEL,
    COFFEY,
    PI,
    PROBLEMS,
    general,
    off,
    quadrature,
    sheared,
    transfer,
    unit_beam,
)
from hypothesis import given, settings
from hypothesis import strategies as st
from pairs import beam, random_beam

import srcfit
from srcfit.eigen import critical_compression, null_modes
from srcfit.eigencount import number_below
from srcfit.errors import MemberError
from srcfit.member import Profile

SHEARED = sheared(2e4)[0]
BODIES = {
    "cantilever": unit_beam("clamped", "free"),
    "stepped beam": random_beam(1)[0],
    "shears": SHEARED,
    "Legendre": PROBLEMS["-((1-x2)y')'=lam y on (-1,1)", "bounded"][0],
    "Coffey-Evans": general(COFFEY[1], COFFEY[2], "fixed", "fixed", q=COFFEY[0]),
    "disc": BESSEL("free"),
}


@pytest.mark.parametrize("name", BODIES)
def test_orthonormal_with_weight_and_signed(name):
    member = BODIES[name]
    found = srcfit.modes(member, 40)
    x, weight = quadrature(member)
    phi = found.functions(x)
    assert np.abs(phi.T @ (weight[:, None] * phi) - np.eye(40)).max() < 1e-10
    there = np.abs(phi) > 1e-5 * np.abs(phi).max(axis=0)
    assert (phi[np.argmax(there, axis=0), np.arange(40)] > 0).all()


def test_high_modes_do_not_overflow():
    found = srcfit.modes(BODIES["cantilever"], 120)
    x = np.linspace(0, 1, 3001)
    phi = found.functions(x)
    # every mode of a uniform cantilever with unit mass has the value 2 at its tip, and no larger
    assert np.abs(np.abs(phi[-1]) - 2).max() < 1e-10
    assert np.abs(phi).max() < 2 + 1e-10
    z = found.eigenvalues[119] ** 0.25
    wave = np.cos(z * x) - np.sin(z * x) - np.exp(-z * x)  # away from the tip, to exp(-z/2)
    half = x < 0.5
    assert np.abs(phi[half, 119] + wave[half]).max() < 1e-9


def test_states_meet_ends_supports_and_hinges():
    found = srcfit.modes(SHEARED, 10)
    ends = found.states(np.array([0.0, 4.0]))
    size = np.abs(found.states(np.linspace(0.01, 3.99, 97))).max(axis=0)
    assert (np.abs(ends[0, :2]) < 1e-9 * size[:2]).all()  # clamped
    assert (np.abs(ends[1, 2:]) < 1e-7 * size[2:]).all()  # free
    near = 1e-9
    before, after = found.states(np.array([1 - near, 1 + near]))
    assert (np.abs(after - before)[[0, 2, 3]] < 1e-6 * size[[0, 2, 3]]).all()
    assert (np.abs(before[2] - 3e4 * (before[1] - after[1])) < 1e-6 * size[2]).all()
    assert (np.abs(found.functions(np.array([2.5]))) < 1e-12).all()


def test_states_of_a_bar():
    found = srcfit.modes(general(0, 2, "fixed", "free", p=3), 6)
    k = (np.arange(6) + 0.5) * PI / 2
    x = np.linspace(0, 2, 31)
    expected = np.stack([np.sin(np.outer(x, k)), 3 * k * np.cos(np.outer(x, k))], axis=1)
    assert np.abs(found.states(x) - expected).max() < 1e-9
    assert np.array_equal(found.states(x)[:, 0], found.functions(x))


def test_interface_jumps():
    member = srcfit.make_member({
        "kind": "wall", "length": "1 m", "conductivity": "1 W/(m*K)", "left": "fixed",
        "right": "free", "ambient": "0 degC",
        "interface": [{"at": "0.4 m", "resistance": "0.7 m^2*K/W"}],
    })  # fmt: skip
    found = srcfit.modes(member, 5)
    near = 1e-12
    before, after = found.states(np.array([0.4 - near, 0.4]))
    assert np.abs(after[0] - before[0] - 0.7 * before[1]).max() < 1e-8
    assert np.abs(after[1] - before[1]).max() < 1e-8


# ---------------------------------------------------------------- multiple and null eigenvalues


def test_double_eigenvalues():
    halves = general(0, 1, "fixed", "fixed", support=[{"at": 0.5, "kind": "fixed"}])
    found = srcfit.modes(halves, 10)
    expected = (np.repeat(np.arange(1, 6), 2) * 2 * PI) ** 2
    assert off(found.eigenvalues, expected).max() < 1e-13
    x, weight = quadrature(halves)
    phi = found.functions(x)
    assert np.abs(phi.T @ (weight[:, None] * phi) - np.eye(10)).max() < 1e-12
    assert number_below(halves, (2 * PI) ** 2 * (1 + 1e-9)) == 2
    spans = unit_beam("pinned", "pinned", hinge=[{"at": "0.5 m"}],
                      support=[{"at": "0.5 m", "kind": "pinned"}])  # fmt: skip
    assert off(srcfit.modes(spans, 7).eigenvalues[:6],
               (np.repeat([1, 2, 3], 2) * 2 * PI) ** 4).max() < 1e-13  # fmt: skip


HINGES = [{"at": "0.3 m"}, {"at": "0.6 m"}]
NULLS = {
    "free beam": (unit_beam("free", "free"), 0.0, 2),
    "guided beam": (unit_beam("guided", "free"), 0.0, 1),
    "pinned at one end": (unit_beam("pinned", "free"), 0.0, 1),
    "chain of three": (unit_beam("free", "free", hinge=HINGES), 0.0, 4),
    "mechanism": (unit_beam("pinned", "pinned", hinge=HINGES[:1]), 0.0, 1),
    "taut free beam": (unit_beam("free", "free", tension="2 N"), 0.0, 1),
    "held beam": (unit_beam("pinned", "pinned"), 0.0, 0),
    "weak spring": (unit_beam("pinned", {"deflection_spring": "1 mN/m"}), 0.0, 0),
    "insulated": (general(0, 1, "free", "free"), 0.0, 1),
    "two insulated halves": (
        general(0, 1, "free", "free", support=[{"at": 0.5, "kind": "fixed"}]), 0.0, 0),
    "a loss": (general(0, 1, "free", "free", q=1e-3), 0.0, 0),
    "balanced by lambda": (general(0, 1, "free", "free", q=2), 2.0, 1),
    "at resonance": (unit_beam("pinned", "pinned"), (3 * PI) ** 4, 1),
    "beside resonance": (unit_beam("pinned", "pinned"), (3 * PI) ** 4 * (1 + 1e-6), 0),
}  # fmt: skip


@pytest.mark.parametrize("name", NULLS)
def test_null_modes(name):
    member, mu, count = NULLS[name]
    found = null_modes(member, mu)
    assert found.eigenvalues.shape == (count,)
    assert (np.abs(found.eigenvalues - mu) <= 1e-10 * max(mu, 1)).all()
    x, weight = quadrature(member)
    phi = found.functions(x)
    assert phi.shape == (len(x), count)
    assert np.abs(phi.T @ (weight[:, None] * phi) - np.eye(count)).max(initial=0) < 1e-11
    if mu == 0 and count:
        assert np.abs(found.states(x)[:, member.kind.order // 2 :]).max() < 1e-8


# ---------------------------------------------------------------- buckling


@pytest.mark.parametrize(("left", "right", "factor"), [
    ("pinned", "pinned", 1.0), ("clamped", "free", 0.25), ("clamped", "clamped", 4.0),
    ("guided", "guided", 1.0), ("clamped", "pinned", (4.493409457909064 / PI) ** 2),
    ("pinned", "free", 0.0), ("free", "free", 0.0), ("pinned", "guided", 0.25),
])  # fmt: skip
def test_euler_columns(left, right, factor):
    # Euler's cases: common practice; 4.4934... is the first root of tan z = z
    given = {"length": "2 m", "bending_stiffness": "3 N*m^2", "left": left, "right": right}
    found = critical_compression(beam(**given, tension="-0.7 N"))
    assert found == pytest.approx(factor * PI**2 * 3 / 4, rel=1e-11, abs=1e-9)
    if found:
        for part, stable in ((1 - 1e-7, True), (1 + 1e-7, False)):
            pushed = beam(**given, tension=f"{-found * part!r} N")
            # a little below 0, so that a movement that nothing resists does not count
            assert (number_below(pushed, -1e-9) == 0) == stable


def test_columns_on_foundations_and_columns_that_shear():
    k = np.arange(1, 12) * PI
    bedded = unit_beam("pinned", "pinned", foundation="1e4 N/m^2", tension="-1 N")
    assert critical_compression(bedded) == pytest.approx((k**2 + 1e4 / k**2).min(), rel=1e-11)
    soft = unit_beam("pinned", "pinned", shear_stiffness="5 N", tension="-9 N")
    # Engesser: 1/P = 1/(pi^2 EI/L^2) + 1/S
    assert critical_compression(soft) == pytest.approx(1 / (1 / PI**2 + 1 / 5), rel=1e-11)
    assert critical_compression(unit_beam("pinned", "pinned")) is None
    assert critical_compression(unit_beam("pinned", "pinned", tension="4 N")) is None
    assert critical_compression(general(0, 1, "fixed", "fixed")) is None


def test_stepped_compression_scales_with_one_factor():
    table = [["0 m", "0.3 m", "0 N"], ["0.3 m", "0.6 m", "-2 N"], ["0.6 m", "1 m", "5 N"]]
    found = critical_compression(unit_beam("pinned", "pinned", tension=table))
    for part, below in ((1 - 1e-8, 0), (1 + 1e-8, 1)):
        table[1][2] = f"{-found * part!r} N"
        assert number_below(unit_beam("pinned", "pinned", tension=table), 0.0) == below


# ---------------------------------------------------------------- the kernel's series


def test_trace_of_the_kernel():
    # sum of 1/(eigenvalue - lambda) = integral of r G(x, x): beams converge like N^-3
    member = srcfit.make_member({
        "kind": "general", "order": 4, "start": 0, "end": 2, "left": "clamped", "right": "pinned",
        "p2": "1 + x", "p0": 3, "r": "2 - x/2",
    })  # fmt: skip
    value = srcfit.modes(member, 80).eigenvalues
    edges = np.linspace(0, 2, 21)
    t, w = np.polynomial.legendre.leggauss(6)
    x = (edges[:-1, None] + 0.05 * (1 + t)).ravel()
    weight = np.tile(0.05 * w, 20) * (2 - x / 2)
    whole = float(weight @ np.diag(srcfit.kernel(member, x, x)))
    y, v = np.polynomial.legendre.leggauss(40)
    phase = float(v @ ((2 - (1 + y) / 2) / (2 + y)) ** 0.25)

    def tail(count):  # eigenvalues (k + 1/4)^4 (pi / phase)^4, Euler-Maclaurin
        return (phase / PI) ** 4 / (3 * (count + 0.75) ** 3)

    for count in (20, 40, 80):
        assert whole - (1 / value[:count]).sum() == pytest.approx(tail(count), rel=0.02)
    assert (1 / value).sum() + tail(80) == pytest.approx(whole, rel=1e-9)


@pytest.mark.parametrize(("member", "power"), [
    (general(0, 2, "fixed", transfer(0.7), p=[[0, 0.9, 1], [0.9, 2, 4]], q=2), 1),
    (unit_beam("clamped", "free", foundation=[["0 m", "0.4 m", "50 N/m^2"],
                                              ["0.4 m", "1 m", "0 N/m^2"]]), 3),
    (unit_beam("free", "free"), 3), (general(0, 1, "free", "free"), 1),
], ids=["bar", "beam", "free beam", "insulated"])  # fmt: skip
def test_series_of_the_kernel(member, power):
    x = member.start + member.length * np.linspace(0.03, 0.97, 29)
    G = srcfit.kernel(member, x, x)
    found = srcfit.modes(member, 129)
    phi, value = found.functions(x), found.eigenvalues
    nulls = int((np.abs(value) < 1e-12).sum())

    def rest(count):
        part = phi[:, nulls:count] / value[nulls:count]
        return np.abs(np.diag(G - part @ phi[:, nulls:count].T)).mean()

    # the rest on the diagonal falls like count ** -power, its mean by the theory of the phases
    rates = [np.log2(rest(n) / rest(2 * n)) for n in (32, 64)]
    assert np.abs(np.array(rates) - power).max() < 0.15
    assert np.abs(G - (phi[:, nulls:] / value[nulls:]) @ phi[:, nulls:].T).max() < 4 * rest(128)


# ---------------------------------------------------------------- odds and ends


def test_driving_and_lambda_are_ignored():
    plain = unit_beam("pinned", "free", mass="3 kg/m")
    driven = unit_beam("pinned", "free", mass="3 kg/m", frequency="4 Hz", damping=0.1)
    assert np.array_equal(srcfit.modes(plain, 5).eigenvalues, srcfit.modes(driven, 5).eigenvalues)
    shifted = general(0, 1, "fixed", "free", **{"lambda": 3})
    assert (
        off(srcfit.modes(shifted, 4).eigenvalues, ((np.arange(4) + 0.5) * PI) ** 2).max() < 1e-13
    )


def test_settlements_are_ignored():
    support = {"at": "0.5 m", "kind": "pinned"}
    end = {"kind": "pinned", "settlement": "3 mm"}
    moved = unit_beam(end, "clamped", support=[{**support, "settlement": "1 mm"}])
    still = unit_beam("pinned", "clamped", support=[support])
    assert np.array_equal(srcfit.modes(moved, 5).eigenvalues, srcfit.modes(still, 5).eigenvalues)


@pytest.mark.parametrize("width", [1e-3, 1e-6, 1e-9, 1e-12])
def test_slivers(width):
    # a stretch of another stiffness: its effect is its width times the strain there (Rayleigh)
    def stiffness(width):
        return [["0 m", "0.5 m", "1 N*m^2"], ["0.5 m", f"{0.5 + width!r} m", "2 N*m^2"],
                [f"{0.5 + width!r} m", "1 m", "3 N*m^2"]]  # fmt: skip

    given = {"length": "1 m", "left": "pinned", "right": "free"}
    plain = srcfit.modes(beam(**given, bending_stiffness=[
        ["0 m", "0.5 m", "1 N*m^2"], ["0.5 m", "1 m", "3 N*m^2"]]), 6)  # fmt: skip
    found = srcfit.modes(beam(**given, bending_stiffness=stiffness(width)), 6)
    moment = plain.states(np.array([0.5]))[0, 2]
    # energy of a given moment: M^2 / EI, 1/2 instead of 1/3 per unit length
    change = -(1 / 2 - 1 / 3) * moment**2 * width
    assert np.abs(found.eigenvalues - plain.eigenvalues - change)[1:].max() < (
        30 * np.abs(change).max() * width + 1e-11 * plain.eigenvalues.max()
    )


def test_stiff_springs_and_stiff_sections_come_to_rigid_ones():
    rigid = srcfit.modes(unit_beam("clamped", "pinned"), 10).eigenvalues
    end = {"deflection_spring": "1e14 N/m", "rotation_spring": "1e14 N*m"}
    stiff = unit_beam(end, "pinned", shear_stiffness="1e15 N")
    assert off(srcfit.modes(stiff, 10).eigenvalues, rigid).max() < 1e-7
    held = {"deflection_spring": "rigid", "rotation_spring": "rigid"}
    assert off(srcfit.modes(unit_beam(held, "pinned"), 10).eigenvalues, rigid).max() < 1e-13


@pytest.mark.parametrize(("member", "count", "words"), [
    (unit_beam("free", "free"), 0, "0 modes were asked for"),
    (unit_beam("free", "free"), 2.5, "2.5 modes were asked for"),
    (replace(general(0, 1, "fixed", "free"), profiles={"p": Profile((0, 1), (-2.0,))}), 3,
     "p is not positive at"),
    (unit_beam("clamped", "free", shear_stiffness="1 N", tension="-5 N"), 3,
     "compression exceeds the shear stiffness"),
])  # fmt: skip
def test_errors(member, count, words):
    with pytest.raises(MemberError, match=words):
        srcfit.modes(member, count)


def test_a_missed_mode_is_noticed(monkeypatch):
    from srcfit import eigen

    def careless(member, count, what, finer):
        form, value, amounts = whole(member, count + 1, what, finer)
        return form, np.delete(value, 3), np.delete(amounts, 3, axis=1)

    whole = eigen.solve
    monkeypatch.setattr(eigen, "solve", careless)
    with pytest.raises(MemberError, match="the first 6 modes could not be found for certain"):
        srcfit.modes(unit_beam("clamped", "free"), 6)


def test_places_off_the_member():
    with pytest.raises(MemberError, match=r"x = 1\.5 m is not on the member"):
        srcfit.modes(unit_beam("free", "free"), 3).functions(np.array([0.2, 1.5]))


def test_fifty_modes_are_quick():
    srcfit.modes(unit_beam("clamped", "free"), 5)
    start = time.process_time()
    srcfit.modes(unit_beam("clamped", "pinned"), 50)
    assert time.process_time() - start < 1.0


numbers = st.floats(0.2, 5.0)


@settings(max_examples=6, deadline=None, derandomize=True)
@given(
    st.lists(numbers, min_size=2, max_size=4), numbers, st.floats(-8, 8), st.floats(0.1, 0.9),
    st.sampled_from(["pinned", "clamped", "free", "guided"]),
    st.sampled_from(["pinned", "clamped", "free", "guided"]),
)  # fmt: skip
def test_any_beam(stiffness, mass, tension, place, left, right):
    edges = np.linspace(0, 1, len(stiffness) + 1)
    given = {
        "length": "1 m", "left": left, "right": right, "mass": f"{mass!r} kg/m",
        "tension": f"{tension!r} N",
        "bending_stiffness": [[f"{a!r} m", f"{b!r} m", f"{v!r} N*m^2"] for (a, b), v in
                              zip(itertools.pairwise(edges.tolist()), stiffness, strict=True)],
    }  # fmt: skip
    member = beam(**given)
    value = srcfit.modes(member, 8).eigenvalues
    assert (np.diff(value) >= 0).all()
    for k in (1, 4, 7):
        if value[k] - value[k - 1] > 1e-6 * abs(value[k]) + 1e-9:
            assert number_below(member, float(value[k - 1 : k + 1].mean())) == k
    # a support raises each eigenvalue, at most to the next one (Rayleigh's theorem)
    held = srcfit.modes(
        beam(**given, support=[{"at": f"{place!r} m", "kind": "pinned"}]), 7
    ).eigenvalues
    slack = 1e-9 * np.abs(value[:7]) + 1e-9
    assert (held >= value[:7] - slack).all()
    assert (held <= value[1:8] + 1e-9 * np.abs(value[1:8]) + 1e-9).all()
