"""The calibrated band against the cautious one: coverage and width on many layouts.

`python tests/simulation_matrix.py [DRAWS]` prints the tables of DEVELOPERS.md (a few minutes). All
draws of one layout are answered together, by the module that the calibrated band itself uses;
`test_calibration` checks that against the answers one by one. Readings come from a finer grid and
from the forward matrices of `referee`.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Mapping, Sequence
from functools import partial

import numpy as np
import referee
import simulation
from numpy.typing import NDArray
from simulation import CELLS, FINER, SHAPES, Z
from threadpoolctl import threadpool_limits

from srcfit.bands import averaged, cautious, judge, weighed
from srcfit.calibration import calibrated, tune
from srcfit.features import featured
from srcfit.priors import FLOOR
from srcfit.problem import Grid, Problem, Questions
from srcfit.repeats import Sets, Shared
from srcfit.solvers.frame import Complement, Frame, ask, frame
from srcfit.solvers.tikhonov import tikhonov

Array = NDArray[np.float64]
Shape = Callable[[Array], Array]
_block = simulation._block

# chosen after the method was fixed
AFTER: dict[str, Shape] = {
    "trapezoid": lambda x: np.clip(np.minimum((x - 0.1) / 0.2, (0.8 - x) / 0.2), 0, 1),
    "bump and dip": lambda x: (
        0.4 + 0.9 * np.exp(-(((x - 0.27) / 0.07) ** 2)) - 0.6 * np.exp(-(((x - 0.72) / 0.12) ** 2))
    ),
    "both ends": lambda x: 0.3 + _block(0, 0.08)(x) + 1.4 * _block(0.92, 1.0)(x),
    "decay from the left": lambda x: np.exp(-6 * x),
    "comb": lambda x: (
        0.2 + np.sum([_block(c - 0.03, c + 0.03)(x) for c in (0.1, 0.3, 0.5, 0.7, 0.9)], axis=0)
    ),
    "stairs off the edges": lambda x: np.select(
        [x < 0.13, x < 0.37, x < 0.71], [0.2, 1, 0.6], 0.1
    ),
    "narrow pair": lambda x: 0.5 + 2 * _block(0.28, 0.31)(x) + 2 * _block(0.34, 0.37)(x),
    "parabola": lambda x: 0.2 + 1.5 * (2 * x - 1) ** 2,
    "chirp": lambda x: 0.8 + 0.6 * np.sin(2 * np.pi * (0.5 * x + 2 * x**2)),
    "ramp that stops": lambda x: np.where(x < 0.63, x / 0.63, 0.15),
}
FIBRE: dict[str, Shape] = {
    "two features": lambda x: 0.3 + 3 * _block(0.37, 0.38)(x) + 1.5 * _block(0.655, 0.67)(x),
    "one": lambda x: 0.5 + 2 * _block(0.5, 0.51)(x),
    "five": lambda x: (
        0.2 + 3 * _block(0.1, 0.11)(x) + _block(0.25, 0.26)(x) + 2 * _block(0.45, 0.46)(x)
        + 4 * _block(0.62, 0.63)(x) + 1.5 * _block(0.9, 0.91)(x)
    ),
    "a step": lambda x: np.where(x < 0.435, 1.0, 0.3),
    "a joint and a stretch": lambda x: (
        0.2 + 0.8 * _block(0.795, 0.85)(x) + 2 * _block(0.37, 0.3775)(x)
    ),
}  # fmt: skip


def two_span(edges: Array, x: Array) -> Array:
    """Pinned beam on a third support at the middle, by the force method."""
    at_middle, by_force = referee.beam(edges, np.array([0.5]), 1.0, lumped=[0.5])
    u, unit = referee.beam(edges, x, 1.0, lumped=[0.5])
    return np.asarray(u - unit @ (at_middle / by_force[0, 0]))


def fibre(edges: Array, x: Array, ratio: float) -> Array:
    """Response of -u'' / ratio**2 + u = f with no flux at either end, by images."""
    x, a, b = x[:, None], edges[None, :-1], edges[None, 1:]

    def along(centre: Array) -> Array:
        def whole(s: Array) -> Array:
            tail = np.exp(-ratio * np.abs(s - centre))
            return np.where(s < centre, tail, 2 - tail)

        return np.asarray((whole(b) - whole(a)) / 2)

    return along(x) + along(-x) + along(2 - x)


MEMBERS = {**simulation.MEMBERS, "two spans": two_span}
TWENTY = tuple((i / 20, (i + 1) / 20) for i in range(20))
DRAWN = ((0.36, 0.37), (0.37, 0.38), (0.38, 0.39), (0.65, 0.675), (0.49, 0.52), (0.2, 0.3),
         (0.0, 0.2), (0.8, 1.0))  # fmt: skip
FIVE = tuple((i / 5, (i + 1) / 5) for i in range(5))


def sets_of(fr: Frame, D: Array) -> Sets:
    """Whitened readings D (n, S) in a frame."""
    UD = fr.U.T @ D
    beyond = D - fr.U @ UD
    if isinstance(fr.basis, Complement):
        return Sets(UD, fr.basis.drop(beyond), np.zeros(D.shape[1]))
    QD = fr.basis.T @ beyond
    return Sets(UD, QD, ((beyond - fr.basis @ QD) ** 2).sum(axis=0))


def between(
    families: Sequence[Shared], given: Sets, level: Array, base: Array, value: Array
) -> Array:
    """Variance of the rungs' means around the averaged one, (q, S), noise stated."""
    modes = [f.spectrum.V.T @ given.QD for f in families]
    evidence = []
    for f, y in zip(families, modes, strict=True):
        rest = given.rest + (given.QD**2).sum(axis=0) - (y**2).sum(axis=0)
        e = 0.5 * np.log(f.shrink).sum(axis=0) - 0.5 * ((y**2).T @ f.shrink + rest[:, None])
        kept = f.sigma >= FLOOR * level[:, None]
        kept[~kept.any(axis=1), -1] = True
        evidence.append(np.where(kept, e, -np.inf))
    best = np.max([e.max(axis=1) for e in evidence], axis=0)[:, None]
    weights = [np.exp(e - best) for e in evidence]
    whole = np.sum([w.sum(axis=1) for w in weights], axis=0)
    total = np.zeros_like(value)
    for f, y, w in zip(families, modes, weights, strict=True):
        for t in np.flatnonzero((w / whole[:, None]).max(axis=0) > 1e-6):
            mean = base + f.T @ ((f.sigma[t] ** 2 * f.shrink[:, t])[:, None] * y)
            total += (w[:, t] / whole) * (mean - value) ** 2
    return total


