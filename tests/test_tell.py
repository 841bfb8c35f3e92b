"""What the readings tell: every closed form against refits, dense algebra or repeated draws."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import srcfit
from srcfit.places import solve
from srcfit.problem import Questions
from srcfit.readings import read
from srcfit.smoother import colours, smoother
from srcfit.tell import tell

EXAMPLES = Path(__file__).parent.parent / "examples"
PLACES = np.linspace(0.5, 11.5, 14)
MEMBER = {
    "kind": "beam", "length": "12 m", "bending_stiffness": "30 MN*m^2", "left": "pinned",
    "right": "pinned", "foundation": "0.2 MN/m^2",
}  # fmt: skip
ZONES = [{"name": "block", "from": "3 m", "to": "6 m"}, {"name": "rest", "from": "6 m",
         "to": "12 m"}]  # fmt: skip
TAU = 1e-1


def load(x):
    """A block on a gentle slope [N/m]."""
    return 2e3 * (1 + x / 12) + 6e3 * ((x > 3) & (x < 6))


def deflections(seed=3, noise=5e-5):
    """Deflections of the loaded beam with noise [m]."""
    w = srcfit.respond(srcfit.make_member(MEMBER), PLACES, load)
    return w + noise * np.random.default_rng(seed).normal(size=len(PLACES))


def case(folder, w, *, column=None, without=(), member=None, source=None, places=PLACES,
         **strength):  # fmt: skip
    """The beam's case; lines of `without` are not used."""
    rows = [f"{x:.10g},{1e3 * v:.12g}" for x, v in zip(places, w, strict=True)]
    (folder / "w.csv").write_text("\n".join(["x,w", *rows]) + "\n")
    columns = {"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.05 mm",
               **(column or {})}  # fmt: skip
    if without:
        columns["exclude_lines"] = list(without)
    table = {"file": "w.csv", "position": {"column": "x", "unit": "m"}, "column": [columns]}
    return srcfit.make_case(
        {"title": "t", "member": {**MEMBER, **(member or {})}, "readings": table,
         "source": {"unit": "kN/m", "cells": 60, "zones": ZONES, **(source or {})},
         "strength": strength}, folder=folder,
    )  # fmt: skip


def solved(given):
    return solve(given, read(given))


@pytest.mark.parametrize(
    "strength",
    [{}, {"choose": "gcv"}, {"choose": TAU}, {"roughness": 2}, {"solver": "svd-cut"},
     {"solver": "eigenbasis"}, {"choose": "evidence", "interval": "plain"}],
)  # fmt: skip
def test_the_map_gives_the_estimate(tmp_path, strength):
    """T d is the reported value of every question, whatever the solver."""
    found = solved(case(tmp_path, deflections(), **strength))
    whole = smoother(found.problem, found.answers.fit, found.asked.questions)
    value = found.answers.value
    np.testing.assert_allclose(
        whole.matrix() @ found.problem.d, value, rtol=1e-6, atol=1e-6 * np.abs(value).max()
    )


def test_each_reading_counts_as_the_map_says(tmp_path):
    """At a stated strength the answer moves by T as a reading does: a real second recovery."""
    w = deflections()
    first = solved(case(tmp_path, w, choose=TAU))
    moved = w.copy()
    moved[4] += 5e-5  # one standard deviation
    second = solved(case(tmp_path, moved, choose=TAU))
    T = tell(first).main.matrix()[:, 4]
    change = (second.answers.value - first.answers.value)[[0, 1, 2]]
    np.testing.assert_allclose(change, T, rtol=1e-6, atol=1e-6 * np.abs(T).max())


@pytest.mark.parametrize("line", [2, 6, 9, 15])
def test_leaving_a_reading_out_at_a_stated_strength(tmp_path, line):
    """The closed form is the refit, to rounding."""
    w = deflections()
    whole = srcfit.recover(case(tmp_path, w, choose=TAU))
    less = srcfit.recover(case(tmp_path, w, choose=TAU, without=[line]))
    shift = whole.readings["shift_total [kN]"][line - 2]
    assert whole.total["value"] - less.total["value"] == pytest.approx(shift, rel=1e-6)


