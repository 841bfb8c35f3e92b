"""Any table in any dialect is read back exactly; damaged files are never read wrongly in silence.

The oracle is separate from the reader: the writer keeps the numbers it wrote, and what a damaged
line holds is taken apart here with `csv` and `decimal`.
"""

import csv
import math
import tempfile
from dataclasses import dataclass, replace
from decimal import Decimal
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from readings_cases import column, table_case

from srcfit.case import load_case
from srcfit.case.model import PositionSpec
from srcfit.errors import ReadingsError, SrcfitError
from srcfit.readings import read

EXPORTS = Path(__file__).parent / "exports"
QUIET = [HealthCheck.too_slow, HealthCheck.data_too_large]
SHORT = settings(max_examples=150, deadline=None, suppress_health_check=QUIET)
LONG = settings(max_examples=2500, deadline=None, suppress_health_check=QUIET)


@dataclass(frozen=True)
class Dialect:
    encoding: str
    delimiter: str
    decimal: str
    thousands: str
    end: str
    quoted: bool
    declared: bool
    preamble: int
    units: str
    last_end: bool
    again: int

    def number(self, value: Decimal) -> str:
        whole, _, part = f"{value:f}".partition(".")
        sign, digits = ("-", whole[1:]) if whole[0] == "-" else ("", whole)
        if self.thousands:
            digits = f"{int(digits):,}".replace(",", self.thousands)
        return sign + digits + (self.decimal + part if part else "")

    def row(self, cells: list[str]) -> str:
        needs = self.quoted or any(self.delimiter in c for c in cells)
        if needs:
            cells = ['"' + c.replace('"', '""') + '"' for c in cells]
        return self.delimiter.join(cells)


@st.composite
def dialects(draw):
    decimal = draw(st.sampled_from(".,"))
    delimiter = draw(st.sampled_from(";\t,|"))
    others = {".": ["", ",", "'", " ", "\u00a0"], ",": ["", "'", " ", "\u202f"]}
    if delimiter != ",":  # between commas a lone point is taken for the decimal mark
        others[","].append(".")
    return Dialect(
        encoding=draw(st.sampled_from(["utf-8", "utf-8-sig", "utf-16", "utf-16-le"])),
        delimiter=delimiter,
        decimal=decimal,
        thousands=draw(st.sampled_from(others[decimal])),
        end=draw(st.sampled_from(["\n", "\r\n", "\r"])),
        quoted=draw(st.booleans()),
        declared=draw(st.booleans()),
        preamble=draw(st.integers(0, 3)),
        units=draw(st.sampled_from(["row", "brackets", "case"])),
        last_end=draw(st.booleans()),
        again=draw(st.integers(0, 4)),
    )


def numbers(places, low, high):
    return st.integers(low * 10**places, high * 10**places).map(
        lambda n: Decimal(n).scaleb(-places)
    )


@st.composite
def tables(draw):
    """(x, w) pairs with their own numbers of decimal places."""
    x_places, w_places = draw(st.integers(0, 4)), draw(st.integers(0, 4))
    return draw(
        st.lists(
            st.tuples(numbers(x_places, 0, 30), numbers(w_places, -9_999_999, 9_999_999)),
            min_size=1, max_size=12,
        )
    )  # fmt: skip


def written(dialect, table):
    """Text of a table, and the physical line of each row."""
    names = ["n", "x", "w", "note"]
    units = ["", "m", "mm", ""]
    if dialect.units == "brackets":
        names = [f"{n} [{u}]" if u else n for n, u in zip(names, units, strict=True)]
    head = [dialect.row(names)] + [dialect.row(units)] * (dialect.units == "row")
    lines = [f"sep={dialect.delimiter}"] * dialect.declared
    lines += ["Logger 7, hall: north", "", "x"][: dialect.preamble] + head
    at = []
    for i, (x, w) in enumerate(table):
        if dialect.again and i == dialect.again:
            lines += head
        lines.append(dialect.row([f"K{i}", dialect.number(x), dialect.number(w), "fine"]))
        at.append(len(lines))
    return dialect.end.join(lines) + dialect.end * dialect.last_end, at


def columns_of(dialect):
    stated = dialect.units == "case"
    names = ("x [m]", "w [mm]") if dialect.units == "brackets" else ("x", "w")
    spec = column(names[1], unit="mm" if stated else None)
    return spec, PositionSpec(names[0], "m" if stated else None)


def read_text(data, spec, position):
    with tempfile.TemporaryDirectory() as folder:
        return read(table_case(Path(folder), data, spec, position=position))


def attempt(function, *args):
    """Readings, or the error that was raised on purpose in their place."""
    try:
        return function(*args), None
    except SrcfitError as error:
        return None, error


def check_round_trip(dialect, table):
    text, at = written(dialect, table)
    spec, position = columns_of(dialect)
    found, error = attempt(read_text, text.encode(dialect.encoding), spec, position)
    if error is not None:
        # three digits after the only separator, and nothing in the file that settles it
        assert "`decimal`" in error.how
        assert any(
            len(str(v).partition(".")[2]) == 3 or dialect.thousands for r in table for v in r
        )
        return
    assert found.line.tolist() == at
    assert found.used.all()
    for k, (x, w) in enumerate(table):
        assert found.x[k] == float(x)
        assert math.isclose(found.value[k], 1e-3 * float(w), rel_tol=1e-12)


@SHORT
@given(dialects(), tables())
def test_a_table_in_any_dialect_is_read_back(dialect, table):
    check_round_trip(dialect, table)


@pytest.mark.long
@LONG
@given(dialects(), tables())
def test_a_table_in_any_dialect_is_read_back_long(dialect, table):
    check_round_trip(dialect, table)


