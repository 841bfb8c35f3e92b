"""The command line: messages, exit statuses, streams, and what it leaves on the disk."""

import io
import json
import os
import signal
import subprocess
import sys
import types
from dataclasses import replace
from pathlib import Path

import fake_recovery
import numpy as np
import pytest

import srcfit
from srcfit import cli, plots, report
from srcfit.case.model import Limit
from srcfit.errors import Finding, ReadingsError
from srcfit.members import MEMBERS
from srcfit.readings.model import Readings

ROOT = Path(srcfit.__file__).parent.parent
LUMPED = 'lumped = [ { name = "pole", at = "5 m" } ]\n\n'


def run(capsys, *argv):
    """(exit status, stdout, stderr) of one call."""
    status = cli.main([str(a) for a in argv])
    out, err = capsys.readouterr()
    return status, out, err


def process(*argv, cwd=None, **kwargs):
    env = os.environ | {"PYTHONPATH": str(ROOT), "OMP_NUM_THREADS": "1"}
    command = [sys.executable, *argv]
    return subprocess.Popen(command, cwd=cwd, env=env, text=True, stdout=subprocess.PIPE,
                            stderr=subprocess.PIPE, **kwargs)  # fmt: skip


# --- words, usage, lists -----------------------------------------------------------------------


def test_version(capsys):
    assert run(capsys, "--version") == (0, f"srcfit {srcfit.__version__}\n", "")


def test_help_names_every_command_the_exit_statuses_and_completion(capsys):
    status, out, err = run(capsys, "--help")
    assert (status, err) == (0, "")
    for word in ("kinds", "new", "inspect", "recover", "compare", "predict", "--version",
                 "Exit status",
                 "_SRCFIT_COMPLETE=bash_source", "_SRCFIT_COMPLETE=zsh_source"):  # fmt: skip
        assert word in out


@pytest.mark.parametrize("name", sorted(cli.cli.commands))
def test_every_command_explains_itself(capsys, name):
    status, out, _ = run(capsys, name, "--help")
    assert status == 0
    assert out.startswith(f"Usage: srcfit {name} ")
    options = [o for o in cli.cli.commands[name].params if o.param_type_name == "option"]
    assert options
    assert all(o.help for o in options)


@pytest.mark.parametrize(
    ("argv", "words"),
    [
        ([], "Usage: srcfit"),
        (["recovr", "case.toml"], "Did you mean 'recover'?"),
        (["recover"], "Missing argument 'CASE'"),
        (["recover", "case.toml", "--sed", "1"], "--seed"),
        (["recover", "case.toml", "--seed", "-1"], "--seed"),
        (["recover", "case.toml", "--seed", "x"], "--seed"),
        (["predict", "case.toml"], "--source"),
        (["kinds", "bem"], "did you mean beam?"),
        (["new", "zzz"], "did you mean rod, cable"),
        (["new"], "KIND"),
    ],
)
def test_wrong_usage_is_2(capsys, tmp_path, monkeypatch, argv, words):
    monkeypatch.chdir(tmp_path)
    status, out, err = run(capsys, *argv)
    assert (status, out) == (2, "")
    assert words in err
    assert list(tmp_path.iterdir()) == []


def test_kinds_lists_every_kind(capsys):
    status, out, _ = run(capsys, "kinds")
    assert status == 0
    assert [line.split()[0] for line in out.splitlines()[1 : len(MEMBERS) + 1]] == list(MEMBERS)
    status, out, _ = run(capsys, "kinds", "--json")
    assert [k["kind"] for k in json.loads(out)] == list(MEMBERS)


@pytest.mark.parametrize("kind", MEMBERS)
def test_kinds_tells_all_that_a_kind_takes(capsys, kind):
    spec = MEMBERS[kind]
    status, out, err = run(capsys, "kinds", kind)
    assert (status, err) == (0, "")
    words = [c.key for c in spec.coefficients] + [s.name for s in spec.sensors]
    words += [c.unit for c in spec.coefficients] + [spec.source_unit, spec.response_unit]
    words += [f'"{w}"' for w in spec.end_words]
    words += ["length"] if spec.geometry == "line" and kind != "general" else []
    words += ["inner_radius", "outer_radius"] if spec.geometry != "line" else []
    words += ["ambient", "transfer"] if spec.relative else ["spring"]
    for word in words:
        assert word in out, word
    flat = " ".join(out.split())
    for caution in spec.cautions:
        assert " ".join(caution.split()) in flat
    status, out, _ = run(capsys, "kinds", kind, "--json")
    facts = json.loads(out)
    assert [s["kind"] for s in facts["sensors"]] == [s.name for s in spec.sensors]
    required = {k["key"] for k in facts["keys"] if k["required"]}
    assert required >= {c.key for c in spec.coefficients if c.required}


