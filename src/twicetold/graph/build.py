"""Building a contact graph by rule."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from twicetold.errors import GraphError
from twicetold.graph.bridges import bridge_pairs
from twicetold.graph.model import ContactGraph
from twicetold.graph.nearest import check_size, nearest_pairs, within_pairs
from twicetold.graph.rules import Rule, parse_rule
from twicetold.graph.sphere import (
    FloatArray,
    IntArray,
    checked_coordinates,
    great_circle_km,
    place_labels,
    unit_vectors,
)
from twicetold.graph.triangulation import gabriel, triangulate

if TYPE_CHECKING:
    from twicetold.catalogue import Catalogue


def contact_graph(
    catalogue: Catalogue, rule: str = "nearest:6", *, bridges: bool = True
) -> ContactGraph:
    """Contact graph over the located traditions of a catalogue.

    Parameters
    ----------
    catalogue : Catalogue
    rule : str
        ``nearest:K`` (each tradition and its K nearest, either way round; K from 1 to 40),
        ``within:KM``, ``delaunay``, ``gabriel``, ``given`` (the catalogue's contacts table) or
        ``given:FILE`` (GAL or GWT; ids are matched to tradition ids).
    bridges : bool
        Add the edges of the minimum spanning tree that join separate pieces.

    Returns
    -------
    ContactGraph
        Vertices in the order of the catalogue. Ties of distance go by tradition id, so the order
        of the rows changes nothing.

    Raises
    ------
    GraphError
        When the rule is unknown, or the catalogue lacks what it needs.
    """
    parsed = parse_rule(rule)
    given = None
    if parsed.kind == "given":
        given = _given_edges(catalogue, parsed)
    return build_graph(
        catalogue.latitude,
        catalogue.longitude,
        rule,
        bridges=bridges,
        given=given,
        ids=catalogue.tradition_ids,
    )


def _given_edges(catalogue: Catalogue, rule: Rule) -> npt.NDArray[np.integer]:
    if rule.file:
        from twicetold.graph.exchange import read_neighbours

        return read_neighbours(
            rule.file,
            catalogue.tradition_ids,
            left_out=catalogue.unlocated,
            withheld=catalogue.withheld_traditions > 0,
        )
    if catalogue.contacts is None:
        raise GraphError(
            "`graph.rule` given needs the catalogue's contacts table, and there is none. "
            "Add a table `contacts` (tradition_id, neighbour_id), or take given:FILE or nearest:6."
        )
    return np.asarray(catalogue.contacts)


def build_graph(
    latitude: npt.ArrayLike,
    longitude: npt.ArrayLike,
    rule: str = "nearest:6",
    *,
    bridges: bool = True,
    given: npt.ArrayLike | None = None,
    ids: Sequence[str] | None = None,
) -> ContactGraph:
    """Contact graph over points.

    Parameters
    ----------
    latitude, longitude : (N,) array_like
        Degrees.
    rule : str
        See :func:`contact_graph`.
    bridges : bool
        Add the edges of the minimum spanning tree that join separate pieces.
    given : (E, 2) array_like of int, optional
        The edges themselves, in either direction, for the rule ``given``.
    ids : sequence of str, optional
        Names by which ties are broken; by default ties go to the lower index.

    Raises
    ------
    GraphError
        When the rule, the coordinates or the given edges cannot be used.
    """
    parsed = parse_rule(rule)
    lat, lon = checked_coordinates(latitude, longitude)
    n = len(lat)
    order = np.arange(n) if ids is None else np.array(sorted(range(n), key=lambda i: ids[i]), int)
    place = np.empty(n, dtype=np.int64)
    place[order] = np.arange(n)
    if parsed.kind == "given":
        own = tidy_edges(n, place[checked_edges(n, given)])
    else:
        own = tidy_edges(n, _rule_pairs(lat[order], lon[order], parsed))
    added = bridge_pairs(lat[order], lon[order], own) if bridges else own[:0]
    return assemble(n, order[own], order[added], lat, lon, rule=str(parsed))


def _rule_pairs(lat: FloatArray, lon: FloatArray, rule: Rule) -> npt.NDArray[np.integer]:
    if rule.kind == "nearest":
        return nearest_pairs(lat, lon, rule.k)
    if rule.kind == "within":
        return within_pairs(lat, lon, rule.km)
    xyz = unit_vectors(lat, lon)
    place = place_labels(xyz)
    first = np.unique(place, return_index=True)[1]
    pairs = triangulate(xyz[first]).edges
    if rule.kind == "gabriel":
        pairs = gabriel(xyz[first], pairs)
    return _shared_by_place(place, pairs, str(rule))


def _shared_by_place(
    place: IntArray, pairs: npt.NDArray[np.int64], rule: str
) -> npt.NDArray[np.int64]:
    """Edges of places as edges of traditions.

    Traditions at one place are joined to each other and all have that place's neighbours.
    """
    size = np.bincount(place)
    if len(size) == len(place):  # places are numbered by first appearance: nothing to share
        return pairs
    within = size.astype(np.int64) * (size - 1) // 2
    check_size(int(within.sum() + (size[pairs[:, 0]] * size[pairs[:, 1]]).sum()), rule)
    members = np.split(np.argsort(place, kind="stable"), np.cumsum(size)[:-1])
    out = [np.stack(np.meshgrid(members[a], members[b]), axis=-1).reshape(-1, 2) for a, b in pairs]
    for group in members:
        i, j = np.triu_indices(len(group), 1)
        out.append(np.stack([group[i], group[j]], axis=1))
    return np.concatenate(out)


def checked_edges(n: int, given: npt.ArrayLike | None) -> npt.NDArray[np.int64]:
    """Given edges as (E, 2) int64, checked.

    Raises
    ------
    GraphError
        When there are none to take, or one points outside the traditions or at itself.
    """
    if given is None:
        raise GraphError("`graph.rule` given needs the edges themselves, and none were given.")
    pairs = np.asarray(given)
    if pairs.size == 0:
        return np.zeros((0, 2), dtype=np.int64)
    if pairs.ndim != 2 or pairs.shape[1] != 2 or not np.issubdtype(pairs.dtype, np.integer):
        raise GraphError(
            "Given edges must be pairs of whole numbers (tradition indices), "
            f"got an array of shape {pairs.shape} and type {pairs.dtype}."
        )
    if pairs.min() < 0 or pairs.max() >= n:
        raise GraphError(f"Given edges must join traditions 0 to {n - 1}, got {pairs.max()}.")
    if (pairs[:, 0] == pairs[:, 1]).any():
        raise GraphError("A given edge joins a tradition to itself; leave it out.")
    return pairs.astype(np.int64)


def tidy_edges(n: int, pairs: npt.NDArray[np.integer]) -> IntArray:
    """(A, 2) int32 edges with i < j, sorted, each once."""
    both = np.sort(pairs.astype(np.int64), axis=1).reshape(-1, 2)
    key = np.unique(both[:, 0] * n + both[:, 1])
    return np.stack([key // max(n, 1), key % max(n, 1)], axis=1).astype(np.int32)


def assemble(
    n: int,
    own: npt.NDArray[np.integer],
    added: npt.NDArray[np.integer],
    lat: FloatArray,
    lon: FloatArray,
    *,
    rule: str,
) -> ContactGraph:
    """Contact graph from its own edges and its bridges."""
    pairs = np.sort(np.concatenate([own, added]).astype(np.int64), axis=1).reshape(-1, 2)
    bridge = np.arange(len(pairs)) >= len(own)
    order = np.lexsort((pairs[:, 1], pairs[:, 0]))
    i, j = pairs[order].T
    return ContactGraph(
        n=n,
        edges=pairs[order].astype(np.int32),
        length_km=great_circle_km(lat[i], lon[i], lat[j], lon[j]),
        bridge=bridge[order],
        rule=rule,
    )
