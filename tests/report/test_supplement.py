"""The deposit: what is in it, in every form, and the same bytes every time."""

from __future__ import annotations

import csv
import hashlib
import json
import re
import shutil
import warnings
import zipfile
from math import asin, cos, radians, sin, sqrt

import openpyxl
import pytest
from hypothesis import given
from hypothesis import strategies as st

import deposits
from twicetold.errors import TwicetoldError
from twicetold.report.supplement import write_supplement
from twicetold.report.supplement.dictionary import describe
from twicetold.report.supplement.table import csv_text, guarded, read_rows, unguarded
from twicetold.report.supplement.tables import with_infinity
from twicetold.run import supplement_run

TABLES = ("S1_motifs", "S2_traditions", "S3_contacts", "S4_rounded", "S5_plan", "S5_provenance")


def every_file(folder):
    return {p.relative_to(folder).as_posix(): p for p in folder.rglob("*") if p.is_file()}


def cells(name):
    header, rows = read_rows(deposits.deposit() / f"{name}.csv", guard=True)
    return [dict(zip(header, row, strict=True)) for row in rows]


def test_the_deposit_holds_every_table_in_every_form():
    files = every_file(deposits.deposit())
    for name in (*TABLES, "S3_bridges", "columns"):
        assert f"{name}.csv" in files
        assert f"latex/{name}.tex" in files
    wanted = {"README.md", "supplement.xlsx", "datapackage.json", "plan.toml", "files.csv"}
    wanted |= {"traditions.geojson", "contacts.geojson", "catalogue/attestations.csv"}
    wanted |= {"figures/map.svg", "figures/map.pdf", "figures/clusters_against_holders.pdf"}
    assert wanted <= set(files)
    assert files["figures/map.pdf"].read_bytes().startswith(b"%PDF")


def test_two_deposits_are_the_same_bytes(tmp_path):
    out = tmp_path / "again"
    supplement_run(deposits.finished_run(), out, cldf=True, force=False, pool=deposits.pool())
    first, second = every_file(deposits.deposit()), every_file(out)
    assert first.keys() == second.keys()
    different = [n for n in first if first[n].read_bytes() != second[n].read_bytes()]
    assert different == []


def test_s1_is_the_table_of_the_run():
    header, rows = read_rows(deposits.finished_run() / "motifs.csv")
    rows = list(with_infinity(rows))
    assert read_rows(deposits.deposit() / "S1_motifs.csv", guard=True) == (header, rows)


def test_coordinates_are_rounded_in_every_file():
    run = deposits.finished_run()
    header, rows = read_rows(run / "catalogue" / "traditions.csv")
    at = [header.index(c) for c in ("latitude", "longitude")]
    exact = {row[k] for row in rows for k in at if "." in row[k]}
    assert len(exact) > 50
    for row in cells("S2_traditions"):
        assert re.fullmatch(r"-?\d*", row["latitude"] + row["longitude"].lstrip("-"))
    for name, path in every_file(deposits.deposit()).items():
        if path.suffix in (".csv", ".tex", ".geojson", ".svg", ".json", ".md"):
            words = set(re.findall(r"-?\d+\.\d{3}(?!\d)", path.read_text(encoding="utf-8")))
            assert len(words & exact) <= 1, name  # one may be met by chance, as some ratio


def test_lengths_are_those_between_the_published_coordinates():
    places = {r["tradition_id"]: r for r in cells("S2_traditions")}
    for row in cells("S3_contacts"):
        a, b = (places[row[c]] for c in ("tradition_id", "neighbour_id"))
        p, q = radians(float(a["latitude"])), radians(float(b["latitude"]))
        d = radians(float(a["longitude"]) - float(b["longitude"]))
        h = sin((p - q) / 2) ** 2 + cos(p) * cos(q) * sin(d / 2) ** 2
        assert float(row["length_km"]) == pytest.approx(2 * 6371.0088 * asin(sqrt(h)), abs=0.11)