@pytest.mark.parametrize("sd", ["0.05 mm", "estimate"])
def test_leaving_a_reading_out_of_the_average(tmp_path, sd):
    """Weights follow the reading too; the grid of strengths, which moves a little, does not."""
    w = deflections()
    w[6] += 3e-4  # one gross reading, so that there is something to see
    whole = srcfit.recover(case(tmp_path, w, column={"sd": sd}))
    shifts = whole.readings["shift_total [kN]"].to_numpy()
    refits = []
    for line in range(2, 16):
        less = srcfit.recover(case(tmp_path, w, column={"sd": sd}, without=[line]))
        refits.append(whole.total["value"] - less.total["value"])
    assert np.argmax(np.abs(shifts)) == np.argmax(np.abs(refits))
    assert np.abs(shifts - refits).max() < 2e-3 * np.abs(refits).max()


def test_leaving_out_a_correlated_reading(tmp_path):
    """Against the dense algebra of generalised least squares with the row taken away."""
    found = solved(case(tmp_path, deflections(), column={"correlation": 0.6}, choose=TAU))
    ladder, at = found.ladder, 0
    fr, n = ladder.frame, len(PLACES)
    W = colours(np.arange(n) - 1, np.where(np.arange(n), 0.6, 0.0)).toarray()
    lag = np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
    np.testing.assert_allclose(np.linalg.inv(W.T @ W), 0.6**lag, atol=1e-12)
    # everything in the readings' own coordinates: prior covariance of the source over tau
    from srcfit.priors import factor

    S = factor("roughness-1", 0.0, found.problem.grid)
    C = S @ S.T / ladder.strengths[at]
    back = np.linalg.inv(W)
    A, d = back @ found.problem.A, back @ found.problem.d
    N = A.sum(axis=1, keepdims=True)
    weights = found.problem.grid.weights

    def total(keep):
        V = (0.6**lag)[np.ix_(keep, keep)] + A[keep] @ C @ A[keep].T
        inverse = np.linalg.inv(V)
        level = np.linalg.solve(N[keep].T @ inverse @ N[keep], N[keep].T @ inverse @ d[keep])
        f = C @ A[keep].T @ inverse @ (d[keep] - N[keep] @ level) + level
        return weights @ f

    every = list(range(n))
    expected = [total(every) - total([j for j in every if j != i]) for i in every]
    assert fr.readings == n
    np.testing.assert_allclose(tell(found).shift[0], expected, rtol=1e-5, atol=1e-5 * 100)


def test_resolution_adds_up_to_the_degrees_of_freedom(tmp_path):
    """The cells' shares of a piece of knowledge sum to the dof of the source."""
    found = solved(case(tmp_path, deflections()))
    width = found.forward.grid.widths
    pieces = (width / tell(found).resolution).sum()
    dof = found.answers.fit.effective_dof
    # cells at the pinned ends are told nothing: their length is cut at that of the member
    assert dof <= pieces < dof * 1.03


def test_resolution_is_seen_by_pushing_one_cell(tmp_path):
    """A refit to readings with one cell pushed gives the height of its kernel."""
    member = srcfit.make_member(MEMBER)
    cell = 21
    values = np.zeros(60)
    values[cell] = 1e3
    pushed = srcfit.respond(member, PLACES, values)
    w = deflections()
    first = srcfit.recover(case(tmp_path, w, choose=TAU, source={"zones": []}))
    second = srcfit.recover(case(tmp_path, w + pushed, choose=TAU, source={"zones": []}))
    gained = (second.source["estimate [kN/m]"] - first.source["estimate [kN/m]"])[cell]
    assert first.source["resolution [m]"][cell] == pytest.approx(0.2 / gained, rel=1e-5)


