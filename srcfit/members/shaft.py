"""Shaft: twist under torque along its length."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL, NOT_A_RATING

SHAFT = MemberKind(
    name="shaft",
    title="Shaft under torque along its length",
    order=2,
    geometry="line",
    coefficients=(
        CoefficientSpec(
            "torsional_stiffness",
            "N*m^2",
            required=True,
            meaning="shear modulus times constant, GJ",
        ),
        CoefficientSpec(
            "restraint", "N", meaning="torque per length and radian; none if left out"
        ),
        CoefficientSpec("inertia", "kg*m", meaning="per length, for driven shafts and modes"),
    ),
    operator={"p": ("torsional_stiffness",), "q": ("restraint",), "r": ("inertia",)},
    response="twist",
    response_unit="rad",
    source_unit="N*m/m",
    total_unit="N*m",
    sensors=(
        SensorSpec("twist", "response", "rad", directions=DIRECTION_AXIAL),
        SensorSpec("twist_rate", "slope", "rad/m"),
        SensorSpec("torque", "torque", "N*m", directions=DIRECTION_AXIAL),
    ),
    spring_unit="N*m/rad",
    positive_words=DIRECTION_AXIAL,
    end_words=("fixed", "free"),
    flux_name="torque",
    flux_unit="N*m",
    demo={
        "title": "Mixer shaft with blades",
        "member": {
            "length": "2.4 m",
            "torsional_stiffness": "60 kN*m^2",
            "left": "fixed",
            "right": "free",
        },
        "column": {
            "column": "twist [mrad]",
            "kind": "twist",
            "unit": "mrad",
            "sd": "0.05 mrad",
        },
        "source": {
            "unit": "N*m/m",
            "cells": 120,
            "zone": ("upper blades", "0.6 m", "1.2 m"),
        },
    },
    cautions=(
        NOT_A_RATING,
        "Turning machines are for qualified people: take readings only with guards in place.",
        *GENERAL,
    ),
)
