"""twicetold beside esda, a NumPy loop and R's spdep, on the same motif, map and numbers of draws.

Run by hand: ``python -m tests.benchmarks.test_peers`` writes ``reports/benchmarks/peers.md``;
``pytest -m benchmark tests/benchmarks/test_peers.py`` checks correctness alone.

One motif of 50 holders on 1,000 places (nearest 6, the map of ``test_emergence_speed``), every
tradition equally ready, because the peers know no other null model. Each is asked for what it
offers: esda and spdep for Moran's I and for joins, one call each; the loop by hand for joins and
Moran's I; twicetold always counts all seven statistics. The whole catalogue of 2,200 motifs is in
``emergence.md``, beside the same loop with draws shared among motifs of a count.
"""

from __future__ import annotations

import json
import math
import os
import platform
import shutil
import subprocess
import sys
import tempfile
import time
import warnings
from pathlib import Path
from statistics import median

import numba as nb
import numpy as np
import pytest
from tests.benchmarks.test_emergence_speed import high_water_kilobytes, made_up_world

from twicetold.randomness import Stream, chunk_words
from twicetold.references import _kernels
from twicetold.references._engine import table_of
from twicetold.references.emergence import emergence_holders, emergence_world
from twicetold.statistics import join_moments, moran_moments, observe
from twicetold.statistics.observe import graph_arrays
from twicetold.workers import ThreadPool

REPO = Path(__file__).parents[2]
REPORT = REPO / "reports" / "benchmarks" / "peers.md"
HOLDERS, DRAWS, FEWER, BATCH = 50, 99_999, 999, 1_000
RSCRIPT = shutil.which("Rscript")
#: Peers that are slow are timed on fewer draws and scaled; draws they are timed on.
TIMED = {
    "twicetold": DRAWS,
    "esda.Moran": DRAWS,
    "esda.Join_Counts": FEWER,
    "NumPy loop": 10_000,
    "spdep moran.mc": FEWER,
    "spdep joincount.mc": FEWER,
}


def timed(function, *args):
    """Seconds of processor one call takes: all work on one thread, and others use the machine."""
    begin = time.process_time()
    function(*args)
    return time.process_time() - begin


def world():
    """Graph, and 50 holders, a tenth of them grown along the map: p-values far from 0 and 1."""
    graph = made_up_world(2)[0]
    rng = np.random.default_rng(5)
    start = int(rng.integers(graph.n))
    held, edge = {start}, [start]
    while len(held) < HOLDERS // 10:
        v = edge.pop(0)
        for u in graph.indices[graph.indptr[v] : graph.indptr[v + 1]]:
            if len(held) < HOLDERS // 10 and int(u) not in held:
                held.add(int(u))
                edge.append(int(u))
    rest = [int(v) for v in rng.permutation(graph.n) if int(v) not in held]
    return graph, np.sort(np.array([*held, *rest[: HOLDERS - len(held)]], dtype=np.int32))


def weights_of(graph):
    """libpysal's weights of the same graph."""
    from libpysal.weights import W

    near = {
        i: graph.indices[graph.indptr[i] : graph.indptr[i + 1]].tolist() for i in range(graph.n)
    }
    return W(near, silence_warnings=True)


def ours(graph, held, draws, workers=1):
    """Every statistic of the motif, with p-values."""
    seen = observe(graph, [held], None)
    n = len(held)
    drawn = emergence_world(
        graph,
        None,
        np.ones(graph.n),
        [n],
        draws=draws,
        seed=1,
        pool=ThreadPool(workers),
        moran_thresholds={n: seen.scores},
    )
    joins = int(seen.of("joins")[0])
    return {
        "joins": joins,
        "moran": float(seen.moran[0]),
        "p_joins": float(drawn.p_values("joins", [n], [joins])[0]),
        "p_moran": drawn.moran_p(n, int(seen.scores[0])),
        "law": drawn.law("joins", n),
    }


