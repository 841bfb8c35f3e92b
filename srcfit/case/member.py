"""The `[member]` table to a Member."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path as File
from typing import Any

import numpy as np

from srcfit import units
from srcfit.case.ends import (
    Frame,
    read_end,
    read_hinges,
    read_interfaces,
    read_supports,
)
from srcfit.case.lines import Path
from srcfit.case.profiles import products, read_profile
from srcfit.case.reader import NAN, Reader
from srcfit.case.schema import MemberTable, check, member_table
from srcfit.errors import UnitError
from srcfit.member import (
    CoefficientSpec,
    End,
    Member,
    MemberKind,
    Profile,
    Uncertainty,
    Unknown,
)
from srcfit.members import MEMBERS
from srcfit.members.general import GENERAL_4

ROOT: Path = ("member",)


def make_member(mapping: Mapping[str, Any]) -> Member:
    """A member from the keys of `[member]`.

    Parameters
    ----------
    mapping : mapping
        Keys and values as in a case file: quantities are texts with units, e.g.
        ``{"kind": "beam", "length": "4 m", "bending_stiffness": "1.68 MN*m^2", "left": "pinned",
        "right": "pinned"}``. For kind ``general`` plain SI numbers, expressions in x and functions
        of an array of places.

    Returns
    -------
    Member
        In SI.

    Raises
    ------
    CaseError
        Naming every key that cannot be used, and why.

    Examples
    --------
    >>> from srcfit import make_member
    >>> beam = make_member({"kind": "beam", "length": "4 m", "bending_stiffness": "1.68 MN*m^2",
    ...                     "left": "pinned", "right": "pinned"})
    >>> beam.kind.name, beam.length
    ('beam', 4.0)
    """
    reader = Reader(File())
    data = as_toml(mapping)
    found = read_member(reader, data, amount_in(data, ()))
    reader.finish()
    assert found is not None
    return found


def as_toml(value: Any) -> Any:
    """A mapping of one's own with tuples as lists, as a TOML text would give it."""
    if isinstance(value, Mapping):
        return {str(key): as_toml(item) for key, item in value.items()}
    return [as_toml(item) for item in value] if isinstance(value, (list, tuple)) else value


def read_member(reader: Reader, data: Mapping[str, Any], amount: str) -> Member | None:
    """The member, or None after noting what is wrong with it."""
    before = len(reader.problems)
    kind = kind_of(reader, data, amount)
    if kind is None:
        return None
    reader.plain = kind.name == "general"
    table = check(reader, member_table(kind.name, kind.order), data, ROOT)
    span = _span(reader, table, kind)
    if not span[1] > span[0]:  # keep looking at the rest; nothing compares with nan
        span = (NAN, NAN)
    frame = Frame(reader, kind, span)
    _drive(frame, table)
    coefficients = _coefficients(frame, table)
    at_axis = kind.geometry != "line" and span[0] == 0
    left = read_end(frame, "left", table.left, at_axis)
    right = read_end(frame, "right", table.right, False)
    supports = read_supports(frame, table.support)
    hinges = read_hinges(frame, _get(table, "hinge")) if kind.order == 4 else ()
    interfaces = read_interfaces(frame, _get(table, "interface")) if kind.order == 2 else ()
    _ambient_due(frame, coefficients)
    _singular_ends(frame, coefficients, left, right)
    uncertainty = _uncertainties(frame, table.uncertainty or {})
    if len(reader.problems) > before:
        return None
    drawn = any(c.to_ambient for c in kind.coefficients)
    return Member(
        kind, *span, products(kind, coefficients), left, right, supports, hinges,
        interfaces,
        ambient=frame.ambient or 0.0 if drawn and not frame.driven else 0.0,
        lam=_number(reader, table, "lambda", "1") or 0.0,
        frequency=_number(reader, table, "frequency", "Hz"),
        damping=_number(reader, table, "damping", "1") or 0.0,
        uncertainty=uncertainty,
        coefficients=coefficients,
    )  # fmt: skip


def kind_of(reader: Reader, data: Mapping[str, Any], amount: str) -> MemberKind | None:
    """The member kind, with the units that a column or a general member leaves open filled in."""
    name = data.get("kind")
    if name is None:
        reader.missing(ROOT, "kind", "known kinds: " + ", ".join(MEMBERS))
        return None
    if not reader.choose((*ROOT, "kind"), name, MEMBERS, "member kind"):
        return None
    kind = MEMBERS[name]
    if name == "general":
        return _general(reader, data)
    return with_units(kind, lambda text: text.replace("amount", amount))


