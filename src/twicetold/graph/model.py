"""The contact graph: undirected, unweighted neighbours over traditions."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from twicetold.errors import GraphError

IntArray = npt.NDArray[np.int32]


@dataclass(frozen=True)
class ContactGraph:
    """An undirected, unweighted neighbour graph. All arrays are read-only.

    Parameters
    ----------
    n : int
        Number of traditions, isolated ones included.
    edges : (A, 2) int32
        Tradition indices with ``edges[:, 0] < edges[:, 1]``, sorted, no repeats.
    length_km : (A,) float64
        Great-circle length of each edge in kilometres.
    bridge : (A,) bool
        True for an edge added only so that every tradition can be reached.
    rule : str
        The rule it was built by, for instance ``nearest:6``.
    """

    n: int
    edges: IntArray
    length_km: npt.NDArray[np.float64]
    bridge: npt.NDArray[np.bool_]
    rule: str

    def __post_init__(self) -> None:
        for name, kind in (("edges", np.int32), ("length_km", np.float64), ("bridge", np.bool_)):
            array = np.array(getattr(self, name), dtype=kind)  # a copy: the caller's stays writable
            array.flags.writeable = False
            object.__setattr__(self, name, array)

    @property
    def n_edges(self) -> int:
        """Number of edges, A."""
        return len(self.edges)

    @cached_property
    def _csr(self) -> tuple[IntArray, IntArray]:
        both = np.concatenate([self.edges, self.edges[:, ::-1]])
        order = np.lexsort((both[:, 1], both[:, 0]))
        indices = np.ascontiguousarray(both[order, 1], dtype=np.int32)
        indptr = np.zeros(self.n + 1, dtype=np.int32)
        np.cumsum(np.bincount(both[:, 0], minlength=self.n), out=indptr[1:])
        indices.flags.writeable = False
        indptr.flags.writeable = False
        return indptr, indices

    @property
    def indptr(self) -> IntArray:
        """(n + 1,) int32: the neighbours of i are ``indices[indptr[i]:indptr[i + 1]]``, sorted."""
        return self._csr[0]

    @property
    def indices(self) -> IntArray:
        """(2A,) int32 neighbour lists, see :attr:`indptr`."""
        return self._csr[1]

    @cached_property
    def degree(self) -> IntArray:
        """(n,) int32 number of neighbours."""
        out = np.diff(self.indptr).astype(np.int32)
        out.flags.writeable = False
        return out

    def neighbours(self, i: int) -> IntArray:
        """Sorted neighbours of one tradition."""
        return self.indices[self.indptr[i] : self.indptr[i + 1]]

    def restricted_to(
        self,
        mask: npt.ArrayLike,
        latitude: npt.ArrayLike,
        longitude: npt.ArrayLike,
        bridges: bool = True,
    ) -> ContactGraph:
        """Give the contact graph among some of the traditions; the others leave it.

        The edges of the rule between two traditions that stay are kept; no new neighbour takes
        the place of one that left. Bridges are found afresh: what was a bridge before is one still
        if both its ends stay, and others join the pieces that the leaving has parted.

        Parameters
        ----------
        mask : (n,) array_like of bool
            True for the traditions that stay (those surveyed for a motif).
        latitude, longitude : (n,) array_like
            Degrees, of all n traditions.
        bridges : bool
            Add bridges; False leaves every bridge out, old ones too.

        Returns
        -------
        ContactGraph
            Vertex v stands for the v-th True of ``mask``.

        Raises
        ------
        GraphError
            When ``mask`` or the coordinates do not have one entry for each tradition.
        """
        from twicetold.graph.bridges import bridge_pairs
        from twicetold.graph.build import assemble
        from twicetold.graph.sphere import checked_coordinates

        keep = np.asarray(mask)
        lat, lon = checked_coordinates(latitude, longitude)
        if keep.shape != (self.n,) or keep.dtype != np.bool_ or len(lat) != self.n:
            raise GraphError(
                f"`mask` and the coordinates must have one entry for each of {self.n} traditions "
                f"(true or false for `mask`), got shapes {keep.shape} and {lat.shape}."
            )
        new = np.cumsum(keep, dtype=np.int32) - np.int32(1)
        stays = keep[self.edges].all(axis=1) & ~self.bridge
        own = new[self.edges[stays]].reshape(-1, 2)
        lat, lon = lat[keep], lon[keep]
        added = bridge_pairs(lat, lon, own) if bridges else own[:0]
        return assemble(len(lat), own, added, lat, lon, rule=self.rule)
