"""Random numbers for the example that stay the same on every machine and NumPy.

NumPy promises the raw stream of a bit generator for ever, but not the stream of its
distributions. The example must come out equal to the byte, so only raw words are used.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TypeVar

import numpy as np
import numpy.typing as npt

_T = TypeVar("_T")
_BLOCK = 1024


class Dice:
    """Uniform numbers from one named stream of the example's seed."""

    def __init__(self, seed: int, *key: int) -> None:
        self._bits = np.random.PCG64(np.random.SeedSequence(seed, spawn_key=key))
        self._buffer: list[float] = []

    def uniforms(self, count: int) -> npt.NDArray[np.float64]:
        """(count,) float64 in [0, 1), 53 bits each."""
        words: npt.NDArray[np.uint64] = self._bits.random_raw(count)
        return np.asarray((words >> np.uint64(11)) * 2.0**-53, dtype=np.float64)

    def uniform(self) -> float:
        """One number in [0, 1)."""
        if not self._buffer:
            self._buffer = self.uniforms(_BLOCK).tolist()
        return self._buffer.pop()

    def below(self, count: int) -> int:
        """Whole number from 0 to ``count`` - 1."""
        return int(self.uniform() * count)

    def pick(self, items: Sequence[_T]) -> _T:
        """One of the items."""
        return items[self.below(len(items))]

    def normal(self) -> float:
        """Standard normal number (Box and Muller 1958)."""
        radius = math.sqrt(-2.0 * math.log(1.0 - self.uniform()))
        return radius * math.cos(2.0 * math.pi * self.uniform())

    def shuffled(self, items: Sequence[_T]) -> list[_T]:
        """The items in random order (Fisher and Yates 1938, Durstenfeld 1964)."""
        out = list(items)
        for i in range(len(out) - 1, 0, -1):
            j = self.below(i + 1)
            out[i], out[j] = out[j], out[i]
        return out
