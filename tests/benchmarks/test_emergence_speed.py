"""How long the emergence-only world takes for a whole catalogue, beside two loops over motifs.

Run by hand: ``python -m tests.benchmarks.test_emergence_speed`` (about ten minutes) writes
``reports/benchmarks/emergence.md``; ``pytest -m benchmark tests/benchmarks`` checks the aims.

The world: 1,000 places at random on a sphere, 6 nearest neighbours, 60 compact families, log-normal
effort, 2,200 motifs of 5 to 300 holders (heavy-tailed), 99,999 draws. Timed in the same process:

- *twicetold*: every statistic of every motif (joins all, cross-family and same-family, Moran's I,
  clusters, largest cluster, strands), observed values and p-values, from nothing but the holders;
- (a) ``esda.Moran``, one call per motif (its p-value is for Moran's I under equal propensity);
- (b) NumPy by hand: motifs of equal count share their draws; holders by Gumbel keys and a partial
  sort in batches, joins by vectorised look-up. Once for the statistics that are sums over edges
  (which favours NumPy), once with clusters and strands by SciPy's connected components as well.

Loops are timed on a sample of motifs or counts and draws, and scaled; both are single-threaded.
"""

from __future__ import annotations

import os
import platform
import resource
import subprocess
import sys
import time
import warnings
from pathlib import Path
from statistics import median

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from twicetold.graph import ContactGraph
from twicetold.randomness import Stream
from twicetold.references.emergence import emergence_holders, emergence_world
from twicetold.statistics import STATISTICS, observe
from twicetold.workers import ThreadPool

DRAWS = 99_999
TRADITIONS = 1_000
BATCH = 1_000


def made_up_world(n_motifs, seed=1):
    """Graph, families, effort and the holders of each motif."""
    rng = np.random.default_rng(seed)
    xyz = rng.normal(size=(TRADITIONS, 3))
    xyz /= np.linalg.norm(xyz, axis=1)[:, None]
    near = cKDTree(xyz).query(xyz, k=7)[1][:, 1:]
    edges = {tuple(sorted((i, int(j)))) for i in range(TRADITIONS) for j in near[i]}
    edges = np.array(sorted(edges), dtype=np.int32)
    graph = ContactGraph(
        TRADITIONS, edges, np.zeros(len(edges)), np.zeros(len(edges), bool), "nearest:6"
    )
    seats = xyz[rng.choice(TRADITIONS, 60, replace=False)]
    family = cKDTree(seats).query(xyz)[1].astype(np.int32)
    effort = np.exp(rng.normal(size=TRADITIONS))
    # Pareto with exponent .8, cut to 5 .. 300.
    u = rng.random(n_motifs)
    counts = (5 * (1 - u * (1 - (5 / 301) ** 0.8)) ** (-1 / 0.8)).astype(int).clip(5, 300)
    drawn = emergence_holders(effort, 300, draws=n_motifs, seed=seed, stream=Stream.POWER)
    return graph, family, effort, [drawn[k, :n] for k, n in enumerate(counts)]


def ours(world, workers, draws=DRAWS):
    """All p-values of all motifs; (M, 7)."""
    graph, family, effort, motifs = world
    seen = observe(graph, motifs, family)
    thresholds = {int(n): seen.scores[seen.holders == n] for n in np.unique(seen.holders)}
    drawn = emergence_world(
        graph,
        family,
        effort,
        seen.holders,
        draws=draws,
        seed=1,
        pool=ThreadPool(workers),
        moran_thresholds=thresholds,
    )
    out = [
        drawn.p_values(
            s, seen.holders, seen.of(s), "few" if s in ("clusters", "strands") else "many"
        )
        for s in STATISTICS
    ]
    out.append(drawn.p_values("moran_i", seen.holders, seen.scores))
    return np.stack(out, axis=1)


def esda_once(world, motif, draws=DRAWS):
    """One call of esda.Moran."""
    import esda
    from libpysal.weights import W

    graph = world[0]
    near = {
        i: graph.indices[graph.indptr[i] : graph.indptr[i + 1]].tolist() for i in range(graph.n)
    }
    y = np.zeros(graph.n)
    y[world[3][motif]] = 1.0
    weights = W(near, silence_warnings=True)
    begin = time.perf_counter()
    esda.Moran(y, weights, transformation="b", permutations=draws)
    return time.perf_counter() - begin


