"""The two questions people ask: how does the whole catalogue rank, and what of this one motif."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import pandas as pd

from twicetold.catalogue import Catalogue
from twicetold.errors import TwicetoldError
from twicetold.evidence import columns
from twicetold.evidence.contacts import KnownContacts
from twicetold.evidence.details import Details, motif_details
from twicetold.evidence.results import Comparison, MotifEvidence, Ranking, RouteShares
from twicetold.evidence.study import Study, prepare
from twicetold.evidence.verdict import Grounds, verdict
from twicetold.evidence.worlds import (
    ObservedMotifs,
    against_ancestry,
    against_emergence,
    observe_motifs,
)
from twicetold.plan import Plan
from twicetold.references.multiplicity import adjust, testable
from twicetold.workers import Pool, ThreadPool

if TYPE_CHECKING:
    from twicetold.evidence.scatter import ScatterWorlds
    from twicetold.evidence.spreading import Ground

#: What ``--by`` takes; the first is the default.
ORDERS = ("evidence", "moran_i", "joins_ratio", "emergence_share", "holders")
#: Worlds whose primary comparison enters a multiplicity family of its own.
FAMILIES = ("emergence", "ancestry", "transmission")
ROUTES = ("emergence", "contact", "inheritance")


@dataclass(frozen=True)
class Worlds:
    """What each world said, by motif index, and the catalogue-level by-products.

    Parameters
    ----------
    comparisons : mapping of int to tuple of Comparison
    shares : mapping of int to RouteShares
    power : mapping of int to (float, float)
        By motif: chance to reject emergence-only under contact, and transmission-only under
        emergence, at its number of holders.
    fits, tables : mapping
        See :class:`Ranking`.
    notes : tuple of str
    prevalence, contact_bands, main
        See :class:`twicetold.evidence.spreading.SpreadResult`.
    """

    comparisons: Mapping[int, tuple[Comparison, ...]]
    shares: Mapping[int, RouteShares]
    power: Mapping[int, tuple[float, float]]
    fits: Mapping[str, object]
    tables: Mapping[str, pd.DataFrame]
    notes: tuple[str, ...] = ()
    prevalence: pd.DataFrame | None = None
    contact_bands: pd.DataFrame | None = None
    main: tuple[Ground, ScatterWorlds] | None = None


def rank_catalogue(
    catalogue: Catalogue,
    plan: Plan | None = None,
    *,
    pool: Pool | None = None,
    by: str = "evidence",
    cache: bool = True,
    details: bool = True,
    contacts: KnownContacts | None = None,
) -> Ranking:
    """Test every motif of a catalogue and rank them.

    Parameters
    ----------
    catalogue : Catalogue
    plan : Plan, optional
        The defaults when None.
    pool : Pool, optional
        Threads when None.
    by : str
        One of :data:`ORDERS`.
    cache : bool
        Whether banks of snapshots are kept on disk between runs.
    details : bool
        Whether everything the pages show is computed too (correlograms, bands, pairs ...).
    contacts : KnownContacts, optional
        Contact graphs known already; built from the coordinates by default.

    Raises
    ------
    TwicetoldError
        When the plan does not fit the catalogue.
    """
    check_order(by)
    pool = pool or ThreadPool()
    study = prepare(catalogue, plan or Plan(), contacts=contacts)
    observed = observe_motifs(study)
    worlds = compute_worlds(study, observed, pool, cache=cache)
    table = judge(study, observed, worlds, tuple(range(catalogue.n_motifs)))
    extra = motif_details(study, observed, worlds, table, pool) if details else Details()
    for name, values in extra.columns.items():
        table[name] = table["_motif"].map(values)
    table = ordered(table, by)
    return _assemble(study, worlds, table, extra)


def test_motif(
    catalogue: Catalogue,
    motif: str,
    plan: Plan | None = None,
    *,
    pool: Pool | None = None,
    cache: bool = True,
) -> Ranking:
    """Test one motif, by id or name; its p-values are those it has in the catalogue's ranking.

    Returns
    -------
    Ranking
        Of one motif. Its q-values are blank: they belong to a catalogue; the verdict is by p.

    Raises
    ------
    UnknownMotifError
        When no motif, or more than one, answers to the words.
    """
    pool = pool or ThreadPool()
    index = catalogue.find_motif(motif)
    study = prepare(catalogue, plan or Plan(), motifs=[index])
    observed = observe_motifs(study)
    worlds = compute_worlds(study, observed, pool, cache=cache)
    table = judge(study, observed, worlds, (index,), alone=True)
    extra = motif_details(study, observed, worlds, table, pool, whole=False)
    for name, values in extra.columns.items():
        table[name] = table["_motif"].map(values)
    ranking = _assemble(study, worlds, ordered(table, "evidence"), extra)
    note = "One motif alone has no q-values; its verdict here goes by p."
    return replace(ranking, notes=(*ranking.notes, note))


test_motif.__test__ = False  # type: ignore[attr-defined]  # a name pytest would collect


def check_order(by: str) -> None:
    """Refuse an order nobody knows."""
    if by not in ORDERS:
        raise TwicetoldError(f"`--by` must be one of {', '.join(ORDERS)}, got {by!r}.")


def compute_worlds(study: Study, observed: ObservedMotifs, pool: Pool, *, cache: bool) -> Worlds:
    """Compare every motif with every world of the plan."""
    asked = study.plan.evidence.worlds
    notes: list[str] = list(study.notes)
    parts: list[Mapping[int, tuple[Comparison, ...]]] = []
    fits: dict[str, object] = {}
    tables: dict[str, pd.DataFrame] = {}
    shares: Mapping[int, RouteShares] = {}
    power: Mapping[int, tuple[float, float]] = {}
    prevalence = bands = main = None
    if "emergence" in asked:
        emergence = against_emergence(study, observed, pool)
        parts.append(emergence.comparisons)
        fits |= emergence.fits
        tables |= emergence.tables
        notes += emergence.notes
    if "ancestry" in asked and study.families:
        ancestry = against_ancestry(study, observed, pool)
        parts.append(ancestry.comparisons)
        notes += ancestry.notes
    if {"contact", "transmission", "shares"} & set(asked):
        from twicetold.evidence.spreading import against_spread

        spread = against_spread(
            study, observed, pool, cache=cache, emergence=parts[0] if "emergence" in asked else {}
        )
        parts.append(spread.comparisons)
        shares, power = spread.shares, spread.power
        fits |= spread.fits
        tables |= spread.tables
        notes += spread.notes
        prevalence, bands, main = spread.prevalence, spread.bands, spread.main
    joined = {
        motif: tuple(c for part in parts for c in part.get(motif, ())) for motif in observed.index
    }
    said = tuple(dict.fromkeys(notes))
    return Worlds(joined, shares, power, fits, tables, said, prevalence, bands, main)


def primary(comparisons: Sequence[Comparison], world: str) -> Comparison | None:
    """Give the comparison that decides in a world, if it was made."""
    return next((c for c in comparisons if c.world == world and c.primary), None)


def judge(
    study: Study,
    observed: ObservedMotifs,
    worlds: Worlds,
    motifs: Sequence[int],
    *,
    alone: bool = False,
) -> pd.DataFrame:
    """Make the table of all columns, unranked; ``_motif`` is the catalogue index."""
    catalogue, plan = study.catalogue, study.plan
    rows = [_row(catalogue, observed, worlds, m) for m in motifs]
    table = pd.DataFrame(rows)
    method = "none" if alone else plan.evidence.multiplicity
    deciding = {}
    for world in FAMILIES:
        p = table[f"p_against_{world}"].to_numpy(float)
        attainable = table[f"_attainable_{world}"].to_numpy(float)
        tested = testable(attainable, plan.evidence.alpha) & ~np.isnan(p)
        p_tested = np.where(tested, p, np.nan)
        shown: Literal["bh", "by"] = "by" if plan.evidence.multiplicity == "by" else "bh"
        q = np.full(len(p), np.nan) if alone else adjust(p_tested, shown)
        table[f"q_against_{world}"] = q
        table[f"_by_{world}"] = np.full(len(p), np.nan) if alone else adjust(p_tested, "by")
        deciding[world] = p_tested if method == "none" else q
    said = [
        verdict(
            _grounds(study, worlds, row, {w: deciding[w][k] for w in FAMILIES}), plan.evidence.alpha
        )
        for k, row in enumerate(_records(table))
    ]
    table["verdict"] = [v for v, _ in said]
    table["reason"] = [r for _, r in said]
    return table


def _row(
    catalogue: Catalogue, observed: ObservedMotifs, worlds: Worlds, motif: int
) -> dict[str, Any]:
    """One motif's numbers before multiplicity."""
    comparisons = worlds.comparisons[motif]
    row: dict[str, Any] = {
        "_motif": motif,
        "motif_id": catalogue.motif_ids[motif],
        "name": catalogue.motif_names[motif],
        "category": catalogue.motif_categories[motif],
        **observed.row(motif),
    }
    emergence = primary(comparisons, "emergence")
    row["joins_expected"] = emergence.expected if emergence else math.nan
    row["joins_ratio"] = (
        row["joins"] / emergence.expected if emergence and emergence.expected > 0 else math.nan
    )
    moran = next(
        (c for c in comparisons if (c.world, c.statistic) == ("emergence", "moran_i")), None
    )
    row["moran_i_expected"] = moran.expected if moran else math.nan
    for world in (*FAMILIES, "contact"):
        found = primary(comparisons, world)
        row[f"p_against_{world}"] = found.p if found else math.nan
        row[f"_attainable_{world}"] = found.p_attainable if found else math.nan
    row["p_attainable"] = row["_attainable_emergence"]
    shares = worlds.shares.get(motif)
    for k, route in enumerate(ROUTES):
        known = shares is not None and not shares.refused and k < len(shares.mean)
        for name in ("mean", "low", "high"):
            key = f"{route}_share" + ("" if name == "mean" else f"_{name}")
            row[key] = float(getattr(shares, name)[k]) if known else math.nan
    return row


