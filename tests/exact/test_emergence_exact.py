"""The emergence-only world against laws that can be counted out by hand or machine."""

from itertools import combinations, pairwise
from math import comb

import numpy as np
import pytest

from twicetold.randomness import Stream
from twicetold.references import _plain, emergence
from twicetold.references.emergence import (
    check_propensity,
    emergence_holders,
    emergence_world,
    equal_propensity,
)
from twicetold.references.exact import enumerate_world, few_enough
from twicetold.references.pvalue import p_attainable, p_many
from twicetold.statistics import STATISTICS, _kernels, join_moments, observe
from twicetold.statistics._check import family_array
from twicetold.statistics.observe import graph_arrays
from zoo import as_contact_graph, small_graphs

ZOO = small_graphs()


def rook(rows, columns):
    edges = [
        (r * columns + c, r * columns + c + 1) for r in range(rows) for c in range(columns - 1)
    ]
    edges += [
        (r * columns + c, (r + 1) * columns + c) for r in range(rows - 1) for c in range(columns)
    ]
    return as_contact_graph(rows * columns, edges)


COMPLETE6 = as_contact_graph(6, list(combinations(range(6), 2)))
# Exact laws by full enumeration, as tabulated from outside the project.
TABLES = {
    "3x3 rook": (rook(3, 3), 4, {0: 6, 1: 28, 2: 56, 3: 32, 4: 4}, 2, 50 / 63),
    "4x4 rook": (
        rook(4, 4),
        8,
        {0: 2, 1: 8, 2: 116, 3: 548, 4: 1914, 5: 3636, 6: 3514, 7: 2076, 8: 790, 9: 244, 10: 22},
        28 / 5,
        608 / 325,
    ),
    "star": (as_contact_graph(*ZOO["star6"]), 3, {0: 20, 2: 15}, 6 / 7, 48 / 49),
    "complete": (COMPLETE6, 3, {3: 20}, 3, 0),
    "path 7 + 2": (as_contact_graph(*ZOO["path7+2"]), 4, {0: 36, 1: 58, 2: 28, 3: 4}, 1, 40 / 63),
    "matching": (as_contact_graph(*ZOO["matching4"]), 4, {0: 16, 1: 48, 2: 6}, None, None),
}


def world_of(graph, weights, counts, **kw):
    kw = {"draws": 100, "seed": 1, **kw}
    return emergence_world(graph, None, weights, counts, **kw)


@pytest.mark.parametrize("name", TABLES)
def test_tabulated_laws(name):
    graph, n, table, mean, variance = TABLES[name]
    law = world_of(graph, equal_propensity(graph.n), [n]).law("joins", n)
    assert law.exact
    assert dict(zip(law.values.tolist(), law.weights.tolist(), strict=True)) == table
    moments = join_moments(graph, None, n)
    if mean is not None:
        assert (moments.mean_all, moments.var_all) == pytest.approx((mean, variance), abs=1e-14)
    assert (law.mean(), law.variance()) == pytest.approx((moments.mean_all, moments.var_all))


def test_two_halves_of_a_board_and_a_constant():
    graph = TABLES["4x4 rook"][0]
    law = world_of(graph, np.ones(16), [8]).law("joins", 8)
    half = observe(graph, [range(8)])
    assert half.of("joins")[0] == 10
    assert p_many(law, 10) == 22 / 12870 == p_attainable(law, "many")
    assert p_many(world_of(COMPLETE6, np.ones(6), [3]).law("joins", 3), 3) == 1.0


@pytest.mark.parametrize("name", ["path5", "grid3", "star6", "path7+2"])
def test_two_holders_attain_mean_degree(name):
    graph = as_contact_graph(*ZOO[name])
    law = world_of(graph, np.ones(graph.n), [2]).law("joins", 2)
    expected = graph.degree.mean() / (graph.n - 1)
    assert p_attainable(law, "many") == pytest.approx(expected, rel=1e-14)


def test_complete_graph_with_isolates_is_hypergeometric():
    # K_m plus isolates: joins = C(X, 2) with X hypergeometric.
    m, n_all, n = 5, 11, 6
    graph = as_contact_graph(n_all, list(combinations(range(m), 2)))
    law = world_of(graph, np.ones(n_all), [n]).law("joins", n)
    expected = {}
    for x in range(m + 1):
        joins = comb(x, 2)
        expected[joins] = expected.get(joins, 0) + comb(m, x) * comb(n_all - m, n - x)
    got = dict(zip(law.values.tolist(), law.weights.tolist(), strict=True))
    assert got == {k: v for k, v in expected.items() if v}


