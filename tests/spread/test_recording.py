"""Recording from the saturation of row totals."""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.spread import SpreadError
from twicetold.spread.recording import fit_recording, least_kappa, recorded_probability


def world(kappa, seed, n=250, motifs=200.0, shape=None):
    rng = np.random.default_rng(seed)
    effort = rng.lognormal(0, 1, n)
    held = motifs if shape is None else motifs * rng.gamma(shape, 1 / shape, n)
    return rng.poisson(held * recorded_probability(effort, kappa)), effort


@pytest.mark.parametrize("shape", [None, 20])
@pytest.mark.parametrize("kappa", [0.5, 2.0])
def test_kappa_is_recovered(kappa, shape):
    inside = 0
    for seed in range(40):
        fit = fit_recording(*world(kappa, seed, shape=shape))
        inside += fit.low <= kappa <= fit.high
    assert inside / 40 >= 0.95 - 4 * np.sqrt(0.95 * 0.05 / 40)
    assert fit.capacity == pytest.approx(200, rel=0.1)
    # Squared coefficient of variation of a gamma with shape 20: 1/20.
    expected = 0.0 if shape is None else 1 / shape
    assert fit.variation == pytest.approx(expected, abs=0.02)


def test_complete_recording_cannot_be_excluded_when_nothing_saturates():
    fit = fit_recording(*world(np.inf, 1))
    assert fit.high == np.inf
    assert fit.mean_recorded > 0.95
    assert recorded_probability(np.array([0.1, 5.0]), np.inf).tolist() == [1.0, 1.0]


def test_no_saturation_at_all_is_said():
    rng = np.random.default_rng(2)
    effort = rng.lognormal(0, 1, 200)
    fit = fit_recording(rng.poisson(20 * effort), effort)
    assert fit.low == 0.0
    assert "without any sign of saturation" in fit.warning


def test_wider_at_a_higher_level():
    fit = fit_recording(*world(1.0, 3))
    low, high = fit.interval(0.999)
    assert low < fit.low < fit.kappa < fit.high < high


def test_scale_of_effort_does_not_matter():
    totals, effort = world(1.0, 4)
    a, b = fit_recording(totals, effort), fit_recording(totals, 1000 * effort)
    assert b.kappa == pytest.approx(a.kappa / 1000)
    assert b.mean_recorded == pytest.approx(a.mean_recorded)


def test_searched_for_fewer_motifs():
    rng = np.random.default_rng(5)
    effort = rng.lognormal(0, 1, 250)
    searched = rng.integers(50, 400, 250)
    searched[:5] = 0
    totals = rng.binomial(searched, 0.5 * recorded_probability(effort, 1.0))
    fit = fit_recording(totals, effort, searched=searched)
    assert fit.traditions == 245
    assert fit.low < 1.0 < fit.high


def test_refusals():
    totals, effort = world(1.0, 6)
    assert "no effort" in fit_recording(totals, None).refused
    assert "fewer than 10" in fit_recording(totals[:8], effort[:8]).refused
    assert fit_recording(totals, np.ones(len(totals))).refused
    assert np.isnan(fit_recording(totals, None).interval(0.9)[0])
    for bad in (np.zeros(len(totals)), effort[:-1]):
        with pytest.raises(SpreadError, match="effort"):
            fit_recording(totals, bad)


def test_least_kappa():
    _, effort = world(1.0, 7)
    kappa = least_kappa(effort, 0.2)
    assert recorded_probability(effort, kappa).mean() == pytest.approx(0.2)
