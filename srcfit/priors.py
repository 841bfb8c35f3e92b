"""Roughness, correlation lengths and steps: what is assumed about the source before the readings.

A family is a covariance C of the source's variation about its own constant, on the cells that are
not held at zero, up to one standard deviation sigma:

    C = scale * base(|x - s| or x, s) + steps * B,    B(x, s) = pieces that hold both x and s.

The base is a roughness penalty of order 0, 1 or 2 (the inverse of f'Qf), a Matern 3/2 kernel or
the exponential (first-order Markov) kernel. Strength and sigma say the same: tau = 1 / sigma**2.

Sources: Rasmussen & Williams, Gaussian Processes for Machine Learning (2006), ch. 4 and 6, for the
kernels and for roughness penalties as covariances.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from srcfit.problem import Array, Grid

Base = Literal["roughness-0", "roughness-1", "roughness-2", "matern", "markov"]

# sigma runs over these multiples of the level's scale (four decades), with this many values
REACH = 100.0
RUNGS = 61
# a cautious source varies by at least this part of its own mean level
FLOOR = 0.5


@dataclass(frozen=True)
class Family:
    """One covariance of the source, up to sigma.

    Attributes
    ----------
    name : str
        As written to ladder.csv.
    base : {"roughness-0", "roughness-1", "roughness-2", "matern", "markov"}
    length : float
        Correlation length of matern and markov, as a part of the length of the free cells.
    scale, steps : float
        Weights of the base and of the steps at drawn edges.
    """

    name: str
    base: Base
    length: float = 0.0
    scale: float = 1.0
    steps: float = 0.0


SMOOTH = (
    Family("first differences", "roughness-1"),
    Family("Matern 0.1", "matern", 0.1),
    Family("Matern 0.2", "matern", 0.2),
    Family("Matern 0.4", "matern", 0.4),
)
STEPPED = (
    Family("Matern 0.1 + steps", "matern", 0.1, steps=4.0),
    Family("Matern 0.2 + steps", "matern", 0.2, steps=4.0),
    Family("steps + small Matern 0.2", "matern", 0.2, scale=0.05, steps=1.0),
)
CAUTIOUS = (
    Family("Markov 0.1 + steps", "markov", 0.1, steps=3.0),
    Family("Markov 0.2 + steps", "markov", 0.2, steps=3.0),
)
# the kernel that sets the scale of sigma for every family
SCALE = ("markov", 0.2)


def estimate_families(pieces: Array) -> tuple[Family, ...]:
    """Families that the estimate is averaged over; those with steps only where pieces exist."""
    return SMOOTH + STEPPED if pieces.shape[1] else SMOOTH


def family(roughness: int | float | str, grid: Grid) -> Family:
    """The one family meant by a roughness order 0, 1, 2 or by a correlation length in metres.

    `roughness` "averaged" means the first differences, on which the choices are compared.
    """
    if roughness == "averaged":
        return SMOOTH[0]
    if isinstance(roughness, int):
        orders: dict[int, Base] = {0: "roughness-0", 1: "roughness-1", 2: "roughness-2"}
        return Family(f"roughness {roughness}", orders[roughness])
    part = float(roughness) / float(grid.widths[grid.free].sum())
    return Family(f"Matern {float(roughness):g} m", "matern", part)


def covariance(base: str, length: float, grid: Grid) -> Array:
    """Covariance (m', m') of the base kernel between the middles of the m' free cells.

    Here and below m' counts the free cells of every part; parts are independent. Roughness orders
    give the covariance whose inverse is the penalty, up to its null space, which is carried by
    unpenalised columns.
    """
    x = grid.middles[grid.free]
    if base.startswith("roughness"):
        S = factor(base, length, grid)
        return np.asarray(S @ S.T, dtype=float)
    r = np.abs(x[:, None] - x[None, :]) / (length * grid.widths[grid.free].sum())
    if base == "markov":
        return grid.per_part(np.asarray(np.exp(-r)))
    r *= np.sqrt(3.0)
    return grid.per_part(np.asarray((1 + r) * np.exp(-r)))


def factor(base: str, length: float, grid: Grid) -> Array:
    """Factor S (m', j) with covariance S S'.

    Closed forms for the roughness orders: f = S z turns f'Qf into z'z, with
    Q of the integrals of f**2, f'**2 and f''**2 over x.
    """
    x, h = grid.middles[grid.free], grid.widths[grid.free]
    if base == "roughness-0":
        return grid.per_part(np.diag(1 / np.sqrt(h)))
    gaps = np.diff(x)
    if base == "roughness-1":
        return grid.per_part(np.asarray(np.tri(len(x), len(x) - 1, -1) * np.sqrt(gaps)))
    if base == "roughness-2":
        inner = x[1:-1]
        mean_gap = (gaps[1:] + gaps[:-1]) / 2
        ramp = np.maximum(x[:, None] - inner[None, :], 0.0)
        return grid.per_part(np.asarray(ramp * np.sqrt(mean_gap)))
    return np.asarray(np.linalg.cholesky(covariance(base, length, grid)), dtype=float)


def natural(base: str, grid: Grid) -> float:
    """Sd of a roughness order's amplitude for which the source varies by about one over the cells.

    Roughness orders are in metres, so that tau is that of the integral; kernels have variance 1.
    """
    if not base.startswith("roughness"):
        return 1.0
    length = float(grid.widths[grid.free].sum())
    return float(length ** (0.5 - int(base[-1])))


def null_columns(base: str, grid: Grid) -> Array:
    """Shapes (m', j) beyond the constant that the penalty does not see."""
    x = grid.middles[grid.free]
    if base != "roughness-2" or not len(x):
        return np.zeros((grid.parts * len(x), 0))
    return grid.per_part(((x - x.mean()) / max(np.ptp(x), np.finfo(float).tiny))[:, None])


def pieces(grid: Grid, *, zones: bool) -> Array:
    """Indicators (m', j) of the pieces within which the source may step, on the free cells.

    Stretches between zero cells and between breaks, and (with `zones`) the declared zones; each
    set of cells counts once. Nothing drawn: no piece. Features found in the readings stand last.
    """
    x = grid.middles[grid.free]
    found: list[Array] = []
    if grid.breaks or not grid.free.all():
        found += _stretches(grid)
    if zones:
        found += [((x > a) & (x < b)).astype(float) for a, b in grid.zones]
    unique: list[Array] = []
    for piece in found:
        if piece.any() and not any(np.array_equal(piece, u) for u in unique):
            unique.append(piece)
    drawn = grid.per_part(np.stack(unique, axis=1) if unique else np.zeros((len(x), 0)))
    if grid.features is not None:
        drawn = np.hstack([drawn, grid.features])
    return drawn


def _stretches(grid: Grid) -> list[Array]:
    """Indicators of the runs of free cells between zero cells and breaks."""
    starts = np.zeros(len(grid.free), dtype=bool)
    starts[0] = True
    starts[1:] |= ~grid.free[:-1]
    for at in grid.breaks:
        # a break inside a cell counts at the nearer edge
        cell = int(np.argmin(np.abs(grid.edges - at)))
        if cell < len(starts):
            starts[cell] = True
    run = np.cumsum(starts)[grid.free]
    return [(run == k).astype(float) for k in np.unique(run)]


def sigma_grid(scale: float) -> Array:
    """Log grid of sigma around the level's scale, (RUNGS,)."""
    return np.asarray(scale * np.geomspace(1 / REACH, REACH, RUNGS))


def above_floor(sigma: Array, level: float) -> NDArray[np.bool_]:
    """Mask of the sigmas that a cautious prior keeps: those above the floor, else the largest."""
    kept = sigma >= FLOOR * level
    return np.asarray(kept if kept.any() else sigma == sigma.max())
