"""How intervals and errors fare with real noise: simulated readings of known sources.

`python tests/simulation_noise.py [DRAWS]` prints the tables (some minutes); the test suite runs a
small part. Layouts and sources are those of `simulation`.

Noise, in units of its stated sd: white and stated; white and to be estimated; 5 % of the readings
off by another 10 to 30 sd, down-weighted or not; first-order autoregressive with a lag-1
correlation of 0.5 along the member, ignored, stated or estimated. A fibre whose readings a source
reaches one by one has a noise of its own size: there source and noise are hard to tell apart.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
import simulation
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from srcfit.bands import Answers, cautious
from srcfit.noise import estimate_lag, restricted
from srcfit.problem import Problem, Questions
from srcfit.robust import Doubt, doubt
from srcfit.solve import mixed
from srcfit.whitening import Links

Array = NDArray[np.float64]
NOISE, LAG = simulation.NOISE, 0.5
# of a fibre: a few tenths of a kelvin in ten
LOUD = 0.03
OFTEN, NEAR, FAR = 0.05, 10.0, 30.0


def spoiled(noise: Array, rng: np.random.Generator) -> Array:
    """White noise with gross outliers added to a part of the readings."""
    n = len(noise)
    off = rng.uniform(NEAR, FAR, n) * rng.choice([-1.0, 1.0], n)
    return np.where(rng.random(n) < OFTEN, noise + off, noise)


def autoregressive(noise: Array) -> Array:
    """The same white noise, made first-order autoregressive with the same variance."""
    out = noise.copy()
    for i in range(1, len(out)):
        out[i] = LAG * out[i - 1] + np.sqrt(1 - LAG**2) * noise[i]
    return out


def white(problem: Problem, lag: float) -> Problem:
    """The problem whitened for a lag-1 correlation of neighbouring rows."""

    def less(rows: Array) -> Array:
        out = rows.copy()
        out[1:] = (rows[1:] - lag * rows[:-1]) / np.sqrt(1 - lag**2)
        return out

    return replace(problem, A=less(problem.A), d=less(problem.d))


def weighted(problem: Problem) -> tuple[Problem, Doubt]:
    """The problem with its gross outliers down-weighted, and which they are."""
    n = len(problem.d)
    alone = Links(np.full(n, -1), np.zeros(n))

    def given(weight: Array) -> tuple[Problem, Links]:
        by = np.sqrt(weight)
        return replace(problem, A=problem.A * by[:, None], d=problem.d * by), alone

    found = doubt(given, np.arange(n), n)
    return given(found.weight)[0], found


def correlated(problem: Problem, questions: Questions) -> Answers:
    """Answers where the correlation of the rows is to be estimated, as `solve.invert` has them."""

    def likelihood(lag: Array) -> float:
        volume = 0.5 * (len(problem.d) - 1) * float(np.log1p(-(lag[0] ** 2)))
        return restricted(white(problem, float(lag[0]))) - volume

    lags = estimate_lag(likelihood, np.array([True]))[:, 0]
    each = [cautious(white(problem, float(one)), questions) for one in lags]
    main = cautious(white(problem, float(lags.mean())), questions)
    return mixed(each, np.full(len(each), 1 / len(each)), main, main.value)


def treatments() -> dict[str, tuple[str, Callable[[Problem, Questions], Answers]]]:
    """Name -> (kind of noise, answers to a problem's questions)."""

    def after(treat: Callable[[Problem], Problem]) -> Callable[[Problem, Questions], Answers]:
        return lambda problem, questions: cautious(treat(problem), questions)

    return {
        "white, sd stated": ("white", after(lambda p: p)),
        "white, sd estimated": ("white", after(lambda p: replace(p, stated=False))),
        "5 % outliers, weighted": ("spoiled", after(lambda p: weighted(p)[0])),
        "5 % outliers, sd estimated, weighted": (
            "spoiled", after(lambda p: weighted(replace(p, stated=False))[0]),
        ),
        "5 % outliers, taken at their word": ("spoiled", after(lambda p: p)),
        "correlated 0.5, ignored": ("correlated", after(lambda p: p)),
        "correlated 0.5, stated": ("correlated", after(lambda p: white(p, LAG))),
        "correlated 0.5, estimated": ("correlated", correlated),
        "correlated 0.5, estimated with the sd": (
            "correlated", lambda p, q: correlated(replace(p, stated=False), q),
        ),
    }  # fmt: skip


def simulate(
    member: str, n: int, draws: int, names: Sequence[str] = (), shapes: Sequence[str] = (),
    part: float = NOISE,
) -> dict[str, simulation.Tally]:  # fmt: skip
    """Tallies of the cautious band; every treatment sees the same white noise underneath.

    The error is that of the source's density on the cells (root of the sum of squares); nan where
    no outlier was drawn though outliers are looked at. The noise's sd is `part` of the largest
    reading.
    """
    A_fine, middles, blank, questions = simulation.layout(member, n)
    shapes = tuple(shapes or simulation.SHAPES)
    chosen = {k: t for k, t in treatments().items() if not names or k in names}
    size = (len(shapes), draws, 6)
    held = {k: np.full(size, np.nan) for k in chosen}
    width = {k: np.full(size, np.nan) for k in chosen}
    error = {k: np.full(size[:2], np.nan) for k in chosen}
    rng = np.random.default_rng([list(simulation.MEMBERS | simulation.DENSE).index(member), n, 5])
    for i, shape in enumerate(shapes):
        f = simulation.SHAPES[shape](middles)
        cells = f.reshape(simulation.CELLS, simulation.FINER).mean(axis=1)
        truth = questions.cells[:6] @ cells
        u = A_fine @ f
        sd = part * np.abs(u).max()
        for j in range(draws):
            e = rng.normal(size=n)
            noises = {"white": e, "spoiled": spoiled(e, rng), "correlated": autoregressive(e)}
            for name, (kind, treat) in chosen.items():
                d = u / sd + noises[kind]
                problem = Problem(blank.A / sd, blank.B, d, blank.grid, places=blank.places)
                band = treat(problem, questions)
                half = (band.upper - band.value)[:6]
                held[name][i, j] = np.abs(band.value[:6] - truth) <= half
                width[name][i, j] = half
                if kind != "spoiled" or (noises[kind] != e).any():
                    error[name][i, j] = np.linalg.norm(band.value[6:] - cells)
    return {k: simulation.Tally(held[k], width[k], error[k]) for k in chosen}


def against(found: dict[str, simulation.Tally], name: str) -> tuple[float, float]:
    """Error over that with white stated noise, draw by draw: median and 90 % point."""
    ratio = found[name].error / found["white, sd stated"].error
    return float(np.nanmedian(ratio)), float(np.nanquantile(ratio, 0.9))


def main(draws: int = 20) -> None:
    """Print the table as Markdown."""
    names = list(treatments())
    print("Zones on average / total (nominal 0.95); error over that with white stated noise, draw")
    print("by draw: median, 90 % point.\n")
    print("| layout, readings | " + " | ".join(names) + " |")
    print("|---" * (len(names) + 1) + "|")
    for member in (*simulation.MEMBERS, *simulation.DENSE):
        dense = member in simulation.DENSE
        for n in (60, 100) if dense else (12, 40):
            found = simulate(member, n, draws, part=LOUD if dense else NOISE)
            cells = []
            for name in names:
                zones, _, total = found[name].row()
                half, most = against(found, name)
                cells.append(f"{zones:.2f} / {total:.2f}; {half:.2f}, {most:.1f}")
            print(f"| {member}, {n} | " + " | ".join(cells) + " |", flush=True)


if __name__ == "__main__":
    with threadpool_limits(limits=1):
        main(int(sys.argv[1]) if len(sys.argv) > 1 else 20)
