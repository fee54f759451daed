"""Where every random number comes from.

Chunk k of work ``what`` draws from ``SeedSequence(seed, spawn_key=(what, k))`` and nothing else, so
a motif alone equals the same motif in the batch, whatever the number of workers.
"""

from __future__ import annotations

from enum import IntEnum

import numpy as np
import numpy.typing as npt


class Stream(IntEnum):
    """First word of the spawn key: which part of the program draws. Never renumber."""

    EMERGENCE = 1
    ANCESTRY = 2
    MARGINS = 3
    SPREAD = 4
    BANK = 5
    TURNOVER = 6
    HIDDEN = 7
    POWER = 8
    PAIRS = 9
    CATEGORIES = 10
    REGIONS = 11
    RATES = 12
    ENVELOPE = 13
    SHARES = 14


def chunk_sequence(seed: int, what: Stream, *chunk: int) -> np.random.SeedSequence:
    """Give the seed sequence of one chunk."""
    return np.random.SeedSequence(seed, spawn_key=(int(what), *chunk))


def chunk_generator(seed: int, what: Stream, *chunk: int) -> np.random.Generator:
    """Give a NumPy generator for one chunk (PCG64)."""
    return np.random.Generator(np.random.PCG64(chunk_sequence(seed, what, *chunk)))


def chunk_words(seed: int, what: Stream, *chunk: int, draws: int) -> npt.NDArray[np.uint64]:
    """(draws, 3) uint64: the three seeding words of an SFC64 generator for each draw of a chunk."""
    words = chunk_sequence(seed, what, *chunk).generate_state(3 * draws, np.uint64)
    return words.reshape(draws, 3).astype(np.uint64, copy=False)
