"""Numbers and names as a practitioner reads them."""

import pytest

from srcfit.report.numbers import shown
from srcfit.rounding import held_word, interval, peak_sentence, plus_minus
from srcfit.text import balance_text

FACTS = {
    "level": 0.95, "peak": {"value": 50.0, "joint": {"lower": 40.0, "upper": 60.0,
                            "position_lower": 3.5, "position_upper": 3.5}},
    "simultaneous": {"factor": 4.0, "pointwise": 2.0},
}  # fmt: skip


def test_a_pure_number_has_no_unit():
    number = {"value": 2.0, "sd": 0.1, "lower": 1.8, "upper": 2.2}
    assert plus_minus(number, "1") == "2.00 ± 0.10"
    assert interval(number, "1") == "1.80 to 2.20"


def test_one_place_is_no_range():
    assert "stands at 3.5 m" in peak_sentence(FACTS, "kN/m", "m")


@pytest.mark.parametrize(
    ("kind", "word"),
    [("force", "reaction"), ("transverse force", "reaction"), ("moment", "moment"),
     ("torque", "torque"), ("heat flow", "outflow"), ("flux", "outflow")],
)  # fmt: skip
def test_what_an_end_takes_is_named_by_the_trade(kind, word):
    assert held_word("left", kind) == f"{word} left"


def test_rounding_of_a_balance_is_not_printed():
    told = balance_text(
        {"source": 2.00019, "reactions": -5e-10, "along": 2.00019, "difference": 5.6e-9}, "m"
    )
    assert "difference               0 m" in told
    assert "e-" not in told


def test_units_in_sentences_of_the_page_are_raised():
    assert shown("up to 0.76 W/m^2, k^-1 & 2^3") == "up to 0.76 W/m², k⁻¹ &amp; 2^3"
