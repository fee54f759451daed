from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sphere_points import (
    all_km,
    globe,
    invented_catalogue,
    pairs_of,
    region,
    rotate,
    slow_nearest,
)

from twicetold.errors import GraphError
from twicetold.graph import build_graph, contact_graph, great_circle_km, parse_rule
from twicetold.graph import nearest as nearest_module

RULES = ["nearest:1", "nearest:6", "within:1500", "delaunay", "gabriel"]


@pytest.mark.parametrize("k", [1, 2, 6, 40])
@pytest.mark.parametrize("points", [globe(90, 1), region(90, 2, 30), region(60, 3, 0.05)])
def test_nearest_is_the_definition(points, k):
    lat, lon = points
    assert pairs_of(build_graph(lat, lon, f"nearest:{k}", bridges=False)) == slow_nearest(
        lat, lon, k
    )


@settings(max_examples=40, deadline=None)
@given(
    st.lists(st.tuples(st.integers(-2, 2), st.integers(-3, 3)), min_size=1, max_size=40),
    st.integers(1, 40),
)
def test_nearest_breaks_ties_by_distance_then_index(points, k):
    # A coarse grid, with repeats: nearly every distance is tied.
    lat, lon = np.array(points, float).T * 30
    graph = build_graph(lat, lon, f"nearest:{k}", bridges=False)
    assert pairs_of(graph) == slow_nearest(lat, lon, k)


def test_nearest_with_a_ring_of_equal_distances():
    # The pole is equally far from all 200 of a parallel: the first six have it, and it them.
    lon = np.r_[0, np.arange(200) * 1.8]
    lat = np.r_[90, np.full(200, 60.0)]
    graph = build_graph(lat, lon, "nearest:6", bridges=False)
    assert graph.neighbours(0).tolist() == [1, 2, 3, 4, 5, 6]
    assert pairs_of(graph) == slow_nearest(lat, lon, 6)


def test_everyone_at_one_point_joins_the_first_k():
    graph = build_graph(np.full(3000, 5.0), np.full(3000, -7.0), "nearest:3", bridges=False)
    assert (graph.neighbours(0) == np.arange(1, 3000)).all()
    assert graph.n_edges == 2999 + 2998 + 2997 - 0  # all to 0, 1 and 2; 3 is third only for those
    assert (graph.length_km == 0).all()


@pytest.mark.parametrize("n", [2, 5, 7, 41])
def test_with_k_or_fewer_others_everyone_neighbours_everyone(n):
    lat, lon = globe(n, 8)
    assert build_graph(lat, lon, "nearest:40").n_edges == n * (n - 1) // 2


@pytest.mark.parametrize("km", [0.001, 300, 2500, 19000, 20016])
def test_within_is_the_definition(km):
    lat, lon = globe(70, 5)
    graph = build_graph(lat, lon, f"within:{km}", bridges=False)
    i, j = np.nonzero(np.triu(all_km(lat, lon) <= km, 1))
    assert pairs_of(graph) == set(zip(i.tolist(), j.tolist(), strict=True))


def test_within_includes_the_limit_itself():
    assert build_graph([0, 1], [0, 0], "within:111.195080", bridges=False).n_edges == 1
    assert build_graph([0, 1], [0, 0], "within:111.195078", bridges=False).n_edges == 0
    assert build_graph([0, 0, 90], [0, 180, 0], "within:20015.2", bridges=False).n_edges == 3


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from(RULES), st.booleans())
def test_turning_the_globe_changes_nothing(seed, rule, spread):
    lat, lon = globe(40, seed) if spread else region(40, seed, 900)
    one, other = build_graph(lat, lon, rule), build_graph(*rotate(lat, lon, seed), rule)
    assert one.edges.tolist() == other.edges.tolist()
    assert one.bridge.tolist() == other.bridge.tolist()
    assert one.length_km == pytest.approx(other.length_km, abs=1e-6)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from(RULES), st.booleans())
def test_relabelling_changes_nothing(seed, rule, grid):
    rng = np.random.default_rng(seed)
    lat, lon = globe(30, seed)
    if grid:  # ties and repeats, settled by id whatever the order of the rows
        lat, lon = np.round(lat / 30) * 30, np.round(lon / 30) * 30
    names = [f"t{i:02d}" for i in rng.permutation(30)]
    new = rng.permutation(30)
    one = contact_graph(invented_catalogue(lat, lon, names), rule)
    other = contact_graph(invented_catalogue(lat[new], lon[new], [names[i] for i in new]), rule)
    at = np.argsort(new)
    moved = np.sort(at[one.edges], axis=1)
    order = np.lexsort((moved[:, 1], moved[:, 0]))
    assert moved[order].tolist() == other.edges.tolist()
    assert one.bridge[order].tolist() == other.bridge.tolist()


