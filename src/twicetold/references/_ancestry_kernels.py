"""Compiled draws of the ancestry-only world; `_ancestry_plain.py` says the same readably.

A draw rings one exponential clock per tradition (one uniform number per tradition, in order,
whichever motifs are asked for). Inside a stratum the holders of a motif are the first to ring, so
one draw serves every motif.

``count_shared`` serves motifs that share their rates, all at once: the traditions at place r of a
stratum's order are held by exactly those motifs with more than r holders in it. The joins of all
motifs are counted together, see ``_ancestry_joins.py``.

``count_own`` serves motifs that bring rates of their own for their holders: the same count, then
again one by one for the few motifs whose holders that changes.
"""

# ruff: noqa: PLR0917 - kernels take plain arrays, one by one

from __future__ import annotations

import math

import numba as nb
import numpy as np

from twicetold._sfc64 import next_double, seed_state
from twicetold.references._ancestry_joins import count_all, workspace

#: Up to this many places an order is kept by insertion; beyond, the stratum is sorted.
_INSERT = 48


@nb.njit(nogil=True, cache=True)
def _first(key, first, last, cap, member, best):  # type: ignore[no-untyped-def]
    """Put the ``cap`` members of ``member[first:last]`` that ring first into ``best``, in order."""
    size = last - first
    if cap > _INSERT:
        order = np.argsort(key[first:last])
        for r in range(cap):
            best[r] = member[first + order[r]]
        return
    filled = 0
    worst = np.inf
    place = np.empty(cap + 1, dtype=np.int64)
    for i in range(size):
        k = key[first + i]
        if filled == cap and k >= worst:
            continue
        j = filled if filled < cap else cap - 1
        while j > 0 and key[first + place[j - 1]] > k:
            place[j] = place[j - 1]
            j -= 1
        place[j] = i
        if filled < cap:
            filled += 1
        worst = key[first + place[filled - 1]]
    for r in range(cap):
        best[r] = member[first + place[r]]


@nb.njit(nogil=True, cache=True)
def _ring(uniform, rate):  # type: ignore[no-untyped-def]
    """Time at which a clock of this rate rings; never for rate 0."""
    if rate <= 0.0:
        return np.inf
    return -math.log1p(-uniform) / rate


@nb.njit(nogil=True, cache=True)
def _clocks(word, rate, strata, caps, uniform, key):  # type: ignore[no-untyped-def]
    """Fill ``uniform`` (by tradition) and ``key`` (ringing times, by place in ``member``)."""
    start, member = strata
    state = np.empty(4, dtype=np.uint64)
    seed_state(state, word[0], word[1], word[2])
    for v in range(len(rate)):
        uniform[v] = next_double(state)
    for s in range(len(start) - 1):
        if caps[s] == 0:
            continue
        for i in range(start[s], start[s + 1]):
            key[i] = _ring(uniform[member[i]], rate[member[i]])


@nb.njit(nogil=True, cache=True)
def count_shared(words, rate, strata, caps, edges, table, hist):  # type: ignore[no-untyped-def]
    """Add one count per draw and motif to ``hist``.

    Parameters
    ----------
    words : (D, 3) uint64
    rate : (n,) float64
    strata : (start (S + 1,), member (n,)) int64
    caps : (S,) int64, most holders any motif has in the stratum
    edges : (A, 2) int64, both ends in strata with caps > 0
    table : (row_start (S,), bits (R + 1, W) uint64, span (R + 1,), hist_start (M + 1,))
        ``bits[row_start[s] + r]``: the motifs with more than r holders in s; the last row is
        empty; ``span`` is the number of leading words that hold any bit.
    hist : (hist_start[M],) int64
    """
    start, member = strata
    row_start, bits, span, hist_start = table
    n = len(rate)
    work = workspace(len(edges), bits.shape[1])
    joins = np.empty(len(hist_start) - 1, dtype=np.int64)
    uniform, key = np.empty(n), np.empty(n)
    best = np.empty(n, dtype=np.int64)
    row = np.empty(n, dtype=np.int64)
    for d in range(len(words)):
        _clocks(words[d], rate, strata, caps, uniform, key)
        row[:] = bits.shape[0] - 1
        for s in range(len(start) - 1):
            if caps[s] > 0:
                _first(key, start[s], start[s + 1], caps[s], member, best)
                for r in range(caps[s]):
                    row[best[r]] = row_start[s] + r
        count_all(row, edges, bits, span, work, joins)
        for m in range(len(joins)):
            hist[hist_start[m] + joins[m]] += 1


