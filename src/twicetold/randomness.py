"""Where every random number comes from.

Chunk k of work ``what`` draws from ``SeedSequence(seed, spawn_key=(what, k))`` and nothing else, so
a motif alone equals the same motif in the batch, whatever the number of workers.
"""

from __future__ import annotations

from enum import IntEnum
from functools import lru_cache

import numpy as np
import numpy.typing as npt

_INIT_B, _MULT_B = 0x8B51F9DD, 0x58F38DED


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
    return _state(chunk_sequence(seed, what, *chunk).pool, 3 * draws).reshape(draws, 3)


def _state(pool: npt.NDArray[np.uint32], words: int) -> npt.NDArray[np.uint64]:
    """Give what ``SeedSequence.generate_state(words, np.uint64)`` gives, all words at once.

    NumPy makes them one by one and holds the interpreter lock meanwhile: a quarter of what one
    motif's draws took. The hash is that of O'Neill's ``seed_seq_fe`` (2015), as NumPy has it; its
    policy on compatibility keeps the stream as it is, and a test compares the two.
    """
    hashes = _hashes(2 * words)
    state = np.tile(pool, -(-2 * words // len(pool)))[: 2 * words] ^ hashes[:-1]
    state *= hashes[1:]
    state ^= state >> np.uint32(16)
    # The same numbers on machines of either byte order.
    return state.astype("<u4").view("<u8").astype(np.uint64)


@lru_cache(maxsize=8)
def _hashes(n: int) -> npt.NDArray[np.uint32]:
    """(n + 1,) constants of the hash, modulo 2**32."""
    factors = np.full(n + 1, _MULT_B, dtype=np.uint32)
    factors[0] = _INIT_B
    out = np.multiply.accumulate(factors, dtype=np.uint32)
    out.flags.writeable = False
    return out
