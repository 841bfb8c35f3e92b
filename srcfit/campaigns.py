"""Two cases as two campaigns of readings of one layout: what must be alike, and what is common."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import Case
from srcfit.errors import SolveError
from srcfit.forward import Forward
from srcfit.member import End, Member, Restraint
from srcfit.unknowns import place_text

Numbers = NDArray[np.intp]

NEAR = 1e-6  # places closer than this part of the length are one
SAME = 1e-9  # relative size of what is no difference


@dataclass(frozen=True)
class Pairing:
    """Readings of the same sensor: numbers among the used readings of A and of B, (p,) each."""

    first: Numbers
    second: Numbers


# --- what must be alike -------------------------------------------------------------------------


def check_alike(a: Case, b: Case) -> None:
    """Refuse cases that are not two campaigns of one layout.

    Raises
    ------
    SolveError
        Naming the first thing that differs, or when a lumped part has no place. Prescribed amounts
        (settlements, held temperatures, the ambient), known parts, signs and limits may differ.
    """
    for what, first, second in (*_of_member(a.member, b.member), *_of_source(a, b)):
        if first != second:
            raise SolveError(
                f"{what} is {_told(second)} here, but {_told(first)} in {_name(a)}", _name(b),
                "compare takes two campaigns of one layout: make both cases alike but for their "
                "readings",
            )  # fmt: skip
    if any(p.at is None for p in a.source.lumped):
        raise SolveError(
            "a lumped part of unknown place cannot be compared", "source.lumped",
            "give its place with `at` in both cases",
        )  # fmt: skip


def _name(case: Case) -> str:
    return str(case.path or case.title or "case")


def _told(value: Any) -> str:
    if isinstance(value, list):
        return "; ".join(map(str, value)) or "empty"
    return value if isinstance(value, str) else repr(value)


def _of_member(a: Member, b: Member) -> list[tuple[str, Any, Any]]:
    """(what, in A, in B) of everything that sets the operator."""
    found: list[tuple[str, Any, Any]] = [("the member's kind", a.kind.name, b.kind.name)]
    if a.kind.name != b.kind.name:
        return found
    found += [
        ("the member's length", f"{a.length:.6g} m", f"{b.length:.6g} m"),
        ("the member's start", f"{a.start:.6g} m", f"{b.start:.6g} m"),
    ]
    if a.length != b.length:
        return found
    units = {c.key: c.unit for c in a.kind.coefficients}
    for key in dict.fromkeys([*a.coefficients, *b.coefficients]):
        found += _of_coefficient(key, units.get(key, ""), a, b)
    found += [
        ("the driving frequency", a.frequency, b.frequency),
        ("the loss factor", a.damping, b.damping),
        ("lambda", a.lam, b.lam),
        ("the left end", _held(a.left), _held(b.left)),
        ("the right end", _held(a.right), _held(b.right)),
        ("the supports' places and stiffnesses",
         [(s.at, _stiff(s.restraint)) for s in a.supports],
         [(s.at, _stiff(s.restraint)) for s in b.supports]),
        ("the hinges' places and springs", [(h.at, h.spring) for h in a.hinges],
         [(h.at, h.spring) for h in b.hinges]),
        ("the interfaces' places and resistances", [(i.at, i.resistance) for i in a.interfaces],
         [(i.at, i.resistance) for i in b.interfaces]),
    ]  # fmt: skip
    return found


def _of_coefficient(key: str, unit: str, a: Member, b: Member) -> list[tuple[str, Any, Any]]:
    """The coefficient at the first place where it differs."""
    there, here = a.coefficients.get(key), b.coefficients.get(key)
    if there is None or here is None:
        told = ["given" if p is not None else "not given" for p in (there, here)]
        return [(key, told[0], told[1])]
    x = np.unique([*np.linspace(a.start, a.end, 201), *there.edges, *here.edges])
    first, second = there(x), here(x)
    off = ~np.isclose(first, second, rtol=SAME, atol=0.0)
    if not off.any():
        return []
    at = int(np.argmax(off))
    return [(f"{key} at {x[at]:.6g} m", f"{first[at]:.6g} {unit}", f"{second[at]:.6g} {unit}")]


def _stiff(restraint: Restraint) -> str:
    return "rigid" if np.isinf(restraint.stiffness) else f"{restraint.stiffness:.10g}"


def _held(end: End) -> str:
    """What an end holds, without the amounts it is held to."""
    if end.axis:
        return "the axis"
    return f"held with {_stiff(end.response)} (response) and {_stiff(end.rotation)} (rotation)"


def _of_source(a: Case, b: Case) -> list[tuple[str, Any, Any]]:
    first, second = a.source, b.source

    def zones(case: Case) -> list[str]:
        return [f"{z.name} {_place(case, z.start)} to {_place(case, z.end)}"
                for z in case.source.zones]  # fmt: skip

    def lumped(case: Case) -> list[str]:
        return [f"{p.name} at {'an unknown place' if p.at is None else _place(case, p.at)}"
                for p in case.source.lumped]  # fmt: skip

    return [
        ("the number of cells", first.cells, second.cells),
        ("the list of zones", zones(a), zones(b)),
        ("the list of lumped parts", lumped(a), lumped(b)),
        ("the widths of lumped parts", [p.width for p in first.lumped],
         [p.width for p in second.lumped]),
        ("the list of breaks [m]", sorted(first.breaks), sorted(second.breaks)),
        ("the list of stretches without source [m]", sorted(first.zero), sorted(second.zero)),
        ("smooth", first.smooth, second.smooth),
        ("background", first.background, second.background),
    ]  # fmt: skip


def _place(case: Case, at: float) -> str:
    return f"{at:.6g} m" if case.source.position_unit == "m" else place_text(case, at)


# --- common sensors and common nuisances --------------------------------------------------------


def paired(a: Forward, b: Forward) -> Pairing:
    """Used readings of one sensor in both campaigns: same group, kind, set-up and place.

    Repeats at one place are paired in their order; what one campaign has more of stays alone.
    """
    places = [_by_sensor(f) for f in (a, b)]
    near = NEAR * a.case.member.length
    first, second = [], []
    for key, here in places[0].items():
        there = places[1].get(key, [])
        i = j = 0
        while i < len(here) and j < len(there):
            gap = here[i][0] - there[j][0]
            if abs(gap) <= near:
                first.append(here[i][1])
                second.append(there[j][1])
            i, j = i + (gap <= near), j + (gap >= -near)
    order = np.argsort(first, kind="stable")
    return Pairing(np.array(first, dtype=np.intp)[order], np.array(second, dtype=np.intp)[order])


def _by_sensor(forward: Forward) -> dict[tuple[Any, ...], list[tuple[float, int]]]:
    found: dict[tuple[Any, ...], list[tuple[float, int]]] = {}
    for i, (x, s) in enumerate(zip(forward.places, forward.specs(), strict=True)):
        key = s.group, s.kind, s.component, s.distance, s.gauge_length
        found.setdefault(key, []).append((float(x), i))
    return {key: sorted(rows) for key, rows in found.items()}


def check_common(a: Forward, b: Forward, common: Collection[str]) -> None:
    """Refuse names that are not unknown nuisances of both campaigns.

    Raises
    ------
    SolveError
    """
    both = [c.name for c in a.columns if c.kind == "nuisance"]
    both = [n for n in both if n in {c.name for c in b.columns if c.kind == "nuisance"}]
    for name in common:
        if name not in both:
            known = ", ".join(both) if both else "there are none"
            raise SolveError(
                f"{name!r} is not an unknown nuisance of both cases", "--common",
                f"those that both have: {known}",
            )  # fmt: skip