@pytest.mark.parametrize("rule", RULES)
@pytest.mark.parametrize("n", [0, 1, 2, 3])
def test_the_smallest_catalogues(rule, n):
    lat, lon = globe(n, 3)
    graph = build_graph(lat, lon, rule)
    assert graph.n == n
    assert graph.n_edges >= max(n - 1, 0)
    assert graph.degree.shape == (n,)
    coincident = build_graph(np.zeros(n), np.zeros(n), rule)
    assert coincident.n_edges >= max(n - 1, 0)
    assert (coincident.length_km == 0).all()


@pytest.mark.parametrize("rule", RULES)
def test_the_record_is_tidy_and_frozen(rule):
    lat, lon = globe(60, 11)
    graph = build_graph(lat, lon, rule)
    i, j = graph.edges.T
    assert (i < j).all()
    assert (np.diff(i.astype(np.int64) * 60 + j) > 0).all()
    assert graph.length_km == pytest.approx(great_circle_km(lat[i], lon[i], lat[j], lon[j]))
    assert graph.edges.dtype == np.int32
    for array in (graph.edges, graph.length_km, graph.bridge, graph.indices, graph.degree):
        assert not array.flags.writeable
    assert graph.degree.sum() == 2 * graph.n_edges


def test_given_takes_the_contacts_table():
    lat, lon = globe(5, 1)
    contacts = np.array([[0, 1], [1, 2]], np.int32)
    catalogue = invented_catalogue(lat, lon, contacts=contacts)
    graph = contact_graph(catalogue, "given", bridges=False)
    assert pairs_of(graph) == {(0, 1), (1, 2)}
    assert graph.rule == "given"
    bridged = contact_graph(catalogue, "given")
    assert bridged.bridge.sum() == 2
    assert pairs_of(graph) < pairs_of(bridged)


def test_given_edges_may_come_in_any_direction_and_twice():
    graph = build_graph([0, 1, 2], [0, 0, 0], "given", given=[[2, 0], [0, 2], [1, 0]])
    assert pairs_of(graph) == {(0, 1), (0, 2)}


def test_given_without_a_contacts_table():
    with pytest.raises(GraphError, match="contacts table, and there is none"):
        contact_graph(invented_catalogue(*globe(5, 1)), "given")


@pytest.mark.parametrize(
    ("edges", "message"),
    [
        (None, "none were given"),
        ([[0, 3]], "0 to 2"),
        ([[-1, 1]], "0 to 2"),
        ([[1, 1]], "to itself"),
        ([[0.0, 1.0]], "whole numbers"),
        ([0, 1, 2], "pairs"),
    ],
)
def test_bad_given_edges(edges, message):
    with pytest.raises(GraphError, match=message):
        build_graph([0, 1, 2], [0, 0, 0], "given", given=edges)


@pytest.mark.parametrize("rule", ["nearest:0", "nearest:41", "nearest:x", "nearest", "nearest:6.0"])
def test_bad_k(rule):
    with pytest.raises(GraphError, match=r"nearest:K with K a whole number from 1 to 40.*got"):
        parse_rule(rule)


@pytest.mark.parametrize("rule", ["within:0", "within:-3", "within:nan", "within:inf", "within:"])
def test_bad_km(rule):
    with pytest.raises(GraphError, match=r"within:KM with KM a number of kilometres above 0"):
        parse_rule(rule)


@pytest.mark.parametrize("rule", ["", "knn:6", "delaunay:3", "given:", "Nearest:6", "gabriel:"])
def test_unknown_rules(rule):
    with pytest.raises(GraphError, match="must be one of nearest:K"):
        build_graph([0, 1], [0, 1], rule)


@pytest.mark.parametrize(
    ("rule", "said"),
    [
        ("nearest:06", "nearest:6"),
        (" within:500.0 ", "within:500"),
        ("within:0.5", "within:0.5"),
        ("gabriel", "gabriel"),
        ("given:some/folder/near.gal", "given:near.gal"),
        ("given:C:\\folder\\near.gal", "given:near.gal"),
    ],
)
def test_rules_are_said_one_way(rule, said):
    assert str(parse_rule(rule)) == said
    assert str(parse_rule(said)) == said


@pytest.mark.parametrize(
    ("lat", "lon", "message"),
    [
        ([0, 1], [0], "one length"),
        ([0, np.nan], [0, 0], "must have a latitude"),
        ([0, 91], [0, 0], "swapped"),
    ],
)
def test_bad_coordinates(lat, lon, message):
    with pytest.raises(GraphError, match=message):
        build_graph(lat, lon, "nearest:6")


@pytest.mark.parametrize("rule", ["within:20000", "delaunay"])
def test_a_graph_no_memory_would_hold_is_refused(rule, monkeypatch):
    monkeypatch.setattr(nearest_module, "MAX_EDGES", 50)
    with pytest.raises(GraphError, match="edges, more than 50"):
        build_graph(np.zeros(20), np.zeros(20), rule)