def test_more_readings_resolve_more(tmp_path):
    """Twice the readings with a fifth of the noise: finer in the middle; units change nothing."""
    coarse = srcfit.recover(case(tmp_path, deflections()))
    places = np.linspace(0.25, 11.75, 28)
    w = srcfit.respond(srcfit.make_member(MEMBER), places, load)
    fine = srcfit.recover(case(tmp_path, w, places=places, column={"sd": "0.01 mm"}))
    middle = slice(20, 40)
    assert (fine.source["resolution [m]"][middle] < coarse.source["resolution [m]"][middle]).all()
    other = srcfit.recover(case(tmp_path, deflections(), source={"position_unit": "mm"}))
    np.testing.assert_allclose(
        other.source["resolution [mm]"], 1e3 * coarse.source["resolution [m]"], rtol=1e-6
    )


@pytest.mark.parametrize("way", ["weaker", "stronger"])
def test_one_decade_of_strength(tmp_path, way):
    """As recovered at ten times or a tenth of the strength itself."""
    by = {"weaker": 0.1, "stronger": 10.0}[way]
    for choose in (TAU, "evidence"):
        base = srcfit.recover(case(tmp_path, deflections(), choose=choose)).summary()
        value = base["strength"]["value"] * by
        there = srcfit.recover(case(tmp_path, deflections(), choose=value)).summary()
        moved = base["decade"][way]
        scale = abs(base["total"]["value"])
        assert moved["total"] == pytest.approx(there["total"]["value"], abs=1e-3 * scale)
        assert moved["effective_dof"] == pytest.approx(
            there["strength"]["effective_dof"], rel=5e-3
        )
        for zone, other in zip(moved["zones"], there["zones"], strict=True):
            assert zone["value"] == pytest.approx(other["value"], abs=2e-3 * scale)


def test_averaged_strengths_move_together(tmp_path):
    """By no decade at all nothing moves; cuts have none."""
    found = solved(case(tmp_path, deflections()))
    values, dof = tell(found).main.moved(0.0)
    np.testing.assert_allclose(values[:3], found.answers.value[:3], rtol=1e-9)
    assert dof == pytest.approx(found.answers.fit.effective_dof, rel=1e-9)
    cut = srcfit.recover(case(tmp_path, deflections(), solver="svd-cut")).summary()
    assert cut["decade"] == {"weaker": None, "stronger": None}


def test_noise_of_the_estimate_by_repeated_readings(tmp_path):
    """sd of the total and zones over 400 draws at one strength, to 3.5 sampling errors."""
    found = solved(case(tmp_path, deflections(), choose=TAU))
    told = tell(found)
    draws = np.random.default_rng(11).normal(size=(400, len(PLACES)))
    T = told.main.matrix()
    values = (found.problem.d + draws) @ T.T
    seen = values.std(axis=0, ddof=1)
    np.testing.assert_allclose(seen, np.sqrt(told.noise[0]), rtol=3.5 / np.sqrt(800))


def test_a_reading_that_the_total_hangs_on_is_named(tmp_path):
    """One reading far out on a beam read beside its support: file and line, what it would be."""
    places = np.array([0.2, 0.3, 0.4, 0.5, 4.0])
    w = srcfit.respond(srcfit.make_member(MEMBER), places, lambda x: 2e3 + 0 * x)
    w += 5e-5 * np.array([2.0, 1.0, 1.5, 1.0, -1.0])  # within two sd each
    source = {"smooth": False, "background": "unknown"}
    whole = srcfit.recover(case(tmp_path, w, places=places, source=source))
    told = [f["sentence"] for f in whole.findings if f["code"] == "influential-reading"]
    assert len(told) == 1
    assert "w.csv line 6 alone moves the total" in told[0]
    less = srcfit.recover(case(tmp_path, w, places=places, source=source, without=[6]))
    assert f"{less.total['value']:.4g} kN without it" in told[0]


def test_readings_that_contradict_each_other(tmp_path):
    """Noise stated twenty times too small: no reading is singled out, the model is."""
    places = np.linspace(0.5, 11.5, 9)
    w = srcfit.respond(srcfit.make_member(MEMBER), places, lambda x: 2e3 + 0 * x)
    w += 1e-3 * np.random.default_rng(5).normal(size=9)
    source = {"smooth": False, "background": "unknown"}
    found = srcfit.recover(case(tmp_path, w, places=places, source=source))
    told = [f["sentence"] for f in found.findings if f["code"] == "influential-reading"]
    assert len(told) == 1
    assert "readings move the total by more than the half-width" in told[0]
    assert "they contradict each other" in told[0]


