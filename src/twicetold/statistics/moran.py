"""Moran's I with binary weights: from joins alone for a 0/1 motif, and for any values.

Isolated traditions stay in N and in the mean and bring no weight, as esda and libpysal count them.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError
from twicetold.graph import ContactGraph
from twicetold.statistics._check import holder_mask


@dataclass(frozen=True)
class MoranMoments:
    """Moments of Moran's I without any spread.

    Parameters
    ----------
    mean : float
        -1 / (N - 1).
    var_randomised : float
        Variance over all permutations of the values (NaN when they are constant or N < 4).
    var_normal : float
        Variance for independent normal values (NaN when N < 2).
    """

    mean: float
    var_randomised: float
    var_normal: float


def moran_score(n_traditions: int, n: int, joins: int, degree_sum: int) -> int:
    """Whole number that orders motifs of n holders as Moran's I does: N * joins - n * degree_sum.

    Tails of Moran's I are counted on it, so that no float is ever compared.
    """
    return n_traditions * joins - n * degree_sum


def moran_from_score(graph: ContactGraph, n: int, score: float) -> float:
    """Moran's I of n holders from its (mean) score; NaN when it is not defined."""
    return float(moran_from_scores(graph, np.array([n]), np.array([score]))[0])


def moran_from_scores(
    graph: ContactGraph, n: npt.NDArray[np.int64], scores: npt.NDArray[np.int64 | np.float64]
) -> npt.NDArray[np.float64]:
    """(M,) Moran's I of motifs with (M,) holders and scores; NaN where it is not defined."""
    if graph.n_edges == 0:
        return np.full(len(n), np.nan)
    share = n / graph.n
    spread = np.where((n > 0) & (n < graph.n), share * (1.0 - share), np.nan)
    out: npt.NDArray[np.float64] = (scores / (graph.n * graph.n_edges) + share * share) / spread
    return out


def moran_i(graph: ContactGraph, holders: npt.ArrayLike) -> float:
    """Moran's I of a motif (1 for holders, 0 for others), binary weights.

    I = (BB/A - p D_B/A + p^2) / (p (1 - p)), with p = n/N, BB joins, A edges and D_B the holders'
    total degree; the usual N/S0 * sum_ij w_ij z_i z_j / sum_i z_i^2 (Moran 1950) written for 0/1.
    NaN without edges, or when nobody or everybody holds the motif.
    """
    mask = holder_mask(graph.n, holders)
    joins = int((mask[graph.edges[:, 0]] & mask[graph.edges[:, 1]]).sum())
    n = int(mask.sum())
    score = moran_score(graph.n, n, joins, int(graph.degree[mask].sum()))
    return moran_from_score(graph, n, score)


def moran_of_values(graph: ContactGraph, values: npt.ArrayLike) -> float:
    """Moran's I of any values, one per tradition, binary weights; NaN when constant or no edges.

    Raises
    ------
    TwicetoldError
        When there is not one finite number per tradition.
    """
    y = _values(graph, values)
    z = y - y.mean()
    spread = float(z @ z)
    if graph.n_edges == 0 or spread == 0.0:
        return float("nan")
    crossed = float(z[graph.edges[:, 0]] @ z[graph.edges[:, 1]])
    return graph.n * crossed / (graph.n_edges * spread)


def moran_moments(
    graph: ContactGraph, n: int | None = None, *, values: npt.ArrayLike | None = None
) -> MoranMoments:
    """Moments of Moran's I under equal propensity, for n holders or for given values.

    Binary symmetric weights have S0 = 2A, S1 = 4A, S2 = 4 sum k^2. With the kurtosis
    b2 = m4 / m2^2 (for n of N holders exactly (1 - 3pq) / pq),
    Var_R = [N((N^2 - 3N + 3) S1 - N S2 + 3 S0^2) - b2((N^2 - N) S1 - 2N S2 + 6 S0^2)]
    / [(N-1)(N-2)(N-3) S0^2] - 1/(N-1)^2 and
    Var_N = (N^2 S1 - N S2 + 3 S0^2) / [(N^2 - 1) S0^2] - 1/(N-1)^2 (Cliff & Ord 1981).

    Raises
    ------
    TwicetoldError
        Unless exactly one of ``n`` and ``values`` is given and fits the graph.
    """
    if (n is None) == (values is None):
        raise TwicetoldError("Give either the number of holders `n` or `values`, not both.")
    big_n = graph.n
    if n is not None and not 0 <= n <= big_n:
        raise TwicetoldError(f"`n` must lie from 0 to {big_n} (traditions), got {n}.")
    nan = float("nan")
    if big_n < 2 or graph.n_edges == 0:
        return MoranMoments(nan, nan, nan)
    kurtosis = _kurtosis_of_count(big_n, n) if n is not None else _kurtosis(graph, values)
    s0, s1 = 2 * graph.n_edges, 4 * graph.n_edges
    s2 = 4 * int((graph.degree.astype(np.int64) ** 2).sum())
    mean = Fraction(-1, big_n - 1)
    var_normal = Fraction(big_n**2 * s1 - big_n * s2 + 3 * s0**2, (big_n**2 - 1) * s0**2) - mean**2
    var_randomised = nan
    if big_n >= 4 and kurtosis is not None:
        first = big_n * ((big_n**2 - 3 * big_n + 3) * s1 - big_n * s2 + 3 * s0**2)
        second = kurtosis * ((big_n**2 - big_n) * s1 - 2 * big_n * s2 + 6 * s0**2)
        below = (big_n - 1) * (big_n - 2) * (big_n - 3) * s0**2
        var_randomised = float((first - second) / below - mean**2)
    return MoranMoments(float(mean), var_randomised, float(var_normal))


def _kurtosis_of_count(big_n: int, n: int) -> Fraction | None:
    if n in (0, big_n):
        return None
    spread = Fraction(n * (big_n - n), big_n**2)
    return (1 - 3 * spread) / spread


def _kurtosis(graph: ContactGraph, values: npt.ArrayLike | None) -> Fraction | None:
    y = _values(graph, values)
    z = y - y.mean()
    m2 = float((z**2).mean())
    return None if m2 == 0.0 else Fraction(float((z**4).mean()) / m2**2)


def _values(graph: ContactGraph, values: npt.ArrayLike | None) -> npt.NDArray[np.float64]:
    y = np.asarray(values, dtype=np.float64)
    if y.shape != (graph.n,) or not np.all(np.isfinite(y)):
        raise TwicetoldError(
            f"`values` must hold one finite number for each of {graph.n} traditions, got shape "
            f"{y.shape} with {int((~np.isfinite(y)).sum())} that are not finite."
        )
    return y
