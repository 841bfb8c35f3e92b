"""Figures: what is drawn where, the same bytes twice, and texts that say the same in words."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from dataclasses import replace
from decimal import Decimal

import fake_recovery as fake
import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.colors import to_hex
from matplotlib.figure import Figure

from srcfit import axes, plots
from srcfit.axes import name_rows
from srcfit.captions import DESCRIPTIONS
from srcfit.drawing import BLUE, draw_member, plain
from srcfit.frames import header, ladder_of, numbers, pretty, unit_of
from srcfit.member import RIGID, End, Member, Restraint, Unknown
from srcfit.report.data import chart_data
from srcfit.rounding import brief, interval, minus, plus_minus, round_pair

KINDS = ("beam", "conductor", "cylinder")


@pytest.fixture(scope="module")
def beam():
    return fake.make("beam")


@pytest.fixture(scope="module")
def drawn(beam):
    return plots.draw_all(beam)


def axes_of(recovery, name):
    with plots.quiet():
        return plots.FIGURES[name](recovery).axes


# Rounding


@pytest.mark.parametrize(
    ("value", "sd", "expected"),
    [
        (100.02147, 0.00035, ("100.02147", "0.00035")),  # the example mass of JCGM 100, 7.2.2
        (918.4, 9.21, ("918.4", "9.2")),
        (918.4, 99.6, ("920", "100")),
        (123456.0, 4567.0, ("123500", "4600")),
        (-0.004, 0.12, ("0.00", "0.12")),
        (1.54e-9, 4.5e-11, ("1.540e-9", "0.045e-9")),
        (7.68e8, 2e6, ("7.680e8", "0.020e8")),
        (5.0, 0.0, ("5", "0")),
        (3.14159265, None, ("3.142", "")),
        (None, None, ("", "")),
        (float("nan"), 1.0, ("", "")),
    ],
)
def test_round_pair(value, sd, expected):
    assert round_pair(value, sd) == expected


@given(
    st.floats(-1e12, 1e12).filter(lambda v: v == 0 or abs(v) > 1e-9),
    st.floats(1e-9, 1e9),
)
def test_rounding_moves_nothing_by_more_than_half_a_unit_of_the_last_place(value, sd):
    """Checked with decimal arithmetic on the printed texts alone."""
    shown, spread = (Decimal(t) for t in round_pair(value, sd))
    last = Decimal(10) ** shown.as_tuple().exponent
    exact = Decimal(1).scaleb(Decimal(f"{sd:.1e}").as_tuple().exponent)
    assert abs(shown - Decimal(value)) <= exact / 2 + Decimal(abs(value)) * Decimal("1e-15")
    assert abs(spread - Decimal(sd)) <= exact / 2 * Decimal("1.000001")
    assert last <= exact
    assert len((spread / exact).to_integral_value().as_tuple().digits) <= 3


def test_texts_of_numbers():
    n = {"value": -918.4, "sd": 9.21, "lower": -936.5, "upper": -900.3}
    assert plus_minus(n, "kN") == "\u2212918.4 ± 9.2 kN"
    assert interval(n, "kN") == "\u2212936.5 to \u2212900.3 kN"
    nothing = dict.fromkeys(n)
    assert plus_minus(nothing, "kN") == "not determined"
    assert interval(nothing) == "no interval"
    assert minus("l-curve at -3e-9, 2-3") == "l-curve at \u22123e\u22129, 2-3"
    assert [brief(v) for v in (0.0, 1234.5, 1e-7, 70.0, None)] == ["0", "1230", "1e-7", "70", ""]
    assert pretty("kN*m^2") == "kN·m²"
    assert pretty("W/(m^3*K)") == "W/(m³·K)"
    assert pretty("1") == ""


# Columns


def test_columns_are_found_by_name_whatever_their_unit():
    frame = pd.DataFrame({"x [mm]": [1.0, None], "estimate [W/m^3]": [1 + 2j, 3]})
    assert header(frame, "x") == "x [mm]"
    assert unit_of(frame, "estimate") == "W/m^3"
    np.testing.assert_array_equal(numbers(frame, "x"), [1.0, np.nan])
    np.testing.assert_array_equal(numbers(frame, "estimate"), [1.0, 3.0])
    assert np.isnan(numbers(frame, "missing")).all()


def test_the_ladder_is_the_first_difference_one(beam):
    assert len(ladder_of(beam.ladder)) == 200
    only = beam.ladder[beam.ladder["family"] == "matern 0.1"]
    assert len(ladder_of(only)) == len(only)


# The member


def places(ax, label=None):
    """x data of every line whose marker is a glyph path, or of the labelled line."""
    return [
        list(np.asarray(line.get_xdata(), dtype=float))
        for line in ax.get_lines()
        if label is None or str(line.get_label()).startswith(label)
    ]


def words(ax):
    return {t.get_text(): t.get_position()[0] for t in ax.texts}


def test_the_member_is_drawn_to_scale_with_everything_on_it(beam):
    (ax,) = axes_of(beam, "member")
    at = words(ax)
    assert at == {
        "foundation": pytest.approx(at["foundation"]),
        "free": 0.0, "clamped": 30.0, "pinned": 18.0, "spring": 24.0, "hinge": 21.0,
    }  # fmt: skip
    drawn_at = places(ax)
    for x in (18.0, 24.0, 21.0, 30.0):
        assert [x] in drawn_at
    used = beam.readings[(beam.readings["kind"] == "strain") & beam.readings["used"]]
    assert places(ax, "strain") == [list(used["x [m]"])]
    springs = next(p for p in drawn_at if len(p) > 3 and max(p) < 16 and min(p) > 1)
    assert max(springs) < 15.0  # the foundation ends where the second half begins


def test_the_bar_is_deeper_where_it_is_stiffer(beam):
    (ax,) = axes_of(beam, "member")
    corners = ax.collections[0].get_paths()[0].vertices
    depth = {x: corners[np.isclose(corners[:, 0], x)][:, 1].max() for x in (0.0, 10.0, 30.0)}
    thin = corners[(corners[:, 0] > 9.99) & (corners[:, 0] < 20.01) & (corners[:, 1] > 0)][:, 1]
    assert thin.min() / depth[0.0] == pytest.approx(np.cbrt(3.0e8 / 7.68e8))
    assert depth[0.0] == depth[30.0] == depth[10.0]


def test_the_drawing_takes_its_unit_from_the_readings():
    case = fake.make("conductor")
    axis = Figure().add_subplot()
    draw_member(case.case.member, case.readings, axis)
    assert words(axis)["value"] == 0.0
    assert words(axis)["transfer"] == pytest.approx(2400.0)
    assert words(axis)["interface"] == pytest.approx(1200.0)
    assert axis.get_xlabel() == "x [mm]"


def test_a_radial_member_is_a_wedge():
    case = fake.make("cylinder")
    (ax,) = axes_of(case, "member")
    corners = ax.collections[0].get_paths()[0].vertices
    inner = corners[np.isclose(corners[:, 0], 20)][:, 1].max()
    outer = corners[np.isclose(corners[:, 0], 100)][:, 1].max()
    assert outer > 2 * inner > 0
    assert ax.get_xlabel() == "radius [mm]"


@pytest.mark.parametrize(
    ("response", "rotation"),
    [(0.0, 0.0), (RIGID, 0.0), (RIGID, RIGID), (0.0, RIGID), (4e6, 2e6), (4e6, 0.0)],
)
def test_every_kind_of_end_has_its_glyph(beam, response, rotation):
    def end(a, b):
        return End("an end", Restraint(a, Unknown()), Restraint(b))

    def glyphs(member: Member):
        axis = Figure().add_subplot()
        draw_member(member, beam.readings, axis)
        return [line for line in axis.get_lines() if list(line.get_xdata()) == [0.0]]

    count = len(glyphs(replace(beam.case.member, left=end(response, rotation))))
    expected = {(4e6, 2e6): 2, (0.0, 0.0): 0}.get((response, rotation), 1)
    assert count == expected


# The other figures


def test_the_source_is_drawn_as_it_stands_in_the_table(beam):
    (ax,) = axes_of(beam, "source")
    stairs = {p.get_label(): p.get_data() for p in ax.patches if hasattr(p, "get_data")}
    estimate, band = stairs["estimate"], stairs["95 % band, point by point"]
    np.testing.assert_array_equal(estimate.values, beam.source["estimate [kN/m]"])
    np.testing.assert_array_equal(band.values, beam.source["upper [kN/m]"])
    np.testing.assert_array_equal(band.baseline, beam.source["lower [kN/m]"])
    np.testing.assert_allclose(estimate.edges, np.linspace(0, 30, 61))
    assert {"bay 1", "bay 2"} <= {t.get_text() for t in ax.texts}
    assert ax.get_ylabel() == "load [kN/m]"


def test_the_forces_inside_are_drawn_as_they_stand_in_the_table(beam):
    figure = axes_of(beam, "section")
    assert [ax.get_ylabel() for ax in figure] == ["moment [kN·m]", "shear [kN]"]
    for ax, head in zip(figure, ("moment{} [kN*m]", "shear{} [kN]"), strict=True):
        curve = next(line for line in ax.get_lines() if line.get_label() == "estimate")
        np.testing.assert_array_equal(curve.get_xdata(), beam.section["x [m]"])
        np.testing.assert_array_equal(curve.get_ydata(), beam.section[head.format("")])
        corners = ax.collections[0].get_paths()[0].vertices
        assert corners[:, 1].max() == beam.section[head.format("_upper")].max()
        assert corners[:, 1].min() == beam.section[head.format("_lower")].min()
        assert [18.0, 18.0] in places(ax)  # supports are marked
    # the jump of the shear at the support stands upright
    shear = figure[1].get_lines()[1]
    at = np.flatnonzero(shear.get_xdata() == 18.0)
    assert np.diff(shear.get_ydata()[at]) == pytest.approx([80.0])


def test_extremes_inside_are_said_with_their_places(beam, drawn):
    moment = beam.section["moment [kN*m]"]
    most = beam.section.loc[moment.idxmax()]
    assert drawn["section"].text.startswith(
        f"Moment: at most {plus_minus({'value': moment.max(), 'sd': most['moment_sd [kN*m]']})} "
        f"kN·m at x = {brief(most['x [m]'])} m, at least \u2212"
    )
    assert plots.draw_all(fake.make(bare=True), ("section",))["section"].text == (
        "Moment: not determined. Shear: not determined."
    )
    none = plots.draw_all(replace(beam, section=None), ("section",))["section"].text
    assert none == "There are no forces inside the member to show."


def test_names_of_overlapping_zones_stand_in_rows():
    start, end = np.array([0.0, 24.0, 54.0, 36.0, 46.0]), np.array([24.0, 54.0, 78.0, 46.0, 50.0])
    assert name_rows(start, end) == [0, 0, 0, 1, 1]


def test_temperatures_are_drawn_in_the_readings_unit():
    case = fake.make("conductor")
    upper, lower = axes_of(case, "readings")
    curve = next(line for line in upper.get_lines() if to_hex(line.get_color()) == BLUE)
    kelvin = case.pictures.fit["temperature"]
    np.testing.assert_allclose(curve.get_ydata(), kelvin - 273.15)
    np.testing.assert_allclose(curve.get_xdata(), case.pictures.x * 1000)
    assert upper.get_ylabel() == "temperature [°C]"
    marks = next(line for line in lower.get_lines() if line.get_marker() == "o")
    z = case.readings["standardised"].dropna().to_numpy()
    np.testing.assert_array_equal(marks.get_ydata(), z)


def test_every_criterion_is_marked_on_the_l_curve(beam):
    (ax,) = axes_of(beam, "l-curve")
    marked = {str(line.get_label()).split(":")[0]: line for line in ax.get_lines()}
    choices = beam.facts["strength"]["choices"]
    rows = ladder_of(beam.ladder)
    for name, value in choices.items():
        if value is None:
            assert name not in marked
            continue
        nearest = rows.iloc[(np.log(rows.iloc[:, 1]) - np.log(value)).abs().argmin()]
        assert marked[name].get_xdata()[0] == nearest["residual_norm"]
        assert marked[name].get_ydata()[0] == nearest["roughness_norm"]


def test_influence_and_modes_are_divided_by_their_largest(beam):
    for name, lines in (("influence", 12), ("modes", 4)):
        (ax,) = axes_of(beam, name)
        long = [line for line in ax.get_lines() if len(line.get_xdata()) > 2]
        assert len(long) == lines
        for line in long:
            assert np.max(np.abs(line.get_ydata())) == pytest.approx(1.0)


def test_the_overview_holds_member_source_and_readings(beam):
    with plots.quiet():
        figure = plots.overview(beam)
    assert isinstance(figure, Figure)
    labels = [ax.get_ylabel() for ax in figure.axes]
    assert labels == ["", "load [kN/m]", "deflection [mm]", "residual / sd"]


# Files, texts, odd cases


def test_every_figure_has_a_text_with_numbers(drawn):
    assert list(plots.FIGURES) == list(DESCRIPTIONS) == list(drawn)
    for picture in drawn.values():
        assert any(c.isdigit() for c in picture.text)
        assert 1 <= picture.text.count(". ") + 1 <= 3
    assert "918.4 ± 9.2 kN (95 % interval 900.3 to 936.5)" in drawn["source"].text
    assert "15 of deflection and 15 of strain" in drawn["member"].text
    assert "30 of 32 readings used" in drawn["readings"].text


def test_the_same_result_gives_the_same_bytes(beam, drawn, tmp_path):
    twin = replace(beam)
    again = plots.draw_all(twin)
    assert again == drawn
    assert plots.draw_all(twin)["source"] is again["source"]  # once for folder and page
    paths = plots.save_figures(beam, tmp_path / "figures", drawn)
    assert sorted(p.name for p in paths) == sorted(
        f"{name}{end}" for name in plots.FIGURES for end in (".svg", ".png")
    )
    assert all(p.read_bytes() for p in paths)
    assert (tmp_path / "figures" / "source.svg").read_text(encoding="utf-8") == drawn["source"].svg
    assert "<dc:date>" not in drawn["source"].svg


@pytest.mark.parametrize("kind", KINDS)
def test_hostile_names_are_drawn_as_text(kind):
    case = fake.make(kind, hostile=True)
    for name, picture in plots.draw_all(case, ("member", "source", "readings")).items():
        tree = ET.fromstring(picture.svg)
        tags = {element.tag.rsplit("}", 1)[-1] for element in tree.iter()}
        assert not tags & {"script", "img", "image", "foreignObject"}
        assert "\u202e" not in picture.svg, name
    assert plain("$a_b$ \u202e_x") == r"\$a_b\$  _x"


def test_what_is_not_determined_is_left_out_and_said():
    case = fake.make("beam", bare=True)
    drawn = plots.draw_all(case)
    assert "not determined" in drawn["source"].text
    assert "band" not in drawn["source"].svg


def test_empty_pictures_and_tables_do_not_stop_the_figures():
    case = fake.make("conductor")
    empty = np.empty((0, 0))
    pictures = replace(
        case.pictures, influence=empty, influence_of=(), modes=empty, eigenvalues=np.empty(0),
        fit={}, rungs=empty, strengths=np.empty(0), totals=np.empty(0), fits=empty,
    )  # fmt: skip
    bare = replace(
        case, pictures=pictures, ladder=case.ladder.iloc[:0], zones=case.zones.iloc[:0],
        readings=case.readings.iloc[:0],
    )  # fmt: skip
    drawn = plots.draw_all(bare)
    assert drawn["l-curve"].text == "There is no ladder of strengths."
    assert drawn["influence"].text == "There are no influence lines."


def test_driven_members_show_real_parts():
    case = fake.make("beam")
    turned = replace(
        case.pictures,
        influence=case.pictures.influence * (1 + 1j), modes=case.pictures.modes + 0j,
        fit={k: v * (1 + 2j) for k, v in case.pictures.fit.items()},
    )  # fmt: skip
    readings = case.readings.copy()
    readings["predicted"] = (
        readings["predicted"]
        .astype(object)
        .map(lambda v: v if v is None or v != v else complex(v, 1))
    )
    upper = axes_of(replace(case, pictures=turned, readings=readings), "readings")[0]
    curve = next(line for line in upper.get_lines() if to_hex(line.get_color()) == BLUE)
    np.testing.assert_allclose(curve.get_ydata(), case.pictures.fit["deflection"] * 1e3)


@pytest.mark.parametrize("what", plots.IN_AXES)
def test_axes_in_and_out(beam, what):
    from matplotlib.figure import Figure

    left, right = Figure().subplots(1, 2)
    assert beam.plot(left, what) is left
    assert left.has_data()
    assert not right.has_data()
    assert left.get_xlabel() or what == "member"
    with pytest.raises(ValueError, match="there is no plot of 'sauce'; choose one of member"):
        beam.plot(right, "sauce")


def test_without_axes_a_figure_comes_out(beam):
    assert len(beam.plot().axes) == 4


def test_readings_of_one_kind_in_several_units_share_a_panel(beam):
    readings = beam.readings.copy()
    rows = np.flatnonzero((readings["kind"] == "deflection").to_numpy())[:3]
    for name in ("value", "sd", "predicted", "residual"):
        readings[name] = readings[name].astype(float)
        readings.iloc[rows, readings.columns.get_loc(name)] /= 25.4
    readings.iloc[rows, readings.columns.get_loc("unit")] = "in"
    mixed = replace(beam, readings=readings)
    assert axes.panels(mixed) == axes.panels(beam)
    for before, after in zip(axes_of(beam, "readings"), axes_of(mixed, "readings"), strict=True):
        for one, two in zip(before.get_lines(), after.get_lines(), strict=True):
            np.testing.assert_allclose(one.get_xydata(), two.get_xydata(), rtol=1e-9)
    own, turned = (chart_data(r)["panels"][0] for r in (beam, mixed))
    np.testing.assert_allclose(turned["value"], own["value"], rtol=1e-5)
    np.testing.assert_allclose(turned["sd"], own["sd"], rtol=1e-5)
