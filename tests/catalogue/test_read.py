"""Sound catalogues of every form read to the same frozen thing."""

from __future__ import annotations

import random
from dataclasses import replace

import numpy as np
import pytest
from small_catalogue import SOUND, write_csv, write_xlsx

from twicetold.catalogue import CatalogueRules, CellState, check_catalogue, read_catalogue
from twicetold.errors import CatalogueError, PlanError


def test_reads_tables_and_workbook_alike(sound, put, tmp_path):
    catalogue = read_catalogue(put(sound, tmp_path))
    assert catalogue.tradition_ids == ("t1", "t2", "t3", "t4")
    assert catalogue.tradition_names == ("Oru", "Beni", "Kasi", "Lomo")
    assert catalogue.latitude.tolist() == [-1.5, 2.25, 3.0, 4.0]
    assert catalogue.longitude.tolist() == [10.0, -11.0, 12.0, 179.5]
    assert catalogue.family == ("Low", "Low", "High", "")
    assert catalogue.effort is not None
    assert catalogue.effort.tolist() == [3.0, 2.5, 1.0, 7.0]
    assert list(catalogue.covariates) == ["rain"]
    np.testing.assert_array_equal(catalogue.covariates["rain"], [100, np.nan, 90.5, 12])
    assert catalogue.unlocated == ("t5",)
    assert catalogue.motif_ids == ("m1", "m2", "m3")
    assert catalogue.motif_categories == ("sea", "sky", "sea")
    assert [catalogue.holders(k).tolist() for k in range(3)] == [[0, 1], [2], [0, 3]]
    assert catalogue.unlocated_holders.tolist() == [1, 0, 0]
    assert len(catalogue.surveyed_sets) == 1
    assert catalogue.surveyed(0).all()
    assert catalogue.warnings == ()


def test_every_array_is_closed_to_writing(sound, tmp_path):
    sound["contacts"] = [["tradition_id", "neighbour_id"], ["t1", "t2"]]
    catalogue = read_catalogue(write_csv(sound, tmp_path))
    arrays = [
        catalogue.latitude,
        catalogue.longitude,
        catalogue.effort,
        catalogue.covariates["rain"],
        catalogue.surveyed_sets[0],
        catalogue.surveyed_of,
        catalogue.contacts,
        catalogue.unlocated_holders,
        catalogue.attested.data,
        catalogue.attested.indices,
        catalogue.not_applicable.indptr,
    ]
    assert not any(a.flags.writeable for a in arrays)


@pytest.mark.parametrize("seed", range(3))
def test_order_of_rows_never_matters(seed, tmp_path):
    rng = random.Random(seed)
    shuffled = {
        name: [rows[0], *rng.sample(rows[1:], len(rows) - 1)] for name, rows in SOUND.items()
    }
    one = read_catalogue(write_csv(SOUND, tmp_path / "a"))
    two = read_catalogue(write_csv(shuffled, tmp_path / "b"))
    assert one.digest() == two.digest()


def test_all_forms_have_one_digest(sound, tmp_path):
    csv_form = read_catalogue(write_csv(sound, tmp_path / "a"))
    tsv_form = read_catalogue(write_csv(sound, tmp_path / "b", ".tsv"))
    book = read_catalogue(write_xlsx(sound, tmp_path / "c"))
    assert csv_form.digest() == tsv_form.digest() == book.digest()
    assert csv_form.sources != tsv_form.sources


def test_byte_order_mark_semicolons_and_windows_line_ends(sound, tmp_path):
    plain = read_catalogue(write_csv(sound, tmp_path / "a"))
    folder = write_csv(sound, tmp_path / "b")
    for path in folder.glob("*.csv"):
        text = path.read_text(encoding="utf-8").replace(",", ";").replace("\n", "\r\n")
        path.write_bytes(b"\xef\xbb\xbf" + text.replace("\r\r", "\r").encode())
    assert read_catalogue(folder).digest() == plain.digest()


def test_motifs_table_is_optional(sound, put, tmp_path):
    del sound["motifs"]
    catalogue = read_catalogue(put(sound, tmp_path))
    assert catalogue.motif_ids == catalogue.motif_names == ("m1", "m2", "m3")


