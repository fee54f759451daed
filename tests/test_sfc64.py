"""The kernels' generator against numpy.random.SFC64, and its whole numbers against counting."""

import time

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from twicetold import _sfc64 as sfc
from twicetold.randomness import Stream, chunk_sequence, chunk_words

WORD = st.integers(0, 2**64 - 1)


def seeded(words):
    state = sfc.new_state()
    sfc.seed_state(state, *(np.uint64(w) for w in words))
    return state


@settings(max_examples=50, deadline=None)
@given(WORD, WORD, WORD)
def test_same_bits_as_numpy(w0, w1, w2):
    state = seeded((w0, w1, w2))
    ours = [int(sfc.next_u64(state)) for _ in range(20)]
    assert ours == [int(x) for x in sfc.plain_generator(w0, w1, w2).bit_generator.random_raw(20)]


def test_seeding_equals_numpy_seeding():
    # numpy.random.SFC64(SeedSequence) takes exactly the three words we pass on.
    sequence = chunk_sequence(7, Stream.EMERGENCE, 3)
    words = chunk_words(7, Stream.EMERGENCE, 3, draws=1)[0]
    state = seeded(words)
    theirs = np.random.SFC64(sequence)
    assert [int(sfc.next_u64(state)) for _ in range(50)] == [int(x) for x in theirs.random_raw(50)]


@given(
    st.integers(0, 2**63 - 1),
    st.lists(st.integers(0, 2**40), max_size=4),
    st.integers(1, 700),
)
def test_words_of_a_chunk_are_numpys(seed, chunk, draws):
    words = chunk_words(seed, Stream.ANCESTRY, *chunk, draws=draws)
    theirs = chunk_sequence(seed, Stream.ANCESTRY, *chunk).generate_state(3 * draws, np.uint64)
    np.testing.assert_array_equal(words, theirs.reshape(draws, 3))
    assert words.dtype == np.uint64


def test_words_take_a_fraction_of_numpys_time():
    # Processor time of this thread, the least of ten: made word by word it would be about even.
    def least(work):
        took = []
        for _ in range(10):
            begun = time.thread_time()
            for k in range(20):
                work(k)
            took.append(time.thread_time() - begun)
        return min(took)

    ours = least(lambda k: chunk_words(1, Stream.ANCESTRY, k, draws=1000))
    theirs = least(lambda k: chunk_sequence(1, Stream.ANCESTRY, k).generate_state(3000, np.uint64))
    assert ours < theirs / 2


def test_doubles_and_exponentials_equal_numpy_and_plain():
    state, plain = seeded((1, 2, 3)), sfc.PlainStream(1, 2, 3)
    generator = sfc.plain_generator(1, 2, 3)
    for _ in range(200):
        value = sfc.next_double(state)
        assert value == generator.random() == plain.double()
        assert 0.0 <= value < 1.0
    for _ in range(200):
        assert sfc.next_exponential(state) == plain.exponential() >= 0.0


@pytest.mark.parametrize("n", [1, 2, 3, 7, 1000, 3_000_000_000, 2**32 - 1])
def test_whole_numbers_equal_plain(n):
    # n = 3e9 rejects about 30 % of the time, so the rejection branch is walked too.
    state, plain = seeded((11, 12, 13)), sfc.PlainStream(11, 12, 13)
    for _ in range(500):
        value = sfc.next_below(state, n)
        assert value == plain.below(n)
        assert 0 <= value < n
    assert sfc.next_u64(state) == plain.u64()


def test_whole_numbers_are_uniform():
    state, n, draws = seeded((5, 6, 7)), 7, 70_000
    counts = np.bincount([sfc.next_below(state, n) for _ in range(draws)], minlength=n)
    error = np.sqrt(draws * (1 / n) * (1 - 1 / n))
    assert np.all(np.abs(counts - draws / n) < 4 * error)
