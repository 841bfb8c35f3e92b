"""One inversion of one forward model: noise, ladder, choice, and the answers in SI.

`recover` calls it once for the case and again for every uncertain property.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from srcfit.answers import Asked, ask, per, section_forces
from srcfit.bands import Answers, cautious, plain
from srcfit.calibration import calibrated
from srcfit.case.model import Case
from srcfit.constraints import Held, constrained
from srcfit.criteria import CRITERIA, Choice, choose
from srcfit.eigen import modes
from srcfit.elimination import Elimination, eliminate
from srcfit.errors import SolveError
from srcfit.features import featured
from srcfit.forward import Forward, build
from srcfit.limits import limits
from srcfit.member import Array, Member
from srcfit.placing import Place
from srcfit.priors import Family, family
from srcfit.problem import Grid, Problem, Questions
from srcfit.readings.model import Readings
from srcfit.robust import Noise, noise_of
from srcfit.solvers import SOLVERS
from srcfit.solvers.ladder import Ladder
from srcfit.whitening import Links, links, whitened

MOST_MODES = 100


@dataclass(frozen=True)
class Solved:
    """One inversion.

    Attributes
    ----------
    noise : what the problem was whitened with
    asked, answers : the questions and their answers (SI)
    ladder : Ladder of the chosen solver, roughness 1 where it is averaged; None without a
        smooth part
    choices : mapping criterion -> Choice on that ladder
    choice : the one that was followed; None where averaged
    held : what sign, ceiling and monotone stretches did; None where none is declared
    places : where lumped parts of unknown place stand, by name
    edges : further places where cells were cut [m]
    """

    forward: Forward
    problem: Problem
    noise: Noise
    asked: Asked
    answers: Answers
    ladder: Ladder | None
    choices: Mapping[str, Choice]
    choice: Choice | None
    held: Held | None = None
    places: Mapping[str, Place] = field(default_factory=dict)
    edges: tuple[float, ...] = ()

    @property
    def sd(self) -> Array:
        """Standard deviation (SI) of each used reading, (n,); weights are not in it."""
        return self.noise.sd

    @property
    def lag(self) -> Array:
        """Lag-1 correlation of each group, (g,)."""
        return self.noise.lag

    @property
    def links(self) -> Links:
        """Neighbours of each used reading and their correlation."""
        return links(self.forward, self.noise.lag, self.noise.weight)

    @property
    def readings(self) -> int:
        """Number of rows that are readings: complex ones count twice."""
        return len(self.problem.d) - self.problem.pseudo


def solve(
    case: Case,
    readings: Readings,
    *,
    criteria: bool = True,
    rng: np.random.SeedSequence | None = None,
) -> Solved:
    """Invert a case.

    Parameters
    ----------
    criteria : bool
        Also run every criterion on the ladder (left out when only the estimate is wanted).
    rng : SeedSequence, optional
        Seed of draws, which only constraints need.

    Raises
    ------
    SolveError
        When there are too few readings, or the chosen criterion has nothing to say.
    """
    return invert(build(case, readings), criteria, rng or np.random.SeedSequence(0))


def invert(
    forward: Forward, criteria: bool, rng: np.random.SeedSequence, noise: Noise | None = None,
    *, tuned: bool = True, features: Array | None = None,
) -> Solved:  # fmt: skip
    """Invert a forward model; parameters as of `solve`, the noise found where it is not given.

    The intervals hold what an estimated correlation leaves open (`Noise.others`), about the
    estimate at its mean. `tuned`: calibrate the band where the case asks for it and criteria are
    run. `features` of the grid that are not to be looked for again.
    """
    balanced = eliminate(forward)
    noise = noise_of(forward, balanced) if noise is None else noise
    main = _inverted(forward, balanced, criteria, rng, noise, tuned, features)
    if not noise.others:
        return main
    same = main.problem.grid.features
    each = [
        _inverted(forward, balanced, criteria, rng, n, tuned, same).answers for n in noise.others
    ]
    share = np.full(len(each), 1 / len(each))
    return replace(main, answers=mixed(each, share, main.answers, main.answers.value))


def mixed(each: Sequence[Answers], share: Array, main: Answers, value: Array) -> Answers:
    """Mixture of answers about a value (q,): each side of intervals by its mean square distance.

    What is not mixed is that of `main`.
    """

    def stack(name: str) -> Array:
        return np.stack([getattr(a, name) for a in each])

    apart, quantile = stack("value") - value, main.quantile
    below = np.sqrt(share @ ((stack("value") - stack("lower")) ** 2 + (quantile * apart) ** 2))
    above = np.sqrt(share @ ((stack("upper") - stack("value")) ** 2 + (quantile * apart) ** 2))
    lower, upper = value - below, value + above
    if main.low is not None and main.high is not None:
        lower, upper = np.maximum(lower, main.low), np.minimum(upper, main.high)
    sd, s_c = (np.sqrt(share @ (stack(name) ** 2 + apart**2)) for name in ("sd", "s_c"))
    return replace(
        main, value=value, sd=sd, lower=lower, upper=upper, m_c=share @ stack("m_c"),
        m_0=share @ stack("m_0"), s_c=s_c, data_share=share @ stack("data_share"),
    )  # fmt: skip


def _inverted(
    forward: Forward, balanced: Elimination, criteria: bool, rng: np.random.SeedSequence,
    noise: Noise, tuned: bool, features: Array | None,
) -> Solved:  # fmt: skip
    """Invert with one noise; parameters as of `invert`."""
    case = forward.case
    problem = whitened(forward, noise.sd, noise.lag, balanced, noise.weight)
    asked = ask(forward, balanced)
    strength = case.strength
    if features is not None and len(features) == int(problem.grid.unknown.sum()):
        problem = replace(problem, grid=replace(problem.grid, features=features))
    elif strength.roughness == "adaptive":
        problem = featured(problem)
    runs = None
    if tuned and criteria and strength.interval == "calibrated":
        runs = asked.runs("cells", *(f.name for f in section_forces(case)))
    answers, ladder, choices, choice = answered(
        forward, problem, asked.questions, criteria, runs=runs
    )  # fmt: skip
    known, held = limits(forward, asked, balanced), None
    if known is not None:
        centre = None if choice is None or ladder is None else (ladder, choice.index)
        narrow = answers.choice is not None
        if answers.choice is not None:
            centre = answers.fit.ladders[0], answers.choice.index
        answers, held = constrained(
            problem, asked.questions, known, answers, rng, level=strength.level, centre=centre,
            narrow=narrow, along=[asked.blocks[f.name] for f in section_forces(case)],
            band=criteria,
        )  # fmt: skip
        if held.draws and not narrow:
            # where inequalities shape the band it is the cautious one, whatever was asked for
            answers = replace(answers, band="cautious")
    return Solved(forward, problem, noise, asked, answers, ladder, choices, choice, held)


def answered(
    forward: Forward,
    problem: Problem,
    questions: Questions,
    criteria: bool,
    at_least: float = 0.0,
    runs: Sequence[slice] | None = None,
) -> tuple[Answers, Ladder | None, Mapping[str, Choice], Choice | None]:
    """Answers without inequalities, as the case asks; ladder, choices, the one followed.

    `at_least` as of `bands.cautious`; with `runs` (as of `calibration.calibrated`) the band of an
    averaged estimate is calibrated.
    """
    case, strength = forward.case, forward.case.strength
    smooth = problem.smooth and bool(problem.grid.free.any())
    wanted = criteria or strength.choose != "averaged" or strength.solver != "tikhonov"
    ladder = _ladder(case, forward, problem) if smooth and wanted else None
    choices = {} if ladder is None else {name: choose(ladder, name) for name in CRITERIA}
    choice = None if ladder is None else _choice(case, ladder, choices)
    centre = None if choice is None or ladder is None else (ladder, choice.index)
    if strength.interval == "plain" and smooth:
        answers = plain(
            problem, questions, level=strength.level,
            choose_by=str(strength.choose) if choice else "evidence",
            roughness=one_roughness(case),
            strength=choice.strength if choice and choice.criterion == "stated" else None,
        )  # fmt: skip
    elif runs is not None and centre is None:
        answers = calibrated(problem, questions, level=strength.level, runs=runs)
    else:
        answers = cautious(
            problem, questions, level=strength.level, centre=centre, at_least=at_least
        )  # fmt: skip
    return answers, ladder, choices, choice


def one_roughness(case: Case) -> int | float:
    """The roughness of one family, on which the choices are compared: 1 where it is averaged."""
    roughness = case.strength.roughness
    return 1 if isinstance(roughness, str) else roughness


def _ladder(case: Case, forward: Forward, problem: Problem) -> Ladder:
    strength = case.strength
    roughness = one_roughness(case)
    given: dict[str, Any] = {}
    if strength.solver == "eigenbasis":
        given["basis"] = mode_shapes(case.member, problem.grid, len(forward.rows))
    elif strength.solver == "tikhonov" and not isinstance(strength.choose, str):
        unit = strength_unit(case, family(roughness, problem.grid))[1]
        given["strengths"] = np.array([float(strength.choose) / unit])
    return SOLVERS[strength.solver](problem, roughness=roughness, **given)


def mode_shapes(member: Member, grid: Grid, readings: int) -> Array:
    """First modes times r, averaged over cells, (m, N): no more than the readings can tell."""
    found = modes(member, min(readings, MOST_MODES))
    x, weight = np.polynomial.legendre.leggauss(3)
    places = grid.edges[:-1, None] + grid.widths[:, None] * (x + 1) / 2
    r = member.profiles.get("r")
    density = np.ones(places.shape) if r is None else r(places)
    shapes = found.functions(places.ravel()).reshape(*places.shape, -1)
    averaged: Array = np.einsum("ms,msn,s->mn", density, shapes, weight / 2)
    return averaged


def _choice(case: Case, ladder: Ladder, choices: Mapping[str, Choice]) -> Choice | None:
    """The rung to follow; None where estimates are averaged."""
    strength = case.strength
    if strength.choose == "averaged":
        if strength.solver == "tikhonov" and isinstance(strength.roughness, str):
            return None
        # one family or a cut has no families to average over: evidence, or where there is none GCV
        best = choices["evidence"]
        return best if best.index >= 0 else choices["gcv"]
    if isinstance(strength.choose, str):
        found = choices[strength.choose]
        if found.index < 0:
            raise SolveError(
                f"{strength.choose} cannot choose a strength here: {found.note}",
                "strength.choose",
                "choose another criterion, or leave it out to average over strengths",
            )
        return found
    wanted = float(strength.choose)
    index = int(np.argmin(np.abs(ladder.strengths - wanted)))
    return Choice("stated", index, float(ladder.strengths[index]), float("nan"), True, "")


def strength_unit(case: Case, family: Family) -> tuple[str, float]:
    """Unit text of a family's strength, and how many of it make one SI unit."""
    source, length = case.source.unit, case.source.position_unit
    s, ell = per(source, case.member.kind.source_unit), per(length, "m")
    power = {"roughness-0": -1, "roughness-1": 1, "roughness-2": 3}.get(family.base, 0)
    head = {0: "1", 1: length, -1: f"1/{length}"}.get(power, f"{length}^{power}")
    return f"{head}/({source})^2", ell**power / s**2
