"""What a comparison of two campaigns says: tables, summary, findings, and text for a terminal."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from hashlib import sha256
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.linalg import cholesky

from srcfit import __version__, checks, doubts
from srcfit.answers import per
from srcfit.bands import undetermined
from srcfit.campaigns import Numbers, Pairing
from srcfit.case.model import Case
from srcfit.changewords import amount, signed, statements
from srcfit.errors import Finding
from srcfit.facts import peak_facts, reaction_facts, zone_facts
from srcfit.forward import Forward
from srcfit.joint import By
from srcfit.member import Array
from srcfit.recovery import Number
from srcfit.results import (
    Shown,
    known,
    number_map,
    position_scale,
    reading_units,
    source_table,
    zones_table,
)
from srcfit.rounding import brief, held_word, interval
from srcfit.solve import Solved
from srcfit.text import bullets, clean, findings_text, join, section, table
from srcfit.unknowns import response_unit

if TYPE_CHECKING:
    import pandas as pd

POWER = 1.6448536269514722  # one-sided 5 % point of the normal distribution
# findings about readings of one campaign that hold for the comparison too
SINGLE = ("outlier", "outlier-or-source")


@dataclass(frozen=True)
class Agreed:
    """How the campaigns are compared.

    Attributes
    ----------
    common : names of nuisances that are the same in both
    shared : correlation of one sensor's noise between them
    by : how the change is found
    level : mean density of a change to reckon with (SI)
    stated : whether it was stated, else it is that of the larger source
    """

    common: frozenset[str]
    shared: float
    by: By
    level: float
    stated: bool = True


@dataclass(frozen=True)
class Joint:
    """The joint inversion as one of A's layout; the rest as of `joint.Joined`."""

    solved: Solved
    nuisances: tuple[tuple[str, str], ...]
    noise: Array


# --- tables and summary -------------------------------------------------------------------------


def told(
    found: Joint, extra: Array, missed: Array, alone: Sequence[Solved], single: Sequence[Shown],
    pairing: Pairing, asked: Agreed, seed: np.random.SeedSequence,
) -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame, dict[str, Any]]:  # fmt: skip
    """Tables of the change, of the zones and of the readings, and the summary."""
    solved, shown = found.solved, Shown(found.solved, extra)
    cases = alone[0].forward.case, alone[1].forward.case
    source, units = cases[0].source, _units(cases[0])
    beyond = missed * np.abs(solved.asked.factor)

    def judged(block: str) -> list[dict[str, Any]]:
        """Numbers of a block with what they show, and those of A and B."""
        rows = zip(shown.numbers(block), beyond[solved.asked.blocks[block]],
                   *(s.numbers(block) for s in single), strict=True)  # fmt: skip
        return [_judged(n, m) | {"a": number_map(one), "b": number_map(other)}
                for n, m, one, other in rows]  # fmt: skip

    scale, zones = position_scale(solved), judged("zones")
    kept = ("name", "from", "to", "data_share")
    zones = [{k: z[k] for k in kept[:3]} | n | {"data_share": z["data_share"]}
             for z, n in zip(zone_facts(solved, shown), zones, strict=True)]  # fmt: skip
    lumped = [{"name": p.name, "at": None if p.at is None else p.at * scale} | n
              for p, n in zip(source.lumped, judged("lumped"), strict=True)]  # fmt: skip
    reactions = [
        {k: r[k] for k in ("name", "at", "kind", "unit")} | n
        for r, n in zip(reaction_facts(solved, shown), judged("reactions"), strict=True)
    ]
    fit = _fit(solved)
    findings = _findings(found, alone, single, pairing, asked, fit)
    reckoned = asked.level * per(source.unit, cases[0].member.kind.source_unit)
    facts: dict[str, Any] = {
        "schema": 1, "version": __version__,
        "title": f"{_title(cases[0])} to {_title(cases[1])}",
        "a": _campaign(alone[0]), "b": _campaign(alone[1]), "units": units,
        "by": asked.by, "reckoned": reckoned, "paired": len(pairing.first),
        "shared_noise": asked.shared, "common": sorted(asked.common), "fit": fit,
        "total": judged("total")[0], "zones": zones,
        "background": next(iter(judged("background")), None),
        "peak": peak_facts(solved, shown), "lumped": lumped,
        "nuisances": _nuisances(found, shown, beyond, alone, single), "reactions": reactions,
        "findings": [asdict(f) for f in findings],
        "level": cases[0].strength.level, "seed": seed.entropy,
        "cautions": list(cases[0].member.kind.cautions),
    }  # fmt: skip
    return (
        source_table(solved, shown), _zones(solved, shown, zones, units["total"]),
        _readings(found, alone, pairing, asked), facts,
    )  # fmt: skip