def loop(graph, held, draws, seed=0):
    """NumPy by hand: permutations in batches, joins and Moran scores by vectorised look-up."""
    rng = np.random.default_rng(seed)
    n = len(held)
    a, b = graph.edges.T
    mask = np.zeros(graph.n, dtype=bool)
    mask[held] = True
    seen = [int((mask[a] & mask[b]).sum())]
    seen.append(graph.n * seen[0] - n * int(graph.degree[held].sum()))
    above = np.zeros(2, dtype=np.int64)
    degree = graph.degree.astype(np.float64)
    for first in range(0, draws, BATCH):
        size = min(BATCH, draws - first)
        who = np.argpartition(rng.random((size, graph.n)), n, axis=1)[:, :n]
        mask = np.zeros((graph.n, size), dtype=bool)
        mask[who.T, np.arange(size)] = True
        joins = (mask[a] & mask[b]).sum(axis=0)
        score = graph.n * joins - n * (degree @ mask)
        above += ((joins >= seen[0]).sum(), (score >= seen[1]).sum())
    return (1 + above) / (draws + 1)


def esda_call(name, graph, held, draws, weights=None):
    """One call of esda."""
    import esda

    y = np.zeros(graph.n)
    y[held] = 1.0
    weights = weights or weights_of(graph)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what esda warns of while it works is its own
        if name == "esda.Moran":
            return esda.Moran(y, weights, transformation="b", permutations=draws)
        return esda.Join_Counts(y.astype(int), weights, permutations=draws)


R_CODE = """
suppressPackageStartupMessages(library(spdep))
input <- commandArgs(TRUE)[1]; draws <- as.integer(commandArgs(TRUE)[2])
edges <- as.matrix(read.csv(file.path(input, "edges.csv")))
y <- read.csv(file.path(input, "held.csv"))$held
near <- vector("list", length(y))
for (k in seq_len(nrow(edges))) {
  i <- edges[k, 1]; j <- edges[k, 2]
  near[[i]] <- c(near[[i]], j); near[[j]] <- c(near[[j]], i)
}
near <- lapply(near, function(v) if (is.null(v)) 0L else sort(as.integer(v)))
attr(near, "region.id") <- as.character(seq_along(y)); class(near) <- "nb"
listw <- nb2listw(near, style = "B", zero.policy = TRUE)
f <- factor(y)
set.seed(1)
j <- joincount.test(f, listw, zero.policy = TRUE)[[2]]
m <- moran.test(y, listw, randomisation = TRUE, zero.policy = TRUE, adjust.n = FALSE)
t1 <- system.time(jm <- joincount.mc(f, listw, nsim = draws, zero.policy = TRUE)[[2]])
t2 <- system.time(mm <- moran.mc(y, listw, nsim = draws, zero.policy = TRUE, adjust.n = FALSE))
cat(sprintf('{"joins": %.15g, "joins_mean": %.15g, "joins_var": %.15g, "moran": %.15g, "moran_mean": %.15g, "moran_var": %.15g, "joincount_s": %.6g, "moran_s": %.6g, "joins_sim_mean": %.15g, "joins_sim_p": %.6g, "moran_sim_p": %.6g, "version": "%s", "r": "%s"}\\n',
  j$estimate[[1]], j$estimate[[2]], j$estimate[[3]], m$estimate[[1]], m$estimate[[2]], m$estimate[[3]],
  sum(t1[1:2]), sum(t2[1:2]), mean(jm$res[-length(jm$res)]), jm$p.value, mm$p.value,
  as.character(packageVersion("spdep")), as.character(getRversion())))
"""


def spdep(graph, held, draws):
    """What R's spdep says; seconds are of its calls alone, memory of the whole process."""
    folder = Path(tempfile.mkdtemp())
    try:
        np.savetxt(
            folder / "edges.csv",
            graph.edges + 1,
            fmt="%d",
            delimiter=",",
            header="i,j",
            comments="",
        )
        y = np.zeros(graph.n, dtype=int)
        y[held] = 1
        np.savetxt(folder / "held.csv", y, fmt="%d", header="held", comments="")
        (folder / "peer.R").write_text(R_CODE, encoding="utf-8")
        command = [RSCRIPT, "--vanilla", str(folder / "peer.R"), str(folder), str(draws)]
        done = subprocess.run(command, capture_output=True, text=True, check=True)
        return json.loads(done.stdout.strip().splitlines()[-1])
    finally:
        shutil.rmtree(folder)


