"""The last step: put motifs in order, look at the whole once more, and freeze it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, TypeVar

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from twicetold.catalogue.model import BoolArray, Catalogue, SourceFile
from twicetold.catalogue.notes import Notes, Spot, shown
from twicetold.catalogue.traditions import Tradition

if TYPE_CHECKING:
    from twicetold.catalogue.read import Parts

ArrayT = TypeVar("ArrayT", bound=npt.NDArray[np.generic])


def read_only(array: ArrayT) -> ArrayT:
    """The same array, closed to writing."""
    array.flags.writeable = False
    return array


def freeze_sparse(matrix: sp.csr_array) -> sp.csr_array:
    """A CSR matrix with sorted int32 indices whose arrays are closed to writing."""
    matrix.sort_indices()
    for part in (matrix.data, matrix.indices, matrix.indptr):
        part.flags.writeable = False
    return matrix


def freeze(
    parts: Parts,
    notes: Notes,
    *,
    sources: list[SourceFile],
    beside: list[SourceFile],
    land: Path | None,
) -> Catalogue | None:
    """Make the Catalogue; None when the whole has a fault that no single row shows."""
    motifs, presence, located = parts.motifs, parts.presence, parts.traditions.located
    if not motifs.ids:
        Spot(notes, parts.file).error(
            "no motifs", "has no motif that may enter.", "List at least one motif with its records."
        )
        return None
    order = np.array(sorted(range(len(motifs.ids)), key=motifs.ids.__getitem__), dtype=np.intp)
    attested = freeze_sparse(sp.csr_array(presence.attested[order]))
    sets, of = distinct_sets(presence.surveyed_sets, presence.surveyed_of[order])
    searched = np.array([np.count_nonzero(s) for s in sets])[of]
    _warn_constant(parts, np.diff(attested.indptr), searched, order, notes)
    catalogue = Catalogue(
        title=parts.about.title,
        notice=parts.about.shown_notice(),
        invented=parts.about.invented,
        license=parts.about.license,
        citation=parts.about.citation,
        tradition_ids=tuple(t.tradition_id for t in located),
        tradition_names=tuple(t.name for t in located),
        latitude=read_only(np.array([t.latitude for t in located], dtype=np.float64)),
        longitude=read_only(np.array([t.longitude for t in located], dtype=np.float64)),
        family=tuple(t.family for t in located),
        branch=tuple(t.branch for t in located),
        region=tuple(t.region for t in located),
        effort=None if parts.traditions.effort is None else read_only(parts.traditions.effort),
        covariates={k: read_only(v) for k, v in sorted(parts.traditions.covariates.items())},
        access=tuple(t.access for t in located),
        motif_ids=tuple(motifs.ids[k] for k in order),
        motif_names=tuple(motifs.names[k] for k in order),
        motif_categories=tuple(motifs.categories[k] for k in order),
        motif_access=tuple(motifs.access[k] for k in order),
        attested=attested,
        surveyed_sets=sets,
        surveyed_of=of,
        not_applicable=freeze_sparse(sp.csr_array(presence.not_applicable[order])),
        contacts=None if parts.contacts is None else read_only(parts.contacts),
        unlocated=tuple(t.tradition_id for t in parts.traditions.unlocated if t.access == "open"),
        unlocated_holders=read_only(presence.unlocated[order]),
        withheld_traditions=parts.traditions.withheld,
        withheld_motifs=motifs.withheld,
        restricted_traditions=parts.traditions.restricted,
        restricted_motifs=motifs.restricted,
        land=land,
        labels=_labels(located),
        warnings=notes.warnings(),
    )
    dropped = (
        parts.traditions.withheld
        + parts.traditions.restricted
        + parts.traditions.withdrawn
        + motifs.withheld
        + motifs.restricted
    )
    if dropped:
        # The files' own hashes would let anyone confirm a guess at the rows that were dropped.
        sources = [catalogue.content_record()]
    return replace(catalogue, sources=tuple(sources) + tuple(beside))


def distinct_sets(
    sets: Sequence[BoolArray], of: npt.NDArray[np.int32]
) -> tuple[tuple[BoolArray, ...], npt.NDArray[np.int32]]:
    """Keep the sets in use, in order of their first motif."""
    used, first = np.unique(of, return_index=True)
    used = used[np.argsort(first)]
    place = np.zeros(len(sets), dtype=np.int32)
    place[used] = np.arange(len(used), dtype=np.int32)
    kept = tuple(read_only(np.asarray(sets[int(k)])) for k in used)
    return kept, read_only(place[of])


def _labels(located: list[Tradition]) -> dict[str, tuple[str, ...]]:
    return {t.tradition_id: t.labels for t in located if t.labels}


def _warn_constant(
    parts: Parts,
    holders: npt.NDArray[np.integer],
    searched: npt.NDArray[np.integer],
    order: npt.NDArray[np.intp],
    notes: Notes,
) -> None:
    """Warn of motifs that nobody or everybody searched holds: nothing about them can be tested."""
    motifs = parts.motifs
    remedy = "It is listed, but cannot be tested."
    for k in np.flatnonzero((holders == 0) | (holders == searched)).tolist():
        code = int(order[k])
        is_open = motifs.access[code] == "open"
        name = shown(motifs.ids[code]) if is_open else "of restricted access"
        if searched[k] == 0:
            kind, what = "searched nowhere", "was searched for in no located tradition."
        elif holders[k] == 0:
            kind, what = "nobody holds it", "is attested in no located tradition."
        else:
            kind = "everybody holds it"
            what = f"is attested in all {int(searched[k]):,} traditions searched for it."
        Spot(notes, parts.file).warn(kind, f"the motif {name} {what}", remedy)
