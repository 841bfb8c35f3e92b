"""Members driven at one frequency, end to end: readings, answers, tables, findings.

Readings come from the finite elements of `referees` (complex stiffness and loss), never from the
package itself.
"""

import csv
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from referees import beams, second_order

import srcfit
from srcfit.answers import ask
from srcfit.balance import balance
from srcfit.bands import cautious
from srcfit.elimination import eliminate
from srcfit.errors import MemberError
from srcfit.forward import build
from srcfit.prediction import predict
from srcfit.problem import Questions
from srcfit.recover import estimate
from srcfit.solve import solve
from srcfit.trial import Trial, read_source
from srcfit.whitening import parts_of, whitened

EXPORTS = Path(__file__).parent / "exports"
OMEGA = 2 * np.pi * 12
ETA = 0.06
PLACES = np.linspace(0.2, 3.8, 19).round(6)
DEPTHS = np.linspace(0.02, 0.58, 15).round(6)
BEAM = {
    "kind": "beam", "length": "4 m", "bending_stiffness": "1.68 MN*m^2", "mass": "40 kg/m",
    "frequency": "12 Hz", "damping": ETA, "left": "pinned",
    "right": {"deflection_spring": "3 MN/m"},
}  # fmt: skip
WALL = {
    "kind": "wall", "length": "0.6 m", "conductivity": "1.6 W/(m*K)",
    "heat_capacity": "2 MJ/(m^3*K)", "frequency": "11.574074074 uHz", "left": "insulated",
    "right": {"transfer": "8 W/(m^2*K)", "ambient": "12 degC"},
}  # fmt: skip


def force(x):
    """Complex load of the beam [N/m]."""
    return 900 * np.exp(-(((x - 1.2) / 0.5) ** 2)) * (1 + 0.4j) + 250j + 0 * x


def heat(x):
    """Complex source of the wall [W/m3]."""
    return (60 - 45j) * np.cos(2 * x) + 30j * (x > 0.25)


def beam_truth(x):
    solid = beams.Beam(
        4.0, 1.68e6 * (1 + 1j * ETA), -(OMEGA**2) * 40, left=beams.PINNED,
        right=beams.End(3e6 * (1 + 1j * ETA)),
    )  # fmt: skip
    # fine pieces: Gauss rules of the elements see a smooth load only
    pieces = [(a, a + 0.25, force) for a in np.arange(0, 4, 0.25)]
    found = beams.bend(solid, pieces, places=x, size=0.5)
    return found.at("deflection", x), found.at("moment", x), found


def wall_truth(x):
    capacity = 2j * np.pi * 11.574074074e-6 * 2e6
    line = second_order.Line(0.0, 0.6, 1.6, capacity, right=(8.0, 0.0))
    pieces = [(0.0, 0.25, heat), (0.25, 0.6, heat)]
    return second_order.settle(line, pieces, degree=14, places=x).at("response", x)


def case_of(folder, member, columns, rows, source, **strength):
    with (folder / "readings.csv").open("w", newline="", encoding="utf-8") as out:
        csv.writer(out).writerows([["x", *(c["column"] for c in columns)], *rows])
    return srcfit.make_case({
        "title": "driven", "member": member, "source": source, "strength": strength,
        "readings": {"file": "readings.csv", "position": {"column": "x", "unit": "m"},
                     "column": columns},
    }, folder=folder)  # fmt: skip


def text(z):
    return f"{float(z.real)!r}{float(z.imag):+}i"


