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
from twicetold.catalogue.notes import Spot, near, shown, suggestion
from twicetold.catalogue.tables import Chunk, Table, unburdened
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
    for chunk in unburdened(table.chunks()):
        motif = _codes(chunk, columns["motif"], motifs.index)
        tradition = _codes(chunk, columns["tradition"], traditions.index)
        if (motif == UNKNOWN).any() or (tradition == UNKNOWN).any():
            _mark_hidden(chunk, columns["motif"], motif, motifs.index)
            _mark_hidden(chunk, columns["tradition"], tradition, traditions.index)
            motif[(motif == UNKNOWN) & (tradition == HIDDEN)] = HIDDEN
            tradition[(tradition == UNKNOWN) & (motif == HIDDEN)] = HIDDEN
            _resolve(table, chunk, columns["motif"], motif, motifs)
            _resolve(table, chunk, columns["tradition"], tradition, traditions)
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


def _mark_hidden(chunk: Chunk, at: int, codes: IntArray, index: dict[str, int]) -> None:
    """Recognise hidden ids that have blanks around them, before anything is said of the row."""
    cells = chunk.columns[at]
    for k in np.flatnonzero(codes == UNKNOWN).tolist():
        if index.get(cells[k].strip()) == HIDDEN:
            codes[k] = HIDDEN


def _resolve(
    table: Table, chunk: Chunk, at: int, codes: IntArray, roster: TraditionRows | MotifRows
) -> None:
    """Second look at ids not found at once: padded, new (without a motifs table), or unknown."""
    grows = isinstance(roster, MotifRows) and not roster.closed
    cells = chunk.columns[at]
    for k in np.flatnonzero(codes == UNKNOWN).tolist():
        raw, spot = cells[k], table.spot(int(chunk.rows[k]), at)
        if raw in roster.index:  # added a few rows above
            codes[k] = roster.index[raw]
            continue
        identity = clean_id(raw, spot)
        codes[k] = roster.index.get(identity, UNKNOWN) if identity else HIDDEN
        if codes[k] != UNKNOWN:
            continue
        if grows and identity != EVERY_MOTIF and isinstance(roster, MotifRows):
            warn_formula(identity, spot)
            codes[k] = roster.add(identity, row=spot.row)
        else:
            codes[k] = HIDDEN
            say_unknown(spot, identity, roster)


def say_unknown(spot: Spot, identity: str, roster: TraditionRows | MotifRows) -> None:
    """Note an id that the roster does not have; one like a hidden id is not repeated."""
    noun = "motif" if isinstance(roster, MotifRows) else "tradition"
    kind, home = f"unknown {noun}", roster.file or "the catalogue"
    name, hint = shown(identity), ""
    if not spot.notes.full(kind, spot.file, spot.column):
        hidden = [i for i, code in roster.index.items() if code == HIDDEN]
        if near(identity, hidden):
            name = "named here"
        else:
            hint = suggestion(identity, roster.public_ids)
    spot.error(
        kind, f"the {noun} {name} is not in {home}.", f"Add it there or correct the id.{hint}"
    )


def state_column(table: Table, at: int) -> Interpreter:
    """Interpreter of an optional ``state`` column."""

    def interpret(chunk: Chunk, good: npt.NDArray[np.intp]) -> StateArray:
        cells = chunk.columns[at]
        out = np.empty(len(good), dtype=np.int8)
        for k, place in enumerate(good.tolist()):
            word = " ".join(cells[place].replace("_", " ").replace("-", " ").casefold().split())
            state = STATE_WORDS.get(word)
            if state is None:
                table.spot(int(chunk.rows[place]), at).error(
                    "unknown state",
                    f"{shown(cells[place])} is no state of a cell.",
                    "Write attested, absent, not searched or not applicable.",
                )
                state = CellState.NOT_SEARCHED
            out[k] = state
        return out

    return interpret
