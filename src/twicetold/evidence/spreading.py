"""Comparing every motif with the worlds of the spread chain, and their route shares.

Turnover, recording and the worlds depend on the catalogue alone, never on which motifs are asked
for: a motif tested alone gets what it has in the ranking.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.evidence.confidence import ConfidenceSet, Prevalence, confidence_set
from twicetold.evidence.propensities import group_propensity
from twicetold.evidence.results import Comparison, RouteShares
from twicetold.evidence.scatter import ScatterWorlds, Transmission, scatter_worlds
from twicetold.evidence.shares import build_bank, fit_posterior
from twicetold.evidence.study import Group, Study
from twicetold.evidence.worlds import ObservedMotifs
from twicetold.references.pvalue import p_many
from twicetold.spread import SpreadModel, cap_for, chain_tables
from twicetold.spread.turnover import FEWEST
from twicetold.spread.world import expected_events
from twicetold.workers import Pool

#: Route shares are given for up to this many holders on any map, and for more as long as the walks
#: of a bank stay within so many events (some twenty minutes of one processor).
MOST_HOLDERS, MOST_EVENTS = 300, 1e10
#: Walks of a bank for each walk of the plan (which speaks of one world; a bank holds all shares).
BANK_WALKS = 3.3
#: Surveyed sets that get a bank of their own: those with the most motifs.
MOST_BANKS = 8


@dataclass(frozen=True)
class SpreadResult:
    """What the spread chain says, by motif index.

    Parameters
    ----------
    comparisons : mapping of int to tuple of Comparison
    shares : mapping of int to RouteShares
    power : mapping of int to (float, float)
        Chance of rejecting emergence-only if contact is the truth, and transmission-only if
        emergence is, at the motif's number of holders.
    prevalence : pandas.DataFrame or None
        ``holders, motifs, fitted, low, high`` of the set of traditions with the most motifs.
    bands : pandas.DataFrame or None
        ``world, holders, low, median, high`` clusters in the contact-only world, same set.
    fits, tables, notes
        See :class:`twicetold.evidence.results.Ranking`.
    main : (Ground, ScatterWorlds) or None
        Of that same set, for what else is asked of them.
    """

    comparisons: Mapping[int, tuple[Comparison, ...]] = field(default_factory=dict)
    shares: Mapping[int, RouteShares] = field(default_factory=dict)
    power: Mapping[int, tuple[float, float]] = field(default_factory=dict)
    prevalence: pd.DataFrame | None = None
    bands: pd.DataFrame | None = None
    fits: Mapping[str, object] = field(default_factory=dict)
    tables: Mapping[str, pd.DataFrame] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    main: tuple[Ground, ScatterWorlds] | None = None


@dataclass(frozen=True)
class Ground:
    """What the spread chain needs of one surveyed set, from the whole catalogue.

    Parameters
    ----------
    group : Group
        Graph, families and traditions; its motifs may be only some of the set's.
    counts : (M,) int64
        Holders of *every* motif of the catalogue searched in this set.
    confidence : ConfidenceSet
    propensity : (N,) float64
    own_fit : bool
        False where too few motifs were searched here and the turnover is the whole catalogue's.
    """

    group: Group
    counts: npt.NDArray[np.int64]
    confidence: ConfidenceSet
    propensity: npt.NDArray[np.float64]
    own_fit: bool

    @property
    def wanted(self) -> npt.NDArray[np.int32]:
        """Counts that scatter can say something of, increasing."""
        open_ = np.unique(self.counts[(self.counts >= 2) & (self.counts < self.group.n)])
        return open_.astype(np.int32)

    def transmission(self, study: Study) -> Transmission:
        """Lay out the worlds without a second invention under the plan."""
        return Transmission(
            self.group.graph,
            self.confidence,
            family=self.group.family_codes if study.families else None,
            propensity=invention_rates(study, self),
            reach=study.plan.spread.reach,
            walks=study.plan.evidence.walks,
            seed=study.plan.evidence.seed,
        )

    def model(self, study: Study) -> SpreadModel:
        """Spread chain at the fitted turnover and recording, for banks."""
        point = self.confidence.points[0]
        return SpreadModel(
            self.group.graph,
            point.centre,
            family=self.group.family_codes if study.families else None,
            propensity=invention_rates(study, self),
            reach=study.plan.spread.reach,
            recorded=point.recorded,
        )


def invention_rates(study: Study, ground: Ground) -> npt.NDArray[np.float64]:
    """(N,) rates at which motifs emerge in the spread chain.

    The plan's propensity says how readily a tradition *shows* a motif, so it holds what was
    collected there. Where the chain has recording of its own, that part is taken out again, or
    effort would count twice: effort and row totals are all recording, a covariate fit has effort
    as its offset.
    """
    rule, propensity = study.plan.emergence.propensity, ground.propensity
    if ground.confidence.points[0].recorded is None:
        return propensity
    if rule == "covariates" and study.catalogue.effort is not None:
        return propensity / study.catalogue.effort[ground.group.traditions]
    return np.ones(ground.group.n)


def against_spread(
    study: Study,
    observed: ObservedMotifs,
    pool: Pool,
    *,
    cache: bool,
    emergence: Mapping[int, tuple[Comparison, ...]],
) -> SpreadResult:
    """Compare each motif with contact-only and transmission-only, and give its route shares.

    Parameters
    ----------
    study : Study
    observed : ObservedMotifs
    pool : Pool
    cache : bool
        Whether banks and worlds are kept on disk.
    emergence : mapping of int to tuple of Comparison
        Comparisons with the emergence-only world, whose laws the power needs; may be empty.
    """
    asked = set(study.plan.evidence.worlds)
    comparisons: dict[int, tuple[Comparison, ...]] = {}
    shares: dict[int, RouteShares] = {}
    power: dict[int, tuple[float, float]] = {}
    notes: list[str] = []
    main = main_set(study)
    prevalence = bands = both = None
    fits: dict[str, object] = {}
    tables: dict[str, pd.DataFrame] = {}
    banked = sets_with_banks(study)
    for group in study.groups:
        ground = prepare_ground(study, group)
        first = group_set(study, group) == main
        if first:
            fits, tables, prevalence = described(ground)
        notes += ground.confidence.notes
        if not ground.own_fit:
            notes.append(
                "Where traditions were searched for too few motifs to fit a turnover, it was "
                "fitted to the whole catalogue."
            )
        if asked & {"contact", "transmission"} and len(ground.wanted):
            worlds = scatter_worlds(
                ground.transmission(study),
                ground.wanted,
                largest=int(ground.wanted[-1]),
                pool=pool,
                use_cache=cache,
            )
            _compare(study, group, observed, worlds, comparisons)
            _powers(study, group, worlds, emergence, power)
            if first:
                bands, both = contact_bands(worlds, ground.wanted), (ground, worlds)
        if "shares" in asked and len(ground.wanted):
            if group_set(study, group) in banked:
                _give_shares(study, ground, pool, cache, shares)
            else:
                notes.append(
                    f"Route shares are given for the {MOST_BANKS} sets of surveyed traditions with "
                    "the most motifs only; each needs a bank of simulated motifs of its own."
                )
    said = tuple(dict.fromkeys(notes))
    return SpreadResult(comparisons, shares, power, prevalence, bands, fits, tables, said, both)


def group_set(study: Study, group: Group) -> int:
    """Index of the surveyed set a group stands for."""
    return int(study.catalogue.surveyed_of[group.motifs[0]])


def _set_sizes(study: Study) -> npt.NDArray[np.int64]:
    catalogue = study.catalogue
    return np.bincount(catalogue.surveyed_of, minlength=len(catalogue.surveyed_sets))


def main_set(study: Study) -> int:
    """Surveyed set with the most motifs of the catalogue (the first of equals)."""
    return int(np.argmax(_set_sizes(study)))


def sets_with_banks(study: Study) -> frozenset[int]:
    """Surveyed sets that get route shares, decided by the catalogue, not by what is asked for."""
    sizes = _set_sizes(study)
    return frozenset(np.argsort(-sizes, kind="stable")[:MOST_BANKS].tolist())


def prepare_ground(study: Study, group: Group) -> Ground:
    """Fit turnover and recording for one surveyed set, from every motif of the catalogue."""
    catalogue, plan = study.catalogue, study.plan
    here = catalogue.surveyed_of == group_set(study, group)
    totals = np.asarray(catalogue.attested.sum(axis=1)).ravel().astype(np.int64)
    counts = totals[here]
    least = min(plan.spread.min_holders, group.n)
    own = bool((counts >= least).sum() >= FEWEST) or bool(here.all())
    searched = np.zeros(catalogue.n_traditions, dtype=np.int64)
    for k, mask in enumerate(catalogue.surveyed_sets):
        searched += mask * int((catalogue.surveyed_of == k).sum())
    held = np.asarray(catalogue.attested.sum(axis=0)).ravel().astype(np.int64)
    effort = None if catalogue.effort is None else catalogue.effort[group.traditions]
    confidence = confidence_set(
        Prevalence(
            counts if own else totals[totals <= group.n],
            group.n,
            effort,
            held[group.traditions],
            searched[group.traditions],
        ),
        turnover=plan.spread.turnover,
        recording=plan.spread.recording,
        min_holders=plan.spread.min_holders,
        seed=plan.evidence.seed,
    )
    return Ground(group, counts, confidence, group_propensity(study, group).shared, own)


def _compare(
    study: Study,
    group: Group,
    observed: ObservedMotifs,
    worlds: ScatterWorlds,
    into: dict[int, tuple[Comparison, ...]],
) -> None:
    """Add each motif's comparisons with the worlds the plan asks for."""
    asked = study.plan.evidence.worlds
    for motif, held in zip(group.motifs, group.holders, strict=True):
        if not 2 <= len(held) < group.n:
            continue
        made = worlds.compare(
            len(held),
            joins=observed.value(motif, "joins"),
            strands=observed.value(motif, "strands"),
        )
        into[motif] = tuple(c for c in made if c.world in asked)


