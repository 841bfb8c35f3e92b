"""Sphere: radial temperature in a solid or hollow sphere."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL, HOT_LIVE

SPHERE = MemberKind(
    name="sphere",
    title="Sphere, solid or hollow, heated inside",
    order=2,
    geometry="sphere",
    coefficients=(
        CoefficientSpec("conductivity", "W/(m*K)", required=True, meaning="thermal conductivity"),
        CoefficientSpec(
            "loss", "W/(m^3*K)", to_ambient=True, meaning="per volume and kelvin above ambient"
        ),
        CoefficientSpec("heat_capacity", "J/(m^3*K)", meaning="per volume, for driven spheres"),
    ),
    operator={"p": ("conductivity",), "q": ("loss",), "r": ("heat_capacity",)},
    response="temperature",
    response_unit="K",
    source_unit="W/m^3",
    total_unit="W",
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
        "title": "Shell around a small source",
        "member": {
            "inner_radius": "0.05 m",
            "outer_radius": "0.4 m",
            "conductivity": "1.2 W/(m*K)",
            "left": "insulated",
            "right": {"value": "18 degC"},
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
            "zone": ("core", "0.05 m", "0.15 m"),
        },
    },
    cautions=(
        HOT_LIVE,
        "Vessels may be under pressure and contents radioactive: both are for qualified people "
        "under the local code.",
        "Spherical symmetry is assumed.",
        *GENERAL,
    ),
)
