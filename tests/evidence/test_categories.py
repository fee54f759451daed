"""Categories: ratios and intervals by hand, and a comparison that respects the counts."""

from __future__ import annotations

import inspect
import itertools

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from made_up import catalogue_of
from twicetold.evidence import rank_catalogue
from twicetold.evidence.categories import (
    _ratio,
    categories,
    compare_two,
    log_ratios,
    strata,
)
from twicetold.plan import Plan

PLAN = Plan().replace(sensitivity__draws=999)

# What SciPy calls a generator, from 1.15 on and before.
NAMED = "rng" if "rng" in inspect.signature(stats.bootstrap).parameters else "random_state"


def table_of(category, holders, joins, expected, q):
    m = len(category)
    return pd.DataFrame(
        {
            "category": category,
            "holders": holders,
            "joins": joins,
            "joins_expected": expected,
            "p_against_emergence": q,
            "q_against_emergence": q,
            "_attainable_emergence": np.full(m, 0.001),
        }
    )


def test_the_row_of_a_category_by_hand():
    q = [0.01, 0.2, 0.04, 0.5]
    table = table_of(["sea"] * 4 + ["fire"], [5, 6, 7, 8, 3], [4, 1, 3, 0, 1],
                     [1.0, 1.0, 1.5, 0.5, 0.1], [*q, 0.9])  # fmt: skip
    table.loc[3, "_attainable_emergence"] = 0.2  # too rare to tell
    frame = categories(table, PLAN).frame
    assert frame is not None
    assert frame["category"].tolist() == ["fire", "sea"]
    sea = frame.iloc[1]
    assert (sea["motifs"], sea["testable"]) == (4, 3)
    assert sea["joins_ratio"] == pytest.approx(8 / 3.5)
    assert sea["rejected_share"] == pytest.approx(2 / 3)
    # Clopper & Pearson 1934 by the beta quantiles they are made of.
    assert sea["rejected_low"] == pytest.approx(stats.beta.ppf(0.025, 2, 2))
    assert sea["rejected_high"] == pytest.approx(stats.beta.ppf(0.975, 3, 1))
    assert np.isnan(frame.iloc[0]["joins_ratio_low"])  # one motif has no spread


def test_nothing_without_categories_and_no_pairs_with_one():
    assert (
        categories(table_of([""] * 3, [3] * 3, [1] * 3, [1.0] * 3, [0.5] * 3), PLAN).frame is None
    )
    one = categories(table_of(["sea"] * 3, [3] * 3, [1] * 3, [1.0] * 3, [0.5] * 3), PLAN)
    assert one.frame is not None
    assert one.pairs is None


def test_the_bootstrap_agrees_with_scipys():
    rng = np.random.default_rng(0)
    expected = rng.uniform(0.5, 4, 40)
    joins = rng.poisson(1.6 * expected).astype(float)
    ratio, low, high = _ratio(joins, expected, 3)
    other = stats.bootstrap(
        (joins, expected), lambda j, e, axis=-1: j.sum(axis) / e.sum(axis), paired=True,
        method="percentile", n_resamples=9999, **{NAMED: rng},
    ).confidence_interval  # fmt: skip
    # Quantiles at 2.5 % of 1,999 draws: four standard errors over the density there.
    sd = (other.high - other.low) / 3.92
    error = 4 * np.sqrt(0.025 * 0.975 / 1999) / stats.norm.pdf(1.96) * sd
    assert abs(low - other.low) < error
    assert abs(high - other.high) < error
    assert low < ratio < high


def test_strata_hold_neighbouring_numbers_only():
    holders = np.arange(1, 2000)
    code = strata(holders)
    assert (np.diff(code) >= 0).all()
    for c in np.unique(code):
        mine = holders[code == c]
        assert mine.max() <= 1.25 * mine.min()