def _records(table: pd.DataFrame) -> list[dict[str, Any]]:
    return [{str(k): v for k, v in row.items()} for row in table.to_dict("records")]


def _grounds(
    study: Study, worlds: Worlds, row: Mapping[str, Any], by: Mapping[str, float]
) -> Grounds:
    power = worlds.power.get(int(row["_motif"]), (math.nan, math.nan))
    return Grounds(
        emergence=float(by["emergence"]),
        ancestry=float(by["ancestry"]),
        transmission=float(by["transmission"]),
        attainable=float(row["_attainable_emergence"]),
        families=study.families,
        transmission_known="transmission" in study.plan.evidence.worlds,
        transmission_attainable=float(row["_attainable_transmission"]),
        power_contact=power[0],
        power_emergence=power[1],
        holders=int(row["holders"]),
        surveyed=int(row["surveyed"]),
    )


def ordered(table: pd.DataFrame, by: str) -> pd.DataFrame:
    """Rank: by evidence (p, then ratio, then id) or by a column; too-rare motifs come last."""
    rare = table["_attainable_emergence"].isna() | table["reason"].str.startswith(
        ("too rare", "nobody", "everybody")
    )
    keys: list[Any] = [table["motif_id"]]
    if by == "evidence":
        keys += [-table["joins_ratio"].fillna(-np.inf), table["p_against_emergence"].fillna(2.0)]
    else:
        if by not in table or table[by].isna().all():
            raise TwicetoldError(
                f"`--by {by}` needs a column that this plan does not compute. "
                "Add its world to evidence.worlds, or rank by another."
            )
        keys += [-table[by].astype(float).fillna(-np.inf)]
    keys.append(rare.astype(int))
    order = np.lexsort([np.asarray(k) for k in keys])
    out = table.iloc[order].reset_index(drop=True)
    out.insert(0, "rank", np.arange(1, len(out) + 1))
    return out