def test_completion_offers_commands_and_kinds():
    env = {"_SRCFIT_COMPLETE": "bash_complete", "COMP_WORDS": "srcfit kinds s", "COMP_CWORD": "2"}
    env = os.environ | {"PYTHONPATH": str(ROOT)} | env
    done = subprocess.run([sys.executable, "-m", "srcfit"], capture_output=True, env=env)
    assert done.stdout.split() == [b"plain,shaft", b"plain,sphere"]


# --- errors ------------------------------------------------------------------------------------


def test_several_errors_stand_one_a_line(tmp_path, capsys):
    (tmp_path / "c.toml").write_text('[member]\nkind = "beam"\nlength = 8\nsize = 3\n')
    assert cli.main(["inspect", str(tmp_path / "c.toml")]) == 3
    first, *rest = capsys.readouterr().err.splitlines()[1:]
    assert first.endswith("errors")
    assert int(first.split()[-2]) == len(rest) > 1
    assert all(line.startswith("  ") and line.endswith(".") for line in rest)


def raising(monkeypatch, error):
    def fail(*args):
        raise error

    monkeypatch.setattr(cli, "_load", fail)


@pytest.mark.parametrize(
    ("error", "status", "words"),
    [
        (ReadingsError("it is empty", "data.csv:1", "fill\nit in"), 3,
         "srcfit: data.csv:1: it is empty; fill it in.\n"),
        (ReadingsError("no \x1b[2Jcolumn", "a\u202eb.csv", "set it"), 3,
         "srcfit: a b.csv: no [2Jcolumn; set it.\n"),
        (KeyboardInterrupt(), 130, "srcfit: interrupted\n"),
        (MemoryError(), 3, "srcfit: not enough memory; ask for fewer cells or readings\n"),
        (ZeroDivisionError("by 0"), 1, "srcfit: unexpected ZeroDivisionError: by 0; this is a "
         "fault of srcfit; run again with SRCFIT_DEBUG=1 set and report the trace\n"),
    ],
)  # fmt: skip
def test_one_sentence_and_a_status_for_every_error(capsys, monkeypatch, error, status, words):
    monkeypatch.delenv("SRCFIT_DEBUG", raising=False)
    raising(monkeypatch, error)
    found = run(capsys, "inspect", "case.toml")
    assert found[:2] == (status, "")
    assert found[2].lstrip("\n") == words


def test_the_trace_is_shown_when_asked_for(monkeypatch):
    monkeypatch.setenv("SRCFIT_DEBUG", "1")
    raising(monkeypatch, ZeroDivisionError("by 0"))
    with pytest.raises(ZeroDivisionError):
        cli.main(["inspect", "case.toml"])


def test_a_closed_pipe_is_no_error():
    code = "import sys; from srcfit.cli import main; sys.exit(main(['kinds', 'beam']))"
    with process("-c", code) as running:
        running.stdout.close()
        assert running.stderr.read() == ""
        running.wait()


def test_a_terminal_without_the_signs_gets_plain_ones(monkeypatch):
    raw = io.BytesIO()
    stream = io.TextIOWrapper(raw, encoding="ascii")
    cli._tolerant(stream)
    stream.write("918 ± 9 \u2212 ü")
    stream.flush()
    assert raw.getvalue() == b"918 +- 9 - ?"


# --- a whole run, on a made recovery -----------------------------------------------------------


def some_readings(case):
    n = 4
    return Readings(
        file=("invented.csv",) * n, line=np.array([2, 3, 4, 5]), group=("deflection line",) * n,
        kind=("deflection",) * n, unit=("mm",) * n, x=np.array([1.0, 2.0, 3.0, np.nan]),
        value=np.array([1e-3, 2e-3, 3e-3, np.nan]), sd=np.full(n, 1e-4),
        used=np.array([True, True, False, False]), reason=("", "", "saturated", "no number"),
        spec=np.zeros(n, dtype=int), time=np.full(n, np.nan),
        findings=(Finding("rough", "note", "One value is rough."),),
        understood=("invented.csv: UTF-8, comma, header on line 1.",),
        inputs={"invented.csv": "0" * 64},
    )  # fmt: skip


