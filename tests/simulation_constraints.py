"""How often the intervals hold under a sign: simulated readings of sources not below zero.

`python tests/simulation_constraints.py [DRAWS] [MEMBER ...]` prints the table (some minutes); the
test suite runs a small part. Members, finer grid and forward matrices are those of `simulation`.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import simulation
from numpy.typing import NDArray
from simulation import CELLS, FINER, layout
from threadpoolctl import threadpool_limits

from srcfit.bands import Answers, cautious
from srcfit.case.model import SourceSpec
from srcfit.constraints import constrained
from srcfit.elimination import Elimination
from srcfit.limits import Limits, limits
from srcfit.problem import Problem, Questions

Array = NDArray[np.float64]
_block, _hat = simulation._block, simulation._hat

# on 0..1, five zones end at 0.2, 0.4, 0.6, 0.8
SHAPES: dict[str, Callable[[Array], Array]] = {
    "narrow load": _block(0.47, 0.53),
    "narrow on an edge": _block(0.37, 0.43),
    "narrow near the left end": _block(0.02, 0.1),
    "one zone": _block(0.4, 0.6),
    "last zone": _block(0.8, 1.0),
    "two blocks": lambda x: _block(0.1, 0.25)(x) + 0.7 * _block(0.55, 0.78)(x),
    "two narrow blocks": lambda x: _block(0.22, 0.28)(x) + 0.5 * _block(0.72, 0.78)(x),
    "triangle on zero": _hat(0.3, 0.45, 0.7),
    "half wave": lambda x: np.sin(np.pi * x),
    "bump on a floor": lambda x: 0.2 + np.exp(-(((x - 0.35) / 0.1) ** 2)),
    "constant": np.ones_like,
    "wedge": lambda x: 1 - x,
}
MEMBERS = ("conductor mL = 4", "pinned beam", "cantilever", "foundation beam 5")
READINGS, NOISES = (12, 40), (0.003, 0.02)


def knowledge(problem: Problem, questions: Questions, **source: Any) -> Limits:
    """The inequalities of a source on a problem without nuisances; keys of `SourceSpec`."""
    spec = SourceSpec(**{"unit": "N/m", "total_unit": "N", "position_unit": "m", **source})
    k = problem.B.shape[1]
    columns = tuple(SimpleNamespace(kind="lumped", name=n) for n in problem.names)
    forward = SimpleNamespace(
        case=SimpleNamespace(source=spec), grid=problem.grid, columns=columns, balance=None
    )
    asked = SimpleNamespace(questions=questions, constant=np.zeros(len(questions.cells)))
    nothing = Elimination(None, np.zeros((problem.A.shape[1], k + 1)), np.eye(k, k + 1), ())
    found = limits(forward, asked, nothing)  # type: ignore[arg-type]
    assert found is not None
    return found


@dataclass(frozen=True)
class Draw:
    """One simulated recovery: five zones, the total, then the cells."""

    shape: str
    lower: Array
    upper: Array
    value: Array
    truth: Array
    drawn: Array
    strict: Array
    free: Answers

    @property
    def free_width(self) -> Array:
        return np.asarray(self.free.upper - self.free.lower)

    @property
    def held(self) -> NDArray[np.bool_]:
        slack = 1e-9 * self.truth[5]
        return (self.lower - slack <= self.truth) & (self.truth <= self.upper + slack)


def simulate(
    member: str, n: int, noise: float, draws: int, seed: int, shapes: Sequence[str] = ()
) -> Iterator[Draw]:
    """Recoveries of every shape, `draws` each, with every cell known not to be negative."""
    rng = np.random.default_rng([seed, n, round(1e5 * noise)])
    A_fine, middles, blank, questions = layout(member, n)
    known = knowledge(blank, questions, sign="nonnegative")
    for shape in shapes or SHAPES:
        f = SHAPES[shape](middles)
        truth = questions.cells @ f.reshape(CELLS, FINER).mean(axis=1)
        u = A_fine @ f
        sd = noise * np.abs(u).max()
        for i in range(draws):
            problem = replace(blank, A=blank.A / sd, d=(u + sd * rng.normal(size=n)) / sd)
            free = cautious(problem, questions)
            at = np.random.SeedSequence([seed, i])
            band, held = constrained(problem, questions, known, free, at)
            yield Draw(
                shape, band.lower, band.upper, band.value, truth, held.drawn, held.strict, free,
            )  # fmt: skip


@dataclass(frozen=True)
class Tally:
    """One layout: coverage of zones on average, of the worst shape and its name, of the total.

    touched : share of cells that are truly zero whose interval reaches zero
    width : median width of the zones over that without the sign
    least : smallest lower end of all
    """

    zones: float
    worst: float
    shape: str
    total: float
    touched: float
    width: float
    least: float


def tally(found: Sequence[Draw]) -> Tally:
    """What all draws of one layout say."""
    names = list(dict.fromkeys(d.shape for d in found))
    by = [np.mean([d.held[:5].mean() for d in found if d.shape == name]) for name in names]
    zero = [d.lower[6:][d.truth[6:] == 0] <= 1e-9 * d.truth[5] for d in found]
    ratio = [(d.upper - d.lower)[:5] / d.free_width[:5] for d in found]
    return Tally(
        float(np.mean(by)), float(min(by)), names[int(np.argmin(by))],
        float(np.mean([d.held[5] for d in found])), float(np.concatenate(zero).mean()),
        float(np.median(ratio)), float(min(d.lower.min() for d in found)),
    )  # fmt: skip


def main(draws: int = 5, members: Sequence[str] = MEMBERS) -> None:
    """Print the table as Markdown; every layout has its own seed."""
    print("| layout, readings, noise | zones / worst shape / total | reach zero | width |")
    print("|---|---|---|---|")
    for member in members:
        for n in READINGS:
            for noise in NOISES:
                t = tally(list(simulate(member, n, noise, draws, MEMBERS.index(member))))
                print(
                    f"| {member}, {n}, {100 * noise:g} % | {t.zones:.2f} / {t.worst:.2f} "
                    f"({t.shape}) / {t.total:.2f} | {t.touched:.2f} | {t.width:.2f} |",
                    flush=True,
                )


if __name__ == "__main__":
    with threadpool_limits(limits=1):
        main(int(sys.argv[1]) if len(sys.argv) > 1 else 5, sys.argv[2:] or MEMBERS)
