"""The learnt posterior against the one that linear algebra gives, on graphs small enough for it."""

from __future__ import annotations

import dataclasses
from itertools import combinations

import numpy as np

from subset_solver import Solver
from twicetold.evidence.shares import build_bank, fit_posterior, simplex
from twicetold.spread import SpreadModel
from zoo import as_contact_graph

EDGES = [(0, 1), (1, 2), (2, 3), (3, 4), (4, 5)]
FAMILY = np.array([0, 0, 1, 1, 2, 0])
PROPENSITY = np.array([1.0, 3.0, 1.0, 1.0, 1.0, 4.0])


def exact_means(x):
    """Posterior means of the three shares for every holder set, under the flat prior. [E]"""
    where = simplex(3)
    steps = where.knots * 10
    knots = np.flatnonzero(np.all(np.abs(steps - np.rint(steps)) < 1e-9, axis=1))
    # Trapezoid weights on the coarser lattice: 6, 3 or 1 small triangles around a knot.
    area = np.array([6.0, 3.0, 1.0])[(where.knots[knots] == 0).sum(axis=1)]
    total, sums = {}, {}
    for knot, w in zip(knots, area, strict=True):
        shares = where.knots[knot]
        time = Solver(6, EDGES, x, shares, family=FAMILY, propensity=PROPENSITY).time
        for held, t in time.items():
            total[held] = total.get(held, 0.0) + w * t
            sums[held] = sums.get(held, 0.0) + w * t * shares
    return {held: sums[held] / total[held] for held in total}


def test_learnt_posterior_is_the_exact_one():
    x = 0.5
    exact = exact_means(x)
    model = SpreadModel(as_contact_graph(6, EDGES), x, family=FAMILY, propensity=PROPENSITY)
    bank = build_bank(model, largest=5, seed=1, walks=8000, use_cache=False)
    fitted = fit_posterior(bank, seed=1, steps=500)
    # This map is too small for shares to be given; here they are wanted all the same.
    fitted = dataclasses.replace(fitted, width=np.zeros_like(fitted.width))
    off, spread = [], []
    for n in (2, 3, 4):
        for held in combinations(range(6), n):
            told = fitted.posterior([np.array(held)])[0]
            off.append(told.mean - exact[frozenset(held)])
            spread.append(exact[frozenset(held)] - 1 / 3)
    # About 4,000 effective walks over some 20 sets give each mean an error of .24 / sqrt(200);
    # four of these bound the worst of the 150 numbers.
    error = 0.24 / np.sqrt(200)
    assert np.sqrt(np.mean(np.square(spread))) > 2 * error
    assert np.sqrt(np.mean(np.square(off))) < 1.5 * error
    assert np.abs(off).max() < 4 * error
