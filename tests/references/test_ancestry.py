"""Draws of the ancestry-only world: parity with the readable twin, sharing, and what is refused."""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.errors import TwicetoldError
from twicetold.randomness import Stream, chunk_words
from twicetold.references import _ancestry_plain as plain
from twicetold.references import ancestry
from twicetold.references.ancestry import HolderSets, Lineages, ancestry_world
from twicetold.workers import ThreadPool
from zoo import as_contact_graph

DRAWS = 100


def random_case(seed, n=45, n_groups=6, edges=120, motifs=80):
    """A random graph, unequal groups, unequal rates, and motifs of every size."""
    rng = np.random.default_rng(seed)
    pairs = {tuple(sorted(rng.choice(n, 2, replace=False).tolist())) for _ in range(edges)}
    level = rng.choice(n_groups, n, p=np.arange(1, n_groups + 1) / sum(range(n_groups + 1)))
    family = level // 2  # two groups ("branches") to a family
    rate = np.exp(rng.normal(size=n))
    sets = [rng.choice(n, rng.integers(0, n + 1), replace=False) for _ in range(motifs)]
    return as_contact_graph(n, pairs), Lineages(family, level), rate, sets


def cross(graph, lineages):
    family = lineages.family
    return [(i, j) for i, j in graph.edges.tolist() if family[i] != family[j]]


def plain_values(graph, lineages, rate, held, own=None):
    strata = [np.flatnonzero(lineages.level == s).tolist() for s in np.unique(lineages.level)]
    edges = cross(graph, lineages)
    words = chunk_words(7, Stream.ANCESTRY, 0, draws=DRAWS)
    out = []
    for word in words:
        waits = plain.ringing_times(word, graph.n)
        now = plain.drawn_holders(waits, rate, strata, held.tolist(), own)
        out.append(plain.joins_of(now, edges))
    return np.unique(out, return_counts=True)


@pytest.mark.parametrize("seed", [0, 1])
def test_kernel_equals_its_readable_twin(seed, monkeypatch):
    monkeypatch.setattr(ancestry, "ENUMERATE", 1)
    graph, lineages, rate, sets = random_case(seed)
    world = ancestry_world(graph, lineages, rate, HolderSets.of(sets), draws=DRAWS, seed=7)
    edges = cross(graph, lineages)
    for m, held in enumerate(sets):
        assert world.observed[m] == plain.joins_of(set(held.tolist()), edges)
        if world.exact[m]:  # nothing left to chance
            assert world.informative[m] == 0
            assert world.laws[m].values.tolist() == [world.observed[m]]
            continue
        values, counts = plain_values(graph, lineages, rate, held)
        assert np.array_equal(world.laws[m].values, values)
        assert np.array_equal(world.laws[m].weights, counts)


@pytest.mark.parametrize("seed", [2, 3])
def test_kernel_with_own_rates_equals_its_readable_twin(seed, monkeypatch):
    monkeypatch.setattr(ancestry, "ENUMERATE", 1)
    graph, lineages, rate, sets = random_case(seed)
    holders = HolderSets.of(sets)
    rng = np.random.default_rng(seed)
    own = rate[holders.indices] * rng.choice([0.05, 0.5, 0.9, 1.0], len(holders.indices))
    holders = HolderSets.of(sets, own)
    world = ancestry_world(graph, lineages, rate, holders, draws=DRAWS, seed=7)
    moved = 0
    for m, held in enumerate(sets):
        if world.exact[m]:
            continue
        mine = dict(zip(held.tolist(), holders.own_row(m).tolist(), strict=True))
        values, counts = plain_values(graph, lineages, rate, held, mine)
        assert np.array_equal(world.laws[m].values, values)
        assert np.array_equal(world.laws[m].weights, counts)
        moved += counts.tolist() != plain_values(graph, lineages, rate, held)[1].tolist()
    assert moved > 25  # the rates do matter


