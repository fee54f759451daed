"""How the invented motifs came to be where they are: the spread chain, run forwards.

Written for itself, in plain Python, and used by nothing else: the analysis has its own code, so
that finding the known truth again is a test of it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from twicetold.example._dice import Dice
from twicetold.example._peoples import Site

TURNOVER = 0.9
"""Gains per loss, x."""
RECORDING = 0.06
"""κ: a holder is recorded with probability 1 - exp(-κ · effort)."""
NEIGHBOURS = 6
"""Contact goes to the nearest six, both ways, and along bridges between separate pieces."""
REEF_PULL = 1.5
"""Sea and weather motifs emerge in proportion to exp(REEF_PULL · reef_share)."""
LEAST_RECORDED = 3
"""Motifs recorded fewer times than this never made it into the catalogue."""
SPAN = 300.0
"""Motifs appeared at a constant rate over this long, in mean lives of one holding. The chance
that one lives longer is (1 - x) / (exp((1 - x) · SPAN) - x), about 1e-14 (Kendall 1948)."""
ROUTES = ("emergence", "contact", "inheritance")
Shares = tuple[float, float, float]
_PURE: dict[str, Shares] = {
    "emergence": (1.0, 0.0, 0.0),
    "contact": (0.0, 1.0, 0.0),
    "inheritance": (0.0, 0.0, 1.0),
}


@dataclass(frozen=True)
class Motif:
    """One motif with its known history.

    Parameters
    ----------
    name, category : str
    route : str
        emergence, contact, inheritance or mixed.
    shares : (3,) float
        Intended shares of emergence, contact and inheritance among gains.
    gained : (3,) int
        Gains that went each way, over the motif's life.
    holders : tuple of int
        True holders, sorted.
    searched : tuple of bool, length N
        Whether collectors asked for it there.
    recorded : tuple of int
        Recorded holders, sorted.
    """

    name: str
    category: str
    route: str
    shares: Shares
    gained: tuple[int, int, int]
    holders: tuple[int, ...]
    searched: tuple[bool, ...]
    recorded: tuple[int, ...]


@dataclass(frozen=True)
class World:
    """What the chain runs on: neighbours and families of N traditions."""

    neighbours: tuple[tuple[int, ...], ...]
    families: tuple[tuple[int, ...], ...]

    @property
    def size(self) -> int:
        """N."""
        return len(self.neighbours)


def tell_stories(sites: Sequence[Site], words: Mapping[str, Any], seed: int) -> list[Motif]:
    """Run every motif's history and record it."""
    world = World(contact_neighbours(sites), _kin(sites))
    motifs: list[Motif] = []
    for category, names in words["categories"].items():
        routes = [r for r, count in words["routes"][category].items() for _ in range(count)]
        ordered = Dice(seed, 6, len(motifs)).shuffled(routes)
        searched = _searched(sites, category, words)
        reefs = category == "sea and weather"
        pull = [math.exp(REEF_PULL * s.reef_share) if reefs else 1.0 for s in sites]
        mixed = 0
        for name, route in zip(names, ordered, strict=True):
            shares = _PURE.get(route) or words["mixtures"][mixed]
            mixed += route == "mixed"
            dice = Dice(seed, 7, len(motifs))
            while True:
                holders, gained = one_snapshot(world, shares, pull, dice)
                recorded = tuple(
                    i
                    for i in holders
                    if dice.uniform() < -math.expm1(-RECORDING * sites[i].effort) and searched[i]
                )
                if len(recorded) >= LEAST_RECORDED:
                    break
            motifs.append(
                Motif(name, category, route, tuple(shares), gained, holders, searched, recorded)
            )
    return motifs


def _searched(sites: Sequence[Site], category: str, words: Mapping[str, Any]) -> tuple[bool, ...]:
    gap = words["unsearched"]
    names = [group["name"] for group in words["regions"]]
    if category != gap["category"]:
        return (True,) * len(sites)
    return tuple(names[s.region] not in gap["regions"] for s in sites)


def _kin(sites: Sequence[Site]) -> tuple[tuple[int, ...], ...]:
    return tuple(
        tuple(j for j, other in enumerate(sites) if s.family >= 0 and other.family == s.family)
        for s in sites
    )


def contact_neighbours(sites: Sequence[Site]) -> tuple[tuple[int, ...], ...]:
    """Neighbours of each site: the nearest six made symmetric, and bridges between pieces."""
    apart = great_circle_km(sites)
    n = len(sites)
    linked: list[set[int]] = [set() for _ in range(n)]
    for i in range(n):
        order = sorted((float(apart[i, j]), j) for j in range(n) if j != i)
        for _, j in order[:NEIGHBOURS]:
            linked[i].add(j)
            linked[j].add(i)
    while len(piece := _piece_of(0, linked)) < n:
        _, i, j = min((float(apart[i, j]), i, j) for i in piece for j in range(n) if j not in piece)
        linked[i].add(j)
        linked[j].add(i)
    return tuple(tuple(sorted(each)) for each in linked)


