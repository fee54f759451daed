"""Read a catalogue: tables in, checked and frozen :class:`Catalogue` out, problems together."""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import dataclass
from os import PathLike
from pathlib import Path

from twicetold.catalogue.about import About, read_about_file, read_about_sheet, read_land
from twicetold.catalogue.attestations import CellLog, read_pairs, state_column
from twicetold.catalogue.cldf import CldfDataset, CldfTable, family_label, open_cldf
from twicetold.catalogue.columns import (
    ATTESTATION_PARTS,
    CONTACT_PARTS,
    MOTIF_PARTS,
    SURVEYED_PARTS,
    TRADITION_PARTS,
    asked_columns,
    find_columns,
)
from twicetold.catalogue.contacts import read_contacts
from twicetold.catalogue.detect import detect, folder_tables
from twicetold.catalogue.freeze import freeze
from twicetold.catalogue.matrix import read_matrix
from twicetold.catalogue.model import Catalogue, IntArray, SourceFile
from twicetold.catalogue.motifs import MotifRows, read_motifs
from twicetold.catalogue.notes import Notes, Spot
from twicetold.catalogue.presence import Presence, build_presence, settle_duplicates
from twicetold.catalogue.rules import CatalogueRules
from twicetold.catalogue.tables import Table
from twicetold.catalogue.traditions import TraditionRows, read_traditions
from twicetold.catalogue.values import judge, value_reader
from twicetold.catalogue.workbook import workbook_tables
from twicetold.errors import CatalogueError, Problem

_ASKED = ("effort", "family", "branch", "region")


@dataclass
class Parts:
    """Everything read, before it is frozen."""

    about: About
    traditions: TraditionRows
    motifs: MotifRows
    presence: Presence
    contacts: IntArray | None
    file: str


def read_catalogue(path: str | PathLike[str], rules: CatalogueRules | None = None) -> Catalogue:
    """Read and check a catalogue.

    Parameters
    ----------
    path : path
        A folder of CSV or TSV tables, an .xlsx workbook, a CLDF metadata file, or a folder that
        holds one.
    rules : CatalogueRules, optional
        The catalogue part of the plan.

    Returns
    -------
    Catalogue
        Traditions and motifs in order of their ids, so that the order of rows never matters.

    Raises
    ------
    CatalogueError
        With every problem found.
    """
    catalogue, problems = check_catalogue(path, rules)
    if catalogue is None:
        raise CatalogueError(problems)
    return catalogue


def check_catalogue(
    path: str | PathLike[str], rules: CatalogueRules | None = None
) -> tuple[Catalogue | None, tuple[Problem, ...]]:
    """Read a catalogue and hand back every problem instead of raising.

    Returns
    -------
    catalogue : Catalogue or None
        None when anything must be mended first.
    problems : tuple of Problem
        What must be mended or, when there is a catalogue, its warnings.
    """
    notes = Notes()
    where = Path(path)
    catalogue: Catalogue | None = None
    try:
        with ExitStack() as stack:
            catalogue = _read(where, rules or CatalogueRules(), notes, stack)
    except MemoryError:
        Spot(notes, where.name).error(
            "too large",
            "does not fit into memory.",
            "Give it as an attestations table, or use a larger machine.",
        )
    except Exception as exc:  # a fault of ours must not show rows that may be protected
        Spot(notes, where.name or str(where)).error(
            "unreadable",
            f"could not be read ({type(exc).__name__}).",
            "Check that the files are complete and may be read; save them again if need be.",
        )
    if catalogue is None or notes.broken:
        return None, notes.errors()
    return catalogue, catalogue.warnings


def _read(path: Path, rules: CatalogueRules, notes: Notes, stack: ExitStack) -> Catalogue | None:
    found = detect(path, notes)
    if found is None:
        return None
    sources: list[SourceFile] = []
    about = About()
    if found.kind == "cldf":
        parts = _read_cldf(found.path, about, rules, notes, sources)
    else:
        if found.kind == "workbook":
            tables = workbook_tables(found.path, notes, sources, stack) or {}
        else:
            tables = folder_tables(found.folder, notes, sources)
        if "about" in tables:
            read_about_sheet(tables["about"], about, notes)
        parts = _read_tables(found.path.name, tables, about, rules, notes)
    beside: list[SourceFile] = []
    if found.kind != "workbook":
        read_about_file(found.folder, about, notes, beside)
    land = read_land(found.folder, notes, beside)
    if parts is None or notes.broken:
        return None
    return freeze(parts, notes, sources=sources, beside=beside, land=land)


def _read_tables(
    name: str, tables: dict[str, Table], about: About, rules: CatalogueRules, notes: Notes
) -> Parts | None:
    if notes.broken:
        return None
    if not _has_tables(name, tables, notes):
        return None
    table = tables["traditions"]
    columns = find_columns(table, TRADITION_PARTS, ("id", "latitude", "longitude"))
    if columns is None:
        return None
    asked_columns(table, columns, {part: rules.column(part) for part in _ASKED})
    traditions = read_traditions(table, columns, rules)
    motifs = _motifs(tables.get("motifs"), rules)
    if traditions is None or motifs is None:
        return None
    presence = (
        read_matrix(tables["matrix"], traditions, motifs)
        if "matrix" in tables
        else _presence(tables, traditions, motifs, rules, notes)
    )
    contacts = None
    if "contacts" in tables:
        contacts = read_contacts(tables["contacts"], CONTACT_PARTS, traditions)
    if presence is None:
        return None
    file = tables["matrix" if "matrix" in tables else "attestations"].file
    return Parts(about, traditions, motifs, presence, contacts, file)


