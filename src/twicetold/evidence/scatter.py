"""Is a motif more scattered than contact, or transmission of any kind, would leave it?

*Contact-only*: every gain by contact. *Transmission-only*: contact and inheritance in any
proportion (a grid of inheritance shares); no second invention unless nobody is left to tell it to.
Both p-values are the worst case over what the fits leave open (:mod:`.confidence`), and the second
over the inheritance share as well. Many strands is the primary measure of scatter against
transmission, with ties broken by fewer joins (:func:`twicetold.spread.world.scatter_score`); few
joins against contact (which knows no families); each stands beside the other.

Weighted draws become a p by :mod:`twicetold.references.pvalue`: their share times their effective
number, the observed motif counting as one effective draw more.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from typing import Literal

import numpy as np
import numpy.typing as npt

from twicetold.evidence.confidence import ConfidenceSet, Point
from twicetold.evidence.results import Comparison
from twicetold.evidence.setting import KEPT, Setting, packed, unpacked
from twicetold.evidence.shares.cache import open_entry
from twicetold.graph import ContactGraph
from twicetold.references.law import Law
from twicetold.references.pvalue import p_few, p_many
from twicetold.spread.chain import SpreadModel
from twicetold.spread.world import CLASSES, GROWTH, SpreadWorld, scatter_score, spread_world
from twicetold.workers import Pool

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int32]
World = Literal["contact", "transmission"]

#: Inheritance shares over which transmission-only takes its worst case.
INHERITANCE = (0.0, 0.25, 0.5, 0.75, 1.0)
#: Reweighting to another turnover must keep this part of the effective draws; else it is walked.
KEEP = 0.4
#: Worlds beside the first (other inheritance shares and recordings) get this part of the walks, and
#: may grow to this many times it: of 10,000 walks, that leaves them some 2,000 effective draws.
BESIDE, BESIDE_GROWTH = 0.4, 2
#: World -> statistics, the one that decides first.
MEASURES: dict[World, tuple[str, ...]] = {
    "contact": ("joins", "strands"),
    "transmission": ("scatter", "joins"),
}
#: The side of each statistic that is more scattered.
SIDES: dict[str, Literal["many", "few"]] = {"joins": "few", "strands": "many", "scatter": "many"}


@dataclass(frozen=True)
class Transmission:
    """What the worlds without a second invention are made of.

    Parameters
    ----------
    graph : ContactGraph
        Over the surveyed traditions.
    confidence : ConfidenceSet
    family : (N,) int32 or None
        None without families: transmission then means contact.
    propensity : (N,) float64 or None
        Only matters where every route of transmission is shut.
    reach : float
    inheritance : tuple of float
        Grid of shares; only 0 is used without families.
    walks, seed : int
    """

    graph: ContactGraph
    confidence: ConfidenceSet
    family: IntArray | None = None
    propensity: FloatArray | None = None
    reach: float = 1.0
    inheritance: tuple[float, ...] = INHERITANCE
    walks: int = 10_000
    seed: int = 1

    def model(self, share: float, point: Point, turnover: float) -> SpreadModel:
        """Spread model at one inheritance share and one point of the confidence set."""
        return SpreadModel(
            self.graph,
            turnover,
            shares=(0.0, 1.0 - share, share),
            family=self.family,
            propensity=self.propensity,
            reach=self.reach,
            recorded=point.recorded,
            spill="transmission",
        )

    @property
    def shares(self) -> tuple[float, ...]:
        """Inheritance shares in use."""
        return (0.0,) if self.family is None else self.inheritance


@dataclass(frozen=True)
class _Tail:
    """Worst-case p for every value 0 .. len - 1, and the setting that gives it."""

    p: FloatArray
    worst: npt.NDArray[np.int64]
    settings: tuple[Setting, ...]
    laws: tuple[Law, ...]


@dataclass(frozen=True)
class ScatterWorlds:
    """Contact-only and transmission-only laws at every count asked for.

    Parameters
    ----------
    settings : tuple of Setting
        Inheritance share 0 at the fitted recording and turnover comes first.
    beta : float
        Added to every worst case (Berger & Boos 1994).
    families : int
        Number of families (N without any): strands cannot be more.
    kin : bool
        Whether inheritance is one of the routes.
    """

    settings: tuple[Setting, ...]
    beta: float
    families: int
    kin: bool
    _tails: dict[tuple[World, str, int], _Tail] = field(default_factory=dict, repr=False)

    @property
    def contact(self) -> Setting:
        """Contact-only world at the fitted turnover and recording (for bands and pictures)."""
        return self.settings[0]

    def compare(self, count: int, *, joins: int, strands: int) -> tuple[Comparison, ...]:
        """Compare a motif with both worlds.

        Parameters
        ----------
        count : int
            Recorded holders; must be among the counts asked for.
        joins, strands : int
            Observed.

        Returns
        -------
        tuple of Comparison
            Four: two measures against contact, then two against transmission. ``law`` and
            ``expected`` are those of the worst case.
        """
        score = int(scatter_score(strands, joins, count))
        observed = {"joins": joins, "strands": strands, "scatter": score}
        return tuple(
            self._one(world, statistic, count, observed)
            for world, measures in MEASURES.items()
            for statistic in measures
        )

    def p(self, world: World, statistic: str, count: int, value: int) -> float:
        """Worst-case p of one observed value, ``beta`` included; NaN where never drawn."""
        tail = self._tail(world, statistic, count)
        if not tail.laws:
            return float("nan")
        return float(min(1.0, tail.p[min(value, len(tail.p) - 1)] + self.beta))

    def p_scatter(self, count: int, *, joins: int, strands: int) -> float:
        """Worst-case p against transmission of a motif: strands, ties broken by joins."""
        return self.p("transmission", "scatter", count, int(scatter_score(strands, joins, count)))

    def _one(
        self, world: World, statistic: str, count: int, observed: Mapping[str, int]
    ) -> Comparison:
        # What is shown of the scatter is its strands; the joins only break ties.
        shown = "strands" if statistic == "scatter" else statistic
        direction, first = SIDES[statistic], statistic == MEASURES[world][0]
        seen, value = observed[shown], observed[statistic]
        tail = self._tail(world, statistic, count)
        if not tail.laws:
            nan = float("nan")
            note = f"No walk came by {count} recorded holders."
            return Comparison(world, shown, direction, seen, nan, nan, nan, first, None, note)
        k = int(tail.worst[min(value, len(tail.p) - 1)])
        setting = tail.settings[k]
        law = setting.law(shown, count)
        assert law is not None  # laws of a count are there together or not at all
        said = [f"worst case at turnover {setting.turnover:.4g}"]
        if statistic == "scatter":
            said.insert(0, "ties broken by fewer joins")
        if world == "transmission" and self.kin:
            said.append(f"inheritance share {setting.inheritance:g}")
        if np.isfinite(setting.kappa):
            said.append(f"recording rate {setting.kappa:.4g}")
        said.append(f"{law.effective:,.0f} effective draws")
        return Comparison(
            world=world,
            statistic=shown,
            direction=direction,
            observed=seen,
            expected=law.mean(),
            p=self.p(world, statistic, count, value),
            p_attainable=self.p(world, statistic, count, self._extreme(statistic, count, value)),
            primary=first,
            law=law,
            note=", ".join(said),
        )

    def _extreme(self, statistic: str, count: int, value: int) -> int:
        """Most scattered value a motif of this count could show."""
        most = min(count, self.families)
        if statistic == "scatter":
            return max(int(scatter_score(most, 0, count)), value)
        return max(most, value) if statistic == "strands" else 0

    def _tail(self, world: World, statistic: str, count: int) -> _Tail:
        key = (world, statistic, count)
        if key not in self._tails:
            self._tails[key] = self._make_tail(world, statistic, count)
        return self._tails[key]

    def _make_tail(self, world: World, statistic: str, count: int) -> _Tail:
        direction = SIDES[statistic]
        settings, laws = [], []
        for setting in self.settings:
            if world == "contact" and setting.inheritance > 0.0:
                continue
            law = setting.law(statistic, count)
            if law is not None:
                settings.append(setting)
                laws.append(law)
        top = max((int(law.values[-1]) for law in laws), default=0)
        values = np.arange(max(top, count) + 2)
        tail = p_many if direction == "many" else p_few
        p = np.array([tail(law, values) for law in laws]).reshape(len(laws), len(values))
        worst = p.argmax(axis=0) if laws else np.zeros(len(values), dtype=np.int64)
        most = p.max(axis=0) if laws else np.full(len(values), np.nan)
        return _Tail(most, worst, tuple(settings), tuple(laws))


def scatter_worlds(
    what: Transmission,
    counts: Sequence[int] | IntArray,
    *,
    largest: int,
    pool: Pool | None = None,
    use_cache: bool = False,
) -> ScatterWorlds:
    """Walk the worlds without a second invention.

    One world is walked for each inheritance share and recording, at the fitted turnover; the other
    turnovers of the confidence set reuse its walks by reweighting, count by count, and are walked
    themselves only where less than four tenths of the effective draws would be left. The law of a
    count depends on no other count. Only laws are kept, never walks.

    Parameters
    ----------
    what : Transmission
    counts : sequence of int
        Recorded counts, 1 .. ``largest``.
    largest : int
        The catalogue's largest count, whatever is asked for.
    pool : Pool or None
    use_cache : bool
        Whether finished worlds are kept on disk and read from there.
    """
    wanted = np.unique(np.asarray(counts, dtype=np.int32))
    settings = []
    for share in what.shares:
        for point in what.confidence.points:
            settings += _settings(_Walks(what, share, point, wanted, largest, pool), use_cache)
    first = what.confidence.points[0]
    settings.sort(key=lambda s: (s.inheritance, s.kappa != first.kappa, s.turnover != first.centre))
    families = what.graph.n if what.family is None else len(np.unique(what.family))
    return ScatterWorlds(
        tuple(settings), what.confidence.beta, families, kin=what.family is not None
    )


@dataclass(frozen=True)
class _Walks:
    """One inheritance share and recording: what is walked for it."""

    what: Transmission
    share: float
    point: Point
    counts: IntArray
    largest: int
    pool: Pool | None

    @property
    def first(self) -> bool:
        """Whether this is contact alone at the fitted recording."""
        return self.share == 0.0 and self.point is self.what.confidence.points[0]

    @property
    def walks(self) -> int:
        """Walks of this world."""
        return self.what.walks if self.first else max(100, round(BESIDE * self.what.walks))

    def walk(self, turnover: float, counts: IntArray) -> SpreadWorld:
        """Walk at one turnover."""
        return spread_world(
            self.what.model(self.share, self.point, turnover),
            counts,
            largest=self.largest,
            walks=self.walks,
            seed=self.what.seed,
            pool=self.pool,
            growth=GROWTH if self.first else BESIDE_GROWTH,
        )

    def depends_on(self) -> dict[str, object]:
        """Everything the laws are made of, for the cache's key."""
        model = self.what.model(self.share, self.point, self.point.centre)
        own = {f.name: getattr(model, f.name) for f in fields(model)}
        del own["graph"], own["family"]
        return {
            **own,
            "work": "scatter",
            "traditions": model.graph.n,
            "edges": model.graph.edges,
            "family_codes": model.family_codes,
            "turnovers": self.point.turnovers,
            "counts": self.counts,
            "largest": self.largest,
            "walks": self.walks,
            "seed": self.what.seed,
            "design": (KEEP, KEPT, CLASSES, GROWTH, BESIDE_GROWTH),
        }


