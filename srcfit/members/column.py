"""Column: concentration along a porous column with production, decay and diffusion."""

from srcfit.member import CoefficientSpec, MemberKind, SensorSpec
from srcfit.members.common import DIRECTION_AXIAL, GENERAL

COLUMN = MemberKind(
    name="column",
    title="Porous column with diffusion and decay",
    order=2,
    geometry="line",
    coefficients=(
        CoefficientSpec(
            "diffusivity", "m^2/s", required=True, meaning="effective diffusivity in the pores"
        ),
        CoefficientSpec(
            "porosity",
            "1",
            default=1.0,
            positive=True,
            at_most=1.0,
            meaning="volume of pores per bulk volume; 1 if left out",
        ),
        CoefficientSpec("decay", "1/s", meaning="decay constant; none if left out"),
    ),
    operator={
        "p": ("porosity", "diffusivity"),
        "q": ("porosity", "decay"),
        "r": ("porosity",),
    },
    response="concentration",
    response_unit="amount/m^3",
    source_unit="amount/(m^3*s)",
    total_unit="amount/(m^2*s)",
    sensors=(
        SensorSpec("concentration", "response", "amount/m^3"),
        SensorSpec("flux", "flux", "amount/(m^2*s)", directions=DIRECTION_AXIAL),
    ),
    spring_unit="m/s",
    drive="capacity",
    relative=True,
    positive_words=("more", "less"),
    end_words=("fixed", "free", "insulated", "closed"),
    flux_name="flux",
    flux_unit="amount/(m^2*s)",
    demo={
        "title": "Pore water in a lake bed",
        "member": {
            "length": "0.4 m",
            "diffusivity": "8e-10 m^2/s",
            "porosity": "0.6",
            "left": {"value": "0.2 mol/m^3"},
            "right": "closed",
        },
        "column": {
            "column": "c [mmol/L]",
            "kind": "concentration",
            "unit": "mmol/L",
            "sd": "0.05 mmol/L",
        },
        "source": {
            "unit": "nmol/(m^3*s)",
            "cells": 100,
            "zone": ("dark layer", "0.1 m", "0.18 m"),
        },
    },
    cautions=(
        "Radioactive and toxic material is for qualified people under the local code.",
        "A steady state without flow of water or mixing is assumed.",
        "The source is per bulk volume, not per volume of pore water.",
        *GENERAL,
    ),
)