def _powers(
    study: Study,
    group: Group,
    worlds: ScatterWorlds,
    emergence: Mapping[int, tuple[Comparison, ...]],
    into: dict[int, tuple[float, float]],
) -> None:
    """Chance that each false world would be rejected at the level, by number of holders."""
    alpha = study.plan.evidence.alpha
    known: dict[int, tuple[float, float]] = {}
    for motif, held in zip(group.motifs, group.holders, strict=True):
        n = len(held)
        if n not in known and 2 <= n < group.n:
            laws = {c.statistic: c.law for c in emergence.get(motif, ()) if c.world == "emergence"}
            joins, strands = laws.get("joins"), laws.get("strands", laws.get("clusters"))
            contact = worlds.contact.law("joins", n)
            a = b = math.nan
            if joins is not None and contact is not None:
                rejecting = np.asarray(p_many(joins, contact.values)) <= alpha
                a = float(contact.weights[rejecting].sum() / contact.total)
            if strands is not None:
                # Ties are left unbroken, since the emergence-only law is of strands alone: the
                # power told is a little less than the true one.
                told = [worlds.p("transmission", "strands", n, int(v)) for v in strands.values]
                b = float(strands.weights[np.array(told) <= alpha].sum() / strands.total)
            known[n] = (a, b)
        if n in known:
            into[motif] = known[n]


