"""Which reading would separate what is mixed: against dense algebra and against adding it."""

import re
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import srcfit
from srcfit import separate
from srcfit.bands import undetermined
from srcfit.evidence import conditional
from srcfit.places import solve
from srcfit.problem import Questions
from srcfit.readings import read
from srcfit.solvers.frame import ask, frame

EXAMPLES = Path(__file__).parent.parent / "examples"


def example(name):
    given = srcfit.load_case(EXAMPLES / name)
    return solve(given, read(given))


def added(folder, name, rows, **column):
    """The example with one more table of readings."""
    with (EXAMPLES / name).open("rb") as file:
        mapping = tomllib.load(file)
    table = mapping["readings"]
    tables = table.pop("table", None) or [dict(table)]
    own = EXAMPLES / Path(name).parent
    for t in tables:
        (folder / t["file"]).write_bytes((own / t["file"]).read_bytes())
    (folder / "more.csv").write_text("\n".join(["x,v", *rows]) + "\n")
    position = {"column": "x", "unit": "m"}
    tables.append(
        {"file": "more.csv", "position": position, "column": [{"column": "v", **column}]}
    )
    mapping["readings"] = {"table": tables}
    return srcfit.make_case(mapping, folder=folder)


def test_a_lost_datum_wants_a_deflection_of_its_own(tmp_path):
    """Uniform load on a free bedded beam turns nothing and bends nothing: only a deflection that
    does not share the offset tells; with it the offset is as sure as was said."""
    name = "ground_beam_datum/case.toml"
    found = srcfit.recover(srcfit.load_case(EXAMPLES / name))
    told = next(f["sentence"] for f in found.findings if f["code"] == "inseparable")
    said = re.search(
        r"A deflection reading of sd 0.1 mm near x = (\d+) m that does not share offset:levelling "
        r"would separate them: offset:levelling would then be known to about ([\d.]+) mm\.$", told
    )  # fmt: skip
    assert said, told
    # the true deflection there, whatever it is, is the cell's reading less the offset of 0.35 mm
    x = int(said[1])
    cells = found.readings
    w = cells["value"][cells["x [m]"] == x].iloc[0] - 0.35
    more = added(tmp_path, name, [f"{x},{w:.4f}"], kind="deflection", unit="mm", sd="0.1 mm",
                 positive="down", group="benchmark")  # fmt: skip
    nuisance = srcfit.recover(more).summary()["nuisances"][0]
    assert nuisance["value"] == pytest.approx(0.35, abs=3 * nuisance["sd"])
    assert nuisance["sd"] == pytest.approx(float(said[2]), rel=0.15)


def test_rotations_do_not_separate_a_lost_datum():
    """Of all candidates only deflections see the mixed combination."""
    found = example("ground_beam_datum/case.toml")
    names = undetermined(found.problem)[0]
    asked = separate.candidates(found)
    v = separate.mixed(found.problem, names)
    sees = separate.seen(found.problem, asked.questions, v) != 0
    kinds = np.array(asked.kind)
    assert set(kinds) == {"deflection", "rotation", "curvature", "moment", "shear"}
    assert set(kinds[sees]) == {"deflection"}
    assert np.all(sees[kinds == "deflection"])


def test_one_more_reading_as_a_rank_one_update(monkeypatch):
    """The sd that is promised is that of the problem with the row appended, at one strength."""
    found = example("girder_settled_pier/strain_only.toml")
    own = separate.family
    rung = {}

    def one(fr, level):
        w = own(fr, level)
        at = rung.setdefault("at", int(np.argmax(w.weights)))
        rung["sigma"] = w.sigma[at]
        return replace(w, weights=np.eye(len(w.sigma))[at])

    monkeypatch.setattr(separate, "family", one)
    said = separate.would_tell(found, "settlement:24 m")
    part = float(re.search(r"to (\d+) % of what it is", said)[1]) / 100
    asked = separate.candidates(found)
    problem = found.problem
    unit = Questions(np.zeros((1, problem.A.shape[1])), np.ones((1, 1)))
    assert problem.names == ("settlement:24 m",)

    def sd(more, sigma):
        fr = frame(more)
        w = own(fr, found.answers.level)
        at = int(np.argmin(np.abs(w.sigma - sigma)))
        held = replace(
            w, sigma=w.sigma * 0 + sigma, shrink=1 / (1 + w.spectrum.lam[:, None] * sigma**2)
            + 0 * w.shrink,
        )  # fmt: skip
        return float(np.sqrt(conditional(ask(fr, unit), held)[1][0, at]))

    before = sd(problem, rung["sigma"])
    after = []
    for i in range(0, len(asked.sd)):
        more = replace(
            problem,
            A=np.vstack([problem.A, asked.questions.cells[i] / asked.sd[i]]),
            B=np.vstack([problem.B, asked.questions.columns[i] / asked.sd[i]]),
            d=np.append(problem.d, 0.0), places=None,
        )  # fmt: skip
        after.append(sd(more, rung["sigma"]) / before)
    best = int(np.argmin(after))
    assert asked.kind[best] == "deflection"
    assert asked.x[best] == 24.0
    assert "near x = 24 m" in said
    assert min(after) == pytest.approx(part, abs=0.006)


