"""Kernels of the emergence-only world against their plain twins: the same integers."""

from collections import Counter

import numpy as np
import pytest

from twicetold.randomness import Stream, chunk_words
from twicetold.references import _kernels, _plain, emergence
from twicetold.references._engine import CHUNK, table_of
from twicetold.references.emergence import emergence_world
from twicetold.references.tally import ScoreTails, Tally
from twicetold.statistics import STATISTICS
from zoo import as_contact_graph, small_graphs

ZOO = small_graphs()
WEIGHTS = {
    "equal": np.ones(40),
    "gradient": np.linspace(0.1, 1.0, 40),
    "steep": np.exp(-0.5 * np.arange(40.0)),  # the table is made again many times
    "some zero": np.where(np.arange(40) % 4 == 0, 0.0, 1.0 + np.arange(40)),
}


@pytest.mark.parametrize("name", WEIGHTS)
def test_orders(name):
    weights = WEIGHTS[name] / WEIGHTS[name].max()
    able = int((weights > 0).sum())
    words = chunk_words(5, Stream.EMERGENCE, 2, draws=40)
    orders = np.empty((40, able), dtype=np.int32)
    _kernels.draw_orders(words, weights, *table_of(weights), orders)
    for w, order in zip(words, orders, strict=True):
        assert order.tolist() == _plain.draw_order(w, weights.tolist(), able)
        assert sorted(order.tolist()) == np.flatnonzero(weights > 0).tolist()
    # A shorter prefix is the beginning of a longer one.
    short = np.empty((40, 7), dtype=np.int32)
    _kernels.draw_orders(words, weights, *table_of(weights), short)
    assert (short == orders[:, :7]).all()


@pytest.mark.parametrize("name", ZOO)
def test_world_equals_plain(name, monkeypatch):
    monkeypatch.setattr(emergence, "few_enough", lambda *_: False)
    n, edges = ZOO[name]
    graph, family = as_contact_graph(n, edges), np.arange(n) % 3
    neighbours = [sorted({a + b - i for a, b in edges if i in (a, b)}) for i in range(n)]
    weights, wanted, draws = np.linspace(1.0, 5.0, n), [1, 2, n - 1, n], 120
    words = chunk_words(9, Stream.EMERGENCE, 0, draws=draws)
    plain = _plain.emergence(words, (weights / weights.max()).tolist(), wanted, neighbours, family)
    scores = {k: sorted({d[k][6] for d in plain}) for k in wanted}
    world = emergence_world(
        graph, family, weights, wanted, draws=draws, seed=9, moran_thresholds=scores
    )
    for k in wanted:
        for s, statistic in enumerate(STATISTICS):
            law = world.law(statistic, k)
            assert dict(zip(law.values, law.weights, strict=True)) == Counter(
                d[k][s] for d in plain
            )
        for score in scores[k]:
            assert world.moran_tail(k, score) == sum(d[k][6] >= score for d in plain)


def test_tally_and_pour_equal_counter():
    rng = np.random.default_rng(0)
    parts = [
        rng.integers(-5 * (b + 1), 5 * (b + 1), size=(17, 4)).astype(np.int32) for b in range(6)
    ]
    whole, merged = Tally.empty(4), Tally.empty(4)
    for b, part in enumerate(parts):
        whole.add(part)
        other = Tally.empty(4)
        other.add(part + np.int32(0))
        if b % 2:
            merged.merge(other)
        else:
            merged.add(part)
    merged.merge(Tally.empty(4))
    everything = np.concatenate(parts)
    for r in range(4):
        expected = Counter(everything[:, r].tolist())
        for tally in (whole, merged):
            values, counts = tally.row(r)
            assert dict(zip(values.tolist(), counts.tolist(), strict=True)) == expected


def test_score_tails_equal_sorting():
    rng = np.random.default_rng(1)
    scores = rng.integers(-50, 50, size=(200, 3))
    known = [[-60, -10, 3, 60], [], [0]]
    start = np.array([0, 4, 4, 5])
    flat = np.array([t for k in known for t in k])
    tails = ScoreTails(start, flat)
    tails.add(scores[:120])
    other = ScoreTails(start, flat)
    other.add(scores[120:])
    tails.merge(other)
    for c, thresholds in enumerate(known):
        for t in thresholds:
            assert tails.at_least(c, t) == int((scores[:, c] >= t).sum())
    assert tails.sums.tolist() == scores.sum(axis=0).tolist()
    with pytest.raises(KeyError):
        tails.at_least(0, 4)


@pytest.mark.parametrize("spread", [40, 3000, 10**9])
def test_score_tails_with_many_thresholds(spread):
    rng = np.random.default_rng(spread)
    scores = (rng.normal(size=(400, 1)) * spread).astype(np.int64)
    known = np.unique(np.append((rng.normal(size=300) * spread).astype(np.int64), scores[:5]))
    tails = ScoreTails(np.array([0, len(known)]), known)
    tails.add(scores)
    assert tails.at_least(0, known).tolist() == [int((scores >= t).sum()) for t in known]


def test_chunk_is_what_a_seed_means():
    # Changing any of these changes every published number.
    assert (CHUNK, _kernels.BATCH, _kernels.WASTE) == (1000, 16, 2)
