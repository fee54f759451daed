"""Joins and their moments: against enumeration, against counting, and properties."""

from fractions import Fraction
from itertools import combinations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from twicetold.errors import TwicetoldError
from twicetold.statistics import join_counts, join_moments, local_joins
from zoo import as_contact_graph, small_graphs

ZOO = small_graphs()


@st.composite
def motif_worlds(draw):
    """A random graph, holders and families."""
    n = draw(st.integers(2, 12))
    pairs = [(i, j) for i in range(n) for j in range(i + 1, n)]
    edges = draw(st.lists(st.sampled_from(pairs), unique=True))
    holders = draw(st.lists(st.integers(0, n - 1), unique=True))
    family = draw(st.lists(st.integers(0, 3), min_size=n, max_size=n))
    return n, edges, holders, np.array(family)


@pytest.mark.parametrize("name", ZOO)
def test_moments_equal_enumeration(name):
    # oracles: enumeration of every set; Cliff & Ord 1981 give the closed forms.
    n, edges = ZOO[name]
    graph, family = as_contact_graph(n, edges), np.arange(n) % 3
    for held in range(n + 1):
        counts = [join_counts(graph, list(s), family) for s in combinations(range(n), held)]
        got = join_moments(graph, family, held)

        def mean(f, counts=counts):
            return Fraction(sum(f(c) for c in counts), len(counts))

        for kind in ("all", "cross", "same"):
            m1 = mean(lambda c, kind=kind: getattr(c, kind))
            m2 = mean(lambda c, kind=kind: getattr(c, kind) ** 2)
            assert getattr(got, f"mean_{kind}") == pytest.approx(float(m1), abs=1e-14)
            assert getattr(got, f"var_{kind}") == pytest.approx(float(m2 - m1**2), abs=1e-13)
        cov = mean(lambda c: c.cross * c.same) - mean(lambda c: c.cross) * mean(lambda c: c.same)
        assert got.cov_cross_same == pytest.approx(float(cov), abs=1e-13)


@settings(max_examples=60, deadline=None)
@given(motif_worlds(), st.randoms(use_true_random=False))
def test_joins_properties(world, random):
    n, edges, holders, family = world
    graph = as_contact_graph(n, edges)
    got = join_counts(graph, holders, family)
    held = set(holders)
    assert got.all == sum(a in held and b in held for a, b in edges)
    assert got.all + got.mixed + got.empty == len(edges)
    assert got.cross + got.same == got.all
    assert got.degree_sum == 2 * got.all + got.mixed
    assert local_joins(graph, holders).sum() == 2 * got.all
    # Renaming traditions changes nothing; an isolate changes nothing but N.
    new = list(range(n))
    random.shuffle(new)
    moved = as_contact_graph(n + 1, [(new[a], new[b]) for a, b in edges])
    shuffled = np.zeros(n + 1, dtype=int)
    shuffled[new] = family
    assert join_counts(moved, [new[h] for h in holders], shuffled) == got


def test_local_joins_follow_the_order_given():
    graph = as_contact_graph(*ZOO["star6"])
    assert local_joins(graph, [3, 0, 1]).tolist() == [1, 2, 1]


@pytest.mark.parametrize(
    ("holders", "words"),
    [([0, 0], "once"), ([9], "from 0 to 4"), ([-1], "from 0 to 4"), ([0.5], "whole numbers")],
)
def test_holders_that_do_not_fit_are_refused(holders, words):
    with pytest.raises(TwicetoldError, match=words):
        join_counts(as_contact_graph(*ZOO["path5"]), holders)


def test_families_and_counts_that_do_not_fit_are_refused():
    graph = as_contact_graph(*ZOO["path5"])
    with pytest.raises(TwicetoldError, match="each of 5 traditions"):
        join_counts(graph, [0], [1, 2])
    with pytest.raises(TwicetoldError, match="from 0 to 5"):
        join_moments(graph, None, 6)
