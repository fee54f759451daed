"""The emergence-only world: same numbers alone and in a batch, clear refusals, size of the test."""

import numpy as np
import pytest
from scipy import stats

from twicetold.errors import TwicetoldError
from twicetold.randomness import Stream
from twicetold.references.emergence import (
    effort_propensity,
    emergence_holders,
    emergence_tails_single,
    emergence_world,
    equal_propensity,
)
from twicetold.references.pvalue import p_many
from twicetold.statistics import STATISTICS, observe
from twicetold.workers import ThreadPool
from zoo import as_contact_graph


def ring_lattice(n, reach=3):
    return as_contact_graph(
        n, [tuple(sorted((i, (i + k) % n))) for i in range(n) for k in range(1, reach + 1)]
    )


GRAPH = ring_lattice(60)
FAMILY = np.arange(60) // 5
EFFORT = np.exp(np.sin(np.arange(60)) * 2)


def same(a, b, counts):
    for n in counts:
        for statistic in STATISTICS:
            one, two = a.law(statistic, n), b.law(statistic, n)
            assert one.values.tolist() == two.values.tolist()
            assert one.weights.tolist() == two.weights.tolist()
        np.testing.assert_equal(a.moran_mean(n), b.moran_mean(n))


def test_alone_equals_batch_whatever_the_workers():
    counts, thresholds = [5, 9, 40, 60], {9: [-30, 0, 12], 40: [5]}
    kw = {"draws": 2300, "seed": 11}  # three chunks, the last one short
    batch = emergence_world(
        GRAPH, FAMILY, EFFORT, counts, pool=ThreadPool(2), moran_thresholds=thresholds, **kw
    )
    serial = emergence_world(
        GRAPH, FAMILY, EFFORT, counts, pool=ThreadPool(1), moran_thresholds=thresholds, **kw
    )
    same(batch, serial, counts)
    alone = emergence_world(GRAPH, FAMILY, EFFORT, [9], moran_thresholds={9: [12]}, **kw)
    same(batch, alone, [9])
    assert batch.moran_tail(9, 12) == alone.moran_tail(9, 12) == serial.moran_tail(9, 12)
    single = emergence_tails_single(
        GRAPH, FAMILY, EFFORT, {"holders": 9, "joins": 10, "moran_score": 12}, **kw
    )
    assert single["joins"] == p_many(batch.law("joins", 9), 10)
    assert single["moran_score"] == batch.moran_p(9, 12)


def test_more_draws_begin_with_the_fewer_and_seeds_and_streams_differ():
    weights = effort_propensity(EFFORT)
    kw = {"seed": 2, "stream": Stream.ENVELOPE}
    few = emergence_holders(weights, 8, draws=1500, **kw)
    many = emergence_holders(weights, 12, draws=2500, **kw)
    assert (many[:1500, :8] == few).all()
    other = emergence_holders(weights, 8, draws=1500, seed=3, stream=Stream.ENVELOPE)
    third = emergence_holders(weights, 8, draws=1500, seed=2, stream=Stream.POWER)
    assert not (few == other).all(axis=1).any()
    assert not (few == third).all(axis=1).any()


def test_a_motifs_own_draws_are_those_of_the_law():
    # Holders drawn by themselves on the world's stream give exactly the world's law.
    held = emergence_holders(EFFORT, 9, draws=1200, seed=7, stream=Stream.EMERGENCE)
    world = emergence_world(GRAPH, FAMILY, EFFORT, [9], draws=1200, seed=7)
    seen = observe(GRAPH, list(held), FAMILY)
    for statistic in STATISTICS:
        law = world.law(statistic, 9)
        values, counts = np.unique(seen.of(statistic), return_counts=True)
        assert law.values.tolist() == values.tolist()
        assert law.weights.tolist() == counts.tolist()
    assert world.moran_mean(9) == pytest.approx(seen.moran.mean(), abs=1e-12)


def test_inclusion_follows_the_clocks():
    # First to ring: chance lambda_i / sum; an outside check of the alias draw with many items.
    held = emergence_holders(EFFORT, 1, draws=30_000, seed=5, stream=Stream.ENVELOPE)[:, 0]
    expected = 30_000 * EFFORT / EFFORT.sum()
    chi2 = ((np.bincount(held, minlength=60) - expected) ** 2 / expected).sum()
    assert stats.chi2.sf(chi2, 59) > 1e-4


def test_a_late_prefix_follows_exponential_clocks():
    # 30 of 60 with steep propensities (tables remade): joins as from sorted exponential clocks.
    draws = 6000
    world = emergence_world(GRAPH, None, EFFORT**2, [30], draws=draws, seed=5)
    clocks = np.random.default_rng(8).exponential(size=(draws, 60)) / EFFORT**2
    held = np.argsort(clocks, axis=1)[:, :30]
    other = observe(GRAPH, list(held)).of("joins")
    law = world.law("joins", 30)
    error = np.sqrt((law.variance() + other.var()) / draws)
    assert abs(law.mean() - other.mean()) < 4 * error
    table = np.zeros((2, GRAPH.n_edges + 1))
    table[0, law.values] = law.weights
    np.add.at(table[1], other, 1)
    table = table[:, table.sum(axis=0) >= 20]
    assert stats.chi2_contingency(table).pvalue > 1e-4


