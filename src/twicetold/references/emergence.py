"""The emergence-only world: each tradition's own clock, nobody listening to neighbours.

Tradition i rings at rate lambda_i; given that n have rung, the holders are the first n, a
Plackett-Luce prefix. One draw orders the traditions and serves every number of holders.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError
from twicetold.graph import ContactGraph
from twicetold.randomness import Stream, chunk_words
from twicetold.references import _kernels
from twicetold.references._engine import (
    CHUNK,
    Floats,
    Thresholds,
    check_counts,
    check_draws,
    check_propensity,
    draw_chunk,
    make_engine,
    table_of,
)
from twicetold.references.exact import ExactWorld, enumerate_world, few_enough
from twicetold.references.law import Law
from twicetold.references.pvalue import Direction, p_few, p_many, p_value
from twicetold.references.tally import ScoreTails, Tally
from twicetold.statistics._check import family_array
from twicetold.statistics.moran import moran_from_score
from twicetold.statistics.observe import STATISTICS
from twicetold.workers import Pool, ThreadPool

#: Natural log of a propensity over the geometric mean, either way: sums and ratios stay finite.
_LARGEST_LOG = 300.0


@dataclass(frozen=True)
class EmergenceWorld:
    """Laws of every statistic in the emergence-only world, at the numbers of holders asked for.

    Parameters
    ----------
    graph : ContactGraph
    counts : tuple of int
        Numbers of holders, increasing.
    draws : int
        Draws behind each law that is not exact.
    exact : mapping of int to ExactWorld
        The counts that were enumerated.
    drawn : Tally or None
        Histograms of the others.
    tails : ScoreTails or None
        Tails of Moran scores of the others.
    """

    graph: ContactGraph
    counts: tuple[int, ...]
    draws: int
    exact: Mapping[int, ExactWorld]
    drawn: Tally | None
    tails: ScoreTails | None
    _laws: dict[tuple[str, int], Law] = field(default_factory=dict, repr=False, compare=False)

    def law(self, statistic: str, n: int) -> Law:
        """Law of one of ``statistics.STATISTICS`` at n holders.

        Raises
        ------
        TwicetoldError
            When the statistic is unknown or n was not asked for.
        """
        if statistic not in STATISTICS:
            raise TwicetoldError(
                f"`statistic` must be one of {', '.join(STATISTICS)}, got {statistic!r}."
            )
        if n in self.exact:
            return self.exact[n].laws[statistic]
        if (statistic, n) not in self._laws:
            row = self._column(n) * len(STATISTICS) + STATISTICS.index(statistic)
            assert self.drawn is not None
            values, counts = self.drawn.row(row)
            weights = counts.astype(np.float64)
            values.flags.writeable = False
            weights.flags.writeable = False
            self._laws[statistic, n] = Law(values, weights, self.draws, effective=self.draws)
        return self._laws[statistic, n]

    def moran_tail(self, n: int, thresholds: npt.ArrayLike) -> Floats:
        """Draws (or exact weight) whose Moran score at n holders reaches each threshold.

        Raises
        ------
        TwicetoldError
            When n was not asked for, or a threshold was not among those given before drawing.
        """
        if n in self.exact:
            return self.exact[n].score_at_least(thresholds)
        column = self._column(n)
        assert self.tails is not None
        try:
            return self.tails.at_least(column, thresholds).astype(np.float64)
        except KeyError as unknown:
            raise TwicetoldError(
                f"The Moran score {unknown} at {n} holders was not given before drawing. Pass "
                "it in `moran_thresholds`."
            ) from None

    def moran_mean(self, n: int) -> float:
        """Mean of Moran's I at n holders; NaN where it is not defined."""
        if n in self.exact:
            return moran_from_score(self.graph, n, self.exact[n].score_mean())
        column = self._column(n)
        assert self.tails is not None
        return moran_from_score(self.graph, n, int(self.tails.sums[column]) / self.draws)

    def moran_p(self, n: int, score: int) -> float:
        """P(Moran's I >= observed), the observed one given by its score."""
        return float(self._moran_ps(n, score))

    def _moran_ps(self, n: int, scores: npt.ArrayLike) -> Floats:
        tail = self.moran_tail(n, scores)
        if n in self.exact:
            return p_value(tail, float(self.exact[n].score_weights.sum()), exact=True)
        return p_value(tail, self.draws)

    def p_values(
        self,
        statistic: str,
        holders: npt.ArrayLike,
        observed: npt.ArrayLike,
        direction: Direction = "many",
    ) -> Floats:
        """(M,) p-values of many motifs at once.

        For ``moran_i`` ``observed`` holds Moran scores and the direction is always "many".
        """
        n, value = np.asarray(holders), np.asarray(observed)
        out = np.empty(n.shape)
        p = p_many if direction == "many" else p_few
        by_count = np.argsort(n, kind="stable")
        counts, first = np.unique(n[by_count], return_index=True)
        for count, here in zip(counts, np.split(by_count, first[1:]), strict=True):
            if statistic == "moran_i":
                out[here] = self._moran_ps(int(count), value[here])
            else:
                out[here] = p(self.law(statistic, int(count)), value[here])
        return out

    @cached_property
    def _columns(self) -> dict[int, int]:
        drawn = [n for n in self.counts if n not in self.exact]
        return {n: k for k, n in enumerate(drawn)}

    def _column(self, n: int) -> int:
        if n not in self._columns:
            raise TwicetoldError(
                f"The world was not drawn for {n} holders. Pass it in `counts` (now "
                f"{len(self.counts)} counts from {self.counts[0]} to {self.counts[-1]})."
            )
        return self._columns[n]


