"""Units of answers that the case does not name: those of the user's own headers."""

import pytest

from srcfit import make_case, recover
from srcfit.unit_texts import header_unit

SPAN, SETTLED = 5.0, 0.009  # m


def test_units_of_headers_under_the_names_of_case_files():
    assert header_unit("depth [cm]", "m") == "cm"
    assert header_unit("T (F)", "K") == "degF"
    assert header_unit("w [kN]", "m") is None
    assert header_unit("x", "m") is None


def girder(folder, column):
    """Two equal spans whose middle support has settled, no load: M = 3 EI s x / l^3 (statics).

    Strains are read 1 m below the axis; deflections are those of a beam of twice the span with a
    force in its middle.
    """
    lines = ["x [cm],e [um/m],w [cm]"]
    for x in (1.0, 2.0, 3.0, 4.0, 6.0, 7.0, 8.0, 9.0):
        z = min(x, 2 * SPAN - x)
        w = SETTLED * (3 * z / SPAN - (z / SPAN) ** 3) / 2
        lines.append(f"{100 * x:g},{1e6 * 3 * SETTLED * z / SPAN**3:.4f},{100 * w:.7f}")
    (folder / "r.csv").write_text("\n".join([*lines, ""]))
    return make_case({
        "member": {"kind": "beam", "length": f"{2 * SPAN} m", "bending_stiffness": "8 MN*m^2",
                   "left": "pinned", "right": "pinned",
                   "support": [{"at": f"{SPAN} m", "kind": "pinned", "settlement": "unknown"}]},
        "readings": {"file": "r.csv", "position": {"column": "x [cm]"}, "column": [column]},
        "source": {"unit": "kN/m", "cells": 20, "smooth": False, "background": "unknown"},
    }, folder)  # fmt: skip


STRAIN = {"column": "e [um/m]", "kind": "strain", "sd": "1 um/m", "distance": "1 m"}
LEVEL = {"column": "w [cm]", "kind": "deflection", "sd": "0.1 mm", "positive": "down"}


@pytest.mark.parametrize(("column", "unit", "value"), [(STRAIN, "mm", 9.0), (LEVEL, "cm", 0.9)])
def test_a_settlement_in_the_unit_of_the_deflections_else_in_millimetres(
    tmp_path, column, unit, value
):
    found = recover(girder(tmp_path, column)).summary()
    settled = found["nuisances"][0]
    assert settled["name"] == "settlement:500 cm"  # positions as the header has them
    assert found["units"]["position"] == "cm"
    assert (settled["unit"], found["units"]["response"]) == (unit, unit)
    assert settled["value"] == pytest.approx(value, rel=1e-5)
