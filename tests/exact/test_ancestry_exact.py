"""The ancestry-only world against enumeration, laws in closed form, and plain stratified draws."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy import stats

from twicetold.references import _ancestry_plain as plain
from twicetold.references import ancestry
from twicetold.references._ancestry_tables import _prefix_weights, _subsets
from twicetold.references.ancestry import HolderSets, Lineages, ancestry_world
from twicetold.references.pvalue import p_attainable, p_many
from zoo import as_contact_graph, small_graphs


def prefix_chance(rate, chosen):
    """Plackett-Luce chance that these are the first, by summing over orders (Plackett 1975)."""
    total = 0.0
    for order in itertools.permutations(chosen):
        left, chance = sum(rate), 1.0
        for i in order:
            chance *= rate[i] / left
            left -= rate[i]
        total += chance
    return total


@pytest.mark.parametrize("name", sorted(small_graphs()))
def test_enumerated_laws_equal_counted_configurations(name):
    n, edges = small_graphs()[name]
    graph = as_contact_graph(n, edges)
    level = np.arange(n) % 3
    sets = [np.flatnonzero(pattern) for pattern in itertools.product([0, 1], repeat=n)][
        :: 2 ** (n // 2)
    ]
    world = ancestry_world(
        graph, Lineages(level, level), np.full(n, 2.0), HolderSets.of(sets), draws=1, seed=1
    )
    assert world.exact.all()
    strata = [np.flatnonzero(level == s).tolist() for s in range(3)]
    cross = [(i, j) for i, j in graph.edges.tolist() if level[i] != level[j]]
    for m, held in enumerate(sets):
        counted = plain.law_by_enumeration(strata, held.tolist(), cross)
        law = world.laws[m]
        assert dict(zip(law.values.tolist(), law.weights.tolist(), strict=True)) == dict(counted)


def test_two_from_three_by_weights_one_two_three():
    # oracles: Plackett-Luce {12} 3/20, {13} 4/15, {23} 7/12. A fourth tradition, of another family,
    # holds the motif and touches only tradition 0: one join in {12} and {13}, none in {23}.
    graph = as_contact_graph(4, [(0, 3)])
    lineages = Lineages(np.array([0, 0, 0, 1]), np.array([0, 0, 0, 1]))
    rate = np.array([1.0, 2.0, 3.0, 9.0])
    world = ancestry_world(graph, lineages, rate, HolderSets.of([[0, 1, 3]]), draws=1, seed=1)
    law = world.laws[0]
    assert law.values.tolist() == [0, 1]
    assert law.weights == pytest.approx([7 / 12, 5 / 12], rel=1e-12)
    assert float(p_many(law, 1)) == pytest.approx(5 / 12, rel=1e-12)
    assert p_attainable(law, "many") == pytest.approx(5 / 12, rel=1e-12)


@pytest.mark.parametrize("size", range(1, 8))
def test_chances_of_prefixes_by_sum_over_orders(size):
    rate = np.exp(np.random.default_rng(size).normal(0, 2, 8))
    places = _subsets(8, size)
    found = _prefix_weights(rate, places)
    assert found == pytest.approx([prefix_chance(rate, c) for c in places.tolist()], rel=1e-9)
    assert found.sum() == pytest.approx(1, abs=1e-12)


def tail_z(p_hat, p, draws):
    return abs(p_hat - p) / np.sqrt(max(p * (1 - p), 1e-12) / draws)


@pytest.mark.parametrize("equal", [True, False])
def test_drawn_laws_agree_with_enumerated_ones(equal, monkeypatch):
    rng = np.random.default_rng(3)
    n, draws = 14, 20_000
    edges = {tuple(sorted(rng.choice(n, 2, replace=False).tolist())) for _ in range(30)}
    graph = as_contact_graph(n, edges)
    level = np.repeat([0, 1, 2], [6, 5, 3])
    rate = np.ones(n) if equal else np.exp(rng.normal(size=n))
    sets = [rng.choice(n, k, replace=False) for k in (2, 3, 4, 5, 6, 8)]
    lineages = Lineages(level, level)
    exact = ancestry_world(graph, lineages, rate, HolderSets.of(sets), draws=1, seed=1)
    assert exact.exact.all()
    monkeypatch.setattr(ancestry, "ENUMERATE", 1)
    drawn = ancestry_world(graph, lineages, rate, HolderSets.of(sets), draws=draws, seed=1)
    for a, b in zip(exact.laws, drawn.laws, strict=True):
        assert not b.exact
        for value in a.values:
            p = a.at_least(value) / a.total
            assert tail_z(b.at_least(value) / draws, p, draws) < 4.5  # 60 tails looked at


def test_uniform_strata_against_independent_shuffles(monkeypatch):
    # A dozen lines of numpy: shuffle each family's column of zeros and ones by itself.
    monkeypatch.setattr(ancestry, "ENUMERATE", 1)
    rng = np.random.default_rng(11)
    n, draws = 80, 8000
    edges = {tuple(sorted(rng.choice(n, 2, replace=False).tolist())) for _ in range(260)}
    graph = as_contact_graph(n, edges)
    level = np.sort(rng.integers(0, 5, n))
    held = rng.choice(n, 33, replace=False)
    world = ancestry_world(
        graph, Lineages(level, level), np.ones(n), HolderSets.of([held]), draws=draws, seed=4
    )
    x = np.zeros(n, dtype=int)
    x[held] = 1
    cross = graph.edges[level[graph.edges[:, 0]] != level[graph.edges[:, 1]]]
    other = np.zeros(draws, dtype=int)
    for d in range(draws):
        for s in range(5):
            x[level == s] = rng.permutation(x[level == s])
        other[d] = (x[cross[:, 0]] & x[cross[:, 1]]).sum()
    law = world.laws[0]
    mine = np.repeat(law.values, law.weights.astype(int))
    assert abs(mine.mean() - other.mean()) < 4 * np.sqrt((mine.var() + other.var()) / draws)
    assert stats.ks_2samp(mine, other, method="asymp").pvalue > 1e-4


def test_one_stratum_of_everyone_is_scipys_permutation_test(monkeypatch):
    # With one group and every join counted, the world is a plain permutation of labels:
    # scipy.stats.permutation_test enumerates it ("pairings").
    graph = as_contact_graph(*small_graphs()["grid3"])
    held = np.array([0, 1, 3, 4])
    world = ancestry_world(
        graph, Lineages.none(9), np.ones(9), HolderSets.of([held]), draws=1, seed=1
    )
    # oracles, section 1: 0:6 1:28 2:56 3:32 4:4 of 126.
    assert world.laws[0].weights.tolist() == [6, 28, 56, 32, 4]
    x = np.isin(np.arange(9), held).astype(float)

    def joins(y):
        return (y[graph.edges[:, 0]] * y[graph.edges[:, 1]]).sum()

    found = stats.permutation_test(
        (x,),
        joins,
        permutation_type="pairings",
        alternative="greater",
        n_resamples=4000,
        vectorized=False,
        rng=np.random.default_rng(0),
    )
    p = float(p_many(world.laws[0], 4))
    assert p == 4 / 126
    assert abs(found.pvalue - p) < 4 * np.sqrt(p * (1 - p) / 4000) + 1 / 4000
