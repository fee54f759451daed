"""Propensities from row totals and covariates, and everything they refuse."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import scipy.sparse as sp

from twicetold.errors import TwicetoldError
from twicetold.references.propensity import (
    PropensityError,
    covariate_propensity,
    recorded_propensity,
)


@pytest.fixture
def world():
    rng = np.random.default_rng(5)
    n = 300
    frame = pd.DataFrame({"height": rng.normal(900, 300, n), "coast": rng.integers(0, 2, n)})
    effort = np.exp(rng.normal(size=n))
    rate = effort * np.exp(-3.2 + 0.001 * frame["height"] - 0.7 * frame["coast"])
    surveyed = rng.integers(40, 80, n)
    held = rng.binomial(surveyed, 1 - np.exp(-rate))
    return frame, effort, np.asarray(rate), surveyed, held


def test_row_totals_leave_the_tested_motif_out():
    attested = sp.csr_array(np.array([[1, 0, 1, 0], [1, 1, 0, 0], [1, 0, 0, 0]], dtype=bool))
    assert recorded_propensity(attested).tolist() == [3.5, 1.5, 1.5, 0.5]
    assert recorded_propensity(attested, 0).tolist() == [2.5, 1.5, 0.5, 0.5]
    assert recorded_propensity(attested, 2).tolist() == [2.5, 1.5, 1.5, 0.5]
    # Only holders' propensities move, and only downwards: shared draws rest on it.
    for m in range(3):
        moved = recorded_propensity(attested) - recorded_propensity(attested, m)
        assert np.array_equal(moved, attested.toarray()[m].astype(float))


def test_coefficients_and_rates_come_back(world):
    frame, effort, rate, surveyed, held = world
    fit = covariate_propensity(held, frame, effort, surveyed)
    truth = np.array([-3.2, 0.001, -0.7])
    assert np.all(np.abs(fit.coefficients - truth) < 4 * fit.se)
    assert np.all(np.abs(np.log(fit.propensity / rate)) < 0.5)
    assert 0.7 < fit.dispersion < 1.3
    assert fit.to_frame()["term"].tolist() == ["(intercept)", "height", "coast"]
    assert fit.summary()["offset"] == "log(effort)"


def test_doubling_effort_doubles_the_rates(world):
    frame, effort, _, surveyed, held = world
    once = covariate_propensity(held, frame, effort, surveyed)
    twice = covariate_propensity(held, frame, 2 * effort, surveyed)
    assert np.allclose(once.propensity, twice.propensity)
    assert twice.coefficients[0] == pytest.approx(once.coefficients[0] - np.log(2))


def test_units_and_order_change_nothing(world):
    frame, effort, _, surveyed, held = world
    once = covariate_propensity(held, frame, effort, surveyed)
    other = pd.DataFrame({"coast": frame["coast"], "height": frame["height"] * 1e6 - 5e9})
    again = covariate_propensity(held, other, effort, surveyed)
    assert np.allclose(once.propensity, again.propensity, rtol=1e-6)
    assert again.coefficients[2] * 1e6 == pytest.approx(once.coefficients[1], rel=1e-6)


def test_unsearched_traditions_do_not_enter_but_get_a_rate(world):
    frame, effort, _, surveyed, held = world
    surveyed, held = surveyed.copy(), held.copy()
    surveyed[:50] = held[:50] = 0
    fit = covariate_propensity(held, frame, effort, surveyed)
    part = covariate_propensity(held[50:], frame.iloc[50:], effort[50:], surveyed[50:])
    assert np.allclose(fit.coefficients, part.coefficients, rtol=1e-7)
    assert np.all(fit.propensity > 0)


def test_missing_constant_and_collinear_covariates_are_named(world):
    frame, effort, _, surveyed, held = world
    holed = frame.assign(height=frame["height"].where(frame.index > 3))
    with pytest.raises(PropensityError, match=r"'height' must be known.*missing in 4 of 300"):
        covariate_propensity(held, holed, effort, surveyed)
    with pytest.raises(PropensityError, match=r"'same' must vary, but is 2 in every"):
        covariate_propensity(held, frame.assign(same=2.0), effort, surveyed)
    twin = frame.assign(feet=frame["height"] * 3.28 + 7)
    with pytest.raises(PropensityError, match=r"'feet' must not follow .* 'height', 'coast'"):
        covariate_propensity(held, twin, effort, surveyed)
    with pytest.raises(PropensityError, match="At least one covariate"):
        covariate_propensity(held, frame[[]], effort, surveyed)
    assert issubclass(PropensityError, TwicetoldError)


def test_separating_covariates_are_named(world):
    frame, effort, _, surveyed, held = world
    island = (np.arange(300) < 40).astype(float)
    none_there = np.where(island > 0, 0, np.maximum(held, 1))
    with pytest.raises(PropensityError, match="'island' does"):
        covariate_propensity(none_there, frame.assign(island=island), effort, surveyed)
    # One record among the forty is enough for a finite coefficient.
    none_there[3] = 1
    fit = covariate_propensity(none_there, frame.assign(island=island), effort, surveyed)
    assert fit.coefficients[3] < -2


def test_impossible_counts_are_refused(world):
    frame, effort, _, surveyed, held = world
    with pytest.raises(PropensityError, match="more than were searched"):
        covariate_propensity(surveyed + 1, frame, effort, surveyed)
    with pytest.raises(PropensityError, match="only absences"):
        covariate_propensity(0 * held, frame, effort, surveyed)
    with pytest.raises(PropensityError, match="only records"):
        covariate_propensity(surveyed, frame, effort, surveyed)
    with pytest.raises(PropensityError, match="Effort must be"):
        covariate_propensity(held, frame, 0 * effort, surveyed)
    with pytest.raises(PropensityError, match="more than 3 traditions"):
        covariate_propensity(held[:3], frame.iloc[:3], effort[:3], surveyed[:3])
    with pytest.raises(PropensityError, match="one entry per tradition"):
        covariate_propensity(held[:3], frame, effort, surveyed)


def test_a_large_catalogue_settles_too(world):
    # Fifty thousand motifs: the deviance is so large that its last digits never come to rest.
    frame, effort, rate, _, _ = world
    surveyed = np.full(300, 50_000)
    held = np.random.default_rng(8).binomial(surveyed, 1 - np.exp(-rate / 20))
    fit = covariate_propensity(held, frame, effort, surveyed)
    assert np.all(np.abs(fit.coefficients[1:] - [0.001, -0.7]) < 4 * fit.se[1:])
    # A line of altitude that other things than altitude follow: the fit is far from exact.
    rough = np.random.default_rng(9).binomial(surveyed, 1 - np.exp(-(rate**0.7) / 20))
    assert covariate_propensity(rough, frame, effort, surveyed).dispersion > 10
