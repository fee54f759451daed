"""The contact graph: undirected, unweighted neighbours over traditions."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

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
