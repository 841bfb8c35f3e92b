"""What a reader of the readings must know: findings about values that were used."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import NDArray

from srcfit.errors import Finding
from srcfit.readings.batch import Batch
from srcfit.readings.table import Table
from srcfit.readings.text import clean

_STATUS = frozenset((
    "flag", "flags", "status", "quality", "qc", "qa", "state", "valid", "validity", "error",
    "fehler", "zustand", "güte", "qualität", "gültig", "merker", "alarm", "remark", "ok",
    "check",
))  # fmt: skip
_MARKS = np.array([7999, 9999, 99999, 999999, 999.9, 999.99, 9999.9, 6999, 8888, 32767, 32768,
                   65535, 1e30, 1e20, 999])  # fmt: skip
_RUN = 5
_MOST = 0.8  # part of the readings that is nearly all
_NEAR = 0.1  # places at random come so near by chance in fewer than one table of ten


def lines_text(lines: Iterable[int]) -> str:
    """Line numbers in words: the first few, and how many more."""
    every = sorted(set(lines))
    text = ", ".join(map(str, every[:8]))
    more = f" and {len(every) - 8} more" if len(every) > 8 else ""
    return f"line{'s' if len(every) > 1 else ''} {text}{more}"


def findings(table: Table, batches: Sequence[Batch]) -> list[Finding]:
    """Findings about one file."""
    out = [
        *_early(table),
        *_rough(table.name, batches),
        *_changes(table.name, batches),
        *_flags(table, batches),
    ]
    for batch in batches:
        out += [*_stuck(table.name, batch), *_marks(table.name, batch)]
        out += _near(table.name, batch)
    return [*out, *_cut(table, batches), *_time(table.name, batches)]


def used_rows(batch: Batch) -> NDArray[np.bool_]:
    """Rows without a reason against them."""
    keep = np.ones(len(batch.line), dtype=bool)
    keep[list(batch.reason)] = False
    return keep


def _early(table: Table) -> list[Finding]:
    if not table.early:
        return []
    return [Finding(
        "rows-above-header", "caution",
        f"{table.name}: {lines_text(table.early)} above the header look like rows of the table; "
        "what stands above the header is not read.",
    )]  # fmt: skip


def _rough(name: str, batches: Sequence[Batch]) -> list[Finding]:
    lines = [int(b.line[k]) for b in batches for k in b.rough if k not in b.reason]
    if not lines:
        return []
    text = f'{name}: {lines_text(lines)}: numbers marked "~" are rough, but used.'
    return [Finding("rough-readings", "note", text)]


def _changes(name: str, batches: Sequence[Batch]) -> list[Finding]:
    pairs: dict[tuple[int, str, str], list[str]] = {}
    for b in batches:
        for change in b.changes:
            pairs.setdefault(change, []).append(b.name)
    return [
        Finding(
            "unit-change", "note",
            f"{name}: from line {line} on {', '.join(dict.fromkeys(names))} stands in {new!r} "
            f"instead of {old!r}; each part was read in its own unit.",
        )
        for (line, old, new), names in pairs.items()
    ]  # fmt: skip


def status_columns(headers: Sequence[str]) -> list[str]:
    """Header texts that name a column of flags."""
    return [h for h in headers if h and h.lower() in _STATUS and headers.count(h) == 1]


def _flags(table: Table, batches: Sequence[Batch]) -> list[Finding]:
    """Used rows whose flag differs from the usual one."""
    if not status_columns(table.headers):
        return []
    used = {n for b in batches for n in b.line[used_rows(b)].tolist()}
    out = []
    for header in status_columns(table.headers):
        column = table.headers.index(header)
        flags = [clean(r[column]) if column < len(r) else "" for r in table.rows]
        usual = Counter(flags).most_common(1)[0][0] if flags else ""
        odd: dict[str, list[int]] = {}
        for line, flag in zip(table.line, flags, strict=True):
            if flag not in ("", usual) and line in used:
                odd.setdefault(flag, []).append(line)
        if not odd or sum(map(len, odd.values())) > 0.2 * len(used):
            continue
        text = "; ".join(f"{flag!r} in {lines_text(lines)}" for flag, lines in odd.items())
        out.append(Finding(
            "flagged-readings", "caution",
            f"{table.name}: {header!r} flags readings that are used: {text}; "
            "leave them out with `exclude_lines` if they are unsound.",
        ))  # fmt: skip
    return out


def _stuck(name: str, batch: Batch) -> list[Finding]:
    """Nearly all readings of one value, or long runs of one in a column that otherwise differs."""
    keep = used_rows(batch)
    value, line = batch.raw[keep], batch.line[keep]
    kinds, count = np.unique(value, return_counts=True)
    if len(kinds) > 1 and count.max() >= max(_RUN, _MOST * len(value)):
        others = line[value != kinds[np.argmax(count)]].tolist()
        return [Finding(
            "stuck-readings", "caution",
            f"{name}: {batch.name!r} has one value in {count.max()} of {len(value)} readings, all "
            f"but {lines_text(others)}; check whether the channel was stuck, or its numbers "
            "written with too few digits.",
        )]  # fmt: skip
    if len(value) < 2 * _RUN or np.count_nonzero(value[1:] == value[:-1]) < _RUN - 1:
        return []
    edges = np.flatnonzero(np.r_[True, value[1:] != value[:-1], True])
    runs = np.diff(edges)
    long = np.flatnonzero(runs >= _RUN)
    others = len(value) - runs[long].sum()
    if not len(long) or len(runs) < _RUN or len(runs) - len(long) < 0.5 * others:
        return []
    parts = [f"lines {line[edges[i]]} to {line[edges[i + 1] - 1]}" for i in long[:5]]
    return [Finding(
        "stuck-readings", "caution",
        f"{name}: {batch.name!r} keeps one value in {', '.join(parts)}; check whether the channel "
        "was stuck, and leave these lines out with `exclude_lines` if so.",
    )]  # fmt: skip


def _near(name: str, batch: Batch) -> list[Finding]:
    """Places that differ by far less than neighbours do: perhaps one place, measured twice."""
    keep = used_rows(batch) & np.isfinite(batch.x)
    x, line = batch.x[keep], batch.line[keep]
    if len(x) < 4:
        return []
    order = np.argsort(x, kind="stable") if np.any(np.diff(x) < 0) else np.arange(len(x))
    gap = np.diff(x[order])
    apart = gap > 1e-12 * np.abs(x).max()
    if not apart.any():
        return []
    close = np.flatnonzero(apart & (gap < _NEAR / len(x) * np.median(gap[apart])))
    if not len(close):
        return []
    parts = [
        f"lines {min(pair)} and {max(pair)} ({1000 * gap[k]:.3g} mm)"
        for k in close[:4]
        for pair in [(int(line[order[k]]), int(line[order[k + 1]]))]
    ]
    more = f" and {len(close) - 4} more" if len(close) > 4 else ""
    return [Finding(
        "near-places", "note",
        f"{name}: {batch.name!r} has readings at nearly the same place: {', '.join(parts)}{more}; "
        "all are used as they stand. If one is a copy with a mistyped place, leave it out with "
        "`exclude_lines`.",
    )]  # fmt: skip


def _marks(name: str, batch: Batch) -> list[Finding]:
    """Numbers that usually mark a missing value, far from all others."""
    keep = used_rows(batch)
    shown, line = batch.number[keep], batch.line[keep]
    if len(shown) < 4:
        return []
    size = np.abs(shown)
    large = np.flatnonzero(size >= 999)
    if not len(large):
        return []
    odd = large[np.isin(size[large], _MARKS) & (size[large] > 10 * np.median(size))]
    if not len(odd) or len(odd) > 0.3 * len(size):
        return []
    text = ", ".join(f"{v:g}" for v in np.unique(shown[odd])[:4])
    return [Finding(
        "missing-mark", "caution",
        f"{name}: {batch.name!r} holds {text} in {lines_text(map(int, line[odd]))}, which looks "
        "like a mark for a missing or saturated value; set `range` to leave it out.",
    )]  # fmt: skip


def _cut(table: Table, batches: Sequence[Batch]) -> list[Finding]:
    """A used number that the file ends on without a line end may be cut."""
    if table.cut is None:
        return []
    row, column = table.cut
    line = table.line[row]
    names = {n for n, i in table.blocks[-1].index.items() if i == column}
    used = any(len(b.line) and b.line[-1] == line and used_rows(b)[-1] for b in batches)
    if not names or not used:
        return []
    return [Finding(
        "no-line-end", "note",
        f"{table.name}: line {line} has no line end after {names.pop()!r}; if the file was cut "
        "off there, that number may not be whole.",
    )]  # fmt: skip


def _time(name: str, batches: Sequence[Batch]) -> list[Finding]:
    """Clock times that run backwards within the file."""
    for batch in batches:
        known = ~np.isnan(batch.time)
        back = np.flatnonzero(np.diff(batch.time[known]) < 0)
        if len(back):
            line = int(batch.line[known][back[0] + 1])
            return [Finding(
                "time-backwards", "note",
                f"{name}: the time runs backwards at line {line} ({len(back)} such places); a "
                "clock change or rows out of order: check it if drift is asked for.",
            )]  # fmt: skip
    return []
