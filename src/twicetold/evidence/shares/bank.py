"""The snapshot bank: walks of the spread chain over the whole simplex of shares, summarised.

Each walk has shares of its own, drawn over the simplex, and keeps one visit for each of a few
recorded counts spread evenly over their logs. Only summaries, shares and weights are kept: the bank
holds nothing of any motif, place or name, and serves every motif searched in the same traditions.
"""

from __future__ import annotations

import dataclasses
import time
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from twicetold.evidence.shares._kernels import SUMMARIES, unpack_bits
from twicetold.evidence.shares.cache import Entry, open_entry
from twicetold.evidence.shares.landscape import Landscape, landscape
from twicetold.randomness import Stream, chunk_generator, chunk_words
from twicetold.spread import ChainTables, SpreadError, SpreadModel, cap_for, chain_tables
from twicetold.spread import walk_chunk as walk
from twicetold.workers import Pool, ThreadPool

FloatArray = npt.NDArray[np.float64]

#: Walks in one chunk (well under a second at 1,000 traditions).
CHUNK = 50
#: Walks of a bank when the caller does not say: 66 share points of 500.
WALKS = 33_000
#: Counts a walk keeps a snapshot for.
KEPT = 12
#: Fewest holders that are looked at.
SMALLEST = 2
#: Counts are drawn up to this many times the largest: the network is weakest at the ends.
_BEYOND = 1.15
#: Pieces whose names start so hold a model learnt from the whole bank.
MODEL = "model-"
#: Walks timed to estimate what a bank will cost.
_TIMED = CHUNK
#: Part of the walks drawn flat; the rest goes to corners and edges, where a flat draw is thin.
_FLAT = 0.5
#: Powers of the densities towards a corner (a share near 1) and an edge (a share near 0).
_CORNER, _EDGE = 7, 6


