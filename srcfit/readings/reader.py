"""Case -> Readings: every reading found, used or with the reason why not."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import Case, ColumnSpec, TableSpec
from srcfit.errors import Finding, ReadingsError
from srcfit.readings.batch import Batch, table_batches
from srcfit.readings.blanks import Places
from srcfit.readings.fast import fast_batches
from srcfit.readings.model import Readings
from srcfit.readings.places import gauge_places, row_places, wanted_places
from srcfit.readings.sheets import File, load, open_table
from srcfit.readings.table import Table, Wanted, title
from srcfit.readings.watch import findings, used_rows

_NEAR_END = 1e-9
OFF = "off the member"


def read(case: Case) -> Readings:
    r"""Read every table that a case names.

    Parameters
    ----------
    case : Case

    Returns
    -------
    Readings
        In SI and in the member's own sign, n rows in file order: every non-empty cell of every
        selected row and column, used or with the reason why it is excluded. A dropout (an empty
        cell where its row or its column set is read) is listed as excluded too.

    Raises
    ------
    ReadingsError
        A file is missing, empty or no table; a named column is missing or stands twice; units
        contradict each other; something can be read in two ways; no reading is left.

    Examples
    --------
    >>> from pathlib import Path
    >>> from tempfile import TemporaryDirectory
    >>> from srcfit import make_case, read
    >>> with TemporaryDirectory() as folder:
    ...     text = "x;w\nm;mm\n1,0;2,5\n2,0;---\n3,0;4,1\n4,0;2,2\n"
    ...     _ = (Path(folder) / "w.csv").write_text(text)
    ...     readings = read(make_case({
    ...         "member": {"kind": "cable", "length": "5 m", "tension": "2 kN", "left": "fixed",
    ...                    "right": "fixed"},
    ...         "readings": {"file": "w.csv", "position": {"column": "x", "unit": "m"},
    ...                      "column": [{"column": "w", "kind": "deflection", "sd": "0.1 mm"}]},
    ...         "source": {"unit": "N/m"},
    ...     }, folder))
    >>> readings.value[readings.used]
    array([0.0025, 0.0041, 0.0022])
    >>> int(readings.line[1]), readings.reason[1]
    (4, "'---' marks a missing value")
    """
    files: dict[Path, File] = {}
    out: list[tuple[str, Sequence[Batch]]] = []
    seen: list[Finding] = []
    understood: list[str] = []
    first = 0
    for spec in case.tables:
        table, batches, also = _read_table(case, spec, first, files)
        for batch in batches:
            _bound(case, case.columns[batch.spec], batch)
        seen += findings(table, batches)
        understood += [_sentence(table, batches), *also]
        out.append((table.name, batches))
        first += len(spec.columns)
    names = {f.name: f.sha256 for f in files.values()}
    return _assemble(case, out, tuple(seen), tuple(dict.fromkeys(understood)), names)


def _file(case: Case, path: Path, key: str, files: dict[Path, File]) -> File:
    full = path if path.is_relative_to(case.folder) else case.folder / path
    if full not in files:
        near = full.is_relative_to(case.folder)
        name = full.relative_to(case.folder).as_posix() if near else str(path)
        files[full] = load(full, name, key)
    return files[full]


def _read_table(
    case: Case, spec: TableSpec, first: int, files: dict[Path, File]
) -> tuple[Table, list[Batch], list[str]]:
    stated = spec.decimal
    source, wanted = _file(case, spec.file, f"{spec.key}.file", files), _wanted(case, spec)
    fast = fast_batches(case, spec, source, wanted, first, stated)
    if fast is not None:
        return (*fast, [])
    table = open_table(source, wanted)
    also: list[str] = []
    if spec.position.file is None:
        places: Places = row_places(spec, table, stated)
    else:
        file = _file(case, spec.position.file, f"{spec.key}.position.file", files)
        other = open_table(file, wanted_places(spec.position, spec.key))
        places = gauge_places(spec, table, other, stated)
        also.append(f"{other.name}: {other.story}; {len(other.line)} rows.")
    return table, table_batches(case, spec, table, places, first, stated), also


def _wanted(case: Case, spec: TableSpec) -> Wanted:
    """All columns that a table must have, and which of them hold numbers with a unit."""
    keys: dict[str, str] = {}
    measured: dict[str, str] = {}

    def want(name: str | None, key: str, si: str = "") -> None:
        if name is None:
            return
        keys.setdefault(title(name), key)
        if si:
            measured.setdefault(title(name), si)

    position = spec.position
    if position.file is None:
        want(position.column, f"{spec.key}.position.column", "m")
        want(position.unit_column, f"{spec.key}.position.unit_column")
    for column in spec.columns:
        si = case.member.kind.sensor(column.kind).unit
        for name in column.columns:
            want(name, f"{column.key}.column", si or "1")
        want(column.unit_column, f"{column.key}.unit_column")
        want(column.sd_column, f"{column.key}.sd_column")
        if column.phase:
            want(column.phase.column, f"{column.key}.phase.column", "rad")
        if column.baseline:
            want(column.baseline.match, f"{column.key}.baseline.match")
            for name in column.baseline.where:
                want(name, f"{column.key}.baseline.where")
        if column.correction:
            want(column.correction.column, f"{column.key}.correction.column")
        for name in column.where:
            want(name, f"{column.key}.where")
    for name in spec.where:
        want(name, f"{spec.key}.where")
    if spec.time:
        want(spec.time.column, f"{spec.key}.time.column")
    gauge = position.gauge if position.file is not None else None
    return Wanted(keys, measured, title(gauge or ""))


def _bound(case: Case, column: ColumnSpec, batch: Batch) -> None:
    """Reasons that hang on the place: none, off the member, excluded stretches."""
    member, x, why = case.member, batch.x, batch.reason
    near = _NEAR_END * member.length
    inside = len(x) > 0 and x.min() > member.start + near and x.max() < member.end - near
    if inside and not column.exclude:  # false for nan as well
        return
    for end in (member.start, member.end):
        x[np.abs(x - end) <= near] = end
    for k in np.flatnonzero((x < member.start) | (x > member.end)):
        why.setdefault(int(k), f"{OFF} (x = {x[k]:.6g} m)")
    for low, high in column.exclude:
        for k in np.flatnonzero((x >= low - near) & (x <= high + near)):
            why.setdefault(int(k), "in an excluded stretch")
    for k in np.flatnonzero(np.isnan(x)):
        why.setdefault(int(k), "no position")


def _sentence(table: Table, batches: Sequence[Batch]) -> str:
    marks = {m for b in batches for m in b.decimal}
    decimal = {".": "decimal point; ", ",": "decimal comma; "}
    words = "".join(decimal[m] for m in marks) if len(marks) == 1 and marks <= set(decimal) else ""
    count = sum(len(b.line) for b in batches)
    left = sum(len(b.reason) for b in batches)
    numbers = f"{len(table.line)} rows, {count} readings, {left} of them excluded"
    return f"{table.name}: {table.story}; {words}{numbers}."


def _assemble(
    case: Case, tables: list[tuple[str, Sequence[Batch]]], seen: tuple[Finding, ...],
    understood: tuple[str, ...], inputs: dict[str, str],
) -> Readings:  # fmt: skip
    """All batches as one set of readings, in file order."""
    columns = case.columns
    names = [name for name, found in tables for _ in found]
    batches = [b for _, found in tables for b in found]
    sizes = [len(b.line) for b in batches]
    table = np.repeat(np.arange(len(tables)), [sum(len(b.line) for b in f) for _, f in tables])
    line = np.concatenate([b.line for b in batches])
    order = None
    if len(batches) > 1 or np.any(np.diff(line) < 0):
        order = np.lexsort((line, table))  # stable: columns stay in the order of the case
    reason = _texts([_reasons(b) for b in batches], sizes, order)
    used = np.concatenate([used_rows(b) for b in batches])
    used = used if order is None else used[order]
    if not used.any():
        raise _nothing_left(tables, reason)
    kind = complex if case.member.driven else float
    time = _joined([b.time for b in batches], order)
    return Readings(
        file=_texts(names, sizes, order),
        line=_joined([b.line for b in batches], order),
        group=_texts([columns[b.spec].group for b in batches], sizes, order),
        kind=_texts([columns[b.spec].kind for b in batches], sizes, order),
        unit=_texts([b.unit for b in batches], sizes, order),
        x=_joined([b.x for b in batches], order),
        value=_joined([_signed(b.value, columns[b.spec]) for b in batches], order).astype(
            kind, copy=False
        ),
        sd=_joined([b.sd for b in batches], order),
        used=used,
        reason=reason,
        spec=_joined([np.full(n, b.spec) for n, b in zip(sizes, batches, strict=True)], order),
        time=time if np.all(np.isnan(time)) else time - np.nanmin(time),
        findings=seen,
        understood=understood,
        inputs=inputs,
    )


def _signed(value: NDArray[Any], column: ColumnSpec) -> NDArray[Any]:
    return value if column.sign == 1 else value * column.sign


def _joined(parts: Sequence[NDArray[Any]], order: NDArray[np.int64] | None) -> NDArray[Any]:
    """Rows of all batches in the common order."""
    every = parts[0] if len(parts) == 1 else np.concatenate(parts)
    return every if order is None else every[order]


def _reasons(batch: Batch) -> list[str] | str:
    if not batch.reason:
        return ""
    out = [""] * len(batch.line)
    for k, text in batch.reason.items():
        out[k] = text
    return out


def _texts(
    parts: Sequence[list[str] | str], sizes: Sequence[int], order: NDArray[np.int64] | None
) -> tuple[str, ...]:
    """Texts of all batches in the common order; one text may stand for a whole batch."""
    words = {p for p in parts if isinstance(p, str)}
    if len(words) == 1 and all(isinstance(p, str) for p in parts):
        return (words.pop(),) * sum(sizes)
    every: list[str] = []
    for part, size in zip(parts, sizes, strict=True):
        every += [part] * size if isinstance(part, str) else part
    return tuple(every) if order is None else tuple(every[i] for i in order.tolist())


def _nothing_left(
    tables: list[tuple[str, Sequence[Batch]]], reason: Sequence[str]
) -> ReadingsError:
    names = ", ".join(dict.fromkeys(name for name, _ in tables))
    common = Counter(text.split(" (x =")[0] for text in reason).most_common(3)
    why = "; ".join(f"{count} times: {text}" for text, count in common) or "the table has no rows"
    how = "correct the columns, units, `where` or `range`"
    if common and common[0][0] == OFF:
        how = "check `position`: its unit, `origin`, and `reversed` for depths counted negative"
    return ReadingsError(f"no reading is left ({why})", names, how)
