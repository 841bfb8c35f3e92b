"""The page, the figures and the sentences of a comparison."""

from __future__ import annotations

import base64
import hashlib
import re
from dataclasses import replace

import fake_recovery as fake
import numpy as np
import pytest
import two_campaigns as two
from matplotlib.figure import Figure
from scipy.linalg import cholesky, solve_triangular
from test_report import Reader

from srcfit import changeplots, report
from srcfit.changewords import headline, statements
from srcfit.report.change import CHANGE_SECTIONS


@pytest.fixture(scope="module")
def full():
    return two.compared()


@pytest.fixture(scope="module")
def page(full):
    return report.render_change(full)


@pytest.fixture(scope="module")
def hostile():
    return two.hostile()


# --- the page -----------------------------------------------------------------------------------


def test_the_answer_comes_first_and_every_section_has_its_anchor(page):
    read = Reader(page)
    assert [e[1]["id"] for e in read.all("section")] == list(CHANGE_SECTIONS)
    ids = [e[1]["id"] for e in read.elements if "id" in e[1]]
    assert len(ids) == len(set(ids))
    links = [e[1]["href"][1:] for e in read.all("a") if e[1]["href"].startswith("#")]
    assert set(links) <= set(ids)


def test_the_sentence_says_what_where_how_much_and_what_may_be_missed(full, page):
    zones = {z["name"]: z for z in full.facts["zones"]}
    assert (zones["stack"]["shown"], zones["front"]["shown"]) == (True, False)
    told = headline(full)
    assert re.fullmatch(
        r"From A to B the load on this beam changed by \+\d+ ± [\d.]+ kN "
        r"\(with 95 % confidence \d+ to \d+ kN\) in stack, "
        r"in total by \+[\d.]+ ± [\d.]+ kN \([\d.]+ to [\d.]+ kN\); "
        r"no change is shown in front, where up to \d+ kN may have been missed\.",
        told,
    ), told
    assert told in Reader(page).text("answer")


def test_zones_are_sorted_what_is_shown_first(full, page):
    read = Reader(page)
    items = [e for e in read.all("li") if "kN" in "".join(e[2]) and "class" not in e[1]][:2]
    assert ["stack" in "".join(e[2]) for e in items] == [True, False]
    text = read.text("table-zones")
    assert text.index("stack") < text.index("front") < text.index("whole member")
    assert "yes" in text
    assert "no" in text


def test_assumptions_floor_and_hashes_of_every_file(tmp_path):
    import srcfit

    values = two.sags(0.0), two.sags(40e3)
    cases = [two.case(tmp_path, n, v, offset="unknown")
             for n, v in zip("ab", values, strict=True)]  # fmt: skip
    # as if they had been read from files
    for i, c in enumerate(cases):
        path = tmp_path / f"{c.title}.toml"
        path.write_text(f"# {c.title}")
        cases[i] = replace(c, path=path)
    found = srcfit.compare(*cases, common=["offset:level"], shared_noise=0.5, reckon="20 kN/m")
    read = Reader(report.render_change(found))
    text = read.text("assumptions")
    assert "offset:level" in text
    assert "correlation 0.5 between the campaigns" in text
    assert "a mean change of 20 kN/m is reckoned with" in text
    files = sorted(p for p in tmp_path.iterdir())
    assert len(files) == 4
    for path in files:
        digest = hashlib.sha256(path.read_bytes()).hexdigest()
        assert read.text("inputs").count(f"sha256 {digest}") == 1


def test_same_policy_as_the_page_of_a_recovery(page):
    other = report.render(fake.make("beam"))
    policies = [re.search(r'Content-Security-Policy" content="([^"]*)"', p)[1]
                for p in (page, other)]  # fmt: skip
    assert policies[0] == policies[1]
    style = re.search(r"<style>(.*?)</style>", page, re.S)[1]
    digest = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode()
    assert f"style-src 'sha256-{digest}'" in policies[0]
    assert " style=" not in page
    addresses = set(re.findall(r'(?:src|href)="(?!#|data:)([^"]*)"', page))
    assert not addresses


def test_hostile_names_stay_text(hostile):
    read = Reader(report.render_change(hostile))
    assert len(read.all("script")) == 3
    assert not read.all("img")
    assert len(read.all("style")) == 1
    named = fake.HOSTILE.replace("\u202e", "").replace("\u202c", "")
    assert "".join(read.all("h1")[0][2]) == f"{named} to {named}"
    assert "\u202e" not in "".join("".join(e[2]) for e in read.elements[:1])
    assert named in read.text("answer")


def test_a_notebook_shows_it_without_scripts_and_ids(full, hostile):
    for found in (full, hostile):
        read = Reader(found._repr_html_())
        assert not read.all("script")
        assert not [e for e in read.elements if e[0] != "svg" and "id" in e[1]
                    and "srcfit-" not in e[1]["id"]]  # fmt: skip
        assert read.all("svg")


# --- sentences ----------------------------------------------------------------------------------


def with_facts(found, total, zones):
    """The same with other verdicts; each (shown, missed)."""
    facts = dict(found.facts)
    facts["total"] = facts["total"] | dict(zip(("shown", "missed"), total, strict=True))
    facts["zones"] = [
        facts["zones"][i % 2] | {"name": f"bay {i + 1}", "shown": shown, "missed": missed}
        for i, (shown, missed) in enumerate(zones)
    ]
    return replace(found, facts=facts)


