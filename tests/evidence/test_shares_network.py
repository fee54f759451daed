"""The network: kernels against their twin, and against a posterior known exactly."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import beta

from twicetold.evidence.shares import network
from twicetold.evidence.shares._network_kernels import matmul, softmax, train_steps, weights_of
from twicetold.evidence.shares._network_plain import score_plain, weights_plain
from twicetold.evidence.shares.bank import draw_shares, drawn_density
from twicetold.evidence.shares.heldout import HeldOut, sharpened
from twicetold.evidence.shares.network import Lessons, starting_parameters, train
from twicetold.evidence.shares.simplex import hat_masses, simplex
from twicetold.workers import ThreadPool


def problem(rows=300, width=9, seed=1):
    rng = np.random.default_rng(seed)
    where = simplex(3)
    knots, factors = where.density_factors(rng.dirichlet(np.ones(3), rows))
    inputs = rng.normal(size=(rows, width)).astype(np.float32)
    sizes = np.array([width, 12, 10, where.basis.shape[1]])
    start = starting_parameters(sizes, rng)
    lessons = Lessons(
        inputs, knots, factors.astype(np.float32), rng.exponential(size=rows), where.prior
    )
    return where, lessons, sizes, start


def test_matmul_is_a_matrix_product():
    rng = np.random.default_rng(2)
    for shape in ((3, 7, 5), (8, 4, 128), (1, 1, 1)):
        left = rng.normal(size=shape[:2]).astype(np.float32)
        right = rng.normal(size=shape[1:]).astype(np.float32)
        out = np.empty((shape[0], shape[2]), dtype=np.float32)
        matmul(left, right, out)
        np.testing.assert_allclose(out, left.astype(float) @ right, rtol=2e-5, atol=2e-5)


def test_softmax_holds_single_precision_over_its_range():
    scores = np.linspace(-75, 0, 2000)[:, None] * np.ones((1, 3))
    z = scores.astype(np.float32).copy()
    softmax(z, np.zeros(2000, dtype=np.float32))
    exact = np.exp(scores.astype(np.float32).astype(float))
    np.testing.assert_allclose(z, exact / exact.sum(axis=0), rtol=3e-5)


def test_weights_match_the_twin_and_do_not_hang_on_company():
    where, lessons, sizes, start = problem()
    stage = network._stage(where, where.prior)
    out = np.empty((300, len(where.knots)), dtype=np.float32)
    weights_of(lessons.inputs, start, sizes, *stage, out)
    expected, _ = weights_plain(lessons.inputs, start, sizes, where)
    np.testing.assert_allclose(out, expected, rtol=1e-4, atol=1e-7)
    for k in (0, 137, 299):
        alone = np.empty((1, len(where.knots)), dtype=np.float32)
        weights_of(lessons.inputs[k : k + 1], start, sizes, *stage, alone)
        np.testing.assert_array_equal(alone[0], out[k])


def test_gradient_is_that_of_the_twin_and_of_differences():
    where, lessons, sizes, start = problem(rows=64)
    truth = (lessons.knots, lessons.factors.astype(float))
    args = (lessons.inputs, truth, lessons.weight)
    score, gradient = score_plain(*args, start, sizes, where)
    rng = np.random.default_rng(3)
    for k in rng.choice(len(start), 25, replace=False):
        ends = []
        for sign in (1, -1):
            moved = start.astype(float)
            moved[k] += sign * 1e-5
            ends.append(score_plain(*args, moved, sizes, where)[0])
        assert -(ends[0] - ends[1]) / 2e-5 == pytest.approx(gradient[k], abs=1e-6)
    # Adam's first moment after one step is a tenth of the gradient.
    parameters, first, second = start.copy(), np.zeros_like(start), np.zeros_like(start)
    told = train_steps(
        lessons.inputs, lessons.knots, lessons.factors, lessons.weight, np.arange(64), 64,
        *network._stage(where, where.prior), parameters, first, second, sizes, 0, 10, 1e-3, 0.0,
    )  # fmt: skip
    assert told == pytest.approx(score, rel=1e-4)
    np.testing.assert_allclose(first * 10, gradient, rtol=2e-3, atol=2e-6)
    np.testing.assert_allclose(second * 1000, gradient**2, rtol=4e-3, atol=2e-8)
    # The first step is the rate times the sign of the gradient, wherever that is not tiny.
    big = np.abs(gradient) > 1e-4
    np.testing.assert_allclose((start - parameters)[big], 1e-3 * np.sign(gradient[big]), rtol=2e-2)


def binomial_lessons(rows=30_000, trials=20):
    """Two routes; what is seen is Binomial(trials, emergence), whose posterior is a beta law."""
    rng = np.random.default_rng(4)
    where = simplex(2)
    emergence = rng.random(rows)
    seen = rng.binomial(trials, emergence)
    shares = np.stack([emergence, 1 - emergence, np.zeros(rows)], axis=1)
    knots, factors = where.density_factors(shares)
    inputs = np.stack([(seen / trials - 0.5) * 3, np.ones(rows)], axis=1).astype(np.float32)
    return (
        where,
        seen,
        Lessons(inputs, knots, factors.astype(np.float32), np.ones(rows), where.prior),
    )


def test_learns_a_posterior_known_exactly():
    # Beta(k + 1, n - k + 1): Bayes 1763. [E]
    where, seen, lessons = binomial_lessons()
    ensemble = train(lessons, where, seed=1, members=2, steps=800, pool=ThreadPool(2))
    for k in range(21):
        told = ensemble.weights(lessons.inputs[seen == k][:1])
        exact = beta(k + 1, 21 - k)
        assert (told @ where.centre)[0, 0] == pytest.approx(exact.mean(), abs=0.02)
        low, high = where.intervals(told)
        assert exact.cdf(high[0, 0]) - exact.cdf(low[0, 0]) == pytest.approx(0.9, abs=0.04)


def test_training_is_the_same_for_any_number_of_workers():
    where, _, lessons = binomial_lessons(rows=3000)
    out = [
        train(lessons, where, seed=7, members=3, steps=120, pool=ThreadPool(w)) for w in (1, 2, 3)
    ]
    for other in out[1:]:
        np.testing.assert_array_equal(out[0].parameters, other.parameters)
    assert not np.array_equal(out[0].parameters[0], out[0].parameters[1])


def test_few_snapshots_are_not_learnt_by_heart():
    where, _, lessons = binomial_lessons(rows=200)
    told = []
    progress = ThreadPool(1, progress=lambda label, done, total: told.append(total))
    train(lessons, where, seed=1, members=1, steps=5000, pool=progress)
    assert told[-1] == network._REPEATS


@pytest.mark.parametrize("power", [0.7, 1.3])
def test_held_out_walks_mend_a_density_that_is_too_sharp_or_too_flat(power):
    where, seen, lessons = binomial_lessons(rows=4000)
    edges = where.knots[:, 0]
    exact = np.array([beta(k + 1, 21 - k).pdf(edges) for k in range(21)]) * where.prior
    exact /= exact.sum(axis=1, keepdims=True)
    wrong = sharpened(exact[seen], where.prior, np.full(len(seen), 1 / power))
    held = HeldOut(
        wrong, lessons.knots, lessons.factors.astype(float), np.full(4000, 10), lessons.weight
    )
    knots = np.log([5.0, 10.0, 20.0])
    sharpness = held.sharpness(where, knots)
    assert sharpness[1] == pytest.approx(power, abs=0.06)
    assert sharpness[0] == sharpness[2] == 1.0  # nothing to learn from there
    width = held.width(where, knots, sharpness)
    widths = [np.subtract(*beta(k + 1, 21 - k).interval(0.9)) for k in range(21)]
    assert width[1] == pytest.approx(-np.mean(np.array(widths)[seen]) / 0.9, abs=0.03)


def test_sharpening_leaves_the_prior_alone():
    where = simplex(3)
    out = sharpened(where.prior[None], where.prior, np.array([1.7]))
    np.testing.assert_allclose(out[0], where.prior)


def test_flat_prior_takes_the_place_of_the_one_drawn_from():
    # Shares drawn with density 1/2 + 2 (s**7 + (1 - s)**7); the answer is still the beta law. [E]
    where = simplex(2)
    rng = np.random.default_rng(8)
    shares, prior = draw_shares(rng, 40_000, 2)
    assert prior.std() > 0.3
    seen = rng.binomial(20, shares[:, 0])
    knots, factors = where.density_factors(shares)
    inputs = np.stack([(seen / 20 - 0.5) * 3, np.ones(40_000)], axis=1).astype(np.float32)
    drawn = hat_masses(2, drawn_density)
    lessons = Lessons(inputs, knots, factors.astype(np.float32), np.ones(40_000), drawn)
    ensemble = train(lessons, where, seed=1, members=2, steps=800, pool=ThreadPool(2))
    for k in (0, 1, 5, 10, 19, 20):
        mean = (ensemble.weights(inputs[seen == k][:1]) @ where.centre)[0, 0]
        assert mean == pytest.approx((k + 1) / 22, abs=0.02)
