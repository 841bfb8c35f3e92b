"""The layout holds: every module imports only what stands above it, and starts quickly."""

import ast
import os
import statistics
import subprocess
import sys
import time
from pathlib import Path

import pytest

import srcfit

ROOT = Path(srcfit.__file__).parent

# a package counts as one unit; the data of a package (its `model`) may stand above the rest of it
ORDER = (
    "errors", "unit_names", "units", "unit_texts", "member", "members", "case.model",
    "readings.model", "problem", "recovery", "comparison", "case", "readings", "intervals",
    "state", "influence", "holds", "quantities", "nulls", "eigenshapes", "eigenform",
    "eigencount", "eigensolve", "eigen", "kernel", "sensors", "grid", "unknowns", "forward",
    "view", "elimination", "whitening", "priors", "solvers", "criteria", "evidence", "noise",
    "outliers", "robust", "bands", "references", "repeats", "calibration", "features",
    "simultaneous", "unaided", "misfit", "smoother", "laws", "truncated", "strict", "answers",
    "limits", "envelope", "constraints", "placing", "balance", "checks", "solve", "places",
    "rounding", "readingsalone", "results", "doubts", "verdicts", "facts", "tell", "patterns",
    "separate", "shares", "demands", "knowledge", "frames", "output", "captions",
    "changewords", "drawing", "axes", "plots", "changeplots", "report", "recover", "text",
    "kindtext", "inspection", "rawplot", "trial", "prediction", "draft", "start", "plan",
    "rehearse", "series", "campaigns", "joint", "changes", "compare", "sklearn", "cli",
    "__main__",
)  # fmt: skip

# rooms that a module below them in the list may open inside a function
ROOMS = {"plots", "changeplots", "report", "recover", "output"}
# these two open everything only when it is asked for
LAZY = {"__init__", "cli"}
# slow to import: inside functions, or where only a type is named
SLOW = {"pandas", "matplotlib", "sklearn", "pint", "threadpoolctl", "openpyxl", "pyarrow", "numba",
        "distributed", "scipy.optimize", "scipy.stats", "scipy.interpolate", "scipy.integrate",
        "scipy.sparse", "scipy.signal", "scipy.special"}  # fmt: skip


def modules():
    """(unit, dotted name, path) of every module of the package."""
    for path in sorted(ROOT.rglob("*.py")):
        name = ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")
        yield unit_of(name), name, path


def unit_of(name):
    """The unit of the layout that a module belongs to."""
    return name if name in ORDER else name.split(".")[0]


def imports(path, package):
    """(names imported, line, where) of a file; where: top, type or function."""
    tree = ast.parse(path.read_text(encoding="utf-8"))

    def walk(node, where):
        for child in ast.iter_child_nodes(node):
            inside = where
            if isinstance(child, (ast.FunctionDef, ast.AsyncFunctionDef, ast.Lambda)):
                inside = "function"
            if isinstance(child, ast.If) and "TYPE_CHECKING" in ast.unparse(child.test):
                inside = "type"
            if isinstance(child, ast.Import):
                yield [a.name for a in child.names], child.lineno, where
            elif isinstance(child, ast.ImportFrom):
                assert child.level == 0, f"{path}:{child.lineno}: a relative import"
                module = child.module
                yield [name_of(module, a.name) for a in child.names], child.lineno, where
            yield from walk(child, inside)

    def name_of(module, name):
        below = ROOT.parent.joinpath(*module.split("."), name)
        known = below.with_suffix(".py").exists() or below.is_dir() or module == "srcfit"
        return f"{module}.{name}" if known else module

    yield from walk(tree, "top")


def wrong_imports(unit, name, path):
    """Sentences about imports that break the layout."""
    if unit not in (*ORDER, "__init__"):
        yield f"{name}: it has no place in ORDER"
        return
    for names, line, where in imports(path, name):
        for target in dict.fromkeys(names):
            if target == "srcfit" or target.startswith("srcfit."):
                other = unit_of(target.removeprefix("srcfit").lstrip(".") or "__init__")
                yield from wrong_inner(unit, other, f"{name}:{line}", where)
            elif where == "top" and is_one_of(target, SLOW) and unit != "sklearn":
                yield f"{name}:{line}: {target} is slow, import it inside the function"


def is_one_of(target, names):
    return any(target == n or target.startswith(f"{n}.") for n in names)


def wrong_inner(unit, other, place, where):
    if other in ("__init__", "__version__", unit) or (unit in LAZY and where != "top"):
        return
    if other not in ORDER:
        yield f"{place}: {other} has no place in ORDER"
        return
    if unit == "__init__":
        if other != "errors":
            yield f"{place}: the package imports {other} at once"
    elif unit == "cli":
        if where == "top" and other != "errors":
            yield f"{place}: the command line imports {other} at once"
    elif where == "function" and other in ROOMS:
        return
    elif ORDER.index(other) > ORDER.index(unit):
        yield f"{place}: {unit} imports {other}, which stands below it"
    elif where == "function" and unit != "__main__":
        yield f"{place}: {other} is imported inside a function"


def test_every_module_has_its_place():
    units = {unit for unit, _, _ in modules()} - {"__init__"}
    assert units <= set(ORDER), "name new modules in ORDER, where they belong"


def test_no_import_runs_upwards():
    every = (w for unit, name, path in modules() for w in wrong_imports(unit, name, path))
    found = list(dict.fromkeys(every))
    assert not found, "\n".join(found)


@pytest.mark.parametrize(
    ("unit", "code", "words"),
    [
        ("state", "import srcfit.kernel", "stands below"),
        ("state", "def f():\n    from srcfit.kernel import g", "stands below"),
        ("kernel", "def f():\n    from srcfit import state", "inside a function"),
        ("case", "if TYPE_CHECKING:\n    from srcfit.cli import main", "stands below"),
        ("state", "import pandas as pd", "slow"),
        ("state", "from scipy.optimize import brentq", "slow"),
        ("cli", "from srcfit import recover", "at once"),
        ("kernel", "from srcfit import state\nfrom srcfit.case.model import Case", None),
        ("recovery", "def f():\n    from srcfit import plots\n    import pandas", None),
        ("cli", "def f():\n    from srcfit.recover import recover", None),
    ],
)
def test_the_rule_sees_what_it_should(tmp_path, unit, code, words):
    path = tmp_path / "module.py"
    path.write_text(code)
    found = list(wrong_imports(unit, unit, path))
    assert [words in f for f in found] == [True] if words else found == []


def seconds(*command):
    env = os.environ | {"PYTHONPATH": str(ROOT.parent), "OMP_NUM_THREADS": "1"}
    start = time.perf_counter()
    subprocess.run([sys.executable, *command], check=True, capture_output=True, env=env)
    return time.perf_counter() - start


def test_the_version_is_told_as_quickly_as_numpy_loads():
    seconds("-m", "srcfit", "--version")  # compiled files and disk cache
    pairs = [
        (seconds("-m", "srcfit", "--version"), seconds("-c", "import numpy")) for _ in range(5)
    ]
    version, numpy = (statistics.median(times) for times in zip(*pairs, strict=True))
    assert version <= 2.5 * numpy


def test_nothing_heavy_is_loaded_for_the_version():
    code = (
        "import sys; from srcfit.cli import main; main(['--version']);"
        "print(sorted({'numpy', 'pandas', 'scipy', 'matplotlib', 'sklearn'} & set(sys.modules)))"
    )
    env = os.environ | {"PYTHONPATH": str(ROOT.parent)}
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=env)
    assert done.stdout.split("\n")[:2] == [f"srcfit {srcfit.__version__}", "[]"]
    assert done.stderr == ""
