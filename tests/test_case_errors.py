"""Bad cases: each error names the file, the line and the key, and says how to mend it."""

import os
import tomllib

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from test_case import BAR, BEAM, COLUMN, READINGS, UNCERTAIN, WORKED, case

from srcfit.case import load_case, make_case, make_member
from srcfit.errors import CaseError, SrcfitError, UnitError

ZONE = '{ name = "bay 1", from = "0 m", to = "6 m" }'


def errors(tmp_path, text):
    """The error of a case text, and its single messages."""
    path = tmp_path / "case.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(CaseError) as caught:
        load_case(path)
    return caught.value, str(caught.value)


# (old text, new text, key path, words of the message); the line is the last of the new text
EDITS = [
    ('kind = "beam"', 'kind = "beem"', "member.kind", "did you mean `beam`?"),
    ('length = "30 m"', "length = 30", "member.length", "give a length, as in m"),
    ('length = "30 m"', 'length = "30"', "member.length", "has no unit"),
    ('length = "30 m"', 'length = "30 kN"', "member.length", "wrong dimension"),
    ('length = "30 m"', 'length = "-3 m"', "member.length", "not more than 0"),
    ('"768 MN*m^2"', '"768 MN"', "member.bending_stiffness", "force × length²"),
    ('"768 MN*m^2"', '"-768 MN*m^2"', "member.bending_stiffness", "not positive"),
    ('"12 MN/m^2"', '"-12 MN/m^2"', "member.foundation", "is negative"),
    ('"12 MN/m^2"', '[["0 m", "9 m", "1 N/m^2"]]', "member.foundation", "from 9 m to 30 m"),
    (
        '"12 MN/m^2"', '[["0 m", "9 m", "1 N/m^2"], ["8 m", "30 m", "1 N/m^2"]]',
        "member.foundation[2]", "overlaps the row before it from 8 m to 9 m",
    ),
    (
        '"12 MN/m^2"', '[["0 m", "9 m", "1 N/m^2"], ["9 m", "33 m", "1 N/m^2"]]',
        "member.foundation[2]", "outside the member",
    ),
    ('"12 MN/m^2"', '[["0 m", "30 m"]]', "member.foundation[1]", "[from, to, value]"),
    ('"12 MN/m^2"', '{ file = "k.csv", position = "x", value = "k" }', "member.foundation.file",
     "cannot be read"),
    ("foundation = \"12", "fundation = \"12", "member.fundation", "did you mean `foundation`?"),
    ('left = "free"', 'left = "fixed"', "member.left", "did you mean"),
    ('left = "free"', 'left = { value = "3 mm" }', "member.left.value", "is no key of"),
    ('left = "free"', 'left = { kind = "free", settlement = "3 mm" }', "member.left.settlement",
     "does not hold what is to move"),
    ('left = "free"', 'left = { settlement = "unknown" }', "member.left", "how the end is held"),
    ('left = "free"', 'left = { kind = "pinned", deflection_spring = "3 N/m" }',
     "member.left.deflection_spring", "rigidly already"),
    ('left = "free"', 'left = { kind = "clamped", settlement = "unknown", rotation = "unknown", '
     'sd = "1 mm" }', "member.left.sd", "not clear what `sd` belongs to"),
    ('{ foundation = "10 %" }', '{ foundation = 0.1 }', "member.uncertainty.foundation",
     "has no unit"),
    ('{ foundation = "10 %" }', '{ fondation = "10 %" }', "member.uncertainty.fondation",
     "did you mean `foundation`?"),
    ('{ foundation = "10 %" }', '{ "left.spring" = "10 %" }', 'member.uncertainty."left.spring"',
     "is no key of"),
    ('at = "24 m"', 'at = "34 m"', "member.support[1].at", "is not inside the member"),
    ('at = "24 m"', 'at = "30 m"', "member.support[1].at", "belongs to `left` or `right`"),
    ('kind = "pinned"', 'kind = "spring"', "member.support[1]", "`stiffness` is missing"),
    ('kind = "pinned"', 'kind = "fixed"', "member.support[1].kind", "known here: pinned, spring"),
    ('settlement = "unknown"', 'settlement = "3 mm"\nsd = "1 mm"', "member.support[1].sd",
     "goes only with an unknown"),
    ('file = "settlement.csv"', "file = 3", "readings.file", "is no file name"),
    ('unit = "m" }', 'unit = "mK" }', "readings.position.unit", "wrong dimension"),
    ('unit = "m" }', 'unit = "m", unit_column = "u" }', "readings.position.unit_column",
     "exclude each other"),
    ('column = "w"', "column = 3", "readings.column[1].column", "text in quotes is due"),
    ('column = "w"', "column = []", "readings.column[1].column", "names no column"),
    ('kind = "deflection"', 'kind = "deflexion"', "readings.column[1].kind",
     "did you mean `deflection`?"),
    ('kind = "deflection"', 'kind = "temperature"', "readings.column[1].kind",
     "no sensor kind of a beam"),
    ('unit = "mm"', 'unit = "kN"', "readings.column[1].unit", "give a length"),
    ('unit = "mm"', 'unit = "mm"\nunit_column = "u"', "readings.column[1].unit_column",
     "exclude each other"),
    ('sd = "0.10 mm"', 'sd = "0 mm"', "readings.column[1].sd", "not more than 0"),
    ('sd = "0.10 mm"', 'sd = "3 %"', "readings.column[1].sd", "a part of"),
    ('sd = "0.10 mm"', "sd = 0.1", "readings.column[1].sd", "has no unit"),
    ('offset = "unknown"', 'offset = { sd = "1 mm" }', "readings.column[1].offset",
     "does not say `unknown = true`"),
    ('offset = "unknown"', 'drift = "unknown"', "readings.column[1].drift", "add `time`"),
    ('offset = "unknown"', 'distance = "1 m"', "readings.column[1].distance", "has no distance"),
    ('offset = "unknown"', 'phase = { column = "p", unit = "deg" }', "readings.column[1].phase",
     "add `frequency`"),
    ('offset = "unknown"', 'range = ["3 mm", "1 mm"]', "readings.column[1].range",
     "is not more than"),
    ('offset = "unknown"', 'correction = { column = "T", unit = "K", per = "1 mm/K" }',
     "readings.column[1].correction", "add `baseline`"),
    ('offset = "unknown"', "where = { block = 1 }", "readings.column[1].where.block",
     "write it in quotes"),
    ('offset = "unknown"', "exclude_lines = [3, 0]", "readings.column[1].exclude_lines[2]",
     "there is no line 0"),
    ('positive = "down"', 'positive = "downwards"', "readings.column[1].positive",
     "did you mean `down`?"),
    ('positive = "down"', 'positive = "left"', "readings.column[1].positive",
     "known here: down, up, reversed"),
    ('unit = "kN/m"', 'unit = "kg/m"', "source.unit", "mass where a force is due"),
    ("cells = 200", "cells = 2", "source.cells", "give at least 3"),
    ("cells = 200", "cells = 10000000", "source.cells", "give at most "),
    ("cells = 200", 'cells = "200"', "source.cells", "a whole number is due"),
    ('sign = "nonnegative"', 'sign = "positive"', "source.sign", "known here: any, nonnegative"),
    ('from = "0 m", to = "6 m"', 'from = "6 m", to = "2 m"', "source.zones[1].to",
     "does not lie beyond"),
    ('from = "0 m", to = "6 m"', 'from = "0 m", to = "36 m"', "source.zones[1].to",
     "is not on the member"),
    (f"[ {ZONE} ]", f"[ {ZONE},\n{ZONE} ]", "source.zones[2].name", "is taken already"),
    ('{ name = "crane", at = "26 m" }', '{ name = "crane" }', "source.lumped[1]",
     "either `at` or `between`"),
    ('{ name = "crane", at = "26 m" }', '{ name = "crane", at = "29 m", width = "4 m" }',
     "source.lumped[1].width", "reaches beyond an end"),
    ('"17 m", "21 m"', '"17 m", "30 m"', "source.breaks[2]", "is an end of the member"),
    ('value = "4 kN/m"', 'value = "4 kN"', "source.known[1].value", "a force per length"),
    ('value = "920 kN", sd = "20 kN"', 'value = "920 kN"', "source.total", "`sd` is missing"),
    ('value = "920 kN", sd = "20 kN"', 'value = "920 kN", sd = "0 kN"', "source.total.sd",
     "not more than 0"),
    ('zone = "bay 1", at_most', 'zone = "bay 2", at_most', "source.limit.zone",
     "did you mean `bay 1`?"),
    ('solver = "tikhonov"', 'solver = "thikonov"', "strength.solver", "did you mean `tikhonov`?"),
    ('roughness = "averaged"', "roughness = 3", "strength.roughness", "write 0, 1, 2"),
    ('roughness = "averaged"', 'roughness = "3 s"', "strength.roughness", "wrong dimension"),
    ('choose = "averaged"', 'choose = "gvc"', "strength.choose", "did you mean `gcv`?"),
    ('choose = "averaged"', "choose = -1", "strength.choose", "a number above 0"),
    ("level = 0.95", "level = 95", "strength.level", "is not between 0 and 1"),
    ("level = 0.95", "lewel = 0.95", "strength.lewel", "did you mean `level`?"),
    ('title = "Ground beam under stacked goods"', "title = 3", "title", "text in quotes is due"),
    ('title = "Ground beam under stacked goods"', "titel = 3", "titel", "did you mean `title`?"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "key", "words"), EDITS, ids=lambda v: None)
