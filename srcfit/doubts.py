"""What is to be said about single readings: outliers, doubtful ones, repeats at one place."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from srcfit.errors import Finding
from srcfit.member import Array
from srcfit.outliers import gross
from srcfit.results import Shown, number_map, reading_units, recoloured, standardised
from srcfit.rounding import UNDETERMINED, brief, listed, minus, plus_minus
from srcfit.solve import Solved, invert
from srcfit.whitening import Rows, parts_of, together

SURE = 0.001  # probability below which repeats contradict the noise
NAMED = 8  # readings named one by one
MOST_FAR = 0.25  # part of the readings that may lie far from the fit and still be named
UNWEIGHTED = 1e-6  # weight of a doubtful reading in the other total
OPEN = 0.5  # range of probable correlations that is worth a sentence


def findings(solved: Solved, shown: Shown) -> list[Finding]:
    """Outliers, doubtful readings, readings far from the fit, and what repeats say."""
    weight, unsure = solved.noise.weight, solved.noise.unsure
    score = standardised(solved)
    found = []
    if not solved.noise.settled:
        found.append(Finding(
            "noise-not-settled", "caution",
            "The noise found from the readings (its standard deviation, correlation, or the "
            "weights of outliers) did not come to rest; state what is known of it (`sd`, "
            "`correlation`), or exclude what is not a reading.",
        ))  # fmt: skip
    found += _open(solved)
    if (weight < 1).any():
        found.append(_weighted(solved, shown, score))
    if unsure.any():
        found.append(_doubtful(solved, shown))
    return found + _far(solved, np.maximum(np.abs(score.real), np.abs(score.imag)))


def _open(solved: Solved) -> list[Finding]:
    """Groups whose correlation was estimated, but is hardly told."""
    lags = np.array([n.lag for n in solved.noise.others])
    return [
        Finding(
            "correlation-open", "note",
            f"The readings hardly tell how the errors of neighbouring readings of {name!r} hang "
            f"together: a lag-1 correlation of {low:.1f} is about as probable as one of "
            f"{high:.1f}. The intervals allow for both; if `correlation` is known, state it: they "
            "would be surer, and often narrower.",
        )
        for name, low, high in zip(
            solved.forward.groups, lags.min(axis=0, initial=1), lags.max(axis=0, initial=0),
            strict=True,
        )
        if high - low > OPEN
    ] if len(lags) else []  # fmt: skip


def _weighted(solved: Solved, shown: Shown, score: Array) -> Finding:
    weight = solved.noise.weight
    rows = np.flatnonzero(weight < 1)
    far = np.where(np.abs(score.real) >= np.abs(score.imag), score.real, score.imag)
    each = [
        f"{_line(solved, i)} ({far[i]:+.3g} standard deviations, weight {brief(weight[i], 1)})"
        for i in rows[:NAMED]
    ]
    one = len(rows) == 1
    lie, were, them = ("lies", "it was", "it") if one else ("lie", "they were", "them")
    whole = _totals(solved, shown, np.ones(len(weight)), f"With {them} at full weight")
    return Finding(
        "outlier", "caution",
        minus(
            f"{len(rows)} of {len(weight)} readings {lie} so far from what all others say that "
            f"{were} down-weighted, not dropped: {_few(each, len(rows))}. {whole}Look at {them}: "
            "correct or exclude what is wrong."
        ),
    )  # fmt: skip


def _doubtful(solved: Solved, shown: Shown) -> Finding:
    unsure, n = solved.noise.unsure, len(solved.noise.weight)
    rows = np.flatnonzero(unsure)
    left = together(solved.forward, solved.answers.fit.leave_one_out) * solved.sd
    scale, _ = reading_units(solved)
    each = []
    for i in rows[:NAMED]:
        at = solved.forward.rows[i]
        away = float(np.real(left[i]) * scale[at])
        unit = solved.forward.readings.unit[at].replace("degC", "K")
        side = "above" if away > 0 else "below"
        how = f", {brief(abs(away), 2)} {unit} {side} what all others say"
        each.append(_line(solved, i) + (how if np.isfinite(away) else ""))
    one = len(rows) == 1
    stand, were, wrong = (
        ("stands", "It was", "If it is wrong") if one
        else ("stand", "They were", "If they are wrong")
    )  # fmt: skip
    less = np.where(unsure, UNWEIGHTED, solved.noise.weight)
    return Finding(
        "outlier-or-source", "serious",
        minus(
            f"{len(rows)} of {n} readings either {stand} over a narrow source or cannot be right, "
            f"and no neighbour is near enough to tell: {_few(each, len(rows))}. {were} used at "
            f"full weight. {_totals(solved, shown, less, wrong)}Read there again, and once more "
            "close by; if a narrow source is known to stand there, name it as a lumped part."
        ),
    )  # fmt: skip


def _totals(solved: Solved, shown: Shown, weight: Array, when: str) -> str:
    """What the total would be with other weights; empty where there is none."""
    noise = solved.noise.weighing(weight)
    other = invert(solved.forward, False, np.random.SeedSequence(0), noise)
    both = [s.numbers("total")[0] for s in (shown, Shown(other, shown.extra))]
    unit = solved.forward.case.source.total_unit
    here, there = (plus_minus(number_map(n), unit) for n in both)
    if UNDETERMINED in (here, there):
        return ""
    return f"{when} the total would be {there} instead of {here} (standard uncertainties). "


def _far(solved: Solved, score: Array) -> list[Finding]:
    """Readings at full weight that stay far from the fit.

    Where they are many, none of them is at fault: that is for the finding on the noise to say.
    """
    n, weight = len(score), solved.noise.weight
    bound = gross(n)
    far = np.flatnonzero((np.nan_to_num(score) > bound) & (weight == 1))
    if not len(far) or len(far) > max(MOST_FAR * n, 2):
        return []
    lie = "lies" if len(far) == 1 else "lie"
    lines = _few([_line(solved, i) for i in far[:NAMED]], len(far))
    return [Finding(
        "far-from-fit", "caution",
        f"{len(far)} of {n} readings {lie} more than {bound:.1f} standard deviations from the fit "
        f"({lines}), in a way that a source may explain better than an error of one reading: a "
        "source sharper than the smooth part allows wants a lumped part or breaks there; exclude "
        "what is not a reading.",
    )]  # fmt: skip


def _line(solved: Solved, i: int) -> str:
    readings, row = solved.forward.readings, solved.forward.rows[i]
    return f"{readings.file[row]} line {readings.line[row]}"


def _few(each: list[str], count: int) -> str:
    return listed(each) if count <= NAMED else f"{', '.join(each)} and {count - NAMED} more"


@dataclass(frozen=True)
class Repeats:
    """Scatter of readings repeated at one place, one group.

    Attributes
    ----------
    ratio : variance over that of the noise taken
    freedom : degrees of freedom
    rest, rest_freedom : the same for what the fit leaves beyond that scatter
    """

    ratio: float
    freedom: int
    rest: float
    rest_freedom: float


def repeats(solved: Solved, g: int) -> Repeats | None:
    """What repeats at one place tell of the noise of a group, whatever the source.

    Of the residuals, so that drift between repeats does not count; None without repeats.
    Source: Draper & Smith, Applied Regression Analysis (pure error and lack of fit), from memory.
    """
    forward, fit, noise = solved.forward, solved.answers.fit, solved.noise
    e = recoloured(solved, fit.residual) / solved.sd / (fit.noise or 1.0)
    spec, sound = forward.readings.spec[forward.rows], (noise.weight == 1) & (forward.group == g)
    square, freedom = 0.0, 0
    for members in _places(forward.places, spec, sound):
        own = e[members] - e[members].mean()
        square += float((np.abs(own) ** 2).sum())
        freedom += len(members) - 1
    if not freedom:
        return None
    number, parts = parts_of(forward)[0], 2 if forward.driven else 1
    rows = sound[number]
    whole = float((np.abs(fit.residual[rows]) ** 2).sum()) / (fit.noise or 1.0) ** 2
    left = float((1 - fit.hat[rows]).sum()) - parts * freedom
    rest = max(whole - square, 0.0) / left if left > 0 else float("nan")
    return Repeats(square / (parts * freedom), parts * freedom, rest, left)


def _places(x: Array, spec: Rows, sound: Array) -> list[Rows]:
    """Readings of one column at one place, where there are several."""
    members = np.flatnonzero(sound)
    members = members[np.lexsort((x[members], spec[members]))]
    new = (np.diff(x[members]) != 0) | (np.diff(spec[members]) != 0)
    return [m for m in np.split(members, np.flatnonzero(new) + 1) if len(m) > 1]


def repeatability(solved: Solved) -> list[Finding]:
    """Repeats against the stated noise (chi-square test), and against the fit (F test)."""
    from scipy.special import chdtr, chdtrc, fdtrc

    forward, found = solved.forward, []
    scale, _ = reading_units(solved)
    for g, name in enumerate(forward.groups):
        told = repeats(solved, g)
        if told is None or not np.isfinite(told.ratio):
            continue
        members = np.flatnonzero(forward.group == g)
        row = forward.rows[members[0]]
        unit = forward.readings.unit[row].replace("degC", "K")
        taken = float(np.median(solved.sd[members]) * scale[row]) * (solved.answers.fit.noise or 1)
        seen = np.sqrt(told.ratio) * taken
        words = (
            f"Readings of {name!r} repeated at one place scatter by {brief(seen, 2)} {unit} "
            f"({told.freedom} degrees of freedom)"
        )
        square = told.ratio * told.freedom
        if np.isfinite(forward.sd[members]).all():
            if chdtrc(told.freedom, square) < SURE:
                found.append(Finding(
                    "repeats-contradict-noise", "serious",
                    f"{words}, more than the stated {brief(taken, 2)} {unit}: whatever the source "
                    "and the member, the noise is larger than stated and the intervals are too "
                    "narrow; state it, or give the group `sd = \"estimate\"`.",
                ))  # fmt: skip
            elif chdtr(told.freedom, square) < SURE:
                found.append(Finding(
                    "repeats-contradict-noise", "caution",
                    f"{words}, less than the stated {brief(taken, 2)} {unit}: if they are "
                    "independent readings, and not one read again, the noise is smaller than "
                    "stated and the intervals wider than they need be.",
                ))  # fmt: skip
        if told.rest_freedom >= 1 and told.rest > told.ratio > 0:
            odds = fdtrc(told.rest_freedom, told.freedom, told.rest / told.ratio)
            if odds < SURE:
                found.append(Finding(
                    "lack-of-fit", "serious",
                    f"{words}, but the fit misses its places by "
                    f"{brief(np.sqrt(told.rest) * taken, 2)} {unit}: chance does not do that (F "
                    f"test, {odds:.1g}), so the member, an end, a support or a sensor is not as "
                    "described, or the source is sharper than the smooth part allows.",
                ))  # fmt: skip
    return found
