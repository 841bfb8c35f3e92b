"""The whitened problem of a forward model: noise, its correlation, and knowledge as extra rows."""

from __future__ import annotations

import numpy as np

from srcfit.forward import Forward
from srcfit.member import Array
from srcfit.problem import Problem
from srcfit.state import Matrix


def whitened(forward: Forward, sd: Array | None = None, lag: Array | None = None) -> Problem:
    """The whitened problem with the stated noise, or with `sd` (n,) and `lag` (g,) in its place.

    Unknowns with prior knowledge, and a known total, become rows after the readings.
    """
    sd = forward.sd if sd is None else sd
    lag = forward.lag if lag is None else lag
    A, B, d = forward.A, forward.B, forward.y
    m, k = A.shape[1], B.shape[1]
    stacked = np.concatenate([A, B, d[:, None]], axis=1) / sd[:, None]
    stacked = _decorrelated(forward, stacked, lag)
    extra = []
    for j, column in enumerate(forward.columns):
        if column.sd is not None:
            row = np.zeros(m + k + 1)
            row[m + j], row[-1] = 1 / column.sd, column.guess / column.sd
            extra.append(row)
    total = forward.case.source.total
    if total is not None:
        row = np.zeros(m + k + 1)
        row[:m] = forward.grid.weights * forward.grid.free
        row[m : m + k] = [float(c.kind == "lumped") for c in forward.columns]
        row[-1] = total.value
        extra.append(row / total.sd)
    stacked = np.concatenate([stacked, *(r[None] for r in extra)])
    source = forward.case.source
    balance = None if forward.balance is None else forward.balance[:, :m]
    return Problem(
        stacked[:, :m], stacked[:, m : m + k], stacked[:, -1], forward.grid,
        tuple(c.name for c in forward.columns),
        constant=balance is None and (source.smooth or source.background),
        smooth=source.smooth, balance=balance, pseudo=len(extra),
        stated=bool(np.isfinite(forward.sd).all()),
    )  # fmt: skip


def _decorrelated(forward: Forward, rows: Matrix, lag: Array) -> Matrix:
    """Rows of a first-order autoregressive group, made independent along the member."""
    if not lag.any():
        return rows
    out = rows.copy()
    x = forward.readings.x[forward.rows]
    for g in np.flatnonzero(lag):
        members = np.flatnonzero(forward.group == g)
        members = members[np.argsort(x[members], kind="stable")]
        step = rows[members[1:]] - lag[g] * rows[members[:-1]]
        out[members[1:]] = step / np.sqrt(1 - lag[g] ** 2)
    return out