def test_blank_rows_and_trailing_blanks_are_passed_over(sound, put, tmp_path):
    sound["attestations"].insert(2, ["", "", ""])
    sound["attestations"].append(["m2", "t9", ""])
    _, problems = check_catalogue(put(sound, tmp_path))
    assert [(p.row, p.column) for p in problems] == [(9, "tradition_id")]


def test_states_column(sound, put, tmp_path):
    sound["attestations"] = [
        ["motif_id", "tradition_id", "state"],
        ["m1", "t1", "attested"],
        ["m1", "t2", "absent"],
        ["m1", "t3", "Not searched"],
        ["m1", "t4", "not applicable"],
        ["m2", "t1", ""],
        ["m3", "t2", ""],
    ]
    catalogue = read_catalogue(put(sound, tmp_path))
    A, B, N, X = (
        CellState.ATTESTED,
        CellState.ABSENT,
        CellState.NOT_SEARCHED,
        CellState.NOT_APPLICABLE,
    )
    assert catalogue.states(0).tolist() == [A, B, N, X]
    assert catalogue.states(1).tolist() == [A, B, B, B]
    rules = CatalogueRules(absent_rows="not searched")
    strict = read_catalogue(tmp_path if put is write_csv else tmp_path / "catalogue.xlsx", rules)
    assert strict.states(0).tolist() == [A, B, N, X]
    assert strict.states(1).tolist() == [A, N, N, N]


def test_surveyed_table_says_who_was_searched(sound, put, tmp_path):
    sound["surveyed"] = [["motif_id", "tradition_id"], ["m1", "t1"], ["m1", "t2"], ["m1", "t3"]]
    catalogue = read_catalogue(put(sound, tmp_path))
    assert catalogue.surveyed(0).tolist() == [True, True, True, False]
    assert catalogue.surveyed(1).all()
    assert catalogue.surveyed_of.tolist() == [0, 1, 1]


def test_star_in_surveyed_stands_for_every_motif(sound, put, tmp_path):
    sound["surveyed"] = [["motif_id", "tradition_id"]]
    sound["surveyed"] += [["*", t] for t in ("t1", "t2", "t3")] + [["m3", "t4"]]
    catalogue = read_catalogue(put(sound, tmp_path))
    assert catalogue.surveyed(1).tolist() == [True, True, True, False]
    assert catalogue.surveyed(2).all()


def test_record_outside_the_survey_is_an_error(sound, put, tmp_path):
    sound["surveyed"] = [["motif_id", "tradition_id"], ["m1", "t1"]]
    _, problems = check_catalogue(put(sound, tmp_path))
    (problem,) = problems
    assert problem.row == 3
    assert "surveyed table" in problem.what


def test_contacts(sound, put, tmp_path):
    sound["contacts"] = [
        ["tradition_id", "neighbour_id"],
        ["t2", "t1"],
        ["t1", "t2"],
        ["t3", "t4"],
        ["t1", "t5"],
    ]
    catalogue = read_catalogue(put(sound, tmp_path))
    assert catalogue.contacts.tolist() == [[0, 1], [2, 3]]
    assert [w.row for w in catalogue.warnings] == [3]


def test_about_file_and_land(sound, tmp_path):
    folder = write_csv(sound, tmp_path)
    (folder / "about.toml").write_text(
        'title = "Isles"\ninvented = true\nlicense = "CC0-1.0"\ncitation = "Us"\n', encoding="utf-8"
    )
    (folder / "land.geojson").write_text('{"type": "FeatureCollection", "features": []}')
    catalogue = read_catalogue(folder)
    assert (catalogue.title, catalogue.license, catalogue.citation) == ("Isles", "CC0-1.0", "Us")
    assert catalogue.invented
    assert "nvented" in catalogue.notice
    assert catalogue.land == (folder / "land.geojson").resolve()
    assert {s.name for s in catalogue.sources} >= {"about.toml", "land.geojson", "traditions.csv"}


