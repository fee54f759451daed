"""Motifs on the same traditions: the law by enumeration, against fixed margins, and its level."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
import scipy.sparse as sp
from scipy import stats

from made_up import catalogue_of
from twicetold.evidence import _pairs_kernels as kernels
from twicetold.evidence import _pairs_plain as plain
from twicetold.evidence.pairs import companions, tradition_odds
from twicetold.randomness import Stream, chunk_words
from twicetold.references.margins import _run
from twicetold.workers import ThreadPool


def csr_rows(rows):
    indptr = np.concatenate([[0], np.cumsum([len(r) for r in rows])]).astype(np.int64)
    return indptr, np.concatenate([np.sort(np.asarray(r, np.int64)) for r in rows])


def laws(one, odds, rows, sets, others):
    out = tuple(np.zeros(len(others)) for _ in range(5))
    kernels.shared_laws(one, odds, csr_rows(rows), sets, np.asarray(others, np.int64), out)
    return out


def test_the_law_is_that_of_enumeration():
    rng = np.random.default_rng(1)
    n = 9
    odds = np.exp(rng.normal(0, 1.5, n))
    rows = [rng.choice(n, k, replace=False) for k in (4, 1, 2, 3, 4, 5, 6, 7, 8, 9)]
    sets = np.ones((2, n), dtype=bool)
    shared, held, expected, p, attainable = laws(0, odds, rows, sets, range(1, 10))
    for k in range(9):
        law = plain.shared_law(dict(enumerate(odds)), rows[0], len(rows[k + 1]))
        seen = len(set(rows[0]) & set(rows[k + 1]))
        assert (shared[k], held[k]) == (seen, k + 1)
        assert expected[k] == pytest.approx(sum(s * w for s, w in law.items()))
        assert p[k] == pytest.approx(sum(w for s, w in law.items() if s >= seen))
        assert attainable[k] == pytest.approx(law[max(law)])


def test_two_surveys_meet_where_both_searched():
    rng = np.random.default_rng(2)
    odds = np.exp(rng.normal(size=10))
    sets = np.ones((2, 10), dtype=bool)
    sets[0, [0, 1]] = False
    sets[1, 9] = False
    rows = [[2, 3, 4, 9], [0, 1, 2, 3, 5]]
    shared, held, expected, p, _ = laws(0, odds, rows, sets, [1])
    law = plain.shared_law({i: odds[i] for i in range(2, 9)}, [2, 3, 4], 3)
    assert (shared[0], held[0]) == (2, 3)
    assert expected[0] == pytest.approx(sum(s * w for s, w in law.items()))
    assert p[0] == pytest.approx(law[2] + law[3])


def test_never_and_always_holding_traditions():
    odds = np.array([0.0, 0.0, np.inf, 1.0, 2.0, 0.5, 1.0])
    rows = [[2, 3, 4], [2, 3, 5]]
    _, _, expected, p, _ = laws(0, odds, rows, np.ones((2, 7), bool), [1])
    law = plain.shared_law({3: 1.0, 4: 2.0, 5: 0.5, 6: 1.0}, [3, 4], 2)
    assert expected[0] == pytest.approx(1 + sum(s * w for s, w in law.items()))
    assert p[0] == pytest.approx(law[1] + law[2])


def test_equal_odds_give_the_hypergeometric_law():
    n, m, k = 3000, 120, 400
    rng = np.random.default_rng(3)
    rows = [rng.choice(n, m, replace=False), rng.choice(n, k, replace=False)]
    shared, _, expected, p, attainable = laws(0, np.ones(n), rows, np.ones((2, n), bool), [1])
    law = stats.hypergeom(n, m, k)
    assert expected[0] == pytest.approx(m * k / n)
    assert p[0] == pytest.approx(law.sf(shared[0] - 1), rel=1e-9)
    assert attainable[0] == pytest.approx(law.pmf(m), rel=1e-6, abs=1e-300)


def test_fitted_chances_have_the_totals_observed():
    rng = np.random.default_rng(4)
    searched = np.array([[True] * 40, [k % 3 > 0 for k in range(40)]])
    set_of = rng.integers(0, 2, 200)
    chance = 1 / (1 + np.exp(-(rng.normal(-2, 1, 200)[:, None] + rng.normal(0, 1, 40))))
    held = (rng.random((200, 40)) < chance) & searched[set_of]
    odds = tradition_odds(sp.csr_array(held), searched, set_of)
    assert np.all(odds > 0)
    # Each motif's own constant by root finding; then rows must come out too.
    from scipy.optimize import brentq

    rows = np.zeros(40)
    for k in range(200):
        cells = searched[set_of[k]]
        total = held[k].sum()
        if total in (0, cells.sum()):
            rows += held[k]
            continue
        fitted = lambda b, cells=cells: cells / (1 + np.exp(-b) / odds)  # noqa: E731
        b = brentq(lambda b, total=total, fitted=fitted: fitted(b).sum() - total, -40, 40)
        rows += fitted(b)
    assert rows == pytest.approx(held.sum(axis=0), abs=1e-3)


def test_totals_of_nothing_and_everything():
    held = sp.csr_array(np.array([[1, 0, 1, 0], [1, 0, 0, 1], [1, 0, 1, 1]], dtype=bool))
    odds = tradition_odds(held, np.ones((1, 4), bool), np.zeros(3, int))
    assert odds[0] == np.inf
    assert odds[1] == 0
    assert np.all(np.isfinite(odds[2:]) & (odds[2:] > 0))


def test_it_agrees_with_tables_of_fixed_margins():
    # A world of trades keeps both margins exactly; the law here keeps one and fits the other.
    rng = np.random.default_rng(5)
    n, m = 60, 150
    w = np.exp(rng.normal(0, 0.9, n))
    rows = [
        np.sort(np.argsort(rng.exponential(size=n) / w)[: rng.integers(4, 25)]) for _ in range(m)
    ]
    indptr, start = csr_rows(rows)
    allowed, set_of = np.ones((1, n), bool), np.zeros(m, np.int64)
    draws, pairs = 2000, [(0, 1), (2, 3), (4, 5), (6, 7), (8, 9), (10, 11)]
    seen = np.zeros((draws, len(pairs)), dtype=int)
    now = start.copy()
    for d, word in enumerate(chunk_words(1, Stream.MARGINS, draws=draws)):
        _run((indptr, now, set_of), allowed, word, 4)
        sets = [set(now[indptr[k] : indptr[k + 1]].tolist()) for k in range(12)]
        seen[d] = [len(sets[a] & sets[b]) for a, b in pairs]
    odds = tradition_odds(
        sp.csr_array((np.ones(len(start), bool), start, indptr), shape=(m, n)), allowed, set_of
    )
    for j, (a, b) in enumerate(pairs):
        # Mean of the law over the first motif's places, which the trades move too.
        chance = {
            k: np.mean(seen[:, j] >= k) for k in range(1, 1 + min(len(rows[a]), len(rows[b])))
        }
        fitted = _law_over_places(odds, len(rows[a]), len(rows[b]), rng)
        for k, share in chance.items():
            error = 4 * math.sqrt(share * (1 - share) / draws + 0.25 / 4000) + 0.02
            assert abs(share - fitted[k:].sum()) < error


def _law_over_places(odds, held_a, held_b, rng, draws=4000):
    """Two sets drawn in proportion to the product of their odds, by rejection of tosses."""
    from scipy.optimize import brentq

    out = np.zeros(min(held_a, held_b) + 1)
    sets = []
    for size in (held_a, held_b):
        t = np.exp(brentq(lambda b, s=size: (1 / (1 + np.exp(-b) / odds)).sum() - s, -30, 30))
        chance = t * odds / (1 + t * odds)
        found = []
        while len(found) < draws:
            tosses = rng.random((20_000, len(odds))) < chance
            found += list(tosses[tosses.sum(axis=1) == size])
        sets.append(np.array(found[:draws]))
    for k, n in zip(*np.unique((sets[0] & sets[1]).sum(axis=1), return_counts=True), strict=True):
        out[k] = n / draws
    return out


def made_up(seed, motifs=120, n=80, together=False):
    rng = np.random.default_rng(seed)
    w = np.exp(rng.normal(0, 1, n))
    rows = [np.argsort(rng.exponential(size=n) / w)[: rng.integers(3, 30)] for _ in range(motifs)]
    if together:
        rows[1] = np.union1d(rows[0], rows[1][:2])
    return catalogue_of(rows, n)


def test_nothing_is_found_where_motifs_ignore_each_other():
    tested = below = families = wrong = 0
    for seed in range(5):
        catalogue = made_up(seed)
        rows = csr_rows([catalogue.holders(m) for m in range(120)])
        odds = tradition_odds(
            catalogue.attested, np.array(catalogue.surveyed_sets), catalogue.surveyed_of
        )
        for one in range(0, 120, 4):
            others = np.array([k for k in range(120) if k != one])
            out = tuple(np.zeros(119) for _ in range(5))
            kernels.shared_laws(one, odds, rows, np.ones((2, 80), bool), others, out)
            tested += 119
            below += int((out[3] <= 0.05).sum())
        found = companions(catalogue, range(120), alpha=0.05, pool=ThreadPool(2))
        families += 120
        wrong += sum(len(t) > 0 for t in found.by_motif.values())
    assert below / tested < 0.05
    # Families of one catalogue hang together, so the bound is a loose one.
    assert wrong / families < 0.08


def test_a_package_of_motifs_is_found_and_a_motif_alone_finds_the_same():
    catalogue = made_up(11, together=True)
    pool = ThreadPool(2)
    batch = companions(catalogue, range(120), alpha=0.05, pool=pool).by_motif
    top = batch[0].iloc[0]
    assert top["motif_id"] == "M001"
    assert top["shared"] == len(catalogue.holders(0))
    assert top["q"] <= 0.05
    assert top["shared"] > 2 * top["expected"]
    assert (batch[0]["p"].diff().dropna() >= 0).all()
    alone = companions(catalogue, [0], alpha=0.05, pool=ThreadPool(1)).by_motif
    assert alone[0].equals(batch[0])


def test_every_pair_is_seen_from_both_sides():
    catalogue = made_up(3, motifs=30, n=25)
    rows = [set(catalogue.holders(m).tolist()) for m in range(30)]
    odds = tradition_odds(
        catalogue.attested, np.array(catalogue.surveyed_sets), catalogue.surveyed_of
    )
    for a, b in itertools.combinations(range(6), 2):
        one, other = (
            laws(x, odds, [sorted(r) for r in rows], np.ones((2, 25), bool), [y])
            for x, y in ((a, b), (b, a))
        )
        assert one[0][0] == other[0][0] == len(rows[a] & rows[b])
