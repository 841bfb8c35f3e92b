"""Recovery -> matplotlib figures: vector and bitmap, the same bytes for the same result."""

from __future__ import annotations

import io
import warnings
import weakref
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from srcfit.axes import (
    panels,
    plot_influence,
    plot_l_curve,
    plot_member,
    plot_modes,
    plot_panel,
    plot_readings,
    plot_residuals,
    plot_section,
    plot_sections,
    plot_source,
)
from srcfit.captions import DESCRIPTIONS, section_curves
from srcfit.drawing import draw_member, plain, short
from srcfit.recovery import Recovery

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "FIGURES", "IN_AXES", "Drawn", "draw_all", "draw_in", "draw_member", "overview",
    "plot_influence", "plot_l_curve", "plot_member", "plot_modes", "plot_readings",
    "plot_section", "plot_source", "save_figures",
]  # fmt: skip
WIDTH = 7.2  # inches, all figures


@dataclass(frozen=True)
class Drawn:
    """One figure, drawn: its vector and bitmap forms and its text alternative."""

    svg: str
    png: bytes
    text: str


def new_figure(height: float, above: float = 0.15) -> Figure:
    """An empty figure; `above` inches stay free over the axes."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(WIDTH, height))
    figure.subplots_adjust(left=0.115, right=0.975, bottom=0.5 / height, top=1 - above / height)
    return figure


def tidy(figure: Figure) -> Figure:
    """Small ticks, open frame, labels at fixed places (measuring the ticks for them is slow)."""
    from matplotlib.transforms import blended_transform_factory

    inches = figure.get_size_inches()[1]
    for ax in figure.axes:
        ax.tick_params(labelsize=9)
        ax.xaxis.label.set_fontsize(9)
        ax.yaxis.label.set_fontsize(9)
        height = ax.get_position().height * inches
        ax.xaxis.set_label_coords(0.5, -0.30 / height)
        both = blended_transform_factory(figure.transFigure, ax.transAxes)
        ax.yaxis.set_label_coords(0.03, 0.5, transform=both)
        for side in ("right", "top"):
            ax.spines[side].set_visible(False)
    return figure


def _single(
    plot: Callable[[Recovery, Axes], None], height: float, above: float = 0.15
) -> Callable[[Recovery], Figure]:
    def draw(recovery: Recovery) -> Figure:
        figure = new_figure(height, above)
        plot(recovery, figure.add_subplot())
        return tidy(figure)

    return draw


def readings_figure(recovery: Recovery) -> Figure:
    """All panels of readings, fit above and residuals below."""
    count = max(len(panels(recovery)), 1)
    figure = new_figure(3.3 * count + 0.55, 0.45)
    outer = figure.add_gridspec(count, 1, hspace=0.28)
    pairs = []
    for i in range(count):
        inner = outer[i].subgridspec(2, 1, height_ratios=(5, 2), hspace=0.12)
        pairs.append((figure.add_subplot(inner[0]), figure.add_subplot(inner[1])))
    plot_readings(recovery, pairs)
    return tidy(figure)


def section_figure(recovery: Recovery) -> Figure:
    """Each force inside the member in axes of its own, one above the other."""
    count = max(len(section_curves(recovery)), 1)
    figure = new_figure(2.2 * count + 0.55, 0.35)
    plot_sections(recovery, list(figure.subplots(count, 1, squeeze=False)[:, 0]))
    figure.subplots_adjust(hspace=0.22)
    return tidy(figure)


def overview(recovery: Recovery) -> Figure:
    """The member, the source and the first panel of readings with its residuals, in one figure."""
    figure = new_figure(9.4, 0.75)
    outer = figure.add_gridspec(3, 1, height_ratios=(2.0, 3.4, 3.6), hspace=0.55)
    inner = outer[2].subgridspec(2, 1, height_ratios=(5, 2), hspace=0.12)
    plot_member(recovery, figure.add_subplot(outer[0]))
    plot_source(recovery, figure.add_subplot(outer[1]))
    plot_readings(recovery, [(figure.add_subplot(inner[0]), figure.add_subplot(inner[1]))])
    figure.suptitle(plain(short(recovery.case.title, 80)), fontsize=11)
    return tidy(figure)


IN_AXES: dict[str, Callable[[Recovery, Axes], None]] = {
    "member": plot_member,
    "source": plot_source,
    "section": plot_section,
    "readings": plot_panel,
    "residuals": plot_residuals,
    "l-curve": plot_l_curve,
    "influence": plot_influence,
    "modes": plot_modes,
}


def draw_in(recovery: Recovery, ax: Axes, what: str = "source") -> Axes:
    """Draw one thing (a key of `IN_AXES`) into given axes and return them."""
    if what not in IN_AXES:
        raise ValueError(f"there is no plot of {what!r}; choose one of {', '.join(IN_AXES)}")
    IN_AXES[what](recovery, ax)
    return ax


FIGURES: dict[str, Callable[[Recovery], Figure]] = {
    "member": _single(plot_member, 2.1, 0.3),
    "source": _single(plot_source, 3.7, 0.65),
    "section": section_figure,
    "readings": readings_figure,
    "l-curve": _single(plot_l_curve, 3.6),
    "influence": _single(plot_influence, 2.8),
    "modes": _single(plot_modes, 3.1, 0.6),
}


@contextmanager
def quiet() -> Iterator[None]:
    """Fixed ids, text kept as text; glyphs that the font lacks are no reason to stop."""
    import matplotlib as mpl

    settings: Any = {
        "svg.hashsalt": "srcfit", "svg.fonttype": "none", "font.family": ["DejaVu Sans"],
        "path.simplify": True, "axes.unicode_minus": True,
    }  # fmt: skip
    with mpl.rc_context(settings), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from", category=UserWarning)
        yield


def drawn_as(figure: Figure, text: str) -> Drawn:
    """Both forms of a figure (inside `quiet`) with its text alternative."""
    vector, bitmap = io.StringIO(), io.BytesIO()
    figure.savefig(vector, format="svg", metadata={"Date": None, "Creator": "srcfit"})
    figure.savefig(bitmap, format="png", dpi=110, metadata={"Software": "srcfit"})
    return Drawn(vector.getvalue(), bitmap.getvalue(), text)


def draw_all(recovery: Recovery, names: Sequence[str] | None = None) -> dict[str, Drawn]:
    """Draw each figure once.

    Parameters
    ----------
    recovery : Recovery
    names : sequence of str, optional
        Keys of `FIGURES`; all when left out.

    Returns
    -------
    mapping name -> Drawn
    """
    global _latest
    if names is None and _latest is not None and _latest[0]() is recovery:
        return dict(_latest[1])
    out = {}
    with quiet():
        for name in FIGURES if names is None else names:
            out[name] = drawn_as(FIGURES[name](recovery), DESCRIPTIONS[name](recovery))
    if names is None:
        _latest = weakref.ref(recovery), out
    return dict(out)


# The folder of figures and the page want the same drawings one after the other.
_latest: tuple[weakref.ReferenceType[Recovery], dict[str, Drawn]] | None = None


def save_figures(
    recovery: Recovery, folder: Path | str, drawn: Mapping[str, Drawn] | None = None
) -> list[Path]:
    """Write each figure as SVG and PNG; the same result gives the same bytes.

    Parameters
    ----------
    recovery : Recovery
    folder : path
        Made when it does not exist.
    drawn : mapping, optional
        What `draw_all` gave, to save drawing twice.

    Returns
    -------
    list of Path
        The files written.
    """
    return save_drawn(drawn or draw_all(recovery), Path(folder))


def save_drawn(drawn: Mapping[str, Drawn], folder: Path) -> list[Path]:
    """Write figures that are drawn already; the files written."""
    folder.mkdir(parents=True, exist_ok=True)
    paths = []
    for name, picture in drawn.items():
        for suffix, data in ((".svg", picture.svg.encode()), (".png", picture.png)):
            path = folder / f"{name}{suffix}"
            path.write_bytes(data)
            paths.append(path)
    return paths
