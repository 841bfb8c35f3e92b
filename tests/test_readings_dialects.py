"""Dialects of tables: what stands in the file, and what is read from it."""

import math
from dataclasses import replace

import numpy as np
import pytest
from readings_cases import case, column, member, table_case

from srcfit.case.model import PhaseSpec, PositionSpec, TimeSpec
from srcfit.readings import read

NAN = math.nan
MM = 1e-3
ROD = PositionSpec("x", "in")
DRIVEN = member(frequency=2.0)


def rows(found):
    """(line, x, value, reason) of every reading."""
    return list(
        zip(found.line.tolist(), found.x.tolist(), found.value.tolist(), found.reason, strict=True)
    )


def same(found, expected):
    """Lines and reasons equal, numbers to rounding; a reason may be shortened."""
    assert [r[0] for r in rows(found)] == [e[0] for e in expected]
    for (line, x, value, reason), want in zip(rows(found), expected, strict=True):
        words = want[3] if len(want) > 3 else ""
        assert (words in reason) if words else not reason, (line, reason)
        np.testing.assert_allclose([x, value], [want[1], want[2]], rtol=1e-12, atol=1e-15)


PLAIN = "x{0}w\n0{0}1.25\n2{0}-0.5\n"
PLAIN_ROWS = [(2, 0, 1.25 * MM), (3, 2, -0.5 * MM)]


