"""The demonstration catalogue: the committed bytes, its label, and an honest history."""

from __future__ import annotations

import csv
import json
import os
import subprocess
import sys
import tomllib
import warnings
from collections import Counter
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from openpyxl import load_workbook
from shapely.geometry import Point, shape
from shapely.validation import explain_validity

from twicetold.catalogue import read_catalogue
from twicetold.errors import TwicetoldError
from twicetold.example import FORMS, _history, example_files, make_example, write_example
from twicetold.example._coast import cut_at_antimeridian, signed_area
from twicetold.example._dice import Dice
from twicetold.graph import contact_graph

REPO = Path(__file__).resolve().parents[1]
DATA = REPO / "data_examples"
FOLDERS = {"tables": DATA / "archipelago", "cldf": DATA / "archipelago-cldf"}
READ = [DATA / "archipelago", DATA / "archipelago-cldf", DATA / "archipelago.xlsx"]


def rows(name):
    with (DATA / "archipelago" / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.fixture(scope="module")
def catalogue():
    return read_catalogue(DATA / "archipelago")


def contents(folder):
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*.*")}


class TestFiles:
    @pytest.mark.parametrize("form", FORMS)
    def test_making_it_again_gives_the_committed_bytes(self, form):
        files = example_files(form)
        if form == "workbook":
            assert files["archipelago.xlsx"] == (DATA / "archipelago.xlsx").read_bytes()
        else:
            assert files == contents(FOLDERS[form])

    def test_the_script_gives_them_too_whatever_the_hash_seed(self, tmp_path):
        script = DATA / "make_archipelago.py"
        env = os.environ | {"PYTHONHASHSEED": "12345", "LC_ALL": "C"}
        subprocess.run([sys.executable, script, tmp_path], check=True, env=env)
        made = contents(tmp_path)
        assert len(made) == 15
        assert made == {name: (DATA / name).read_bytes() for name in made}

    def test_another_seed_is_another_archipelago(self):
        one, two = make_example(), make_example(2)
        assert one.land != two.land
        assert [m.holders for m in one.motifs] != [m.holders for m in two.motifs]

    def test_the_three_forms_read_as_one_catalogue(self, catalogue):
        assert {read_catalogue(path).digest() for path in READ} == {catalogue.digest()}

    def test_cldf_validates(self):
        pycldf = pytest.importorskip("pycldf")
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", DeprecationWarning)  # of pycldf's own dependencies
            path = FOLDERS["cldf"] / "StructureDataset-metadata.json"
            dataset = pycldf.Dataset.from_metadata(path)
            assert dataset.validate()
            assert dataset.module == "StructureDataset"
            assert len(list(dataset["LanguageTable"])) == 150
            keys = {s.id for s in dataset.sources.items()}
        used = {row["source"] for row in rows("attestations")}
        assert used <= keys

    def test_labelled_invented_in_every_form(self):
        for path in READ:
            found = read_catalogue(path)
            assert found.invented
            assert "invented" in found.title
            assert found.notice.startswith("Invented demonstration data")
        for folder in FOLDERS.values():
            assert tomllib.loads((folder / "about.toml").read_text())["invented"] is True
            land = json.loads((folder / "land.geojson").read_text())
            assert "Invented" in land["notice"]
            assert all(f["properties"]["invented"] is True for f in land["features"])
        assert "about" in load_workbook(DATA / "archipelago.xlsx").sheetnames
        assert "made up" in (DATA / "README.md").read_text(encoding="utf-8")

    def test_written_where_asked(self, tmp_path):
        assert write_example(tmp_path / "new" / "one") == tmp_path / "new" / "one"
        assert contents(tmp_path / "new" / "one") == contents(FOLDERS["tables"])

    def test_full_folder_is_left_alone_without_force(self, tmp_path):
        mine = tmp_path / "traditions.csv"
        mine.write_text("mine")
        with pytest.raises(TwicetoldError, match="--force"):
            write_example(tmp_path)
        assert [p.name for p in tmp_path.iterdir()] == ["traditions.csv"]
        assert mine.read_text() == "mine"
        write_example(tmp_path, force=True)
        assert mine.read_bytes() == (DATA / "archipelago" / "traditions.csv").read_bytes()

    def test_a_file_in_the_way_and_an_unknown_form(self, tmp_path):
        (tmp_path / "f").write_text("")
        with pytest.raises(TwicetoldError, match="is a file"):
            write_example(tmp_path / "f", force=True)
        with pytest.raises(TwicetoldError, match="must be one of tables, cldf, workbook"):
            write_example(tmp_path / "g", form="parquet")


class TestContent:
    def test_counts(self, catalogue):
        assert catalogue.n_traditions == 150
        assert catalogue.n_motifs == 120
        assert len({f for f in catalogue.family if f}) == 12
        assert len(set(catalogue.motif_categories)) == 5
        assert catalogue.effort is not None
        assert catalogue.effort.max() / catalogue.effort.min() > 10
        assert len(set(catalogue.tradition_names)) == 150
        assert len(set(catalogue.motif_names)) == 120

    def test_unsearched_where_nobody_asked(self, catalogue):
        kept = {row["tradition_id"] for row in rows("surveyed")}
        regions = {row["id"]: row["region"] for row in rows("traditions")}
        gone = {"Far Candles", "Southern Teeth"}
        assert kept == {i for i, region in regions.items() if region not in gone}
        searched = {row["motif_id"] for row in rows("surveyed")}
        of = {row["id"] for row in rows("motifs") if row["category"] == "trickery and debt"}
        assert searched == of

    def test_truth_covers_every_motif_and_agrees_with_the_records(self, catalogue):
        truth = {row["motif_id"]: row for row in rows("truth")}
        assert list(truth) == [row["id"] for row in rows("motifs")]
        recorded = Counter(row["motif_id"] for row in rows("attestations"))
        routes = ("emergence", "contact", "inheritance")
        for motif, row in truth.items():
            shares = [float(row[f"{r}_share"]) for r in routes]
            assert sum(shares) == pytest.approx(1, abs=1e-12)
            assert sum(float(row[f"{r}_realised"]) for r in routes) == pytest.approx(1, abs=2e-4)
            assert int(row["recorded_holders"]) == recorded[motif] >= 3
            assert int(row["true_holders"]) >= recorded[motif]
            assert int(row["gains"]) >= int(row["true_holders"]) - 1
            if row["route"] == "mixed":
                assert max(shares) < 1
            else:
                assert float(row[f"{row['route']}_share"]) == 1
        by_category = Counter(
            (row["category"], truth[row["id"]]["route"]) for row in rows("motifs")
        )
        assert len(by_category) == 20
        assert min(by_category.values()) >= 2

    def test_a_blocked_gain_goes_by_emergence_and_by_nothing_else(self):
        for row in rows("truth"):
            for route in ("contact", "inheritance"):
                assert float(row[f"{route}_share"]) > 0 or float(row[f"{route}_realised"]) == 0

    def test_coast_is_valid_both_sides_of_the_antimeridian(self):
        land = json.loads((DATA / "archipelago" / "land.geojson").read_text())
        shapes = [shape(f["geometry"]) for f in land["features"]]
        assert all(s.is_valid for s in shapes), [explain_validity(s) for s in shapes]
        west, south, east, north = land["bbox"]
        assert west > 0 > east
        for part in (part for s in shapes for part in getattr(s, "geoms", [s])):
            low, bottom, high, top = part.bounds
            assert -180 <= low < high <= 180
            assert high - low < 30
            assert south <= bottom < top <= north
        spots = [Point(float(r["longitude"]), float(r["latitude"])) for r in rows("traditions")]
        # Coordinates have three decimals: a point may round over a shore by a hair.
        assert all(any(s.distance(p) < 0.002 for s in shapes) for p in spots)
        assert {p.x > 0 for p in spots} == {True, False}

    def test_a_square_over_the_antimeridian_is_cut_in_two(self):
        square = [(179.0, 0.0), (182.0, 0.0), (182.0, 1.0), (179.0, 1.0)]
        east, west = sorted(cut_at_antimeridian(square), key=lambda r: -max(x for x, _ in r))
        assert signed_area(east) == pytest.approx(1.0)
        assert signed_area(west) == pytest.approx(2.0)
        assert max(x for x, _ in east) == 180
        assert min(x for x, _ in west) == -180

    def test_no_name_is_or_holds_one_of_a_real_people(self, shared_data):
        real = set()
        for path in shared_data.rglob("languages.csv"):
            with path.open(encoding="utf-8", newline="") as file:
                for row in csv.DictReader(file):
                    for key in {"Name", "Family", "Family_name", "Glottolog_Name"} & row.keys():
                        whole = row[key] or ""
                        real |= {w.strip("()").casefold() for w in [whole, *whole.split()]}
        assert len(real) > 3000
        world = make_example()
        names = {s.name for s in world.peoples.sites} | {s.branch for s in world.peoples.sites}
        names |= set(world.peoples.families)
        names = {n.casefold() for n in names if n}
        held = {(n, r) for n in names for r in real if len(r) >= 4 and r in n}
        assert held == set()
        assert names & real == set()


class TestHistory:
    """The example's own spread chain against exact values: closed forms and linear algebra."""

    def law_of_counts(self, size, x):
        n = np.arange(1, size + 1)
        law = x**n / n
        return law / law.sum()

    def test_counts_are_a_log_series(self, monkeypatch):
        # Kendall 1948: constant arrivals, seen at a fixed time.
        monkeypatch.setattr(_history, "TURNOVER", 0.9)
        dice, seen = Dice(11, 0), Counter()
        while seen.total() < 4000:
            steps = _history.count_walk(12, 100.0 * dice.uniform(), dice)
            count = 1 + 2 * sum(steps) - len(steps)
            if count:
                seen[count] += 1
        law = self.law_of_counts(12, 0.9)
        got = np.array([seen[n] for n in range(1, 13)]) / seen.total()
        se = np.sqrt(law * (1 - law) / seen.total())
        assert np.all(np.abs(got - law) < 4 * se)

    # Joins of three holders on a path of five, x = .9: the chain solved over all 31 subsets
    # (tests/subset_solver.py holds the solver).
    @pytest.mark.parametrize(
        ("emergence", "law"),
        [(0.0, (0.029471, 0.337431, 0.633098)), (0.2, (0.039596, 0.409803, 0.550602))],
    )
    def test_where_holders_are_follows_the_exact_solution(self, monkeypatch, emergence, law):
        monkeypatch.setattr(_history, "TURNOVER", 0.9)
        monkeypatch.setattr(_history, "SPAN", 40.0)  # five holders at most: all is over long before
        path = _history.World(((1,), (0, 2), (1, 3), (2, 4), (3,)), tuple((i,) for i in range(5)))
        dice, seen = Dice(13, int(10 * emergence)), Counter()
        while seen.total() < 2000:
            shares = (emergence, 1.0 - emergence, 0.0)
            holders, _ = _history.one_snapshot(path, shares, [1.0] * 5, dice)
            if len(holders) == 3:
                seen[sum(j - i == 1 for i, j in pairwise(holders))] += 1
        got = np.array([seen[k] for k in range(3)]) / seen.total()
        se = np.sqrt(np.array(law) * (1 - np.array(law)) / seen.total())
        assert np.all(np.abs(got - law) < 4 * se)

    def test_inheritance_stays_in_the_family_until_it_is_full(self):
        kin = ((0, 1, 2), (0, 1, 2), (0, 1, 2), (), (), (), ())
        world = _history.World(((),) * 7, kin)
        dice = Dice(17, 0)
        for _ in range(300):
            holders, gained = _history.one_snapshot(world, (0.0, 0.0, 1.0), [1.0] * 7, dice)
            assert gained[1] == 0
            if gained[0] == 0:
                assert set(holders) <= {0, 1, 2}

    def test_contact_graph_is_the_default_one(self, catalogue):
        near = _history.contact_neighbours(make_example().peoples.sites)
        ours = {(i, j) for i, each in enumerate(near) for j in each if i < j}
        graph = contact_graph(catalogue, "nearest:6")
        assert ours == {(int(i), int(j)) for i, j in graph.edges}

    def test_records_follow_effort(self):
        world = make_example()
        chance = np.array([-np.expm1(-0.06 * s.effort) for s in world.peoples.sites])
        expected = found = spread = 0.0
        for motif in world.motifs:
            p = chance[[i for i in motif.holders if motif.searched[i]]]
            expected += p.sum()
            spread += (p * (1 - p)).sum()
            found += len(motif.recorded)
        # Motifs recorded under three times were drawn anew, which lifts the total a little.
        assert -4 * spread**0.5 < found - expected < 4 * spread**0.5 + 0.1 * expected