def _piece_of(start: int, linked: Sequence[set[int]]) -> set[int]:
    piece, edge = {start}, [start]
    while edge:
        fresh = linked[edge.pop()] - piece
        piece |= fresh
        edge += fresh
    return piece


def great_circle_km(sites: Sequence[Site]) -> npt.NDArray[np.float64]:
    """(N, N) great-circle distances in kilometres, haversine, on a sphere of 6371.0088 km."""
    lat = np.radians([s.latitude for s in sites])
    lon = np.radians([s.longitude for s in sites])
    half = np.sin((lat[:, None] - lat[None, :]) / 2.0) ** 2
    half += np.cos(lat)[:, None] * np.cos(lat) * np.sin((lon[:, None] - lon[None, :]) / 2.0) ** 2
    return np.asarray(2.0 * 6371.0088 * np.arcsin(np.sqrt(half)), dtype=np.float64)


def one_snapshot(
    world: World, shares: Sequence[float], pull: Sequence[float], dice: Dice
) -> tuple[tuple[int, ...], tuple[int, int, int]]:
    """One motif of those alive now, with its holders and how it gained them.

    Motifs appear at a constant rate; how many hold one does not hang on the map, so the count is
    walked first and a place found only for motifs that are alive and common enough to matter.
    """
    while True:
        steps = count_walk(world.size, SPAN * dice.uniform(), dice)
        if 2 * sum(steps) - len(steps) + 1 >= LEAST_RECORDED:
            return _replay(world, steps, shares, pull, dice)


def count_walk(size: int, age: float, dice: Dice) -> bytearray:
    """Gains (1) and losses (0) of a motif from its start to its ``age``; it may die out.

    With m holders gains come at rate x·m and losses at rate m; with all, only losses.
    """
    steps = bytearray()
    count, time = 1, 0.0
    chance = TURNOVER / (1.0 + TURNOVER)
    while count:
        rate = count * (1.0 + TURNOVER) if count < size else count
        time -= math.log(1.0 - dice.uniform()) / rate
        if time > age:
            break
        gain = count < size and dice.uniform() < chance
        steps.append(gain)
        count += 1 if gain else -1
    return steps


def _replay(
    world: World,
    steps: bytearray,
    shares: Sequence[float],
    pull: Sequence[float],
    dice: Dice,
) -> tuple[tuple[int, ...], tuple[int, int, int]]:
    """Find a place for each gain and loss."""
    first = dice.below(world.size)
    holders, at = [first], {first: 0}
    gained = [0, 0, 0]
    strongest = max(pull)
    for step in steps:
        if not step:
            lost = dice.below(len(holders))
            last = holders.pop()
            if lost < len(holders):
                gone, holders[lost] = holders[lost], last
                at[last] = lost
            else:
                gone = last
            del at[gone]
            continue
        u = dice.uniform()
        route = 0 if u < shares[0] else 1 if u < shares[0] + shares[1] else 2
        fresh = -1
        if route == 1:
            fresh = _heard(world, holders, at, dice)
        elif route == 2:
            fresh = _inherited(world, holders, at, dice)
        if fresh < 0:  # invented, or no neighbour or kin is left to tell
            route = 0
            fresh = _invented(world.size, at, pull, strongest, dice)
        gained[route] += 1
        at[fresh] = len(holders)
        holders.append(fresh)
    return tuple(sorted(holders)), (gained[0], gained[1], gained[2])


def _heard(world: World, holders: Sequence[int], at: Mapping[int, int], dice: Dice) -> int:
    """The far end of a uniformly chosen edge from a holder to a non-holder, or -1."""
    widest = max(len(world.neighbours[i]) for i in holders)
    for _ in range(40):
        near = world.neighbours[dice.pick(holders)]
        slot = dice.below(widest)
        if slot < len(near) and near[slot] not in at:
            return near[slot]
    ends = [j for i in holders for j in world.neighbours[i] if j not in at]
    return dice.pick(ends) if ends else -1


def _inherited(world: World, holders: Sequence[int], at: Mapping[int, int], dice: Dice) -> int:
    """A non-holder of a uniformly chosen holder's family, or -1."""
    heirs = [j for j in world.families[dice.pick(holders)] if j not in at]
    return dice.pick(heirs) if heirs else -1


def _invented(
    size: int, at: Mapping[int, int], pull: Sequence[float], strongest: float, dice: Dice
) -> int:
    """A non-holder, in proportion to its pull."""
    while True:
        i = dice.below(size)
        if i not in at and dice.uniform() * strongest < pull[i]:
            return i
