"""Two campaigns of readings of one layout as one linear problem about what changed.

The problem is linear, so the change of the source g = f_B - f_A is found jointly. Sensors that
both campaigns read are differenced, y_B - y_A = A g + ...: what is the same in both (a datum, a
property, noise that the sensor keeps) drops out. Where too few sensors are common, both sources
are unknown in one stacked problem, and the change is a question to it.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from scipy.linalg import cholesky, solve_triangular

from srcfit.answers import Asked, ask
from srcfit.campaigns import Numbers, Pairing
from srcfit.elimination import eliminate
from srcfit.errors import SolveError
from srcfit.forward import Forward
from srcfit.member import Array
from srcfit.problem import Grid, Problem, Questions
from srcfit.whitening import parts_of, sequences, whitened

By = Literal["pairs", "stack"]

SAME = 1e-9  # relative size of what is no difference
APART = ("nuisances", "nulls")  # questions that campaigns need not share


@dataclass(frozen=True)
class Campaign:
    """One campaign: its forward model, and the noise of its used readings.

    Attributes
    ----------
    sd, lag : (n,), (g,) standard deviations (SI) and lag-1 correlations, stated or estimated
    """

    forward: Forward
    sd: Array
    lag: Array


@dataclass(frozen=True)
class Joined:
    """The joint problem.

    Attributes
    ----------
    problem : Problem
    asked : Asked
        The questions of the case about B - A; null modes are left out.
    nuisances : tuple of (name, "difference" | "A" | "B")
        What the block "nuisances" holds: B - A where both campaigns have it, else itself.
    noise : (r,) variances of the noise of the rows that are no knowledge (SI), or (r, r)
        covariance
    """

    problem: Problem
    asked: Asked
    nuisances: tuple[tuple[str, str], ...]
    noise: Array


# --- the joint problem --------------------------------------------------------------------------


@dataclass(frozen=True)
class _Part:
    """One campaign without its noise: rows of readings in SI, knowledge with its own sd.

    `rows` (r, m + k + 1) and `knowledge` stand over cells, unknowns and what is read.
    """

    campaign: Campaign
    problem: Problem
    asked: Asked
    rows: Array
    knowledge: Array
    labels: tuple[tuple[str, float], ...]


def _part(campaign: Campaign) -> _Part:
    forward = campaign.forward
    balanced = eliminate(forward)
    n, g = len(forward.rows), len(forward.groups)
    problem = whitened(forward, np.ones(n), np.zeros(g), balanced)
    rows = np.hstack([problem.A, problem.B, problem.d[:, None]])
    read = len(rows) - problem.pseudo
    labels = [(c.name, c.sd) for c in forward.columns if c.sd is not None]
    total = forward.case.source.total
    labels += [] if total is None else [("total", total.sd)]
    labels *= problem.grid.parts
    asked = ask(forward, balanced)
    return _Part(campaign, problem, asked, rows[:read], rows[read:], tuple(labels))


def join(
    a: Campaign, b: Campaign, pairing: Pairing, by: By, common: Collection[str], shared: float
) -> Joined:
    """Both campaigns as one problem about the change.

    Parameters
    ----------
    by : "pairs" differences the readings of common sensors and leaves the others out; "stack"
        takes all readings, with both sources unknown.
    common : names of nuisances that are the same in both campaigns
    shared : correlation of the noise of one sensor between the campaigns
    """
    first, second = _part(a), _part(b)
    merge, names = _merged(first, second, pairing, by, common)
    m, parts = first.problem.A.shape[1], first.problem.grid.parts
    grid = first.problem.grid
    if by == "stack" and parts == 2:
        raise SolveError(
            "too few sensors are common to both campaigns of this driven member", "compare",
            "read the same sensors in both campaigns",
        )  # fmt: skip
    number = [_expanded(f.campaign.forward, p) for f, p in
              ((first, pairing.first), (second, pairing.second))]  # fmt: skip
    noise = [_noise(p.campaign) for p in (first, second)]
    if by == "pairs":
        rows = _opposed(first.rows[number[0]], second.rows[number[1]], m)
        spread = _difference_noise(noise, number, shared)
    else:
        rows = _stacked(first.rows, second.rows, m)
        spread = _stack_noise(noise, number, shared)
        grid = replace(grid, parts=2)
    rows = _uncorrelated(spread, rows)
    known = _knowledge(first, second, by, common, merge, m)
    k = len(first.problem.names) + len(second.problem.names)
    cells = rows.shape[1] - k - 1
    every = np.vstack([rows, known])
    x = first.problem.places
    assert x is not None
    places = x[number[0]] if by == "pairs" else np.concatenate(
        [p.problem.places[: len(p.rows)] for p in (first, second)]  # type: ignore[index]
    )  # fmt: skip
    problem = Problem(
        every[:, :cells], every[:, cells:-1] @ merge, every[:, -1], grid, names,
        constant=first.problem.constant, smooth=first.problem.smooth,
        balance=_balance(first, grid, by), pseudo=len(known),
        stated=first.problem.stated or second.problem.stated,
        places=np.concatenate([places, np.zeros(len(known))]),
        along=_along(first, second, merge, by),
    )  # fmt: skip
    asked, labels = _asked(first, second, merge, by, common)
    return Joined(problem, asked, labels, spread)


def _expanded(forward: Forward, readings: Numbers) -> Numbers:
    """Rows of the problem that belong to readings: one for each of their parts."""
    number, part = parts_of(forward)
    at = {(int(r), int(p)): row for row, (r, p) in enumerate(zip(number, part, strict=True))}
    found = [at[int(r), p] for p in (0, 1) for r in readings if (int(r), p) in at]
    return np.array(found, dtype=np.intp)


def _opposed(a: Array, b: Array, m: int) -> Array:
    """Rows of B less those of A, over the change of the source and the unknowns of both."""
    return np.hstack([b[:, :m], -a[:, m:-1], b[:, m:-1], b[:, -1:] - a[:, -1:]])


def _stacked(a: Array, b: Array, m: int) -> Array:
    """Rows of A, then those of B, over both sources and the unknowns of both."""
    blank = [[np.zeros((len(r), w)) for w in (m, o.shape[1] - m - 1)]
             for r, o in ((a, b), (b, a))]  # fmt: skip
    return np.vstack([
        np.hstack([a[:, :m], blank[0][0], a[:, m:-1], blank[0][1], a[:, -1:]]),
        np.hstack([blank[1][0], b[:, :m], blank[1][1], b[:, m:-1], b[:, -1:]]),
    ])  # fmt: skip


def _merged(
    a: _Part, b: _Part, pairing: Pairing, by: By, common: Collection[str]
) -> tuple[Array, tuple[str, ...]]:
    """(k_A + k_B, k) matrix from the joint unknowns to those of A and of B, and their names.

    A common nuisance is one unknown, and none where it drops out of every difference; of others
    that act alike in both campaigns differences tell B - A alone, which stands in the place of B.
    """
    m, parts = a.problem.A.shape[1], a.problem.grid.parts
    names = [p.problem.names for p in (a, b)]
    single = [n[: len(n) // parts] for n in names]
    rows = [_expanded(p.campaign.forward, who)
            for p, who in ((a, pairing.first), (b, pairing.second))]  # fmt: skip
    columns, found = [], []
    k = [len(n) for n in names]

    def unit(*at: int) -> Array:
        one = np.zeros(sum(k))
        one[list(at)] = 1.0
        return one

    for part in range(parts):
        at = [{n: part * len(s) + i for i, n in enumerate(s)} for s in single]
        for name in dict.fromkeys([*single[0], *single[1]]):
            i, j = at[0].get(name), at[1].get(name)
            if i is None or j is None:
                where = i if j is None else k[0] + j
                assert where is not None
                columns.append(unit(where))
                found.append(name)
                continue
            one, other = a.rows[rows[0], m + i], b.rows[rows[1], m + j]
            size = max(np.abs(one).max(initial=0.0), np.abs(other).max(initial=0.0))
            alike = np.abs(one - other).max(initial=0.0) <= SAME * size
            if name in common:
                if by == "pairs" and alike:
                    continue
                columns.append(unit(i, k[0] + j))
                found.append(name)
            elif by == "pairs" and alike:
                columns.append(unit(k[0] + j))
                found.append(name)
            else:
                columns += [unit(i), unit(k[0] + j)]
                found += [f"{name} (A)", f"{name} (B)"]
    merge = np.stack(columns, axis=1) if columns else np.zeros((sum(k), 0))
    return merge, tuple(found)


# --- noise --------------------------------------------------------------------------------------


def _noise(campaign: Campaign) -> Array:
    """Factor M of the noise of the problem's rows, M M' its covariance; (n,) where diagonal."""
    forward = campaign.forward
    number, part = parts_of(forward)
    sd = campaign.sd[number]
    if not campaign.lag.any():
        return np.asarray(sd)
    M = np.eye(len(number))
    for g, members in sequences(forward):
        at = np.arange(len(members))
        L = cholesky(campaign.lag[g] ** np.abs(at[:, None] - at), lower=True)
        for p in (0, 1):
            rows = {int(r): i for i, r in enumerate(number) if part[i] == p}
            where = [rows[int(r)] for r in members if int(r) in rows]
            if where:
                M[np.ix_(where, where)] = L
    return np.asarray(sd[:, None] * M)


def _difference_noise(noise: Sequence[Array], number: Sequence[Numbers], shared: float) -> Array:
    """Variances (p,), or covariance (p, p), of the differenced rows."""
    if all(M.ndim == 1 for M in noise):
        a, b = (M[rows] for M, rows in zip(noise, number, strict=True))
        return np.asarray(a**2 + b**2 - 2 * shared * a * b)
    a, b = (_full(M)[rows] for M, rows in zip(noise, number, strict=True))
    both = shared * a[:, number[0]] @ b[:, number[1]].T
    return np.asarray(a @ a.T + b @ b.T - both - both.T)


def _stack_noise(noise: Sequence[Array], number: Sequence[Numbers], shared: float) -> Array:
    """Variances, or covariance, of all rows of A and then of B."""
    if all(M.ndim == 1 for M in noise) and not shared:
        return np.concatenate(noise) ** 2
    a, b = (_full(M) for M in noise)
    both = shared * a[:, number[0]] @ b[:, number[1]].T
    return np.block([[a @ a.T, both], [both.T, b @ b.T]])


def _full(M: Array) -> Array:
    return np.diag(M) if M.ndim == 1 else M


def _uncorrelated(spread: Array, rows: Array) -> Array:
    if spread.ndim == 1:
        return np.asarray(rows / np.sqrt(spread)[:, None])
    return np.asarray(solve_triangular(cholesky(spread, lower=True), rows, lower=True))


# --- knowledge, balance, questions --------------------------------------------------------------


def _knowledge(a: _Part, b: _Part, by: By, common: Collection[str], merge: Array, m: int) -> Array:
    """Rows of what is known beforehand, over the same columns as the readings' rows."""
    labels = [[n for n, _ in p.labels] for p in (a, b)]
    found = [_lay(a.knowledge[:0], b.knowledge[:0], by, m)]
    for label in dict.fromkeys([*labels[0], *labels[1]]):
        mine, theirs = ([i for i, n in enumerate(part) if n == label] for part in labels)
        first, second = a.knowledge[mine], b.knowledge[theirs]
        told = _told_of(label, a, b, merge) if by == "pairs" else "both"
        if told == "change" and len(first) and len(second):
            sd = [p.labels[i[0]][1] for p, i in ((a, mine), (b, theirs))]
            row = _opposed(first * sd[0], second * sd[1], m)
            found.append(row / np.hypot(sd[0], sd[1]))
        if told == "both":
            # of one common unknown what A knows is enough
            more = second[: 0 if label in common and len(first) else len(second)]
            found.append(_lay(first, more, by, m))
    return np.vstack(found)


