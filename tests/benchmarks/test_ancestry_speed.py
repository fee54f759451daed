"""Time of the ancestry-only world on a catalogue of ordinary size; writes the committed table."""

from __future__ import annotations

import os
import platform
import time
from pathlib import Path

import numpy as np
import pytest

from twicetold.graph import build_graph
from twicetold.references.ancestry import HolderSets, Lineages, ancestry_world
from twicetold.workers import ThreadPool

REPORT = Path(__file__).resolve().parents[2] / "reports" / "benchmarks" / "ancestry.md"
COMMAND = "pytest -m benchmark tests/benchmarks/test_ancestry_speed.py"


def made_up_catalogue(n_traditions=1000, n_motifs=2200, n_families=60):
    """Points on the sphere, compact families of unequal size, log-normal effort."""
    rng = np.random.default_rng(1)
    xyz = rng.normal(size=(n_traditions, 3))
    xyz /= np.linalg.norm(xyz, axis=1)[:, None]
    lat, lon = np.degrees(np.arcsin(xyz[:, 2])), np.degrees(np.arctan2(xyz[:, 1], xyz[:, 0]))
    graph = build_graph(lat, lon, "nearest:6")
    centres = rng.normal(size=(n_families, 3))
    centres /= np.linalg.norm(centres, axis=1)[:, None]
    family = np.argmax(xyz @ centres.T + 0.1 * rng.normal(size=n_families), axis=1)
    rate = np.exp(rng.normal(size=n_traditions))
    x = 0.995
    chance = x ** np.arange(1, n_traditions + 1) / np.arange(1, n_traditions + 1)
    sizes = rng.choice(n_traditions, n_motifs, p=chance / chance.sum()) + 1
    sets = [rng.choice(n_traditions, s, replace=False, p=rate / rate.sum()) for s in sizes]
    wide = 10 ** rng.uniform(0, 2.5, n_motifs)
    wide_sets = [rng.choice(n_traditions, int(s), replace=False) for s in np.maximum(wide, 1)]
    return graph, Lineages(family, family), rate, {"log-series": sets, "many holders": wide_sets}


@pytest.mark.benchmark
def test_a_catalogue_takes_under_twenty_seconds():
    graph, lineages, rate, catalogues = made_up_catalogue()
    rows = []
    for name, sets in catalogues.items():
        plain = HolderSets.of(sets)
        own = HolderSets.of(sets, rate[plain.indices] * (1 - 1 / 30))
        for what, motifs in (("effort", plain), ("recorded (own record left out)", own)):
            ancestry_world(graph, lineages, rate, motifs, draws=20, seed=1)  # compile
            start = time.perf_counter()
            world = ancestry_world(
                graph, lineages, rate, motifs, draws=9999, seed=1, pool=ThreadPool(2)
            )
            took = time.perf_counter() - start
            mean = np.diff(motifs.indptr).mean()
            rows.append(
                f"| {name} | {mean:.1f} | {what} | {int(world.exact.sum()):,} | {took:.1f} |"
            )
            assert took < 20
    REPORT.write_text(
        "# Speed of the ancestry-only world\n\n"
        f"2,200 motifs, 1,000 traditions, 9,999 draws, two threads; Python "
        f"{platform.python_version()}, {os.cpu_count()} processors ({platform.machine()}). "
        "Motifs with at most 10,000 configurations are enumerated, the others share the draws.\n\n"
        "| prevalence | mean holders | propensity | enumerated | seconds |\n|---|---|---|---|---|\n"
        + "\n".join(rows)
        + f"\n\nCommand: `{COMMAND}`\n",
        encoding="utf-8",
    )
