"""Two invented campaigns, for the tests of a comparison's page and figures."""

from __future__ import annotations

import csv
from pathlib import Path
from tempfile import TemporaryDirectory

import fake_recovery as fake

import srcfit

ZONES = (("front", "0 m", "3 m"), ("stack", "3 m", "6 m"))


def case(folder, title, values, *, group="level", zones=ZONES, lumped=(), every=1, **column):
    """A pinned beam of 9 m, its deflections [mm] at 1, 2, ... m."""
    file = f"{round(1e3 * sum(values))}.csv"
    rows = [(x, f"{w:.3f}") for x, w in enumerate(values, 1)][::every]
    with (Path(folder) / file).open("w", newline="", encoding="utf-8") as out:
        csv.writer(out).writerows([("x [m]", "w [mm]"), *rows])
    return srcfit.make_case({
        "title": title,
        "member": {"kind": "beam", "length": "9 m", "bending_stiffness": "85 MN*m^2",
                   "left": "pinned", "right": "pinned"},
        "readings": {"file": file, "position": {"column": "x [m]", "unit": "m"},
                     "column": [{"column": "w [mm]", "kind": "deflection", "sd": "0.02 mm",
                                 "group": group, **column}]},
        "source": {"unit": "kN/m", "cells": 36, "total_unit": "kN",
                   "zones": [{"name": n, "from": a, "to": b} for n, a, b in zones],
                   "lumped": list(lumped)},
    }, folder)  # fmt: skip


def sags(load):
    """Deflections [mm] at 1 ... 8 m of a load on 3 to 6 m beside 4 kN/m everywhere [N/m]."""
    member = srcfit.make_member({
        "kind": "beam", "length": "9 m", "bending_stiffness": "85 MN*m^2", "left": "pinned",
        "right": "pinned",
    })  # fmt: skip
    w = srcfit.respond(member, range(1, 9), lambda x: 4e3 + load * ((x > 3) & (x < 6)))
    noise = [0.01, -0.02, 0.005, 0.015, -0.01, 0.0, 0.02, -0.015]
    return 1e3 * w + noise if load else 1e3 * w - noise


def compared(load=40e3, **options):
    """A comparison; options of `case` go to both campaigns, `by` to the comparison."""
    by = options.pop("by", None)
    with TemporaryDirectory() as folder:
        a, b = (case(folder, t, sags(v), **options) for t, v in (("empty", 0.0), ("full", load)))
        return srcfit.compare(a, b, by=by)


def hostile():
    """Every name of both campaigns is hostile."""
    bad = fake.HOSTILE
    with TemporaryDirectory() as folder:
        given = {"group": bad, "zones": [(bad, "3 m", "6 m"), (f"{bad} 2", "0 m", "2 m")],
                 "lumped": [{"name": f"{bad} 3", "at": "7 m"}], "offset": "unknown"}  # fmt: skip
        a, b = (case(folder, bad, sags(v), **given) for v in (0.0, 40e3))
        return srcfit.compare(a, b, common=[f"offset:{bad}"])