def _judged(n: Number, missed: float) -> dict[str, Any]:
    """A number with whether it shows a change, and what change would have been missed."""
    facts: dict[str, Any] = dict(number_map(n))
    if n.lower is None or n.upper is None or n.sd is None:
        return facts | {"shown": None, "missed": None}
    seen = n.lower > 0 or n.upper < 0
    if n.driven and n.value is not None and n.imaginary is not None:
        # either part may show it, each at half the error
        seen = float(np.hypot(n.value, n.imaginary)) > np.sqrt(-2 * np.log(0.05)) * n.sd
    return facts | {"shown": bool(seen), "missed": known(missed)}


def _title(case: Case) -> str:
    return case.title or (case.path.stem if case.path else "case")


def _units(case: Case) -> dict[str, str]:
    source = case.source
    return {"position": source.position_unit, "source": source.unit, "total": source.total_unit,
            "response": response_unit(case)}  # fmt: skip


def _campaign(solved: Solved) -> dict[str, Any]:
    case, readings = solved.forward.case, solved.forward.readings
    return {
        "title": case.title, "case": str(case.path) if case.path else None,
        "read": len(readings), "used": len(solved.forward.rows),
        "excluded": [
            {"file": readings.file[i], "line": int(readings.line[i]), "reason": readings.reason[i]}
            for i in np.flatnonzero(~readings.used)
        ],
        "inputs": _inputs(case, readings.inputs),
    }  # fmt: skip


def _inputs(case: Case, read: Mapping[str, str]) -> list[dict[str, str]]:
    """Every file of a campaign with its sha256: the case, what it names, the readings."""
    own = [case.path] if case.path is not None else []
    named = dict.fromkeys(p.resolve() for p in (*own, *(case.folder / f for f in case.files)))
    paths = [p for p in named if p.is_file()]
    files = [(p.name, sha256(p.read_bytes()).hexdigest()) for p in paths] + [*read.items()]
    return [{"file": name, "sha256": digest} for name, digest in files]


def _fit(solved: Solved) -> dict[str, Any]:
    fit, problem = solved.answers.fit, solved.problem
    noise = 1.0 if problem.stated else float(fit.noise) or 1.0
    return {
        "rows": solved.readings,
        "chi_square": known(float((fit.residual**2).sum()) / noise**2),
        "dof": known(solved.readings - fit.effective_dof),
    }


def _nuisances(
    found: Joint, shown: Shown, beyond: Array, alone: Sequence[Solved], single: Sequence[Shown]
) -> list[dict[str, Any]]:
    units = {c.name: c.unit for s in alone for c in s.forward.columns}

    def own(side: int, name: str) -> dict[str, float | None] | None:
        """What a campaign says by itself; None where it has none, or another unit."""
        columns = [c for c in alone[side].forward.columns if c.kind == "nuisance"]
        numbers = zip(columns, single[side].numbers("nuisances"), strict=True)
        told = (number_map(n) for c, n in numbers if (c.name, c.unit) == (name, units[name]))
        return next(told, None)

    return [
        {"name": name, "of": of} | _judged(n, m)
        | {"a": own(0, name), "b": own(1, name), "unit": units[name]}
        for (name, of), n, m in zip(
            found.nuisances,
            shown.numbers("nuisances"),
            beyond[found.solved.asked.blocks["nuisances"]],
            strict=True,
        )
    ]  # fmt: skip


def _zones(
    solved: Solved, shown: Shown, zones: Sequence[Mapping[str, Any]], unit: str
) -> pd.DataFrame:
    frame = zones_table(solved, shown)
    frame["shown"] = [z["shown"] for z in zones]
    for head, key in (("missed", None), ("A", "a"), ("B", "b")):
        frame[f"{head} [{unit}]"] = np.array(
            [z[head] if key is None else z[key]["value"] for z in zones], dtype=float
        )
    return frame


