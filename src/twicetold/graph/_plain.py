"""Readable twins of ``_kernels``, for the tests."""

from __future__ import annotations

from collections import deque

import numpy as np
import numpy.typing as npt

IntArray = npt.NDArray[np.int32]


def hops(indptr: IntArray, indices: IntArray, sources: IntArray, out: IntArray) -> None:
    """Breadth-first distances from each source; ``out`` (S, n) comes filled with -1."""
    for row, source in zip(out, sources, strict=True):
        row[source] = 0
        waiting = deque([source])
        while waiting:
            i = waiting.popleft()
            for j in indices[indptr[i] : indptr[i + 1]]:
                if row[j] < 0:
                    row[j] = row[i] + 1
                    waiting.append(j)
