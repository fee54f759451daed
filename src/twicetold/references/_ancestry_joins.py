"""Compiled count of the joins of many motifs at once, one bit a motif.

With one bit per motif, the joins of all motifs are the column sums of (row of one end AND row of
the other) over the edges, added with carry-save adders (Harley & Seal; see Warren 2012, Hacker's
Delight 5-1).
"""

# ruff: noqa: PLR0917 - kernels take plain arrays, one by one

from __future__ import annotations

import numba as nb
import numpy as np


@nb.njit(nogil=True, cache=True)
def count_all(row, edges, bits, span, work, out):  # type: ignore[no-untyped-def]
    """Joins of every motif: column sums over the edges of (row of one end AND row of the other).

    ``row[v]`` is the row of ``bits`` for the place of v; the last row is empty. ``work`` holds the
    bit planes of the sums (depth, W), a carry (W,) and two lists of rows (A + 8,).
    """
    planes, carry, left, right = work
    n_edges, width, depth = len(edges), bits.shape[1], len(planes)
    empty = bits.shape[0] - 1
    one = np.uint64(1)
    kept = 0
    for e in range(n_edges):
        a, b = row[edges[e, 0]], row[edges[e, 1]]
        if a < empty and b < empty:
            left[kept] = a
            right[kept] = b
            kept += 1
    for extra in range(8):
        left[kept + extra] = empty
        right[kept + extra] = empty
    planes[:] = 0
    for base in range(0, kept, 8):
        top = 0
        for e in range(base, base + 8):
            top = max(top, min(span[left[e]], span[right[e]]))
        a0, b0 = left[base], right[base]
        a1, b1 = left[base + 1], right[base + 1]
        a2, b2 = left[base + 2], right[base + 2]
        a3, b3 = left[base + 3], right[base + 3]
        a4, b4 = left[base + 4], right[base + 4]
        a5, b5 = left[base + 5], right[base + 5]
        a6, b6 = left[base + 6], right[base + 6]
        a7, b7 = left[base + 7], right[base + 7]
        for w in range(top):
            ones, twos, fours = planes[0, w], planes[1, w], planes[2, w]
            x, y = bits[a0, w] & bits[b0, w], bits[a1, w] & bits[b1, w]
            u = x ^ y
            t0 = (x & y) | (u & ones)
            ones ^= u
            x, y = bits[a2, w] & bits[b2, w], bits[a3, w] & bits[b3, w]
            u = x ^ y
            t1 = (x & y) | (u & ones)
            ones ^= u
            u = t0 ^ t1
            f0 = (t0 & t1) | (u & twos)
            twos ^= u
            x, y = bits[a4, w] & bits[b4, w], bits[a5, w] & bits[b5, w]
            u = x ^ y
            t0 = (x & y) | (u & ones)
            ones ^= u
            x, y = bits[a6, w] & bits[b6, w], bits[a7, w] & bits[b7, w]
            u = x ^ y
            t1 = (x & y) | (u & ones)
            ones ^= u
            u = t0 ^ t1
            f1 = (t0 & t1) | (u & twos)
            twos ^= u
            u = f0 ^ f1
            carry[w] = (f0 & f1) | (u & fours)
            planes[0, w] = ones
            planes[1, w] = twos
            planes[2, w] = fours ^ u
        for p in range(3, depth):
            going = np.uint64(0)
            for w in range(top):
                c = carry[w]
                held = planes[p, w]
                planes[p, w] = held ^ c
                carry[w] = held & c
                going |= held & c
            if going == 0:
                break
    for w in range(width):
        used = depth
        while used > 0 and planes[used - 1, w] == 0:
            used -= 1
        last = min(64, len(out) - 64 * w)
        for b in range(last):
            total = np.int64(0)
            for p in range(used):
                total |= np.int64((planes[p, w] >> np.uint64(b)) & one) << p
            out[64 * w + b] = total


@nb.njit(nogil=True, cache=True)
def workspace(n_edges, width):  # type: ignore[no-untyped-def]
    depth = 4
    while (1 << depth) <= n_edges:
        depth += 1
    return (
        np.zeros((depth, width), dtype=np.uint64),
        np.empty(width, dtype=np.uint64),
        np.empty(n_edges + 8, dtype=np.int64),
        np.empty(n_edges + 8, dtype=np.int64),
    )