def test_one_fault_is_named_with_its_place(tmp_path, old, new, key, words):
    text = WORKED.replace(old, new, 1)
    assert text != WORKED
    _, message = errors(tmp_path, text)
    line = text[: text.index(new) + len(new)].count("\n") + 1
    if words == "`stiffness` is missing":  # a missing key: the line where its table begins
        line = text[: text.index("[[member.support]]")].count("\n") + 1
    assert f"case.toml:{line}: {key}: " in message, message
    assert words in message
    assert "Traceback" not in message


@pytest.mark.parametrize(
    ("gone", "table", "key"),
    [
        ('kind = "beam"\n', "[member]", "kind"),
        ('length = "30 m"\n', "[member]", "length"),
        ('bending_stiffness = "768 MN*m^2"\n', "[member]", "bending_stiffness"),
        ('right = "free"\n', "[member]", "right"),
        ('at = "24 m"\n', "[[member.support]]", "at"),
        ('file = "settlement.csv"\n', "[readings]", "file"),
        ('position = { column = "x", unit = "m" }\n', "[readings]", "position"),
        ('column = "w"\n', "[[readings.column]]", "column"),
        ('kind = "deflection"\n', "[[readings.column]]", "kind"),
        ('sd = "0.10 mm"\n', "[[readings.column]]", "sd"),
    ],
)
def test_a_missing_key_names_its_table_and_where_it_begins(tmp_path, gone, table, key):
    text = WORKED.replace(gone, "", 1)
    _, message = errors(tmp_path, text)
    line = text[: text.index(table)].count("\n") + 1
    assert f"case.toml:{line}: " in message
    assert f"the key `{key}` is missing from {table}" in message