def contact_bands(worlds: ScatterWorlds, counts: npt.NDArray[np.int32]) -> pd.DataFrame:
    """95 % band of clusters in the contact-only world, at each count."""
    laws = {int(n): worlds.contact.law("clusters", int(n)) for n in counts}
    return pd.DataFrame(
        [
            ("contact", n, law.quantile(0.025), law.quantile(0.5), law.quantile(0.975))
            for n, law in laws.items()
            if law is not None
        ],
        columns=["world", "holders", "low", "median", "high"],
    )


def _give_shares(
    study: Study, ground: Ground, pool: Pool, cache: bool, into: dict[int, RouteShares]
) -> None:
    """Add each motif's posterior of the route shares."""
    seed, walks = study.plan.evidence.seed, bank_walks(study)
    model = ground.model(study)
    largest = banked_up_to(model, ground.wanted, walks)
    bank = build_bank(model, largest=largest, seed=seed, pool=pool, walks=walks, use_cache=cache)
    told = fit_posterior(bank, seed=seed, pool=pool).posterior(ground.group.holders)
    into |= dict(zip(ground.group.motifs, told, strict=True))


def bank_walks(study: Study) -> int:
    """Walks of a bank under the plan."""
    return round(BANK_WALKS * study.plan.evidence.walks)


def banked_up_to(model: SpreadModel, counts: npt.NDArray[np.int32], walks: int) -> int:
    """Largest count a bank covers: see :data:`MOST_HOLDERS`.

    Parameters
    ----------
    model : SpreadModel
    counts : (K,) int32
        Counts of the catalogue, increasing, at least one.
    walks : int
    """
    within = int(counts[counts <= MOST_HOLDERS][-1]) if counts[0] <= MOST_HOLDERS else MOST_HOLDERS
    beyond = counts[counts > MOST_HOLDERS].tolist()
    # A walk has the more events the higher it is led, so the first one over the limit ends it.
    low, high = 0, len(beyond)
    while low < high:
        middle = (low + high) // 2
        tables = chain_tables(model, cap_for(model, int(beyond[middle])))
        if walks * expected_events(tables) <= MOST_EVENTS:
            low = middle + 1
        else:
            high = middle
    return int(beyond[low - 1]) if low else within


def described(
    ground: Ground,
) -> tuple[dict[str, object], dict[str, pd.DataFrame], pd.DataFrame | None]:
    """Fits as plain numbers, their tables, and the prevalence curve with the fit."""
    confidence = ground.confidence
    turnover, recording = confidence.turnover, confidence.recording
    fits: dict[str, object] = {}
    tables: dict[str, pd.DataFrame] = {}
    if turnover is not None:
        fits |= {
            "turnover": turnover.turnover,
            "turnover_low": turnover.low,
            "turnover_high": turnover.high,
            "turnover_motifs": turnover.motifs,
            "turnover_goodness_p": turnover.fit_p,
            "turnover_dispersion": turnover.dispersion,
        }
        tables["turnover_fit"] = turnover.classes
    else:
        fits["turnover"] = confidence.points[0].centre
    if confidence.assumed is not None:
        fits["turnover_assumed_low"], fits["turnover_assumed_high"] = confidence.assumed
    point = confidence.points[0]
    fits["mean_recorded"] = 1.0 if point.recorded is None else float(point.recorded.mean())
    if recording is not None and not recording.refused:
        fits |= {
            "recording_rate": recording.kappa,
            "recording_rate_low": recording.low,
            "recording_rate_high": recording.high,
        }
    return fits, tables, _prevalence(ground)


def _prevalence(ground: Ground) -> pd.DataFrame | None:
    seen = np.bincount(ground.counts, minlength=ground.group.n + 1)[1 : ground.group.n + 1]
    turnover = ground.confidence.turnover
    if turnover is None:
        return None
    curve = turnover.curve()
    curve.insert(1, "motifs", seen)
    return curve
