"""Compiled loops of the emergence-only world. Arrays in, arrays out; nothing is raised.

One draw costs one sweep of the graph and serves every number of holders at once. The readable
twins are in ``_plain``; the sweep itself is ``statistics._kernels.sweep``.
"""
# ruff: noqa: PLR0917 (kernels take arrays by position)

from __future__ import annotations

import numba as nb
import numpy as np

from twicetold._sfc64 import DOUBLE, seed_state, step
from twicetold.statistics._kernels import sweep

#: Candidates drawn between two looks at the table. Part of what a seed means: never change it.
BATCH = 16
#: Candidates wasted per tradition still in the table before it is made again. As above.
WASTE = 2


@nb.njit(nogil=True, cache=True)
def alias_table(weights, items, size, share, other, stack):  # type: ignore[no-untyped-def]
    """Fill an alias table over ``items[:size]``.

    Column k yields ``items[k]`` when the coin falls below ``share[k]`` and ``other[k]`` else
    (Walker 1977; filled as by Vose 1991). ``stack`` is scratch of the same length.
    """
    total = 0.0
    for k in range(size):
        total += weights[items[k]]
    scale = size / total
    light = 0
    heavy = size
    for k in range(size):
        share[k] = weights[items[k]] * scale
        other[k] = items[k]
        if share[k] < 1.0:
            stack[light] = k
            light += 1
        else:
            heavy -= 1
            stack[heavy] = k
    while light > 0 and heavy < size:
        light -= 1
        small = stack[light]
        large = stack[heavy]
        other[small] = items[large]
        share[large] -= 1.0 - share[small]
        if share[large] < 1.0:
            heavy += 1
            stack[light] = large
            light += 1
    # What is left over is a full column, up to rounding.
    for k in range(light):
        share[stack[k]] = 1.0
    for k in range(heavy, size):
        share[stack[k]] = 1.0


@nb.njit(nogil=True, cache=True)
def draw_orders(words, weights, items0, share0, other0, orders):  # type: ignore[no-untyped-def]
    """Draw Plackett-Luce prefixes: each next tradition in proportion to weight among the rest.

    Candidates come from the alias table, a batch at a time; those already drawn are passed over.
    Once a table has wasted more candidates than making a new one would cost, it is made again over
    the traditions not yet drawn. Both steps look only at what was drawn so far, so a longer prefix
    begins with the shorter one; and whatever the past, the next tradition to be kept is one of the
    rest in proportion to its weight.

    Parameters
    ----------
    words : (draws, 3) uint64
        Seeding words of each draw.
    weights : (N,) float64
        Propensities, > 0 for every tradition in ``items0``.
    items0, share0, other0 : (P,) int32, float64, int32
        Alias table over the P traditions with positive propensity.
    orders : (draws, length) int32
        Filled; length <= P.
    """
    count = items0.shape[0]
    length = orders.shape[1]
    items1 = np.empty(count, dtype=np.int32)
    share1 = np.empty(count, dtype=np.float64)
    other1 = np.empty(count, dtype=np.int32)
    stack = np.empty(count, dtype=np.int32)
    order = np.empty(count + 1, dtype=np.int32)
    batch = np.empty(BATCH, dtype=np.int32)
    taken = np.full(weights.shape[0], -1, dtype=np.int32)
    state = np.zeros(4, dtype=np.uint64)
    for d in range(orders.shape[0]):
        seed_state(state, words[d, 0], words[d, 1], words[d, 2])
        s0, s1, s2, s3 = state[0], state[1], state[2], state[3]
        items = items0
        share = share0
        other = other0
        size = count
        wasted = 0
        m = 0
        while m < length:
            if wasted > WASTE * size:
                kept = 0
                for k in range(size):
                    if taken[items[k]] != d:
                        items1[kept] = items[k]
                        kept += 1
                size = kept
                alias_table(weights, items1, size, share1, other1, stack)
                items = items1
                share = share1
                other = other1
                wasted = 0
            for j in range(BATCH):
                u, s0, s1, s2, s3 = step(s0, s1, s2, s3)
                x = np.float64(np.int64(u >> np.uint64(11))) * (size * DOUBLE)
                k = min(np.int64(x), size - 1)
                batch[j] = items[k] if x - k < share[k] else other[k]
            before = m
            for j in range(BATCH):
                # Written always, kept if new: no branch to mispredict.
                v = batch[j]
                order[m] = v
                m += 1 if taken[v] != d else 0
                taken[v] = d
            wasted += BATCH - (m - before)
        for j in range(length):
            orders[d, j] = order[j]


@nb.njit(nogil=True, cache=True)
def sweep_orders(orders, column, indptr, indices, family, work, kin, first, out, scores):  # type: ignore[no-untyped-def]
    """Sweep each order and note its statistics where ``column`` asks for them.

    ``out`` is (draws, K, 6) int32 and ``scores`` (draws, K) int64; ``first`` is the first epoch
    mark not yet used with the scratch arrays.
    """
    flat = orders.reshape(-1)
    length = orders.shape[1]
    for d in range(orders.shape[0]):
        sweep(
            flat,
            d * length,
            (d + 1) * length,
            column,
            indptr,
            indices,
            family,
            work,
            kin,
            np.int32(first + d),
            out[d],
            scores[d],
        )


