"""Saving: whole or not at all, strict JSON, CSV that reads back."""

import csv
import errno
import io
import json
import os
import shutil
from dataclasses import replace
from pathlib import Path

import fake_recovery
import numpy as np
import pandas as pd
import pytest

from srcfit import output, plots, report
from srcfit.errors import OutputError

FILES = {"source.csv", "zones.csv", "readings.csv", "ladder.csv", "summary.json", "report.html",
         "section.csv", "figures"}  # fmt: skip


@pytest.fixture
def recovery():
    return fake_recovery.make("beam", 6, 12)


@pytest.fixture
def pages(monkeypatch):
    """Figures and report in no time; the real ones are tested where they are made."""

    def figures(found, folder):
        (Path(folder) / "source.png").write_bytes(b"picture")

    monkeypatch.setattr(plots, "save_figures", figures)
    monkeypatch.setattr(report, "render", lambda found: "<html>ü</html>")


def tree(folder):
    """Every file below a folder with its bytes, and every folder."""
    return {
        str(p.relative_to(folder)): p.read_bytes() if p.is_file() else None
        for p in sorted(Path(folder).rglob("*"))
    }


@pytest.mark.usefixtures("pages")
def test_every_file_is_written(recovery, tmp_path):
    saved = output.save(recovery, tmp_path / "new" / "deep" / "out")
    assert {p.name for p in saved.folder.iterdir()} == FILES
    assert saved.kept is None
    assert (saved.folder / "report.html").read_text("utf-8") == "<html>ü</html>"
    assert [p.name for p in saved.folder.parent.iterdir()] == ["out"]


@pytest.mark.usefixtures("pages")
def test_the_folder_can_be_entered_by_others_as_the_umask_says(recovery, tmp_path):
    old = os.umask(0o022)
    try:
        saved = output.save(recovery, tmp_path / "out")
    finally:
        os.umask(old)
    assert saved.folder.stat().st_mode & 0o777 == 0o755


@pytest.mark.usefixtures("pages")
def test_tables_read_back_with_ten_digits(recovery, tmp_path):
    values = recovery.source.copy()
    name = values.columns[1]
    values[name] = np.pi * 10.0 ** np.arange(-6, len(values) - 6)
    saved = output.save(replace(recovery, source=values), tmp_path / "out")
    found = pd.read_csv(saved.folder / "source.csv")
    assert list(found.columns) == list(values.columns)
    np.testing.assert_allclose(found[name], values[name], rtol=5e-10)
    assert (found[name] != values[name]).any()  # ten digits, not all of them
    rows = list(csv.DictReader(io.StringIO((saved.folder / "readings.csv").read_text("utf-8"))))
    assert len(rows) == len(recovery.readings)
    left_out = [row for row in rows if row["used"] == "False"]
    assert [row["reason"] for row in left_out] == ["below detection"] * 2
    assert {row["predicted"] for row in left_out} == {""}


def test_csv_text_keeps_awkward_texts_and_empty_numbers():
    frame = pd.DataFrame({"name": ['a,"b"\nc', "d"], "n": [3, 4], "v": [None, 0.1 + 0.2]})
    frame["v"] = frame["v"].astype(object)
    text = output.csv_text(frame)
    assert list(csv.reader(io.StringIO(text))) == [
        ["name", "n", "v"], ['a,"b"\nc', "3", ""], ["d", "4", "0.3"],
    ]  # fmt: skip


def test_summary_is_strict_json_in_the_order_of_the_schema(recovery):
    facts = recovery.summary()
    facts = dict(reversed(facts.items()))
    facts["total"] = {"upper": np.float64(2), "imaginary": {"value": 1.0}, "lower": float("inf"),
                      "sd": float("nan"), "value": np.float64(1)}  # fmt: skip
    facts["extra"] = np.arange(2)
    del facts["limit"]
    found = json.loads(output.summary_text(facts), parse_constant=pytest.fail)
    assert list(found) == [*output.SCHEMA, "extra"]
    assert found["limit"] is None
    assert found["extra"] == [0, 1]
    assert list(found["total"].items()) == [
        ("value", 1.0), ("sd", None), ("lower", None), ("upper", 2.0),
        ("imaginary", {"value": 1.0}),
    ]  # fmt: skip
    assert list(found["zones"][0]) == list(output.SCHEMA["zones"])


def test_schema_names_every_key_of_a_summary(recovery):
    assert set(recovery.summary()) == set(output.SCHEMA)


@pytest.mark.usefixtures("pages")
def test_an_existing_folder_is_refused_and_replaced_when_asked(recovery, tmp_path):
    out = tmp_path / "out"
    output.save(recovery, out)
    (out / "figures" / "stale.png").write_bytes(b"old")
    before = tree(tmp_path)
    with pytest.raises(OutputError, match=r"exists already; .*--replace"):
        output.save(recovery, out)
    assert tree(tmp_path) == before
    saved = output.save(recovery, out, replace=True)
    assert set(tree(saved.folder)) == FILES | {"figures/source.png"}
    assert [p.name for p in tmp_path.iterdir()] == ["out"]


@pytest.mark.usefixtures("pages")
def test_files_of_the_user_are_moved_aside_never_lost(recovery, tmp_path):
    out = tmp_path / "out"
    for text in ("first", "second"):
        out.mkdir(exist_ok=True)
        (out / "notes.txt").write_text(text)
        saved = output.save(recovery, out, replace=True)
        assert {p.name for p in out.iterdir()} == FILES
        assert (saved.kept / "notes.txt").read_text() == text
    assert sorted(p.name for p in tmp_path.iterdir()) == ["out", "out-kept", "out-kept1"]


