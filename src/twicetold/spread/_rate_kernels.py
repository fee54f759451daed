"""Compiled kernel of the rate-based contact process; its readable twin is ``_rate_plain.py``."""
# ruff: noqa: PLR0917 - kernels take plain arrays, one by one

from __future__ import annotations

import numba as nb
import numpy as np

from twicetold._sfc64 import next_below, next_double, seed_state
from twicetold.spread._kernels import pick_contact


@nb.njit(nogil=True, cache=True)
def _boundary_change(i, held, indptr, indices):  # type: ignore[no-untyped-def]
    """Holder-non-holder edges gained when i, whose own flag is not counted, becomes a holder."""
    change = np.int64(0)
    for k in range(indptr[i], indptr[i + 1]):
        change += 1 - 2 * np.int64(held[indices[k]])
    return change


@nb.njit(nogil=True, cache=True)
def rate_kernel(  # type: ignore[no-untyped-def]
    words,
    indptr,
    indices,
    max_degree,
    contact,
    spontaneous,
    loss,
    longest,
    slot_of,
    bits,
    weight,
    time_by_count,
    boundary_time,
    cut,
):
    """Run one excursion from the empty map back to it per row of ``words``.

    Between events the process waits 1 / (total rate) on average, and that average is what a visit
    weighs. ``bits`` and ``weight`` keep one visit per asked-for count as in the spread chain;
    ``time_by_count`` and ``boundary_time`` ((excursions, N + 1) and (excursions,)) hold the whole
    excursion's time by count and its integral of the number of holder-non-holder edges. ``cut``
    marks excursions stopped after ``longest`` events.
    """
    n = len(indptr) - 1
    n_words = bits.shape[2]
    state = np.zeros(4, dtype=np.uint64)
    held = np.zeros(n, dtype=np.uint8)
    # Holders stand first in `order`, the others behind them.
    order = np.zeros(n, dtype=np.int32)
    position = np.zeros(n, dtype=np.int32)
    current = np.zeros(n_words, dtype=np.uint64)
    for w in range(len(words)):
        seed_state(state, words[w, 0], words[w, 1], words[w, 2])
        for i in range(n):
            order[i] = i
            position[i] = i
            held[i] = 0
        for k in range(n_words):
            current[k] = np.uint64(0)
        m = 0
        boundary = 0
        events = 0
        moved = np.int64(next_below(state, n))
        gain = True
        while True:
            here = position[moved]
            if gain:
                boundary += _boundary_change(moved, held, indptr, indices)
                held[moved] = 1
                there = m
                m += 1
            else:
                m -= 1
                there = m
                held[moved] = 0
                boundary -= _boundary_change(moved, held, indptr, indices)
            other = order[there]
            order[here] = other
            position[other] = here
            order[there] = moved
            position[moved] = there
            current[moved >> 6] ^= np.uint64(1) << np.uint64(moved & 63)
            if m == 0:
                break
            events += 1
            if events > longest:
                cut[w] = 1
                break
            by_contact = contact * boundary
            by_itself = spontaneous * (n - m)
            total = by_contact + by_itself + loss * m
            wait = 1.0 / total
            time_by_count[w, m] += wait
            boundary_time[w] += wait * boundary
            toss = next_double(state)
            slot = slot_of[m]
            if slot >= 0:
                weight[w, slot] += wait
                if toss * weight[w, slot] < wait:
                    for k in range(n_words):
                        bits[w, slot, k] = current[k]
            which = next_double(state) * total
            if which < by_contact:
                gain = True
                moved = np.int64(
                    pick_contact(state, m, order, held, indptr, indices, max_degree, 0.0)
                )
            elif which < by_contact + by_itself:
                gain = True
                moved = np.int64(order[m + next_below(state, n - m)])
            else:
                gain = False
                moved = np.int64(order[next_below(state, m)])
