"""The ancestry-only world's draws, said readably; a parity test holds the kernels to them."""

from __future__ import annotations

import itertools
import math
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence

from twicetold._sfc64 import PlainStream


def ringing_times(words: Sequence[int], n: int) -> list[float]:
    """Waiting times of n clocks of rate 1, one uniform number each, in order."""
    stream = PlainStream(*(int(w) for w in words))
    return [-math.log1p(-stream.double()) for _ in range(n)]


def drawn_holders(
    waits: Sequence[float],
    rate: Sequence[float],
    strata: Iterable[Sequence[int]],
    holders: Sequence[int],
    own: Mapping[int, float] | None = None,
) -> set[int]:
    """Holders of one motif in one draw: in each stratum the first to ring, as many as hold it.

    ``own`` gives the rates at which the motif's own holders ring, where they differ from ``rate``.
    """
    mine = dict(own or {})

    def rings(v: int) -> float:
        r = mine.get(v, rate[v])
        return waits[v] / r if r > 0 else math.inf

    out: set[int] = set()
    for stratum in strata:
        n = len(set(stratum) & set(holders))
        out.update(sorted(stratum, key=rings)[:n])
    return out


def joins_of(held: set[int], edges: Iterable[tuple[int, int]]) -> int:
    """Count the edges with both ends in ``held``."""
    return sum(1 for i, j in edges if i in held and j in held)


def law_by_enumeration(
    strata: Iterable[Sequence[int]], holders: Sequence[int], edges: Sequence[tuple[int, int]]
) -> Counter[int]:
    """Number of configurations by joins, every stratum's count held, all equally likely."""
    choices = [
        list(itertools.combinations(stratum, len(set(stratum) & set(holders))))
        for stratum in strata
    ]
    return Counter(
        joins_of(set(itertools.chain(*config)), edges) for config in itertools.product(*choices)
    )
