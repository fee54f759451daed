"""Compiled kernels of the spread chain. They take plain arrays and raise nothing.

The readable twin of every kernel is in ``_plain.py``; both read the same random numbers in the
same order and give identical output.
"""
# ruff: noqa: PLR0917 - kernels take plain arrays, one by one

from __future__ import annotations

import numba as nb
import numpy as np

from twicetold._sfc64 import next_below, next_double, next_u64, seed_state

#: Blind tries to hit a boundary edge or a non-holder before the exact scan takes over.
TRIES = 48

#: A de Bruijn number of order 6: multiplied by a power of two, its top six bits name the power.
_DE_BRUIJN = 0x03F79D71B4CB0A89
_POWER_OF = np.zeros(64, dtype=np.int64)
for _k in range(64):
    _POWER_OF[((_DE_BRUIJN << _k) % 2**64) >> 58] = _k


@nb.njit(nogil=True, cache=True)
def _pick_emergence(state, n, m, held, cumulative):  # type: ignore[no-untyped-def]
    """Non-holder drawn in proportion to its propensity (uniformly when all of theirs are 0)."""
    total = cumulative[n - 1]
    for _ in range(TRIES):
        i = np.searchsorted(cumulative, next_double(state) * total, side="right")
        if i < n and held[i] == 0:
            return i
    left = 0.0
    for i in range(n):
        if held[i] == 0:
            left += cumulative[i] - (cumulative[i - 1] if i > 0 else 0.0)
    if left > 0.0:
        target = next_double(state) * left
        last = -1
        for i in range(n):
            if held[i] == 0:
                step = cumulative[i] - (cumulative[i - 1] if i > 0 else 0.0)
                if step > 0.0:
                    last = i
                    if target < step:
                        return i
                    target -= step
        return last
    skip = next_below(state, n - m)
    for i in range(n):
        if held[i] == 0:
            if skip == 0:
                return i
            skip -= 1
    return -1


@nb.njit(nogil=True, cache=True, inline="always")
def two_below(state, a, b):  # type: ignore[no-untyped-def]
    """Two independent uniform numbers below a and b (each < 2**32) from the halves of one word.

    Multiply and shift, each half without bias by rejection (Lemire 2019, TOMACS 29(1)).
    """
    bound_a, bound_b = np.uint64(a), np.uint64(b)
    low = np.uint64(0xFFFFFFFF)
    while True:
        word = next_u64(state)
        first = (word >> np.uint64(32)) * bound_a
        second = (word & low) * bound_b
        if (first & low) < bound_a or (second & low) < bound_b:
            # Seldom (about (a + b) / 2**32): look whether the half must be thrown away.
            if (first & low) < np.uint64(0x100000000) % bound_a:
                continue
            if (second & low) < np.uint64(0x100000000) % bound_b:
                continue
        return np.int64(first >> np.uint64(32)), np.int64(second >> np.uint64(32))


@nb.njit(nogil=True, cache=True, inline="always")
def pick_contact(state, m, order, held, indptr, indices, max_degree, onward):  # type: ignore[no-untyped-def]
    """Non-holder reached across a uniformly chosen boundary edge, then carried onward; -1 if none.

    ``order`` lists the m holders first, then the others. Blind tries pick a tradition of the
    smaller side and one of ``max_degree`` edge numbers and are taken again when that edge does not
    exist or does not end on the other side; so every boundary edge is equally likely. Only when
    they all fail are the boundary edges counted, which also tells whether there are any.
    """
    n = len(order)
    outside = 2 * m > n
    base = m if outside else 0
    size = n - m if outside else m
    far = 1 if outside else 0
    found = np.int64(-1)
    last_edge = len(indices) - 1
    for _ in range(TRIES if size > 0 else 0):
        h, k = two_below(state, size, max_degree)
        j = order[base + h]
        start = indptr[j]
        exists = k < indptr[j + 1] - start
        # Read some edge in any case: one unpredictable branch instead of two.
        v = indices[min(start + k * exists, last_edge)] if last_edge >= 0 else 0
        if exists and held[v] == far:
            found = np.int64(j) if outside else np.int64(v)
            break
    if found < 0:
        boundary = 0
        for h in range(base, base + size):
            j = order[h]
            for k in range(indptr[j], indptr[j + 1]):
                boundary += 1 if held[indices[k]] == far else 0
        if boundary == 0:
            return found
        skip = next_below(state, boundary)
        for h in range(base, base + size):
            j = order[h]
            for k in range(indptr[j], indptr[j + 1]):
                if held[indices[k]] == far:
                    if skip == 0:
                        found = np.int64(j) if outside else np.int64(indices[k])
                    skip -= 1
            if skip < 0:
                break
    if onward > 0.0:
        place = found
        while next_double(state) < onward:
            place = indices[indptr[place] + next_below(state, indptr[place + 1] - indptr[place])]
            if held[place] == 0:
                found = np.int64(place)
    return found


