"""What the columns of an unknown table may be: guesses from its headers, units and cells.

Nothing is read for a recovery on the strength of a guess: `draft` writes every one of them into
a case file, marked, for a person to judge.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from srcfit import unit_texts as convert
from srcfit.errors import ReadingsError
from srcfit.member import MemberKind, SensorSpec
from srcfit.readings.columns import Ask, read_numbers
from srcfit.readings.sheets import File
from srcfit.readings.text import clean
from srcfit.readings.times import stamp
from srcfit.readings.unknown import Sheet, open_unknown, some, unit_of, words_of

Array = NDArray[np.float64]

PLACES = ("x", "position", "pos", "distance", "dist", "station", "stationing", "chainage",
          "depth", "radius", "location", "place", "abscissa", "abstand", "lage", "ort", "tiefe",
          "stationierung", "km", "z", "r", "s")  # fmt: skip
SPREADS = frozenset(("sd", "std", "stdev", "sigma", "unc", "uncertainty", "se", "spread",
                     "standardabweichung", "unsicherheit"))  # fmt: skip
TIMES = frozenset(("time", "date", "timestamp", "datetime", "zeit", "datum", "uhrzeit", "clock"))
PHASES = frozenset(("phase", "arg", "angle"))
DERIVED = frozenset(("prev", "previous", "old", "ref", "reference", "mean", "avg", "average",
                     "min", "max", "median", "prior", "baseline", "target", "limit", "setpoint",
                     "complex", *SPREADS))  # fmt: skip
LABELS = frozenset(("id", "no", "nr", "number", "channel", "kanal", "record", "rn", "index",
                    "cell", "gauge", "serial", "point", "slice", "sensor", "row", "tc",
                    "#"))  # fmt: skip
QUANTITIES = frozenset(("quantity", "kind", "type", "parameter", "variable", "channel_type",
                        "measurand", "messgröße"))  # fmt: skip
VALUES = frozenset(("value", "reading", "wert", "messwert", "result", "measurement"))
# words of headers by the sensor kinds that they may mean; a member kind has some of these
WORDS: Mapping[str, tuple[str, ...]] = {
    "w": ("deflection", "displacement"), "u": ("displacement", "response"),
    "dz": ("deflection",), "uz": ("deflection",), "ux": ("displacement",),
    "sag": ("deflection",), "settlement": ("deflection",), "setzung": ("deflection",),
    "durchbiegung": ("deflection",), "heave": ("deflection",),
    "displacement": ("displacement", "deflection"), "verschiebung": ("displacement", "deflection"),
    "tilt": ("rotation",), "slope": ("rotation", "slope"), "inclination": ("rotation",),
    "neigung": ("rotation",), "theta": ("rotation", "twist"), "phi": ("rotation", "twist"),
    "dehnung": ("strain",), "eps": ("strain",), "epsilon": ("strain",), "ε": ("strain",),
    "m": ("moment",), "q": ("heat_flow", "heat_flux", "flow", "shear"), "v": ("shear",),
    "n": ("force",), "kappa": ("curvature",), "t": ("temperature", "torque"),
    "temp": ("temperature",), "temperatur": ("temperature",), "c": ("concentration",),
    "conc": ("concentration",), "activity": ("concentration",), "h": ("head",),
    "level": ("head",), "piezometer": ("head",), "discharge": ("flow",), "y": ("response",),
}  # fmt: skip
# words too short to go by when no unit says the same
SHORT = 2
WEAK = "by the letter of its name alone"


@dataclass(frozen=True)
class Reading:
    """A column (or several alike) that may hold readings.

    Attributes
    ----------
    headers : header texts, more than one for snapshots or gauges
    kind : sensor kind
    unit : unit text that a case file takes, None when the file states none
    unit_column : header text of a column with a unit per row
    why : what the guess goes by
    where : column and text that pick its rows in a long table
    """

    headers: tuple[str, ...]
    kind: str
    unit: str | None
    why: str
    where: tuple[str, str] | None = None
    unit_column: str | None = None


@dataclass(frozen=True)
class Place:
    """The column of positions.

    Attributes
    ----------
    header : header text; empty when no column looks like one
    unit, unit_column : as of `Reading`
    why : what the guess goes by
    x : (n,) positions in metres (in the unit's stead where none is stated), nan left out
    chainage : whether they stand as chainages such as 12+400
    gauge : header of the gauges' names where `file` holds the places
    file : name of another table with the places, beside the first one
    """

    header: str
    unit: str | None
    why: str
    x: Array
    unit_column: str | None = None
    chainage: bool = False
    gauge: str = ""
    file: str = ""


@dataclass(frozen=True)
class Guesses:
    """All that was guessed of one table.

    `readings` are sure enough to be read, `also` may be readings, `notes` are about other
    columns: (text, key of the case file it would be set under or "").
    """

    story: str
    place: Place
    readings: tuple[Reading, ...]
    also: tuple[Reading, ...]
    notes: tuple[tuple[str, str], ...]
    unclear: str = ""


def guess(file: File, kind: MemberKind, others: Mapping[str, File]) -> Guesses:
    """Guess what the columns of a table are for a member of this kind.

    Parameters
    ----------
    file : File
    kind : MemberKind
    others : mapping name -> File
        Further tables in the folder, one of which may hold the places of gauges.

    Raises
    ------
    ReadingsError
        The file holds no table with a line of names.
    """
    sheet = open_unknown(file)
    columns = _unit_columns(sheet)
    place, unclear = _place(sheet, columns)
    long = _long(sheet, kind, place, columns)
    readings, also = long or _wide(sheet, kind, place)
    if not place.header and readings:
        place = _other_table(readings[0].headers, others) or place
    spread = [r for r in also if words_of(r.headers[0]) == ["u"]]  # a standard uncertainty
    also = tuple(r for r in also if r not in spread)
    taken = {place.header, place.unit_column, *(h for r in (*readings, *also) for h in r.headers)}
    notes = _notes(sheet, taken | {r.where[0] for r in readings if r.where} | set(columns))
    for reading in readings:
        unclear = unclear or _two_ways(sheet, reading.headers[0])
    return Guesses(sheet.table.story, place, readings, also, notes, unclear)


def _two_ways(sheet: Sheet, header: str) -> str:
    """Why the decimal mark of a column is not clear; empty when it is."""
    table = sheet.table
    try:
        read_numbers(table, Ask(header, "1", ""), range(len(table.rows)), None)
    except ReadingsError as error:
        return error.what
    return ""


def _unit_columns(sheet: Sheet) -> tuple[str, ...]:
    """Columns of text whose cells are units."""
    out = []
    for name in sheet.names:
        texts = {convert.bare(t) for t in map(clean, some(sheet, name)) if t}
        if name not in sheet.numeric and texts and all(map(convert.known, texts)):
            out.append(name)
    return tuple(out)


def _place(sheet: Sheet, unit_columns: tuple[str, ...]) -> tuple[Place, str]:
    """The column of positions, and why its numbers cannot be read."""
    best: tuple[int, str, str | None] | None = None
    for name in sheet.names:
        try:
            unit = unit_of(sheet, name, "m")
        except LookupError:
            continue
        hit = next((i for i, w in enumerate(PLACES) if w in words_of(name)), None)
        if name not in sheet.numeric or hit is None or set(words_of(name)) & DERIVED:
            continue
        if best is None or hit < best[0]:
            best = (hit, name, unit)
    if best is None:
        return Place("", None, "no column is named like a position", np.zeros(0)), ""
    _, name, unit = best
    beside = next((c for c in unit_columns if set(words_of(c)) & set(words_of(name))), None)
    return _place_of(sheet, name, unit, beside if unit is None else None)


def _place_of(
    sheet: Sheet, name: str, unit: str | None, unit_column: str | None
) -> tuple[Place, str]:
    table, unclear, x = sheet.table, "", np.zeros(0)
    ask = Ask(name, "m", "", place=True)
    try:
        raw, more, _, _ = read_numbers(table, ask, range(len(table.rows)), None)
    except ReadingsError as error:
        unclear = error.what
    else:
        texts = [unit or "m"] * len(raw)
        if unit_column is not None:
            texts = [convert.bare(c) for c in table.texts(unit_column)]
        found = [convert.find(c, "m") for c in texts]
        sizes = np.array([u.scale if u else np.nan for u in found])
        x = sizes * raw
        for i, item in more.items():
            x[i] = complex(item.value).real * (1.0 if item.metres else sizes[i])
        x = x[np.isfinite(x)]
    chainage = any(re.search(r"[0-9]\+[0-9]", str(c)) for c in some(sheet, name))
    if unit is None and chainage:
        unit = "m"
    why = "named like a position"
    return Place(name, unit, why, x, unit_column, chainage), unclear


def _matches(
    sheet: Sheet, header: str, kind: MemberKind
) -> tuple[SensorSpec, str | None, str] | None:
    """The sensor kind that a column's name and unit fit, its unit, and what the guess goes by."""
    words = words_of(header)
    units: dict[str, str | None] = {}
    for sensor in kind.sensors:
        try:
            units[sensor.name] = unit_of(sheet, header, sensor.unit)
        except LookupError:
            continue
    named = [
        s for w in words for s in kind.sensors
        if s.name in units and (s.name in (w, "_".join(words)) or s.name in WORDS.get(w, ()))
    ]  # fmt: skip
    for sensor in named:
        if units[sensor.name] is not None:
            return sensor, units[sensor.name], "by its name and unit"
    strong = [s for s in named if any(len(w) > SHORT for w in words if _means(w, s.name))]
    if strong or (named and kind.name == "general"):
        return (strong or named)[0], None, "by its name"
    if named:
        return named[0], None, WEAK
    fitting = [s for s in kind.sensors if units.get(s.name) is not None]
    if len(fitting) > 1:  # strain and rotation are both plain numbers
        fitting = [s for s in fitting if s.name in str(units[s.name]).lower()]
    if len(fitting) == 1:
        return fitting[0], units[fitting[0].name], "by its unit alone"
    return None


def _means(word: str, sensor: str) -> bool:
    return word == sensor or sensor in WORDS.get(word, ())


def _wide(
    sheet: Sheet, kind: MemberKind, place: Place
) -> tuple[tuple[Reading, ...], tuple[Reading, ...]]:
    """Readings in columns of their own, and columns that may be further ones."""
    free = [n for n in sheet.names if n in sheet.numeric and n != place.header]
    shots = tuple(n for n in free if stamp(n) == stamp(n))
    if shots:
        sensor = kind.sensors[0]
        why = (
            "one column a snapshot, by the times in the header; the kind is the member's response"
        )
        return (Reading(shots, sensor.name, None, why),), ()
    found: list[Reading] = []
    also: list[Reading] = []
    for name in free:
        words = set(words_of(name))
        match = _matches(sheet, name, kind)
        if match is None or words & (PHASES | TIMES):
            continue
        sensor, unit, why = match
        if unit is None and words & LABELS:  # a number of something has no unit
            continue
        reading = Reading((name,), sensor.name, unit, why)
        first = next((i for i, r in enumerate(found) if r.kind == sensor.name), None)
        if words & DERIVED or why == WEAK or (first is None and _unsure(sensor, why)):
            also.append(reading)
        elif first is None:
            found.append(reading)
        elif _stem(found[first].headers[0]) == _stem(name) and found[first].unit == unit:
            old = found[first]
            found[first] = Reading((*old.headers, name), old.kind, unit, f"{why}, numbered alike")
        else:
            also.append(reading)
    if not found and also:
        found, also = also[:1], also[1:]
    return tuple(found), tuple(also)


def _unsure(sensor: SensorSpec, why: str) -> bool:
    """Whether a length may as well be another place as a reading."""
    return sensor.unit == "m" and why == "by its unit alone"


def _stem(name: str) -> str:
    """A numbered name without its number; the name itself when it has none."""
    return re.sub(r"[0-9]+", "0", name)


def _long(
    sheet: Sheet, kind: MemberKind, place: Place, unit_columns: tuple[str, ...]
) -> tuple[tuple[Reading, ...], tuple[Reading, ...]] | None:
    """Readings of a long table, one quantity a row; None for other tables."""
    quantity = next((n for n in sheet.names if n.lower() in QUANTITIES and n not in sheet.numeric),
                    None)  # fmt: skip
    value = next((n for n in sheet.names if n.lower() in VALUES and n in sheet.numeric), None)
    if quantity is None or value is None:
        return None
    unit_column = next((c for c in unit_columns if c != place.unit_column), None)
    found = []
    for text in dict.fromkeys(t for t in map(clean, sheet.table.cells(quantity)) if t):
        fits = [s for w in words_of(text) for s in kind.sensors if _means(w, s.name)]
        if fits:
            why = f"by the text in {quantity!r}"
            found.append(Reading((value,), fits[0].name, None, why, (quantity, text), unit_column))
    return (tuple(found), ()) if found else None


def _other_table(headers: tuple[str, ...], others: Mapping[str, File]) -> Place | None:
    """Places of gauges from another table that names every one of them."""
    for name, file in others.items():
        try:
            sheet = open_unknown(file)
        except ReadingsError:
            continue
        place, _ = _place(sheet, _unit_columns(sheet))
        for gauge in sheet.names:
            if place.header and set(headers) <= set(sheet.table.texts(gauge)):
                why = "names every gauge"
                return Place(place.header, place.unit, why, place.x, gauge=gauge, file=name)
    return None


def _notes(sheet: Sheet, taken: set[str | None]) -> tuple[tuple[str, str], ...]:
    """Words about the columns that are no readings."""
    out = [(n, "twice") for n in sheet.twice]
    for name in (n for n in sheet.names if n not in taken):
        words = set(words_of(name))
        if words & TIMES:
            out.append((name, "time"))
        elif words & PHASES and name in sheet.numeric:
            out.append((name, "phase"))
        elif (words & SPREADS or words == {"u"}) and name in sheet.numeric:
            out.append((name, "sd_column"))
        elif name not in sheet.numeric and not words & LABELS and _picks(sheet, name):
            out.append((name, "where"))
        else:
            out.append((name, ""))
    return tuple(out)


def _picks(sheet: Sheet, name: str) -> bool:
    """Whether a text column has a few texts, each on several rows."""
    texts = [t for t in map(clean, sheet.table.cells(name)) if t]
    return 1 < len(set(texts)) <= min(12, len(texts) // 3)
