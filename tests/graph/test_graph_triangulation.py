from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial import Delaunay
from sphere_points import globe, pairs_of, region, rotate, slow_delaunay, slow_gabriel, to_degrees

from twicetold.graph import build_graph, components, unit_vectors
from twicetold.graph.bridges import spanning_tree_dense

CLOUDS = {
    "globe": globe,
    "half": lambda n, s: region(n, s, 11000),
    "continent": lambda n, s: region(n, s, 3000),
    "valley": lambda n, s: region(n, s, 20, (89.9, 0)),
    "village": lambda n, s: region(n, s, 0.2),
}


@pytest.mark.parametrize("cloud", CLOUDS)
@pytest.mark.parametrize("n", [4, 5, 14])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_delaunay_is_the_definition(cloud, n, seed):
    lat, lon = CLOUDS[cloud](n, seed)
    if cloud == "village":
        # Too small for the slow definition: the plane that touches the earth there will do.
        assert pairs_of(build_graph(lat, lon, "delaunay")) >= slow_gabriel_flat(lat, lon)
        return
    assert pairs_of(build_graph(lat, lon, "delaunay")) == slow_delaunay(lat, lon)


@pytest.mark.parametrize("cloud", ["globe", "half", "continent", "valley"])
@pytest.mark.parametrize("n", [3, 14, 40])
def test_gabriel_is_the_definition(cloud, n):
    lat, lon = CLOUDS[cloud](n, 7)
    assert pairs_of(build_graph(lat, lon, "gabriel")) == slow_gabriel(lat, lon)


@pytest.mark.parametrize("seed", range(4))
def test_gabriel_of_a_village_is_the_plane_one(seed):
    lat, lon = CLOUDS["village"](20, seed)
    assert pairs_of(build_graph(lat, lon, "gabriel")) == slow_gabriel_flat(lat, lon)


def flat_metres(lat, lon):
    """Metres north and east of the first point: good to a nanometre-in-a-kilometre here."""
    east = (np.asarray(lon) - lon[0] + 180) % 360 - 180
    scale = 6371008.8 * np.pi / 180
    return np.column_stack([(lat - lat[0]) * scale, east * scale * np.cos(np.radians(lat.mean()))])


def slow_gabriel_flat(lat, lon):
    xy = flat_metres(lat, lon)
    out = set()
    for i, j in itertools.combinations(range(len(xy)), 2):
        gap = np.linalg.norm(xy - (xy[i] + xy[j]) / 2, axis=1)
        if (np.delete(gap, [i, j]) > np.linalg.norm(xy[i] - xy[j]) / 2).all():
            out.add((i, j))
    return out


@pytest.mark.parametrize("km", [0.5, 4, 30])
def test_a_small_region_is_the_plane_triangulation(km):
    """The convex hull of the plane is the one place where the two may part: caps against discs."""
    lat, lon = region(300, 5, km)
    xy = flat_metres(lat, lon)
    plane = Delaunay(xy)
    inner = {
        tuple(sorted(pair))
        for t in plane.simplices[(plane.neighbors >= 0).all(axis=1)]
        for pair in itertools.combinations(t.tolist(), 2)
    }
    ours = pairs_of(build_graph(lat, lon, "delaunay"))
    assert len(inner) > 700
    assert len(inner - ours) <= 0.01 * len(inner)


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from(sorted(CLOUDS)), st.integers(2, 60))
def test_spanning_tree_within_gabriel_within_delaunay(seed, cloud, n):
    lat, lon = CLOUDS[cloud](n, seed)
    tree = {tuple(e) for e in spanning_tree_dense(lat, lon).tolist()}
    gabriel = pairs_of(build_graph(lat, lon, "gabriel", bridges=False))
    delaunay = build_graph(lat, lon, "delaunay", bridges=False)
    assert tree <= gabriel <= pairs_of(delaunay)
    assert components(delaunay).max() == 0
    if n >= 3:
        assert delaunay.n_edges <= 3 * n - 6 or n == 3


