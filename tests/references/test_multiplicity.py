"""Adjusted p-values and who is in the family."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from twicetold.errors import TwicetoldError
from twicetold.references import multiplicity
from twicetold.references.multiplicity import adjust, tarone_count

# Benjamini & Hochberg 1995, J. R. Stat. Soc. B 57, 289-300, section 3.2.
P = [
    *(0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344),
    *(0.0459, 0.3240, 0.4262, 0.5719, 0.6528, 0.7590, 1.0),
]
BH = [
    *(0.0015, 0.003, 0.0095, 0.035625, 0.0603, 0.063857, 0.063857, 0.0645),
    *(0.0765, 0.486, 0.581182, 0.714875, 0.753231, 0.813214, 1.0),
]


def test_the_example_of_1995():
    np.testing.assert_allclose(adjust(P), BH, atol=5e-7)
    assert (adjust(P, "bh") <= 0.05).sum() == 4
    assert (adjust(P, "by") <= 0.05).sum() == 3
    assert (np.array(P) * len(P) <= 0.05).sum() == 3


def test_motifs_outside_the_family_do_not_count():
    given_p = np.insert(np.array(P), [0, 7, 15], np.nan)
    got = adjust(given_p)
    assert np.isnan(got).tolist() == np.isnan(given_p).tolist()
    np.testing.assert_allclose(got[~np.isnan(got)], BH, atol=5e-7)
    assert np.isnan(adjust([np.nan, np.nan])).all()
    assert len(adjust([])) == 0


@given(st.lists(st.floats(0, 1), min_size=1, max_size=30), st.sampled_from(["bh", "by"]))
def test_adjusting_only_raises_and_keeps_order(p, method):
    got = adjust(p, method)
    assert np.all(got >= np.array(p) * (1 - 1e-12))
    assert np.all(got <= 1)
    assert np.all(np.diff(got[np.argsort(p)]) >= -1e-12)


def test_testable():
    assert multiplicity.testable([0.2, 0.05, 0.01, np.nan], 0.05).tolist() == [
        False,
        True,
        True,
        False,
    ]


@given(st.lists(st.floats(1e-6, 1), max_size=40), st.floats(0.01, 0.2))
def test_tarone_count_is_the_smallest_that_holds(floors, alpha):
    k = tarone_count(floors, alpha)
    assert sum(f <= alpha / k for f in floors) <= k
    assert all(sum(f <= alpha / j for f in floors) > j for j in range(1, k))
    assert 1 <= k <= max(len(floors), 1)


def test_nonsense_is_refused():
    with pytest.raises(TwicetoldError, match="method"):
        adjust([0.1], "holm")
    with pytest.raises(TwicetoldError, match="from 0 to 1"):
        adjust([0.1, 1.2])
    with pytest.raises(TwicetoldError, match="alpha"):
        multiplicity.testable([0.1], 0)
