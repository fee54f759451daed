"""Which column plays which part, and the guard over the access column."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from typing import Final

from twicetold.catalogue.cells import access_of
from twicetold.catalogue.notes import shown, suggestion
from twicetold.catalogue.tables import Chunk, Table

Columns = Mapping[str, int]

TRADITION_PARTS: Final = {
    "id": ("tradition_id", "id"),
    "name": ("name",),
    "latitude": ("latitude",),
    "longitude": ("longitude",),
    "family": ("family",),
    "branch": ("branch",),
    "region": ("region",),
    "effort": ("effort",),
    "access": ("access",),
    "label": ("label",),
}
MOTIF_PARTS: Final = {
    "id": ("motif_id", "id"),
    "name": ("name",),
    "category": ("category",),
    "access": ("access",),
}
ATTESTATION_PARTS: Final = {
    "motif": ("motif_id",),
    "tradition": ("tradition_id",),
    "state": ("state",),
    "source": ("source",),
}
SURVEYED_PARTS: Final = {"motif": ("motif_id",), "tradition": ("tradition_id",)}
CONTACT_PARTS: Final = {"tradition": ("tradition_id",), "neighbour": ("neighbour_id",)}


def find_columns(
    table: Table,
    parts: Mapping[str, tuple[str, ...]],
    required: tuple[str, ...],
) -> dict[str, int] | None:
    """Index of the column of each part by name (any case); None when a required one is missing."""
    folded = {name.casefold(): k for k, name in reversed(list(enumerate(table.header))) if name}
    found: dict[str, int] = {}
    for part, names in parts.items():
        for name in names:
            if name in folded:
                found[part] = folded[name]
                break
    missing = [part for part in required if part not in found]
    for part in missing:
        name = parts[part][0]
        spare = [h for k, h in enumerate(table.header) if k not in found.values()]
        table.spot(table.header_row, column=name).error(
            "missing column",
            f"has no column {name!r}.",
            f"Name the columns in the first row.{suggestion(name, spare)}",
        )
    return None if missing else found


def asked_columns(table: Table, found: dict[str, int], asked: Mapping[str, str]) -> None:
    """Put the columns that the plan names for a part in place of the usual ones."""
    folded = {name.casefold(): k for k, name in enumerate(table.header) if name}
    for part, name in asked.items():
        if not name or name.casefold() == part:
            continue  # the usual name asks for nothing: the column may be there or not
        if name.casefold() in folded:
            found[part] = folded[name.casefold()]
            continue
        table.spot(table.header_row).error(
            "missing column",
            f"has no column {shown(name)}, which the plan names for {part}.",
            f"Correct the plan or the table.{suggestion(name, table.header)}",
        )


def misspelt_access(table: Table, columns: Columns) -> bool:
    """Whether a column is named almost like ``access``; rows could slip through unprotected."""
    if "access" in columns:
        return False
    for name in table.header:
        closeness = difflib.SequenceMatcher(None, name.casefold()[:40], "access").ratio()
        if closeness > 0.8:
            _say_access(table, name, "is named almost like 'access'")
            return True
    return False


def unnamed_access(table: Table, chunk: Chunk, columns: Columns) -> bool:
    """Whether access marks stand in a column that is not ``access``."""
    if "access" in columns:
        return False
    for name, cells in zip(table.header, chunk.columns, strict=True):
        marks = {c.strip().casefold() for c in set(cells) if len(c) < 20}
        if "withheld" in marks:
            _say_access(table, name, "holds the mark 'withheld'")
            return True
    return False


def _say_access(table: Table, name: str, why: str) -> None:
    table.spot(table.header_row).error(
        "unclear access",
        f"the column {shown(name)} {why}, so rows meant to be protected might not be.",
        "Name the column 'access' (with open, restricted or withheld), or rename it clearly.",
    )


def row_access(
    table: Table, columns: Columns, cells: tuple[str, ...] | None, k: int, row: int
) -> str:
    """Access of one row; an unknown mark is noted and treated as withheld."""
    if cells is None:
        return "open"
    access = access_of(cells[k])
    if access:
        return access
    table.spot(row, columns["access"]).error(
        "unknown access",
        f"{shown(cells[k], 30)} is no kind of access.",
        "Write open, restricted or withheld; a blank means open.",
    )
    return "withheld"
