"""The one p-value function."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from twicetold.errors import TwicetoldError
from twicetold.references.law import Law
from twicetold.references.pvalue import p_attainable, p_few, p_floor, p_many, p_value


def law_of(draws, exact=False):
    values, counts = np.unique(np.asarray(draws, dtype=np.int64), return_counts=True)
    n = 0 if exact else len(draws)
    return Law(values, counts.astype(float), n, exact=exact, effective=len(draws))


LAW = law_of([0, 0, 1, 1, 1, 2, 4, 4, 7])


def test_counts_by_hand():
    assert p_many(LAW, 4) == (1 + 3) / 10
    assert p_few(LAW, 1) == (1 + 5) / 10
    assert p_many(LAW, 8) == p_floor(LAW) == 1 / 10
    assert p_many(LAW, 3) == p_many(LAW, 4)
    assert p_many(LAW, np.array([0, 7])).tolist() == [1.0, 0.2]
    exact = law_of([0, 0, 1, 1, 1, 2, 4, 4, 7], exact=True)
    assert p_many(exact, 4) == 3 / 9
    assert p_floor(exact) == 0.0


@given(st.lists(st.integers(-20, 20), min_size=1, max_size=60), st.integers(-25, 25), st.booleans())
def test_properties(draws, observed, exact):
    law = law_of(draws, exact)
    many, few = float(p_many(law, observed)), float(p_few(law, observed))
    assert 0 <= many <= 1
    assert 0 <= few <= 1
    assert many + few >= 1 - 1e-12  # ties belong to both tails
    if not exact:
        assert many > 0
        assert many == p_value(sum(d >= observed for d in draws), len(draws))
    elif observed in draws:
        assert many > 0
    for direction, p in (("many", many), ("few", few)):
        assert p_attainable(law, direction, known=observed) <= p
        assert p_attainable(law, direction) >= p_floor(law)


@given(st.integers(1, 400), st.floats(0.001, 1))
def test_valid_at_every_level(draws, alpha):
    # The rank of the observed among draws + 1 exchangeable values is uniform (no ties).
    p = p_value(np.arange(draws + 1), draws)
    assert (p <= alpha).mean() <= alpha + 1e-12


def test_weighted_draws_enter_by_their_effective_number():
    law = Law(np.array([1, 2, 3]), np.array([0.5, 0.3, 0.2]), 1000, effective=99.0)
    assert p_many(law, 3) == pytest.approx((1 + 0.2 * 99) / 100)
    assert p_few(law, 1) == pytest.approx((1 + 0.5 * 99) / 100)
    assert p_many(law, 4) == p_floor(law) == 1 / 100
    equal = Law(np.array([1, 2]), np.array([2.5, 7.5]), 10, effective=10.0)
    assert p_many(equal, 2) == pytest.approx((1 + 7.5) / 11)


def test_attainable():
    assert p_attainable(LAW, "many") == 2 / 10
    assert p_attainable(LAW, "few") == 3 / 10
    assert p_attainable(LAW, "many", known=9) == 1 / 10
    assert p_attainable(LAW, "many", known=2) == 2 / 10


def test_nonsense_is_refused():
    for tail, draws in ((-1, 10), (11, 10), (0, 0), (np.nan, 10)):
        with pytest.raises(TwicetoldError, match="from 0 to the number of draws"):
            p_value(tail, draws)
    with pytest.raises(TwicetoldError, match="whole numbers"):
        p_many(LAW, 2.5)
    with pytest.raises(TwicetoldError, match="direction"):
        p_attainable(LAW, "most")
