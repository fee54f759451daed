"""Clusters, strands, and the kernel that counts everything at once."""

from itertools import combinations

import numpy as np
import pytest

from twicetold.statistics import (
    STATISTICS,
    _plain,
    clusters,
    join_counts,
    moran_i,
    moran_score,
    observe,
    strands,
)
from zoo import as_contact_graph, small_graphs

ZOO = small_graphs()


@pytest.mark.parametrize("name", ZOO)
def test_every_set_of_every_small_graph(name):
    # Plain sets are the reference for scipy's components and for the kernel's union-find.
    n, edges = ZOO[name]
    graph, family = as_contact_graph(n, edges), (np.arange(n) * 5) % 4
    neighbours = [sorted({a + b - i for a, b in edges if i in (a, b)}) for i in range(n)]
    sets = [s for k in range(n + 1) for s in combinations(range(n), k)]
    seen = observe(graph, [np.array(s, dtype=int) for s in sets], family)
    for s, values, score, moran in zip(sets, seen.values, seen.scores, seen.moran, strict=True):
        joins = [(a, b) for a, b in edges if a in s and b in s]
        parts = [sorted(part) for part in _plain.components(set(s), joins)]
        found = clusters(graph, s)
        assert [found.holders[found.labels == k].tolist() for k in range(found.count)] == sorted(
            parts, key=lambda part: (-len(part), part)
        )
        same = [(i, j) for i, j in combinations(s, 2) if family[i] == family[j]]
        kin = strands(graph, s, family)
        assert kin.count == len(_plain.components(set(s), joins + same))
        counts = join_counts(graph, s, family)
        expected = [counts.all, counts.cross, counts.same, found.count, found.largest, kin.count]
        assert values.tolist() == expected
        if s:
            twin = _plain.sweep(s, [len(s)], neighbours, family)[len(s)]
            assert tuple(values) == twin[:6]
            assert score == twin[6] == moran_score(n, len(s), counts.all, counts.degree_sum)
        np.testing.assert_equal(moran, moran_i(graph, s))


def test_clusters_are_numbered_largest_first_then_by_first_tradition():
    graph = as_contact_graph(*ZOO["path7+2"])
    found = clusters(graph, [8, 7, 3, 4, 5, 0])
    assert found.holders.tolist() == [0, 3, 4, 5, 7, 8]
    assert found.labels.tolist() == [1, 0, 0, 0, 2, 3]
    assert found.sizes.tolist() == [3, 1, 1, 1]


def test_a_family_over_two_regions_is_one_strand():
    graph = as_contact_graph(*ZOO["two_triangles"])
    assert clusters(graph, [0, 1, 3, 4]).count == 2
    assert strands(graph, [0, 1, 3, 4], [7, 8, 9, 7, 1, 2]).count == 1


def test_forest_clusters_and_runs_on_a_path():
    # On a forest clusters = B - BB; on a path BW + 1 = runs (Wald & Wolfowitz 1940).
    path = as_contact_graph(12, [(i, i + 1) for i in range(11)])
    star = as_contact_graph(*ZOO["star6"])
    rng = np.random.default_rng(5)
    for _ in range(50):
        mask = rng.random(12) < 0.5
        held = np.flatnonzero(mask)
        counts = join_counts(path, held)
        assert counts.mixed + 1 == 1 + int((mask[1:] != mask[:-1]).sum())
        assert clusters(path, held).count == len(held) - counts.all
        leaves = np.flatnonzero(mask[:7])
        assert clusters(star, leaves).count == len(leaves) - join_counts(star, leaves).all


def test_observed_columns_by_name():
    graph = as_contact_graph(*ZOO["cycle6"])
    seen = observe(graph, [[0, 1, 3]])
    got = {name: seen.of(name).tolist() for name in STATISTICS}
    assert got == {
        "joins": [1],
        "joins_cross_family": [1],
        "joins_same_family": [0],
        "clusters": [2],
        "largest_cluster": [2],
        "strands": [2],
    }
    assert not seen.values.flags.writeable
