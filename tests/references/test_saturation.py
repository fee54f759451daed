"""Clock rates from row totals: the equations they solve, and what totals alone would miss."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import scipy.sparse as sp
from scipy.optimize import brentq

from twicetold.references.propensity import covariate_propensity, recorded_propensity
from twicetold.references.saturation import recorded_rates


def rung(rng, rate, counts):
    """One motif for each count, held by the first to ring."""
    held = np.zeros((len(counts), len(rate)), dtype=bool)
    for k, n in enumerate(counts):
        held[k, np.argsort(rng.exponential(size=len(rate)) / rate)[:n]] = True
    return held


@pytest.fixture(scope="module")
def world():
    rng = np.random.default_rng(3)
    rate = np.exp(rng.normal(0, 1.3, 150))
    return rate, rung(rng, rate, rng.integers(2, 100, 1500))


def test_both_sets_of_equations_hold():
    rng = np.random.default_rng(1)
    sets = np.ones((2, 40), dtype=bool)
    sets[1, ::4] = False
    set_of = rng.integers(0, 2, 300)
    held = (rng.random((300, 40)) < rng.uniform(0.02, 0.9, 300)[:, None]) & sets[set_of]
    held[0], held[1] = False, sets[set_of[1]]  # nobody, everybody: no part in it
    found = recorded_rates(sp.csr_array(held), sets, set_of)
    used = held.any(axis=1) & (held != sets[set_of]).any(axis=1)
    expected = np.zeros(40)
    for k in np.flatnonzero(used):
        here, n = sets[set_of[k]], held[k].sum()

        def missing(t, here=here, n=n):
            return (1 - np.exp(-found.common[here] * np.exp(t))).sum() - n

        t = np.exp(brentq(missing, -30, 30))
        expected += here * (1 - np.exp(-found.common * t))
    # Half a record is added to every total, which the motifs' totals do not have: a hair is left.
    assert expected == pytest.approx(held[used].sum(axis=0) + 0.5, abs=0.6)
    assert np.corrcoef(expected, held[used].sum(axis=0))[0, 1] > 0.9999


def test_rare_motifs_leave_the_totals_as_they_are():
    rng = np.random.default_rng(2)
    held = rung(rng, np.exp(rng.normal(0, 0.5, 3000)), np.full(1500, 4))
    attested = sp.csr_array(held)
    found = recorded_rates(attested, np.ones((1, 3000), bool), np.zeros(1500, int))
    plain = recorded_propensity(attested)
    assert np.ptp(np.log(found.common / plain)) < 0.01


def test_what_was_searched_longer_weighs_less():
    # Two sets; four holders of 300 took longer to ring than four of 400.
    sets = np.ones((2, 400), dtype=bool)
    sets[1, :100] = False
    rng = np.random.default_rng(2)
    held = np.zeros((6000, 400), dtype=bool)
    for k in range(6000):
        held[k, rng.choice(np.flatnonzero(sets[k // 3000]), 4, replace=False)] = True
    found = recorded_rates(sp.csr_array(held), sets, np.repeat([0, 1], 3000))
    total = recorded_propensity(sp.csr_array(held))
    time = np.where(sets[1], 1 / 400 + 1 / 300, 1 / 400)
    off = np.log(found.common * time / total)
    assert off[:100].mean() == pytest.approx(off[100:].mean(), abs=0.01)
    assert np.ptp(off) < 0.02


def test_rates_come_back_where_totals_flatten(world):
    rate, held = world
    attested = sp.csr_array(held)
    found = recorded_rates(attested, np.ones((1, 150), bool), np.zeros(1500, int))
    slope = np.polyfit(np.log(rate), np.log(found.common), 1)[0]
    flat = np.polyfit(np.log(rate), np.log(recorded_propensity(attested)), 1)[0]
    assert slope == pytest.approx(1, abs=0.04)
    assert flat < 0.75


def test_without_its_own_record_only_a_holder_is_lowered(world):
    _, held = world
    some = held[:60]
    found = recorded_rates(sp.csr_array(some), np.ones((1, 150), bool), np.zeros(60, int))
    assert np.all(found.lowered <= found.common)
    assert np.all(found.lowered > 0)
    often = some.sum(axis=0) > 3
    assert np.all(found.lowered[often] < found.common[often])
    # One record fewer in a tradition, nothing else: the total that `lowered` stands for.
    other = recorded_propensity(sp.csr_array(some))
    rank = np.argsort(other[often])
    assert np.all(np.diff(found.common[often][rank]) >= -1e-9)


def test_a_catalogue_that_says_nothing_gives_equal_chances():
    nothing = sp.csr_array(np.array([[True] * 5, [False] * 5]))
    found = recorded_rates(nothing, np.ones((1, 5), bool), np.zeros(2, int))
    assert found.common.tolist() == found.lowered.tolist() == [1.0] * 5


def test_classes_of_motifs_give_the_coefficient_that_pooling_flattens():
    rng = np.random.default_rng(6)
    hill = rng.normal(size=400)
    held = rung(rng, np.exp(1.2 * hill), np.repeat([5, 20, 80, 240], 150))
    frame = pd.DataFrame({"hill": hill})
    by_class = held.reshape(4, 150, 400).sum(axis=1)
    apart = covariate_propensity(by_class, frame, None, np.full((4, 400), 150))
    pooled = covariate_propensity(held.sum(axis=0), frame, None, np.full(400, 600))
    assert apart.names == ("(class 1)", "(class 2)", "(class 3)", "(class 4)", "hill")
    assert apart.coefficients[-1] == pytest.approx(1.2, abs=0.02)
    assert pooled.coefficients[-1] < 1.1
    slope = np.polyfit(hill, np.log(apart.propensity), 1)[0]
    assert slope == pytest.approx(apart.coefficients[-1])
    assert np.all(np.diff(apart.coefficients[:4]) > 0)  # the commoner, the longer abroad
