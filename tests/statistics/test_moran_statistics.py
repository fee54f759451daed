"""Moran's I and its moments by enumeration."""

from itertools import combinations, permutations

import numpy as np
import pytest

from twicetold.errors import TwicetoldError
from twicetold.statistics import (
    join_counts,
    moran_from_score,
    moran_i,
    moran_moments,
    moran_of_values,
    moran_score,
)
from zoo import as_contact_graph, small_graphs

ZOO = {k: v for k, v in small_graphs().items() if v[1]}


@pytest.mark.parametrize("name", ZOO)
def test_binary_form_equals_the_general_one_and_enumerated_moments(name):
    n, edges = ZOO[name]
    graph = as_contact_graph(n, edges)
    for held in range(1, n):
        values = []
        for s in combinations(range(n), held):
            y = np.zeros(n)
            y[list(s)] = 1
            values.append(moran_i(graph, s))
            counts = join_counts(graph, list(s))
            score = moran_score(n, held, counts.all, counts.degree_sum)
            assert values[-1] == pytest.approx(moran_of_values(graph, y), abs=1e-12)
            assert values[-1] == moran_from_score(graph, held, score)
        moments = moran_moments(graph, held)
        assert moments.mean == pytest.approx(np.mean(values), abs=1e-12)
        assert moments.var_randomised == pytest.approx(np.var(values), abs=1e-12)


def test_moments_of_values_equal_all_permutations():
    graph = as_contact_graph(*ZOO["two_triangles"])
    y = np.array([0.3, 1.0, 2.5, 2.5, 7.0, -1.0])
    values = [moran_of_values(graph, y[list(p)]) for p in permutations(range(6))]
    moments = moran_moments(graph, values=y)
    assert moments.mean == pytest.approx(np.mean(values), abs=1e-12)
    assert moments.var_randomised == pytest.approx(np.var(values), abs=1e-12)


def test_undefined_is_nan_and_nonsense_is_refused():
    path, empty = as_contact_graph(*ZOO["path5"]), as_contact_graph(*small_graphs()["empty4"])
    assert np.isnan(moran_i(path, []))
    assert np.isnan(moran_i(path, range(5)))
    assert np.isnan(moran_i(empty, [0, 1]))
    assert np.isnan(moran_of_values(path, np.ones(5)))
    assert np.isnan(moran_moments(empty, 2).mean)
    assert np.isnan(moran_moments(path, 5).var_randomised)
    with pytest.raises(TwicetoldError, match="not both"):
        moran_moments(path)
    with pytest.raises(TwicetoldError, match="from 0 to 5"):
        moran_moments(path, 6)
    with pytest.raises(TwicetoldError, match="finite number"):
        moran_of_values(path, [1.0, 2.0, np.nan, 0.0, 0.0])
