"""Where the variance of the total and of each zone comes from: noise, smoothing, properties."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.case.vary import vary
from srcfit.errors import Finding, as_percent
from srcfit.member import Array
from srcfit.places import solve
from srcfit.solve import Solved

DOMINATES = 0.5  # share of a variance that one property may have without a sentence
BENDS = 0.3  # second over first difference of an effect
MATTERS = 0.2  # share of a variance from which on the bend is worth a sentence: a tenth of the sd


@dataclass(frozen=True)
class Properties:
    """What uncertain properties add to each answer, by central differences.

    Attributes
    ----------
    shift : mapping property -> (q,)
        Change of each answer (SI) over one standard uncertainty.
    bend : mapping property -> (q,)
        Second difference: how far the changes in the two directions differ.
    count : int
        q.
    """

    shift: Mapping[str, Array]
    bend: Mapping[str, Array]
    count: int

    def added(self, key: str) -> Array:
        """Variance (q,) that one property adds; 0 where an answer is undetermined.

        Mean square of the changes in the two directions, shift**2 + bend**2 / 4: the square of
        the linear effect, and no less where an effect turns round. Source: the Gauss-Hermite rule
        of two places (Abramowitz & Stegun, 25.4.46), for a normal property.
        """
        return np.asarray(np.nan_to_num(self.shift[key] ** 2 + self.bend[key] ** 2 / 4))

    @property
    def variance(self) -> Array:
        """Sum over the properties, (q,)."""
        return sum((self.added(key) for key in self.shift), np.zeros(self.count))


def properties(solved: Solved, rng: np.random.SeedSequence) -> Properties:
    """Recover again with each uncertain property moved by one standard uncertainty, both ways."""
    forward = solved.forward
    uncertain = forward.case.member.uncertainty
    centre = solved
    if solved.places and uncertain:
        # parts of unknown place stay where they most probably are
        centre = solve(
            forward.case, forward.readings, criteria=False, rng=rng, edges=solved.edges,
            noise=solved.noise.alone, features=solved.problem.grid.features,
        )  # fmt: skip
    shift, bend = {}, {}
    for key in uncertain:
        up, down = (
            _whole(
                solve(
                    replace(forward.case, member=vary(forward.case.member, key, side)),
                    forward.readings,
                    criteria=False,
                    rng=rng,
                    edges=solved.edges,
                    noise=solved.noise.alone,
                    features=solved.problem.grid.features,
                )
            )
            for side in (1.0, -1.0)
        )
        shift[key] = (up - down) / 2
        bend[key] = up + down - 2 * _whole(centre)
    return Properties(shift, bend, len(solved.answers.value))


def _whole(solved: Solved) -> Array:
    """Answers in SI, known parts included."""
    constant = solved.asked.constant
    both = [constant.real, constant.imag][: solved.asked.parts]
    values: Array = solved.answers.value + np.concatenate(both)
    return values


@dataclass(frozen=True)
class Share:
    """Parts of one variance, 1 in all. `zone` is None for the total.

    `smoothing` is what is neither noise nor a property: what was assumed about the source
    beforehand, the distance between the estimate and the cautious one, and a doubtful place.
    `bend` is the second over the first difference of each property's effect.
    """

    zone: str | None
    noise: float
    smoothing: float
    properties: Mapping[str, float]
    bend: Mapping[str, float]

    def facts(self) -> dict[str, Any]:
        """As in summary.json."""
        return {
            "zone": self.zone, "noise": self.noise, "smoothing": self.smoothing,
            "properties": dict(self.properties),
        }  # fmt: skip


def shares(
    solved: Solved, known: Properties, rows: NDArray[np.intp], noise: Array
) -> list[Share]:  # fmt: skip
    """Shares of the total and the zones; those without an interval are left out.

    Parameters
    ----------
    rows : (parts, 1 + z) int
        Row of the total and of each zone among the answers, for each part of an amplitude.
    noise : (parts, 1 + z)
        Variance that the readings' noise gives each estimate (SI).
    """
    zones = [z.name for z in solved.forward.case.source.zones]
    own, added = solved.answers.sd[rows] ** 2, known.variance[rows]
    found = []
    for i, name in enumerate([None, *zones]):
        # of a complex amplitude the part that is told less well, like its sd
        p = int(np.argmax(own[:, i] + added[:, i]))
        whole, row = float(own[p, i] + added[p, i]), rows[p, i]
        if not np.isfinite(whole) or whole <= 0:
            continue
        heard = min(float(noise[p, i]), float(own[p, i]))
        found.append(
            Share(
                name,
                heard / whole,
                (float(own[p, i]) - heard) / whole,
                {key: float(known.added(key)[row]) / whole for key in known.shift},
                {key: _ratio(known.bend[key][row], known.shift[key][row]) for key in known.shift},
            )
        )
    return found


def _ratio(bend: float, shift: float) -> float:
    return abs(float(bend / shift)) if shift else 0.0


def findings(found: list[Share]) -> list[Finding]:
    """Properties that dominate the total or a zone, and effects that are not linear."""
    told: list[Finding] = []
    for key in found[0].properties if found else ():
        most = [(s.properties[key], _named(s)) for s in found if s.properties[key] > DOMINATES]
        if most:
            listed = _listed(
                [f"{as_percent(share)} of the variance of {name}" for share, name in most]
            )
            verb = "comes" if len(most) == 1 else "come"
            told.append(
                Finding(
                    "property-dominates", "caution",
                    f"{listed} {verb} from the uncertainty of {key}: knowing it better helps more "
                    "than better readings.",
                )
            )  # fmt: skip
        bent = [(s.bend[key], _named(s)) for s in found if s.properties[key] > MATTERS]
        worst, name = max(bent, default=(0.0, ""))
        how = f"bends by {as_percent(worst)} over" if worst < 1 else "turns round within"
        if worst > BENDS:
            told.append(
                Finding(
                    "property-not-linear", "caution",
                    f"The effect of the uncertainty of {key} on {name} {how} one standard "
                    "deviation: its share of the intervals is rough; try the case at both ends of "
                    "it.",
                )
            )  # fmt: skip
    return told


def _named(share: Share) -> str:
    return "the total" if share.zone is None else f"zone {share.zone}"


def _listed(words: list[str]) -> str:
    return words[0] if len(words) == 1 else ", ".join(words[:-1]) + " and " + words[-1]