@given(st.text(alphabet="=+-@';\t\"a ＝\n,", max_size=12) | st.text(max_size=20))
def test_guarding_is_undone_exactly_and_leaves_nothing_that_runs(text):
    safe = guarded(text)
    assert unguarded(safe) == text
    for piece in re.split(r"[;\t\r\n]", safe):
        assert not piece.lstrip(" \"'").startswith(tuple("=+-@＝＋－＠")) or piece.startswith("'")


@given(st.lists(st.lists(st.text(max_size=8), min_size=2, max_size=2), max_size=5))
def test_a_table_of_any_text_reads_back(tmp_path_factory, rows):
    path = tmp_path_factory.getbasetemp() / "any.csv"
    rows = [[c.replace("\x00", "").replace("\r", "") or "x" for c in row] for row in rows]
    text = csv_text(["a", "b"], rows, [True, True])
    path.write_text(text, encoding="utf-8", newline="", errors="surrogatepass")
    assert read_rows(path, guard=True) == (("a", "b"), [tuple(r) for r in rows])


def test_no_csv_cell_of_the_deposit_can_run():
    seen = 0
    for name, path in every_file(deposits.deposit()).items():
        if not name.endswith(".csv"):
            continue
        with path.open(encoding="utf-8", newline="") as handle:
            for row in csv.reader(handle):
                for cell in row:
                    for piece in re.split(r"[;\t]", cell):
                        if piece.lstrip(' "').startswith(("=", "+", "-", "@")):
                            float(piece)  # a plain negative number, or this raises
                    seen += cell.startswith("'=")
    assert seen > 5


def test_the_workbook_equals_the_csv_tables_and_holds_no_formula():
    book = openpyxl.load_workbook(deposits.deposit() / "supplement.xlsx")
    kinds = {(r["table"], r["column"]): r["kind"] for r in cells("columns")}
    assert set(TABLES) | {"columns"} <= set(book.sheetnames)
    odd = 0
    for sheet in book.worksheets:
        header, rows = read_rows(deposits.deposit() / f"{sheet.title}.csv", guard=True)
        found = list(sheet.iter_rows())
        assert tuple(c.value for c in found[0]) == header
        assert len(found) == len(rows) + 1
        for row, given_row in zip(found[1:], rows, strict=True):
            for cell, text, column in zip(row, given_row, header, strict=True):
                assert cell.data_type != "f"
                if text == "":
                    assert cell.value is None
                elif kinds.get((sheet.title, column), "string") == "string":
                    assert (cell.value, cell.data_type) == (text, "s")
                    if text.startswith(("=", "+", "-", "@")):
                        assert cell.quotePrefix
                        odd += 1
                elif text.endswith("INF"):
                    assert cell.value == text
                else:
                    assert cell.value == float(text)
    assert odd > 5
    with zipfile.ZipFile(deposits.deposit() / "supplement.xlsx") as packed:
        assert not any(b"<f>" in packed.read(n) for n in packed.namelist())
        assert {i.date_time for i in packed.infolist()} == {(1980, 1, 1, 0, 0, 0)}


def test_every_column_is_in_the_dictionary_in_words():
    known = {(r["table"], r["column"]) for r in cells("columns")}
    for path in deposits.deposit().glob("S[0-9]_*.csv"):
        header, _ = read_rows(path, guard=True)
        assert {(path.stem, c) for c in header} <= known
    own = {("S2_traditions", "reef")}  # the catalogue's own covariate: only its name is known
    for row in cells("columns"):
        if (row["table"], row["column"]) not in own:
            guess = row["column"].replace("_", " ").capitalize() + "."
            assert row["meaning"] != guess, row


def test_a_column_is_never_called_numeric_when_it_is_not():
    assert describe("S1_motifs", "joins", ["1", "two"]).kind == "string"
    assert describe("S1_motifs", "joins_ratio", ["1", "2"]).kind == "number"
    assert describe("S1_motifs", "hidden_bound", ["0.5", "INF"]).kind == "number"
    assert describe("S1_motifs", "hidden_bound", ["", ""]).kind == "number"


