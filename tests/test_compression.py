"""Beams under compression: right below the critical load, refused at and above it.

Euler's four cases: common practice; 4.4934... is the first root of tan z = z.
"""

import numpy as np
import pytest
from test_forward import case_of

import srcfit
from srcfit.errors import MemberError
from srcfit.forward import build

EI, L = 2.5e6, 3.0
EULER = {
    ("pinned", "pinned"): 1.0,
    ("clamped", "free"): 0.25,
    ("clamped", "clamped"): 4.0,
    ("clamped", "pinned"): (4.493409457909064 / np.pi) ** 2,
}


def column(left, right, compression, **more):
    return srcfit.make_member({
        "kind": "beam", "length": f"{L!r} m", "bending_stiffness": f"{EI!r} N*m^2",
        "left": left, "right": right, "tension": f"{float(-compression)!r} N", **more,
    })  # fmt: skip


@pytest.mark.parametrize("ends", EULER)
def test_refused_at_the_critical_load_and_named(ends):
    critical = EULER[ends] * np.pi**2 * EI / L**2
    for part in (1 - 1e-12, 1.0, 1 + 1e-7, 1.5, 9.0):
        with pytest.raises(MemberError, match=f"critical compression is {critical / 1e3:.6g} kN"):
            srcfit.kernel(column(*ends, critical * part), [1.0], [1.0])
        with pytest.raises(MemberError, match="buckles"):
            srcfit.respond(column(*ends, critical * part), [1.0], lambda x: 0 * x)


@pytest.mark.parametrize("ends", EULER)
def test_below_it_the_load_softens_the_beam(ends):
    """The flexibility grows as 1/(1 - P/Pcr), up to the shares of higher modes."""
    critical = EULER[ends] * np.pi**2 * EI / L**2
    x = [L if ends[1] == "free" else 0.5 * L]
    rest = srcfit.kernel(column(*ends, 0.0), x, x)[0, 0]
    gains = [srcfit.kernel(column(*ends, critical * p), x, x)[0, 0] / rest for p in (0.5, 0.99)]
    assert gains[0] == pytest.approx(2.0, rel=0.2)
    assert gains[1] == pytest.approx(100.0, rel=0.3)
    close = srcfit.kernel(column(*ends, critical * (1 - 1e-6)), x, x)[0, 0]
    closer = srcfit.kernel(column(*ends, critical * (1 - 1e-7)), x, x)[0, 0]
    assert closer / close == pytest.approx(10, rel=1e-3)


def test_beam_column_with_even_load():
    # Timoshenko & Gere, Theory of Elastic Stability (1961), art. 1.7: pinned, even load
    q, part = 4e3, 0.37
    P = part * np.pi**2 * EI / L**2
    u = L / 2 * np.sqrt(P / EI)
    middle = 5 * q * L**4 / (384 * EI) * 12 * (2 / np.cos(u) - 2 - u**2) / (5 * u**4)
    found = srcfit.respond(column("pinned", "pinned", P), [L / 2], lambda x: q + 0 * x)
    assert found[0] == pytest.approx(middle, rel=1e-11)


def test_what_nothing_resists():
    with pytest.raises(MemberError, match="under any compression"):
        srcfit.kernel(column("pinned", "free", 1.0), [1.0], [1.0])
    # a foundation holds it again
    held = column("free", "free", 1.0, foundation="1 MN/m^2")
    assert np.isfinite(srcfit.kernel(held, [1.0], [1.0])).all()
    # sliding sideways is no buckling: a singular member all the same
    free = srcfit.kernel(column("guided", "guided", 1e5), [1.0], [0.3, 1.0, 2.0])
    assert np.isfinite(free).all()
    with pytest.raises(MemberError, match="critical compression is"):
        srcfit.kernel(column("guided", "guided", np.pi**2 * EI / L**2), [1.0], [0.3])


def test_stepped_compression_and_mass_do_not_hide_it():
    table = [["0 m", "1 m", "-2 MN"], ["1 m", "3 m", "-3.5 MN"]]
    member = srcfit.make_member({
        "kind": "beam", "length": "3 m", "bending_stiffness": "2.5 MN*m^2", "left": "pinned",
        "right": "pinned", "tension": table, "mass": "50 kg/m", "frequency": "3 Hz",
    })  # fmt: skip
    with pytest.raises(MemberError, match="compression of 3500 kN: the critical"):
        srcfit.kernel(member, [1.0], [1.0])


def test_recover_says_so_too(tmp_path):
    member = {
        "kind": "beam", "length": "3 m", "bending_stiffness": "2.5 MN*m^2", "left": "pinned",
        "right": "pinned", "tension": "-3 MN",
    }  # fmt: skip
    columns = [{"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.1 mm"}]
    rows = [(x, 1.0) for x in (0.5, 1.0, 1.5, 2.0, 2.5)]
    case = case_of(tmp_path, member, columns, rows, {"unit": "kN/m", "cells": 20})
    with pytest.raises(MemberError, match="critical compression is"):
        srcfit.recover(case)
    fine = case_of(tmp_path, {**member, "tension": "-2 MN"}, columns, rows,
                   {"unit": "kN/m", "cells": 20})  # fmt: skip
    assert np.isfinite(build(fine, srcfit.read(fine)).A).all()


def test_general_members_may_be_indefinite():
    member = srcfit.make_member({
        "kind": "general", "order": 4, "start": 0.0, "end": 1.0, "p2": 1.0, "p1": -20.0,
        "left": "pinned", "right": "pinned",
    })  # fmt: skip
    x = np.array([0.3])
    n = np.arange(1, 4000) * np.pi
    series = (2 * np.sin(n * x) * np.sin(n * 0.6) / (n**4 - 20 * n**2)).sum()
    assert srcfit.kernel(member, x, [0.6])[0, 0] == pytest.approx(series, rel=1e-8)
