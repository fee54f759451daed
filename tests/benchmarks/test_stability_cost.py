"""What a full stability run costs beside a plain one. Writes reports/benchmarks/stability.md.

Run by hand: ``pytest -m benchmark tests/benchmarks/test_stability_cost.py``.
"""

from __future__ import annotations

import os
import platform
import time
from pathlib import Path
from statistics import median

import numpy as np
import pytest

from made_up import catalogue_of
from twicetold.evidence import rank_catalogue
from twicetold.evidence.stability import settings
from twicetold.evidence.study import prepare
from twicetold.plan import Plan

pytestmark = pytest.mark.benchmark
REPORT = Path(__file__).resolve().parents[2] / "reports" / "benchmarks" / "stability.md"
COMMAND = "pytest -m benchmark tests/benchmarks/test_stability_cost.py"


def made_up(motifs=2200, n=1000, families=60, seed=4):
    """Motifs of a log-series curve, families falling as 1/rank and compact."""
    rng = np.random.default_rng(seed)
    lat = np.degrees(np.arcsin(rng.uniform(-0.9, 0.9, n)))
    lon = rng.uniform(-180, 180, n)
    a, b = np.radians(lat), np.radians(lon)
    xyz = np.stack([np.cos(a) * np.cos(b), np.cos(a) * np.sin(b), np.sin(a)], axis=1)
    weight = 1 / np.arange(1, families + 1)
    sizes = np.maximum(2, np.floor(n * weight / weight.sum())).astype(int)
    sizes[0] += n - sizes.sum()
    family = np.full(n, -1)
    for k, size in enumerate(sizes):
        free = np.flatnonzero(family < 0)
        near = np.argsort(((xyz[free] - xyz[rng.choice(free)]) ** 2).sum(axis=1))
        family[free[near[:size]]] = k
    effort = np.exp(0.8 * rng.normal(size=n))
    counts = np.arange(3, 401)
    share = 0.985**counts / counts
    held = rng.choice(counts, motifs, p=share / share.sum())
    rows = [np.argpartition(rng.exponential(size=n) / effort, k)[:k] for k in held]
    names = [f"F{f:02d}" for f in family]
    return catalogue_of(rows, n, family=names, effort=effort, places=(lat, lon))


def test_a_full_stability_run_costs_at_most_twelve_plain_ones():
    catalogue = made_up()
    plan = Plan().replace(evidence__worlds=("emergence", "ancestry"))
    full = plan.replace(sensitivity__stability=True)
    runs = len(settings(prepare(catalogue, plan)))
    rank_catalogue(catalogue, full.replace(evidence__draws=99, sensitivity__draws=99))  # compiles
    took = {"plain": [], "with stability": []}
    for name in ("plain", "with stability", "with stability", "plain"):
        started = time.perf_counter()
        rank_catalogue(catalogue, plan if name == "plain" else full)
        took[name].append(time.perf_counter() - started)
    plain, stable = (median(took[k]) for k in ("plain", "with stability"))
    lines = [
        "# Cost of a full stability run",
        "",
        f"{catalogue.n_motifs:,} motifs, {catalogue.n_traditions:,} traditions, "
        f"{len(set(catalogue.family))} families; worlds emergence and ancestry, "
        f"{plan.evidence.draws:,} draws; {runs} runs of {plan.sensitivity.draws:,} for stability. "
        f"Python {platform.python_version()}, {os.cpu_count()} processors "
        f"({platform.machine()}). Medians of two, both ways round, shared machine. A plain run "
        "has its correlograms, hidden bounds and companions.",
        "",
        "| run | seconds | times a plain one |",
        "|---|---|---|",
        f"| plain | {plain:.1f} | 1 |",
        f"| with stability | {stable:.1f} | {stable / plain:.1f} |",
        "",
        f"Command: `{COMMAND}`",
        "",
    ]
    REPORT.write_text("\n".join(lines), encoding="utf-8")
    assert stable <= 12 * plain
