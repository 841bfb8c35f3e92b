"""What each figure draws: Recovery -> matplotlib axes."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from srcfit.captions import (
    SectionCurve,
    choices_of,
    extent,
    per_metre,
    section_curves,
    source_word,
    unit,
)
from srcfit.drawing import BLACK, BLUE, GREY, MARKERS, VERMILLION, draw_member, plain, short
from srcfit.errors import UnitError
from srcfit.frames import flags, ladder_of, number, numbers, pretty, texts
from srcfit.recovery import Recovery, Result
from srcfit.rounding import UNDETERMINED, brief, minus, plus_minus
from srcfit.units import factor

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Array = NDArray[np.float64]
LINES = ("-", "--", "-.", ":")
INKS = (BLUE, VERMILLION, BLACK)
SHOWN_LINES = 12  # influence lines in the printed figure


def plot_member(recovery: Result, ax: Axes) -> None:
    """The member to scale with its sensors."""
    draw_member(recovery.case.member, recovery.readings, ax, per_metre=per_metre(recovery))


def labelled(name: str, unit_text: str) -> str:
    """Axis label: name and unit in brackets."""
    shown = pretty(unit_text)
    return plain(f"{name} [{shown}]" if shown else name)


def plot_source(recovery: Result, ax: Axes) -> None:
    """Source density with its band, the zones' means and the lumped parts."""
    frame = recovery.source
    edges = np.append(numbers(frame, "from"), numbers(frame, "to")[-1:])
    estimate = numbers(frame, "estimate")
    lower, upper = numbers(frame, "lower"), numbers(frame, "upper")
    ax.axhline(0, color=GREY, lw=0.6)
    if len(frame):
        if np.isfinite(lower).any():
            level = brief(100 * number(recovery.facts.get("level") or 0.95))
            ax.stairs(
                np.nan_to_num(upper), edges, baseline=np.nan_to_num(lower), fill=True,
                color="#bcd9ea", label=f"{level} % band, point by point",
            )  # fmt: skip
        ax.stairs(estimate, edges, baseline=None, color=BLUE, lw=1.6, label="estimate")
    _zones(recovery, ax)
    _lumped(recovery, ax)
    ax.set_xlim(*extent(recovery))
    ax.set_xlabel(labelled("x", unit(recovery, "position")))
    ax.set_ylabel(labelled(source_word(recovery), unit(recovery, "source")))
    legend(ax, 2, 1.07)


def _zones(recovery: Result, ax: Axes) -> None:
    """Edges and means of the zones; names above, dropped where they would overlap."""
    frame = recovery.zones
    mean = numbers(frame, "mean")
    start, end = numbers(frame, "from"), numbers(frame, "to")
    for a, b in zip(start, end, strict=True):
        for edge in (a, b):
            ax.axvline(edge, color=GREY, lw=0.6, ls=(0, (1, 2)), zorder=0)
    if np.isfinite(mean).any():
        ax.hlines(mean, start, end, color=BLACK, lw=1.4, ls="--", label="mean of a zone")
    x0, x1 = extent(recovery)
    rows = name_rows(start, end)
    for name, a, b, row in zip(texts(frame, "name"), start, end, rows, strict=True):
        room = max(int(90 * (b - a) / ((x1 - x0) or 1.0)), 3)
        ax.text(
            (a + b) / 2, 1.015 - 0.07 * row, plain(short(name, room)), ha="center", va="bottom",
            fontsize=8, color=BLACK, transform=ax.get_xaxis_transform(),
        )  # fmt: skip


def name_rows(start: Array, end: Array) -> list[int]:
    """Row of each zone's name, 0 on top, so that names of overlapping zones stand apart."""
    ends: list[float] = []
    rows = []
    for a, b in zip(start, end, strict=True):
        row = next((i for i, last in enumerate(ends) if a >= last), len(ends))
        ends[row : row + 1] = [b]
        rows.append(row)
    return rows


def _lumped(recovery: Result, ax: Axes) -> None:
    rows = [r for r in recovery.facts.get("lumped") or [] if np.isfinite(number(r.get("at")))]
    for i, row in enumerate(rows):
        label = f"{short(str(row.get('name')))}: {plus_minus(row, unit(recovery, 'total'))}"
        ax.axvline(
            number(row["at"]), 0, 0.96, color=VERMILLION, lw=1.3, ls=LINES[1 + i % 3],
            marker=MARKERS[i % len(MARKERS)], markevery=[1], ms=6, label=plain(label),
        )  # fmt: skip


