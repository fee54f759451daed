"""Estimates of what a run will take: every part there, growing as the work does, said in time."""

from __future__ import annotations

import time

import numpy as np
import pytest

from made_up import catalogue_of
from small_world import put, small_world
from twicetold import run
from twicetold.catalogue import read_catalogue
from twicetold.evidence import cost, spreading
from twicetold.evidence.ranking import compute_worlds, judge
from twicetold.evidence.study import prepare
from twicetold.evidence.worlds import observe_motifs
from twicetold.plan import Plan
from twicetold.run import rank_run
from twicetold.workers import ThreadPool


@pytest.fixture(scope="module")
def catalogue():
    rng = np.random.default_rng(3)
    sizes = np.exp(rng.uniform(0, np.log(60), 120)).astype(int)
    rows = [rng.choice(150, size=n, replace=False) for n in sizes]
    return catalogue_of(rows, 150, families=12, effort=rng.lognormal(size=150))


def study_of(catalogue, **changes):
    return prepare(catalogue, Plan().replace(**changes))


def parts_of(catalogue, **changes):
    return cost.estimate(study_of(catalogue, **changes), ThreadPool(1))


TWO = {"evidence__worlds": ("emergence", "ancestry")}


def test_parts_are_those_of_the_plan(catalogue):
    assert set(parts_of(catalogue, **TWO)) == {
        "emergence-only", "ancestry-only", "judging", "details", "pages",
    }  # fmt: skip
    whole = parts_of(catalogue, sensitivity__stability=True)
    assert {"contact-only and transmission-only", "route shares", "stability"} <= set(whole)
    assert all(seconds > 0 for seconds in whole.values())
    without = cost.estimate(study_of(catalogue, **TWO), ThreadPool(1), pages=False)
    assert "pages" not in without


def test_twice_the_work_is_about_twice_the_time(catalogue):
    few = parts_of(catalogue, evidence__draws=10_000, evidence__walks=1_000)
    many = parts_of(catalogue, evidence__draws=100_000, evidence__walks=10_000)
    for part in ("emergence-only", "contact-only and transmission-only"):
        assert 2 < many[part] / few[part] < 50  # timed anew each time
    assert many["ancestry-only"] == pytest.approx(10 * few["ancestry-only"])
    own = parts_of(catalogue, emergence__propensity="recorded", **TWO)
    assert own["emergence-only"] > 3 * parts_of(catalogue, **TWO)["emergence-only"]


def test_what_is_said_names_the_longest_parts():
    said = cost.told({"a": 4_000.0, "b": 30.0, "c": 0.2, "d": 8_000.0})
    assert said.startswith("This will take about 3.3 h (d 2.2 h, a 67 min, b 30 s)")
    assert cost.told({"a": 70.0}).startswith("This will take about 70 s (a 70 s)")


def test_short_runs_are_not_announced(catalogue):
    quick = study_of(catalogue, evidence__draws=999, **TWO)
    begin = time.process_time()
    assert cost.forewarning(quick, ThreadPool(1)) == ""
    assert time.process_time() - begin < 0.05
    assert cost.forewarning(study_of(catalogue, **TWO), ThreadPool(1)) == ""
    assert "will take about" in cost.forewarning(
        study_of(catalogue, evidence__walks=1_000_000), ThreadPool(1)
    )


def test_motifs_that_scatter_says_nothing_of_are_no_fault():
    empty = catalogue_of([[], [3], range(12)], 12, effort=np.ones(12))
    parts = cost.estimate(prepare(empty, Plan()), ThreadPool(2))
    assert "contact-only and transmission-only" not in parts
    assert parts["emergence-only"] == 0.0  # all enumerated


def test_one_motif_of_a_large_catalogue_is_told_of_too(tmp_path, monkeypatch):
    source = put(small_world(), tmp_path / "tables")
    plan = Plan().replace(evidence__draws=99, sensitivity__hidden=False, **TWO)
    monkeypatch.setattr(cost, "_surely_short", lambda study: False)
    monkeypatch.setattr(cost, "LONG", 0.0)
    said: list[str] = []
    motif = read_catalogue(source).motif_ids[0]
    run.motif_run(source, motif, plan, pool=ThreadPool(1), cache=False, tell_long=said.append)
    assert said == []
    monkeypatch.setattr(run, "LARGE", 1)
    run.motif_run(source, motif, plan, pool=ThreadPool(1), cache=False, tell_long=said.append)
    assert len(said) == 1
    assert "will take about" in said[0]


def test_an_open_turnover_costs_a_walk_for_each_of_its_turnovers():
    catalogue = catalogue_of([range(40), [3, 4]], 60, effort=np.ones(60))
    walked = {}
    for name, turnover in (("fit", "fit"), ("known", 0.9859)):
        plan = Plan().replace(spread__turnover=turnover, evidence__walks=500)
        study = prepare(catalogue, plan)
        ground = spreading.prepare_ground(study, study.groups[0])
        walked[name] = cost._more_walks(ground, study)
    # At .998 a walk to 40 holders is some twice as long as at .986; at .9 half of it.
    assert walked["known"] == cost.MORE_WALKS
    assert 2.5 < walked["fit"] < 6.0


def test_a_run_says_so_before_it_starts(tmp_path, monkeypatch):
    source = put(small_world(), tmp_path / "tables")
    plan = Plan().replace(evidence__draws=99, sensitivity__hidden=False, **TWO)
    said: list[str] = []
    monkeypatch.setattr(cost, "_surely_short", lambda study: False)
    monkeypatch.setattr(cost, "LONG", 0.0)

    def tell(line):
        assert not (tmp_path / "RUN" / "motifs.csv").exists()
        said.append(line)

    rank_run(source, tmp_path / "RUN", plan, pool=ThreadPool(1), cache=False, tell=tell)
    assert len(said) == 1
    assert read_catalogue(source).n_motifs == 7


@pytest.mark.benchmark
@pytest.mark.parametrize(
    "changes",
    [
        TWO,
        {**TWO, "emergence__propensity": "recorded"},
        {"evidence__worlds": ("emergence", "contact", "transmission"), "evidence__walks": 2_000},
    ],
)
def test_estimate_is_right_within_a_factor_of_three(catalogue, changes):
    study = study_of(catalogue, **changes)
    expected = sum(cost.estimate(study, ThreadPool(1), pages=False).values())
    observed = observe_motifs(study)
    begin = time.process_time()
    worlds = compute_worlds(study, observed, ThreadPool(1), cache=False)
    judge(study, observed, worlds, tuple(range(catalogue.n_motifs)))
    took = time.process_time() - begin
    print(f"{changes}: estimated {expected:.2f} s, took {took:.2f} s of processor")
    assert expected / 3 < took < expected * 3
