"""How long the spread chain takes, how it grows, and what plain rejection would take.

Run by hand: ``pytest -m benchmark tests/benchmarks/test_spread_speed.py`` writes
``reports/benchmarks/spread.md`` and checks the aim: 10,000 contact-only walks on 1,000 traditions,
counts to 200, x = .98, in under 30 seconds on two cores.
"""

from __future__ import annotations

import os
import platform
import time
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial import cKDTree

from twicetold.graph import ContactGraph
from twicetold.randomness import Stream
from twicetold.spread import SpreadModel, chain_tables, spread_world, walk_chunk
from twicetold.spread.rates import RARE, RateModel, match_contact, rate_world
from twicetold.spread.world import effective_size, expected_events, spread_words
from twicetold.workers import ThreadPool

pytestmark = pytest.mark.benchmark
REPORT = Path(__file__).resolve().parents[2] / "reports" / "benchmarks" / "spread.md"


def made_up_map(n):
    rng = np.random.default_rng(1)
    xyz = rng.normal(size=(n, 3))
    xyz /= np.linalg.norm(xyz, axis=1)[:, None]
    near = cKDTree(xyz).query(xyz, k=7)[1][:, 1:]
    pairs = np.sort(np.column_stack([np.repeat(np.arange(n), 6), near.ravel()]), axis=1)
    edges = np.unique(pairs, axis=0).astype(np.int32)
    return ContactGraph(n, edges, np.zeros(len(edges)), np.zeros(len(edges), bool), "nearest:6")


def timed(function, *args, **more):
    begun = time.perf_counter()
    out = function(*args, **more)
    return out, time.perf_counter() - begun


def per_walk(model, cap, counts, walks):
    """Seconds a walk on one thread, events a walk, and seconds a walk for the summaries."""
    tables = chain_tables(model, cap)
    words = spread_words(1, 0, walks, key=(Stream.SPREAD,))
    got, walking = timed(walk_chunk, tables, words, counts)
    _, summing = timed(got.summaries, tables)
    return walking / walks, expected_events(tables), summing / walks


def headline(graph, pool):
    model = SpreadModel(graph, 0.98)
    spread_world(model, [1, 2], largest=2, walks=10, pool=pool)  # compile
    counts = np.arange(1, 201)
    world, seconds = timed(spread_world, model, counts, largest=200, walks=10_000, pool=pool)
    some = (5, 20, 50, 100, 150, 200)
    lines = [
        f"10,000 contact-only walks with every count from 1 to 200 kept and summarised: "
        f"**{seconds:.1f} s** (aim: under 30).",
        "",
        "| holders | " + " | ".join(map(str, some)) + " |",
        "|---" * (len(some) + 1) + "|",
        "| effective draws | " + " | ".join(f"{world.effective(c):.0f}" for c in some) + " |",
    ]
    # What a catalogue has: fewer distinct counts than 200.
    few = np.unique(np.geomspace(3, 200, 80).astype(int))
    _, fewer = timed(spread_world, model, few, largest=200, walks=10_000, pool=pool)
    lines += ["", f"With {len(few)} distinct counts up to 200: {fewer:.1f} s."]
    return seconds, lines