def legend(ax: Axes, columns: int = 2, rise: float = 1.0, **place: Any) -> None:
    """Legend above the axes (a fixed place: looking for the emptiest corner costs time)."""
    handles, labels = ax.get_legend_handles_labels()
    if handles:
        where: dict[str, Any] = {
            "loc": "lower left",
            "bbox_to_anchor": (0.0, rise),
            "borderaxespad": 0.2,
        } | place
        ax.legend(handles, labels, fontsize=8, frameon=False, ncols=columns, **where)


def plot_sections(recovery: Recovery, axes: Sequence[Axes]) -> None:
    """Moment and shear, or the flow or force, inside the member with its interval, one an axes."""
    for curve, ax in zip(section_curves(recovery), axes, strict=False):
        _section(recovery, curve, ax)
    for ax in list(axes)[:-1]:
        ax.tick_params(labelbottom=False)
        ax.set_xlabel("")
    if len(axes):
        legend(axes[0])


def plot_section(recovery: Recovery, ax: Axes) -> None:
    """The moment of a beam, the flow or force of another member, with its interval."""
    plot_sections(recovery, [ax])


def _section(recovery: Recovery, curve: SectionCurve, ax: Axes) -> None:
    ax.axhline(0, color=GREY, lw=0.6)
    if np.isfinite(curve.lower).any():
        level = brief(100 * number(recovery.facts.get("level") or 0.95))
        ax.fill_between(curve.x, curve.lower, curve.upper, color="#bcd9ea", lw=0,
                        label=f"{level} % interval, point by point")  # fmt: skip
    if np.isfinite(curve.value).any():
        ax.plot(curve.x, curve.value, color=BLUE, lw=1.4, label="estimate")
    else:
        ax.text(0.5, 0.5, UNDETERMINED, ha="center", transform=ax.transAxes)
    for support in recovery.case.member.supports:
        ax.axvline(support.at * per_metre(recovery), color=GREY, lw=0.6, ls=(0, (1, 2)), zorder=0)
    ax.set_xlim(*extent(recovery))
    ax.set_xlabel(labelled("x", unit(recovery, "position")))
    ax.set_ylabel(labelled(curve.name, curve.unit))


def panels(recovery: Result) -> list[tuple[str, str]]:
    """Sensor kind and unit of each panel of readings, in order of appearance.

    Readings of one kind share a panel in the unit that most of them have, if theirs can be
    turned into it.
    """
    return list(dict.fromkeys(p for p in _panel_of(recovery) if p[0]))


def _panel_of(recovery: Result) -> list[tuple[str, str]]:
    """Kind and unit of the panel of each row."""
    frame = recovery.readings
    pairs = list(zip(texts(frame, "kind"), texts(frame, "unit"), strict=True))
    if len(set(pairs)) == len({kind for kind, _ in pairs}):
        return pairs
    count = Counter(pairs)
    home = {
        kind: max((p for p in count if p[0] == kind), key=lambda p: count[p])[1]
        for kind, _ in count
    }
    to = {p: (p[0], home[p[0]]) for p in count if _turn(recovery, *p, home[p[0]]) is not None}
    return [to.get(p, p) for p in pairs]


def _turn(recovery: Result, kind: str, unit_text: str, other: str) -> tuple[float, float] | None:
    """(scale, shift) from a unit to another one of the same kind; None if it cannot be done."""
    if unit_text == other:
        return 1.0, 0.0
    si = {s.name: s.unit for s in recovery.case.member.kind.sensors}.get(kind, "1")
    driven = recovery.case.member.driven
    try:
        (a, b), (c, d) = (factor(u, si, "unit", difference=driven) for u in (unit_text, other))
    except UnitError:
        return None
    return a / c, (b - d) / c


def turned(recovery: Result) -> tuple[Array, Array]:
    """Scale and shift (n,) of every row from its own unit into that of its panel."""
    frame = recovery.readings
    pairs = zip(texts(frame, "kind"), texts(frame, "unit"), _panel_of(recovery), strict=True)
    known: dict[tuple[str, str, str], tuple[float, float]] = {}
    out = []
    for kind, own, (_, home) in pairs:
        key = (kind, own, home)
        if key not in known:
            known[key] = _turn(recovery, *key) or (1.0, 0.0)
        out.append(known[key])
    both = np.array(out, dtype=float).reshape(-1, 2)
    return both[:, 0], both[:, 1]