# ---- correctness -------------------------------------------------------------------------------


def check_same_draws(graph, held, draws=20_000):
    """NumPy look-ups on our own draws must give our law, value for value."""
    n = len(held)
    sets = emergence_holders(np.ones(graph.n), n, draws=draws, seed=1, stream=Stream.EMERGENCE)
    a, b = graph.edges.T
    joins = np.empty(draws, dtype=np.int64)
    for first in range(0, draws, BATCH):
        part = sets[first : first + BATCH]
        mask = np.zeros((len(part), graph.n), dtype=bool)
        mask[np.arange(len(part))[:, None], part] = True
        joins[first : first + len(part)] = (mask[:, a] & mask[:, b]).sum(axis=1)
    law = ours(graph, held, draws)["law"]
    values, counts = np.unique(joins, return_counts=True)
    assert values.tolist() == law.values.tolist()
    assert counts.tolist() == law.weights.tolist()
    return draws


def check_esda(graph, held):
    """Observed values and moments equal; simulated p-values within Monte Carlo error."""
    mine = ours(graph, held, DRAWS)
    moran = esda_call("esda.Moran", graph, held, 9_999)
    counts = esda_call("esda.Join_Counts", graph, held, FEWER)
    exact = moran_moments(graph, n=len(held))
    assert abs(moran.I - mine["moran"]) < 1e-12
    assert counts.bb == mine["joins"]
    assert abs(moran.EI - exact.mean) < 1e-14
    p, q = mine["p_moran"], moran.p_sim
    assert abs(p - q) < 4 * math.sqrt(p * (1 - p) / 9_999) + 2 / 10_000
    joins = join_moments(graph, None, len(held))
    se = math.sqrt(joins.var_all / FEWER)
    assert abs(np.mean(counts.sim_bb) - joins.mean_all) < 4 * se
    return {"p_moran": (p, q), "p_joins": (mine["p_joins"], counts.p_sim_bb)}


def check_spdep(graph, held):
    """Observed values and exact moments of spdep equal ours."""
    found = spdep(graph, held, FEWER)
    mine = ours(graph, held, DRAWS)
    joins = join_moments(graph, None, len(held))
    assert found["joins"] == pytest.approx(mine["joins"], rel=1e-12)
    assert found["joins_mean"] == pytest.approx(joins.mean_all, rel=1e-10)
    assert found["joins_var"] == pytest.approx(joins.var_all, rel=1e-8)
    assert found["moran"] == pytest.approx(mine["moran"], abs=1e-12)
    assert found["moran_mean"] == pytest.approx(-1 / (graph.n - 1), abs=1e-12)
    assert abs(found["joins_sim_mean"] - joins.mean_all) < 4 * math.sqrt(joins.var_all / FEWER)
    return found


# ---- where the limit lies ----------------------------------------------------------------------


@nb.njit(nogil=True)
def read_neighbours(orders, indptr, indices):
    """Read every neighbour of every tradition drawn, and do nothing with it but add it up."""
    total = np.int64(0)
    for d in range(orders.shape[0]):
        for m in range(orders.shape[1]):
            v = np.uint32(orders[d, m])
            for e in range(np.uint32(indptr[v]), np.uint32(indptr[v + np.uint32(1)])):
                total += np.uint32(indices[e])
    return total


@nb.njit(nogil=True)
def read_marks(orders, indptr, indices, mark, family):
    """Also read what is known of each neighbour: whether it holds, and its family."""
    total = np.int64(0)
    for d in range(orders.shape[0]):
        for m in range(orders.shape[1]):
            v = np.uint32(orders[d, m])
            mark[v] = d
            for e in range(np.uint32(indptr[v]), np.uint32(indptr[v + np.uint32(1)])):
                u = np.uint32(indices[e])
                total += mark[u] + family[u]
    return total