def _readings(
    found: Joint, alone: Sequence[Solved], pairing: Pairing, asked: Agreed
) -> pd.DataFrame:
    """What went into the joint problem, in the units that A's (or its own) readings came in."""
    import pandas as pd

    fit, read = found.solved.answers.fit, found.solved.readings
    sd, residual = _recoloured(found)
    driven, scale = found.solved.forward.driven, position_scale(found.solved)
    place = f"x [{alone[0].forward.case.source.position_unit}]"

    def columns(side: int, rows: Numbers) -> tuple[dict[str, Any], Array]:
        forward = alone[side].forward
        at = forward.rows[rows]
        size, shift = (part[at] for part in reading_units(alone[side]))
        value = forward.readings.value[at]
        table = {
            "group": [forward.readings.group[i] for i in at],
            "kind": [forward.readings.kind[i] for i in at],
            "unit": [forward.readings.unit[i] for i in at], place: forward.readings.x[at] * scale,
        }  # fmt: skip
        return table, np.array([value, size, shift])

    if asked.by == "pairs":
        shown, (value, size, shift) = columns(0, pairing.first)
        other = alone[1].forward.readings.value[alone[1].forward.rows[pairing.second]]
        shown["A"], shown["B"] = (np.real(v * size + shift) for v in (value, other))
        shown["difference"] = np.real((other - value) * size)
        if driven:
            shown["difference_imag"] = np.imag((other - value) * size)
            return pd.DataFrame(shown)
        shown["sd"] = sd * np.real(size)
        shown["predicted"] = shown["difference"] - residual * np.real(size)
        return pd.DataFrame(shown | {"standardised": fit.standardised[:read]})
    tables, counts = [], [len(s.forward.rows) for s in alone]
    for side, rows in enumerate((slice(counts[0]), slice(counts[0], sum(counts)))):
        shown, (value, size, shift) = columns(side, np.arange(counts[side]))
        given = np.real(value * size + shift)
        tables.append(pd.DataFrame(
            {"campaign": "AB"[side]} | shown | {"value": given, "sd": sd[rows] * np.real(size),
             "predicted": given - residual[rows] * np.real(size)}
        ))  # fmt: skip
    whole = pd.concat(tables, ignore_index=True)
    return whole.assign(standardised=fit.standardised[:read])


def _recoloured(found: Joint) -> tuple[Array, Array]:
    """Standard deviation and residual (r,) of the joint problem's readings, both in SI."""
    fit, noise = found.solved.answers.fit, found.noise
    white = fit.residual[: len(noise)]
    factor = 1.0 if found.solved.problem.stated else float(fit.noise)
    if noise.ndim == 1:
        sd = np.sqrt(noise)
        return factor * sd, sd * white
    return factor * np.sqrt(np.diag(noise)), cholesky(noise, lower=True) @ white


# --- findings -----------------------------------------------------------------------------------


def _findings(
    found: Joint, alone: Sequence[Solved], single: Sequence[Shown], pairing: Pairing,
    asked: Agreed, fit: Mapping[str, Any],
) -> list[Finding]:  # fmt: skip
    first, second = (s.forward for s in alone)
    solved = found.solved
    saying = [f for forward in (first, second) for f in forward.readings.findings]
    saying += [
        replace(f, sentence=f"In campaign {side}, {f.sentence}")
        for side, s, own in zip("AB", alone, single, strict=True)
        for f in doubts.findings(s, own) if f.code in SINGLE
    ]  # fmt: skip
    saying += _sensors(first, second, pairing, asked)
    saying += _same(first, second, pairing)
    saying += _floor(alone, asked)
    saying += checks.singular(first)
    saying += checks.inseparable(first, undetermined(solved.problem))
    if solved.answers.reason:
        saying += checks.few(solved.readings, solved.problem.B.shape[1] + solved.problem.constant)
    if fit["chi_square"] is not None and fit["dof"] is not None:
        saying += _contradicted(fit["chi_square"], fit["dof"], solved.problem.stated, asked)
    sources = first.case.source, second.case.source
    if any(s.sign != "any" or s.ceiling is not None or s.monotone for s in sources):
        saying.append(Finding(
            "sign-not-used", "note",
            "The sign, ceiling or monotone stretches that are declared hold for each source, not "
            "for what changed between them: they were not used.",
        ))  # fmt: skip
    if sources[0].known != sources[1].known:
        saying.append(Finding(
            "known-differs", "note",
            "The known parts of the source differ between A and B: the change is that of what "
            "acts beyond them.",
        ))  # fmt: skip
    return saying


def _sensors(a: Forward, b: Forward, pairing: Pairing, asked: Agreed) -> list[Finding]:
    """What was made of sensors that only one campaign has."""
    left = len(a.rows) - len(pairing.first), len(b.rows) - len(pairing.second)
    if not any(left):
        return []
    of = f"{left[0]} of {len(a.rows)} readings of A and {left[1]} of {len(b.rows)} of B"
    if asked.by == "pairs":
        return [Finding(
            "sensors-not-common", "note",
            f"{of} have no partner of the same group, kind and place in the other campaign and "
            "were left out of the differences; --by stack takes them in, with wider intervals.",
        )]  # fmt: skip
    return [Finding(
        "stacked", "caution",
        f"{of} have no partner of the same group, kind and place in the other campaign, so both "
        "sources were taken as unknown and the change as a question to them: only the nuisances "
        "that are declared common cancel, and the intervals are wider than those of differences. "
        "Reading the same sensors both times would tell more.",
    )]  # fmt: skip


