"""The subset solver against closed forms, and the facts about the chain it proves."""

from __future__ import annotations

import numpy as np
import pytest

from subset_solver import PATH5, Solver


def log_series(x, n):
    p = x ** np.arange(1, n + 1) / np.arange(1, n + 1)
    return p / p.sum()


# Values of the design's oracle table (exact: linear algebra over the 31 subsets of the path).
@pytest.mark.parametrize(
    ("x", "expected"),
    [
        (0.5, [0.726172, 0.181543, 0.060514, 0.022693, 0.009077]),
        (0.9, [0.491770, 0.221297, 0.132778, 0.089625, 0.064530]),
    ],
)
@pytest.mark.parametrize("shares", [(0, 1, 0), (0.2, 0.8, 0), (0.3, 0.3, 0.4)])
def test_prevalence_is_log_series_for_every_share(x, expected, shares):
    solver = Solver(5, PATH5, x, shares, family=[0, 0, 1, 1, 1])
    np.testing.assert_allclose(solver.prevalence(), expected, atol=5e-7)
    np.testing.assert_allclose(solver.prevalence(), log_series(x, 5), rtol=1e-10)


@pytest.mark.parametrize(
    ("share", "x", "two", "three"),
    [
        (0, 0.5, [0.140279, 0.859721], [0.014900, 0.232710, 0.752389]),
        (0, 0.9, [0.220480, 0.779520], [0.029471, 0.337431, 0.633098]),
        (0.2, 0.9, [0.297238, 0.702762], [0.039596, 0.409803, 0.550602]),
    ],
)
def test_joins_on_the_path(share, x, two, three):
    solver = Solver(5, PATH5, x, (share, 1 - share, 0))
    np.testing.assert_allclose(list(solver.law("joins", 2).values()), two, atol=6e-7)
    np.testing.assert_allclose(list(solver.law("joins", 3).values()), three, atol=6e-7)
    assert list(solver.law("joins", 3)) == [0, 1, 2]


def test_thinned_log_series_is_log_series():
    # x' = x r / (1 - x (1 - r)) holds without a ceiling; with one, thin the truncated series.
    x, r, n = 0.4, 0.6, 6
    solver = Solver(n, [(i, i + 1) for i in range(n - 1)], x)
    got = solver.prevalence([r] * n)
    thinned = x * r / (1 - x * (1 - r))
    np.testing.assert_allclose(got[:3], log_series(thinned, 200)[:3], rtol=0.02)


def test_full_emergence_gives_uniform_subsets():
    solver = Solver(6, [(i, (i + 1) % 6) for i in range(6)], 0.8, (1, 0, 0))
    for s, t in solver.time.items():
        same = [u for v, u in solver.time.items() if len(v) == len(s)]
        np.testing.assert_allclose(t, np.mean(same), rtol=1e-9)


def test_long_reach_on_the_complete_graph_is_still_uniform():
    solver = Solver(4, [(i, j) for i in range(4) for j in range(i)], 0.7, reach=3.0)
    law = solver.law("joins", 3)
    assert list(law) == [3]
    np.testing.assert_allclose(solver.prevalence(), log_series(0.7, 4), rtol=1e-10)
