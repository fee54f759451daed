"""A catalogue restricted to some of its traditions."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

import numpy as np

from twicetold.catalogue.freeze import distinct_sets, freeze_sparse, read_only
from twicetold.catalogue.model import BoolArray, Catalogue, IntArray
from twicetold.catalogue.notes import shown, suggestion
from twicetold.errors import CatalogueError, Problem


def without(catalogue: Catalogue, tradition_ids: Iterable[str]) -> Catalogue:
    """The catalogue without the traditions of these ids."""
    gone = set(tradition_ids)
    unknown = sorted(gone.difference(catalogue.tradition_ids))
    if unknown:
        raise CatalogueError(
            [
                Problem(
                    "catalogue",
                    0,
                    "",
                    f"no located tradition has the id {shown(word)}.",
                    f"Give ids as in the catalogue.{suggestion(word, catalogue.tradition_ids)}",
                )
                for word in unknown
            ]
        )
    return subset(catalogue, np.array([i not in gone for i in catalogue.tradition_ids]))


def subset(catalogue: Catalogue, traditions: BoolArray) -> Catalogue:
    """The catalogue restricted to the traditions of a mask, with indices counted anew."""
    mask = np.asarray(traditions)
    if mask.dtype != np.bool_ or mask.shape != (catalogue.n_traditions,):
        raise CatalogueError(
            [
                Problem(
                    "catalogue",
                    0,
                    "",
                    f"the mask must be {catalogue.n_traditions} True or False values, got "
                    f"{mask.dtype} of shape {mask.shape}.",
                    "Give one value per tradition.",
                )
            ]
        )
    if np.count_nonzero(mask) < 2:
        raise CatalogueError(
            [
                Problem(
                    "catalogue",
                    0,
                    "",
                    f"at least two traditions must stay, got {np.count_nonzero(mask)}.",
                    "Keep more traditions.",
                )
            ]
        )
    kept = np.flatnonzero(mask)

    def pick(values: tuple[str, ...]) -> tuple[str, ...]:
        return tuple(values[k] for k in kept)

    ids = pick(catalogue.tradition_ids)
    sets, of = _restricted_sets(catalogue, mask)
    return replace(
        catalogue,
        tradition_ids=ids,
        tradition_names=pick(catalogue.tradition_names),
        latitude=read_only(catalogue.latitude[mask]),
        longitude=read_only(catalogue.longitude[mask]),
        family=pick(catalogue.family),
        branch=pick(catalogue.branch),
        region=pick(catalogue.region),
        effort=None if catalogue.effort is None else read_only(catalogue.effort[mask]),
        covariates={k: read_only(v[mask]) for k, v in catalogue.covariates.items()},
        access=pick(catalogue.access),
        attested=freeze_sparse(catalogue.attested[:, kept].tocsr()),
        not_applicable=freeze_sparse(catalogue.not_applicable[:, kept].tocsr()),
        surveyed_sets=sets,
        surveyed_of=of,
        contacts=_restricted_contacts(catalogue.contacts, mask),
        labels={k: v for k, v in catalogue.labels.items() if k in set(ids)},
    )


def _restricted_sets(
    catalogue: Catalogue, mask: BoolArray
) -> tuple[tuple[BoolArray, ...], IntArray]:
    """Surveyed sets on fewer traditions; sets that have become equal are merged."""
    seen: dict[bytes, int] = {}
    sets: list[BoolArray] = []
    place = np.empty(len(catalogue.surveyed_sets), dtype=np.int32)
    for k, whole in enumerate(catalogue.surveyed_sets):
        part = whole[mask]
        key = np.packbits(part).tobytes()
        if key not in seen:
            seen[key] = len(sets)
            sets.append(part)
        place[k] = seen[key]
    return distinct_sets(sets, place[catalogue.surveyed_of])


def _restricted_contacts(contacts: IntArray | None, mask: BoolArray) -> IntArray | None:
    if contacts is None:
        return None
    fresh = np.cumsum(mask, dtype=np.int32) - 1
    stay = mask[contacts].all(axis=1)
    return read_only(fresh[contacts[stay]].astype(np.int32).reshape(-1, 2))
