"""Open CLDF datasets, and datasets written by pycldf, read by our reader.

The counts of the two datasets are those their own publications give: eurasianinventories
(Nikolaev 2018, as CLDF, MIT) and wacl (Her, Hammarström and Allassonnière-Tang 2022, CC BY 4.0,
which reports 723 of 3,338 languages with numeral classifiers).
"""

from __future__ import annotations

import csv
import json
import zipfile
from collections import Counter
from pathlib import Path

import numpy as np
import pycldf
import pytest

from twicetold.catalogue import CatalogueRules, CellState, check_catalogue, read_catalogue


def test_eurasian_inventories(shared_data):
    catalogue = read_catalogue(shared_data / "eurasianinventories" / "cldf")
    assert catalogue.n_traditions == 203
    assert len(catalogue.unlocated) == 213
    assert catalogue.n_motifs == 1553
    everywhere = np.diff(catalogue.attested.indptr) + catalogue.unlocated_holders
    assert int(everywhere.sum()) == 18312  # 18,325 rows, of which 13 repeat a pair
    assert int((everywhere >= 5).sum()) == 344
    assert catalogue.has_families
    assert not any("[" in family for family in catalogue.family)
    assert len(catalogue.surveyed_sets) == 1
    assert catalogue.surveyed_sets[0].all()


def test_eurasian_cells_against_a_plain_reading(shared_data):
    folder = shared_data / "eurasianinventories" / "cldf"
    catalogue = read_catalogue(folder)
    with (folder / "values.csv").open(encoding="utf-8", newline="") as handle:
        rows = [(r["Parameter_ID"], r["Language_ID"]) for r in csv.DictReader(handle)]
    pairs = set(rows)
    assert (len(rows), len(pairs)) == (18325, 18312)
    located = set(catalogue.tradition_ids)
    ours = {
        (catalogue.motif_ids[k], catalogue.tradition_ids[i])
        for k in range(catalogue.n_motifs)
        for i in catalogue.holders(k).tolist()
    }
    assert ours == {(m, t) for m, t in pairs if t in located}


def test_wacl(shared_data):
    """3,338 languages with 723 holders; 73 of them (14 holders) come without coordinates."""
    catalogue, warnings = check_catalogue(shared_data / "wacl" / "cldf")
    assert catalogue is not None
    assert catalogue.n_traditions + len(catalogue.unlocated) == 3338
    assert catalogue.n_traditions == 3265
    assert catalogue.unlocated_holders is not None
    assert len(catalogue.holders(0)) + int(catalogue.unlocated_holders[0]) == 723
    assert Counter(catalogue.states(0).tolist()) == {
        CellState.ABSENT: 2556,
        CellState.ATTESTED: 709,
    }
    assert set(catalogue.region) >= {"Africa", "Pacific"}
    assert any("yes/no values" in w.what for w in warnings)


@pytest.mark.parametrize("rule", [("TRUE",), ("CLF-1",)])
def test_wacl_with_a_rule_by_value_or_code(shared_data, rule):
    path = shared_data / "wacl" / "cldf" / "StructureDataset-metadata.json"
    catalogue = read_catalogue(path, CatalogueRules(presence={"CLF": rule}))
    assert len(catalogue.holders(0)) == 709
    inverse = read_catalogue(path, CatalogueRules(presence={"CLF": ("FALSE",)}))
    assert len(inverse.holders(0)) == 2556


LANGUAGES = [
    {"ID": "l1", "Name": "One", "Latitude": 1.5, "Longitude": 2.5, "Family": "Aa [abcd1234]"},
    {"ID": "l2", "Name": "Two", "Latitude": -3.0, "Longitude": 4.0, "Family": "Aa [abcd1234]"},
    {"ID": "l3", "Name": "Three", "Latitude": 5.0, "Longitude": -6.0, "Family": "Bb"},
    {"ID": "l4", "Name": "Four", "Family": "Bb"},
]
VALUES = [
    ("l1", "p1", "yes", None),
    ("l2", "p1", "no", None),
    ("l3", "p1", "?", None),
    ("l4", "p1", "yes", None),
    ("l1", "p2", "SOV", "p2-a"),
    ("l2", "p2", "SVO", "p2-b"),
    ("l3", "p2", None, None),
]


