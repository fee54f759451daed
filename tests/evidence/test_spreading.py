"""The spread worlds as a run uses them: exact values, one motif alone, caches, power, dynamics."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from subset_solver import Solver
from twicetold.catalogue import read_catalogue
from twicetold.evidence import rank_catalogue, spreading
from twicetold.evidence import test_motif as one_motif
from twicetold.evidence.confidence import PLAUSIBLE
from twicetold.evidence.dynamics import dynamics
from twicetold.evidence.power import HOPED, TRUTHS, at_holders, power_on, simulate, some_counts
from twicetold.evidence.ranking import compute_worlds
from twicetold.evidence.scatter import scatter_worlds
from twicetold.evidence.spreading import banked_up_to
from twicetold.evidence.study import prepare
from twicetold.evidence.verdict import VERDICTS
from twicetold.evidence.worlds import observe_motifs
from twicetold.graph import build_graph
from twicetold.plan import Plan
from twicetold.spread import SpreadModel, cap_for, chain_tables
from twicetold.spread.world import expected_events, spread_world
from twicetold.workers import ThreadPool

SPREAD = ("emergence", "contact", "transmission")


@pytest.fixture(autouse=True)
def _own_cache(tmp_path, monkeypatch):
    monkeypatch.setenv("TWICETOLD_CACHE", str(tmp_path / "cache"))


def write(folder, traditions, attestations, contacts=()):
    folder.mkdir()
    rows = ["id,name,latitude,longitude", *(f"{t},{t},{a},{b}" for t, a, b in traditions)]
    (folder / "traditions.csv").write_text("\n".join(rows) + "\n")
    rows = ["motif_id,tradition_id", *(f"{m},{t}" for m, t in attestations)]
    (folder / "attestations.csv").write_text("\n".join(rows) + "\n")
    if contacts:
        rows = ["tradition_id,neighbour_id", *(f"{a},{b}" for a, b in contacts)]
        (folder / "contacts.csv").write_text("\n".join(rows) + "\n")
    return folder


@pytest.fixture
def path_of_five(tmp_path):
    places = [(f"T{i}", 0, 10 * i) for i in range(5)]
    held = [("M", f"T{i}") for i in (0, 1, 3)]
    return write(tmp_path / "five", places, held, [(f"T{i}", f"T{i + 1}") for i in range(4)])


def few(**changes):
    """Few walks and draws, and a turnover that makes walks short."""
    base = Plan().replace(
        spread__turnover=0.85,
        spread__recording="complete",
        sensitivity__hidden=False,
        evidence__walks=100,
        evidence__draws=199,
        evidence__worlds=SPREAD,
    )
    return base.replace(**changes)


@pytest.fixture(scope="module")
def archipelago(example_folder):
    return read_catalogue(example_folder)


def test_the_path_of_five_has_its_exact_p(path_of_five):
    # P(joins <= 1) = .366902 by linear algebra over all subsets (tests/subset_solver.py).
    plan = few(
        graph__rule="given",
        spread__turnover=0.9,
        evidence__walks=20_000,
        emergence__propensity="equal",
    )
    found = one_motif(read_catalogue(path_of_five), "M", plan, cache=False)
    compared = found.evidence[0].comparisons
    law = next(c.law for c in compared if c.world == "contact" and c.statistic == "joins")
    p = found.motifs["p_against_contact"].iloc[0]
    assert abs(p - 0.366902) < 4 * np.sqrt(0.366902 * 0.633098 / law.effective)


def test_a_motif_alone_has_the_p_of_the_ranking(archipelago):
    plan = few()
    ranked = rank_catalogue(archipelago, plan, details=False, cache=False)
    columns = ["p_against_emergence", "p_against_contact", "p_against_transmission"]
    for motif in ("M001", "M100"):
        alone = one_motif(archipelago, motif, plan, cache=False).motifs
        row = ranked.motifs[ranked.motifs["motif_id"] == motif]
        np.testing.assert_array_equal(alone[columns].to_numpy(), row[columns].to_numpy())


def test_neither_workers_nor_the_cache_move_a_number(archipelago, monkeypatch):
    plan = few(evidence__walks=200)
    tables = [
        rank_catalogue(archipelago, plan, pool=ThreadPool(w), details=False, cache=c).motifs
        for w, c in ((1, False), (2, True))
    ]

    def walked_again(*_args, **_kwargs):
        raise AssertionError("the cache was not read")

    monkeypatch.setattr("twicetold.evidence.scatter.spread_world", walked_again)
    tables.append(rank_catalogue(archipelago, plan, details=False, cache=True).motifs)
    for other in tables[1:]:
        pd.testing.assert_frame_equal(tables[0], other, check_exact=True)


PATH_OF_FIVE = [(i, i + 1) for i in range(4)]


def exact_p(x):
    """P(joins <= 1 | 3 holders) on the path of five by linear algebra over all subsets."""
    solved = Solver(5, PATH_OF_FIVE, x)
    joins = {s: sum(i in s and j in s for i, j in PATH_OF_FIVE) for s in solved.time if len(s) == 3}
    # A snapshot comes with the time spent in a set.
    few_joins = sum(solved.time[s] for s, b in joins.items() if b <= 1)
    return few_joins / sum(solved.time[s] for s in joins)


@pytest.mark.parametrize(("turnover", "low", "high"), [((0.5, 0.9), 0.5, 0.9), ("fit", *PLAUSIBLE)])
def test_an_open_turnover_gives_the_worst_exact_p_of_its_range(path_of_five, turnover, low, high):
    # One motif has no prevalence curve: "fit" then leaves the turnover open likewise.
    plan = few(
        graph__rule="given",
        spread__turnover=turnover,
        evidence__walks=20_000,
        emergence__propensity="equal",
    )
    found = one_motif(read_catalogue(path_of_five), "M", plan, cache=False)
    law = next(
        c.law
        for c in found.evidence[0].comparisons
        if c.world == "contact" and c.statistic == "joins"
    )
    across = [exact_p(x) for x in np.linspace(low, high, 21)]
    worst = max(across)
    assert worst == across[-1] > min(across) + 0.02
    p = found.motifs["p_against_contact"].iloc[0]
    assert abs(p - worst) < 4 * np.sqrt(worst * (1 - worst) / law.effective)
    assert found.fits["turnover_assumed_low"] == low
    assert found.fits["turnover_assumed_high"] == high
    said = any("too few" in n or "not fitted from fewer" in n for n in found.notes)
    assert said == (turnover == "fit")


def test_banks_go_beyond_three_hundred_holders_as_far_as_the_work_allows(monkeypatch):
    lat, lon = np.zeros(900), np.arange(900) / 4.0
    model = SpreadModel(build_graph(lat, lon, "nearest:2"), 0.9)
    counts = np.array([2, 250, 400, 500, 800], dtype=np.int32)
    assert banked_up_to(model, counts, 33_000) == 800
    assert banked_up_to(model, counts[:2], 33_000) == 250
    assert banked_up_to(model, counts[2:], 33_000) == 800
    events = {
        int(n): 1000 * expected_events(chain_tables(model, cap_for(model, int(n)))) for n in counts
    }
    for n in (400, 500, 800):
        monkeypatch.setattr(spreading, "MOST_EVENTS", events[n])
        assert banked_up_to(model, counts, 1000) == n
    monkeypatch.setattr(spreading, "MOST_EVENTS", events[400] - 1)
    assert banked_up_to(model, counts, 1000) == 250
    assert banked_up_to(model, counts[2:], 1000) == 300


def test_effort_counts_once(archipelago):
    fitted = prepare(archipelago, few(spread__recording="fit"))
    ground = spreading.prepare_ground(fitted, fitted.groups[0])
    assert ground.confidence.points[0].recorded is not None
    assert np.all(spreading.invention_rates(fitted, ground) == 1.0)
    complete = prepare(archipelago, few())
    ground = spreading.prepare_ground(complete, complete.groups[0])
    rates = spreading.invention_rates(complete, ground)
    effort = archipelago.effort[ground.group.traditions]
    np.testing.assert_allclose(rates / rates.sum(), effort / effort.sum())


def test_simulated_motifs_follow_the_law_of_their_world(archipelago):
    study = prepare(archipelago, few())
    ground = spreading.prepare_ground(study, study.groups[0])
    n, motifs = 8, 300
    sets = simulate(study, ground, TRUTHS["contact"], [n], ThreadPool(), motifs=motifs, walks=600)
    assert all(len(held) == n for held in sets[n])
    model = ground.transmission(study).model(
        0.0, ground.confidence.points[0], ground.confidence.points[0].centre
    )
    law = spread_world(model, [n], largest=n, walks=3000).law("joins", n)
    graph = ground.group.graph
    joins = [np.isin(graph.edges, held).all(axis=1).sum() for held in sets[n]]
    # Systematic resampling of correlated weights: half the draws count as independent.
    assert abs(np.mean(joins) - law.mean()) < 4 * np.sqrt(law.variance() / (motifs / 2))


def test_power_is_a_law_over_verdicts(archipelago):
    study = prepare(archipelago, few(evidence__walks=300))
    ground = spreading.prepare_ground(study, study.groups[0])
    counts = some_counts(ground.wanted)
    assert set(counts) <= set(ground.wanted.tolist())
    worlds = scatter_worlds(
        ground.transmission(study), ground.wanted, largest=int(ground.wanted[-1])
    )
    table = power_on(study, ground, worlds, ThreadPool())
    frame = table.frame
    assert set(frame["verdict"]) == set(VERDICTS)
    total = frame.groupby(["truth", "holders"])["probability"].sum()
    np.testing.assert_allclose(total, 1.0)
    assert set(table.smallest["truth"]) == set(HOPED)
    near_twenty = min(counts, key=lambda n: abs(n - 20))
    most = frame[frame["holders"] == near_twenty].set_index(["truth", "verdict"])["probability"]
    either = most["contact", "contact spread"] + most["contact", "contact or ancestry"]
    assert either > 0.8
    assert most["emergence", "parallel emergence"] > 0.3
    assert most["contact", "parallel emergence"] < 0.1
    assert most["emergence", "contact spread"] < 0.1
    near = at_holders(table, counts[0])
    assert set(near["holders"]) == {counts[0]}


def test_both_dynamics_judge_the_same_motifs(archipelago):
    study = prepare(archipelago, few())
    observed = observe_motifs(study)
    worlds = compute_worlds(study, observed, ThreadPool(), cache=False)
    found, said = dynamics(study, observed, worlds, ThreadPool())
    assert found is not None
    assert f"{found.differ:,} of {len(found.frame):,} verdicts differ" in said
    assert len(found.frame) > 50
    assert found.contact > 0
    # Two dynamics with one prevalence agree on most motifs, but they are not the same thing.
    p, q = found.frame["p_spread_chain"], found.frame["p_contact_process"]
    assert found.differ < len(found.frame) / 3
    assert np.corrcoef(p, q)[0, 1] > 0.7
    assert (p != q).any()
