"""Propensities that come from the records, end to end: fixed margins, row totals, covariates."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from made_up import catalogue_of
from twicetold.evidence import rank_catalogue, test_motif
from twicetold.evidence.propensities import group_propensity
from twicetold.evidence.study import prepare
from twicetold.plan import Plan
from twicetold.references.saturation import recorded_rates

PLAN = Plan().replace(evidence__worlds=("emergence", "ancestry"), evidence__draws=999)


def joins(edges, held):
    return sum(a in held and b in held for a, b in edges)


def test_small_tables_give_the_p_of_their_enumeration():
    # Four traditions in a row, four motifs; every table with these margins, one by one.
    rows = [(0, 1), (0, 1), (1, 2, 3), (3,)]
    edges = [(0, 1), (1, 2), (2, 3)]
    totals = np.bincount(np.concatenate([np.array(r) for r in rows]), minlength=4)
    tables = [
        t
        for t in itertools.product(*[itertools.combinations(range(4), len(r)) for r in rows])
        if np.array_equal(
            np.bincount(np.concatenate([np.array(r) for r in t]), minlength=4), totals
        )
    ]
    assert len(tables) > 5
    catalogue = catalogue_of(rows, 4, contacts=edges)
    draws = 4000
    plan = PLAN.replace(emergence__propensity="margins", graph__rule="given", evidence__draws=draws)
    ranking = rank_catalogue(catalogue, plan)
    for evidence in ranking.evidence:
        k = evidence.index
        seen = joins(edges, rows[k])
        p = np.mean([joins(edges, t[k]) >= seen for t in tables])
        got = evidence.row["p_against_emergence"]
        assert abs(got - p) < 4 * np.sqrt(p * (1 - p) / draws) + 2 / draws
    assert ranking.fits["margins"]["mixed"]
    assert any("Both margins" in note for note in ranking.notes)


@pytest.fixture(scope="module")
def catalogue():
    rng = np.random.default_rng(4)
    rows = [np.sort(rng.choice(40, n, replace=False)) for n in rng.integers(2, 12, 25)]
    return catalogue_of(rows, 40, families=8, covariates={"height": rng.normal(size=40)})


@pytest.mark.parametrize("propensity", ["margins", "recorded", "covariates"])
def test_a_motif_alone_has_the_numbers_it_has_in_the_ranking(catalogue, propensity):
    plan = PLAN.replace(
        emergence__propensity=propensity,
        emergence__covariates=("height",) if propensity == "covariates" else (),
        sensitivity__hidden=False,
    )
    ranking = rank_catalogue(catalogue, plan, details=False)
    assert len(ranking.motifs) == 25
    for name in ("M003", "M017"):
        alone = test_motif(catalogue, name, plan).evidence[0]
        row = next(e.row for e in ranking.evidence if e.motif_id == name)
        for column in ("p_against_emergence", "joins_expected", "p_against_ancestry"):
            assert alone.row[column] == pytest.approx(row[column], nan_ok=True, abs=0)


def test_recorded_propensities_are_those_of_the_whole_catalogue():
    # Tradition 3 was searched for the first two motifs only.
    rows = [(0, 3), (1, 3), (0, 1), (0, 2), (0, 2)]
    surveyed = [range(4), range(4), range(3), range(3), range(3)]
    catalogue = catalogue_of(rows, 4, surveyed=surveyed)
    study = prepare(catalogue, PLAN.replace(emergence__propensity="recorded"))
    rates = recorded_rates(
        catalogue.attested, np.array(catalogue.surveyed_sets), catalogue.surveyed_of
    )
    for group in study.groups:
        found = group_propensity(study, group)
        assert np.array_equal(found.shared, rates.common[group.traditions])
        assert found.own is not None
        for motif, held in zip(group.motifs, group.holders, strict=True):
            own = found.own(motif)
            others = np.setdiff1d(np.arange(group.n), held)
            assert np.array_equal(own[held], rates.lowered[group.traditions][held])
            assert np.array_equal(own[others], found.shared[others])
    # Two records among two motifs weigh more than two among five.
    assert rates.common[3] > rates.common[1]
