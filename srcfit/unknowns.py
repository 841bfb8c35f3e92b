"""The unknowns beside the source, and what readings are corrected by before they are fitted."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import Case, ColumnSpec
from srcfit.member import Array, Member, Unknown
from srcfit.readings.model import Readings
from srcfit.state import Matrix
from srcfit.unit_texts import header_unit
from srcfit.units import factor, same_dimension


@dataclass(frozen=True)
class Column:
    """One unpenalised unknown.

    Attributes
    ----------
    name : str
        As in summary.json (`offset:GROUP`, `settlement:AT`, a lumped part's name ...).
    kind : {"lumped", "nuisance", "null"}
    unit : str
        Unit text it is reported in.
    si_unit : str
    shift : float
        Added (SI) to the coefficient to give the reported amount.
    absolute : bool
        Whether the amount is absolute (a temperature with its own zero), not a difference.
    guess, sd : float or None
        Knowledge about the coefficient (SI); None: nothing is known.
    """

    name: str
    kind: str
    unit: str = ""
    si_unit: str = ""
    shift: float = 0.0
    guess: float = 0.0
    sd: float | None = None
    absolute: bool = False


@dataclass(frozen=True)
class Reaction:
    """One force, couple or flow at an end or support that can be asked for.

    Flows of radial kinds are those through the whole area, like totals.
    """

    name: str
    at: float
    kind: str
    unit: str
    si_unit: str


def base(member: Member) -> float:
    """What responses are measured from: the ambient of steady temperatures, heads ..., else 0."""
    return member.ambient if member.kind.relative and not member.driven else 0.0


def restraint_label(case: Case, name: str) -> tuple[str, str]:
    """(name, SI unit) under which an unknown prescribed amount is reported."""
    kind = case.member.kind
    if name.startswith("support."):
        at = case.member.supports[int(name[8:]) - 1].at
        return f"settlement:{place_text(case, at)}", kind.response_unit
    if name.endswith("rotation"):
        return name, "rad"
    return (name.replace("value", "settlement") if kind.order == 4 else name), kind.response_unit


def reaction_label(case: Case, reaction: Reaction) -> str:
    """Name under which a reaction is reported."""
    inside = reaction.name.startswith("support.")
    return f"support:{place_text(case, reaction.at)}" if inside else reaction.name


def response_unit(case: Case) -> str:
    """Unit of the first readings of the response itself, as the case or a column's header says.

    Without any the member's SI unit, or mm where the response is a movement.
    """
    kind = case.member.kind
    for spec in case.columns:
        if kind.sensor(spec.kind).quantity != "response":
            continue
        unit = spec.unit or header_unit(spec.columns[0], kind.response_unit)
        if unit:
            return unit if same_dimension(unit, kind.response_unit) else kind.response_unit
    moves = kind.response_unit == "m" and not kind.relative and kind.name != "general"
    return "mm" if moves else kind.response_unit


def place_text(case: Case, at: float) -> str:
    """A place in the user's position unit, e.g. ``24 m``."""
    unit = case.source.position_unit
    return f"{at / factor(unit, 'm', 'source.position_unit')[0]:.10g} {unit}"


def reading_nuisances(
    case: Case, readings: Readings, rows: NDArray[np.int64], specs: list[ColumnSpec]
) -> tuple[list[Column], Matrix]:
    """Unknown offset, drift, scale and step of each group, over the sensors."""
    found: dict[str, tuple[Column, Array]] = {}
    n = len(rows)
    for i, (r, s) in enumerate(zip(rows, specs, strict=True)):
        si = case.member.kind.sensor(s.kind).unit
        shown = readings.unit[r] or si
        value = float(np.real(readings.value[r]))
        asked: list[tuple[str, float | Unknown, float, str, str, float]] = [
            (f"offset:{s.group}", s.offset, 1.0, shown, si, 0.0),
            (f"drift:{s.group}", s.drift, float(readings.time[r]), f"{shown}/s", f"{si}/s", 0.0),
            (f"scale:{s.group}", s.scale, value, "1", "1", 1.0),
        ]
        if s.step is not None:
            name = f"step:{s.group}@{place_text(case, s.step.at)}"
            beyond = float(readings.x[r] > s.step.at)
            asked.append((name, s.step.amount, beyond, shown, si, 0.0))
        for name, amount, entry, unit, si_unit, shift in asked:
            if isinstance(amount, Unknown):
                guess = amount.guess - shift
                column = Column(name, "nuisance", unit, si_unit, shift, guess, amount.sd)
                found.setdefault(name, (column, np.zeros(n)))[1][i] = entry
    return [c for c, _ in found.values()], stack([v for _, v in found.values()], n)


def corrected(readings: Readings, rows: NDArray[np.int64], specs: list[ColumnSpec]) -> Matrix:
    """Values less the known offsets, drifts, steps and scales."""
    y = readings.value[rows].copy()
    for i, (r, s) in enumerate(zip(rows, specs, strict=True)):
        if not isinstance(s.offset, Unknown):
            y[i] -= s.offset
        if not isinstance(s.drift, Unknown) and s.drift:
            y[i] -= s.drift * readings.time[r]
        if s.step is not None and not isinstance(s.step.amount, Unknown):
            y[i] -= s.step.amount * (readings.x[r] > s.step.at)
        if not isinstance(s.scale, Unknown):
            y[i] /= s.scale
    return y


def stack(rows: Sequence[Matrix], n: int) -> Matrix:
    """Columns side by side, (n, k); no columns give (n, 0)."""
    return np.stack(rows, axis=1) if rows else np.zeros((n, 0))


def lags(specs: list[ColumnSpec], groups: tuple[str, ...]) -> Array:
    """Stated lag-1 correlation of each group, nan where it is to be estimated, (g,)."""
    stated: dict[str, Any] = {s.group: s.correlation for s in specs}
    return np.array([np.nan if stated[g] == "estimate" else float(stated[g]) for g in groups])
