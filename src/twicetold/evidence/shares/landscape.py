"""What the summaries of a holder set need of the map, laid out once for the kernel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold.evidence.shares._kernels import SUMMARIES, ball_sizes, fill_balls, summary_rows
from twicetold.graph import ContactGraph

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int32]

#: Farthest hop at which pairs of holders are looked at.
HOPS = 4
#: Mean number of traditions within reach; a denser graph is looked at over fewer hops.
CROWD = 400


@dataclass(frozen=True)
class Landscape:
    """Neighbourhoods, families and propensities of N traditions. Arrays are read-only.

    Parameters
    ----------
    ball_start, ball_index, ball_hop : (N + 1,) int64, (B,) int32, (B,) int8
        Traditions within ``HOPS`` hops of each (itself left out), nearest first.
    family : (N,) int32
        Codes from 0.
    family_size : (F,) float64
    family_edges : (F,) float64
        Edges inside each family.
    near_start, near_family, near_rate : (F + 1,) int32, (L,) int32, (L,) float64
        Families that touch each family; edges between the two over pairs between the two.
    same_degree, cross_degree : (N,) float64
        Neighbours of the same and of other families.
    propensity : (N,) float64
        Standardised log propensity, cut at 4 standard deviations.
    families : bool
        Whether any two traditions share a family.
    """

    ball_start: npt.NDArray[np.int64]
    ball_index: IntArray
    ball_hop: npt.NDArray[np.int8]
    family: IntArray
    family_size: FloatArray
    family_edges: FloatArray
    near_start: IntArray
    near_family: IntArray
    near_rate: FloatArray
    same_degree: FloatArray
    cross_degree: FloatArray
    propensity: FloatArray
    families: bool

    @property
    def n(self) -> int:
        """Number of traditions, N."""
        return len(self.family)

    def summaries(self, members: IntArray, start: npt.NDArray[np.int64]) -> FloatArray:
        """Summarise S holder sets laid end to end.

        Parameters
        ----------
        members : (T,) int32
            Tradition indices.
        start : (S + 1,) int64
            Set s is ``members[start[s]:start[s + 1]]``; sets are not empty.

        Returns
        -------
        (S, K) float64
            Columns :data:`SUMMARIES`.
        """
        out = np.zeros((len(start) - 1, len(SUMMARIES)))
        summary_rows(
            members,
            start,
            self.ball_start,
            self.ball_index,
            self.ball_hop,
            self.family,
            self.family_size,
            self.family_edges,
            self.near_start,
            self.near_family,
            self.near_rate,
            self.same_degree,
            self.cross_degree,
            self.propensity,
            out,
        )
        return out


def landscape(
    graph: ContactGraph, family: IntArray, propensity: FloatArray | None = None
) -> Landscape:
    """Lay a map out for the summaries.

    Parameters
    ----------
    graph : ContactGraph
        Over the N surveyed traditions.
    family : (N,) int32
        Codes 0 .. F - 1, every code used.
    propensity : (N,) float64, optional
        Relative propensity of emergence; equal when not given.
    """
    start, index, hop = _balls(graph)
    sizes = np.bincount(family)
    ends = family[graph.edges].reshape(-1, 2)
    same = ends[:, 0] == ends[:, 1]
    near_start, near_family, near_rate = _touching(ends[~same], sizes)
    out = Landscape(
        ball_start=start,
        ball_index=index,
        ball_hop=hop,
        family=np.ascontiguousarray(family, dtype=np.int32),
        family_size=sizes.astype(np.float64),
        family_edges=np.bincount(ends[same, 0], minlength=len(sizes)).astype(np.float64),
        near_start=near_start,
        near_family=near_family,
        near_rate=near_rate,
        same_degree=np.bincount(graph.edges[same].ravel(), minlength=graph.n).astype(np.float64),
        cross_degree=np.bincount(graph.edges[~same].ravel(), minlength=graph.n).astype(np.float64),
        propensity=_standardised(graph.n, propensity),
        families=bool(sizes.max() > 1),
    )
    for value in vars(out).values():
        if isinstance(value, np.ndarray):
            value.flags.writeable = False
    return out


def _balls(
    graph: ContactGraph,
) -> tuple[npt.NDArray[np.int64], IntArray, npt.NDArray[np.int8]]:
    sizes = ball_sizes(graph.indptr, graph.indices, HOPS)
    mean = sizes.mean(axis=0)
    hops = max(1, int(np.searchsorted(mean, CROWD, side="right")))
    start = np.concatenate([[0], np.cumsum(sizes[:, hops - 1])]).astype(np.int64)
    index = np.empty(start[-1], dtype=np.int32)
    hop = np.empty(start[-1], dtype=np.int8)
    fill_balls(graph.indptr, graph.indices, hops, start, index, hop)
    return start, index, hop


def _touching(
    ends: npt.NDArray[np.int32], sizes: npt.NDArray[np.int64]
) -> tuple[IntArray, IntArray, FloatArray]:
    """Lay out, by family, the families it touches and the share of pairs that are edges."""
    count = len(sizes)
    both = np.concatenate([ends, ends[:, ::-1]]).astype(np.int64)
    pairs, edges = np.unique(both[:, 0] * count + both[:, 1], return_counts=True)
    one, other = np.divmod(pairs, count)
    start = np.concatenate([[0], np.cumsum(np.bincount(one, minlength=count))])
    rate = edges / (sizes[one] * sizes[other]).astype(np.float64)
    return start.astype(np.int32), other.astype(np.int32), rate


def _standardised(n: int, propensity: FloatArray | None) -> FloatArray:
    if propensity is None:
        return np.zeros(n)
    positive = np.asarray(propensity, dtype=np.float64)
    low = positive[positive > 0].min()
    log = np.log(np.maximum(positive, low / 100.0))
    sd = float(log.std())
    if sd < 1e-9:
        return np.zeros(n)
    return np.asarray(np.clip((log - log.mean()) / sd, -4.0, 4.0))