def beam_case(folder, noise=0.0, seed=0, cells=60, **more):
    x = PLACES
    w, m, _ = beam_truth(x)
    rng = np.random.default_rng(seed)
    spread = [noise * np.abs(v).max() for v in (w, m)]
    values = [
        v + s * (rng.normal(size=19) + 1j * rng.normal(size=19))
        for v, s in zip((w, m), spread, strict=True)
    ]
    stated = [float(noise * np.abs(v).max()) or 1e-9 for v in (w, m)]
    columns = [
        {"column": "w", "kind": "deflection", "unit": "m", "sd": f"{stated[0]!r} m"},
        {"column": "M", "kind": "moment", "unit": "N*m", "sd": f"{stated[1]!r} N*m"},
    ]
    rows = [
        (float(a), text(complex(b)), text(complex(c))) for a, b, c in zip(x, *values, strict=True)
    ]
    source = {
        "unit": "N/m", "cells": cells,
        "zones": [{"name": "a", "from": "0 m", "to": "1 m"},
                  {"name": "b", "from": "1 m", "to": "2.5 m"}],
    } | more  # fmt: skip
    return case_of(folder, BEAM, columns, rows, source)


def wall_case(folder, noise, seed=0):
    x = DEPTHS
    T = wall_truth(x)
    sd = float(noise * np.abs(T).max())
    rng = np.random.default_rng(seed)
    T = T + sd * (rng.normal(size=15) + 1j * rng.normal(size=15))
    columns = [
        {"column": "A", "kind": "temperature", "unit": "K", "sd": f"{sd!r} K",
         "phase": {"column": "phase", "unit": "deg"}},
    ]  # fmt: skip
    rows = list(zip(x.tolist(), np.abs(T).tolist(), np.degrees(np.angle(T)).tolist(), strict=True))
    with (folder / "readings.csv").open("w", newline="", encoding="utf-8") as out:
        csv.writer(out).writerows([["x", "A", "phase"], *rows])
    return srcfit.make_case({
        "title": "driven", "member": WALL,
        "source": {"unit": "W/m^3", "cells": 60,
                   "zones": [{"name": "inner", "from": "0 m", "to": "0.25 m"}]},
        "readings": {"file": "readings.csv", "position": {"column": "x", "unit": "m"},
                     "column": columns},
    }, folder=folder)  # fmt: skip


def integral(f, a, b):
    x, w = np.polynomial.legendre.leggauss(40)
    return (b - a) / 2 * np.sum(w * f((a + b) / 2 + (b - a) / 2 * x))


def codes(found):
    return [f["code"] for f in found.findings]


def test_export_with_amplitude_and_phase(tmp_path):
    found = srcfit.recover(srcfit.load_case(EXPORTS / "10.toml"))
    summary = found.summary()
    for number in (summary["total"], summary["zones"][0], summary["nuisances"][0],
                   summary["reactions"][0]):  # fmt: skip
        assert np.isfinite(number["imaginary"])
        assert number["upper"] - number["value"] == pytest.approx(1.96 * number["sd"], rel=1e-3)
        low, high = number["imaginary_lower"], number["imaginary_upper"]
        assert (low + high) / 2 == pytest.approx(number["imaginary"], abs=1e-9 * abs(high))
        assert high - low == pytest.approx(number["upper"] - number["lower"], rel=1e-9)
    # the wave falls by 1/e and lags by a radian over 0.148 m: 6 K at the surface, no source inside
    surface = summary["nuisances"][0]
    half = surface["upper"] - surface["value"]
    assert surface["name"] == "left.value"
    assert abs(surface["value"] - 6.0) < half
    assert abs(surface["imaginary"]) < half
    assert abs(summary["total"]["value"]) < summary["total"]["upper"] - summary["total"]["value"]
    assert summary["fit"]["used"] == 13
    assert summary["fit"]["dof"] == pytest.approx(26 - summary["strength"]["effective_dof"])
    folder = found.save(tmp_path / "out")
    table = pd.read_csv(folder / "readings.csv")
    value = table["value"] + 1j * table["value_imag"]
    left = table["residual"] + 1j * table["residual_imag"]
    np.testing.assert_allclose(value - left, table["predicted"] + 1j * table["predicted_imag"])
    source = pd.read_csv(folder / "source.csv")
    assert {"estimate [W/m^3]", "estimate_imag [W/m^3]"} <= set(source)
    for end in ("lower", "upper"):
        off = source[f"{end} [W/m^3]"] - source["estimate [W/m^3]"]
        beside = source[f"{end}_imag [W/m^3]"] - source["estimate_imag [W/m^3]"]
        np.testing.assert_allclose(beside, off, rtol=1e-6)
    zones = pd.read_csv(folder / "zones.csv")
    assert {"value_imag [W/m^2]", "mean_imag [W/m^3]"} <= set(zones)
    assert zones["lower_imag [W/m^2]"][0] == pytest.approx(summary["zones"][0]["imaginary_lower"])
    inside = pd.read_csv(folder / "section.csv")
    assert (inside["heat_flux_lower_imag [W/m^2]"] <= inside["heat_flux_imag [W/m^2]"]).all()
    page = (folder / "report.html").read_text(encoding="utf-8")
    assert "imaginary part, 95 % from" in page
    assert "heat flux, imaginary part to" in page
    saved = json.loads((folder / "summary.json").read_text())
    assert saved["total"]["imaginary"] == pytest.approx(summary["total"]["imaginary"])


