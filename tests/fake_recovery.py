"""Hand-made recoveries with invented numbers, for the tests of the figures and the page."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from srcfit.case.model import (
    Case,
    ColumnSpec,
    Lumped,
    PositionSpec,
    SourceSpec,
    StrengthSpec,
    TableSpec,
    Zone,
)
from srcfit.member import (
    RIGID,
    CoefficientSpec,
    End,
    Hinge,
    Interface,
    Member,
    MemberKind,
    Profile,
    Restraint,
    SensorSpec,
    Support,
)  # fmt: skip
from srcfit.recovery import Pictures, Recovery

CRITERIA = ("evidence", "gcv", "robust-gcv", "leave-one-out", "l-curve", "k-fold", "discrepancy",
            "risk")  # fmt: skip
HOSTILE = "<script>alert('x')</script> \"quoted\" & $a_b$ \u202eright\u202c </style><img src=x>"

BEAM = MemberKind(
    name="beam", title="Beam", order=4, geometry="line",
    coefficients=(CoefficientSpec("bending_stiffness", "N*m^2", required=True),
                  CoefficientSpec("foundation", "N/m^2")),
    operator={"p2": ("bending_stiffness",), "p0": ("foundation",)},
    response="deflection", response_unit="m", source_unit="N/m", total_unit="N",
    sensors=(SensorSpec("deflection", "response", "m"), SensorSpec("rotation", "rotation", "rad"),
             SensorSpec("strain", "curvature", "1", needs_distance=True)),
    spring_unit="N/m", rotation_spring_unit="N*m",
    cautions=("A load estimate rates no structure.",),
)  # fmt: skip
CONDUCTOR = MemberKind(
    name="conductor", title="Conductor", order=2, geometry="line",
    coefficients=(CoefficientSpec("conductance", "W*m/K", required=True),),
    operator={"p": ("conductance",), "q": ("loss",)},
    response="temperature", response_unit="K", source_unit="W/m", total_unit="W",
    sensors=(SensorSpec("temperature", "response", "K"),), spring_unit="W/K", relative=True,
    positive_words=("right", "left"), cautions=("Hot and live parts are for qualified people.",),
)  # fmt: skip
CYLINDER = replace(
    CONDUCTOR, name="cylinder", title="Hollow cylinder", geometry="cylinder",
    source_unit="W/m^3", total_unit="W/m",
)  # fmt: skip


def profile(*steps: float, start: float = 0.0, end: float = 30.0) -> Profile:
    edges = np.linspace(start, end, len(steps) + 1)
    return Profile(tuple(float(e) for e in edges), tuple(steps))


MEMBERS = {
    "beam": Member(
        kind=BEAM, start=0.0, end=30.0,
        profiles={"p2": profile(7.68e8, 3.0e8, 7.68e8), "p0": profile(12e6, 0.0)},
        left=End("free"), right=End("clamped", Restraint(RIGID), Restraint(RIGID)),
        supports=(Support(18.0, "pinned", Restraint(RIGID)),
                  Support(24.0, "spring", Restraint(4e6))),
        hinges=(Hinge(21.0),),
    ),
    "conductor": Member(
        kind=CONDUCTOR, start=0.0, end=2.4,
        profiles={"p": profile(385.0, end=2.4), "q": profile(2.42, end=2.4)},
        left=End("value", Restraint(RIGID, 328.15)), right=End("transfer", Restraint(12.0, 300.0)),
        interfaces=(Interface(1.2, 0.01),), ambient=305.15,
    ),
    "cylinder": Member(
        kind=CYLINDER, start=0.02, end=0.1,
        profiles={"p": profile(16.0, start=0.02, end=0.1)},
        left=End("insulated"), right=End("transfer", Restraint(50.0, 300.0)), ambient=300.0,
    ),
}  # fmt: skip

UNITS = {
    # position, metres per unit, source, total, {sensor kind: (unit, unit per SI, zero)}
    "beam": ("m", 1.0, "kN/m", "kN", {"deflection": ("mm", 1e3, 0.0), "strain": ("ue", 1e6, 0)}),
    "conductor": ("mm", 1e-3, "W/m", "W", {"temperature": ("degC", 1.0, -273.15)}),
    "cylinder": ("mm", 1e-3, "MW/m^3", "W/m", {"temperature": ("degC", 1.0, -273.15)}),
}


def number(value: float | None, sd: float | None) -> dict[str, float | None]:
    if value is None or sd is None:
        return {"value": value, "sd": sd, "lower": None, "upper": None}
    return {"value": value, "sd": sd, "lower": value - 1.96 * sd, "upper": value + 1.96 * sd}


def make(
    kind: str = "beam", n: int = 16, m: int = 60, *, hostile: bool = False, bare: bool = False,
    rungs: int = 40,
) -> Recovery:  # fmt: skip
    """A recovery of `n` readings per sensor kind on `m` cells; `bare`: nothing determined."""
    rng = np.random.default_rng(11)
    member, (P, per, U, T, sensors) = MEMBERS[kind], UNITS[kind]
    title = HOSTILE if hostile else f"Invented {kind} under an invented load"
    zone_names = [HOSTILE, "bay 2"] if hostile else ["bay 1", "bay 2"]
    s, e = member.start / per, member.end / per
    span = e - s
    edges = np.linspace(s, e, m + 1)
    x = (edges[1:] + edges[:-1]) / 2
    t = (x - s) / span
    estimate = 60 * ((t > 0.2) & (t < 0.4)) + 95 * ((t > 0.57) & (t < 0.7)) + 3 * np.sin(9 * t)
    sd = 6 + 8 * np.abs(np.sin(7 * t))
    source = pd.DataFrame({
        f"x [{P}]": x, f"estimate [{U}]": estimate, f"sd [{U}]": sd,
        f"lower [{U}]": estimate - 1.96 * sd, f"upper [{U}]": estimate + 1.96 * sd,
        "data_share": np.clip(1 - sd / 20, 0, 1), f"from [{P}]": edges[:-1],
        f"to [{P}]": edges[1:],
    })  # fmt: skip
    if bare:
        source[[f"sd [{U}]", f"lower [{U}]", f"upper [{U}]"]] = None
    bounds = [(s + 0.2 * span, s + 0.4 * span), (s + 0.57 * span, s + 0.7 * span)]
    zones = [
        {"name": name, "from": a, "to": b, "data_share": share, **number(v, w)}
        for name, (a, b), v, w, share in zip(
            zone_names,
            bounds,
            (352.0, None if bare else 366.2),
            (25.9, 42.4),
            (0.97, 0.41),
            strict=True,
        )
    ]
    readings = _readings(sensors, P, s, span, n, rng, hostile=hostile)
    strengths = np.geomspace(1e-6, 1e4, 200)
    ladder = _ladder(strengths)
    pictures = _pictures(member, sensors, readings, estimate, rungs, m)
    facts = _facts(title, (P, U, T), zones, readings, zone_names, bare=bare)
    case = _case(member, title, sensors, (P, per, U, T), zones)
    zone_table = pd.DataFrame([
        {"name": z["name"], f"from [{P}]": z["from"], f"to [{P}]": z["to"],
         f"value [{T}]": z["value"], f"sd [{T}]": z["sd"], f"lower [{T}]": z["lower"],
         f"upper [{T}]": z["upper"], f"mean [{U}]": 60.0, "data_share": z["data_share"]}
        for z in zones
    ])  # fmt: skip
    section = _section(kind, P, e, span, bare=bare)
    return Recovery(case, source, zone_table, readings, ladder, pictures, facts, section)


def _section(kind: str, P: str, end: float, span: float, *, bare: bool) -> pd.DataFrame:
    """Moment and shear of the beam (both sides of its pinned support), else the heat flow."""
    x = end - span * (1 - np.linspace(0, 1, 61))
    names = {"heat_flow": "W"}
    if kind == "beam":
        names = {"moment": "kN*m", "shear": "kN"}
        x = np.sort(np.append(x, 18.0))
    t = (x - end + span) / span
    columns: dict[str, Any] = {f"x [{P}]": x}
    for k, (name, unit) in enumerate(names.items()):
        value = 120 * np.sin((5 - 2 * k) * t)
        if name == "shear":
            value = value + 80 * (np.arange(len(x)) > np.flatnonzero(x == 18.0)[0])
        sd = 4 + 3 * t
        if bare:
            value, sd = np.full((2, len(x)), np.nan)
        columns |= {
            f"{name} [{unit}]": value, f"{name}_sd [{unit}]": sd,
            f"{name}_lower [{unit}]": value - 1.96 * sd,
            f"{name}_upper [{unit}]": value + 1.96 * sd,
        }  # fmt: skip
    return pd.DataFrame(columns)


def _readings(
    sensors: dict[str, Any], P: str, s: float, span: float, n: int, rng: np.random.Generator,
    *, hostile: bool,
) -> pd.DataFrame:  # fmt: skip
    rows = []
    for kind, (unit, _, _) in sensors.items():
        place = s + span * (np.arange(n) + 0.5) / n
        predicted = 4 * np.sin(3 * (place - s) / span) + (60 if unit == "degC" else 0)
        noise = rng.normal(0, 0.1, n)
        for i in range(n):
            used = i != 3
            rows.append({
                "file": HOSTILE if hostile else "invented.csv", "line": i + 2,
                "group": HOSTILE if hostile else f"{kind} line", "kind": kind, "unit": unit,
                f"x [{P}]": place[i], "value": predicted[i] + noise[i], "sd": 0.1, "used": used,
                "reason": "" if used else "below detection",
                "predicted": predicted[i] if used else None,
                "residual": noise[i] if used else None,
                "standardised": noise[i] / 0.1 if used else None,
                "leave_one_out": 1.2 * noise[i] if used else None,
            })  # fmt: skip
    return pd.DataFrame(rows)


def _ladder(strengths: np.ndarray) -> pd.DataFrame:
    log = np.log10(strengths)
    frame = pd.DataFrame({
        "family": "roughness 1", "strength [m^2/kN^2]": strengths,
        "residual_norm": np.sqrt(9 + 10 ** (log + 1)), "roughness_norm": 10 ** (2 - 0.3 * log),
        "effective_dof": 16 / (1 + 10 ** (log / 4)),
    })  # fmt: skip
    for k, name in enumerate(CRITERIA):
        frame[name] = (log + 2 - 0.2 * k) ** 2
    frame["weight"] = np.exp(-((log + 2) ** 2))
    other = frame.iloc[::50].assign(family="matern 0.1", roughness_norm=np.nan)
    return pd.concat([frame, other], ignore_index=True)


def _pictures(
    member: Member, sensors: dict[str, Any], readings: pd.DataFrame, estimate: np.ndarray,
    rungs: int, m: int,
) -> Pictures:  # fmt: skip
    g = np.linspace(member.start, member.end, min(m, 240) + 1)
    z = (g - g[0]) / (g[-1] - g[0])
    fit = {
        k: (4 * np.sin(3 * z) + (60 if unit == "degC" else 0) - zero) / scale
        for k, (unit, scale, zero) in sensors.items()
    }
    used = np.flatnonzero(readings["used"].to_numpy())
    predicted = readings["predicted"].to_numpy(float)[used]
    place = (np.arange(len(used)) + 0.5) / len(used)
    influence = 1e-6 * np.exp(-np.abs(z[None, :] - place[:, None]) / 0.1)
    k = np.arange(1, 5)
    rough = 1 - np.linspace(0, 1, rungs)
    return Pictures(
        x=g,
        fit=fit,
        influence=influence,
        influence_of=tuple(int(i) for i in used),
        modes=np.sin(np.pi * k * z[:, None]),
        eigenvalues=(np.pi * k) ** 4.0,
        strengths=np.geomspace(1e-6, 1e4, rungs),
        rungs=rough[:, None] * estimate[None, :] + 40 * (1 - rough[:, None]),
        totals=np.linspace(930, 880, rungs),
        fits=predicted[None, :] + np.linspace(0, 1, rungs)[:, None],
    )


def _facts(
    title: str, units: tuple[str, str, str], zones: list[dict[str, Any]], readings: pd.DataFrame,
    names: list[str], *, bare: bool,
) -> dict[str, Any]:  # fmt: skip
    P, U, T = units
    total = number(None, None) if bare else number(918.4, 9.21)
    row = readings.iloc[3]
    return {
        "schema": 1, "version": "0.1.0", "title": title,
        "units": {"position": P, "source": U, "total": T, "response": readings["unit"].iloc[0],
                  "strength": "m^2/kN^2"},
        "strength": {"solver": "tikhonov", "choose": "averaged", "value": None,
                     "effective_dof": 8.1, "choices": dict(zip(CRITERIA, np.geomspace(2e-3, 4, 8),
                                                               strict=True)) | {"risk": None}},
        "noise": {"stated": not bare, "scale": 1.04, "groups": [
            {"group": str(row["group"]), "kind": "deflection", "sd": 0.1, "unit": "mm",
             "estimated": bare}]},
        "fit": {"read": len(readings), "used": int(readings["used"].sum()), "chi_square": 8.7,
                "dof": 7.9},
        "total": total, "zones": zones, "background": number(12.0, 2.0),
        "peak": None if bare else {"value": 97.9, "lower": 70.1, "upper": 125.0,
                                   "position": zones[1]["from"],
                                   "position_lower": zones[1]["from"],
                                   "position_upper": zones[1]["to"]},
        "lumped": [{"name": names[0], "at": zones[1]["to"], **number(181.0, 13.5)}],
        "nuisances": [{"name": "offset:levelling", "unit": "mm", **number(0.35, 0.02)}],
        "reactions": [{"name": "support 1", "at": zones[0]["to"], "kind": "force", "unit": "kN",
                       **number(59.7, 2.1)}],
        "limit": None if bare else {"zone": names[0], "at_most": f"70 {U}", "estimate": 58.7,
                                    "probability": 0.994, "verdict": "kept"},
        "detection": [{"name": names[0], "critical": 20.0, "limit": 40.0, "detected": True}],
        "findings": [
            {"code": "prior-led", "level": "caution",
             "sentence": f"The answer in {names[1]} comes mainly from the prior; add sensors."},
            {"code": "outliers", "level": "note", "sentence": "One reading was down-weighted."},
        ] + ([{"code": "singular", "level": "serious",
               "sentence": f"Total and offset cannot be told apart in {names[0]}."}]
             if bare else []),
        "excluded": [{"file": str(row["file"]), "line": int(row["line"]),
                      "reason": "below detection"}],
        "inputs": [{"file": str(row["file"]), "sha256": "5f" * 32}],
        "level": 0.95, "seed": 0, "cautions": ["A load estimate rates no structure."],
    }  # fmt: skip


def _case(
    member: Member, title: str, sensors: dict[str, Any], units: tuple[str, float, str, str],
    zones: list[dict[str, Any]],
) -> Case:  # fmt: skip
    P, per, U, T = units
    columns = tuple(
        ColumnSpec((k[0],), k, f"{k} line", unit=u, sd=0.1, positive="up", sign=-1)
        for k, (u, _, _) in sensors.items()
    )
    table = TableSpec(Path("invented.csv"), PositionSpec("x", P), columns)
    asked = SourceSpec(
        unit=U, total_unit=T, position_unit=P, cells=60,
        zones=tuple(Zone(z["name"], z["from"] * per, z["to"] * per) for z in zones),
        lumped=(Lumped(zones[0]["name"], zones[1]["to"] * per),),
    )  # fmt: skip
    text = {"kind": member.kind.name, "length": "30 m", "left": title}
    return Case(title, Path(), Path("case.toml"), member, text, (table,), asked, StrengthSpec())
