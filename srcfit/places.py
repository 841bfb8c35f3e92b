"""Recoveries with lumped parts of unknown place.

The probability of each place comes from `placing`. The case is then inverted with the parts at a
few places that stand for all in proportion to their probability, and the answers are those of the
mixture (law of total variance). What is drawn and printed back is the most probable place.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from srcfit.bands import Answers
from srcfit.case.model import Case, Lumped
from srcfit.elimination import eliminate
from srcfit.errors import SolveError
from srcfit.forward import build
from srcfit.member import Array
from srcfit.placing import Place, combinations, place_of, probabilities, stand_ins
from srcfit.readings.model import Readings
from srcfit.robust import Noise, noise_of
from srcfit.solve import Solved, invert, mixed
from srcfit.whitening import whitened

Numbers = NDArray[np.intp]

# candidate places of one part, and of each of two
COUNTS = {1: 61, 2: 25}
# combinations that are inverted
STAND_INS = {1: 12, 2: 12}
# a part known to fewer than so many candidate places is looked at more closely, so often at most
NARROW, CLOSER = 8, 3


def solve(
    case: Case,
    readings: Readings,
    *,
    criteria: bool = True,
    rng: np.random.SeedSequence | None = None,
    edges: Sequence[float] = (),
    noise: Noise | None = None,
    features: Array | None = None,
) -> Solved:
    """Invert a case whose lumped parts may have unknown places.

    Parameters
    ----------
    criteria, rng : as of `solve.solve`
    edges : sequence of float
        Further places where cells are cut [m].
    noise : Noise, optional
        Found from the readings when left out; with unknown places it always is.
    features : (m', k), optional
        Of the grid, where they are not to be looked for again.

    Raises
    ------
    SolveError
        As `solve.solve`, and when more than two places are unknown.
    """
    seed = np.random.SeedSequence(0) if rng is None else rng
    unknown = [i for i, p in enumerate(case.source.lumped) if p.at is None]
    if not unknown:
        forward = build(case, readings, edges=edges)
        alone = invert(forward, criteria, seed, noise, features=features)
        return replace(alone, edges=tuple(edges))
    _check(case, unknown)
    ranges = [_range(case.source.lumped[i]) for i in unknown]
    grids, chances = _search(case, readings, unknown, ranges, seed)
    level = case.strength.level
    names = [case.source.lumped[i].name for i in unknown]
    found = [
        place_of(name, x, _marginal(chances, grids, i), level, ends)
        for i, (name, x, ends) in enumerate(zip(names, grids, ranges, strict=True))
    ]
    return _mixture(case, readings, unknown, grids, chances, found, criteria, seed)


def _check(case: Case, unknown: Sequence[int]) -> None:
    if len(unknown) > max(COUNTS):
        names = ", ".join(repr(case.source.lumped[i].name) for i in unknown)
        raise SolveError(
            f"the places of {len(unknown)} lumped parts are unknown ({names})", "source.lumped",
            f"give all but {max(COUNTS)} of them a place with `at`",
        )  # fmt: skip


def _range(part: Lumped) -> tuple[float, float]:
    assert part.between is not None
    return part.between


def _at(case: Case, unknown: Sequence[int], places: Sequence[float]) -> Case:
    """The case with its unknown parts at these places."""
    lumped = list(case.source.lumped)
    for i, at in zip(unknown, places, strict=True):
        lumped[i] = replace(lumped[i], at=float(at), between=None)
    return replace(case, source=replace(case.source, lumped=tuple(lumped)))


def _search(
    case: Case, readings: Readings, unknown: Sequence[int],
    ranges: Sequence[tuple[float, float]], seed: np.random.SeedSequence,
) -> tuple[list[Array], Array]:  # fmt: skip
    """Candidate places of each part and the probability of each combination.

    Looked at more closely where a part is known to a few of its candidates.
    """
    count = COUNTS[len(unknown)]
    grids = [np.linspace(*ends, count if ends[1] > ends[0] else 1) for ends in ranges]
    # the mean level that the cautious prior needs: that of the estimate at its best place
    chances = _chances(case, readings, unknown, grids, None)
    size = _level(case, readings, unknown, _best(grids, chances), seed)
    chances = _chances(case, readings, unknown, grids, size)
    for _ in range(CLOSER):
        closer = [_closer(x, _marginal(chances, grids, i), ranges[i]) for i, x in enumerate(grids)]
        if all(new is old for new, old in zip(closer, grids, strict=True)):
            break
        grids = closer
        chances = _chances(case, readings, unknown, grids, size)
    return grids, chances


def _closer(x: Array, chance: Array, ends: tuple[float, float]) -> Array:
    """The same number of places on the stretch that matters, if that is a small one."""
    told = np.flatnonzero(chance > 1e-4 * chance.max())
    if len(x) == 1 or told[-1] - told[0] + 1 >= NARROW:
        return x
    step = x[1] - x[0]
    low, high = max(ends[0], x[told[0]] - step), min(ends[1], x[told[-1]] + step)
    return np.linspace(low, high, len(x))


def _chances(
    case: Case, readings: Readings, unknown: Sequence[int], grids: Sequence[Array],
    size: float | None,
) -> Array:  # fmt: skip
    """Probability of each combination of places."""
    source = case.source
    known = [p for i, p in enumerate(source.lumped) if i not in unknown]
    trial, columns = list(known), []
    for i, places in zip(unknown, grids, strict=True):
        columns.append(np.arange(len(trial), len(trial) + len(places)))
        part = source.lumped[i]
        trial += [
            replace(part, name=f"{part.name} {n}", at=float(x), between=None)
            for n, x in enumerate(places)
        ]
    every = replace(case, source=replace(source, lumped=tuple(trial)))
    forward = build(every, readings, spare=True)
    middle = build(_at(case, unknown, [float(x[len(x) // 2]) for x in grids]), readings)
    noise = noise_of(middle)
    balanced = eliminate(forward)
    if len(balanced.names) < len(forward.columns):
        raise SolveError(
            "a member that nothing holds needs a smooth part before a place can be looked for",
            "source.smooth", "give the part's place with `at`, or leave `smooth` out",
        )  # fmt: skip
    problem = whitened(forward, noise.sd, noise.lag, balanced, noise.weight)
    each = combinations(columns)
    width = len(forward.columns)
    both = np.concatenate([each + p * width for p in range(forward.grid.parts)], axis=1)
    sign = {"nonnegative": 1, "nonpositive": -1}.get(source.sign, 0)
    return probabilities(problem, both, size, sign)


def _marginal(chances: Array, grids: Sequence[Array], i: int) -> Array:
    """Probability of each place of one part."""
    shaped = chances.reshape([len(x) for x in grids])
    return np.asarray(shaped.sum(axis=tuple(j for j in range(len(grids)) if j != i)))


def _best(grids: Sequence[Array], chances: Array) -> list[float]:
    """The most probable combination."""
    where = np.unravel_index(int(np.argmax(chances)), [len(x) for x in grids])
    return [float(x[k]) for x, k in zip(grids, where, strict=True)]


def _level(
    case: Case, readings: Readings, unknown: Sequence[int], places: Sequence[float],
    seed: np.random.SeedSequence,
) -> float:  # fmt: skip
    plain = replace(case.source, sign="any", ceiling=None, monotone=())
    forward = build(_at(replace(case, source=plain), unknown, places), readings)
    return invert(forward, False, seed).answers.level


def _mixture(
    case: Case, readings: Readings, unknown: Sequence[int], grids: Sequence[Array],
    chances: Array, found: Sequence[Place], criteria: bool, seed: np.random.SeedSequence,
) -> Solved:  # fmt: skip
    """Answers averaged over places; all else is that of the most probable place."""
    shape = [len(x) for x in grids]
    best = int(np.ravel_multi_index([
        int(np.argmin(np.abs(x - p.at))) for x, p in zip(grids, found, strict=True)
    ], shape))  # fmt: skip
    which, share = stand_ins(chances, STAND_INS[len(unknown)])
    # the most probable place stands for its nearest neighbour among them
    which[int(np.argmin(np.abs(which - best)))] = best
    index = np.stack(np.unravel_index(which, shape), axis=1)
    spots = [[float(x[k]) for x, k in zip(grids, row, strict=True)] for row in index]
    edges = tuple(_cuts(case, unknown, spots))
    each = [
        invert(
            build(_at(case, unknown, places), readings, edges=edges),
            criteria and int(k) == best, seed, tuned=False,
        )
        for k, places in zip(which, spots, strict=True)
    ]  # fmt: skip
    main = each[int(np.flatnonzero(which == best)[0])]
    answers = _averaged([s.answers for s in each], share, main.answers)
    return replace(main, answers=answers, places={p.name: p for p in found}, edges=edges)


def _cuts(case: Case, unknown: Sequence[int], spots: Sequence[Sequence[float]]) -> list[float]:
    """Places where the cells of all inversions are cut alike."""
    member, found = case.member, []
    for places in spots:
        for i, at in zip(unknown, places, strict=True):
            half = case.source.lumped[i].width / 2
            found += [at - half, at + half]
    return sorted({x for x in found if member.start < x < member.end})


def _averaged(each: Sequence[Answers], share: Array, main: Answers) -> Answers:
    """Mixture of answers and of their fits."""
    value = share @ np.stack([a.value for a in each])

    def fits(name: str) -> Array:
        return np.asarray(share @ np.stack([getattr(a.fit, name) for a in each]))

    fit = replace(
        main.fit, residual=fits("residual"), leave_one_out=fits("leave_one_out"), hat=fits("hat")
    )
    return replace(mixed(each, share, main, value), fit=fit)