def test_a_zone_finer_than_the_resolution(tmp_path):
    """A zone of 0.4 m between readings 0.85 m apart, unless its edges are known."""
    zones = [{"name": "crate", "from": "5 m", "to": "5.4 m"}]
    found = srcfit.recover(case(tmp_path, deflections(), source={"zones": zones}))
    told = [f["sentence"] for f in found.findings if f["code"] == "zone-finer-than-resolution"]
    assert len(told) == 1
    assert told[0].startswith("Zone crate is 0.4 m wide, the readings resolve ")
    sure = {"zones": zones, "breaks": ["5 m", "5.4 m"]}
    found = srcfit.recover(case(tmp_path, deflections(), source=sure))
    assert "zone-finer-than-resolution" not in {f["code"] for f in found.findings}


def test_a_sensor_on_a_support_is_named(tmp_path):
    """A deflection read on a pinned end sees nothing; nothing is said of the others."""
    places = np.append(0.0, PLACES)
    w = np.append(1e-5, deflections())
    found = srcfit.recover(case(tmp_path, w, places=places))
    told = [f["sentence"] for f in found.findings if f["code"] == "sensor-at-node"]
    assert len(told) == 1
    assert told[0].startswith("1 reading sees next to nothing of the source (w.csv line 2)")
    assert "sensor-at-node" not in {
        f["code"] for f in srcfit.recover(case(tmp_path, deflections())).findings
    }


def test_a_zone_that_moves_no_reading(tmp_path):
    """A stretch beside a support, 2 cm of it: no reading feels it."""
    zones = [{"name": "sill", "from": "0 m", "to": "0.02 m"}]
    found = srcfit.recover(case(tmp_path, deflections(), source={"zones": zones}))
    assert "zone-unseen" in {f["code"] for f in found.findings}


def test_nothing_is_said_where_nothing_is_wrong(tmp_path):
    """The plain case has none of these findings."""
    codes = {f["code"] for f in srcfit.recover(case(tmp_path, deflections())).findings}
    assert not codes & {"influential-reading", "zone-finer-than-resolution", "sensor-at-node",
                        "zone-unseen", "total-leans-on-strength"}  # fmt: skip


def test_a_total_that_leans_on_the_strength(tmp_path):
    """One strength and its narrow band: at a tenth of it the total is another one."""
    given = case(tmp_path, deflections(), choose="robust-gcv", interval="plain",
                 source={"zones": []})  # fmt: skip
    found = srcfit.recover(given)
    told = [f["sentence"] for f in found.findings if f["code"] == "total-leans-on-strength"]
    weaker = found.summary()["decade"]["weaker"]["total"]
    assert weaker < found.total["lower"]
    assert len(told) == 1
    assert told[0].startswith(f"The total would be {weaker:.4g} kN with a tenth of the smoothing")


def test_undetermined_questions_stay_empty():
    """A lost datum: neither shifts nor shares nor values at other strengths."""
    found = srcfit.recover(srcfit.load_case(EXAMPLES / "ground_beam_datum" / "case.toml"))
    summary = found.summary()
    assert found.readings["shift_total [kN]"].isna().all()
    assert summary["shares"] == []
    assert summary["decade"]["weaker"]["total"] is None
    assert found.source["resolution [m]"].isna().all()


def test_questions_without_a_smooth_part(tmp_path):
    """Least squares alone: the shift is Cook's, by a refit; there is nothing to resolve."""
    source = {"smooth": False, "lumped": [{"name": "P", "at": "4 m"}, {"name": "Q", "at": "8 m"}]}
    w = deflections()
    whole = srcfit.recover(case(tmp_path, w, source=source))
    less = srcfit.recover(case(tmp_path, w, source=source, without=[7]))
    shift = whole.readings["shift_total [kN]"][5]
    assert whole.total["value"] - less.total["value"] == pytest.approx(shift, rel=1e-8)
    assert whole.source["resolution [m]"].isna().all()


