"""The seven worked cases of the cautious band as problems, by the independent forward matrices."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import referee

from srcfit.problem import Grid, Problem, Questions

FILE = Path(__file__).parent.parent / "datasets" / "cautious_band_check.json"
CASES: list[dict[str, Any]] = json.loads(FILE.read_text())["cases"]
UNIT = {"kN": 1e3, "mm": 1e-3, "W": 1.0}


def number(text: str) -> float:
    return float(text.split()[0])


def problem(case: dict[str, Any]) -> Problem:
    member, readings, source = case["member"], case["readings"], case["source"]
    length, x = number(member["length"]), np.array(readings["position"])
    zones, zero = source["zones"], source.get("zero", [])
    breaks, lumped = source.get("breaks", []), source.get("lumped", [])
    drawn = [e for pair in zones + zero for e in pair] + list(breaks)
    edges = referee.edges_of(length, source["cells_used_here"], drawn)
    sd, d = number(readings["sd"]), np.array(readings["value"])
    if member["kind"] == "beam":
        sd, d = sd * 1e-3, d * 1e-3
        A, B = referee.beam(
            edges,
            x,
            number(member["bending_stiffness"]) * 1e6,
            foundation=number(member.get("foundation", "0")) * 1e6,
            left=member["left"],
            right=member["right"],
            lumped=lumped,
        )
    else:
        k, loss, ambient = (number(member[key]) for key in ("conductance", "loss", "ambient"))
        A, B = referee.fin(edges, x, k, loss), np.zeros((len(x), 0))
        held = np.array([number(member[end]["value"]) - ambient for end in ("left", "right")])
        d = d - ambient - referee.held_ends(x, length, k, loss) @ held
    names = tuple(f"lumped {at:g}" for at in lumped)
    if source.get("offset") == "unknown":
        B, names = np.hstack([B, np.ones((len(x), 1))]), (*names, "offset:levelling")
    middles = (edges[1:] + edges[:-1]) / 2
    free = np.ones(len(middles), dtype=bool)
    for a, b in zero:
        free &= (middles < a) | (middles > b)
    grid = Grid(edges, np.diff(edges), free, tuple(map(tuple, zones)), tuple(breaks))
    return Problem(A * free / sd, B / sd, d / sd, grid, names, places=x)


def questions(case: dict[str, Any], pb: Problem) -> Questions:
    """Zones, total, then one question per unpenalised column."""
    grid, lumped = pb.grid, case["source"].get("lumped", [])
    spans = [*grid.zones, (0.0, float(grid.edges[-1]))]
    cells = [grid.weights * ((grid.middles > a) & (grid.middles < b)) for a, b in spans]
    columns = np.zeros((len(spans), pb.B.shape[1]))
    for j, at in enumerate(lumped):
        columns[:, j] = [a <= at < b for a, b in spans]
    k = pb.B.shape[1]
    return Questions(
        np.vstack([*cells, np.zeros((k, len(grid.weights)))]), np.vstack([columns, np.eye(k)])
    )
