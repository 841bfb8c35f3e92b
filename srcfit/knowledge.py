"""Findings about what is known of the source: inequalities, and places that are not known.

Every function gives a list of findings, empty when there is nothing to say.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from srcfit.answers import CURRIE, per
from srcfit.constraints import Held
from srcfit.errors import Finding, as_percent
from srcfit.results import Shown
from srcfit.solve import Solved

SURE = 0.001  # probability below which a growth of the misfit is called more than chance
ENOUGH = 200.0  # effective draws below which the ends of an interval are rough
REFUSED = 0.01  # share of trajectories that may be lost
LISTED = 5  # stretches that are named
APART = 0.05  # probability from which a stretch of places is named


def findings(solved: Solved, shown: Shown) -> list[Finding]:
    """Everything about the knowledge of a case."""
    found, held = places(solved, shown), solved.held
    if held is None:
        return found
    if held.reason:
        return [*found, *unused(held.reason)]
    found += contradicted(solved, held)
    if not held.draws:
        return found
    return [*found, *active(solved, held, shown), *sampled(solved, held)]


def places(solved: Solved, shown: Shown) -> list[Finding]:
    """Places that were looked for and are apart, or at the end of where they were looked for.

    Of a part that is not detected there is nothing to be said: it may stand anywhere.
    """
    lumped = [c.name for c in solved.forward.columns if c.kind == "lumped"]
    amounts = dict(zip(lumped, shown.numbers("lumped"), strict=True))
    unit = solved.forward.case.source.position_unit
    scale, found = per(unit, "m"), []
    for place in solved.places.values():
        amount = amounts[place.name]
        size = abs(complex(amount.value or 0.0, amount.imaginary or 0.0))
        if amount.sd is not None and size <= CURRIE * amount.sd:
            continue
        apart = [s for s in place.stretches if s.probability >= APART]
        if len(apart) > 1:
            words = "; ".join(
                f"{s.start * scale:.4g}–{s.end * scale:.4g} {unit} ({as_percent(s.probability)})"
                for s in apart
            )
            found.append(
                Finding(
                    "place-bimodal", "caution",
                    f"The readings leave {place.name!r} at more than one place: {words}. Its "
                    "strength, and all numbers that depend on it, are averaged over them; a "
                    "reading close to one of these places would tell.",
                )
            )  # fmt: skip
        if place.at_end:
            found.append(
                Finding(
                    "place-at-end", "caution",
                    f"The most probable place of {place.name!r} is an end of the stretch where it "
                    "was looked for: widen `between`, unless the part cannot stand beyond.",
                )
            )  # fmt: skip
    return found


def unused(reason: str) -> list[Finding]:
    """Inequalities that could not be used."""
    return [
        Finding(
            "constraint-unused", "serious",
            f"Sign, ceiling and monotone stretches were not used, because {reason}; see the "
            "finding that names what cannot be told apart.",
        )
    ]  # fmt: skip


def active(solved: Solved, held: Held, shown: Shown) -> list[Finding]:
    """Where the estimate stands at a wall, and what the total would be without."""
    grid, source = solved.forward.grid, solved.forward.case.source
    scale = per(source.position_unit, "m")
    runs = _runs(held.tight)
    places = [f"{grid.edges[a] * scale:.4g}–{grid.edges[b] * scale:.4g}" for a, b in runs]
    parts = [
        c.name
        for c, n in zip(solved.forward.columns, shown.numbers("lumped"), strict=False)
        if source.sign != "any" and n.value == 0
    ]
    if not places and not parts:
        return []
    more = f" and {len(places) - LISTED} more stretches" if len(places) > LISTED else ""
    where = ", ".join(places[:LISTED]) + more + (f" {source.position_unit}" if places else "")
    words = [f"the smooth part on {where}"] if places else []
    words += [f"the lumped part {name!r}" for name in parts]
    return [
        Finding(
            "sign-active", "note",
            "What is known of the source holds the estimate at its bound for "
            + "; ".join(words) + ". " + _without(solved, held),
        )
    ]  # fmt: skip


def _without(solved: Solved, held: Held) -> str:
    """What the total would be without the inequalities."""
    total, size = solved.asked.blocks["total"].start, solved.asked.factor[0]
    value = float((held.free.value[total] + np.real(solved.asked.constant[total])) * size)
    half = float((held.free.upper[total] - held.free.lower[total]) / 2 * size)
    if not np.isfinite(half):
        return "Without that knowledge the total could not be told."
    unit = solved.forward.case.source.total_unit
    return f"Without that knowledge the total would be {value:.4g} ± {half:.2g} {unit}."


def contradicted(solved: Solved, held: Held) -> list[Finding]:
    """Readings that speak against the inequalities."""
    from scipy.special import chdtrc

    dof = max(float(held.free.fit.effective_dof), 1.0)
    beyond = _beyond(solved, held)
    if not beyond and chdtrc(dof, held.excess) >= SURE:
        return []
    named = "; ".join(beyond[:LISTED])
    seen = f" (without it: {named})" if named else ""
    return [
        Finding(
            "sign-contradicted", "serious",
            f"The readings contradict what is declared of the source{seen}: keeping to it makes "
            f"the misfit grow by {held.excess:.3g} for {dof:.2g} degrees of freedom. Check the "
            "direction of the readings (`positive`), their datum, `known` parts and the member, "
            "or take the declaration back.",
        )
    ]  # fmt: skip


def _beyond(solved: Solved, held: Held) -> list[str]:
    """Numbers whose interval without the inequalities lies wholly beyond them."""
    free, answers, asked = held.free, solved.answers, solved.asked
    if answers.low is None or answers.high is None:
        return []
    source, forward = solved.forward.case.source, solved.forward
    names = {
        "total": ["the total"],
        "zones": [f"zone {z.name!r}" for z in source.zones],
        "lumped": [c.name for c in forward.columns if c.kind == "lumped"],
    }
    found = []
    for block, labels in names.items():
        where = asked.blocks[block]
        for i, label in zip(range(where.start, where.stop), labels, strict=True):
            if free.upper[i] < answers.low[i] or free.lower[i] > answers.high[i]:
                size = asked.factor[i]
                value = (free.value[i] + np.real(asked.constant[i])) * size
                half = (free.upper[i] - free.lower[i]) / 2 * size
                found.append(f"{label} {value:.4g} ± {half:.2g} {source.total_unit}")
    return found


def sampled(solved: Solved, held: Held) -> list[Finding]:
    """How many draws the intervals rest on."""
    blocks = [solved.asked.blocks[b] for b in ("total", "zones", "lumped", "background")]
    least = float(np.concatenate([held.effective[b] for b in blocks]).min())
    found = [
        Finding(
            "sampled-intervals", "note",
            "What is known of the source (its sign or other limits) is kept exactly: the "
            f"intervals come from {held.draws} draws of sources that keep it and fit the readings "
            f"(worth at least {least:.0f} independent ones) and from strict bounds. The same seed "
            "gives the same numbers.",
        )
    ]  # fmt: skip
    if least < 1:
        found.append(
            Finding(
                "few-draws", "caution",
                "The draws behind the intervals could not move inside what is known of the "
                "source: the intervals rest on strict bounds alone. That happens where readings "
                "and knowledge contradict each other.",
            )
        )  # fmt: skip
    elif least < ENOUGH or held.refused > REFUSED:
        lost = (
            f", and {as_percent(held.refused, 1)} of the trajectories were lost"
            if held.refused
            else ""
        )
        found.append(
            Finding(
                "few-draws", "caution",
                f"The draws behind the intervals are worth only {least:.0f} independent ones"
                f"{lost}: the ends of the intervals are rough to some {100 / least**0.5:.0f} %; "
                "repeat with another seed to see by how much.",
            )
        )  # fmt: skip
    return found


def _runs(cells: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """First and last edge of each run of cells that are marked."""
    padded = np.concatenate([[False], cells, [False]]).astype(int)
    turns = np.flatnonzero(np.diff(padded))
    return [(int(a), int(b)) for a, b in turns.reshape(-1, 2)]