@dataclass(frozen=True)
class Bank:
    """Summaries of snapshots over the simplex of shares. Arrays are read-only.

    A bank whose model was learnt already is not read from the disk until somebody looks at it.

    Parameters
    ----------
    shared : _Shared
        What the walks are made of.
    pool : Pool
        What reads or makes them.
    """

    shared: _Shared
    pool: Pool

    @cached_property
    def arrays(self) -> dict[str, npt.NDArray[Any]]:
        """All arrays by name; made, or read from the cache, on the first look."""
        keys = list(range(-(-self.shared.walks // CHUNK)))
        parts = list(self.pool.run(_chunk, self.shared, keys, label="walking the shares bank"))
        joined = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
        for array in joined.values():
            array.flags.writeable = False
        if self.entry is not None:
            self.entry.finish()
        return joined

    @property
    def shares(self) -> FloatArray:
        """(W, 3) shares of emergence, contact and inheritance of each walk."""
        return self.arrays["shares"]

    @property
    def prior(self) -> FloatArray:
        """(W,) flat density over the density the walk's shares were drawn from."""
        return self.arrays["prior"]

    @property
    def counts(self) -> npt.NDArray[np.int32]:
        """(W, K) recorded counts each walk was asked for."""
        return self.arrays["counts"]

    @property
    def weight(self) -> FloatArray:
        """(W, K) total weight of the walk for the count, times the count (about even over counts).

        0 where the walk never visited it.
        """
        return self.arrays["weight"]

    @property
    def summaries(self) -> npt.NDArray[np.float32]:
        """(W, K, S) columns :data:`SUMMARIES`; zeros where the weight is 0."""
        return self.arrays["summaries"]

    @property
    def walks(self) -> int:
        """Number of walks, W."""
        return self.shared.walks

    @property
    def largest(self) -> int:
        """Largest count covered."""
        return self.shared.largest

    @property
    def routes(self) -> int:
        """3, or 2 without families."""
        return self.shared.routes

    @property
    def map(self) -> Landscape:
        """What summaries of further holder sets need."""
        return self.shared.map

    @property
    def entry(self) -> Entry | None:
        """Where the bank and its model are kept, if anywhere."""
        return self.shared.entry


@dataclass(frozen=True)
class _Shared:
    tables: ChainTables
    map: Landscape
    seed: int
    largest: int
    ceiling: int
    routes: int
    walks: int
    entry: Entry | None


def build_bank(
    model: SpreadModel,
    *,
    largest: int,
    seed: int,
    pool: Pool | None = None,
    walks: int = WALKS,
    use_cache: bool = True,
) -> Bank:
    """Walk the chain over the whole simplex of shares, or read it from the cache.

    Parameters
    ----------
    model : SpreadModel
        Graph of the surveyed traditions, turnover, families, propensities, recording and reach;
        its ``shares`` are not looked at.
    largest : int
        Largest recorded count to cover: the catalogue's, never a motif's own.
    seed : int
    pool : Pool, optional
        This process's threads by default.
    walks : int
        Number of walks.
    use_cache : bool
        Whether chunks are read from and kept in the cache. What is finished when a run is
        interrupted is not walked again.

    Raises
    ------
    SpreadError
        When fewer than two traditions are left or ``largest`` or ``walks`` cannot be used.
    """
    shared = _prepare(model, largest=largest, seed=seed, walks=walks, use_cache=use_cache)
    bank = Bank(shared, pool or ThreadPool())
    # Learnt already: the model is all that is asked for, and reading the walks takes half a second.
    if shared.entry is None or not shared.entry.holds(MODEL):
        _ = bank.arrays
    return bank


def _prepare(
    model: SpreadModel, *, largest: int, seed: int, walks: int, use_cache: bool
) -> _Shared:
    n = model.graph.n
    if n < 2:
        raise SpreadError(f"Route shares need at least 2 surveyed traditions, got {n}.")
    if walks < 1:
        raise SpreadError(f"`walks` must be a whole number from 1 up, got {walks}.")
    largest = max(int(largest), min(SMALLEST, n))
    cap = cap_for(model, largest)
    place = landscape(model.graph, model.family_codes, model.propensity)
    routes = 3 if place.families else 2
    # Any shares with some inheritance: they make the tables hold the families' members.
    even = (1 / 3, 1 / 3, 1 / 3) if routes == 3 else (0.5, 0.5, 0.0)
    base = dataclasses.replace(model, shares=even)
    entry = None
    if use_cache:
        entry = open_entry(_what_it_depends_on(base, largest, seed, walks, cap))
    ceiling = min(n, int(largest * _BEYOND))
    return _Shared(chain_tables(base, cap), place, seed, largest, ceiling, routes, walks, entry)


def _what_it_depends_on(
    model: SpreadModel, largest: int, seed: int, walks: int, cap: int
) -> dict[str, object]:
    """Everything the bank is made of, for the cache's key."""
    # Every field of the model, also those it may be given later; the shares are the bank's own.
    own = {f.name: getattr(model, f.name) for f in dataclasses.fields(model)}
    del own["graph"], own["family"], own["shares"]
    return {
        **own,
        "traditions": model.graph.n,
        "edges": model.graph.edges,
        "family_codes": model.family_codes,
        "largest": largest,
        "cap": cap,
        "seed": seed,
        "walks": walks,
        "design": (CHUNK, KEPT, SMALLEST, _BEYOND, _FLAT, _CORNER, _EDGE),
        "summaries": SUMMARIES,
    }


def _chunk(shared: _Shared, key: int) -> dict[str, npt.NDArray[Any]]:
    """Give one chunk of walks, from the cache when it is there."""
    name = f"walks-{key:05d}"
    if shared.entry is not None:
        found = shared.entry.read(name)
        if found is not None:
            return found
    size = min(CHUNK, shared.walks - key * CHUNK)
    rng = chunk_generator(shared.seed, Stream.BANK, key, 1)
    words = chunk_words(shared.seed, Stream.BANK, key, 0, draws=size)
    shares, prior = draw_shares(rng, size, shared.routes)
    counts = draw_counts(rng, size, shared.ceiling)
    weight = np.zeros(counts.shape)
    summaries = np.zeros((*counts.shape, len(SUMMARIES)), dtype=np.float32)
    for w in range(size):
        tables = dataclasses.replace(shared.tables, shares=shares[w])
        kept = walk(tables, words[w : w + 1], counts[w])
        seen = kept.weight[0] > 0.0
        # E[weight] falls as 1 / n: the product is about even over counts.
        weight[w] = kept.weight[0] * counts[w]
        sizes = np.where(seen, counts[w], 0).astype(np.int64)
        members = np.empty(int(sizes.sum()), dtype=np.int32)
        unpack_bits(kept.bits[0], sizes, members)
        start = np.concatenate([[0], np.cumsum(sizes[seen])]).astype(np.int64)
        summaries[w, seen] = shared.map.summaries(members, start)
    out: dict[str, npt.NDArray[Any]] = {
        "shares": shares,
        "prior": prior,
        "counts": counts,
        "weight": weight,
        "summaries": summaries,
    }
    if shared.entry is not None:
        shared.entry.write(name, out)
    return out


def draw_shares(rng: np.random.Generator, size: int, routes: int) -> tuple[FloatArray, FloatArray]:
    """Draw shares: half flat, the others towards corners and edges (corners only for two routes).

    Returns
    -------
    shares : (size, 3) float64
    prior : (size,) float64
        Flat density over the density drawn from, at most 2.
    """
    shares = np.zeros((size, 3))
    shares[:, :routes] = rng.dirichlet(np.ones(routes), size)
    kind, route = rng.random(size), rng.integers(0, routes, size)
    corners = (1.0 + _FLAT) / 2.0 if routes == 3 else 1.0
    # Density s**7 towards a corner, (1 - s)**6 towards an edge; what is left is split evenly.
    towards = np.where(
        kind < corners,
        rng.beta(_CORNER + 1, routes - 1, size),
        rng.beta(1, _EDGE + routes - 1, size),
    )
    split = rng.random(size)
    for row in np.flatnonzero(kind >= _FLAT):
        r = route[row]
        left = 1.0 - towards[row]
        shares[row, r] = towards[row]
        shares[row, (r + 1) % routes] = left if routes == 2 else left * split[row]
        if routes == 3:
            shares[row, (r + 2) % routes] = left * (1.0 - split[row])
    shares = np.maximum(shares, 0.0)
    return shares, 1.0 / drawn_density(shares, routes)


def drawn_density(shares: FloatArray, routes: int) -> FloatArray:
    """Density that :func:`draw_shares` draws from, over the flat one; bounded and smooth."""
    s = shares[:, :routes]
    # Dirichlet(8, 1, 1) over the flat density of 2 is 36 s**7; Beta(8, 1) over 1 is 8 s**7.
    corner = (36.0 if routes == 3 else 8.0) * s**_CORNER
    if routes == 2:
        return np.asarray(_FLAT + (1.0 - _FLAT) * corner.mean(axis=1))
    edge = 4.0 * (1.0 - s) ** _EDGE
    rest = (1.0 - _FLAT) / 2.0
    return np.asarray(_FLAT + rest * corner.mean(axis=1) + rest * edge.mean(axis=1))


def draw_counts(rng: np.random.Generator, size: int, largest: int) -> npt.NDArray[np.int32]:
    """(size, K) counts from SMALLEST to ``largest``, one from each of K equal parts of the logs.

    Increasing along each row; all counts when there are no more than K.
    """
    smallest = min(SMALLEST, largest)
    every = largest - smallest + 1
    if every <= KEPT:
        return np.tile(np.arange(smallest, largest + 1, dtype=np.int32), (size, 1))
    log = np.linspace(np.log(smallest - 0.5), np.log(largest + 0.5), KEPT + 1)
    at = log[:-1] + rng.random((size, KEPT)) * np.diff(log)
    counts = np.clip(np.rint(np.exp(at)), smallest, largest).astype(np.int32)
    for k in range(1, KEPT):
        counts[:, k] = np.maximum(counts[:, k], counts[:, k - 1] + 1)
    over = counts[:, -1] > largest
    counts[over] = np.minimum(counts[over], largest - KEPT + 1 + np.arange(KEPT))
    return counts


def estimate_cost(
    model: SpreadModel, *, largest: int, walks: int = WALKS, workers: int = 1, seed: int = 0
) -> float:
    """Seconds a bank will take, from a few timed walks (compilation left out).

    The estimate is of the walks and their summaries; training adds up to half a minute. It takes
    threads to share the work evenly: on a busy machine half as much again has been seen.

    Parameters
    ----------
    model, largest, walks, seed
        As for :func:`build_bank`.
    workers : int
        Threads the walks are shared by.
    """
    shared = _prepare(model, largest=largest, seed=seed, walks=_TIMED, use_cache=False)
    _chunk(dataclasses.replace(shared, walks=1), 0)
    begun = time.thread_time()  # of this thread: others may use the machine
    _chunk(shared, 0)
    return (time.thread_time() - begun) / _TIMED * walks / workers
