"""The SFC64 generator inside compiled kernels, bit for bit NumPy's.

A kernel seeds one generator per draw from three words (:func:`twicetold.randomness.chunk_words`),
so a draw's numbers depend on the seed and the draw's number alone. The readable twins of the
kernels read the same numbers through :class:`PlainStream`, which is NumPy's own generator.

The algorithm is Chris Doty-Humphrey's "small fast chaotic" generator with 64-bit words (PractRand,
public domain), as NumPy seeds it: counter 1 and twelve rounds thrown away.
"""

from __future__ import annotations

import math

import numba as nb
import numpy as np
import numpy.typing as npt

DOUBLE = 1.0 / 9007199254740992.0  # 2**-53


@nb.njit(nogil=True, cache=True)
def step(a, b, c, counter):  # type: ignore[no-untyped-def]
    """Give the next uint64 and the four words after it (for loops that keep them in registers)."""
    out = a + b + counter
    turned = (c << np.uint64(24)) | (c >> np.uint64(40))
    return (
        out,
        b ^ (b >> np.uint64(11)),
        c + (c << np.uint64(3)),
        turned + out,
        counter + np.uint64(1),
    )


@nb.njit(nogil=True, cache=True)
def next_u64(state):  # type: ignore[no-untyped-def]
    """Advance ``state`` ((4,) uint64) and give the next uint64."""
    out, state[0], state[1], state[2], state[3] = step(state[0], state[1], state[2], state[3])
    return out


@nb.njit(nogil=True, cache=True)
def seed_state(state, w0, w1, w2):  # type: ignore[no-untyped-def]
    """Seed ``state`` ((4,) uint64) from three uint64 words as ``numpy.random.SFC64`` does."""
    state[0] = np.uint64(w0)
    state[1] = np.uint64(w1)
    state[2] = np.uint64(w2)
    state[3] = np.uint64(1)
    for _ in range(12):
        next_u64(state)


@nb.njit(nogil=True, cache=True)
def next_double(state):  # type: ignore[no-untyped-def]
    """Give a uniform double in [0, 1), a multiple of 2**-53."""
    return np.float64(next_u64(state) >> np.uint64(11)) * DOUBLE


@nb.njit(nogil=True, cache=True)
def next_below(state, n):  # type: ignore[no-untyped-def]
    """Give a uniform int64 in 0 .. n - 1, without bias, for 1 <= n < 2**32.

    Multiply and shift with rejection (Lemire 2019, ACM TOMACS 29(1)) on the upper 32 bits.
    """
    bound = np.uint64(n)
    product = (next_u64(state) >> np.uint64(32)) * bound
    low = product & np.uint64(0xFFFFFFFF)
    if low < bound:
        threshold = (np.uint64(0x100000000) - bound) % bound
        while low < threshold:
            product = (next_u64(state) >> np.uint64(32)) * bound
            low = product & np.uint64(0xFFFFFFFF)
    return np.int64(product >> np.uint64(32))


@nb.njit(nogil=True, cache=True)
def next_exponential(state):  # type: ignore[no-untyped-def]
    """Give a standard exponential waiting time, >= 0, by inversion."""
    return -math.log1p(-next_double(state))


class PlainStream:
    """The same numbers through NumPy's SFC64, for the readable twins of the kernels.

    Parameters
    ----------
    w0, w1, w2 : int
        Seeding words, as given to :func:`seed_state`.
    """

    def __init__(self, w0: int, w1: int, w2: int) -> None:
        self.generator = plain_generator(w0, w1, w2)

    def u64(self) -> int:
        """Next uint64."""
        return int(self.generator.bit_generator.random_raw())

    def double(self) -> float:
        """Uniform in [0, 1)."""
        return float(self.generator.random())

    def below(self, n: int) -> int:
        """Uniform whole number in 0 .. n - 1."""
        while True:
            product = (self.u64() >> 32) * n
            if product % 2**32 >= 2**32 % n:
                return product >> 32

    def exponential(self) -> float:
        """Draw a standard exponential by inversion."""
        return -math.log1p(-self.double())


def plain_generator(w0: int, w1: int, w2: int) -> np.random.Generator:
    """Give NumPy's SFC64 generator in the state :func:`seed_state` leaves."""
    words = [int(w0), int(w1), int(w2), 1]
    bits = np.random.SFC64(0)
    bits.state = {
        "bit_generator": "SFC64",
        "state": {"state": np.array(words, dtype=np.uint64)},
        "has_uint32": 0,
        "uinteger": 0,
    }
    bits.random_raw(12, output=False)
    return np.random.Generator(bits)


def new_state() -> npt.NDArray[np.uint64]:
    """Give an unseeded state, (4,) uint64."""
    return np.zeros(4, dtype=np.uint64)
