"""The frozen catalogue: which motif is attested in which tradition, and who was searched."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from enum import IntEnum
from functools import cached_property
from pathlib import Path

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from twicetold.catalogue.notes import near as nearest
from twicetold.catalogue.notes import shown
from twicetold.errors import Problem, UnknownMotifError

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int32]
BoolArray = npt.NDArray[np.bool_]


class CellState(IntEnum):
    """What the records say of one motif in one tradition."""

    NOT_SEARCHED = 0
    ABSENT = 1  # searched, and not found
    ATTESTED = 2
    NOT_APPLICABLE = 3


@dataclass(frozen=True)
class SourceFile:
    """One file the catalogue was read from: its name inside the catalogue, bytes and SHA-256."""

    name: str
    size: int
    sha256: str


@dataclass(frozen=True, eq=False)
class Catalogue:
    """A checked catalogue of N located traditions and M motifs. All arrays are read-only.

    Parameters
    ----------
    title, notice : str
        Title, and a notice shown on every page (for instance that the data are invented).
    tradition_ids, tradition_names : tuple of str, length N
    latitude, longitude : (N,) float64
        Degrees, -90..90 and -180..180.
    family, branch, region : tuple of str, length N
        Empty string where unknown.
    effort : (N,) float64 or None
        Relative amount collected, > 0; None when the catalogue has no effort column.
    covariates : mapping of str to (N,) float64
        Other numeric columns of the traditions table (NaN where missing).
    access : tuple of str, length N
        ``open`` or ``restricted`` (withheld rows were dropped at reading).
    motif_ids, motif_names, motif_categories, motif_access : tuple of str, length M
    attested : (M, N) scipy.sparse.csr_array of bool
        True where the motif is attested. Column indices sorted.
    surveyed_sets : tuple of (N,) bool
        The distinct sets of traditions searched; motifs that share one share the draws.
    surveyed_of : (M,) int32
        Index into ``surveyed_sets`` for each motif.
    not_applicable : (M, N) scipy.sparse.csr_array of bool
        Cells that cannot hold a record (a subset of the cells not surveyed).
    contacts : (C, 2) int32 or None
        Hand-drawn contact edges as tradition indices, i < j, sorted; None without the table.
    unlocated : tuple of str
        Ids of traditions left out because they have no coordinates.
    withheld_traditions, withheld_motifs : int
        How many rows were dropped at reading; nothing else of them is kept anywhere.
    land : Path or None
        The catalogue's own outline of land (GeoJSON), if it brings one.
    labels : mapping of str to tuple of str
        Community-made labels and notices by tradition id, carried through verbatim.
    sources : tuple of SourceFile
        What was read, for the run record.
    warnings : tuple of Problem
        Worth knowing, not fatal.
    invented : bool
        Whether the catalogue says that its data are invented.
    license, citation : str
        As the catalogue gives them.
    unlocated_holders : (M,) int32 or None
        Attestations of each motif in traditions without coordinates, which take no part.
    restricted_traditions, restricted_motifs : int
        How many restricted rows were dropped because the plan does not let them in.

    Traditions and motifs stand in order of their ids. Two catalogues hold the same when their
    :meth:`digest` is the same; ``==`` compares identity.
    """

    title: str
    notice: str
    tradition_ids: tuple[str, ...]
    tradition_names: tuple[str, ...]
    latitude: FloatArray
    longitude: FloatArray
    family: tuple[str, ...]
    branch: tuple[str, ...]
    region: tuple[str, ...]
    effort: FloatArray | None
    covariates: Mapping[str, FloatArray]
    access: tuple[str, ...]
    motif_ids: tuple[str, ...]
    motif_names: tuple[str, ...]
    motif_categories: tuple[str, ...]
    motif_access: tuple[str, ...]
    attested: sp.csr_array
    surveyed_sets: tuple[BoolArray, ...]
    surveyed_of: IntArray
    not_applicable: sp.csr_array
    contacts: IntArray | None = None
    unlocated: tuple[str, ...] = ()
    withheld_traditions: int = 0
    withheld_motifs: int = 0
    land: Path | None = None
    labels: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    sources: tuple[SourceFile, ...] = ()
    warnings: tuple[Problem, ...] = ()
    invented: bool = False
    license: str = ""
    citation: str = ""
    unlocated_holders: IntArray | None = None
    restricted_traditions: int = 0
    restricted_motifs: int = 0

    @property
    def n_traditions(self) -> int:
        """Number of located traditions, N."""
        return len(self.tradition_ids)

    @property
    def n_motifs(self) -> int:
        """Number of motifs, M."""
        return len(self.motif_ids)

    @property
    def has_families(self) -> bool:
        """Whether at least two traditions share a named family."""
        return _has_shared(self.family)

    @property
    def has_branches(self) -> bool:
        """Whether at least two traditions share a named branch."""
        return _has_shared(self.branch)

    @cached_property
    def family_codes(self) -> IntArray:
        """(N,) int32 family of each tradition; a tradition without one is a family of its own."""
        return _codes(self.family)

    @cached_property
    def branch_codes(self) -> IntArray:
        """(N,) int32 branch within family; where the branch is blank, the family stands for it."""
        labels = tuple(
            f"{f}\x1f{b}" if b else f for f, b in zip(self.family, self.branch, strict=True)
        )
        return _codes(labels)

    def holders(self, motif: int) -> IntArray:
        """Sorted tradition indices that hold the motif."""
        start, stop = self.attested.indptr[motif], self.attested.indptr[motif + 1]
        return np.asarray(self.attested.indices[start:stop], dtype=np.int32)

    def surveyed(self, motif: int) -> BoolArray:
        """(N,) bool, True where the motif was searched for."""
        return self.surveyed_sets[int(self.surveyed_of[motif])]

    def states(self, motif: int) -> npt.NDArray[np.int8]:
        """(N,) int8 of :class:`CellState` for one motif."""
        out = np.where(self.surveyed(motif), CellState.ABSENT, CellState.NOT_SEARCHED)
        start, stop = self.not_applicable.indptr[motif], self.not_applicable.indptr[motif + 1]
        out[self.not_applicable.indices[start:stop]] = CellState.NOT_APPLICABLE
        out[self.holders(motif)] = CellState.ATTESTED
        return out.astype(np.int8)

    def digest(self) -> str:
        """SHA-256 (hex) over the normalised content: what :func:`write_catalogue` would write.

        It depends on no row that was dropped, nor on the order of rows or the kind of file read.
        """
        return self.content_record().sha256

    def content_record(self) -> SourceFile:
        """Size and SHA-256 of the normalised content, to stand in for the files read."""
        from twicetold.catalogue.write import content_record

        return content_record(self)

    def subset(self, traditions: BoolArray) -> Catalogue:
        """The catalogue restricted to some traditions, with indices counted anew.

        Parameters
        ----------
        traditions : (N,) bool
            True for those that stay. Motifs all stay, also those nobody holds any more.

        Raises
        ------
        CatalogueError
            When the mask has another length, or keeps fewer than two traditions.
        """
        from twicetold.catalogue.subset import subset

        return subset(self, traditions)

    def without(self, tradition_ids: Iterable[str]) -> Catalogue:
        """The catalogue without the traditions of these ids.

        Raises
        ------
        CatalogueError
            When an id is unknown, or fewer than two traditions would stay.
        """
        from twicetold.catalogue.subset import without

        return without(self, tradition_ids)

    def find_motif(self, words: str) -> int:
        """Index of the motif with this id, or else with this name (any case).

        Raises
        ------
        UnknownMotifError
            When none answers, or the name belongs to more than one motif.
        """
        if words in self.motif_ids:
            return self.motif_ids.index(words)
        wanted = words.strip().casefold()
        found = [k for k, name in enumerate(self.motif_names) if name.strip().casefold() == wanted]
        if len(found) == 1:
            return found[0]
        if found:
            ids = ", ".join(self.motif_ids[k] for k in found[:10])
            raise UnknownMotifError(
                f"The name {words!r} belongs to {len(found)} motifs ({ids}). Give the id instead."
            )
        near = [
            f"{i} ({n})"
            for i, n in zip(self.motif_ids, self.motif_names, strict=True)
            if wanted and (wanted in n.casefold() or wanted in i.casefold())
        ][:5]
        near = near or [shown(x) for x in nearest(words, (*self.motif_ids, *self.motif_names))]
        hint = f" Did you mean: {'; '.join(near)}?" if near else " Motif ids are case-sensitive."
        raise UnknownMotifError(f"No motif has the id or name {words!r}.{hint}")


def _has_shared(labels: tuple[str, ...]) -> bool:
    named = [x for x in labels if x]
    return len(set(named)) < len(named)


def _codes(labels: tuple[str, ...]) -> IntArray:
    seen: dict[str, int] = {}
    out = np.empty(len(labels), dtype=np.int32)
    fresh = 0
    for i, label in enumerate(labels):
        if label and label in seen:
            out[i] = seen[label]
            continue
        if label:
            seen[label] = fresh
        out[i] = fresh
        fresh += 1
    out.flags.writeable = False
    return out
