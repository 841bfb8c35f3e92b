"""Nine invented sensor exports, each read row by row as `exports/want.json` says."""

import hashlib
import json
import re
from collections import Counter
from pathlib import Path

import numpy as np
import pytest

from srcfit.case import load_case
from srcfit.readings import read

EXPORTS = Path(__file__).parent / "exports"
WANT = json.loads((EXPORTS / "want.json").read_text())
FINDINGS = {"02": {"unit-change"}, "07": {"near-places"}}


def number(value):
    return complex(*value) if isinstance(value, list) else value


@pytest.mark.parametrize("name", WANT)
def test_every_reading_is_the_expected_one(name):
    want = WANT[name]
    found = read(load_case(EXPORTS / f"{name}.toml"))
    got = [
        (int(found.line[i]), found.kind[i], found.x[i], found.value[i])
        for i in np.flatnonzero(found.used)
    ]
    expected = [(line, kind, x, number(v)) for line, kind, x, v in want["used"]]
    assert [g[:2] for g in got] == [e[:2] for e in expected]
    np.testing.assert_allclose([g[2] for g in got], [e[2] for e in expected], rtol=0, atol=1e-9)
    got_values, values = np.array([g[3] for g in got]), np.array([e[3] for e in expected])
    assert got_values.dtype == values.dtype
    assert np.all(np.abs(got_values - values) <= 1e-9 * np.abs(values).max())


@pytest.mark.parametrize("name", WANT)
def test_every_excluded_row_has_its_reason(name):
    want = WANT[name]
    found = read(load_case(EXPORTS / f"{name}.toml"))
    left = np.flatnonzero(~found.used)
    place = [None if np.isnan(found.x[i]) else round(float(found.x[i]), 9) for i in left]
    assert Counter(zip(map(int, found.line[left]), place, strict=True)) == Counter(
        (line, x) for line, x in want["rejected"]
    )
    assert all(found.reason[i] for i in left)
    assert not any(found.reason[i] for i in np.flatnonzero(found.used))
    assert len(found) == len(want["used"]) + len(want["rejected"])


@pytest.mark.parametrize("name", WANT)
def test_inputs_are_named_and_left_alone(name):
    case = load_case(EXPORTS / f"{name}.toml")
    before = {p.name: p.read_bytes() for p in EXPORTS.iterdir()}
    found = read(case)
    assert {p.name: p.read_bytes() for p in EXPORTS.iterdir()} == before
    assert set(WANT[name]["files"]) <= set(found.inputs)
    for file, digest in found.inputs.items():
        assert hashlib.sha256(before[file]).hexdigest() == digest
    assert {f.code for f in found.findings} == FINDINGS.get(name, set())


def test_what_was_understood_is_stated():
    said = " ".join(s for n in WANT for s in read(load_case(EXPORTS / f"{n}.toml")).understood)
    for words in (
        "Windows-1252, CRLF, cells parted by semicolons; 5 lines before the header; names in "
        "line 7; units in line 8; decimal comma; 16 rows, 16 readings, 1 of them excluded.",
        "names in line 2; units in line 3; header again in line 11; decimal point",
        "02_positions.csv: ASCII, LF, cells parted by commas; names in line 1; 26 rows.",
        "UTF-8 with a byte-order mark, LF, cells parted by commas",
    ):
        assert words in said


def test_a_place_read_twice_with_a_slip_is_pointed_out():
    found = read(load_case(EXPORTS / "07.toml"))
    (finding,) = found.findings
    a, b = map(int, re.search(r"lines (\d+) and (\d+) \(0.4 mm\)", finding.sentence).groups())
    x = {int(n): v for n, v in zip(found.line, found.x, strict=True)}
    assert abs(x[a] - x[b]) == pytest.approx(0.4e-3, rel=1e-6)


@pytest.mark.parametrize("name", WANT)
def test_every_line_with_readings_is_used_or_excluded(name):
    """Lines that hold a reading, counted from the file itself, against the table of readings."""
    want = WANT[name]
    found = read(load_case(EXPORTS / f"{name}.toml"))
    used = {int(n) for n in found.line[found.used]}
    left = {int(n) for n in found.line[~found.used]}
    assert len(found) == int(found.used.sum()) + sum(bool(r) for r in found.reason)
    assert used | left == {line for line, *_ in want["used"]} | {n for n, _ in want["rejected"]}
