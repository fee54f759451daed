"""The optional contacts table: a contact graph drawn by hand."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from twicetold.catalogue.attestations import UNKNOWN, say_unknown
from twicetold.catalogue.cells import clean_id
from twicetold.catalogue.columns import find_columns
from twicetold.catalogue.model import IntArray
from twicetold.catalogue.tables import Table
from twicetold.catalogue.traditions import HIDDEN, TraditionRows


def read_contacts(
    table: Table, parts: Mapping[str, tuple[str, ...]], traditions: TraditionRows
) -> IntArray | None:
    """(C, 2) int32 edges i < j, sorted; contacts of traditions left out are passed over."""
    columns = find_columns(table, parts, ("tradition", "neighbour"))
    if columns is None:
        return None
    n = len(traditions.located)
    seen: dict[tuple[int, int], int] = {}
    for chunk in table.chunks():
        for k, row in enumerate(chunk.rows.tolist()):
            ends = [
                _end(table, chunk.columns[columns[part]][k], columns[part], row, traditions)
                for part in ("tradition", "neighbour")
            ]
            if min(ends) < 0 or max(ends) >= n:
                continue
            if ends[0] == ends[1]:
                table.spot(row).error(
                    "contact with itself", "joins a tradition with itself.", "Remove the row."
                )
                continue
            pair = (min(ends), max(ends))
            if pair in seen:
                table.spot(row).warn(
                    "repeated contact",
                    f"repeats row {seen[pair]}; contacts have no direction.",
                    "Remove one of the rows.",
                )
                continue
            seen[pair] = row
    return np.array(sorted(seen), dtype=np.int32).reshape(-1, 2)


def _end(table: Table, raw: str, at: int, row: int, traditions: TraditionRows) -> int:
    code = traditions.index.get(raw.strip(), UNKNOWN)
    if code == HIDDEN:
        return HIDDEN
    identity = clean_id(raw, table.spot(row, at))
    if code == UNKNOWN and identity:
        say_unknown(table.spot(row, at), identity, traditions)
    return code