@nb.njit(nogil=True, cache=True)
def walk_kernel(  # type: ignore[no-untyped-def]
    words,
    indptr,
    indices,
    max_degree,
    cumulative,
    family,
    family_start,
    family_members,
    recorded_rate,
    shares,
    onward,
    spill,
    cap,
    up_before,
    up_after,
    scale_before,
    hold,
    power,
    slot_of,
    bits,
    weight,
    gains,
    visits,
):
    """Run one walk per row of ``words`` and keep one weighted visit per asked-for count.

    See :mod:`twicetold.spread.chain` for the chain, the weights and the meaning of the arrays.
    ``bits``, ``weight``, ``gains`` and ``visits`` are filled in place and must come in zeroed.
    """
    n = len(indptr) - 1
    n_words = bits.shape[2]
    state = np.zeros(4, dtype=np.uint64)
    held = np.zeros(n, dtype=np.uint8)
    # Holders stand first in `order`, the others behind them.
    order = np.zeros(n, dtype=np.int32)
    position = np.zeros(n, dtype=np.int32)
    recorded = np.ones(n, dtype=np.uint8)
    current = np.zeros(n_words, dtype=np.uint64)
    kin = len(family_members) > 0
    members = family_members.copy()
    member_position = np.zeros(len(family_members), dtype=np.int32)
    free = np.zeros(max(len(family_start) - 1, 0), dtype=np.int32)
    until_emergence = shares[0]
    until_contact = shares[0] + shares[1] if shares[2] > 0.0 else 2.0
    for w in range(len(words)):
        seed_state(state, words[w, 0], words[w, 1], words[w, 2])
        if len(recorded_rate) > 0:
            for i in range(n):
                recorded[i] = 1 if next_double(state) < recorded_rate[i] else 0
        if kin:
            for k in range(n):
                members[k] = family_members[k]
                member_position[members[k]] = k
            for f in range(len(free)):
                free[f] = family_start[f + 1] - family_start[f]
        for i in range(n):
            order[i] = i
            position[i] = i
        m = 0
        seen = 0
        before = True
        emerged = 0
        carried = 0
        inherited = 0
        below_full = 0
        gained = next_below(state, n)
        while True:
            if gained >= 0:
                # A gain: `gained` becomes a holder.
                held[gained] = 1
                moved = gained
                spot = m
                m += 1
            else:
                # A loss, from a uniformly chosen holder.
                moved = np.int64(order[next_below(state, m)])
                m -= 1
                spot = m
                held[moved] = 0
            swapped = order[spot]
            order[position[moved]] = swapped
            position[swapped] = position[moved]
            order[spot] = moved
            position[moved] = spot
            if recorded[moved] == 1:
                seen += 1 if gained >= 0 else -1
                current[moved >> 6] ^= np.uint64(1) << np.uint64(moved & 63)
            if kin:
                # Non-holders stand first in their family's stretch of `members`.
                f = family[moved]
                if gained >= 0:
                    free[f] -= 1
                there = family_start[f] + free[f]
                if gained < 0:
                    free[f] += 1
                here = member_position[moved]
                other = members[there]
                members[here] = other
                member_position[other] = here
                members[there] = moved
                member_position[moved] = there
            if m == 0:
                break
            if m >= cap:
                before = False
            if m < n:
                below_full += 1
            # The visit: weighted reservoir of size one for the recorded count.
            toss = next_double(state)
            slot = slot_of[seen]
            if slot >= 0:
                if before:
                    visit = power[m - seen] * scale_before[m]
                else:
                    visit = power[cap - min(seen, cap)] * hold[m]
                weight[w, slot] += visit
                if toss * weight[w, slot] < visit:
                    for k in range(n_words):
                        bits[w, slot, k] = current[k]
                    gains[w, slot, 0] = emerged
                    gains[w, slot, 1] = carried
                    gains[w, slot, 2] = inherited
                    visits[w, slot] = below_full
            up = up_before[m] if before else up_after[m]
            if next_double(state) >= up:
                gained = -1
                continue
            route = next_double(state)
            gained = -1
            by_kin = kin and route >= until_contact
            by_contact = not by_kin and route >= until_emergence
            if by_contact:
                gained = pick_contact(state, m, order, held, indptr, indices, max_degree, onward)
                if gained >= 0:
                    carried += 1
                elif spill:
                    by_kin = kin
            if by_kin:
                f = family[order[next_below(state, m)]]
                if free[f] > 0:
                    gained = np.int64(members[family_start[f] + next_below(state, free[f])])
                    inherited += 1
                elif spill and route >= until_contact:
                    gained = pick_contact(
                        state, m, order, held, indptr, indices, max_degree, onward
                    )
                    if gained >= 0:
                        carried += 1
            if gained < 0:
                gained = _pick_emergence(state, n, m, held, cumulative)
                emerged += 1


