"""Members that nothing holds, or whose lambda is an eigenvalue: balanced sources, with lumped and
known parts, against closed forms."""

import numpy as np
import pytest
from test_forward import case_of

import srcfit
from srcfit.balance import balance
from srcfit.errors import MemberError, SolveError
from srcfit.holds import restrained
from srcfit.nulls import Nulls
from srcfit.recover import estimate
from srcfit.solve import solve
from srcfit.state import chain

L, K = 2.0, 0.4
ROD = {
    "kind": "conductor", "length": "2 m", "conductance": "0.4 W*m/K", "left": "insulated",
    "right": "insulated",
}  # fmt: skip
HEATER, AT = 80.0, 0.7


def temperature(x, heater=HEATER, wave=30.0, level=350.0, n=2):
    """-k T'' = heater (delta(x - AT) - 1/L) + wave cos(n pi x/L), no flux at the ends."""
    k = n * np.pi / L
    cosine = wave * np.cos(k * x) / (K * k**2)
    # -k T'' = -h/L left and right, flux jumps by h at the heater
    bent = heater / K * (x**2 / (2 * L) - np.where(x > AT, x - AT, 0.0))
    return level + cosine + bent


def rod_case(folder, source, heater=HEATER, sd=0.02, seed=1, **column):
    x = np.linspace(0.05, 1.95, 20).round(6)
    T = temperature(x, heater) + sd * np.random.default_rng(seed).normal(size=20)
    columns = [{"column": "T", "kind": "temperature", "unit": "K", "sd": f"{sd!r} K", **column}]
    rows = list(zip(x.tolist(), T.tolist(), strict=True))
    zones = [{"name": "left", "from": "0 m", "to": "1 m"}]
    source = {"unit": "W/m", "cells": 80, "zones": zones, **source}
    return case_of(folder, ROD, columns, rows, source)


def holds(number, truth):
    return number["lower"] <= truth <= number["upper"]


def smooth(a, b, heater=HEATER):
    """Integral of the smooth part over [a, b]."""
    k = 2 * np.pi / L
    return 30.0 * (np.sin(k * b) - np.sin(k * a)) / k - heater / L * (b - a)


def test_known_heater_on_an_insulated_rod(tmp_path):
    case = rod_case(tmp_path, {"known": [{"at": "0.7 m", "value": "80 W"}]})
    found = srcfit.recover(case)
    # everything reported is beyond the known part: the smooth part takes up what it brings
    assert found.total["value"] == pytest.approx(-HEATER, rel=1e-12)
    assert found.total["sd"] == 0
    assert holds(found.summary()["zones"][0], smooth(0, 1))
    told = next(f for f in found.findings if f["code"] == "singular-member")
    assert "balances the known parts" in told["sentence"]
    assert found.balance["source"] == pytest.approx(0, abs=1e-9 * HEATER)
    flow = found.section["heat_flow [W]"].to_numpy()
    assert np.abs(flow[[0, -1]]).max() < 1e-9 * HEATER


def test_unknown_heater_on_an_insulated_rod(tmp_path):
    case = rod_case(tmp_path, {"lumped": [{"name": "heater", "at": "0.7 m"}]})
    found = srcfit.recover(case)
    assert found.total["value"] == 0
    assert found.total["sd"] == 0
    heater = found.summary()["lumped"][0]
    assert holds(heater, HEATER)
    assert heater["sd"] < 0.2 * HEATER
    assert holds(found.summary()["zones"][0], smooth(0, 1) + HEATER)
    told = next(f for f in found.findings if f["code"] == "singular-member")
    assert "its total is zero" in told["sentence"]
    table = found.source
    width = table["to [m]"] - table["from [m]"]
    left = (table["estimate [W/m]"] * width).sum()
    assert left == pytest.approx(-heater["value"], rel=1e-9)


