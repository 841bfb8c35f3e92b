"""Radial aquifer: head around a well."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL

RADIAL_AQUIFER = MemberKind(
    name="radial_aquifer",
    title="Aquifer around a well",
    order=2,
    geometry="cylinder",
    coefficients=(
        CoefficientSpec(
            "transmissivity", "m^2/s", required=True, meaning="conductivity times thickness"
        ),
        CoefficientSpec(
            "leakage", "1/s", to_ambient=True, meaning="inverse resistance of the leaky layer"
        ),
        CoefficientSpec("storage", "1", meaning="storativity, for driven aquifers"),
    ),
    operator={"p": ("transmissivity",), "q": ("leakage",), "r": ("storage",)},
    response="head",
    response_unit="m",
    source_unit="m/s",
    total_unit="m^3/s",
    sensors=(
        SensorSpec("head", "response", "m", directions=("up", "down")),
        SensorSpec("flow", "flux", "m^3/s", directions=DIRECTION_AXIAL),
    ),
    spring_unit="m/s",
    drive="capacity",
    relative=True,
    positive_words=("up", "down"),
    end_words=("fixed", "free", "insulated", "closed", "axis"),
    flux_name="flow",
    flux_unit="m^3/s",
    demo={
        "title": "Heads around a pumped well",
        "member": {
            "inner_radius": "0.2 m",
            "outer_radius": "150 m",
            "transmissivity": "6e-3 m^2/s",
            "left": "closed",
            "right": {"value": "24 m"},
        },
        "column": {
            "column": "head [m]",
            "kind": "head",
            "unit": "m",
            "sd": "1 cm",
        },
        "source": {
            "unit": "mm/d",
            "cells": 150,
            "zone": ("basin", "20 m", "60 m"),
        },
    },
    cautions=(
        "Transmissivity is seldom known better than to a factor: sources scale with it. State its "
        "uncertainty.",
        "Rotational symmetry around the well is assumed.",
        "Work in boreholes and excavations is for qualified people under the local code.",
        *GENERAL,
    ),
)