def test_about_sheet(sound, tmp_path):
    sound["about"] = [["key", "value"], ["title", "Isles"], ["invented", "TRUE"]]
    catalogue = read_catalogue(write_xlsx(sound, tmp_path))
    assert catalogue.title == "Isles"
    assert catalogue.invented


def test_plan_may_name_columns(sound, put, tmp_path):
    sound["traditions"][0][5] = "pages"
    sound["traditions"][0][4] = "stock"
    catalogue = read_catalogue(put(sound, tmp_path), CatalogueRules(effort="Pages", family="stock"))
    assert catalogue.effort is not None
    assert catalogue.effort.tolist() == [3.0, 2.5, 1.0, 7.0]
    assert catalogue.family == ("Low", "Low", "High", "")
    assert list(catalogue.covariates) == ["rain"]


def test_usual_name_of_a_column_asks_for_nothing(sound, put, tmp_path):
    rules = CatalogueRules(effort="effort", family="family", branch="branch", region="region")
    path = put(sound, tmp_path / "a")
    assert read_catalogue(path, rules).digest() == read_catalogue(path).digest()
    sound["traditions"] = [row[:5] for row in sound["traditions"]]
    assert read_catalogue(put(sound, tmp_path / "b"), rules).effort is None


def test_labels_are_carried_verbatim(sound, tmp_path):
    sound["traditions"][0].append("label")
    for row in sound["traditions"][1:]:
        row.append("")
    sound["traditions"][1][-1] = "Ask us first; always | Seasonal: dry months"
    catalogue = read_catalogue(write_csv(sound, tmp_path))
    assert catalogue.labels == {"t1": ("Ask us first; always", "Seasonal: dry months")}


def test_withdrawn_tradition(sound, put, tmp_path):
    path = put(sound, tmp_path)
    catalogue = read_catalogue(path, CatalogueRules(without=("t4",)))
    assert catalogue.tradition_ids == ("t1", "t2", "t3")
    assert catalogue.digest() == replace(read_catalogue(path).without(["t4"])).digest()
    with pytest.raises(CatalogueError, match="Did you mean"):
        read_catalogue(path, CatalogueRules(without=("T4",)))


def test_rules_refuse_other_words():
    with pytest.raises(PlanError, match="absent_rows"):
        CatalogueRules(absent_rows="maybe")
    with pytest.raises(PlanError, match="presence"):
        CatalogueRules(presence="some")


MATRIX = [
    ["motif_id", "name", "t1", "t2", "t3", "t4", "t5"],
    ["m1", "Boat", "1", "0", "", "NA", "1"],
    ["m2", "Drum", "0", "1", "1", "-", ""],
]


@pytest.mark.parametrize("transposed", [False, True])
def test_wide_matrix(sound, put, tmp_path, transposed):
    tables = {"traditions": sound["traditions"]}
    rows = MATRIX
    if transposed:
        rows = [list(r) for r in zip(*[r[:1] + r[2:] for r in MATRIX], strict=True)]
        rows[0][0] = "tradition_id"
    tables["matrix"] = rows
    catalogue = read_catalogue(put(tables, tmp_path))
    assert catalogue.motif_ids == ("m1", "m2")
    assert catalogue.states(0).tolist() == [2, 1, 0, 3]
    assert catalogue.states(1).tolist() == [1, 2, 2, 3]
    assert catalogue.unlocated_holders.tolist() == [1, 0]
    assert catalogue.motif_names == (("m1", "m2") if transposed else ("Boat", "Drum"))


def test_matrix_equals_the_same_attestations(sound, tmp_path):
    ids = ["t1", "t2", "t3", "t4", "t5"]
    held = {tuple(r[:2]) for r in sound["attestations"][1:]}
    tables = {k: sound[k] for k in ("traditions", "motifs")}
    tables["matrix"] = [["motif_id", *ids]]
    tables["matrix"] += [
        [m, *("1" if (m, t) in held else "0" for t in ids)] for m in ("m3", "m1", "m2")
    ]
    matrix = read_catalogue(write_csv(tables, tmp_path / "a"))
    assert matrix.digest() == read_catalogue(write_csv(sound, tmp_path / "b")).digest()
