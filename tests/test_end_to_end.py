"""From a logger's file to the saved folder: exports of every sort, and the long fibre."""

import json
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from srcfit import cli, load_case, recover
from srcfit.output import ordered, strict

HERE = Path(__file__).parent
QUICK = ("04", "10", "12")  # four quantities and units, driven, differences to a baseline
SLOW = ("01", "02", "03", "06", "07", "09")
NAMES = [*QUICK, *(pytest.param(n, marks=pytest.mark.long) for n in SLOW)]
WANT = json.loads((HERE / "exports" / "want.json").read_text())


def saved(folder):
    summary = json.loads((folder / "summary.json").read_text("utf-8"))
    return summary, (folder / "report.html").read_text("utf-8")


@pytest.mark.parametrize("name", NAMES)
def test_every_export_is_recovered_with_all_its_lines(tmp_path, capsys, name):
    out = tmp_path / "out"
    status = cli.main(["recover", str(HERE / "exports" / f"{name}.toml"), "-o", str(out)])
    assert status == 0, capsys.readouterr().err
    summary, page = saved(out)
    want = WANT[name]
    fit = summary["fit"]
    assert fit["used"] == len(want["used"])
    assert fit["read"] == fit["used"] + len(summary["excluded"])
    lines = sorted(line for line, _ in want["rejected"])
    assert sorted(e["line"] for e in summary["excluded"]) == lines
    rows = pd.read_csv(out / "readings.csv")
    assert (len(rows), int(rows["used"].sum())) == (fit["read"], fit["used"])
    assert rows.loc[~rows["used"].astype(bool), "reason"].notna().all()
    if lines:
        assert any(f["code"] == "excluded" for f in summary["findings"])
        for line in lines:
            assert re.search(rf">{line}<", page)
    assert len(page.encode()) < 3_000_000
    assert ("imaginary part" in page) == (name == "10")
    if name == "10":
        assert "a quarter cycle ahead" in page
        assert "The charts show real parts" in page
        assert "value_imag" in rows.columns


def test_the_long_fibre_makes_a_page_that_can_be_mailed(tmp_path):
    """Example D: 793 readings with correlated noise, a step and a gauge length."""
    case = load_case(HERE.parent / "examples" / "buried_cable" / "case.toml")
    found = recover(case)
    folder = found.save(tmp_path / "out")
    summary, page = saved(folder)
    assert summary["fit"] == {**summary["fit"], "read": 793, "used": 793}
    assert summary == json.loads(json.dumps(ordered(strict(found.summary()))))
    assert len(page.encode()) < 3_000_000
    for anchor in ("answer", "source", "readings", "strength", "influence", "findings"):
        assert f'<section id="{anchor}"' in page
    assert "the charts show" not in page  # nothing is thinned at this size
    rows = re.search(r'<table id="table-readings".*?</table>', page, re.S)[0].count("<tr>")
    assert rows == 794
    zone = summary["zones"][0]
    assert zone["lower"] < zone["value"] < zone["upper"]
    frame = pd.read_csv(folder / "source.csv")
    assert np.isfinite(frame.filter(like="estimate").to_numpy()).all()
