"""Patterns that noise does not leave in residuals, group by group.

A shift, a trend along the member and a gain are looked for as what they would be: one more column
of the model. Along a whitened column c the residuals r of the fit have variance c'(I - H)c (times
the noise's), H the hat matrix, so that z = c'r / sqrt(c'(I - H)c) is standard normal if there is
none, and c'r / c'(I - H)c is its size if there is one.

Sources: Rao (1948), Proc. Camb. Phil. Soc. 44, 50 (score tests); Wald & Wolfowitz (1940), Ann.
Math. Stat. 11, 147 (runs of signs); Spearman (1904), Am. J. Psychol. 15, 72 (rank correlation).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from math import comb

import numpy as np
from numpy.typing import NDArray

from srcfit.errors import Finding, as_percent
from srcfit.member import Array
from srcfit.results import reading_units, recoloured
from srcfit.smoother import Smoother, colours
from srcfit.solve import Solved
from srcfit.whitening import linked_rows

SURE = 0.001  # probability, over all groups, below which a pattern is called more than chance
FEWEST = 6  # readings of a group that may show a shift, a trend or a gain
RANKED = 12  # readings that a rank correlation needs
EACH = 8  # readings of either sign that runs need
CLOSE = 0.75  # part of the strongest score from which on another pattern explains as much
ABSORBED = 1e-6  # part of a column that the model itself leaves free


@dataclass(frozen=True)
class Pattern:
    """One column that the residuals follow: its size (SI) and how far beyond chance it is."""

    name: str
    size: float
    score: float


def findings(solved: Solved, main: Smoother, *, correlated: frozenset[str]) -> list[Finding]:
    """Patterns of the residuals beyond chance, one sentence a group and kind.

    Parameters
    ----------
    solved : Solved
    main : Smoother
        The estimate as a linear map; its questions play no part.
    correlated : set of str
        Groups whose neighbours are already known to resemble each other.
    """
    forward = solved.forward
    if forward.driven or not len(forward.rows):
        return []
    groups = []
    for g in range(len(forward.groups)):
        members = np.flatnonzero(forward.group == g)
        groups.append(members[np.argsort(forward.places[members], kind="stable")])
    level = SURE / len(groups)
    if solved.held is None and not solved.places:
        found = _column(solved, main, groups, level)
        if found:  # it shows in every other test too
            return [found]
    left: list[Finding] = []
    standard = np.nan_to_num(solved.answers.fit.standardised)
    alone = np.nan_to_num(solved.answers.fit.leave_one_out)
    size = np.abs(_predicted(solved))
    for name, members in zip(forward.groups, groups, strict=True):
        left += _growing(name, standard[members], alone[members], size[members], level)
        if name not in correlated:
            left += _runs(name, standard[members], level)
    return left


def _predicted(solved: Solved) -> Array:
    """What the fit reads at each used reading (SI), (n,)."""
    forward = solved.forward
    residual = recoloured(solved, solved.answers.fit.residual)
    return np.real(forward.readings.value[forward.rows] - residual)


def _column(
    solved: Solved, main: Smoother, groups: Sequence[NDArray[np.intp]], level: float
) -> Finding | None:
    """The strongest of shift, trend and gain in any group, if it is beyond chance."""
    from scipy.special import ndtri, stdtrit

    seen = [(list(_scores(solved, main, members)), members) for members in groups]
    best = max(
        ((p, k) for k, (patterns, _) in enumerate(seen) for p in patterns),
        key=lambda one: abs(one[0].score), default=None,
    )  # fmt: skip
    if best is None:
        return None
    worst, k = best
    dof = solved.readings - solved.answers.fit.effective_dof
    tail = level / 2
    bound = float(-ndtri(tail) if solved.problem.stated else -stdtrit(max(dof, 1.0), tail))
    if abs(worst.score) <= bound:
        return None
    found = _sentence(solved, solved.forward.groups[k], int(seen[k][1][0]), worst)
    close = [
        p.name for p in seen[k][0] if p is not worst and abs(p.score) > CLOSE * abs(worst.score)
    ]
    others = [
        repr(solved.forward.groups[i]) for i, (patterns, _) in enumerate(seen)
        if i != k and any(abs(p.score) > bound for p in patterns)
    ]  # fmt: skip
    more = [f"a {' or a '.join(close)} of theirs would look much the same"] if close else []
    if others:
        more.append(f"it may as well be {' and '.join(others)} that is wrong")
    if not more:
        return found
    said = f"{', and '.join(more)}."
    return replace(found, sentence=f"{found.sentence} {said[0].upper()}{said[1:]}")


def _scores(solved: Solved, main: Smoother, members: NDArray[np.intp]) -> Iterator[Pattern]:
    """Scores of the columns that the model itself leaves free."""
    if len(members) < FEWEST:
        return
    forward = solved.forward
    x = forward.places[members]
    read = _predicted(solved)
    shapes = {
        "shift": np.ones(len(members)),
        "trend": (x - x.mean()) / max(float(np.ptp(x)), np.finfo(float).tiny),
    }
    if len(forward.groups) > 1:  # one group alone cannot tell its gain from the source's size
        shapes["gain"] = read[members] - read[members].mean()
    columns = np.zeros((len(forward.rows), len(shapes)))
    columns[members] = np.stack(list(shapes.values()), axis=1)
    columns *= (np.sqrt(solved.noise.weight) / solved.sd)[:, None]
    found = linked_rows(forward, solved.links)
    colour = colours(found.before, found.lag)
    if colour is not None:
        columns = np.asarray(colour @ columns)
    own, free = (columns**2).sum(axis=0), main.free(columns)
    fit = solved.answers.fit
    along, noise = columns.T @ fit.residual, fit.noise
    if "gain" in shapes:
        # what was fitted to the noise is in the column too: E d'H(I - H)d = the hat values' sum
        along[-1] -= noise**2 * fit.hat[members].sum()
    for name, a, f, o in zip(shapes, along, free, own, strict=True):
        if o > 0 and f > ABSORBED * o:
            yield Pattern(name, float(a / f), float(a / (noise * np.sqrt(f))))


def _sentence(solved: Solved, group: str, member: int, pattern: Pattern) -> Finding:
    forward = solved.forward
    row = forward.rows[member]
    unit = forward.readings.unit[row] or "SI"
    amount = pattern.size * reading_units(solved)[0][row]
    odds = f"{abs(pattern.score):.1f} standard deviations of chance"
    if pattern.name == "shift":
        side = "above" if amount > 0 else "below"
        return Finding(
            "residuals-shifted", "caution",
            f"The readings of {group!r} stand together {abs(amount):.2g} {unit} {side} what the "
            f"member and the other readings let expect ({odds}): check their zero; "
            '`offset = "unknown"` lets them have one of their own.',
        )  # fmt: skip
    if pattern.name == "trend":
        way = "rise" if amount > 0 else "fall"
        return Finding(
            "residuals-trend", "caution",
            f"The residuals of {group!r} {way} by {abs(amount):.2g} {unit} from the first place "
            f"to the last ({odds}): a tilted datum, a drift while reading along it, or an end or "
            "a support that is not as described does that; check those first.",
        )  # fmt: skip
    more = "more" if pattern.size > 0 else "less"
    part = as_percent(abs(pattern.size))
    return Finding(
        "residuals-gain", "caution",
        f"The readings of {group!r} swing {part} {more} than the member and "
        f"the other readings let expect ({odds}): check the calibration, the sensor's place "
        'in the section and the stiffness; `scale = "unknown"` lets them have their own.',
    )  # fmt: skip


def _growing(
    name: str, standard: Array, alone: Array, size: Array, level: float
) -> list[Finding]:  # fmt: skip
    """Residuals whose spread grows with the reading (rank correlation, one-sided).

    A fit that follows some readings more than others leaves them smaller residuals. How much
    smaller depends on the source: between the standardised and the left-out residuals. Both must
    grow.
    """
    n = len(standard)
    if n < RANKED or np.ptp(size) == 0 or not standard.any():
        return []
    from scipy.special import stdtr

    ranks = [_ranks(np.abs(e)) for e in (standard, alone)]
    rho = min(float(np.corrcoef(r, _ranks(size))[0, 1]) for r in ranks)
    t = rho * np.sqrt((n - 2) / max(1 - rho**2, 1e-12))
    if stdtr(n - 2, -t) >= level:
        return []
    return [
        Finding(
            "residuals-grow", "caution",
            f"The residuals of {name!r} grow with the reading (rank correlation {rho:.2f} over "
            f"{n} readings): the large ones are noisier than stated, or the source there is "
            "sharper than the smooth part allows; give each reading its own sd by `sd_column`, or "
            "declare `breaks` or a lumped part there.",
        )
    ]  # fmt: skip


def _ranks(values: Array) -> Array:
    """Ranks 1, 2 ...; equal values share the mean of theirs."""
    _, back, counts = np.unique(values, return_inverse=True, return_counts=True)
    last = np.cumsum(counts)
    return np.asarray((last - (counts - 1) / 2)[back], dtype=float)


def _runs(name: str, standard: Array, level: float) -> list[Finding]:
    """Too few runs of one sign along the member (exact distribution)."""
    up = standard > 0
    n, m = int(up.sum()), int((~up).sum())
    if min(n, m) < EACH:
        return []
    runs = 1 + int((up[1:] != up[:-1]).sum())
    if fewer_runs(runs, n, m) >= level:
        return []
    return [
        Finding(
            "residuals-in-runs", "caution",
            f"The residuals of {name!r} keep their sign over long stretches ({runs} runs along "
            f"the member where about {1 + 2 * n * m / (n + m):.0f} are due): the fit misses "
            "something that varies slowly, such as a datum, a temperature or a property of the "
            "member.",
        )
    ]  # fmt: skip


def fewer_runs(runs: int, n: int, m: int) -> float:
    """Probability of at most so many runs among n of one sign and m of the other, by chance."""
    count = 0
    for r in range(2, runs + 1):
        k = r // 2
        if r % 2 == 0:
            count += 2 * comb(n - 1, k - 1) * comb(m - 1, k - 1)
        else:
            count += comb(n - 1, k) * comb(m - 1, k - 1) + comb(n - 1, k - 1) * comb(m - 1, k)
    return count / comb(n + m, n)
