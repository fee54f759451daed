"""Runs on a cluster equal runs on threads, to the byte; a worker that dies changes nothing.

The cluster is a local one: two worker processes on the loopback interface.
"""

from __future__ import annotations

import json
import os
import signal
import time
from collections import namedtuple

import numpy as np
import pytest

pytest.importorskip("distributed")

from distributed import Client, LocalCluster
from typer.testing import CliRunner

from made_up import catalogue_of
from small_world import put, small_world
from twicetold import cluster as cluster_module
from twicetold.cli import app
from twicetold.cluster import ClusterPool, check_versions, open_cluster
from twicetold.errors import TwicetoldError
from twicetold.evidence import rank_catalogue
from twicetold.plan import Plan
from twicetold.run import csv_text
from twicetold.workers import ThreadPool, no_progress


def local_cluster(workers=2):
    return LocalCluster(
        n_workers=workers,
        threads_per_worker=1,
        processes=True,
        host="127.0.0.1",
        dashboard_address="127.0.0.1:0",
        memory_limit=0,
        silence_logs=50,
    )


@pytest.fixture(scope="module")
def address():
    with local_cluster() as running:
        yield running.scheduler_address


@pytest.fixture(scope="module")
def catalogue():
    rng = np.random.default_rng(7)
    rows = [rng.choice(60, size=n, replace=False) for n in rng.integers(1, 30, 24)]
    return catalogue_of(rows, 60, families=8, effort=rng.lognormal(size=60))


def short_plan(**changes):
    return Plan().replace(
        evidence__draws=2_999, evidence__walks=300, sensitivity__hidden=False, **changes
    )


def everything(ranking):
    """All numbers of a ranking as text, laws included."""
    laws = [
        (c.world, c.statistic, c.p, c.law.values.tolist(), c.law.weights.tolist())
        for e in ranking.evidence
        for c in e.comparisons
        if c.law is not None
    ]
    tables = {k: csv_text(v) for k, v in sorted(ranking.tables.items())}
    return csv_text(ranking.motifs), repr(laws), repr(tables), repr(ranking.notes)


# ---- functions that run on workers -----------------------------------------------------------

Pair = namedtuple("Pair", "base step")


def add(shared, key):
    return shared.base + shared.step * key


def add_tuple(shared, key):
    return shared[0] + shared[1] * key[0] * key[1]


def refuse(shared, key):
    if key == 3:
        raise TwicetoldError("`key` must not be 3, got 3. Take another.")
    return key


def slow(shared, key):
    time.sleep(0.05)
    return os.getpid(), key, float(np.random.default_rng([shared["seed"], key]).normal())


def die(shared, key):
    """End the worker's process the first time a key comes by, for the keys named in shared."""
    mark = os.path.join(shared["marks"], str(key))
    if key in shared["deadly"] and not os.path.exists(mark):
        with open(mark, "w"):
            pass
        os.kill(os.getpid(), signal.SIGKILL)
    return key * shared["factor"]


def always_die(shared, key):
    os.kill(os.getpid(), signal.SIGKILL)


# ---- what a pool promises --------------------------------------------------------------------


def test_results_come_in_order_and_progress_counts(address):
    seen = []
    with open_cluster(address, lambda *said: seen.append(said)) as pool:
        assert list(pool.run(add, Pair(5, 2), range(40), label="sum")) == list(range(5, 85, 2))
        assert list(pool.run(add_tuple, (1, 10), [(1, 2), (3, 4)], label="pairs")) == [21, 121]
        assert list(pool.run(add, Pair(0, 0), [], label="nothing")) == []
    assert [s[1:] for s in seen if s[0] == "sum"] == [(k, 40) for k in range(41)]
    assert ("nothing", 0, 0) in seen


def test_errors_of_a_chunk_come_through_as_they_are(address):
    with (
        open_cluster(address, no_progress) as pool,
        pytest.raises(TwicetoldError, match="must not be 3"),
    ):
        list(pool.run(refuse, None, range(50), label="refused"))


def test_what_is_left_is_cancelled(address):
    with open_cluster(address, no_progress) as pool:
        runs = pool.run(slow, {"seed": 1}, range(200), label="slow")
        next(runs)
        runs.close()
        begin = time.perf_counter()
        assert list(pool.run(add, Pair(0, 1), range(3), label="after")) == [0, 1, 2]
        assert time.perf_counter() - begin < 5


@pytest.mark.parametrize(
    ("worlds", "propensity"),
    [
        (("emergence", "ancestry"), "effort"),
        (("emergence",), "recorded"),  # motif by motif: a pool inside each worker
        (("emergence",), "margins"),
        (("emergence", "contact", "transmission"), "effort"),
    ],
)
def test_same_bytes_as_threads(address, catalogue, worlds, propensity):
    plan = short_plan(evidence__worlds=worlds, emergence__propensity=propensity)
    one, three = (
        everything(rank_catalogue(catalogue, plan, pool=ThreadPool(n), cache=False, details=False))
        for n in (1, 3)
    )
    with open_cluster(address, no_progress) as pool:
        there = everything(rank_catalogue(catalogue, plan, pool=pool, cache=False, details=False))
    assert there == one == three


def test_bank_and_its_posterior_are_the_same(address, catalogue):
    from twicetold.evidence.shares import build_bank, fit_posterior
    from twicetold.graph import contact_graph
    from twicetold.spread import SpreadModel

    graph = contact_graph(catalogue, "nearest:4")
    model = SpreadModel(graph, 0.9, family=catalogue.family_codes)
    held = [catalogue.holders(m) for m in range(catalogue.n_motifs)]

    def told(pool):
        bank = build_bank(model, largest=25, seed=3, pool=pool, walks=400, use_cache=False)
        fitted = fit_posterior(bank, seed=3, pool=pool, members=1, steps=20)
        return (
            bank.summaries.tobytes(),
            bank.weight.tobytes(),
            [(s.mean.tobytes(), s.low.tobytes()) for s in fitted.posterior(held)],
        )

    here = told(ThreadPool(2))
    with open_cluster(address, no_progress) as pool:
        assert told(pool) == here