@pytest.fixture
def made(monkeypatch, tmp_path):
    """A recovery in place of the real computation, in an empty current folder."""
    recovery = fake_recovery.make("beam", 6, 12)
    source = replace(recovery.case.source, limit=Limit("bay 1", 7e4, density=True))
    limit = recovery.facts["limit"] | {"at_most": 70.0}
    recovery = replace(recovery, case=replace(recovery.case, source=source),
                       facts=recovery.facts | {"limit": limit})  # fmt: skip
    seeds = []

    def recover(case, readings=None, *, rng=0):
        seeds.append(rng)
        return replace(recovery, facts=recovery.facts | {"seed": rng})

    def figures(found, folder):
        (Path(folder) / "source.png").write_bytes(b"picture")

    monkeypatch.chdir(tmp_path)
    monkeypatch.setitem(sys.modules, "srcfit.recover", types.SimpleNamespace(recover=recover))
    monkeypatch.setattr(
        cli, "_load", lambda path, quiet: (recovery.case, some_readings(recovery.case))
    )
    monkeypatch.setattr(plots, "save_figures", figures)
    monkeypatch.setattr(report, "render", lambda found: "<html></html>")
    return recovery, seeds


def test_recover_tells_writes_and_records(made, capsys, tmp_path):
    status, out, err = run(capsys, "recover", "some/ground.toml", "--seed", "7")
    assert status == 0
    assert [p.name for p in tmp_path.iterdir()] == ["ground-result"]
    for words in ("918.4 ± 9.2 kN", "900.3 to 936.5 kN", "zone bay 1", "lumped bay 1",
                  "offset:levelling", "reaction support 1", "peak", "noise", "background",
                  "bay 1 at most 70 kN/m: kept (estimate 58.7 kN/m", "mainly from the prior",
                  "rates no structure",
                  "Written to ground-result"):  # fmt: skip
        assert words in out
    assert err.startswith("srcfit: recovering")
    assert "ground-result" in err
    summary = json.loads((tmp_path / "ground-result" / "summary.json").read_text("utf-8"))
    assert summary["seed"] == 7
    assert made[1] == [7]


def test_recover_speaks_to_machines(made, capsys, tmp_path):
    status, out, _ = run(capsys, "recover", "a.toml", "--json", "-o", "deep/out")
    assert status == 0
    written = (tmp_path / "deep" / "out" / "summary.json").read_text("utf-8")
    assert json.loads(out) == json.loads(written)


def test_quiet_is_quiet(made, capsys):
    assert run(capsys, "recover", "a.toml", "--quiet") == (0, "", "")


def test_an_existing_folder_is_refused_before_any_work(made, capsys, tmp_path):
    (tmp_path / "a-result").mkdir()
    (tmp_path / "a-result" / "mine.txt").write_text("mine")
    status, out, err = run(capsys, "recover", "a.toml")
    assert (status, out) == (3, "")
    assert err == ("srcfit: output folder a-result: it exists already; choose another with -o, or "
                   "allow it to be replaced with --replace.\n")  # fmt: skip
    assert made[1] == []
    status, _, err = run(capsys, "recover", "a.toml", "--replace")
    assert status == 0
    assert "moved to" in err
    assert (tmp_path / "a-result-kept" / "mine.txt").read_text() == "mine"
    assert (tmp_path / "a-result" / "summary.json").exists()


def test_strict_is_4_only_for_serious_findings(made, capsys, monkeypatch):
    assert run(capsys, "recover", "a.toml", "--strict", "-o", "1", "--quiet")[0] == 0
    bare = fake_recovery.make("beam", 6, 12, bare=True)
    monkeypatch.setitem(
        sys.modules, "srcfit.recover", types.SimpleNamespace(recover=lambda *a, rng: bare)
    )
    assert run(capsys, "recover", "a.toml", "-o", "2", "--quiet")[0] == 0
    status, out, _ = run(capsys, "recover", "a.toml", "-o", "3", "--strict")
    assert status == 4
    assert out.index("serious: Total and offset") < out.index("caution:")
    assert "not determined" in out
    assert Path("3/summary.json").exists()


