"""The forward what-if: what the sensors of a case would read under a given source."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields, is_dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from srcfit.balance import balance, balance_facts
from srcfit.case.model import Case, Known
from srcfit.errors import MemberError
from srcfit.forward import Forward, build
from srcfit.grid import overlap
from srcfit.inspection import shown
from srcfit.member import Array, Member, Unknown
from srcfit.output import strict
from srcfit.readings.model import Readings
from srcfit.rounding import brief, held_word, minus, round_like, with_unit
from srcfit.state import Matrix
from srcfit.text import balance_text, bullets, clean, join, section, table
from srcfit.trial import Trial
from srcfit.units import factor
from srcfit.unknowns import Column, reaction_label

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class Prediction:
    """Predicted readings and reactions under a trial source.

    Attributes
    ----------
    readings : DataFrame
        Used rows: file, line, group, kind, unit, x, value, predicted, residual, sd, standardised.
    reactions : list of mapping (name, at, kind, unit, value)
    balance : mapping
        source (known parts included), reactions, along (taken up by bedding, loss, decay or
        inertia along the member) and difference, in the total's unit; real parts.
    misfit : float or None
        Root mean square of the standardised residuals.
    """

    case: Case
    readings: pd.DataFrame
    reactions: list[dict[str, Any]]
    balance: dict[str, float]
    misfit: float | None
    notes: tuple[str, ...]


def predict(case: Case, readings: Readings, trial: Trial) -> Prediction:
    """Predict the used readings of a case under a source, what the case knows included.

    Unknown nuisances are taken as the trial tells them, else at their guess; the free motion of a
    member that nothing holds is fitted to the readings.

    Raises
    ------
    MemberError
        When the source is out of balance on a member that nothing holds.
    """
    parts = (*case.source.known, *trial.parts)
    forward = build(_prepared(case, parts), readings)
    f = _densities(forward, parts)
    _check_balance(forward, f, parts)
    beta = _amounts(forward, forward.y - forward.A @ f, trial)
    residual = forward.y - forward.A @ f - forward.B @ beta
    spread = readings.sd[forward.rows]
    misfit = float(np.sqrt(np.mean(np.abs(residual / spread) ** 2)))
    return Prediction(
        case,
        _frame(case, readings, forward.rows, residual),
        _reactions(case, forward, f, beta),
        balance_facts(forward, balance(forward, f, beta)),
        misfit if math.isfinite(misfit) else None,
        _notes(case, forward, trial),
    )


def _prepared(case: Case, parts: tuple[Known, ...]) -> Case:
    """The case with cells as the stretches need them, and unknowns that need no readings."""
    edges = {e for part in parts if part.start < part.end for e in (part.start, part.end)}
    points = tuple(p for p in parts if p.start == p.end)
    source = replace(
        case.source, known=points, breaks=tuple(sorted(edges)), zones=(), lumped=(), zero=(),
        cells=1, smooth=True, background=False, total=None, limit=None, sign="any",
    )  # fmt: skip
    member = case.member
    held = {name: _told(getattr(member, name)) for name in ("left", "right", "supports")}
    return replace(case, source=source, member=replace(member, **held), tables=_told(case.tables))


def _told(value: Any) -> Any:
    """The same with every unknown known beforehand, however vaguely: its guess will be taken."""
    if isinstance(value, Unknown):
        return replace(value, sd=1.0)
    if isinstance(value, tuple):
        return tuple(_told(v) for v in value)
    if is_dataclass(value) and not isinstance(value, type):
        return replace(value, **{f.name: _told(getattr(value, f.name)) for f in fields(value)})
    return value


def _densities(forward: Forward, parts: tuple[Known, ...]) -> Array:
    """Density on each cell (m,): stretches that overlap add up."""
    middle = forward.grid.middles
    f = np.zeros(len(middle), dtype=np.result_type(float, *(part.value for part in parts)))
    for part in parts:
        f += np.where((middle > part.start) & (middle < part.end), part.value, 0.0)
    return f


def _amounts(forward: Forward, left: Matrix, trial: Trial) -> Matrix:
    """Amounts of the unknown columns: told or guessed, and a free motion fitted to readings."""
    beta = np.array([c.guess for c in forward.columns], dtype=left.dtype)
    for i, c in enumerate(forward.columns):
        if c.name in trial.amounts:
            beta[i] = trial.amounts[c.name] * factor(c.unit, c.si_unit, c.name)[0] - c.shift
    free = np.array([c.kind == "null" for c in forward.columns], dtype=bool)
    if free.any():
        weight = 1 / np.where(np.isfinite(forward.sd), forward.sd, 1.0)
        rest = (left - forward.B @ beta) * weight
        beta[free] = np.linalg.lstsq(forward.B[:, free] * weight[:, None], rest, rcond=None)[0]
    return beta


def _check_balance(forward: Forward, f: Array, parts: tuple[Known, ...]) -> None:
    """Refuse a source that a member without any hold cannot carry."""
    if forward.balance is None:
        return
    off = np.abs(forward.balance[:, : len(f)] @ f + forward.balance[:, -1]).max()
    member = forward.case.member
    size = sum(abs(p.value) * _extent(member, p) for p in parts) / np.sqrt(member.length)
    if off > 1e-6 * size:
        raise MemberError(
            "the source is out of balance, and nothing holds the member", "source",
            "balance it, or hold the member at an end, a support or along its length",
        )  # fmt: skip


def _extent(member: Member, part: Known) -> float:
    """Area-weighted size of a part's stretch; 1 for a strength at one place."""
    if part.start == part.end:
        return 1.0
    return float(overlap(member, np.array([member.start, member.end]), part.start, part.end)[0])