def equal_propensity(n_traditions: int) -> Floats:
    """(N,) ones: every tradition as likely as any other."""
    return np.ones(n_traditions)


def effort_propensity(effort: npt.ArrayLike, exponent: float = 1.0) -> Floats:
    """(N,) effort to the power ``exponent``: the more was collected, the likelier a record.

    Raises
    ------
    TwicetoldError
        When an effort is not a finite number above 0, the exponent is not finite, or the powers
        leave the range of numbers.
    """
    given = np.asarray(effort, dtype=np.float64)
    if given.ndim != 1 or not np.all(np.isfinite(given) & (given > 0)):
        raise TwicetoldError(
            "`effort` must hold one finite number above 0 per tradition; "
            f"{int((~(np.isfinite(given) & (given > 0))).sum())} are not. Fill or drop them."
        )
    if not np.isfinite(exponent):
        raise TwicetoldError(f"`exponent` must be a finite number, got {exponent}.")
    # Relative to the geometric mean, so that a high power does not overflow.
    logs = np.log(given)
    powers = exponent * (logs - logs.mean())
    if len(powers) and np.abs(powers).max() > _LARGEST_LOG:
        raise TwicetoldError(
            f"`effort` to the power {exponent:g} must stay within {_LARGEST_LOG:g} natural logs of "
            f"its mean, got {np.abs(powers).max():.4g}. Use a smaller `emergence.exponent`, or "
            "mend the effort column."
        )
    out: Floats = np.exp(powers)
    return np.ones(len(given)) if exponent == 0 else out


