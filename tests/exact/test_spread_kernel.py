"""The spread kernel against linear algebra over all subsets, within four standard errors."""

from __future__ import annotations

import numpy as np
import pytest

from subset_solver import Solver
from twicetold.randomness import Stream, chunk_words
from twicetold.spread import STATISTICS, SpreadModel, chain_tables, walk_chunk
from zoo import as_contact_graph

WALKS = 20_000

# name: (n, edges, family, turnover, shares, reach, cap)
ZOO = {
    "path": (5, [(0, 1), (1, 2), (2, 3), (3, 4)], None, 0.9, (0, 1, 0), 1.0, 5),
    "path low cap": (5, [(0, 1), (1, 2), (2, 3), (3, 4)], None, 0.9, (0.2, 0.8, 0), 1.0, 2),
    "path cap 1": (5, [(0, 1), (1, 2), (2, 3), (3, 4)], None, 0.5, (0, 1, 0), 1.0, 1),
    "star": (6, [(0, i) for i in range(1, 6)], None, 0.8, (0.1, 0.9, 0), 1.5, 4),
    "cycle": (6, [(i, (i + 1) % 6) for i in range(6)], None, 1.0, (0, 1, 0), 3.0, 6),
    "complete": (
        5,
        [(i, j) for j in range(5) for i in range(j)],
        [0, 0, 1, 1, 1],
        0.7,
        (0, 0.5, 0.5),
        1.0,
        3,
    ),
    "two components": (
        6,
        [(0, 1), (0, 2), (1, 2), (3, 4), (3, 5), (4, 5)],
        None,
        0.95,
        (0.05, 0.95, 0),
        2.0,
        4,
    ),
    "isolate": (5, [(0, 1), (1, 2), (2, 3)], None, 0.6, (0, 1, 0), 1.0, 4),
    "two families": (
        6,
        [(i, i + 1) for i in range(5)],
        [0, 1, 0, 1, 0, 1],
        0.9,
        (0.1, 0.3, 0.6),
        1.5,
        5,
    ),
    "no edges": (4, [], [0, 0, 1, 1], 0.9, (0, 0.4, 0.6), 1.0, 4),
}
RECORDING = {"complete": None, "unequal": np.array([0.3, 1.0, 0.55, 0.8, 0.9, 0.45])}
PROPENSITY = np.array([1.0, 2.0, 3.0, 0.5, 4.0, 0.0])


@pytest.mark.parametrize("recording", RECORDING)
@pytest.mark.parametrize("spill", ["emergence", "transmission"])
@pytest.mark.parametrize("name", ZOO)
def test_kernel_matches_linear_algebra(name, spill, recording):
    n, edges, family, x, shares, reach, cap = ZOO[name]
    rate = None if RECORDING[recording] is None else RECORDING[recording][:n]
    propensity = PROPENSITY[:n]
    solver = Solver(n, edges, x, shares, family, propensity, reach, spill == "transmission")
    model = SpreadModel(
        as_contact_graph(n, edges), x, shares, family, propensity, reach, recorded=rate, spill=spill
    )
    tables = chain_tables(model, cap)
    counts = np.arange(1, n + 1, dtype=np.int32)
    seed = sorted(ZOO).index(name)
    got = walk_chunk(tables, chunk_words(seed, Stream.SPREAD, 0, draws=WALKS), counts)
    summaries = got.summaries(tables)

    # Prevalence: weights are kept relative to x**min(n, cap).
    per_count = got.weight * x ** np.minimum(counts, cap)
    shape = per_count.mean(axis=0) / per_count.mean()  # ratio estimator, n times P(n)
    residual = per_count - shape * per_count.mean(axis=1, keepdims=True)
    error = residual.std(axis=0) / np.sqrt(WALKS) / per_count.mean() / n
    assert np.all(np.abs(shape / n - solver.prevalence(rate)) <= 4 * error + 1e-9)

    for count in counts:
        weight = got.weight[:, count - 1]
        for k, statistic in enumerate(STATISTICS):
            law = solver.law(statistic, count, rate)
            values = summaries[:, count - 1, k]
            assert set(values[weight > 0]) <= set(law)
            for value, p in law.items():
                hit = values == value
                estimate = weight[hit].sum() / weight.sum()
                spread = np.sqrt(np.sum((weight * (hit - p)) ** 2)) / weight.sum()
                assert abs(estimate - p) <= 4 * spread + 1e-9, (count, statistic, value)


def test_weights_matter():
    # Without the weights the small path is visibly biased: the check above can fail.
    n, edges, _, x, shares, _, cap = ZOO["path low cap"]
    tables = chain_tables(SpreadModel(as_contact_graph(n, edges), x, shares), cap)
    got = walk_chunk(
        tables, chunk_words(0, Stream.SPREAD, 0, draws=WALKS), np.array([3], dtype=np.int32)
    )
    joins = got.summaries(tables)[:, 0, 0]
    there = got.weight[:, 0] > 0
    p = Solver(n, edges, x, shares).law("joins", 3)[2]
    unweighted = np.mean(joins[there] == 2)
    assert abs(unweighted - p) > 4 * np.sqrt(p * (1 - p) / there.sum())


def test_holders_of_a_snapshot():
    n = 70
    edges = [(i, i + 1) for i in range(n - 1)]
    tables = chain_tables(SpreadModel(as_contact_graph(n, edges), 0.9), 10)
    counts = np.array([1, 4, 10], dtype=np.int32)
    got = walk_chunk(tables, chunk_words(3, Stream.SPREAD, 0, draws=50), counts)
    joins = got.summaries(tables)[:, :, 0]
    for w in range(50):
        for k, count in enumerate(counts):
            held = got.holders(w, k)
            assert len(held) == (count if got.weight[w, k] > 0 else 0)
            assert joins[w, k] == np.sum(np.diff(held) == 1)
