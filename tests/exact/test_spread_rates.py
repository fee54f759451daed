"""The rate-based contact process against closed forms and the null space of its generator."""

from __future__ import annotations

from collections import defaultdict
from fractions import Fraction
from itertools import combinations
from math import comb, factorial

import numpy as np
import pytest

from subset_solver import pieces
from twicetold.spread import STATISTICS
from twicetold.spread.rates import RateModel, rate_world
from zoo import as_contact_graph, small_graphs

COMPLETE5 = [(i, j) for j in range(5) for i in range(j)]
PATH3 = [(0, 1), (1, 2)]


def generator_law(n, edges, contact, spontaneous, loss):
    """Stationary law over holder sets (bit masks) from the null space of the generator."""
    near = [[v for e in edges if i in e for v in e if v != i] for i in range(n)]
    q = np.zeros((2**n, 2**n))
    for s in range(2**n):
        for i in range(n):
            to = s ^ (1 << i)
            held = sum(s >> v & 1 for v in near[i])
            q[s, to] = loss if s >> i & 1 else spontaneous + contact * held
        q[s, s] = -q[s].sum()
    a = np.vstack([q.T, np.ones(2**n)])
    return np.linalg.lstsq(a, np.concatenate([np.zeros(2**n), [1.0]]), rcond=None)[0]


def count_law(n, law):
    out = np.zeros(n + 1)
    for s, p in enumerate(law):
        out[s.bit_count()] += p
    return out


def check_count_law(world, expected):
    """All stationary count probabilities within four standard errors (delta method)."""
    total, got = world.time.sum(), world.stationary()
    for k, p in enumerate(expected):
        direction = -p * np.ones(len(expected))
        direction[k] += 1.0
        error = np.sqrt(max(direction @ world.time_error @ direction, 0.0)) / total
        assert abs(got[k] - p) <= 4 * error + 1e-9, k


def run(n, edges, *rates, excursions=4000):
    model = RateModel(as_contact_graph(n, edges), *rates)
    world = rate_world(model, range(1, n + 1), excursions=excursions, seed=3)
    assert world.cut == 0
    return world


def test_complete_graph_of_five():
    # pi_k in proportion to C(N, k) prod_{j<k} (eps + beta j) / delta**k; all rates 1.
    weights = [Fraction(comb(5, k) * factorial(k)) for k in range(6)]
    exact = [w / sum(weights) for w in weights]
    assert exact == [
        Fraction(1, 326),
        Fraction(5, 326),
        Fraction(10, 163),
        Fraction(30, 163),
        Fraction(60, 163),
        Fraction(60, 163),
    ]
    np.testing.assert_allclose(
        count_law(5, generator_law(5, COMPLETE5, 1, 1, 1)), [float(p) for p in exact], atol=1e-9
    )
    check_count_law(run(5, COMPLETE5, 1, 1, 1), [float(p) for p in exact])


def test_path_of_three():
    exact = [61 / 774, 61 / 258, 152 / 387, 113 / 387]
    np.testing.assert_allclose(count_law(3, generator_law(3, PATH3, 1, 1, 1)), exact, atol=1e-9)
    check_count_law(run(3, PATH3, 1, 1, 1), exact)


def test_without_contact_the_count_is_binomial():
    n, edges = small_graphs()["cycle6"]
    p = 0.3 / (0.3 + 0.8)
    exact = [comb(n, k) * p**k * (1 - p) ** (n - k) for k in range(n + 1)]
    check_count_law(run(n, edges, 0.0, 0.3, 0.8), exact)


def test_equal_gain_rates_on_the_complete_graph_leave_a_truncated_poisson():
    # spontaneous = contact: N - k is Poisson(loss / contact) truncated at N.
    beta, delta = 0.5, 0.9
    poisson = [(delta / beta) ** j / factorial(j) for j in range(6)]
    exact = [poisson[5 - k] / sum(poisson) for k in range(6)]
    check_count_law(run(5, COMPLETE5, beta, beta, delta), exact)


@pytest.mark.parametrize("name", ["star6", "two_triangles", "path5", "matching4", "empty4"])
def test_any_small_graph(name):
    n, edges = small_graphs()[name]
    contact, spontaneous, loss = 0.6, 0.2, 1.0
    law = generator_law(n, edges, contact, spontaneous, loss)
    world = run(n, edges, contact, spontaneous, loss, excursions=6000)
    check_count_law(world, count_law(n, law))
    # Given the count: the law of the joins and of the clusters.
    for count in range(2, n):
        joint = {"joins": defaultdict(float), "clusters": defaultdict(float)}
        for held in combinations(range(n), count):
            inside = [e for e in edges if e[0] in held and e[1] in held]
            p = law[sum(1 << i for i in held)]
            joint["joins"][len(inside)] += p
            joint["clusters"][len(pieces(held, inside))] += p
        k = count - 1
        weight = world.weight[k]
        for statistic, parts in joint.items():
            values = world.statistics[k][:, STATISTICS.index(statistic)]
            total = sum(parts.values())
            for value, part in parts.items():
                p = part / total
                hit = values == value
                error = np.sqrt(np.sum((weight * (hit - p)) ** 2)) / weight.sum()
                assert abs(weight[hit].sum() / weight.sum() - p) <= 4 * error + 1e-9


@pytest.mark.parametrize("name", ["grid3", "star6", "path7+2"])
def test_flow_identity(name):
    # delta E[k] = eps (N - E[k]) + beta E[BW] at stationarity, on any graph.
    n, edges = small_graphs()[name]
    contact, spontaneous, loss = 0.5, 0.1, 1.0
    world = run(n, edges, contact, spontaneous, loss, excursions=8000)
    total = world.time.sum()
    k = np.arange(n + 1)
    mean, error = world.time @ k / total, np.sqrt(k @ world.time_error @ k) / total
    right = spontaneous * (n - mean) + contact * world.boundary / total
    # Both sides move together from run to run, so this tolerance is ample; the identity is in
    # fact a martingale statement about one cycle.
    assert abs(loss * mean - right) <= 4 * error