def _general(reader: Reader, data: Mapping[str, Any]) -> MemberKind | None:
    order = data.get("order")
    if order is None:
        reader.missing(ROOT, "order", "write order = 2 or order = 4")
        return None
    if order not in (2, 4) or isinstance(order, bool):
        reader.wrong((*ROOT, "order"), f"{order!r} is no order", "write 2 or 4")
        return None
    kind = GENERAL_4 if order == 4 else MEMBERS["general"]
    try:
        u, f = (
            units.coherent(str(data.get(key, "1")), reader.place((*ROOT, key)))
            for key in ("response_unit", "source_unit")
        )
    except UnitError as error:
        reader.problems.append(error)
        return kind
    flux = units.total_unit(f, "m")
    by_name = {
        "response": u,
        "slope": units.multiply_text(u, "m^-1"),
        "curvature": units.multiply_text(u, "m^-2"),
        "flux": flux,
    }
    return replace(
        kind,
        response_unit=u,
        source_unit=f,
        total_unit=flux,
        flux_unit=flux,
        sensors=tuple(replace(s, unit=by_name[s.name]) for s in kind.sensors),
        spring_unit=units.divide_text(flux, u),
        rotation_spring_unit=units.multiply_text(units.divide_text(flux, u), "m^2"),
    )


def with_units(kind: MemberKind, change: Any) -> MemberKind:
    """The kind with its unit texts changed."""
    return replace(
        kind,
        response_unit=change(kind.response_unit),
        source_unit=change(kind.source_unit),
        total_unit=change(kind.total_unit),
        flux_unit=change(kind.flux_unit),
        sensors=tuple(replace(s, unit=change(s.unit)) for s in kind.sensors),
    )


def amount_in(data: Mapping[str, Any], others: tuple[tuple[object, str], ...]) -> str:
    """The amount (mol, kg or Bq) in which a column is given; mol where nothing tells.

    `others`: unit texts beyond the member's table, each with the SI unit expected of it.
    """
    if data.get("kind") != "column":
        return "mol"
    texts = list(others)
    for value in (data.get("ambient"), data.get("left"), data.get("right")):
        held = value.get("value") or value.get("ambient") if isinstance(value, Mapping) else value
        if isinstance(held, str) and held[:1].isdigit():
            texts.append((held.lstrip("0123456789.eE+- "), "amount/m^3"))
    for text, unit in texts:
        if isinstance(text, str) and (found := units.amount_of(text, unit)):
            return found
    return "mol"


def _get(table: MemberTable, key: str) -> Any:
    """A key that only some kinds have."""
    return getattr(table, f"k_{key}", None)


def _number(reader: Reader, table: MemberTable, key: str, unit: str) -> float | None:
    value = _get(table, key)
    return None if value is None else reader.quantity((*ROOT, key), value, unit)


def _span(reader: Reader, table: MemberTable, kind: MemberKind) -> tuple[float, float]:
    """Start and end [m]; nan where they are not given."""

    def place(key: str, above: float | None = None, least: float | None = None) -> float:
        return reader.quantity((*ROOT, key), _get(table, key), "m", above=above, least=least)

    if kind.name == "general":
        start, end, last = place("start"), place("end"), "end"
    elif kind.geometry == "line":
        return 0.0, place("length", above=0)
    else:
        start, end = place("inner_radius", least=0), place("outer_radius", above=0)
        last = "outer_radius"
    if end <= start:
        reader.wrong((*ROOT, last), f"it ends at {end:g} m, not beyond its start {start:g} m")
    return start, end


def _drive(frame: Frame, table: MemberTable) -> None:
    """Frequency, damping and ambient."""
    reader = frame.reader
    frequency = _get(table, "frequency")
    frame.driven = frequency is not None
    reader.quantity((*ROOT, "frequency"), frequency, "Hz", above=0)
    damping = _get(table, "damping")
    reader.quantity((*ROOT, "damping"), damping, "1", least=0)
    if damping is not None:
        frame.note((*ROOT, "damping"), None, "1")
        if not frame.driven:
            reader.wrong((*ROOT, "damping"), "it acts only at a frequency", "add `frequency`")
    ambient = _get(table, "ambient")
    if ambient is not None:
        unit = frame.kind.response_unit
        frame.ambient = reader.quantity((*ROOT, "ambient"), ambient, unit)
        frame.note((*ROOT, "ambient"), frame.ambient, unit)


