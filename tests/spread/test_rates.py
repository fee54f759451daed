"""Rates of the contact process: parity with the twin, matching, refusals."""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.randomness import Stream
from twicetold.spread import SpreadError
from twicetold.spread._rate_kernels import rate_kernel
from twicetold.spread._rate_plain import rate_plain
from twicetold.spread.rates import RARE, RateModel, match_contact, rate_world
from twicetold.spread.turnover import log_series
from twicetold.spread.world import spread_words
from twicetold.workers import ThreadPool
from zoo import as_contact_graph, small_graphs


@pytest.mark.parametrize("name", small_graphs())
@pytest.mark.parametrize("longest", [7, 10_000])
def test_parity(name, longest):
    graph = as_contact_graph(*small_graphs()[name])
    rates = (0.3, 0.05, 1.0)
    words = spread_words(11, 0, 12, key=(int(Stream.RATES),))
    n = graph.n
    bits, weight = np.zeros((12, n, 1), dtype=np.uint64), np.zeros((12, n))
    time, boundary = np.zeros((12, n + 1)), np.zeros(12)
    cut = np.zeros(12, dtype=np.uint8)
    slots = np.concatenate([[-1], np.arange(n)]).astype(np.int32)
    rate_kernel(
        words,
        graph.indptr,
        graph.indices,
        max(1, int(graph.degree.max())),
        *rates,
        longest,
        slots,
        bits,
        weight,
        time,
        boundary,
        cut,
    )
    near = [
        graph.indices[a:b].tolist()
        for a, b in zip(graph.indptr[:-1], graph.indptr[1:], strict=True)
    ]
    for w in range(12):
        plain = rate_plain(words[w], near, rates, longest)
        assert plain.cut == bool(cut[w])
        assert plain.boundary_time == pytest.approx(boundary[w], rel=1e-12)
        for count in range(1, n + 1):
            assert plain.weight.get(count, 0.0) == pytest.approx(weight[w, count - 1], rel=1e-12)
            assert plain.time.get(count, 0.0) == pytest.approx(time[w, count], rel=1e-12)
            held = {i for i in range(n) if int(bits[w, count - 1, 0]) >> i & 1}
            assert plain.kept.get(count, frozenset()) == held


def test_workers_change_nothing():
    model = RateModel(as_contact_graph(*small_graphs()["grid3"]), 0.4, 0.01)
    one = rate_world(model, [2, 4], excursions=700, pool=ThreadPool(1))
    two = rate_world(model, [2, 4], excursions=700, pool=ThreadPool(2))
    for a, b in zip(one.statistics, two.statistics, strict=True):
        np.testing.assert_array_equal(a, b)
    np.testing.assert_array_equal(one.time, two.time)


def test_matched_rate_reproduces_the_prevalence():
    side = 9
    edges = [(r * side + c, r * side + c + 1) for r in range(side) for c in range(side - 1)]
    edges += [(r * side + c, (r + 1) * side + c) for r in range(side - 1) for c in range(side)]
    graph = as_contact_graph(side * side, edges)
    rate = match_contact(graph, 0.9, least=3, largest=30, excursions=3000)
    world = rate_world(RateModel(graph, rate, RARE / graph.n), [3], excursions=8000, seed=9)
    span = np.arange(3, 31)
    p = log_series(0.9, graph.n)[3:31]
    target = span @ p / p.sum()
    got = span @ world.time[3:31] / world.time[3:31].sum()
    assert got == pytest.approx(target, rel=0.12)
    # Contact that neighbours share among them must spread faster per edge than one loss in four.
    assert 0.25 < rate < 1.0


def test_p_scattered():
    graph = as_contact_graph(*small_graphs()["grid3"])
    world = rate_world(RateModel(graph, 0.5, 1e-4), [4], excursions=3000)
    few, many = world.p_scattered(4, joins=0, strands=4)
    assert few < 0.05
    assert many < 0.05
    assert world.p_scattered(4, joins=4, strands=1) == (1.0, 1.0)
    with pytest.raises(SpreadError, match="3 holders"):
        world.law("joins", 3)


@pytest.mark.parametrize("rates", [(-1.0, 0.0, 1.0), (0.1, 0.0, 0.0), (np.nan, 0.0, 1.0)])
def test_bad_rates_are_refused(rates):
    with pytest.raises(SpreadError, match="Rates"):
        RateModel(as_contact_graph(3, [(0, 1)]), *rates)


def test_bad_requests_are_refused():
    model = RateModel(as_contact_graph(3, [(0, 1)]), 1.0)
    with pytest.raises(SpreadError, match="counts"):
        rate_world(model, [4])
    with pytest.raises(SpreadError, match="Matching"):
        match_contact(as_contact_graph(3, []), 0.9, least=1, largest=2)