def test_missing_tables_are_named(tmp_path):
    _, message = errors(tmp_path, 'title = "x"\n')
    assert "`member` is missing from the case" in message
    assert "`readings` is missing from the case" in message
    head = WORKED[: WORKED.index("[[readings.column]]")]
    _, message = errors(tmp_path, head)
    assert "readings has no column; add [[readings.column]]" in message


def test_all_faults_come_at_once_in_the_order_of_the_file(tmp_path):
    text = WORKED
    for old, new in (
        ('"768 MN*m^2"', '"768 MN"'), ('at = "24 m"', 'at = "34 m"'),
        ('unit = "mm"', 'unit = "s"'), ("cells = 200", "cells = 1"),
        ("level = 0.95", "level = 2"), ('right = "free"', 'rigth = "free"'),
    ):  # fmt: skip
        text = text.replace(old, new, 1)
    error, message = errors(tmp_path, text)
    assert message.startswith("case.toml: 7 errors\n")
    lines = [int(row.split(":")[1]) for row in message.split("\n")[1:]]
    assert len(lines) == 7
    assert lines == sorted(lines)
    assert not isinstance(error, UnitError)


def test_only_unit_faults_are_a_unit_error(tmp_path):
    text = WORKED.replace('"768 MN*m^2"', '"768 MN"').replace('unit = "mm"', 'unit = "s"')
    error, message = errors(tmp_path, text)
    assert isinstance(error, UnitError)
    assert "2 errors" in message