def dataset(folder: Path, *, parameters: bool = True, codes: bool = True, name: str = "traits.csv"):
    """A StructureDataset written and validated by pycldf."""
    folder.mkdir(parents=True, exist_ok=True)
    cldf = pycldf.StructureDataset.in_dir(folder)
    cldf.properties["dc:title"] = "Trial"
    cldf.add_component("LanguageTable", "Family", {"name": "Effort", "datatype": "decimal"})
    cldf["ValueTable", "Value"].null = ["?", ""]
    data = {"LanguageTable": [{"Effort": 2.0, **row} for row in LANGUAGES]}
    if parameters:
        cldf.add_component(
            {"url": name, "dc:conformsTo": _component("ParameterTable")}, *_columns()
        )
        data["ParameterTable"] = [
            {"ID": "p1", "Name": "Tone", "Category": "sound"},
            {"ID": "p2", "Name": "Order", "Category": "form"},
        ]
    if codes:
        cldf.add_component("CodeTable")
        data["CodeTable"] = [
            {"ID": "p2-a", "Parameter_ID": "p2", "Name": "verb last"},
            {"ID": "p2-b", "Parameter_ID": "p2", "Name": "verb second"},
        ]
    data["ValueTable"] = [
        {
            "ID": str(k),
            "Language_ID": t,
            "Parameter_ID": m,
            "Value": v,
            "Code_ID": c if codes else None,
        }
        for k, (t, m, v, c) in enumerate(VALUES)
    ]
    cldf.write(**data)
    if parameters:
        assert cldf.validate()
    return folder


def _component(kind: str) -> str:
    return f"http://cldf.clld.org/v1.0/terms.rdf#{kind}"


def _columns() -> list[object]:
    terms = "http://cldf.clld.org/v1.0/terms.rdf#"
    return [
        {"name": "ID", "propertyUrl": terms + "id"},
        {"name": "Name", "propertyUrl": terms + "name"},
        "Category",
    ]


A, B, N = CellState.ATTESTED, CellState.ABSENT, CellState.NOT_SEARCHED


def test_dataset_written_by_pycldf(tmp_path):
    catalogue, warnings = check_catalogue(dataset(tmp_path))
    assert catalogue is not None
    assert catalogue.title == "Trial"
    assert catalogue.tradition_ids == ("l1", "l2", "l3")
    assert catalogue.unlocated == ("l4",)
    assert catalogue.family == ("Aa", "Aa", "Bb")
    assert catalogue.effort is not None
    assert catalogue.effort.tolist() == [2.0, 2.0, 2.0]
    assert catalogue.motif_names == ("Tone", "Order")
    assert catalogue.motif_categories == ("sound", "form")
    assert catalogue.states(0).tolist() == [A, B, N]
    assert catalogue.states(1).tolist() == [A, A, N]
    assert any("'p1' has yes/no" in w.what for w in warnings)


@pytest.mark.parametrize("value", ["SOV", "p2-a", "verb last"])
def test_rule_by_value_code_or_name_of_code(tmp_path, value):
    catalogue = read_catalogue(dataset(tmp_path), CatalogueRules(presence={"p2": (value,)}))
    assert catalogue.states(1).tolist() == [A, B, N]
    assert catalogue.states(0).tolist() == [A, B, N]


def test_rule_that_names_nothing(tmp_path):
    folder = dataset(tmp_path)
    _, problems = check_catalogue(folder, CatalogueRules(presence={"P2": ("SOV",)}))
    assert "Did you mean 'p2'" in problems[0].remedy
    catalogue, warnings = check_catalogue(folder, CatalogueRules(presence={"p2": ("sov",)}))
    assert catalogue is not None
    assert any("never has the value 'sov'" in w.what for w in warnings)


