"""The hidden-propensity bound: parity, fields, what the bound means, and what it says."""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.errors import TwicetoldError
from twicetold.evidence import _hidden_kernels as kernels
from twicetold.evidence import _hidden_plain as plain
from twicetold.evidence import hidden, smooth
from twicetold.evidence.hidden import (
    Search,
    hidden_bounds,
    hidden_sensitivity,
    hidden_sentence,
)
from twicetold.evidence.smooth import family_extent_km, smooth_field
from twicetold.graph import build_graph, great_circle_km
from twicetold.randomness import Stream, chunk_words
from twicetold.references.emergence import emergence_world
from twicetold.workers import ThreadPool
from zoo import as_contact_graph


@pytest.fixture(scope="module")
def globe():
    rng = np.random.default_rng(3)
    xyz = rng.normal(size=(150, 3))
    xyz /= np.linalg.norm(xyz, axis=1)[:, None]
    lat, lon = np.degrees(np.arcsin(xyz[:, 2])), np.degrees(np.arctan2(xyz[:, 1], xyz[:, 0]))
    return lat, lon, build_graph(lat, lon, "nearest:5"), np.exp(rng.normal(0, 0.5, 150))


def test_kernel_equals_its_readable_twin():
    rng = np.random.default_rng(0)
    n, size, sigmas = 25, 12, np.array([0.0, 0.7, 3.0])
    pairs = {tuple(sorted(rng.choice(n, 2, replace=False).tolist())) for _ in range(60)}
    graph = as_contact_graph(n, pairs)
    log_rate, fields = rng.normal(size=n), rng.normal(size=(size, n))
    words = chunk_words(4, Stream.HIDDEN, draws=size)
    wanted = {3: [0, 1, 2], 7: [4], 25: [graph.n_edges - 1, graph.n_edges, graph.n_edges + 1]}
    first, joins = [0], []
    for k in range(n + 1):
        joins += wanted.get(k, [])
        first.append(len(joins))
    tails = np.zeros((3, len(joins)), dtype=np.int64)
    kernels.count_tails(
        words, log_rate, fields, sigmas,
        (graph.indptr.astype(np.int64), graph.indices.astype(np.int64)),
        (np.array(first), np.array(joins)), tails,
    )  # fmt: skip
    again = np.zeros_like(tails)
    for d in range(size):
        for s, sigma in enumerate(sigmas):
            by = plain.joins_by_holders(
                words[d], log_rate, fields[d], float(sigma), graph.edges.tolist()
            )
            t = 0
            for k in sorted(wanted):
                for threshold in wanted[k]:
                    again[s, t] += by[k] >= threshold
                    t += 1
    assert np.array_equal(tails, again)


@pytest.mark.parametrize("length", [500.0, 2500.0])
def test_fields_have_the_covariance_stated(globe, length, monkeypatch):
    lat, lon, _, _ = globe
    km = great_circle_km(lat[:, None], lon[:, None], lat, lon)
    chord = 2 * 6371.0088 * np.sin(km / 6371.0088 / 2)
    stated = np.exp(-((chord / length) ** 2))
    field = smooth_field(lat, lon, length)
    assert np.allclose(field.factor @ field.factor.T, stated, atol=2e-4)
    monkeypatch.setattr(smooth, "DENSE", 10)
    thin = smooth_field(lat, lon, length)
    assert np.allclose(thin.factor @ thin.factor.T, stated, atol=2e-4)
    monkeypatch.setattr(smooth, "MOST_COLUMNS", 20)
    coarse = smooth_field(lat, lon, 500.0)
    total = coarse.factor @ coarse.factor.T + np.diag(coarse.noise**2)
    assert np.diag(total) == pytest.approx(np.ones(150))
    z = field.draw(1, 0, 64)
    assert np.allclose(z.mean(axis=1), 0)
    assert np.allclose(z.std(axis=1), 1)


def test_traditions_at_one_place_share_the_field(globe):
    lat, lon = np.array([10.0, 10.0, -40.0]), np.array([179.9, 179.9, 5.0])
    z = smooth_field(lat, lon, 800.0).draw(1, 0, 32)
    assert np.allclose(z[:, 0], z[:, 1], atol=0.05)


def test_at_zero_strength_the_tail_is_that_of_emergence_alone(globe):
    lat, lon, graph, rate = globe
    world = emergence_world(graph, None, rate, [20], draws=20_000, seed=9)
    law = world.law("joins", 20)
    joins = law.quantile(0.95)
    search = Search(draws=6000, seed=2)
    setting = hidden._Setting(
        search, smooth_field(lat, lon, 1000.0), np.log(rate),
        (graph.indptr.astype(np.int64), graph.indices.astype(np.int64)),
        (np.searchsorted([20], np.arange(152)).astype(np.int64), np.array([joins])),
    )  # fmt: skip
    tails = hidden._Tails(setting, ThreadPool(2))
    tails.at([0])
    p = law.at_least(joins) / law.total
    mine = int(tails.known[0][0]) / search.draws
    assert abs(mine - p) < 4 * np.sqrt(p * (1 - p) * (1 / 6000 + 1 / 20_000))