@pytest.mark.parametrize(
    ("old", "new", "line", "words"),
    [
        ('length = "30 m"', 'length = "30 m', 5, "no valid TOML"),
        ('length = "30 m"', "length = 30 m", 5, "no valid TOML"),
        ('length = "30 m"', 'length = "30 m"\nlength = "3 m"', 6, "no valid TOML"),
    ],
)
def test_faults_of_the_text_itself(tmp_path, old, new, line, words):
    _, message = errors(tmp_path, WORKED.replace(old, new, 1))
    assert message.startswith(f"case.toml:{line}: ")
    assert words in message


def test_files_that_are_no_case(tmp_path):
    with pytest.raises(CaseError, match="cannot be read"):
        load_case(tmp_path / "none.toml")
    with pytest.raises(CaseError, match="cannot be read"):
        load_case(tmp_path)
    (tmp_path / "case.toml").write_bytes(b'title = "caf\xe9"\n')
    with pytest.raises(CaseError, match=r"case\.toml:1: the case is no UTF-8 text"):
        load_case(tmp_path / "case.toml")
    (tmp_path / "case.toml").write_text("a = " + "[" * 5000)
    with pytest.raises(CaseError):
        load_case(tmp_path / "case.toml")


# -- through mappings: no file, so the key alone ------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "key", "words"),
    [
        ({"smooth": False}, "source.smooth", "nothing is left to be found"),
        ({"zero": [["0 m", "12 m"], ["12 m", "30 m"]]}, "source.zero", "covers the whole member"),
        ({"sign": "nonnegative", "total": {"value": "-101 kN", "sd": "20 kN"}}, "source.sign",
         "contradicts the known total"),
        ({"sign": "nonpositive", "total": {"value": "101 kN", "sd": "20 kN"}}, "source.sign",
         "contradicts the known total"),
        ({"background": "known"}, "source.background", "known here: unknown"),
        ({"lumped": [{"name": "a", "at": "1 m"}, {"name": "a", "at": "2 m"}]},
         "source.lumped[2].name", "is taken already"),
        ({"known": [{"value": "3 N/m"}]}, "source.known[1]", "give `from` and `to`, or `at`"),
        ({"zones": {"name": "a"}}, "source.zones", "a list in brackets"),
        ({"zones": ["a"]}, "source.zones[1]", "is no table"),
        ({"zero": ["0 m", "3 m"]}, "source.zero[1]", "is no stretch"),
        ({"total_unit": "kN*m"}, "source.total_unit", "give a force"),
        ({"position_unit": "s"}, "source.position_unit", "give a length"),
        ({"limit": {"zone": "a", "at_most": "3 N"}}, "source.limit.zone", "is no zone"),
        ({"monotone": [{"from": "0 m", "to": "8 m", "trend": "rising"},
                       {"from": "7 m", "to": "30 m", "trend": "falling"}]}, "source.monotone",
         "overlap"),
    ],
)  # fmt: skip
def test_faults_of_a_source(changes, key, words):
    with pytest.raises(CaseError) as caught:
        case(source=changes)
    assert f"{key}: " in str(caught.value)
    assert words in str(caught.value)


def test_a_sign_that_the_total_allows_is_no_fault():
    for value in ("-99 kN", "500 kN"):
        found = case(source={"sign": "nonnegative", "total": {"value": value, "sd": "20 kN"}})
        assert found.source.sign == "nonnegative"


