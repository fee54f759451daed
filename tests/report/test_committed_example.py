"""reports/example is what the program makes of the archipelago now, or this says it is stale."""

from __future__ import annotations

import importlib.util
import json
from pathlib import Path

import pandas as pd
import pytest

from twicetold.catalogue import read_catalogue
from twicetold.evidence import rank_catalogue
from twicetold.plan import read_plan

REPO = Path(__file__).resolve().parents[2]
EXAMPLE = REPO / "reports" / "example"
AGAIN = "Stale: run `python reports/make_example.py` and look at what it makes."


@pytest.fixture(scope="module")
def maker():
    spec = importlib.util.spec_from_file_location("make_example", REPO / "reports/make_example.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_looks_are_those_of_now(maker):
    made = json.loads((EXAMPLE / "made.json").read_text(encoding="utf-8"))
    assert made["looks"] == maker.looks(), AGAIN


def test_numbers_are_those_of_now(example_folder):
    # The worlds that take a second; the others are tested where they are made.
    kept = pd.read_csv(EXAMPLE / "run" / "motifs.csv")
    plan = read_plan(EXAMPLE / "run" / "run.json")
    quick = plan.replace(
        evidence__worlds=("emergence", "ancestry"),
        sensitivity__stability=False,
        sensitivity__hidden=False,
    )
    now = rank_catalogue(read_catalogue(example_folder), quick, details=False).motifs
    columns = [
        "motif_id",
        "holders",
        "surveyed",
        "joins",
        "joins_expected",
        "moran_i",
        "clusters",
        "strands",
        "p_attainable",
        "p_against_emergence",
        "q_against_emergence",
        "p_against_ancestry",
    ]
    left = now.sort_values("motif_id")[columns].reset_index(drop=True)
    right = kept.sort_values("motif_id")[columns].reset_index(drop=True)
    pd.testing.assert_frame_equal(left, right, check_exact=False, rtol=1e-9, obj=AGAIN)


def test_pages_and_deposit_are_there():
    for name in ("index.html", "motifs.csv", "plan.toml", "run.json", "methods.md"):
        assert (EXAMPLE / "run" / name).is_file(), AGAIN
    assert 5 <= len(list((EXAMPLE / "run" / "motifs").glob("*.html"))) <= 8, AGAIN
    assert (EXAMPLE / "deposit" / "datapackage.json").is_file(), AGAIN
    size = sum(p.stat().st_size for p in EXAMPLE.rglob("*") if p.is_file())
    assert size < 8_000_000
