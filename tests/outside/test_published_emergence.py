"""Published values for joins where only the table, not the map, is at hand."""

import numpy as np
import pytest
from statsmodels.stats.proportion import proportion_confint

from twicetold.statistics import join_moments
from zoo import as_contact_graph


def graph_with(n, n_edges, meetings, seed=0):
    """A graph with so many edges and sum of k(k - 1), by moving edges at random."""
    rng = np.random.default_rng(seed)
    pairs = [(i, j) for i in range(n) for j in range(i + 1, n)]
    chosen = {pairs[k] for k in rng.choice(len(pairs), n_edges, replace=False)}

    def off(edges):
        k = np.bincount(np.array(list(edges)).ravel(), minlength=n)
        return abs(int((k * (k - 1)).sum()) - meetings)

    while off(chosen):
        gone = sorted(chosen)[rng.integers(n_edges)]
        new = pairs[rng.integers(len(pairs))]
        moved = (chosen - {gone}) | {new}
        if len(moved) == n_edges and off(moved) <= off(chosen):
            chosen = moved
    return as_contact_graph(n, chosen)


def test_the_example_in_spdeps_help():
    # R spdep, help(joincount.test): COL.OLD, CRIME cut at 35, COL.nb, binary weights: 49 places,
    # same-colour joins low 34, 29.59184, 18.89550, z 1.0141; high 54, 27.22449, 17.88838,
    # z 6.3307. Expectations fix A = 116; the variance of "low" fixes D = sum k(k - 1), and with it
    # the variance of "high" has nothing left to choose.
    def variances(meetings):
        graph = graph_with(49, 116, meetings)
        return join_moments(graph, None, 25), join_moments(graph, None, 24)

    fitted = min(range(800, 1400, 2), key=lambda d: abs(variance_of(25, d) - 18.89550))
    low, high = variances(fitted)
    assert (low.mean_all, high.mean_all) == pytest.approx((29.59184, 27.22449), abs=5e-6)
    assert (low.var_all, high.var_all) == pytest.approx((18.89550, 17.88838), abs=5e-6)
    assert (34 - low.mean_all) / np.sqrt(low.var_all) == pytest.approx(1.0141, abs=5e-5)
    assert (54 - high.mean_all) / np.sqrt(high.var_all) == pytest.approx(6.3307, abs=5e-5)


def variance_of(n, meetings, total=49, edges=116):
    """The textbook formula (Cliff & Ord 1981), to find D from the printed variance."""
    p2 = n * (n - 1) / (total * (total - 1))
    p3 = p2 * (n - 2) / (total - 2)
    p4 = p3 * (n - 3) / (total - 3)
    rest = edges * (edges - 1) - meetings
    return edges * p2 + meetings * p3 + rest * p4 - (edges * p2) ** 2


def test_intervals_used_for_simulated_rates():
    # Clopper & Pearson 1934, Biometrika 26, as R's binom.test prints them.
    low, high = proportion_confint(81, 263, method="beta")
    assert (low, high) == pytest.approx((0.2527367, 0.3676219), abs=5e-8)
    low, high = proportion_confint(0, 20, method="beta")
    assert (low, high) == pytest.approx((0.0, 0.1684335), abs=5e-8)