def _assemble(study: Study, worlds: Worlds, table: pd.DataFrame, extra: Details) -> Ranking:
    shown = [c for c in columns.NAMES if c in table and _present(study, table, c)]
    public = table[shown]
    records = _records(public)
    evidence = tuple(
        MotifEvidence(
            index=int(motif),
            motif_id=str(row["motif_id"]),
            name=str(row["name"]),
            category=str(row["category"]),
            row=row,
            comparisons=worlds.comparisons[int(motif)],
            shares=worlds.shares.get(int(motif)),
            **extra.of(int(motif), study),
        )
        for motif, row in zip(table["_motif"], records, strict=True)
    )
    return Ranking(
        catalogue=study.catalogue,
        graph=study.graph,
        plan=study.plan,
        motifs=public,
        evidence=evidence,
        bands=extra.bands,
        prevalence=extra.prevalence,
        fits={**worlds.fits, **extra.fits},
        categories=extra.categories,
        tables={**worlds.tables, **extra.tables},
        notes=(*worlds.notes, *extra.notes),
    )


def _present(study: Study, table: pd.DataFrame, column: str) -> bool:
    """Columns of a world that was not computed are left out, not filled with blanks."""
    asked = study.plan.evidence.worlds
    for world in (*FAMILIES, "contact"):
        if column.endswith(f"_against_{world}"):
            return world in asked and (world != "ancestry" or study.families)
    if column in ("joins_expected", "joins_ratio", "moran_i_expected", "p_attainable"):
        return "emergence" in asked
    if "_share" in column:
        route = column.split("_share", maxsplit=1)[0]
        return "shares" in asked and (route != "inheritance" or study.families)
    return True