def test_the_data_package_validates(monkeypatch):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        frictionless = pytest.importorskip("frictionless")
        monkeypatch.chdir(deposits.deposit())
        report = frictionless.validate("datapackage.json")
    assert report.valid, report.flatten(["message"])
    assert report.stats["tasks"] >= len(TABLES)


def test_the_data_package_notices_an_altered_table(tmp_path, monkeypatch):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        frictionless = pytest.importorskip("frictionless")
        shutil.copytree(deposits.deposit(), tmp_path / "d")
        path = tmp_path / "d" / "S3_contacts.csv"
        path.write_text(path.read_text().replace("T00,", "TXX,", 1))
        monkeypatch.chdir(tmp_path / "d")
        report = frictionless.validate("datapackage.json")
    assert not report.valid


def test_the_data_package_says_version_two_and_digests():
    package = json.loads((deposits.deposit() / "datapackage.json").read_text(encoding="utf-8"))
    assert package["$schema"] == "https://datapackage.org/profiles/2.0/datapackage.json"
    for resource in package["resources"]:
        raw = (deposits.deposit() / resource["path"]).read_bytes()
        assert resource["hash"] == f"sha256:{hashlib.sha256(raw).hexdigest()}"
        assert resource["bytes"] == len(raw)
        assert all(f["description"] for f in resource["schema"]["fields"])


def test_the_cldf_dataset_validates_and_holds_the_records():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        pycldf = pytest.importorskip("pycldf")
        path = deposits.deposit() / "cldf" / "StructureDataset-metadata.json"
        dataset = pycldf.Dataset.from_metadata(path)
        assert dataset.validate()
        values = list(dataset["ValueTable"])
        parameters = {r["ID"]: r for r in dataset["ParameterTable"]}
        languages = {r["ID"]: r for r in dataset["LanguageTable"]}
    held = {}
    for row in values:
        if row["Value"] == "attested":
            motif = unguarded(parameters[row["Parameter_ID"]]["motif_id"])
            held[motif] = held.get(motif, 0) + 1
            assert row["Language_ID"] in languages
    assert held == {r["motif_id"]: int(r["holders"]) for r in cells("S1_motifs")}
    for row in parameters.values():
        assert row["joins"] is not None


def test_the_readme_carries_notice_cautions_and_labels_word_for_word():
    text = (deposits.deposit() / "README.md").read_text(encoding="utf-8")
    assert "Invented: 100 % made up." in text
    assert text.count(deposits.LABEL) == 2
    assert "not a map of origins" in text
    assert "Nobody (1). Nothing." in text
    assert [r["label"] for r in cells("S2_traditions")].count(deposits.LABEL) == 2


def test_the_list_of_files_is_complete_and_true():
    listed = {r["file"]: r for r in cells("files")}
    files = every_file(deposits.deposit())
    assert set(files) - set(listed) == {"files.csv", "datapackage.json"}
    for name, row in listed.items():
        raw = files[name].read_bytes()
        assert row["sha256"] == hashlib.sha256(raw).hexdigest()
        assert int(row["bytes"]) == len(raw)


def test_rounded_verdicts_stand_beside_exact_ones():
    exact = {r["motif_id"]: r for r in cells("S1_motifs")}
    rows = cells("S4_rounded")
    assert len(rows) == len(exact)
    for row in rows:
        assert row["verdict"] == exact[row["motif_id"]]["verdict"]
        assert row["moved"] == ("yes" if row["verdict"] != row["verdict_rounded"] else "no")
    # Whole degrees move places by up to 60 km here: the graph cannot have stayed as it was.
    assert any(r["joins"] != r["joins_rounded"] for r in rows)


def test_a_folder_that_is_no_run_is_refused(tmp_path):
    with pytest.raises(TwicetoldError, match=r"has no motifs\.csv"):
        write_supplement(tmp_path, tmp_path / "out", cldf=False)
