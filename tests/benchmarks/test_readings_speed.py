"""A million rows: at most three times the time and five times the memory of a bare `read_csv`.

Both are measured in this run, each in processes of its own: the best of three processor times
after a first one, and the growth of the largest resident size beyond that after the imports
(Linux: from /proc).
Run with ``pytest --benchmark-only tests/benchmarks``.
"""

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

TESTS = Path(__file__).parents[1]
COUNT = 1_000_000
SCRIPT = """
import sys, time
sys.path[:0] = [{tests!r}, {root!r}]
from pathlib import Path
import numpy, pandas, io
from readings_cases import case
from srcfit.readings import read
path = Path({path!r})
pandas.read_csv(io.StringIO("x,w\\n1,2\\n"))
bare = sys.argv[1] == "bare"
one = case(path.parent, path.name)
def size():  # of this process alone: `getrusage` also counts the one that started it
    status = Path("/proc/self/status").read_text()
    return int(status.split("VmHWM:")[1].split()[0])
before, times = size(), []
for _ in range(4):
    began = time.process_time()
    out = pandas.read_csv(path) if bare else read(one)
    times.append(time.process_time() - began)
    if len(times) == 1:
        peak = size() - before
    del out
print(min(times[1:]), peak)
"""


@pytest.fixture(scope="module")
def large(tmp_path_factory):
    rng = np.random.default_rng(7)
    x, w = np.sort(rng.uniform(0, 30, COUNT)), rng.normal(0, 3, COUNT)
    path = tmp_path_factory.mktemp("large") / "large.csv"
    rows = "".join(f"{i},{a:.4f},{b:.5f}\n" for i, (a, b) in enumerate(zip(x, w, strict=True)))
    path.write_text("n,x,w\n" + rows)
    return path


def measured(path, what):
    script = SCRIPT.format(tests=str(TESTS), root=str(TESTS.parent), path=str(path))
    run = subprocess.run(
        [sys.executable, "-c", script, what], capture_output=True, text=True, check=True
    )
    seconds, peak = map(float, run.stdout.split())
    return seconds, peak


def test_a_million_rows(benchmark, large):
    bare = measured(large, "bare")
    ours = benchmark.pedantic(measured, args=(large, "ours"), rounds=1)
    benchmark.extra_info.update(time_ratio=ours[0] / bare[0], memory_ratio=ours[1] / bare[1])
    assert ours[0] <= 3 * bare[0]
    assert ours[1] <= 5 * bare[1]