def test_the_whole_globe_has_every_face():
    lat, lon = globe(500, 9)
    assert build_graph(lat, lon, "delaunay").n_edges == 3 * 500 - 6  # Euler


def test_no_edge_round_the_back_of_a_region():
    lat, lon = region(400, 3, 500)
    graph = build_graph(lat, lon, "delaunay")
    # Without the rule the hull closes over the back: 3n − 6 edges; a disc has fewer by its rim.
    assert 3 * 400 - 6 - 60 < graph.n_edges < 3 * 400 - 6


@pytest.mark.parametrize("turn", [None, 1, 2])
def test_a_regular_grid_has_no_diagonals(turn):
    """Every cell of a grid is four points on one circle; only shared borders count."""
    lat, lon = (a.ravel() for a in np.meshgrid(np.arange(-20, 21, 5.0), np.arange(0, 75, 5.0)))
    sides = {
        (i, j)
        for i, j in itertools.combinations(range(len(lat)), 2)
        if abs(lat[i] - lat[j]) + abs(lon[i] - lon[j]) == 5
    }
    if turn is not None:
        lat, lon = rotate(lat, lon, turn)
    assert pairs_of(build_graph(lat, lon, "gabriel")) == sides
    ours = pairs_of(build_graph(lat, lon, "delaunay"))
    # Parallels bulge towards the poles, so the corners of the northern and southern edge see each
    # other across an empty polar cap; the meridian edges are great circles, and do not.
    corners = {
        tuple(sorted((int(np.flatnonzero(c)[0]), int(np.flatnonzero(d)[0]))))
        for c, d in [(CORNER(20, 0), CORNER(20, 70)), (CORNER(-20, 0), CORNER(-20, 70))]
    }
    assert ours == sides | corners


def CORNER(a, b):  # noqa: N802
    lat, lon = (x.ravel() for x in np.meshgrid(np.arange(-20, 21, 5.0), np.arange(0, 75, 5.0)))
    return (lat == a) & (lon == b)


def cycle(n, closed=True):
    return {(i, i + 1) for i in range(n - 1)} | ({(0, n - 1)} if closed else set())


@pytest.mark.parametrize("turn", [None, 1, 2, 3])
@pytest.mark.parametrize(
    ("lat", "step", "n", "closed"),
    [
        (0, 36, 10, True),  # round the equator
        (0, 3, 10, False),  # an arc of a great circle: the way back would pass the others
        (0, 60, 4, False),  # its ends are antipodes
        (0, 50, 6, True),  # more than half of it
        (0, 1e-4, 8, False),  # an arc of 80 m
        (10, 3, 10, True),  # an arc of a small circle is a polygon, with its long side
        (80, 36, 10, True),
        (0, 90, 4, True),
        (0, 10, 3, False),
        (30, 10, 3, True),
    ],
)
def test_points_on_one_circle_are_joined_along_it(lat, step, n, closed, turn):
    points = np.full(n, float(lat)), np.arange(n) * float(step)
    if turn is not None:
        points = rotate(*points, turn)
    assert pairs_of(build_graph(*points, "delaunay", bridges=False)) == cycle(n, closed)


def test_a_meridian_and_one_place_beside_it():
    lat, lon = np.r_[np.arange(-30, 31, 10.0), 5], np.r_[np.zeros(7), 20]
    ours = pairs_of(build_graph(lat, lon, "delaunay"))
    assert ours == cycle(7, closed=False) | {(i, 7) for i in range(7)}


def test_antipodes_and_the_octahedron():
    assert pairs_of(build_graph([90, -90], [0, 0], "gabriel")) == {(0, 1)}
    lat, lon = [90, -90, 0, 0, 0, 0], [0, 0, 0, 90, 180, -90]
    sides = set(itertools.combinations(range(6), 2)) - {(0, 1), (2, 4), (3, 5)}
    assert pairs_of(build_graph(lat, lon, "delaunay")) == sides
    assert pairs_of(build_graph(lat, lon, "gabriel")) == sides