def emergence_world(
    graph: ContactGraph,
    family_codes: npt.ArrayLike | None,
    propensity: npt.ArrayLike,
    counts: Sequence[int] | npt.NDArray[np.integer],
    *,
    draws: int,
    seed: int,
    pool: Pool | None = None,
    moran_thresholds: Thresholds | None = None,
    stream: Stream = Stream.EMERGENCE,
) -> EmergenceWorld:
    """Draw (or enumerate) the emergence-only world at every number of holders in ``counts``.

    Draw d of chunk k has its own seed, and its order of traditions does not depend on ``counts``:
    a motif alone gets the numbers it gets in the batch, with any number of workers. Counts with
    few sets are enumerated instead, by the rule of :mod:`twicetold.references.exact`.

    Parameters
    ----------
    graph : ContactGraph
        Over the traditions surveyed.
    family_codes : (N,) int or None
        None makes each tradition a family of its own.
    propensity : (N,) float
        Relative rates, >= 0; a tradition with 0 never holds.
    counts : sequence of int
        Numbers of holders, 1 .. number of positive propensities; repeats are fine.
    draws : int
    seed : int
    pool : Pool or None
        None: threads of this process.
    moran_thresholds : mapping of int to (any,) int, or None
        Observed Moran scores by number of holders, whose tails are to be counted.
    stream : Stream

    Raises
    ------
    TwicetoldError
        When propensities, counts or draws cannot be used.
    """
    weights = check_propensity(graph.n, propensity)
    wanted = check_counts(counts, weights)
    family = family_array(graph.n, family_codes)
    check_draws(draws)
    exact = {
        n: enumerate_world(graph, family, weights, n) for n in wanted if few_enough(weights, n)
    }
    drawn = [n for n in wanted if n not in exact]
    if not drawn:
        return EmergenceWorld(graph, wanted, draws, exact, None, None)
    engine = make_engine(
        graph, family, weights, drawn, moran_thresholds, source=(seed, stream, draws)
    )
    total = Tally.empty(len(drawn) * len(STATISTICS))
    tails = engine.tails.fresh()
    chunks = range(-(-draws // CHUNK))
    for part, part_tails in (pool or ThreadPool()).run(
        draw_chunk, engine, chunks, label="emergence"
    ):
        total.merge(part)
        tails.merge(part_tails)
    return EmergenceWorld(graph, wanted, draws, exact, total, tails)


def emergence_tails_single(
    graph: ContactGraph,
    family_codes: npt.ArrayLike | None,
    propensity: npt.ArrayLike,
    observed: Mapping[str, int],
    *,
    draws: int,
    seed: int,
    pool: Pool | None = None,
) -> dict[str, float]:
    """P(statistic >= observed) of one motif that has propensities of its own.

    The sweep stops at the motif's own number of holders, so a draw costs its holders' degrees and
    nothing else. Where many motifs each need this, share the motifs out among the workers and run
    each with ``ThreadPool(1)``.

    Parameters
    ----------
    graph : ContactGraph
    family_codes : (N,) int or None
    propensity : (N,) float
    observed : mapping of str to int
        ``holders``, and any of ``statistics.STATISTICS`` and ``moran_score``.
    draws, seed : int
    pool : Pool or None

    Raises
    ------
    TwicetoldError
        As :func:`emergence_world`.
    """
    n = observed["holders"]
    score = observed.get("moran_score")
    world = emergence_world(
        graph,
        family_codes,
        propensity,
        [n],
        draws=draws,
        seed=seed,
        pool=pool,
        moran_thresholds=None if score is None else {n: [score]},
    )
    out = {s: float(p_many(world.law(s, n), v)) for s, v in observed.items() if s in STATISTICS}
    if score is not None:
        out["moran_score"] = world.moran_p(n, score)
    return out


def emergence_holders(
    propensity: npt.ArrayLike, n: int, *, draws: int, seed: int, stream: Stream
) -> npt.NDArray[np.int32]:
    """(draws, n) int32 holders drawn in the emergence-only world, in the order they rang.

    Raises
    ------
    TwicetoldError
        As :func:`emergence_world`.
    """
    weights = check_propensity(len(np.asarray(propensity)), propensity)
    check_counts([n], weights)
    check_draws(draws)
    out = np.empty((draws, n), dtype=np.int32)
    table = table_of(weights)
    for k in range(-(-draws // CHUNK)):
        part = out[k * CHUNK : (k + 1) * CHUNK]
        words = chunk_words(seed, stream, k, draws=len(part))
        _kernels.draw_orders(words, weights, *table, part)
    return out