def test_spread_heater_and_known_stretch(tmp_path):
    """A lumped part with a width, and a known density: what balances them is exact."""
    source = {
        "lumped": [{"name": "heater", "at": "0.7 m", "width": "0.1 m"}],
        "known": [{"from": "1.2 m", "to": "1.8 m", "value": "-20 W/m"}],
    }  # fmt: skip
    solved = solve(case := rod_case(tmp_path, source), srcfit.read(case))
    total = solved.asked.questions.columns[0], solved.asked.constant[0]
    assert np.abs(total[0]).max() == 0
    assert total[1] == pytest.approx(12.0, rel=1e-12)
    f, beta = estimate(solved)
    assert balance(solved.forward, f, beta).gap < 1e-10
    assert f @ solved.forward.grid.weights + beta[0] == pytest.approx(12.0, rel=1e-9)


def test_coverage_of_lumped_and_zone(tmp_path):
    """60 draws: at least 54 of them hold (one in a thousand that fewer do at 95 %)."""
    held = np.zeros(2)
    for seed in range(60):
        case = rod_case(tmp_path, {"cells": 40, "lumped": [{"name": "h", "at": "0.7 m"}]},
                        seed=seed)  # fmt: skip
        s = solve(case, srcfit.read(case), criteria=False)
        for i, (block, truth) in enumerate((("lumped", HEATER), ("zones", smooth(0, 1) + HEATER))):
            at = s.asked.blocks[block].start
            held[i] += s.answers.lower[at] <= truth <= s.answers.upper[at]
    assert (held >= 52).all(), held


def test_lumped_parts_alone(tmp_path):
    """No smooth part: one of two lumped parts follows from the other."""
    x = np.linspace(0.05, 1.95, 20).round(6)
    bent = 50.0 / K * (np.where(x > 1.5, x - 1.5, 0) - np.where(x > 0.5, x - 0.5, 0))
    T = 300 + bent + 0.05 * np.random.default_rng(2).normal(size=20)
    columns = [{"column": "T", "kind": "temperature", "unit": "K", "sd": "0.05 K"}]
    source = {
        "unit": "W/m", "cells": 40, "smooth": False,
        "lumped": [{"name": "in", "at": "0.5 m"}, {"name": "out", "at": "1.5 m"}],
    }  # fmt: skip
    case = case_of(tmp_path, ROD, columns, zip(x.tolist(), T.tolist(), strict=True), source)
    found = srcfit.recover(case)
    a, b = found.summary()["lumped"]
    assert a["value"] == pytest.approx(-b["value"], rel=1e-12)
    assert a["sd"] == pytest.approx(b["sd"], rel=1e-9)
    assert holds(a, 50.0)
    # least squares by hand: two columns, level and bent
    N = np.column_stack([np.ones(20), bent / 50.0]) / 0.05
    C = np.linalg.inv(N.T @ N)
    assert a["value"] == pytest.approx((C @ N.T @ (T / 0.05))[1], rel=1e-8)
    assert a["sd"] == pytest.approx(np.sqrt(C[1, 1]), rel=1e-8)
    assert [found.total[k] for k in ("value", "sd", "lower", "upper")] == [0, 0, 0, 0]


def test_background_and_lumped(tmp_path):
    """One constant instead of a smooth part: it takes up what the heater brings."""
    x = np.linspace(0.05, 1.95, 20).round(6)
    T = temperature(x, wave=0.0) + 0.02 * np.random.default_rng(3).normal(size=20)
    columns = [{"column": "T", "kind": "temperature", "unit": "K", "sd": "0.02 K"}]
    source = {
        "unit": "W/m", "cells": 40, "smooth": False, "background": "unknown",
        "lumped": [{"name": "h", "at": "0.7 m"}],
    }  # fmt: skip
    case = case_of(tmp_path, ROD, columns, zip(x.tolist(), T.tolist(), strict=True), source)
    found = srcfit.recover(case)
    background, heater = found.summary()["background"], found.summary()["lumped"][0]
    assert holds(background, -HEATER / L)
    assert background["value"] == pytest.approx(-heater["value"] / L, rel=1e-12)
    assert background["sd"] == pytest.approx(heater["sd"] / L, rel=1e-9)
    assert found.total["value"] == found.total["sd"] == 0