def _lay(a: Array, b: Array, by: By, m: int) -> Array:
    """Rows of A, then rows of B; in the differenced problem such rows have no part in cells."""
    if by == "stack":
        return _stacked(a, b, m)
    return np.vstack([-_opposed(a, np.zeros((len(a), b.shape[1])), m),
                      _opposed(np.zeros((len(b), a.shape[1])), b, m)])  # fmt: skip


def _told_of(label: str, a: _Part, b: _Part, merge: Array) -> Literal["change", "both", "nothing"]:
    """What the differenced problem holds of an unknown: its change, itself, or nothing."""
    if label == "total":
        return "change"
    names = [p.problem.names for p in (a, b)]
    if any(label not in n for n in names):
        return "both"
    i, j = names[0].index(label), len(names[0]) + names[1].index(label)
    if merge[i].any():
        return "both"
    return "change" if merge[j].any() else "nothing"


def _balance(a: _Part, grid: Grid, by: By) -> Array | None:
    """Balance rows of the joint source."""
    rows = a.problem.balance
    return rows if rows is None or by == "pairs" else grid.per_part(rows)


def _along(a: _Part, b: _Part, merge: Array, by: By) -> Array | None:
    """Density that each joint unknown, and at last what is known, brings to balance the rest."""
    first, second = a.problem.along, b.problem.along
    if first is None or second is None:
        return None
    rows = (_opposed if by == "pairs" else _stacked)(first, second, 0)
    return np.hstack([rows[:, :-1] @ merge, rows[:, -1:]])


