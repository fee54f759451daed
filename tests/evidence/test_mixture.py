"""How route shares are spread over a catalogue: recovered from motifs whose truth is known."""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.evidence.mixture import (
    catalogue_shares,
    fit_mixture,
    grid_of,
    likelihoods,
)
from twicetold.evidence.results import RouteShares
from twicetold.evidence.shares import simplex

ROUTES = ("emergence", "contact", "inheritance")
PURE = np.eye(3)


def posteriors(truth, spread, rng, routes=3):
    """Posteriors under the flat prior after one normal look at the shares with this sd."""
    where = simplex(routes)
    out = []
    for shares in truth:
        seen = shares[:routes] + rng.normal(scale=spread, size=routes)
        away = ((where.knots[:, :routes] - seen) ** 2).sum(axis=1)
        weight = where.prior * np.exp(-away / (2 * spread**2))
        weight /= weight.sum()
        nothing = np.zeros(routes)
        out.append(RouteShares(ROUTES[:routes], nothing, nothing, nothing, where.knots, weight))
    return out


def refused(routes=3):
    where = simplex(routes)
    nan = np.full(routes, np.nan)
    return RouteShares(ROUTES[:routes], nan, nan, nan, where.knots, where.prior, "too few holders")


def test_grid_is_that_of_step_a_tenth():
    for routes, size in ((3, 66), (2, 11)):
        rows, grid = grid_of(routes)
        assert len(rows) == size
        np.testing.assert_allclose(grid * 10, np.rint(grid * 10), atol=1e-9)


def test_likelihood_is_posterior_over_prior():
    rng = np.random.default_rng(1)
    truth = np.array([[0.2, 0.5, 0.3]])
    likelihood, told = likelihoods([refused(), *posteriors(truth, 0.1, rng), refused()])
    assert told.tolist() == [1]
    _, grid = grid_of(3)
    # A normal likelihood is a parabola in the log, whatever the prior.
    log = np.log(likelihood[0])
    design = np.column_stack([np.ones(len(grid)), grid[:, :2], (grid**2).sum(axis=1)])
    fitted, *_ = np.linalg.lstsq(design, log, rcond=None)
    np.testing.assert_allclose(design @ fitted, log, atol=1e-6)


def test_em_never_lowers_the_likelihood_and_ends_where_no_direction_helps():
    rng = np.random.default_rng(2)
    likelihood = rng.exponential(size=(40, 12))
    fitted = fit_mixture(likelihood)
    assert fitted.sum() == pytest.approx(1.0)
    # Lindsay 1983: at the maximum the mean of likelihood over mixture is at most 1 everywhere.
    slope = (likelihood / (likelihood @ fitted)[:, None]).mean(axis=0)
    assert slope.max() <= 1.0 + 1e-4
    assert np.log(likelihood @ fitted).sum() > np.log(likelihood.mean(axis=1)).sum()


def test_two_point_mixture_is_solved_exactly():
    # Likelihoods (1, 0) a times and (0, 1) b times: the weights are a / (a + b). [E]
    likelihood = np.array([[1.0, 0.0]] * 7 + [[0.0, 1.0]] * 3)
    np.testing.assert_allclose(fit_mixture(likelihood), [0.7, 0.3])
    times = np.array([1] * 7 + [2] * 3)
    np.testing.assert_allclose(fit_mixture(likelihood, times), [7 / 13, 6 / 13])


def test_pure_routes_are_recovered_from_vague_motifs():
    rng = np.random.default_rng(3)
    truth = PURE[rng.choice(3, 600, p=[0.3, 0.5, 0.2])]
    told = posteriors(truth, 0.25, rng)
    frame = catalogue_shares(told, [""] * 600, seed=1, replicates=60)
    row = frame.iloc[0]
    assert row["motifs"] == row["motifs_with_shares"] == 600
    actual = truth.mean(axis=0)
    for r, route in enumerate(ROUTES):
        # Four standard errors: of the sampled truth none, of a vague look .25 / sqrt(600) times
        # what deconvolution costs (about two).
        assert row[f"{route}_share"] == pytest.approx(actual[r], abs=0.08)
        assert row[f"{route}_led"] == pytest.approx(actual[r], abs=0.1)
        assert row[f"{route}_share_low"] <= row[f"{route}_share"] <= row[f"{route}_share_high"]
    # Averaging the posteriors would pull everything towards a third.
    plain = np.mean([p.weight @ p.grid for p in told], axis=0)
    mixed = row[[f"{r}_share" for r in ROUTES]].to_numpy(dtype=float)
    assert np.abs(mixed - actual).max() < np.abs(plain - actual).max()
    assert row["contact_alone"] == pytest.approx(0.5, abs=0.12)
    assert mixed.sum() == pytest.approx(1.0)


def test_bootstrap_intervals_hold_the_truth():
    hits, trials = 0, 20
    for seed in range(trials):
        rng = np.random.default_rng(seed)
        truth = rng.dirichlet([2, 3, 1], 100)
        row = catalogue_shares(
            posteriors(truth, 0.15, rng), [""] * 100, seed=seed, replicates=40
        ).iloc[0]
        hits += row["contact_share_low"] <= 0.5 <= row["contact_share_high"]
    assert hits >= 12  # P(fewer | .9) < 1e-4


def test_categories_are_apart_and_do_not_hang_on_each_other():
    rng = np.random.default_rng(4)
    truth = np.concatenate([np.tile(PURE[0], (40, 1)), np.tile(PURE[1], (40, 1))])
    told = [*posteriors(truth, 0.2, rng), refused(), refused()]
    labels = ["beasts"] * 40 + ["stars"] * 40 + ["beasts", "rare"]
    frame = catalogue_shares(told, labels, seed=1, replicates=30).set_index("category")
    assert list(frame.index) == ["(all)", "beasts", "rare", "stars"]
    assert frame.loc["beasts", ["motifs", "motifs_with_shares"]].tolist() == [41, 40]
    assert frame.loc["beasts", "emergence_share"] > 0.8
    assert frame.loc["stars", "contact_share"] > 0.8
    assert frame.loc["rare"].drop(["motifs", "motifs_with_shares"]).isna().all()
    alone = catalogue_shares(told[40:80], labels[40:80], seed=1, replicates=30)
    stars = alone.set_index("category").loc["stars"]
    np.testing.assert_array_equal(stars.to_numpy(), frame.loc["stars"].to_numpy())


def test_two_routes_and_empty_catalogues():
    rng = np.random.default_rng(5)
    truth = np.tile([0.5, 0.5, 0.0], (30, 1))
    frame = catalogue_shares(posteriors(truth, 0.2, rng, 2), [""] * 30, seed=1, replicates=20)
    assert "inheritance_share" not in frame
    assert frame.loc[0, "emergence_share"] == pytest.approx(0.5, abs=0.15)
    empty = catalogue_shares([], [], seed=1)
    assert empty.loc[0, "motifs"] == 0
    assert np.isnan(empty.loc[0, "contact_alone"])
    with pytest.raises(ValueError, match="one entry per motif"):
        catalogue_shares([refused()], [], seed=1)