def test_a_failing_report_leaves_the_old_folder(made, capsys, monkeypatch, tmp_path):
    run(capsys, "recover", "a.toml")
    old = tmp_path / "a-result" / "summary.json"
    before = old.read_bytes(), sorted(p.name for p in old.parent.iterdir())

    def fail(found):
        raise ReadingsError("no such thing")

    monkeypatch.setattr(report, "render", fail)
    assert run(capsys, "recover", "a.toml", "--replace", "--seed", "3")[0] == 3
    assert (old.read_bytes(), sorted(p.name for p in old.parent.iterdir())) == before
    assert [p.name for p in tmp_path.iterdir()] == ["a-result"]


SLOW = """
import sys, time, types
sys.path.insert(0, {tests!r})
import fake_recovery
from srcfit import cli, plots
made = fake_recovery.make("beam", 6, 12)
def figures(found, folder):
    (folder / "half.png").write_bytes(b"")
    print("drawing", flush=True)
    time.sleep(60)
sys.modules["srcfit.recover"] = types.SimpleNamespace(recover=lambda *a, rng: made)
class Used:
    used = made.readings["used"].to_numpy()
cli._load = lambda path, quiet: (made.case, Used)
plots.save_figures = figures
sys.exit(cli.main(["recover", "a.toml", "--replace", "-q"]))
"""


