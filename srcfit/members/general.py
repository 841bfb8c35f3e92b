"""General members of order 2 and 4: any self-adjoint equation, in plain SI numbers."""

from dataclasses import replace

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL

# the units stand for a dimensionless response and source; a case that states its own gets them
GENERAL_2 = MemberKind(
    name="general",
    title="Any equation -(p u')' + q u - lambda r u = f, or its kin of order 4",
    order=2,
    geometry="line",
    coefficients=(
        CoefficientSpec("p", "1", required=True, meaning="number, steps or expression in x"),
        CoefficientSpec("q", "1", signed=True, meaning="0 if left out"),
        CoefficientSpec("r", "1", positive=True, meaning="weight of the modes; 1 if left out"),
    ),
    operator={"p": ("p",), "q": ("q",), "r": ("r",)},
    response="response",
    response_unit="1",
    source_unit="1",
    total_unit="m",
    sensors=(
        SensorSpec("response", "response", "1"),
        SensorSpec("slope", "slope", "1/m"),
        SensorSpec("flux", "flux", "m", directions=DIRECTION_AXIAL),
    ),
    spring_unit="m",
    positive_words=("positive", "negative"),
    end_words=("fixed", "free", "insulated", "closed", "regular"),
    flux_name="flux",
    flux_unit="m",
    demo={
        "title": "A member with a coefficient of its own",
        "member": {
            "order": 2,
            "start": 0.0,
            "end": 1.0,
            "p": "1 + x**2",
            "q": "0.5",
            "left": "fixed",
            "right": "free",
        },
        "column": {"column": "u", "kind": "response", "unit": "1", "sd": "0.001"},
        "source": {"unit": "1", "cells": 100, "zone": ("middle", "0.4 m", "0.6 m")},
    },
    cautions=(
        "The equation is yours: nothing checks that it describes your body.",
        "Loads rate no structure; hot and live parts, pressure and radioactive material are for "
        "qualified people under the local code.",
        *GENERAL,
    ),
)

GENERAL_4 = replace(
    GENERAL_2,
    title="Any equation (p2 u'')'' - (p1 u')' + p0 u - lambda r u = f",
    order=4,
    coefficients=(
        CoefficientSpec("p2", "1", required=True, meaning="number, steps or expression in x"),
        CoefficientSpec("p1", "1", signed=True, meaning="0 if left out"),
        CoefficientSpec("p0", "1", signed=True, meaning="0 if left out"),
        CoefficientSpec("r", "1", positive=True, meaning="weight of the modes; 1 if left out"),
    ),
    operator={"p2": ("p2",), "p1": ("p1",), "p0": ("p0",), "r": ("r",)},
    sensors=(
        SensorSpec("response", "response", "1"),
        SensorSpec("slope", "slope", "1/m"),
        SensorSpec("curvature", "curvature", "1/m^2"),
        SensorSpec("flux", "shear", "m", directions=DIRECTION_AXIAL),
    ),
    rotation_spring_unit="m^3",
    end_words=("pinned", "clamped", "free", "guided"),
)
