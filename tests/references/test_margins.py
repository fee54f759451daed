"""Trades under fixed margins: parity with the readable twin, what stays fixed, validity, mixing."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from twicetold.errors import TwicetoldError, TwicetoldWarning
from twicetold.randomness import Stream, chunk_words
from twicetold.references import _margins_plain as plain
from twicetold.references.margins import View, _observe, _run, _table, margins_world
from twicetold.references.pvalue import p_many
from twicetold.statistics import observe
from twicetold.workers import ThreadPool
from zoo import as_contact_graph


def a_catalogue(seed, n=30, motifs=40, surveys=3):
    """Random motifs, some searched only in part of the traditions, on random graphs."""
    rng = np.random.default_rng(seed)
    views, first = [], 0
    for k in range(surveys):
        inside = np.arange(n) if k == 0 else np.sort(rng.choice(n, n - 8, replace=False))
        m = len(inside)
        pairs = {tuple(sorted(rng.choice(m, 2, replace=False).tolist())) for _ in range(3 * m)}
        sets = [
            np.sort(rng.choice(m, rng.integers(0, 12), replace=False))
            for _ in range(motifs // surveys)
        ]
        numbers = range(first, first + len(sets))
        first += len(sets)
        views.append(View(inside, as_contact_graph(m, pairs), rng.integers(0, 5, m), numbers, sets))
    return views


def rows_of(table):
    return [table[1][a:b].tolist() for a, b in zip(table[0][:-1], table[0][1:], strict=True)]


@pytest.mark.parametrize("backward", [False, True])
@pytest.mark.parametrize("surveys", [1, 3])
def test_kernel_equals_its_readable_twin(surveys, backward):
    for seed in range(4):
        table, allowed, _ = _table(a_catalogue(seed, surveys=surveys), 30)
        rows = rows_of(table)
        word = chunk_words(seed, Stream.MARGINS, draws=1)[0]
        _run(table, allowed, word, 6, backward=backward)
        plain.run_sweeps(
            word,
            rows,
            lambda r, v, allowed=allowed, table=table: bool(allowed[table[2][r], v]),
            sweeps=6,
            rotations=len(rows) if surveys > 1 else 0,
            backward=backward,
        )
        assert rows == rows_of(table)


@pytest.mark.parametrize("surveys", [1, 3])
def test_margins_stay_and_unsearched_cells_stay_empty(surveys):
    table, allowed, _ = _table(a_catalogue(9, surveys=surveys), 30)
    before = table[1].copy()
    _run(table, allowed, chunk_words(1, Stream.MARGINS, draws=1)[0], 50)
    assert not np.array_equal(before, table[1])
    assert np.array_equal(np.bincount(before, minlength=30), np.bincount(table[1], minlength=30))
    row = np.repeat(np.arange(len(table[0]) - 1), np.diff(table[0]))
    assert allowed[table[2][row], table[1]].all()
    assert len(set(zip(row.tolist(), table[1].tolist(), strict=True))) == len(row)


def test_statistics_of_a_table_are_those_of_observe():
    views = a_catalogue(3)
    table, _, motifs = _table(views, 30)
    values, scores = _observe(tuple(views), table)
    seen = [observe(v.graph, v.holders, v.family_codes) for v in views]
    assert np.array_equal(values, np.concatenate([s.values for s in seen]))
    assert np.array_equal(scores, np.concatenate([s.scores for s in seen]))
    assert motifs.tolist() == list(range(len(motifs)))


def test_workers_change_nothing_and_laws_hold_every_draw():
    views = a_catalogue(5)
    one = margins_world(views, 30, draws=70, seed=2, pool=ThreadPool(1))
    two = margins_world(views, 30, draws=70, seed=2, pool=ThreadPool(2))
    for motif in range(len(one.motifs)):
        for statistic in ("joins", "joins_cross_family", "strands"):
            a, b = one.law(motif, statistic), two.law(motif, statistic)
            assert np.array_equal(a.values, b.values)
            assert np.array_equal(a.weights, b.weights)
            assert a.total == 70
    assert np.array_equal(one.score_hits, two.score_hits)
    motif = int(np.argmax(one.observed[:, 0]))
    assert one.moran_p(motif) == pytest.approx((1 + one.score_hits[motif]) / 71)
    assert -1 < one.moran_mean(motif) < 1


def test_holders_everywhere_and_nowhere_never_move_and_are_counted():
    n = 12
    graph = as_contact_graph(n, [(i, i + 1) for i in range(n - 1)])
    rng = np.random.default_rng(0)
    sets = [np.arange(n), np.zeros(0, dtype=int)]
    sets += [rng.choice(n, 4, replace=False) for _ in range(10)]
    world = margins_world([View(np.arange(n), graph, None, range(12), sets)], n, draws=30, seed=1)
    assert world.mixing.frozen == 1  # the empty motif has nothing to move
    assert world.law(0, "joins").values.tolist() == [n - 1]
    assert float(p_many(world.law(0, "joins"), n - 1)) == 1.0


def test_p_values_are_valid_even_for_a_chain_that_hardly_moves():
    # Besag & Clifford 1989: whatever the number of sweeps. The catalogue is drawn from the world
    # itself (by a long run), then tested with a single sweep from and to the hub.
    views = a_catalogue(7, n=20, motifs=12, surveys=1)
    table, allowed, _ = _table(views, 20)
    low, high, trials = 0, 0, 300
    for t in range(trials):
        now = (table[0], table[1].copy(), table[2])
        _run(now, allowed, chunk_words(99, Stream.MARGINS, t, draws=1)[0], 60)
        sets = [np.array(r) for r in rows_of(now)]
        v = views[0]
        drawn = View(v.traditions, v.graph, v.family_codes, v.motifs, sets)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", TwicetoldWarning)
            world = margins_world([drawn], 20, draws=19, seed=t, sweeps=1, pool=ThreadPool(1))
        best = int(np.argmax(np.diff(table[0])))
        p = float(p_many(world.law(best, "joins"), int(world.observed[best, 0])))
        low += p <= 0.1
        high += p <= 0.5
    for count, level in ((low, 0.1), (high, 0.5)):
        assert count / trials <= level + 4 * np.sqrt(level * (1 - level) / trials)


def test_slow_mixing_is_said():
    views = a_catalogue(8, n=200, motifs=200, surveys=1)
    with pytest.warns(TwicetoldWarning, match="Give more sweeps"):
        short = margins_world(views, 200, draws=5, seed=1, sweeps=3)
    long = margins_world(views, 200, draws=5, seed=1)
    assert not short.mixing.mixed
    assert long.mixing.mixed
    assert long.mixing.overlap[0] == 1.0
    assert long.mixing.plateau < 0.2
    assert long.mixing.summary()["mixed"] is True


def test_nothing_to_draw_is_refused():
    views = a_catalogue(1)
    with pytest.raises(TwicetoldError, match="at least one record"):
        margins_world(views, 30, draws=0, seed=1)
    with pytest.raises(TwicetoldError, match="must be one of joins"):
        margins_world(views, 30, draws=1, seed=1, sweeps=40).law(0, "loops")