@nb.njit(nogil=True, cache=True)
def _sort_pairs(time, holder, first, size, who):  # type: ignore[no-untyped-def]
    """Sort ``time[:size]`` and put ``holder[first : first + size]`` into ``who`` in that order."""
    if size > _INSERT:
        order = np.argsort(time[:size])
        time[:size] = time[:size][order]
        for i in range(size):
            who[i] = holder[first + order[i]]
        return
    for i in range(size):
        t = time[i]
        j = i
        while j > 0 and time[j - 1] > t:
            time[j] = time[j - 1]
            who[j] = who[j - 1]
            j -= 1
        time[j] = t
        who[j] = holder[first + i]


@nb.njit(nogil=True, cache=True)
def _merge(part, common, own, buffers, chosen):  # type: ignore[no-untyped-def]
    """Put into ``chosen`` the first to ring when the motif's holders ring at their own rates."""
    holder, first, size = part
    order, when, begin, stop = common
    time, who, mine, stamp = buffers
    for i in range(size):
        mine[holder[first + i]] = stamp
        time[i] = own[first + i]
    _sort_pairs(time, holder, first, size, who)
    i, other = 0, begin
    for k in range(size):
        while other < stop and mine[order[other]] == stamp:
            other += 1
        if other < stop and (i == size or when[other] < time[i]):
            chosen[k] = order[other]
            other += 1
        else:
            chosen[k] = who[i]
            i += 1


@nb.njit(nogil=True, cache=True)
def _count_merged(m, common, strata, later, motifs, buffers):  # type: ignore[no-untyped-def]
    """Joins of one motif whose holders ring at their own rates."""
    order, wait, when, late, caps, holds = common
    start, _ = strata
    indptr, indices = later
    part_start, part_stratum, holder_start, holder, own = motifs
    time, who, theirs, chosen, mine, held, stamp = buffers
    k = 0
    for q in range(part_start[m], part_start[m + 1]):
        s = part_stratum[q]
        first = holder_start[q]
        size = holder_start[q + 1] - first
        begin = start[s]
        apart = False
        if begin + size < start[s + 1]:
            limit = when[begin + size]
            for i in range(size):
                v = order[begin + i]
                chosen[k + i] = v
                if late[begin + i] > limit:
                    apart |= (holds[v, m >> 6] >> np.uint64(m & 63)) & np.uint64(1) != 0
        else:
            for i in range(size):
                chosen[k + i] = order[begin + i]
        if apart:
            for i in range(first, first + size):
                theirs[i] = wait[holder[i]] / own[i]
            _merge(
                (holder, first, size),
                (order, when, begin, begin + caps[s]),
                theirs,
                (time, who, mine, stamp),
                chosen[k:],
            )
        k += size
    for i in range(k):
        held[chosen[i]] = stamp
    joins = 0
    for i in range(k):
        v = chosen[i]
        for e in range(indptr[v], indptr[v + 1]):
            if held[indices[e]] == stamp:
                joins += 1
    return joins