@pytest.mark.parametrize(
    ("total", "zones", "words"),
    [
        ((False, 12.0), [(False, 5.0), (False, 9.0)],
         "No change of the load on this beam is shown from A to B, neither in total nor in bay 1 "
         "and bay 2, but up to 12 kN in total and up to 5 and 9 kN there may have been missed."),
        ((False, 12.0), [], "No change of the load on this beam is shown from A to B, but up to "
         "12 kN may have been missed."),
        ((False, 12.0), [(False, float(v)) for v in range(5, 10)],
         "nor in any of 5 parts, but up to 12 kN in total and between 5 and 9 kN (listed below) "
         "there may have been missed."),
        ((None, None), [(None, None)], "These readings cannot tell how the load on this beam "
         "changed from A to B; the findings say why and what would help."),
        ((None, None), [(False, 5.0)], "in bay 1, but up to 5 kN there may have been missed; in "
         "total the readings cannot tell."),
        ((True, 4.0), [(False, 9.0), (False, None)],
         ", but the readings do not show where; no change is shown in bay 1 and bay 2, where any "
         "change may have been missed."),
        ((False, 4.0), [(True, 9.0)], "in bay 1; in total no change is shown, but up to 4 kN may "
         "have been missed."),
        ((True, 4.0), [(True, 9.0)] * 5, "in 2 further parts, in total by"),
        ((None, None), [(True, 9.0)], "in bay 1; how it changed in total the readings cannot "
         "tell."),
    ],
)  # fmt: skip
def test_every_outcome_has_its_sentence(full, total, zones, words):
    told = headline(with_facts(full, total, zones))
    assert words in told
    assert told.endswith(".")
    assert "None" not in told
    assert "nan" not in told


def test_the_terminal_and_the_page_agree(full):
    for statement, zone in zip(statements(full.facts)[1:], full.facts["zones"], strict=True):
        assert ("no change" in statement) == (zone["shown"] is False)


# --- figures ------------------------------------------------------------------------------------


def test_figures_have_text_and_are_the_same_each_time(full):
    first, again = changeplots.draw_all(full), changeplots.draw_all(full)
    assert list(first) == ["change", "campaigns"]
    for name, picture in first.items():
        assert picture == again[name]
        assert picture.png.startswith(b"\x89PNG")
    assert headline(full) in first["change"].text
    assert "8 sensors of both campaigns" in first["campaigns"].text


def test_what_is_drawn_is_what_was_found(full):
    ax = Figure().add_subplot()
    assert full.plot(ax) is ax
    line = next(p for p in ax.patches if p.get_label() == "estimate")
    np.testing.assert_allclose(line.get_data().values, full.source["estimate [kN/m]"])
    shaded = [p for p in ax.patches if p.get_label() == "zone where a change is shown"]
    assert [p.get_x() for p in shaded] == [3.0]
    for what, labels in (
        ("campaigns", ["reading of A", "reading of B"]),
        ("differences", ["predicted from the change", "difference ± 1 sd"]),
    ):
        ax = Figure().add_subplot()
        full.plot(ax, what)
        assert ax.get_legend_handles_labels()[1] == labels
    assert len(full.plot().axes) == 2
    with pytest.raises(ValueError, match="choose one of change, member"):
        full.plot(Figure().add_subplot(), "zones")


def test_stacked_campaigns_are_drawn_apart():
    found = two.compared(by="stack")
    ax = Figure().add_subplot()
    found.plot(ax, "campaigns")
    assert [len(line.get_xdata()) for line in ax.lines] == [8, 8]
    assert "16" not in headline(found)
    assert "residuals below" in changeplots.draw_all(found, ("campaigns",))["campaigns"].text
    gap = found.readings["value"] - found.readings["predicted"]
    chi = float(((gap / found.readings["sd"]) ** 2).sum())
    assert chi == pytest.approx(found.facts["fit"]["chi_square"], rel=1e-9)


def test_predicted_differences_leave_the_residuals_of_the_fit():
    """With correlated neighbours: whitened by the covariance of differences, chi-square again."""
    found = two.compared(correlation=0.4)
    table = found.readings
    gap = (table["difference"] - table["predicted"]).to_numpy()
    at = np.arange(len(table))
    cov = 2 * 0.02**2 * 0.4 ** np.abs(at[:, None] - at)
    white = solve_triangular(cholesky(cov, lower=True), gap, lower=True)
    assert white @ white == pytest.approx(found.facts["fit"]["chi_square"], rel=1e-9)
    np.testing.assert_allclose(table["sd"], 0.02 * np.sqrt(2), rtol=1e-9)


def test_a_driven_member_has_its_page(tmp_path):
    import test_compare

    import srcfit

    member = {**test_compare.MEMBER, "mass": "1200 kg/m", "frequency": "3 Hz", "damping": "0.05"}
    cases = [test_compare.case(tmp_path, n, test_compare.readings(c, s), member=member)
             for n, c, s in (("a", 0.0, 1), ("b", 30e3, 2))]  # fmt: skip
    found = srcfit.compare(*cases)
    text = Reader(report.render_change(found)).text("answer")
    assert "and i(" in text
    assert "nan" not in text
