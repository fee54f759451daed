"""Readable twin of the rate-based kernel: the same numbers read in the same order."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from twicetold._sfc64 import PlainStream
from twicetold.spread._plain import pick_contact


@dataclass
class PlainExcursion:
    """Kept holders and total weight by count, time by count, boundary integral, cut or not."""

    kept: dict[int, frozenset[int]] = field(default_factory=dict)
    weight: dict[int, float] = field(default_factory=dict)
    time: dict[int, float] = field(default_factory=dict)
    boundary_time: float = 0.0
    cut: bool = False


def rate_plain(
    words: npt.NDArray[np.uint64],
    neighbours: list[list[int]],
    rates: tuple[float, float, float],
    longest: int,
) -> PlainExcursion:
    """Run one excursion of the contact process with rates (contact, spontaneous, loss)."""
    contact, spontaneous, loss = rates
    stream, n, out = PlainStream(*map(int, words)), len(neighbours), PlainExcursion()
    order, m, events = list(range(n)), 0, 0
    moved, gain = stream.below(n), True
    while True:
        here, there = order.index(moved), m if gain else m - 1
        order[here], order[there] = order[there], order[here]
        m += 1 if gain else -1
        if m == 0:
            return out
        events += 1
        if events > longest:
            out.cut = True
            return out
        holders = order[:m]
        boundary = sum(v not in holders for j in holders for v in neighbours[j])
        total = contact * boundary + spontaneous * (n - m) + loss * m
        out.time[m] = out.time.get(m, 0.0) + 1.0 / total
        out.boundary_time += boundary / total
        toss = stream.double()
        out.weight[m] = out.weight.get(m, 0.0) + 1.0 / total
        if toss * out.weight[m] < 1.0 / total:
            out.kept[m] = frozenset(holders)
        which = stream.double() * total
        gain = which < contact * boundary + spontaneous * (n - m)
        if which < contact * boundary:
            across = pick_contact(stream, m, order, neighbours, 0.0)
            assert across is not None  # a contact only happens across a boundary edge
            moved = across
        elif gain:
            moved = order[m + stream.below(n - m)]
        else:
            moved = order[stream.below(m)]
