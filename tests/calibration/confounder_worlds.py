"""Made-up worlds whose truth is known, for the calibration of the confounders.

A thousand traditions at random on the globe; 60 compact families of very unequal size, a fifth of
them with a branch far away; branches of at most a dozen, sub-branches of at most four.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from twicetold.graph import build_graph
from twicetold.randomness import chunk_words
from twicetold.spread import SpreadModel, cap_for, chain_tables, walk_chunk

N, FAMILIES = 1000, 60
COUNTS = (5, 10, 30, 100)
EACH = 2000
#: Chance that a gain is a new origin, and that it passes over the branch to the whole family.
ORIGIN, CLIMB = 0.15, 0.15
KM = 6371.0088


@dataclass(frozen=True)
class Place:
    """The traditions: where they are, whose kin, how much was collected."""

    latitude: np.ndarray
    longitude: np.ndarray
    family: np.ndarray
    branch: np.ndarray
    twig: np.ndarray
    effort: dict[str, np.ndarray]
    field: np.ndarray

    @property
    def xyz(self):
        a, b = np.radians(self.latitude), np.radians(self.longitude)
        return np.stack([np.cos(a) * np.cos(b), np.cos(a) * np.sin(b), np.sin(a)], axis=1)


def make_place(seed=31):
    rng = np.random.default_rng(seed)
    latitude = np.degrees(np.arcsin(rng.uniform(-0.9, 0.9, N)))
    longitude = rng.uniform(-180, 180, N)
    place = Place(latitude, longitude, *[np.zeros(N, int)] * 3, {}, np.zeros(N))
    xyz = place.xyz
    family = compact_families(xyz, rng)
    branch = split(xyz, family, 12)
    family, branch = move_branches(family, branch, rng)
    west_east = (1 + xyz[:, 1]) / 2
    noise = np.exp(0.8 * rng.normal(size=N))
    effort = {
        "equal": np.ones(N),
        "log-normal": noise,
        "log-normal, x10 gradient": noise * 10.0**west_east,
    }
    field = smooth(xyz, rng, 1)[0]
    return Place(latitude, longitude, family, branch, split(xyz, branch, 4), effort, field)


def compact_families(xyz, rng):
    """Sizes falling as 1/rank; the largest takes its nearest first."""
    weight = 1.0 / np.arange(1, FAMILIES + 1) ** 1.1
    sizes = np.maximum(1, np.round(N * weight / weight.sum())).astype(int)
    sizes[0] += N - sizes.sum()
    family = np.full(N, -1)
    for k, size in enumerate(sizes):
        free = np.flatnonzero(family < 0)
        centre = xyz[rng.choice(free)]
        family[free[np.argsort(((xyz[free] - centre) ** 2).sum(axis=1))[:size]]] = k
    return family


def split(xyz, group, most):
    """Halve every group along its longest direction until no part has more than ``most``."""
    out = np.zeros(len(group), dtype=int)
    todo = [np.flatnonzero(group == g) for g in np.unique(group)]
    code = 0
    while todo:
        members = todo.pop()
        if len(members) <= most:
            out[members] = code
            code += 1
            continue
        centred = xyz[members] - xyz[members].mean(axis=0)
        along = centred @ np.linalg.svd(centred, full_matrices=False)[2][0]
        order = np.argsort(along, kind="stable")
        todo += [members[order[: len(order) // 2]], members[order[len(order) // 2 :]]]
    return out


def move_branches(family, branch, rng):
    """Let a fifth of the larger families trade a branch with another, far away."""
    family = family.copy()
    owners = [f for f in range(FAMILIES) if len(np.unique(branch[family == f])) > 1]
    rng.shuffle(owners)
    for a, b in zip(owners[0::2][:6], owners[1::2][:6], strict=False):
        one, other = rng.choice(branch[family == a]), rng.choice(branch[family == b])
        family[branch == one], family[branch == other] = b, a
    return family, branch


def smooth(xyz, rng, fields, length=2000.0):
    """Fields with correlation exp(-(chord/length)^2), by random waves; sd 1 over traditions."""
    out = []
    for _ in range(fields):
        waves = rng.normal(size=(300, 3)) * np.sqrt(2.0) * KM / length
        z = np.cos(xyz @ waves.T + rng.uniform(0, 2 * np.pi, 300)).sum(axis=1)
        out.append((z - z.mean()) / z.std())
    return np.array(out)


def by_clocks(rates, rng):
    """Emergence alone: the first to ring; ``rates`` (N,), or a function giving a fresh one."""
    rows = []
    for n in COUNTS:
        for _ in range(EACH):
            rate = rates() if callable(rates) else rates
            rows.append(np.argpartition(rng.exponential(size=N) / rate, n)[:n])
    return rows


def by_descent(levels, rate, rng):
    """Gains pass down within the narrowest group; now and then within a wider one, or anew.

    ``levels`` holds codes from the narrowest group to the family. Whoever gains within a group is
    drawn by rate, so that given the counts per (narrowest) group the holders are a draw by rate.
    """
    members = [{g: np.flatnonzero(level == g) for g in np.unique(level)} for level in levels]
    rows = []
    for n in COUNTS:
        for _ in range(EACH):
            held = np.zeros(N, dtype=bool)
            held[rng.choice(N, p=rate / rate.sum())] = True
            holders = list(np.flatnonzero(held))
            while len(holders) < n:
                free = np.flatnonzero(~held)
                if rng.random() >= ORIGIN:
                    kin = _kin(levels, members, holders[rng.integers(len(holders))], held, rng)
                    free = kin if len(kin) else free
                weight = rate[free]
                new = free[np.searchsorted(np.cumsum(weight), rng.random() * weight.sum())]
                held[new] = True
                holders.append(new)
            rows.append(np.array(holders))
    return rows


def _kin(levels, members, of, held, rng):
    for k, level in enumerate(levels):
        if k + 1 < len(levels) and rng.random() < CLIMB:
            continue
        group = members[k][level[of]]
        free = group[~held[group]]
        if len(free):
            return free
    return free


def by_chain(place, shares, turnover=0.95):
    """The spread chain: rows, and the weight of each (a snapshot of a walk)."""
    model = SpreadModel(
        build_graph(place.latitude, place.longitude, "nearest:6"),
        turnover,
        shares=shares,
        family=place.family,
    )
    tables = chain_tables(model, cap_for(model, max(COUNTS)))
    kept = walk_chunk(tables, chunk_words(7, 90, draws=EACH), np.array(COUNTS, dtype=np.int32))
    rows, weights = [], []
    for k in range(len(COUNTS)):
        for w in range(EACH):
            bits = kept.bits[w, k][:, None] >> np.arange(64, dtype=np.uint64) & np.uint64(1)
            rows.append(np.flatnonzero(bits.ravel()[:N]))
            weights.append(kept.weight[w, k])
    return rows, np.array(weights)
