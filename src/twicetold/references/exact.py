"""The emergence-only world enumerated, where there are few enough sets of holders.

The rule depends on nothing but the propensities and n. With P traditions of positive propensity:

- n = P: the one set there is;
- all equal: every one of the C(P, n) sets is visited when there are at most 200,000 of them and
  together they hold at most 4,000,000 traditions;
- unequal: the same, and either P <= 16 (chances by dynamic programming over all subsets) or the
  subsets of all sets number at most 8,000,000 (dynamic programming within each set).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold.graph import ContactGraph
from twicetold.references import _kernels
from twicetold.references.law import Law
from twicetold.statistics.observe import STATISTICS, graph_arrays

Floats = npt.NDArray[np.float64]

MAX_SETS = 200_000
MAX_VISITS = 4_000_000
MAX_SUBSETS = 8_000_000
MAX_ALL_SUBSETS = 16
_BLOCK = 1 << 20


@dataclass(frozen=True)
class ExactWorld:
    """Exact laws at one number of holders. Arrays are read-only.

    Parameters
    ----------
    laws : mapping of statistic to Law
    scores : (k,) int64
        Moran scores that occur, increasing.
    score_weights : (k,) float64
        Their weights.
    """

    laws: dict[str, Law]
    scores: npt.NDArray[np.int64]
    score_weights: Floats

    def score_at_least(self, thresholds: npt.ArrayLike) -> Floats:
        """Weight of Moran scores of at least each threshold."""
        above = np.append(np.cumsum(self.score_weights[::-1])[::-1], 0.0)
        tails: Floats = above[np.searchsorted(self.scores, np.asarray(thresholds))]
        return tails

    def score_mean(self) -> float:
        """Mean Moran score."""
        return float(self.scores @ self.score_weights / self.score_weights.sum())


def few_enough(propensity: Floats, n: int) -> bool:
    """Whether the rule above enumerates n holders under these propensities."""
    positive = propensity[propensity > 0]
    count = len(positive)
    sets = math.comb(count, n)
    if sets == 1:
        return True
    if sets > MAX_SETS or sets * n > MAX_VISITS:
        return False
    if np.all(positive == positive[0]) or count <= MAX_ALL_SUBSETS:
        return True
    return n < 32 and sets * 2**n <= MAX_SUBSETS


def enumerate_world(
    graph: ContactGraph,
    family: npt.NDArray[np.int32],
    propensity: Floats,
    n: int,
) -> ExactWorld:
    """Visit every set of n traditions of positive propensity.

    Weights are numbers of configurations when all propensities are equal, and chances of the
    Plackett-Luce prefix, in any order, otherwise.

    Parameters
    ----------
    graph : ContactGraph
    family : (N,) int32
    propensity : (N,) float64
    n : int
        1 .. number of positive propensities; see :func:`few_enough`.
    """
    items = np.flatnonzero(propensity > 0).astype(np.int32)
    weights = np.ascontiguousarray(propensity[items])
    arrays = graph_arrays(graph, family)
    column = np.full(n + 1, -1, dtype=np.int32)
    column[n] = 0
    highest = max(graph.n_edges, graph.n) + 1
    mass = np.zeros((len(STATISTICS), highest))
    score_parts: list[tuple[npt.NDArray[np.int64], Floats]] = []
    current = np.arange(n, dtype=np.int32)
    rows = np.empty((max(1, _BLOCK // n), n), dtype=np.int32)
    first = 1
    while (written := _kernels.combinations(current, len(items), rows)) > 0:
        block = rows[:written]
        values = np.empty((written, 1, len(STATISTICS)), dtype=np.int32)
        scores = np.empty((written, 1), dtype=np.int64)
        _kernels.sweep_orders(items[block], column, *arrays, first, values, scores)
        first += written
        chances = _chances(weights, block)
        for s in range(len(STATISTICS)):
            mass[s] += np.bincount(values[:, 0, s], weights=chances, minlength=highest)
        kinds, which = np.unique(scores[:, 0], return_inverse=True)
        weight = np.bincount(which.reshape(-1), weights=chances).astype(np.float64)
        score_parts.append((kinds, weight))
    kinds, which = np.unique(np.concatenate([k for k, _ in score_parts]), return_inverse=True)
    parts = np.concatenate([w for _, w in score_parts])
    score_mass = np.bincount(which.reshape(-1), weights=parts).astype(np.float64)
    laws = {name: _law(mass[s]) for s, name in enumerate(STATISTICS)}
    kinds.flags.writeable = False
    score_mass.flags.writeable = False
    return ExactWorld(laws, kinds, score_mass)


def _law(mass: Floats) -> Law:
    values = np.flatnonzero(mass > 0).astype(np.int64)
    weights = mass[values]
    values.flags.writeable = False
    weights.flags.writeable = False
    return Law(values, weights, draws=0, exact=True, effective=float("inf"))


def _chances(weights: Floats, rows: npt.NDArray[np.int32]) -> Floats:
    if rows.shape[1] == len(weights) or np.all(weights == weights[0]):
        return np.ones(len(rows))
    if len(weights) <= MAX_ALL_SUBSETS:
        chance = np.empty(1 << len(weights))
        _kernels.subset_chances(weights, 0.0, chance)
        chosen: Floats = chance[(np.int64(1) << rows.astype(np.int64)).sum(axis=1)]
        return chosen
    out = np.empty(len(rows))
    _kernels.row_chances(weights, rows, out)
    return out
