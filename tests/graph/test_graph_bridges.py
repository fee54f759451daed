from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.sparse import csr_array
from scipy.sparse.csgraph import minimum_spanning_tree
from sphere_points import all_km, globe, pairs_of, region

from twicetold.errors import GraphError
from twicetold.graph import bridges as bridges_module
from twicetold.graph import build_graph, components
from twicetold.graph.bridges import bridge_pairs, spanning_tree_dense


def scipy_tree(lat, lon, shorten=()):
    """Minimum spanning tree of the full matrix; ``shorten`` edges are next to nothing."""
    km = np.triu(all_km(lat, lon) + 1, 1)  # scipy takes 0 for no edge
    for i, j in shorten:
        km[min(i, j), max(i, j)] = 1e-6
    tree = minimum_spanning_tree(csr_array(km)).tocoo()
    return {tuple(sorted(e)) for e in zip(tree.row.tolist(), tree.col.tolist(), strict=True)}


NOTHING = np.zeros((0, 2), np.int32)


@pytest.mark.parametrize("n", [2, 3, 4, 5, 60, 300])
@pytest.mark.parametrize("cloud", [globe, lambda n, s: region(n, s, 5)])
def test_bridges_of_no_edges_are_the_minimum_spanning_tree(n, cloud):
    lat, lon = cloud(n, 17)
    tree = scipy_tree(lat, lon)
    assert {tuple(e) for e in bridge_pairs(lat, lon, NOTHING).tolist()} == tree
    assert {tuple(e) for e in spanning_tree_dense(lat, lon).tolist()} == tree


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(4, 60), st.sampled_from(["nearest:1", "within:900"]))
def test_bridges_are_the_tree_edges_between_pieces(seed, n, rule):
    lat, lon = globe(n, seed)
    graph = build_graph(lat, lon, rule)
    own = {tuple(e) for e in graph.edges[~graph.bridge].tolist()}
    bridges = {tuple(e) for e in graph.edges[graph.bridge].tolist()}
    assert own == pairs_of(build_graph(lat, lon, rule, bridges=False))
    assert components(graph).max() == 0
    assert bridges <= scipy_tree(lat, lon)
    pieces = components(build_graph(lat, lon, rule, bridges=False)).max() + 1
    assert len(bridges) == pieces - 1
    # And the lightest way to join the pieces, by the full matrix with the pieces shrunk.
    assert bridges == scipy_tree(lat, lon, own) - own


@settings(max_examples=40, deadline=None)
@given(st.lists(st.tuples(st.integers(-2, 2), st.integers(-5, 6)), min_size=1, max_size=40))
def test_bridges_among_ties_and_repeats_weigh_no_more_than_a_minimum_tree(points):
    lat, lon = np.array(points, float).T * 30
    edges = bridge_pairs(lat, lon, NOTHING)
    assert len(edges) == len(lat) - 1
    weight = all_km(lat, lon)[edges[:, 0], edges[:, 1]].sum()
    dense = spanning_tree_dense(lat, lon)
    assert weight == pytest.approx(all_km(lat, lon)[dense[:, 0], dense[:, 1]].sum(), abs=1e-5)


def test_at_one_place_the_first_stands_for_all():
    lat, lon = np.array([0, 0, 0, 0, 0.0]), np.array([5, 9, 5, 9, 5.0])
    assert bridge_pairs(lat, lon, NOTHING).tolist() == [[0, 1], [0, 2], [0, 4], [1, 3]]


def test_without_a_triangulation_the_dense_tree_gives_the_same(monkeypatch):
    lat, lon = globe(80, 5)
    usual = bridge_pairs(lat, lon, NOTHING).tolist()

    def fails(xyz):
        raise GraphError("cannot")

    monkeypatch.setattr(bridges_module, "triangulate", fails)
    assert bridge_pairs(lat, lon, NOTHING).tolist() == usual


def test_a_triangulation_that_lost_a_point_is_mended(monkeypatch):
    lat, lon = globe(80, 5)
    usual = bridge_pairs(lat, lon, NOTHING).tolist()
    candidates = bridges_module.tree_candidates(lat, lon)
    poor = candidates[(candidates != 7).all(axis=1)]
    monkeypatch.setattr(bridges_module, "tree_candidates", lambda *_: poor)
    assert bridge_pairs(lat, lon, NOTHING).tolist() == usual


def test_turned_off_isolates_stay():
    lat, lon = np.array([0, 0.1, 60, -60]), np.array([0, 0, 90, -90.0])
    graph = build_graph(lat, lon, "within:50", bridges=False)
    assert graph.degree.tolist() == [1, 1, 0, 0]
    assert graph.n == 4
    assert not graph.bridge.any()


class TestRestrictedTo:
    lat, lon = globe(120, 21)
    mask = np.random.default_rng(3).random(120) < 0.5

    @pytest.mark.parametrize("rule", ["nearest:2", "within:900", "gabriel"])
    def test_keeps_the_rules_edges_and_bridges_afresh(self, rule):
        whole = build_graph(self.lat, self.lon, rule)
        part = whole.restricted_to(self.mask, self.lat, self.lon, bridges=True)
        stay = np.flatnonzero(self.mask)
        assert part.n == len(stay)
        assert part.rule == rule
        old = [tuple(e) for e in stay[part.edges[~part.bridge]].tolist()]
        assert old == [tuple(e) for e in whole.edges[~whole.bridge].tolist() if self.mask[e].all()]
        assert components(part).max() == 0
        new = {tuple(e) for e in stay[part.edges[part.bridge]].tolist()}
        assert new >= {tuple(e) for e in whole.edges[whole.bridge].tolist() if self.mask[e].all()}
        assert {tuple(e) for e in part.edges[part.bridge].tolist()} <= scipy_tree(
            self.lat[stay], self.lon[stay]
        )

    def test_without_bridges_old_ones_go_too(self):
        whole = build_graph(self.lat, self.lon, "within:900")
        part = whole.restricted_to(self.mask, self.lat, self.lon, bridges=False)
        assert not part.bridge.any()
        assert components(part).max() > 0

    def test_everyone_and_no_one(self):
        whole = build_graph(self.lat, self.lon, "nearest:3")
        same = whole.restricted_to(np.ones(120, bool), self.lat, self.lon)
        assert same.edges.tolist() == whole.edges.tolist()
        assert same.bridge.tolist() == whole.bridge.tolist()
        assert same.length_km.tolist() == whole.length_km.tolist()
        none = whole.restricted_to(np.zeros(120, bool), self.lat, self.lon)
        assert (none.n, none.n_edges) == (0, 0)

    @pytest.mark.parametrize("mask", [np.ones(119, bool), np.ones(120, int), [True]])
    def test_bad_mask(self, mask):
        whole = build_graph(self.lat, self.lon, "nearest:3")
        with pytest.raises(GraphError, match="one entry for each of 120"):
            whole.restricted_to(mask, self.lat, self.lon)
