"""Every statistic of many motifs at once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold.graph import ContactGraph
from twicetold.statistics import _kernels
from twicetold.statistics._check import family_array, holder_array
from twicetold.statistics.moran import moran_from_scores

IntArray = npt.NDArray[np.int32]

#: Integer statistics in the order the kernels note them.
STATISTICS = (
    "joins",
    "joins_cross_family",
    "joins_same_family",
    "clusters",
    "largest_cluster",
    "strands",
)


@dataclass(frozen=True)
class Observed:
    """Statistics of M motifs on one graph. Arrays are read-only.

    Parameters
    ----------
    holders : (M,) int64
        Number of holders.
    values : (M, 6) int32
        Columns as in :data:`STATISTICS`.
    scores : (M,) int64
        Moran scores, N * joins - n * degree sum.
    moran : (M,) float64
        Moran's I; NaN where it is not defined.
    """

    holders: npt.NDArray[np.int64]
    values: npt.NDArray[np.int32]
    scores: npt.NDArray[np.int64]
    moran: npt.NDArray[np.float64]

    def of(self, statistic: str) -> npt.NDArray[np.int64]:
        """(M,) int64 of one of :data:`STATISTICS`."""
        return self.values[:, STATISTICS.index(statistic)].astype(np.int64)


def graph_arrays(
    graph: ContactGraph, family: npt.NDArray[np.int32]
) -> tuple[IntArray, IntArray, IntArray, IntArray, IntArray]:
    """Give fresh indptr, indices, family and the two scratch arrays the sweep works with."""
    work = np.zeros((4, graph.n + 1), dtype=np.int32)
    work[2, : graph.n] = graph.degree
    kin = np.zeros((2, int(family.max(initial=-1)) + 1), dtype=np.int32)
    return np.array(graph.indptr), np.array(graph.indices), np.array(family), work, kin


def observe(
    graph: ContactGraph,
    motifs: Sequence[npt.ArrayLike],
    family_codes: npt.ArrayLike | None = None,
) -> Observed:
    """Count joins, clusters, strands and Moran's I of each motif.

    Parameters
    ----------
    graph : ContactGraph
    motifs : sequence of (h,) int
        The holders of each motif.
    family_codes : (N,) int or None
        None makes each tradition a family of its own.

    Raises
    ------
    TwicetoldError
        When holders or families do not fit the graph.
    """
    held = [np.asarray(m) for m in motifs]
    holders = np.array([h.size for h in held], dtype=np.int64)
    starts = np.concatenate([[0], np.cumsum(holders)]).astype(np.int64)
    flat = np.concatenate([*(h for h in held if h.size), np.zeros(0, np.int32)])
    if not _sound(graph.n, flat, holders) or any(h.ndim != 1 for h in held):
        for motif in held:
            holder_array(graph.n, motif)  # one of them raises, and says why
    flat = flat.astype(np.int32)
    arrays = graph_arrays(graph, family_array(graph.n, family_codes))
    values = np.zeros((len(held), len(STATISTICS)), dtype=np.int32)
    scores = np.zeros(len(held), dtype=np.int64)
    _kernels.observe_sets(starts, flat, *arrays, values, scores)
    moran = moran_from_scores(graph, holders, scores)
    for array in (holders, values, scores, moran):
        array.flags.writeable = False
    return Observed(holders, values, scores, moran)


def _sound(n: int, flat: npt.NDArray[np.generic], holders: npt.NDArray[np.int64]) -> bool:
    """Whether all holders are tradition indices, none twice in a motif (checked all at once)."""
    if flat.size == 0:
        return True
    if flat.dtype.kind not in "iu":
        return False
    whole = flat.astype(np.int64)
    if whole.min() < 0 or whole.max() >= n:
        return False
    keys = np.sort(np.repeat(np.arange(len(holders)), holders) * n + whole)
    return not bool(np.any(keys[1:] == keys[:-1]))
