"""The spread kernel and its readable twin: identical output from the same random numbers."""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.randomness import Stream, chunk_words
from twicetold.spread import SpreadError, SpreadModel, cap_for, chain_tables, walk_chunk
from twicetold.spread._plain import summary_plain, walk_plain
from zoo import as_contact_graph, small_graphs

SETTINGS = {
    "contact": ((0.0, 1.0, 0.0), 1.0, False),
    "emergence": ((1.0, 0.0, 0.0), 1.0, False),
    "inheritance": ((0.0, 0.0, 1.0), 1.0, True),
    "mixture": ((0.2, 0.5, 0.3), 2.0, True),
    "transmission": ((0.0, 0.5, 0.5), 1.0, True),
}


def model_of(name, setting, **more):
    n, edges = small_graphs()[name]
    shares, reach, recording = SETTINGS[setting]
    return SpreadModel(
        as_contact_graph(n, edges),
        0.9,
        shares,
        family=np.arange(n) % 3,
        propensity=np.linspace(0, 2, n),
        reach=reach,
        recorded=np.linspace(0.2, 1, n) if recording else None,
        spill="transmission" if setting == "transmission" else "emergence",
        **more,
    )


@pytest.mark.parametrize("setting", SETTINGS)
@pytest.mark.parametrize("name", small_graphs())
def test_parity(name, setting):
    model = model_of(name, setting)
    tables = chain_tables(model, max(1, model.graph.n - 1))
    words = chunk_words(5, Stream.SPREAD, 0, draws=20)
    counts = np.arange(1, model.graph.n + 1, dtype=np.int32)
    fast, plain = walk_chunk(tables, words, counts), walk_plain(tables, words, counts)
    for field in ("bits", "weight", "gains", "visits"):
        np.testing.assert_array_equal(getattr(fast, field), getattr(plain, field), err_msg=field)
    near = [
        model.graph.indices[a:b].tolist()
        for a, b in zip(model.graph.indptr[:-1], model.graph.indptr[1:], strict=True)
    ]
    summaries = fast.summaries(tables)
    for w, k in zip(*np.nonzero(fast.weight), strict=True):
        held = set(fast.holders(w, k).tolist())
        expected = summary_plain(held, near, tables.family.tolist())
        assert tuple(summaries[w, k]) == expected


def test_counts_asked_for_change_nothing():
    tables = chain_tables(model_of("grid3", "mixture"), 8)
    words = chunk_words(5, Stream.SPREAD, 0, draws=30)
    every = walk_chunk(tables, words, np.arange(1, 10, dtype=np.int32))
    one = walk_chunk(tables, words, np.array([4], dtype=np.int32))
    np.testing.assert_array_equal(every.bits[:, [3]], one.bits)
    np.testing.assert_array_equal(every.weight[:, [3]], one.weight)


def test_walks_are_their_own():
    tables = chain_tables(model_of("grid3", "mixture"), 8)
    words = chunk_words(5, Stream.SPREAD, 0, draws=30)
    counts = np.arange(1, 10, dtype=np.int32)
    every, later = walk_chunk(tables, words, counts), walk_chunk(tables, words[20:], counts)
    np.testing.assert_array_equal(every.bits[20:], later.bits)
    np.testing.assert_array_equal(every.gains[20:], later.gains)


def test_realised_routes():
    # Pure contact on a graph with a full component must sometimes emerge; inheritance likewise.
    got = walk_chunk(
        chain_tables(model_of("two_triangles", "contact"), 5),
        chunk_words(1, Stream.SPREAD, 0, draws=200),
        np.array([2, 5], dtype=np.int32),
    )
    assert np.all(got.gains[:, :, 2] == 0)
    assert got.gains[:, 1, 0].sum() > 0
    # Ups less downs is the count reached, and downs from the full graph are among the downs.
    assert np.all(got.gains.sum(axis=2)[got.weight > 0] >= 1)


def test_cap_from_the_catalogue():
    model = model_of("grid3", "contact")
    assert cap_for(model, 7) == 7
    thin = model_of("grid3", "mixture")
    r = float(np.mean(thin.recorded))
    assert cap_for(thin, 4) == int(np.ceil(4 / (1 - 0.9 * (1 - r))))
    assert cap_for(thin, 9) == 9
    with pytest.raises(SpreadError, match="largest count"):
        cap_for(model, 10)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"turnover": 0.0}, "turnover"),
        ({"turnover": 1.5}, "turnover"),
        ({"shares": (0.5, 0.6, 0.0)}, "sum to 1"),
        ({"shares": (-0.5, 1.5, 0.0)}, "shares"),
        ({"reach": 0.5}, "reach"),
        ({"spill": "nowhere"}, "spill"),
        ({"recorded": np.full(5, 1.2)}, "recorded"),
        ({"propensity": np.zeros(5)}, "propensity"),
        ({"propensity": np.ones(4)}, "propensity"),
        ({"family": np.zeros(3, dtype=np.int32)}, "family"),
    ],
)
def test_bad_models_are_refused(change, words):
    n, edges = small_graphs()["path5"]
    settings = {"graph": as_contact_graph(n, edges), "turnover": 0.9} | change
    with pytest.raises(SpreadError, match=words):
        SpreadModel(**settings)


def test_bad_cap_is_refused():
    with pytest.raises(SpreadError, match="cap"):
        chain_tables(model_of("path5", "contact"), 6)
