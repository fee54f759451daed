"""What lies at a path: a folder of tables, a workbook, or a CLDF dataset."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO, Final

from twicetold.catalogue.cldf import is_cldf_metadata
from twicetold.catalogue.model import SourceFile
from twicetold.catalogue.notes import Notes, Spot
from twicetold.catalogue.tables import Table, open_table

NAMES: Final = ("traditions", "motifs", "attestations", "surveyed", "contacts", "matrix")
_SUFFIXES: Final = (".csv", ".tsv")
_MOST_ENTRIES: Final = 100_000


@dataclass(frozen=True)
class Found:
    """What the path holds; ``folder`` is where ``about.toml`` and ``land.geojson`` lie."""

    kind: str  # tables, workbook, cldf
    folder: Path
    path: Path


def detect(path: Path, notes: Notes) -> Found | None:
    """Say what lies at the path; None, with the reason, when it is no catalogue."""
    if not path.exists():
        Spot(notes, path.name or str(path)).error(
            "nothing there",
            "does not exist.",
            "Give a folder of tables, an .xlsx workbook or a CLDF metadata file.",
        )
        return None
    if path.is_dir():
        return _detect_folder(path, notes)
    suffix = path.suffix.lower()
    if path.is_file() and suffix in (".xlsx", ".xlsm"):
        return Found("workbook", path.parent, path)
    if path.is_file() and suffix == ".json":
        return Found("cldf", path.parent, path)
    remedy = "Give a folder of tables, an .xlsx workbook or a CLDF metadata file."
    if suffix in _SUFFIXES:
        remedy = "Give the folder that holds the tables, not one of them."
    elif suffix in (".xls", ".ods", ".numbers"):
        remedy = "Save it as .xlsx, or as CSV UTF-8 tables in a folder."
    Spot(notes, path.name).error("not a catalogue", "is not a catalogue.", remedy)
    return None


def _detect_folder(folder: Path, notes: Notes) -> Found | None:
    if _candidates(folder, "traditions"):
        return Found("tables", folder, folder)
    for place in (folder, folder / "cldf"):
        if not place.is_dir():
            continue
        found = sorted(p for p in place.glob("*-metadata.json") if p.is_file())
        cldf = [p for p in found if is_cldf_metadata(p)]
        if len(cldf) == 1:
            return Found("cldf", place, cldf[0])
        if len(cldf) > 1:
            Spot(notes, place.name or str(place)).error(
                "several datasets",
                f"holds {len(cldf)} CLDF datasets.",
                "Give the metadata file of the one that is meant.",
            )
            return None
    Spot(notes, folder.name or str(folder)).error(
        "missing table",
        "holds no traditions table and no CLDF metadata.",
        "Put traditions.csv and attestations.csv (or matrix.csv) there.",
    )
    return None


def _candidates(folder: Path, name: str) -> list[Path]:
    out = []
    for count, entry in enumerate(folder.iterdir()):
        if count > _MOST_ENTRIES:
            break
        if entry.stem.casefold() == name and entry.suffix.lower() in _SUFFIXES:
            out.append(entry)
    return sorted(out)


def folder_tables(folder: Path, notes: Notes, sources: list[SourceFile]) -> dict[str, Table]:
    """Open every known table of a folder."""
    tables: dict[str, Table] = {}
    for name in NAMES:
        found = _candidates(folder, name)
        if len(found) > 1:
            Spot(notes, name).error(
                "two tables",
                f"stands there {len(found)} times ({', '.join(p.name for p in found)}).",
                "Keep one of them.",
            )
            continue
        if not found:
            continue
        path = found[0]
        if not path.is_file():
            Spot(notes, path.name).error(
                "not a file", "is not an ordinary file.", "Put the table itself there."
            )
            continue
        table = open_table(_opener(path), path.name, notes, sources=sources)
        if table is not None:
            tables[name] = table
    return tables


def _opener(path: Path) -> Callable[[], BinaryIO]:
    return lambda: path.open("rb")
