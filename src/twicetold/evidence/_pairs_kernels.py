"""Compiled laws of how many traditions two motifs share; `_pairs_plain.py` says them readably."""
# ruff: noqa: PLR0917 - kernels take plain arrays, one by one

from __future__ import annotations

import numba as nb
import numpy as np


@nb.njit(nogil=True, cache=True)
def _tilt(odds, inside, wanted):  # type: ignore[no-untyped-def]
    """Factor t at which sum of t w / (1 + t w) over those inside is ``wanted``, by bisection."""
    low, high = -60.0, 60.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        t = np.exp(middle)
        total = 0.0
        for i in inside:
            total += t * odds[i] / (1.0 + t * odds[i]) if odds[i] < np.inf else 1.0
        if total < wanted:
            low = middle
        else:
            high = middle
    return np.exp(0.5 * (low + high))


@nb.njit(nogil=True, cache=True)
def _add(chance, law, most):  # type: ignore[no-untyped-def]
    """Convolve a law on 0 .. most (cut off above) with one more yes of this chance."""
    for j in range(most, 0, -1):
        law[j] = law[j] * (1.0 - chance) + law[j - 1] * chance
    law[0] *= 1.0 - chance


@nb.njit(nogil=True, cache=True)
def shared_laws(one, odds, rows, sets, others, out):  # type: ignore[no-untyped-def]
    """Compare one motif with every other of one survey.

    Parameters
    ----------
    one : int
        The motif.
    odds : (N,) float64
        Of the traditions; 0 never holds, infinity always does.
    rows : (indptr (M + 1,), indices (H,)) int64
        Holders of all motifs.
    sets : (2, N) bool
        Searched for the motif, and for the others.
    others : (K,) int64
        Motifs, all of the second survey.
    out : (shared (K,), held (K,), expected (K,), p (K,), attainable (K,)) float64
    """
    indptr, indices = rows
    shared, held, expected, p, attainable = out
    n = len(odds)
    mine = np.zeros(n, dtype=np.bool_)
    for e in range(indptr[one], indptr[one + 1]):
        mine[indices[e]] = True
    both = np.flatnonzero(sets[0] & sets[1])
    h = 0
    for i in both:
        h += mine[i]
    by_held = np.zeros(len(both) + 1, dtype=np.int64)
    for k in range(len(others)):
        count = 0
        seen = 0
        for e in range(indptr[others[k]], indptr[others[k] + 1]):
            v = indices[e]
            if sets[0, v]:
                count += 1
                seen += mine[v]
        shared[k], held[k] = seen, count
        expected[k], p[k], attainable[k] = 0.0, 1.0, 1.0
        by_held[count] += 1
    if h == 0 or h == len(both):
        for k in range(len(others)):
            expected[k] = held[k] if h > 0 else 0.0
        return
    tails = np.empty((len(both) + 1, h + 2))
    means = np.empty(len(both) + 1)
    inside = np.empty(h + 1)
    rest = np.empty(len(both) + 1)
    first = 1
    while first < len(both):
        last = min(2 * first - 1, len(both) - 1)
        top = last
        while top >= first and by_held[top] == 0:
            top -= 1
        if top >= first:
            t = _tilt(odds, both, np.sqrt(float(first * top)))
            inside[:] = 0.0
            rest[: top + 1] = 0.0
            inside[0] = rest[0] = 1.0
            for i in both:
                chance = t * odds[i] / (1.0 + t * odds[i]) if odds[i] < np.inf else 1.0
                if chance == 0.0:
                    continue
                if mine[i]:
                    _add(chance, inside, h)
                else:
                    _add(chance, rest, top)
            for m in range(first, top + 1):
                if by_held[m] == 0:
                    continue
                tail = 0.0
                mean = 0.0
                tails[m, h + 1] = 0.0
                for s in range(h, -1, -1):
                    weight = inside[s] * rest[m - s] if s <= m else 0.0
                    tail += weight
                    mean += s * weight
                    tails[m, s] = tail
                for s in range(h + 1):
                    tails[m, s] = tails[m, s] / tail if tail > 0.0 else 1.0
                means[m] = mean / tail if tail > 0.0 else 0.0
        first = last + 1
    for k in range(len(others)):
        m = int(held[k])
        if m == 0 or m == len(both):
            expected[k] = h if m > 0 else 0.0
            continue
        expected[k] = means[m]
        p[k] = tails[m, int(shared[k])]
        most = min(h, m)
        while most > 0 and tails[m, most] == 0.0:
            most -= 1
        attainable[k] = tails[m, most]
