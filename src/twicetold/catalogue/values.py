"""The presence rule: which values of a CLDF parameter count as attestations.

By default any value that is not null is an attestation. A parameter whose values or codes are
plainly yes/no is read as such, and the report says so. The plan can list the values instead.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final

import numpy as np
import numpy.typing as npt

from twicetold.catalogue.attestations import CellLog, StateArray
from twicetold.catalogue.cldf import CldfTable
from twicetold.catalogue.model import CellState
from twicetold.catalogue.motifs import MotifRows
from twicetold.catalogue.notes import shown, suggestion
from twicetold.catalogue.rules import CatalogueRules
from twicetold.catalogue.tables import Chunk

YES_NO: Final = (
    ("1", "0"),
    ("true", "false"),
    ("yes", "no"),
    ("present", "absent"),
    ("attested", "not attested"),
    ("y", "n"),
    ("t", "f"),
    ("+", "-"),
)
CLEAR_NO: Final = frozenset({"0", "false", "absent", "not attested"})
"""Negatives that are plain even where no positive is met; "n" or "no" may be names of things."""
SOUNDS_NEGATIVE: Final = CLEAR_NO | {"no"}
OTHER: Final = "*"


@dataclass
class ValueReader:
    """Gives each row the number of its (value, code) pair; the pairs are judged afterwards."""

    values: CldfTable
    motifs: MotifRows
    codes: dict[str, str] = field(default_factory=dict)
    offered: dict[str, set[str]] = field(default_factory=dict)
    pairs: dict[tuple[str, str], int] = field(default_factory=dict)
    numbers: list[npt.NDArray[np.int32]] = field(default_factory=list)

    def interpret(self, chunk: Chunk, good: npt.NDArray[np.intp]) -> StateArray:
        """Note the pair numbers of the chosen rows; states are filled in by :func:`judge`."""
        at, code = self.values.properties["value"], self.values.properties.get("codeReference")
        values = chunk.columns[at]
        codes = chunk.columns[code] if code is not None else ("",) * len(values)
        pairs = self.pairs
        chosen = ((values[k], codes[k]) for k in good.tolist())
        self.numbers.append(
            np.fromiter(
                (pairs.setdefault(pair, len(pairs)) for pair in chosen),
                dtype=np.int32,
                count=len(good),
            )
        )
        return np.zeros(len(good), dtype=np.int8)


def value_reader(values: CldfTable, table: CldfTable | None, motifs: MotifRows) -> ValueReader:
    """A reader that knows the names of the codes, where the dataset has a code table."""
    reader = ValueReader(values, motifs)
    if table is None or "id" not in table.properties:
        return reader
    name = table.properties.get("name", table.properties["id"])
    parameter = table.properties.get("parameterReference")
    for chunk in table.table.chunks():
        names = chunk.columns[name]
        reader.codes.update(zip(chunk.columns[table.properties["id"]], names, strict=True))
        if parameter is not None:
            for motif, word in zip(chunk.columns[parameter], names, strict=True):
                reader.offered.setdefault(motif, set()).add(word)
    return reader


def judge(reader: ValueReader, log: CellLog, rules: CatalogueRules) -> None:
    """Replace the states of the log by what the presence rule makes of each row's value."""
    if not reader.numbers:
        return
    number = np.concatenate(reader.numbers).astype(np.int64)
    motif = np.concatenate(log.motif)
    wide = len(reader.pairs)
    combos, where = np.unique(motif * np.int64(wide) + number, return_inverse=True)
    texts = list(reader.pairs)
    by_motif: dict[int, list[int]] = {}
    for k, combo in enumerate(combos.tolist()):
        by_motif.setdefault(combo // wide, []).append(k)
    state = np.zeros(len(combos), dtype=np.int8)
    listed = {} if isinstance(rules.presence, str) else rules.presence
    motifs = reader.motifs
    _check_named(listed, reader)
    for code, places in by_motif.items():
        found = [texts[int(combos[k]) % wide] for k in places]
        wanted = listed.get(motifs.ids[code], listed.get(OTHER))
        states = (
            _by_default(reader, found, code)
            if wanted is None
            else _by_list(reader, found, wanted, code)
        )
        state[places] = states
    log.state[:] = [state[where]]


def _parts(reader: ValueReader, value: str) -> list[str]:
    """Values in one cell, without null marks; empty when nothing is known."""
    at = reader.values.properties["value"]
    nulls = reader.values.table.nulls.get(at, frozenset({""}))
    separator = reader.values.table.separators.get(at)
    pieces = value.split(separator) if separator else [value]
    return [p.strip() for p in pieces if p not in nulls and p.strip() and p.strip() not in nulls]


def _words(reader: ValueReader, pair: tuple[str, str]) -> set[str]:
    """Everything a row's value can be called: the value, its code, its code's name."""
    words = set(_parts(reader, pair[0]))
    if words and pair[1]:
        words |= {pair[1], reader.codes.get(pair[1], pair[1])}
    return words


def _negatives(words: list[set[str]], offered: set[str]) -> set[str]:
    """The negative of the yes/no pair that all these words belong to, or nothing.

    ``offered`` are the names of the parameter's codes, whether used or not.
    """
    met = set().union(*words)
    for yes, no in YES_NO:
        if no in met and met <= {yes, no} and (yes in met | offered or no in CLEAR_NO):
            return {no}
    return set()


def _by_default(reader: ValueReader, found: list[tuple[str, str]], code: int) -> list[int]:
    said = [{w.casefold() for w in _parts(reader, value)} for value, _ in found]
    named = [
        {reader.codes[c].strip().casefold()} if s and c in reader.codes else s
        for s, (_, c) in zip(said, found, strict=True)
    ]
    offered = {w.casefold() for w in reader.offered.get(reader.motifs.ids[code], ())}
    for words in (said, named):
        negative = _negatives(words, offered)
        if negative:
            _warn(
                reader,
                code,
                "yes/no parameter",
                "has yes/no values; the negatives are read as searched and absent.",
                "Set `presence` in the plan to have it otherwise.",
            )
            return [
                CellState.NOT_SEARCHED
                if not w
                else (CellState.ABSENT if w <= negative else CellState.ATTESTED)
                for w in words
            ]
    if any(w & SOUNDS_NEGATIVE for w in (*said, *named)):
        _warn(
            reader,
            code,
            "negative among values",
            "has values that sound like an absence among others; all count as attested.",
            "List the values that mean presence under `presence` in the plan.",
        )
    return [CellState.ATTESTED if s else CellState.NOT_SEARCHED for s in said]


def _by_list(
    reader: ValueReader, found: list[tuple[str, str]], wanted: tuple[str, ...], code: int
) -> list[int]:
    words = [_words(reader, pair) for pair in found]
    met = set().union(*words) if words else set()
    for value in wanted:
        if value not in met and reader.motifs.access[code] == "open":
            _warn(
                reader,
                code,
                "value never met",
                f"never has the value {shown(value)} that the plan lists.",
                f"Correct the plan if it is a slip.{suggestion(value, met)}",
            )
    chosen = set(wanted)
    return [
        CellState.NOT_SEARCHED
        if not w
        else (CellState.ATTESTED if w & chosen else CellState.ABSENT)
        for w in words
    ]


def _warn(reader: ValueReader, code: int, kind: str, what: str, remedy: str) -> None:
    is_open = reader.motifs.access[code] == "open"
    name = shown(reader.motifs.ids[code]) if is_open else "of restricted access"
    reader.values.table.spot().warn(kind, f"the parameter {name} {what}", remedy)


def _check_named(listed: Mapping[str, tuple[str, ...]], reader: ValueReader) -> None:
    for name in listed:
        if name != OTHER and name not in reader.motifs.index:
            reader.values.table.spot().error(
                "unknown motif",
                f"the plan lists values for the parameter {shown(name)}, which is not there.",
                f"Correct the plan.{suggestion(name, reader.motifs.public_ids)}",
            )
