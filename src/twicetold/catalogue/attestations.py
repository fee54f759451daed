"""Long tables of (motif, tradition) rows, read chunk by chunk into integer arrays."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from itertools import repeat
from typing import Final

import numpy as np
import numpy.typing as npt

from twicetold.catalogue.cells import clean_id, warn_formula
from twicetold.catalogue.columns import Columns
from twicetold.catalogue.model import CellState, IntArray
from twicetold.catalogue.motifs import MotifRows
from twicetold.catalogue.notes import Notes, shown, suggestion
from twicetold.catalogue.tables import Chunk, Table
from twicetold.catalogue.traditions import HIDDEN, TraditionRows

UNKNOWN: Final = -1
EVERY_MOTIF: Final = "*"
STAR: Final = 1 << 30
"""Code of the motif ``*``, which stands for every motif."""
STATE_WORDS: Final = {
    "": CellState.ATTESTED,
    "attested": CellState.ATTESTED,
    "absent": CellState.ABSENT,
    "searched and absent": CellState.ABSENT,
    "not searched": CellState.NOT_SEARCHED,
    "not applicable": CellState.NOT_APPLICABLE,
}

StateArray = npt.NDArray[np.int8]
Interpreter = Callable[[Chunk, npt.NDArray[np.intp]], StateArray]


@dataclass
class CellLog:
    """Rows read so far: motif and tradition codes, state, and row in the file."""

    file: str
    motif: list[IntArray] = field(default_factory=list)
    tradition: list[IntArray] = field(default_factory=list)
    state: list[StateArray] = field(default_factory=list)
    row: list[IntArray] = field(default_factory=list)

    def joined(self) -> tuple[IntArray, IntArray, StateArray, IntArray]:
        """The four columns as one array each; the pieces are let go."""
        parts = (self.motif, self.tradition, self.row)
        motif, tradition, row = (
            np.concatenate(p) if p else np.empty(0, dtype=np.int32) for p in parts
        )
        state = np.concatenate(self.state) if self.state else np.empty(0, dtype=np.int8)
        for part in (*parts, self.state):
            part.clear()
        return motif, tradition, state, row


def read_pairs(
    table: Table,
    columns: Columns,
    traditions: TraditionRows,
    motifs: MotifRows,
    notes: Notes,
    *,
    interpret: Interpreter | None = None,
    star: bool = False,
) -> CellLog:
    """Read (motif, tradition) rows; rows of hidden ids are passed over without a word.

    ``interpret`` gives the states of the chosen rows of a chunk; without it all are attested.
    ``star`` allows the motif ``*``, which is kept under the code ``STAR``.
    """
    log = CellLog(table.file)
    if star:
        motifs.index[EVERY_MOTIF] = STAR
    for chunk in table.chunks():
        motif = _codes(chunk, columns["motif"], motifs.index)
        tradition = _codes(chunk, columns["tradition"], traditions.index)
        if (motif == UNKNOWN).any():
            _resolve_motifs(table, chunk, columns["motif"], motif, tradition, motifs, notes)
        if (tradition == UNKNOWN).any():
            _resolve_traditions(
                table, chunk, columns["tradition"], tradition, motif, traditions, notes
            )
        good = np.flatnonzero((motif >= 0) & (tradition >= 0))
        states = (
            np.full(len(good), CellState.ATTESTED, dtype=np.int8)
            if interpret is None
            else interpret(chunk, good)
        )
        log.motif.append(motif[good])
        log.tradition.append(tradition[good])
        log.state.append(states)
        log.row.append(chunk.rows[good])
    if star:
        motifs.index.pop(EVERY_MOTIF, None)
    return log


def _codes(chunk: Chunk, at: int, index: dict[str, int]) -> IntArray:
    cells = chunk.columns[at]
    return np.fromiter(map(index.get, cells, repeat(UNKNOWN)), dtype=np.int32, count=len(cells))


def _resolve_motifs(
    table: Table,
    chunk: Chunk,
    at: int,
    codes: IntArray,
    traditions: IntArray,
    motifs: MotifRows,
    notes: Notes,
) -> None:
    """Second look at ids not found at once: padded, new (without a motifs table), or unknown."""
    column = table.header[at]
    cells = chunk.columns[at]
    for k in np.flatnonzero(codes == UNKNOWN).tolist():
        row = int(chunk.rows[k])
        raw = cells[k]
        known = motifs.index.get(raw.strip(), UNKNOWN)
        if known == HIDDEN or traditions[k] == HIDDEN:
            codes[k] = HIDDEN
            continue
        if raw in motifs.index:  # added a few rows above
            codes[k] = known
            continue
        identity = clean_id(raw, notes, file=table.file, row=row, column=column)
        if not identity:
            codes[k] = HIDDEN
        elif known >= 0:
            codes[k] = known
        elif not motifs.closed and identity != EVERY_MOTIF:
            warn_formula(identity, notes, file=table.file, row=row, column=column)
            codes[k] = motifs.add(identity, row=row)
        else:
            codes[k] = HIDDEN
            _say_unknown(
                "motif", identity, motifs.public_ids, motifs.file, table, column, row, notes
            )


def _resolve_traditions(
    table: Table,
    chunk: Chunk,
    at: int,
    codes: IntArray,
    motifs: IntArray,
    traditions: TraditionRows,
    notes: Notes,
) -> None:
    column = table.header[at]
    cells = chunk.columns[at]
    for k in np.flatnonzero(codes == UNKNOWN).tolist():
        row = int(chunk.rows[k])
        known = traditions.index.get(cells[k].strip(), UNKNOWN)
        if known == HIDDEN or motifs[k] == HIDDEN:
            codes[k] = HIDDEN
            continue
        identity = clean_id(cells[k], notes, file=table.file, row=row, column=column)
        codes[k] = known if identity and known >= 0 else HIDDEN
        if identity and known == UNKNOWN:
            _say_unknown(
                "tradition",
                identity,
                traditions.public_ids,
                traditions.file,
                table,
                column,
                row,
                notes,
            )


def _say_unknown(
    kind: str,
    identity: str,
    known: list[str],
    home: str,
    table: Table,
    column: str,
    row: int,
    notes: Notes,
) -> None:
    home = home or "the catalogue"
    hint = "" if notes.full(f"unknown {kind}", table.file, column) else suggestion(identity, known)
    notes.error(
        f"unknown {kind}",
        f"the {kind} {shown(identity)} is not in {home}.",
        f"Add it there or correct the id.{hint}",
        file=table.file,
        row=row,
        column=column,
    )


def state_column(table: Table, at: int, notes: Notes) -> Interpreter:
    """Interpreter of an optional ``state`` column."""

    def interpret(chunk: Chunk, good: npt.NDArray[np.intp]) -> StateArray:
        cells = chunk.columns[at]
        out = np.empty(len(good), dtype=np.int8)
        for k, place in enumerate(good.tolist()):
            word = " ".join(cells[place].replace("_", " ").replace("-", " ").casefold().split())
            state = STATE_WORDS.get(word)
            if state is None:
                notes.error(
                    "unknown state",
                    f"{shown(cells[place])} is no state of a cell.",
                    "Write attested, absent, not searched or not applicable.",
                    file=table.file,
                    row=int(chunk.rows[place]),
                    column=table.header[at],
                )
                state = CellState.NOT_SEARCHED
            out[k] = state
        return out

    return interpret
