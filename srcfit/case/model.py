"""The checked case as plain data, all in SI; display units kept beside the numbers."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

from srcfit.member import Member, Unknown

Choose = Literal[
    "averaged", "evidence", "gcv", "robust-gcv", "leave-one-out", "l-curve", "discrepancy",
    "k-fold", "risk",
]  # fmt: skip
Sign = Literal["any", "nonnegative", "nonpositive"]


@dataclass(frozen=True)
class Step:
    """A jump of the readings of a group beyond `at` [m]: known, or an unknown."""

    at: float
    amount: float | Unknown


@dataclass(frozen=True)
class Baseline:
    """Rows of the same table whose value is subtracted, matched by the text of `match`."""

    where: Mapping[str, str]
    match: str


@dataclass(frozen=True)
class Correction:
    """Less `per` * (value of `column` minus its baseline value).

    `per` is SI: of the sensor's unit per coherent SI unit of `unit` (per K for temperatures).
    """

    column: str
    unit: str
    per: float


@dataclass(frozen=True)
class PhaseSpec:
    """The column that holds the phase of an amplitude."""

    column: str
    unit: str


@dataclass(frozen=True)
class ColumnSpec:
    """One measured quantity: a `[[readings.column]]` table.

    `sd` is in SI of the sensor kind (a difference), None with `sd_column` or `estimate_sd`.
    `range` (of the readings as they stand in the file, before sign and baseline) and `exclude`
    (places on the member) are SI. `sign` is +1 or -1 from `positive`. `key` and `line` say where
    the table stands in the case file (line 0: there is no file), for messages.
    """

    columns: tuple[str, ...]
    kind: str
    group: str
    unit: str | None = None
    unit_column: str | None = None
    sd: float | None = None
    sd_column: str | None = None
    estimate_sd: bool = False
    correlation: float | Literal["estimate"] = 0.0
    positive: str = ""
    sign: int = 1
    offset: float | Unknown = 0.0
    scale: float | Unknown = 1.0
    drift: float | Unknown = 0.0
    step: Step | None = None
    distance: float | None = None
    gauge_length: float = 0.0
    phase: PhaseSpec | None = None
    component: Literal["real", "imaginary"] | None = None
    range: tuple[float, float] | None = None
    exclude: tuple[tuple[float, float], ...] = ()
    exclude_lines: frozenset[int] = frozenset()
    where: Mapping[str, str] = field(default_factory=dict)
    baseline: Baseline | None = None
    correction: Correction | None = None
    key: str = "readings.column[1]"
    line: int = 0


@dataclass(frozen=True)
class PositionSpec:
    """Where the positions stand: a column of the table, or another file by gauge name."""

    column: str
    unit: str | None
    unit_column: str | None = None
    origin: float = 0.0
    reversed: bool = False
    file: Path | None = None
    gauge: str | None = None


@dataclass(frozen=True)
class TimeSpec:
    """The time column of a table."""

    column: str
    format: str | None = None


@dataclass(frozen=True)
class TableSpec:
    """One file of readings; `decimal` is its decimal mark where it cannot be told otherwise."""

    file: Path
    position: PositionSpec
    columns: tuple[ColumnSpec, ...]
    where: Mapping[str, str] = field(default_factory=dict)
    time: TimeSpec | None = None
    key: str = "readings"
    line: int = 0
    decimal: Literal[".", ","] | None = None


@dataclass(frozen=True)
class Zone:
    """A question: the integral of the source over [start, end)."""

    name: str
    start: float
    end: float


@dataclass(frozen=True)
class Lumped:
    """A source part at a place (or of unknown place `between` two), spread over `width`."""

    name: str
    at: float | None
    between: tuple[float, float] | None = None
    width: float = 0.0


@dataclass(frozen=True)
class Known:
    """A known part: a density over [start, end), or a strength at one place (start == end).

    A real number in a case; complex where a source is tried on a driven member.
    """

    start: float
    end: float
    value: Any


@dataclass(frozen=True)
class Knowledge:
    """A known total with its standard deviation."""

    value: float
    sd: float


@dataclass(frozen=True)
class Monotone:
    """A stretch on which the density beyond `known` rises (or falls) with x."""

    start: float
    end: float
    rising: bool


@dataclass(frozen=True)
class Limit:
    """A limit asked about: of the zone's mean density, or of its integral."""

    zone: str
    at_most: float
    density: bool


@dataclass(frozen=True)
class SourceSpec:
    """What is asked of the source, in SI.

    `sign` holds for every part, `ceiling` (the largest density) and `monotone` for the smooth part
    and a background; all of them for what acts beyond `known`.
    """

    unit: str
    total_unit: str
    position_unit: str
    cells: int = 200
    zones: tuple[Zone, ...] = ()
    breaks: tuple[float, ...] = ()
    lumped: tuple[Lumped, ...] = ()
    smooth: bool = True
    background: bool = False
    known: tuple[Known, ...] = ()
    zero: tuple[tuple[float, float], ...] = ()
    sign: Sign = "any"
    total: Knowledge | None = None
    limit: Limit | None = None
    ceiling: float | None = None
    monotone: tuple[Monotone, ...] = ()


@dataclass(frozen=True)
class StrengthSpec:
    """How the strength is chosen. `choose` may be a number (the strength itself)."""

    solver: Literal["tikhonov", "eigenbasis", "svd-cut"] = "tikhonov"
    roughness: Literal["averaged", "adaptive", 0, 1, 2] | float = "averaged"
    choose: Choose | float = "averaged"
    level: float = 0.95
    interval: Literal["cautious", "calibrated", "plain"] = "cautious"


@dataclass(frozen=True)
class Case:
    """One checked case.

    Attributes
    ----------
    title : str
    folder : Path
        Folder that relative paths start from.
    path : Path or None
        The case file, None when made from a mapping.
    member : Member
    member_text : mapping
        The `[member]` table as written, to be printed back.
    tables : tuple of TableSpec
    source, strength
    files : tuple of Path
        Every file that was read to make the case: the case file and those of coefficients.
    """

    title: str
    folder: Path
    path: Path | None
    member: Member
    member_text: Mapping[str, object]
    tables: tuple[TableSpec, ...]
    source: SourceSpec
    strength: StrengthSpec
    files: tuple[Path, ...] = ()

    @property
    def columns(self) -> tuple[ColumnSpec, ...]:
        """All columns of all tables, in order; `Readings.spec` counts in this tuple."""
        return tuple(c for t in self.tables for c in t.columns)
