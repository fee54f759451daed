"""Joins: edges whose two ends both hold the motif, split by family, with exact moments."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError
from twicetold.graph import ContactGraph
from twicetold.statistics._check import family_array, holder_mask


@dataclass(frozen=True)
class JoinCounts:
    """What the edges of the contact graph say of one motif; all whole numbers.

    Parameters
    ----------
    all : int
        Joins: edges with a holder at both ends (BB).
    cross, same : int
        Joins between traditions of different families, and within one family.
    mixed : int
        Edges with a holder at one end only (BW).
    empty : int
        Edges with no holder (WW); ``all + mixed + empty`` is the number of edges.
    degree_sum : int
        Sum of the holders' degrees, ``2 * all + mixed``.
    """

    all: int
    cross: int
    same: int
    mixed: int
    empty: int
    degree_sum: int


@dataclass(frozen=True)
class JoinMoments:
    """Exact moments of the joins when every set of n traditions is equally likely.

    Parameters
    ----------
    mean_all, mean_cross, mean_same : float
    var_all, var_cross, var_same : float
    cov_cross_same : float
    """

    mean_all: float
    mean_cross: float
    mean_same: float
    var_all: float
    var_cross: float
    var_same: float
    cov_cross_same: float


def join_counts(
    graph: ContactGraph, holders: npt.ArrayLike, family_codes: npt.ArrayLike | None = None
) -> JoinCounts:
    """Count joins, mixed and empty edges.

    Parameters
    ----------
    graph : ContactGraph
    holders : (h,) int
        Tradition indices, each once.
    family_codes : (N,) int or None
        Family of each tradition; None makes every join a cross-family one.

    Raises
    ------
    TwicetoldError
        When holders or families do not fit the graph.
    """
    mask = holder_mask(graph.n, holders)
    family = family_array(graph.n, family_codes)
    a, b = graph.edges[:, 0], graph.edges[:, 1]
    both = mask[a] & mask[b]
    joins = int(both.sum())
    cross = int((both & (family[a] != family[b])).sum())
    degree_sum = int(graph.degree[mask].sum())
    mixed = degree_sum - 2 * joins
    return JoinCounts(
        all=joins,
        cross=cross,
        same=joins - cross,
        mixed=mixed,
        empty=graph.n_edges - joins - mixed,
        degree_sum=degree_sum,
    )


def local_joins(graph: ContactGraph, holders: npt.ArrayLike) -> npt.NDArray[np.int32]:
    """(h,) int32 number of neighbouring holders of each holder, in the order given."""
    mask = holder_mask(graph.n, holders)
    a, b = graph.edges[:, 0], graph.edges[:, 1]
    both = mask[a] & mask[b]
    ends = np.concatenate([a[both], b[both]])
    counts = np.bincount(ends, minlength=graph.n).astype(np.int32)
    return counts[np.asarray(holders, dtype=np.int64)]


def join_moments(graph: ContactGraph, family_codes: npt.ArrayLike | None, n: int) -> JoinMoments:
    """Exact mean, variance and covariance of the joins of n holders under equal propensity.

    With A edges, degrees k, D = sum k(k - 1), R = A(A - 1) - D and
    p_r = n(n-1)...(n-r+1) / N(N-1)...(N-r+1): E = A p_2 and
    Var = A p_2 + D p_3 + R p_4 - (A p_2)^2; for two edge-disjoint graphs with
    s = sum k_1(v) k_2(v): Cov = s p_3 + (A_1 A_2 - s) p_4 - A_1 A_2 p_2^2
    (Cliff & Ord 1981, Spatial Processes, give the form for general weights). Worked in fractions,
    so nothing cancels.

    Parameters
    ----------
    graph : ContactGraph
    family_codes : (N,) int or None
    n : int
        Number of holders, 0 .. N.

    Raises
    ------
    TwicetoldError
        When n lies outside 0 .. N.
    """
    if not 0 <= n <= graph.n:
        raise TwicetoldError(f"`n` must lie from 0 to {graph.n} (traditions), got {n}.")
    family = family_array(graph.n, family_codes)
    is_cross = family[graph.edges[:, 0]] != family[graph.edges[:, 1]]
    k_cross = np.bincount(graph.edges[is_cross].ravel(), minlength=graph.n).astype(np.int64)
    k_same = np.bincount(graph.edges[~is_cross].ravel(), minlength=graph.n).astype(np.int64)
    p2, p3, p4 = (_share(n, graph.n, r) for r in (2, 3, 4))
    moments = []
    for k in (k_cross + k_same, k_cross, k_same):
        edges, touching = int(k.sum()) // 2, int((k * (k - 1)).sum())
        mean = edges * p2
        apart = edges * (edges - 1) - touching
        moments.append((mean, mean + touching * p3 + apart * p4 - mean**2))
    (mean_all, var_all), (mean_cross, var_cross), (mean_same, var_same) = moments
    meeting = int((k_cross * k_same).sum())
    pairs = (int(k_cross.sum()) // 2) * (int(k_same.sum()) // 2)
    cov = meeting * p3 + (pairs - meeting) * p4 - pairs * p2**2
    return JoinMoments(
        mean_all=float(mean_all),
        mean_cross=float(mean_cross),
        mean_same=float(mean_same),
        var_all=float(var_all),
        var_cross=float(var_cross),
        var_same=float(var_same),
        cov_cross_same=float(cov),
    )


def _share(n: int, total: int, r: int) -> Fraction:
    """Chance that r given traditions all hold the motif: falling factorials n^(r) / N^(r)."""
    out = Fraction(1)
    for i in range(r):
        if n - i <= 0:
            return Fraction(0)
        out *= Fraction(n - i, total - i)
    return out
