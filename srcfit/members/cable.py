"""Cable: small deflection of a stretched string or cable under lateral load."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_LATERAL, GENERAL, NOT_A_RATING

CABLE = MemberKind(
    name="cable",
    title="Stretched cable or string under lateral load",
    order=2,
    geometry="line",
    coefficients=(
        CoefficientSpec(
            "tension", "N", required=True, meaning="tension, taken as constant in time"
        ),
        CoefficientSpec(
            "foundation", "N/m^2", meaning="lateral bedding per length; none if left out"
        ),
        CoefficientSpec("mass", "kg/m", meaning="mass per length, for driven cables and modes"),
    ),
    operator={"p": ("tension",), "q": ("foundation",), "r": ("mass",)},
    response="deflection",
    response_unit="m",
    source_unit="N/m",
    total_unit="N",
    sensors=(
        SensorSpec("deflection", "response", "m", directions=DIRECTION_LATERAL),
        SensorSpec("rotation", "slope", "rad", directions=DIRECTION_LATERAL),
        SensorSpec("force", "force", "N", directions=DIRECTION_LATERAL),
    ),
    spring_unit="N/m",
    positive_words=DIRECTION_LATERAL,
    end_words=("fixed", "free"),
    flux_name="transverse force",
    flux_unit="N",
    demo={
        "title": "Messenger wire under ice",
        "member": {
            "length": "60 m",
            "tension": "24 kN",
            "left": "fixed",
            "right": "fixed",
        },
        "column": {
            "column": "sag [mm]",
            "kind": "deflection",
            "unit": "mm",
            "sd": "4 mm",
            "positive": "down",
        },
        "source": {
            "unit": "N/m",
            "cells": 120,
            "sign": "nonnegative",
            "zone": ("river", "20 m", "35 m"),
        },
    },
    cautions=(
        NOT_A_RATING,
        "Small deflections are assumed: the added load must not change the tension noticeably.",
        "Stressed cables store energy and may be near live lines: readings are for qualified "
        "people.",
        *GENERAL,
    ),
)