def _asked(
    a: _Part, b: _Part, merge: Array, by: By, common: Collection[str]
) -> tuple[Asked, tuple[tuple[str, str], ...]]:
    """Questions of the case about B - A, and of what its nuisances are: (name, of what).

    The block "nuisances" has those that are not common; there is none of null modes.
    """
    labels = _labels(a, b, common)
    inner = _shared(b.asked)
    parts, count = b.asked.parts, len(b.asked.constant)
    cells, columns = [], []
    for part in range(parts):
        first, second = (p.asked.questions for p in (a, b))
        mine, theirs = (_shared(p.asked) + part * len(p.asked.constant) for p in (a, b))
        over = second.cells[theirs]
        if by == "stack":
            over = np.hstack([-first.cells[mine], over])
        rows = _nuisance_rows(a, b, labels, part)
        cells += [over, np.zeros((len(rows), over.shape[1]))]
        columns += [np.hstack([-first.columns[mine], second.columns[theirs]]), rows]
    constant = b.asked.constant[inner] - a.asked.constant[_shared(a.asked)]
    known, factor, shift = _nuisance_amounts(a, b, labels)
    blocks, start = {}, 0
    for name, block in b.asked.blocks.items():
        size = 0 if name in APART else block.stop - block.start
        blocks[name] = slice(start, start + size)
        start += size
    blocks["nuisances"] = slice(start, start + len(labels))
    assert start == len(inner) <= count
    asked = Asked(
        Questions(np.vstack(cells), np.vstack(columns) @ merge), blocks,
        np.append(constant, known), np.append(b.asked.factor[inner], factor),
        np.append(np.zeros(len(inner)), shift),
    )  # fmt: skip
    return asked, labels


