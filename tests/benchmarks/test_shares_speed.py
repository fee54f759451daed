"""How long the shares bank, its training and the shares of a whole catalogue take.

Run by hand: ``pytest -m benchmark tests/benchmarks/test_shares_speed.py`` writes
``reports/benchmarks/shares.md`` and checks the aim: 33,000 walks on 1,000 traditions, counts to
200, x = .98, in under 90 seconds on two cores.
"""

from __future__ import annotations

import platform
import time
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial import cKDTree

from twicetold.evidence.shares import build_bank, estimate_cost, fit_posterior
from twicetold.graph import ContactGraph
from twicetold.spread import SpreadModel
from twicetold.workers import ThreadPool

pytestmark = pytest.mark.benchmark
REPORT = Path(__file__).resolve().parents[2] / "reports" / "benchmarks" / "shares.md"


def made_up_world(n, x=0.98):
    rng = np.random.default_rng(1)
    xyz = rng.normal(size=(n, 3))
    xyz /= np.linalg.norm(xyz, axis=1)[:, None]
    near = cKDTree(xyz).query(xyz, k=7)[1][:, 1:]
    pairs = np.sort(np.column_stack([np.repeat(np.arange(n), 6), near.ravel()]), axis=1)
    edges = np.unique(pairs, axis=0).astype(np.int32)
    graph = ContactGraph(n, edges, np.zeros(len(edges)), np.zeros(len(edges), bool), "nearest:6")
    seats = xyz[rng.choice(n, max(2, n * 60 // 1000), replace=False)]
    return SpreadModel(graph, x, family=cKDTree(seats).query(xyz)[1].astype(np.int32))


def timed(function, *args, **more):
    begun = time.perf_counter()
    out = function(*args, **more)
    return out, time.perf_counter() - begun


def test_speed():
    model = made_up_world(1000)
    estimate = estimate_cost(model, largest=200, workers=2)
    pool = ThreadPool(2)
    bank, walking = timed(
        build_bank, model, largest=200, seed=1, pool=pool, use_cache=False
    )  # fmt: skip
    fit_posterior(
        build_bank(made_up_world(60), largest=9, seed=1, walks=60, use_cache=False), seed=1
    )
    fitted, training = timed(fit_posterior, bank, seed=1, pool=pool)
    rng = np.random.default_rng(2)
    sets = [
        np.sort(rng.choice(1000, int(n), replace=False)).astype(np.int32)
        for n in np.exp(rng.uniform(np.log(5), np.log(200), 2200))
    ]
    _, telling = timed(fitted.posterior, sets)
    lines = [
        "# Route shares: time",
        "",
        "Command: `pytest -m benchmark tests/benchmarks/test_shares_speed.py`. "
        f"{platform.machine()}, two worker threads, machine shared with other work; compilation "
        "left out. 1,000 traditions, nearest:6, 60 families, x = .98, counts to 200.",
        "",
        "| step | seconds |",
        "|---|---|",
        f"| estimate before the work | {estimate:.1f} |",
        f"| bank: 33,000 walks with summaries | {walking:.1f} |",
        f"| training and recalibration (once per bank) | {training:.1f} |",
        f"| shares of 2,200 motifs | {telling:.2f} |",
        "",
        "Bank and training know nothing of the motifs: their cost is the same for one motif and "
        "for ten thousand.",
        "",
        "## Growth",
        "",
        "A walk takes about 4 cap / (1 - x) events (the h-transformed climb gains (1 - x)/(1 + x) "
        "a step, and so does the way down lose), each some tens of operations whatever N; one "
        "snapshot costs its holders times the traditions within four hops. Measured, one thread, "
        "milliseconds a walk (twelve summarised snapshots included):",
        "",
        "| traditions | counts to 200 | counts to a fifth of them |",
        "|---|---|---|",
    ]
    for n in (1000, 3000, 10_000):
        world = made_up_world(n)
        costs = [estimate_cost(world, largest=top, walks=1000) for top in (200, n // 5)]
        lines.append(f"| {n:,} | {costs[0]:.1f} | {costs[1]:.1f} |")
    REPORT.parent.mkdir(parents=True, exist_ok=True)
    REPORT.write_text("\n".join(lines) + "\n", encoding="utf-8")
    assert walking < 90.0
    assert telling < 5.0
