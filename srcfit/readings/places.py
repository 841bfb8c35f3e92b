"""Positions: a column of the table, or another file that gives each gauge's place."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from srcfit.case.model import PositionSpec, TableSpec
from srcfit.errors import ReadingsError
from srcfit.readings.blanks import Places
from srcfit.readings.columns import Ask, read_column
from srcfit.readings.table import Table, Wanted, title
from srcfit.readings.text import is_blank

Array = NDArray[np.float64]
Open = Callable[[Wanted], Table]


def wanted_places(position: PositionSpec, key: str) -> Wanted:
    """Columns that the table of places must have."""
    keys = {title(position.gauge or ""): f"{key}.position.gauge"} if position.file else {}
    keys[title(position.column)] = f"{key}.position.column"
    if position.unit_column is not None:
        keys[title(position.unit_column)] = f"{key}.position.unit_column"
    return Wanted(keys, {title(position.column): "m"})


def turned(x: Array, position: PositionSpec) -> Array:
    """Less the origin, turned where depths are counted negative."""
    return np.asarray((x - position.origin) * (-1.0 if position.reversed else 1.0) + 0.0)


def _column(
    table: Table, position: PositionSpec, key: str, stated: str | None
) -> tuple[Array, dict[int, str], list[int]]:
    ask = Ask(
        position.column, "m", f"{key}.position", position.unit, position.unit_column, place=True
    )
    found = read_column(table, ask, range(len(table.rows)), stated)
    reason = {i: f"its position: {text}" for i, text in found.reason.items()}
    reason |= {i: "no position" for i, c in enumerate(table.cells(position.column)) if is_blank(c)}
    if np.iscomplexobj(found.value):
        reason |= {int(i): "its position is complex" for i in np.flatnonzero(found.value.imag)}
    return turned(found.value.real.astype(float), position), reason, found.rough


def row_places(spec: TableSpec, table: Table, stated: str | None) -> Places:
    """Places that stand in the rows of the table itself."""
    x, reason, rough = _column(table, spec.position, spec.key, stated)
    return Places(reason, x, rough=tuple(rough))


def gauge_places(spec: TableSpec, table: Table, places: Table, stated: str | None) -> Places:
    """Places by gauge from the table `places`.

    The gauge of a reading is the text in the readings' own column of the same header, where there
    is one; else the header of its column.

    Raises
    ------
    ReadingsError
        A gauge has two places, or none can be read.
    """
    position = spec.position
    gauge = position.gauge or ""
    x, reason, _ = _column(places, position, spec.key, stated)
    gauges: dict[str, float] = {}
    for i, name in enumerate(places.texts(gauge)):
        if not name or i in reason or i in places.broken:
            continue
        if gauges.setdefault(name, float(x[i])) != x[i]:
            raise ReadingsError(
                f"gauge {name!r} has two different places",
                f"{places.name}, line {places.line[i]}",
                "keep one row for each gauge",
            )
    if not gauges:
        raise ReadingsError(
            "no place of any gauge can be read", places.name, f"check {spec.key}.position"
        )
    names = None
    if title(gauge) in table.blocks[0].index:
        names = table.texts(gauge)
    return Places({}, None, gauges, names, places.name)
