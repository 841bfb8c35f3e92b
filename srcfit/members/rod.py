"""Rod: axial displacement under load along its axis, perhaps bedded along its shaft."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL, NOT_A_RATING

ROD = MemberKind(
    name="rod",
    title="Rod or pile under axial load",
    order=2,
    geometry="line",
    coefficients=(
        CoefficientSpec(
            "axial_stiffness", "N", required=True, meaning="modulus times section area, EA"
        ),
        CoefficientSpec(
            "foundation",
            "N/m^2",
            meaning="shaft force per length and displacement; none if left out",
        ),
        CoefficientSpec("mass", "kg/m", meaning="mass per length, for driven rods and modes"),
    ),
    operator={"p": ("axial_stiffness",), "q": ("foundation",), "r": ("mass",)},
    response="displacement",
    response_unit="m",
    source_unit="N/m",
    total_unit="N",
    sensors=(
        SensorSpec("displacement", "response", "m", directions=DIRECTION_AXIAL),
        SensorSpec("strain", "slope", "1"),
        SensorSpec("force", "force", "N", directions=DIRECTION_AXIAL),
    ),
    spring_unit="N/m",
    positive_words=DIRECTION_AXIAL,
    end_words=("fixed", "free"),
    flux_name="force",
    flux_unit="N",
    demo={
        "title": "Anchor rod with fibre strain readings",
        "member": {
            "length": "12 m",
            "axial_stiffness": "160 MN",
            "foundation": "15 MN/m^2",
            "left": "free",
            "right": "fixed",
        },
        "column": {
            "column": "strain [ue]",
            "kind": "strain",
            "unit": "ue",
            "sd": "3 ue",
        },
        "source": {"unit": "kN/m", "cells": 120, "zone": ("loose layer", "3 m", "5 m")},
    },
    cautions=(
        NOT_A_RATING,
        "Shaft and ground stiffness are seldom known better than to tens of percent: state their "
        "uncertainty.",
        "Work beside excavations and on stressed anchors is for qualified people.",
        *GENERAL,
    ),
)
