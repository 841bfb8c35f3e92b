"""Files that cannot be used: one sentence with file, line, key and how to mend it."""

import gzip
from dataclasses import replace

import pytest
from readings_cases import case, column, member, table_case

from srcfit.case.model import Baseline, PositionSpec, TimeSpec
from srcfit.errors import ReadingsError
from srcfit.readings import read


def said(folder, data, *columns, **more):
    """The sentence of the error that this table gives."""
    with pytest.raises(ReadingsError) as error:
        read(table_case(folder, data, *columns, **more))
    text = str(error.value)
    assert text.startswith("t.csv")
    assert text.endswith(".")
    assert "\n" not in text
    assert error.value.how
    return text


FILES = [
    (b"", "is empty"),
    (b"\r\n \n\n", "is empty"),
    (b"\xff\xfe", "is empty"),
    (bytes(range(256)) * 20, "no text"),
    (gzip.compress(b"x;w\n0;1\n", mtime=0), "the file is gzip"),
    (b"PK\x03\x04 nothing", "spreadsheet cannot be opened"),
    (b"PAR1 nothing", "Parquet file"),
    (b"%PDF-1.4", "the file is PDF"),
]


@pytest.mark.parametrize(("data", "words"), FILES)
def test_files_that_are_no_tables(tmp_path, data, words):
    assert words in said(tmp_path, data)


def test_a_missing_file_names_the_nearest(tmp_path):
    (tmp_path / "levels.csv").write_text("x;w\n0;1\n")
    with pytest.raises(
        ReadingsError, match=r"level\.csv: there is no such file \(nearest: 'levels"
    ):
        read(case(tmp_path, "level.csv"))
    with pytest.raises(ReadingsError, match="cannot be read"):
        read(case(tmp_path, "."))


HEADERS = [
    ("pos;w\n1;2\n", "t.csv, line 1: ", "'x' is missing", "set readings.position.column"),
    (
        "Position [m];Weg\n1;2\n",
        "t.csv: ",
        "'w' is missing (nearest: 'Weg')",
        "readings.column[1]",
    ),
    (
        "a\nx;W\n1;2\n",
        "t.csv, line 2: ",
        "'w' is missing (nearest: 'W')",
        "set readings.column[1]",
    ),
    (
        "x;w;w\n1;2;3\n",
        "t.csv, line 1: ",
        "the header has 'w' 2 times",
        "readings.column[1].column",
    ),
    ("x;w\n", "t.csv: ", "no reading is left (the table has no rows)", "correct"),
    ("x;w\n1;---\n2;\n", "t.csv: ", "no reading is left (1 times: '---'", "correct"),
    ("x;w\n-1;2\n-2;2\n", "t.csv: ", "(2 times: off the member)", "`reversed`"),
    ("x;w\n0;1,234\n1;2,345\n", "t.csv, line 2, column 'w': ", "'1,234'", "set `decimal`"),
    ('x,w\n0.250,"1,234"\n"1,5","2,345"\n', "t.csv, line 2, column 'w'", "'1,234'", "`decimal`"),
    ("x;w\n0;1.234\n1;2.345\n", "t.csv, line 2, column 'w': ", "'1.234'", "set `decimal`"),
    ("x,w\n0,1.234\n1,950\n", "t.csv, line 2, column 'w': ", "'1.234'", "set `decimal`"),
    ("x;w\nm;in\n1;2\n", "t.csv: ", "the units row in line 2 states 'in'", "readings.column[1]"),
    ("x;w\nm;kN\n1;2\n", "t.csv, line 2: ", "the unit 'kN' of 'w'", "readings.column[1]"),
]


@pytest.mark.parametrize(("text", "place", "what", "how"), HEADERS)
def test_headers_units_and_rows(tmp_path, text, place, what, how):
    sentence = said(tmp_path, text)
    assert sentence.startswith(place)
    assert what in sentence
    assert how in sentence.split("; ", 1)[1]


def test_brackets_that_contradict_the_case(tmp_path):
    spec = column("w [in]")
    assert "the header in line 1 states 'in'" in said(tmp_path, "x;w [in]\n1;2\n", spec)
    assert "the unit 'kN'" in said(tmp_path, "x;w [kN]\n1;2\n", column("w [kN]"))
    place = PositionSpec("x [ft]", "m")
    assert "states 'ft'" in said(tmp_path, "x [ft];w\n1;2\n", position=place)
    spec = column("T (F)", "temperature", "degC")
    assert "states 'F'" in said(tmp_path, "x;T (F)\n1;2\n", spec, of=member("conductor"))
    spec = column("w", sd_column="s [m]")
    assert "is in 'm'" in said(tmp_path, "x;w;s [m]\n1;2;3\n", spec)
    assert "units row" in said(tmp_path, "x;w\n;mm\n1;2\nx;w\n;cm\n1;3\n", column("w"))


def test_what_is_not_stated_is_asked_for(tmp_path):
    spec = column("w", unit=None)
    assert "nothing states the unit of 'w'; set `unit`" in said(tmp_path, "x;w\n1;2\n", spec)
    text = "t;x;w\n03/04/2026 10:00;0;1\n04/04/2026 10:10;1;2\n"
    time = TimeSpec("t")
    assert "set `format` of `time`" in said(tmp_path, text, time=time)
    text = "t;x;w\n46320.5;0;1\n46320.75;1;2\n"
    assert 'set `format` of `time` to "serial"' in said(tmp_path, text, time=time)
    assert read(table_case(tmp_path, text)).used.all()  # without `time` it does not matter


def test_texts_that_select_nothing_are_named_with_what_is_there(tmp_path):
    text = "x;w;b\n1;2;A\n2;3;B\n"
    spec = column(where={"b": "C"})
    assert "no row has b = \"C\" ('b' holds 'A', 'B')" in said(tmp_path, text, spec)
    spec = column(where={"b": "A"}, baseline=Baseline({"b": "Z"}, "x"))
    assert 'b = "Z"' in said(tmp_path, text, spec)


def test_gauges_with_two_places_or_none(tmp_path):
    (tmp_path / "p.csv").write_text("g;x\nw;1\nw;2\n")
    place = PositionSpec("x", "m", file=tmp_path / "p.csv", gauge="g")
    one = table_case(tmp_path, "w\n1\n", position=place)
    with pytest.raises(ReadingsError, match=r"p\.csv, line 3: gauge 'w' has two different places"):
        read(one)
    (tmp_path / "p.csv").write_text("g;x\nw;?\n")
    with pytest.raises(ReadingsError, match=r"p\.csv: no place of any gauge can be read"):
        read(one)
    gone = replace(place, file=tmp_path / "q.csv")
    with pytest.raises(ReadingsError, match=r"q\.csv: there is no such file"):
        read(table_case(tmp_path, "w\n1\n", position=gone))


def test_a_format_that_is_none(tmp_path):
    text = "t;x;w\n03/04/2026;0;1\n"
    assert "'%d/%Q'" in said(tmp_path, text, time=TimeSpec("t", "%d/%Q"))
