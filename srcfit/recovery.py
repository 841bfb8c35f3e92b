"""Recovery: the frozen result of one recovery, and how it is shown and saved."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import Case

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Number:
    """A value with its standard deviation and interval, in the user's unit; None: undetermined.

    Of a driven member `value`, lower and upper are of the real part, `imaginary` and its bounds of
    the other; sd and the interval's half-width are the same for either.
    """

    value: float | None
    sd: float | None
    lower: float | None
    upper: float | None
    imaginary: float | None = None
    imaginary_lower: float | None = None
    imaginary_upper: float | None = None
    driven: bool = False


@dataclass(frozen=True)
class Pictures:
    """Curves that the figures need beyond the tables, all in SI.

    Attributes
    ----------
    x : (g,) fine places along the member [m]
    fit : mapping sensor kind -> (g,) predicted reading of that kind along the member (SI)
    influence : (n, g) influence line of each used reading (reading per unit source at x)
    influence_of : tuple of n row numbers into `Recovery.readings`
    modes : (g, c) first modes, `eigenvalues` (c,)
    rungs : (t, m) estimates of the roughness-1 ladder (thinned) in the user's source unit,
        `strengths` (t,) in the ladder's unit, `totals` (t,), `fits` (t, n) predicted used readings
        in their own units
    """

    x: Array
    fit: Mapping[str, Array]
    influence: Array
    influence_of: tuple[int, ...]
    modes: Array
    eigenvalues: Array
    strengths: Array
    rungs: Array
    totals: Array
    fits: Array


class Result(Protocol):
    """What a recovery and a comparison of campaigns have in common, so that both can be shown."""

    @property
    def case(self) -> Case:
        """What was asked, and of which member."""

    @property
    def source(self) -> pd.DataFrame:
        """The density, cell by cell."""

    @property
    def zones(self) -> pd.DataFrame:
        """One row a zone."""

    @property
    def readings(self) -> pd.DataFrame:
        """One row a reading, or a difference of two."""

    @property
    def facts(self) -> Mapping[str, Any]:
        """The mapping written to summary.json."""


@dataclass(frozen=True)
class Recovery:
    """The whole result of `srcfit.recover`, in the user's units.

    Attributes
    ----------
    case : Case
    source, zones, readings, ladder, section : DataFrame
        With the columns of their CSV files (units in brackets). `section` holds moment and shear
        of a beam, or the flow or force of another member, along it, left and right of each jump.
    total, peak : mapping
        As in summary.json.
    findings : list of mapping (code, level, sentence)
    pictures : Pictures
        Curves for the figures.
    balance : mapping or None
        Equilibrium of the estimate in the total's unit: source (known parts included), reactions,
        along (what bedding, loss, decay or inertia take) and difference; real parts. None where
        the readings do not determine the source.
    """

    case: Case
    source: pd.DataFrame
    zones: pd.DataFrame
    readings: pd.DataFrame
    ladder: pd.DataFrame
    pictures: Pictures
    facts: Mapping[str, Any] = field(default_factory=dict)
    section: pd.DataFrame | None = None
    balance: Mapping[str, float] | None = None

    @property
    def total(self) -> Mapping[str, Any]:
        """Total with sd, lower and upper (None where the readings cannot tell)."""
        result: Mapping[str, Any] = self.facts["total"]
        return result

    @property
    def peak(self) -> Mapping[str, Any] | None:
        """Peak of the smooth part with its place; None when there is no smooth part."""
        result: Mapping[str, Any] | None = self.facts["peak"]
        return result

    @property
    def findings(self) -> list[Mapping[str, str]]:
        """Findings: code, level, sentence."""
        result: list[Mapping[str, str]] = self.facts["findings"]
        return result

    def summary(self) -> dict[str, Any]:
        """The mapping written to summary.json."""
        return dict(self.facts)

    def plot(self, ax: Axes | None = None, what: str = "source") -> Axes | Figure:
        """Draw into matplotlib axes, or a figure of member, source and readings.

        Parameters
        ----------
        ax : Axes, optional
            Axes to draw in.
        what : str
            What goes into `ax`: member, source, section (the moment of a beam, the flow or force
            of another member), readings (of the first kind and unit), residuals, l-curve,
            influence or modes.

        Returns
        -------
        Axes or Figure
            `ax` as it was given; without it a new figure, its axes in ``figure.axes``.

        Raises
        ------
        ValueError
            When `what` is none of these.
        """
        from srcfit.plots import draw_in, overview

        return overview(self) if ax is None else draw_in(self, ax, what)

    def save(self, folder: str | Path, *, replace: bool = False) -> Path:
        """Write tables, summary, page and figures into `folder`, whole or not at all.

        Raises
        ------
        OutputError
            When the folder exists (unless `replace`) or cannot be made.
        """
        from srcfit.output import save

        return save(self, Path(folder), replace=replace).folder

    def _repr_html_(self) -> str:
        """Static summary for notebooks."""
        from srcfit.report import fragment

        return fragment(self)