def test_nothing_that_could_balance(tmp_path):
    """One unknown force cannot carry a known weight elsewhere: the moment is left over."""
    member = {"kind": "beam", "length": "6 m", "bending_stiffness": "3 MN*m^2", "left": "free",
              "right": "free"}  # fmt: skip
    columns = [{"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.1 mm"}]
    rows = [(x, x**2) for x in np.linspace(0.2, 5.8, 12).tolist()]
    source = {"unit": "kN/m", "smooth": False, "lumped": [{"name": "jack", "at": "2 m"}],
              "known": [{"at": "4 m", "value": "80 kN"}]}  # fmt: skip
    with pytest.raises(SolveError, match="nothing that is unknown"):
        srcfit.recover(case_of(tmp_path, member, columns, rows, source))


def test_free_beam_under_known_weights(tmp_path):
    """Two weights down, a smooth lift that carries them: total and moment are those of weights."""
    EI, length = 3e6, 6.0
    x = np.linspace(0.1, 5.9, 30).round(6)
    s = np.linspace(0, 6, 24001)
    h = s[1] - s[0]
    weights = [(1.5, 4e3), (4.0, 6e3)]
    # a + b x balances the weights; a wave that is balanced by itself rides on it
    P, M = sum(p for _, p in weights), sum(a * p for a, p in weights)
    a, b = np.linalg.solve([[length, length**2 / 2], [length**2 / 2, length**3 / 3]], [-P, -M])

    def lift(x):
        t = 2 * x / length - 1
        return a + b * x + 1500 * (5 * t**3 - 3 * t) / 2

    q = lift(s)
    V = np.concatenate([[0], np.cumsum((q[1:] + q[:-1]) / 2) * h])
    V = V + sum(p * (s > at) for at, p in weights)
    bend = np.concatenate([[0], np.cumsum((V[1:] + V[:-1]) / 2) * h])  # EI u'' = integral of V
    slope = np.concatenate([[0], np.cumsum((bend[1:] + bend[:-1]) / 2) * h]) / EI
    u = np.concatenate([[0], np.cumsum((slope[1:] + slope[:-1]) / 2) * h]) + 0.01 - 0.002 * s
    assert abs(V[-1]) < 1e-3 * P
    assert abs(bend[-1]) < 1e-3 * M
    sd = 2e-3 * np.ptp(u - np.polyval(np.polyfit(s, u, 1), s))
    w = np.interp(x, s, u) + sd * np.random.default_rng(5).normal(size=30)
    member = {"kind": "beam", "length": "6 m", "bending_stiffness": "3 MN*m^2", "left": "free",
              "right": "free"}  # fmt: skip
    columns = [{"column": "w", "kind": "deflection", "unit": "m", "sd": f"{float(sd)!r} m"}]
    source = {
        "unit": "kN/m", "cells": 60, "zones": [{"name": "half", "from": "0 m", "to": "3 m"}],
        "known": [{"at": f"{at} m", "value": f"{p} N"} for at, p in weights],
    }  # fmt: skip
    case = case_of(tmp_path, member, columns, zip(x.tolist(), w.tolist(), strict=True), source)
    found = srcfit.recover(case)
    assert found.total["value"] == pytest.approx(-P / 1e3, rel=1e-10)
    assert found.total["sd"] == 0
    inside = s <= 3
    assert holds(found.summary()["zones"][0], np.trapezoid(q[inside], s[inside]) / 1e3)
    table = found.source
    width = table["to [m]"] - table["from [m]"]
    moment = (table["estimate [kN/m]"] * table["x [m]"] * width).sum()
    # cells of constant density: their own second moments are in the balance exactly
    assert moment == pytest.approx(-M / 1e3, rel=1e-6)
    bending = found.section
    truth = np.interp(bending["x [m]"], s, -bend) / 1e3
    lower, upper = bending["moment_lower [kN*m]"], bending["moment_upper [kN*m]"]
    assert ((lower - 1e-9 <= truth) & (truth <= upper + 1e-9)).mean() >= 0.9
    assert np.abs(bending["moment [kN*m]"].iloc[[0, -1]]).max() < 1e-8
    assert found.balance["difference"] == pytest.approx(0, abs=1e-8)