def test_a_silent_mode_keeps_its_gain(tmp_path):
    """Readings without any part in a mode still have its gain in the map."""
    found = solved(case(tmp_path, deflections()))
    ladder = found.answers.fit.ladders[0]
    y = ladder.y.copy()
    y[0] = 0.0
    amounts = ladder.amounts.copy()
    amounts[0] = 0.0
    fit = replace(found.answers.fit, ladders=(replace(ladder, y=y, amounts=amounts),),
                  weights=(found.answers.fit.weights[0],))  # fmt: skip
    some = Questions(found.asked.questions.cells[:1], found.asked.questions.columns[:1])
    full = replace(found.answers.fit, ladders=(ladder,), weights=fit.weights)
    np.testing.assert_allclose(
        smoother(found.problem, fit, some).matrix(), smoother(found.problem, full, some).matrix(),
        rtol=1e-6,
    )  # fmt: skip


def driven_case(folder, columns, **strength):
    """A beam driven at 3 Hz, read as complex amplitudes or as components."""
    member = {**MEMBER, "mass": "100 kg/m", "frequency": "3 Hz", "damping": 0.05}
    w = 1e3 * srcfit.respond(srcfit.make_member(member), PLACES, load)
    w = w + 0.05 * (np.random.default_rng(1).normal(size=(2, len(w))) * [[1], [1j]]).sum(axis=0)
    rows = [f"{x:.10g},{v.real:.12g}{v.imag:+.12g}i,{v.real:.12g}"
            for x, v in zip(PLACES, w, strict=True)]  # fmt: skip
    (folder / "d.csv").write_text("\n".join(["x,w,re", *rows]) + "\n")
    table = {"file": "d.csv", "position": {"column": "x", "unit": "m"},
             "column": [{"kind": "deflection", "unit": "mm", "sd": "0.05 mm", **c}
                        for c in columns]}  # fmt: skip
    return srcfit.make_case(
        {"member": member, "readings": table, "strength": strength,
         "source": {"unit": "kN/m", "cells": 60, "zones": ZONES}}, folder=folder,
    )  # fmt: skip


@pytest.mark.parametrize("with_component", [False, True])
def test_leaving_out_a_complex_amplitude(tmp_path, with_component):
    """Both parts go at once; beside readings of one part only the two hardly touch each other."""
    beside = [{"column": "re", "component": "real", "group": "re"}] if with_component else []
    less = {"column": "w", "exclude_lines": [7]}
    whole = srcfit.recover(driven_case(tmp_path, [{"column": "w"}, *beside], choose=TAU))
    least = srcfit.recover(driven_case(tmp_path, [less, *beside], choose=TAU))
    own = (whole.readings["line"] == 7) & (whole.readings["group"] == "w")
    shift = float(whole.readings["shift_total [kN]"][own].iloc[0])
    moved = whole.total["value"] - least.total["value"]
    assert moved == pytest.approx(shift, rel=0.02 if with_component else 1e-6)


def test_the_map_of_a_driven_member(tmp_path):
    """T d is the value of both parts."""
    found = solved(driven_case(tmp_path, [{"column": "w"}]))
    whole = smoother(found.problem, found.answers.fit, found.asked.questions)
    value = found.answers.value
    np.testing.assert_allclose(
        whole.matrix() @ found.problem.d, value, rtol=1e-6, atol=1e-6 * np.abs(value).max()
    )


def test_a_stated_strength_with_its_plain_band(tmp_path):
    """A number for `choose` goes with the plain interval too: the estimate is that of the rung."""
    wide = srcfit.recover(case(tmp_path, deflections(), choose=TAU))
    plain = srcfit.recover(case(tmp_path, deflections(), choose=TAU, interval="plain"))
    assert plain.total["value"] == pytest.approx(wide.total["value"], rel=1e-9)
    assert plain.total["sd"] < wide.total["sd"]
