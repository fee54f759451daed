"""Twenty small catalogues, fixed for good, and the results that are kept of each.

Nothing here may hang on another package's random numbers: places, families and records come from
``random.Random(seed).random()``, whose values Python promises never to change.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from made_up import catalogue_of
from twicetold.catalogue import Catalogue
from twicetold.evidence import rank_catalogue
from twicetold.plan import Plan
from twicetold.workers import ThreadPool

QUICK = {"evidence__draws": 1_999, "evidence__walks": 400, "sensitivity__hidden": False}
TWO = ("emergence", "ancestry")


@dataclass(frozen=True)
class Fixed:
    """A catalogue with its plan.

    Parameters
    ----------
    make : callable
        Gives the catalogue.
    changes : dict
        The plan, as changes to the defaults.
    near : tuple of str
        Columns that rest on fits by iteration: compared with a tolerance, because
        their last digits hang on the machine's libraries.
    """

    make: Callable[[], Catalogue]
    changes: dict[str, Any]
    near: tuple[str, ...] = ()

    def plan(self) -> Plan:
        """Resolve the changes."""
        return Plan().replace(**{**QUICK, "evidence__worlds": TWO, **self.changes})

    def table(self):
        """Rank it and give the table of motifs."""
        return rank_catalogue(
            self.make(), self.plan(), pool=ThreadPool(2), cache=False, details=False
        ).motifs


def points(n, seed, *, lat=(-60.0, 60.0), lon=(-170.0, 170.0)):
    """Places spread evenly over a part of the globe, to two decimals."""
    dice = random.Random(seed)
    low, high = (math.sin(math.radians(x)) for x in lat)
    rows = [
        (
            round(math.degrees(math.asin(low + (high - low) * dice.random())), 2),
            round(lon[0] + (lon[1] - lon[0]) * dice.random(), 2),
        )
        for _ in range(n)
    ]
    return np.array([r[0] for r in rows]), np.array([r[1] for r in rows])


def told(n, motifs, seed, *, most=0.6):
    """Holder sets: half grown from neighbour to neighbour in number, half scattered."""
    dice = random.Random(seed)
    rows = []
    for k in range(motifs):
        size = 1 + int(dice.random() ** 2 * most * n)
        if k % 2:
            start = int(dice.random() * n)
            pool = [(start + j) % n for j in range(min(n, size + 3))]
        else:
            pool = list(range(n))
        held = []
        while len(held) < size:
            held.append(pool.pop(int(dice.random() * len(pool))))
        rows.append(sorted(held))
    return rows


def plain(n=40, motifs=12, seed=1, *, places=None, most=0.6, **parts):
    """A catalogue with places sorted by longitude, so that holders next in number are near."""
    lat, lon = places or points(n, seed)
    order = np.lexsort((lat, lon))
    where = (lat[order], lon[order])
    return catalogue_of(told(n, motifs, seed + 100, most=most), n, places=where, **parts)


def numbers(n, seed, low=0.2, high=5.0):
    """Positive numbers, spread over their logs."""
    dice = random.Random(seed)
    return [round(low * (high / low) ** dice.random(), 3) for _ in range(n)]


def kin(n, families, seed):
    """Families of places next in number, a few strays among them."""
    dice = random.Random(seed)
    codes = [
        int(dice.random() * families) if dice.random() < 0.2 else k * families // n
        for k in range(n)
    ]
    return [f"F{code:02d}" for code in codes]


def with_branches():
    """Two branches in each family."""
    made = plain(48, 12, 11, family=kin(48, 4, 11), effort=numbers(48, 11))
    branch = tuple(f"{f}.{k % 2}" for k, f in enumerate(made.family))
    return replace(made, branch=branch)


def three_surveys():
    """Motifs searched in everything, in the west, in every second place."""
    n, everything = 42, range(42)
    rows = told(n, 12, 112)
    sets = [(everything, range(26), range(0, n, 2))[k % 3] for k in range(12)]
    rows = [sorted(set(r) & set(s)) or [0] for r, s in zip(rows, sets, strict=True)]
    lat, lon = points(n, 12)
    return catalogue_of(
        rows, n, places=(lat, np.sort(lon)), surveyed=sets, family=kin(n, 6, 12),
        effort=numbers(n, 12),
    )  # fmt: skip


def both_poles():
    """Places at and around the poles."""
    lat, lon = points(36, 14, lat=(75.0, 90.0), lon=(-180.0, 180.0))
    lat = np.where(np.arange(36) % 3 == 0, -lat, lat)
    lat[:2], lon[:2] = (90.0, -90.0), (0.0, 0.0)
    return plain(36, 10, 14, places=(lat, lon), families=5)


def over_the_antimeridian():
    """A chain of islands from 165 east to 165 west."""
    lat, lon = points(36, 13, lat=(-20.0, 20.0), lon=(165.0, 195.0))
    return plain(36, 10, 13, places=(lat, np.where(lon > 180.0, lon - 360.0, lon)), families=5)


def hand_drawn():
    """A ring with chords, as a contacts table."""
    n = 30
    edges = (
        {(k, k + 1) for k in range(n - 1)} | {(0, n - 1)} | {(k, k + 7) for k in range(0, 20, 3)}
    )
    return plain(n, 10, 10, contacts=edges, families=4)  # fmt: skip


def extremes():
    """Nobody, one, all but one and everybody, in a catalogue so small that all is enumerated."""
    n = 9
    rows = [[], [4], [0, 1], [0, 8], list(range(8)), list(range(n)), [2, 3, 4, 5]]
    lat, lon = points(n, 17)
    return catalogue_of(rows, n, places=(lat, np.sort(lon)), families=3)


def covariate_catalogue():
    """Two numeric columns of the traditions table."""
    n = 60
    columns = {
        "altitude": np.array(numbers(n, 51, 1.0, 3000.0)),
        "rain": np.array(numbers(n, 52, 50.0, 4000.0)),
    }
    return plain(n, 14, 5, covariates=columns, effort=numbers(n, 5), families=7)


CHAIN = {
    "spread__turnover": 0.9,
    "spread__recording": "complete",
    "evidence__worlds": (*TWO, "contact", "transmission"),
}

FIXED: dict[str, Fixed] = {
    "equal propensity": Fixed(
        plain, {"emergence__propensity": "equal", "graph__rule": "nearest:4"}
    ),
    "effort and families": Fixed(
        lambda: plain(50, 14, 2, family=kin(50, 6, 2), effort=numbers(50, 2)), {}
    ),
    "effort to the half": Fixed(
        lambda: plain(40, 10, 3, families=5, effort=numbers(40, 3)), {"emergence__exponent": 0.5}
    ),
    "recorded": Fixed(lambda: plain(40, 10, 4, families=5), {"emergence__propensity": "recorded"}),
    "covariates": Fixed(
        covariate_catalogue,
        {"emergence__propensity": "covariates", "emergence__covariates": ("altitude", "rain")},
    ),
    "both margins": Fixed(
        lambda: plain(40, 14, 6, families=5), {"emergence__propensity": "margins"}
    ),
    "within a distance": Fixed(
        lambda: plain(40, 10, 7, families=5), {"graph__rule": "within:2500"}
    ),
    "delaunay": Fixed(lambda: plain(40, 10, 8, families=5), {"graph__rule": "delaunay"}),
    "gabriel": Fixed(lambda: plain(40, 10, 9, families=5), {"graph__rule": "gabriel"}),
    "hand-drawn contacts": Fixed(hand_drawn, {"graph__rule": "given"}),
    "branches": Fixed(with_branches, {"ancestry__level": "branch"}),
    "three surveys": Fixed(three_surveys, {}),
    "antimeridian": Fixed(over_the_antimeridian, {}),
    "poles": Fixed(both_poles, {"graph__rule": "nearest:5"}),
    "isolates": Fixed(
        lambda: plain(40, 10, 15, families=5),
        {"graph__rule": "within:900", "graph__bridges": False},
    ),
    "no ancestry, by values": Fixed(
        lambda: plain(60, 20, 16, effort=numbers(60, 16, 0.01, 10.0)),
        {"ancestry__level": "none", "evidence__multiplicity": "by", "evidence__seed": 77},
    ),
    "extremes": Fixed(extremes, {"graph__rule": "nearest:2"}),
    "contact and transmission": Fixed(
        lambda: plain(36, 12, 18, family=kin(36, 5, 18), most=0.4), CHAIN
    ),
    "transmission, reach, no families": Fixed(
        lambda: plain(36, 10, 19, most=0.4), {**CHAIN, "spread__reach": 1.5}
    ),
    "fitted turnover and recording": Fixed(
        lambda: plain(36, 40, 20, family=kin(36, 5, 20), effort=numbers(36, 20), most=0.5),
        {"evidence__worlds": (*TWO, "contact", "transmission")},
        near=("p_against_contact", "p_against_transmission", "q_against_transmission"),
    ),
}


def route_shares() -> dict[str, list[float]]:
    """Posterior means of the shares of a few motifs, from a small bank and a short training."""
    from twicetold.evidence.shares import build_bank, fit_posterior
    from twicetold.graph import contact_graph
    from twicetold.spread import SpreadModel

    made = plain(36, 8, 21, family=kin(36, 5, 21), most=0.4)
    model = SpreadModel(contact_graph(made, "nearest:4"), 0.9, family=made.family_codes)
    pool = ThreadPool(2)
    bank = build_bank(model, largest=16, seed=5, pool=pool, walks=600, use_cache=False)
    fitted = fit_posterior(bank, seed=5, pool=pool, members=1, steps=60)
    held = [made.holders(m) for m in range(made.n_motifs)]
    return {
        made.motif_ids[m]: [round(float(x), 4) for x in said.mean]
        for m, said in enumerate(fitted.posterior(held))
        if not said.refused
    }
