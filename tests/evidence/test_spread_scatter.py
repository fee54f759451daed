"""p-values against contact-only and transmission-only, and the worst case they take."""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.evidence.confidence import (
    BETA,
    PLAUSIBLE,
    ConfidenceSet,
    Point,
    Prevalence,
    confidence_set,
)
from twicetold.evidence.scatter import Transmission, at_reach, scatter_worlds
from twicetold.references.pvalue import p_few, p_many
from twicetold.spread.recording import recorded_probability
from twicetold.spread.turnover import log_series
from twicetold.spread.world import scatter_score
from zoo import as_contact_graph, small_graphs

PATH5 = [(0, 1), (1, 2), (2, 3), (3, 4)]


def fixed(x, recorded=None):
    return ConfidenceSet((Point(np.inf, recorded, x, (x,)),), 0.0, None, None)


def between(*x):
    return ConfidenceSet((Point(np.inf, None, x[len(x) // 2], x),), BETA, None, None)


def test_path_of_five_exactly():
    # Turnover given, recording complete, no families, holders {0, 1, 3}: P(joins <= 1) = .366902.
    what = Transmission(as_contact_graph(5, PATH5), fixed(0.9), walks=20_000, seed=2)
    worlds = scatter_worlds(what, [3], largest=5)
    found = worlds.compare(3, joins=1, strands=2)
    assert [(c.world, c.statistic, c.primary) for c in found] == [
        ("contact", "joins", True),
        ("contact", "strands", False),
        ("transmission", "strands", True),
        ("transmission", "joins", False),
    ]
    tolerance = 4 * np.sqrt(0.367 * 0.633 / worlds.contact.law("joins", 3).effective)
    for c in found:  # on a path, clusters = holders - joins, and strands are clusters
        assert abs(c.p - 0.366902) < tolerance
        assert c.p_attainable <= c.p


def test_alone_equals_the_batch():
    n, edges = small_graphs()["grid3"]
    what = Transmission(
        as_contact_graph(n, edges), between(0.7, 0.9, 0.99), np.arange(n) // 3, walks=400
    )
    every, one = (scatter_worlds(what, c, largest=7) for c in (range(1, 8), [5]))
    for joins in range(6):
        for strands in range(1, 4):
            a = every.compare(5, joins=joins, strands=strands)
            b = one.compare(5, joins=joins, strands=strands)
            assert [c.p for c in a] == [c.p for c in b]


def test_worst_case_is_over_everything():
    n, edges = small_graphs()["grid3"]
    family = np.arange(n) // 3
    what = Transmission(as_contact_graph(n, edges), between(0.5, 0.8, 0.95), family, walks=2000)
    worlds = scatter_worlds(what, [4], largest=6)
    assert {s.inheritance for s in worlds.settings} == {0.0, 0.25, 0.5, 0.75, 1.0}
    assert {s.turnover for s in worlds.settings} == {0.5, 0.8, 0.95}
    assert worlds.settings[0].inheritance == 0
    assert worlds.settings[0].turnover == 0.8
    by_hand = max(float(p_many(s.law("strands", 4), 2)) for s in worlds.settings)
    assert worlds.p("transmission", "strands", 4, 2) == pytest.approx(by_hand + BETA)
    score = int(scatter_score(2, 1, 4))
    by_hand = max(float(p_many(s.law("scatter", 4), score)) for s in worlds.settings)
    assert worlds.p_scatter(4, joins=1, strands=2) == pytest.approx(by_hand + BETA)
    primary = worlds.compare(4, joins=1, strands=2)[2]
    assert (primary.statistic, primary.observed, primary.primary) == ("strands", 2, True)
    assert primary.p == worlds.p_scatter(4, joins=1, strands=2)
    contact = max(float(p_few(s.law("joins", 4), 2)) for s in worlds.settings if s.inheritance == 0)
    assert worlds.p("contact", "joins", 4, 2) == pytest.approx(contact + BETA)
    assert worlds.p("transmission", "joins", 4, 2) >= worlds.p("contact", "joins", 4, 2)
    assert worlds.p("contact", "joins", 4, 4) == 1.0


def test_joins_break_the_ties_of_strands():
    # More strands always come first; among as many, fewer joins; and no tail is heavier for it.
    assert np.all(np.diff(scatter_score([1, 1, 1, 2, 2], [5, 1, 0, 40, 3], 10)) > 0)
    assert scatter_score(3, 200, 10) == scatter_score(3, 31, 10)  # the last class is open
    assert scatter_score(3, 7, 64) == scatter_score(3, 4, 64)  # a sixteenth of 64 holders wide
    n, edges = small_graphs()["grid3"]
    what = Transmission(as_contact_graph(n, edges), fixed(0.9), np.arange(n) // 3, walks=3000)
    worlds = scatter_worlds(what, [4], largest=6)
    for strands in (1, 2, 3):
        p = [worlds.p_scatter(4, joins=j, strands=strands) for j in (0, 1, 2, 3, 4)]
        assert p == sorted(p)
        plain = worlds.p("transmission", "strands", 4, strands)
        more = worlds.p("transmission", "strands", 4, strands + 1)
        assert all(more - 1e-12 <= q <= plain + 1e-12 for q in p)


def test_far_turnovers_are_walked():
    n, edges = small_graphs()["grid3"]
    what = Transmission(as_contact_graph(n, edges), between(0.05, 0.9, 0.95), walks=500)
    worlds = scatter_worlds(what, [4], largest=6)
    own = {s.turnover: 4 in s.walked for s in worlds.settings}
    assert own[0.05]
    assert not own[0.95]
    assert worlds.settings[0].turnover == 0.9


def test_families_far_apart_scatter_without_emergence():
    # Two families, each in both of two separate rings: inheritance alone explains two clusters.
    edges = [(i, (i + 1) % 12) for i in range(12)]
    edges += [(12 + i, 12 + (i + 1) % 12) for i in range(12)]
    family = np.array([0, 1] * 6 + [2] * 6 + [0, 1] * 6 + [2] * 6)[:24]
    graph = as_contact_graph(24, edges)
    with_kin = scatter_worlds(Transmission(graph, fixed(0.7), family, walks=3000), [4], largest=8)
    contact = with_kin.p("contact", "joins", 4, 0)
    transmission = with_kin.p("transmission", "joins", 4, 0)
    assert contact < 0.1 < 2 * transmission
    assert transmission > 2 * contact


def test_reach_scatters():
    n = 40
    graph = as_contact_graph(n, [(i, (i + 1) % n) for i in range(n)])
    near = Transmission(graph, fixed(0.8), walks=3000)
    p = [
        scatter_worlds(at_reach(near, r), [6], largest=10).p("contact", "joins", 6, 2)
        for r in (1.0, 1.5, 3.0)
    ]
    assert p[0] < p[1] < p[2]


def test_unreachable_counts_are_said():
    recorded = np.full(5, 0.0)
    recorded[0] = 1.0
    what = Transmission(as_contact_graph(5, PATH5), fixed(0.5, recorded), walks=50)
    worlds = scatter_worlds(what, [1, 3], largest=5)
    c = worlds.compare(3, joins=1, strands=2)[0]
    assert np.isnan(c.p)
    assert "No walk" in c.note
    assert worlds.compare(1, joins=0, strands=1)[0].p == 1.0


def counts_of(x, n, motifs, r=1.0, seed=1):
    p = log_series(x, n, r)
    return np.random.default_rng(seed).choice(n + 1, p=p / p.sum(), size=motifs)


def test_confidence_set_with_everything_given():
    got = confidence_set(Prevalence([3, 4], 10), turnover=0.8, recording="complete")
    assert got.beta == 0
    assert got.points == (Point(np.inf, None, 0.8, (0.8,)),)


def test_confidence_set_of_a_fitted_turnover():
    got = confidence_set(Prevalence(counts_of(0.95, 200, 400), 200), recording="complete")
    point = got.points[0]
    assert got.beta == BETA
    assert point.turnovers[0] < got.turnover.low < point.centre < got.turnover.high
    assert got.turnover.high < point.turnovers[-1]
    assert len(point.turnovers) == 5


def test_confidence_set_with_recording():
    n = 200
    rng = np.random.default_rng(0)
    effort = rng.lognormal(0, 0.7, n)
    r = recorded_probability(effort, 1.0)
    totals = rng.poisson(120 * r)
    counts = counts_of(0.95, n, 400, float(r.mean()))
    got = confidence_set(Prevalence(counts, n, effort, totals))
    assert len(got.points) == 3
    first, low, high = got.points
    assert low.kappa < first.kappa < high.kappa
    # Poorer recording means more unseen holders: a higher turnover.
    assert low.centre > first.centre > high.centre


def test_too_few_motifs_leave_the_turnover_open_and_say_so():
    got = confidence_set(Prevalence([3, 4], 10))
    (point,) = got.points
    assert got.assumed == PLAUSIBLE == (point.turnovers[0], point.turnovers[-1])
    # The middle by ratio: as many times as far from 1 as the low end is, as the high end is nearer.
    low, middle, high = (1.0 - x for x in point.turnovers)
    assert low / middle == pytest.approx(middle / high)
    assert point.centre == point.turnovers[1]
    assert got.beta == 0.0
    assert got.turnover is None
    assert "Only 2 motifs have 3 holders or more" in got.notes[0]
    assert "0.9 to 0.998" in got.notes[0]
    assert "Only 1 motif has" in confidence_set(Prevalence([3], 10)).notes[0]


def test_a_range_is_taken_as_given_whatever_the_counts():
    got = confidence_set(
        Prevalence(counts_of(0.95, 200, 400), 200), turnover=(0.5, 0.98), recording="complete"
    )
    assert got.points[0].turnovers == pytest.approx((0.5, 0.9, 0.98))
    assert got.assumed == (0.5, 0.98)
    assert got.turnover is None
    assert got.notes == ()
