"""Turnover from the prevalence curve."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats

from twicetold.spread import SpreadError
from twicetold.spread.turnover import fit_turnover, log_series, profile_interval, thinned


def sample(x, n, motifs, seed, recorded=1.0):
    p = log_series(x, n, recorded)
    rng = np.random.default_rng(seed)
    return rng.choice(n + 1, p=p / p.sum(), size=motifs)


def test_log_series_against_scipy():
    # scipy.stats.logser, truncated at N.
    p = log_series(0.7, 30)
    expected = stats.logser.pmf(np.arange(1, 31), 0.7)
    np.testing.assert_allclose(p[1:], expected / expected.sum(), rtol=1e-12)
    np.testing.assert_allclose(log_series(1.0, 3)[1:], np.array([6, 3, 2]) / 11)


def test_thinning_matches_the_closed_form():
    # Thinned by r, an untruncated log-series is one at x r / (1 - x (1 - r)).
    x, r = 0.8, 0.55
    got = log_series(x, 400, r)[1:]
    expected = stats.logser.pmf(np.arange(1, 401), x * r / (1 - x * (1 - r)))
    np.testing.assert_allclose(got / got.sum(), expected / expected.sum(), rtol=1e-9, atol=1e-14)


def test_thinning_against_binomial_sum():
    true = np.array([0.2, 0.5, 0.3])
    got = thinned(true, 0.4)
    expected = [sum(true[m - 1] * stats.binom.pmf(k, m, 0.4) for m in (1, 2, 3)) for k in range(4)]
    np.testing.assert_allclose(got, expected, rtol=1e-12)


@pytest.mark.parametrize("least", [1, 3])
@pytest.mark.parametrize("x", [0.5, 0.9, 0.98, 0.996])
def test_maximum_likelihood_against_direct_optimisation(x, least):
    n = 400
    counts = sample(x, n, 1500, seed=1)
    fit = fit_turnover(counts, n, min_holders=least)
    used = counts[counts >= least]
    m = np.arange(least, n + 1)

    def minus(u):
        log_x = np.log1p(-np.exp(u))
        terms = m * log_x - np.log(m)
        return -(used.sum() * log_x - len(used) * np.logaddexp.reduce(terms))

    best = optimize.minimize_scalar(minus, bounds=(-12, -0.01), method="bounded")
    expected = -np.expm1(best.x)
    assert 1 - fit.turnover == pytest.approx(1 - expected, rel=0.01)
    assert fit.low < expected < fit.high
    assert fit.left_out == int(np.sum(counts < least))


def test_interval_covers():
    # 95 % interval over 100 samples: within four standard errors of .95.
    n, x = 300, 0.97
    hits = 0
    for seed in range(100):
        fit = fit_turnover(sample(x, n, 300, seed), n, samples=1)
        low, high = profile_interval(fit.grid, fit.profile, float(stats.chi2.ppf(0.95, 1)))
        hits += low <= x <= high
    assert abs(hits / 100 - 0.95) <= 4 * np.sqrt(0.95 * 0.05 / 100)


def test_goodness_of_fit_holds_its_level_and_sees_misfit():
    n = 300
    p = [fit_turnover(sample(0.95, n, 250, s), n, samples=99).fit_p for s in range(60)]
    assert np.mean(np.array(p) <= 0.05) <= 0.05 + 4 * np.sqrt(0.05 * 0.95 / 60)
    rng = np.random.default_rng(3)
    lumps = np.concatenate([rng.integers(3, 6, 100), rng.integers(60, 80, 100)])
    bad = fit_turnover(lumps, n)
    assert bad.fit_p <= 0.01
    assert bad.dispersion > 2
    assert "DOES NOT FIT" in bad.warning
    assert "60" not in bad.refused
    good = fit_turnover(sample(0.95, n, 400, 1), n)
    assert good.dispersion == 1
    assert good.warning == ""


def test_recording_is_undone():
    n = 500
    counts = sample(0.97, n, 3000, seed=4, recorded=0.6)
    blind = fit_turnover(counts, n)
    seeing = fit_turnover(counts, n, recorded=0.6)
    assert seeing.low < 0.97 < seeing.high
    assert blind.high < 0.97
    # Beyond 1,500 traditions the closed form takes over; it agrees where the ceiling is far.
    far = fit_turnover(counts, 2000, recorded=0.6)
    assert 1 - far.turnover == pytest.approx(1 - seeing.turnover, rel=0.02)


def test_seed_and_order_do_not_matter_to_the_estimate():
    counts = sample(0.9, 100, 300, seed=5)
    a, b = fit_turnover(counts, 100, seed=1), fit_turnover(counts[::-1], 100, seed=2)
    assert (a.turnover, a.low, a.high) == (b.turnover, b.low, b.high)
    assert fit_turnover(counts, 100, seed=1).fit_p == a.fit_p


def test_curve():
    fit = fit_turnover(sample(0.9, 100, 400, seed=6), 100)
    curve = fit.curve()
    assert curve["fitted"][2:].sum() == pytest.approx(fit.motifs)
    assert (curve["low"] <= curve["fitted"]).all()
    assert (curve["fitted"] <= curve["high"] + 1).all()


def test_plausible_tail():
    # Common practice, no source: of some two thousand motifs in about a thousand traditions most
    # are in few and a few in more than 150. A log-series fitted from 5 up must allow for that.
    p = log_series(0.985, 1000)
    assert p[1:11].sum() > 0.5
    assert 0.5 < 2000 * p[151:].sum() < 100


def test_small_catalogues_are_refused_in_words():
    fit = fit_turnover([3, 4, 5], 50)
    assert np.isnan(fit.turnover)
    assert "Only 3 motifs" in fit.refused
    assert np.isnan(fit.interval(0.99)[0])
    few = fit_turnover(sample(0.9, 50, 60, seed=1), 50)
    assert "motifs only" in few.warning


@pytest.mark.parametrize(
    ("counts", "more"),
    [([60], {}), ([-1], {}), ([3], {"min_holders": 0}), ([3], {"min_holders": 51})],
)
def test_impossible_counts_are_refused(counts, more):
    with pytest.raises(SpreadError):
        fit_turnover(counts, 50, **more)


def test_everything_everywhere_sets_no_upper_bound():
    fit = fit_turnover([50] * 30, 50)
    assert fit.turnover == pytest.approx(1, abs=1e-9)
    assert fit.high == pytest.approx(1, abs=1e-9)
    assert "no upper bound" in fit.warning
