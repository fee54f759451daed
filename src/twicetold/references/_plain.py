"""What the kernels of the emergence-only world compute, said plainly; tests hold them equal."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from itertools import permutations

from twicetold._sfc64 import PlainStream
from twicetold.references._kernels import BATCH, WASTE
from twicetold.statistics._plain import sweep


def alias_table(weights: Sequence[float], items: Sequence[int]) -> list[tuple[int, float, int]]:
    """Columns (own, share, other): a uniform column, then its own item with chance ``share``."""
    total = 0.0
    for i in items:
        total += weights[i]
    share = [weights[i] * (len(items) / total) for i in items]
    other = list(items)
    light = [k for k, s in enumerate(share) if s < 1.0]
    heavy = [k for k, s in enumerate(share) if s >= 1.0]
    while light and heavy:
        small, large = light.pop(), heavy[-1]
        other[small] = items[large]
        share[large] -= 1.0 - share[small]
        if share[large] < 1.0:
            light.append(heavy.pop())
    for k in light + heavy:
        share[k] = 1.0
    return list(zip(items, share, other, strict=True))


def draw_order(words: Iterable[int], weights: Sequence[float], length: int) -> list[int]:
    """First ``length`` traditions of a Plackett-Luce order, 0 weights never drawn."""
    stream = PlainStream(*(int(w) for w in words))
    table = alias_table(weights, [i for i, w in enumerate(weights) if w > 0])
    order: list[int] = []
    wasted = 0
    while len(order) < length:
        if wasted > WASTE * len(table):
            table = alias_table(weights, [i for i, _, _ in table if i not in order])
            wasted = 0
        for _ in range(BATCH):
            x = stream.double() * len(table)
            own, share, other = table[min(int(x), len(table) - 1)]
            candidate = own if x - int(x) < share else other
            if candidate in order:
                wasted += 1
            else:
                order.append(candidate)
    return order[:length]


def emergence(
    words: Iterable[Iterable[int]],
    weights: Sequence[float],
    wanted: Sequence[int],
    neighbours: Sequence[Sequence[int]],
    family: Sequence[int],
) -> list[dict[int, tuple[int, int, int, int, int, int, int]]]:
    """One draw after another: every statistic at each number of holders wanted."""
    longest = max(wanted)
    return [sweep(draw_order(w, weights, longest), wanted, neighbours, family) for w in words]


def subset_chance(weights: Sequence[float], subset: Sequence[int]) -> float:
    """Chance that the first of a Plackett-Luce order are this subset, over all its orders."""
    chance = 0.0
    for order in permutations(subset):
        one, rest = 1.0, sum(weights)
        for i in order:
            one *= weights[i] / rest
            rest -= weights[i]
        chance += one
    return chance
