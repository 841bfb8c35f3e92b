"""The quick way for large plain tables gives exactly what the careful way gives."""

from dataclasses import fields

import numpy as np
import pytest
from readings_cases import column, member, table_case

from srcfit.case.model import PositionSpec
from srcfit.readings import fast, read

ROWS = 1500


def text(count=ROWS, seed=1, delimiter=",", mark=".", end="\n", head="n,x [m],w,s\n", last=""):
    """A large table; every seventh row repeats the one before except for its number."""
    rng = np.random.default_rng(seed)
    x, w, s = rng.uniform(0, 30, count), rng.normal(0, 3, count), rng.uniform(0.1, 0.2, count)
    x[::7], w[::7], s[::7] = x[0], w[0], s[0]
    lines = [head.replace(",", delimiter)]
    for i in range(count):
        cells = [str(i), f"{x[i]:.4f}", repr(float(w[i])), f"{s[i]:.5e}"]
        lines.append(delimiter.join(c.replace(".", mark) for c in cells) + "\n")
    return ("".join(lines) + last).replace("\n", end)


def both(folder, monkeypatch, data, *columns, **more):
    """Readings by both ways, and whether the quick one was taken."""
    taken = []
    quick = fast.fast_batches

    def watched(*args):
        taken.append(quick(*args))
        return taken[-1]

    monkeypatch.setattr("srcfit.readings.reader.fast_batches", watched)
    more.setdefault("position", PositionSpec("x [m]", "m"))
    one = table_case(folder, data, *columns, **more)
    monkeypatch.setattr(fast, "SMALLEST", 1)
    first = read(one)
    monkeypatch.setattr(fast, "SMALLEST", 10**12)
    return first, read(one), taken[0] is not None


def equal(a, b):
    """Every field the same, bit by bit; missing numbers at the same places."""
    for f in fields(a):
        left, right = getattr(a, f.name), getattr(b, f.name)
        if isinstance(left, np.ndarray):
            assert left.dtype == right.dtype, f.name
            np.testing.assert_array_equal(left, right, err_msg=f.name)
        else:
            assert left == right, f.name


SPECS = {
    "plain": (column(),),
    "signed, ranged": (column(sign=-1, range=(-4e-3, 4e-3), exclude=((3.0, 4.0),),
                              exclude_lines=frozenset({5, 900})),),
    "sd column": (column(sd_column="s"),),
    "two": (column(), column("s", "rotation", "mrad")),
    "repeats": (column(["w", "s"]),),
}  # fmt: skip


@pytest.mark.parametrize("spec", SPECS)
@pytest.mark.parametrize(
    "dialect",
    [
        {},
        {"end": "\r\n"},
        {"delimiter": ";", "mark": ","},
        {"delimiter": "\t"},
        {"head": "Logger °C\nrate;10\n\nn,x [m],w,s\n,m,,\n"},
    ],
)
def test_both_ways_agree(tmp_path, monkeypatch, dialect, spec):
    quick, careful, taken = both(tmp_path, monkeypatch, text(**dialect), *SPECS[spec])
    assert taken
    equal(quick, careful)


def test_duplicates_in_both_ways(tmp_path, monkeypatch):
    data = text(head="n,x [m],w,s\n")
    lines = data.splitlines(keepends=True)
    data = "".join([*lines, *lines[5:8], lines[5]])
    quick, careful, taken = both(tmp_path, monkeypatch, data)
    assert taken
    equal(quick, careful)
    assert [r for r in quick.reason if r] == [
        f"an exact duplicate of line {n}" for n in (6, 7, 8, 6)
    ]


TWISTS = {
    "a blank line": "\n1500,1.0,2.0,0.1\n",
    "a mark": "1500,1.0,---,0.1\n",
    "an empty cell": "1500,1.0,,0.1\n",
    "infinity": "1500,1.0,inf,0.1\n",
    "not a number": "1500,1.0,nan,0.1\n",
    "too large": "1500,1.0,1e999,0.1\n",
    "a row too long": "1500,1.0,2.0,0.1,7\n",
    "a row too short": "1500,1.0,2.0\n",
    "long and short": "1500,1.0,2.0,0.1,7\n1501,1.0,2.0\n",
    "thousands": '1500,1.0,"1,234.5",0.1\n',
    "a header again": "n,x [m],w,s\n1500,1.0,2.0,0.1\n",
    "no line end": "1500,1.0,2.0,0.1",
    "cut": "1500,1.0,2.",
    "a lone CR": "1500,1.0,2.0,0.1\r1501,1.0,2.0,0.1\n",
    "a rough number": "1500,1.0,~2.0,0.1\n",
    "a footer": "end of file\n",
    "an underscore": "1500,1.0,1_0,0.1\n",
    "hexadecimal": "1500,1.0,0x10,0.1\n",
    "a long exponent": "1500,1.0,1E0005,0.1\n",
    "blanks around": "1500, 1.0 ,\t2.0, 0.1\n",
    "text elsewhere": "n/a,1.0,2.0,0.1\n",
    "another script": "1500,1.0,٣,0.1\n",
    "end of text mark": "1500,1.0,2.0,0.1\n\x1a",
}


@pytest.mark.parametrize("twist", TWISTS)
def test_what_is_not_plain_is_read_the_careful_way(tmp_path, monkeypatch, twist):
    quick, careful, _ = both(tmp_path, monkeypatch, text(last=TWISTS[twist]))
    equal(quick, careful)
    assert len(quick) >= ROWS


def test_no_line_end_and_quoted_names_are_plain_enough(tmp_path, monkeypatch):
    data = text(head='"n","x [m]","w","s"\n')[:-1]
    quick, careful, taken = both(tmp_path, monkeypatch, data)
    assert taken
    equal(quick, careful)
    quick, careful, taken = both(tmp_path, monkeypatch, data, column("s", "rotation", "mrad"))
    assert taken
    equal(quick, careful)
    assert [f.code for f in quick.findings] == ["no-line-end"]
    rows = "n,x [m],w\n" + "".join(f"{i},{i % 29}.5,{i % 7}.25\n" for i in range(ROWS))
    quick, careful, taken = both(tmp_path, monkeypatch, rows[:-2])
    assert not taken
    equal(quick, careful)
    assert quick.reason[-1] == "unfinished last line"


def test_whole_numbers_and_temperatures(tmp_path, monkeypatch):
    rows = "".join(f"{i % 30},{i % 101 - 900 * (i == 9)},{i}\n" for i in range(ROWS))
    spec = column("T", "temperature", "degF", sd=0.1)
    quick, careful, taken = both(
        tmp_path, monkeypatch, "x [m],T,n\n" + rows, spec, of=member("conductor")
    )
    assert taken
    assert quick.reason[9] == "at or below absolute zero"
    equal(quick, careful)


def test_flags_and_ambiguous_marks_need_the_careful_way(tmp_path, monkeypatch):
    rows = "".join(f"{i % 30}.125,{i % 7}.250,OK\n" for i in range(ROWS))
    quick, careful, taken = both(tmp_path, monkeypatch, "x [m],w,status\n" + rows)
    assert not taken
    equal(quick, careful)