def _shared(asked: Asked) -> Numbers:
    """Numbers of the questions that both campaigns have alike."""
    return np.concatenate([
        np.arange(block.start, block.stop)
        for name, block in asked.blocks.items() if name not in APART
    ])  # fmt: skip


def _labels(a: _Part, b: _Part, common: Collection[str]) -> tuple[tuple[str, str], ...]:
    mine, theirs = ([c.name for c in p.campaign.forward.columns if c.kind == "nuisance"]
                    for p in (a, b))  # fmt: skip
    return tuple(
        (name, "difference" if name in mine and name in theirs else "A" if name in mine else "B")
        for name in dict.fromkeys([*mine, *theirs]) if name not in common
    )  # fmt: skip


def _nuisance_rows(a: _Part, b: _Part, labels: Sequence[tuple[str, str]], part: int) -> Array:
    """Rows over the unknowns of A and of B, one a nuisance."""
    found = []
    for name, of in labels:
        row = []
        for side, p in zip("AB", (a, b), strict=True):
            own = np.zeros(len(p.problem.names))
            if of in ("difference", side):
                at = _number(p, name) + part * len(p.asked.constant)
                own = p.asked.questions.columns[at]
            row.append(-own if side == "A" and of == "difference" else own)
        found.append(np.concatenate(row))
    return np.array(found).reshape(len(found), len(a.problem.names) + len(b.problem.names))


def _nuisance_amounts(
    a: _Part, b: _Part, labels: Sequence[tuple[str, str]]
) -> tuple[Array, Array, Array]:
    """Known part, factor and shift of each; a difference has no shift."""
    found = []
    for name, of in labels:
        p = a if of == "A" else b
        at = _number(p, name)
        known, shift = p.asked.constant[at], p.asked.shift[at]
        if of == "difference":
            known, shift = known - a.asked.constant[_number(a, name)], 0.0
        found.append((known, p.asked.factor[at], shift))
    three = np.array(found).reshape(len(found), 3)
    return three[:, 0], np.real(three[:, 1]), np.real(three[:, 2])


def _number(p: _Part, name: str) -> int:
    """Number of the question to a nuisance."""
    names = [c.name for c in p.campaign.forward.columns if c.kind == "nuisance"]
    return int(p.asked.blocks["nuisances"].start) + names.index(name)