def layout(
    forward: Callable[[Array, Array], Array], n: int, zones: Sequence[tuple[float, float]],
    cells: int = CELLS,
) -> tuple[Array, Array, Problem, Questions]:  # fmt: skip
    """(fine matrix, fine middles, problem without data, questions): zones, then the total."""
    x = (np.arange(n) + 0.5) / n
    fine, edges = np.linspace(0, 1, cells * FINER + 1), np.linspace(0, 1, cells + 1)
    grid = Grid(edges, np.diff(edges), np.ones(cells, dtype=bool), tuple(zones))
    rows = [grid.weights * ((grid.middles > a) & (grid.middles < b)) for a, b in zones]
    questions = np.vstack([*rows, grid.weights])
    problem = Problem(forward(edges, x), np.zeros((n, 0)), np.zeros(n), grid, places=x)
    return (
        forward(fine, x),
        (fine[1:] + fine[:-1]) / 2,
        problem,
        Questions(questions, questions[:, :0]),
    )


Found = dict[str, tuple[Array, Array]]


def run(
    forward: Callable[[Array, Array], Array], n: int, noise: float, shapes: Mapping[str, Shape],
    draws: int, zones: Sequence[tuple[float, float]] = FIVE, cells: int = CELLS, seed: int = 7,
) -> dict[str, Found]:  # fmt: skip
    """Per shape and band: how often each question held (q,), and mean half-widths (q,)."""
    fine, x, blank, questions = layout(forward, n, zones, cells)
    found: dict[str, Found] = {}
    for name, shape in shapes.items():
        f, rng = shape(x), np.random.default_rng(seed)
        u = fine @ f
        sd = noise * np.abs(u).max()
        D = (u[:, None] + sd * rng.normal(size=(n, draws))) / sd
        truth = (questions.cells @ f.reshape(cells, FINER).mean(axis=1))[:, None]
        problem = Problem(blank.A / sd, blank.B, D[:, 0], blank.grid, places=blank.places)
        fr = frame(problem)
        asked = ask(fr, questions)
        ground = weighed(fr, spread=True)
        value, _, size = averaged(fr, asked, ground)
        judged = judge(fr, asked, ground, value, size)
        given, level = sets_of(fr, D), np.full(draws, size)
        tuned = tune(fr, asked, ground, judged, 0.95, Z)
        value, half = tuned.half_widths(given, level)
        best, drawn, known = tuned.answers(given, level)
        base = asked.H @ given.UD
        spread = drawn.variance + between(tuned.families[1], given, level, base, drawn.value)
        off = np.maximum(np.abs(best.value - drawn.value), np.abs(best.value - known.value))
        cautious = Z * np.sqrt(spread + off**2)
        found[name] = {
            band: ((np.abs(value - truth) <= width).mean(axis=1), width.mean(axis=1))
            for band, width in (("calibrated", half), ("cautious", cautious))
        }
    return found


