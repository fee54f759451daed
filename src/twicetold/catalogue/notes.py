"""Problems collected while reading: sorted, counted by kind, and never more than can be read."""

from __future__ import annotations

import difflib
import unicodedata
from collections.abc import Iterable
from dataclasses import dataclass, field

from twicetold.catalogue.limits import PROBLEMS_SHOWN
from twicetold.errors import Problem

_SUGGESTION_POOL = 2_000


def shown(text: str, longest: int = 60) -> str:
    """Quote a cell for a message: shortened, with invisible characters escaped."""
    cut = text if len(text) <= longest else text[: longest - 1] + "…"
    return repr(cut)


def near(word: str, known: Iterable[str], most: int = 3) -> list[str]:
    """Known ids that a writer may have meant: same but for case or accents, or few letters off."""
    folded = _fold(word)
    same: list[str] = []
    pool: list[str] = []
    for candidate in known:
        if _fold(candidate) == folded:
            same.append(candidate)
        elif (
            len(pool) < _SUGGESTION_POOL
            and abs(len(candidate) - len(word)) <= 2
            and candidate
            and word
            and (candidate[0].casefold() == word[0].casefold() or candidate[-1] == word[-1])
        ):
            pool.append(candidate)
    if same:
        return sorted(same)[:most]
    return difflib.get_close_matches(word[:200], sorted(pool), n=most, cutoff=0.7)


def suggestion(word: str, known: Iterable[str]) -> str:
    """Say which known ids were perhaps meant, or nothing."""
    found = near(word, known)
    return f" Did you mean {' or '.join(shown(x) for x in found)}?" if found else ""


def _fold(word: str) -> str:
    return unicodedata.normalize("NFC", word[:400]).strip().casefold()


@dataclass
class _Pile:
    """Problems of one kind in one file and column."""

    kept: list[Problem] = field(default_factory=list)
    beyond: int = 0
    first_beyond: int = 0


class Notes:
    """Collects errors and warnings; keeps the first of each kind and counts the others."""

    def __init__(self) -> None:
        self._errors: dict[tuple[str, str, str], _Pile] = {}
        self._warnings: dict[tuple[str, str, str], _Pile] = {}

    def error(self, kind: str, problem: Problem) -> None:
        """Record something that must be mended before anything is computed."""
        _drop_on(self._errors, kind, problem)

    def warn(self, kind: str, problem: Problem) -> None:
        """Record something worth knowing."""
        _drop_on(self._warnings, kind, problem)

    def full(self, kind: str, file: str, column: str = "") -> bool:
        """Whether another problem of this kind would only be counted."""
        for piles in (self._errors, self._warnings):
            pile = piles.get((kind, file, column))
            if pile is not None and len(pile.kept) >= PROBLEMS_SHOWN:
                return True
        return False

    @property
    def broken(self) -> bool:
        """Whether any error was recorded."""
        return bool(self._errors)

    def errors(self) -> tuple[Problem, ...]:
        """Errors in file, row and column order."""
        return _listed(self._errors)

    def warnings(self) -> tuple[Problem, ...]:
        """Warnings in file, row and column order."""
        return _listed(self._warnings)


@dataclass(frozen=True)
class Spot:
    """A place in a file where something is noted."""

    notes: Notes
    file: str
    row: int = 0
    column: str = ""

    def error(self, kind: str, what: str, remedy: str) -> None:
        """Record something here that must be mended before anything is computed."""
        self.notes.error(
            kind, Problem(plain(self.file), self.row, plain(self.column), what, remedy)
        )

    def warn(self, kind: str, what: str, remedy: str) -> None:
        """Record something here that is worth knowing."""
        self.notes.warn(kind, Problem(plain(self.file), self.row, plain(self.column), what, remedy))


def plain(text: str) -> str:
    """A file or column name fit for a message: invisible characters replaced, and not too long."""
    cut = text[:100]
    return cut if cut.isprintable() else "".join(c if c.isprintable() else "?" for c in cut)


def _drop_on(piles: dict[tuple[str, str, str], _Pile], kind: str, problem: Problem) -> None:
    pile = piles.setdefault((kind, problem.file, problem.column), _Pile())
    if len(pile.kept) < PROBLEMS_SHOWN:
        pile.kept.append(problem)
        return
    if pile.beyond == 0:
        pile.first_beyond = problem.row
    pile.beyond += 1


def _listed(piles: dict[tuple[str, str, str], _Pile]) -> tuple[Problem, ...]:
    out: list[Problem] = []
    for (kind, file, column), pile in piles.items():
        out.extend(pile.kept)
        if pile.beyond:
            out.append(
                Problem(
                    file,
                    pile.first_beyond,
                    column,
                    f"and {pile.beyond:,} more of this kind ({kind}).",
                    "Mend those listed first, then check again." if pile.first_beyond else "",
                )
            )
    return tuple(sorted(out))