def fit_curve(recovery: Recovery, kind: str, unit_text: str) -> Array | None:
    """Predicted readings of one kind along `pictures.x` in the unit `unit_text`, or None."""
    curve = recovery.pictures.fit.get(kind)
    if curve is None:
        return None
    sensors = {s.name: s.unit for s in recovery.case.member.kind.sensors}
    try:
        scale, offset = factor(unit_text, sensors.get(kind, "1"), f"readings of {kind}")
    except UnitError:  # a reading of a kind without a unit of its own: marks only
        return None
    return np.asarray((np.real(curve) - offset) / scale, dtype=float)


def plot_readings(recovery: Recovery, axes: Sequence[Sequence[Axes]]) -> None:
    """Readings against the fit, and standardised residuals below, one pair of axes per panel.

    Parameters
    ----------
    recovery : Recovery
    axes : sequence of (upper, lower) axes
        One pair per entry of `panels(recovery)`.
    """
    for (kind, unit_text), (upper, lower) in zip(panels(recovery), axes, strict=False):
        _panel(recovery, kind, unit_text, upper)
        _residuals(recovery, kind, unit_text, lower)
    if len(axes):
        legend(axes[0][0], 2)


def plot_panel(recovery: Recovery, ax: Axes) -> None:
    """Readings of the first kind and unit against the fit."""
    for kind, unit_text in panels(recovery)[:1]:
        _panel(recovery, kind, unit_text, ax)
        ax.tick_params(labelbottom=True)
    ax.set_xlabel(labelled("x", unit(recovery, "position")))
    legend(ax)


def plot_residuals(recovery: Recovery, ax: Axes) -> None:
    """Standardised residuals of the readings of the first kind and unit."""
    for kind, unit_text in panels(recovery)[:1]:
        _residuals(recovery, kind, unit_text, ax)


def here(recovery: Result, kind: str, unit_text: str) -> NDArray[np.bool_]:
    """Rows (n,) that stand in a panel."""
    return np.array([p == (kind, unit_text) for p in _panel_of(recovery)], dtype=bool)


def _panel(recovery: Recovery, kind: str, unit_text: str, ax: Axes) -> None:
    frame, rows = recovery.readings, here(recovery, kind, unit_text)
    scale, shift = turned(recovery)
    x, sd, used = numbers(frame, "x"), scale * numbers(frame, "sd"), flags(frame)
    value, predicted = (scale * numbers(frame, c) + shift for c in ("value", "predicted"))
    good, bad = rows & used, rows & ~used
    many = int(good.sum()) > 200
    curve = fit_curve(recovery, kind, unit_text)
    if curve is not None:
        ax.plot(recovery.pictures.x * per_metre(recovery), curve, color=BLUE, lw=1.4,
                label="response of the recovered source")  # fmt: skip
    bars = np.where(np.isfinite(sd), sd, 0.0)
    if many:
        ax.plot(x[good], value[good], ".", color=BLACK, ms=2.5, label="reading")
    else:
        ax.errorbar(x[good], value[good], bars[good], fmt="o", color=BLACK, ms=3.5, lw=1,
                    label="reading ± 1 sd")  # fmt: skip
        ax.plot(x[good], predicted[good], "_", color=BLUE, ms=9, mew=1.1,
                label="predicted, offsets included")  # fmt: skip
    if bad.any():
        ax.plot(x[bad], value[bad], "x", color=GREY, ms=4, mew=0.9, label="not used")
    ax.set_xlim(*extent(recovery))
    ax.set_ylabel(labelled(kind, unit_text))
    ax.tick_params(labelbottom=False)


def _residuals(recovery: Recovery, kind: str, unit_text: str, ax: Axes) -> None:
    frame = recovery.readings
    rows = here(recovery, kind, unit_text) & flags(frame)
    x, z = numbers(frame, "x")[rows], numbers(frame, "standardised")[rows]
    ax.axhspan(-2, 2, color="#eef0f2", lw=0, zorder=0)
    ax.axhline(0, color=GREY, lw=0.6)
    if len(x) > 200:
        ax.plot(x, z, ".", color=BLACK, ms=2.5)
    else:
        ax.vlines(x, 0, z, color=BLACK, lw=1)
        ax.plot(x, z, "o", color=BLACK, ms=3)
    top = np.nanmax(np.abs(z)) if np.isfinite(z).any() else 0.0
    ax.set_ylim(-max(3.0, 1.1 * top), max(3.0, 1.1 * top))
    ax.set_xlim(*extent(recovery))
    ax.set_xlabel(labelled("x", unit(recovery, "position")))
    ax.set_ylabel("residual / sd")


