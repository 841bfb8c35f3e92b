"""Cases drafted from tables: right columns, marked guesses, named gaps, texts that load."""

import csv
import re
from pathlib import Path

import numpy as np
import pytest

from srcfit import cli
from srcfit.case import load_case
from srcfit.draft import draft
from srcfit.errors import ReadingsError
from srcfit.members import MEMBERS
from srcfit.readings import read

EXPORTS = Path(__file__).parent / "exports"
EXAMPLES = Path(__file__).parent.parent / "examples"
# member kind, file, (position, its unit or the unit's column), readings as (headers, kind, unit)
GAUGES = tuple(f"G{i:02d}" for i in range(1, 27))
SHOTS = ("2026-11-03T14:00:00+01:00", "2026-11-03T14:10:00+01:00", "2026-11-03 13:20:00Z")
WANT = {
    "01": ("beam", ("x", "m"), [(("Setzung",), "deflection", "mm")]),
    "02": ("beam", ("x_m", "m"), [(GAUGES, "strain", None)]),
    "03": ("conductor", ("Position (m)", "m"), [(SHOTS, "temperature", None)]),
    "04": ("beam", ("position", "position_unit"), [
        (("value",), kind, "unit") for kind in ("strain", "deflection", "rotation", "deflection")
    ]),
    "06": ("beam", ("pos_m", "m"), [(("settlement_mm",), "deflection", "mm")]),
    "07": ("beam", ("Station", "m"), [(("dz [mm]",), "deflection", "mm")]),
    "09": ("conductor", ("Distance", "in"), [(("Temp (F)",), "temperature", "degF")]),
    "10": ("wall", ("depth_m", "m"), [(("T_amp_K",), "temperature", "K")]),
    "12": ("beam", ("x_m", "m"), [(("strain_raw",), "strain", None)]),
}  # fmt: skip


def export(name):
    return next(p for p in EXPORTS.glob(f"{name}_*.csv") if "positions" not in p.name)


def written(folder, kind, table):
    """The drafted case, loaded from a file in `folder`, and the draft."""
    found = draft(kind, table, folder)
    (folder / "case.toml").write_text(found.text, "utf-8")
    return load_case(folder / "case.toml"), found


def specs(case):
    table = case.tables[0]
    place = table.position
    columns = [(c.columns, c.kind, c.unit or c.unit_column) for c in table.columns]
    return (place.column, place.unit or place.unit_column), columns


@pytest.mark.parametrize("name", WANT)
def test_columns_of_every_export_are_recognised(tmp_path, name):
    kind, place, columns = WANT[name]
    case, found = written(tmp_path, kind, export(name))
    assert specs(case) == (place, columns)
    assert "# GUESS: " in found.text
    assert any(line.startswith("`sd`") for line in found.remaining)
    for line in found.remaining:  # each stands at the top of the file as well
        assert f"# - {line}\n" in found.text


@pytest.mark.parametrize("name", WANT)
def test_inspect_works_on_a_draft_or_names_the_key_to_set(tmp_path, capsys, name):
    status = cli.main(["new", WANT[name][0], "--from", str(export(name)), "-o", str(tmp_path)])
    out = capsys.readouterr().out
    assert status == 0
    assert out.startswith(f"{tmp_path / 'case.toml'}\nRemains to fill in:\n  - ")
    status = cli.main(["inspect", str(tmp_path / "case.toml")])
    out, err = capsys.readouterr()
    if name == "03":  # nothing in that file states the unit
        assert status == 3
        assert "nothing states the unit of '2026-11-03T14:00:00+01:00'; set `unit`" in err
    else:
        assert status == 0
        used = int(re.search(r"Readings: (\d+) of", out)[1])
        assert used >= 15
        # a path is one word, as long as it is
        assert max(len(line) for line in out.splitlines() if "/" not in line) < 160


def test_places_of_gauges_are_found_in_the_table_beside(tmp_path):
    case, _ = written(tmp_path, "beam", export("02"))
    place = case.tables[0].position
    assert (place.gauge, Path(place.file).resolve()) == ("gauge", EXPORTS / "02_positions.csv")
    assert int(read(case).used.sum()) == 206


def test_chainages_and_depths_are_brought_onto_the_member(tmp_path):
    case, _ = written(tmp_path, "beam", export("07"))
    assert case.tables[0].position.origin == pytest.approx(12400.0)
    assert case.member.length == pytest.approx(78.0)
    (tmp_path / "d.csv").write_text("depth [m],T [degC]\n-1,5.0\n-2,6.1\n-4,8.2\n-8,9\n")
    case, _ = written(tmp_path, "wall", tmp_path / "d.csv")
    assert case.tables[0].position.reversed
    assert case.member.length == 8.0
    assert read(case).used.all()


@pytest.mark.parametrize("kind", MEMBERS)
def test_a_demo_is_drafted_back_to_its_own_columns(tmp_path, kind):
    from srcfit import start

    start.write(kind, tmp_path / "demo", demo=True)
    own = load_case(tmp_path / "demo" / "case.toml")
    case, _ = written(tmp_path, kind, tmp_path / "demo" / "readings.csv")
    assert specs(case) == specs(own)
    found = read(case)
    assert len(found) == 24
    assert found.used.all()
    np.testing.assert_allclose(np.sort(found.x), np.sort(read(own).x), rtol=1e-12)


