"""Cylinder: radial temperature in a long solid or hollow cylinder."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL, HOT_LIVE

CYLINDER = MemberKind(
    name="cylinder",
    title="Long cylinder, solid or hollow, heated inside",
    order=2,
    geometry="cylinder",
    coefficients=(
        CoefficientSpec("conductivity", "W/(m*K)", required=True, meaning="thermal conductivity"),
        CoefficientSpec(
            "loss", "W/(m^3*K)", to_ambient=True, meaning="per volume and kelvin above ambient"
        ),
        CoefficientSpec("heat_capacity", "J/(m^3*K)", meaning="per volume, for driven cylinders"),
    ),
    operator={"p": ("conductivity",), "q": ("loss",), "r": ("heat_capacity",)},
    response="temperature",
    response_unit="K",
    source_unit="W/m^3",
    total_unit="W/m",
    sensors=(
        SensorSpec("temperature", "response", "K"),
        SensorSpec("heat_flux", "flux", "W/m^2", directions=DIRECTION_AXIAL),
    ),
    spring_unit="W/(m^2*K)",
    drive="capacity",
    relative=True,
    positive_words=("warmer", "colder"),
    end_words=("fixed", "free", "insulated", "closed", "axis"),
    flux_name="heat flux",
    flux_unit="W/m^2",
    demo={
        "title": "Cable drum core, temperature over the radius",
        "member": {
            "inner_radius": "0 m",
            "outer_radius": "0.25 m",
            "conductivity": "0.6 W/(m*K)",
            "right": {"value": "21 degC"},
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
            "zone": ("inner half", "0 m", "0.125 m"),
        },
    },
    cautions=(
        HOT_LIVE,
        "Vessels and pipes may be under pressure: opening or drilling them is for qualified "
        "people.",
        "Rotational symmetry and no flow of heat along the axis are assumed.",
        *GENERAL,
    ),
)