@pytest.mark.parametrize(
    ("mapping", "key", "words"),
    [
        ({**BEAM, "support": [{"at": p, "kind": "pinned"} for p in ("3 m", "300 cm")]},
         "member.support[2].at", "support 1 stands at the same place"),
        ({**BEAM, "support": [{"at": "3 m", "kind": "pinned", "stiffness": "3 N/m"}]},
         "member.support[1].stiffness", "a pinned support is rigid"),
        ({**BEAM, "hinge": [{"spring": "3 N*m"}]}, "member.hinge[1]", "`at` is missing"),
        ({**BEAM, "interface": []}, "member.interface", "is no key of [member]"),
        ({**BAR, "hinge": []}, "member.hinge", "is no key of [member]"),
        ({**BAR, "interface": [{"at": "1 m", "resistance": "-1 K/W"}]},
         "member.interface[1].resistance", "less than 0"),
        ({**BAR, "left": {"spring": "2 N/m"}}, "member.left", "write { value = … }"),
        ({**BAR, "left": {"transfer": "2 W/m", "ambient": "2 degC"}}, "member.left.transfer",
         "heat flow per kelvin"),
        ({**BAR, "left": {"transfer": "2 W/K", "ambient": "2 degC", "x": 1}}, "member.left.x",
         "is no key of"),
        ({**BAR, "left": {"value": "unknown", "sd": "2 K"}}, "member.left.sd", "add `guess`"),
        ({**BAR, "left": {"value": "-300 degC"}}, "member.left.value", "below absolute zero"),
        ({**BAR, "ambient": "20 C"}, "member.ambient", "write degC"),
        ({**BAR, "damping": "0.1"}, "member.damping", "is no key of"),
        ({**BEAM, "damping": "0.1"}, "member.damping", "add `frequency`"),
        ({**BEAM, "frequency": "6 rad/s"}, "member.frequency", "angular rate"),
        ({**BEAM, "frequency": "0 Hz"}, "member.frequency", "not more than 0"),
        ({**BEAM, "bending_stiffness": abs}, "member.bending_stiffness", "only by kind `general`"),
        ({**BEAM, "shear_stiffness": "0 N"}, "member.shear_stiffness", "not positive"),
        ({**BEAM, "left": 3}, "member.left", "is no end"),
        ({"kind": "column", "length": "1 m", "diffusivity": "1 m^2/s", "porosity": "1.2",
          "left": "free", "right": "free"}, "member.porosity", "more than 1"),
        ({"kind": "column", "length": "1 m", "diffusivity": "1 m^2/s", "left": "free",
          "right": {"value": "3 kg/m^2"}}, "member.right.value", "wrong dimension"),
        ({"kind": "cylinder", "inner_radius": "2 m", "outer_radius": "1 m", "left": "free",
          "conductivity": "1 W/(m*K)", "right": "free"}, "member.outer_radius", "not beyond"),
        ({"kind": "general", "start": 0, "end": 1, "p": 1, "left": "free", "right": "free"},
         "member", "`order` is missing"),
        ({"kind": "general", "order": 3, "start": 0, "end": 1, "p": 1, "left": "free",
          "right": "free"}, "member.order", "write 2 or 4"),
        ({"kind": "general", "order": 2, "start": 0, "end": 1, "p": "x - 0.5", "left": "free",
          "right": "free"}, "member.p", "not positive everywhere"),
        ({"kind": "general", "order": 2, "start": 0, "end": 1, "p": lambda x: x[:2],
          "left": "free", "right": "free"}, "member.p", "gives shape"),
        ({"kind": "general", "order": 2, "start": 0, "end": 1, "p": lambda x: 1 / 0,
          "left": "free", "right": "free"}, "member.p", "fails with ZeroDivisionError"),
        ({"kind": "general", "order": 2, "start": 0, "end": 1, "p": 1, "left": {"a": 0, "b": 0},
          "right": "free"}, "member.left", "both 0"),
        ({**UNCERTAIN, "uncertainty": {"left.settlement": "1 kN"}},
         'member.uncertainty."left.settlement"', "wrong dimension"),
        ({**BAR, "left": {"value": "20 degC"}, "uncertainty": {"left.value": "1 %"}},
         'member.uncertainty."left.value"', "no relative uncertainty"),
        ({**BAR, "left": {"value": "unknown"}, "uncertainty": {"left.value": "1 K"}},
         'member.uncertainty."left.value"', "give it an `sd`"),
        ({}, "member", "`kind` is missing"),
        ({"kind": 3}, "member.kind", "is no member kind"),
    ],
)  # fmt: skip
def test_faults_of_a_member(mapping, key, words):
    with pytest.raises(CaseError) as caught:
        make_member(mapping)
    assert f"{key}: " in str(caught.value), str(caught.value)
    assert words in str(caught.value), str(caught.value)