@pytest.mark.parametrize(
    ("kind", "file", "column", "sensor", "unit"),
    [
        ("conductor", "buried_cable/fibre.csv", "T [degC]", "temperature", "degC"),
        ("beam", "cantilever_weight/deflection.csv", "deflection_m", "deflection", "m"),
        ("beam", "girder_settled_pier/strain.csv", "strain [ue]", "strain", "ue"),
        ("beam", "ground_beam/settlement.csv", "w [mm]", "deflection", "mm"),
        ("column", "sediment_column/radon.csv", "C [Bq/m^3]", "concentration", "Bq/m^3"),
        ("conductor", "three_bars/temperatures.csv", "T_aluminium", "temperature", None),
    ],
)
def test_columns_of_the_examples(tmp_path, kind, file, column, sensor, unit):
    case, _ = written(tmp_path, kind, EXAMPLES / file)
    assert specs(case)[1] == [((column,), sensor, unit)]


def test_a_column_of_standard_uncertainties_is_taken(tmp_path):
    case, _ = written(tmp_path, "column", EXAMPLES / "sediment_column" / "radon.csv")
    assert case.columns[0].sd_column == "u [Bq/m^3]"
    assert case.source.unit == "Bq/(m^3*s)"


def test_a_name_that_looks_like_a_label_is_a_reading_by_its_unit(tmp_path):
    """Rn is radon here and a record's number elsewhere; a number of something has no unit."""
    rows = [f"{x},{x},{90 * x},5" for x in range(1, 12)]
    (tmp_path / "t.csv").write_text("\n".join(["RN,depth [cm],Rn-222 [Bq/m3],u [Bq/m3]", *rows]))
    case, _ = written(tmp_path, "column", tmp_path / "t.csv")
    assert specs(case)[1] == [(("Rn-222 [Bq/m3]",), "concentration", "Bq/m3")]
    assert case.columns[0].sd_column == "u [Bq/m3]"


def test_what_may_be_more_is_left_in_remarks(tmp_path):
    text = draft("conductor", EXAMPLES / "three_bars" / "temperatures.csv", tmp_path).text
    assert '# CHECK: "T_brass" fits too' in text
    assert '# column = "T_iron"\n' in text
    text = draft("wall", export("10"), tmp_path).text
    assert 'phase = { column = "T_phase_deg", unit = "deg" }' in text


def test_numbers_that_can_be_read_in_two_ways_are_asked_for(tmp_path):
    rows = "".join(f"{x};{100 * x % 7 + 1},{101 + x}\n" for x in range(1, 9))
    (tmp_path / "t.csv").write_text("x [m];w [mm]\n" + rows)
    case, found = written(tmp_path, "beam", tmp_path / "t.csv")
    assert any(line.startswith("`decimal`: ") for line in found.remaining)
    with pytest.raises(ReadingsError, match="set `decimal`"):
        read(case)
    text = re.sub(r'# decimal = "."', 'decimal = ","', found.text)
    (tmp_path / "case.toml").write_text(text, "utf-8")
    assert read(load_case(tmp_path / "case.toml")).value[0] == pytest.approx(3.102e-3)


def test_the_table_is_named_by_its_path_and_left_alone(tmp_path, capsys, monkeypatch):
    (tmp_path / "data").mkdir()
    (tmp_path / "data" / "w.csv").write_text("x [m],w [mm]\n1,2\n2,3\n3,5\n")
    monkeypatch.chdir(tmp_path)
    assert cli.main(["new", "beam", "--from", "data/w.csv", "-o", "cases/a.toml"]) == 0
    assert 'file = "../data/w.csv"' in (tmp_path / "cases" / "a.toml").read_text("utf-8")
    assert sorted(p.name for p in tmp_path.rglob("*.*")) == ["a.toml", "w.csv"]
    capsys.readouterr()
    assert cli.main(["new", "beam", "--from", "data/w.csv"]) == 0
    out, err = capsys.readouterr()
    assert 'file = "data/w.csv"' in out
    assert err.startswith("Remains to fill in:")


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"", "the file is empty"),
        (b"only words\nand more\n", "no line of names stands above rows of numbers"),
        (b"1,2\n3,4\n5,6\n", "no line of names stands above rows of numbers"),
        (b"\x1f\x8b\x08\x00 and so on", "the file is gzip, not a table"),
    ],
)
def test_what_is_no_table_is_refused(tmp_path, capsys, data, words):
    (tmp_path / "t.csv").write_bytes(data)
    status = cli.main(
        ["new", "beam", "--from", str(tmp_path / "t.csv"), "-o", str(tmp_path / "o")]
    )
    assert status == 3
    assert words in capsys.readouterr().err
    assert not (tmp_path / "o").exists()
    assert cli.main(["new", "beam", "--from", str(tmp_path / "none.csv")]) == 3
    assert cli.main(["new", "beam", "--demo", "--from", str(tmp_path / "t.csv")]) == 2


HOSTILE = ('w "quoted"', "back\\slash", "x = 1]]", "# a remark", "</script>\x07", "two\nlines",
           "\u202eright to left", "del\x7f", "'''", "}{")  # fmt: skip


@pytest.mark.parametrize("name", HOSTILE)
def test_hostile_headers_stay_texts(tmp_path, name):
    header = f"{name} deflection [mm]"
    with (tmp_path / "t.csv").open("w", newline="", encoding="utf-8") as file:
        rows = [["x [m]", header, f"{name} status"]]
        rows += [[x, x * x / 7, "ok"] for x in range(1, 12)]
        csv.writer(file).writerows(rows)
    case, _ = written(tmp_path, "beam", tmp_path / "t.csv")
    assert specs(case)[1][0][1:] == ("deflection", "mm")
    assert read(case).used.all()
