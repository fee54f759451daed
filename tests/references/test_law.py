"""Law: tails, moments and quantiles against the plain list of draws."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from twicetold.references.law import Law


@given(
    st.lists(st.integers(-9, 9), min_size=1, max_size=40),
    st.integers(-10, 10),
    st.floats(0.01, 1.0),
)
def test_against_the_list(draws, value, q):
    values, counts = np.unique(draws, return_counts=True)
    law = Law(values.astype(np.int64), counts.astype(float), len(draws))
    assert law.total == len(draws)
    assert law.mean() == pytest.approx(np.mean(draws))
    assert law.variance() == pytest.approx(np.var(draws), abs=1e-9)
    assert law.at_least(value) == sum(d >= value for d in draws)
    assert law.at_most(value) == sum(d <= value for d in draws)
    found = law.quantile(q)
    assert law.at_most(found) >= q * len(draws) * (1 - 1e-9)
    assert law.at_most(found - 1) < q * len(draws) * (1 + 1e-9)
