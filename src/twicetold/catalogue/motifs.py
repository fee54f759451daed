"""The motifs table, and the growing list of motifs where there is none."""

from __future__ import annotations

from dataclasses import dataclass, field

from twicetold.catalogue.cells import clean_id, clean_text, optional_text, warn_formula
from twicetold.catalogue.columns import Columns, misspelt_access, row_access, unnamed_access
from twicetold.catalogue.notes import shown
from twicetold.catalogue.rules import CatalogueRules
from twicetold.catalogue.tables import Table
from twicetold.catalogue.traditions import HIDDEN


@dataclass
class MotifRows:
    """Motifs known so far, in order of appearance; ``index`` gives each id its code.

    ``closed`` says that a motifs table listed them all, so that any other id is unknown.
    """

    file: str = ""
    closed: bool = False
    ids: list[str] = field(default_factory=list)
    names: list[str] = field(default_factory=list)
    categories: list[str] = field(default_factory=list)
    access: list[str] = field(default_factory=list)
    rows: list[int] = field(default_factory=list)
    index: dict[str, int] = field(default_factory=dict)
    withheld: int = 0
    restricted: int = 0

    def add(
        self, motif_id: str, name: str = "", category: str = "", access: str = "open", row: int = 0
    ) -> int:
        """Append a motif and hand back its code."""
        code = len(self.ids)
        self.index[motif_id] = code
        self.ids.append(motif_id)
        self.names.append(name or motif_id)
        self.categories.append(category)
        self.access.append(access)
        self.rows.append(row)
        return code

    @property
    def public_ids(self) -> list[str]:
        """Ids that may be named in a message."""
        return [i for i, a in zip(self.ids, self.access, strict=True) if a == "open"]


def read_motifs(table: Table, columns: Columns, rules: CatalogueRules) -> MotifRows | None:
    """Read and check the motifs table; None when it cannot be used at all."""
    if misspelt_access(table, columns):
        return None
    out = MotifRows(table.file, closed=True)
    hidden: set[str] = set()
    at = columns["id"]
    for chunk in table.chunks():
        if unnamed_access(table, chunk, columns):
            return None
        marks = chunk.columns[columns["access"]] if "access" in columns else None
        for k, row in enumerate(chunk.rows.tolist()):
            access = row_access(table, columns, marks, k, row)
            raw = chunk.columns[at][k]
            if access == "withheld" or (access == "restricted" and not rules.restricted):
                out.withheld += access == "withheld"
                out.restricted += access == "restricted"
                hidden.add(raw.strip())
                continue
            identity = clean_id(raw, table.spot(row, at))
            if not identity:
                hidden.add(raw.strip())
                continue
            warn_formula(identity, table.spot(row, at))
            if identity == "*":
                _say_reserved(table, at, row)
                continue
            if identity in out.index:
                _say_repeated(table, at, row, out, identity)
                continue
            name, category = (
                _text(table, columns, part, [c[k] for c in chunk.columns], row)
                for part in ("name", "category")
            )
            out.add(identity, name, optional_text(category), access, row)
    if table.stopped:
        return None
    hidden.update(cells[at].strip() for cells in table.ragged if len(cells) > at)
    return _settle(out, hidden, table, at)


def _text(table: Table, columns: Columns, part: str, cells: list[str], row: int) -> str:
    if part not in columns or cells[columns[part]] in table.nulls.get(columns[part], ()):
        return ""
    column = table.header[columns[part]]
    out = clean_text(cells[columns[part]], table.spot(row, column=column))
    warn_formula(out, table.spot(row, column=column))
    return out


def _say_repeated(table: Table, at: int, row: int, out: MotifRows, identity: str) -> None:
    code = out.index[identity]
    name = shown(identity) if out.access[code] == "open" else "of a restricted row"
    table.spot(row, at).error(
        "repeated motif",
        f"the id {name} already stands in row {out.rows[code]}.",
        "Give each motif one row and its own id.",
    )


def _say_reserved(table: Table, at: int, row: int) -> None:
    table.spot(row, at).error(
        "reserved id", "the id '*' stands for every motif.", "Give the motif another id."
    )


def _settle(out: MotifRows, hidden: set[str], table: Table, at: int) -> MotifRows:
    for identity in hidden:
        if identity in out.index:
            table.spot(out.rows[out.index[identity]], at).error(
                "repeated motif",
                "its id stands in more than one row of the table.",
                "Give each motif one row and its own id.",
            )
        out.index[identity] = HIDDEN
    if not out.ids and not table.notes.broken:
        table.spot().error(
            "no motifs",
            "has no motif that may enter.",
            "List the motifs, one a row, or leave the table out.",
        )
    return out