def _coefficients(frame: Frame, table: MemberTable) -> dict[str, Profile]:
    """Coefficients by their key; those left out are missing unless they have a default."""
    found: dict[str, Profile] = {}
    for spec in frame.kind.coefficients:
        value = _get(table, spec.key)
        path = (*ROOT, spec.key)
        if value is not None:
            profile = read_profile(frame.reader, path, value, spec, frame.span)
            if profile is not None:
                found[spec.key] = profile
            only = profile.values[0] if profile and len(profile.values) == 1 else None
            frame.note(path, None if callable(only) else only, spec.unit)
        elif spec.default is not None:
            found[spec.key] = Profile(frame.span, (spec.default,))
    return found


def _ambient_due(frame: Frame, coefficients: Mapping[str, Profile]) -> None:
    """Note a missing ambient where a loss, a leakage or an end refers to it."""
    specs: list[CoefficientSpec] = [c for c in frame.kind.coefficients if c.to_ambient]
    if not specs or frame.ambient is not None or frame.driven:
        return
    losing = [
        c.key for c in specs
        if c.key in coefficients and any(callable(v) or v for v in coefficients[c.key].values)
    ]  # fmt: skip
    refers = [p[-1] if isinstance(p[-1], str) else f"{p[-2]} {p[-1] + 1}" for p in frame.refers]
    if losing or refers:
        words = " and ".join(f"`{name}`" for name in [*losing, *refers])
        verb = "refers" if len([*losing, *refers]) == 1 else "refer"
        frame.reader.missing(ROOT, "ambient", f"{words} {verb} to it")


def _singular_ends(
    frame: Frame, coefficients: Mapping[str, Profile], left: End, right: End
) -> None:
    """A regular end needs p = 0 there, and every end with p = 0 must be regular."""
    p = coefficients.get("p")
    if frame.kind.name != "general" or frame.kind.order != 2 or p is None:
        return
    inner = np.abs(p(np.linspace(*frame.span, 41)[1:-1])).max()
    for side, end, place in (("left", left, frame.span[0]), ("right", right, frame.span[1])):
        with np.errstate(all="ignore"):
            value = float(p(np.array([place]))[0])
        vanishes = not abs(value) > 1e-12 * inner
        if end.axis and not vanishes:
            frame.reader.wrong((*ROOT, side), f"p is {value:g} there, not 0",
                               "a regular end is one where p vanishes")  # fmt: skip
        if vanishes and not end.axis:
            frame.reader.wrong((*ROOT, side), "p vanishes there", 'write "regular"')


def _uncertainties(frame: Frame, data: Mapping[str, Any]) -> dict[str, Uncertainty]:
    """`uncertainty`: key paths, written as quoted keys or as nested tables."""
    found: dict[str, Uncertainty] = {}
    for path, value in _flat((*ROOT, "uncertainty"), data):
        key = ".".join(str(part) for part in path[2:])
        if key not in frame.amounts:
            frame.reader.unknown_key(path, list(frame.amounts))
            continue
        amount, unit = frame.amounts[key]
        if isinstance(amount, Unknown):
            frame.reader.wrong(path, "what is unknown has no uncertainty here", "give it an `sd`")
            continue
        one = _uncertainty(frame, path, value, amount, unit)
        if one is not None:
            found[key] = one
    return found


def _flat(path: Path, data: Mapping[str, Any]) -> list[tuple[Path, Any]]:
    found: list[tuple[Path, Any]] = []
    for key, value in data.items():
        here = (*path, key)
        found += _flat(here, value) if isinstance(value, Mapping) else [(here, value)]
    return found


def _uncertainty(
    frame: Frame, path: Path, value: Any, amount: float | None, unit: str
) -> Uncertainty | None:
    reader = frame.reader
    if isinstance(value, str) and value.strip().endswith("%"):
        part = reader.quantity(path, value, "1", above=0)
        if unit == "K":
            reader.wrong(path, "a temperature has no relative uncertainty", 'write it as in "2 K"')
        elif amount == 0:
            reader.wrong(path, "a part of 0 is 0", "give the uncertainty as a quantity")
        elif part == part:
            return Uncertainty(part, relative=True)
        return None
    spread = reader.quantity(path, value, unit, difference=True, above=0)
    return Uncertainty(spread, relative=False) if spread == spread else None