@pytest.mark.parametrize("known", [False, True])
def test_lambda_at_an_eigenvalue(tmp_path, known):
    """-u'' - pi^2 u = f between held ends: f has no share in sin(pi x)."""
    x = np.linspace(0.03, 0.97, 24).round(6)
    # f = 5 sin(2 pi x) - 3 sin(3 pi x), u = f_n/(n^2 - 1)/pi^2 plus any amount of sin(pi x)
    u = (5 * np.sin(2 * np.pi * x) / 3 - 3 * np.sin(3 * np.pi * x) / 8) / np.pi**2
    u = u + 0.8 * np.sin(np.pi * x) + 1e-3 * np.random.default_rng(6).normal(size=24)
    member = {"kind": "general", "order": 2, "start": 0, "end": 1, "p": 1,
              "lambda": float(np.pi**2), "left": "fixed", "right": "fixed"}  # fmt: skip
    columns = [{"column": "u", "kind": "response", "unit": "1", "sd": "0.001"}]
    source = {"unit": "1", "cells": 60, "zones": [{"name": "a", "from": "0 m", "to": "0.5 m"}]}
    part = 0.0
    if known:  # a stated level acts beside it: what is found balances its share in the mode
        source["known"] = [{"from": "0 m", "to": "0.5 m", "value": "2"}]
        part = 2.0
    case = case_of(tmp_path, member, columns, zip(x.tolist(), u.tolist(), strict=True), source)
    found = srcfit.recover(case)
    told = next(f for f in found.findings if f["code"] == "singular-member")
    assert "eigenvalue" in told["sentence"]
    table = found.source
    f, width = table["estimate [1]"].to_numpy(), 1 / 60
    edges = np.append(table["from [m]"], table["to [m]"].iloc[-1])
    share = -np.diff(np.cos(np.pi * edges)) / np.pi
    assert share @ f + part / np.pi == pytest.approx(0, abs=1e-9 * np.abs(f).max())
    truth = 5 * 2 / (2 * np.pi) - 3 * (1 - np.cos(1.5 * np.pi)) / (3 * np.pi) - part / 2
    assert holds(found.summary()["zones"][0], truth)
    assert found.total["sd"] > 0
    assert width * len(f) == pytest.approx(1)


HINGED = {
    "kind": "beam", "length": "6 m", "bending_stiffness": "2 MN*m^2", "left": "clamped",
    "right": "free", "hinge": [{"at": "4 m"}],
}  # fmt: skip
PAIR = [(4.5, 1000.0), (6.0, -250.0)]  # no couple about the hinge; 750 N come out there


def hinged_deflection(x, turn):
    """Cantilever under 750 N at its tip; beyond the hinge the bent part, turned by `turn`."""
    EI = 2e6
    left = 750 * x**2 * (3 * 4 - x) / (6 * EI)
    s = np.maximum(x - 4, 0.0)
    # shear 750 up to 4.5 m, -250 beyond; no moment at the hinge and at the end
    bent = (-750 * s**3 + 1000 * np.maximum(s - 0.5, 0) ** 3) / (6 * EI)
    return np.where(x < 4, left, 750 * 4**3 / (3 * EI) + bent + turn * s)


def test_a_part_beyond_a_hinge_turns_freely():
    member = srcfit.make_member(HINGED)
    x, w = np.polynomial.legendre.leggauss(30)
    cuts = [(4.0, 4.5), (4.5, 6.0)]
    s = np.concatenate([(a + b) / 2 + (b - a) / 2 * x for a, b in cuts])
    weight = np.concatenate([(b - a) / 2 * w for a, b in cuts])
    # the rotation s - 4 is the null mode: the response has no share in it
    free = hinged_deflection(s, 0.0)
    turn = -(weight * free * (s - 4)).sum() / (weight * (s - 4) ** 2).sum()
    places = np.array([1.0, 2.5, 3.9, 4.2, 4.5, 5.3, 6.0])
    found = srcfit.respond(member, places, lambda x: 0 * x, PAIR)
    np.testing.assert_allclose(found, hinged_deflection(places, turn), rtol=1e-9)
    moment = srcfit.respond(member, [0.0, 2.0, 4.0, 4.5, 6.0], lambda x: 0 * x, PAIR, "moment")
    np.testing.assert_allclose(moment, [-3000, -1500, 0, 375, 0], atol=1e-6)
    with pytest.raises(MemberError, match="not balanced"):
        srcfit.respond(member, places, lambda x: 0 * x, PAIR[:1])