def numpy_once(world, n, *, connected, batches=3, seed=0):
    """Seconds per draw at one number of holders, all motifs of that count served."""
    graph, family, effort, motifs = world
    rng = np.random.default_rng(seed)
    a, b = graph.edges.T
    cross = family[a] != family[b]
    log_weight, degree = np.log(effort), graph.degree.astype(np.float64)
    seen = observe(graph, [m for m in motifs if len(m) == n], family)
    above = np.zeros((len(seen.holders), 7), dtype=np.int64)
    begin = time.perf_counter()
    for _ in range(batches):
        keys = log_weight + rng.gumbel(size=(BATCH, graph.n))
        held = np.argpartition(keys, graph.n - n, axis=1)[:, graph.n - n :]
        mask = np.zeros((graph.n, BATCH), dtype=bool)
        mask[held.T, np.arange(BATCH)] = True
        both = mask[a] & mask[b]
        joins, apart = both.sum(axis=0), both[cross].sum(axis=0)
        values = [joins, apart, joins - apart, graph.n * joins - n * (degree @ mask)]
        known = [*(seen.of(s) for s in STATISTICS[:3]), seen.scores]
        if connected:
            values += connected_parts(both, held, n, family, (a, b))
            known += [-seen.of("clusters"), seen.of("largest_cluster"), -seen.of("strands")]
        for k, (value, observed) in enumerate(zip(values, known, strict=True)):
            ordered = np.sort(value)
            above[:, k] += BATCH - np.searchsorted(ordered, observed)
    return (time.perf_counter() - begin) / (batches * BATCH)


