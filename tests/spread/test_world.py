"""Worlds of the spread chain: what the laws depend on, reweighting, effective draws."""

from __future__ import annotations

import numpy as np
import pytest

from subset_solver import PATH5, Solver
from twicetold.references.pvalue import p_few
from twicetold.spread import SpreadError, SpreadModel, cap_for, chain_tables, spread_world
from twicetold.spread.world import effective_size, expected_events, spread_words, work_size
from twicetold.workers import ThreadPool
from zoo import as_contact_graph, small_graphs


def model(x=0.9, **more):
    return SpreadModel(as_contact_graph(5, PATH5), x, **more)


def same(a, b):
    np.testing.assert_array_equal(a.values, b.values)
    np.testing.assert_array_equal(a.weights, b.weights)
    assert (a.draws, a.effective) == (b.draws, b.effective)


def test_path_of_five_holders_0_1_3():
    # Exact: P(joins <= 1 | n = 3) = .366902 at x = .9 (linear algebra).
    world = spread_world(model(), [3], largest=5, walks=20_000, seed=4)
    law = world.law("joins", 3)
    got = float(p_few(law, 1))
    assert abs(got - 0.366902) < 4 * np.sqrt(0.366902 * 0.633098 / law.effective)


def test_other_counts_change_nothing():
    graph = as_contact_graph(*small_graphs()["grid3"])
    thin = SpreadModel(graph, 0.95, recorded=np.full(9, 0.6))
    every = spread_world(thin, range(1, 8), largest=7, walks=300)
    for count in (1, 4, 7):
        alone = spread_world(thin, [count], largest=7, walks=300)
        for statistic in ("joins", "strands"):
            same(every.law(statistic, count), alone.law(statistic, count))


def test_workers_and_pieces_change_nothing(monkeypatch):
    graph = as_contact_graph(*small_graphs()["grid3"])
    one = spread_world(SpreadModel(graph, 0.9), [2, 5], largest=6, walks=400, pool=ThreadPool(1))
    monkeypatch.setattr("twicetold.spread.world.work_size", lambda *_: 37)
    two = spread_world(SpreadModel(graph, 0.9), [2, 5], largest=6, walks=400, pool=ThreadPool(2))
    np.testing.assert_array_equal(one.weight, two.weight)
    np.testing.assert_array_equal(one.statistics, two.statistics)


def test_more_walks_begin_with_the_same():
    few = spread_world(model(), [2, 3], largest=5, walks=100)
    many = spread_world(model(), [2, 3], largest=5, walks=250)
    np.testing.assert_array_equal(few.weight[:100], many.weight[:100])
    np.testing.assert_array_equal(few.statistics[:100], many.statistics[:100])


def test_seed_and_key_change_the_draws():
    base = spread_world(model(), [3], largest=5, walks=50)
    for other in ({"seed": 2}, {"key": (4, 1)}):
        changed = spread_world(model(), [3], largest=5, walks=50, **other)
        assert not np.array_equal(base.statistics, changed.statistics)


def test_walks_are_added_where_draws_are_poor():
    # Recording of a tenth: five recorded of nine is seldom seen, one recorded often.
    graph = as_contact_graph(*small_graphs()["grid3"])
    thin = SpreadModel(graph, 0.9, recorded=np.full(9, 0.1))
    world = spread_world(thin, [1, 5], largest=5, walks=200)
    assert world.used[0] == 200
    assert world.used[1] == 800
    assert len(world.weights(1)) == 200
    same(world.law("joins", 5), spread_world(thin, [5], largest=5, walks=200).law("joins", 5))


@pytest.mark.parametrize("to", [0.8, 0.97])
def test_reweighting_to_another_turnover(to):
    rate = np.array([0.5, 0.9, 0.7, 1.0, 0.6])
    shares = (0.1, 0.6, 0.3)
    family = [0, 0, 1, 1, 0]
    world = spread_world(
        model(0.9, shares=shares, family=np.array(family), recorded=rate),
        [1, 2, 3, 4, 5],
        largest=5,
        walks=20_000,
    )
    solver = Solver(5, PATH5, to, shares, family)
    for count in (2, 3, 4):
        law = world.law("joins", count, turnover=to)
        expected = solver.law("joins", count, rate)
        for value, weight in zip(law.values, law.weights / law.total, strict=True):
            p = expected[int(value)]
            # The effective number undersells values that hang on the weights: check amply.
            assert abs(weight - p) < 4 * np.sqrt(p * (1 - p) / law.effective)


def test_realised_shares():
    world = spread_world(model(shares=(0.25, 0.75, 0.0)), [2], largest=5, walks=20_000)
    got = world.realised(2)
    assert got.sum() == pytest.approx(1)
    assert got[2] == 0
    # Boundary edges never run out before the path is full, so emergence keeps its share.
    assert got[0] == pytest.approx(0.25, abs=0.02)


def test_band_and_unknown_counts():
    world = spread_world(model(), [1, 3], largest=5, walks=500)
    band = world.band("clusters")
    assert band[0].tolist() == [1, 1, 1]
    assert np.all(np.diff(band, axis=1) >= 0)
    with pytest.raises(SpreadError, match="not asked for 2"):
        world.law("joins", 2)


@pytest.mark.parametrize("more", [{"counts": []}, {"counts": [0]}, {"counts": [4]}, {"walks": 0}])
def test_bad_requests_are_refused(more):
    with pytest.raises(SpreadError):
        spread_world(model(), **({"counts": [1], "largest": 3, "walks": 10} | more))


def test_effective_size():
    assert effective_size(np.array([2.0, 2.0, 0.0])) == pytest.approx(2)
    assert effective_size(np.zeros(3)) == 0
    assert effective_size(np.array([1e-300, 1e-300])) == pytest.approx(2)


def test_expected_events_against_walks():
    # Visits below full plus those at full: count them through the weights-free bookkeeping.
    tables = chain_tables(model(0.7), 3)
    x = 0.7
    # By hand, stage two from 3 on the path of five: first passage times of the plain count walk.
    u = x / (1 + x)
    fall = [0.0] * 7
    for m in (5, 4, 3, 2, 1):
        up = 0 if m == 5 else u
        fall[m] = (1 + up * fall[m + 1]) / (1 - up)
    h = [x**-k - 1 for k in range(4)]
    rise1 = 1.0  # from 1 the conditioned walk must go up
    up2 = u * h[3] / h[2]
    rise2 = (1 + (1 - up2) * rise1) / up2
    assert expected_events(tables) == pytest.approx(1 + rise1 + rise2 + sum(fall[1:4]), rel=1e-9)
    assert work_size(tables, np.array([1, 2, 3])) >= 1
    assert cap_for(model(), 4) == 4


def test_words_number_the_walks():
    whole = spread_words(7, 0, 300, key=(4,))
    np.testing.assert_array_equal(whole[100:230], spread_words(7, 100, 130, key=(4,)))
    assert len(np.unique(whole)) == whole.size
