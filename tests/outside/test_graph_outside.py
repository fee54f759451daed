"""Contact graphs against published distances, libpysal and scipy."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy.spatial import KDTree, SphericalVoronoi

from twicetold.graph import (
    build_graph,
    from_libpysal,
    great_circle_km,
    read_neighbours,
    to_libpysal,
    unit_vectors,
    write_gal,
)

RADIUS = 6371.0088


def points(n, seed):
    xyz = np.random.default_rng(seed).normal(size=(n, 3))
    lat = np.degrees(np.arctan2(xyz[:, 2], np.hypot(xyz[:, 0], xyz[:, 1])))
    return lat, np.degrees(np.arctan2(xyz[:, 1], xyz[:, 0]))


def pairs_of(graph):
    return {tuple(e) for e in graph.edges.tolist()}


def test_great_circle_of_the_aviation_formulary():
    # 33°57′N 118°24′W to 40°38′N 73°47′W, .6235846 rad: the worked example of E. Williams,
    # Aviation Formulary (its coordinates in radians are rounded to six places there).
    km = great_circle_km(33 + 57 / 60, -(118 + 24 / 60), 40 + 38 / 60, -(73 + 47 / 60))
    assert km / RADIUS == pytest.approx(0.6235846, abs=1e-6)


def test_great_circle_quarter_antipode_and_degree():
    assert great_circle_km(0, 0, 90, 0) == pytest.approx(10007.557221, abs=1e-6)
    assert great_circle_km(0, 10, 0, -170) == pytest.approx(20015.114442, abs=1e-6)
    assert great_circle_km(0, 0, 0, 1) == pytest.approx(111.195080, abs=1e-6)


@pytest.mark.parametrize("k", [1, 6])
def test_nearest_is_libpysal_knn_with_haversine(k):
    from libpysal.graph import Graph

    lat, lon = points(400, 5)
    # Degrees, longitude first: it turns them to radians itself.
    knn = Graph.build_knn(np.column_stack([lon, lat]), k=k, metric="haversine")
    theirs = from_libpysal(knn, lat, lon)  # symmetrised by union
    ours = build_graph(lat, lon, f"nearest:{k}", bridges=False)
    assert theirs.edges.tolist() == ours.edges.tolist()
    assert to_libpysal(ours).sparse.nnz == 2 * ours.n_edges


def test_nearest_and_within_are_scipy_on_chords():
    from libpysal.graph import Graph

    lat, lon = points(300, 6)
    tree = KDTree(unit_vectors(lat, lon))
    _, at = tree.query(tree.data, k=7)
    neighbours = {i: row[1:].tolist() for i, row in enumerate(at)}
    theirs = from_libpysal(Graph.from_dicts(neighbours), lat, lon)
    assert theirs.edges.tolist() == build_graph(lat, lon, "nearest:6", bridges=False).edges.tolist()
    near = tree.query_pairs(2 * np.sin(1500 / RADIUS / 2))
    assert near == pairs_of(build_graph(lat, lon, "within:1500", bridges=False))


@pytest.mark.parametrize("n", [5, 50, 1000])
def test_delaunay_is_the_dual_of_scipy_spherical_voronoi(n):
    lat, lon = points(n, 8)
    cells = SphericalVoronoi(unit_vectors(lat, lon)).regions
    owners: dict[int, list[int]] = {}
    for cell, corners in enumerate(cells):
        for corner in corners:
            owners.setdefault(corner, []).append(cell)
    dual = {e for c in owners.values() for e in itertools.combinations(sorted(c), 2)}
    ours = pairs_of(build_graph(lat, lon, "delaunay"))
    # Scipy triangulates the whole sphere; with few points a face may lie round the back.
    assert ours == dual if n > 5 else ours <= dual


@pytest.mark.parametrize("method", ["gabriel", "delaunay"])
def test_a_small_region_is_libpysal_on_the_plane(method):
    from libpysal.graph import Graph

    rng = np.random.default_rng(4)
    xy = rng.uniform(-10, 10, size=(250, 2))  # km about a point of the equator
    lat, lon = np.degrees(xy[:, 1] / RADIUS), 180 - np.degrees(xy[:, 0] / RADIUS)
    graph = Graph.build_triangulation(xy, method=method)
    theirs = pairs_of(from_libpysal(graph, lat, lon))
    ours = pairs_of(build_graph(lat, lon, method))
    if method == "gabriel":
        assert ours == theirs
    else:  # caps and discs differ on slivers along the rim alone
        assert len(ours ^ theirs) <= 5
        assert len(ours) > 700


def test_libpysal_reads_our_gal_and_we_read_its_gal_and_gwt(tmp_path):
    from libpysal.graph import read_gal

    lat, lon = points(60, 9)
    ids = [f"t{i:02d}" for i in range(60)]
    ours = build_graph(lat, lon, "within:2200", bridges=False)
    assert (ours.degree == 0).any()
    write_gal(ours, ids, tmp_path / "ours.gal")
    theirs = from_libpysal(read_gal(tmp_path / "ours.gal"), lat, lon, ids=ids)
    assert theirs.edges.tolist() == ours.edges.tolist()
    graph = to_libpysal(ours, ids)
    graph.to_gal(tmp_path / "theirs.gal")
    graph.to_gwt(tmp_path / "theirs.gwt")
    for name in ("theirs.gal", "theirs.gwt"):
        assert read_neighbours(tmp_path / name, ids).tolist() == ours.edges.tolist()
