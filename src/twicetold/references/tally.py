"""Streaming histograms: what is kept of the draws. Memory does not grow with their number."""

from __future__ import annotations

from copy import copy
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from twicetold.references import _kernels

Ints = npt.NDArray[np.int64]


@dataclass
class Tally:
    """Histograms of R integer quantities, each over just the span of values seen.

    Parameters
    ----------
    low : (R,) int32
        First value of each histogram.
    start : (R + 1,) int64
        Where each histogram begins in ``counts``.
    counts : (any,) int64
    """

    low: npt.NDArray[np.int32]
    start: Ints
    counts: Ints

    @classmethod
    def empty(cls, rows: int) -> Tally:
        """Give a tally that holds nothing yet."""
        return cls(np.zeros(rows, np.int32), np.zeros(rows + 1, np.int64), np.zeros(0, np.int64))

    def add(self, values: npt.NDArray[np.int32]) -> None:
        """Count ``values`` (B, R) int32."""
        if len(values) == 0 or values.shape[1] == 0:
            return
        low, high = values[0].copy(), values[0].copy()
        _kernels.extents(values, low, high)
        self._hold(low, high)
        _kernels.tally(values, self.low, self.start, self.counts)

    def merge(self, other: Tally) -> None:
        """Add all counts of another tally of the same quantities."""
        if len(other.counts) == 0:
            return
        self._hold(other.low, other._high())
        _kernels.pour(other.low, other.start, other.counts, self.low, self.start, self.counts)

    def row(self, r: int) -> tuple[Ints, Ints]:
        """Values seen in histogram r, increasing, and how often."""
        counts = self.counts[self.start[r] : self.start[r + 1]]
        seen = np.flatnonzero(counts)
        return (seen + int(self.low[r])).astype(np.int64), counts[seen]

    def _high(self) -> npt.NDArray[np.int32]:
        return (self.low + np.diff(self.start) - 1).astype(np.int32)

    def _hold(self, low: npt.NDArray[np.int32], high: npt.NDArray[np.int32]) -> None:
        """Widen the histograms that must hold values from ``low`` to ``high``, with some room."""
        if len(self.counts):
            old_high = self._high()
            under, over = low < self.low, high > old_high
            if not (under.any() or over.any()):
                return
            low, high = np.minimum(low, self.low), np.maximum(high, old_high)
        else:
            under = over = np.ones(len(low), dtype=bool)
        room = (high - low) // 4 + 2
        new_low = np.where(under, low - room, low).astype(np.int32)
        new_high = np.where(over, high + room, high)
        start = np.concatenate([[0], np.cumsum(new_high.astype(np.int64) - new_low + 1)])
        counts = np.zeros(int(start[-1]), dtype=np.int64)
        if len(self.counts):
            _kernels.pour(self.low, self.start, self.counts, new_low, start, counts)
        self.low, self.start, self.counts = new_low, start, counts


@dataclass
class ScoreTails:
    """Tail counts of Moran scores at the observed values, and the sum of all scores.

    Parameters
    ----------
    start : (K + 1,) int64
        Where each count's thresholds begin.
    thresholds : (T,) int64
        Observed scores, increasing within each count.
    hits : (T,) int64
        Draws whose largest threshold reached is this one.
    sums : (K,) int64
        Sum of the scores of all draws.
    """

    start: Ints
    thresholds: Ints
    hits: Ints = field(init=False)
    sums: Ints = field(init=False)

    _buckets: tuple[Ints, Ints, Ints] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        self.hits = np.zeros(len(self.thresholds), dtype=np.int64)
        self.sums = np.zeros(len(self.start) - 1, dtype=np.int64)
        self._buckets = _buckets_of(self.start, self.thresholds)

    def fresh(self) -> ScoreTails:
        """Give an empty one with the same thresholds."""
        out = copy(self)
        out.hits, out.sums = np.zeros_like(self.hits), np.zeros_like(self.sums)
        return out

    def add(self, scores: Ints) -> None:
        """Count ``scores`` (B, K) int64."""
        shift, first, reached = self._buckets
        _kernels.score_tails(
            scores, self.start, self.thresholds, shift, first, reached, self.hits, self.sums
        )

    def merge(self, other: ScoreTails) -> None:
        """Add the counts of another of the same thresholds."""
        self.hits += other.hits
        self.sums += other.sums

    def at_least(self, c: int, thresholds: npt.ArrayLike) -> Ints:
        """Draws with a score of at least each threshold, which must be among those observed.

        Raises
        ------
        KeyError
            When a threshold was not given before drawing.
        """
        span = slice(int(self.start[c]), int(self.start[c + 1]))
        known, wanted = self.thresholds[span], np.asarray(thresholds, dtype=np.int64)
        k = np.searchsorted(known, wanted)
        found = (k < len(known)) & (np.append(known, 0)[k] == wanted)
        if not np.all(found):
            raise KeyError(int(wanted[~found].flat[0]))
        tails: Ints = np.cumsum(self.hits[span][::-1])[::-1][k]
        return tails


def _buckets_of(start: Ints, thresholds: Ints) -> tuple[Ints, Ints, Ints]:
    """Lay buckets over each count's thresholds, at most two for each; see the kernel."""
    shift = np.zeros(len(start) - 1, dtype=np.int64)
    reached = []
    for c in range(len(start) - 1):
        known = thresholds[start[c] : start[c + 1]]
        span = int(known[-1] - known[0]) if len(known) else 0
        while span >> int(shift[c]) >= max(2 * len(known), 1):
            shift[c] += 1
        lower = np.arange((span >> int(shift[c])) + 1, dtype=np.int64) << shift[c]
        reached.append(
            np.searchsorted(known, known[0] + lower, side="right") if len(known) else lower * 0
        )
    first = np.concatenate([[0], np.cumsum([len(r) for r in reached])]).astype(np.int64)
    return shift, first, np.concatenate([*reached, np.zeros(0, np.int64)]).astype(np.int64)
