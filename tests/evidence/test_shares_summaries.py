"""Summaries of a holder set: the kernel and its readable twin say the same."""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.evidence.shares import landscape as landscape_module
from twicetold.evidence.shares._kernels import SUMMARIES, unpack_bits
from twicetold.evidence.shares._plain import hops_from, summary_plain
from twicetold.evidence.shares.features import features, fit_scale, holder_knots
from twicetold.evidence.shares.landscape import landscape
from zoo import as_contact_graph, small_graphs


def grid_graph(rows, columns):
    at = [(r, c) for r in range(rows) for c in range(columns)]
    edges = [(r * columns + c, r * columns + c + 1) for r, c in at if c + 1 < columns]
    edges += [(r * columns + c, (r + 1) * columns + c) for r, c in at if r + 1 < rows]
    return rows * columns, edges


ZOO = {
    **small_graphs(),
    "grid7x9": grid_graph(7, 9),
    "path30": (30, [(i, i + 1) for i in range(29)]),
}


def world(name, families, rng):
    n, edges = ZOO[name]
    graph = as_contact_graph(n, edges)
    family = np.unique(rng.integers(0, families, n), return_inverse=True)[1].astype(np.int32)
    propensity = rng.lognormal(size=n)
    return graph, family, propensity


@pytest.mark.parametrize("families", [1, 3, 1000])
@pytest.mark.parametrize("name", ZOO)
def test_parity(name, families):
    rng = np.random.default_rng(len(name) + families)
    graph, family, propensity = world(name, families, rng)
    place = landscape(graph, family, propensity)
    sets = [
        np.sort(rng.choice(graph.n, size, replace=False)).astype(np.int32)
        for size in rng.integers(1, graph.n + 1, 12)
    ]
    start = np.concatenate([[0], np.cumsum([len(s) for s in sets])]).astype(np.int64)
    rows = place.summaries(np.concatenate(sets), start)
    for held, row in zip(sets, rows, strict=True):
        expected = summary_plain(graph, family, place.propensity, held.tolist())
        got = dict(zip(SUMMARIES, row.tolist(), strict=True))
        assert got == pytest.approx(expected, rel=1e-12, abs=1e-9)
        alone = place.summaries(held, np.array([0, len(held)]))
        np.testing.assert_array_equal(alone[0], row)


def test_dense_graphs_are_looked_at_over_fewer_hops(monkeypatch):
    monkeypatch.setattr(landscape_module, "CROWD", 20)
    rng = np.random.default_rng(5)
    graph, family, propensity = world("grid7x9", 5, rng)
    place = landscape(graph, family, propensity)
    reach = int(place.ball_hop.max())
    assert reach < 4
    held = np.sort(rng.choice(graph.n, 25, replace=False)).astype(np.int32)
    row = place.summaries(held, np.array([0, 25]))[0]
    expected = summary_plain(graph, family, place.propensity, held.tolist(), reach=reach)
    assert dict(zip(SUMMARIES, row.tolist(), strict=True)) == pytest.approx(expected, rel=1e-12)


def test_balls_hold_everyone_within_reach_nearest_first():
    graph, family, _ = world("grid7x9", 5, np.random.default_rng(1))
    place = landscape(graph, family)
    for i in range(graph.n):
        part = slice(place.ball_start[i], place.ball_start[i + 1])
        hops = {j: h for j, h in hops_from(graph, i).items() if 1 <= h <= 4}
        found = dict(
            zip(place.ball_index[part].tolist(), place.ball_hop[part].tolist(), strict=True)
        )
        assert found == hops
        assert np.all(np.diff(place.ball_hop[part]) >= 0)


def test_relabelling_changes_nothing():
    rng = np.random.default_rng(8)
    graph, family, propensity = world("grid7x9", 6, rng)
    held = np.sort(rng.choice(graph.n, 20, replace=False)).astype(np.int32)
    row = landscape(graph, family, propensity).summaries(held, np.array([0, 20]))[0]
    new = rng.permutation(graph.n)
    moved = as_contact_graph(graph.n, [(new[i], new[j]) for i, j in graph.edges])
    other_family, other_propensity = np.empty_like(family), np.empty_like(propensity)
    other_family[new], other_propensity[new] = (family + 1) % (family.max() + 1), propensity
    place = landscape(moved, other_family, other_propensity)
    again = place.summaries(np.sort(new[held]).astype(np.int32), np.array([0, 20]))[0]
    np.testing.assert_allclose(again, row, rtol=1e-10, atol=1e-10)


def test_bits_unpack_in_order():
    rng = np.random.default_rng(3)
    sets = [np.sort(rng.choice(150, k, replace=False)) for k in (1, 64, 0, 150)]
    bits = np.zeros((4, 3), dtype=np.uint64)
    for k, held in enumerate(sets):
        for i in held:
            bits[k, i >> 6] |= np.uint64(1) << np.uint64(i & 63)
    sizes = np.array([len(s) for s in sets])
    members = np.empty(sizes.sum(), dtype=np.int32)
    unpack_bits(bits, sizes, members)
    np.testing.assert_array_equal(members, np.concatenate(sets))


def test_scale_centres_at_every_number_of_holders():
    rng = np.random.default_rng(4)
    holders = rng.integers(2, 101, 40_000)
    values = np.stack(
        [np.log(holders) * 3 + rng.normal(size=40_000) * np.sqrt(holders), np.ones(40_000)], axis=1
    )
    scale = fit_scale(values, holders, np.ones(40_000), holder_knots(2, 100))
    out = scale.apply(values, holders)
    for low, high in ((2, 4), (10, 14), (50, 70), (90, 101)):
        part = out[(holders >= low) & (holders < high)]
        assert abs(part[:, 0].mean()) < 0.1
        assert part[:, 0].std() == pytest.approx(1.0, abs=0.12)
    assert np.all(out[:, 1] == 0.0)  # a constant says nothing
    assert len({*out[:, 2].tolist()}) == 99  # the number of holders itself


def test_features_are_finite_for_every_set():
    rng = np.random.default_rng(6)
    graph, family, propensity = world("grid7x9", 6, rng)
    place = landscape(graph, family, propensity)
    sizes = np.arange(1, graph.n + 1)
    sets = [np.sort(rng.choice(graph.n, k, replace=False)) for k in sizes]
    start = np.concatenate([[0], np.cumsum(sizes)])
    rows = place.summaries(np.concatenate(sets).astype(np.int32), start)
    assert np.isfinite(features(rows, sizes)).all()