def row(found: Sequence[Mapping[str, Found]], band: str) -> str:
    """Zones on average / worst shape / totals, over several layouts."""
    held = np.stack([[f[band][0] for f in one.values()] for one in found])
    zones = held[:, :, :-1].mean(axis=2)
    worst = zones.mean(axis=0).min()
    return f"{zones.mean():.3f} / {worst:.2f} / {held[:, :, -1].mean():.3f}"


def narrower(found: Sequence[Mapping[str, Found]]) -> float:
    """Mean width of the calibrated zones over that of the cautious ones."""
    ratio = [
        f["calibrated"][1][:-1] / f["cautious"][1][:-1] for one in found for f in one.values()
    ]
    return float(np.mean(ratio))


def errors(
    forward: Callable[[Array, Array], Array], n: int, noise: float, shapes: Mapping[str, Shape],
    draws: int, seed: int = 11,
) -> Array:  # fmt: skip
    """Error of the average over that of the best strength of the ladder, (shapes, draws)."""
    fine, x, blank, _ = layout(forward, n, FIVE)
    cells = np.eye(CELLS)
    found, rng = np.empty((len(shapes), draws)), np.random.default_rng(seed)
    for i, shape in enumerate(shapes.values()):
        u = fine @ shape(x)
        sd, truth = noise * np.abs(u).max(), shape(x).reshape(CELLS, FINER).mean(axis=1)
        for j in range(draws):
            d = (u + sd * rng.normal(size=n)) / sd
            problem = Problem(blank.A / sd, blank.B, d, blank.grid, places=blank.places)
            fr = frame(problem)
            value = averaged(fr, ask(fr, Questions(cells, cells[:, :0])), weighed(fr))[0]
            best = np.linalg.norm(tikhonov(problem).estimates - truth[:, None], axis=0).min()
            found[i, j] = np.linalg.norm(value - truth) / best
    return found


def adaptive(
    forward: Callable[[Array, Array], Array], n: int, noise: float, shapes: Mapping[str, Shape],
    draws: int, seed: int = 5,
) -> tuple[Array, Array, Array]:  # fmt: skip
    """Held (2, shapes, 6), width and error of the cells (shapes,) without and with features.

    Widths and errors are those with features over those without, the mean and the root mean
    square of the draws.
    """
    fine, x, blank, questions = layout(forward, n, FIVE)
    rows = np.vstack([questions.cells, np.eye(CELLS)])
    every, rng = Questions(rows, rows[:, :0]), np.random.default_rng(seed)
    held = np.empty((2, len(shapes), draws, 6))
    width, error = np.empty((2, len(shapes), draws)), np.empty((2, len(shapes), draws))
    for i, shape in enumerate(shapes.values()):
        u = fine @ shape(x)
        sd, cells = noise * np.abs(u).max(), shape(x).reshape(CELLS, FINER).mean(axis=1)
        truth = rows @ cells
        for j in range(draws):
            d = (u + sd * rng.normal(size=n)) / sd
            problem = Problem(blank.A / sd, blank.B, d, blank.grid, places=blank.places)
            for k, given in enumerate((problem, featured(problem))):
                band = cautious(given, every)
                off = np.abs(band.value - truth)
                held[k, i, j] = off[:6] <= band.upper[:6] - band.value[:6]
                width[k, i, j] = band.sd[:5].mean()
                error[k, i, j] = np.linalg.norm(off[6:])
    size, rms = width.mean(axis=2), np.sqrt((error**2).mean(axis=2))
    return held.mean(axis=2), size[1] / size[0], rms[1] / rms[0]


def adaptive_table(draws: int) -> None:
    """Print zones / worst shape / total without and with features, and both ratios."""
    shapes = {**SHAPES, **AFTER}
    print("\n| member | averaged | adaptive | width | error, least and largest of a shape |")
    for member, forward in MEMBERS.items():
        found = [
            adaptive(forward, n, noise, shapes, draws)
            for n in (12, 40, 150) for noise in (0.003, 0.02)
        ]  # fmt: skip
        held = np.mean([f[0] for f in found], axis=0)
        texts = [
            f"{h[:, :5].mean():.3f} / {h[:, :5].mean(axis=1).min():.2f} / {h[:, 5].mean():.3f}"
            for h in held
        ]
        width = np.exp(np.mean([np.log(f[1]) for f in found]))
        error = np.exp(np.mean([np.log(f[2]) for f in found], axis=0))
        texts += [
            f"{width:.2f}",
            f"{np.exp(np.log(error).mean()):.2f}, {error.min():.2f} to {error.max():.2f}",
        ]
        print(f"| {member} | " + " | ".join(texts) + " |", flush=True)