def test_the_cube_has_no_diagonals():
    lat, lon = to_degrees(np.array(list(itertools.product([-1.0, 1.0], repeat=3))))
    ours = pairs_of(build_graph(lat, lon, "delaunay"))
    assert ours == {(i, j) for i, j in itertools.combinations(range(8), 2) if (i ^ j) in (1, 2, 4)}


@pytest.mark.parametrize("rule", ["delaunay", "gabriel"])
def test_traditions_at_one_place_know_each_other_and_share_neighbours(rule):
    lat, lon = globe(30, 6)
    plain = pairs_of(build_graph(lat, lon, rule))
    graph = build_graph(
        np.r_[lat, lat[4], lat[4], lat[9]], np.r_[lon, lon[4], lon[4], lon[9]], rule
    )
    stands_for = np.r_[np.arange(30), 4, 4, 9]
    expected = {
        (i, j)
        for i, j in itertools.combinations(range(33), 2)
        if stands_for[i] == stands_for[j]
        or tuple(sorted((int(stands_for[i]), int(stands_for[j])))) in plain
    }
    assert pairs_of(graph) == expected


@pytest.mark.parametrize("seed", range(6))
def test_clusters_of_every_size_at_once(seed):
    """Metres, kilometres and continents in one map: still a triangulation, still connected."""
    rng = np.random.default_rng(seed)
    parts = [
        region(25, int(rng.integers(1e6)), km, (float(rng.uniform(-80, 80)), float(lon)))
        for km, lon in zip([0.02, 0.3, 5, 80, 1500, 6000], rng.uniform(-180, 180, 6), strict=True)
    ]
    lat, lon = (np.concatenate(x) for x in zip(*parts, strict=True))
    graph = build_graph(lat, lon, "delaunay", bridges=False)
    tree = {tuple(e) for e in spanning_tree_dense(lat, lon).tolist()}
    assert components(graph).max() == 0
    assert tree <= pairs_of(build_graph(lat, lon, "gabriel", bridges=False)) <= pairs_of(graph)


def test_empty_caps_at_scale():
    """Every Delaunay edge of 3,000 points has an empty cap through it; sampled non-edges none."""
    lat, lon = globe(3000, 2)
    graph = build_graph(lat, lon, "delaunay")
    xyz = unit_vectors(lat, lon)
    for i, j in graph.edges[::150]:
        assert widest_empty_margin(xyz, i, j) > -1e-12
    rng = np.random.default_rng(0)
    edges = pairs_of(graph)
    near = np.argsort(xyz @ xyz[rng.integers(3000, size=20)].T, axis=0)[-12:].T
    for row in near:
        for i, j in itertools.combinations(sorted(row.tolist()), 2):
            if (i, j) not in edges:
                assert widest_empty_margin(xyz, i, j) < 1e-12


def widest_empty_margin(xyz, i, j):
    """> 0 when some cap through i and j is empty: caps on them have centres on one great circle.

    The centre at angle t from the middle holds out point r when r·(centre) < p·(centre): an
    interval of t for each r; the margin is the length of what all of them leave.
    """
    p, q = xyz[i], xyz[j]
    middle = (p + q) / np.linalg.norm(p + q)
    across = np.cross(p, q) / np.linalg.norm(np.cross(p, q))
    r = np.delete(xyz, [i, j], axis=0)
    # cos t · (r − p)·middle + sin t · r·across < 0, for |t| < 90° (caps under a hemisphere).
    a, b = (r - p) @ middle, r @ across
    edge = np.arctan2(-a, b)  # where it is zero, in (−180°, 180°]
    edge = np.where(edge > np.pi / 2, edge - np.pi, np.where(edge < -np.pi / 2, edge + np.pi, edge))
    return edge[b > 0].min(initial=np.pi / 2) - edge[b < 0].max(initial=-np.pi / 2)
