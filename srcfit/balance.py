"""Equilibrium of a recovered source: what goes in comes out at ends, supports and losses.

source = reactions (or end flows) + what the foundation or the loss takes. The loss is integrated
from the response itself, so the sum is a check and not one formula read twice.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.forward import Forward
from srcfit.grid import overlap, spread
from srcfit.influence import deflect
from srcfit.kernel import prescribed
from srcfit.member import Array, Unknown
from srcfit.state import operator
from srcfit.unknowns import restraint_label


@dataclass(frozen=True)
class Balance:
    """Source, reactions and loss in SI total units; `gap` is relative to the largest of them."""

    source: float
    reactions: float
    loss: float
    gap: float


def balance(forward: Forward, f: Array, beta: Array) -> Balance:
    """Sum up what a source f (m,) with unknowns beta (k,) does to the member (SI)."""
    line, member = forward.line, forward.case.member
    u = _response(forward, f, beta)
    k = operator(member, line.places)
    rate = (k["q"] if "q" in k else k["p0"]) / np.where(
        line.weights > 0, member.area(line.places), 1
    )
    loss = float(np.real((line.weights * rate * u).sum()))
    put_in = float((forward.grid.weights * f).sum()) + _known_total(forward)
    put_in += sum(b for b, c in zip(beta, forward.columns, strict=True) if c.kind == "lumped")
    every = forward.reaction_cells @ f + forward.reaction_columns @ beta + forward.reaction_known
    held = [r.kind != "moment" for r in forward.reactions]
    out = float(np.real(every[held].sum()))
    size = max(abs(put_in), abs(out), abs(loss), 1e-300)
    return Balance(put_in, out, loss, abs(put_in - out - loss) / size)


def _known_total(forward: Forward) -> float:
    member = forward.case.member
    ends = np.array([member.start, member.end])
    return float(
        sum(
            part.value
            * (1.0 if part.start == part.end else overlap(member, ends, part.start, part.end)[0])
            for part in forward.case.source.known
        )
    )


def _response(forward: Forward, f: Array, beta: Array) -> NDArray[Any]:
    """Response less the ambient at the Gauss places of the chain, null modes left out."""
    case, line = forward.case, forward.line
    member = case.member
    amount = {c.name: b for c, b in zip(forward.columns, beta, strict=True)}
    middle = (line.x[1:] + line.x[:-1]) / 2
    cell = np.clip(np.searchsorted(forward.grid.edges, middle) - 1, 0, len(f) - 1)
    density = f[cell].astype(np.result_type(f, float))
    points: list[tuple[float, Any]] = []
    for part in case.source.known:
        if part.start == part.end:
            points.append((part.start, part.value))
        else:
            density = density + part.value * ((middle > part.start) & (middle < part.end))
    for lump in case.source.lumped:
        assert lump.at is not None
        if lump.width == 0:
            points.append((lump.at, amount[lump.name]))
        else:
            start, end = spread(lump)
            size = overlap(member, np.array([member.start, member.end]), start, end)[0]
            density = density + amount[lump.name] / size * ((middle > start) & (middle < end))
    spread_out = np.repeat(density[:, None], line.places.shape[1], axis=1)
    nodes = [(int(line.node(np.array([at]))[0]), strength) for at, strength in points]
    states = deflect(line, spread_out, nodes)[1, :-1] / line.scale
    states = states + _held(forward, amount)
    own = np.einsum("kij,kj->ki", line.inner, spread_out)
    found: NDArray[Any] = np.einsum("ksd,kd->ks", line.stages, states) + own
    return found


def _held(forward: Forward, amount: dict[str, Any]) -> NDArray[Any]:
    """Scaled states at the left of each interval caused by the prescribed amounts.

    By reciprocity the response to a unit prescribed amount is the influence line of its reaction.
    """
    case, line = forward.case, forward.line
    first = len(forward.rows)
    lines = forward.lines.after(np.arange(len(line.x) - 1))
    total = np.zeros((len(line.x) - 1, line.order), dtype=lines.dtype)
    for number, (name, value) in enumerate(prescribed(case.member)):
        size = amount[restraint_label(case, name)[0]] if isinstance(value, Unknown) else value
        side = -1.0 if name == "left.rotation" else 1.0
        total = total + side * size * lines[:, first + number]
    return total
