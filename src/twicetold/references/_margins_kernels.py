"""Compiled trades that keep both margins of a 0/1 table; `_margins_plain.py` says them readably."""
# ruff: noqa: PLR0917, PLR1714, SIM109, SIM110 - kernels take plain arrays, and are written for numba

from __future__ import annotations

import numba as nb
import numpy as np

from twicetold._sfc64 import next_below, seed_state

#: Rows of about the same size are shuffled in runs of this many before they are paired.
NEAR = 16


@nb.njit(nogil=True, cache=True)
def _trade(a, b, table, allowed, state, work):  # type: ignore[no-untyped-def]
    """Deal what only one of two rows holds, and both may hold, afresh between the two.

    ``work`` is (stamp (1,), marks (2, n), slot (2 n,), pool (2 n,)) int64.
    """
    indptr, indices, set_of = table
    stamp, marks, slot, pool = work
    stamp[0] += 1
    now = stamp[0]
    for i in range(indptr[a], indptr[a + 1]):
        marks[0, indices[i]] = now
    for i in range(indptr[b], indptr[b + 1]):
        marks[1, indices[i]] = now
    k = 0
    for i in range(indptr[a], indptr[a + 1]):
        v = indices[i]
        if marks[1, v] != now and allowed[set_of[b], v]:
            slot[k] = i
            pool[k] = v
            k += 1
    mine = k
    for i in range(indptr[b], indptr[b + 1]):
        v = indices[i]
        if marks[0, v] != now and allowed[set_of[a], v]:
            slot[k] = i
            pool[k] = v
            k += 1
    if mine == 0 or mine == k:
        return
    # Choosing the smaller share at random chooses the other one too.
    if 2 * mine <= k:
        for j in range(mine):
            r = j + next_below(state, k - j)
            pool[j], pool[r] = pool[r], pool[j]
    else:
        for j in range(k - 1, mine - 1, -1):
            r = next_below(state, j + 1)
            pool[j], pool[r] = pool[r], pool[j]
    for j in range(k):
        indices[slot[j]] = pool[j]


@nb.njit(nogil=True, cache=True)
def _holds(row, v, indptr, indices):  # type: ignore[no-untyped-def]
    for i in range(indptr[row], indptr[row + 1]):
        if indices[i] == v:
            return True
    return False


@nb.njit(nogil=True, cache=True)
def _rotate(table, allowed, state):  # type: ignore[no-untyped-def]
    """Try to pass one column from row a to b, another from b to c, a third from c to a."""
    indptr, indices, set_of = table
    m = len(indptr) - 1
    a, b, c = next_below(state, m), next_below(state, m), next_below(state, m)
    if a == b or b == c or a == c:
        return
    if indptr[a] == indptr[a + 1] or indptr[b] == indptr[b + 1] or indptr[c] == indptr[c + 1]:
        return
    i = indptr[a] + next_below(state, indptr[a + 1] - indptr[a])
    j = indptr[b] + next_below(state, indptr[b + 1] - indptr[b])
    k = indptr[c] + next_below(state, indptr[c + 1] - indptr[c])
    x, y, z = indices[i], indices[j], indices[k]
    if not (allowed[set_of[b], x] and allowed[set_of[c], y] and allowed[set_of[a], z]):
        return
    if _holds(b, x, indptr, indices) or _holds(c, y, indptr, indices):
        return
    if _holds(a, z, indptr, indices):
        return
    indices[i] = z
    indices[j] = x
    indices[k] = y


@nb.njit(nogil=True, cache=True)
def _shuffle(order, first, last, state):  # type: ignore[no-untyped-def]
    for j in range(first, last - 1):
        r = j + next_below(state, last - j)
        order[j], order[r] = order[r], order[j]


@nb.njit(nogil=True, cache=True)
def run_sweeps(word, table, by_size, allowed, sweeps, backward):  # type: ignore[no-untyped-def]
    """Change ``indices`` of the table in place by that many sweeps.

    A sweep pairs the rows and trades within each pair: at random, or (every other time, by the
    toss of a coin) each with a row of about its own size, since long rows trade little with short
    ones. Sizes never change, so neither does the chance of a pairing. Where rows differ in what
    they may hold, as many rotations as rows follow (or, ``backward``, come first: the reversed
    chain).

    Parameters
    ----------
    word : (3,) uint64
    table : (indptr (M + 1,), indices (H,), set_of (M,)) int64
    by_size : (M,) int64, rows in order of size
    allowed : (K, n) bool
    sweeps : int
    backward : bool
    """
    m, n = len(by_size), allowed.shape[1]
    state = np.empty(4, dtype=np.uint64)
    seed_state(state, word[0], word[1], word[2])
    work = (
        np.zeros(1, dtype=np.int64),
        np.zeros((2, n), dtype=np.int64),
        np.empty(2 * n, dtype=np.int64),
        np.empty(2 * n, dtype=np.int64),
    )
    order = np.empty(m, dtype=np.int64)
    rotations = m if len(allowed) > 1 else 0
    for _ in range(sweeps):
        if backward:
            for _ in range(rotations):
                _rotate(table, allowed, state)
        order[:] = by_size
        if next_below(state, 2) == 0:
            _shuffle(order, 0, m, state)
        else:
            first = 0
            last = min(m, 1 + next_below(state, NEAR))
            while first < m:
                _shuffle(order, first, last, state)
                first, last = last, min(m, last + NEAR)
        for j in range(0, m - 1, 2):
            _trade(order[j], order[j + 1], table, allowed, state, work)
        if not backward:
            for _ in range(rotations):
                _rotate(table, allowed, state)


@nb.njit(nogil=True, cache=True)
def cells_in_place(indptr, indices, first, n, out):  # type: ignore[no-untyped-def]
    """Count by row the held cells that are held in ``first`` too."""
    mark = np.full(n, -1, dtype=np.int64)
    for m in range(len(indptr) - 1):
        for i in range(indptr[m], indptr[m + 1]):
            mark[first[i]] = m
        out[m] = 0
        for i in range(indptr[m], indptr[m + 1]):
            out[m] += mark[indices[i]] == m
