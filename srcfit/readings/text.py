"""Bytes of a file -> records: encoding, physical lines, delimiter, quotes.

Physical lines are counted: CRLF, LF and a lone CR each end one, the first is 1. A quoted record
that runs over several lines has the line it starts on.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

from srcfit.errors import ReadingsError

Cell = str | float
"""A cell as text; spreadsheets and Parquet files also have numbers (nan: an empty cell)."""

DELIMITERS: dict[str, str] = {
    ";": "semicolons",
    "\t": "tabs",
    ",": "commas",
    "|": "bars",
    "  ": "wide gaps",
    " ": "spaces",
}
_BOMS = (
    (b"\xff\xfe\x00\x00", "utf-32"),
    (b"\x00\x00\xfe\xff", "utf-32"),
    (b"\xef\xbb\xbf", "utf-8-sig"),
    (b"\xff\xfe", "utf-16"),
    (b"\xfe\xff", "utf-16"),
)
_ENDS = re.compile(r"\r\n|\n|\r")
_SEP = re.compile(r'"?sep=(.)"?\s*', re.IGNORECASE)
_QUOTED_LINES = 50


@dataclass(frozen=True)
class Lines:
    """Physical lines of a text file.

    Attributes
    ----------
    text : list of str, without their ends
    encoding, ends : as found, in words
    finished : whether the last line has its line end
    """

    text: list[str]
    encoding: str
    ends: str
    finished: bool


@dataclass(frozen=True)
class Records:
    """Records (rows of cells) of a file, blank ones left out.

    Attributes
    ----------
    line : list of int, the physical line on which each record starts
    cells : list of lists of cells
    broken : mapping record index -> why its cells cannot be told apart
    finished : whether the last record ends in a line end
    manner : encoding, line ends and delimiter in words
    delimiter : the delimiter, empty for spreadsheets and Parquet files
    """

    line: list[int]
    cells: list[list[Cell]]
    broken: dict[int, str] = field(default_factory=dict)
    finished: bool = True
    manner: str = ""
    delimiter: str = ""


def clean(cell: Cell) -> str:
    """Text of a cell for comparing: outer blanks off, inner ones single, numbers written short."""
    if isinstance(cell, float):
        if cell != cell:
            return ""
        return str(int(cell)) if cell.is_integer() and abs(cell) < 1e15 else repr(cell)
    return " ".join(cell.split())


def is_blank(cell: Cell) -> bool:
    """Whether a cell is empty."""
    return cell != cell if isinstance(cell, float) else not cell or cell.isspace()


def decode(data: bytes, name: str) -> tuple[str, str]:
    """Text of a file and its encoding in words.

    Raises
    ------
    ReadingsError
        The file is empty or holds no text.
    """
    if not data.strip(b"\0 \t\r\n\xef\xbb\xbf\xff\xfe\x1a"):
        raise ReadingsError("the file is empty", name, "give a file with a header and rows")
    encoding = next((word for bom, word in _BOMS if data.startswith(bom)), "") or _wide(data)
    if encoding:
        text = data.decode(encoding, errors="replace")
        words = encoding.removesuffix("-sig").upper() + " with a byte-order mark"
        if encoding.endswith(("-le", "-be")):
            words = encoding.upper()
    else:
        text, words = _eight_bit(data)
    text = text.rstrip("\x1a").removeprefix("\ufeff")
    odd = sum(text.count(chr(c)) for c in range(9)) + text.count("\x7f") + text.count("\x1b")
    if odd > len(text) // 1000 + 2 or "\0" in text[:1000]:
        raise ReadingsError(
            "the file holds bytes that are no text", name, "export the table as text (CSV)"
        )
    return text, words


def _wide(data: bytes) -> str:
    """UTF-16 without a mark: nearly every second byte is zero."""
    head = data[:4000]
    half = max(len(head) // 2, 1)
    if head[1::2].count(0) > 0.7 * half and head[::2].count(0) < 0.1 * half:
        return "utf-16-le"
    if head[::2].count(0) > 0.7 * half and head[1::2].count(0) < 0.1 * half:
        return "utf-16-be"
    return ""


def _eight_bit(data: bytes) -> tuple[str, str]:
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError:
        pass
    else:
        return text, "ASCII" if text.isascii() else "UTF-8"
    kept = data.decode("utf-8", errors="ignore")
    good = sum(ord(c) > 127 for c in kept)
    bad = len(data) - len(kept.encode("utf-8"))
    if good > bad:  # a damaged UTF-8 file, not another encoding
        return data.decode("utf-8", errors="replace"), f"UTF-8 with {bad} damaged bytes"
    return data.decode("cp1252", errors="replace"), "Windows-1252"


def physical_lines(text: str) -> tuple[list[str], str, bool]:
    """Lines without their ends, the kinds of line ends in words, whether the last has one."""
    crlf = text.count("\r\n")
    cr = text.count("\r") - crlf
    lines = _ENDS.split(text) if cr or crlf else text.split("\n")
    finished = not lines[-1]
    if finished:
        lines.pop()
    return lines, ends_in_words(crlf, text.count("\n") - crlf, cr), finished


def ends_in_words(crlf: int, lf: int, cr: int) -> str:
    """Kinds of line ends from their numbers."""
    found = [w for w, count in (("CRLF", crlf), ("LF", lf), ("CR", cr)) if count]
    return f"mixed line ends ({', '.join(found)})" if len(found) > 1 else "".join(found)


def lines_of(data: bytes, name: str) -> Lines:
    """Decode and part into physical lines."""
    text, encoding = decode(data, name)
    lines, ends, finished = physical_lines(text)
    return Lines(lines, encoding, ends, finished)


def declared_delimiter(lines: Sequence[str]) -> str:
    """Delimiter of a ``sep=`` line at the top, empty when there is none."""
    for line in lines[:3]:
        match = _SEP.fullmatch(line)
        if match:
            return match[1]
        if line.strip():
            break
    return ""


def split(line: str, delimiter: str) -> list[Cell]:
    """Cells of one line without quotes."""
    if delimiter == "  ":
        return [*re.split(r"\s{2,}|\t", line.strip())]
    if delimiter == " ":
        return [*line.split()]
    return [*line.split(delimiter)]


def _quoted(line: str, delimiter: str) -> list[Cell] | None:
    """Cells of a line with quotes; None when a quote stays open."""
    mark = " " if delimiter == "  " else delimiter
    reader = csv.reader(
        [line], delimiter=mark, strict=True, skipinitialspace=mark in " ,;", quotechar='"'
    )
    try:
        cells: list[str] = next(reader, [])
    except csv.Error as error:
        if "unexpected end" in str(error):
            return None
        raise
    return [c for c in cells if c] if mark == " " else [*cells]


def _record(lines: Sequence[str], i: int, delimiter: str) -> tuple[list[Cell], int, str]:
    """Cells of the record that starts at index i, the lines it takes, why it is broken."""
    text = lines[i]
    for used in range(1, _QUOTED_LINES):
        try:
            cells = _quoted(text, delimiter)
        except csv.Error:
            break
        if cells is not None:
            return cells, used, ""
        if i + used >= len(lines):
            break
        text += "\n" + lines[i + used]
    return split(lines[i], delimiter), 1, "its quotes do not pair up"


def records(
    lines: Sequence[str], delimiter: str, start: int = 0
) -> Iterator[tuple[int, list[Cell], str]]:
    """Yield (physical line, cells, why broken) from index `start` on, blank lines left out."""
    i = start
    while i < len(lines):
        line = lines[i]
        if '"' not in line:
            if line and not line.isspace():
                yield i + 1, split(line, delimiter), ""
            i += 1
            continue
        cells, used, broken = _record(lines, i, delimiter)
        yield i + 1, cells, broken
        i += used


def text_records(lines: Lines, delimiter: str) -> Records:
    """All records of a text file."""
    at: list[int] = []
    rows: list[list[Cell]] = []
    broken: dict[int, str] = {}
    for line, cells, why in records(lines.text, delimiter):
        if why:
            broken[len(at)] = why
        at.append(line)
        rows.append(cells)
    manner = f"{lines.encoding}, {lines.ends or 'one line'}, cells parted by " + DELIMITERS.get(
        delimiter, repr(delimiter)
    )
    return Records(at, rows, broken, lines.finished, manner, delimiter)
