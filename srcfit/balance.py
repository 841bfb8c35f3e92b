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
from srcfit.member import Unknown
from srcfit.state import Matrix, operator
from srcfit.units import factor
from srcfit.unknowns import restraint_label

ROUNDING = 1e-12  # part of what goes into a sum below which the sum is nothing


@dataclass(frozen=True)
class Balance:
    """Source, reactions and loss in SI total units; `gap` is relative to the largest of them.

    Complex amplitudes where the member is driven; the loss is then what bedding and inertia take.
    """

    source: Any
    reactions: Any
    loss: Any
    gap: float


def balance(forward: Forward, f: Matrix, beta: Matrix) -> Balance:
    """Sum up what a source f (m,) with unknowns beta (k,) does to the member (SI)."""
    line, member = forward.line, forward.case.member
    u = _response(forward, f, beta)
    k = operator(member, line.places)
    rate = (k["q"] if "q" in k else k["p0"]) / np.where(
        line.weights > 0, member.area(line.places), 1
    )
    loss = (line.weights * rate * u).sum()
    put_in = (forward.grid.weights * f).sum() + _known_total(forward)
    put_in += sum(b for b, c in zip(beta, forward.columns, strict=True) if c.kind == "lumped")
    every = forward.reaction_cells @ f + forward.reaction_columns @ beta + forward.reaction_known
    held = [r.kind != "moment" for r in forward.reactions]
    out = every[held].sum()
    if not forward.driven:
        put_in, out, loss = (float(np.real(v)) for v in (put_in, out, loss))
    # what cancels in sums is measured by what goes into them
    size = float((forward.grid.weights * np.abs(f)).sum()) + abs(_known_total(forward))
    size = max(abs(put_in), abs(out), abs(loss), size, 1e-300)
    put_in, out, loss = (v if abs(v) > ROUNDING * size else 0.0 for v in (put_in, out, loss))
    return Balance(put_in, out, loss, float(abs(put_in - out - loss) / size))


def balance_facts(forward: Forward, found: Balance) -> dict[str, float]:
    """A balance in the total's unit: source, reactions, along and difference (real parts)."""
    source = forward.case.source
    size = factor(source.total_unit, forward.case.member.kind.total_unit, "source.total_unit")[0]
    amounts = {"source": found.source, "reactions": found.reactions, "along": found.loss,
               "difference": found.source - found.reactions - found.loss}  # fmt: skip
    return {name: float(np.real(amount) / size) for name, amount in amounts.items()}


def _known_total(forward: Forward) -> Any:
    member = forward.case.member
    ends = np.array([member.start, member.end])
    return sum(
        part.value
        * (1.0 if part.start == part.end else overlap(member, ends, part.start, part.end)[0])
        for part in forward.case.source.known
    )


def _response(forward: Forward, f: Matrix, beta: Matrix) -> NDArray[Any]:
    """Response less the ambient at the Gauss places of the chain, free motions included."""
    case, line = forward.case, forward.line
    member = case.member
    amount = {c.name: b for c, b in zip(forward.columns, beta, strict=True)}
    middle = (line.x[1:] + line.x[:-1]) / 2
    cell = np.clip(np.searchsorted(forward.grid.edges, middle) - 1, 0, len(f) - 1)
    density = f[cell].astype(np.result_type(f, beta, float))
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
    if forward.nulls is not None:
        motion = np.array([b for b, c in zip(beta, forward.columns, strict=True)
                           if c.kind == "null"])  # fmt: skip
        # the free member has no node pairs where the other one is held
        mine = np.diff(forward.nulls.free.x) > 0
        own = np.einsum("d,dks->ks", motion, forward.nulls.at[:, mine])
        found = found.astype(np.result_type(found, own))
        found[np.diff(line.x) > 0] += own
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
