"""Contact graphs that are known already: a deposit brings its own, since its places are rounded."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold.catalogue import Catalogue
from twicetold.graph import ContactGraph
from twicetold.graph.build import assemble

IntArray = npt.NDArray[np.int32]
BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class KnownContacts:
    """The contact graph of a catalogue and its bridges for every set of traditions searched.

    Only the bridges of motifs searched in some of the traditions depend on where places lie; with
    them at hand no statistic of joins or clusters needs a coordinate.

    Parameters
    ----------
    whole : ContactGraph
        Over all located traditions.
    bridges : mapping of bytes to (B, 2) int32
        Catalogue indices of the bridges among the traditions of a set, by :func:`set_key`.
    latitude, longitude : (N,) float64
        Degrees; only the lengths of edges come from them.
    """

    whole: ContactGraph
    bridges: Mapping[bytes, IntArray]
    latitude: npt.NDArray[np.float64]
    longitude: npt.NDArray[np.float64]

    def among(self, mask: BoolArray) -> ContactGraph:
        """Give the contact graph among the traditions of a mask, as ``restricted_to`` would."""
        if mask.all():
            return self.whole
        new = np.cumsum(mask, dtype=np.int32) - np.int32(1)
        stays = mask[self.whole.edges].all(axis=1) & ~self.whole.bridge
        own = new[self.whole.edges[stays]].reshape(-1, 2)
        known = self.bridges.get(set_key(mask), np.zeros((0, 2), dtype=np.int32))
        added = new[known].reshape(-1, 2)
        lat, lon = self.latitude[mask], self.longitude[mask]
        return assemble(len(lat), own, added, lat, lon, rule=self.whole.rule)


def set_key(mask: BoolArray) -> bytes:
    """A set of traditions as a key."""
    return np.packbits(mask).tobytes()


def known_contacts(catalogue: Catalogue, whole: ContactGraph, *, bridges: bool) -> KnownContacts:
    """Find the bridges of every set of traditions searched.

    Parameters
    ----------
    catalogue : Catalogue
        With exact coordinates.
    whole : ContactGraph
        Over all its located traditions.
    bridges : bool
        Whether the plan adds bridges.
    """
    found: dict[bytes, IntArray] = {}
    for mask in catalogue.surveyed_sets:
        if mask.all() or not mask.any():
            continue
        part = whole.restricted_to(mask, catalogue.latitude, catalogue.longitude, bridges=bridges)
        place = np.flatnonzero(mask).astype(np.int32)
        found[set_key(mask)] = place[part.edges[part.bridge]].reshape(-1, 2)
    return KnownContacts(whole, found, catalogue.latitude, catalogue.longitude)