def test_bulk_p_values_equal_one_by_one():
    thresholds = {5: [-10, 7], 9: [12]}
    world = emergence_world(
        GRAPH, FAMILY, EFFORT, [5, 9], draws=500, seed=1, moran_thresholds=thresholds
    )
    n, value = np.array([9, 5, 5]), np.array([10, 2, 0])
    got = world.p_values("joins", n, value)
    assert got.tolist() == [
        float(p_many(world.law("joins", int(a)), int(b))) for a, b in zip(n, value, strict=True)
    ]
    few = world.p_values("clusters", n, value, "few")
    assert np.all((few > 0) & (few <= 1))
    moran = world.p_values("moran_i", n, np.array([12, 7, -10]))
    assert moran.tolist() == [world.moran_p(9, 12), world.moran_p(5, 7), world.moran_p(5, -10)]


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"propensity": np.ones(59)}, "each of 60 traditions"),
        ({"propensity": np.append(np.ones(59), -1.0)}, ">= 0"),
        ({"propensity": np.append(np.ones(59), np.nan)}, "finite"),
        ({"propensity": np.zeros(60)}, "above 0 in at least one"),
        ({"propensity": np.append(np.ones(59), 1e-14)}, "factor of"),
        ({"propensity": np.append(np.ones(30), np.zeros(30)), "counts": [31]}, "from 1 to 30"),
        ({"counts": [61]}, "from 1 to 60"),
        ({"counts": [0, 5]}, "got 0"),
        ({"counts": []}, "at least one"),
        ({"draws": 0}, "from 1 up"),
    ],
)
def test_what_cannot_be_drawn_is_refused(change, words):
    given = {"propensity": np.ones(60), "counts": [5], "draws": 100} | change
    with pytest.raises(TwicetoldError, match=words):
        emergence_world(
            GRAPH, FAMILY, given["propensity"], given["counts"], draws=given["draws"], seed=1
        )


def test_what_was_not_drawn_is_refused():
    world = emergence_world(GRAPH, FAMILY, EFFORT, [9], draws=100, seed=1)
    with pytest.raises(TwicetoldError, match="not drawn for 8"):
        world.law("joins", 8)
    with pytest.raises(TwicetoldError, match="one of joins"):
        world.law("moran_i", 9)
    with pytest.raises(TwicetoldError, match="not given before drawing"):
        world.moran_tail(9, 3)


def test_propensities():
    assert equal_propensity(3).tolist() == [1.0, 1.0, 1.0]
    got = effort_propensity([1.0, 4.0, 16.0], 0.5)
    np.testing.assert_allclose(got / got[0], [1.0, 2.0, 4.0])
    assert effort_propensity([3.0, 5.0], 0.0).tolist() == [1.0, 1.0]
    with pytest.raises(TwicetoldError, match="above 0 per tradition; 1"):
        effort_propensity([1.0, 0.0])
    with pytest.raises(TwicetoldError, match="exponent"):
        effort_propensity([1.0, 2.0], float("inf"))


def size_study(n_places, holders, trials, draws, seed):
    """Share of motifs rejected at .05 with effort-driven records and no spread, by world.

    Returns the numbers rejected under equal and effort propensity, and the level the effort test
    can attain (the largest tail not above .05).
    """
    rng = np.random.default_rng(seed)
    xy = rng.random((n_places, 2))
    near = np.argsort(((xy[:, None] - xy) ** 2).sum(axis=2), axis=1)[:, 1:7]
    edges = {tuple(sorted((i, int(j)))) for i in range(n_places) for j in near[i]}
    graph = as_contact_graph(n_places, sorted(edges))
    effort = 10.0 ** xy[:, 0]  # a smooth tenfold gradient from west to east
    held = emergence_holders(effort, holders, draws=trials, seed=seed, stream=Stream.POWER)
    joins = observe(graph, list(held)).of("joins")
    rejected, level = {}, np.nan
    for name, weights in (("equal", equal_propensity(n_places)), ("effort", effort)):
        law = emergence_world(graph, None, weights, [holders], draws=draws, seed=seed).law(
            "joins", holders
        )
        rejected[name] = int((p_many(law, joins) <= 0.05).sum())
        tails = p_many(law, law.values)
        level = float(tails[tails <= 0.05].max())
    return rejected["equal"], rejected["effort"], level


def test_equal_propensity_over_rejects_where_effort_has_a_gradient():
    trials = 600
    equal, effort, level = size_study(120, 20, trials, 4999, seed=3)
    error = 4 * np.sqrt(trials * level * (1 - level))
    assert abs(effort - trials * level) < error
    assert effort <= stats.binom.ppf(0.9999, trials, 0.05)
    assert equal > trials * 0.05 + 4 * np.sqrt(trials * 0.05 * 0.95)


@pytest.mark.calibration
@pytest.mark.parametrize("holders", [5, 20, 60])
def test_size_over_many_worlds(holders):
    rejected = np.array([size_study(120, holders, 1000, 19_999, seed=s) for s in range(40)])
    equal, effort, level = rejected.mean(axis=0)
    error = 4 * np.sqrt(1000 * 0.05 * 0.95 / 40)
    assert abs(effort - 1000 * level) < error
    assert effort <= 50 + error
    assert equal > 50 + error
