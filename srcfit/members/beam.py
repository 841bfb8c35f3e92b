"""Beam: bending under lateral load, perhaps on a foundation, stretched, compressed or shearing."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_LATERAL, GENERAL, NOT_A_RATING

BEAM = MemberKind(
    name="beam",
    title="Beam under lateral load",
    order=4,
    geometry="line",
    coefficients=(
        CoefficientSpec(
            "bending_stiffness", "N*m^2", required=True, meaning="modulus times second moment, EI"
        ),
        CoefficientSpec("foundation", "N/m^2", meaning="bedding per length; none if left out"),
        CoefficientSpec("tension", "N", signed=True, meaning="axial force; negative: compression"),
        CoefficientSpec(
            "shear_stiffness", "N", positive=True, meaning="rigid in shear if left out"
        ),
        CoefficientSpec("mass", "kg/m", meaning="mass per length, for driven beams and modes"),
    ),
    operator={
        "p2": ("bending_stiffness",),
        "p1": ("tension",),
        "p0": ("foundation",),
        "r": ("mass",),
        "shear": ("shear_stiffness",),
    },
    response="deflection",
    response_unit="m",
    source_unit="N/m",
    total_unit="N",
    sensors=(
        SensorSpec("deflection", "response", "m", directions=DIRECTION_LATERAL),
        SensorSpec("rotation", "rotation", "rad", directions=DIRECTION_LATERAL),
        SensorSpec("curvature", "curvature", "1/m"),
        SensorSpec("strain", "curvature", "1", needs_distance=True),
        SensorSpec("moment", "moment", "N*m"),
        SensorSpec("shear", "shear", "N", directions=DIRECTION_LATERAL),
        SensorSpec("reaction", "reaction", "N", directions=DIRECTION_LATERAL),
    ),
    spring_unit="N/m",
    rotation_spring_unit="N*m/rad",
    positive_words=DIRECTION_LATERAL,
    end_words=("pinned", "clamped", "free", "guided"),
    flux_name="shear force",
    flux_unit="N",
    demo={
        "title": "Floor beam under stored goods",
        "member": {
            "length": "9 m",
            "bending_stiffness": "85 MN*m^2",
            "left": "pinned",
            "right": "pinned",
        },
        "column": {
            "column": "deflection [mm]",
            "kind": "deflection",
            "unit": "mm",
            "sd": "0.1 mm",
            "positive": "down",
        },
        "source": {
            "unit": "kN/m",
            "cells": 180,
            "sign": "nonnegative",
            "zone": ("aisle", "3 m", "6 m"),
        },
    },
    cautions=(
        NOT_A_RATING,
        "A zero reading must be stated: what stood on the beam when the gauges were zeroed is not "
        "part of the answer.",
        "Heat, settlement and creep deflect beams too: the estimate takes all of it for load.",
        *GENERAL,
    ),
)