def test_plackett_luce_two_from_three():
    # Weights 1, 2, 3 by hand: {12} 3/20, {13} 4/15, {23} 7/12; scaling changes nothing.
    chances = {(0, 1): 3 / 20, (0, 2): 4 / 15, (1, 2): 7 / 12}
    for pair, chance in chances.items():
        graph = as_contact_graph(4, [pair])
        for scale in (1.0, 1e-7, 300.0):
            weights = scale * np.array([1.0, 2.0, 3.0, 0.0])
            law = world_of(graph, weights, [2]).law("joins", 2)
            assert law.at_least(1) / law.total == pytest.approx(chance, rel=1e-12)
        assert _plain.subset_chance([1.0, 2.0, 3.0], pair) == pytest.approx(chance, rel=1e-14)


def test_plackett_luce_draws_have_the_hand_made_frequencies():
    draws = 20_000
    held = emergence_holders([1.0, 0.0, 2.0, 3.0], 2, draws=draws, seed=3, stream=Stream.ENVELOPE)
    assert not (held == 1).any()
    index = np.sort(held, axis=1) @ [10, 1]
    for pair, chance in {2: 3 / 20, 3: 4 / 15, 23: 7 / 12}.items():
        error = np.sqrt(chance * (1 - chance) / draws)
        assert abs((index == pair).mean() - chance) < 4 * error
    for i, chance in {0: 5 / 12, 2: 11 / 15, 3: 17 / 20}.items():
        error = np.sqrt(chance * (1 - chance) / draws)
        assert abs((held == i).any(axis=1).mean() - chance) < 4 * error
    # Conditional Bernoulli sampling is another law (6/11 for the last pair).
    assert abs((index == 23).mean() - 6 / 11) > 4 * np.sqrt(0.25 / draws)


def test_both_ways_of_enumerating_unequal_propensities_agree():
    rng = np.random.default_rng(2)
    weights = np.exp(rng.normal(size=17))
    assert few_enough(weights, 3)
    graph = as_contact_graph(17, [(i, i + 1) for i in range(16)])
    family = family_array(17, None)
    law = enumerate_world(graph, family, weights, 3).laws["joins"]
    chance = {0: 0.0, 1: 0.0, 2: 0.0}
    for s in combinations(range(17), 3):
        chance[sum(b - a == 1 for a, b in pairwise(s))] += _plain.subset_chance(weights.tolist(), s)
    assert law.total == pytest.approx(1.0, rel=1e-12)
    np.testing.assert_allclose(law.weights / law.total, list(chance.values()), rtol=1e-10)
    # The same subsets with 16 traditions go through dynamic programming over all of them.
    small = weights[:16]
    law = enumerate_world(as_contact_graph(16, [(0, 1)]), family[:16], small, 2).laws["joins"]
    assert law.weights[1] == pytest.approx(_plain.subset_chance(small.tolist(), (0, 1)), rel=1e-12)


def test_the_rule_of_what_is_enumerated():
    assert few_enough(np.ones(600), 2)
    assert not few_enough(np.ones(1000), 2)  # 499,500 sets
    assert few_enough(np.ones(1000), 1)
    assert few_enough(np.ones(1000), 999)
    assert not few_enough(np.ones(600), 598)  # few sets, but of many traditions each
    unequal = np.linspace(1, 2, 16)
    assert all(few_enough(unequal, n) for n in range(1, 17))
    assert not few_enough(np.linspace(1, 2, 20), 10)
    assert few_enough(np.linspace(1, 2, 600), 2)
    assert few_enough(np.linspace(1, 2, 600), 600)  # everybody holds


@pytest.mark.parametrize("name", ["path7+2", "grid3", "two_triangles"])
@pytest.mark.parametrize("weighted", [False, True])
def test_drawn_laws_agree_with_exact_ones(name, weighted, monkeypatch):
    n, edges = ZOO[name]
    graph, family = as_contact_graph(n, edges), np.arange(n) % 3
    weights = np.exp(np.linspace(-1.5, 1.5, n)) if weighted else np.ones(n)
    counts, draws = range(1, n + 1), 4000
    exact = emergence_world(graph, family, weights, counts, draws=draws, seed=8)
    monkeypatch.setattr(emergence, "few_enough", lambda *_: False)
    scores = {k: exact.exact[k].scores for k in counts}
    drawn = emergence_world(
        graph, family, weights, counts, draws=draws, seed=8, moran_thresholds=scores
    )
    for k in counts:
        for statistic in STATISTICS:
            truth, seen = exact.law(statistic, k), drawn.law(statistic, k)
            assert not seen.exact
            assert set(seen.values) <= set(truth.values)
            for value in truth.values:
                p = truth.at_least(value) / truth.total
                error = np.sqrt(max(p * (1 - p), 0) / draws)
                assert abs(seen.at_least(value) / draws - p) <= 4.5 * error + 1e-12
        for score in scores[k]:
            p = exact.moran_tail(k, score) / exact.exact[k].score_weights.sum()
            error = np.sqrt(max(p * (1 - p), 0) / draws)
            assert abs(drawn.moran_tail(k, score) / draws - p) <= 4.5 * error + 1e-12
        if 0 < k < n:
            spread = exact.exact[k]
            second = (spread.scores**2) @ spread.score_weights / spread.score_weights.sum()
            sd = np.sqrt(max(second - spread.score_mean() ** 2, 0))
            share = k / n
            per_score = 1 / (n * len(edges) * share * (1 - share))
            error = 4.5 * sd * per_score / np.sqrt(draws) + 1e-9
            assert drawn.moran_mean(k) == pytest.approx(exact.moran_mean(k), abs=error)
            if not weighted:
                assert exact.moran_mean(k) == pytest.approx(-1 / (n - 1), abs=1e-12)