def test_modes_of_a_hinged_part_begin_with_its_rotation():
    found = srcfit.modes(srcfit.make_member(HINGED), 3)
    assert found.eigenvalues[0] == pytest.approx(0, abs=1e-9 * found.eigenvalues[1])
    x = np.array([2.0, 3.9, 4.5, 5.0, 6.0])
    phi = found.functions(x)[:, 0]
    np.testing.assert_allclose(phi / phi[-1], [0, 0, 0.25, 0.5, 1], atol=1e-9)


def hinged_case(folder):
    x = np.linspace(0.2, 5.9, 24).round(6)
    sd = 2e-5
    rng = np.random.default_rng(5)
    w = hinged_deflection(x, 0.002) + sd * rng.normal(size=24)
    columns = [{"column": "w", "kind": "deflection", "unit": "m", "sd": f"{sd} m"}]
    source = {
        "unit": "N/m", "cells": 60, "smooth": False,
        "lumped": [{"name": "down", "at": "4.5 m"}, {"name": "up", "at": "6 m"}],
    }  # fmt: skip
    return case_of(folder, HINGED, columns, zip(x.tolist(), w.tolist(), strict=True), source)


def test_loads_on_a_part_that_turns_freely_are_recovered(tmp_path):
    """One load follows from the other by the balance of the part; the rotation is an unknown."""
    found = srcfit.recover(hinged_case(tmp_path))
    down, up = found.summary()["lumped"]
    assert holds(down, 1000.0)
    assert holds(up, -250.0)
    assert down["sd"] < 100
    assert up["value"] == pytest.approx(-down["value"] / 4, rel=1e-9)
    told = next(f for f in found.findings if f["code"] == "singular-member")
    assert "a rotation of the part from 4 m to 6 m" in told["sentence"]
    clamp = found.summary()["reactions"][0]
    assert clamp["value"] == pytest.approx(down["value"] + up["value"], rel=1e-8)


NAMES = {
    "beam": [
        ({"left": "free", "right": "free"},
         ["a uniform shift of the member", "a rigid rotation of the member"]),
        ({"left": "pinned", "right": "free"}, ["a rigid rotation of the member"]),
        ({"left": "guided", "right": "guided"}, ["a uniform shift of the member"]),
        ({"left": "pinned", "right": "pinned", "hinge": [{"at": "2 m"}]}, ["a folding at 2 m"]),
        ({"left": "free", "right": "clamped", "hinge": [{"at": "2 m"}]},
         ["a rotation of the part from 0 m to 2 m"]),
    ],
    "rod": [({"left": "free", "right": "free"}, ["a uniform shift of the member"])],
    "shaft": [({"left": "free", "right": "free"}, ["a uniform twist of the member"])],
    "conductor": [({"left": "insulated", "right": "insulated"},
                   ["a uniform level of the temperature"])],
}  # fmt: skip
STIFF = {"beam": {"bending_stiffness": "2 MN*m^2"}, "rod": {"axial_stiffness": "2 MN"},
         "shaft": {"torsional_stiffness": "2 MN*m^2"},
         "conductor": {"conductance": "2 W*m/K"}}  # fmt: skip


@pytest.mark.parametrize(
    ("kind", "ends", "expected"), [(k, e, n) for k, some in NAMES.items() for e, n in some]
)
def test_free_motions_have_names(kind, ends, expected):
    member = srcfit.make_member({"kind": kind, "length": "6 m", **STIFF[kind], **ends})
    held, count = restrained(member)
    assert count == len(expected)
    nulls = Nulls(member, chain(held, np.linspace(0, 6, 7)))
    assert list(nulls.names(lambda x: f"{x:g} m")) == expected


def test_what_cannot_be_told_apart_is_called_by_its_name(tmp_path):
    found = srcfit.recover(rod_case(tmp_path, {}, offset="unknown"))
    told = next(f for f in found.findings if f["code"] == "inseparable")
    assert "a uniform level of the temperature" in told["sentence"]
    assert "null mode" not in str(found.findings)
