"""The rate-based contact process with spontaneous gains: a second dynamics, for robustness.

Every non-holder gains at rate ``contact`` for each holding neighbour plus ``spontaneous``; every
holder loses at rate ``loss`` (Harris 1974, Annals of Probability 2:969, with immigration). Here the
count does *not* walk by itself: a hemmed-in cluster grows more slowly than a scattered one. If
verdicts hold under both dynamics they do not hang on that choice.

Simulated event by event in excursions from the empty map back to it; these are independent, and by
the renewal-reward theorem stationary probabilities are mean times over mean cycle lengths. A visit
weighs its mean waiting time.

As a reference for scatter, ``spontaneous`` is so small (:data:`RARE`) that the motif on the whole
map comes up anew once in 10,000 mean lives of a holding; and ``contact`` is chosen so that the mean
count, among snapshots from ``least`` to the catalogue's largest count, equals the log-series' at
the catalogue's turnover (:func:`match_contact`).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold.graph.model import ContactGraph
from twicetold.randomness import Stream
from twicetold.references.law import Law
from twicetold.references.pvalue import p_few, p_many
from twicetold.spread._kernels import summary_kernel
from twicetold.spread._rate_kernels import rate_kernel
from twicetold.spread.chain import STATISTICS, SpreadError
from twicetold.spread.turnover import log_series
from twicetold.spread.world import effective_size, spread_words
from twicetold.workers import Pool, ThreadPool

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int32]

#: Spontaneous gains on the whole map per mean life of a holding, when rates serve as a reference.
RARE = 1e-4
#: Excursions in one piece of work.
PIECE = 256
#: An excursion is cut after this many events (a motif that has become endemic).
LONGEST = 2_000_000


@dataclass(frozen=True)
class RateModel:
    """Rates of the contact process.

    Parameters
    ----------
    graph : ContactGraph
    contact : float
        Gain rate per holding neighbour, >= 0.
    spontaneous : float
        Gain rate of every non-holder without any neighbour's help, >= 0.
    loss : float
        Loss rate of every holder, > 0.
    family : (N,) int32 or None
        Only for the summaries (strands, cross-family joins).
    """

    graph: ContactGraph
    contact: float
    spontaneous: float = 0.0
    loss: float = 1.0
    family: IntArray | None = None

    def __post_init__(self) -> None:
        rates = (self.contact, self.spontaneous, self.loss)
        if not all(0.0 <= r < np.inf for r in rates) or self.loss <= 0.0 or self.graph.n < 1:
            raise SpreadError(
                "Rates must be 0 or more, the loss rate above 0, got contact "
                f"{self.contact}, spontaneous {self.spontaneous}, loss {self.loss}."
            )


@dataclass(frozen=True)
class RateWorld:
    """Stationary snapshots of the contact process. Arrays are read-only.

    Parameters
    ----------
    model : RateModel
    counts : (K,) int32
    excursions : int
    weight : tuple of (e_k,) float64
        For each count, total time of every excursion that visited it.
    statistics : tuple of (e_k, 5) int32
        :data:`twicetold.spread.chain.STATISTICS` of the visit kept.
    time : (N + 1,) float64
        Mean time per cycle by count; entry 0 is the wait for a spontaneous gain (0 without any).
    time_error : (N + 1, N + 1) float64
        Covariance of ``time`` as estimated from the excursions.
    boundary : float
        Mean integral of the number of holder-non-holder edges over a cycle.
    cut : int
        Excursions stopped early; their snapshots are biased to the young.
    """

    model: RateModel
    counts: IntArray
    excursions: int
    weight: tuple[FloatArray, ...]
    statistics: tuple[IntArray, ...]
    time: FloatArray
    time_error: FloatArray
    boundary: float
    cut: int

    def stationary(self) -> FloatArray:
        """(N + 1,) stationary probabilities of the count (given at least one, if never anew)."""
        return np.asarray(self.time / self.time.sum())

    def law(self, statistic: str, count: int) -> Law:
        """Stationary law of a statistic given the count.

        Raises
        ------
        SpreadError
            When the count was not asked for or never visited.
        """
        k = int(np.searchsorted(self.counts, count))
        if k == len(self.counts) or self.counts[k] != count or not len(self.weight[k]):
            raise SpreadError(f"No excursion came by {count} holders, or it was not asked for.")
        weight = self.weight[k]
        values = self.statistics[k][:, STATISTICS.index(statistic)]
        distinct, where = np.unique(values, return_inverse=True)
        sums = np.bincount(where, weights=weight)
        return Law(
            values=distinct.astype(np.int64),
            weights=sums / sums.sum() * len(weight),
            draws=len(weight),
            effective=effective_size(weight),
        )

    def p_scattered(self, count: int, *, joins: int, strands: int) -> tuple[float, float]:
        """P(joins <= observed) and P(strands >= observed) given the count."""
        few = p_few(self.law("joins", count), joins)
        return float(few), float(p_many(self.law("strands", count), strands))


@dataclass(frozen=True)
class _Job:
    model: RateModel
    counts: IntArray
    seed: int
    key: tuple[int, ...]
    longest: int


@dataclass(frozen=True)
class _Part:
    weight: tuple[FloatArray, ...]
    statistics: tuple[IntArray, ...]
    time: FloatArray
    squares: FloatArray
    boundary: float
    cut: int


def _run(job: _Job, piece: tuple[int, int]) -> _Part:
    graph, k = job.model.graph, len(job.counts)
    words = spread_words(job.seed, piece[0], piece[1], key=job.key)
    slot_of = np.full(graph.n + 1, -1, dtype=np.int32)
    slot_of[job.counts] = np.arange(k, dtype=np.int32)
    bits = np.zeros((len(words), k, (graph.n + 63) // 64), dtype=np.uint64)
    weight = np.zeros((len(words), k))
    time = np.zeros((len(words), graph.n + 1))
    boundary, cut = np.zeros(len(words)), np.zeros(len(words), dtype=np.uint8)
    rate_kernel(
        words,
        graph.indptr,
        graph.indices,
        max(1, int(graph.degree.max())),
        job.model.contact,
        job.model.spontaneous,
        job.model.loss,
        job.longest,
        slot_of,
        bits,
        weight,
        time,
        boundary,
        cut,
    )
    family = np.arange(graph.n) if job.model.family is None else job.model.family
    codes = np.unique(family, return_inverse=True)[1].astype(np.int32)
    out = np.zeros((len(words), k, len(STATISTICS)), dtype=np.int32)
    summary_kernel(
        bits, job.counts, weight, graph.indptr, graph.indices, codes, int(codes.max()) + 1, out
    )
    return _Part(
        weight=tuple(weight[weight[:, s] > 0, s] for s in range(k)),
        statistics=tuple(out[weight[:, s] > 0, s] for s in range(k)),
        time=time.sum(axis=0),
        squares=time.T @ time if graph.n <= 64 else np.zeros((0, 0)),
        boundary=float(boundary.sum()),
        cut=int(cut.sum()),
    )


def rate_world(
    model: RateModel,
    counts: Sequence[int] | IntArray,
    *,
    excursions: int = 50_000,
    seed: int = 1,
    pool: Pool | None = None,
    longest: int = LONGEST,
) -> RateWorld:
    """Run excursions of the contact process and keep its snapshots at the counts asked for.

    Parameters
    ----------
    model : RateModel
    counts : sequence of int
        Counts of interest, 1 .. N.
    excursions : int
        Excursions from the empty map; most die at once.
    seed : int
    pool : Pool or None
    longest : int
        Events after which an excursion is cut.
    """
    n = model.graph.n
    wanted = np.unique(np.asarray(counts, dtype=np.int32))
    if len(wanted) == 0 or wanted[0] < 1 or wanted[-1] > n or excursions < 1:
        raise SpreadError(f"`counts` must be whole numbers from 1 to {n}, `excursions` 1 or more.")
    job = _Job(model, wanted, seed, (int(Stream.RATES),), longest)
    pieces = [(a, min(PIECE, excursions - a)) for a in range(0, excursions, PIECE)]
    runner = ThreadPool() if pool is None else pool
    parts = list(runner.run(_run, job, pieces, label="contact process"))
    time = np.sum([p.time for p in parts], axis=0) / excursions
    squares = np.sum([p.squares for p in parts], axis=0) / excursions
    error = (squares - np.outer(time, time)) / excursions if squares.size else squares
    if model.spontaneous > 0.0:
        time[0] = 1.0 / (n * model.spontaneous)
    return RateWorld(
        model=model,
        counts=wanted,
        excursions=excursions,
        weight=tuple(np.concatenate([p.weight[k] for p in parts]) for k in range(len(wanted))),
        statistics=tuple(
            np.concatenate([p.statistics[k] for p in parts]) for k in range(len(wanted))
        ),
        time=time,
        time_error=error,
        boundary=sum(p.boundary for p in parts) / excursions,
        cut=sum(p.cut for p in parts),
    )


def match_contact(
    graph: ContactGraph,
    turnover: float,
    *,
    least: int,
    largest: int,
    excursions: int = 20_000,
    seed: int = 1,
    pool: Pool | None = None,
) -> float:
    """Contact rate (per loss) whose prevalence has the log-series' mean over least .. largest.

    Bisection on the logarithm, on the same random numbers throughout; precise to 1 % of the rate or
    the Monte Carlo error of the mean, whichever is coarser.

    Parameters
    ----------
    graph : ContactGraph
    turnover : float
        x of the spread chain.
    least, largest : int
        Counts over which the means are compared, ``least`` < ``largest``.
    """
    if not 1 <= least < largest <= graph.n or graph.n_edges == 0:
        raise SpreadError(
            f"Matching needs edges and 1 <= least < largest <= {graph.n}, got {least}, {largest}."
        )
    span = np.arange(least, largest + 1)
    p = log_series(turnover, graph.n)[least : largest + 1]
    target = float(span @ p / p.sum())
    rare = RARE / graph.n

    def too_few(rate: float) -> bool:
        world = rate_world(
            RateModel(graph, rate, rare),
            [largest],
            excursions=excursions,
            seed=seed,
            pool=pool,
            # Enough to see where the mean lies; endemic motifs would take for ever.
            longest=20_000 + 200 * largest,
        )
        there = world.time[least : largest + 1]
        return not there.sum() > 0.0 or float(span @ there / there.sum()) < target

    # A holder has `degree` edges at most, so at 1/10 of a loss per edge little spreads; going up
    # from there stays clear of the rates at which motifs become endemic.
    low = high = 0.1 / float(graph.degree.max())
    while too_few(high) and high < 100.0:
        low, high = high, 1.5 * high
    while high / low > 1.01:
        middle = float(np.sqrt(low * high))
        low, high = (middle, high) if too_few(middle) else (low, middle)
    return float(np.sqrt(low * high))
