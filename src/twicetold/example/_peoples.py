"""Invented traditions: where they live, their families and branches, names, and effort."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from twicetold.example._dice import Dice
from twicetold.example._terrain import Terrain, shallow_share, to_lonlat

# Sites stand at least this high, so that rounding cannot put them into the sea.
_DRY = 0.06
_CANDIDATES = 5
_METRES = 900.0
# Effort: texts collected. The collectors' harbour is on the Long Shore; log effort falls with the
# distance from it, and the rest is log-normal.
_HARBOUR = (110.0, 190.0)
_EFFORT_MIDDLE, _EFFORT_SLOPE, _EFFORT_SPREAD = 88.0, 0.65, 0.65
_FARTHEST = 2000.0


@dataclass(frozen=True)
class Site:
    """One tradition.

    Parameters
    ----------
    x, y : float
        Kilometres from the map's middle.
    longitude, latitude : float
        Degrees, -180..180 and -90..90, to three decimals.
    region : int
        Index of the region.
    reef_share : float
        Share of the sea within about 36 km that is shallow, 0..1.
    altitude : int
        Metres.
    effort : int
        Texts collected, at least 1.
    family : int
        Index of the family, -1 for an isolate.
    branch : str
        Name of the branch, empty in a small family.
    name : str
        Name of the tradition.
    """

    x: float
    y: float
    longitude: float
    latitude: float
    region: int
    reef_share: float
    altitude: int
    effort: int
    family: int = -1
    branch: str = ""
    name: str = ""


@dataclass(frozen=True)
class Peoples:
    """All traditions, and the names of the families."""

    sites: tuple[Site, ...]
    families: tuple[str, ...]

    def family_name(self, site: Site) -> str:
        """Name of the site's family, empty for an isolate."""
        return self.families[site.family] if site.family >= 0 else ""


def make_peoples(terrain: Terrain, words: Mapping[str, Any], seed: int) -> Peoples:
    """Settle the islands."""
    sites = _settle(terrain, words, Dice(seed, 3))
    families = _grow_families(sites, words, Dice(seed, 4))
    sites = [replace(s, family=f) for s, f in zip(sites, families, strict=True)]
    return _name(sites, words, seed)


def _settle(terrain: Terrain, words: Mapping[str, Any], dice: Dice) -> list[Site]:
    """Spread sites over each region's land, the best of a few candidates each (Mitchell 1991)."""
    sites: list[Site] = []
    for code, group in enumerate(words["regions"]):
        ground = np.argwhere((terrain.height > _DRY) & (terrain.region == code)).tolist()
        taken: list[tuple[float, float]] = []
        while len(taken) < group["sites"]:
            best: tuple[float, int, int] = (-1.0, 0, 0)
            for _ in range(_CANDIDATES):
                row, column = dice.pick(ground)
                x, y = float(terrain.x[column]), float(terrain.y[row])
                gap = min(((x - a) ** 2 + (y - b) ** 2 for a, b in taken), default=1e9)
                best = max(best, (gap, row, column))
            _, row, column = best
            taken.append((float(terrain.x[column]), float(terrain.y[row])))
            sites.append(_site(terrain, row, column, code, dice))
    return sites


def _site(terrain: Terrain, row: int, column: int, region: int, dice: Dice) -> Site:
    x, y = float(terrain.x[column]), float(terrain.y[row])
    longitude, latitude = to_lonlat(x, y)
    away = math.hypot(x - _HARBOUR[0], y - _HARBOUR[1])
    log_effort = (
        math.log(_EFFORT_MIDDLE)
        - _EFFORT_SLOPE * min(away, _FARTHEST) / 1000.0
        + _EFFORT_SPREAD * dice.normal()
    )
    height = float(terrain.height[row, column])
    return Site(
        x=x,
        y=y,
        longitude=round(longitude - 360.0 if longitude > 180.0 else longitude, 3),
        latitude=round(latitude, 3),
        region=region,
        reef_share=round(shallow_share(terrain, row, column), 3),
        altitude=10 * max(1, round(_METRES * (height - _DRY) / 10.0)),
        effort=max(1, round(math.exp(log_effort))),
    )


