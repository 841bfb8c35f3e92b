"""The forward model against `respond`, quadrature and equilibrium."""

from itertools import pairwise

import numpy as np
import pytest

import srcfit
from srcfit.answers import ask
from srcfit.balance import balance
from srcfit.forward import along, build
from srcfit.grid import make_grid

BEAM = {
    "kind": "beam",
    "length": "12 m",
    "bending_stiffness": [["0 m", "5 m", "20 MN*m^2"], ["5 m", "12 m", "35 MN*m^2"]],
    "foundation": [["0 m", "8 m", "0.4 MN/m^2"], ["8 m", "12 m", "0 N/m^2"]],
    "left": {"kind": "clamped", "rotation": "unknown"},
    "right": {"deflection_spring": "4 MN/m"},
    "support": [
        {"at": "4 m", "kind": "pinned", "settlement": "unknown"},
        {"at": "9 m", "kind": "spring", "stiffness": "8 MN/m", "settlement": "2 mm"},
    ],
}
BUSBAR = {
    "kind": "conductor",
    "length": "2.4 m",
    "conductance": "0.385 W*m/K",
    "loss": "2.42 W/(m*K)",
    "ambient": "32 degC",
    "left": {"value": "55 degC"},
    "right": {"transfer": "0.5 W/K", "ambient": "25 degC"},
}


def case_of(tmp_path, member, columns, rows, source, **strength):
    """A case with its readings file: rows of (x, value per column)."""
    names = [c["column"] for c in columns]
    lines = [",".join(["x", *names])]
    lines += [",".join("" if v is None else repr(float(v)) for v in row) for row in rows]
    (tmp_path / "readings.csv").write_text("\n".join(lines) + "\n")
    readings = {
        "file": "readings.csv",
        "position": {"column": "x", "unit": "m"},
        "column": columns,
    }
    mapping = {
        "title": "t", "member": member, "readings": readings, "source": source,
        "strength": strength or {},
    }  # fmt: skip
    return srcfit.make_case(mapping, folder=tmp_path)


def beam_case(tmp_path):
    columns = [
        {"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.1 mm"},
        {"column": "e", "kind": "strain", "unit": "ue", "sd": "1 ue", "distance": "0.4 m",
         "gauge_length": "0.8 m", "offset": "unknown"},
        {"column": "r", "kind": "rotation", "unit": "mrad", "sd": "0.01 mrad"},
        {"column": "M", "kind": "moment", "unit": "kN*m", "sd": "1 kN*m"},
        {"column": "V", "kind": "shear", "unit": "kN", "sd": "1 kN"},
    ]  # fmt: skip
    places = [0.7, 2.0, 3.1, 5.0, 6.3, 7.9, 9.6, 11.2]
    rows = [(x, 1.0, 2.0, 0.1, 5.0, 3.0) for x in places]
    source = {
        "unit": "kN/m", "cells": 40, "zones": [{"name": "a", "from": "1.11 m", "to": "3 m"}],
        "lumped": [{"name": "p", "at": "6.6 m"}, {"name": "q", "at": "10 m", "width": "0.5 m"}],
        "known": [{"from": "2 m", "to": "6 m", "value": "3 kN/m"}, {"at": "8 m", "value": "5 kN"}],
    }  # fmt: skip
    return case_of(tmp_path, BEAM, columns, rows, source)


QUANTITY = {"deflection": "response", "strain": "curvature"}


def test_columns_are_responses_to_each_cell(tmp_path):
    """A against `respond` with unit density on one cell: the same routine used the other way."""
    case = beam_case(tmp_path)
    forward = build(case, srcfit.read(case))
    edges = forward.grid.edges
    still = forward.case.member
    for cell in (7, len(edges) - 2):
        a, b = edges[cell], edges[cell + 1]

        def one(x, a=a, b=b):
            return ((x > a) & (x < b)).astype(float)

        for i, r in list(enumerate(forward.rows))[10:30]:
            x = forward.readings.x[r]
            kind = forward.readings.kind[r]
            if kind == "strain":
                continue
            quantity = QUANTITY.get(kind, kind)
            rest = srcfit.respond(still, x, lambda x: 0 * x, quantity=quantity)
            found = srcfit.respond(still, x, one, quantity=quantity) - rest
            size = np.abs(forward.A[i]).max()
            assert found[0] == pytest.approx(forward.A[i, cell], abs=1e-10 * size)


