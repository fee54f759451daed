"""Clusters (holders connected by joins) and strands (by joins or by a shared family)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components

from twicetold.graph import ContactGraph
from twicetold.statistics._check import family_array, holder_array


@dataclass(frozen=True)
class Clusters:
    """Holders parted into groups, numbered from 0, largest first. Arrays are read-only.

    Parameters
    ----------
    holders : (h,) int32
        Tradition indices, sorted.
    labels : (h,) int32
        Group of each holder, aligned with ``holders``. Groups of equal size are ordered by their
        first tradition.
    sizes : (c,) int32
        Holders in each group, not increasing.
    """

    holders: npt.NDArray[np.int32]
    labels: npt.NDArray[np.int32]
    sizes: npt.NDArray[np.int32]

    @property
    def count(self) -> int:
        """Number of groups."""
        return len(self.sizes)

    @property
    def largest(self) -> int:
        """Holders in the largest group; 0 when nobody holds the motif."""
        return int(self.sizes[0]) if len(self.sizes) else 0


def clusters(graph: ContactGraph, holders: npt.ArrayLike) -> Clusters:
    """Part the holders into connected components of the contact graph.

    Parameters
    ----------
    graph : ContactGraph
    holders : (h,) int
        Tradition indices, each once.
    """
    held = holder_array(graph.n, holders)
    return _components(graph.n, held, _joins(graph, held))


def strands(graph: ContactGraph, holders: npt.ArrayLike, family_codes: npt.ArrayLike) -> Clusters:
    """Part the holders into maximal sets linked by joins or by a shared family.

    Parameters
    ----------
    graph : ContactGraph
    holders : (h,) int
        Tradition indices, each once.
    family_codes : (N,) int
        Family of each tradition; one without a family has a code of its own.
    """
    held = holder_array(graph.n, holders)
    family = family_array(graph.n, family_codes)
    # Linking each holder to the first holder of its family links the whole family.
    _, first, which = np.unique(family[held], return_index=True, return_inverse=True)
    kin = np.stack([held[first][which.reshape(-1)], held], axis=1)
    return _components(graph.n, held, np.concatenate([_joins(graph, held), kin]))


def _joins(graph: ContactGraph, held: npt.NDArray[np.int32]) -> npt.NDArray[np.int32]:
    mask = np.zeros(graph.n, dtype=bool)
    mask[held] = True
    return graph.edges[mask[graph.edges[:, 0]] & mask[graph.edges[:, 1]]]


def _components(n: int, held: npt.NDArray[np.int32], links: npt.NDArray[np.int32]) -> Clusters:
    position = np.full(n, -1, dtype=np.int32)
    position[held] = np.arange(len(held), dtype=np.int32)
    ends = position[links]
    matrix = sp.csr_array(
        (np.ones(len(ends), dtype=np.int8), (ends[:, 0], ends[:, 1])), shape=(len(held), len(held))
    )
    count, raw = (
        connected_components(matrix, directed=False) if len(held) else (0, np.zeros(0, np.int32))
    )
    sizes = np.bincount(raw, minlength=count)
    first = np.full(count, n, dtype=np.int64)
    np.minimum.at(first, raw, held)
    order = np.lexsort((first, -sizes))
    rank = np.empty(count, dtype=np.int32)
    rank[order] = np.arange(count, dtype=np.int32)
    out = (held, rank[raw], sizes[order].astype(np.int32))
    for array in out:
        array.flags.writeable = False
    return Clusters(*out)