@pytest.mark.parametrize(
    ("readings", "key", "words"),
    [
        ({**READINGS, "table": [READINGS]}, "readings.file", "has its own `file`"),
        ({"table": []}, "readings.table", "there is no table"),
        ({"table": [{**READINGS, "column": []}]}, "readings.table[1]",
         "[[readings.table.column]]"),
        ({**READINGS, "position": {"column": "x", "gauge": "g"}}, "readings.position", "`file`"),
        ({**READINGS, "column": [COLUMN, {**COLUMN, "kind": "rotation", "unit": "rad",
          "sd": "1 mrad", "group": "w (deflection)"}, {**COLUMN, "group": "w (deflection)"}]},
         "readings.column[3].group", "holds rotation already"),
        ({**READINGS, "column": [{**COLUMN, "offset": "1 mm"}, {**COLUMN, "offset": "2 mm"}]},
         "readings.column[2].offset", "has another offset already"),
        ({**READINGS, "column": [COLUMN, {**COLUMN, "sd": "estimate"}]}, "readings.column[2].sd",
         "both stated and estimated"),
        ({**READINGS, "column": [{**COLUMN, "kind": "strain", "unit": "ue", "sd": "1 ue"}]},
         "readings.column[1]", "`distance` is missing"),
        ({**READINGS, "column": [{**COLUMN, "sd_column": "s"}]}, "readings.column[1].sd_column",
         "exclude each other"),
        ({**READINGS, "column": [{**COLUMN, "correlation": 1.0}]},
         "readings.column[1].correlation", "not between -1 and 1"),
        ({**READINGS, "column": [{**COLUMN, "scale": 0}]}, "readings.column[1].scale",
         "leaves nothing"),
        ({**READINGS, "column": [{**COLUMN, "column": ["a", "a"]}]},
         "readings.column[1].column[2]", "listed twice"),
        ({**READINGS, "column": [{**COLUMN, "step": "unknown"}]}, "readings.column[1].step",
         "is no table"),
        ({**READINGS, "column": [{**COLUMN, "component": "real"}]},
         "readings.column[1].component", "add `frequency`"),
    ],
)  # fmt: skip
def test_faults_of_readings(readings, key, words):
    with pytest.raises(CaseError) as caught:
        make_case({"member": BEAM, "readings": readings})
    assert f"{key}: " in str(caught.value), str(caught.value)
    assert words in str(caught.value), str(caught.value)


def test_driven_sources_have_no_sign():
    with pytest.raises(CaseError, match=r"source\.sign: "):
        case({**BEAM, "frequency": "3 Hz"}, source={"sign": "nonnegative"})


def test_column_amounts_must_agree():
    member = {"kind": "column", "length": "1 m", "diffusivity": "1 m^2/s", "left": "closed",
              "right": {"value": "3 Bq/m^3"}}  # fmt: skip
    with pytest.raises(UnitError, match=r"member\.right\.value: .* as in mol/m\^3"):
        case(member, {"kind": "concentration", "unit": "mol/m^3", "sd": "1 mol/m^3"})


# -- nothing but SrcfitError ever comes out -----------------------------------------------------

LEAVES = st.one_of(
    st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=12),
    st.sampled_from(["unknown", "3 m", "20 degC", "fixed", "pinned", "1 kN/m", "10 %"]),
)  # fmt: skip
WORDS = (
    "kind value sd at from to unit column file name zone position left guess a b spring unknown"
)
KEYS = st.sampled_from(WORDS.split())
VALUES = st.recursive(
    LEAVES,
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(KEYS, inner, max_size=4)),
    max_leaves=8,
)
PLACES = [
    (table, key)
    for table, keys in tomllib.loads(WORKED).items()
    if isinstance(keys, dict)
    for key in keys
]


@pytest.mark.parametrize("kind", ["beam", "conductor", "general", "column"])
@given(
    value=VALUES, place=st.sampled_from(PLACES), extra=st.sampled_from(["hinge", "ambient", "p"])
)
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_any_value_anywhere_is_read_or_refused_with_a_message(kind, value, place, extra):
    data = tomllib.loads(WORKED)
    data["member"]["kind"] = kind
    data[place[0]][place[1]] = value
    data["member"][extra] = value
    message = ""
    try:
        make_case(data)
    except SrcfitError as error:
        message = str(error)
    assert len(message) < 20_000


@given(st.text(max_size=300))
@settings(
    max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
def test_any_text_as_a_case_is_refused_with_a_message(tmp_path, text):
    path = tmp_path / "case.toml"
    path.write_bytes(text.encode("utf-8", "surrogatepass"))
    with pytest.raises(SrcfitError):
        load_case(path)


def test_errors_name_the_file_not_its_folder(tmp_path):
    _, message = errors(tmp_path, WORKED.replace('"30 m"', '"30 s"'))
    assert os.sep + "case.toml" not in message
