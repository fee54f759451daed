"""What can be wrong with what a user gives, said so that they can mend it.

Every error says what must hold, what was given and what to do. Problems in tables are collected
and raised together, each with its file, row and column.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


class TwicetoldError(ValueError):
    """Base of every error a user can mend; the commands print it and exit with 2."""


class PlanError(TwicetoldError):
    """The analysis plan holds an unknown key or a value that cannot be used."""


class GraphError(TwicetoldError):
    """The contact graph cannot be built as asked."""


class TwicetoldWarning(UserWarning):
    """Something a reader of the results should know (never an error)."""


@dataclass(frozen=True, order=True)
class Problem:
    """One thing wrong (or worth knowing) in a catalogue's tables.

    Parameters
    ----------
    file : str
        File or sheet, as the user knows it (never an absolute path).
    row : int
        Row as a spreadsheet counts it (the header is row 1); 0 where no row applies.
    column : str
        Column name; empty where none applies.
    what : str
        What is wrong, with the value given.
    remedy : str
        What to do about it.
    """

    file: str
    row: int
    column: str
    what: str
    remedy: str

    def __str__(self) -> str:
        place = self.file
        if self.row:
            place += f", row {self.row}"
        if self.column:
            place += f", column {self.column}"
        return f"{place}: {self.what} {self.remedy}".rstrip()


class CatalogueError(TwicetoldError):
    """A catalogue cannot be used; ``problems`` holds every reason, in file and row order."""

    def __init__(self, problems: Sequence[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(p) for p in self.problems))


class UnknownMotifError(TwicetoldError):
    """No motif, or more than one, answers to the id or name given."""
