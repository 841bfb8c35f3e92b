"""`srcfit new KIND --demo` for every kind, run to the end: its invented source is found back."""

import csv

import numpy as np
import pytest

import srcfit
from srcfit.cli import main
from srcfit.grid import overlap
from srcfit.members import MEMBERS
from srcfit.start import TRUTH
from srcfit.units import factor


def truth_of(case, folder, start, end):
    """Integral of the told source over [start, end), in the total's unit."""
    kind, source = case.member.kind, case.source
    per_total = factor(source.total_unit, kind.total_unit, "total")[0]
    with (folder / TRUTH).open(encoding="utf-8") as file:
        rows = list(csv.reader(file))[1:]
    density = factor(source.unit, kind.source_unit, "unit")[0]
    at = factor(source.position_unit, "m", "position")[0]
    ends = np.array([case.member.start, case.member.end])
    total = 0.0
    for low, high, value in rows:
        a, b = max(float(low) * at, start), min(float(high) * at, end)
        if a < b:
            total += density * float(value) * overlap(case.member, ends, a, b)[0]
    return total / per_total


@pytest.mark.parametrize("kind", MEMBERS)
def test_a_demo_of_every_kind_is_recovered(tmp_path, kind):
    assert main(["new", kind, "--demo", "-o", str(tmp_path / "job"), "--seed", "3"]) == 0
    case = srcfit.load_case(tmp_path / "job" / "case.toml")
    found = srcfit.recover(case)
    summary = found.summary()
    member = case.member
    numbers = [(summary["total"], member.start, member.end)]
    numbers += [(z, s.start, s.end) for z, s in zip(summary["zones"], case.source.zones,
                                                    strict=True)]  # fmt: skip
    for number, start, end in numbers:
        truth = truth_of(case, tmp_path / "job", start, end)
        assert number["lower"] <= truth <= number["upper"]
    serious = [f for f in found.findings if f["level"] == "serious"]
    assert not serious, serious
    assert abs(found.balance["difference"]) < 1e-6 * max(map(abs, found.balance.values()))
    assert np.isfinite(found.section.to_numpy(float)).all()


@pytest.mark.parametrize("kind", ["beam", "sphere"])
def test_a_demo_is_saved_whole(tmp_path, monkeypatch, capsys, kind):
    monkeypatch.chdir(tmp_path)
    assert main(["new", kind, "--demo"]) == 0
    assert main(["recover", f"{kind}-demo/case.toml", "-o", "out", "--strict"]) == 0
    assert "Balance" in capsys.readouterr().out
    names = {p.name for p in (tmp_path / "out").iterdir()}
    assert {"source.csv", "section.csv", "summary.json", "report.html", "figures"} <= names
