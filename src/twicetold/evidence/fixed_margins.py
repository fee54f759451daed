"""Comparing every motif with the emergence-only world that keeps both margins of the catalogue."""

from __future__ import annotations

import math
import warnings

from twicetold.errors import TwicetoldWarning
from twicetold.evidence.results import Comparison
from twicetold.evidence.study import Study, prepare
from twicetold.evidence.worlds import (
    DIRECTIONS,
    OF_FAMILIES,
    ObservedMotifs,
    WorldResult,
    compare,
)
from twicetold.references.margins import MarginsWorld, View, margins_world
from twicetold.workers import Pool


def against_margins(study: Study, observed: ObservedMotifs, pool: Pool) -> WorldResult:
    """Compare each motif with tables that have the catalogue's row and column totals.

    The totals are the whole catalogue's, so every motif takes part in the trades even when one
    alone is asked about; it then gets the numbers it gets in the ranking.

    Parameters
    ----------
    study : Study
    observed : ObservedMotifs
        Motifs to compare.
    pool : Pool

    Returns
    -------
    WorldResult
        ``fits["margins"]`` says how well the chain of trades mixed.
    """
    whole = _whole(study)
    views = [
        View(g.traditions, g.graph, g.family_codes, g.motifs, g.holders)
        for g in whole.groups
        if g.n
    ]
    evidence = study.plan.evidence
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", TwicetoldWarning)  # said in the notes instead
        world = margins_world(
            views, study.catalogue.n_traditions, draws=evidence.draws, seed=evidence.seed, pool=pool
        )
    return WorldResult(
        comparisons={m: _comparisons(study, world, observed, m) for m in observed.index},
        fits={"margins": world.mixing.summary()},
        notes=_notes(world),
    )


def _whole(study: Study) -> Study:
    """Give the study of every motif, whichever were asked about."""
    asked = sum(len(g.motifs) for g in study.groups)
    if asked == study.catalogue.n_motifs:
        return study
    return prepare(study.catalogue, study.plan)


def _comparisons(
    study: Study, world: MarginsWorld, observed: ObservedMotifs, motif: int
) -> tuple[Comparison, ...]:
    k = observed.place[motif]
    if not 1 <= observed.holders[k] <= observed.surveyed[k]:
        return ()
    out = [
        compare(
            "emergence",
            statistic,
            direction,
            observed.value(motif, statistic),
            world.law(motif, statistic),
            primary=statistic == "joins",
        )
        for statistic, direction in DIRECTIONS.items()
        if study.families or statistic not in OF_FAMILIES
    ]
    moran = float(observed.moran[k])
    defined = not math.isnan(moran)
    out.append(
        Comparison(
            world="emergence",
            statistic="moran_i",
            direction="many",
            observed=moran,
            expected=world.moran_mean(motif) if defined else moran,
            p=world.moran_p(motif) if defined else moran,
            p_attainable=float("nan"),
            primary=False,
        )
    )
    return tuple(out)


def _notes(world: MarginsWorld) -> tuple[str, ...]:
    mixing = world.mixing
    notes = [
        f"Both margins of the catalogue were held fixed by a chain of trades: {mixing.sweeps} "
        f"sweeps between the hub and every draw, after which {mixing.overlap[mixing.sweeps]:.0%} "
        f"of the records are in place (chance alone keeps {mixing.plateau:.0%}, reached after "
        f"{mixing.plateau_sweeps})."
    ]
    if not mixing.mixed:
        notes.append(
            "The chain of trades had not levelled off: p-values against emergence are valid but "
            "weak. Margins that leave so little to chance are better met by another propensity."
        )
    if mixing.frozen:
        plural = "motif was" if mixing.frozen == 1 else "motifs were"
        notes.append(
            f"{mixing.frozen:,} {plural} never changed by any trade (nobody or nearly everybody "
            "holds them, or nobody else may): their p against emergence is 1."
        )
    return tuple(notes)
