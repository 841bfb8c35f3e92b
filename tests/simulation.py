"""How often the intervals hold: simulated readings of known sources on six members.

`python tests/simulation.py [DRAWS] [MEMBER ...]` prints the full table (some minutes); the test
suite runs a small part.
Readings come from a much finer grid than the one they are inverted on; the forward matrices are
those of `referee`, so nothing here tests the package against itself.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import referee
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from srcfit.bands import cautious
from srcfit.criteria import CRITERIA, choose
from srcfit.evidence import conditional, weigh
from srcfit.priors import SMOOTH, natural
from srcfit.problem import Grid, Problem, Questions
from srcfit.solvers import SOLVERS
from srcfit.solvers.frame import ask, frame
from srcfit.solvers.spectrum import bases, spectrum

Array = NDArray[np.float64]
NOISE = 0.005
Z = 1.959963984540054
CELLS, FINER = 100, 6


def _block(a: float, b: float) -> Callable[[Array], Array]:
    return lambda x: ((x > a) & (x < b)).astype(float)


def _hat(a: float, top: float, b: float) -> Callable[[Array], Array]:
    return lambda x: np.clip(np.minimum((x - a) / (top - a), (b - x) / (b - top)), 0, None)


# on 0..1; five zones end at 0.2, 0.4, 0.6, 0.8; the aligned ones have their edges there
SHAPES: dict[str, Callable[[Array], Array]] = {
    "constant": np.ones_like,
    "aligned: one zone": _block(0.4, 0.6),
    "aligned: zone on a floor": lambda x: 0.4 + _block(0.2, 0.4)(x),
    "aligned: two zones": _block(0.2, 0.6),
    "aligned: half loaded": lambda x: 0.2 + 0.8 * _block(0.0, 0.4)(x),
    "aligned: last zone": lambda x: 0.1 + _block(0.8, 1.0)(x),
    "aligned: stairs": lambda x: np.choose((5 * x).astype(int), [1.0, 0.4, 0.8, 0.1, 0.6]),
    "step at the middle": lambda x: np.where(x < 0.5, 1.0, 0.3),
    "triangle": _hat(0.0, 0.5, 1.0),
    "falling wedge": lambda x: 1 - x,
    "half wave": lambda x: np.sin(np.pi * x),
    "bump": lambda x: 0.2 + np.exp(-(((x - 0.35) / 0.1) ** 2)),
    "two blocks": lambda x: _block(0.1, 0.25)(x) + 0.7 * _block(0.55, 0.78)(x),
    "narrow load": lambda x: 0.3 + 3 * _block(0.47, 0.53)(x),
    "narrow on an edge": lambda x: 0.3 + 3 * _block(0.37, 0.43)(x),
    "near the left end": lambda x: 0.2 + 2 * _block(0.02, 0.12)(x),
    "near the right end": lambda x: 0.5 * _block(0.86, 1.0)(x) + 0.3,
    "both signs": lambda x: 0.5 + np.sin(3 * np.pi * x),
    "saw": lambda x: np.where((x > 0.15) & (x < 0.7), (x - 0.15) / 0.55, 0.1),
}
MEMBERS: dict[str, Callable[[Array, Array], Array]] = {
    "conductor mL = 4": lambda e, x: referee.fin(e, x, 1.0, 16.0),
    "cable": lambda e, x: referee.fin(e, x, 1.0, 0.0),
    "pinned beam": lambda e, x: referee.beam(e, x, 1.0)[0],
    "clamped beam": lambda e, x: referee.beam(e, x, 1.0, left="clamped", right="clamped")[0],
    "cantilever": lambda e, x: referee.beam(e, x, 1.0, left="clamped", right="free")[0],
    "foundation beam 5": lambda e, x: referee.beam(
        e, x, 1.0, foundation=4 * 5.0**4, left="free", right="free"
    )[0],
}
# a buried fibre told almost reading by reading: decay over half the distance of two readings
DENSE: dict[str, Callable[[Array, Array], Array]] = {
    "fibre": lambda e, x: referee.fin(e, x, 1.0, (len(x) / 0.49) ** 2),
}


@dataclass(frozen=True)
class Tally:
    """Coverage and error of one band, collected over draws: (shapes, draws, 5 zones + total).

    nan where the criterion made no choice.
    """

    held: Array
    width: Array
    error: Array

    def row(self) -> list[float]:
        """Zones on average, worst shape, total."""
        zones = [shape[chosen].mean() for shape, chosen in self._chosen() if chosen.any()]
        total = self.held[:, :, 5]
        if not zones:
            return [float("nan")] * 3
        return [float(np.mean(zones)), float(np.min(zones)), float(np.nanmean(total))]

    @property
    def chosen(self) -> float:
        """Part of the draws in which the criterion made a choice."""
        return float(np.isfinite(self.error).mean())

    def _chosen(self) -> list[tuple[Array, NDArray[np.bool_]]]:
        return [(shape[:, :5], np.isfinite(shape[:, 0])) for shape in self.held]


def layout(member: str, n: int) -> tuple[Array, Array, Problem, Questions]:
    """(fine matrix, fine middles, problem without data, questions): cells, five zones, total."""
    x = (np.arange(n) + 0.5) / n
    fine = np.linspace(0, 1, CELLS * FINER + 1)
    edges = np.linspace(0, 1, CELLS + 1)
    forward = (MEMBERS | DENSE)[member]
    bounds = [(i / 5, (i + 1) / 5) for i in range(5)]
    grid = Grid(edges, np.diff(edges), np.ones(CELLS, dtype=bool), tuple(bounds))
    problem = Problem(forward(edges, x), np.zeros((n, 0)), np.zeros(n), grid, places=x)
    rows = [grid.weights * ((grid.middles > a) & (grid.middles < b)) for a, b in bounds]
    cells = np.vstack([*rows, grid.weights, np.eye(CELLS)])
    return forward(fine, x), (fine[1:] + fine[:-1]) / 2, problem, Questions(cells, cells[:, :0])


def simulate(
    member: str, n: int, draws: int, rng: np.random.Generator, shapes: Sequence[str] = ()
) -> dict[str, Tally]:
    """Tallies of the cautious band and of the plain band by each criterion."""
    A_fine, middles, blank, questions = layout(member, n)
    shapes = tuple(shapes or SHAPES)
    names = ["cautious", *CRITERIA]
    size = (len(shapes), draws, 6)
    held = {k: np.full(size, np.nan) for k in names}
    width = {k: np.full(size, np.nan) for k in names}
    error = {k: np.full(size[:2], np.nan) for k in [*names, "best"]}
    for i, shape in enumerate(shapes):
        f = SHAPES[shape](middles)
        cells = f.reshape(CELLS, FINER).mean(axis=1)
        truth = questions.cells[:6] @ cells
        u = A_fine @ f
        sd = NOISE * np.abs(u).max()
        spread: Array | None = None
        for j in range(draws):
            d = (u + sd * rng.normal(size=n)) / sd
            problem = Problem(blank.A / sd, blank.B, d, blank.grid, places=blank.places)
            band = cautious(problem, questions)
            _note(held, width, error, "cautious", (i, j), band.value, band.upper, truth, cells)
            ladder = SOLVERS["tikhonov"](problem)
            if spread is None:
                # variances depend on the layout only, not on the draw
                spread = _variances(problem, questions, ladder.strengths)
            values = ladder.answers(questions)
            misses = np.linalg.norm(values[6:] - cells[:, None], axis=0)
            error["best"][i, j] = misses.min()
            for name in CRITERIA:
                t = choose(ladder, name).index
                if t >= 0:
                    upper = values[:, t] + Z * np.sqrt(spread[:, t])
                    _note(held, width, error, name, (i, j), values[:, t], upper, truth, cells)
    return {k: Tally(held[k], width[k], error[k] / error["best"]) for k in names}


def _note(held, width, error, name, at, value, upper, truth, cells):  # type: ignore[no-untyped-def]
    half = (upper - value)[:6]
    held[name][at] = np.abs(value[:6] - truth) <= half
    width[name][at] = half
    error[name][at] = np.linalg.norm(value[6:] - cells)


def _variances(problem: Problem, questions: Questions, strengths: Array) -> Array:
    """Posterior variances (q, t) of each question at each strength of first differences."""
    fr = frame(problem)
    asked, fam = ask(fr, questions), SMOOTH[0]
    products = bases(fr, [(fam.base, fam.length)], "svd")
    sp = spectrum(fr, fam, products, np.zeros((CELLS, 0)), right=True)
    return conditional(asked, weigh([sp], strengths**-0.5 / natural(fam.base, problem.grid))[0])[1]


def error_ratio(tally: Tally, shapes: Sequence[str] = ()) -> float:
    """Error over that of the best strength on the ladder: median over the shapes not constant."""
    names = list(shapes or SHAPES)
    use = [i for i, name in enumerate(names) if name != "constant"]
    per_shape = [np.median(e[np.isfinite(e)]) for e in tally.error[use] if np.isfinite(e).any()]
    return float(np.median(per_shape)) if per_shape else float("nan")


def main(draws: int = 100, members: Sequence[str] = tuple(MEMBERS)) -> None:
    """Print the whole table as Markdown, two parts; every layout has its own seed."""
    others = [k for k in CRITERIA if k != "evidence"]
    first = [
        "Zones on average / worst shape / total, nominal 0.95. Width over that of the evidence",
        "band, error over that of the best strength on the ladder.\n",
        "| layout, readings | cautious | width | error | one strength by evidence | error |",
        "|---|---|---|---|---|---|",
    ]
    second = [
        "\nZones / worst shape / total, error, part of the draws in which there was a choice.\n",
        "| layout, readings | " + " | ".join(others) + " |",
        "|---" * (len(others) + 1) + "|",
    ]
    for member in members:
        for n in (12, 40):
            rng = np.random.default_rng([list(MEMBERS).index(member), n])
            found = simulate(member, n, draws, rng)
            c, e = found["cautious"], found["evidence"]
            ratio = np.nanmedian(c.width[:, :, :5] / e.width[:, :, :5])
            first.append(
                f"| {member}, {n} | {_three(c)} | {ratio:.1f} | {error_ratio(c):.2f} "
                f"| {_three(e)} | {error_ratio(e):.2f} |"
            )
            parts = [
                f"{_three(t)}, {error_ratio(t):.2f}, {t.chosen:.2f}"
                for t in (found[k] for k in others)
            ]
            second.append(f"| {member}, {n} | " + " | ".join(parts) + " |")
    print("\n".join(first + second))


def _three(tally: Tally) -> str:
    return " / ".join(f"{v:.2f}" for v in tally.row())


if __name__ == "__main__":
    with threadpool_limits(limits=1):
        main(int(sys.argv[1]) if len(sys.argv) > 1 else 100, sys.argv[2:] or tuple(MEMBERS))
