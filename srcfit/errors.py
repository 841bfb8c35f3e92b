"""The error tree and findings.

SrcfitError
├── CaseError        the case file or a mapping given in its place cannot be used
│   └── UnitError    a quantity without a unit, with an unknown one, or of the wrong dimension
├── MemberError      the member cannot be computed (buckled, unbalanced source, no such place)
├── ReadingsError    the readings cannot be used
├── SolveError       the question cannot be answered at all with what was given
└── OutputError      a result cannot be written where it was asked for

Every error is one sentence: what is wrong, where it stands, how to mend it.
A finding is not an error: it is what the reader of a result must know.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Level = Literal["note", "caution", "serious"]


class SrcfitError(Exception):
    """Base of every error that srcfit raises on purpose.

    Parameters
    ----------
    what : str
        What is wrong, without a final stop.
    where : str
        File, key, line or row; empty when there is no such place.
    how : str
        How to mend it; empty when `what` already says it.
    """

    def __init__(self, what: str, where: str = "", how: str = "") -> None:
        super().__init__(what, where, how)
        self.what, self.where, self.how = what, where, how

    def __str__(self) -> str:
        place = f"{self.where}: " if self.where else ""
        mend = f"; {self.how}" if self.how else ""
        return f"{place}{self.what}{mend}."


class CaseError(SrcfitError):
    """The case file, or a mapping given in its place, cannot be used."""


class UnitError(CaseError):
    """A quantity lacks a unit, has an unknown one, or one of the wrong dimension."""


class MemberError(SrcfitError):
    """The member cannot be computed as described."""


class ReadingsError(SrcfitError):
    """The readings cannot be used."""


class SolveError(SrcfitError):
    """The question cannot be answered with what was given."""


class OutputError(SrcfitError):
    """A result cannot be written where it was asked for."""


@dataclass(frozen=True)
class Finding:
    """One coded, levelled sentence about what the user must know.

    Attributes
    ----------
    code : str
        Short fixed word with hyphens, e.g. ``"ladder-edge"``.
    level : {"note", "caution", "serious"}
        ``serious`` makes ``--strict`` exit with 4.
    sentence : str
        What was seen, what it means, and what to do.
    """

    code: str
    level: Level
    sentence: str


def as_percent(part: float, digits: int = 0) -> str:
    """A part of a whole in a sentence, as in ``57 %``."""
    return f"{100 * part:.{digits}f} %"