@pytest.mark.parametrize("delimiter", [";", "\t", ",", "|", " ", "    "])
@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize(
    "encoding", ["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "utf-32", "cp1252"]
)
def test_encodings_delimiters_and_line_ends(tmp_path, delimiter, end, encoding):
    text = PLAIN.format(delimiter).replace("\n", end)
    same(read(table_case(tmp_path, text.encode(encoding))), PLAIN_ROWS)


@pytest.mark.parametrize("encoding", ["utf-16", "utf-8", "utf-8-sig"])
def test_declared_delimiter_and_preamble(tmp_path, encoding):
    text = "sep=\t\r\nStation: N, 4\r\nx\tw\r\n0,5\t1.234,5\r\n1,5\t-3,25\r\n"
    found = read(table_case(tmp_path, text.encode(encoding)))
    same(found, [(4, 0.5, 1.2345), (5, 1.5, -3.25 * MM)])
    assert (
        "cells parted by tabs; 2 lines before the header; names in line 3" in found.understood[0]
    )


NUMBERS = [
    ("thousands by point", "x;w\n0,5;1.234,56\n1,5;1.500\n2;7,25\n", [1.23456, 1.5, 7.25 * MM]),
    ("thousands by comma", 'x,w\n0.5,"1,600"\n1.5,"12"\n', [1.6, 0.012]),
    ("thousands by apostrophe", "x;w\n0.5;1'234.5\n1;12.5\n", [1.2345, 0.0125]),
    ("thousands by blank", "x;w\n0,5;1 234,5\n1;1\u00a0234\n2;-12,5\n", [1.2345, 1.234, -0.0125]),
    ("point of three places", "x,w\n1.000,2.125\n2.000,3.250\n", [2.125 * MM, 3.25 * MM]),
    ("exponents", "x;w\n0;1.5E+00\n1;-2,5e1\n2;1D2\n", [1.5 * MM, -0.025, 0.1]),
    ("signs", "x;w\n0;+1.5\n1;−2.5\n2; 3.5 \n", [1.5 * MM, -2.5 * MM, 3.5 * MM]),
    ("bare points", "x;w\n0;.5\n1;5.\n", [0.5 * MM, 5 * MM]),
    ("unit beside the number", "x;w\n0 m;1.5 mm\n1m;2.5mm\n", [1.5 * MM, 2.5 * MM]),
    ("spreadsheet apostrophe", "x;w\n0;'1.5\n1;'-2.5\n", [1.5 * MM, -2.5 * MM]),
    ("two marks, each proven", "x;w\n0,5;1,25\n1.5;2.25\n", [1.25 * MM, 2.25 * MM]),
    ("thousands twice", "x;w\n0;1,234,567\n1;2.5\n", [1234.567, 2.5 * MM]),
]


@pytest.mark.parametrize(("text", "values"), [n[1:] for n in NUMBERS], ids=[n[0] for n in NUMBERS])
def test_numbers(tmp_path, text, values):
    found = read(table_case(tmp_path, text))
    assert found.used.all()
    np.testing.assert_allclose(found.value, values, rtol=1e-12)


def test_stated_decimal_mark_settles_the_number(tmp_path):
    text = "x;w\n0;1,234\n1;2,345\n"
    np.testing.assert_allclose(
        read(table_case(tmp_path, text, decimal=",")).value, [1.234e-3, 2.345e-3]
    )
    np.testing.assert_allclose(read(table_case(tmp_path, text, decimal=".")).value, [1.234, 2.345])


def test_unclear_numbers_in_other_columns_do_not_matter(tmp_path):
    same(read(table_case(tmp_path, "x;w;z\n0;1.25;1,234\n2;-0.5;2,345\n")), PLAIN_ROWS)


def test_fractions_feet_and_inches(tmp_path):
    text = 'x;w\n2 1/4";1\n7";1\n5\' 3 1/2";1\n5\'-3½";1\n6\';1\n1 1/2;1\n-3/4";1\n0.5 in;1\n'
    found = read(table_case(tmp_path, text, position=ROD))
    inches = [2.25, 7, 63.5, 63.5, 72, 1.5, -0.75, 0.5]
    np.testing.assert_allclose(found.x, np.array(inches) * 0.0254, rtol=1e-12)
    assert found.used.tolist() == [True] * 6 + [False, True]


def test_inch_marks_in_a_column_of_metres_are_no_metres(tmp_path):
    found = read(table_case(tmp_path, 'x;w\n7";1\n2;1\n'))
    same(found, [(2, NAN, MM, "its position: its unit (inch or foot marks)"), (3, 2, MM)])


@pytest.mark.parametrize("text", ["12+412.5", "km 12+412.5", "12 + 412.5"])
def test_chainages(tmp_path, text):
    place = PositionSpec("x", "m", origin=12400.0)
    same(read(table_case(tmp_path, f"x;w\n{text};1\n12+400;2\n", position=place)),
         [(2, 12.5, MM), (3, 0, 2 * MM)])  # fmt: skip


def test_stations_of_a_hundred_feet(tmp_path):
    place = PositionSpec("x", "ft", origin=12400 * 0.3048)
    found = read(table_case(tmp_path, "x;w\n124+12.5;1\n124+00;2\n", position=place))
    np.testing.assert_allclose(found.x, [12.5 * 0.3048, 0], atol=1e-9)


def test_depths_counted_negative_and_below_detection(tmp_path):
    text = "depth;c\n-0,01;<180\n-0,03;~3393\n-0,05;5211\n0,02;7\n-0,07;n.d.\n-0,09;>9999\n"
    spec = column("c", "concentration", "Bq/m3", sd=60.0)
    place = PositionSpec("depth", "m", reversed=True)
    found = read(table_case(tmp_path, text, spec, position=place, of=member("column", 0.3)))
    same(found, [
        (2, 0.01, NAN, "below detection"), (3, 0.03, 3393), (4, 0.05, 5211),
        (5, -0.02, 7, "off the member"), (6, 0.07, NAN, "below detection"),
        (7, 0.09, NAN, "above the range"),
    ])  # fmt: skip
    assert [f.code for f in found.findings] == ["rough-readings"]
    assert "line 3" in found.findings[0].sentence


def test_mixed_line_ends_and_a_cut_footer(tmp_path):
    text = b"x,w,T\r\n0,1.25,3\n2,-0.5,3\r4,1.75,3\r\nEnd of fi"
    found = read(table_case(tmp_path, text))
    same(found, [*PLAIN_ROWS, (4, 4, 1.75 * MM), (5, NAN, NAN, "unfinished last line")])
    assert "mixed line ends (CRLF, LF, CR)" in found.understood[0]


CUT = "x,w\n0,1.25\n2,1.50\n4,1.75\n6,2.25\n"


@pytest.mark.parametrize(
    ("cut", "last"),
    [
        (1, (5, 6, 2.25 * MM)),
        (2, (5, 6, 2.2 * MM, "unfinished")),
        (3, (5, 6, 2 * MM, "unfinished")),
        (5, (5, 6, NAN, "unfinished")),
        (6, (5, NAN, NAN, "unfinished")),
    ],
)
def test_a_file_cut_off(tmp_path, cut, last):
    found = read(table_case(tmp_path, CUT[:-cut]))
    same(found, [(2, 0, 1.25 * MM), (3, 2, 1.5 * MM), (4, 4, 1.75 * MM), last])
    assert [f.code for f in found.findings] == (["no-line-end"] if cut == 1 else [])


def test_units_from_brackets_rows_and_a_later_block(tmp_path):
    text = "x [cm];w\n;mm\n100;1\n200;2\nx [cm];w\n;in\n300;3\n"
    spec = column(unit=None)
    found = read(table_case(tmp_path, text, spec, position=PositionSpec("x [cm]", None)))
    same(found, [(3, 1, MM), (4, 2, 2 * MM), (7, 3, 3 * 0.0254)])
    assert found.unit == ("mm", "mm", "in")
    assert [f.code for f in found.findings] == ["unit-change"]


def test_bare_degrees_in_a_header_of_temperatures(tmp_path):
    spec = column("T (F)", "temperature", None, sd=0.1)
    found = read(table_case(tmp_path, "x;T (F)\n1;212\n2;32\n", spec, of=member("conductor")))
    np.testing.assert_allclose(found.value, [373.15, 273.15], rtol=1e-12)


NAMES = [
    ("T (F)", "temperature", "conductor", 5 / 9), ("T [°C]", "temperature", "conductor", 1),
    ("r [Grad]", "rotation", "beam", math.pi / 180), ("w [in.]", "deflection", "beam", 0.0254),
    ("e [µStrain]", "strain", "beam", 1e-6), ("c [kBq/m³]", "concentration", "column", 1e3),
]  # fmt: skip


@pytest.mark.parametrize(("header", "kind", "of", "scale"), NAMES)
def test_names_of_units_in_headers(tmp_path, header, kind, of, scale):
    text = f"x;{header}\n0.1;100\n0.2;101\n"
    spec = column(header, kind, None, sd=1.0, distance=1.0)
    found = read(table_case(tmp_path, text, spec, of=member(of)))
    np.testing.assert_allclose(found.value[1] - found.value[0], scale, rtol=1e-9)


@pytest.mark.parametrize("header", ["w (3)", "w (A)", "w (min)", "w (left)", "w [raw]", "w (s)"])
def test_brackets_that_hold_no_unit(tmp_path, header):
    same(read(table_case(tmp_path, f"x;{header}\n0;1\n", column(header))), [(2, 0, MM)])


def test_a_block_with_its_columns_in_another_order(tmp_path):
    text = "x;w;n\n0;1;5\n1;2;5\nn;w;x\n5;3;2\n"
    same(read(table_case(tmp_path, text)), [(2, 0, MM), (3, 1, 2 * MM), (5, 2, 3 * MM)])


def test_a_preamble_that_comes_again(tmp_path):
    text = "Logger 7\nrate;10\nx;w\nm;mm\n0;1\nLogger 7\nrate;10\nx;w\nm;mm\n1;2\n"
    found = read(table_case(tmp_path, text))
    same(found, [(5, 0, MM), (10, 1, 2 * MM)])
    assert "header again in line 8" in found.understood[0]


def test_footers_comments_and_rows_that_do_not_fit(tmp_path):
    text = "x,w\n0,1\n# moved\n1,2,3\n\n2,\n3,4,\nmean,2.5\n,,\n"
    same(read(table_case(tmp_path, text)), [
        (2, 0, MM), (3, NAN, NAN, "no reading in this line ('# moved')"),
        (4, NAN, NAN, "3 cells where the header has 2"),
        (6, 2, NAN, "empty"), (7, 3, 4 * MM), (8, NAN, 2.5 * MM, "its position: 'mean'"),
    ])  # fmt: skip


def test_rows_above_the_header_are_told(tmp_path):
    found = read(table_case(tmp_path, "5;6\nx;w\n0;1\n"))
    same(found, [(3, 0, MM)])
    assert [f.code for f in found.findings] == ["rows-above-header"]


def test_quotes(tmp_path):
    text = '"x";"w";"note"\n"0";"1";"a\nb"\n"1";"2";"say ""no"""\n2;3;"open\n3;4;fine\n'
    same(read(table_case(tmp_path, text)), [
        (2, 0, MM), (4, 1, 2 * MM), (5, NAN, NAN, "quotes do not pair up"), (6, 3, 4 * MM),
    ])  # fmt: skip


MARKS = ["---", "NAN", "INF", "n/a", "#N/A", "", "1e999", "-", "01. Mai", "2026-05-01", "abc",
         "1_000", "0x10", "1.2.3", "12,5,1", "5 OK", "--5", "1 2", "٣", "(5)", "5-"]  # fmt: skip


@pytest.mark.parametrize("mark", MARKS)
def test_what_is_no_number_is_excluded_with_its_reason(tmp_path, mark):
    found = read(table_case(tmp_path, f"x;w\n0;1.5\n1;{mark}\n2;2.5\n"))
    same(found, [(2, 0, 1.5 * MM), (3, 1, NAN, found.reason[1] or "a reason"), (4, 2, 2.5 * MM)])


def test_exact_duplicates_only(tmp_path):
    same(read(table_case(tmp_path, "x,w\n0,1\n0,1.0\n0,1\n0,2\n")), [
        (2, 0, MM), (3, 0, MM), (4, 0, MM, "an exact duplicate of line 2"), (5, 0, 2 * MM),
    ])  # fmt: skip


def test_blank_cells_of_another_quantity_are_no_readings(tmp_path):
    text = "x;w;r\n0;1;\n1;;2\n2;;\n"
    specs = (column(), column("r", "rotation", "mrad"))
    found = read(table_case(tmp_path, text, *specs))
    assert [(r[0], r[3]) for r in rows(found)] == [
        (2, ""), (3, ""), (4, "the cell is empty"), (4, "the cell is empty"),
    ]  # fmt: skip


def test_range_sign_exclusions_and_ends(tmp_path):
    text = "x;w\n-1;1\n0;1\n1;12\n2;2\n3;-2\n4;3\n5;4\n30;5\n31;6\n"
    spec = column(sign=-1, range=(-2 * MM, 12 * MM), exclude=((3.5, 4.5),),
                  exclude_lines=frozenset({8}))  # fmt: skip
    same(read(table_case(tmp_path, text, spec)), [
        (2, -1, -MM, "off the member"), (3, 0, -MM), (4, 1, -12 * MM, "upper end"),
        (5, 2, -2 * MM), (6, 3, 2 * MM, "lower end"), (7, 4, -3 * MM, "excluded stretch"),
        (8, 5, -4 * MM, "`exclude_lines`"), (9, 30, -5 * MM), (10, 31, -6 * MM, "off the member"),
    ])  # fmt: skip


def test_absolute_zero_is_no_temperature(tmp_path):
    spec = column("T", "temperature", "degC", sd=0.1)
    found = read(table_case(tmp_path, "x;T\n1;-273.15\n2;20\n", spec, of=member("conductor")))
    same(found, [(2, 1, 0, "absolute zero"), (3, 2, 293.15)])


def test_complex_readings(tmp_path):
    text = "x;w\n0;1+2i\n1;-0.5-1.25j\n2;3∠90°\n3;-i\n4;5\n5;(1.5e1-2E-1j)\n"
    found = read(table_case(tmp_path, text, of=DRIVEN))
    expected = np.array([1 + 2j, -0.5 - 1.25j, 3j, -1j, 5, 15 - 0.2j]) * MM
    np.testing.assert_allclose(found.value, expected, rtol=1e-12, atol=1e-15)


def test_decimal_commas_in_complex_readings(tmp_path):
    found = read(table_case(tmp_path, "x;w\n0;4,048-1,404i\n1;-0,11+0,5i\n", of=DRIVEN))
    np.testing.assert_allclose(found.value, np.array([4.048 - 1.404j, -0.11 + 0.5j]) * MM)


def test_amplitude_phase_and_parts(tmp_path):
    text = "x;a;p\n0;2;190\n1;2;-170\n2;2;\n"
    spec = column("a", phase=PhaseSpec("p", "deg"))
    found = read(table_case(tmp_path, text, spec, of=DRIVEN))
    np.testing.assert_allclose(found.value[0], found.value[1], rtol=1e-12)
    assert found.reason[2] == "its phase: the cell is empty"
    part = column("a", component="imaginary")
    found = read(table_case(tmp_path, "x;a\n0;2\n1;1+2i\n", part, of=DRIVEN))
    assert found.value[0] == 2j * MM
    assert "imaginary" in found.reason[1]


def test_driven_temperatures_are_differences(tmp_path):
    spec = column("T", "temperature", "degC", sd=0.1)
    wall = member("wall", 1.0, frequency=1e-5)
    found = read(table_case(tmp_path, "x;T\n0;2\n1;-1\n", spec, of=wall))
    np.testing.assert_allclose(found.value, [2, -1])


def test_sd_column_is_in_the_unit_of_its_column(tmp_path):
    text = "x;w;s\n0;1;0.1\n1;2;0\n2;3;\n3;4;-1\n4;5;0.2\n"
    found = read(table_case(tmp_path, text, column(sd_column="s")))
    assert found.used.tolist() == [True, False, False, False, True]
    np.testing.assert_allclose(found.sd[[0, 4]], [1e-4, 2e-4], rtol=1e-12)
    spec = column("T", "temperature", "degF", sd_column="s")
    found = read(table_case(tmp_path, "x;T;s\n0;50;0.9\n", spec, of=member("conductor")))
    np.testing.assert_allclose(found.sd, [0.5], rtol=1e-12)
    estimated = read(table_case(tmp_path, "x;w\n0;1\n", column(sd=None, estimate_sd=True)))
    assert np.isnan(estimated.sd).all()


def test_unit_and_place_per_row_and_by_gauge(tmp_path):
    text = "g;w;u\nA;1;mm\nB;1;in\nC;1;mm\nA;1;kN\nB;1;\n"
    (tmp_path / "p.csv").write_text("g;x [ft]\nA;10\nB;20\n")
    place = PositionSpec("x [ft]", None, file=tmp_path / "p.csv", gauge="g")
    found = read(table_case(tmp_path, text, column(unit=None, unit_column="u"), position=place))
    same(found, [
        (2, 3.048, MM), (3, 6.096, 0.0254), (4, NAN, MM, "no position of gauge 'C' in p.csv"),
        (5, 3.048, NAN, "'kN' is no unit that fits m"), (6, 6.096, NAN, "no unit"),
    ])  # fmt: skip
    assert set(found.inputs) == {"t.csv", "p.csv"}


def test_one_column_a_gauge_and_its_snapshots(tmp_path):
    (tmp_path / "p.csv").write_text("g,x\nG1,1\nG2,2\n")
    place = PositionSpec("x", "m", file=tmp_path / "p.csv", gauge="g")
    text = "t,G1,G2\n1,1.5,\n2,2.5,3.5\n3,,\n"
    found = read(table_case(tmp_path, text, column(["G1", "G2"]), position=place))
    same(found, [
        (2, 1, 1.5 * MM), (2, 2, NAN, "empty"), (3, 1, 2.5 * MM), (3, 2, 3.5 * MM),
        (4, NAN, NAN, "no reading in this line ('3')"),
    ])  # fmt: skip


def test_where_on_table_and_column(tmp_path):
    text = "x;w;run;q\n0;1;1;a\n1;2;2;a\n2;3;1;b\n3;4;1; a \n"
    found = read(table_case(tmp_path, text, column(where={"q": "a"}), where={"run": "1"}))
    same(found, [(2, 0, MM), (5, 3, 4 * MM)])


TIMES = [
    ("iso", ["2026-11-03T14:00:00+01:00", "2026-11-03 13:20:00Z"], None, 1200),
    ("points", ["03.04.2026 14:05", "03.04.26 14:05:30,5"], None, 30.5),
    ("day proven", ["03/04/2026 2:05 PM", "13/04/2026 2:05 PM"], None, 864000),
    ("month proven", ["03/04/2026 02:05 AM", "03/13/2026 02:05 AM"], None, 777600),
    ("stated", ["03/04/2026", "04/04/2026"], "%d/%m/%Y", 86400),
    ("stated the other way", ["03/04/2026", "04/04/2026"], "%m/%d/%Y", 31 * 86400),
    ("year first", ["2026/11/03 00:00", "2026/11/03 00:10"], None, 600),
    ("spreadsheet days beside dates", ["25.10.2026 02:30", "46320,5625"], None, 39600),
    ("spreadsheet days", ["46320.5", "46320.75"], "serial", 21600),
    ("hours", ["1.5", "2"], "h", 1800),
    ("bare seconds", ["0", "12.5"], None, 12.5),
    ("clock", ["14:05", "14:05:20"], None, 20),
    ("month names", ["3 Nov 2026 10:00", "3 Nov 2026 10:01"], None, 60),
]


@pytest.mark.parametrize(
    ("cells", "form", "span"), [t[1:] for t in TIMES], ids=[t[0] for t in TIMES]
)
def test_times(tmp_path, cells, form, span):
    text = f"t;x;w\n{cells[0]};0;1\n{cells[1]};1;2\n"
    found = read(table_case(tmp_path, text, time=TimeSpec("t", form)))
    np.testing.assert_allclose(found.time, [0, span], atol=1e-6)


def test_a_clock_that_runs_backwards_is_told(tmp_path):
    text = "t;x;w\n25.10.2026 02:50;0;1\n25.10.2026 02:10;1;2\n25.10.2026 02:20;2;2\nlater;3;3\n"
    spec = replace(column(), drift=1e-6)
    found = read(table_case(tmp_path, text, spec, time=TimeSpec("t")))
    assert [f.code for f in found.findings] == ["time-backwards"]
    assert found.reason[3] == "its time cannot be read"
    np.testing.assert_allclose(found.time[:3], [2400, 0, 600])


def test_times_of_snapshots_stand_in_their_headers(tmp_path):
    names = ["2026-11-03T14:00:00+01:00", "2026-11-03 13:20:00Z"]
    text = f"x,{names[0]},{names[1]}\n0,1,2\n"
    found = read(table_case(tmp_path, text, column(names)))
    assert found.time.tolist() == [0, 1200]


def test_stuck_channels_marks_and_flags_are_told(tmp_path):
    values = [1.1, 2.3, 3.7, 4, 4, 4, 4, 4, 5.1, 6.2, 7.3, -9999]
    text = "x;w;status\n" + "".join(
        f"{i};{v};{'suspect' if i == 9 else 'OK'}\n" for i, v in enumerate(values)
    )
    found = read(table_case(tmp_path, text))
    told = {f.code: f.sentence for f in found.findings}
    assert set(told) == {"stuck-readings", "missing-mark", "flagged-readings"}
    assert "lines 5 to 9" in told["stuck-readings"]
    assert "-9999 in line 13" in told["missing-mark"]
    assert "'suspect' in line 11" in told["flagged-readings"]
    assert found.used.all()


@pytest.mark.parametrize(
    ("values", "told"),
    [
        ([4, 4, 4, 7.5, 4, 4, 4], "one value in 6 of 7 readings, all but line 5;"),
        ([4, 4, 4, 7.5, 4, 4, 3], None),  # five of seven
        ([4, 4, 4, 4, 4, 4, 4], None),  # a member without any source
        ([1, 2, 3, 4, 5, 6, 7], None),
    ],
)
def test_nearly_all_of_one_value_is_told(tmp_path, values, told):
    text = "x;w\n" + "".join(f"{i};{v}\n" for i, v in enumerate(values))
    found = [f for f in read(table_case(tmp_path, text)).findings if f.code == "stuck-readings"]
    assert [told in f.sentence for f in found] == ([True] if told else [])


def test_several_tables_and_one_file_twice(tmp_path):
    one = table_case(tmp_path, "x;w;r\n0;1;2\n")
    two = case(tmp_path, "t.csv", column("r", "rotation", "mrad"))
    found = read(replace(one, tables=(*one.tables, *two.tables)))
    assert found.spec.tolist() == [0, 1]
    assert found.kind == ("deflection", "rotation")
    assert set(found.inputs) == {"t.csv"}