def test_at_the_bound_the_joins_come_five_times_in_a_hundred(globe):
    # Independent of the kernel: fields by numpy's own multivariate normal, orders by sorting.
    lat, lon, graph, rate = globe
    holders, joins, length = 25, 26, 1500.0
    bound = hidden_bounds(
        graph, smooth_field(lat, lon, length), rate, [holders], [joins],
        search=Search(draws=4000, seed=5),
    )  # fmt: skip
    sigma = float(bound.log_sd[0])
    assert 0.2 < sigma < 4
    assert bound.low[0] <= sigma <= bound.high[0]
    km = great_circle_km(lat[:, None], lon[:, None], lat, lon)
    chord = 2 * 6371.0088 * np.sin(km / 6371.0088 / 2)
    root = np.linalg.cholesky(np.exp(-((chord / length) ** 2)) + 1e-6 * np.eye(150))
    rng = np.random.default_rng(77)
    draws, hits = 4000, 0
    for _ in range(draws):
        z = root @ rng.standard_normal(150)
        z = (z - z.mean()) / z.std()
        rings = rng.exponential(size=150) / (rate * np.exp(sigma * z))
        held = np.zeros(150, dtype=bool)
        held[np.argsort(rings)[:holders]] = True
        hits += (held[graph.edges[:, 0]] & held[graph.edges[:, 1]]).sum() >= joins
    # Both sides are drawn: the bound's own error counts too.
    assert abs(hits / draws - 0.05) < 4 * np.sqrt(2 * 0.05 * 0.95 / draws)


def test_more_joins_need_a_stronger_environment_and_a_batch_changes_nothing(globe):
    lat, lon, graph, rate = globe
    field = smooth_field(lat, lon, 1500.0)
    search = Search(draws=400, seed=1)
    holders = np.array([1, 12, 20, 20, 20, 20, 20, 60])
    joins = np.array([0, 8, 3, 15, 18, 20, 45, 75])
    batch = hidden_bounds(graph, field, rate, holders, joins, search=search, pool=ThreadPool(2))
    assert batch.log_sd[0] == 0  # one holder has no joins to explain
    assert batch.log_sd[2] == 0
    assert np.all(np.diff(batch.log_sd[2:6]) > 0)
    assert np.isinf(batch.log_sd[6])
    finite = np.isfinite(batch.log_sd)
    assert np.all(batch.low[finite] <= batch.log_sd[finite])
    assert np.all(batch.high >= batch.log_sd)
    assert np.all(batch.ratio >= 1)
    for k in (1, 4, 7):
        alone = hidden_bounds(
            graph, field, rate, holders[k : k + 1], joins[k : k + 1], search=search,
            pool=ThreadPool(1),
        )  # fmt: skip
        assert alone.of(0) == batch.of(k)


def test_sensitivity_names_every_length(globe):
    lat, lon, graph, rate = globe
    fields = [smooth_field(lat, lon, km) for km in (500.0, 2000.0)]
    table = hidden_sensitivity(graph, fields, rate, [20], [14], search=Search(draws=200))
    assert table["length_km"].tolist() == [500.0, 2000.0]
    assert list(table.columns) == [
        "motif",
        "log_sd",
        "ratio",
        "log_sd_low",
        "log_sd_high",
        "length_km",
    ]


def test_extent_of_families():
    lat, lon = np.array([0.0, 0.0, 0.0, 10.0, 50.0]), np.array([0.0, 1.0, 3.0, 20.0, 20.0])
    # Greatest distances: 3 degrees, 40 degrees; the lone tradition and shared places do not count.
    assert family_extent_km(lat, lon, [0, 0, 0, 1, 1]) == pytest.approx(
        (3 + 40) / 2 * 111.19508, rel=1e-6
    )
    assert family_extent_km(lat, lon, [0, 1, 2, 3, 4]) == smooth.DEFAULT_KM


def test_sentences_say_the_number_and_the_unknown():
    bound = {
        "log_sd": 0.83, "ratio": 4.21, "log_sd_low": 0.7, "log_sd_high": 0.96, "length_km": 1234.0,
    }  # fmt: skip
    said = hidden_sentence(bound)
    assert "1,200 km" in said
    assert "4.2 times" in said
    assert "0.70 to 0.96" in said
    assert "5 % of the time" in said
    assert "about 490 times" in hidden_sentence({**bound, "ratio": 487.3})
    assert "more than 4" in hidden_sentence({**bound, "log_sd_high": np.inf})
    assert hidden_sentence({**bound, "log_sd": 0.0}).startswith("No hidden environment is needed")
    assert hidden_sentence({**bound, "log_sd": np.inf}).startswith("No smooth unmeasured")


def test_what_cannot_be_used_is_refused(globe):
    lat, lon, graph, rate = globe
    with pytest.raises(TwicetoldError, match="above 0, got 0"):
        smooth_field(lat, lon, 0)
    with pytest.raises(TwicetoldError, match="two places"):
        smooth_field(np.zeros(4), np.ones(4), 100.0)
    field = smooth_field(lat, lon, 1000.0)
    with pytest.raises(TwicetoldError, match="150 finite numbers"):
        hidden_bounds(graph, field, 0 * rate, [3], [1])
    with pytest.raises(TwicetoldError, match="Holders must be"):
        hidden_bounds(graph, field, rate, [151], [1])