def lines_of(data):
    """Physical lines of plain text, the first is 1."""
    return data.replace("\r\n", "\n").replace("\r", "\n").split("\n")


CLEAN = "Logger;7\r\nn;x;w;note\r\n;m;mm;\r\n" + "".join(
    f"K{i};{i * 1.25:.2f};{(-1) ** i * (1.5 + i * 0.37):.2f};ok{i}\r\n" for i in range(14)
)


@st.composite
def damages(draw):
    """The clean table cut, with bytes changed, and with lines doubled, dropped and moved."""
    lines = CLEAN.splitlines(keepends=True)
    for kind in draw(st.lists(st.sampled_from(["double", "drop", "swap"]), max_size=4)):
        i, j = draw(st.integers(0, len(lines) - 1)), draw(st.integers(0, len(lines) - 1))
        if kind == "double":
            lines.insert(j, lines[i])
        elif kind == "swap":
            lines[i], lines[j] = lines[j], lines[i]
        else:
            lines.pop(i)
    data = bytearray("".join(lines).encode())
    for _ in range(draw(st.integers(0, 6))):
        at = draw(st.integers(0, len(data) - 1))
        data[at] = draw(st.one_of(st.sampled_from(b';".,-+\r\n \t0~<e'), st.integers(0, 255)))
    return bytes(data[: draw(st.integers(0, len(data)))] if draw(st.booleans()) else data)


def plain(text):
    """A number as anybody reads it; None for anything else."""
    text = text.strip().strip("'~ ").rstrip('"')
    text = text.removesuffix("mm").removesuffix("m").strip()
    try:
        return float(Decimal(text)) if text.isascii() and "_" not in text else None
    except ArithmeticError:
        return None


def check_damaged(data):
    found, error = attempt(read_text, data, column("w"), PositionSpec("x", "m"))
    if error is not None:
        assert str(error).endswith(".")
        return
    assert len(found) == found.used.sum() + sum(map(bool, found.reason))
    if "\0" in data.decode("latin-1") or not data.isascii():
        return  # another encoding: only that nothing broke
    lines = lines_of(data.decode())
    header = next(i for i, t in enumerate(lines) if {"x", "w"} <= {c.strip() for c in parted(t)})
    for k in range(len(found)):
        if not found.used[k]:
            continue
        line = lines[found.line[k] - 1]
        names = [c.strip() for c in parted(lines[header])]
        cells = parted(line)
        x, w = plain(cells[names.index("x")]), plain(cells[names.index("w")])
        if x is not None and w is not None and len(names) == 4:
            assert math.isclose(found.x[k], x, rel_tol=1e-9, abs_tol=1e-12), (line, found.x[k])
            assert math.isclose(found.value[k], w / 1000, rel_tol=1e-9, abs_tol=1e-15), line
        if found.line[k] == len(lines) and line:  # no line end: whole, or told
            assert "no-line-end" in {f.code for f in found.findings} or len(cells) > 3


def parted(line):
    try:
        return next(csv.reader([line], delimiter=";", strict=True), [])
    except csv.Error:
        return line.split(";")


@SHORT
@given(damages())
def test_damaged_tables_are_never_read_wrongly_in_silence(data):
    check_damaged(data)


@pytest.mark.long
@LONG
@given(damages())
def test_damaged_tables_are_never_read_wrongly_in_silence_long(data):
    check_damaged(data)


def check_cut(stop):
    """A file cut anywhere gives only readings of the whole file, or tells which may be cut."""
    spec, place = column("w", unit=None), PositionSpec("x", None)
    whole = read_text(CLEAN.encode(), spec, place)
    known = {(int(n), x, v) for n, x, v in zip(whole.line, whole.x, whole.value, strict=True)}
    found, error = attempt(read_text, CLEAN.encode()[:stop], spec, place)
    if error is not None:
        assert isinstance(error, ReadingsError)
        return
    told = any(f.code == "no-line-end" for f in found.findings)
    for n, x, v, used in zip(found.line, found.x, found.value, found.used, strict=True):
        assert not used or told or (int(n), x, v) in known


def test_a_file_cut_anywhere():
    for stop in range(0, len(CLEAN), 3):
        check_cut(stop)


@st.composite
def damaged_exports(draw):
    """One of the exports with some bytes changed, and perhaps cut."""
    name = draw(st.sampled_from(sorted(p.stem for p in EXPORTS.glob("*.toml"))))
    case = load_case(EXPORTS / f"{name}.toml")
    data = bytearray(case.tables[0].file.read_bytes())
    for _ in range(draw(st.integers(0, 20))):
        at = draw(st.integers(0, len(data) - 1))
        data[at] = draw(st.one_of(st.sampled_from(b';,".-+\r\n \t'), st.integers(0, 255)))
    return case, bytes(data[: draw(st.integers(0, len(data)))] if draw(st.booleans()) else data)


def check_export(case, data):
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / case.tables[0].file.name
        path.write_bytes(data)
        case = replace(case, tables=(replace(case.tables[0], file=path),))
        found, error = attempt(read, case)
    if error is not None:
        assert path.name in str(error)
        return
    assert found.used.sum() + sum(map(bool, found.reason)) == len(found)
    used = found.used
    assert all(map(math.isfinite, found.x[used]))
    assert all(math.isfinite(abs(v)) for v in found.value[used])
    member = case.member
    assert found.x[used].min() >= member.start
    assert found.x[used].max() <= member.end


@settings(parent=SHORT, max_examples=60)
@given(damaged_exports())
def test_damaged_exports_give_readings_or_one_sentence(export):
    check_export(*export)


@pytest.mark.long
@settings(parent=LONG, max_examples=1500)
@given(damaged_exports())
def test_damaged_exports_give_readings_or_one_sentence_long(export):
    check_export(*export)
