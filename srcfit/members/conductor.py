"""Conductor: temperature along a busbar, a cable or a fin that loses heat to its surroundings."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL, HOT_LIVE

CONDUCTOR = MemberKind(
    name="conductor",
    title="Busbar, cable or fin heated along its length",
    order=2,
    geometry="line",
    coefficients=(
        CoefficientSpec(
            "conductance", "W*m/K", required=True, meaning="conductivity times section area, k*A"
        ),
        CoefficientSpec(
            "loss", "W/(m*K)", to_ambient=True, meaning="per length and kelvin above ambient"
        ),
        CoefficientSpec("heat_capacity", "J/(m*K)", meaning="per length, for driven conductors"),
    ),
    operator={"p": ("conductance",), "q": ("loss",), "r": ("heat_capacity",)},
    response="temperature",
    response_unit="K",
    source_unit="W/m",
    total_unit="W",
    sensors=(
        SensorSpec("temperature", "response", "K"),
        SensorSpec("heat_flow", "flux", "W", directions=DIRECTION_AXIAL),
    ),
    spring_unit="W/K",
    drive="capacity",
    relative=True,
    positive_words=("warmer", "colder"),
    end_words=("fixed", "free", "insulated", "closed"),
    flux_name="heat flow",
    flux_unit="W",
    demo={
        "title": "Busbar with a doubtful joint",
        "member": {
            "length": "3 m",
            "conductance": "0.3 W*m/K",
            "loss": "2.2 W/(m*K)",
            "ambient": "24 degC",
            "left": {"value": "48 degC"},
            "right": "insulated",
        },
        "column": {
            "column": "T [degC]",
            "kind": "temperature",
            "unit": "degC",
            "sd": "0.3 K",
        },
        "source": {
            "unit": "W/m",
            "cells": 150,
            "zone": ("joint", "1.4 m", "1.8 m"),
        },
    },
    cautions=(
        HOT_LIVE,
        "The loss per kelvin is seldom known better than to tens of percent: state its "
        "uncertainty.",
        "A warm joint does not name its cause, and a cool one is not thereby sound.",
        *GENERAL,
    ),
)
