"""One motif on the command line, everything compiled and kept. Writes reports/benchmarks/one_motif.md.

Run by hand: ``pytest -m benchmark tests/benchmarks/test_one_motif_speed.py``.
"""

from __future__ import annotations

import os
import platform
import subprocess
import sys
import time
from pathlib import Path
from statistics import median

import pytest

pytestmark = pytest.mark.benchmark
REPO = Path(__file__).resolve().parents[2]
REPORT = REPO / "reports" / "benchmarks" / "one_motif.md"
COMMAND = "pytest -m benchmark tests/benchmarks/test_one_motif_speed.py"
MOTIF = ("test", str(REPO / "data_examples" / "archipelago"), "M055", "--json")
CLI = (sys.executable, "-m", "twicetold.cli", *MOTIF)
LIBRARIES = (
    "import numpy, pandas, scipy.stats, scipy.spatial, scipy.sparse.csgraph, numba, typer, numba.np"
    "\nnumba.njit(lambda x: x + 1)(1)"
)
RUNS = {
    "the libraries alone": (sys.executable, "-c", LIBRARIES),
    "all worlds": CLI,
    "emergence and ancestry": (*CLI, "--worlds", "emergence,ancestry"),
}
TIMES = 7


def seconds(words, env) -> tuple[float, float]:
    """Wall clock and processor time of a process."""
    before, began = os.times(), time.perf_counter()
    subprocess.run(words, check=True, env=env, stdout=subprocess.DEVNULL)
    wall, after = time.perf_counter() - began, os.times()
    spent = after.children_user + after.children_system
    return wall, spent - before.children_user - before.children_system


def test_one_motif_takes_little_longer_than_loading_the_libraries(tmp_path):
    env = os.environ | {"TWICETOLD_CACHE": str(tmp_path)}
    env.pop("PYTHONDONTWRITEBYTECODE", None)
    for words in RUNS.values():
        for _ in range(2):  # makes banks, compiles kernels, keeps bytecode
            seconds(words, env)
    took = {name: [] for name in RUNS}
    for k in range(TIMES):
        for name in (list(RUNS), list(RUNS)[::-1])[k % 2]:
            took[name].append(seconds(RUNS[name], env))
    wall = {name: median(w for w, _ in pairs) for name, pairs in took.items()}
    spent = {name: median(c for _, c in pairs) for name, pairs in took.items()}
    base = spent["the libraries alone"]
    lines = [
        "# One motif on the command line",
        "",
        "`twicetold test data_examples/archipelago M055 --json` with the default plan, kernels "
        "compiled and banks kept from an earlier run, beside a process that only loads NumPy, "
        "pandas, SciPy (stats, spatial, csgraph), numba (one function compiled) and typer. Medians "
        f"of {TIMES}, one after the other and the other way round in turn, shared machine. Python "
        f"{platform.python_version()}, {os.cpu_count()} processors ({platform.machine()}).",
        "",
        "| run | seconds | least | processor seconds | times the libraries |",
        "|---|---|---|---|---|",
        *(
            f"| {name} | {wall[name]:.2f} | {min(w for w, _ in took[name]):.2f} | "
            f"{spent[name]:.2f} | {spent[name] / base:.2f} |"
            for name in RUNS
        ),
        "",
        f"Command: `{COMMAND}`",
        "",
    ]
    REPORT.write_text("\n".join(lines), encoding="utf-8")
    assert spent["all worlds"] < 3 * base