def test_a_settled_support_wants_its_level(tmp_path):
    """A girder read by few gauges: the level of the pier tells its settlement; added, it does."""
    found = example("girder_settled_pier/strain_only.toml")
    said = separate.would_tell(found, "settlement:24 m")
    assert re.match(r"A deflection reading of sd [\d.]+ [um]m near x = 24 m would cut", said), said
    part = float(re.search(r"to (\d+) % of what it is", said)[1]) / 100
    sd = re.search(r"of sd ([\d.]+ [um]m)", said)[1]
    more = added(tmp_path, "girder_settled_pier/strain_only.toml", ["24,9.0"], kind="deflection",
                 unit="mm", sd=sd, positive="down", group="level")  # fmt: skip
    own = srcfit.recover(srcfit.load_case(EXAMPLES / "girder_settled_pier/strain_only.toml"))
    before, after = (
        next(
            n["sd"] * {"m": 1e3, "mm": 1.0}[n["unit"]]
            for n in r.summary()["nuisances"]
            if n["name"] == "settlement:24 m"
        )
        for r in (own, srcfit.recover(more))
    )
    assert after / before == pytest.approx(part, abs=0.05)


def test_a_step_in_a_fibre_wants_a_thermometer_beyond_it():
    """Temperature readings of their own beyond the splice, and no promise of more than they do."""
    found = srcfit.recover(srcfit.load_case(EXAMPLES / "buried_cable" / "case.toml"))
    told = next(f["sentence"] for f in found.findings if f["code"] == "nearly-inseparable")
    said = re.search(r"A temperature reading of sd 0.3 degC near x = (\d+) m that does not share "
                     r"step:fibre@220 m would cut the sd", told)  # fmt: skip
    assert said, told
    assert int(said[1]) > 220


def test_two_loads_at_one_place_cannot_be_told_by_any_reading(tmp_path):
    """Nothing that is read sees the difference, and the finding says so."""
    x = np.linspace(0.5, 9.5, 10)
    rows = [f"{a:g},{1e-3 * a * (10 - a):.6f}" for a in x]
    (tmp_path / "w.csv").write_text("\n".join(["x,w", *rows]) + "\n")
    given = srcfit.make_case(
        {"member": {"kind": "cable", "length": "10 m", "tension": "5 kN", "left": "fixed",
                    "right": "fixed"},
         "readings": {"file": "w.csv", "position": {"column": "x", "unit": "m"},
                      "column": [{"column": "w", "kind": "deflection", "unit": "m",
                                  "sd": "1 mm"}]},
         "source": {"unit": "N/m", "cells": 40,
                    "lumped": [{"name": "P", "at": "4 m"}, {"name": "Q", "at": "4 m"}]}},
        folder=tmp_path,
    )  # fmt: skip
    told = next(f for f in srcfit.recover(given).findings if f["code"] == "inseparable")
    assert "P and Q" in told["sentence"]
    assert "No one further reading of the kinds that this member has" in told["sentence"]


@pytest.mark.parametrize(
    ("amount", "unit", "si", "text"),
    [(1.1e-4, "", "m", "0.11 mm"), (1.23e-4, "", "rad", "0.12 mrad"), (2341.0, "", "N", "2.3 kN"),
     (2e-6, "", "1", "2e-06"), (1e-4, "mm", "m", "0.1 mm"), (0.3, "degC", "K", "0.3 degC")],
)  # fmt: skip
def test_small_numbers_in_words(amount, unit, si, text):
    """Two digits, in the user's unit or with a prefix."""
    assert separate._rounded(amount, unit, si) == text
