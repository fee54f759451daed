"""Long-run frequencies of trades against the tables enumerated, by chi-square."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy import stats

from twicetold.randomness import Stream, chunk_words
from twicetold.references.margins import _run

Table = tuple[tuple[int, ...], ...]


def all_tables(row_sums, column_sums, forbidden=frozenset()):
    """Every 0/1 table with these margins and these cells empty, as tuples of column numbers."""
    n = len(column_sums)
    rows = [
        [c for c in itertools.combinations(range(n), s) if not any((r, v) in forbidden for v in c)]
        for r, s in enumerate(row_sums)
    ]
    out = []
    for table in itertools.product(*rows):
        totals = np.bincount(list(itertools.chain(*table)), minlength=n)
        if totals.tolist() == list(column_sums):
            out.append(table)
    return out


def frequencies(start, n, forbidden, draws, sweeps):
    """How often a chain run for ``sweeps`` from ``start`` ends in each table."""
    m = len(start)
    indptr = np.concatenate([[0], np.cumsum([len(r) for r in start])]).astype(np.int64)
    flat = np.array(list(itertools.chain(*start)), dtype=np.int64)
    patterns = [tuple((r, v) not in forbidden for v in range(n)) for r in range(m)]
    kinds = sorted(set(patterns))
    allowed = np.array(kinds)
    set_of = np.array([kinds.index(p) for p in patterns])
    seen: dict[Table, int] = {}
    for word in chunk_words(5, Stream.MARGINS, draws=draws):
        now = flat.copy()
        _run((indptr, now, set_of), allowed, word, sweeps)
        table = tuple(tuple(sorted(now[a:b].tolist())) for a, b in itertools.pairwise(indptr))
        seen[table] = seen.get(table, 0) + 1
    return seen


def check_uniform(tables, seen, draws):
    assert set(seen) <= set(tables)
    counts = [seen.get(t, 0) for t in tables]
    assert stats.chisquare(counts).pvalue > 1e-4
    assert sum(counts) == draws


@pytest.mark.parametrize(("size", "each", "number"), [(3, 1, 6), (4, 2, 90)])
def test_square_tables_are_equally_likely(size, each, number):
    tables = all_tables([each] * size, [each] * size)
    assert len(tables) == number
    draws = 200 * number
    check_uniform(tables, frequencies(tables[0], size, frozenset(), draws, 15), draws)


def test_five_by_five_twos():
    tables = all_tables([2] * 5, [2] * 5)
    assert len(tables) == 2040
    check_uniform(tables, frequencies(tables[17], 5, frozenset(), 30_000, 20), 30_000)


def test_unequal_margins():
    tables = all_tables([3, 1, 2, 2], [2, 1, 3, 1, 1])
    draws = 200 * len(tables)
    check_uniform(tables, frequencies(tables[0], 5, frozenset(), draws, 20), draws)


def test_two_surveys_with_unsearched_cells():
    # Rows 0 and 1 were not searched in columns 0 and 1, row 2 not in column 4.
    forbidden = frozenset({(0, 0), (0, 1), (1, 0), (1, 1), (2, 4)})
    tables = all_tables([2, 1, 2, 3], [2, 1, 2, 2, 1], forbidden)
    assert len(tables) > 5
    draws = 300 * len(tables)
    check_uniform(tables, frequencies(tables[-1], 5, forbidden, draws, 25), draws)


def test_empty_diagonal_is_reached_by_rotations_alone():
    # Two tables, the two ways round; no exchange between two rows is possible (Rao et al. 1996).
    forbidden = frozenset((i, i) for i in range(3))
    tables = all_tables([1] * 3, [1] * 3, forbidden)
    assert len(tables) == 2
    check_uniform(tables, frequencies(tables[0], 3, forbidden, 2000, 40), 2000)


def test_empty_diagonal_of_four():
    forbidden = frozenset((i, i) for i in range(4))
    tables = all_tables([1] * 4, [1] * 4, forbidden)
    assert len(tables) == 9  # derangements of four
    check_uniform(tables, frequencies(tables[0], 4, forbidden, 3000, 40), 3000)