def test_forward_is_the_damped_beam(tmp_path):
    """Readings without noise: A f + known is what finite elements give, on ever finer cells."""
    errors = []
    for cells in (40, 80, 160):
        case = beam_case(tmp_path, cells=cells)
        forward = build(case, srcfit.read(case))
        f = force(forward.grid.middles)
        errors.append(np.abs(forward.y - forward.A @ f).max() / np.abs(forward.y).max())
    rates = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    assert (np.abs(rates - 2) < 0.1).all()
    assert errors[-1] < 1e-3


def test_equilibrium_of_complex_amplitudes(tmp_path):
    found = solve(case := beam_case(tmp_path, noise=0.01), srcfit.read(case))
    f, beta = estimate(found)
    result = balance(found.forward, f, beta)
    assert result.gap < 1e-10
    assert abs(result.loss.imag) > 0
    assert np.iscomplexobj(f)


@pytest.mark.parametrize("which", ["beam", "wall"])
def test_coverage_over_repeated_draws(tmp_path, which):
    """Zones and totals, both parts, over 80 seeded draws of the noise.

    The intervals are cautious: they promise at least 95 %. Binomial bound of 160 at 95 %: 90 %.
    """
    noise, draws = 0.01, 80
    if which == "beam":
        case = beam_case(tmp_path, noise)
        spans, f = [(0, 4), (0, 1), (1, 2.5)], force
        x = PLACES
        clean = np.concatenate(beam_truth(x)[:2])
    else:
        case = wall_case(tmp_path, noise)
        spans, f = [(0, 0.6), (0, 0.25)], heat
        clean = wall_truth(DEPTHS)
    truth = np.array([
        sum(integral(f, lo, hi) for lo, hi in ((a, min(b, 0.25)), (max(a, 0.25), b)) if lo < hi)
        for a, b in spans
    ])  # fmt: skip
    forward = build(case, srcfit.read(case))
    if which == "beam":  # read row by row: w and M of one place are neighbours
        order = np.argsort(np.tile(np.arange(19), 2), kind="stable")
        kinds = [forward.readings.kind[r] for r in forward.rows]
        order = order if kinds[0] != kinds[1] else np.arange(38)
        clean = clean[order]
    balanced = eliminate(forward)
    problem = whitened(forward, balanced=balanced)
    asked = ask(forward, balanced)
    number, part = parts_of(forward)
    white = clean / forward.sd
    exact = np.where(part == 0, white.real[number], white.imag[number])
    rng = np.random.default_rng(11)
    held = np.zeros((draws, 2, len(spans)))
    rows = np.concatenate([np.arange(len(spans)), np.arange(len(spans)) + len(asked.constant)])
    few = Questions(asked.questions.cells[rows], asked.questions.columns[rows])
    for i in range(draws):
        d = exact + rng.normal(size=len(exact))
        a = cautious(replace(problem, d=d), few)
        value, half = a.value.reshape(2, -1), (a.upper - a.value).reshape(2, -1).max(axis=0)
        held[i] = np.abs(value - np.stack([truth.real, truth.imag])) <= half
    # seen: beam 0.95, 0.95, 1.00, wall 0.94, 1.00, question by question
    assert held.mean(axis=(0, 1)).min() >= 0.9
    assert held.mean() >= 0.95


