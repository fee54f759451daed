"""A small sound catalogue as rows, and ways to put it on disk as CSV, TSV or a workbook."""

from __future__ import annotations

import copy
import csv
import re
from collections.abc import Callable
from pathlib import Path

import openpyxl
import pytest

Tables = dict[str, list[list[str]]]

SOUND: Tables = {
    "traditions": [
        ["tradition_id", "name", "latitude", "longitude", "family", "effort", "access", "rain"],
        ["t1", "Oru", "-1.5", "10", "Low", "3", "", "100"],
        ["t2", "Beni", "2.25", "-11", "Low", "2.5", "open", "NA"],
        ["t3", "Kasi", "3", "12", "High", "1", "", "90.5"],
        ["t4", "Lomo", "4", "179.5", "", "7", "", "12"],
        ["t5", "Nowhere", "", "", "High", "1", "", "5"],
    ],
    "motifs": [
        ["motif_id", "name", "category", "access"],
        ["m1", "A boat of stone", "sea", ""],
        ["m2", "Twin drums", "sky", ""],
        ["m3", "A debt of salt", "sea", ""],
    ],
    "attestations": [
        ["motif_id", "tradition_id", "source"],
        ["m1", "t1", "notebook 4"],
        ["m1", "t2", ""],
        ["m1", "t5", ""],
        ["m2", "t3", ""],
        ["m3", "t1", ""],
        ["m3", "t4", ""],
    ],
}


@pytest.fixture
def sound() -> Tables:
    """Rows of a catalogue with nothing wrong; change them at will."""
    return copy.deepcopy(SOUND)


def write_csv(tables: Tables, folder: Path, suffix: str = ".csv") -> Path:
    folder.mkdir(parents=True, exist_ok=True)
    delimiter = "\t" if suffix == ".tsv" else ","
    for name, rows in tables.items():
        with (folder / f"{name}{suffix}").open("w", encoding="utf-8", newline="") as handle:
            csv.writer(handle, delimiter=delimiter).writerows(rows)
    return folder


def write_xlsx(tables: Tables, folder: Path) -> Path:
    folder.mkdir(parents=True, exist_ok=True)
    book = openpyxl.Workbook()
    book.remove(book.active)
    for name, rows in tables.items():
        sheet = book.create_sheet(name)
        for row in rows:
            sheet.append([_typed(cell) for cell in row])
    path = folder / "catalogue.xlsx"
    book.save(path)
    return path


def _typed(cell: str) -> object:
    """As a spreadsheet would hold it: numbers as numbers, blanks as nothing."""
    if cell == "":
        return None
    return float(cell) if re.fullmatch(r"-?[0-9]+(\.[0-9]+)?", cell) else cell


Writer = Callable[[Tables, Path], Path]


@pytest.fixture(params=["csv", "xlsx"])
def put(request: pytest.FixtureRequest) -> Writer:
    """Each test that takes this runs on CSV tables and on a workbook."""
    return write_csv if request.param == "csv" else write_xlsx
