"""Comparison: the frozen result of comparing two campaigns, and how it is shown and saved."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from srcfit.case.model import Case

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure


@dataclass(frozen=True)
class Comparison:
    """What changed from campaign A to campaign B, in the units of A.

    Attributes
    ----------
    cases : (Case, Case)
    source : DataFrame
        As `Recovery.source`, of the change.
    zones : DataFrame
        As `Recovery.zones`, of the change; then whether it is shown, what would have been missed,
        and the values of A and B by themselves.
    readings : DataFrame
        One row for each difference of readings (or, stacked, for each reading).
    """

    cases: tuple[Case, Case]
    source: pd.DataFrame
    zones: pd.DataFrame
    readings: pd.DataFrame
    facts: Mapping[str, Any]

    @property
    def case(self) -> Case:
        """The case of A, which sets units and level."""
        return self.cases[0]

    @property
    def total(self) -> Mapping[str, Any]:
        """Change of the total with sd, lower and upper."""
        found: Mapping[str, Any] = self.facts["total"]
        return found

    @property
    def findings(self) -> list[Mapping[str, str]]:
        """Findings: code, level, sentence."""
        found: list[Mapping[str, str]] = self.facts["findings"]
        return found

    def summary(self) -> dict[str, Any]:
        """The mapping written to summary.json."""
        return dict(self.facts)

    def plot(self, ax: Axes | None = None, what: str = "change") -> Axes | Figure:
        """Draw into matplotlib axes, or a figure of the change over the member.

        Parameters
        ----------
        ax : Axes, optional
            Axes to draw in.
        what : str
            What goes into `ax`: change, member, campaigns (the readings of both, of the first
            kind and unit) or differences (B - A of these; stacked, the residuals).

        Returns
        -------
        Axes or Figure
            `ax` as it was given; without it a new figure, its axes in ``figure.axes``.

        Raises
        ------
        ValueError
            When `what` is none of these.
        """
        from srcfit.changeplots import change_figure, draw_in

        return change_figure(self) if ax is None else draw_in(self, ax, what)

    def save(self, folder: str | Path, *, replace: bool = False) -> Path:
        """Write tables, summary, page and figures into `folder`, whole or not at all.

        Raises
        ------
        OutputError
            When the folder exists (unless `replace`) or cannot be made.
        """
        from srcfit import report
        from srcfit.changeplots import draw_all
        from srcfit.output import csv_text, input_paths, put, strict
        from srcfit.plots import save_drawn

        def write(new: Path) -> None:
            for name in ("source", "zones", "readings"):
                text = csv_text(getattr(self, name))
                (new / f"{name}.csv").write_text(text, encoding="utf-8", newline="")
            text = json.dumps(strict(self.facts), indent=2, ensure_ascii=False, allow_nan=False)
            (new / "summary.json").write_text(text + "\n", encoding="utf-8")
            drawn = draw_all(self)
            save_drawn(drawn, new / "figures")
            page = report.render_change(self, drawn)
            (new / "report.html").write_text(page, encoding="utf-8")

        inputs = tuple(p for case in self.cases for p in input_paths(case))
        return put(folder, write, replace=replace, inputs=inputs).folder

    def _repr_html_(self) -> str:
        """Static summary for notebooks."""
        from srcfit.report import change_fragment

        return change_fragment(self)
