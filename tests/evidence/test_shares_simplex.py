"""Densities over the simplex: geometry, exact prior marginals, shortest intervals."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from twicetold.evidence.shares.simplex import (
    BINS,
    DEGREE,
    SNAP,
    STEPS,
    _polynomials,
    _quadrature,
    simplex,
)


@pytest.mark.parametrize("routes", [2, 3])
def test_every_point_is_a_mean_of_its_corners(routes):
    where = simplex(routes)
    rng = np.random.default_rng(1)
    points = np.zeros((5000, 3))
    points[:, :routes] = rng.dirichlet(np.full(routes, 0.4), 5000)
    points = np.concatenate([points, where.knots])
    knots, inside = where.locate(points)
    assert inside.min() >= 0.0
    np.testing.assert_allclose(inside.sum(axis=1), 1.0, atol=1e-9)
    np.testing.assert_allclose(
        (where.knots[knots] * inside[..., None]).sum(axis=1), points, atol=1e-9
    )
    # The corners are neighbours on the lattice.
    spread = np.ptp(where.knots[knots], axis=1)
    assert spread.max() <= 1.0 / STEPS + 1e-12


@given(st.floats(0, 1), st.floats(0, 1))
def test_locate_stands_on_any_point(a, b):
    e, c = min(a, b), abs(a - b)
    where = simplex(3)
    knots, inside = where.locate(np.array([[e, c, max(0.0, 1.0 - e - c)]]))
    assert knots.min() >= 0
    assert knots.max() < len(where.knots)
    assert (where.knots[knots[0]] * inside[0][:, None]).sum(axis=0) == pytest.approx(
        [e, c, 1.0 - e - c], abs=1e-9
    )


def test_prior_masses_are_exact():
    # A hat's mass is a third of the triangles around its knot: 6, 3 or 1 of STEPS**2. [E]
    where = simplex(3)
    zeros = (where.knots == 0).sum(axis=1)
    triangles = np.array([6, 3, 1])[zeros]
    np.testing.assert_allclose(where.prior, triangles / (3 * STEPS**2), rtol=1e-3)
    np.testing.assert_allclose(where.prior.sum(), 1.0)
    np.testing.assert_allclose(where.prior @ where.centre, 1 / 3, atol=1e-6)


def test_flat_prior_has_the_marginals_of_a_flat_dirichlet():
    # Each share of Dirichlet(1, 1, 1) is Beta(1, 2): density 2 (1 - s). [E]
    where = simplex(3)
    edges = np.linspace(0, 1, BINS + 1)
    exact = np.diff(1 - (1 - edges) ** 2)
    for r in range(3):
        np.testing.assert_allclose(where.prior @ where.marginal[r], exact, atol=5e-5)
    low, high = where.intervals(where.prior[None])
    np.testing.assert_allclose(low, 0.0)
    np.testing.assert_allclose(high, 1 - np.sqrt(0.1), atol=2e-4)


def test_two_routes():
    where = simplex(2)
    low, high = where.intervals(where.prior[None])
    np.testing.assert_allclose(high - low, 0.9, atol=1e-9)
    assert np.all(where.knots[:, 2] == 0)
    with pytest.raises(ValueError, match="2 or 3"):
        simplex(4)


@pytest.mark.parametrize("corner", range(3))
def test_interval_of_a_pure_route_reaches_it(corner):
    where = simplex(3)
    weight = where.prior * np.exp(12.0 * where.knots[:, corner])
    low, high = where.intervals((weight / weight.sum())[None])
    assert high[0, corner] == 1.0
    assert low[0, corner] > 0.5
    others = [r for r in range(3) if r != corner]
    assert np.all(low[0, others] == 0.0)


def test_interval_is_shortest_and_holds_its_level():
    where = simplex(3)
    rng = np.random.default_rng(2)
    weight = rng.dirichlet(np.full(len(where.knots), 0.05), 20)
    low, high = where.intervals(weight)
    edges = np.linspace(0, 1, BINS + 1)
    for b in range(20):
        for r in range(3):
            below = np.concatenate([[0], np.cumsum(weight[b] @ where.marginal[r])])
            inside = np.interp(high[b, r], edges, below) - np.interp(low[b, r], edges, below)
            snapped = low[b, r] == 0.0 or high[b, r] == 1.0
            assert inside >= 0.9 - 1e-6
            assert snapped or inside == pytest.approx(0.9, abs=1e-6)
            # No interval of the same level starting at a bin edge is shorter.
            starts = edges[below <= 0.1]
            ends = np.interp(below[below <= 0.1] + 0.9, below, edges)
            slack = 2 * SNAP if snapped else 1e-9
            assert high[b, r] - low[b, r] <= (ends - starts).min() + slack


def test_density_factors_give_the_density_over_the_flat_one():
    where = simplex(3)
    knots, factors = where.density_factors(np.array([[0.2, 0.5, 0.3], [0.31, 0.22, 0.47]]))
    flat = (where.prior[knots] * factors).sum(axis=1)
    np.testing.assert_allclose(flat, 1.0, rtol=1e-9)


@pytest.mark.parametrize("routes", [2, 3])
def test_basis_is_orthonormal_over_the_flat_simplex(routes):
    # Koornwinder 1975; checked by quadrature with midpoints of small cells. [E]
    points = _quadrature(routes)
    values = _polynomials(points, routes)
    assert values.shape[1] == (DEGREE if routes == 2 else (DEGREE + 1) * (DEGREE + 2) // 2 - 1)
    np.testing.assert_allclose(values.mean(axis=0), 0.0, atol=2e-3)
    gram = values.T @ values / len(values)
    np.testing.assert_allclose(gram, np.eye(values.shape[1]), atol=6e-3)
