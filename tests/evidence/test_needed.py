"""Joins needed before looking, against enumeration and against the p-values of a ranking."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from made_up import catalogue_of
from twicetold.evidence import rank_catalogue
from twicetold.evidence.needed import holders_grid, joins_needed
from twicetold.evidence.study import prepare
from twicetold.plan import Plan
from twicetold.workers import ThreadPool

PLAN = Plan().replace(
    evidence__worlds=("emergence",),
    emergence__propensity="equal",
    sensitivity__hidden=False,
    evidence__draws=9999,
)


def test_the_fewest_joins_on_an_enumerated_graph():
    # Nine places in a 3 x 3 rook grid; oracle: 4 of 9 give 4 joins 4 times, 3 joins 32 of 126.
    edges = [(r * 3 + c, r * 3 + c + 1) for r in range(3) for c in range(2)]
    edges += [(r * 3 + c, r * 3 + c + 3) for r in range(2) for c in range(3)]
    catalogue = catalogue_of([(0, 1, 2)], 9, contacts=edges)
    plan = PLAN.replace(graph__rule="given", evidence__alpha=0.05)
    table = joins_needed(prepare(catalogue, plan), ThreadPool(1)).set_index("holders")
    assert table.index.tolist() == [2, 3, 4]
    assert table.loc[4, "joins_needed"] == 4
    assert table.loc[4, "p_needed"] == pytest.approx(4 / 126)
    assert table.loc[4, "joins_expected"] == pytest.approx(2)
    assert table.loc[4, "ratio_needed"] == pytest.approx(2)
    # Two holders: 12 of 36 pairs are joined, so nothing is rare enough; likewise three in a row.
    assert np.isnan(table.loc[2, "joins_needed"])
    most = [
        sum(a in s and b in s for a, b in edges)
        for s in map(set, itertools.combinations(range(9), 3))
    ]
    assert np.mean(np.array(most) >= max(most)) > 0.05
    assert np.isnan(table.loc[3, "joins_needed"])


def test_a_ranking_rejects_from_there_on():
    rng = np.random.default_rng(3)
    lat, lon = rng.uniform(-30, 30, 80), rng.uniform(0, 90, 80)
    rows = []
    for k in range(60):
        near = np.argsort((lat - lat[k]) ** 2 + (lon - lon[k]) ** 2)[:14]
        rows.append(np.union1d(near[: k % 7], rng.choice(80, 8, replace=False)))
    catalogue = catalogue_of(rows, 80, places=(lat, lon))
    ranking = rank_catalogue(catalogue, PLAN)
    needed = ranking.tables["needed"].set_index("holders")
    seen = set()
    for row in ranking.motifs.to_dict("records"):
        least = needed.loc[row["holders"], "joins_needed"]
        assert (row["joins"] >= least) == (row["p_against_emergence"] <= 0.05)
        seen.add(row["joins"] >= least)
    assert seen == {True, False}
    assert (needed["ratio_needed"].dropna() > 1).all()


def test_the_grid_reaches_half_of_the_traditions():
    assert holders_grid(3).tolist() == [2]
    grid = holders_grid(1000)
    assert grid[0] == 2
    assert grid[-1] == 500
    assert (np.diff(grid) > 0).all()
    assert set(range(2, 41)) <= set(grid.tolist())
