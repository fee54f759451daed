"""The law of the traditions two motifs share, said readably: by enumeration."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Mapping


def shared_law(odds: Mapping[int, float], mine: Iterable[int], held: int) -> dict[int, float]:
    """Chance of each number of traditions shared with a motif of ``held`` holders.

    A set of holders is as likely as the product of its members' odds.
    """
    own = set(mine)
    weight: dict[int, float] = {}
    for chosen in itertools.combinations(sorted(odds), held):
        shared = len(own.intersection(chosen))
        weight[shared] = weight.get(shared, 0.0) + math.prod(odds[i] for i in chosen)
    total = sum(weight.values())
    return {s: w / total for s, w in sorted(weight.items())}
