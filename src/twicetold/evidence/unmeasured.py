"""The hidden-propensity bound of a whole study: every motif's, and how it moves with the length."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.evidence.hidden import HiddenBounds, Search, hidden_bounds
from twicetold.evidence.propensities import group_propensity
from twicetold.evidence.smooth import family_extent_km, smooth_field
from twicetold.evidence.study import Group, Study
from twicetold.evidence.worlds import ObservedMotifs
from twicetold.graph import regions
from twicetold.workers import Pool

#: Correlation lengths of the sensitivity table, relative to the plan's.
FACTORS = (0.5, 1.0, 2.0, 4.0)
#: Fields drawn for the bound itself, and for the other lengths.
DRAWS, OTHER_DRAWS = 1999, 499


@dataclass(frozen=True)
class Unmeasured:
    """Bounds by motif index, and over several correlation lengths.

    Parameters
    ----------
    bounds : mapping of int to mapping
        ``log_sd, ratio, log_sd_low, log_sd_high, length_km`` of each motif; 0 (and a ratio of 1)
        where emergence alone already gives the joins often enough.
    by_motif : pandas.DataFrame or None
        Of motifs that reject emergence: ``motif_id, length_km`` and the fields of a bound.
    by_length : pandas.DataFrame or None
        ``length_km, motifs, log_sd_quarter, log_sd_median, log_sd_three_quarters, ratio_median,
        beyond``: quartiles over those motifs, and how many no strength tried explains.
    notes : tuple of str
    """

    bounds: Mapping[int, Mapping[str, float]] = field(default_factory=dict)
    by_motif: pd.DataFrame | None = None
    by_length: pd.DataFrame | None = None
    notes: tuple[str, ...] = ()


def unmeasured(
    study: Study, observed: ObservedMotifs, table: pd.DataFrame, pool: Pool
) -> Unmeasured:
    """Solve for the hidden propensity that would explain each motif's joins.

    Only motifs that reject the emergence-only world have anything to explain; for the others the
    bound is 0 by definition, and nothing is drawn. A draw serves every motif of a group.

    Parameters
    ----------
    study : Study
    observed : ObservedMotifs
    table : pandas.DataFrame
        Judged, with ``_motif`` and ``p_against_emergence``.
    pool : Pool
    """
    if not study.plan.sensitivity.hidden or "emergence" not in study.plan.evidence.worlds:
        return Unmeasured()
    length = length_km(study)
    p = dict(zip(table["_motif"], table["p_against_emergence"], strict=True))
    bounds: dict[int, Mapping[str, float]] = {
        int(m): _none_needed(length)
        for m, value in p.items()
        if value > study.plan.evidence.alpha and observed.holders[observed.place[m]] > 1
    }
    rows: list[dict[str, object]] = []
    for group in study.groups:
        motifs = [m for m in group.motifs if p.get(m, 1.0) <= study.plan.evidence.alpha]
        if not motifs or not _two_places(study, group):
            continue
        for factor in FACTORS:
            found = _group_bounds(
                study, group, observed, motifs, pool=pool, length=length, factor=factor
            )
            for k, motif in enumerate(motifs):
                bound = found.of(k)
                if factor == 1.0:
                    bounds[motif] = bound
                # Restricted motifs count in totals only, so no table names them.
                shown = study.catalogue.motif_access[motif] != "restricted"
                name = study.catalogue.motif_ids[motif] if shown else ""
                rows.append({"motif_id": name, **bound})
    if not rows:
        return Unmeasured(bounds)
    by_motif = pd.DataFrame(rows)[
        ["motif_id", "length_km", "log_sd", "log_sd_low", "log_sd_high", "ratio"]
    ]
    by_motif = by_motif.sort_values(["motif_id", "length_km"], ignore_index=True)
    named = by_motif[by_motif["motif_id"] != ""].reset_index(drop=True)
    return Unmeasured(bounds, named, by_length(by_motif), _notes(study, length))


def length_km(study: Study) -> float:
    """Correlation length: the plan's, or the median extent of families."""
    if study.plan.sensitivity.hidden_km > 0:
        return study.plan.sensitivity.hidden_km
    catalogue = study.catalogue
    codes = catalogue.family_codes if study.families else np.arange(catalogue.n_traditions)
    return family_extent_km(catalogue.latitude, catalogue.longitude, codes)


def region_labels(study: Study) -> npt.NDArray[np.int64]:
    """(N,) region of every tradition: the catalogue's, else compact ones (k-means)."""
    catalogue, plan = study.catalogue, study.plan
    if len({r for r in catalogue.region if r}) >= 2:
        return np.unique(np.array(catalogue.region), return_inverse=True)[1].astype(np.int64)
    found = regions(
        catalogue.latitude, catalogue.longitude, plan.sensitivity.regions, plan.evidence.seed
    )
    return found.astype(np.int64)


def _group_bounds(
    study: Study,
    group: Group,
    observed: ObservedMotifs,
    motifs: list[int],
    *,
    pool: Pool,
    length: float,
    factor: float,
) -> HiddenBounds:
    catalogue, evidence = study.catalogue, study.plan.evidence
    smooth = smooth_field(
        catalogue.latitude[group.traditions],
        catalogue.longitude[group.traditions],
        length * factor,
        region_labels(study)[group.traditions],
    )
    search = Search(DRAWS if factor == 1.0 else OTHER_DRAWS, evidence.seed, evidence.alpha)
    return hidden_bounds(
        group.graph,
        smooth,
        group_propensity(study, group).shared,
        np.array([observed.holders[observed.place[m]] for m in motifs]),
        np.array([observed.value(m, "joins") for m in motifs]),
        search=search,
        pool=pool,
    )


def by_length(by_motif: pd.DataFrame) -> pd.DataFrame:
    """Quartiles of the bound at each correlation length (inverse of the empirical law)."""
    rows = []
    for km, part in by_motif.groupby("length_km", sort=True):
        log_sd = np.sort(part["log_sd"].to_numpy(float))
        ratio = np.sort(part["ratio"].to_numpy(float))
        quarter, median, three = (
            float(log_sd[min(len(log_sd) - 1, int(len(log_sd) * q))]) for q in (0.25, 0.5, 0.75)
        )
        rows.append(
            {
                "length_km": float(str(km)),
                "motifs": len(part),
                "log_sd_quarter": quarter,
                "log_sd_median": median,
                "log_sd_three_quarters": three,
                "ratio_median": float(ratio[len(ratio) // 2]),
                "beyond": int(np.isinf(log_sd).sum()),
            }
        )
    return pd.DataFrame(rows)


def _none_needed(length: float) -> dict[str, float]:
    return {
        "log_sd": 0.0,
        "ratio": 1.0,
        "log_sd_low": 0.0,
        "log_sd_high": 0.0,
        "length_km": length,
    }


def _two_places(study: Study, group: Group) -> bool:
    lat = study.catalogue.latitude[group.traditions]
    lon = study.catalogue.longitude[group.traditions]
    return bool(np.ptp(lat) > 1e-9 or np.ptp(lon) > 1e-9)


def _notes(study: Study, length: float) -> tuple[str, ...]:
    if study.plan.emergence.propensity not in ("recorded", "margins"):
        return ()
    return (
        "The hidden-propensity bound starts from the row totals of all motifs, the tested one "
        f"among them, at a correlation length of {length:,.0f} km.",
    )
