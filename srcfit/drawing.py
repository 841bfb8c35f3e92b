"""The member drawn to scale: ends, supports, hinges, interfaces, stiffness, sensors."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from srcfit.frames import flags, numbers, pretty_header, texts, unit_of
from srcfit.member import RIGID, End, Member, Profile
from srcfit.units import factor

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

Array = NDArray[np.float64]

BLUE, VERMILLION, BLACK, GREY = "#0072b2", "#d55e00", "#000000", "#6b6b6b"
MARKERS = ("v", "o", "s", "D", "^", "P", "X")
FULL, LEAST = 0.34, 0.10  # half the bar's drawn depth: at the largest stiffness, and at least


def plain(text: str) -> str:
    """Text that is drawn as it stands: no formulas, no control or direction characters."""
    from unicodedata import category

    kept = "".join(c if category(c)[0] != "C" else " " for c in str(text))
    return kept.replace("$", r"\$").removeprefix("_")


def short(text: str, most: int = 28) -> str:
    """`text` cut for a label inside a picture."""
    return text if len(text) <= most else text[: most - 1] + "…"


def draw_member(
    member: Member, readings: pd.DataFrame, ax: Axes, *, per_metre: float | None = None
) -> None:
    """Draw a member to scale along x, with its sensors above.

    Parameters
    ----------
    member : Member
    readings : DataFrame
        As `Recovery.readings`; the unit of its ``x [unit]`` is that of the drawing.
    ax : matplotlib axes
    per_metre : float, optional
        Position units in one metre; found from the header of `readings` when left out.
    """
    unit = unit_of(readings, "x")
    if per_metre is None:
        per_metre = 1.0 / factor(unit or "m", "m", "readings, x")[0]
    span = member.length * per_metre
    _bar(member, ax, per_metre)
    _foundation(member, ax, per_metre)
    _end(member, member.left, member.start * per_metre, -1, ax)
    _end(member, member.right, member.end * per_metre, 1, ax)
    for support in member.supports:
        _support(support.at * per_metre, support.restraint.stiffness, support.word, ax)
    for hinge in member.hinges:
        ax.plot([hinge.at * per_metre], [0], "o", mfc="white", mec=BLACK, ms=7, zorder=5)
        _label(ax, hinge.at * per_metre, "hinge", -0.80)
    for interface in member.interfaces:
        _interface(interface.at * per_metre, ax)
    _sensors(readings, ax)
    ax.set_xlim(member.start * per_metre - 0.06 * span, member.end * per_metre + 0.06 * span)
    ax.set_ylim(-1.12, 1.0)
    ax.set_yticks([])
    for side in ("left", "right", "top"):
        ax.spines[side].set_visible(False)
    word = "radius" if member.kind.geometry != "line" or _radial(member) else "x"
    ax.set_xlabel(plain(pretty_header(f"{word} [{unit}]" if unit else word)))


def _radial(member: Member) -> bool:
    return member.kind.name == "radial_aquifer"


def _stiffness(member: Member) -> Profile:
    return member.profiles["p2" if member.kind.order == 4 else "p"]


def _bar(member: Member, ax: Axes, per: float) -> None:
    """The member itself, deeper where it is stiffer (third root); a wedge when radial."""
    profile = _stiffness(member)
    x = _fine(profile, member)
    if member.kind.geometry != "line" or _radial(member):
        depth = LEAST / 3 + (FULL - LEAST / 3) * x / member.end
    else:
        value = np.abs(np.real(_both_sides(profile, x)))
        top = np.nanmax(value) if np.isfinite(value).any() else 1.0
        depth = np.maximum(FULL * np.cbrt(value / (top or 1.0)) * 0.6, LEAST)
    ax.fill_between(
        x * per, -depth, depth, facecolor="#e9eef2", edgecolor=BLACK, linewidth=1.0, zorder=2
    )
    if member.left.axis:
        ax.axvline(member.start * per, color=BLACK, lw=0.8, ls=(0, (8, 2, 1, 2)))


def _fine(profile: Profile, member: Member) -> Array:
    """Places that show each piece: both sides of every step, more inside curved pieces."""
    inner = [e for e in profile.edges if member.start < e < member.end]
    count = 2 if profile.stepped and member.kind.geometry == "line" else 60
    ends = [member.start, *inner, member.end]
    parts = [np.linspace(a, b, count) for a, b in pairwise(ends)]
    return np.concatenate(parts)


def _both_sides(profile: Profile, x: Array) -> Array:
    """Values with the left limit at the first of two equal places, the right at the second."""
    right = profile(x)
    first = np.append(np.diff(x) == 0, False)
    last = np.zeros_like(first)
    last[-1] = True
    out: Array = np.where(first | last, profile(x, "left"), right)
    return out


def _foundation(member: Member, ax: Axes, per: float) -> None:
    """Springs under a bedded stretch; arrows out of one that loses heat, water or matter."""
    profile = member.profiles.get("p0" if member.kind.order == 4 else "q")
    if profile is None:
        return
    x = np.linspace(member.start, member.end, 41)[3:-3:2]
    x = x[np.abs(np.real(profile(x))) > 0]
    if not len(x):
        return
    loses = member.kind.relative
    _glyph(ax, x * per, -0.56, "loss" if loses else "spring", 13, GREY)
    _label(ax, float(x[len(x) // 2]) * per, "loss" if loses else "foundation", -0.98, colour=GREY)


def _end(member: Member, end: End, x: float, side: int, ax: Axes) -> None:
    """One end by what it holds, not by its word; the word stands below."""
    held, turn = end.response.stiffness, end.rotation.stiffness
    rigid = held == RIGID
    if end.axis:
        pass
    elif member.kind.order == 4:
        if turn == RIGID:
            _glyph(ax, x, 0, "wall" if rigid else "guide", 34, BLACK, side)
        else:
            if rigid:
                _glyph(ax, x, -0.30, "pin", 14)
            elif held:
                _glyph(ax, x, -0.42, "spring", 18)
            if turn:
                _glyph(ax, x, 0, "spiral", 18, BLACK, side)
    elif rigid:
        _glyph(ax, x, 0, "wall", 34, BLACK, side)
    elif held:
        _glyph(ax, x, 0, "wave" if member.kind.relative else "sideways", 26, BLACK, side)
    else:
        _glyph(ax, x, 0, "shut", 30, BLACK, side)
    _label(ax, x, short(end.word, 14), -0.80, "left" if side < 0 else "right")


def _support(x: float, stiffness: float, word: str, ax: Axes) -> None:
    if stiffness == RIGID:
        _glyph(ax, x, -0.42, "pin", 16)
    else:
        _glyph(ax, x, -0.48, "spring", 18)
    _label(ax, x, short(word, 14), -0.80)


def _interface(x: float, ax: Axes) -> None:
    _glyph(ax, x, 0, "gap", 34, VERMILLION)
    _label(ax, x, "interface", -0.80, colour=VERMILLION)


def _strokes() -> dict[str, tuple[list[tuple[float, float]], ...]]:
    """Glyphs as strokes in -1 .. 1, drawn in points so that they keep their shape."""
    zigzag = [(0.0, 1.0), (0.0, 0.7)]
    zigzag += [((-0.3, 0.3)[i % 2], 0.6 - 0.2 * i) for i in range(7)]
    zigzag += [(0.0, -0.7), (0.0, -1.0)]
    foot = ([(-0.5, -1.0), (0.5, -1.0)],)
    ticks = [[(0.0, y), (0.28, y - 0.22)] for y in np.linspace(1, -0.7, 8)]
    wave = [(0.1 + 0.09 * i, 0.18 * float(np.sin(1.3 * i))) for i in range(9)]
    spiral = [
        (0.08 * a * float(np.cos(a)), 0.08 * a * float(np.sin(a))) for a in np.linspace(0, 12, 40)
    ]
    return {
        "spring": (zigzag, *foot),
        "sideways": ([(-y, x) for x, y in zigzag], [(1.0, -0.5), (1.0, 0.5)]),
        "pin": (
            [(0.0, 1.0), (-0.8, -0.5), (0.8, -0.5), (0.0, 1.0)],
            [(-1.0, -0.8), (1.0, -0.8)],
        ),
        "wall": ([(0.0, 1.0), (0.0, -1.0)], *ticks),
        "guide": ([(0.0, 1.0), (0.0, -1.0)], [(0.3, 1.0), (0.3, -1.0)]),
        "shut": ([(0.0, 1.0), (0.0, -1.0)], [(0.16, 1.0), (0.16, -1.0)]),
        "gap": ([(-0.06, 1.0), (-0.06, -1.0)], [(0.06, 1.0), (0.06, -1.0)]),
        "loss": ([(0.0, 1.0), (0.0, -1.0)], [(-0.3, -0.5), (0.0, -1.0), (0.3, -0.5)]),
        "wave": (wave, [(x, y + 0.5) for x, y in wave], [(x, y - 0.5) for x, y in wave],
                 [(0.0, 1.0), (0.0, -1.0)]),
        "spiral": (spiral, [spiral[-1], (1.0, spiral[-1][1])]),
    }  # fmt: skip


def _glyph(
    ax: Axes, x: Array | float, y: float, name: str, size: float, colour: str = BLACK,
    side: int = 1,
) -> None:  # fmt: skip
    from matplotlib.path import Path

    strokes = _strokes()[name]
    points = [(side * a, b) for stroke in strokes for a, b in stroke]
    codes = [c for stroke in strokes for c in (Path.MOVETO, *(Path.LINETO,) * (len(stroke) - 1))]
    x = np.atleast_1d(np.asarray(x, dtype=float))
    ax.plot(
        x, np.full(len(x), y), linestyle="none", marker=Path(points, codes), ms=size, mec=colour,
        mfc="none", mew=1.0, clip_on=False, zorder=4,
    )  # fmt: skip


def _label(
    ax: Axes, x: float, text: str, y: float, align: str = "center", colour: str = BLACK
) -> None:
    ax.text(x, y, plain(text), ha=align, va="center", fontsize=8, color=colour, clip_on=False)


def _sensors(readings: pd.DataFrame, ax: Axes) -> None:
    """One row of markers per sensor kind above the member; unused readings hollow, in grey."""
    x, used, kinds = numbers(readings, "x"), flags(readings), texts(readings, "kind")
    names = list(dict.fromkeys(k for k in kinds if k))
    for i, name in enumerate(names):
        here = np.array([k == name for k in kinds]) & np.isfinite(x)
        y = 0.50 + 0.42 * i / max(len(names) - 1, 2)
        marker, colour = MARKERS[i % len(MARKERS)], (BLUE, VERMILLION, BLACK)[i % 3]
        good = np.unique(x[here & used])
        many = len(good) > 120
        ax.plot(
            good, np.full(len(good), y), "|" if many else marker, color=colour,
            ms=5 if many else 4.5, mew=0.6, label=plain(f"{short(name)} ({len(good)} places)"),
            linestyle="none",
        )  # fmt: skip
        bad = np.setdiff1d(x[here & ~used], good)
        if len(bad):
            ax.plot(
                bad, np.full(len(bad), y), marker=marker, linestyle="none", mfc="none", mec=GREY,
                ms=4.5, mew=0.8,
            )  # fmt: skip
    if names:
        ax.legend(
            loc="lower left", bbox_to_anchor=(0.0, 0.98), ncols=3, frameon=False, fontsize=8,
            borderaxespad=0.0,
        )  # fmt: skip
