"""Reference sources: what intervals are tried out on before they are given.

A fixed mixture of plain shapes (level floors, blocks, tents, bumps, wedges, waves), some with
their edges where edges were drawn, most of them not. How narrow and how many the features of one
source are follows from how much the layout can resolve: a beam's deflections tell a handful of
numbers, a fibre's temperatures hundreds.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from srcfit.problem import Array, Grid

COUNT = 400
# the same sources for everyone: what is reported must not depend on a seed
SEED = 20261201
# numbers told by the readings at which features begin and end to get finer and more
COARSE, FINE = 10.0, 50.0
# parts of the sources that stand on a floor, of the features that add to the source, and of those
# that end at drawn edges
FLOORED, UPWARD, DRAWN = 0.7, 0.85, 0.3


@dataclass(frozen=True)
class Mixture:
    """Sizes of features as parts of the member, and their number."""

    narrow: float
    wide: float
    fewest: int
    most: int


def mixture(told: float) -> Mixture:
    """Mixture for a layout whose readings tell about `told` numbers."""
    fine = float(np.clip((told - COARSE) / (FINE - COARSE), 0.0, 1.0))
    return Mixture(
        narrow=0.03 * 3.0**-fine,
        wide=0.5 * 0.4**fine,
        fewest=round(1 + 3 * fine),
        most=round(3 + 7 * fine),
    )


def references(grid: Grid, told: float, count: int = COUNT) -> Array:
    """Reference sources on the free cells, (m', count), of no particular size.

    Parts of a complex amplitude are drawn independently.
    """
    widths = grid.widths[grid.free]
    ends = np.cumsum(widths) / widths.sum()
    x = ends - widths / widths.sum() / 2
    edges = drawn_edges(grid)
    mix = mixture(told)
    rng = np.random.default_rng(SEED)
    draws = [
        np.concatenate([_source(x, edges, mix, rng) for _ in range(grid.parts)])
        for _ in range(count)
    ]
    return np.stack(draws, axis=1)


def drawn_edges(grid: Grid) -> Array:
    """Breaks and edges of zones, as parts of the free cells' length."""
    places = [*grid.breaks, *(place for zone in grid.zones for place in zone)]
    before = np.append(0.0, np.cumsum(grid.widths * grid.free))
    parts = np.interp(np.asarray(places, dtype=float), grid.edges, before) / before[-1]
    return np.unique(np.concatenate([[0.0, 1.0], parts]))


def _source(x: Array, edges: Array, mix: Mixture, rng: np.random.Generator) -> Array:
    f: Array = np.zeros_like(x)
    if rng.random() < FLOORED:
        f += rng.uniform(0.1, 1.0)
    for _ in range(rng.integers(mix.fewest, mix.most + 1)):
        size = np.exp(rng.uniform(np.log(0.3), np.log(3.0)))
        sign = 1.0 if rng.random() < UPWARD else -1.0
        kind = FEATURES[rng.integers(len(FEATURES))]
        f += sign * size * kind(x, *_place(edges, mix, rng), rng)
    return f


def _place(edges: Array, mix: Mixture, rng: np.random.Generator) -> tuple[float, float]:
    """Start and end of a feature, whole on the member."""
    if rng.random() < DRAWN and len(edges) > 2:
        a, b = np.sort(rng.choice(edges, 2, replace=False))
        return float(a), float(b)
    width = float(np.exp(rng.uniform(np.log(mix.narrow), np.log(mix.wide))))
    start = float(np.clip(rng.random() - width / 2, 0.0, 1.0 - width))
    return start, start + width


def _block(x: Array, a: float, b: float, rng: np.random.Generator) -> Array:
    return ((x > a) & (x < b)).astype(float)


def _tent(x: Array, a: float, b: float, rng: np.random.Generator) -> Array:
    top = rng.uniform(a, b)
    rise = (x - a) / max(top - a, 1e-3)
    return np.clip(np.minimum(rise, (b - x) / max(b - top, 1e-3)), 0.0, 1.0)


def _bump(x: Array, a: float, b: float, rng: np.random.Generator) -> Array:
    return np.asarray(np.exp(-(((x - (a + b) / 2) / max(0.6 * (b - a), 0.01)) ** 2)))


def _wedge(x: Array, a: float, b: float, rng: np.random.Generator) -> Array:
    return x if rng.random() < 0.5 else 1 - x


def _wave(x: Array, a: float, b: float, rng: np.random.Generator) -> Array:
    return np.asarray(np.sin(np.pi * (rng.uniform(0.5, 4.0) * x + rng.uniform(0.0, 2.0))))


# blocks twice: loads have edges
FEATURES: tuple[Callable[[Array, float, float, np.random.Generator], Array], ...] = (
    _block, _block, _tent, _bump, _wedge, _wave,
)  # fmt: skip