def _same(a: Forward, b: Forward, pairing: Pairing) -> list[Finding]:
    """The same numbers read twice."""
    if not len(pairing.first):
        return []
    one = a.readings.value[a.rows[pairing.first]]
    if not np.array_equal(one, b.readings.value[b.rows[pairing.second]]):
        return []
    return [Finding(
        "same-readings", "serious",
        "Every common reading has the same value in both campaigns: two campaigns never do, so "
        "the same file or column was probably read twice.",
    )]  # fmt: skip


def _floor(alone: Sequence[Solved], asked: Agreed) -> list[Finding]:
    """A mean of the sources that hangs on a datum is no floor to trust."""
    if asked.stated or not alone[0].problem.smooth:
        return []
    totals = [float(s.answers.value[s.asked.blocks["total"].start]) for s in alone]
    if np.isfinite(totals).all():
        return []
    source = alone[0].forward.case.source
    level = asked.level * per(source.unit, alone[0].forward.case.member.kind.source_unit)
    return [Finding(
        "floor-unsure", "caution",
        "Where the readings do not tell the change it is taken to vary as a source of the mean "
        f"{brief(level)} {source.unit} does, but the readings of one campaign do not determine "
        "that mean, so the number and the width of the intervals are partly arbitrary: state how "
        "large a change must be reckoned with (--reckon).",
    )]  # fmt: skip


def _contradicted(chi: float, dof: float, stated: bool, asked: Agreed) -> list[Finding]:
    found = checks.noise(chi, dof, stated)
    if asked.shared or not found or found[0].code != "noise-overstated":
        return found
    more = (
        " Noise that each sensor keeps from one campaign to the next would look like that and can "
        "be stated with --shared-noise."
    )
    return [replace(found[0], sentence=found[0].sentence + more)]


# --- text ---------------------------------------------------------------------------------------


def comparison_text(facts: Mapping[str, Any]) -> str:
    """The table at the end of `srcfit compare`."""
    return join(
        _opening(facts), _numbers(facts),
        bullets(statements(facts)) and section("What changed", bullets(statements(facts))),
        section("Findings", findings_text(facts["findings"])),
        section("Cautions", bullets(facts["cautions"])),
    )  # fmt: skip


def _opening(facts: Mapping[str, Any]) -> str:
    a, b = facts["a"], facts["b"]
    how = f"{facts['paired']} common sensors, differenced"
    if facts["by"] == "stack":
        how = f"all readings stacked ({facts['paired']} sensors are common)"
    rows = [(side, f"{clean(c['title'] or c['case'] or '')}, {c['used']} used of {c['read']}")
            for side, c in (("A", a), ("B", b))]  # fmt: skip
    rows.append(("method", how))
    if facts["common"]:
        rows.append(("common", ", ".join(facts["common"])))
    if facts["shared_noise"]:
        rows.append(("noise", f"correlated by {facts['shared_noise']:g} between the campaigns"))
    return table(("", ""), rows)


def _numbers(facts: Mapping[str, Any]) -> str:
    units = facts["units"]
    at, total, density = units["position"], units["total"], units["source"]

    def row(name: str, where: str, n: Mapping[str, Any], unit: str) -> tuple[str, ...]:
        own = [amount(n[k], unit) if n.get(k) else "" for k in ("a", "b")]
        return (name, where, *own, signed(amount(n, unit)), interval(n, unit))

    rows = [row("total", "", facts["total"], total)]
    rows += [row(f"zone {z['name']}", f"{brief(z['from'], 6)} to {brief(z['to'], 6)} {at}", z,
                 total) for z in facts["zones"]]  # fmt: skip
    if facts["background"]:
        rows.append(row("background", "", facts["background"], density))
    rows += [row(f"lumped {p['name']}", f"{brief(p['at'], 6)} {at}", p, total)
             for p in facts["lumped"]]  # fmt: skip
    rows += [row(n["name"] + ("" if n["of"] == "difference" else f" (of {n['of']})"), "", n,
                 n["unit"]) for n in facts["nuisances"]]  # fmt: skip
    rows += [row(held_word(r["name"], r["kind"]), f"{brief(r['at'], 6)} {at}", r, r["unit"])
             for r in facts["reactions"]]  # fmt: skip
    level = f"{100 * facts['level']:g} % interval"
    return table(("", "where", "A ± sd", "B ± sd", "change ± sd", level), rows, "llrrrr")