def growth():
    lines = [
        "| traditions | counts to | x | events a walk | walk, ms | ns an event | summaries, ms |",
        "|---|---|---|---|---|---|---|",
    ]
    for n in (1000, 3000, 10_000):
        graph = made_up_map(n)
        for cap, x in dict.fromkeys(((50, 0.98), (200, 0.9), (200, 0.98), (n // 5, 0.98))):
            counts = np.unique(np.geomspace(1, cap, 60).astype(np.int32))
            walk, events, summary = per_walk(SpreadModel(graph, x), cap, counts, 60)
            lines.append(
                f"| {n:,} | {cap} | {x} | {events:,.0f} | {1e3 * walk:.2f} | "
                f"{1e9 * walk / events:.0f} | {1e3 * summary:.2f} |"
            )
    return lines


def against_rejection(graph):
    """Walks without the h-transform (cap 1), kept when they come by n: the plain way."""
    model = SpreadModel(graph, 0.98)
    counts = np.array([5, 20, 50, 100, 200], dtype=np.int32)
    rows = {}
    for name, cap, walks in (("chain", 200, 1500), ("rejection", 1, 60_000)):
        tables = chain_tables(model, cap)
        seconds, weight = 0.0, []
        for a in range(0, walks, 500):
            words = spread_words(5, a, 500, key=(Stream.SPREAD,))
            got, took = timed(walk_chunk, tables, words, counts)
            seconds += took
            weight.append(got.weight)
        weight = np.concatenate(weight)
        rows[name] = seconds, [effective_size(weight[:, k]) for k in range(len(counts))]
    lines = [
        "| holders | chain: effective draws | rejection: effective draws | chain, ms per effective "
        "draw | rejection, ms per effective draw | ratio |",
        "|---|---|---|---|---|---|",
    ]
    for k, count in enumerate(counts):
        a, b = (1e3 * rows[m][0] / max(rows[m][1][k], 1e-9) for m in ("chain", "rejection"))
        lines.append(
            f"| {count} | {rows['chain'][1][k]:.0f} | {rows['rejection'][1][k]:.0f} | {a:.2f} | "
            f"{b:.2f} | {b / a:.2f} |"
        )
    whole = [(1e3 * rows[m][0] / min(rows[m][1])) for m in ("chain", "rejection")]
    lines += [
        "",
        f"Chain: 1,500 walks in {rows['chain'][0]:.1f} s; rejection: 60,000 in "
        f"{rows['rejection'][0]:.1f} s (one thread). Until *every* one of these counts has its "
        f"draws, a draw of each costs {whole[0]:.2f} ms against {whole[1]:.2f} ms: "
        f"**{whole[1] / whole[0]:.0f} times**.",
    ]
    return lines


def contact_process(graph, pool):
    rate, matching = timed(
        match_contact, graph, 0.98, least=3, largest=200, excursions=4000, pool=pool
    )
    model = RateModel(graph, rate, RARE / graph.n)
    world, seconds = timed(rate_world, model, [10, 30, 100, 200], excursions=20_000, pool=pool)
    found = [effective_size(w) for w in world.weight]
    return [
        f"Matching the rate to x = .98: {matching:.1f} s (contact {rate:.4f} per loss). 20,000 "
        f"excursions: {seconds:.1f} s, effective draws at 10, 30, 100, 200 holders: "
        + ", ".join(f"{e:.0f}" for e in found)
        + "."
    ]


def test_speed():
    graph, pool = made_up_map(1000), ThreadPool(2)
    load = os.getloadavg()[0]
    seconds, first = headline(graph, pool)
    text = [
        "# The spread chain: time",
        "",
        "Command: `pytest -m benchmark tests/benchmarks/test_spread_speed.py`. "
        f"{platform.machine()}, two worker threads, machine shared with other work (load {load:.1f} "
        "before the start); compilation left out. 1,000 traditions, nearest:6, x = .98.",
        "",
        *first,
        "",
        "The number of motifs does not enter: a walk serves every count.",
        "",
        "## Growth",
        "",
        "On paper: a walk takes about 2 cap (1 + x) / (1 - x) events while cap (1 - x) is large "
        "(cap squared when it is small); an event costs a few dozen operations whatever N, and "
        "memory misses on large maps; a kept snapshot costs its holders times their neighbours. "
        "One thread, up to 60 counts kept:",
        "",
        *growth(),
        "",
        "## Against rejection",
        "",
        "The plain way runs the chain from its origin, keeps what has n holders, and throws the "
        "walks away that never get there. Same kernel, same map, one run:",
        "",
        *against_rejection(graph),
        "",
        "## The rate-based contact process",
        "",
        *contact_process(graph, pool),
    ]
    REPORT.write_text("\n".join(text) + "\n")
    assert seconds < 30
