"""Stability runs: each is the analysis again with one thing changed."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from made_up import catalogue_of
from twicetold.evidence import rank_catalogue
from twicetold.evidence.ranking import compute_worlds, judge
from twicetold.evidence.results import Comparison
from twicetold.evidence.stability import AGAIN, CARRIED, NOT_ASKED, SAME, settings, stability
from twicetold.evidence.study import prepare
from twicetold.evidence.verdict import PARALLEL, SEVERAL
from twicetold.evidence.worlds import observe_motifs
from twicetold.plan import Plan
from twicetold.workers import ThreadPool

PLAN = Plan().replace(
    evidence__worlds=("emergence", "ancestry"),
    evidence__draws=1999,
    sensitivity__draws=499,
    sensitivity__stability=True,
    sensitivity__hidden=False,
)


@pytest.fixture(scope="module")
def catalogue():
    """Sixty places, five families one of them a singleton, three regions, motifs near and far."""
    rng = np.random.default_rng(8)
    lat, lon = rng.uniform(-40, 60, 60), rng.uniform(-170, 170, 60)
    rows = []
    for k in range(20):
        n = int(rng.integers(3, 15))
        if k % 2:
            at = rng.integers(60)
            rows.append(np.argsort((lat - lat[at]) ** 2 + (lon - lon[at]) ** 2)[:n])
        else:
            rows.append(rng.choice(60, n, replace=False))
    family = [
        "alone" if k == 0 else "" if k == 1 else f"F{int(lon[k] // 90) + 2}" for k in range(60)
    ]
    return catalogue_of(
        rows,
        60,
        family=family,
        region=[("north", "middle", "south")[k % 3] for k in range(60)],
        effort=np.exp(rng.normal(size=60)),
        places=(lat, lon),
    )


@pytest.fixture(scope="module")
def ranking(catalogue):
    return rank_catalogue(catalogue, PLAN)


def test_one_run_for_everything_that_could_be_changed(catalogue):
    found = [(s.kind, s.setting) for s in settings(prepare(catalogue, PLAN))]
    assert found == [
        *[("graph", g) for g in ("nearest:4", "nearest:5", "nearest:8", "delaunay", "gabriel")],
        ("exponent", "0"),
        ("exponent", "0.5"),
        *[("without family", f"F{k}") for k in range(4)],
        *[("without region", r) for r in ("middle", "north", "south")],
    ]


def test_regions_are_found_where_the_catalogue_names_none(catalogue):
    bare = replace(catalogue, region=("",) * 60)
    study = prepare(bare, PLAN.replace(sensitivity__regions=4))
    left = [s for s in settings(study) if s.kind == "without region"]
    assert [s.setting for s in left] == ["1", "2", "3", "4"]
    # Every tradition is missing from exactly one run.
    assert sum(60 - s.catalogue.n_traditions for s in left) == 60


def test_without_effort_other_propensities_stand_in_for_exponents(catalogue):
    bare = replace(catalogue, effort=None)
    found = [s for s in settings(prepare(bare, PLAN)) if s.kind in ("exponent", "propensity")]
    assert [(s.kind, s.setting) for s in found] == [("propensity", "equal")]


@pytest.mark.parametrize("kind", ["graph", "exponent", "without family", "without region"])
def test_a_run_is_the_analysis_itself(catalogue, ranking, kind):
    setting = [s for s in settings(prepare(catalogue, PLAN)) if s.kind == kind][-1]
    again = rank_catalogue(setting.catalogue, setting.plan, details=False)
    by_id = again.motifs.set_index("motif_id")
    seen = 0
    for evidence in ranking.evidence:
        if evidence.stability is None:
            continue
        frame = evidence.stability
        row = frame[(frame["kind"] == kind) & (frame["setting"] == setting.setting)].iloc[0]
        other = by_id.loc[evidence.motif_id]
        assert row["verdict"] == other["verdict"]
        for column in ("p_against_emergence", "p_against_ancestry"):
            assert row[column] == pytest.approx(other[column], nan_ok=True, abs=0)
        seen += 1
    assert seen > 10


def test_the_share_is_that_of_runs_with_the_same_verdict(ranking):
    table = ranking.motifs.set_index("motif_id")
    shares = set()
    for evidence in ranking.evidence:
        if evidence.stability is None:
            assert np.isnan(table.loc[evidence.motif_id, "stability"])
            continue
        same = (evidence.stability["verdict"] == evidence.row["verdict"]).mean()
        assert table.loc[evidence.motif_id, "stability"] == pytest.approx(same)
        assert evidence.row["stability"] == pytest.approx(same)
        assert set(evidence.stability["transmission"]) == {NOT_ASKED}
        shares.add(same)
    assert len(shares) > 2
    runs = ranking.tables["stability_runs"]
    assert len(runs) == 14
    assert runs["traditions"].min() < 60


def test_the_number_of_workers_changes_nothing(catalogue, ranking):
    again = rank_catalogue(catalogue, PLAN, pool=ThreadPool(1))
    assert again.motifs.equals(ranking.motifs)
    assert all(
        a.stability is b.stability or a.stability.equals(b.stability)
        for a, b in zip(again.evidence, ranking.evidence, strict=True)
    )


def test_transmission_is_taken_over_and_said_to_be(catalogue, monkeypatch):
    # A transmission world stood in for: every motif is too scattered for one origin.
    study = prepare(catalogue, PLAN)
    observed = observe_motifs(study)
    pool = ThreadPool(1)
    worlds = compute_worlds(study, observed, pool, cache=False)
    scattered = Comparison("transmission", "strands", "many", 9, 2.0, 0.0001, 0.0001, True)
    worlds = replace(
        worlds, comparisons={m: (*c, scattered) for m, c in worlds.comparisons.items()}
    )
    told = replace(
        study, plan=PLAN.replace(evidence__worlds=("emergence", "ancestry", "transmission"))
    )
    table = judge(told, observed, worlds, tuple(range(20)))
    assert set(table["verdict"]) <= {PARALLEL, SEVERAL}
    kinds = {s.kind: s.transmission for s in settings(told)}
    assert kinds == {
        "graph": AGAIN,
        "exponent": SAME,
        "reach": AGAIN,
        "without family": CARRIED,
        "without region": CARRIED,
    }
    some = [s for s in settings(told) if s.transmission != AGAIN]
    monkeypatch.setattr("twicetold.evidence.stability.settings", lambda _: some)
    found = stability(told, worlds, table, pool, cache=False)
    for frame in found.by_motif.values():
        assert (frame["p_against_transmission"] == 0.0001).all()
        assert set(frame["verdict"]) <= {PARALLEL, SEVERAL}
        assert set(frame["transmission"]) == {SAME, CARRIED}
    assert any("main run" in note for note in found.notes)
