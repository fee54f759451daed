from __future__ import annotations

import numpy as np
import pytest
from scipy.sparse import csr_array
from scipy.sparse.csgraph import shortest_path
from sphere_points import globe

from twicetold.errors import GraphError
from twicetold.graph import _kernels, _plain, build_graph, components, hop_distances, summarise
from zoo import as_contact_graph, small_graphs

ZOO = small_graphs()


@pytest.mark.parametrize("name", ZOO)
def test_hop_distances_agree_with_the_plain_twin_and_with_scipy(name):
    graph = as_contact_graph(*ZOO[name])
    sources = np.arange(graph.n, dtype=np.int32)
    ours = hop_distances(graph, sources)
    for module in (_kernels, _plain):
        out = np.full((graph.n, graph.n), -1, np.int32)
        module.hops(graph.indptr, graph.indices, sources, out)
        assert out.tolist() == ours.tolist()
    matrix = csr_array(
        (np.ones(2 * graph.n_edges), graph.indices, graph.indptr), shape=(graph.n, graph.n)
    )
    theirs = shortest_path(matrix, unweighted=True)
    assert np.where(np.isinf(theirs), -1, theirs).tolist() == ours.tolist()


def test_hop_distances_take_a_few_sources_and_refuse_others():
    graph = as_contact_graph(*ZOO["path5"])
    assert hop_distances(graph, 4).tolist() == [[4, 3, 2, 1, 0]]
    assert hop_distances(graph, [2, 0]).tolist() == [[2, 1, 0, 1, 2], [0, 1, 2, 3, 4]]
    assert hop_distances(graph, []).shape == (0, 5)
    for bad in ([5], [-1], [0.5], [[0]]):
        with pytest.raises(GraphError, match="from 0 to 4"):
            hop_distances(graph, bad)


@pytest.mark.parametrize(
    ("name", "labels"),
    [
        ("path7+2", [0] * 7 + [1, 2]),
        ("two_triangles", [0, 0, 0, 1, 1, 1]),
        ("matching4", [0, 0, 1, 1, 2, 2, 3, 3]),
        ("empty4", [0, 1, 2, 3]),
    ],
)
def test_components_are_numbered_by_first_appearance(name, labels):
    assert components(as_contact_graph(*ZOO[name])).tolist() == labels


def test_summary_of_a_line_of_places():
    # Places at 0, 1, 2, 4 and 60 degrees of the equator, one degree being 111.195080 km.
    lat, lon = np.zeros(5), np.array([0, 1, 2, 4, 60.0])
    plain = summarise(build_graph(lat, lon, "within:120", bridges=False))
    assert (plain.traditions, plain.edges, plain.bridges) == (5, 2, 0)
    assert (plain.components, plain.largest_component, plain.isolates) == (3, 3, 2)
    assert (plain.degree_min, plain.degree_median, plain.degree_mean, plain.degree_max) == (
        0,
        1,
        0.8,
        2,
    )
    whole = summarise(build_graph(lat, lon, "within:120"))
    assert (whole.edges, whole.bridges, whole.components, whole.isolates) == (4, 2, 1, 0)
    assert whole.edge_longest_km == pytest.approx(56 * 111.195080, abs=1e-4)
    assert whole.edge_median_km == pytest.approx(1.5 * 111.195080, abs=1e-5)
    frame = whole.to_frame()
    assert len(frame) == 1
    assert frame.loc[0, "rule"] == "within:120"
    assert frame.loc[0, "edge_longest_km"] == whole.edge_longest_km


@pytest.mark.parametrize("n", [0, 1])
def test_summary_without_edges(n):
    summary = summarise(build_graph(np.zeros(n), np.zeros(n), "nearest:6"))
    assert (summary.traditions, summary.edges, summary.components) == (n, 0, n)
    assert summary.isolates == n
    assert np.isnan(summary.edge_longest_km)


def test_the_record_copies_what_it_is_given():
    edges = np.array([[0, 1]], np.int32)
    from twicetold.graph import ContactGraph

    graph = ContactGraph(2, edges, np.zeros(1), np.zeros(1, bool), "given")
    edges[0, 1] = 7
    assert graph.edges.tolist() == [[0, 1]]


def test_summary_counts_agree_with_the_graph():
    graph = build_graph(*globe(200, 1), "nearest:2")
    summary = summarise(graph)
    assert summary.degree_mean * 200 == pytest.approx(2 * graph.n_edges)
    assert summary.bridges == graph.bridge.sum() > 0
