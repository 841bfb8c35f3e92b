"""Every kind of input that cannot be used: status 3, one sentence, nothing written."""

from pathlib import Path

import pytest

from srcfit import cli

CASE = """title = "Invented beam"

[member]
kind = "beam"
length = "4 m"
bending_stiffness = "1.68 MN*m^2"
left = "pinned"
right = "pinned"

[readings]
file = "data.csv"
position = { column = "x", unit = "m" }
[[readings.column]]
column = "w"
kind = "deflection"
unit = "mm"
sd = "0.1 mm"

[source]
unit = "kN/m"
cells = 40
zones = [ { name = "bay 1", from = "0 m", to = "2 m" } ]
"""
DATA = "x,w\n0.5,1.1\n1.0,2.1\n1.5,2.7\n2.0,2.9\n2.5,2.7\n3.0,2.1\n3.5,1.1\n"


def swap(old, new):
    assert old in CASE
    return CASE.replace(old, new)


SUPPORT = '\n[[member.support]]\nat = "2 m"\nkind = "pinned"\n'
READ = "\n[readings]\n"
SETTLED = SUPPORT + 'settlement = "unknown"\n'

CASES = {
    # what is wrong: (case, data, words of the sentence)
    "unknown key": (swap("length =", "lenght ="), DATA, ["case.toml:5", "lenght", "length"]),
    "missing key": (swap('length = "4 m"\n', ""), DATA, ["case.toml:3", "length"]),
    "no readings table": (CASE[: CASE.index(READ)], DATA, ["readings"]),
    "unknown kind": (swap('"beam"', '"bem"'), DATA, ["case.toml:4", "bem", "beam"]),
    "unknown sensor": (swap('"deflection"', '"deflexion"'), DATA,
                       ["case.toml:15", "deflexion", "deflection"]),
    "wrong unit": (swap('"1.68 MN*m^2"', '"1.68 MN*m"'), DATA,
                   ["case.toml:6", "bending_stiffness", "MN*m", "dimension"]),
    "unknown unit": (swap('"4 m"', '"4 metron"'), DATA, ["case.toml:5", "metron"]),
    "bare number": (swap('"4 m"', "4"), DATA, ["case.toml:5", "length", "unit"]),
    "no unit in the text": (swap('"4 m"', '"4"'), DATA, ["case.toml:5", "length", "unit"]),
    "negative stiffness": (swap('"1.68 MN', '"-1.68 MN'), DATA,
                           ["case.toml:6", "bending_stiffness"]),
    "not a number": (swap('"1.68 MN', '"nan MN'), DATA, ["case.toml:6", "nan"]),
    "length zero": (swap('"4 m"', '"0 m"'), DATA, ["case.toml:5", "length"]),
    "negative sd": (swap('"0.1 mm"', '"-0.1 mm"'), DATA, ["case.toml:17", "sd"]),
    "zone outside": (swap('to = "2 m"', 'to = "5 m"'), DATA,
                     ["case.toml:22", "zones[1].to", "5 m", "4 m"]),
    "zone the wrong way round": (swap('to = "2 m"', 'to = "-1 m"'), DATA, ["case.toml:22"]),
    "duplicate support": (swap(READ, SUPPORT * 2 + READ), DATA, ["case.toml", "support"]),
    "support outside": (swap(READ, SUPPORT.replace("2 m", "7 m") + READ), DATA,
                        ["case.toml:11", "support"]),
    "unknown end": (swap('left = "pinned"', 'left = "pined"'), DATA,
                    ["case.toml:7", "pined", "pinned"]),
    "no valid toml": (swap('length = "4 m"', 'length = "4 m'), DATA, ["case.toml:5"]),
    "key twice": (swap('length = "4 m"', 'length = "4 m"\nlength = "5 m"'), DATA,
                  ["case.toml"]),
    "binary case": (b"\xff\xfe\x00\x01" * 50, DATA, ["case.toml", "UTF-8"]),
    "empty case": ("", DATA, ["case.toml", "member"]),
    "missing column": (CASE, DATA.replace("w", "v", 1), ["data.csv", "w"]),
    "empty data": (CASE, "", ["data.csv", "empty"]),
    "header only": (CASE, "x,w\n", ["data.csv"]),
    "binary data": (CASE, bytes(range(256)) * 8, ["data.csv"]),
    "no number in the data": (CASE, "x,w\n1,nan\n2,---\n3,n/a\n", ["data.csv"]),
    "missing data": (CASE, None, ["data.csv", "no such file"]),
    "all off the member": (CASE, "x,w\n14,1\n15,2\n", ["data.csv"]),
    "too few readings": (swap(READ, SETTLED + READ), "x,w\n1,1\n", ["1 usable reading",
                                                                   "settlement:2 m"]),
    "column twice": (CASE, "x,w,w\n1,1,2\n2,2,3\n", ["data.csv", "w"]),
    "unknown solver": (CASE + '\n[strength]\nsolver = "tichonov"\n', DATA,
                       ["case.toml:25", "tichonov", "tikhonov"]),
    "level above 1": (CASE + "\n[strength]\nlevel = 95\n", DATA, ["case.toml:25", "level"]),
    "too many cells": (swap("cells = 40", "cells = 100000000"), DATA, ["case.toml:21", "cells"]),
    "limit without zone": (CASE + 'limit = { zone = "bay 2", at_most = "3 kN/m" }\n', DATA,
                           ["case.toml:23", "bay 2"]),
    "sign against the total": (
        CASE + 'sign = "nonnegative"\ntotal = { value = "-90 kN", sd = "1 kN" }\n', DATA,
        ["case.toml", "total"]),
}  # fmt: skip


