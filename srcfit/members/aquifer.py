"""Aquifer: head along a strip of aquifer with recharge, leakage and wells."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL

AQUIFER = MemberKind(
    name="aquifer",
    title="Strip of aquifer with recharge",
    order=2,
    geometry="line",
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
    total_unit="m^2/s",
    sensors=(
        SensorSpec("head", "response", "m", directions=("up", "down")),
        SensorSpec("flow", "flux", "m^2/s", directions=DIRECTION_AXIAL),
    ),
    spring_unit="m/s",
    drive="capacity",
    relative=True,
    positive_words=("up", "down"),
    end_words=("fixed", "free", "insulated", "closed"),
    flux_name="flow",
    flux_unit="m^2/s",
    demo={
        "title": "Recharge between a river and a divide",
        "member": {
            "length": "800 m",
            "transmissivity": "4e-3 m^2/s",
            "left": {"value": "31.5 m"},
            "right": "closed",
        },
        "column": {
            "column": "head [m]",
            "kind": "head",
            "unit": "m",
            "sd": "2 cm",
        },
        "source": {
            "unit": "mm/d",
            "cells": 160,
            "zone": ("fields", "300 m", "550 m"),
        },
    },
    cautions=(
        "Transmissivity is seldom known better than to a factor: recharge scales with it. State "
        "its uncertainty.",
        "A steady state is assumed unless a frequency is given.",
        "Work in boreholes and excavations is for qualified people under the local code.",
        *GENERAL,
    ),
)