def test_large_groups_are_sorted_and_small_ones_inserted_alike(monkeypatch):
    # One group of 150 is sorted by another routine than groups below 48 places.
    monkeypatch.setattr(ancestry, "ENUMERATE", 1)
    graph, _, rate, sets = random_case(4, n=150, edges=500, motifs=40)
    for own in (None, 0.7):
        holders = HolderSets.of(sets)
        if own:
            holders = HolderSets.of(sets, rate[holders.indices] * own)
        everyone = Lineages.none(150)
        world = ancestry_world(graph, everyone, rate, holders, draws=DRAWS, seed=7)
        for m in range(0, 40, 7):
            if world.exact[m]:
                continue
            mine = dict(zip(sets[m].tolist(), (own or 1.0) * rate[sets[m]], strict=True))
            values, counts = plain_values(graph, everyone, rate, sets[m], mine)
            assert np.array_equal(world.laws[m].values, values)
            assert np.array_equal(world.laws[m].weights, counts)


@pytest.mark.parametrize("with_own", [False, True])
def test_a_motif_alone_is_the_motif_in_the_batch(with_own, monkeypatch):
    graph, lineages, rate, sets = random_case(5)
    holders = HolderSets.of(sets)
    own = rate[holders.indices] * 0.8 if with_own else None
    holders = HolderSets.of(sets, own)
    batch = ancestry_world(graph, lineages, rate, holders, draws=1300, seed=3, pool=ThreadPool(2))
    monkeypatch.setattr(ancestry.tables, "BLOCK", 17)
    blocks = ancestry_world(graph, lineages, rate, holders, draws=1300, seed=3, pool=ThreadPool(1))
    for m in range(0, len(sets), 9):
        one = HolderSets.of([sets[m]], holders.own_row(m))
        alone = ancestry_world(graph, lineages, rate, one, draws=1300, seed=3)
        for other in (alone.laws[0], blocks.laws[m]):
            assert np.array_equal(batch.laws[m].values, other.values)
            assert np.array_equal(batch.laws[m].weights, other.weights)
        assert alone.observed[0] == batch.observed[m]


def test_scaling_the_rates_of_a_family_changes_nothing():
    graph, lineages, rate, sets = random_case(6)
    holders = HolderSets.of(sets)
    once = ancestry_world(graph, lineages, rate, holders, draws=300, seed=1)
    scaled = rate * np.where(lineages.level == 3, 64.0, 1.0)
    again = ancestry_world(graph, lineages, scaled, holders, draws=300, seed=1)
    for a, b in zip(once.laws, again.laws, strict=True):
        assert np.array_equal(a.values, b.values)
        # Powers of two scale exactly; enumerated weights differ by rounding only.
        assert np.allclose(a.weights / a.total, b.weights / b.total, rtol=1e-12)


def test_singleton_families_are_constant_and_say_nothing():
    graph, _, rate, sets = random_case(8)
    alone = Lineages(np.arange(45), np.arange(45))
    world = ancestry_world(graph, alone, rate, HolderSets.of(sets), draws=100, seed=1)
    assert world.exact.all()
    assert not world.informative.any()
    assert np.array_equal(world.expected, world.observed)


def test_branches_fix_more_than_families_and_count_the_same_joins():
    graph, lineages, rate, sets = random_case(9)
    holders = HolderSets.of(sets)
    by_family = Lineages(lineages.family, lineages.family)
    loose = ancestry_world(graph, by_family, rate, holders, draws=100, seed=1)
    tight = ancestry_world(graph, lineages, rate, holders, draws=100, seed=1)
    assert np.array_equal(loose.observed, tight.observed)  # joins are between families either way
    for world, codes in ((loose, lineages.family), (tight, lineages.level)):
        for m, held in enumerate(sets):
            counts, sizes = np.bincount(codes[held], minlength=6), np.bincount(codes, minlength=6)
            assert world.informative[m] == ((counts > 0) & (counts < sizes)).sum()


def test_unusable_rates_are_refused():
    graph, lineages, rate, sets = random_case(0, motifs=3)
    holders = HolderSets.of(sets)
    for bad in (0.0, np.nan, np.inf, -1.0):
        wrong = rate.copy()
        wrong[4] = bad
        with pytest.raises(TwicetoldError, match="at place 4"):
            ancestry_world(graph, lineages, wrong, holders, draws=10, seed=1)
    above = HolderSets.of(sets, rate[holders.indices] * 1.01)
    with pytest.raises(TwicetoldError, match="must not be above its common one"):
        ancestry_world(graph, lineages, rate, above, draws=10, seed=1)
    with pytest.raises(ValueError, match="one code per tradition"):
        Lineages(np.zeros(3), np.zeros(4))
    with pytest.raises(ValueError, match="shape"):
        ancestry_world(graph, lineages, rate[:-1], holders, draws=10, seed=1)
