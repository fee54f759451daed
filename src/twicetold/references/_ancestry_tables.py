"""Tables the kernels of the ancestry-only world read, and its exact laws."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from twicetold.references._ancestry_kernels import enumerate_joins
from twicetold.references.law import Law

IntArray = npt.NDArray[np.int64]
FloatArray = npt.NDArray[np.float64]
Csr = tuple[IntArray, IntArray]

#: Motifs served by one call of the compiled kernel; touches no number.
BLOCK = 4096


@dataclass(frozen=True)
class OwnTables:
    """What ``count_own`` reads beside."""

    far: IntArray
    holds: npt.NDArray[np.uint64]
    shrink: FloatArray
    parts: tuple[IntArray, IntArray, IntArray, IntArray, FloatArray]


@dataclass(frozen=True)
class Block:
    """Motifs served together, and the tables the kernels read (see their docstrings)."""

    motifs: IntArray
    most: IntArray
    edges: IntArray
    bits: tuple[IntArray, npt.NDArray[np.uint64], IntArray]
    hist_start: IntArray
    own: OwnTables | None = None


def group_members(code: npt.NDArray[np.integer]) -> tuple[IntArray, Csr]:
    """Give codes 0..S-1 for any codes, and the members of each group in order."""
    _, compact = np.unique(code, return_inverse=True)
    member = np.argsort(compact, kind="stable").astype(np.int64)
    start = np.concatenate([[0], np.cumsum(np.bincount(compact))]).astype(np.int64)
    return compact.astype(np.int64), (start, member)


def later_neighbours(n: int, edges: IntArray) -> Csr:
    """Neighbour lists that name each edge once, at its lower end."""
    order = np.lexsort((edges[:, 1], edges[:, 0]))
    indptr = np.concatenate([[0], np.cumsum(np.bincount(edges[:, 0], minlength=n))])
    return indptr.astype(np.int64), np.ascontiguousarray(edges[order, 1])


def blocks_of(
    many: IntArray,
    counts: npt.NDArray[np.int32],
    groups: tuple[IntArray, Csr],
    edges: IntArray,
    *,
    rate: FloatArray,
    holders: tuple[IntArray, IntArray, FloatArray | None],
) -> Iterator[Block]:
    """Cut the motifs ``many`` into blocks, most holders first (their bits then lie together)."""
    code, (start, _) = groups
    order = many[np.argsort(-counts[many].sum(axis=1), kind="stable")]
    for first in range(0, len(order), BLOCK):
        motifs = order[first : first + BLOCK]
        part = counts[motifs]
        most = part.max(axis=0).astype(np.int64)
        live = edges[(most[code[edges[:, 0]]] > 0) & (most[code[edges[:, 1]]] > 0)]
        room = _largest_joins(part, code, live) + 1
        hist_start = np.concatenate([[0], np.cumsum(room)]).astype(np.int64)
        own: OwnTables | None = None
        if holders[2] is not None:
            own = OwnTables(
                far=np.minimum(np.diff(start), 2 * most),
                holds=_bits_of_holders(motifs, holders[0], holders[1], len(rate)),
                shrink=_shrink(rate, holders[1], holders[2]),
                parts=_parts(motifs, code, holders[0], holders[1], holders[2]),
            )
        yield Block(motifs, most, live, _bit_rows(part, most), hist_start, own)


def _largest_joins(part: npt.NDArray[np.int32], code: IntArray, edges: IntArray) -> IntArray:
    """Upper bound on each motif's joins given its counts: min(edges, pairs) by pair of groups."""
    ends = np.sort(code[edges], axis=1)
    pairs, n_edges = np.unique(ends, axis=0, return_counts=True)
    same = pairs[:, 0] == pairs[:, 1] if len(pairs) else np.empty(0, dtype=bool)
    out = np.zeros(len(part), dtype=np.int64)
    for first in range(0, len(part), 256):
        block = part[first : first + 256].astype(np.int64)
        a, b = block[:, pairs[:, 0]], block[:, pairs[:, 1]]
        out[first : first + 256] = np.minimum(np.where(same, a * (a - 1) // 2, a * b), n_edges).sum(
            axis=1
        )
    return out


def _bit_rows(
    part: npt.NDArray[np.int32], caps: IntArray
) -> tuple[IntArray, npt.NDArray[np.uint64], IntArray]:
    """Row of a place in a group's order: one bit for each motif with that many holders there."""
    row_start = np.concatenate([[0], np.cumsum(caps)]).astype(np.int64)
    width = -(-len(part) // 64)
    packed = np.zeros((row_start[-1] + 1, 8 * width), dtype=np.uint8)
    for s in np.flatnonzero(caps):
        has = part[:, s][None, :] > np.arange(caps[s])[:, None]
        bits = np.packbits(has, axis=1, bitorder="little")
        packed[row_start[s] : row_start[s + 1], : bits.shape[1]] = bits
    rows = packed.view("<u8").astype(np.uint64)
    filled = rows != 0
    span = np.where(filled.any(axis=1), width - np.argmax(filled[:, ::-1], axis=1), 0)
    return row_start[:-1], rows, span.astype(np.int64)


def _bits_of_holders(
    motifs: IntArray, indptr: IntArray, indices: IntArray, n: int
) -> npt.NDArray[np.uint64]:
    """(n, W) one bit for each motif the tradition holds."""
    has = np.zeros((n, 64 * -(-len(motifs) // 64)), dtype=bool)
    for k, m in enumerate(motifs):
        has[indices[indptr[m] : indptr[m + 1]], k] = True
    return np.packbits(has, axis=1, bitorder="little").view("<u8").astype(np.uint64)


def _parts(
    motifs: IntArray, code: IntArray, indptr: IntArray, indices: IntArray, own: FloatArray
) -> tuple[IntArray, IntArray, IntArray, IntArray, FloatArray]:
    """Holders of each motif by group, with their own rates."""
    part_start, part_stratum, holder_start = [0], [], [0]
    holder, rates = [], []
    for m in motifs:
        row = slice(indptr[m], indptr[m + 1])
        order = np.argsort(code[indices[row]], kind="stable")
        held = indices[row][order]
        holder.append(held)
        rates.append(own[row][order])
        strata, sizes = np.unique(code[held], return_counts=True)
        part_stratum.append(strata)
        holder_start.extend((holder_start[-1] + np.cumsum(sizes)).tolist())
        part_start.append(part_start[-1] + len(strata))
    return (
        np.array(part_start, dtype=np.int64),
        np.concatenate(part_stratum).astype(np.int64),
        np.array(holder_start, dtype=np.int64),
        np.concatenate(holder).astype(np.int64),
        np.concatenate(rates).astype(np.float64),
    )


def _shrink(rate: FloatArray, indices: IntArray, own: FloatArray) -> FloatArray:
    """Least own rate over common rate at each tradition; 1 where nothing is held."""
    out = np.ones(len(rate))
    np.minimum.at(out, indices, own / rate[indices])
    return out


def log_configurations(counts: npt.NDArray[np.int32], sizes: IntArray) -> npt.NDArray[np.float64]:
    """(M,) log of the number of configurations, prod_f C(N_f, n_f)."""
    from scipy.special import gammaln

    n, big = counts.astype(np.float64), sizes.astype(np.float64)
    logs = gammaln(big + 1) - gammaln(n + 1) - gammaln(big - n + 1)
    return np.asarray(logs.sum(axis=1), dtype=np.float64)


def exact_law(held: IntArray, rate: FloatArray, groups: tuple[IntArray, Csr], later: Csr) -> Law:
    """Law of the joins over every configuration, by the Plackett-Luce chance of each."""
    code, (start, member) = groups
    strata, n_held = np.unique(code[held], return_counts=True)
    fixed = [np.empty(0, dtype=np.int64)]
    sets: list[IntArray] = []
    weights: list[FloatArray] = []
    for s, n in zip(strata, n_held, strict=True):
        whole = member[start[s] : start[s + 1]]
        if n == len(whole):
            fixed.append(whole)
            continue
        places = _subsets(len(whole), int(n))
        sets.append(whole[places])
        weights.append(_prefix_weights(rate[whole], places))
    size = np.array([x.shape[1] for x in sets], dtype=np.int64)
    many = np.array([x.shape[0] for x in sets], dtype=np.int64)
    flat = np.concatenate([x.ravel() for x in sets] or fixed[:1])
    largest = int(min(len(later[1]), len(held) * (len(held) - 1) // 2))
    hist = np.zeros(largest + 1)
    enumerate_joins(
        np.concatenate(fixed),
        later,
        (
            size,
            np.concatenate([[0], np.cumsum(many)]).astype(np.int64),
            np.concatenate([[0], np.cumsum(many * size)]).astype(np.int64)[:-1],
            flat,
            np.concatenate([*weights, np.empty(0)]),
        ),
        hist,
    )
    values = np.flatnonzero(hist).astype(np.int64)
    return frozen_law(values, hist[values], 0, exact=True)


def frozen_law(values: IntArray, weights: FloatArray, draws: int, *, exact: bool) -> Law:
    """Make a law with read-only arrays."""
    values.flags.writeable = False
    weights.flags.writeable = False
    return Law(values, weights, draws, exact=exact, effective=float("nan") if exact else draws)


@lru_cache(maxsize=256)
def _subsets(n: int, k: int) -> IntArray:
    """(C(n, k), k) every k of 0..n-1."""
    flat = itertools.chain.from_iterable(itertools.combinations(range(n), k))
    out = np.fromiter(flat, dtype=np.int64, count=k * math.comb(n, k)).reshape(-1, k)
    out.flags.writeable = False
    return out


def _prefix_weights(rate: FloatArray, places: IntArray) -> FloatArray:
    r"""Chance that each set is the first to ring; all 1 when the rates are equal.

    Up to four places by summing over orders. Beyond, with R the rate of the others together,
    :math:`\int_0^1 \prod_{i \in S} (1 - y^{\lambda_i / R}) dy` (y the chance that none of the
    others has rung), by the double-exponential rule of Takahasi & Mori 1974.
    """
    if np.all(rate == rate[0]):
        return np.ones(len(places))
    picked, total = rate[places], rate.sum()
    k = places.shape[1]
    if k <= 4:
        out = np.zeros(len(places))
        for order in itertools.permutations(range(k)):
            gone = np.zeros(len(places))
            chance = np.ones(len(places))
            for j in order:
                chance = chance * picked[:, j] / (total - gone)
                gone = gone + picked[:, j]
            out += chance
        return out
    u = np.linspace(-3.6, 3.6, 145)
    x = np.pi / 2 * np.sinh(u)
    log_y = -np.logaddexp(0.0, -2 * x)
    step = (u[1] - u[0]) * np.pi / 4 * np.cosh(u) / np.cosh(x) ** 2
    others = total - picked.sum(axis=1)
    inside = np.ones((len(places), len(u)))
    for j in range(k):
        inside *= -np.expm1((picked[:, j] / others)[:, None] * log_y)
    return np.asarray(inside @ step, dtype=np.float64)