def _settings(walks: _Walks, use_cache: bool) -> list[Setting]:
    """Laws at every turnover of one share and recording, from the cache where they are there."""
    entry = open_entry(walks.depends_on()) if use_cache else None
    found = entry.read("laws") if entry is not None else None
    if found is not None:
        return unpacked(found, walks.share, walks.point)
    made = _walked(walks)
    if entry is not None:
        entry.write("laws", packed(made))
        entry.finish()
    return made


def _walked(walks: _Walks) -> list[Setting]:
    """Walk the centre, then whatever reweighting cannot reach."""
    centre = walks.walk(walks.point.centre, walks.counts)
    out = []
    for turnover in walks.point.turnovers:
        lost = [
            c
            for c in walks.counts.tolist()
            if centre.effective(c, turnover) < KEEP * centre.effective(c)
        ]
        own = walks.walk(turnover, np.array(lost, dtype=np.int32)) if lost else None
        laws: dict[tuple[str, int], Law] = {}
        for count in walks.counts.tolist():
            here = own is not None and count in lost
            world = own if own is not None and here else centre
            if world.effective(count) <= 0.0:
                continue
            made = world.laws(KEPT, count, None if here else turnover)
            laws |= {(name, count): law for name, law in zip(KEPT, made, strict=True)}
        out.append(Setting(walks.share, walks.point.kappa, turnover, laws, frozenset(lost)))
    return out


def at_reach(what: Transmission, reach: float) -> Transmission:
    """Give the same worlds with contact of another mean reach (sensitivity: 1, 1.5 and 3)."""
    return replace(what, reach=reach)
