"""What the pages show beside the verdict: clusters, correlogram, bands, prevalence, categories."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.evidence.alone import worlds_alone
from twicetold.evidence.confounders import confounders
from twicetold.evidence.study import Group, Study
from twicetold.statistics import (
    DistanceClasses,
    clusters,
    correlogram,
    distance_classes,
    local_joins,
)
from twicetold.workers import Pool

if TYPE_CHECKING:
    from twicetold.evidence.ranking import Worlds
    from twicetold.evidence.worlds import ObservedMotifs

#: Number of distance classes of a correlogram.
CLASSES = 10
#: Half-width of the envelope in standard deviations (95 % under a normal approximation).
ENVELOPE = 1.959964


@dataclass(frozen=True)
class Details:
    """By motif index, and for the catalogue as a whole.

    Parameters
    ----------
    parts : mapping of int to mapping
        Keyword arguments of :class:`MotifEvidence` for each motif.
    columns : mapping of str to mapping of int to object
        Columns to add to the table, by motif index.
    bands, prevalence, categories : pandas.DataFrame or None
    tables : mapping of str to pandas.DataFrame
    notes : tuple of str
    fits : mapping of str to object
        ``graph``: summary of the contact graph.
    """

    parts: Mapping[int, Mapping[str, Any]] = field(default_factory=dict)
    columns: Mapping[str, Mapping[int, Any]] = field(default_factory=dict)
    bands: pd.DataFrame | None = None
    prevalence: pd.DataFrame | None = None
    categories: pd.DataFrame | None = None
    tables: Mapping[str, pd.DataFrame] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    fits: Mapping[str, object] = field(default_factory=dict)

    def of(self, motif: int, study: Study) -> Mapping[str, Any]:
        """Give one motif's parts; just its holders where details were not asked for."""
        if motif in self.parts:
            return self.parts[motif]
        empty = np.zeros(0, dtype=np.int32)
        return {
            "holders": study.catalogue.holders(motif),
            "cluster_of": empty,
            "local_joins": empty,
        }


def motif_details(
    study: Study,
    observed: ObservedMotifs,
    worlds: Worlds,
    table: pd.DataFrame,
    pool: Pool,
    *,
    whole: bool = True,
) -> Details:
    """Compute everything the pages show; ``whole`` is False for motifs taken out of a catalogue."""
    parts: dict[int, dict[str, Any]] = {}
    for group in study.groups:
        classes = group_classes(study, group)
        for motif, held in zip(group.motifs, group.holders, strict=True):
            parts[motif] = {
                "holders": group.traditions[held],
                "cluster_of": clusters(group.graph, held).labels,
                "local_joins": local_joins(group.graph, held),
                "correlogram": correlogram_frame(study, group, held, classes),
            }
    beside = confounders(study, observed, worlds, table, pool)
    for motif, more in beside.parts.items():
        parts[motif] |= more
    tables = dict(beside.tables)
    categories = beside.categories
    if worlds.shares and whole:
        routes = route_table(study, worlds, table)
        tables["route_shares"] = routes
        if categories is not None:
            categories = categories.merge(
                routes.drop(columns="motifs"), on="category", how="left", validate="1:1"
            )
    if worlds.main is not None and whole:
        from twicetold.evidence.power import at_holders, power_on

        power = power_on(study, *worlds.main, pool)
        tables["power"], tables["power_smallest"] = power.frame, power.smallest
        for part in parts.values():
            part["power"] = at_holders(power, len(part["holders"]))
    notes = list(beside.notes)
    if whole and {"emergence", "contact"} <= set(study.plan.evidence.worlds):
        tables["worlds_alone"], said = worlds_alone(table, study.plan.evidence.alpha)
        notes += [said] if said else []
    if worlds.main is not None and whole and study.plan.sensitivity.stability:
        from twicetold.evidence.dynamics import dynamics

        other, differ = dynamics(study, observed, worlds, pool)
        notes.append(differ)
        if other is not None:
            tables["dynamics"] = other.frame
    return Details(
        parts=parts,
        columns=beside.columns,
        bands=cluster_bands(study, worlds),
        prevalence=worlds.prevalence,
        categories=categories,
        tables=tables,
        notes=tuple(notes),
        fits={"graph": graph_facts(study)},
    )


