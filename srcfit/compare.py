"""Two campaigns of readings of one layout: what changed, and whether the readings can tell.

The change is found jointly (see `joint`), never as the difference of two answers: common nuisances
cancel, and so does most of what is uncertain about the member.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import replace

import numpy as np

from srcfit.campaigns import Pairing, check_alike, check_common, paired
from srcfit.case.model import Case
from srcfit.case.vary import vary
from srcfit.changes import POWER, Agreed, Joint, told
from srcfit.comparison import Comparison
from srcfit.errors import SolveError
from srcfit.forward import Forward, build
from srcfit.joint import By, Campaign, join
from srcfit.member import Array
from srcfit.places import solve
from srcfit.problem import Questions
from srcfit.readings import read
from srcfit.readings.model import Readings
from srcfit.results import Shown
from srcfit.robust import Noise
from srcfit.shares import Properties, properties
from srcfit.solve import Solved, answered
from srcfit.units import quantity

# readings of either campaign whose sensor the other one has: with fewer, all are stacked
ENOUGH = 0.5
# changes are tried on problems of no more entries than this, in so many turns, until they are this
# close; steps are no longer than that, and beyond so many times the first guess nothing would do
TRIED, TURNS, CLOSE, FASTEST, FAR = 20_000, 12, 0.02, 4.0, 100.0


def compare(
    a: Case,
    b: Case,
    *,
    common: Collection[str] = (),
    shared_noise: float = 0.0,
    by: By | None = None,
    reckon: str | None = None,
    readings: tuple[Readings, Readings] | None = None,
    rng: int | np.random.SeedSequence = 0,
) -> Comparison:
    """Find what changed between two campaigns of readings of one layout.

    Parameters
    ----------
    a, b : Case
        The same member and the same questions; readings, noise and prescribed amounts may differ.
        Level, strength and units are those of A.
    common : names of nuisances, as in summary.json
        Those that are the same in both campaigns, so that they cancel.
    shared_noise : float
        Correlation of one sensor's noise between the campaigns, 0 <= shared_noise < 1.
    by : "pairs" or "stack", optional
        Difference the readings of common sensors and leave the others out, or take all readings
        with both sources unknown. Left out: pairs where at least half of each campaign's readings
        are of common sensors.
    reckon : str, optional
        How large a change of the density must be reckoned with, on average over the member, e.g.
        "10 kN/m": what the readings do not tell is taken to vary by half of that. Left out: the
        mean density of the larger source.
    readings : (Readings, Readings), optional
        Read from the cases' files when left out.
    rng : int or SeedSequence
        Seed, recorded in the result.

    Returns
    -------
    Comparison

    Raises
    ------
    SrcfitError
        When the cases are not alike, or cannot be used as given.

    Notes
    -----
    A change is shown where its interval leaves out zero. `missed` is the change, spread evenly
    over the zone, that would have been shown with 95 % probability, after the detection limit of
    Currie (1968), Analytical Chemistry 40, 586: a smaller one may be there unseen. It is found by
    trying such changes on the case's own sensors.

    The interval is that of the cautious band. Its floor is set by what a change could be, not by
    the change that was found: where that is lost in the noise, a floor of its own mean would
    make intervals far too narrow.
    """
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1):
        if not 0 <= shared_noise < 1:
            raise SolveError(
                f"the correlation of shared noise is {shared_noise:g}", "--shared-noise",
                "give a number from 0 to less than 1",
            )  # fmt: skip
        check_alike(a, b)
        cases = _in_units_of(a, b)
        both = tuple(read(c) for c in cases) if readings is None else readings
        seed = rng if isinstance(rng, np.random.SeedSequence) else np.random.SeedSequence(rng)
        alone = tuple(solve(c, r, rng=seed)
                      for c, r in zip(cases, both, strict=True))  # fmt: skip
        first, second = (s.forward for s in alone)
        check_common(first, second, common)
        pairing = paired(first, second)
        asked = Agreed(
            frozenset(common),
            shared_noise,
            by or _by(first, second, pairing),
            _level(alone, reckon),
            reckon is not None,
        )
        _enough(first, second, pairing, asked)
        noise = [_noise(s) for s in alone]
        found = _solved((first, second), noise, pairing, asked)
        extra = _properties(found, cases, both, noise, pairing, asked)
        missed = _missed(found, extra, asked)
        single = [Shown(s, properties(s, seed).variance) for s in alone]
        return Comparison(
            cases, *told(found, extra, missed, alone, single, pairing, asked, seed)
        )  # fmt: skip


def _in_units_of(a: Case, b: Case) -> tuple[Case, Case]:
    """Both cases with the units, the level and the uncertain properties of A."""
    s = a.source
    source = replace(
        b.source, unit=s.unit, total_unit=s.total_unit, position_unit=s.position_unit
    )  # fmt: skip
    shared = {**b.member.uncertainty, **a.member.uncertainty}
    first = replace(a, member=replace(a.member, uncertainty=shared))
    second = replace(
        b, source=source, strength=a.strength, member=replace(b.member, uncertainty=shared)
    )
    return first, second


def _level(alone: Sequence[Solved], reckon: str | None) -> float:
    """Mean density of a change to reckon with (SI)."""
    if reckon is None:
        return max(float(np.nan_to_num(s.answers.level)) for s in alone)
    unit = alone[0].forward.case.member.kind.source_unit
    return abs(quantity(reckon, unit, "--reckon", difference=True))


def _by(a: Forward, b: Forward, pairing: Pairing) -> By:
    most = max(len(a.rows), len(b.rows))
    return "pairs" if len(pairing.first) >= ENOUGH * most else "stack"


def _enough(a: Forward, b: Forward, pairing: Pairing, asked: Agreed) -> None:
    unknown = [c for c in a.columns if c.kind != "null" and c.name not in asked.common]
    if asked.by == "pairs" and len(pairing.first) < len(unknown) + 1:
        raise SolveError(
            f"only {len(pairing.first)} readings of the two campaigns are of common sensors "
            "(same group, kind and place)", "compare",
            "name groups and places alike in both cases, or take all readings with --by stack",
        )  # fmt: skip


def _noise(solved: Solved) -> tuple[Array, Array]:
    """Standard deviations and correlations; a common unknown factor as it was found."""
    factor = 1.0 if solved.problem.stated else float(solved.answers.fit.noise)
    weight = np.sqrt(solved.noise.weight)
    return solved.sd / weight * (factor if factor > 0 else 1.0), solved.lag


def _solved(
    both: Sequence[Forward], noise: Sequence[tuple[Array, Array]], pairing: Pairing,
    asked: Agreed, *, criteria: bool = True,
) -> Joint:  # fmt: skip
    first, second = (Campaign(f, *n) for f, n in zip(both, noise, strict=True))
    joined = join(first, second, pairing, asked.by, asked.common, asked.shared)
    problem, questions = joined.problem, joined.asked.questions
    answers, ladder, choices, choice = answered(
        both[0], problem, questions, criteria, asked.level
    )  # fmt: skip
    # what is declared about the sources does not hold for their difference
    case = both[0].case
    source = replace(case.source, sign="any", ceiling=None, monotone=(), total=None, known=())
    forward = replace(both[0], case=replace(case, source=source))
    return Joint(
        Solved(forward, problem, Noise.given(*noise[0]), joined.asked, answers, ladder, choices,
               choice),
        joined.nuisances, joined.noise,
    )  # fmt: skip


def _properties(
    found: Joint, cases: Sequence[Case], readings: Sequence[Readings],
    noise: Sequence[tuple[Array, Array]], pairing: Pairing, asked: Agreed,
) -> Array:  # fmt: skip
    """Variance that uncertain properties, the same in both campaigns, add to each answer.

    By central differences, as in a recovery; what they do to both campaigns alike cancels.
    """
    shift, bend = {}, {}
    centre = _whole(found.solved)
    for key in cases[0].member.uncertainty:
        up, down = (
            _whole(_solved(
                [build(replace(c, member=vary(c.member, key, side)), r)
                 for c, r in zip(cases, readings, strict=True)],
                noise, pairing, asked, criteria=False,
            ).solved)
            for side in (1.0, -1.0)
        )  # fmt: skip
        shift[key], bend[key] = (up - down) / 2, up + down - 2 * centre
    return Properties(shift, bend, len(centre)).variance


def _whole(solved: Solved) -> Array:
    """Answers in SI, known parts included."""
    constant = solved.asked.constant
    parts = [constant.real, constant.imag][: solved.asked.parts]
    return np.asarray(solved.answers.value + np.concatenate(parts))


def _missed(found: Joint, extra: Array, asked: Agreed) -> Array:
    """Change of each question (SI) that would have been shown with 95 % probability, (q,).

    For zones that show none it is tried: readings without noise of a change that is spread evenly,
    until its interval stays clear of zero but for a noise that one in twenty exceeds. Else the
    interval's width alone decides. nan where there is no interval; inf where no change would do.
    """
    solved = found.solved
    a, problem, q = solved.answers, solved.problem, len(solved.asked.constant)
    sd = solved.asked.widest(np.hypot(a.sd, np.sqrt(extra)))
    missed = np.asarray((a.quantile + POWER) * sd)
    zones = solved.asked.blocks["zones"]
    if (problem.grid.parts == 2 and asked.by == "pairs") or not problem.smooth:
        return missed
    for i in range(zones.start, zones.stop):
        shown = abs(a.value[i]) > a.quantile * sd[i]
        if not np.isfinite(sd[i]) or shown:
            continue
        if problem.A.size > TRIED or asked.by == "stack":
            share = max(float(np.nan_to_num(a.data_share[i], nan=1.0)), 1e-9)
            missed[i] = (a.quantile + POWER * np.sqrt(share)) * sd[i] / share
        else:
            missed[i] = _tried(found, i, float(np.sqrt(extra[i % q])), missed[i], asked)
    return missed


def _tried(found: Joint, i: int, extra: float, guess: float, asked: Agreed) -> float:
    solved = found.solved
    problem, rows = solved.problem, solved.asked.questions
    one = Questions(rows.cells[i : i + 1], rows.columns[i : i + 1])
    inside = (one.cells[0] != 0) & problem.grid.free
    size = float(one.cells[0] @ inside)
    if size == 0:
        return guess
    amount = guess
    for _ in range(TURNS):
        d = problem.A @ (amount / size * inside)
        d[len(d) - problem.pseudo :] = 0.0
        a = answered(solved.forward, replace(problem, d=d), one, False, asked.level)[0]
        needed = a.quantile * np.hypot(a.sd[0], extra) + POWER * np.hypot(a.s_c[0], extra)
        step = float(needed / a.value[0]) if a.value[0] > 0 else np.inf
        amount = amount * min(step, FASTEST)
        if not amount < FAR * guess:
            return float("inf")
        if abs(step - 1) < CLOSE:
            break
    return amount