def tree(folder):
    return {p: p.read_bytes() if p.is_file() else None for p in Path(folder).rglob("*")}


@pytest.fixture
def job(tmp_path, monkeypatch):
    """A folder with a usable case, the current folder of the run."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "case.toml").write_text(CASE, "utf-8")
    (tmp_path / "data.csv").write_text(DATA, "utf-8")
    return tmp_path


def refused(capsys, folder, *argv):
    """The one message of a refused run: a sentence, or several with one in each line."""
    before = tree(folder)
    status = cli.main([str(a) for a in argv])
    out, err = capsys.readouterr()
    assert (status, out) == (3, "")
    assert tree(folder) == before
    assert "Traceback" not in err
    sentence, *more = [line for line in err.splitlines() if not line.startswith(
        ("srcfit: reading ", "srcfit: recovering "))]  # fmt: skip
    assert sentence.startswith("srcfit: ")
    assert len(more) == (int(sentence.split()[-2]) if sentence.endswith(" errors") else 0)
    assert all(line.startswith("  ") for line in more)
    sentence = " ".join([sentence, *(line.strip() for line in more)])
    assert sentence.endswith(".")
    return sentence


@pytest.mark.parametrize("what", CASES)
def test_input_that_cannot_be_used(job, capsys, what):
    case, data, words = CASES[what]
    for name, content in (("case.toml", case), ("data.csv", data)):
        if content is None:
            (job / name).unlink()
        else:
            (job / name).write_bytes(content if isinstance(content, bytes) else content.encode())
    sentence = refused(capsys, job, "recover", "case.toml")
    for word in words:
        assert word in sentence


@pytest.mark.parametrize("command", [["recover"], ["inspect"], ["predict", "--source", "s.csv"]])
def test_a_missing_case(job, capsys, command):
    sentence = refused(capsys, job, *command, "none.toml")
    assert "none.toml" in sentence


def test_a_folder_in_place_of_the_case(job, capsys):
    (job / "folder.toml").mkdir()
    assert "folder.toml" in refused(capsys, job, "recover", "folder.toml")


def test_a_folder_in_place_of_the_data(job, capsys):
    (job / "data.csv").unlink()
    (job / "data.csv").mkdir()
    assert "data.csv" in refused(capsys, job, "recover", "case.toml")


def test_data_that_cannot_be_read(job, capsys):
    (job / "case.toml").write_text(CASE.replace("data.csv", "/proc/self/mem"))
    assert "/proc/self/mem" in refused(capsys, job, "recover", "case.toml")


@pytest.mark.parametrize(
    ("output", "words"),
    [
        ("old", ["output folder old", "exists already", "--replace"]),
        ("data.csv", ["output folder data.csv", "a file of that name"]),
        ("data.csv/out", ["data.csv/out", "cannot be written"]),
        ("/proc/out", ["/proc/out", "cannot be written"]),
        (".", ["output folder .", "exists already"]),
    ],
)
def test_an_output_folder_that_cannot_be_made(job, capsys, output, words):
    (job / "old").mkdir()
    (job / "old" / "mine.txt").write_text("mine")
    sentence = refused(capsys, job, "recover", "case.toml", "-o", output)
    for word in words:
        assert word in sentence


def test_the_folder_of_the_case_is_not_replaced(job, capsys):
    assert "it holds" in refused(capsys, job, "recover", "case.toml", "-o", ".", "--replace")


def test_sources_that_cannot_be_used(job, capsys):
    argv = ["predict", "case.toml", "--source", "s.csv"]
    assert "s.csv" in refused(capsys, job, *argv)
    (job / "s.csv").write_text("from [m],to [m],value [kN/m]\n0,9,2\n")
    assert "s.csv:2" in refused(capsys, job, *argv)
    (job / "s.csv").write_text("from [m],to [m],value [kN/m]\n0,4,2\n")
    assert "exists already" in refused(capsys, job, *argv, "-o", "data.csv")
