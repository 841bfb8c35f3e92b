"""What is said about features that the readings demand: taken in, or to be taken in."""

from __future__ import annotations

import numpy as np

from srcfit.answers import per
from srcfit.bands import averaged, weighed
from srcfit.errors import Finding
from srcfit.features import featured
from srcfit.problem import Array, Grid
from srcfit.results import Shown
from srcfit.rounding import minus, round_like
from srcfit.solve import Solved
from srcfit.solvers.frame import ask, frame

# part of a feature's largest value within which it is said to stand
HALF = 0.5
# most features that are named one by one
MOST_NAMED = 3
# sds by which an answer, or the source at one place, would move for the hint to be worth it
MATTERS, PLACE_MATTERS = 0.5, 2.0


def demands(solved: Solved, shown: Shown) -> list[Finding]:
    """Features that the estimate took in, or that the averaged one leaves out."""
    grid = solved.problem.grid
    roughness = solved.forward.case.strength.roughness
    if roughness == "adaptive":
        return _taken(solved) if grid.featured else []
    if solved.choice is not None or solved.ladder is None or roughness != "averaged":
        return []
    other = featured(solved.problem)
    if not other.grid.featured:
        return []
    fr = frame(other)
    value = averaged(fr, ask(fr, solved.asked.questions), weighed(fr))[0]
    whole = solved.asked.together(value) + solved.asked.constant + solved.asked.shift
    return _left_out(solved, shown, other.grid, np.real(whole) * solved.asked.factor)


def stretches(grid: Grid) -> list[tuple[float, float]]:
    """Where each feature stands [m]: its cells of at least half its largest value."""
    found = []
    if grid.features is not None:
        edges = np.flatnonzero(grid.free)
        for column in grid.features.T:
            if column.min() < 0:  # what is open about the one before
                continue
            cells = edges[column >= HALF * column.max()]
            found.append((float(grid.edges[cells[0]]), float(grid.edges[cells[-1] + 1])))
    return sorted(found)


def _places(solved: Solved, grid: Grid) -> str:
    """The features' stretches in the user's unit, as words."""
    unit = solved.forward.case.source.position_unit
    scale = per(unit, "m")
    texts = [f"{a * scale:.4g} to {b * scale:.4g} {unit}" for a, b in stretches(grid)]
    if len(texts) > MOST_NAMED:
        texts = [*texts[:MOST_NAMED], f"{len(texts) - MOST_NAMED} more"]
    return texts[0] if len(texts) == 1 else ", ".join(texts[:-1]) + " and " + texts[-1]


def _taken(solved: Solved) -> list[Finding]:
    where = _places(solved, solved.problem.grid)
    text = (
        f"The readings demand more than a smooth curve at {where}: a block or bump there was "
        "added to what the estimate may do; its edges are no better known than the readings "
        "resolve."
    )
    return [Finding("feature-found", "note", text)]


def _left_out(solved: Solved, shown: Shown, grid: Grid, value: Array) -> list[Finding]:
    """The hint, with the number that would move most in units of its sd."""
    source, blocks = solved.forward.case.source, solved.asked.blocks
    names = ["the total", *(f"zone {z.name}" for z in source.zones)]
    rows = [blocks["total"].start, *range(blocks["zones"].start, blocks["zones"].stop)]
    moved = np.abs(value - shown.value) / np.maximum(shown.sd, np.finfo(float).tiny)
    answers, places = np.nan_to_num(moved[rows]), np.nan_to_num(moved[blocks["cells"]])
    most = int(np.argmax(answers))
    if answers[most] < MATTERS and places.max(initial=0.0) < PLACE_MATTERS:
        return []
    text = ""
    if answers[most] >= MATTERS:
        there, here = float(value[rows[most]]), float(shown.value[rows[most]])
        size, sd = max(abs(there), abs(here)), float(shown.sd[rows[most]])
        told = [minus(round_like(v, sd, size)) for v in (there, here)]
        text = f" ({names[most]} would be {' instead of '.join(told)} {source.total_unit})"
    text = (
        f"The readings point to something sharper than a smooth curve at {_places(solved, grid)}: "
        f'`roughness = "adaptive"` under [strength] takes it in{text}, or declare what stands '
        "there as a lumped part or its edges as `breaks`."
    )
    return [Finding("feature-demanded", "note", text)]
