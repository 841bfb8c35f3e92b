"""Reading the tables of a recovery by column name, whatever unit stands in the brackets."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pandas as pd

Array = NDArray[np.float64]


def header(frame: pd.DataFrame, name: str) -> str | None:
    """Full header of the column `name`, unit included; None when the frame has none."""
    for text in map(str, frame.columns):
        if text == name or text.startswith(f"{name} ["):
            return text
    return None


def unit_of(frame: pd.DataFrame, name: str) -> str:
    """Unit in the brackets of the column `name`; empty without one."""
    text = header(frame, name) or ""
    return text[len(name) + 2 : -1] if text.endswith("]") else ""


RAISED = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")


def pretty(unit: str) -> str:
    """A unit text for people: ``kN*m^2`` as kN·m²; a plain number has none."""
    if unit in ("", "1", "dimensionless"):
        return ""
    raised = re.sub(r"(?:\^|\*\*)(-?\d+)", lambda m: m[1].translate(RAISED), unit)
    return {"degC": "°C", "degF": "°F", "ue": "µε"}.get(raised, raised.replace("*", "·"))


def pretty_header(text: str) -> str:
    """A column's header with the unit in its brackets written for people."""
    return re.sub(r"\[(.*)\]$", lambda m: f"[{pretty(m[1])}]", text)


def number(value: Any) -> float:
    """A float of anything a table may hold; nan for None, the real part of a complex number."""
    try:
        return float(np.real(value)) if value is not None else float("nan")
    except (TypeError, ValueError):
        return float("nan")


def numbers(frame: pd.DataFrame, name: str) -> Array:
    """Column `name` as floats (n,); nan where empty, all nan when the frame has none."""
    head = header(frame, name)
    if head is None:
        return np.full(len(frame), np.nan)
    column = frame[head].to_numpy()
    if column.dtype.kind == "f":
        return column.astype(float)
    return np.array([number(v) for v in column], dtype=float)


def texts(frame: pd.DataFrame, name: str) -> list[str]:
    """Column `name` as texts (n,); empty texts where there is none."""
    head = header(frame, name)
    if head is None:
        return [""] * len(frame)
    return ["" if v is None or v != v else str(v) for v in frame[head]]


def flags(frame: pd.DataFrame, name: str = "used") -> NDArray[np.bool_]:
    """Column `name` as truth values (n,); all true when the frame has none."""
    head = header(frame, name)
    if head is None:
        return np.ones(len(frame), dtype=bool)
    return np.array([bool(v) and str(v).lower() not in ("false", "no") for v in frame[head]])


def ladder_of(frame: pd.DataFrame) -> pd.DataFrame:
    """Rows of the ladder on which the choices stand: roughness 1, else the first family."""
    names = texts(frame, "family")
    if not any(names):
        return frame
    family = "roughness 1" if "roughness 1" in names else next(n for n in names if n)
    return frame[np.array([n == family for n in names])]