@nb.njit(nogil=True, cache=True)
def extents(values, low, high):  # type: ignore[no-untyped-def]
    """Widen ``low`` and ``high`` (R,) int32 to hold every row of ``values`` (B, R) int32."""
    for b in range(values.shape[0]):
        for r in range(values.shape[1]):
            low[r] = min(low[r], values[b, r])
            high[r] = max(high[r], values[b, r])


@nb.njit(nogil=True, cache=True)
def tally(values, low, start, counts):  # type: ignore[no-untyped-def]
    """Count values: row r of the histogram begins at ``counts[start[r]]`` with value ``low[r]``."""
    for b in range(values.shape[0]):
        for r in range(values.shape[1]):
            counts[start[r] + values[b, r] - low[r]] += 1


@nb.njit(nogil=True, cache=True)
def pour(low, start, counts, new_low, new_start, new_counts):  # type: ignore[no-untyped-def]
    """Add ragged histograms into wider ones."""
    for r in range(low.shape[0]):
        shift = new_start[r] + low[r] - new_low[r] - start[r]
        for k in range(start[r], start[r + 1]):
            if counts[k] != 0:
                new_counts[k + shift] += counts[k]


@nb.njit(nogil=True, cache=True)
def score_tails(scores, start, thresholds, shift, first, reached, hits, sums):  # type: ignore[no-untyped-def]
    """Count scores by the largest threshold they reach, and sum them.

    ``thresholds[start[c]:start[c + 1]]`` increase. A score is looked up through buckets of width
    2**shift[c] from the lowest threshold: ``reached[first[c] + b]`` thresholds lie at or below the
    lower end of bucket b, and the few left are tried in turn, so the time hardly grows with the
    number of thresholds. ``hits`` (T,) int64 and ``sums`` (K,) int64 are added to. A tail count is
    the sum of the hits of its threshold and all above it.
    """
    for b in range(scores.shape[0]):
        for c in range(scores.shape[1]):
            value = scores[b, c]
            sums[c] += value
            low = start[c]
            end = start[c + 1]
            if low == end or value < thresholds[low]:
                continue
            if value >= thresholds[end - 1]:
                hits[end - 1] += 1
                continue
            bucket = (value - thresholds[low]) >> shift[c]
            low += reached[first[c] + bucket]
            while thresholds[low] <= value:
                low += 1
            hits[low - 1] += 1


@nb.njit(nogil=True, cache=True)
def combinations(current, n_items, rows):  # type: ignore[no-untyped-def]
    """Write the next subsets (as positions, lexicographic) into ``rows``; give how many.

    ``current`` (n,) int32 is the next subset to write; ``current[0]`` < 0 when none is left.
    """
    n = current.shape[0]
    written = 0
    while written < rows.shape[0] and current[0] >= 0:
        for j in range(n):
            rows[written, j] = current[j]
        written += 1
        i = n - 1
        while i >= 0 and current[i] == n_items - n + i:
            i -= 1
        if i < 0:
            current[0] = -1
            break
        current[i] += 1
        for j in range(i + 1, n):
            current[j] = current[j - 1] + 1
    return written


@nb.njit(nogil=True, cache=True)
def subset_chances(weights, outside, chance):  # type: ignore[no-untyped-def]
    """Chance of each subset of ``weights`` (k,) as a Plackett-Luce prefix, from the smaller ones.

    P(S) = sum over i in S of P(S without i) w_i / (outside + weight not in S or i itself);
    ``chance`` (2**k,) float64 is filled, subset bits from the lowest. ``outside`` is the weight of
    all traditions beyond these k.
    """
    k = weights.shape[0]
    chance[0] = 1.0
    for mask in range(1, chance.shape[0]):
        rest = outside
        for i in range(k):
            if not (mask >> i) & 1:
                rest += weights[i]
        total = 0.0
        for i in range(k):
            if (mask >> i) & 1:
                total += chance[mask ^ (1 << i)] * weights[i] / (rest + weights[i])
        chance[mask] = total


@nb.njit(nogil=True, cache=True)
def row_chances(weights, rows, out):  # type: ignore[no-untyped-def]
    """Chance of each subset in ``rows`` (S, n) of positions among many weights (n small)."""
    n = rows.shape[1]
    own = np.empty(n, dtype=np.float64)
    chance = np.empty(1 << n, dtype=np.float64)
    taken = np.full(weights.shape[0], -1, dtype=np.int32)
    for s in range(rows.shape[0]):
        for j in range(n):
            own[j] = weights[rows[s, j]]
            taken[rows[s, j]] = s
        # Summed afresh: a difference would lose the small weights beside large ones.
        outside = 0.0
        for i in range(weights.shape[0]):
            if taken[i] != s:
                outside += weights[i]
        subset_chances(own, outside, chance)
        out[s] = chance[(1 << n) - 1]