def spanning(side, orders):
    """(draws, sites + 1) bool: whether the first m sites of each order join top and bottom row.

    Two more vertices stand for the borders, held from the start. With and without an edge between
    them the number of clusters is the same exactly when they are connected already.
    """
    sites, top, bottom = side * side, side * side, side * side + 1
    edges = list(map(tuple, rook(side, side).edges))
    edges += [(c, top) for c in range(side)] + [(sites - 1 - c, bottom) for c in range(side)]
    head = np.tile(np.array([[top, bottom]], dtype=np.int32), (len(orders), 1))
    orders = np.hstack([head, orders]).astype(np.int32)
    column = np.append([-1, -1], np.arange(sites + 1)).astype(np.int32)
    found = []
    for extra in ([], [(top, bottom)]):
        graph = as_contact_graph(sites + 2, edges + extra)
        values = np.empty((len(orders), sites + 1, 6), dtype=np.int32)
        scores = np.empty((len(orders), sites + 1), dtype=np.int64)
        arrays = graph_arrays(graph, family_array(graph.n, None))
        emergence._kernels.sweep_orders(orders, column, *arrays, 1, values, scores)
        found.append(values[:, :, 3])
    return found[0] == found[1]


@pytest.mark.parametrize(
    ("side", "table"),
    [(2, {2: 2, 3: 4, 4: 1}), (3, {3: 3, 4: 22, 5: 59, 6: 67, 7: 36, 8: 9, 9: 1})],
)
def test_spanning_configurations_of_a_square(side, table):
    # Site percolation on the open square, all configurations (enumerated outside the project).
    counted = {}
    for n in range(1, side * side + 1):
        for s in combinations(range(side * side), n):
            rest = [i for i in range(side * side) if i not in s]
            counted[n] = counted.get(n, 0) + int(spanning(side, np.array([[*s, *rest]]))[0, n])
    assert {n: c for n, c in counted.items() if c} == table


def test_site_percolation_threshold():
    # Newman & Ziff 2000, Phys. Rev. Lett. 85, 4104: p_c = .592746 (side 32 lies within .001).
    side, sweeps = 32, 300
    rng = np.random.default_rng(1)
    orders = np.array([rng.permutation(side * side) for _ in range(sweeps)])
    first = spanning(side, orders).argmax(axis=1) / side**2
    assert abs(first.mean() - 0.592746) < 4 * first.std() / np.sqrt(sweeps) + 0.001


def test_clusters_on_a_forest_in_every_draw():
    # On a forest clusters = holders - joins, so the two laws mirror each other draw by draw.
    graph = as_contact_graph(40, [(i // 2, i) for i in range(1, 40)])
    world = emergence_world(graph, None, np.arange(1.0, 41.0), [20], draws=1500, seed=4)
    joins, clusters = world.law("joins", 20), world.law("clusters", 20)
    assert (20 - joins.values[::-1]).tolist() == clusters.values.tolist()
    assert joins.weights[::-1].tolist() == clusters.weights.tolist()


def test_moments_of_a_drawn_equal_world():
    graph = rook(8, 8)
    world = emergence_world(graph, np.arange(64) // 8, np.ones(64), [16], draws=20_000, seed=6)
    moments = join_moments(graph, np.arange(64) // 8, 16)
    names = ("joins", "all"), ("joins_cross_family", "cross"), ("joins_same_family", "same")
    for statistic, kind in names:
        law = world.law(statistic, 16)
        error = np.sqrt(getattr(moments, f"var_{kind}") / 20_000)
        assert abs(law.mean() - getattr(moments, f"mean_{kind}")) < 4 * error


def test_propensity_is_relative():
    assert check_propensity(3, [1, 2, 4]).tolist() == check_propensity(3, [3, 6, 12]).tolist()


def test_kernel_epochs_do_not_leak():
    # The same set observed twice in one call gives the same statistics.
    graph = rook(3, 3)
    seen = observe(graph, [[0, 1], [], [0, 1]])
    assert seen.values[0].tolist() == seen.values[2].tolist() != seen.values[1].tolist()
    assert _kernels.observe_sets.nopython_signatures
