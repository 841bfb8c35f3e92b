"""Wall: temperature through a plane layer with heat released inside it."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL

WALL = MemberKind(
    name="wall",
    title="Plane wall, slab or layer of soil with heat inside",
    order=2,
    geometry="line",
    coefficients=(
        CoefficientSpec("conductivity", "W/(m*K)", required=True, meaning="thermal conductivity"),
        CoefficientSpec(
            "loss", "W/(m^3*K)", to_ambient=True, meaning="per volume and kelvin above ambient"
        ),
        CoefficientSpec("heat_capacity", "J/(m^3*K)", meaning="per volume, for driven walls"),
    ),
    operator={"p": ("conductivity",), "q": ("loss",), "r": ("heat_capacity",)},
    response="temperature",
    response_unit="K",
    source_unit="W/m^3",
    total_unit="W/m^2",
    sensors=(
        SensorSpec("temperature", "response", "K"),
        SensorSpec("heat_flux", "flux", "W/m^2", directions=DIRECTION_AXIAL),
    ),
    spring_unit="W/(m^2*K)",
    drive="capacity",
    relative=True,
    positive_words=("warmer", "colder"),
    end_words=("fixed", "free", "insulated", "closed"),
    flux_name="heat flux",
    flux_unit="W/m^2",
    demo={
        "title": "Curing slab",
        "member": {
            "length": "0.8 m",
            "conductivity": "2.1 W/(m*K)",
            "left": {"transfer": "10 W/(m^2*K)", "ambient": "15 degC"},
            "right": {"value": "14 degC"},
        },
        "column": {
            "column": "T [degC]",
            "kind": "temperature",
            "unit": "degC",
            "sd": "0.2 K",
        },
        "source": {
            "unit": "W/m^3",
            "cells": 100,
            "sign": "nonnegative",
            "zone": ("core", "0.2 m", "0.6 m"),
        },
    },
    cautions=(
        "A steady state is assumed unless a frequency is given: slow warming looks like a sink.",
        "Heat in stores and embankments may announce a fire: that is for the people in charge of "
        "the site, by their own instruments.",
        *GENERAL,
    ),
)
