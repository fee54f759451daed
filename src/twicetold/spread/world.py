"""Worlds of the spread chain: many walks, and the law of every statistic at every count."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold.randomness import Stream, chunk_words
from twicetold.references.law import Law
from twicetold.spread.chain import (
    STATISTICS,
    ChainTables,
    SpreadError,
    SpreadModel,
    cap_for,
    chain_tables,
    walk_chunk,
)
from twicetold.workers import Pool, ThreadPool

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int32]

#: Walks that share one seed sequence; a unit of numbering, not of work.
BLOCK = 64

#: Effective draws wanted per count when ten thousand walks are asked for.
TARGET = 2000

#: Classes of joins in :func:`scatter_score`.
CLASSES = 32

#: Walks may grow to this many times what was asked.
GROWTH = 4


@dataclass(frozen=True)
class SpreadWorld:
    """Snapshots of many walks, by count. Arrays are read-only; K counts, W walks.

    Parameters
    ----------
    model : SpreadModel
    cap : int
        See :func:`twicetold.spread.chain.cap_for`.
    counts : (K,) int32
        Recorded counts asked for, increasing.
    used : (K,) int64
        Walks 0 .. used - 1 make the law of a count; fixed by that count alone (module docstring of
        :func:`spread_world`).
    weight : (W, K) float64
        Total weight of each walk for each count; 0 where the walk never visited it.
    statistics : (W, K, 5) int32
        :data:`twicetold.spread.chain.STATISTICS` of the kept visit.
    gains : (W, K, 3) int32
        Gains by route up to the kept visit.
    visits : (W, K) int32
        Visits below the full count up to the kept visit.
    """

    model: SpreadModel
    cap: int
    counts: IntArray
    used: npt.NDArray[np.int64]
    weight: FloatArray
    statistics: IntArray
    gains: IntArray
    visits: IntArray

    def slot(self, count: int) -> int:
        """Index of a count.

        Raises
        ------
        SpreadError
            When the count was not asked for.
        """
        k = int(np.searchsorted(self.counts, count))
        if k == len(self.counts) or self.counts[k] != count:
            raise SpreadError(f"This world was not asked for {count} holders; ask for it first.")
        return k

    def weights(self, count: int, turnover: float | None = None) -> FloatArray:
        """(used,) weights of the walks for a count, at the world's turnover or another one.

        A path with U gains and V visits below the full count (the kept one included) has density
        x**U (1 + x)**-V, the last factor (1 + x)**-1 being its holding time; so the weight is
        multiplied by (x / x0)**U ((1 + x0) / (1 + x))**V. Scaled to a largest factor of 1.
        """
        k = self.slot(count)
        used = int(self.used[k])
        base = self.weight[:used, k]
        x0 = self.model.turnover
        if turnover is None or turnover == x0:
            return base
        gained = self.gains[:used, k].sum(axis=1)
        factor = gained * np.log(turnover / x0)
        factor -= self.visits[:used, k] * np.log1p((turnover - x0) / (1.0 + x0))
        there = base > 0.0
        if not there.any():
            return base
        return np.where(there, base * np.exp(np.minimum(factor - factor[there].max(), 0.0)), 0.0)

    def effective(self, count: int, turnover: float | None = None) -> float:
        """Effective number of independent draws, (sum w)**2 / sum w**2; 0 when never visited."""
        return effective_size(self.weights(count, turnover))

    def law(self, statistic: str, count: int, turnover: float | None = None) -> Law:
        """Law of a statistic given the recorded count.

        Parameters
        ----------
        statistic : str
            One of :data:`twicetold.spread.chain.STATISTICS`, or ``scatter``
            (:func:`scatter_score`).
        count : int
            Recorded holders.
        turnover : float or None
            Reweight to this turnover (see :meth:`weights`); ``effective`` says what is left.

        Raises
        ------
        SpreadError
            When the count was not asked for, or no walk ever visited it.
        """
        return self.laws((statistic,), count, turnover)[0]

    def laws(
        self, statistics: Sequence[str], count: int, turnover: float | None = None
    ) -> list[Law]:
        """Laws of several statistics given the recorded count; see :meth:`law`."""
        weight = self.weights(count, turnover)
        there = weight > 0.0
        if not there.any():
            raise SpreadError(
                f"No walk came by {count} recorded holders; ask for more walks or check `recorded`."
            )
        kept, effective, out = weight[there], effective_size(weight), []
        seen = self.statistics[: len(weight), self.slot(count)][there]
        for statistic in statistics:
            if statistic == "scatter":
                values = scatter_score(seen[:, -1], seen[:, 0], count)
            else:
                values = seen[:, STATISTICS.index(statistic)].astype(np.int64)
            sums = np.bincount(values, weights=kept)
            distinct = np.flatnonzero(sums > 0.0)
            weights = sums[distinct]
            out.append(
                Law(
                    values=distinct.astype(np.int64),
                    weights=weights / weights.sum() * len(weight),
                    draws=len(weight),
                    effective=effective,
                )
            )
        return out

    def band(self, statistic: str, level: float = 0.95) -> IntArray:
        """(K, 3) low, median and high of a statistic at each count; -1 where never visited."""
        out = np.full((len(self.counts), 3), -1, dtype=np.int32)
        for k, count in enumerate(self.counts):
            if self.weight[: self.used[k], k].any():
                law = self.law(statistic, int(count))
                out[k] = [law.quantile(q) for q in ((1 - level) / 2, 0.5, (1 + level) / 2)]
        return out

    def realised(self, count: int) -> FloatArray:
        """(3,) realised shares of the routes among all gains up to the snapshot."""
        weight = self.weights(count)
        total = weight @ self.gains[: len(weight), self.slot(count)]
        return np.asarray(total / max(float(total.sum()), 1e-300))


def scatter_score(
    strands: npt.ArrayLike, joins: npt.ArrayLike, holders: int
) -> npt.NDArray[np.int64]:
    """Order holder sets by strands, those with as many strands by fewer joins.

    Strands take few values, so a tail of theirs alone wastes much of the level; joins break the
    ties. They enter in :data:`CLASSES` classes, each one join wide up to 16 holders and a
    sixteenth of the holders beyond, which keeps laws small.

    Parameters
    ----------
    strands, joins : array_like of int
    holders : int

    Returns
    -------
    ndarray of int64
        Larger is more scattered.
    """
    width = max(1, -(-holders // 16))
    fewer = np.minimum(np.asarray(joins, dtype=np.int64) // width, CLASSES - 1)
    return np.asarray(np.asarray(strands, dtype=np.int64) * CLASSES + CLASSES - 1 - fewer)


def effective_size(weight: FloatArray) -> float:
    """Effective number of draws of importance weights, (sum w)**2 / sum w**2 (Kish 1965)."""
    top = float(weight.max(initial=0.0))
    if top <= 0.0:
        return 0.0
    scaled = weight / top
    return float(scaled.sum() ** 2 / (scaled**2).sum())


def spread_words(
    seed: int, first: int, walks: int, *, key: tuple[int, ...]
) -> npt.NDArray[np.uint64]:
    """(walks, 3) seeding words of walks ``first``, ``first + 1`` ... of one stream."""
    stream, *more = key
    rows = []
    for block in range(first // BLOCK, -(-(first + walks) // BLOCK)):
        rows.append(chunk_words(seed, Stream(stream), *more, block, draws=BLOCK))
    start = first - first // BLOCK * BLOCK
    return np.concatenate(rows)[start : start + walks]


def expected_events(tables: ChainTables) -> float:
    """Mean number of visits of one walk: first-passage recursions of the two stages."""
    climb, total, u = 0.0, 1.0, tables.up_before
    for m in range(1, tables.cap):
        climb = (1.0 + (1.0 - u[m]) * climb) / u[m]
        total += climb
    fall, falls, u = 0.0, np.zeros(tables.n + 1), tables.up_after
    for m in range(tables.n, 0, -1):
        fall = (1.0 + u[m] * fall) / (1.0 - u[m])
        falls[m] = fall
    return float(total + falls[1 : tables.cap + 1].sum())


@dataclass(frozen=True)
class _Job:
    tables: ChainTables
    counts: IntArray
    seed: int
    key: tuple[int, ...]


_Part = tuple[FloatArray, IntArray, IntArray, IntArray]


def _run(job: _Job, piece: tuple[int, int]) -> _Part:
    words = spread_words(job.seed, piece[0], piece[1], key=job.key)
    got = walk_chunk(job.tables, words, job.counts)
    return (
        got.weight,
        got.summaries(job.tables),
        got.gains.astype(np.int32),
        got.visits.astype(np.int32),
    )


def work_size(tables: ChainTables, counts: IntArray) -> int:
    """Walks per piece of work, so that a piece takes a fraction of a second."""
    cost = 1.5e-7 * expected_events(tables) + 1e-7 * float(counts.sum())
    return int(np.clip(0.25 / cost, 1, 4 * BLOCK))


def spread_world(
    model: SpreadModel,
    counts: Sequence[int] | IntArray,
    *,
    largest: int,
    walks: int = 10_000,
    seed: int = 1,
    pool: Pool | None = None,
    key: tuple[int, ...] = (Stream.SPREAD,),
    growth: int = GROWTH,
) -> SpreadWorld:
    """Run the spread chain and keep its snapshots at every count asked for.

    The law of a count depends on the model, ``largest``, ``walks``, ``seed`` and that count, and on
    nothing else: not on the other counts asked for, the workers, or the pieces of work. Walks are
    added (up to ``growth`` times ``walks``) while a count has fewer than ``walks / 5`` effective
    draws (2,000 for the default), and a count uses only the walks *it* called for; so ``largest``
    must be the catalogue's largest count, whether one motif is tested or all are ranked.

    Parameters
    ----------
    model : SpreadModel
    counts : sequence of int
        Recorded counts of interest, each from 1 to ``largest``.
    largest : int
        Largest recorded count in the catalogue: it sets the cap of the walks.
    walks : int
        Walks to begin with, >= 1.
    seed : int
    pool : Pool or None
        Where pieces of work run; None runs them here on all processors.
    key : tuple of int
        First words of the spawn key (a :class:`Stream`, then anything), so that unrelated worlds
        can have unrelated draws; worlds that share it share random numbers.
    growth : int
        1, 2 or 4: walks may grow to this many times what was asked.

    Returns
    -------
    SpreadWorld
    """
    if walks < 1:
        raise SpreadError(f"`walks` must be a whole number from 1 up, got {walks}.")
    wanted = np.unique(np.asarray(counts, dtype=np.int32))
    if len(wanted) == 0 or wanted[0] < 1 or wanted[-1] > largest:
        raise SpreadError(
            f"`counts` must be whole numbers from 1 to {largest} (the largest count)."
        )
    cap = cap_for(model, largest)
    job = _Job(chain_tables(model, cap), wanted, seed, tuple(int(k) for k in key))
    runner = ThreadPool() if pool is None else pool
    parts: list[_Part] = []
    used = np.full(len(wanted), walks, dtype=np.int64)
    done = 0
    steps = [walks * k for k in (1, 2, 4) if k <= growth]
    for step, until in enumerate(steps):
        size = work_size(job.tables, wanted)
        pieces = [(a, min(size, until - a)) for a in range(done, until, size)]
        parts.extend(runner.run(_run, job, pieces, label="spread walks"))
        done = until
        weight = np.concatenate([p[0] for p in parts])
        poor = np.array([effective_size(weight[:, k]) < walks / 5 for k in range(len(wanted))])
        grow = poor & (used == until)
        if until == steps[-1] or not grow.any():
            break
        used[grow] = steps[step + 1]
    world = SpreadWorld(
        model=model,
        cap=cap,
        counts=wanted,
        used=used,
        weight=weight,
        statistics=np.concatenate([p[1] for p in parts]),
        gains=np.concatenate([p[2] for p in parts]),
        visits=np.concatenate([p[3] for p in parts]),
    )
    for value in vars(world).values():
        if isinstance(value, np.ndarray):
            value.flags.writeable = False
    return world
