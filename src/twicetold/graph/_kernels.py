"""Compiled loops of this folder; ``_plain`` says the same in plain Python."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from numba import njit

IntArray = npt.NDArray[np.int32]


@njit(nogil=True, cache=True)
def hops(indptr: IntArray, indices: IntArray, sources: IntArray, out: IntArray) -> None:
    """Breadth-first distances from each source; ``out`` (S, n) comes filled with -1."""
    queue = np.empty(out.shape[1], dtype=np.int32)
    for s in range(len(sources)):
        row = out[s]
        row[sources[s]] = 0
        queue[0] = sources[s]
        head, tail = 0, 1
        while head < tail:
            i = queue[head]
            head += 1
            for e in range(indptr[i], indptr[i + 1]):
                j = indices[e]
                if row[j] < 0:
                    row[j] = row[i] + 1
                    queue[tail] = j
                    tail += 1
