"""Trades that keep both margins of a 0/1 table, said readably; parity tests hold the kernels."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence

from twicetold._sfc64 import PlainStream
from twicetold.references._margins_kernels import NEAR

Rows = list[list[int]]
#: Whether a row may hold a column.
May = Callable[[int, int], bool]


def trade(rows: Rows, a: int, b: int, may: May, stream: PlainStream) -> None:
    """Deal what only one of two rows holds, and both may hold, afresh between the two."""
    mine = [v for v in rows[a] if v not in rows[b] and may(b, v)]
    yours = [v for v in rows[b] if v not in rows[a] and may(a, v)]
    if not mine or not yours:
        return
    pool = mine + yours
    if len(mine) <= len(yours):
        swaps = [(j, j + stream.below(len(pool) - j)) for j in range(len(mine))]
    else:
        swaps = [(j, stream.below(j + 1)) for j in range(len(pool) - 1, len(mine) - 1, -1)]
    for j, r in swaps:
        pool[j], pool[r] = pool[r], pool[j]
    deal = dict(zip(mine + yours, pool, strict=True))
    for row, moving in ((a, set(mine)), (b, set(yours))):
        rows[row] = [deal[v] if v in moving else v for v in rows[row]]


def rotate(rows: Rows, may: May, stream: PlainStream) -> None:
    """Try to pass one column from row a to b, another from b to c, a third from c to a."""
    a, b, c = (stream.below(len(rows)) for _ in range(3))
    if len({a, b, c}) < 3 or not (rows[a] and rows[b] and rows[c]):
        return
    i, j, k = (stream.below(len(rows[r])) for r in (a, b, c))
    x, y, z = rows[a][i], rows[b][j], rows[c][k]
    moves = ((b, x), (c, y), (a, z))
    if all(may(row, v) and v not in rows[row] for row, v in moves):
        rows[a][i], rows[b][j], rows[c][k] = z, x, y


def pairing(by_size: Sequence[int], stream: PlainStream) -> list[int]:
    """Order of the rows whose neighbours (first and second, third and fourth ...) will trade."""
    m = len(by_size)
    order = list(by_size)
    ends = [0, m]
    if stream.below(2) == 1:
        ends = [0, *range(min(m, 1 + stream.below(NEAR)), m, NEAR), m]
    for first, last in itertools.pairwise(ends):
        for j in range(first, last - 1):
            r = j + stream.below(last - j)
            order[j], order[r] = order[r], order[j]
    return order


def run_sweeps(
    words: Sequence[int], rows: Rows, may: May, *, sweeps: int, rotations: int, backward: bool
) -> None:
    """Pair the rows and trade, that many times, with rotations after (or before)."""
    stream = PlainStream(*(int(w) for w in words))
    by_size = sorted(range(len(rows)), key=lambda r: len(rows[r]))
    for _ in range(sweeps):
        for _ in range(rotations if backward else 0):
            rotate(rows, may, stream)
        order = pairing(by_size, stream)
        for j in range(0, len(order) - 1, 2):
            trade(rows, order[j], order[j + 1], may, stream)
        for _ in range(0 if backward else rotations):
            rotate(rows, may, stream)
