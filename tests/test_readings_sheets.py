"""Spreadsheets and Parquet files give what the same table as text gives."""

import builtins
import importlib.util
from datetime import datetime

import numpy as np
import pandas as pd
import pytest
from readings_cases import case, column

from srcfit.case.model import TimeSpec
from srcfit.errors import ReadingsError
from srcfit.readings import read

ROWS = [
    ["Logger 7", None, None, None],
    [None, None, None, None],
    ["t", "x", "w", "run"],
    [None, "m", "mm", None],
    [datetime(2026, 11, 3, 14, 0), 0, 1.234, 1],
    [datetime(2026, 11, 3, 14, 10), 2.5, "1,5", 1],
    [datetime(2026, 11, 3, 14, 20), 5, "---", 1],
    [datetime(2026, 11, 3, 14, 30), 7.5, None, 1],
    [datetime(2026, 11, 3, 14, 40), 10, 4, 2],
    [None, None, None, None],
    [datetime(2026, 11, 3, 14, 50), 12.5, "NAN", 1],
    [datetime(2026, 11, 3, 14, 0), 0, 1.234, 1],
]


def workbook(path, rows, first=(("notes", [["see the next sheet"]]),)):
    from openpyxl import Workbook

    book = Workbook()
    book.remove(book.active)
    for name, cells in [*first, ("data", rows)]:
        sheet = book.create_sheet(name)
        for row in cells:
            sheet.append(row)
    book.save(path)


def test_a_spreadsheet(tmp_path):
    workbook(tmp_path / "t.xlsx", ROWS)
    spec = column(unit=None, where={"run": "1"})
    found = read(case(tmp_path, "t.xlsx", spec, time=TimeSpec("t")))
    assert found.line.tolist() == [5, 6, 7, 8, 11, 12]
    np.testing.assert_allclose(found.x, [0, 2.5, 5, 7.5, 12.5, 0])
    np.testing.assert_allclose(found.value[:2], [1.234e-3, 1.5e-3], rtol=1e-12)
    np.testing.assert_allclose(found.time, [0, 600, 1200, 1800, 3000, 0])
    assert [bool(r) for r in found.reason] == [False, False, True, True, True, True]
    assert found.reason[5] == "an exact duplicate of line 5"
    assert (
        "spreadsheet, sheet 'data'; 1 line before the header; names in line 3"
        in (found.understood[0])
    )


def test_a_spreadsheet_without_the_columns(tmp_path):
    workbook(tmp_path / "t.xlsx", [["x", "weg"], [1, 2]])
    with pytest.raises(ReadingsError, match=r"line 1: .*'w' is missing"):
        read(case(tmp_path, "t.xlsx"))
    workbook(tmp_path / "t.xlsx", [[None]], ())
    with pytest.raises(ReadingsError, match=r"t\.xlsx: the spreadsheet is empty"):
        read(case(tmp_path, "t.xlsx"))


def test_a_missing_package_is_named(tmp_path, monkeypatch):
    workbook(tmp_path / "t.xlsx", ROWS)
    (tmp_path / "t.parquet").write_bytes(b"PAR1 and more")
    load = builtins.__import__

    def without(name, *rest, **more):
        if name.split(".")[0] in ("openpyxl", "pyarrow", "fastparquet"):
            raise ImportError(name)
        return load(name, *rest, **more)

    monkeypatch.setattr(builtins, "__import__", without)
    monkeypatch.setattr(importlib, "import_module", lambda n, *a: without(n))
    with pytest.raises(ReadingsError, match=r"install srcfit\[excel\] or save the sheet as CSV"):
        read(case(tmp_path, "t.xlsx"))
    with pytest.raises(ReadingsError, match=r"install srcfit\[batch\] or save the table as CSV"):
        read(case(tmp_path, "t.parquet"))


def test_a_parquet_table(tmp_path, monkeypatch):
    """The frame is handed over by pandas, so that the test needs no reader of Parquet."""
    frame = pd.DataFrame({"x": [0.0, 2.5, 5.0], "w": [1.5, np.nan, 2.5], "run": ["a", "a", "b"]})
    (tmp_path / "t.parquet").write_bytes(b"PAR1 stands in")
    monkeypatch.setattr(pd, "read_parquet", lambda data: frame)
    found = read(case(tmp_path, "t.parquet", column(where={"run": "a"})))
    assert found.line.tolist() == [2, 3]
    assert found.reason == ("", "the cell is empty")
    np.testing.assert_allclose(found.value, [1.5e-3, np.nan])


def test_a_parquet_file(tmp_path):
    """Written and read by pyarrow where it is installed; else the message that names it."""
    there = importlib.util.find_spec("pyarrow") is not None
    path = tmp_path / "t.parquet"
    if not there:
        path.write_bytes(b"PAR1")
        with pytest.raises(ReadingsError, match=r"install srcfit\[batch\]"):
            read(case(tmp_path, path.name))
        return
    pd.DataFrame({"x": [0.0, 2.5], "w": [1.5, -2.25]}).to_parquet(path)
    found = read(case(tmp_path, path.name))
    np.testing.assert_allclose(found.value, [1.5e-3, -2.25e-3], rtol=1e-12)
