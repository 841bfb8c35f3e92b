"""The profile as it was read, rejected rows included: one panel a sensor kind."""

from __future__ import annotations

import io
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from srcfit.case.model import Case
from srcfit.drawing import BLUE, VERMILLION, plain, short
from srcfit.errors import OutputError
from srcfit.inspection import shown
from srcfit.output import put_file
from srcfit.readings.model import Readings

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

FORMATS = ("png", "svg", "pdf")
MARKERS = ("o", "s", "^", "D", "v", "P")


def draw(case: Case, readings: Readings) -> Figure:
    """A figure with the readings against their places, rejected ones crossed.

    Rows without a place or without a number cannot be drawn; their count stands in the title.
    """
    from matplotlib.figure import Figure

    kinds = list(dict.fromkeys(readings.kind))
    figure = Figure(figsize=(8.0, 1.0 + 2.6 * max(1, len(kinds))), layout="constrained")
    axes = figure.subplots(max(1, len(kinds)), 1, sharex=True, squeeze=False)[:, 0]
    for kind, ax in zip(kinds, axes, strict=False):
        _panel(case, readings, kind, ax)
    axes[-1].set_xlabel(f"x [{case.source.position_unit}]")
    hidden = int((~_drawable(readings)).sum())
    note = f" ({hidden} rows without place or number not drawn)" if hidden else ""
    figure.suptitle(plain(short(case.title, 70)) + note, fontsize="medium")
    return figure


def _drawable(readings: Readings) -> np.ndarray:
    finite: np.ndarray = np.isfinite(readings.x) & np.isfinite(np.real(readings.value))
    return finite


def _panel(case: Case, readings: Readings, kind: str, ax: Axes) -> None:
    si = case.member.kind.sensor(kind).unit
    here = _drawable(readings) & (np.array(readings.kind) == kind)
    unit = next((u for u, h in zip(readings.unit, here, strict=True) if h), si)
    x = shown(readings.x, case.source.position_unit, "m")
    y = shown(np.real(readings.value), unit, si)
    groups = np.array(readings.group)
    for i, group in enumerate(dict.fromkeys(groups[here])):
        mine = here & readings.used & (groups == group)
        ax.plot(x[mine], y[mine], MARKERS[i % len(MARKERS)], color=BLUE, mfc="none", ms=4,
                label=plain(short(str(group))))  # fmt: skip
    out = here & ~readings.used
    if out.any():
        ax.plot(x[out], y[out], "x", color=VERMILLION, ms=6, label="rejected")
    ax.set_ylabel(plain(f"{kind} [{unit}]"))
    if here.any():
        ax.legend(fontsize="small")
    ax.grid(alpha=0.3)


def save(case: Case, readings: Readings, path: str, *, replace: bool = False) -> Path:
    """Write the picture as PNG, SVG or PDF, after the ending of `path`.

    Raises
    ------
    OutputError
        For another ending, and where the file cannot be written.
    """
    ending = Path(path).suffix.lower().removeprefix(".")
    if ending not in FORMATS:
        raise OutputError(
            f'a picture cannot have the ending "{Path(path).suffix}"', f"output file {path}",
            f"use one of .{', .'.join(FORMATS)}",
        )  # fmt: skip
    picture = io.BytesIO()
    draw(case, readings).savefig(picture, format=ending, dpi=150)
    return put_file(path, picture.getvalue(), replace=replace)