def test_rule_for_all_parameters(tmp_path):
    catalogue = read_catalogue(
        dataset(tmp_path), CatalogueRules(presence={"*": ("SVO",), "p1": ("no",)})
    )
    assert catalogue.states(0).tolist() == [B, A, N]
    assert catalogue.states(1).tolist() == [B, A, N]


def test_no_row_may_mean_not_searched(tmp_path):
    folder = dataset(tmp_path)
    lines = (folder / "values.csv").read_text().splitlines(keepends=True)
    (folder / "values.csv").write_text("".join(x for x in lines if not x.startswith("1,")))
    with (folder / "values.csv").open("a") as handle:
        handle.write("93,l3,p1,no,,,\n")
    loose, warnings = check_catalogue(folder)
    assert loose is not None
    assert loose.states(0).tolist() == [A, B, B]
    assert any("no row at all" in w.what for w in warnings)
    rules = CatalogueRules(absent_rows="not searched")
    assert read_catalogue(folder, rules).states(0).tolist() == [A, N, B]


def test_no_parameter_and_no_code_table(tmp_path):
    catalogue = read_catalogue(dataset(tmp_path, parameters=False, codes=False))
    assert catalogue.motif_ids == ("p1", "p2")
    assert catalogue.states(1).tolist() == [A, A, N]


def test_zipped_table_as_pycldf_leaves_it(tmp_path):
    plain = read_catalogue(dataset(tmp_path / "a"))
    folder = dataset(tmp_path / "b")
    with zipfile.ZipFile(folder / "values.csv.zip", "w", zipfile.ZIP_DEFLATED) as archive:
        archive.write(folder / "values.csv", "values.csv")
    (folder / "values.csv").unlink()
    assert len(list(pycldf.Dataset.from_metadata(_metadata(folder))["ValueTable"])) == 7
    assert read_catalogue(folder).digest() == plain.digest()


def _metadata(folder: Path) -> Path:
    return folder / "StructureDataset-metadata.json"


def test_other_dialect(tmp_path):
    plain = read_catalogue(dataset(tmp_path / "a"))
    folder = dataset(tmp_path / "b")
    metadata = json.loads(_metadata(folder).read_text())
    metadata["dialect"] = {
        "delimiter": ";",
        "encoding": "iso-8859-1",
        "commentPrefix": "#",
        "quoteChar": "'",
        "skipRows": 1,
    }
    _metadata(folder).write_text(json.dumps(metadata))
    for path in folder.glob("*.csv"):
        lines = path.read_text(encoding="utf-8").splitlines()
        lines = ["a line to skip", lines[0].replace(",", ";"), "# remark"] + [
            line.replace(",", ";").replace("Three", "'Thr;ee'").replace("One", "Oné")
            for line in lines[1:]
        ]
        path.write_text("\n".join(lines) + "\n", encoding="latin-1")
    catalogue = read_catalogue(folder)
    assert catalogue.tradition_names == ("Oné", "Two", "Thr;ee")
    assert catalogue.states(1).tolist() == plain.states(1).tolist()
    rows = list(pycldf.Dataset.from_metadata(_metadata(folder))["LanguageTable"])
    assert [r["Name"] for r in rows][:3] == list(catalogue.tradition_names)


def test_several_values_of_one_cell(tmp_path):
    folder = dataset(tmp_path)
    with (folder / "values.csv").open("a") as handle:
        handle.write("91,l2,p1,yes,,,\n92,l1,p1,yes,,,\n")
    catalogue, warnings = check_catalogue(folder)
    assert catalogue is not None
    assert catalogue.states(0).tolist() == [A, A, N]
    assert [w.row for w in warnings if "something else" in w.what] == [9]
