"""Neighbours by distance: the k nearest, and all within a distance."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.spatial import cKDTree

from twicetold.errors import GraphError
from twicetold.graph.sphere import (
    EARTH_RADIUS_KM,
    FloatArray,
    IntArray,
    great_circle_km,
    millimetres,
    unit_vectors,
)

#: A contact graph with more edges than this is refused: no memory would hold what follows.
MAX_EDGES = 10_000_000
_SLACK_MM = 100  # the chord of a pair near the antipode is known to about 6 cm on the ground


def nearest_pairs(lat: FloatArray, lon: FloatArray, k: int) -> npt.NDArray[np.int64]:
    """(P, 2) pairs (i, one of the k nearest of i), not yet symmetrised.

    Neighbours are ordered by great-circle distance in whole millimetres and then by index, so a
    tie, exact or at one place, always falls the same way. With k or fewer other traditions,
    everyone neighbours everyone.

    The kd-tree works on chords, which grow with the angle. Only the first k + 1 traditions at one
    point can be anybody's neighbour, so the others are not searched; rows whose k-th neighbour
    ties with the last one fetched are asked again with more.
    """
    n = len(lat)
    if n < 2:
        return np.zeros((0, 2), dtype=np.int64)
    k = min(k, n - 1)
    xyz = unit_vectors(lat, lon)
    targets = _first_at_each_point(xyz, k + 1)
    tree = cKDTree(xyz[targets])
    chosen = np.empty((n, k), dtype=np.int64)
    rows, fetch = np.arange(n), k + 9
    while len(rows):
        fetch = min(fetch, len(targets))
        settled, found = _ask(tree, targets, (lat, lon, xyz), rows, k=k, fetch=fetch)
        chosen[rows[settled]] = found[settled]
        rows, fetch = rows[~settled], 2 * fetch
    return np.stack([np.repeat(np.arange(n), k), chosen.ravel()], axis=1)


def _ask(
    tree: cKDTree,
    targets: npt.NDArray[np.int64],
    points: tuple[FloatArray, FloatArray, FloatArray],
    rows: npt.NDArray[np.int64],
    *,
    k: int,
    fetch: int,
) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.int64]]:
    """Ask for ``fetch`` neighbours of ``rows``; tell which rows are settled, and their first k."""
    lat, lon, xyz = points
    _, at = tree.query(xyz[rows], k=fetch)
    candidate = targets[at.reshape(len(rows), fetch)]
    mm = millimetres(
        great_circle_km(lat[rows, None], lon[rows, None], lat[candidate], lon[candidate])
    )
    farthest = mm.max(axis=1)
    # 2e10 mm times 2^24 traditions fits an int64 with room to spare.
    key = mm * len(lat) + candidate
    key[candidate == rows[:, None]] = np.iinfo(np.int64).max
    order = np.argsort(key, axis=1, kind="stable")[:, :k]
    kth = np.take_along_axis(key, order[:, -1:], axis=1)[:, 0] // len(lat)
    settled = (kth + _SLACK_MM < farthest) | (fetch == len(targets))
    return settled, np.take_along_axis(candidate, order, axis=1)


def _first_at_each_point(xyz: FloatArray, most: int) -> npt.NDArray[np.int64]:
    """Indices of the first ``most`` traditions at each exact point."""
    cells = np.rint(xyz * 1e12).astype(np.int64)
    _, cell = np.unique(cells, axis=0, return_inverse=True)
    cell = cell.reshape(-1)
    order = np.argsort(cell, kind="stable")
    start = np.flatnonzero(np.r_[True, np.diff(cell[order]) > 0])
    place_in_cell = np.arange(len(order)) - np.repeat(start, np.diff(np.r_[start, len(order)]))
    return np.sort(order[place_in_cell < most])


def within_pairs(lat: FloatArray, lon: FloatArray, km: float) -> IntArray:
    """(P, 2) pairs no more than ``km`` kilometres apart (to the millimetre).

    Raises
    ------
    GraphError
        When there would be more than :data:`MAX_EDGES` of them.
    """
    if len(lat) < 2:
        return np.zeros((0, 2), dtype=np.int32)
    tree = cKDTree(unit_vectors(lat, lon))
    # A little too far, because chords near the antipode are coarse; the true distance decides.
    reach = 2 * np.sin(min(km / EARTH_RADIUS_KM + 1e-7, np.pi) / 2) + 1e-12
    check_size((int(tree.count_neighbors(tree, reach)) - len(lat)) // 2, f"within:{km:g}")
    pairs = tree.query_pairs(reach, output_type="ndarray")
    i, j = pairs[:, 0], pairs[:, 1]
    near = millimetres(great_circle_km(lat[i], lon[i], lat[j], lon[j])) <= round(km * 1e6)
    return np.asarray(pairs[near], dtype=np.int32)


def check_size(edges: int, rule: str) -> None:
    """Refuse a graph of more than :data:`MAX_EDGES` edges."""
    if edges > MAX_EDGES:
        raise GraphError(
            f"`graph.rule` {rule} gives about {edges:,} edges, more than {MAX_EDGES:,}. "
            "Take a shorter distance or nearest:K, or merge traditions that lie at one place."
        )
