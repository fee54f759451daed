"""How far to trust a verdict, and what else might explain it: everything beside the worlds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import pandas as pd

from twicetold.evidence.categories import Categories, categories
from twicetold.evidence.needed import joins_needed
from twicetold.evidence.pairs import companions
from twicetold.evidence.stability import Stability, stability
from twicetold.evidence.study import Study
from twicetold.evidence.unmeasured import unmeasured
from twicetold.evidence.worlds import ObservedMotifs
from twicetold.workers import Pool

if TYPE_CHECKING:
    from twicetold.evidence.ranking import Worlds


@dataclass(frozen=True)
class Confounders:
    """What :func:`confounders` found, ready for the details of a run.

    Parameters
    ----------
    parts : mapping of int to mapping
        Fields of :class:`MotifEvidence` by motif index: ``hidden_bound``, ``stability``, ``pairs``.
    columns : mapping of str to mapping of int to float
        ``hidden_bound`` and ``stability``, by motif index.
    categories : pandas.DataFrame or None
    tables : mapping of str to pandas.DataFrame
        ``hidden``, ``hidden_lengths``, ``stability_runs``, ``category_pairs``, ``needed``.
    notes : tuple of str
    """

    parts: Mapping[int, Mapping[str, Any]] = field(default_factory=dict)
    columns: Mapping[str, Mapping[int, Any]] = field(default_factory=dict)
    categories: pd.DataFrame | None = None
    tables: Mapping[str, pd.DataFrame] = field(default_factory=dict)
    notes: tuple[str, ...] = ()


def confounders(
    study: Study,
    observed: ObservedMotifs,
    worlds: Worlds,
    table: pd.DataFrame,
    pool: Pool,
    *,
    cache: bool = True,
) -> Confounders:
    """Compute the hidden bound, stability, categories, pairs and the joins needed.

    Parameters
    ----------
    study : Study
    observed : ObservedMotifs
    worlds : Worlds
    table : pandas.DataFrame
        Judged.
    pool : Pool
    cache : bool
        Whether banks of snapshots may be kept on disk.
    """
    hidden = unmeasured(study, observed, table, pool)
    held = Stability()
    if study.plan.sensitivity.stability:
        held = stability(study, worlds, table, pool, cache=cache)
    plan = study.plan
    told = "emergence" in plan.evidence.worlds
    whole = len(observed.index) == study.catalogue.n_motifs
    kinds = categories(table, plan) if told and whole else Categories()
    beside = companions(study.catalogue, observed.index, alpha=plan.evidence.alpha, pool=pool)
    parts: dict[int, dict[str, Any]] = {m: {} for m in observed.index}
    for motif, bound in hidden.bounds.items():
        parts[motif]["hidden_bound"] = bound
    for motif, frame in held.by_motif.items():
        parts[motif]["stability"] = frame
    for motif, frame in beside.by_motif.items():
        parts[motif]["pairs"] = frame
    columns = {
        "hidden_bound": {m: bound["log_sd"] for m, bound in hidden.bounds.items()},
        "stability": held.share,
    }
    tables = {
        "hidden": hidden.by_motif,
        "hidden_lengths": hidden.by_length,
        "stability_runs": held.runs,
        "category_pairs": kinds.pairs,
        "needed": joins_needed(study, pool) if told else None,
    }
    return Confounders(
        parts=parts,
        columns={name: values for name, values in columns.items() if values},
        categories=kinds.frame,
        tables={name: frame for name, frame in tables.items() if frame is not None},
        notes=(*hidden.notes, *held.notes, *beside.notes),
    )