def plot_l_curve(recovery: Recovery, ax: Axes) -> None:
    """Residual norm against roughness norm along the ladder, every criterion's choice marked."""
    rows = ladder_of(recovery.ladder)
    strength, a, b = (numbers(rows, c) for c in ("strength", "residual_norm", "roughness_norm"))
    good = (strength > 0) & (a > 0) & (b > 0)
    strength, a, b = strength[good], a[good], b[good]
    ax.set_xlabel("norm of the residuals")
    ax.set_ylabel("norm of the roughness")
    if not len(strength):
        ax.text(0.5, 0.5, "no ladder to show", ha="center", transform=ax.transAxes)
        return
    ax.loglog(a, b, color=BLUE, lw=1.4)
    chosen = str((recovery.facts.get("strength") or {}).get("choose"))
    for i, (name, value) in enumerate(choices_of(recovery).items()):
        mark = " (chosen)" if name == chosen else ""
        k = int(np.argmin(np.abs(np.log(strength) - np.log(value))))
        ax.plot(
            a[k], b[k], linestyle="none", marker=MARKERS[i % len(MARKERS)],
            mec=INKS[i % 3], mfc=INKS[i % 3] if name == chosen or i < len(MARKERS) else "none",
            ms=10 if name == chosen else 7,
            label=plain(minus(f"{name}: {brief(value)}") + mark),
        )  # fmt: skip
    _log_ticks(ax)
    legend(ax, 1, loc="upper right", bbox_to_anchor=(1.0, 1.0))


def _log_ticks(ax: Axes) -> None:
    """Few plain numbers on log axes, also when they span less than a decade."""
    from matplotlib.ticker import FuncFormatter, LogLocator, NullLocator

    form = FuncFormatter(lambda v, _: minus(brief(v, 2)))
    for axis, (low, high) in ((ax.xaxis, ax.get_xlim()), (ax.yaxis, ax.get_ylim())):
        decades = np.log10(high / low)
        subs = (1.0,) if decades > 2.5 else (1.0, 2.0, 5.0)
        axis.set_major_locator(LogLocator(subs=subs, numticks=8))
        axis.set_major_formatter(form)
        axis.set_minor_locator(NullLocator())


def plot_influence(recovery: Recovery, ax: Axes) -> None:
    """Influence lines, each divided by its own largest value; at most twelve, evenly picked."""
    lines = np.real(np.atleast_2d(recovery.pictures.influence))
    x = recovery.pictures.x * per_metre(recovery)
    ax.axhline(0, color=GREY, lw=0.6)
    ax.set_xlim(*extent(recovery))
    ax.set_xlabel(labelled("place of a unit source, x", unit(recovery, "position")))
    ax.set_ylabel("reading / its largest")
    if not lines.size:
        return
    place = numbers(recovery.readings, "x")
    pick = np.unique(np.linspace(0, len(lines) - 1, min(SHOWN_LINES, len(lines))).astype(int))
    for i, k in enumerate(pick):
        top = np.max(np.abs(lines[k])) or 1.0
        at = place[recovery.pictures.influence_of[k]]
        ax.plot(x, lines[k] / top, color=INKS[i % 3], ls=LINES[i // 3 % 4], lw=1.1)
        if np.isfinite(at):
            ax.plot([at], [np.interp(at, x, lines[k] / top)], MARKERS[i % 7], color=INKS[i % 3],
                    ms=5)  # fmt: skip


def plot_modes(recovery: Recovery, ax: Axes) -> None:
    """First modes, each divided by its own largest value, with their eigenvalues."""
    modes = np.real(np.asarray(recovery.pictures.modes))
    ax.axhline(0, color=GREY, lw=0.6)
    ax.set_xlim(*extent(recovery))
    ax.set_xlabel(labelled("x", unit(recovery, "position")))
    ax.set_ylabel("mode / its largest")
    if not modes.size:
        return
    x = recovery.pictures.x * per_metre(recovery)
    for i, column in enumerate(modes.T[:6]):
        top = np.max(np.abs(column)) or 1.0
        label = minus(f"{i + 1}: {brief(np.real(recovery.pictures.eigenvalues[i]))}")
        ax.plot(x, column / top, color=INKS[i % 3], ls=LINES[i % 4],
                lw=1.3, label=label)  # fmt: skip
    legend(ax, 3, title="mode: eigenvalue", title_fontsize=8)
