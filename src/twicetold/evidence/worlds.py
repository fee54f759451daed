"""Comparing every motif with the emergence-only and the ancestry-only world."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.evidence.propensities import (
    GroupPropensity,
    WithoutOwnRecord,
    group_propensity,
)
from twicetold.evidence.results import Comparison
from twicetold.evidence.study import Group, Study
from twicetold.references.ancestry import HolderSets, Lineages, ancestry_world
from twicetold.references.emergence import EmergenceWorld, emergence_world
from twicetold.references.law import Law
from twicetold.references.pvalue import p_attainable, p_few, p_many
from twicetold.statistics import STATISTICS, observe
from twicetold.workers import Pool, ThreadPool

#: Direction in which each statistic speaks against emergence alone.
DIRECTIONS = {
    "joins": "many",
    "joins_cross_family": "many",
    "joins_same_family": "many",
    "clusters": "few",
    "largest_cluster": "many",
    "strands": "few",
}
#: Statistics that only families make meaningful.
OF_FAMILIES = ("joins_cross_family", "joins_same_family", "strands")


@dataclass(frozen=True)
class ObservedMotifs:
    """Observed statistics by motif index: ``index`` lists the motifs, arrays follow it."""

    index: tuple[int, ...]
    surveyed: npt.NDArray[np.int64]
    holders: npt.NDArray[np.int64]
    values: npt.NDArray[np.int32]
    scores: npt.NDArray[np.int64]
    moran: npt.NDArray[np.float64]
    place: Mapping[int, int]

    def row(self, motif: int) -> dict[str, object]:
        """Give the columns of one motif."""
        k = self.place[motif]
        found = {name: int(v) for name, v in zip(STATISTICS, self.values[k], strict=True)}
        return {
            "holders": int(self.holders[k]),
            "surveyed": int(self.surveyed[k]),
            **found,
            "moran_i": float(self.moran[k]),
        }

    def value(self, motif: int, statistic: str) -> int:
        """Observed value of one of the integer statistics."""
        return int(self.values[self.place[motif], STATISTICS.index(statistic)])


@dataclass(frozen=True)
class WorldResult:
    """Comparisons by motif index, with what else there is to say."""

    comparisons: Mapping[int, tuple[Comparison, ...]]
    fits: Mapping[str, object] = field(default_factory=dict)
    tables: Mapping[str, pd.DataFrame] = field(default_factory=dict)
    notes: tuple[str, ...] = ()


def observe_motifs(study: Study) -> ObservedMotifs:
    """Count every statistic of every motif on its own graph."""
    index: list[int] = []
    parts = []
    surveyed: list[int] = []
    for group in study.groups:
        parts.append(observe(group.graph, group.holders, group.family_codes))
        index += group.motifs
        surveyed += [group.n] * len(group.motifs)
    return ObservedMotifs(
        index=tuple(index),
        surveyed=np.array(surveyed, dtype=np.int64),
        holders=np.concatenate([p.holders for p in parts]),
        values=np.concatenate([p.values for p in parts]),
        scores=np.concatenate([p.scores for p in parts]),
        moran=np.concatenate([p.moran for p in parts]),
        place={m: k for k, m in enumerate(index)},
    )


def against_emergence(study: Study, observed: ObservedMotifs, pool: Pool) -> WorldResult:
    """Compare each motif with traditions that each ring their own clock."""
    if study.plan.emergence.propensity == "margins":
        from twicetold.evidence.fixed_margins import against_margins

        return against_margins(study, observed, pool)
    comparisons: dict[int, tuple[Comparison, ...]] = {}
    fits: dict[str, object] = {}
    tables: dict[str, pd.DataFrame] = {}
    notes: list[str] = []
    for group in study.groups:
        propensity = group_propensity(study, group)
        fits |= propensity.fits
        tables |= propensity.tables
        notes += propensity.notes
        if propensity.own is None:
            found = _shared(study, group, propensity, observed, pool)
        else:
            found = _one_by_one(study, group, propensity, observed, pool)
        comparisons |= found
    return WorldResult(comparisons, fits, tables, tuple(notes))


def _shared(
    study: Study,
    group: Group,
    propensity: GroupPropensity,
    observed: ObservedMotifs,
    pool: Pool,
) -> dict[int, tuple[Comparison, ...]]:
    """One sweep for all motifs of a group."""
    scores: dict[int, set[int]] = {}
    for motif in group.motifs:
        k = observed.place[motif]
        scores.setdefault(int(observed.holders[k]), set()).add(int(observed.scores[k]))
    counts = group.counts()
    if not len(counts):
        return dict.fromkeys(group.motifs, ())
    world = emergence_world(
        group.graph,
        group.family_codes,
        propensity.shared,
        counts,
        draws=study.plan.evidence.draws,
        seed=study.plan.evidence.seed,
        pool=pool,
        moran_thresholds={n: np.array(sorted(v), dtype=np.int64) for n, v in scores.items() if n},
    )
    known: dict[tuple[str, int, float], Comparison] = {}
    return {m: _comparisons(study, group, world, observed, m, known) for m in group.motifs}


@dataclass(frozen=True)
class _Own:
    """What one motif's own sweep needs, for any worker."""

    study: Study
    group: Group
    propensity: WithoutOwnRecord
    observed: ObservedMotifs


