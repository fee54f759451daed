"""Readable twins of the compiled kernels: the same numbers read in the same order.

Slow on purpose; used by the parity tests and as the plainest statement of what the kernels do.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import numpy.typing as npt

from twicetold._sfc64 import PlainStream
from twicetold.spread._kernels import TRIES
from twicetold.spread.chain import ChainTables, Snapshots


def pick_emergence(stream: PlainStream, held: set[int], cumulative: list[float]) -> int:
    """Non-holder drawn in proportion to its propensity."""
    n, total = len(cumulative), cumulative[-1]
    for _ in range(TRIES):
        i = int(np.searchsorted(cumulative, stream.double() * total, side="right"))
        if i < n and i not in held:
            return i
    steps = np.diff(cumulative, prepend=0.0)
    rest = [i for i in range(n) if i not in held]
    left = 0.0
    for i in rest:
        left += float(steps[i])
    if left <= 0.0:
        return rest[stream.below(len(rest))]
    target = stream.double() * left
    for i in rest:
        if steps[i] > 0.0 and target < steps[i]:
            return i
        target -= float(steps[i])
    return [i for i in rest if steps[i] > 0.0][-1]


def two_below(stream: PlainStream, a: int, b: int) -> tuple[int, int]:
    """Two uniform numbers below a and b from the halves of one word."""
    while True:
        word = stream.u64()
        first, second = (word >> 32) * a, (word % 2**32) * b
        if first % 2**32 >= 2**32 % a and second % 2**32 >= 2**32 % b:
            return first >> 32, second >> 32


def pick_contact(
    stream: PlainStream, m: int, order: list[int], neighbours: list[list[int]], onward: float
) -> int | None:
    """Non-holder across a uniformly chosen boundary edge, carried on a geometric number of steps.

    ``order`` lists the m holders, then the others. None without boundary edges. Every further step
    goes to a uniformly chosen neighbour; the gain falls to the last non-holder the walk stood on.
    """
    held = set(order[:m])
    outside = 2 * m > len(order)
    side = order[m:] if outside else order[:m]
    most = max(1, *(len(near) for near in neighbours))
    edges = [(j, v) for j in side for v in neighbours[j] if (v in held) == outside]
    chosen = None
    for _ in range(TRIES if side else 0):
        h, k = two_below(stream, len(side), most)
        near = neighbours[side[h]]
        if k < len(near) and (near[k] in held) == outside:
            chosen = (side[h], near[k])
            break
    if chosen is None:
        if not edges:
            return None
        chosen = edges[stream.below(len(edges))]
    found = chosen[0] if outside else chosen[1]
    place = found
    while onward > 0.0 and stream.double() < onward:
        place = neighbours[place][stream.below(len(neighbours[place]))]
        if place not in held:
            found = place
    return found


class _Kin:
    """Who of each family does not hold the motif, in the order the kernel keeps them."""

    def __init__(self, family: list[int], start: list[int], members: list[int]) -> None:
        self.family = family
        self.free = [members[a:b] for a, b in pairwise(start)]
        self.taken: list[list[int]] = [[] for _ in self.free]

    def gain(self, i: int) -> None:
        free, taken = self.free[self.family[i]], self.taken[self.family[i]]
        at = free.index(i)
        free[at] = free[-1]
        free.pop()
        taken.insert(0, i)

    def lose(self, i: int) -> None:
        free, taken = self.free[self.family[i]], self.taken[self.family[i]]
        at = taken.index(i)
        taken[at] = taken[0]
        taken.pop(0)
        free.append(i)


def walk_plain(
    tables: ChainTables, words: npt.NDArray[np.uint64], counts: npt.NDArray[np.int32]
) -> Snapshots:
    """Run one walk per row of ``words``: what :func:`twicetold.spread.chain.walk_chunk` gives."""
    kept = [_one_walk(tables, PlainStream(*map(int, row)), counts) for row in words]
    n_words = (tables.n + 63) // 64
    bits = np.zeros((len(words), len(counts), n_words), dtype=np.uint64)
    weight = np.zeros((len(words), len(counts)))
    gains = np.zeros((len(words), len(counts), 3), dtype=np.int64)
    visits = np.zeros((len(words), len(counts)), dtype=np.int64)
    for w, by_slot in enumerate(kept):
        for slot, (total, held, routes, below_full) in by_slot.items():
            weight[w, slot] = total
            for i in held:
                bits[w, slot, i >> 6] |= np.uint64(1) << np.uint64(i & 63)
            gains[w, slot] = routes
            visits[w, slot] = below_full
    return Snapshots(counts=counts, bits=bits, weight=weight, gains=gains, visits=visits)


_Visit = tuple[float, frozenset[int], tuple[int, ...], int]


def _one_walk(
    t: ChainTables, stream: PlainStream, counts: npt.NDArray[np.int32]
) -> dict[int, _Visit]:
    slot_of = {int(c): k for k, c in enumerate(counts)}
    neighbours = [t.indices[t.indptr[i] : t.indptr[i + 1]].tolist() for i in range(t.n)]
    cumulative = t.cumulative.tolist()
    recorded = set(range(t.n))
    if len(t.recorded_rate):
        recorded = {i for i in range(t.n) if stream.double() < t.recorded_rate[i]}
    with_kin = len(t.family_members) > 0
    kin = _Kin(t.family.tolist(), t.family_start.tolist(), t.family_members.tolist())
    kept: dict[int, _Visit] = {}
    routes, below_full, before = [0, 0, 0], 0, True
    order, m = list(range(t.n)), 1
    _swap(order, stream.below(t.n), 0)
    if with_kin:
        kin.gain(order[0])
    while m:
        before = before and m < t.cap
        below_full += m < t.n
        toss = stream.double()
        seen = recorded & set(order[:m])
        if len(seen) in slot_of:
            slot = slot_of[len(seen)]
            if before:
                visit = t.power[m - len(seen)] * t.scale_before[m]
            else:
                visit = t.power[t.cap - min(len(seen), t.cap)] * t.hold[m]
            total = kept[slot][0] + visit if slot in kept else 0.0 + visit
            if toss * total < visit:
                kept[slot] = (float(total), frozenset(seen), tuple(routes), below_full)
            elif slot in kept:
                kept[slot] = (float(total), *kept[slot][1:])
        if stream.double() >= (t.up_before[m] if before else t.up_after[m]):
            lost = order[stream.below(m)]
            m -= 1
            _swap(order, lost, m)
            if with_kin:
                kin.lose(lost)
            continue
        gained = _gain(t, stream, m, order, kin, neighbours, cumulative, routes)
        _swap(order, gained, m)
        m += 1
        if with_kin:
            kin.gain(gained)
    return kept


def _swap(order: list[int], who: int, spot: int) -> None:
    here = order.index(who)
    order[here], order[spot] = order[spot], order[here]


def _gain(  # noqa: PLR0917
    t: ChainTables,
    stream: PlainStream,
    m: int,
    order: list[int],
    kin: _Kin,
    neighbours: list[list[int]],
    cumulative: list[float],
    routes: list[int],
) -> int:
    """Who gains the motif next; counts the realised route in ``routes``."""
    emergence, contact, inheritance = t.shares
    route = stream.double()
    held = set(order[:m])
    by_kin = inheritance > 0.0 and route >= emergence + contact
    by_contact = not by_kin and route >= emergence

    def told() -> int | None:
        gained = pick_contact(stream, m, order, neighbours, t.onward)
        routes[1] += gained is not None
        return gained

    def inherited() -> int | None:
        free = kin.free[kin.family[order[stream.below(m)]]]
        if not free:
            return None
        routes[2] += 1
        return free[stream.below(len(free))]

    ways = [told] if by_contact else [inherited] if by_kin else []
    if t.spill and by_contact and inheritance > 0.0:
        ways.append(inherited)
    if t.spill and by_kin:
        ways.append(told)
    for way in ways:
        gained = way()
        if gained is not None:
            return gained
    routes[0] += 1
    return pick_emergence(stream, held, cumulative)


def summary_plain(
    held: set[int], neighbours: list[list[int]], family: list[int]
) -> tuple[int, int, int, int, int]:
    """Joins, cross-family joins, clusters, largest cluster and strands of one set of holders."""
    joins = [(i, j) for i in held for j in neighbours[i] if j < i and j in held]
    cross = [(i, j) for i, j in joins if family[i] != family[j]]
    kin = [(i, j) for i in held for j in held if j < i and family[i] == family[j]]
    clusters = _pieces(held, joins)
    strands = _pieces(held, joins + kin)
    largest = max((len(c) for c in clusters), default=0)
    return len(joins), len(cross), len(clusters), largest, len(strands)


def _pieces(held: set[int], links: list[tuple[int, int]]) -> list[set[int]]:
    pieces = [{i} for i in sorted(held)]
    for i, j in links:
        with_i = next(p for p in pieces if i in p)
        with_j = next(p for p in pieces if j in p)
        if with_i is not with_j:
            with_i |= with_j
            pieces.remove(with_j)
    return pieces
