"""A deposit verifies to the last digit, and does not once anything in it was changed."""

from __future__ import annotations

import re
import shutil

import numpy as np
import pytest

import deposits
from twicetold.catalogue import read_catalogue
from twicetold.errors import TwicetoldError
from twicetold.evidence import rank_catalogue
from twicetold.evidence.contacts import known_contacts
from twicetold.evidence.rounded import round_coordinates
from twicetold.graph import contact_graph
from twicetold.report.supplement import write_supplement
from twicetold.run import csv_text, rank_run, supplement_run
from twicetold.verify import read_guarded, verify_deposit


@pytest.fixture
def copy(tmp_path):
    return shutil.copytree(deposits.deposit(), tmp_path / "deposit")


def verify(folder):
    agrees, lines = verify_deposit(folder, pool=deposits.pool())
    return agrees, "\n".join(lines)


def with_true_digests(folder):
    """Make the list of files fit an altered deposit, as a forger would."""
    from twicetold.report.supplement import _write_files

    (folder / "files.csv").unlink()
    package = (folder / "datapackage.json").read_bytes()
    (folder / "datapackage.json").unlink()
    _write_files(folder)
    (folder / "datapackage.json").write_bytes(package)


def test_a_fresh_deposit_verifies():
    agrees, said = verify(deposits.deposit())
    assert agrees, said
    for table in ("S1_motifs", "S2_traditions", "S3_contacts", "S4_rounded", "S5_plan"):
        assert f"Compared {table}" in said
    assert "not hidden_bound" in said


def test_a_run_verifies_with_every_column():
    agrees, said = verify(deposits.finished_run())
    assert agrees, said
    assert "not hidden_bound" not in said
    assert "Compared hidden" in said


def changed_digit(path, column, row=3):
    """Change the last digit of one cell; give the old and the new one."""
    lines = path.read_text(encoding="utf-8").split("\n")
    at = lines[0].split(",").index(column)
    # Cells with commas stand in quotes; take a row that has none.
    k = next(i for i in range(row, len(lines)) if '"' not in lines[i] and lines[i].split(",")[at])
    parts = lines[k].split(",")
    old = parts[at]
    parts[at] = old[:-1] + str((int(old[-1]) + 1) % 10)
    lines[k] = ",".join(parts)
    path.write_text("\n".join(lines), encoding="utf-8")
    return old, parts[at]


@pytest.mark.parametrize(
    "column", ["joins", "joins_expected", "p_against_emergence", "q_against_emergence", "moran_i"]
)
def test_one_digit_of_s1_is_noticed_even_with_true_digests(copy, column):
    old, new = changed_digit(copy / "S1_motifs.csv", column)
    with_true_digests(copy)
    agrees, said = verify(copy)
    assert not agrees
    assert re.search(rf"Differs: S1_motifs, motif .*, {column}: {new}; computed {old}\b", said)
    assert "differs from its digest" not in said.lower()


def test_one_digit_of_any_file_is_noticed_by_its_digest(copy):
    path = copy / "contacts.geojson"
    path.write_text(path.read_text(encoding="utf-8").replace("17", "18", 1), encoding="utf-8")
    agrees, said = verify(copy)
    assert not agrees
    assert "Differs from its digest: contacts.geojson" in said


@pytest.mark.parametrize(
    ("table", "column"),
    [("S2_traditions", "motifs_held"), ("S3_contacts", "length_km"), ("S4_rounded", "clusters")],
)
def test_one_digit_of_another_table_is_noticed(copy, table, column):
    old, new = changed_digit(copy / f"{table}.csv", column)
    with_true_digests(copy)
    agrees, said = verify(copy)
    assert not agrees
    assert f"{column}: {new}; computed {old}" in said


def test_a_contact_edge_taken_away_is_noticed(copy):
    path = copy / "S3_contacts.csv"
    lines = path.read_text(encoding="utf-8").split("\n")
    path.write_text("\n".join(lines[:9] + lines[10:]), encoding="utf-8")
    with_true_digests(copy)
    agrees, said = verify(copy)
    assert not agrees
    assert "Differs: S2_traditions" in said


def test_another_plan_is_noticed(copy):
    path = copy / "plan.toml"
    path.write_text(path.read_text().replace("seed = 1", "seed = 2"))
    with_true_digests(copy)
    agrees, said = verify(copy)
    assert not agrees
    assert "plan.toml is not the plan" in said


def test_missing_added_and_unlisted_files_are_noticed(copy):
    (copy / "README.md").unlink()
    (copy / "more.txt").write_text("x")
    agrees, said = verify(copy)
    assert not agrees
    assert "README.md (missing)" in said
    assert "more.txt (not listed)" in said


def test_exact_coordinates_let_everything_be_computed_again(tmp_path):
    run, out = tmp_path / "run", tmp_path / "deposit"
    rank_run(deposits.tables(), run, deposits.plan(report__round_degrees=0.0), pool=deposits.pool())
    deposits.without_pictures(run)
    supplement_run(run, out, cldf=False, force=False, pool=deposits.pool())
    assert not (out / "S4_rounded.csv").exists()
    agrees, said = verify(out)
    assert agrees, said
    assert "hidden_bound" not in said
    assert "Compared S4_hidden" in said


def test_a_given_graph_file_is_not_needed(tmp_path):
    from twicetold.graph import write_gal

    catalogue = read_catalogue(deposits.tables())
    graph = contact_graph(catalogue, "nearest:3")
    path = tmp_path / "own.gal"
    write_gal(graph, catalogue.tradition_ids, path)
    run, out = tmp_path / "run", tmp_path / "deposit"
    plan = deposits.plan(graph__rule=f"given:{path}")
    rank_run(deposits.tables(), run, plan, pool=deposits.pool())
    path.unlink()
    write_supplement(deposits.without_pictures(run), _made(out), cldf=False)
    agrees, said = verify(out)
    assert agrees, said
    assert str(tmp_path) not in (out / "plan.toml").read_text()


