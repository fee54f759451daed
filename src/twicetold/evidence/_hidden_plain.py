"""Tails of joins under smooth hidden propensities, said readably."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

from twicetold._sfc64 import PlainStream


def joins_by_holders(
    words: Sequence[int],
    log_rate: Sequence[float],
    field: Sequence[float],
    sigma: float,
    edges: Iterable[tuple[int, int]],
) -> list[int]:
    """Joins among the first 0, 1, 2 ... traditions to ring at rates exp(log_rate + sigma field)."""
    stream = PlainStream(*(int(w) for w in words))
    rings = [
        math.log(stream.exponential()) - rate - sigma * z
        for rate, z in zip(log_rate, field, strict=True)
    ]
    order = sorted(range(len(rings)), key=rings.__getitem__)
    place = {v: r for r, v in enumerate(order)}
    later = sorted(max(place[i], place[j]) for i, j in edges)
    return [sum(1 for r in later if r < n) for n in range(len(order) + 1)]