def _has_tables(name: str, tables: dict[str, Table], notes: Notes) -> bool:
    for wanted in ("traditions", "attestations"):
        if wanted in tables or (wanted == "attestations" and "matrix" in tables):
            continue
        other = " (or a matrix)" if wanted == "attestations" else ""
        Spot(notes, name).error(
            "missing table",
            f"has no table {wanted!r}{other}.",
            f"Add {wanted}.csv, or a sheet called {wanted}.",
        )
    if "attestations" in tables and "matrix" in tables:
        Spot(notes, name).error(
            "two tables", "has both attestations and a matrix.", "Keep one of them."
        )
    for key, table in tables.items():
        if not table.header and key in ("traditions", "motifs", "attestations", "matrix"):
            table.spot().error(
                "empty table",
                "is empty.",
                "Put the column names in the first row and the data below.",
            )
    return not notes.broken


def _motifs(table: Table | None, rules: CatalogueRules) -> MotifRows | None:
    if table is None:
        return MotifRows()
    columns = find_columns(table, MOTIF_PARTS, ("id",))
    return None if columns is None else read_motifs(table, columns, rules)


def _presence(
    tables: dict[str, Table],
    traditions: TraditionRows,
    motifs: MotifRows,
    rules: CatalogueRules,
    notes: Notes,
) -> Presence | None:
    table = tables["attestations"]
    columns = find_columns(table, ATTESTATION_PARTS, ("motif", "tradition"))
    if columns is None:
        return None
    interpret = state_column(table, columns["state"]) if "state" in columns else None
    log = read_pairs(table, columns, traditions, motifs, interpret=interpret)
    surveyed: CellLog | None = None
    if "surveyed" in tables:
        listing = tables["surveyed"]
        found = find_columns(listing, SURVEYED_PARTS, ("motif", "tradition"))
        if found is not None:
            surveyed = read_pairs(listing, found, traditions, motifs, star=True)
    if not log.motif and not notes.broken:
        table.spot().error(
            "no attestations", "has no rows.", "List the records, one motif and tradition a row."
        )
        return None
    return build_presence(
        settle_duplicates(log, notes, lenient=False),
        surveyed,
        file=table.file,
        m=len(motifs.ids),
        n=len(traditions.located),
        searched=rules.absent_rows == "searched",
        notes=notes,
    )


def _read_cldf(
    path: Path, about: About, rules: CatalogueRules, notes: Notes, sources: list[SourceFile]
) -> Parts | None:
    dataset = open_cldf(path, notes, sources)
    if dataset is None:
        return None
    about.title, about.license, about.citation = dataset.title, dataset.license, dataset.citation
    columns = _language_columns(dataset.tables["LanguageTable"], notes)
    values = dataset.tables["ValueTable"]
    wanted = {"languageReference", "parameterReference", "value"}
    if missing := sorted(wanted - values.properties.keys()):
        _say_no_property(values.table, missing, notes)
    if columns is None or notes.broken:
        return None
    languages = dataset.tables["LanguageTable"].table
    asked_columns(languages, columns, {part: rules.column(part) for part in _ASKED})
    traditions = read_traditions(languages, columns, rules)
    motifs = _parameters(dataset, rules, notes)
    if traditions is None or motifs is None:
        return None
    for tradition in traditions.located:
        tradition.family = family_label(tradition.family)
    pair = {
        "motif": values.properties["parameterReference"],
        "tradition": values.properties["languageReference"],
    }
    reader = value_reader(values, dataset.tables.get("CodeTable"), motifs)
    log = read_pairs(values.table, pair, traditions, motifs, interpret=reader.interpret)
    judge(reader, log, rules)
    presence = build_presence(
        settle_duplicates(log, notes, lenient=True),
        None,
        file=values.table.file,
        m=len(motifs.ids),
        n=len(traditions.located),
        searched=rules.absent_rows == "searched",
        notes=notes,
    )
    return Parts(about, traditions, motifs, presence, None, values.table.file)


def _language_columns(languages: CldfTable, notes: Notes) -> dict[str, int] | None:
    wanted = ("id", "latitude", "longitude")
    found = {p: languages.properties[p] for p in (*wanted, "name") if p in languages.properties}
    if missing := [p for p in wanted if p not in found]:
        _say_no_property(languages.table, missing, notes)
        return None
    region = languages.first_filled(
        languages.properties.get("macroarea"), languages.named("region", "continent", "area")
    )
    for part, at in (
        ("family", languages.named("family")),
        ("branch", languages.named("branch", "subfamily")),
        ("region", region),
        ("effort", languages.named("effort")),
        ("access", languages.named("access")),
        ("label", languages.named("label")),
    ):
        if at is not None:
            found[part] = at
    return found


def _say_no_property(table: Table, missing: list[str], notes: Notes) -> None:
    table.spot().error(
        "missing column",
        f"has no column with the property {' or '.join(missing)}.",
        "Describe the columns with their CLDF propertyUrl in the metadata file.",
    )


def _parameters(dataset: CldfDataset, rules: CatalogueRules, notes: Notes) -> MotifRows | None:
    if "ParameterTable" not in dataset.tables:
        return MotifRows()
    parameters = dataset.tables["ParameterTable"]
    if "id" not in parameters.properties:
        _say_no_property(parameters.table, ["id"], notes)
        return None
    columns: dict[str, int] = {
        p: parameters.properties[p] for p in ("id", "name") if p in parameters.properties
    }
    for part in ("category", "access"):
        at = parameters.named(part)
        if at is not None:
            columns[part] = at
    return read_motifs(parameters.table, columns, rules)
