"""Coefficients along the member: one quantity, a stepped table, a file, or an expression."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path as File
from typing import Any

import numpy as np

from srcfit import units
from srcfit.case.curve import Line, read_columns
from srcfit.case.expression import expression
from srcfit.case.lines import Path
from srcfit.case.reader import Reader
from srcfit.case.schema import CurveTable, check
from srcfit.errors import CaseError
from srcfit.member import Array, CoefficientSpec, Curve, MemberKind, Profile

NEAR = 1e-9  # places that differ by less than this part of the length are one


@dataclass(frozen=True)
class Product:
    """Product of coefficients, each a number or a function of x."""

    factors: tuple[float | Curve, ...]

    def __call__(self, x: Array) -> Array:
        """Values at the places `x`."""
        out = np.ones(np.shape(x))
        for factor in self.factors:
            out = out * (factor(x) if callable(factor) else factor)
        return out


@dataclass(frozen=True)
class Shifted:
    """A function of x plus a constant."""

    curve: Curve
    step: float

    def __call__(self, x: Array) -> Array:
        """Values at the places `x`."""
        return self.curve(x) + self.step


def product(profiles: list[Profile]) -> Profile:
    """The product of coefficients, with the edges of all."""
    if len(profiles) == 1:
        return profiles[0]
    edges = tuple(sorted({e for p in profiles for e in p.edges}))
    values = []
    for left, right in pairwise(edges):
        middle = (left + right) / 2
        parts = [p.values[int(np.searchsorted(p.edges, middle)) - 1] for p in profiles]
        numbers = [p for p in parts if not callable(p)]
        curves = tuple(p for p in parts if callable(p))
        values.append(Product((math.prod(numbers), *curves)) if curves else math.prod(numbers))
    return Profile(edges, tuple(values))


def products(kind: MemberKind, coefficients: Mapping[str, Profile]) -> dict[str, Profile]:
    """Coefficients of the equation, by symbol; those whose keys are not all given are left out."""
    return {
        symbol: product([coefficients[key] for key in keys])
        for symbol, keys in kind.operator.items()
        if all(key in coefficients for key in keys)
    }


def read_profile(
    reader: Reader, path: Path, value: Any, spec: CoefficientSpec, span: tuple[float, float]
) -> Profile | None:
    """One coefficient, or None after noting what is wrong with it."""
    before = len(reader.problems)
    if isinstance(value, (list, tuple)):
        found = _stepped(reader, path, list(value), spec, span)
    elif isinstance(value, Mapping):
        found = _from_file(reader, path, value, spec, span)
    else:
        found = Profile(span, (_value(reader, path, value, spec),))
    if found is None or len(reader.problems) > before:
        return None
    _check_values(reader, path, found, spec, value)
    return found if len(reader.problems) == before else None


def _value(reader: Reader, path: Path, value: Any, spec: CoefficientSpec) -> float | Curve:
    """One piece: a quantity; for `general` a number, an expression or a function."""
    if not reader.plain:
        if callable(value):
            reader.wrong(path, "a function is taken only by kind `general`", "give a quantity")
            return math.nan
        return reader.quantity(path, value, spec.unit)
    if callable(value):
        curve: Curve = value
        return curve
    if isinstance(value, str):
        try:
            return expression(value, reader.place(path))
        except CaseError as error:
            reader.problems.append(error)
            return math.nan
    return reader.quantity(path, value, "1")


def _stepped(
    reader: Reader, path: Path, rows: list[Any], spec: CoefficientSpec, span: tuple[float, float]
) -> Profile | None:
    pieces: list[tuple[float, float, float | Curve, int]] = []
    for i, row in enumerate(rows):
        if not isinstance(row, (list, tuple)) or len(row) != 3:
            reader.wrong((*path, i), "a row of a stepped table is [from, to, value]")
            return None
        start = reader.quantity((*path, i), row[0], "m")
        end = reader.quantity((*path, i), row[1], "m")
        if end <= start:
            reader.wrong((*path, i), f"it ends at {row[1]!r}, not beyond its start {row[0]!r}")
        pieces.append((start, end, _value(reader, (*path, i), row[2], spec), i))
    if not pieces:
        reader.wrong(path, "the stepped table is empty", "give rows [from, to, value]")
        return None
    if any(math.isnan(s) or math.isnan(e) for s, e, _, _ in pieces):
        return None
    pieces.sort(key=lambda piece: piece[0])
    return _joined(reader, path, pieces, span)


def _joined(
    reader: Reader,
    path: Path,
    pieces: list[tuple[float, float, float | Curve, int]],
    span: tuple[float, float],
) -> Profile | None:
    """Pieces in order that must cover the span once."""
    near = NEAR * (span[1] - span[0])
    reached, good = span[0], True
    for start, end, _, i in pieces:
        if start < span[0] - near or end > span[1] + near:
            reader.wrong(
                (*path, i), f"it reaches from {start:g} m to {end:g} m, outside the member",
                f"the member reaches from {span[0]:g} m to {span[1]:g} m",
            )  # fmt: skip
            good = False
        elif start > reached + near:
            reader.wrong(
                (*path, i), f"nothing is given from {reached:g} m to {start:g} m", "add a row"
            )
            good = False
        elif start < reached - near:
            reader.wrong(
                (*path, i), f"it overlaps the row before it from {start:g} m to {reached:g} m"
            )
            good = False
        reached = max(reached, end)
    if good and reached < span[1] - near:
        reader.wrong(path, f"nothing is given from {reached:g} m to {span[1]:g} m", "add a row")
        good = False
    if not good:
        return None
    edges = (span[0], *(piece[0] for piece in pieces[1:]), span[1])
    return Profile(edges, tuple(piece[2] for piece in pieces))


def _from_file(
    reader: Reader, path: Path, data: Any, spec: CoefficientSpec, span: tuple[float, float]
) -> Profile | None:
    table = check(reader, CurveTable, data, path)
    if table.file is None or table.position is None or table.value is None:
        return None
    if not isinstance(table.file, (str, File)):
        reader.wrong((*path, "file"), f"{table.file!r} is no file name")
        return None
    place = reader.place((*path, "file"))
    file = reader.folder / table.file
    try:
        columns = read_columns(file, table.position, table.value, place)
        x = _in_si(reader, path, "position_unit", table.position_unit, columns.position_unit,
                   "m", columns.position)  # fmt: skip
        y = _in_si(reader, path, "unit", table.unit, columns.unit, spec.unit, columns.value)
    except CaseError as error:
        reader.problems.append(error)
        return None
    reader.files.append(file)
    near = NEAR * (span[1] - span[0])
    order = np.argsort(x, kind="stable")
    x, y = x[order], y[order]
    if x[0] > span[0] + near or x[-1] < span[1] - near:
        reader.wrong(
            (*path, "file"), f"its rows reach from {x[0]:g} m to {x[-1]:g} m only",
            f"they must reach both ends, {span[0]:g} m and {span[1]:g} m",
        )  # fmt: skip
        return None
    return _lines(x, y, span, near)


def _in_si(
    reader: Reader, path: Path, key: str, given: str | None, header: str | None,
    si_unit: str, values: tuple[float, ...],
) -> Array:  # fmt: skip
    """A column in SI; its unit from the case or from the header."""
    unit = given or header
    if unit is None and reader.plain:
        unit = si_unit
    if unit is None:
        raise CaseError(
            f"neither the case nor the file's header states the unit ({units.dimension(si_unit)})",
            reader.place(path),
            f"add `{key}`",
        )
    scale, offset = units.factor(unit, si_unit, reader.place((*path, key)))
    if given and header and units.factor(header, si_unit, reader.place(path)) != (scale, offset):
        raise CaseError(
            f"the case says {given!r}, the file's header {header!r}", reader.place((*path, key))
        )
    return np.array(values) * scale + offset


def _lines(x: Array, y: Array, span: tuple[float, float], near: float) -> Profile:
    """Straight lines between rows; two rows at one place are a jump."""
    x = np.where(np.abs(x - span[0]) <= near, span[0], x)
    x = np.where(np.abs(x - span[1]) <= near, span[1], x)
    edges: list[float] = [span[0]]
    values: list[float | Curve] = []
    for i in range(len(x) - 1):
        start, end = max(x[i], span[0]), min(x[i + 1], span[1])
        if end <= start:
            continue
        line = Line(float(x[i]), float(y[i]), float(x[i + 1]), float(y[i + 1]))
        values.append(line if y[i] != y[i + 1] else float(y[i]))
        edges.append(float(end))
    return Profile(tuple(edges), tuple(values))


def _check_values(
    reader: Reader, path: Path, profile: Profile, spec: CoefficientSpec, given: Any
) -> None:
    """Finite everywhere inside, and of the right sign."""
    for i, value in enumerate(profile.values):
        left, right = profile.edges[i], profile.edges[i + 1]
        if callable(value):
            # a straight line is worst at its ends; elsewhere an end may be a regular one
            part = [0.0, 1.0] if isinstance(value, Line) else np.linspace(0.001, 0.999, 41)
            inner = left + (right - left) * np.asarray(part)
            sample = _sample(reader, path, value, inner)
            if sample is None:
                return
        else:
            sample = np.array([value])
        words = f"{given!r}" if not callable(given) and len(profile.values) == 1 else "a value"
        if not np.isfinite(sample).all():
            reader.wrong(path, f"{words} is not finite everywhere on the member")
        elif (spec.required or spec.positive) and sample.min() <= 0:
            reader.wrong(path, f"{words} is not positive everywhere", "it must be more than 0")
        elif not spec.signed and sample.min() < 0:
            reader.wrong(path, f"{words} is negative", "it must not be less than 0")
        elif spec.at_most is not None and sample.max() > spec.at_most:
            reader.wrong(path, f"{words} is more than {spec.at_most:g}")
        else:
            continue
        return


def _sample(reader: Reader, path: Path, curve: Callable[[Array], Any], x: Array) -> Array | None:
    """Values of a function; notes when it does not give one number per place."""
    try:
        with np.errstate(all="ignore"):
            found = np.asarray(curve(x), dtype=float)
    except Exception as error:  # a function of the user's own
        reader.wrong(path, f"the function fails with {type(error).__name__}: {error}")
        return None
    if found.shape not in ((), x.shape):
        reader.wrong(path, f"the function gives shape {found.shape} for {x.shape} places")
        return None
    return np.broadcast_to(found, x.shape)