def sharpest(
    forward: Callable[[Array, Array], Array], n: int, noise: float, shapes: Mapping[str, Shape],
    draws: int, seed: int = 13,
) -> tuple[Array, float]:  # fmt: skip
    """Held (shapes, 6) by features and calibration together; width over the cautious average's."""
    fine, x, blank, questions = layout(forward, n, FIVE)
    rng, held = np.random.default_rng(seed), np.empty((len(shapes), draws, 6))
    ratio = []
    for i, shape in enumerate(shapes.values()):
        u = fine @ shape(x)
        sd = noise * np.abs(u).max()
        truth = questions.cells @ shape(x).reshape(CELLS, FINER).mean(axis=1)
        for j in range(draws):
            d = (u + sd * rng.normal(size=n)) / sd
            problem = Problem(blank.A / sd, blank.B, d, blank.grid, places=blank.places)
            band = calibrated(featured(problem), questions)
            held[i, j] = np.abs(band.value - truth) <= band.upper - band.value
            ratio.append((band.sd / cautious(problem, questions).sd)[:5].mean())
    return held.mean(axis=1), float(np.mean(ratio))


def sharpest_table(draws: int) -> None:
    """Print zones / worst shape / total and width of features and calibration together."""
    shapes = {**SHAPES, **AFTER}
    print("\n| member | adaptive and calibrated | width |")
    for member, forward in MEMBERS.items():
        found = [
            sharpest(forward, n, noise, shapes, draws)
            for n in (12, 40, 150) for noise in (0.003, 0.02)
        ]  # fmt: skip
        held = np.mean([f[0] for f in found], axis=0)
        zones = held[:, :5].mean(axis=1)
        text = f"{zones.mean():.3f} / {zones.min():.2f} / {held[:, 5].mean():.3f}"
        print(f"| {member} | {text} | {np.mean([f[1] for f in found]):.2f} |", flush=True)


def error_table(draws: int) -> None:
    """Print median and 90th percentile of the error over that of the best strength."""
    shapes = {k: f for k, f in {**SHAPES, **AFTER}.items() if k != "constant"}
    print("\n| member | 12 | 40 | 150 |")
    for member, forward in MEMBERS.items():
        found = [
            np.concatenate([errors(forward, n, noise, shapes, draws) for noise in (0.003, 0.02)])
            for n in (12, 40, 150)
        ]
        cells = [f"{np.median(e):.2f}, {np.quantile(e, 0.9):.2f}" for e in found]
        print(f"| {member} | " + " | ".join(cells) + " |", flush=True)


def main(draws: int = 200) -> None:
    """Print all tables as Markdown."""
    print(
        "| member | "
        + " | ".join(f"{s}: cautious | calibrated | width" for s in ("before", "after"))
    )
    for member, forward in MEMBERS.items():
        cells = []
        for shapes in (SHAPES, AFTER):
            found = [
                run(forward, n, noise, shapes, draws)
                for n in (12, 40, 150) for noise in (0.003, 0.02)
            ]  # fmt: skip
            cells += [row(found, "cautious"), row(found, "calibrated"), f"{narrower(found):.2f}"]
        print(f"| {member} | " + " | ".join(cells) + " |", flush=True)
    print("\n| fibre | zones | cautious: zones, worst zone | calibrated | width |")
    for ratio in (50.0, 200.0):
        for n, size in ((200, 200), (800, 400)):
            for label, zones in (("drawn", DRAWN), ("twenty", TWENTY)):
                found = [
                    run(partial(fibre, ratio=ratio), n, noise, FIBRE, draws // 4, zones, size)
                    for noise in (0.005, 0.02)
                ]
                held = {
                    band: np.stack([[f[band][0][:-1] for f in one.values()] for one in found])
                    for band in ("cautious", "calibrated")
                }
                text = " | ".join(
                    f"{h.mean():.3f}, {np.mean(h.min(axis=2) < 0.8):.2f}" for h in held.values()
                )
                print(f"| {ratio:g}, {n} | {label} | {text} | {narrower(found):.2f} |", flush=True)
    error_table(draws // 20)
    adaptive_table(draws // 20)
    sharpest_table(draws // 20)


if __name__ == "__main__":
    with threadpool_limits(limits=1):
        main(int(sys.argv[1]) if len(sys.argv) > 1 else 200)