def limits(rounds=7, draws=4_000, length=300):
    """Neighbour visits per second, one thread: the sweep beside loops that only read."""
    graph, family, effort, _ = made_up_world(2)
    weights = effort / effort.max()
    words = chunk_words(1, Stream.EMERGENCE, 0, draws=draws)
    orders = np.empty((draws, length), dtype=np.int32)
    column = np.arange(-1, length, dtype=np.int32)
    column[:] = -1
    column[length] = 0
    indptr, indices, kin_of, work, kin = graph_arrays(graph, family)
    out = np.zeros((draws, 1, 6), dtype=np.int32)
    scores = np.zeros((draws, 1), dtype=np.int64)
    mark = np.zeros(graph.n, dtype=np.int32)
    table = table_of(weights)
    epoch = [1]

    def swept():
        _kernels.sweep_orders(
            orders, column, indptr, indices, kin_of, work, kin, epoch[0], out, scores
        )
        epoch[0] += draws

    jobs = {
        "drawing the orders": lambda: _kernels.draw_orders(words, weights, *table, orders),
        "the sweep": swept,
        "a bare loop that reads the neighbours": lambda: read_neighbours(orders, indptr, indices),
        "the same, also reading mark and family of each": lambda: read_marks(
            orders, indptr, indices, mark, kin_of
        ),
    }
    for job in jobs.values():
        job()
    visits = int(graph.degree[orders].sum())
    times = {name: [] for name in jobs}
    for turn in range(rounds):
        for name in list(jobs) if turn % 2 == 0 else reversed(jobs):
            times[name].append(timed(jobs[name]))
    return visits, {name: visits / median(t) for name, t in times.items()}


# ---- measuring ---------------------------------------------------------------------------------


def call(name, graph, held, draws, weights=None):
    """Run one of the peers that live in Python."""
    if name == "twicetold":
        return ours(graph, held, draws)
    if name == "NumPy loop":
        return loop(graph, held, draws)
    return esda_call(name, graph, held, draws, weights)


def measure(rounds=3):
    """Seconds scaled to 99,999 draws, each round in the order of the last turned round."""
    graph, held = world()
    weights = weights_of(graph)
    names = [n for n in TIMED if "spdep" not in n or RSCRIPT]
    for name in names:
        if "spdep" not in name:
            call(name, graph, held, 99, weights)  # compile
    times = {name: [] for name in names}
    for turn in range(rounds):
        for name in names if turn % 2 == 0 else reversed(names):
            if name == "spdep moran.mc":
                said = spdep(graph, held, FEWER)
                times[name].append(said["moran_s"] * DRAWS / FEWER)
                times["spdep joincount.mc"].append(said["joincount_s"] * DRAWS / FEWER)
            elif "spdep" not in name:
                took = timed(call, name, graph, held, TIMED[name], weights)
                times[name].append(took * DRAWS / TIMED[name])
    return times


def memory():
    """Peak MB of a fresh process for each, and of one that only imports."""
    found = {}
    for name in ("import", "twicetold", "esda.Moran", "esda.Join_Counts", "NumPy loop"):
        command = [sys.executable, "-m", "tests.benchmarks.test_peers", "child", name]
        out = subprocess.run(command, check=True, capture_output=True, text=True, cwd=REPO)
        found[name] = int(out.stdout.strip().splitlines()[-1]) / 1024
    if RSCRIPT:
        code = (
            "import resource, sys; sys.path.insert(0, 'tests')\n"
            "from tests.benchmarks.test_peers import *\n"
            "spdep(*world(), FEWER)\n"
            "print(resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss)"
        )
        out = subprocess.run(
            [sys.executable, "-c", code], check=True, capture_output=True, text=True, cwd=REPO
        )
        found["spdep"] = int(out.stdout.strip().splitlines()[-1]) / 1024
    return found


