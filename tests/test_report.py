"""The page: complete, self-contained, safe against any name, the same numbers everywhere."""

from __future__ import annotations

import base64
import hashlib
import json
import re
from dataclasses import replace
from html.parser import HTMLParser
from importlib import resources

import fake_recovery as fake
import numpy as np
import pytest

from srcfit import plots, report
from srcfit.report.data import as_json, chart_data
from srcfit.report.numbers import round_pair, shown
from srcfit.report.sections import SECTIONS, total_sentence
from srcfit.report.svg import inline

VOID = {"meta", "link", "br", "img", "input"}


class Reader(HTMLParser):
    """Elements with their attributes and texts; tags must close in the order they opened."""

    def __init__(self, text):
        super().__init__()
        self.elements, self.stack, self.texts = [], [], []
        self.feed(text)
        assert not self.stack, self.stack

    def handle_starttag(self, tag, attrs):
        element = (tag, dict(attrs), [])
        self.elements.append(element)
        if tag not in VOID:
            self.stack.append(element)

    def handle_startendtag(self, tag, attrs):
        self.elements.append((tag, dict(attrs), []))

    def handle_endtag(self, tag):
        assert self.stack, tag
        opened = self.stack.pop()
        assert opened[0] == tag, (opened[:2], tag)

    def handle_data(self, data):
        for element in self.stack:
            element[2].append(data)

    def all(self, tag):
        return [e for e in self.elements if e[0] == tag]

    def text(self, anchor):
        found = next(e for e in self.elements if e[1].get("id") == anchor)
        return "".join(found[2])


@pytest.fixture(scope="module")
def beam():
    return fake.make("beam")


@pytest.fixture(scope="module")
def drawn(beam):
    return plots.draw_all(beam)


@pytest.fixture(scope="module")
def page(beam, drawn):
    return report.render(beam, drawn)


@pytest.fixture(scope="module")
def read(page):
    return Reader(page)


@pytest.fixture(scope="module")
def hostile():
    return Reader(report.render(fake.make("beam", hostile=True, bare=True)))


def test_the_answer_comes_first_and_every_section_has_its_anchor(read):
    sections = [e[1]["id"] for e in read.all("section")]
    assert sections == list(SECTIONS)
    assert sections[0] == "answer"
    assert {e[1]["href"] for e in read.all("a") if e[1]["href"].startswith("#")} >= {
        f"#{name}" for name in SECTIONS
    }


@pytest.mark.parametrize("name", SECTIONS)
def test_every_section_stands_alone(beam, name):
    part = Reader(SECTIONS[name](beam))
    assert part.elements[0][0] == "section"
    assert part.elements[0][1]["id"] == name
    assert len("".join(part.elements[0][2])) > 60


def test_the_answer_is_one_sentence_with_its_interval(beam, read):
    assert total_sentence(beam) == (
        "The total load on this beam between 0 and 30 m is <strong>918.4 ± 9.2 kN</strong>: with "
        "95 % confidence between 900.3 and 936.5 kN."
    )
    text = read.text("answer")
    assert "352 ± 26 kN" in text
    assert "mainly the prior’s" in text
    assert "Limit of 70 kN/m in bay 1: kept. The probability that it is kept is 99.4 %." in text
    assert "1 caution and 1 note" in text


def test_ids_are_unique_and_links_lead_somewhere(read):
    ids = [e[1]["id"] for e in read.elements if "id" in e[1]]
    assert len(ids) == len(set(ids))
    for tag, attributes, _ in read.elements:
        for key in ("href", "xlink:href", "aria-labelledby", "for"):
            value = attributes.get(key, "")
            if tag == "label" or value.startswith("#"):
                assert value.lstrip("#") in ids
    inside = re.findall(r"url\(#([^)]*)\)", " ".join(str(e[1]) for e in read.elements))
    assert inside
    assert set(inside) <= set(ids)


def test_nothing_comes_from_outside(read):
    for _, attributes, _ in read.elements:
        for key in ("src", "href", "xlink:href", "action", "data"):
            assert attributes.get(key, "#").startswith(("#", "data:"))
        assert "style" not in attributes
        assert not [k for k in attributes if k.startswith("on")]


def test_the_policy_names_exactly_the_scripts_and_the_style(read):
    policy = next(e[1]["content"] for e in read.all("meta") if "http-equiv" in e[1])
    assert "default-src 'none'" in policy
    assert "unsafe" not in policy

    def digests(elements):
        return {
            "'sha256-" + base64.b64encode(hashlib.sha256("".join(e[2]).encode()).digest()).decode()
            + "'" for e in elements
        }  # fmt: skip

    named = set(re.findall(r"'sha256-[^']*'", policy))
    scripts = [e for e in read.all("script") if "type" not in e[1]]
    assert len(scripts) == 2
    assert named == digests(scripts) | digests(read.all("style"))


def test_every_fact_is_on_the_page(beam, read):
    facts, text = beam.facts, "".join("".join(e[2]) for e in read.all("main"))
    for finding in facts["findings"]:
        assert finding["sentence"] in text
        assert finding["code"] in text
    for row in (*facts["zones"], *facts["lumped"], *facts["nuisances"], *facts["reactions"]):
        value, sd = round_pair(row["value"], row["sd"])
        assert value in text
        assert sd in text
    for item in (*facts["inputs"], *facts["excluded"]):
        assert all(str(v) in text for v in item.values())
    assert all(c in text for c in facts["cautions"])
    assert "seed 0" in text
    for source in ("Tikhonov", "Wahba", "Nychka", "Heath", "Lukas", "Hansen", "Morozov"):
        assert source in text


def test_signs_are_printed_back(beam, read):
    text = read.text("assumptions")
    assert text.count("up: values turned round to the member's own sign") == 2
    assert "Positive is down" in text
    assert "30 m" in read.text("member")  # the member as it was written