@nb.njit(nogil=True, cache=True)
def _root(parent, i):  # type: ignore[no-untyped-def]
    while parent[i] != i:
        parent[i] = parent[parent[i]]
        i = parent[i]
    return i


@nb.njit(nogil=True, cache=True)
def summary_kernel(bits, counts, weight, indptr, indices, family, n_families, out):  # type: ignore[no-untyped-def]
    """Fill ``out[walk, count]`` with joins, cross-family joins, clusters, largest and strands.

    Rows of weight 0 (the walk never visited that count) stay 0.
    """
    n = len(indptr) - 1
    n_words = bits.shape[2]
    held = np.zeros(n, dtype=np.uint8)
    holders = np.zeros(n, dtype=np.int32)
    parent = np.zeros(n, dtype=np.int32)
    size = np.zeros(n, dtype=np.int32)
    first = np.full(n_families, -1, dtype=np.int32)
    for w in range(bits.shape[0]):
        for s in range(len(counts)):
            if weight[w, s] <= 0.0:
                continue
            count = 0
            for k in range(n_words):
                word = bits[w, s, k]
                while word != np.uint64(0):
                    rest = word & (word - np.uint64(1))
                    lowest = word ^ rest
                    i = (k << 6) + _POWER_OF[(lowest * np.uint64(_DE_BRUIJN)) >> np.uint64(58)]
                    word = rest
                    holders[count] = i
                    held[i] = 1
                    parent[i] = i
                    size[i] = 1
                    count += 1
            joins = 0
            cross = 0
            clusters = count
            largest = 1
            for h in range(count):
                i = holders[h]
                for k in range(indptr[i], indptr[i + 1]):
                    j = indices[k]
                    if j >= i:
                        break
                    if held[j] == 0:
                        continue
                    joins += 1
                    if family[i] != family[j]:
                        cross += 1
                    a = _root(parent, i)
                    b = _root(parent, j)
                    if a != b:
                        if size[a] < size[b]:
                            a, b = b, a
                        parent[b] = a
                        size[a] += size[b]
                        largest = max(largest, size[a])
                        clusters -= 1
            strands = clusters
            for h in range(count if n_families < n else 0):
                i = holders[h]
                f = family[i]
                if first[f] < 0:
                    first[f] = i
                    continue
                a = _root(parent, i)
                b = _root(parent, first[f])
                if a != b:
                    parent[b] = a
                    strands -= 1
            for h in range(count):
                held[holders[h]] = 0
                first[family[holders[h]]] = -1
            out[w, s, 0] = joins
            out[w, s, 1] = cross
            out[w, s, 2] = clusters
            out[w, s, 3] = largest
            out[w, s, 4] = strands