def test_real_and_imaginary_columns_say_the_same(tmp_path):
    """One complex column, or two columns of one component each."""
    case = wall_case(tmp_path, 0.01)
    one = srcfit.recover(case)
    readings = srcfit.read(case)
    rows = [(x, v.real, v.imag) for x, v in zip(readings.x.tolist(), readings.value, strict=True)]
    sd = f"{float(readings.sd[0])!r} K"
    columns = [
        {"column": c, "kind": "temperature", "unit": "K", "sd": sd, "component": c}
        for c in ("real", "imaginary")
    ]
    (tmp_path / "b").mkdir()
    source = {"unit": "W/m^3", "cells": 60,
              "zones": [{"name": "inner", "from": "0 m", "to": "0.25 m"}]}  # fmt: skip
    two = srcfit.recover(case_of(tmp_path / "b", WALL, columns, rows, source))
    for key in ("value", "imaginary", "sd", "lower", "upper"):
        assert two.total[key] == pytest.approx(one.total[key], rel=1e-9)
    assert two.summary()["fit"]["used"] == 30
    assert two.summary()["fit"]["dof"] == pytest.approx(one.summary()["fit"]["dof"])
    table = two.readings
    real = table["group"] == "real"
    assert table.loc[real, "value_imag"].isna().all()
    assert table.loc[~real, ["value", "predicted"]].isna().all(axis=None)


def test_one_component_alone_tells_the_rest_by_the_kernel(tmp_path):
    """In-phase readings only: a complex kernel still couples both parts of the source."""
    case = wall_case(tmp_path, 0.001)
    readings = srcfit.read(case)
    rows = [(x, v.real) for x, v in zip(readings.x.tolist(), readings.value, strict=True)]
    sd = f"{float(readings.sd[0])!r} K"
    columns = [
        {"column": "real", "kind": "temperature", "unit": "K", "sd": sd, "component": "real"}
    ]
    source = {"unit": "W/m^3", "cells": 60}
    half = srcfit.recover(case_of(tmp_path, WALL, columns, rows, source))
    both = srcfit.recover(wall_case(tmp_path, 0.001))
    assert half.total["sd"] > both.total["sd"]
    truth = integral(heat, 0, 0.25) + integral(heat, 0.25, 0.6)
    reach = half.total["upper"] - half.total["value"]
    assert abs(half.total["value"] - truth.real) < reach
    assert abs(half.total["imaginary"] - truth.imag) < reach


def test_nuisances_are_complex(tmp_path):
    case = beam_case(tmp_path, noise=0.002)
    readings = srcfit.read(case)
    off = 2e-5 - 1e-5j
    rows = [
        (x, text(complex(v + off)))
        for x, v, k in zip(readings.x.tolist(), readings.value, readings.kind, strict=True)
        if k == "deflection"
    ]
    sd = float(readings.sd[readings.kind.index("deflection")])
    columns = [{"column": "w", "kind": "deflection", "unit": "mm", "sd": f"{sd!r} m",
                "offset": "unknown"}]  # fmt: skip
    rows = [(x, text(complex(t.replace("i", "j")) * 1e3)) for x, t in rows]
    found = srcfit.recover(case_of(tmp_path, BEAM, columns, rows, {"unit": "N/m", "cells": 60}))
    offset = found.summary()["nuisances"][0]
    assert offset["unit"] == "mm"
    half = offset["upper"] - offset["value"]
    assert abs(offset["value"] - 0.02) < half < 0.02
    assert abs(offset["imaginary"] + 0.01) < half