def test_gauge_averages_match_quadrature(tmp_path):
    """A gauge's row against a fine mean of point readings."""
    case = beam_case(tmp_path)
    forward = build(case, srcfit.read(case))
    load = lambda x: 1e3 * (1 + np.sin(x))  # noqa: E731
    gauges = [i for i, r in enumerate(forward.rows) if forward.readings.kind[r] == "strain"]
    c, w = np.polynomial.legendre.leggauss(6)
    middles = forward.grid.middles
    for i in gauges:
        x = forward.readings.x[forward.rows[i]]
        inside = forward.grid.edges[np.abs(forward.grid.edges - x) < 0.4]
        steps = [e for e in (4, 5, 8, 9) if abs(e - x) < 0.4]
        stops = np.unique([x - 0.4, x + 0.4, *inside, *steps])
        total = 0.0
        for a, b in pairwise(stops):
            places = (a + b) / 2 + (b - a) / 2 * c
            values = np.array(
                srcfit.respond(case.member, places, stepped(load, forward.grid.edges),
                               quantity="curvature")
            )  # fmt: skip
            rest = srcfit.respond(case.member, places, lambda x: 0 * x, quantity="curvature")
            total += (b - a) / 2 * w @ (values - rest)
        assert forward.A[i] @ load(middles) == pytest.approx(0.4 * total / 0.8, rel=1e-8)


def stepped(load, edges):
    """A density that is constant on each cell."""
    values = load((edges[1:] + edges[:-1]) / 2)
    return lambda x: values[np.clip(np.searchsorted(edges, x) - 1, 0, len(values) - 1)]


def test_known_parts_and_nuisances(tmp_path):
    """Known parts, settlements, lumped parts and offsets against `respond`."""
    case = beam_case(tmp_path)
    forward = build(case, srcfit.read(case))
    names = [c.name for c in forward.columns]
    assert names == ["p", "q", "left.rotation", "settlement:4 m", "offset:e"]
    known = lambda x: 3e3 * ((x > 2) & (x < 6))  # noqa: E731
    for i, r in list(enumerate(forward.rows))[10:30]:
        kind, x = forward.readings.kind[r], forward.readings.x[r]
        if kind == "strain":
            assert forward.B[i, 4] == 1
            continue
        quantity = QUANTITY.get(kind, kind)
        assert forward.B[i, 4] == 0
        found = srcfit.respond(case.member, x, known, [(8.0, 5e3)], quantity=quantity)
        assert forward.known[i] == pytest.approx(found[0], rel=1e-9)
        rest = srcfit.respond(case.member, x, lambda x: 0 * x, quantity=quantity)
        lump = srcfit.respond(case.member, x, lambda x: 0 * x, [(6.6, 1.0)], quantity=quantity)
        assert forward.B[i, 0] == pytest.approx(lump[0] - rest[0], rel=1e-7, abs=1e-13)


def test_settlement_column_is_the_settled_member(tmp_path):
    """The column of an unknown settlement against the member settled by a metre."""
    case = beam_case(tmp_path)
    forward = build(case, srcfit.read(case))
    moved = {**BEAM, "support": [{**BEAM["support"][0], "settlement": "1 m"}, BEAM["support"][1]]}
    still = {**BEAM, "support": [{**BEAM["support"][0], "settlement": "0 m"}, BEAM["support"][1]]}
    x = forward.readings.x[forward.rows]
    pick = [i for i, r in enumerate(forward.rows) if forward.readings.kind[r] == "deflection"]
    zero = lambda x: 0 * x  # noqa: E731
    up = srcfit.respond(srcfit.make_member(moved), x[pick], zero)
    down = srcfit.respond(srcfit.make_member(still), x[pick], zero)
    np.testing.assert_allclose(forward.B[pick, 3], up - down, rtol=1e-9)


