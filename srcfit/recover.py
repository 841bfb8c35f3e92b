"""The conductor: from a case and its readings to the whole result."""

from __future__ import annotations

from dataclasses import asdict

import numpy as np

from srcfit import (
    __version__,
    checks,
    doubts,
    knowledge,
    patterns,
    separate,
    shares,
    tell,
    verdicts,
)
from srcfit.answers import per
from srcfit.balance import Balance, balance, balance_facts
from srcfit.case.model import Case
from srcfit.demands import demands
from srcfit.eigen import modes
from srcfit.errors import Finding
from srcfit.facts import facts, fit_facts
from srcfit.forward import along
from srcfit.influence import at_nodes
from srcfit.member import Array
from srcfit.misfit import chance
from srcfit.places import solve
from srcfit.readings import read
from srcfit.readings.model import Readings
from srcfit.recovery import Pictures, Recovery
from srcfit.results import (
    Shown,
    known,
    ladder_table,
    reading_units,
    readings_table,
    recoloured,
    section_table,
    source_table,
    zones_table,
)
from srcfit.shares import properties
from srcfit.solve import Solved, strength_unit
from srcfit.state import Matrix
from srcfit.whitening import together

PICTURED_MODES = 6
PICTURED_RUNGS = 60


def recover(
    case: Case, readings: Readings | None = None, *, rng: int | np.random.SeedSequence = 0
) -> Recovery:
    r"""Recover the source of a case from its readings.

    Parameters
    ----------
    case : Case
    readings : Readings, optional
        Read from the case's files when left out.
    rng : int or SeedSequence
        Seed, recorded in the result; the same seed gives the same numbers.

    Returns
    -------
    Recovery
        In the user's units.

    Raises
    ------
    SrcfitError
        When the member, the readings or the question cannot be used as given.

    Examples
    --------
    A cable that sags under 20 N/m over its 10 m, read at nine places:

    >>> from pathlib import Path
    >>> from tempfile import TemporaryDirectory
    >>> from srcfit import make_case, recover
    >>> with TemporaryDirectory() as folder:
    ...     rows = [f"{x},{1000 * 20 * x * (10 - x) / (2 * 5000):.2f}" for x in range(1, 10)]
    ...     _ = (Path(folder) / "w.csv").write_text("\n".join(["x [m],w [mm]", *rows, ""]))
    ...     found = recover(make_case({
    ...         "member": {"kind": "cable", "length": "10 m", "tension": "5 kN", "left": "fixed",
    ...                    "right": "fixed"},
    ...         "readings": {"file": "w.csv", "position": {"column": "x [m]", "unit": "m"},
    ...                      "column": [{"column": "w [mm]", "kind": "deflection",
    ...                                  "sd": "0.1 mm"}]},
    ...         "source": {"unit": "N/m", "cells": 50},
    ...     }, folder))
    >>> found.total["lower"] < 200 < found.total["upper"]
    True
    >>> round(found.total["value"])
    200
    """
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1):
        readings = read(case) if readings is None else readings
        seed = rng if isinstance(rng, np.random.SeedSequence) else np.random.SeedSequence(rng)
        solved = solve(case, readings, rng=seed)
        moved = properties(solved, seed)
        shown = Shown(solved, moved.variance)
        sums, told = _sums(solved), tell.tell(solved)
        parts = shares.shares(solved, moved, told.rows, told.noise)
        found = [asdict(f) for f in _findings(solved, shown, parts, told, sums)]
        summary = facts(solved, shown, found, seed.entropy, __version__)
        summary["findings"] += [asdict(f) for f in verdicts.findings(case, summary)]
        summary |= tell.facts(solved, told) | {"shares": [part.facts() for part in parts]}
        resolution, shift = tell.columns(solved, told)
        return Recovery(
            case=case,
            source=source_table(solved, shown).assign(**resolution),
            zones=zones_table(solved, shown),
            readings=readings_table(solved).assign(**shift),
            ladder=ladder_table(solved),
            pictures=_pictures(solved),
            facts=summary,
            section=section_table(solved, shown),
            balance=None if sums is None else balance_facts(solved.forward, sums),
        )