def test_command_line_takes_the_address(address, tmp_path):
    tables = put(small_world(), tmp_path / "tables")
    words = ["test", str(tables), "m1", "--worlds", "emergence,ancestry", "--draws", "9999"]
    said = [
        CliRunner().invoke(app, [*words, "--json", *more], catch_exceptions=False)
        for more in ([], ["--cluster", address])
    ]
    assert [s.exit_code for s in said] == [0, 0], said
    assert json.loads(said[0].stdout)["motif_id"] == "m1"
    assert said[0].stdout == said[1].stdout


@pytest.mark.reliability
def test_whole_run_is_the_same_folder(address, example_folder, tmp_path):
    words = ["rank", str(example_folder), "--worlds", "emergence,ancestry", "--no-cache"]
    for name, more in (("threads", []), ("cluster", ["--cluster", address])):
        out = ["--out", str(tmp_path / name), "--quiet"]
        done = CliRunner().invoke(app, [*words, *out, *more], catch_exceptions=False)
        assert done.exit_code == 0, done.output
    files = [
        {p.relative_to(f).as_posix(): p.read_bytes() for p in f.rglob("*.*") if p.is_file()}
        for f in (tmp_path / "threads", tmp_path / "cluster")
    ]
    for found in files:
        found.pop("timings.json")  # seconds are no results
    assert len(files[0]) > 100
    assert [k for k in files[0] if files[0][k] != files[1].get(k)] == []
    assert files[0].keys() == files[1].keys()


# ---- what goes wrong ---------------------------------------------------------------------------


@pytest.mark.parametrize("address", ["tcp://127.0.0.1:1", "nowhere at all", "ftp://x:1", ""])
def test_no_scheduler_is_said_plainly(address, monkeypatch):
    monkeypatch.setattr(cluster_module, "TIMEOUT", 1)
    with (
        pytest.raises(TwicetoldError, match="No scheduler answered"),
        open_cluster(address, no_progress),
    ):
        pass


def test_other_versions_are_refused():
    same = dict.fromkeys(cluster_module.SAME, "1")
    found = {"client": {"packages": same}, "workers": {"tcp://b": {"packages": dict(same)}}}
    check_versions(found)
    found["workers"]["tcp://a"] = {"packages": {**same, "numba": "2"}}
    with pytest.raises(TwicetoldError, match=r"same numba as this machine \(1\).*tcp://a has 2"):
        check_versions(found)
    found["workers"]["tcp://a"] = {"packages": {**same, "twicetold": None}}
    with pytest.raises(TwicetoldError, match="tcp://a has none"):
        check_versions(found)


@pytest.mark.reliability
def test_cluster_without_workers_is_left_in_the_end(monkeypatch):
    monkeypatch.setattr(cluster_module, "PATIENCE", 1.0)
    monkeypatch.setattr(cluster_module, "LOOK", 0.5)
    with (
        local_cluster(1) as running,
        open_cluster(running.scheduler_address, no_progress) as pool,
    ):
        results = pool.run(slow, {"seed": 1}, range(500), label="slow")
        next(results)
        running.scale(0)
        with pytest.raises(TwicetoldError, match="without workers"):
            list(results)


@pytest.mark.reliability
@pytest.mark.parametrize("workers", [1, 2])
def test_chunks_survive_workers_that_die(workers, tmp_path):
    # With one worker the shared object dies with it too, and has to be sent again.
    shared = {"marks": str(tmp_path), "deadly": (5, 17), "factor": 3}
    with (
        local_cluster(workers) as running,
        open_cluster(running.scheduler_address, no_progress) as pool,
    ):
        assert list(pool.run(die, shared, range(40), label="dying")) == list(range(0, 120, 3))


@pytest.mark.reliability
def test_chunk_that_ends_every_worker_is_named():
    with (
        local_cluster(1) as running,
        open_cluster(running.scheduler_address, no_progress) as pool,
        pytest.raises(TwicetoldError, match=r"ended every worker|again and again"),
    ):
        list(pool.run(always_die, None, [1], label="deadly"))


@pytest.mark.reliability
@pytest.mark.parametrize("worlds", ["emergence,ancestry", "emergence,contact,transmission"])
def test_worker_killed_half_way_changes_no_byte(catalogue, worlds):
    plan = short_plan(evidence__worlds=tuple(worlds.split(",")))
    plan = plan.replace(evidence__draws=499_999) if "ancestry" in worlds else plan
    plan = plan.replace(evidence__walks=5_000) if "contact" in worlds else plan
    here = everything(
        rank_catalogue(catalogue, plan, pool=ThreadPool(2), cache=False, details=False)
    )
    killed = []
    with local_cluster(2) as running, Client(running, set_as_default=False) as client:

        def kill(label, done, total):
            # At a third of each kind of work, one worker's process is ended the hard way.
            if total > 6 and done == total // 3:
                pids = client.run(os.getpid)
                victim = pids[sorted(pids)[len(killed) % len(pids)]]
                os.kill(victim, signal.SIGKILL)
                killed.append(label)

        pool = ClusterPool(client, kill)
        there = everything(rank_catalogue(catalogue, plan, pool=pool, cache=False, details=False))
    assert killed
    print(f"killed during: {killed}")
    assert there == here
