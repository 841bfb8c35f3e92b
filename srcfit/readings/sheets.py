"""Files -> records: text tables, spreadsheets and Parquet files, told apart by their bytes."""

from __future__ import annotations

import hashlib
import io
from dataclasses import dataclass
from datetime import date, datetime, time
from pathlib import Path
from typing import Any

from srcfit.errors import ReadingsError
from srcfit.readings.table import Table, Wanted, build, matches, sniff
from srcfit.readings.text import (
    DELIMITERS,
    Cell,
    Lines,
    Records,
    declared_delimiter,
    lines_of,
    text_records,
)

_PACKED = {b"\x1f\x8b": "gzip", b"BZh": "bzip2", b"\xfd7zXZ": "xz", b"7z\xbc\xaf": "7z",
           b"%PDF": "PDF", b"\x89PNG": "PNG", b"Rar!": "RAR"}  # fmt: skip


@dataclass(frozen=True)
class File:
    """Bytes of an input and their sha256; `name` as given in the case."""

    name: str
    data: bytes
    sha256: str


def load(path: Path, name: str, key: str) -> File:
    """Read a file whole.

    Raises
    ------
    ReadingsError
        It is missing or cannot be read.
    """
    try:
        data = path.read_bytes()
    except FileNotFoundError:
        near = _near(path)
        hint = f" (nearest: {near!r})" if near else ""
        raise ReadingsError(f"there is no such file{hint}", name, f"correct {key}") from None
    except (OSError, ValueError) as error:
        text = getattr(error, "strerror", None) or str(error)
        raise ReadingsError(f"the file cannot be read: {text}", name, f"correct {key}") from None
    return File(name, data, hashlib.sha256(data).hexdigest())


def _near(path: Path) -> str:
    import difflib

    folder = path.parent
    there = [p.name for p in folder.iterdir()] if folder.is_dir() else []
    found = difflib.get_close_matches(path.name, there, 1)
    return found[0] if found else ""


def open_table(file: File, wanted: Wanted) -> Table:
    """The table of a file that has the wanted columns.

    Raises
    ------
    ReadingsError
        Not a table, or no header line with all named columns.
    """
    whole = _whole(file, wanted)
    if whole is not None:
        return build(whole, wanted, file.name)
    return text_table(lines_of(file.data, file.name), wanted, file.name)[0]


def manners(file: File, most: int = 400) -> list[Records]:
    """The first `most` lines of a file, parted in every way that its kind allows."""
    whole = _whole(file, Wanted({}))
    if whole is not None:
        return [whole]
    lines = lines_of(file.data, file.name)
    head = Lines(lines.text[:most], lines.encoding, lines.ends, finished=True)
    stated = declared_delimiter(head.text)
    return [text_records(head, d) for d in ([stated] if stated else DELIMITERS)]


def _whole(file: File, wanted: Wanted) -> Records | None:
    """Records of a spreadsheet or a Parquet file; None for a text file."""
    data = file.data
    if data.startswith(b"PK\x03\x04") or data.startswith(b"\xd0\xcf\x11\xe0"):
        return _spreadsheet(file, wanted)
    if data.startswith(b"PAR1"):
        return _parquet(file)
    packed = next((word for head, word in _PACKED.items() if data.startswith(head)), "")
    if packed:
        raise ReadingsError(
            f"the file is {packed}, not a table", file.name, "unpack it or export it as text (CSV)"
        )
    return None


def text_table(lines: Lines, wanted: Wanted, name: str) -> tuple[Table, str]:
    """The table in the lines of a text file, and its delimiter."""
    delimiter = sniff(lines, wanted, declared_delimiter(lines.text), name)
    return build(text_records(lines, delimiter), wanted, name), delimiter


def _spreadsheet(file: File, wanted: Wanted) -> Records:
    """The first sheet that has all named columns; line numbers are row numbers."""
    import pandas as pd

    try:
        sheets = pd.read_excel(
            io.BytesIO(file.data), sheet_name=None, header=None, dtype=object, na_filter=False
        )
    except ImportError:
        raise ReadingsError(
            "reading spreadsheets needs a further package", file.name,
            "install srcfit[excel] or save the sheet as CSV",
        ) from None  # fmt: skip
    except Exception as error:  # readers of damaged workbooks raise nearly anything
        raise ReadingsError(
            f"the spreadsheet cannot be opened ({type(error).__name__})",
            file.name,
            "save the sheet as CSV",
        ) from None
    best: tuple[int, str, list[list[Cell]]] = (-1, "", [])
    for sheet, frame in sheets.items():
        rows = [[_cell(v) for v in row] for row in frame.itertuples(index=False, name=None)]
        found = max((matches(row, wanted) for row in rows), default=0)
        if found > best[0]:
            best = (found, str(sheet), rows)
    kept = [(i + 1, row) for i, row in enumerate(best[2]) if any(c == c and c != "" for c in row)]
    if not kept:
        raise ReadingsError(
            "the spreadsheet is empty", file.name, "give one with a header and rows"
        )
    return Records(
        [n for n, _ in kept], [r for _, r in kept], manner=f"spreadsheet, sheet {best[1]!r}"
    )


def _cell(value: Any) -> Cell:
    """A cell of a spreadsheet or frame as text or number."""
    if value is None or value != value:
        return ""
    if isinstance(value, bool | str):
        return str(value)
    if isinstance(value, datetime | date | time):
        return str(value)
    try:
        return float(value)
    except (TypeError, ValueError, OverflowError):
        return str(value)


def _parquet(file: File) -> Records:
    """A Parquet file; its column names count as line 1, its first row as line 2."""
    import pandas as pd

    try:
        frame = pd.read_parquet(io.BytesIO(file.data))
    except ImportError:
        raise ReadingsError(
            "reading Parquet files needs a further package", file.name,
            "install srcfit[batch] or save the table as CSV",
        ) from None  # fmt: skip
    except Exception as error:
        raise ReadingsError(
            f"the Parquet file cannot be opened ({type(error).__name__})",
            file.name,
            "save the table as CSV",
        ) from None
    if frame.index.name:
        frame = frame.reset_index()
    columns = [[_cell(v) for v in frame.iloc[:, k]] for k in range(frame.shape[1])]
    rows: list[list[Cell]] = [list(row) for row in zip(*columns, strict=True)]
    head: list[Cell] = [str(c) for c in frame.columns]
    return Records(list(range(1, len(rows) + 2)), [head, *rows], manner="Parquet")