def graph_facts(study: Study) -> dict[str, object]:
    """Summary of the contact graph over all located traditions, as plain numbers."""
    from twicetold.graph import summarise

    return asdict(summarise(study.graph))


def route_table(study: Study, worlds: Worlds, table: pd.DataFrame) -> pd.DataFrame:
    """How the route shares are spread over the catalogue and its categories."""
    from twicetold.evidence.mixture import catalogue_shares

    category = dict(zip(table["_motif"], table["category"], strict=True))
    told = sorted(worlds.shares)
    return catalogue_shares(
        [worlds.shares[m] for m in told],
        [str(category[m]) for m in told],
        seed=study.plan.evidence.seed,
    )


def cluster_bands(study: Study, worlds: Worlds) -> pd.DataFrame | None:
    """95 % bands of clusters in the emergence-only and contact-only worlds, at each count."""
    from twicetold.evidence.spreading import main_set

    rows = {}
    here = study.catalogue.surveyed_of == main_set(study)
    for motif, comparisons in worlds.comparisons.items():
        for c in comparisons:
            if here[motif] and c.world == "emergence" and c.statistic == "clusters" and c.law:
                n = len(study.catalogue.holders(motif))
                band = (c.law.quantile(q) for q in (0.025, 0.5, 0.975))
                rows[n] = ("emergence", n, *band)
    columns = ["world", "holders", "low", "median", "high"]
    own = pd.DataFrame([rows[n] for n in sorted(rows)], columns=columns)
    both = [f for f in (own, worlds.contact_bands) if f is not None and len(f)]
    return pd.concat(both, ignore_index=True) if both else None


def group_classes(study: Study, group: Group) -> DistanceClasses | None:
    """Distance classes of a group: equal numbers of pairs in each, by a sample of traditions."""
    if group.n < 4:
        return None
    lat = study.catalogue.latitude[group.traditions]
    lon = study.catalogue.longitude[group.traditions]
    return distance_classes(lat, lon, None, class_edges(lat, lon))


def class_edges(lat: npt.NDArray[np.float64], lon: npt.NDArray[np.float64]) -> Any:
    """Round kilometre edges that put about the same number of pairs in each class."""
    from twicetold.graph import great_circle_km

    # Every k-th tradition is enough to place the edges, and keeps the number of pairs small.
    step = max(1, len(lat) // 400)
    lat, lon = lat[::step], lon[::step]
    first, second = np.triu_indices(len(lat), 1)
    km = great_circle_km(lat[first], lon[first], lat[second], lon[second])
    raw = np.quantile(km, np.linspace(0, 1, CLASSES + 1)[1:-1])
    rounded = [float(f"{x:.2g}") for x in raw if x > 0]
    return np.unique(np.array([0.0, *rounded, 20_038.0]))


def correlogram_frame(
    study: Study, group: Group, held: npt.NDArray[np.int32], classes: DistanceClasses | None
) -> pd.DataFrame | None:
    """Correlogram of one motif with its exact envelope under equal propensity."""
    if classes is None or not 2 <= len(held) < group.n:
        return None
    lat = study.catalogue.latitude[group.traditions]
    lon = study.catalogue.longitude[group.traditions]
    found = correlogram(lat, lon, held, None, classes.edges_km, classes=classes)
    return pd.DataFrame(
        {
            "from_km": classes.edges_km[:-1],
            "to_km": classes.edges_km[1:],
            "pairs": classes.pairs,
            "observed": found.observed,
            "expected": found.expected,
            "low": np.maximum(found.expected - ENVELOPE * found.sd, 0.0),
            "high": np.minimum(found.expected + ENVELOPE * found.sd, 1.0),
        }
    )