def report(times, space, checks, limit):
    """Give the text of reports/benchmarks/peers.md."""
    base = median(times["twicetold"])
    lines = [
        "# Beside peers",
        "",
        "Made by `python -m tests.benchmarks.test_peers`; the module's docstring says what was "
        "asked of each.",
        "",
        f"One motif of {HOLDERS} holders, 1,000 places, nearest 6, every tradition equally ready; "
        f"seconds of processor for {DRAWS:,} draws, every one on one thread. Python "
        f"{platform.python_version()}, NumPy {np.__version__}, {platform.machine()}. Medians of "
        f"{len(times['twicetold'])} rounds, every second one in the opposite order. Load of the "
        f"machine at the end: {os.getloadavg()[0]:.1f}.",
        "",
        "| what | draws timed | median, s | lowest and highest, s | times twicetold | peak, MB |",
        "|---|---|---|---|---|---|",
    ]
    offers = {
        "twicetold": "all seven statistics",
        "esda.Moran": "Moran's I",
        "esda.Join_Counts": "joins",
        "NumPy loop": "joins, Moran's I",
        "spdep moran.mc": "Moran's I",
        "spdep joincount.mc": "joins",
    }
    for name, t in times.items():
        peak = space.get(name, space.get(name.split()[0], math.nan))
        lines.append(
            f"| {name} ({offers[name]}) | {TIMED[name]:,} | {median(t):.3g} | {min(t):.3g} to "
            f"{max(t):.3g} | {median(t) / base:.3g} | {peak:.0f} |"
        )
    lines += [
        "",
        f"A process that only imports what these need takes {space['import']:.0f} MB. Draws of the "
        "slower ones are fewer and their times scaled up, which is exact for loops over draws.",
        "",
        "## Correctness",
        "",
        *checks,
        "",
        "## Where the limit lies",
        "",
        f"One thread, {limit[0]:,} neighbour visits (4,000 draws up to 300 holders, effort "
        "propensity). A visit is one neighbour of one tradition that is added.",
        "",
        "| what | million visits a second | share of the bare loop |",
        "|---|---|---|",
    ]
    rates = limit[1]
    bare = rates["a bare loop that reads the neighbours"]
    for name, rate in rates.items():
        lines.append(f"| {name} | {rate / 1e6:.0f} | {rate / bare:.0%} |")
    lines += [
        "",
        "The rest of the sweep is union-find and the branches it takes (a random walk through small arrays, little of it",
        "foreseeable). Found by this comparison: the sweep asked every neighbour its family, and now asks only those that",
        "hold. In one run, results equal: 253 to 261 million visits a second up to 50 holders, 138 to 164 up to 300, 93 to",
        "123 up to 1,000.",
    ]
    return "\n".join([*lines, ""])


def checked():
    """Run the checks and say what they found."""
    graph, held = world()
    draws = check_same_draws(graph, held)
    found = check_esda(graph, held)
    lines = [
        f"- **NumPy on the same draws** ({draws:,}): the law of joins agrees value for value.",
        "- **esda**: Moran's I, its expectation and joins agree to the last digits; p of Moran's "
        f"I {found['p_moran'][0]:.5f} against {found['p_moran'][1]:.5f} (9,999 permutations), mean "
        "of its simulated joins within four standard errors of the exact mean.",
    ]
    if RSCRIPT:
        said = check_spdep(graph, held)
        lines.append(
            f"- **spdep {said['version']}** (R {said['r']}): joins, their exact mean and variance, "
            "Moran's I and its expectation agree (10 digits; variance 8); mean of its simulated "
            "joins within four standard errors."
        )
    else:
        lines.append("- **spdep**: no R on this machine; not compared.")
    return lines


@pytest.mark.benchmark
def test_peers_agree():
    assert len(checked()) == 3


def main():
    """Measure, or (as a child) run one peer once and print its peak memory in kilobytes."""
    if len(sys.argv) > 2:
        import esda  # noqa: F401

        name = sys.argv[2]
        if name != "import":
            call(name, *world(), TIMED[name])
        print(high_water_kilobytes())
        return
    text = report(measure(), memory(), checked(), limits())
    REPORT.write_text(text, encoding="utf-8")
    print(text)


if __name__ == "__main__":
    main()
