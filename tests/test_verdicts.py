"""Detected or not, kept or not, where and how large the peak is: rates and words."""

import numpy as np
import pytest
from scipy.stats import norm, t

import srcfit
from srcfit.answers import detection, peak, verdict
from srcfit.rounding import chance_text, peak_sentence
from srcfit.text import recovery_text

PLACES = np.linspace(0.5, 11.5, 10)
MEMBER = {
    "kind": "beam", "length": "12 m", "bending_stiffness": "30 MN*m^2", "left": "pinned",
    "right": "pinned", "foundation": "0.2 MN/m^2",
}  # fmt: skip
LUMPED = {
    "unit": "kN/m", "total_unit": "kN", "cells": 24, "smooth": False, "background": "unknown",
    "lumped": [{"name": "post", "at": "4 m"}],
}  # fmt: skip


def recovered(folder, force=0.0, seed=0, sd="0.05 mm", source=LUMPED, load=2e3, n=10):
    places = PLACES[:n]
    w = srcfit.respond(srcfit.make_member(MEMBER), places, lambda x: load + 0 * x, [(4.0, force)])
    w = w + 5e-5 * np.random.default_rng(seed).normal(size=n)
    rows = [f"{x!r},{1e3 * v!r}" for x, v in zip(places.tolist(), w.tolist(), strict=True)]
    (folder / "w.csv").write_text("\n".join(["x,w", *rows, ""]))
    case = srcfit.make_case({
        "member": MEMBER, "source": source,
        "readings": {"file": "w.csv", "position": {"column": "x", "unit": "m"},
                     "column": [{"column": "w", "kind": "deflection", "unit": "mm", "sd": sd}]},
    }, folder)  # fmt: skip
    return srcfit.recover(case)


def test_the_critical_level_and_the_limit_are_curries(tmp_path):
    """Currie (1968): L_C = 1.645 sd and L_D = 3.29 sd for errors of 5 % of either kind."""
    found = recovered(tmp_path).facts
    sd = found["lumped"][0]["sd"]
    first = found["detection"][0]
    assert first["critical"] == pytest.approx(norm.ppf(0.95) * sd, rel=1e-9)
    assert first["limit"] == pytest.approx(3.29 * sd, rel=1e-3)


@pytest.mark.parametrize("stated", [True, False])
def test_false_alarms_are_as_rare_as_promised(stated):
    """Nothing there, 4000 estimates with few readings: 5 % alarms a side, by Student's t too."""
    rng, dof = np.random.default_rng(3), 4
    value = rng.normal(size=4000)
    sd = np.ones(4000) if stated else np.sqrt(rng.chisquare(dof, 4000) / dof)
    quantile = norm.ppf(0.95) if stated else t.ppf(0.95, dof)
    alarms = [detection("p", v, s, None, quantile, "nonnegative")["detected"]
              for v, s in zip(value, sd, strict=True)]  # fmt: skip
    assert np.mean(alarms) == pytest.approx(0.05, abs=0.0105)  # three standard errors


def test_an_unstated_noise_is_judged_by_students_t(tmp_path):
    """Five readings for a background and a post leave three to judge the noise by."""
    found = recovered(tmp_path, sd="estimate", n=5).facts
    part, told = found["lumped"][0], found["detection"][0]
    assert told["critical"] == pytest.approx(t.ppf(0.95, 3) * part["sd"], rel=1e-6)


def test_the_direction_that_counts_is_that_of_the_sign():
    for sign, value, seen in (
        ("nonnegative", 5.0, True), ("nonnegative", -5.0, False), ("nonpositive", -5.0, True),
        ("nonpositive", 5.0, False), ("any", -5.0, True), ("any", 5.0, True), ("any", 1.0, False),
    ):  # fmt: skip
        assert detection("p", value, 1.0, sign=sign)["detected"] is seen, (sign, value)


def test_what_is_not_detected_is_not_called_absent(tmp_path):
    silent = recovered(tmp_path, force=0.0).findings
    (told,) = [f for f in silent if f["code"] == "not-detected"]
    assert "post" in told["sentence"]
    assert "not detected is not absent" in told["sentence"]
    assert "may be there unseen" in told["sentence"]
    assert "not-detected" not in [f["code"] for f in recovered(tmp_path, force=20e3).findings]


ZONE = {
    "unit": "kN/m", "total_unit": "kN", "cells": 24,
    "zones": [{"name": "bay", "from": "2 m", "to": "8 m"}],
}  # fmt: skip


@pytest.mark.parametrize(
    ("at_most", "word"), [("2.0 kN/m", "undecided"), ("9 kN/m", "kept"), ("-5 kN/m", "exceeded")]
)
def test_a_limit_near_the_estimate_is_undecided(tmp_path, at_most, word):
    source = {**ZONE, "limit": {"zone": "bay", "at_most": at_most}}
    found = recovered(tmp_path, source=source)
    limit = found.facts["limit"]
    assert limit["verdict"] == word
    codes = [f["code"] for f in found.findings]
    assert ("limit-undecided" in codes) == (word == "undecided")
    text = recovery_text(found.summary(), "kN/m")
    assert f"bay at most {float(at_most.split()[0]):g}" in text.replace("−", "-")
    if word == "undecided":
        sentence = next(f["sentence"] for f in found.findings if f["code"] == "limit-undecided")
        assert "between 5 % (exceeded) and 95 % (kept)" in sentence
        assert chance_text(limit["probability"]) in text
        assert chance_text(limit["probability"]) not in sentence  # said once, beside the limit
        page = found.save(tmp_path / "out") / "report.html"
        assert "do not decide it: take it for neither kept nor exceeded" in page.read_text()