def _grow_families(sites: Sequence[Site], words: Mapping[str, Any], dice: Dice) -> list[int]:
    """Let the families grow from their homes over the free sites; isolates are set aside first.

    The family that is emptiest for its size takes the free site nearest to any of its own.
    """
    families = words["families"]
    isolates = _apart(sites, len(words["isolates"]), dice)
    free = set(range(len(sites))) - set(isolates)
    out = [-1] * len(sites)
    held: list[list[int]] = [[] for _ in families]
    for code, family in enumerate(families):
        for x, y in family["homes"]:
            _take(min(free, key=lambda i: (_gap(sites[i], x, y), i)), code, out, held, free)
    while free:
        code = min(
            (c for c, f in enumerate(families) if len(held[c]) < f["size"]),
            key=lambda c: (len(held[c]) / families[c]["size"], c),
        )
        nearest = min(
            free,
            key=lambda i: (min(_gap(sites[i], sites[j].x, sites[j].y) for j in held[code]), i),
        )
        _take(nearest, code, out, held, free)
    return out


def _take(site: int, code: int, out: list[int], held: list[list[int]], free: set[int]) -> None:
    out[site] = code
    held[code].append(site)
    free.remove(site)


def _gap(site: Site, x: float, y: float) -> float:
    return (site.x - x) ** 2 + (site.y - y) ** 2


def _apart(sites: Sequence[Site], count: int, dice: Dice) -> list[int]:
    """Some sites, no two in one region while regions last."""
    chosen: list[int] = []
    seen: set[int] = set()
    for i in dice.shuffled(range(len(sites))):
        if len(chosen) < count and sites[i].region not in seen:
            chosen.append(i)
            seen.add(sites[i].region)
    return chosen


def _name(sites: list[Site], words: Mapping[str, Any], seed: int) -> Peoples:
    used: set[str] = set()
    avoid = tuple(words["avoid"])
    families: list[str] = []
    named = list(sites)
    for code, family in enumerate(words["families"]):
        dice = Dice(seed, 5, code)
        families.append(_word(family, 2, dice, used, avoid))
        members = [i for i, s in enumerate(sites) if s.family == code]
        branch_of = _branches([sites[i] for i in members], family["branches"])
        branches = [_word(family, 1, dice, used, avoid) for _ in range(family["branches"])] or [""]
        for i, branch in zip(members, branch_of, strict=True):
            name = _word(family, 1 + dice.below(2), dice, used, avoid)
            named[i] = replace(sites[i], branch=branches[branch], name=name)
    alone = [i for i, s in enumerate(sites) if s.family < 0]
    for i, name in zip(alone, words["isolates"], strict=True):
        named[i] = replace(sites[i], name=name)
    return Peoples(tuple(named), tuple(families))


def _branches(members: Sequence[Site], count: int) -> list[int]:
    """Nearest of ``count`` members that lie far from each other (Gonzalez 1985)."""
    if count == 0:
        return [0] * len(members)
    heads = [members[0]]
    while len(heads) < count:
        heads.append(max(members, key=lambda s: min(_gap(s, h.x, h.y) for h in heads)))
    return [min(range(count), key=lambda k: _gap(s, heads[k].x, heads[k].y)) for s in members]


def _word(
    family: Mapping[str, Any], syllables: int, dice: Dice, used: set[str], avoid: Sequence[str]
) -> str:
    """A word of the family's own sounds, new, and without the name of a real people in it."""
    while True:
        parts = [
            dice.pick(family["onsets"]) + dice.pick(family["vowels"]) + dice.pick(family["codas"])
            for _ in range(syllables)
        ]
        word: str = "".join(parts) + dice.pick(family["onsets"]) + dice.pick(family["tails"])
        if word not in used and len(word) <= 11 and not any(real in word for real in avoid):
            used.add(word)
            return word.capitalize()