def _made(path):
    path.mkdir()
    return path


def test_another_order_and_a_withdrawal_verify(tmp_path):
    run, out = tmp_path / "run", tmp_path / "deposit"
    plan = deposits.plan()
    rank_run(
        deposits.tables(), run, plan, pool=deposits.pool(), by="moran_i", without=("T05", "T20")
    )
    write_supplement(deposits.without_pictures(run), _made(out), cldf=False)
    agrees, said = verify(out)
    assert agrees, said
    assert "Not compared: S4_moved" in said
    for path in out.rglob("*"):
        if path.is_file() and path.suffix not in (".xlsx", ".pdf"):
            assert not re.search(r"\bT(05|20)\b", path.read_text(encoding="utf-8")), path.name


def test_a_folder_that_is_neither_is_refused(tmp_path):
    with pytest.raises(TwicetoldError, match=r"files\.csv"):
        verify_deposit(tmp_path, pool=deposits.pool())


def test_known_contacts_are_the_graphs_of_the_coordinates():
    catalogue = read_catalogue(deposits.tables())
    graph = contact_graph(catalogue, "nearest:2")
    known = known_contacts(catalogue, graph, bridges=True)
    partial = [m for m in catalogue.surveyed_sets if not m.all()]
    assert partial
    for mask in partial:
        wanted = graph.restricted_to(mask, catalogue.latitude, catalogue.longitude)
        found = known.among(mask)
        np.testing.assert_array_equal(found.edges, wanted.edges)
        np.testing.assert_array_equal(found.bridge, wanted.bridge)
        np.testing.assert_array_equal(found.length_km, wanted.length_km)
    assert known.among(np.ones(catalogue.n_traditions, dtype=bool)) is graph


def test_ranking_on_known_contacts_is_ranking_on_coordinates():
    catalogue, plan = read_catalogue(deposits.tables()), deposits.plan(graph__rule="nearest:2")
    graph = contact_graph(catalogue, "nearest:2")
    known = known_contacts(catalogue, graph, bridges=True)
    far = round_coordinates(catalogue, 10.0)
    plain = plan.replace(sensitivity__hidden=False)
    one = rank_catalogue(catalogue, plain, pool=deposits.pool(), details=False)
    other = rank_catalogue(far, plain, pool=deposits.pool(), details=False, contacts=known)
    assert csv_text(one.motifs) == csv_text(other.motifs)


@pytest.mark.parametrize("step", [0.1, 0.25, 1.0, 7.0])
def test_rounding_stays_on_the_globe_and_moves_no_farther_than_half_a_step(step):
    catalogue = read_catalogue(deposits.tables())
    coarse = round_coordinates(catalogue, step)
    assert np.abs(coarse.latitude).max() <= 90
    assert np.abs(coarse.longitude).max() <= 180
    for a, b in ((catalogue.latitude, coarse.latitude), (catalogue.longitude, coarse.longitude)):
        moved = np.abs((a - b + 180) % 360 - 180)
        assert moved.max() <= step / 2 + 1e-9
    assert all(len(repr(x)) < 8 for x in coarse.latitude.tolist())


def test_rounding_onto_one_point_is_refused():
    from twicetold.errors import PlanError

    catalogue = read_catalogue(deposits.tables())
    near = catalogue.subset(np.arange(catalogue.n_traditions) < 2)
    with pytest.raises(PlanError, match="round_degrees"):
        round_coordinates(near, 10.0) and round_coordinates(near, 90.0)


def test_the_guarded_catalogue_reads_back_as_used():
    run = read_catalogue(deposits.finished_run() / "catalogue")
    found = read_guarded(deposits.deposit() / "catalogue")
    assert found.tradition_names == run.tradition_names
    assert found.motif_ids == run.motif_ids
    assert found.digest() == round_coordinates(run, 1.0).digest()


@pytest.mark.parametrize(
    ("name", "content"),
    [
        ("S3_contacts.csv", "a,b\n1,2\n"),
        ("S3_contacts.csv", "tradition_id,neighbour_id,length_km,bridge\nT00\n"),
        ("S3_contacts.csv", "tradition_id,neighbour_id,length_km,bridge\nT00,Tx,1,no\n"),
        ("S5_provenance.csv", "item\nx\n"),
        ("files.csv", ""),
        ("files.csv", "file,bytes,sha256\nx\n"),
        ("plan.toml", "[graph]\nrule = 7\n"),
        ("catalogue/traditions.csv", "id\n"),
        ("S1_motifs.csv", b"\xff\xfe\x00"),
        ("S3_contacts.csv", ""),
    ],
)
def test_a_damaged_deposit_is_refused_or_fails_in_plain_words(copy, name, content):
    raw = content if isinstance(content, bytes) else content.encode()
    (copy / name).write_bytes(raw)
    try:
        agrees, _ = verify(copy)
    except TwicetoldError:  # any other error would be a fault of the program
        agrees = False
    assert not agrees


@pytest.mark.parametrize("name", ["run.json", "contacts.csv", "motifs.csv", "plan.toml"])
def test_a_damaged_run_is_refused(tmp_path, name):
    run = shutil.copytree(deposits.finished_run(), tmp_path / "run")
    (run / name).write_text("[1, 2", encoding="utf-8")
    with pytest.raises(TwicetoldError):
        write_supplement(run, _made(tmp_path / "out"), cldf=False)