def connected_parts(both, held, n, family, ends):
    """Minus clusters, largest cluster and minus strands of each draw of a batch.

    All draws of the batch go through connected components at once, side by side.
    """
    size = len(family)
    edge, draw = np.nonzero(both)
    i, j = ends[0][edge] + draw * size, ends[1][edge] + draw * size
    place = np.zeros(BATCH * size, dtype=np.int64)
    flat = (held + np.arange(BATCH)[:, None] * size).ravel()
    place[flat] = np.arange(len(flat))
    i, j = place[i], place[j]
    total = len(flat)
    links = sp.coo_array((np.ones(len(i), np.int8), (i, j)), shape=(total, total))
    label = connected_components(links, directed=False)[1]
    sizes = np.bincount(label)
    largest = sizes[label].reshape(BATCH, n).max(axis=1)
    first = np.unique(label, return_index=True)[1]
    clusters = np.bincount(first // n, minlength=BATCH)
    # Each holder is also linked to a vertex that stands for its family in its draw.
    kin = family[held].ravel() + np.repeat(np.arange(BATCH), n) * (int(family.max()) + 1)
    kin = np.unique(kin, return_inverse=True)[1]
    i2, j2 = np.concatenate([i, np.arange(total)]), np.concatenate([j, total + kin])
    wide = total + int(kin.max()) + 1
    links = sp.coo_array((np.ones(len(i2), np.int8), (i2, j2)), shape=(wide, wide))
    label = connected_components(links, directed=False)[1][:total]
    first = np.unique(label, return_index=True)[1]
    return [-clusters, largest, -np.bincount(first // n, minlength=BATCH)]


def timed(function, *args, **kw):
    """Seconds one call takes."""
    begin = time.perf_counter()
    function(*args, **kw)
    return time.perf_counter() - begin


def measure(rounds=5):
    """Time everything, each round in the order of the last turned round; medians."""
    small, large = made_up_world(2_200), made_up_world(22_000)
    counts = np.array([len(m) for m in small[3]])
    distinct = np.unique(counts)
    picked = distinct[np.linspace(0, len(distinct) - 1, 8).astype(int)]
    motifs = [int(np.argmin(abs(counts - q))) for q in np.quantile(counts, [0.25, 0.5, 0.95])]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        jobs = {
            "ours 1": lambda: timed(ours, small, 1),
            "ours 2": lambda: timed(ours, small, 2),
            "ours 2, 22,000": lambda: timed(ours, large, 2),
            "esda": lambda: median(esda_once(small, m) for m in motifs),
            "numpy sums": lambda: numpy_scaled(small, picked, distinct, connected=False),
            "numpy all": lambda: numpy_scaled(small, picked, distinct, connected=True),
        }
        ours(small, 2, draws=1_000)  # compile
        esda_once(small, motifs[0], draws=99)
        times = {name: [] for name in jobs}
        for turn in range(rounds):
            for name in list(jobs) if turn % 2 == 0 else reversed(jobs):
                times[name].append(jobs[name]())
    found = (len(distinct), len({len(m) for m in large[3]}), motifs, picked)
    return {name: median(t) for name, t in times.items()}, times, found


def numpy_scaled(world, picked, distinct, *, connected):
    """Whole catalogue: seconds per draw, averaged over sampled counts, times counts and draws."""
    each = [numpy_once(world, int(n), connected=connected, batches=1) for n in picked]
    return float(np.mean(each)) * len(distinct) * DRAWS


def high_water_kilobytes():
    """Peak resident memory of this process (getrusage would count its parent's before exec)."""
    status = Path("/proc/self/status")
    if status.exists():
        line = next(x for x in status.read_text().splitlines() if x.startswith("VmHWM"))
        return int(line.split()[1])
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss


def peak_megabytes():
    """Peak resident memory of a fresh process that does the whole catalogue, and of its imports."""
    found = []
    for what in ("import", "run"):
        command = [sys.executable, "-m", "tests.benchmarks.test_emergence_speed", what]
        out = subprocess.run(
            command, check=True, capture_output=True, text=True, cwd=Path(__file__).parents[2]
        )
        found.append(int(out.stdout.strip().splitlines()[-1]) / 1024)
    return found


def report(medians, times, sample, memory):
    """Give the text of reports/benchmarks/emergence.md."""
    n_counts, n_large, motifs, picked = sample
    base = medians["ours 2"]
    rows = [
        ("twicetold, 2 threads, 2,200 motifs, all statistics", "ours 2"),
        ("twicetold, 1 thread, 2,200 motifs, all statistics", "ours 1"),
        ("twicetold, 2 threads, 22,000 motifs, all statistics", "ours 2, 22,000"),
        ("(a) one call of esda.Moran (one motif, Moran's I only)", "esda"),
        ("(b) NumPy, joins and Moran's I only, scaled to all counts", "numpy sums"),
        ("(b) NumPy and SciPy, all statistics, scaled to all counts", "numpy all"),
    ]
    lines = [
        "# The emergence-only world: time and memory",
        "",
        "Made by `python -m tests.benchmarks.test_emergence_speed`; the module's docstring says what",
        "each line does.",
        "",
        f"{TRADITIONS:,} traditions, nearest 6, 60 families, effort propensity, {DRAWS:,} draws, "
        f"2,200 motifs of 5 to 300 holders ({n_counts} distinct counts). Python "
        f"{platform.python_version()}, NumPy {np.__version__}, {platform.machine()}, two cores. "
        f"Medians of {len(times['esda'])} rounds in one process, every second round in the opposite "
        f"order. Sample of (a): motifs {motifs}, median of their times; of (b): counts "
        f"{picked.tolist()}, {BATCH:,} draws each per round.",
        "",
        "| what | median, s | lowest and highest, s | times twicetold on 2 threads |",
        "|---|---|---|---|",
    ]
    for text, key in rows:
        lines.append(
            f"| {text} | {medians[key]:.2f} | {min(times[key]):.2f} to {max(times[key]):.2f} | "
            f"{medians[key] / base:.2f} |"
        )
    esda_two = 2 * medians["esda"]
    lines += [
        "",
        f"Load of the machine at the end (runnable tasks, one minute): {os.getloadavg()[0]:.1f}.",
        "",
        "| aim | found |",
        "|---|---|",
        f"| whole catalogue in less time than esda.Moran takes for two motifs | {base:.2f} s against "
        f"{esda_two:.2f} s |",
        "| at least 50 times faster than (b) | "
        f"{medians['numpy sums'] / base:.0f} times (sums only), "
        f"{medians['numpy all'] / base:.0f} times (all statistics); on one thread against one "
        f"{medians['numpy sums'] / medians['ours 1']:.0f} and "
        f"{medians['numpy all'] / medians['ours 1']:.0f} |",
        "| 22,000 motifs in at most 1.2 times the time of 2,200 | "
        f"{medians['ours 2, 22,000'] / base:.2f} times ({n_large} distinct counts for {n_counts}) |",
        f"| peak memory under 1 GB | {memory[1]:.0f} MB, of which {memory[0]:.0f} MB are imports |",
        "",
    ]
    return "\n".join(lines)


@pytest.mark.benchmark
def test_aims():
    medians, _, _ = measure(rounds=3)
    assert medians["ours 2"] < 2 * medians["esda"]
    assert medians["numpy sums"] >= 50 * medians["ours 2"]
    assert medians["ours 2, 22,000"] <= 1.2 * medians["ours 2"]
    assert peak_megabytes()[1] < 1024


@pytest.mark.benchmark
def test_numpy_by_hand_counts_what_we_count():
    # The loop we measure ourselves against must do the same work: compare its statistics.
    graph, family, _, _ = made_up_world(5)
    rng = np.random.default_rng(0)
    held = np.array([rng.choice(graph.n, 40, replace=False) for _ in range(BATCH)])
    mask = np.zeros((graph.n, BATCH), dtype=bool)
    mask[held.T, np.arange(BATCH)] = True
    a, b = graph.edges.T
    parts = connected_parts(mask[a] & mask[b], held, 40, family, (a, b))
    seen = observe(graph, list(held), family)
    assert (-parts[0] == seen.of("clusters")).all()
    assert (parts[1] == seen.of("largest_cluster")).all()
    assert (-parts[2] == seen.of("strands")).all()


def main():
    """Measure, or (as a child) run once and print the peak memory in kilobytes."""
    if len(sys.argv) > 1:
        if sys.argv[1] == "run":
            ours(made_up_world(2_200), 2)
        print(high_water_kilobytes())
        return
    text = report(*measure(), peak_megabytes())
    target = Path(__file__).parents[2] / "reports" / "benchmarks" / "emergence.md"
    target.write_text(text, encoding="utf-8")
    print(text)


if __name__ == "__main__":
    main()
