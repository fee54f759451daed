"""What is written reads back the same; subsets are the catalogue that would have been read."""

from __future__ import annotations

import json
import shutil
import tempfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from small_catalogue import Tables, write_csv

from twicetold.catalogue import CatalogueRules, read_catalogue, write_catalogue
from twicetold.errors import CatalogueError

RULES = CatalogueRules(restricted=True)

word = (
    st.text(
        st.characters(
            codec="utf-8",
            exclude_categories=("Cc", "Cs", "Zl", "Zp"),
            exclude_characters="\u202d\u202e",
        ),
        min_size=1,
        max_size=12,
    )
    .map(str.strip)
    .filter(bool)
)
name = word.filter(lambda w: w not in ("*", "NA", "N/A", "?"))
label = st.one_of(st.just(""), name)
degrees = st.floats(-90, 90).map(lambda x: repr(x + 0.0))
number = st.floats(1e-3, 1e6).map(repr)


@st.composite
def catalogues(draw: st.DrawFn) -> Tables:
    """Tables of a sound catalogue of any shape."""
    ids = draw(st.lists(name, min_size=3, max_size=7, unique=True))
    motif_ids = draw(st.lists(name, min_size=1, max_size=6, unique=True))
    traditions = [
        [
            "tradition_id",
            "name",
            "latitude",
            "longitude",
            "family",
            "branch",
            "region",
            "effort",
            "access",
            "label",
            "rain",
        ]
    ]
    for k, identity in enumerate(ids):
        place = [draw(degrees), draw(degrees)] if k else ["12.5", "-170"]
        if k == 1:
            place = ["-3", "179.25"]
        if k > 2 and draw(st.booleans()):
            place = ["", ""]
        traditions.append(
            [
                identity,
                draw(name),
                *place,
                draw(label),
                draw(label),
                draw(label),
                draw(number),
                draw(st.sampled_from(["", "open", "restricted"])),
                draw(label),
                draw(st.one_of(st.just(""), number)),
            ]
        )
    motifs = [["motif_id", "name", "category", "access"]]
    motifs += [
        [m, draw(name), draw(label), draw(st.sampled_from(["", "restricted"]))] for m in motif_ids
    ]
    states = ["", "attested", "absent", "not searched", "not applicable"]
    pair = st.tuples(st.sampled_from(motif_ids), st.sampled_from(ids))
    cells = draw(st.dictionaries(pair, st.sampled_from(states), min_size=1, max_size=20))
    attestations = [["motif_id", "tradition_id", "state"]]
    attestations += [[m, t, s] for (m, t), s in cells.items()]
    tables = {"traditions": traditions, "motifs": motifs, "attestations": attestations}
    if draw(st.booleans()):
        edges = draw(st.sets(st.tuples(*[st.sampled_from(ids)] * 2).filter(lambda e: e[0] < e[1])))
        tables["contacts"] = [["tradition_id", "neighbour_id"], *map(list, sorted(edges))]
    return tables


@given(tables=catalogues(), searched=st.booleans())
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_written_catalogue_reads_back_the_same(tables, searched):
    folder = Path(tempfile.mkdtemp())
    try:
        rules = CatalogueRules(
            restricted=True, absent_rows="searched" if searched else "not searched"
        )
        first = read_catalogue(write_csv(tables, folder / "in"), rules)
        again = read_catalogue(write_catalogue(first, folder / "out"), RULES)
    finally:
        shutil.rmtree(folder)
    assert again.digest() == first.digest()
    for field in ("tradition_ids", "tradition_names", "family", "branch", "region", "access"):
        assert getattr(again, field) == getattr(first, field)
    for field in ("motif_ids", "motif_names", "motif_categories", "motif_access", "unlocated"):
        assert getattr(again, field) == getattr(first, field)
    for field in ("latitude", "longitude", "effort", "surveyed_of"):
        np.testing.assert_array_equal(getattr(again, field), getattr(first, field))
    assert again.labels == first.labels
    assert again.covariates.keys() == first.covariates.keys()
    for key, values in first.covariates.items():
        np.testing.assert_array_equal(again.covariates[key], values)
    if first.contacts is None:
        assert again.contacts is None
    else:
        np.testing.assert_array_equal(again.contacts, first.contacts)
    for k in range(first.n_motifs):
        np.testing.assert_array_equal(again.states(k), first.states(k))
        np.testing.assert_array_equal(again.surveyed(k), first.surveyed(k))
        assert set(first.holders(k)) <= set(np.flatnonzero(first.surveyed(k)))