@pytest.mark.parametrize(("end", "status"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_an_interrupted_run_leaves_the_old_folder(tmp_path, end, status):
    old = tmp_path / "a-result"
    old.mkdir()
    (old / "summary.json").write_text("old")
    code = SLOW.format(tests=str(ROOT / "tests"))
    with process("-c", code, cwd=tmp_path) as running:
        assert running.stdout.readline() == "drawing\n"
        assert any(p.name.startswith(".a-result.part") for p in tmp_path.iterdir())
        running.send_signal(end)
        out, err = running.communicate(timeout=20)
    assert running.returncode == status
    assert "Traceback" not in err
    assert out == ""
    assert [p.name for p in tmp_path.iterdir()] == ["a-result"]
    assert [p.name for p in old.iterdir()] == ["summary.json"]
    assert (old / "summary.json").read_text() == "old"


# --- inspect -----------------------------------------------------------------------------------


def test_inspect_shows_what_was_read(made, capsys, tmp_path):
    status, out, _ = run(capsys, "inspect", "a.toml")
    assert status == 0
    for words in ("UTF-8, comma", "2 of 4 readings are used", "2/4", "1 to 2 m", "1 to 2 mm",
                  "invented.csv:4", "saturated", "invented.csv:5", "no number", "zone bay 1",
                  "One value is rough", "in kN/m, total in kN",
                  "beam from 0 to 30 m; left free, right clamped",
                  "supports at 18, 24 m"):  # fmt: skip
        assert words in out
    assert list(tmp_path.iterdir()) == []
    status, out, _ = run(capsys, "inspect", "a.toml", "--json")
    facts = json.loads(out)
    assert facts["fit"] == {"read": 4, "used": 2}
    column = facts["columns"][0]
    assert (column["used"], column["x"], column["unit"]) == (2, [1, 2], "mm")
    np.testing.assert_allclose(column["value"], [1, 2])
    np.testing.assert_allclose(column["sd"], [0.1, 0.1])
    assert column["excluded"] == {"saturated": 1, "no number": 1}
    assert [e["line"] for e in facts["excluded"]] == [4, 5]
    assert facts["asks"]["unknown"] == []
    assert [z["name"] for z in facts["asks"]["zones"]] == ["bay 1", "bay 2"]


@pytest.mark.parametrize(("name", "start"), [("p.png", b"\x89PNG"), ("p.SVG", b"<?xml"),
                                             ("deep/p.pdf", b"%PDF")])  # fmt: skip
def test_inspect_draws_the_raw_profile(made, capsys, tmp_path, name, start):
    assert run(capsys, "inspect", "a.toml", "-q", "-o", name) == (0, "", "")
    assert (tmp_path / name).read_bytes().startswith(start)
    status, _, err = run(capsys, "inspect", "a.toml", "-o", name)
    assert status == 3
    assert "exists already" in err
    assert run(capsys, "inspect", "a.toml", "-q", "-o", name, "--replace")[0] == 0


def test_a_picture_of_an_unknown_kind_is_refused(made, capsys, tmp_path):
    status, _, err = run(capsys, "inspect", "a.toml", "-o", "p.gif")
    assert status == 3
    assert 'the ending ".gif"; use one of .png, .svg, .pdf' in err
    assert list(tmp_path.iterdir()) == []


def test_the_raw_profile_holds_used_and_rejected_rows():
    from srcfit.rawplot import draw

    case = fake_recovery.make("beam", 6, 12).case
    figure = draw(case, some_readings(case))
    used, rejected = figure.axes[0].lines
    np.testing.assert_allclose(used.get_xydata(), [[1, 1], [2, 2]])
    np.testing.assert_allclose(rejected.get_xydata(), [[3, 3]])
    assert "1 rows without place or number" in figure.get_suptitle()


# --- from nothing to the answer and back -------------------------------------------------------


def test_new_prints_a_case_that_loads(capsys, tmp_path):
    from srcfit.case import load_case

    status, out, err = run(capsys, "new", "wall")
    assert (status, err) == (0, "")
    (tmp_path / "case.toml").write_text(out, "utf-8")
    assert load_case(tmp_path / "case.toml").member.kind.name == "wall"


@pytest.mark.parametrize("kind", MEMBERS)
def test_a_demo_of_every_kind_shows_its_source(capsys, tmp_path, monkeypatch, kind):
    """Readings minus what the told source predicts are noise: 24 values of the stated sd."""
    monkeypatch.chdir(tmp_path)
    status, out, _ = run(capsys, "new", kind, "--demo", "--seed", "5")
    folder = Path(f"{kind}-demo")
    assert status == 0
    assert out.splitlines() == [
        str(folder / n) for n in ("case.toml", "readings.csv", "truth.csv")
    ]
    argv = ["predict", folder / "case.toml", "--source", folder / "truth.csv", "--json"]
    status, out, _ = run(capsys, *argv)
    assert status == 0
    found = json.loads(out)
    assert len(found["readings"]) == 24
    assert 0.6 < found["misfit"] < 1.4
    spread = np.ptp([r["predicted"] / r["sd"] for r in found["readings"]])
    assert spread > 10  # the source shows
    sizes = [abs(v) for k, v in found["balance"].items() if k != "difference"]
    assert abs(found["balance"]["difference"]) < 1e-6 * max(sizes)


def test_where_a_new_case_is_written(capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert run(capsys, "new", "rod", "-o", "deep/mine.toml")[1] == "deep/mine.toml\n"
    assert run(capsys, "new", "rod", "-o", "folder")[1] == "folder/case.toml\n"
    assert run(capsys, "new", "rod", "-o", "deep")[1] == "deep/case.toml\n"
    before = {p: p.stat().st_mtime_ns for p in tmp_path.rglob("*.*")}
    for argv in (["-o", "deep/mine.toml"], ["-o", "folder"], ["-o", "folder", "--demo"]):
        status, out, err = run(capsys, "new", "cable", *argv)
        assert (status, out) == (3, "")
        assert "exists already" in err
    assert {p: p.stat().st_mtime_ns for p in tmp_path.rglob("*.*")} == before
    assert run(capsys, "new", "cable", "-o", "deep/mine.toml", "--replace")[0] == 0
    assert 'kind = "cable"' in Path("deep/mine.toml").read_text("utf-8")


def test_the_seed_of_a_demo_decides_its_noise():
    from srcfit.case.template import template
    from srcfit.start import demo_texts

    first, again, other = (demo_texts(template("rod"), seed) for seed in (1, 1, 2))
    assert first == again
    assert first["readings.csv"] != other["readings.csv"]
    assert first["truth.csv"] == other["truth.csv"]


def test_a_whole_run_and_its_prediction(capsys, tmp_path, monkeypatch):
    """What `predict` makes of a saved result is what `recover` told of each reading."""
    import pandas as pd

    monkeypatch.chdir(tmp_path)
    run(capsys, "new", "cable", "--demo", "-o", "job")
    case = Path("job/case.toml")
    text = case.read_text("utf-8").replace("[strength]", LUMPED + "[strength]")
    text = text.replace('# offset = "unknown"', 'offset = { unknown = true, sd = "5 mm" }')
    case.write_text(text, "utf-8")
    status, out, err = run(capsys, "recover", case)
    assert (status, "Traceback" in err) == (0, False)
    assert "lumped pole" in out
    table = pd.read_csv("case-result/readings.csv")
    for place in ("case-result", "case-result/source.csv"):
        status, _, _ = run(capsys, "predict", case, "--source", place, "-o", "p.csv", "--replace")
        assert status == 0
        found = pd.read_csv("p.csv")["predicted"]
        agree = np.allclose(found, table["predicted"], rtol=1e-6, atol=1e-6)
        assert agree == (place == "case-result")  # the lumped part stands in the summary only