@nb.njit(nogil=True, cache=True)
def count_own(words, rate, strata, caps, graph, table, motifs, hist):  # type: ignore[no-untyped-def]
    """Add one count per draw and motif to ``hist``; holders ring at their motif's own rates.

    All motifs are counted as if they shared the rates. That count stands unless, in some group,
    one of the first to ring is a holder of the motif whose own, slower clock rings after the next
    in line; those motifs are found with their bits, and counted again one by one.

    Parameters
    ----------
    words, rate, strata, hist
        As in :func:`count_shared`.
    caps : (most (S,), far (S,)) int64
        Most holders any motif has in the stratum; min(size of the stratum, twice that).
    graph : (edges (A, 2), indptr (n + 1,), indices (any,)) int64
        The edges as in :func:`count_shared`; neighbours with a higher number.
    table : (row_start, bits, span, holds (n, W) uint64, shrink (n,), hist_start)
        As in :func:`count_shared`; ``holds``: the motifs a tradition holds; ``shrink``: its least
        own rate over its common rate, at most 1.
    motifs : (part_start (M + 1,), part_stratum (P,), holder_start (P + 1,), holder (H,), own (H,))
        The motif's holders by stratum ("parts") and their own rates.
    """
    start, member = strata
    most, far = caps
    edges, indptr, indices = graph
    row_start, bits, span, holds, shrink, hist_start = table
    n, width = len(rate), bits.shape[1]
    work = workspace(len(edges), width)
    joins = np.empty(len(hist_start) - 1, dtype=np.int64)
    apart = np.empty(width, dtype=np.uint64)
    uniform, key, wait = np.empty(n), np.empty(n), np.empty(n)
    when, late = np.empty(n), np.empty(n)
    order, row = np.empty(n, dtype=np.int64), np.empty(n, dtype=np.int64)
    time, who = np.empty(n), np.empty(n, dtype=np.int64)
    theirs, chosen = np.empty(len(motifs[3])), np.empty(n, dtype=np.int64)
    held, mine = np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.int64)
    stamp = 0
    for d in range(len(words)):
        _clocks(words[d], rate, strata, most, uniform, key)
        row[:] = bits.shape[0] - 1
        apart[:] = 0
        for s in range(len(start) - 1):
            if most[s] == 0:
                continue
            begin = start[s]
            for i in range(begin, start[s + 1]):
                wait[member[i]] = _ring(uniform[member[i]], 1.0)
            _first(key, begin, start[s + 1], far[s], member, order[begin:])
            for r in range(far[s]):
                when[begin + r] = wait[order[begin + r]] / rate[order[begin + r]]
            for r in range(most[s]):
                v = order[begin + r]
                row[v] = row_start[s] + r
                last = when[begin + r] / shrink[v]
                late[begin + r] = last
                # With n holders here, the next in line is at place n: from r + 1 on.
                for n_held in range(r + 1, min(most[s], far[s] - 1) + 1):
                    if last <= when[begin + n_held]:
                        break
                    has = row_start[s] + n_held - 1
                    more = has + 1 if n_held < most[s] else bits.shape[0] - 1
                    for w in range(span[has]):
                        apart[w] |= bits[has, w] & ~bits[more, w] & holds[v, w]
        count_all(row, edges, bits, span, work, joins)
        for w in range(width):
            left = apart[w]
            b = 0
            while left != 0:
                if left & np.uint64(1):
                    stamp += 1
                    joins[64 * w + b] = _count_merged(
                        64 * w + b,
                        (order, wait, when, late, far, holds),
                        strata,
                        (indptr, indices),
                        motifs,
                        (time, who, theirs, chosen, mine, held, stamp),
                    )
                left >>= np.uint64(1)
                b += 1
        for m in range(len(joins)):
            hist[hist_start[m] + joins[m]] += 1


@nb.njit(nogil=True, cache=True)
def enumerate_joins(fixed, later, groups, hist):  # type: ignore[no-untyped-def]
    """Add the weight of every configuration to ``hist`` by its joins.

    Parameters
    ----------
    fixed : (F,) int64
        Holders that never move.
    later : (indptr, indices)
        As in :func:`count_own`.
    groups : (size (G,), set_start (G + 1,), member_start (G,), member (K,), weight (sum of sets,))
        Group g has sets ``set_start[g]:set_start[g + 1]`` of ``size[g]`` members each.
    hist : (largest joins + 1,) float64
    """
    indptr, indices = later
    size, set_start, member_start, member, weight = groups
    n_groups = len(size)
    held = np.zeros(len(indptr) - 1, dtype=np.int64)
    total = len(fixed)
    for g in range(n_groups):
        total += size[g]
    chosen = np.empty(total, dtype=np.int64)
    digit = np.zeros(n_groups, dtype=np.int64)
    stamp = 0
    while True:
        stamp += 1
        k = 0
        for i in range(len(fixed)):
            chosen[k] = fixed[i]
            k += 1
        w = 1.0
        for g in range(n_groups):
            w *= weight[set_start[g] + digit[g]]
            at = member_start[g] + digit[g] * size[g]
            for i in range(size[g]):
                chosen[k] = member[at + i]
                k += 1
        for i in range(k):
            held[chosen[i]] = stamp
        joins = 0
        for i in range(k):
            for e in range(indptr[chosen[i]], indptr[chosen[i] + 1]):
                if held[indices[e]] == stamp:
                    joins += 1
        hist[joins] += w
        g = 0
        while g < n_groups:
            digit[g] += 1
            if digit[g] < set_start[g + 1] - set_start[g]:
                break
            digit[g] = 0
            g += 1
        if g == n_groups:
            return