def _one_by_one(
    study: Study,
    group: Group,
    propensity: GroupPropensity,
    observed: ObservedMotifs,
    pool: Pool,
) -> dict[int, tuple[Comparison, ...]]:
    """Each motif has its own propensities (its own record left out), so its own sweep."""
    assert propensity.own is not None
    shared = _Own(study, group, propensity.own, observed)
    found = pool.run(
        _own_sweep, shared, range(len(group.motifs)), label="emergence-only, motif by motif"
    )
    return dict(zip(group.motifs, found, strict=True))


def _own_sweep(shared: _Own, k: int) -> tuple[Comparison, ...]:
    """Compare one motif with the world of its own propensities."""
    group, observed, evidence = shared.group, shared.observed, shared.study.plan.evidence
    motif, n = group.motifs[k], len(group.holders[k])
    if not 1 <= n <= group.n:
        return ()
    place = observed.place[motif]
    world = emergence_world(
        group.graph,
        group.family_codes,
        shared.propensity(motif),
        np.array([n], dtype=np.int32),
        draws=evidence.draws,
        seed=evidence.seed,
        pool=ThreadPool(1),
        moran_thresholds={n: observed.scores[place : place + 1]},
    )
    return _comparisons(shared.study, group, world, observed, motif, {})


def _comparisons(  # noqa: PLR0917 - one record more than pylint's five
    study: Study,
    group: Group,
    world: EmergenceWorld,
    observed: ObservedMotifs,
    motif: int,
    known: dict[tuple[str, int, float], Comparison],
) -> tuple[Comparison, ...]:
    """Every statistic of one motif against emergence alone; joins decide.

    ``known`` holds what was compared before: many motifs have the same holders and joins.
    """
    k = observed.place[motif]
    n = int(observed.holders[k])
    if not 1 <= n <= group.n:
        return ()
    out = []
    for statistic, direction in DIRECTIONS.items():
        if statistic in OF_FAMILIES and not study.families:
            continue
        key = (statistic, n, float(observed.value(motif, statistic)))
        if key not in known:
            known[key] = compare(
                "emergence",
                statistic,
                direction,
                observed.value(motif, statistic),
                world.law(statistic, n),
                primary=statistic == "joins",
            )
        out.append(known[key])
    key = ("moran_i", n, float(observed.scores[k]))
    if key not in known:
        known[key] = _moran(world, n, int(observed.scores[k]), float(observed.moran[k]))
    out.append(known[key])
    return tuple(out)


def _moran(world: EmergenceWorld, n: int, score: int, moran: float) -> Comparison:
    """Compare Moran's I, which is known by its whole-number score."""
    defined = not math.isnan(moran)
    return Comparison(
        world="emergence",
        statistic="moran_i",
        direction="many",
        observed=moran,
        expected=world.moran_mean(n) if defined else math.nan,
        p=world.moran_p(n, score) if defined else math.nan,
        p_attainable=math.nan,
        primary=False,
    )


def compare(
    world: str, statistic: str, direction: str, observed: int, law: Law, *, primary: bool
) -> Comparison:
    """Compare an integer statistic with its law in a world."""
    tail = p_many if direction == "many" else p_few
    return Comparison(
        world=world,
        statistic=statistic,
        direction=direction,
        observed=observed,
        expected=law.mean(),
        p=float(tail(law, observed)),
        p_attainable=p_attainable(law, direction, known=observed),  # type: ignore[arg-type]
        primary=primary,
        law=law,
    )


def against_ancestry(study: Study, observed: ObservedMotifs, pool: Pool) -> WorldResult:
    """Compare each motif's cross-family joins with a world where only descent is at work."""
    comparisons: dict[int, tuple[Comparison, ...]] = {}
    silent = 0
    for group in study.groups:
        propensity = group_propensity(study, group)
        own = None
        if propensity.own is not None:
            own = np.concatenate(
                [propensity.own(m)[h] for m, h in zip(group.motifs, group.holders, strict=True)]
            )
        world = ancestry_world(
            group.graph,
            Lineages(group.family_codes, group.level_codes),
            propensity.shared,
            HolderSets.of(group.holders, own),
            draws=study.plan.evidence.draws,
            seed=study.plan.evidence.seed,
            pool=pool,
        )
        for k, motif in enumerate(group.motifs):
            n = len(group.holders[k])
            informative = int(world.informative[k])
            if not 1 < n < group.n or not informative:
                silent += 1
                comparisons[motif] = ()
                continue
            made = compare(
                "ancestry",
                "joins_cross_family",
                "many",
                int(world.observed[k]),
                world.laws[k],
                primary=True,
            )
            what = "branch" if study.plan.ancestry.level == "branch" else "family"
            plural = {"branch": "branches", "family": "families"}[what]
            said = f"{informative} {what if informative == 1 else plural} carry information"
            comparisons[motif] = (_with_note(made, said.replace("family carry", "family carries")),)
    notes: list[str] = []
    if silent:
        notes.append(
            f"For {silent:,} motifs the numbers held per {study.plan.ancestry.level} leave nothing "
            "to chance, so ancestry could not be set against contact."
        )
    if study.plan.ancestry.level == "family" and not study.catalogue.has_branches:
        notes.append(
            "No branches are named, so kin near and far count alike within a family. Where near "
            "kin live together at a border, inheritance can pass for contact a little too often."
        )
    return WorldResult(comparisons, notes=tuple(notes))


def _with_note(comparison: Comparison, note: str) -> Comparison:
    return replace(comparison, note=note)