def test_the_shuffled_p_is_that_of_every_shuffle():
    holders = np.array([4, 4, 4, 4, 20, 20, 21, 21, 900])
    first = np.array([1, 1, 0, 0, 1, 0, 0, 0, 1], dtype=bool)
    scores = np.array([1.0, 0.4, 0.1, -0.3, 0.9, 0.2, -0.1, 0.3, 5.0])
    shuffles = 20_000
    compared, ratio, p = compare_two(
        first, holders, scores, shuffles=shuffles, rng=np.random.default_rng(1)
    )
    assert compared == 8  # nobody to compare the last with
    low, high = scores[:4], scores[4:8]

    def difference(a, b):
        rest_a = np.delete(low, list(a))
        rest_b = np.delete(high, b)
        return 1.0 * (low[list(a)].mean() - rest_a.mean()) + 0.75 * (high[b] - rest_b.mean())

    every = [difference(a, b) for a in itertools.combinations(range(4), 2) for b in range(4)]
    seen = difference((0, 1), 0)
    exact = np.mean(np.abs(every) >= abs(seen) - 1e-9)
    assert ratio == pytest.approx(np.exp(seen / 1.75))
    assert abs(p - exact) < 4 * np.sqrt(exact * (1 - exact) / shuffles) + 2 / shuffles


def test_one_stratum_agrees_with_scipys_permutation_test():
    rng = np.random.default_rng(5)
    a, b = rng.normal(0.5, 1, 25), rng.normal(0, 1, 30)
    _, _, p = compare_two(
        np.repeat([True, False], [25, 30]), np.full(55, 9), np.concatenate([a, b]),
        shuffles=9999, rng=rng,
    )  # fmt: skip
    other = stats.permutation_test(
        (a, b), lambda x, y, axis: x.mean(axis) - y.mean(axis), vectorized=True,
        n_resamples=9999, **{NAMED: rng},
    ).pvalue  # fmt: skip
    assert abs(p - other) < 4 * np.sqrt(2 * other * (1 - other) / 9999) + 3e-4


def test_a_difference_of_counts_alone_is_no_difference():
    # Rare motifs cluster at a higher ratio in both categories; one has more rare motifs.
    rng = np.random.default_rng(7)
    below = plain = 0
    for _ in range(200):
        holders = np.concatenate([rng.choice([3, 30], 40, p=p) for p in ([0.8, 0.2], [0.2, 0.8])])
        expected = np.where(holders == 3, 0.3, 8.0)
        joins = rng.poisson(np.where(holders == 3, 10.0, 1.2) * expected)
        first = np.arange(80) < 40
        scores = log_ratios(joins.astype(float), expected)
        below += compare_two(first, holders, scores, shuffles=199, rng=rng)[2] <= 0.05
        plain += stats.ttest_ind(scores[first], scores[~first]).pvalue <= 0.05
    assert below <= stats.binom.ppf(0.9999, 200, 0.05)
    # A comparison blind to counts finds a difference nearly always.
    assert plain > 150


def test_a_run_brings_both_tables():
    rng = np.random.default_rng(9)
    lat, lon = rng.uniform(-20, 40, 60), rng.uniform(20, 90, 60)
    near = [np.argsort((lat - lat[k]) ** 2 + (lon - lon[k]) ** 2)[: 5 + k % 6] for k in range(12)]
    far = [rng.choice(60, 5 + k % 6, replace=False) for k in range(12)]
    catalogue = catalogue_of(
        near + far, 60, categories=["near"] * 12 + ["far"] * 12, places=(lat, lon)
    )
    plan = Plan().replace(
        evidence__worlds=("emergence",), evidence__draws=999, sensitivity__draws=999,
        sensitivity__hidden=False,
    )  # fmt: skip
    ranking = rank_catalogue(catalogue, plan)
    assert ranking.categories is not None
    by_name = ranking.categories.set_index("category")
    assert by_name.loc["near", "joins_ratio_low"] > by_name.loc["far", "joins_ratio_high"]
    assert by_name.loc["near", "rejected_low"] > 0.5
    pair = ranking.tables["category_pairs"].iloc[0]
    assert (pair["category"], pair["other"]) == ("far", "near")
    assert pair["ratio"] < 0.5
    assert pair["p"] == pair["q"] <= 0.002
    again = rank_catalogue(catalogue, plan)
    assert again.categories.equals(ranking.categories)
    assert again.tables["category_pairs"].equals(ranking.tables["category_pairs"])