@given(tables=catalogues(), data=st.data())
@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_subset_is_what_the_smaller_tables_hold(tables, data):
    folder = Path(tempfile.mkdtemp())
    try:
        whole = read_catalogue(write_csv(tables, folder / "in"), RULES)
        n = whole.n_traditions
        mask = np.array(data.draw(st.lists(st.booleans(), min_size=n, max_size=n)), dtype=bool)
        mask[:2] = True
        part = whole.subset(mask)
        for k in range(whole.n_motifs):
            np.testing.assert_array_equal(part.states(k), whole.states(k)[mask])
        again = read_catalogue(write_catalogue(part, folder / "out"), RULES)
    except CatalogueError as exc:
        # The only faults that leaving traditions out may bring about.
        assert any(w in str(exc) for w in ("one point", "has no rows"))  # noqa: PT017
        return
    finally:
        shutil.rmtree(folder)
    gone = {k for k, v in whole.covariates.items() if np.isnan(v[mask]).all()}
    assert part.tradition_ids == tuple(np.array(whole.tradition_ids, dtype=object)[mask])
    if not gone:
        assert again.digest() == part.digest()


def test_digest_notices_each_change(sound, tmp_path):
    seen = {read_catalogue(write_csv(sound, tmp_path / "0")).digest()}
    changes = [
        ("traditions", 1, 1, "Oru2"),
        ("traditions", 1, 2, "-1.50001"),
        ("traditions", 1, 4, "Lower"),
        ("traditions", 1, 5, "3.5"),
        ("traditions", 1, 7, "101"),
        ("motifs", 1, 1, "A boat"),
        ("motifs", 1, 2, "land"),
        ("attestations", 1, 1, "t3"),
    ]
    for k, (table, row, column, text) in enumerate(changes, start=1):
        sound[table][row][column] = text
        seen.add(read_catalogue(write_csv(sound, tmp_path / str(k))).digest())
    assert len(seen) == len(changes) + 1


def test_few_surveyed_are_listed_and_few_missing_are_marked(sound, tmp_path):
    sound["surveyed"] = [["motif_id", "tradition_id"], ["m2", "t3"]]
    sound["surveyed"] += [["m3", t] for t in ("t1", "t2", "t4")]
    folder = write_catalogue(read_catalogue(write_csv(sound, tmp_path / "a")), tmp_path / "b")
    assert (folder / "surveyed.csv").read_text() == "motif_id,tradition_id\nm2,t3\n"
    assert "m3,t3,not searched" in (folder / "attestations.csv").read_text()


def test_land_and_about_are_written(sound, tmp_path):
    folder = write_csv(sound, tmp_path / "a")
    title = 'A "quoted" \\ title'
    (folder / "about.toml").write_text(f"title = {json.dumps(title)}\ninvented = true\n")
    (folder / "land.geojson").write_text('{"type": "FeatureCollection", "features": []}')
    first = read_catalogue(folder)
    again = read_catalogue(write_catalogue(first, tmp_path / "b"))
    assert (again.title, again.notice, again.invented) == (title, first.notice, True)
    assert again.land == (tmp_path / "b" / "land.geojson").resolve()


def test_writing_over_something_is_refused(sound, tmp_path):
    folder = write_csv(sound, tmp_path)
    catalogue = read_catalogue(folder)
    with pytest.raises(CatalogueError, match="not empty"):
        write_catalogue(catalogue, folder)
    with pytest.raises(CatalogueError, match="not empty"):
        write_catalogue(catalogue, folder / "motifs.csv")


def test_subset_refuses_what_cannot_be(sound, tmp_path):
    catalogue = read_catalogue(write_csv(sound, tmp_path))
    with pytest.raises(CatalogueError, match="4 True or False"):
        catalogue.subset(np.ones(3, dtype=bool))
    with pytest.raises(CatalogueError, match="at least two"):
        catalogue.subset(np.array([True, False, False, False]))
    with pytest.raises(CatalogueError, match="no located tradition"):
        catalogue.without(["t9"])


def test_subset_renumbers_contacts_and_merges_surveyed_sets(sound, tmp_path):
    sound["contacts"] = [["tradition_id", "neighbour_id"], ["t1", "t2"], ["t2", "t4"], ["t1", "t3"]]
    sound["surveyed"] = [["motif_id", "tradition_id"], ["m1", "t1"], ["m1", "t2"], ["m1", "t4"]]
    whole = read_catalogue(write_csv(sound, tmp_path))
    assert len(whole.surveyed_sets) == 2
    part = whole.without(["t3"])
    assert part.contacts.tolist() == [[0, 1], [1, 2]]
    assert len(part.surveyed_sets) == 1
    assert part.surveyed_of.tolist() == [0, 0, 0]