def test_units_change_nothing(tmp_path):
    one = srcfit.recover(beam_case(tmp_path, noise=0.01))
    case = beam_case(tmp_path, noise=0.01, unit="kN/m")
    other = srcfit.recover(case)
    for key in ("value", "imaginary", "sd"):
        assert other.total[key] * 1e3 == pytest.approx(one.total[key], rel=1e-9)


@pytest.mark.parametrize("solver", ["eigenbasis", "svd-cut"])
def test_cuts_on_driven_members(tmp_path, solver):
    x = PLACES
    truth = integral(force, 0, 4)
    case = beam_case(tmp_path, noise=0.005)
    case = replace(case, strength=replace(case.strength, solver=solver, choose="gcv"))
    found = srcfit.recover(case)
    half = found.total["upper"] - found.total["value"]
    assert abs(complex(found.total["value"], found.total["imaginary"]) - truth) < 2 * half
    assert len(x) == found.summary()["fit"]["used"] // 2


def test_predict_reads_both_parts(tmp_path):
    lumped = [{"name": "p", "at": "3 m"}]
    case = beam_case(tmp_path, noise=0.01, lumped=lumped)
    found = predict(case, srcfit.read(case), Trial(()))
    assert (found.readings["predicted"] == 0).all()
    assert set(found.balance) == {"source", "reactions", "along", "difference"}
    earlier = srcfit.recover(case)
    folder = earlier.save(tmp_path / "out")
    again = predict(case, srcfit.read(case), read_source(folder, case))
    for name in ("predicted", "predicted_imag"):
        wanted = earlier.readings[name]
        np.testing.assert_allclose(again.readings[name], wanted, atol=1e-6 * wanted.abs().max())
    assert not any("not used" in note for note in again.notes)


# --- resonance ----------------------------------------------------------------------------------


def plain(frequency, **more):
    return {
        "kind": "beam", "length": "4 m", "bending_stiffness": "1.68 MN*m^2", "mass": "40 kg/m",
        "frequency": f"{frequency!r} Hz", "left": "pinned", "right": "pinned",
    } | more  # fmt: skip


NATURAL = float((np.pi / 4) ** 2 * np.sqrt(1.68e6 / 40) / (2 * np.pi))  # first of a pinned beam


def shaken(tmp_path, member, f, seed=0):
    """Readings of an undamped beam by its modes: u = sum f_n phi_n / (m (w_n^2 - w^2))."""
    x = PLACES
    w = 2 * np.pi * float(member["frequency"].split()[0])
    u = 0.1e-3 * np.sin(np.pi * x / 4) * (1 + 1j)  # free motion at resonance
    for n in range(2, 60):
        wn = (n * np.pi / 4) ** 2 * np.sqrt(1.68e6 / 40)
        s = np.linspace(0, 4, 8001)
        fn = np.trapezoid(f(s) * np.sin(n * np.pi * s / 4), s) / 2
        u = u + fn * np.sin(n * np.pi * x / 4) / (40 * (wn**2 - w**2))
    rng = np.random.default_rng(seed)
    sd = 0.005 * np.abs(u).max()
    u = u + sd * (rng.normal(size=19) + 1j * rng.normal(size=19))
    columns = [{"column": "w", "kind": "deflection", "unit": "m", "sd": f"{float(sd)!r} m"}]
    rows = [(float(a), text(complex(b))) for a, b in zip(x, u, strict=True)]
    source = {"unit": "N/m", "cells": 80, "zones": [{"name": "a", "from": "0 m", "to": "2 m"}]}
    return case_of(tmp_path, member, columns, rows, source)


