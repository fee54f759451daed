from __future__ import annotations

import numpy as np
import pytest
from sphere_points import globe, invented_catalogue, pairs_of

from twicetold.errors import GraphError, TwicetoldWarning
from twicetold.graph import (
    build_graph,
    contact_graph,
    from_libpysal,
    read_neighbours,
    to_libpysal,
    write_gal,
)

LAT, LON = globe(40, 12)
IDS = tuple(f"t{i:02d}" for i in range(40))
GRAPH = build_graph(LAT, LON, "within:2500", bridges=False)


def test_the_graph_tried_has_isolates():
    assert (GRAPH.degree == 0).sum() > 0
    assert GRAPH.n_edges > 20


@pytest.mark.parametrize("ids", [None, IDS])
def test_there_and_back_through_libpysal(ids):
    back = from_libpysal(to_libpysal(GRAPH, ids), LAT, LON, rule=GRAPH.rule)
    assert back.edges.tolist() == GRAPH.edges.tolist()
    assert back.length_km.tolist() == GRAPH.length_km.tolist()
    assert not back.bridge.any()
    assert (back.n, back.rule) == (GRAPH.n, GRAPH.rule)


def test_libpysal_sees_the_same_graph():
    graph = to_libpysal(GRAPH, IDS)
    assert list(graph.unique_ids) == list(IDS)
    assert sorted(graph.isolates) == [IDS[i] for i in np.flatnonzero(GRAPH.degree == 0)]
    assert graph.cardinalities.tolist() == GRAPH.degree.tolist()
    assert len(graph.asymmetry()) == 0
    assert set(graph.adjacency.unique()) == {0, 1}


def test_libpysal_graphs_are_symmetrised_and_reordered():
    from libpysal.graph import Graph

    graph = Graph.from_dicts({"b": ["c"], "a": [], "c": []})
    assert pairs_of(from_libpysal(graph, [0, 1, 2], [0, 0, 0])) == {(0, 2)}
    assert pairs_of(from_libpysal(graph, [0, 1, 2], [0, 0, 0], ids=["a", "b", "c"])) == {(1, 2)}
    with pytest.raises(GraphError, match="must be the same ones"):
        from_libpysal(graph, [0, 1], [0, 0])
    with pytest.raises(GraphError, match="must be the same ones"):
        from_libpysal(graph, [0, 1, 2], [0, 0, 0], ids=["a", "b", "d"])


def test_there_and_back_through_a_file(tmp_path):
    write_gal(GRAPH, IDS, tmp_path / "near.gal")
    assert read_neighbours(tmp_path / "near.gal", IDS).tolist() == GRAPH.edges.tolist()
    assert [p.name for p in tmp_path.iterdir()] == ["near.gal"]
    shuffled = tuple(np.random.default_rng(0).permutation(IDS).tolist())
    at = {name: i for i, name in enumerate(IDS)}
    edges = read_neighbours(tmp_path / "near.gal", shuffled)
    back = {tuple(sorted(at[shuffled[i]] for i in pair)) for pair in edges.tolist()}
    assert back == pairs_of(GRAPH)


def test_a_file_as_the_rule(tmp_path):
    path = tmp_path / "near.gal"
    write_gal(GRAPH, IDS, path)
    catalogue = invented_catalogue(LAT, LON, IDS)
    graph = contact_graph(catalogue, f"given:{path}", bridges=False)
    assert graph.edges.tolist() == GRAPH.edges.tolist()
    assert graph.rule == "given:near.gal"
    assert contact_graph(catalogue, f"given:{path}").bridge.any()


@pytest.mark.parametrize("ids", [("a b", "c"), ("", "c"), ("a\t", "c")])
def test_ids_a_gal_file_cannot_hold(tmp_path, ids):
    graph = build_graph([0, 1], [0, 0], "nearest:1")
    with pytest.raises(GraphError, match="separates ids by blanks"):
        write_gal(graph, ids, tmp_path / "x.gal")
    assert not list(tmp_path.iterdir())


def test_ids_must_name_each_tradition_once(tmp_path):
    graph = build_graph([0, 1], [0, 0], "nearest:1")
    for ids in (["a"], ["a", "a"]):
        with pytest.raises(GraphError, match="name each of the 2 traditions once"):
            write_gal(graph, ids, tmp_path / "x.gal")
        with pytest.raises(GraphError, match="name each of the 2 traditions once"):
            to_libpysal(graph, ids)


def written(tmp_path, name, text):
    path = tmp_path / name
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return path


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("a.gal", "3\n007 1\n12\n12 1\n007\nlone place 0\n\n".replace("lone place", "lone_place")),
        ("b.gal", "0 3 shapes ID\r\n007 1\r\n12\r\n12 0\r\n\r\nlone_place 0\r\n"),
        ("c.GAL", "\ufeff2\n007 1\n12\nlone_place 0"),  # 12 has no line of its own
        ("a.gwt", "0 3 shapes ID\n007 12 1.5\nlone_place lone_place 0\n"),
        ("b.gwt", "anything\n12 007 0\n\n007 12 0\n"),
    ],
)
def test_dialects_of_the_formats(tmp_path, name, text):
    edges = read_neighbours(written(tmp_path, name, text), ("12", "007", "lone place"))
    assert edges.tolist() == [[0, 1]]
    assert edges.dtype == np.int32


@pytest.mark.parametrize(
    ("name", "text", "message"),
    [
        ("a.gal", "", "line 1: a GAL file starts with the number"),
        ("a.gal", "a 1\nb\n", "line 1: a GAL file starts with the number"),
        ("a.gal", "2\na x\nb\n", "line 2: expected a tradition id and its number"),
        ("a.gal", "2\na 1\nb\nb\n", "line 4: expected a tradition id and its number"),
        ("a.gal", "1\na 3\nb\n", "line 2: a should have 3 neighbours"),
        ("a.gal", "3\na 1\nb\nb 1\na\n", "announces 3 traditions on line 1 and lists 2"),
        ("a.gwt", "", "is empty"),
        ("a.gwt", "0 2 x y\na b\n", "line 2: expected two tradition ids and a weight"),
        ("a.gal", b"1\n\xff\xfe 0\n", "not UTF-8"),
        ("a.txt", "1\na 0\n", "takes a .gal or a .gwt file"),
        ("a.gal", "2\na 1\nz\nb 0\n", "names 1 traditions that the catalogue does not have: z"),
        ("a.gwt", "h\na z 1\n", "does not have: z"),
    ],
)
def test_bad_files(tmp_path, name, text, message):
    path = written(tmp_path, name, text)
    with pytest.raises(GraphError, match=message) as caught:
        read_neighbours(path, ("a", "b"))
    assert str(tmp_path) not in str(caught.value)


def test_a_file_that_is_not_there(tmp_path):
    with pytest.raises(GraphError, match=r"near\.gal cannot be read \(No such file"):
        read_neighbours(tmp_path / "near.gal", IDS)


def test_traditions_left_out_or_withheld(tmp_path):
    path = written(tmp_path, "a.gal", "3\na 2\nb z\nb 1\na\nz 1\na\n")
    assert read_neighbours(path, ("a", "b"), left_out=("z",)).tolist() == [[0, 1]]
    with pytest.warns(TwicetoldWarning, match="names 1 traditions") as caught:
        assert read_neighbours(path, ("a", "b"), withheld=True).tolist() == [[0, 1]]
    assert " z" not in str(caught[0].message)
    catalogue = invented_catalogue([0, 1], [0, 0], ("a", "b"), unlocated=("z",))
    assert contact_graph(catalogue, f"given:{path}").n_edges == 1
