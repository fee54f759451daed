"""The engine of the emergence-only world: checks, and chunks of draws counted as they come."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError
from twicetold.graph import ContactGraph
from twicetold.randomness import Stream, chunk_words
from twicetold.references import _kernels
from twicetold.references.tally import ScoreTails, Tally
from twicetold.statistics.observe import STATISTICS, graph_arrays

#: Draws in one chunk of work. Part of what a seed means: never change it.
CHUNK = 1_000
#: Whole numbers noted between two rounds of counting; bounds the memory of a thread.
_NOTED = 1 << 19

Floats = npt.NDArray[np.float64]
Thresholds = Mapping[int, npt.ArrayLike]


class Engine(NamedTuple):
    """What every chunk of one world needs."""

    seed: int
    stream: Stream
    draws: int
    arrays: tuple[npt.NDArray[np.int32], ...]
    weights: Floats
    table: tuple[npt.NDArray[np.int32], Floats, npt.NDArray[np.int32]]
    column: npt.NDArray[np.int32]
    tails: ScoreTails


def check_propensity(n: int, propensity: npt.ArrayLike) -> Floats:
    """(N,) float64 propensities divided by the largest.

    Raises
    ------
    TwicetoldError
        When they are not N finite numbers >= 0 with one above 0, or too far apart to draw from.
    """
    given = np.asarray(propensity, dtype=np.float64)
    if given.shape != (n,) or not np.all(np.isfinite(given)) or np.any(given < 0):
        raise TwicetoldError(
            f"`propensity` must hold one finite number >= 0 for each of {n} traditions, got shape "
            f"{given.shape} with {int((~np.isfinite(given) | (given < 0)).sum())} that are not."
        )
    if not np.any(given > 0):
        raise TwicetoldError("`propensity` must be above 0 in at least one tradition.")
    out: Floats = given / given.max()
    if out[out > 0].min() < 1e-12:
        raise TwicetoldError(
            "Propensities must lie within a factor of 10^12 of each other, got a ratio of "
            f"{given.max() / given[given > 0].min():.3g}. Use a smaller exponent, or 0 where "
            "nothing can be recorded."
        )
    return out


def check_counts(
    counts: Sequence[int] | npt.NDArray[np.integer], weights: Floats
) -> tuple[int, ...]:
    """Distinct numbers of holders, increasing.

    Raises
    ------
    TwicetoldError
        When one lies outside 1 .. number of traditions with positive propensity.
    """
    out = tuple(sorted({int(n) for n in counts}))
    able = int((weights > 0).sum())
    if not out:
        raise TwicetoldError("`counts` must hold at least one number of holders, got none.")
    if out[0] < 1 or out[-1] > able:
        bad = out[0] if out[0] < 1 else out[-1]
        raise TwicetoldError(
            f"The number of holders must lie from 1 to {able}, the traditions with a propensity "
            f"above 0, got {bad}. Leave this motif out, or give its holders a propensity."
        )
    return out


def check_draws(draws: int) -> None:
    if draws < 1:
        raise TwicetoldError(f"`draws` must be a whole number from 1 up, got {draws}.")


def table_of(weights: Floats) -> tuple[npt.NDArray[np.int32], Floats, npt.NDArray[np.int32]]:
    items = np.flatnonzero(weights > 0).astype(np.int32)
    share = np.empty(len(items))
    other, stack = np.empty_like(items), np.empty_like(items)
    _kernels.alias_table(weights, items, len(items), share, other, stack)
    return items, share, other


def make_engine(
    graph: ContactGraph,
    family: npt.NDArray[np.int32],
    weights: Floats,
    drawn: list[int],
    thresholds: Thresholds | None,
    *,
    source: tuple[int, Stream, int],
) -> Engine:
    """Lay out one world's work: ``drawn`` counts increasing, ``source`` seed, stream and draws."""
    column = np.full(drawn[-1] + 1, -1, dtype=np.int32)
    column[drawn] = np.arange(len(drawn), dtype=np.int32)
    known = [np.unique(np.asarray((thresholds or {}).get(n, []), dtype=np.int64)) for n in drawn]
    start = np.concatenate([[0], np.cumsum([len(k) for k in known])]).astype(np.int64)
    seed, stream, draws = source
    return Engine(
        seed=seed,
        stream=stream,
        draws=draws,
        arrays=graph_arrays(graph, family),
        weights=weights,
        table=table_of(weights),
        column=column,
        tails=ScoreTails(start, np.concatenate([*known, np.zeros(0, np.int64)])),
    )


def draw_chunk(engine: Engine, k: int) -> tuple[Tally, ScoreTails]:
    """Draw and count one chunk (runs on any thread or machine)."""
    size = min(CHUNK, engine.draws - k * CHUNK)
    words = chunk_words(engine.seed, engine.stream, k, draws=size)
    rows = len(engine.tails.sums)
    noted = rows * len(STATISTICS)
    block = max(1, min(size, _NOTED // (noted + len(engine.column))))
    indptr, indices, family, work, kin = engine.arrays
    work, kin = work.copy(), kin.copy()
    orders = np.empty((block, len(engine.column) - 1), dtype=np.int32)
    values = np.empty((block, rows, len(STATISTICS)), dtype=np.int32)
    scores = np.empty((block, rows), dtype=np.int64)
    counts = Tally.empty(noted)
    tails = engine.tails.fresh()
    for first in range(0, size, block):
        now = min(block, size - first)
        _kernels.draw_orders(
            words[first : first + now], engine.weights, *engine.table, orders[:now]
        )
        _kernels.sweep_orders(
            orders[:now],
            engine.column,
            indptr,
            indices,
            family,
            work,
            kin,
            first + 1,
            values[:now],
            scores[:now],
        )
        counts.add(values[:now].reshape(now, noted))
        tails.add(scores[:now])
    return counts, tails
