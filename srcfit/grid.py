"""Cells of the source: equal, and cut where the user drew an edge."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from srcfit.case.model import Case, Lumped
from srcfit.intervals import gauss
from srcfit.member import Array, Member
from srcfit.problem import Grid


def make_grid(case: Case, also: Sequence[float] = ()) -> Grid:
    """Equal cells over the member, cut at zone edges, breaks, zero stretches and widths.

    A cell edge within a fifth of a cell of a drawn edge moves onto it. `also`: further places
    where cells are cut.
    """
    member, source = case.member, case.source
    drawn = [z.start for z in source.zones] + [z.end for z in source.zones]
    drawn += [*source.breaks, *(e for part in source.zero for e in part)]
    drawn += [e for part in source.lumped if part.width for e in spread(part)]
    drawn += also
    inside = np.unique([e for e in drawn if member.start < e < member.end])
    width = member.length / source.cells
    near = 1e-9 * member.length
    if len(inside):
        inside = inside[np.concatenate([[True], np.diff(inside) > near])]
    edges = np.linspace(member.start, member.end, source.cells + 1)
    if len(inside):
        gap = np.abs(edges[1:-1, None] - inside).min(axis=1)
        edges = np.concatenate([edges[:1], edges[1:-1][gap > width / 5], edges[-1:], inside])
    edges = np.unique(edges)
    middle = (edges[1:] + edges[:-1]) / 2
    free = np.full(len(middle), source.smooth or source.background)
    for start, end in source.zero:
        free &= ~((middle > start) & (middle < end))
    return Grid(
        edges,
        cell_weights(member, edges),
        free,
        tuple((z.start, z.end) for z in source.zones),
        source.breaks,
        2 if member.driven else 1,
    )


def cell_weights(member: Member, edges: Array) -> Array:
    """Integral of the area weight over each cell, (m,)."""
    c, b, _ = gauss()
    h = np.diff(edges)
    weights: Array = (member.area(edges[:-1, None] + h[:, None] * c) * b).sum(axis=1) * h
    return weights


def spread(part: Lumped) -> tuple[float, float]:
    """The stretch over which a lumped part is spread [m]."""
    assert part.at is not None
    return part.at - part.width / 2, part.at + part.width / 2


def overlap(member: Member, edges: Array, start: float, end: float) -> Array:
    """Integral of the area weight over each cell's part inside [start, end), (m,)."""
    clipped = np.clip(edges, start, end)
    return cell_weights(member, clipped)
