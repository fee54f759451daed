"""Bridges: the edges of the spherical minimum spanning tree that join separate pieces.

The shortest edge between any two parts of the traditions has no third one in its own cap, so it is
an edge of the convex hull: Kruskal's algorithm (1956) over the hull's edges, started from the
graph's own pieces, finds exactly the edges of the minimum spanning tree that join them.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from twicetold.errors import GraphError
from twicetold.graph.sphere import (
    FloatArray,
    IntArray,
    by_first_appearance,
    great_circle_km,
    millimetres,
    place_labels,
    unit_vectors,
)
from twicetold.graph.triangulation import triangulate


def bridge_pairs(lat: FloatArray, lon: FloatArray, edges: IntArray) -> IntArray:
    """(B, 2) int32 edges that join the pieces of a graph into one, i < j, sorted.

    Lengths are compared in whole millimetres; ties go to the lower indices.

    Parameters
    ----------
    lat, lon : (N,) float64
        Degrees.
    edges : (A, 2) int32
        The graph's own edges.
    """
    label = piece_labels(len(lat), edges)
    if len(lat) == 0 or label.max() == 0:
        return np.zeros((0, 2), dtype=np.int32)
    candidates = tree_candidates(lat, lon)
    added = _kruskal(label, candidates, lat, lon)
    if len(added) < label.max():  # a triangulation that lost a point; never seen, cheap to mend
        added = _kruskal(label, spanning_tree_dense(lat, lon), lat, lon)
    return added


def piece_labels(n: int, edges: npt.NDArray[np.integer]) -> IntArray:
    """(n,) int32 connected piece of each vertex, numbered by first appearance."""
    matrix = coo_array((np.ones(len(edges)), (edges[:, 0], edges[:, 1])), shape=(n, n))
    return by_first_appearance(connected_components(matrix, directed=False)[1])


def tree_candidates(lat: FloatArray, lon: FloatArray) -> IntArray:
    """(C, 2) int32 edges that hold a minimum spanning tree: of the hull, and within each place."""
    xyz = unit_vectors(lat, lon)
    place = place_labels(xyz)
    first = np.unique(place, return_index=True)[1]
    try:
        between = first[triangulate(xyz[first]).candidates]
    except GraphError:
        return spanning_tree_dense(lat, lon)
    others = np.setdiff1d(np.arange(len(lat)), first)
    star = np.stack([first[place[others]], others], axis=1)
    return np.sort(np.concatenate([between, star]), axis=1).astype(np.int32)


def spanning_tree_dense(lat: FloatArray, lon: FloatArray) -> IntArray:
    """(N - 1, 2) int32 minimum spanning tree by Prim's algorithm (1957), N² time and N memory.

    Used where the points cannot be triangulated. Ties go to the lower indices.
    """
    n = len(lat)
    tree = np.empty((max(n - 1, 0), 2), dtype=np.int32)
    best = np.full(n, np.iinfo(np.int64).max)
    parent = np.zeros(n, dtype=np.int32)
    waiting = np.arange(1, n)
    newest = 0
    for step in range(n - 1):
        mm = millimetres(great_circle_km(lat[newest], lon[newest], lat[waiting], lon[waiting]))
        closer = mm < best[waiting]
        best[waiting[closer]] = mm[closer]
        parent[waiting[closer]] = newest
        at = int(np.argmin(best[waiting]))
        newest = int(waiting[at])
        tree[step] = sorted((newest, int(parent[newest])))
        waiting = np.delete(waiting, at)
    return tree


def _kruskal(label: IntArray, candidates: IntArray, lat: FloatArray, lon: FloatArray) -> IntArray:
    i, j = candidates[:, 0], candidates[:, 1]
    apart = label[i] != label[j]
    i, j = i[apart], j[apart]
    mm = millimetres(great_circle_km(lat[i], lon[i], lat[j], lon[j]))
    root = list(range(int(label.max()) + 1))

    def find(x: int) -> int:
        while root[x] != x:
            root[x] = root[root[x]]
            x = root[x]
        return x

    added = []
    for e in np.lexsort((j, i, mm)):
        a, b = find(int(label[i[e]])), find(int(label[j[e]]))
        if a != b:
            root[max(a, b)] = min(a, b)
            added.append((int(i[e]), int(j[e])))
    return np.array(sorted(added), dtype=np.int32).reshape(-1, 2)