def _reactions(case: Case, forward: Forward, f: Array, beta: Matrix) -> list[dict[str, Any]]:
    """Reactions with their places, forces and flows in the total's unit."""
    values = forward.reaction_known + forward.reaction_cells @ f + forward.reaction_columns @ beta
    found = []
    for reaction, value in zip(forward.reactions, values, strict=True):
        moment = reaction.kind == "moment"
        unit = reaction.unit if moment else case.source.total_unit
        si = reaction.unit if moment else case.member.kind.total_unit
        at = shown(reaction.at, case.source.position_unit, "m")
        row = {"name": reaction_label(case, reaction), "at": at,
               "kind": reaction.kind, "unit": unit,
               "value": float(shown(np.real(value), unit, si))}  # fmt: skip
        if case.member.driven:
            row["imaginary"] = float(shown(np.imag(value), unit, si))
        found.append(row)
    return found


def _frame(case: Case, readings: Readings, rows: Any, residual: Matrix) -> pd.DataFrame:
    """One row a used reading, in the unit it was read in."""
    import pandas as pd

    found = []
    for row, left in zip(rows, residual, strict=True):
        spec = case.columns[readings.spec[row]]
        unit, si = readings.unit[row], case.member.kind.sensor(spec.kind).unit
        left = left * (1.0 if isinstance(spec.scale, Unknown) else spec.scale)
        value = readings.value[row]
        amounts = {
            "value": shown(value, unit, si), "predicted": shown(value - left, unit, si),
            "residual": shown(left, unit, si, difference=True),
            "sd": shown(readings.sd[row], unit, si, difference=True),
            "standardised": left / readings.sd[row],
        }  # fmt: skip
        at = shown(readings.x[row], case.source.position_unit, "m")
        record = {
            "file": readings.file[row], "line": int(readings.line[row]),
            "group": readings.group[row], "kind": readings.kind[row], "unit": unit,
            f"x [{case.source.position_unit}]": at,
        } | {k: float(np.real(v)) for k, v in amounts.items()}  # fmt: skip
        if case.member.driven:
            record |= {f"{k}_imag": float(np.imag(v)) for k, v in amounts.items() if k != "sd"}
        found.append(record)
    return pd.DataFrame(found)


def _notes(case: Case, forward: Forward, trial: Trial) -> tuple[str, ...]:
    """What the reader of a prediction must know."""
    notes = []
    guessed = [
        f"{c.name} = {with_unit(brief(_guess(c)), c.unit)}"
        for c in forward.columns if c.kind == "nuisance" and c.name not in trial.amounts
    ]  # fmt: skip
    if guessed:
        notes.append(minus(f"Unknown amounts are taken at their guess: {', '.join(guessed)}."))
    if any(c.kind == "null" for c in forward.columns):
        notes.append("Nothing holds the member: its free motion is fitted to the readings.")
    if case.source.known:
        notes.append("What the case states as known is added to the source.")
    if trial.unread:
        notes.append(f"Columns of the source that were not used: {', '.join(trial.unread)}.")
    return tuple(notes)


def _guess(column: Column) -> float:
    """The guess of an unknown amount in the unit that it is reported in."""
    value = column.guess + column.shift
    return float(shown(value, column.unit, column.si_unit, difference=not column.absolute))


def facts(found: Prediction) -> dict[str, Any]:
    """A prediction as a mapping for machines."""
    return {
        "title": found.case.title, "units": {
            "position": found.case.source.position_unit, "total": found.case.source.total_unit},
        "readings": strict(found.readings.to_dict("records")), "reactions": found.reactions,
        "balance": found.balance, "misfit": found.misfit, "notes": list(found.notes),
    }  # fmt: skip


def text(found: Prediction) -> str:
    """A prediction as tables for a terminal."""
    frame, source = found.readings, found.case.source
    place = f"x [{source.position_unit}]"
    names = ["value", "predicted", "residual"]
    names += [c for c in ("predicted_imag",) if c in frame.columns]
    rows = [
        (r["group"], r["kind"], brief(r[place], 6),
         *(minus(round_like(r[c], r["sd"])) for c in names), r["unit"])
        for r in frame.to_dict("records")
    ]  # fmt: skip
    header = ["group", "kind", place, *names, "unit"]
    reactions = [
        (held_word(r["name"], r["kind"]), f"{brief(r['at'], 6)} {source.position_unit}",
         minus(f"{brief(r['value'], 5)} {r['unit']}")) for r in found.reactions
    ]  # fmt: skip
    misfit = f"Root mean square of residual/sd: {brief(found.misfit)}" if found.misfit else ""
    return join(
        clean(found.case.title),
        section("Readings", table(header, rows, "llrrrr" + "r" * (len(names) - 3))),
        misfit,
        section("Ends and supports", table(("", "", ""), reactions, "llr")),
        section("Balance", balance_text(found.balance, source.total_unit)),
        bullets(found.notes),
    )