def _findings(
    solved: Solved, shown: Shown, parts: list[shares.Share], told: tell.Told,
    sums: Balance | None,
) -> list[Finding]:  # fmt: skip
    forward, answers, case = solved.forward, solved.answers, solved.forward.case
    fit = fit_facts(solved)
    found = [*forward.readings.findings, *checks.exclusions(forward)]
    found += checks.singular(forward)
    found += checks.resonance(forward)
    found += separate.findings(solved, shown)
    if answers.reason:
        found += checks.few(len(forward.rows), len(forward.columns) + int(solved.problem.constant))
    if fit["chi_square"] is not None and fit["dof"] is not None:
        odds = float("nan") if solved.held else chance(answers.fit)
        found += checks.noise(fit["chi_square"], fit["dof"], solved.problem.stated, odds)
        found += checks.noise_from_rest(fit["used"], fit["dof"], solved.problem.stated)
    left = together(forward, np.nan_to_num(answers.fit.standardised))
    found += doubts.findings(solved, shown) + doubts.repeatability(solved)
    alike = checks.correlated(forward, left, solved.noise)
    named = frozenset(g for g in forward.groups if any(repr(g) in f.sentence for f in alike))
    found += alike + patterns.findings(solved, told.main, correlated=named)
    if (
        solved.choice is not None
        and solved.ladder is not None
        and solved.choice.criterion != "stated"
    ):
        count = len(solved.ladder.strengths)
        found += checks.edge(solved.choice.index, count, solved.choice.criterion)
    one = solved.choice is not None and solved.choice.criterion in solved.choices
    if one and solved.ladder is not None and solved.ladder.solver == "tikhonov":
        found += checks.disagreement(
            {name: known(c.strength) for name, c in solved.choices.items() if c.index >= 0},
            case.strength.choose if isinstance(case.strength.choose, str) else "one",
        )
    found += demands(solved, shown)
    found += knowledge.findings(solved, shown)
    names = [z.name for z in case.source.zones]
    found += checks.told(
        names, shown.shares("zones") if solved.problem.smooth else [None] * len(names)
    )
    if sums is not None:
        total = case.source.total_unit
        found += checks.balanced(sums, total, per(total, case.member.kind.total_unit))
    found += tell.findings(solved, shown, told) + shares.findings(parts)
    return found


def estimate(solved: Solved) -> tuple[Matrix | None, Matrix]:
    """Densities (m,) and unknowns (k,) of the estimate in SI; None where undetermined."""
    forward, blocks = solved.forward, solved.asked.blocks
    value = solved.asked.together(solved.answers.value) + solved.asked.constant
    f = np.where(forward.grid.free, value[blocks["cells"]], 0.0)
    beta = np.zeros(len(forward.columns), dtype=value.dtype)
    for block, kind in (("lumped", "lumped"), ("nuisances", "nuisance"), ("nulls", "null")):
        where = [i for i, c in enumerate(forward.columns) if c.kind == kind]
        beta[where] = value[blocks[block]]
    told = np.isfinite(f).all() and np.isfinite(beta).all()
    return (f if told else None), beta


def _sums(solved: Solved) -> Balance | None:
    """Equilibrium of the estimate; None where it is not determined."""
    f, beta = estimate(solved)
    return None if f is None else balance(solved.forward, f, beta)


def _pictures(solved: Solved) -> Pictures:
    """Curves for the figures: fits, influence lines, modes, the ladder's rungs."""
    forward, case = solved.forward, solved.forward.case
    x = forward.grid.edges
    lines = at_nodes(forward.lines, forward.line.node(x))[: len(forward.rows)]
    found = modes(case.member, PICTURED_MODES)
    ladder = solved.ladder
    unit = per(case.source.unit, case.member.kind.source_unit)
    total = per(case.source.total_unit, case.member.kind.total_unit)
    if ladder is None:
        empty = np.zeros((0, len(forward.grid.free)))
        strengths, rungs, totals, fits = (
            np.zeros(0),
            empty,
            np.zeros(0),
            np.zeros((0, len(forward.rows))),
        )
    else:
        pick = np.unique(np.linspace(0, len(ladder.strengths) - 1, PICTURED_RUNGS).astype(int))
        cut = ladder.solver != "tikhonov"
        size = 1.0 if cut else strength_unit(case, ladder.family)[1]
        strengths = ladder.strengths[pick] * size
        cells = len(forward.grid.free)
        rungs = ladder.estimates[:cells, pick].T * unit
        totals = (
            ladder.answers(solved.asked.questions)[0, pick] + solved.asked.constant[0].real
        ) * total
        fits = np.zeros((len(pick), len(forward.rows)))
        for i, rung in enumerate(pick):
            fits[i] = _predicted(solved, ladder.residuals[:, rung])
    return Pictures(
        x=x,
        fit=_curves(solved),
        influence=np.real(lines),
        influence_of=tuple(int(r) for r in forward.rows),
        modes=found.functions(x),
        eigenvalues=found.eigenvalues,
        strengths=strengths,
        rungs=rungs,
        totals=totals,
        fits=fits,
    )


def _predicted(solved: Solved, residual: Array) -> Array:
    """Predicted used readings in their own units from whitened residuals."""
    forward = solved.forward
    scale, shift = reading_units(solved)
    value = np.real(forward.readings.value[forward.rows] - recoloured(solved, residual))
    predicted: Array = value * scale[forward.rows] + shift[forward.rows]
    return predicted


def _curves(solved: Solved) -> dict[str, Array]:
    """Predicted reading of each used sensor kind along the member (SI); datum offsets left out.

    Empty where the readings do not determine the source; real parts of complex amplitudes.
    """
    forward = solved.forward
    f, beta = estimate(solved)
    if f is None:
        return {}
    member, curves = forward.case.member, {}
    for spec in {s.kind: s for s in forward.specs()}.values():
        sensor = member.kind.sensor(spec.kind)
        if sensor.quantity == "reaction":
            continue
        cells, columns, known = along(forward, sensor.quantity, forward.grid.edges)
        value = np.real(cells @ f + columns @ beta + known)
        if sensor.quantity == "response" and member.kind.relative and not member.driven:
            value = value + member.ambient
        curves[spec.kind] = value * ((spec.distance or 0.0) if sensor.needs_distance else 1.0)
    return curves