def test_resonance_takes_the_singular_rules(tmp_path):
    def f(x):  # no share in the first mode
        return 800j * np.sin(np.pi * x / 2) - 300 * np.sin(3 * np.pi * x / 4)

    found = srcfit.recover(shaken(tmp_path, plain(NATURAL), f))
    told = next(t for t in found.findings if t["code"] == "resonance")
    assert f"{NATURAL:.8g}"[:7] in told["sentence"]
    zone = found.summary()["zones"][0]
    truth = integral(f, 0, 2)
    half = zone["upper"] - zone["value"]
    assert abs(zone["value"] - truth.real) < half
    assert abs(zone["imaginary"] - truth.imag) < half
    # the source does no work on the first mode
    table = found.source
    x, width = table["x [m]"], table["to [m]"] - table["from [m]"]
    for name in ("estimate [N/m]", "estimate_imag [N/m]"):
        work = (table[name] * np.sin(np.pi * x / 4) * width).sum()
        assert abs(work) < 1e-3 * (table[name].abs() * width).sum()


@pytest.mark.parametrize(("factor", "damping"), [(1.01, 0.0), (0.99, 0.1)])
def test_close_to_resonance(tmp_path, factor, damping):
    member = plain(NATURAL * factor, **({"damping": damping} if damping else {}))
    case = shaken(tmp_path, member, lambda x: 500 * np.sin(np.pi * x / 2))
    found = srcfit.recover(case)
    told = next(t for t in found.findings if t["code"] == "near-resonance")
    assert told["level"] == "caution"
    assert f"{NATURAL:.6g} Hz" in told["sentence"]
    assert ("loss factor" in told["sentence"]) == bool(damping)


def test_far_from_resonance_there_is_no_word_of_it(tmp_path):
    case = shaken(tmp_path, plain(NATURAL * 1.5), lambda x: 500 * np.sin(np.pi * x / 2))
    assert not {"resonance", "near-resonance"} & set(codes(srcfit.recover(case)))


def test_respond_at_resonance_refuses_a_source_that_works_on_the_mode():
    member = srcfit.make_member(plain(NATURAL))
    with pytest.raises(MemberError, match="balanced"):
        srcfit.respond(member, [1.0], lambda x: 0 * x + 1.0)
    quiet = srcfit.respond(member, [1.0, 2.0], lambda x: np.sin(np.pi * x / 2))
    w2 = (2 * np.pi / 4) ** 4 * 1.68e6 / 40 - (2 * np.pi * NATURAL) ** 2
    np.testing.assert_allclose(quiet, np.sin(np.pi * np.array([1.0, 2.0]) / 2) / 40 / w2,
                               atol=1e-9 / 40 / w2)  # fmt: skip


def test_support_motion_at_resonance_must_be_balanced_too():
    """The end's motion works on the mode through its reaction (Fredholm with moved ends)."""
    moved = srcfit.make_member(plain(NATURAL, left={"kind": "pinned", "settlement": "1 mm"}))
    with pytest.raises(MemberError, match="balanced"):
        srcfit.respond(moved, [1.0], lambda x: 0 * x)
    # a load that cancels it, with phi = sin(k x): int f phi dx = -s V(phi) at the left end
    k = np.pi / 4
    size = 1e-3 * 1.68e6 * k**3 / 2
    x = 2 - 2 * np.cos(np.pi * np.arange(25) / 24)
    u = srcfit.respond(moved, x, lambda x: -size * np.sin(k * x))
    fit = np.polynomial.Chebyshev.fit(x, u, 16)
    inside = np.linspace(0.1, 3.9, 21)
    left = 1.68e6 * fit.deriv(4)(inside) - 40 * (2 * np.pi * NATURAL) ** 2 * fit(inside)
    np.testing.assert_allclose(left, -size * np.sin(k * inside), atol=1e-4 * size)
    assert [u[0], u[-1]] == pytest.approx([1e-3, 0.0], abs=1e-9)