@pytest.mark.parametrize("failing", ["figures", "report", "table"])
@pytest.mark.parametrize("error", [RuntimeError, KeyboardInterrupt, SystemExit])
@pytest.mark.usefixtures("pages")
def test_a_failure_leaves_everything_as_it_was(recovery, tmp_path, monkeypatch, failing, error):
    out = tmp_path / "out"
    output.save(recovery, out)
    before = tree(tmp_path)

    def fail(*args):
        raise error

    owner, name = {"figures": (plots, "save_figures"), "report": (report, "render"),
                   "table": (output, "csv_text")}[failing]  # fmt: skip
    monkeypatch.setattr(owner, name, fail)
    with pytest.raises(error):
        output.save(recovery, out, replace=True)
    assert tree(tmp_path) == before
    with pytest.raises(error):
        output.save(recovery, tmp_path / "a" / "b")
    assert tree(tmp_path) == before


@pytest.mark.usefixtures("pages")
@pytest.mark.parametrize("step", [1, 2])
def test_a_failure_between_the_two_renames_brings_the_old_folder_back(
    recovery, tmp_path, monkeypatch, step
):
    out = tmp_path / "out"
    output.save(recovery, out)
    before = tree(tmp_path)
    real, calls = Path.rename, []

    def rename(self, target):
        calls.append(self)
        if len(calls) == step:
            raise KeyboardInterrupt
        return real(self, target)

    monkeypatch.setattr(Path, "rename", rename)
    with pytest.raises(KeyboardInterrupt):
        output.save(recovery, out, replace=True)
    assert len(calls) == step + (step == 2)
    assert tree(tmp_path) == before


@pytest.mark.usefixtures("pages")
def test_a_full_disk_is_an_output_error(recovery, tmp_path, monkeypatch):
    def full(*args):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(plots, "save_figures", full)
    with pytest.raises(OutputError, match=r"cannot be written .no space left on device"):
        output.save(recovery, tmp_path / "out")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.usefixtures("pages")
def test_folders_that_must_not_go_are_not_replaced(recovery, tmp_path, monkeypatch):
    case_file = tmp_path / "job" / "case.toml"
    case_file.parent.mkdir()
    case_file.write_text("")
    data = tmp_path / "data" / "invented.csv"
    data.parent.mkdir()
    data.write_text("")
    table = replace(recovery.case.tables[0], file=data)
    case = replace(recovery.case, path=case_file, tables=(table,), folder=case_file.parent)
    found = replace(recovery, case=case)
    (tmp_path / "here" / "below").mkdir(parents=True)
    monkeypatch.chdir(tmp_path / "here" / "below")
    monkeypatch.setenv("HOME", str(tmp_path / "home" / "me"))
    (tmp_path / "home" / "me").mkdir(parents=True)
    for folder in ("job", "data", "here", "home", "."):
        with pytest.raises(OutputError, match=r"it holds .* so it is not replaced"):
            output.save(found, tmp_path / folder, replace=True)
    assert case_file.exists()
    assert data.exists()


@pytest.mark.parametrize("replace_it", [False, True])
def test_check_refuses_early_and_leaves_nothing(tmp_path, replace_it):
    (tmp_path / "file").write_text("mine")
    before = tree(tmp_path)
    for folder, words in (
        ("file", "a file of that name"),
        ("file/out", "cannot be written"),
        ("x" * 300, "cannot be written .file name too long"),
    ):
        with pytest.raises(OutputError, match=words):
            output.check(tmp_path / folder, replace=replace_it)
    assert output.check(tmp_path / "a" / "b" / "c", replace=replace_it) == tmp_path / "a/b/c"
    assert tree(tmp_path) == before


def test_check_follows_a_link_to_where_the_folder_is(tmp_path):
    (tmp_path / "real").mkdir()
    (tmp_path / "link").symlink_to("real")
    with pytest.raises(OutputError, match="exists already"):
        output.check(tmp_path / "link")
    assert output.check(tmp_path / "link", replace=True) == tmp_path / "real"


def test_one_file_in_one_step(tmp_path, monkeypatch):
    path = tmp_path / "deep" / "out.csv"
    assert output.put_file(path, "ä") == path
    assert path.read_bytes() == "ä".encode()
    with pytest.raises(OutputError, match=r"output file .* exists already"):
        output.put_file(path, "b")
    output.put_file(path, b"b", replace=True)
    with pytest.raises(OutputError, match="a folder of that name"):
        output.put_file(path.parent, "b", replace=True)

    def fail(self, target):
        raise OSError(errno.EACCES, os.strerror(errno.EACCES))

    monkeypatch.setattr(Path, "replace", fail)
    with pytest.raises(OutputError, match="permission denied"):
        output.put_file(path, "c", replace=True)
    assert path.read_bytes() == b"b"
    assert [p.name for p in path.parent.iterdir()] == ["out.csv"]


def test_the_real_figures_and_page_are_written(tmp_path):
    found = fake_recovery.make("conductor", 5, 10, rungs=6)
    saved = output.save(found, tmp_path / "out")
    assert {p.name for p in saved.folder.iterdir()} == FILES
    assert len(list((saved.folder / "figures").iterdir())) >= 4
    assert "</html>" in (saved.folder / "report.html").read_text("utf-8")
    shutil.rmtree(saved.folder)