@pytest.mark.parametrize("which", ["beam", "busbar"])
def test_equilibrium_closes(tmp_path, which):
    """Source = reactions + loss for any source and unknowns (beam, and heat with two ambients)."""
    if which == "beam":
        case = beam_case(tmp_path)
    else:
        columns = [{"column": "T", "kind": "temperature", "unit": "degC", "sd": "0.4 K"}]
        rows = [(x, 60.0) for x in np.linspace(0.1, 2.3, 12)]
        source = {"unit": "W/m", "cells": 50, "known": [{"from": "0.3 m", "to": "1 m",
                  "value": "20 W/m"}]}  # fmt: skip
        case = case_of(tmp_path, BUSBAR, columns, rows, source)
    forward = build(case, srcfit.read(case))
    rng = np.random.default_rng(5)
    f = 1e3 * rng.normal(size=forward.A.shape[1])
    beta = np.array([c.kind == "lumped" for c in forward.columns]) * 500.0
    beta += np.array([c.kind == "nuisance" for c in forward.columns]) * 1e-3
    result = balance(forward, f, beta)
    assert result.gap < 1e-10
    assert result.loss != 0
    assert result.reactions != 0


def test_curve_along_the_member_is_the_response(tmp_path):
    """`along` at cell edges against `respond`."""
    case = beam_case(tmp_path)
    forward = build(case, srcfit.read(case))
    edges = forward.grid.edges
    load = lambda x: 1e3 * np.cos(x)  # noqa: E731
    for quantity in ("response", "moment", "shear"):
        cells, columns, known = along(forward, quantity, edges)
        assert columns.shape == (len(edges), len(forward.columns))
        found = cells @ load(forward.grid.middles) + known

        def whole(x):
            return stepped(load, edges)(x) + 3e3 * ((x > 2) & (x < 6))

        wanted = srcfit.respond(case.member, edges, whole, [(8.0, 5e3)], quantity=quantity)
        np.testing.assert_allclose(found, wanted, atol=1e-8 * np.abs(wanted).max())


def test_grid_is_cut_at_drawn_edges(tmp_path):
    """Drawn edges are cell edges, zones integrate exactly, the rest stays nearly equal."""
    case = beam_case(tmp_path)
    grid = make_grid(case)
    for edge in (1.11, 3.0, 9.75, 10.25):
        assert np.abs(grid.edges - edge).min() < 1e-12
    assert grid.widths.min() > 0.2 * 12 / 40
    forward = build(case, srcfit.read(case))
    asked = ask(forward)
    row = asked.questions.cells[asked.blocks["zones"]][0]
    assert row.sum() == pytest.approx(1.89, rel=1e-12)
    assert asked.questions.cells[0].sum() == pytest.approx(12.0, rel=1e-12)


def test_convergence_of_stepped_sources(tmp_path):
    """Cells of constant density see a smooth source to second order in the cell length."""
    columns = [{"column": "T", "kind": "temperature", "unit": "degC", "sd": "0.4 K"}]
    rows = [(x, 60.0) for x in (0.33, 1.02, 1.77)]
    shape = lambda x: 50 * np.exp(-(((x - 1) / 0.4) ** 2))  # noqa: E731
    member = srcfit.make_member(BUSBAR)
    exact = srcfit.respond(member, [0.33, 1.02, 1.77], shape)
    errors = []
    for cells in (20, 40, 80, 160):
        case = case_of(tmp_path, BUSBAR, columns, rows, {"unit": "W/m", "cells": cells})
        forward = build(case, srcfit.read(case))
        found = forward.A @ shape(forward.grid.middles) + forward.known
        errors.append(np.abs(found - exact).max())
    rates = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    assert (np.abs(rates - 2) < 0.15).all(), (errors, rates)


def test_settled_pin_of_a_turning_beam(tmp_path):
    """A beam on one pin can turn: its settled pin is still the one that is settled."""
    member = {
        "kind": "beam", "length": "12 m", "bending_stiffness": "20 MN*m^2", "left": "free",
        "right": "free", "support": [{"at": "8 m", "kind": "pinned", "settlement": "30 mm"}],
    }  # fmt: skip
    columns = [{"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.1 mm"}]
    rows = [(x, 1.0) for x in (1.0, 3.0, 8.0, 9.5, 11.0)]
    case = case_of(tmp_path, member, columns, rows, {"unit": "kN/m", "cells": 12})
    forward = build(case, srcfit.read(case))
    at = list(forward.readings.x[forward.rows]).index(8.0)
    assert forward.known[at] == pytest.approx(0.03, rel=1e-12)