def test_tables_carry_full_values_beside_rounded_ones(page, read):
    rows = re.findall(r'data-v="([^"]*)">352<', page)
    assert rows == ["352"]
    assert read.text("table-zones").count("366") >= 1
    cells = [e for e in read.all("td") if "data-v" in e[1]]
    assert len(cells) > 500
    readings = read.text("table-readings")
    assert "no: below detection" in readings
    assert len(re.findall(r"deflection line", readings)) == 16


def test_findings_run_from_serious_to_note(hostile):
    levels = [e[1]["class"] for e in hostile.all("li") if e[1].get("class") in
              ("serious", "caution", "note")]  # fmt: skip
    assert levels == ["serious", "caution", "note"]


def test_an_undetermined_total_is_said_not_shown(hostile):
    text = hostile.text("answer")
    assert "These readings cannot tell the total load" in text
    assert "nan" not in "".join(hostile.text(name) for name in SECTIONS).lower().split()
    assert "None" not in text


def test_hostile_names_stay_text(hostile):
    assert len(hostile.all("script")) == 3
    assert not hostile.all("img")
    assert len(hostile.all("style")) == 1
    named = fake.HOSTILE.replace("\u202e", "").replace("\u202c", "")
    assert "".join(hostile.all("h1")[0][2]) == named
    assert "".join(hostile.all("title")[0][2]) == named
    everything = "".join("".join(e[2]) for e in hostile.elements[:1])
    assert "\u202e" not in everything


def test_json_cannot_leave_its_element():
    text = as_json({"name": "</script><!-- & \u2028"})
    assert not set("<>&\u2028") & set(text)
    assert json.loads(text) == {"name": "</script><!-- & \u2028"}


def test_the_slider_holds_the_stored_rungs(beam):
    data = json.loads(as_json(chart_data(beam)))
    ladder, pictures = data["ladder"], beam.pictures
    cells = np.frombuffer(base64.b64decode(ladder["cells"]), "<f4").reshape(40, -1)
    np.testing.assert_allclose(cells, pictures.rungs, rtol=1e-6, atol=1e-5)
    fits = np.frombuffer(base64.b64decode(ladder["fits"]), "<f4").reshape(40, -1)
    np.testing.assert_allclose(fits, pictures.fits, rtol=1e-6)
    assert ladder["rows"] == list(pictures.influence_of)
    np.testing.assert_allclose(ladder["strengths"], pictures.strengths, rtol=1e-5)
    evidence = beam.facts["strength"]["choices"]["evidence"]
    start = pictures.strengths[ladder["start"]]
    assert abs(np.log(start / evidence)) <= np.min(np.abs(np.log(pictures.strengths / evidence)))


def test_influence_lines_survive_their_packing(beam):
    packed = chart_data(beam)["influence"]
    rows = np.frombuffer(base64.b64decode(packed["lines"]), "<i2").reshape(len(packed["rows"]), -1)
    lines = rows * np.array(packed["scale"])[:, None]
    np.testing.assert_allclose(lines, beam.pictures.influence, atol=2e-5 * 1e-6)
    assert packed["units"][0] == "m per N"
    assert packed["units"][-1] == "1 per N"


def test_a_large_page_stays_small():
    big = fake.make("conductor", 1000, 400)
    text = report.render(big)
    assert len(text.encode()) < 3_000_000
    Reader(text)


def test_very_many_readings_are_thinned_and_said():
    many = fake.make("conductor", 6000, 50)
    data = chart_data(many)
    assert len(data["panels"][0]["rows"]) == 4000
    assert len(data["influence"]["rows"]) == 1000
    assert len(data["ladder"]["strengths"]) * len(data["ladder"]["rows"]) <= 120_000
    said = SECTIONS["readings"](many)
    assert "the first 2000 of 6000 rows" in said
    assert re.search(r"the charts show 4000 of \d+ used readings, evenly picked", said)
    assert "influence lines are kept for 1000 of them" in said
    assert "evenly picked" not in SECTIONS["readings"](fake.make("conductor", 300, 50))


def test_figures_inside_the_page_have_no_styles_and_follow_the_theme(drawn):
    element = inline(drawn["source"].svg, "source", 'say "x" <y>')
    assert "style=" not in element
    assert "<style" not in element
    assert "<metadata" not in element
    assert 'stroke="var(--blue,#0072b2)"' in element
    assert 'aria-label="say &quot;x&quot; &lt;y&gt;"' in element
    ids = re.findall(r' id="([^"]*)"', element)
    assert ids
    assert all(i.startswith("source-") for i in ids)


def test_the_fragment_is_static(beam):
    text = report.fragment(beam)
    parts = Reader(text)
    assert not parts.all("script")
    assert not parts.all("style")
    assert not parts.all("a")
    assert "918.4 ± 9.2 kN" in "".join(parts.elements[0][2])
    assert parts.all("svg")


def test_the_same_result_gives_the_same_page(beam, page):
    assert report.render(replace(beam)) == page


def test_vendored_parts_state_version_and_licence():
    assets = resources.files("srcfit.report").joinpath("assets")
    notice = assets.joinpath("NOTICE").read_text(encoding="utf-8")
    assert "uPlot 1.6.32" in notice
    assert "(v1.6.32)" in assets.joinpath("uPlot.iife.min.js").read_text(encoding="utf-8")[:200]
    assert "MIT License" in assets.joinpath("uPlot.LICENSE").read_text(encoding="utf-8")


def test_powers_of_ten_are_raised():
    assert shown("-1.5e-9 & <b>") == "\u22121.5\u202f×\u202f10<sup>\u22129</sup> &amp; &lt;b&gt;"
