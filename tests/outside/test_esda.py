"""Joins and Moran's I against esda and libpysal on the areas libpysal brings with it."""

import warnings
from contextlib import closing

import numpy as np
import pytest

from zoo import as_contact_graph

with warnings.catch_warnings():
    warnings.simplefilter("ignore")  # what these libraries warn of while loading is theirs
    import esda
    from libpysal import examples
    from libpysal.graph import Graph
    from libpysal.io import open as open_data
    from libpysal.weights import W

from twicetold.statistics import (
    join_counts,
    join_moments,
    moran_i,
    moran_moments,
    moran_of_values,
)

# Values printed by esda and by R spdep 1.2-7 (joincount.test, sampling without replacement).
AREAS = {
    "columbus": ("columbus.dbf", "CRIME", lambda y: y > 35),
    "stl": ("stl_hom.csv", "HR8893", lambda y: y > np.median(y)),
}
JOINS = {
    "columbus": (118, 24, 54, 1357 / 49, 2056000 / 112847, 6.16297336995),
    "stl": (199, 39, 62, 3781 / 77, 6963221 / 296450, 2.66090372266),
}


def load(name):
    table, column, rule = AREAS[name]
    with closing(open_data(examples.get_path(table))) as f:
        y = np.array(f.by_col(column), dtype=float)
    with closing(open_data(examples.get_path(f"{name}.gal"))) as f:
        w = f.read()
    order = {key: k for k, key in enumerate(sorted(w.id_order, key=int))}
    edges = {tuple(sorted((order[a], order[b]))) for a in w.neighbors for b in w.neighbors[a]}
    near = {i: [] for i in range(len(y))}
    for a, b in sorted(edges):
        near[a].append(b)
        near[b].append(a)
    return as_contact_graph(len(y), edges), near, y, rule(y)


@pytest.fixture(params=AREAS)
def area(request):
    return request.param, *load(request.param)


def test_published_joins(area):
    name, graph, _, _, trait = area
    n_edges, n, joins, mean, variance, z = JOINS[name]
    held = np.flatnonzero(trait)
    got, moments = join_counts(graph, held), join_moments(graph, None, n)
    assert (graph.n_edges, len(held), got.all) == (n_edges, n, joins)
    assert moments.mean_all == pytest.approx(mean, rel=1e-14)
    assert moments.var_all == pytest.approx(variance, rel=1e-13)
    assert (joins - moments.mean_all) / np.sqrt(moments.var_all) == pytest.approx(z, abs=1e-11)
    if name == "columbus":
        assert (got.empty, got.mixed) == (35, 29)


def test_esda_joins_and_moran(area):
    _, graph, near, y, trait = area
    held = np.flatnonzero(trait)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # esda's own use of pandas
        w = W(near, silence_warnings=True)
        counts = esda.Join_Counts(trait.astype(int), w, permutations=0)
    got = join_counts(graph, held)
    assert (counts.bb, counts.ww, counts.bw) == (got.all, got.empty, got.mixed)
    for values in (y, trait.astype(float)):
        theirs = esda.Moran(
            values, W(near, silence_warnings=True), transformation="b", permutations=0
        )
        moments = moran_moments(graph, values=values)
        assert moran_of_values(graph, values) == pytest.approx(theirs.I, rel=1e-12)
        assert moments.mean == pytest.approx(theirs.EI, rel=1e-14)
        assert moments.var_randomised == pytest.approx(theirs.VI_rand, rel=1e-10)
        assert moments.var_normal == pytest.approx(theirs.VI_norm, rel=1e-10)
    assert moran_i(graph, held) == pytest.approx(theirs.I, rel=1e-12)
    assert moran_moments(graph, len(held)).var_randomised == pytest.approx(
        theirs.VI_rand, rel=1e-10
    )


def test_columbus_moran_values():
    graph, near, y, trait = load("columbus")
    assert moran_i(graph, np.flatnonzero(trait)) == pytest.approx(0.515677966101695, abs=1e-14)
    assert moran_moments(graph, 24).var_randomised == pytest.approx(0.00765022448781395, abs=1e-16)
    # Row-standardised weights are not ours; this pins the library the other checks lean on.
    theirs = esda.Moran(y, W(near, silence_warnings=True), transformation="r", permutations=0)
    assert pytest.approx(0.500188557182861, abs=1e-14) == theirs.I
    assert theirs.VI_rand == pytest.approx(0.00868928920133204, abs=1e-16)


def test_moran_on_a_board():
    # 3x3 rook, y = 1..9, binary weights: I = 1/2, Var_N = 17/320, Var_R = 191/3200.
    edges = [(i, i + 1) for i in range(9) if i % 3 < 2] + [(i, i + 3) for i in range(6)]
    graph, y = as_contact_graph(9, edges), np.arange(1.0, 10.0)
    moments = moran_moments(graph, values=y)
    assert moran_of_values(graph, y) == pytest.approx(1 / 2, abs=1e-14)
    assert moments.var_normal == pytest.approx(17 / 320, abs=1e-15)
    assert moments.var_randomised == pytest.approx(191 / 3200, abs=1e-15)


def test_isolates_count_as_esda_counts_them():
    edges = [(0, 1), (1, 2), (2, 3), (3, 4), (0, 4), (1, 3)]
    graph, near = as_contact_graph(8, edges), {i: [] for i in range(8)}
    for a, b in edges:
        near[a].append(b)
        near[b].append(a)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        w = W(near, silence_warnings=True)
        for held in ([0, 1, 6], [1, 3], [5, 6, 7, 0]):
            y = np.zeros(8)
            y[held] = 1.0
            theirs = esda.Moran(y, w, transformation="b", permutations=0)
            moments = moran_moments(graph, len(held))
            assert moran_i(graph, held) == pytest.approx(theirs.I, abs=1e-12)
            assert moments.mean == pytest.approx(theirs.EI)
            assert moments.var_randomised == pytest.approx(theirs.VI_rand, rel=1e-10)


def test_adjacency_equals_libpysals():
    graph, near, _, _ = load("columbus")
    theirs = Graph.from_dicts({k: dict.fromkeys(v, 1) for k, v in near.items()}).adjacency
    pairs = {(int(a), int(b)) for a, b in theirs.index}
    assert pairs == {(int(a), int(b)) for a, b in graph.edges} | {
        (int(b), int(a)) for a, b in graph.edges
    }
