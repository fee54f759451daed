"""The posterior of route shares: alone as in company, refusals, and direction."""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.evidence.shares import build_bank, fit_posterior, route_shares
from twicetold.evidence.shares.bank import Bank
from twicetold.spread import SpreadError, SpreadModel
from twicetold.workers import ThreadPool
from zoo import as_contact_graph


def world(families=True):
    """A ring of 120 with neighbours at one and two steps, twelve families of ten."""
    n = 120
    edges = {tuple(sorted((i, (i + d) % n))) for i in range(n) for d in (1, 2)}
    family = np.arange(n) // 10 if families else None
    return SpreadModel(as_contact_graph(n, edges), 0.9, family=family)


@pytest.fixture(scope="module")
def bank():
    return build_bank(world(), largest=40, seed=1, walks=2500, use_cache=False)


@pytest.fixture(scope="module")
def fitted(bank):
    return fit_posterior(bank, seed=1, steps=400)


def sets():
    rng = np.random.default_rng(5)
    scattered = np.sort(rng.choice(12, 12, replace=False) * 10 + rng.integers(0, 10, 12))
    run = np.arange(35, 47)  # across a family border
    family = np.concatenate([np.arange(10, 20, 2), np.arange(70, 80, 2)])
    return [s.astype(np.int32) for s in (scattered, run, family)]


def test_shares_point_where_the_holders_do(fitted):
    scattered, run, _ = fitted.posterior(sets())
    assert scattered.mean[0] > 0.5
    assert run.mean[0] < 0.25
    assert run.mean[1] > 0.5
    assert run.mean.argmax() == 1
    for told in (scattered, run):
        assert told.routes == ("emergence", "contact", "inheritance")
        assert told.mean.sum() == pytest.approx(1.0, abs=1e-6)
        assert told.weight.sum() == pytest.approx(1.0)
        assert np.all((told.low <= told.mean) & (told.mean <= told.high))
        assert told.weight @ told.grid == pytest.approx(told.mean, abs=0.02)
        assert told.refused == ""


def test_families_filled_far_apart_point_to_inheritance(fitted):
    family = fitted.posterior(sets())[2]
    assert family.mean[2] > 0.4
    assert family.mean[0] < 0.35


def test_one_motif_alone_is_as_in_the_batch(fitted):
    together = fitted.posterior([*sets(), *sets()[::-1]])
    for held, told in zip(sets(), together, strict=False):
        alone = fitted.posterior([held])[0]
        for name in ("mean", "low", "high", "weight"):
            np.testing.assert_array_equal(getattr(alone, name), getattr(told, name))
    shuffled = np.random.default_rng(1).permutation(sets()[0])
    np.testing.assert_array_equal(fitted.posterior([shuffled])[0].weight, together[0].weight)


def test_fit_is_the_same_for_any_number_of_workers(bank):
    one, two = (fit_posterior(bank, seed=3, steps=30, pool=ThreadPool(w)) for w in (1, 2))
    np.testing.assert_array_equal(one.ensemble.parameters, two.ensemble.parameters)
    np.testing.assert_array_equal(one.sharpness, two.sharpness)
    np.testing.assert_array_equal(one.width, two.width)


def test_refusals_are_said_in_words(fitted):
    few, whole, beyond, fine = fitted.posterior(
        [np.array([3]), np.arange(120), np.arange(60), np.arange(20)]
    )
    assert "fewer than 2 holders" in few.refused
    assert "every surveyed tradition" in whole.refused
    assert "up to 40" in beyond.refused
    assert fine.refused == ""
    for told in (few, whole, beyond):
        assert np.isnan(told.mean).all()
        assert np.isnan(told.low).all()
        np.testing.assert_array_equal(told.weight, fitted.where.prior)


def test_a_map_that_says_nothing_is_refused():
    # On a complete graph without families every holder set of a size is alike.
    n = 12
    edges = [(i, j) for i in range(n) for j in range(i + 1, n)]
    model = SpreadModel(as_contact_graph(n, edges), 0.9)
    told = route_shares(
        build_bank(model, largest=8, seed=1, walks=2000, use_cache=False), [np.arange(5)], seed=1
    )[0]
    assert "no better known than before" in told.refused
    assert told.routes == ("emergence", "contact")


def test_bad_holder_sets(fitted):
    for held in ([1, 1], [-1, 3], [0, 120]):
        with pytest.raises(SpreadError, match="each once"):
            fitted.posterior([np.array(held)])


def test_model_is_kept_with_its_bank(tmp_path, monkeypatch):
    monkeypatch.setenv("TWICETOLD_CACHE", str(tmp_path))
    arguments = {"largest": 20, "seed": 1, "walks": 300}
    first = fit_posterior(build_bank(world(), **arguments), seed=2, steps=40)
    monkeypatch.setattr("twicetold.evidence.shares.posterior.train", None)
    again = fit_posterior(build_bank(world(), **arguments), seed=2, steps=40)
    a, b = first.posterior(sets())[0], again.posterior(sets())[0]
    np.testing.assert_array_equal(a.weight, b.weight)
    plain = build_bank(world(), **arguments, use_cache=False)
    monkeypatch.undo()
    c = fit_posterior(plain, seed=2, steps=40).posterior(sets())[0]
    np.testing.assert_array_equal(a.weight, c.weight)


def test_two_routes_without_families():
    model = world(families=False)
    bank = build_bank(model, largest=30, seed=1, walks=800, use_cache=False)
    assert isinstance(bank, Bank)
    scattered, run, _ = fit_posterior(bank, seed=1, steps=300).posterior(sets())
    assert scattered.routes == ("emergence", "contact")
    assert scattered.mean.shape == (2,)
    assert scattered.mean[0] > 0.5 > run.mean[0]