@pytest.mark.parametrize(
    ("chance", "text", "word"),
    [
        (0.95, "95 %", "kept"), (0.94996, "94.996 %", "undecided"), (0.9504, "95.04 %", "kept"),
        (0.05, "5 %", "exceeded"), (0.05004, "5.004 %", "undecided"), (0.5, "50 %", "undecided"),
        (0.99953, "above 99.9 %", "kept"), (0.0004, "below 0.1 %", "exceeded"),
        (0.6234, "62.3 %", "undecided"),
    ],
)  # fmt: skip
def test_a_printed_probability_never_contradicts_its_verdict(chance, text, word):
    assert chance_text(chance, 0.95) == text
    assert verdict(chance, 0.95) == word


def test_the_peak_is_that_of_its_definition():
    x = np.arange(5.0)
    value, lower, upper = (np.array(v, dtype=float) for v in (
        (1, 3, 5, 4, 0), (0, 1, 3, 2, -2), (2, 5, 7, 6, 2)))  # fmt: skip
    found = peak(x, value, lower, upper, np.ones(5, dtype=bool))
    assert found == {
        "value": 5, "lower": 3, "upper": 7, "position": 2, "position_lower": 1,
        "position_upper": 3,
    }  # fmt: skip
    turned = peak(x, -value, -upper, -lower, np.ones(5, dtype=bool))
    assert (turned["value"], turned["lower"], turned["upper"]) == (-5, -7, -3)
    assert (turned["position_lower"], turned["position_upper"]) == (1, 3)


def peaks(folder, load, seeds, source):
    """Peaks recovered from repeats of one load, and its true largest density and place."""
    w = srcfit.respond(srcfit.make_member(MEMBER), PLACES, load)
    edges = np.linspace(0, 12, 25)
    middles = (edges[1:] + edges[:-1]) / 2
    found = []
    for seed in range(seeds):
        noise = 5e-5 * np.random.default_rng(seed).normal(size=len(PLACES))
        rows = [f"{x!r},{1e3 * v!r}" for x, v in zip(PLACES.tolist(), (w + noise).tolist(),
                                                      strict=True)]  # fmt: skip
        (folder / "w.csv").write_text("\n".join(["x,w", *rows, ""]))
        case = srcfit.make_case({
            "member": MEMBER, "source": source,
            "readings": {"file": "w.csv", "position": {"column": "x", "unit": "m"},
                         "column": [{"column": "w", "kind": "deflection", "unit": "mm",
                                     "sd": "0.05 mm"}]},
        }, folder)  # fmt: skip
        found.append(srcfit.recover(case).facts)
    return found, load(middles).max() / 1e3, middles[np.argmax(load(middles))]


def test_size_and_place_of_the_peak_hold_together(tmp_path):
    """A load that rises to one end of a stretch, 40 repeats: both statements hold at once.

    At least 95 % are promised; 40 repeats may show 36 of 40 with a chance of some 5 %.
    """
    source = {"unit": "kN/m", "total_unit": "kN", "cells": 24}

    def load(x):
        return 2e3 + 6e3 * np.exp(-(((x - 4.25) / 1.5) ** 2))

    found, top, place = peaks(tmp_path, load, 40, source)
    joints = [f["peak"]["joint"] for f in found]
    held = [j["lower"] <= top <= j["upper"]
            and j["position_lower"] <= place <= j["position_upper"] for j in joints]  # fmt: skip
    assert sum(held) >= 36
    assert all(f["peak"]["upper"] <= f["peak"]["joint"]["upper"] for f in found)


@pytest.mark.parametrize("turn", [1.0, -1.0])
def test_the_largest_density_is_at_least_every_mean(tmp_path, turn):
    """A level load is its own mean, which a limit on the mean may touch, 40 repeats.

    The limit of the total's mean is nearer to the truth than the band of any place is, it holds as
    often as promised, and no repeat puts the largest density below it.
    """
    source = {"unit": "kN/m", "total_unit": "kN", "cells": 24,
              "zones": [{"name": "bay", "from": "2 m", "to": "8 m"}]}  # fmt: skip
    found, top, _ = peaks(tmp_path, lambda x: turn * 4e3 + 0 * x, 40, source)
    assert top == pytest.approx(turn * 4)
    near = [min(turn * f["peak"]["joint"][k] for k in ("lower", "upper")) for f in found]
    assert sum(n <= 4 for n in near) >= 38
    for n, f in zip(near, found, strict=True):
        total = f["total"]
        # one of the two limits at a tenth of half the error: 0.25 % / 2, one-sided
        limit = turn * total["value"] - norm.ppf(1 - 0.00125) * total["sd"]
        assert n >= limit / 12 - 1e-9
        assert n > 1.0


def test_the_sentence_about_the_peak(tmp_path):
    found = recovered(tmp_path, source=ZONE)
    told = peak_sentence(found.facts, "kN/m", "m")
    assert told.startswith("With 95 % confidence, for size and place at once: the largest density")
    assert "times as wide as that for any one place" in told
    flat = " ".join(recovery_text(found.summary()).split())
    assert told.split(". ")[0] in flat
    assert 'The row "peak" above is read off the narrower band' in flat
    columns = list(found.source.columns)
    assert "lower_everywhere [kN/m]" in columns
    wide = found.source["upper_everywhere [kN/m]"] - found.source["lower_everywhere [kN/m]"]
    point = found.source["upper [kN/m]"] - found.source["lower [kN/m]"]
    ratio = found.facts["simultaneous"]["factor"] / found.facts["simultaneous"]["pointwise"]
    np.testing.assert_allclose(wide / point, ratio, rtol=1e-9)
