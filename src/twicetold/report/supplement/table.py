"""Tables of a deposit as text, and CSV that no spreadsheet can take for formulas.

A text cell that a spreadsheet could run gets one apostrophe in front. Cells that begin with an
apostrophe get one more, so that taking one away gives back exactly what was there.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from twicetold.evidence.columns import Column

#: Where a cell begins: at its start, and (in places where a semicolon or a tab parts the cells of
#: a CSV file) after one of these.
_STARTS = r"(?:^|(?<=[;\t\n\r]))"
_RUNS = re.compile(_STARTS + r"(?='|[\s\"]*[=+\-@\uFF1D\uFF0B\uFF0D\uFF20])")
_GUARD = re.compile(_STARTS + "'")
__all__ = [
    "NUMERIC",
    "Column",
    "Table",
    "csv_text",
    "guarded",
    "is_formula_like",
    "read_rows",
    "unguarded",
]

NUMERIC = ("integer", "number")


def guarded(text: str) -> str:
    """Give a text cell that no spreadsheet takes for a formula."""
    return _RUNS.sub("'", text)


def unguarded(text: str) -> str:
    """Give back what :func:`guarded` was given."""
    return _GUARD.sub("", text)


def is_formula_like(text: str) -> bool:
    """Whether a spreadsheet could take the text for a formula."""
    return guarded(text) != text


@dataclass(frozen=True)
class Table:
    """One table of a deposit, every cell as text.

    Parameters
    ----------
    name : str
        Also its file's name without ``.csv``: ``S1_motifs``.
    title : str
        One sentence on what it holds.
    columns : tuple of Column
    rows : tuple of tuple of str
        Cells as text, not guarded; numbers as in the CSV.
    key : tuple of str
        Columns that name a row; empty where rows have no name.
    references : tuple of (column, table, column)
        Where ids point to.
    """

    name: str
    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[str, ...], ...]
    key: tuple[str, ...] = ()
    references: tuple[tuple[str, str, str], ...] = field(default_factory=tuple)

    @property
    def header(self) -> tuple[str, ...]:
        """Names of the columns."""
        return tuple(c.name for c in self.columns)

    def csv(self) -> str:
        """Give the table as CSV text: line feeds, text cells guarded."""
        text = [c.kind not in NUMERIC for c in self.columns]
        return csv_text(self.header, self.rows, text)

    def column(self, name: str) -> list[str]:
        """Cells of one column."""
        at = self.header.index(name)
        return [row[at] for row in self.rows]


def csv_text(header: Sequence[str], rows: Iterable[Sequence[str]], text: Sequence[bool]) -> str:
    """Write CSV; the columns marked in ``text`` are guarded."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(header)
    for row in rows:
        writer.writerow([guarded(c) if t else c for c, t in zip(row, text, strict=True)])
    return out.getvalue()


def read_rows(path: Path, *, guard: bool = False) -> tuple[tuple[str, ...], list[tuple[str, ...]]]:
    """Read a CSV file of ours as text: its header and its rows.

    Parameters
    ----------
    path : Path
    guard : bool
        Whether its cells are guarded; they are then given back as they were.
    """
    with path.open(encoding="utf-8", newline="") as handle:
        # A cell never comes near this length; the module's own limit would break long notices.
        csv.field_size_limit(10_000_000)
        lines = [tuple(row) for row in csv.reader(handle) if row]
    if not lines:
        return (), []
    head, body = lines[0], lines[1:]
    if guard:
        body = [tuple(unguarded(c) for c in row) for row in body]
    return head, body


def is_number(text: str) -> bool:
    """Whether a cell holds a plain number, as our own tables write them."""
    return re.fullmatch(r"-?(\d+(\.\d+)?([eE][+-]?\d+)?|INF)", text) is not None


def infinite(text: str) -> str:
    """Infinity as table schemas write it; any other cell as it is."""
    return text.upper() if text in ("inf", "-inf") else text


def kind_of(cells: Iterable[str]) -> str:
    """Kind of a column that no dictionary describes, from its cells."""
    given = [c for c in cells if c]
    if not given or not all(map(is_number, given)):
        return "string"
    return "integer" if all(re.fullmatch(r"-?\d+", c) for c in given) else "number"
