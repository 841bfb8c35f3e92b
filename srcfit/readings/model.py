"""Readings as plain data: every reading found, used or not, in SI and the member's own sign."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.errors import Finding

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Readings:
    """Every reading found, in file order, n rows.

    Attributes
    ----------
    file : tuple of str, length n
        File name as given in the case.
    line : (n,) int
        Physical line, the first is 1.
    group, kind, unit : tuples of str, length n
        `unit` is the unit text the value was read in.
    x : (n,) float
        Place [m]; nan when there is none.
    value : (n,) float or complex
        SI (temperatures in K), after sign, baseline and correction; nan when unreadable.
    sd : (n,) float
        Standard deviation in SI; nan where it is to be estimated.
    used : (n,) bool
    reason : tuple of str, length n
        Why a row is excluded; empty for used rows.
    spec : (n,) int
        Index into `Case.columns`.
    time : (n,) float
        Seconds since the first reading's time; nan where no time is read.
    understood : tuple of str
        One sentence per file: encoding, delimiter, header line ... as found.
    inputs : mapping file name -> sha256 of its bytes
    """

    file: tuple[str, ...]
    line: NDArray[np.int64]
    group: tuple[str, ...]
    kind: tuple[str, ...]
    unit: tuple[str, ...]
    x: Array
    value: NDArray[Any]
    sd: Array
    used: NDArray[np.bool_]
    reason: tuple[str, ...]
    spec: NDArray[np.int64]
    time: Array
    findings: tuple[Finding, ...] = ()
    understood: tuple[str, ...] = ()
    inputs: Mapping[str, str] = field(default_factory=dict)

    def __len__(self) -> int:
        return len(self.line)
