"""Comparison -> matplotlib figures: the change over the member, both campaigns' readings."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

import numpy as np

from srcfit.axes import here, labelled, legend, panels, plot_member, plot_source, turned
from srcfit.captions import extent, source_word, unit
from srcfit.changewords import describe_campaigns, describe_change
from srcfit.comparison import Comparison
from srcfit.drawing import BLACK, BLUE, GREY, VERMILLION
from srcfit.frames import numbers, texts
from srcfit.plots import Drawn, drawn_as, new_figure, quiet, tidy

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

MANY = 200  # readings of a panel, beyond which they are drawn as points without bars


def plot_change(comparison: Comparison, ax: Axes) -> None:
    """Change of the density with its band; zones where a change is shown are shaded."""
    label = "zone where a change is shown"
    for zone in comparison.facts["zones"]:
        if zone["shown"]:
            ax.axvspan(zone["from"], zone["to"], color="#eef0f2", lw=0, zorder=-1, label=label)
            label = "_"
    plot_source(comparison, ax)
    word = f"change of {source_word(comparison)}, B − A"
    ax.set_ylabel(labelled(word, unit(comparison, "source")))


def plot_campaigns(comparison: Comparison, ax: Axes) -> None:
    """Readings of both campaigns, of the first kind and unit."""
    for kind, unit_text in panels(comparison)[:1]:
        _campaigns(comparison, kind, unit_text, ax)
        legend(ax)


def plot_differences(comparison: Comparison, ax: Axes) -> None:
    """Differences B - A of the first kind and unit, or where stacked the residuals."""
    for kind, unit_text in panels(comparison)[:1]:
        _differences(comparison, kind, unit_text, ax)
        legend(ax, 3)


def _campaigns(comparison: Comparison, kind: str, unit_text: str, ax: Axes) -> None:
    frame, rows = comparison.readings, here(comparison, kind, unit_text)
    scale, shift = turned(comparison)
    x, campaign = numbers(frame, "x"), np.array(texts(frame, "campaign"))
    for side, mark, colour in (("A", "o", BLACK), ("B", "s", BLUE)):
        stacked = comparison.facts["by"] == "stack"
        mine = rows & (campaign == side) if stacked else rows
        value = (scale * numbers(frame, "value" if stacked else side) + shift)[mine]
        many = int(mine.sum()) > MANY
        ax.plot(
            x[mine], value, "." if many else mark, color=colour, ms=2.5 if many else 4.5,
            mfc="none" if side == "A" and not many else colour, label=f"reading of {side}",
        )  # fmt: skip
    ax.set_xlim(*extent(comparison))
    ax.set_xlabel(labelled("x", unit(comparison, "position")))
    ax.set_ylabel(labelled(kind, unit_text))


def _differences(comparison: Comparison, kind: str, unit_text: str, ax: Axes) -> None:
    frame, rows = comparison.readings, here(comparison, kind, unit_text)
    x = numbers(frame, "x")
    ax.axhline(0, color=GREY, lw=0.6)
    ax.set_xlim(*extent(comparison))
    ax.set_xlabel(labelled("x", unit(comparison, "position")))
    if comparison.facts["by"] == "stack":
        campaign, z = np.array(texts(frame, "campaign")), numbers(frame, "standardised")
        ax.axhspan(-2, 2, color="#eef0f2", lw=0, zorder=0)
        for side, mark, colour in (("A", "o", BLACK), ("B", "s", BLUE)):
            mine = rows & (campaign == side)
            ax.plot(x[mine], z[mine], mark, color=colour, ms=3.5, label=f"of {side}",
                    mfc="none" if side == "A" else colour)  # fmt: skip
        ax.set_ylabel("residual / sd")
        return
    scale = turned(comparison)[0]
    gap, sd, told = ((scale * numbers(frame, c))[rows] for c in ("difference", "sd", "predicted"))
    if int(rows.sum()) > MANY:
        ax.plot(x[rows], gap, ".", color=BLACK, ms=2.5, label="difference")
    else:
        ax.errorbar(x[rows], gap, np.where(np.isfinite(sd), sd, 0.0), fmt="o", color=BLACK, ms=3.5,
                    lw=1, label="difference ± 1 sd")  # fmt: skip
    if np.isfinite(told).any():
        ax.plot(x[rows], told, "_", color=VERMILLION, ms=9, mew=1.4,
                label="predicted from the change")  # fmt: skip
    ax.set_ylabel(labelled("B − A", unit_text))


def change_figure(comparison: Comparison) -> Figure:
    """The change with its band above the member to scale, both along the same x."""
    figure = new_figure(5.4, 0.8)
    upper, lower = figure.subplots(2, 1, height_ratios=(3.4, 1.7))
    figure.subplots_adjust(hspace=0.42)
    plot_change(comparison, upper)
    plot_member(comparison, lower)
    upper.set_xlim(lower.get_xlim())
    return tidy(figure)


def campaigns_figure(comparison: Comparison) -> Figure:
    """Each kind of reading in a pair of axes: both campaigns above, their differences below."""
    kinds = panels(comparison)
    count = max(len(kinds), 1)
    figure = new_figure(4.0 * count + 0.55, 0.45)
    outer = figure.add_gridspec(count, 1, hspace=0.28)
    for i, (kind, unit_text) in enumerate(kinds):
        inner = outer[i].subgridspec(2, 1, height_ratios=(4, 4), hspace=0.26)
        upper, lower = figure.add_subplot(inner[0]), figure.add_subplot(inner[1])
        _campaigns(comparison, kind, unit_text, upper)
        _differences(comparison, kind, unit_text, lower)
        upper.tick_params(labelbottom=False)
        upper.set_xlabel("")
        if i == 0:
            legend(upper)
            legend(lower, 3)
    return tidy(figure)


IN_AXES: dict[str, Callable[[Comparison, Axes], None]] = {
    "change": plot_change,
    "member": plot_member,
    "campaigns": plot_campaigns,
    "differences": plot_differences,
}
FIGURES: dict[str, tuple[Callable[[Comparison], Figure], Callable[[Comparison], str]]] = {
    "change": (change_figure, describe_change),
    "campaigns": (campaigns_figure, describe_campaigns),
}
"""Each figure of a comparison with its text alternative."""


def draw_in(comparison: Comparison, ax: Axes, what: str = "change") -> Axes:
    """Draw one thing (a key of `IN_AXES`) into given axes and return them."""
    if what not in IN_AXES:
        raise ValueError(f"there is no plot of {what!r}; choose one of {', '.join(IN_AXES)}")
    IN_AXES[what](comparison, ax)
    return ax


def draw_all(comparison: Comparison, names: Sequence[str] = tuple(FIGURES)) -> dict[str, Drawn]:
    """Draw each figure once: name -> Drawn."""
    with quiet():
        return {n: drawn_as(FIGURES[n][0](comparison), FIGURES[n][1](comparison)) for n in names}
