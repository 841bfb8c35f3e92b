"""Time texts -> seconds: ISO, dates with points, slashes or month names, spreadsheet numbers.

A date such as 03/04/2026 that no other row settles is asked for, not guessed.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from datetime import UTC, datetime, timedelta

import numpy as np
from numpy.typing import NDArray

from srcfit.errors import ReadingsError, UnitError
from srcfit.readings.numbers import UnreadableError, amount, mark_of, normal
from srcfit.readings.text import Cell, clean
from srcfit.units import factor

_EPOCH = datetime(1970, 1, 1)
_SHEET = datetime(1899, 12, 30)
_SERIAL = (20000.0, 80000.0)  # spreadsheet day numbers of 1954 to 2119
_PARTED = re.compile(r"(\d{1,4})([/.-])(\d{1,2})\2(\d{1,4})(?:[ T,]+(.*))?")
_CLOCK = re.compile(r"(\d{1,2})[:.](\d{2})(?:[:.](\d{2})(?:[.,](\d+))?)?(?: ?([AaPp])\.?[Mm]\.?)?")
_NAMED = ("%d %b %Y", "%d %B %Y", "%d-%b-%Y", "%d-%b-%y", "%b %d %Y", "%b %d, %Y", "%B %d, %Y")


def seconds(
    cells: Sequence[Cell], form: str | None, header: str, where: str
) -> NDArray[np.float64]:
    """Seconds since 1970 (or since the column's own zero) of each cell; nan where there is none.

    Parameters
    ----------
    cells : sequence
    form : str or None
        ``strptime`` format, ``"serial"`` (spreadsheet days) or a time unit for plain numbers.
    header : str
        Header text; a unit in its brackets counts for plain numbers.
    where : str
        File and column for messages.

    Raises
    ------
    ReadingsError
        An ambiguous date, or plain numbers that may be seconds or days.
    """
    texts = [normal(clean(c)) for c in cells]
    plain = np.array([_plain(t) for t in texts])
    if form is not None and "%" in form:
        return np.array([_by_format(t, form, where) for t in texts])
    size = _unit_size(form or _bracket(header)) if form != "serial" else None
    if size is not None:
        return plain * size
    order = _day_first(texts, where)
    out = np.array(
        [math.nan if t == t else _date(s, order) for t, s in zip(plain, texts, strict=True)]
    )
    numbers = plain[~np.isnan(plain)]
    if not numbers.size:
        return out
    serial = bool(np.all((numbers > _SERIAL[0]) & (numbers < _SERIAL[1])))
    if form != "serial" and serial and np.all(np.isnan(out)):
        raise ReadingsError(
            f"the times such as {texts[int(np.argmax(plain == plain))]!r} may be days or seconds",
            where,
            'set `format` of `time` to "serial" (spreadsheet days), "s", "min", "h" or "d"',
        )
    days = form == "serial" or serial
    start = (_SHEET - _EPOCH).total_seconds()
    return np.where(np.isnan(plain), out, start + 86400 * plain if days else plain)


def stamp(text: str) -> float:
    """Seconds since 1970 of a header text in ISO form; nan when it is none."""
    try:
        return _since(datetime.fromisoformat(text)) if len(text) > 9 else math.nan
    except ValueError:
        return math.nan


def _since(when: datetime) -> float:
    if when.tzinfo is not None:
        when = when.astimezone(UTC).replace(tzinfo=None)
    return (when - _EPOCH).total_seconds()


def _plain(text: str) -> float:
    mark = mark_of(text).lstrip("?") or "."
    try:
        found = amount(text, mark)
    except UnreadableError:
        return math.nan
    plain = isinstance(found.value, float) and not (found.suffix or found.metres)
    return float(found.value.real) if plain else math.nan


def _bracket(header: str) -> str:
    match = re.search(r"[\[(]([^\[\]()]*)[\])]", header)
    return match[1].strip() if match else ""


def _unit_size(text: str) -> float | None:
    try:
        return factor(text, "s", "time")[0] if text else None
    except UnitError:
        return None


def _by_format(text: str, form: str, where: str) -> float:
    try:
        return _since(datetime.strptime(text, form)) if text else math.nan
    except ValueError as error:
        if "unconverted" in str(error) or "does not match" in str(error):
            return math.nan
        raise ReadingsError(
            f"{form!r} is no format of dates and times",
            where,
            "write `format` as in %d.%m.%Y %H:%M",
        ) from None


def _day_first(texts: Sequence[str], where: str) -> bool:
    """Whether dates with slashes or dashes have the day first.

    Raises
    ------
    ReadingsError
        Nothing in the column settles it.
    """
    pairs = {(int(m[1]), int(m[3])): m[0] for t in texts if (m := _PARTED.fullmatch(t))
             and m[2] != "." and len(m[1]) < 3}  # fmt: skip
    day, month = any(a > 12 for a, _ in pairs), any(b > 12 for _, b in pairs)
    if day != month:
        return day
    unclear = [t for (a, b), t in pairs.items() if a != b]
    if unclear:
        raise ReadingsError(
            f"the date {unclear[0]!r} may have the day or the month first",
            where,
            'set `format` of `time`, as in "%d/%m/%Y %H:%M" or "%m/%d/%Y %H:%M"',
        )
    return True


def _date(text: str, day_first: bool) -> float:
    """Seconds since 1970 of one date text; a time of day alone counts from midnight."""
    iso = stamp(text)
    if iso == iso:
        return iso
    match = _PARTED.fullmatch(text)
    if match is None:
        clock = _clock(text)
        return _words(text) if clock is None else clock.total_seconds()
    first, mark, second, third, rest = match.groups()
    clock = _clock(rest) if rest else timedelta()
    if len(first) == 4:
        year, month, day = int(first), int(second), int(third)
    else:
        day, month, year = int(first), int(second), int(third)
        if mark != "." and not day_first:
            day, month = month, day
        year += 2000 if len(third) <= 2 else 0
    try:
        return math.nan if clock is None else _since(datetime(year, month, day) + clock)
    except (ValueError, OverflowError):
        return math.nan


def _clock(text: str) -> timedelta | None:
    match = _CLOCK.fullmatch(text.strip())
    if match is None:
        return None
    hour, minute, second = int(match[1]), int(match[2]), int(match[3] or 0)
    if match[5]:
        hour = hour % 12 + (12 if match[5] in "Pp" else 0)
    part = float(f"0.{match[4] or 0}")
    if hour > 24 or minute > 59 or second > 60:
        return None
    return timedelta(hours=hour, minutes=minute, seconds=second + part)


def _words(text: str) -> float:
    """A date with the month's name."""
    head, _, tail = text.rpartition(" ")
    clock = _clock(tail) if head else None
    for form in _NAMED:
        try:
            when = datetime.strptime(head if clock is not None else text, form)
        except ValueError:
            continue
        return _since(when + (clock or timedelta()))
    return math.nan
