"""A wide matrix: motifs down and traditions across, or the other way round."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Final

import numpy as np
import numpy.typing as npt

from twicetold.catalogue import limits
from twicetold.catalogue.attestations import UNKNOWN, say_unknown
from twicetold.catalogue.cells import clean_id, clean_text, optional_text, warn_formula
from twicetold.catalogue.model import CellState, IntArray
from twicetold.catalogue.motifs import MotifRows
from twicetold.catalogue.notes import Spot, shown
from twicetold.catalogue.presence import Presence, SurveyedSets, sparse_cells
from twicetold.catalogue.tables import Chunk, Table
from twicetold.catalogue.traditions import HIDDEN, TraditionRows

CELL_WORDS: Final = {
    "1": CellState.ATTESTED,
    "1.0": CellState.ATTESTED,
    "0": CellState.ABSENT,
    "0.0": CellState.ABSENT,
    "": CellState.NOT_SEARCHED,
    "?": CellState.NOT_SEARCHED,
    "NA": CellState.NOT_APPLICABLE,
    "-": CellState.NOT_APPLICABLE,
}
_BY_MOTIF: Final = ("motif_id", "id", "motif")
_BY_TRADITION: Final = ("tradition_id", "tradition")
_BESIDE: Final = ("name", "category")
_BAD: Final = 100

States = npt.NDArray[np.int8]


@dataclass
class _Harvest:
    """Presence as it grows, one motif at a time."""

    n: int
    sets: SurveyedSets
    motif: list[IntArray] = field(default_factory=list)
    tradition: list[IntArray] = field(default_factory=list)
    state: list[States] = field(default_factory=list)
    surveyed_of: dict[int, int] = field(default_factory=dict)
    unlocated: dict[int, int] = field(default_factory=dict)

    def add(self, motif: int, states: States) -> None:
        """Take in the states of one motif in all traditions, the located ones first."""
        here = states[: self.n]
        searched = (here == CellState.ABSENT) | (here == CellState.ATTESTED)
        self.surveyed_of[motif] = self.sets.code(searched)
        self.unlocated[motif] = int(np.count_nonzero(states[self.n :] == CellState.ATTESTED))
        marked = np.flatnonzero(here >= CellState.ATTESTED).astype(np.int32)
        self.motif.append(np.full(len(marked), motif, dtype=np.int32))
        self.tradition.append(marked)
        self.state.append(here[marked])

    def presence(self, m: int) -> Presence:
        """Put the motifs in order of their code; one without a row was searched nowhere."""
        motif = np.concatenate(self.motif) if self.motif else np.empty(0, dtype=np.int32)
        place = np.concatenate(self.tradition) if self.tradition else np.empty(0, dtype=np.int32)
        state = np.concatenate(self.state) if self.state else np.empty(0, dtype=np.int8)
        order = np.argsort(motif, kind="stable")
        motif, place, state = motif[order], place[order], state[order]
        nowhere = -1
        if len(self.surveyed_of) < m:
            nowhere = self.sets.code(np.zeros(self.n, dtype=bool))
        return Presence(
            sparse_cells(motif, place, state == CellState.ATTESTED, m, self.n),
            sparse_cells(motif, place, state == CellState.NOT_APPLICABLE, m, self.n),
            self.sets.sets,
            np.array([self.surveyed_of.get(k, nowhere) for k in range(m)], dtype=np.int32),
            np.array([self.unlocated.get(k, 0) for k in range(m)], dtype=np.int32),
        )


def read_matrix(table: Table, traditions: TraditionRows, motifs: MotifRows) -> Presence | None:
    """Read a wide matrix; new motifs are added when no motifs table listed them."""
    first = table.header[0].casefold() if table.header else ""
    if first in _BY_MOTIF:
        transposed = False
    elif first in _BY_TRADITION:
        transposed = True
    else:
        table.spot(table.header_row).error(
            "missing column",
            f"begins with the column {shown(table.header[0] if table.header else '')}.",
            "Call the first column 'motif_id' (the others then are tradition ids), or "
            "'tradition_id' (the others then are motif ids).",
        )
        return None
    if len(table.header) * table.lines > limits.MATRIX_CELLS:
        _say_too_large(table)
        return None
    if transposed:
        return _read_transposed(table, traditions, motifs)
    return _read_by_motif(table, traditions, motifs)


def _say_too_large(table: Table) -> None:
    table.spot().error(
        "matrix too large",
        f"has more than {limits.MATRIX_CELLS:,} cells.",
        "Give it as an attestations table (motif_id, tradition_id), one row per record.",
    )


def _read_by_motif(table: Table, traditions: TraditionRows, motifs: MotifRows) -> Presence | None:
    beside = {h.casefold(): k for k, h in enumerate(table.header) if h.casefold() in _BESIDE}
    across = [k for k in range(1, len(table.header)) if k not in beside.values()]
    codes = _tradition_codes(table, across, traditions)
    visible = codes >= 0
    n = len(traditions.located)
    harvest = _Harvest(n, SurveyedSets(n))
    seen: dict[int, int] = {}
    cells_read = 0
    for chunk in table.chunks():
        cells_read += len(chunk.rows) * len(table.header)
        if cells_read > limits.MATRIX_CELLS:
            _say_too_large(table)
            return None
        block = _states(table, chunk, across, codes)
        for k, row in enumerate(chunk.rows.tolist()):
            motif = _motif_of(table, chunk, k, motifs, beside)
            if motif < 0 or not _is_first(motif, seen, table.spot(row, 0), "motif"):
                continue
            states = np.zeros(n + len(traditions.unlocated), dtype=np.int8)
            states[codes[visible]] = block[visible, k]
            harvest.add(motif, states)
            if harvest.sets.too_many:
                _say_too_large(table)
                return None
    return harvest.presence(len(motifs.ids))


def _read_transposed(table: Table, traditions: TraditionRows, motifs: MotifRows) -> Presence | None:
    across = list(range(1, len(table.header)))
    n, extra = len(traditions.located), len(traditions.unlocated)
    if len(across) * (n + extra) > limits.MATRIX_CELLS:
        _say_too_large(table)
        return None
    codes = _motif_columns(table, across, motifs)
    whole = np.zeros((len(across), n + extra), dtype=np.int8)
    seen: dict[int, int] = {}
    hidden = np.flatnonzero(codes < 0)
    for chunk in table.chunks():
        places = [_tradition_of(table, chunk, k, traditions) for k in range(len(chunk.rows))]
        block = _states(table, chunk, across, codes, np.array(places) < 0)
        for k, (row, place) in enumerate(zip(chunk.rows.tolist(), places, strict=True)):
            if place >= 0 and _is_first(place, seen, table.spot(row, 0), "tradition"):
                whole[:, place] = block[:, k]
    whole[hidden] = CellState.NOT_SEARCHED
    harvest = _Harvest(n, SurveyedSets(n))
    for column, motif in enumerate(codes.tolist()):
        if motif >= 0:
            harvest.add(motif, whole[column])
    return harvest.presence(len(motifs.ids))


def _states(
    table: Table,
    chunk: Chunk,
    across: list[int],
    codes: IntArray,
    passed_over: npt.NDArray[np.bool_] | None = None,
) -> States:
    """(columns, rows) int8 of the cells; a cell that is none of the allowed marks is noted."""
    out = np.zeros((len(across), len(chunk.rows)), dtype=np.int8)
    words: dict[str, int] = {k: int(v) for k, v in CELL_WORDS.items()}
    for j, at in enumerate(across):
        if codes[j] < 0:
            continue
        cells = chunk.columns[at]
        for word in set(cells) - words.keys():
            words[word] = int(CELL_WORDS.get(word.strip(), _BAD))
        out[j] = np.fromiter(map(words.__getitem__, cells), dtype=np.int8, count=len(cells))
    bad = out == _BAD
    if bad.any():
        if passed_over is not None:
            bad[:, passed_over] = False
        for k, j in np.argwhere(bad.T).tolist():
            table.spot(int(chunk.rows[k]), across[j]).error(
                "unknown mark",
                f"{shown(chunk.columns[across[j]][k])} is no mark of the matrix.",
                "Write 1 (attested), 0 (searched and absent), blank (not searched) or NA "
                "(not applicable).",
            )
        out[out == _BAD] = CellState.NOT_SEARCHED
    return out


def _tradition_codes(table: Table, across: list[int], traditions: TraditionRows) -> IntArray:
    out = np.empty(len(across), dtype=np.int32)
    for j, at in enumerate(across):
        name = table.header[at]
        out[j] = traditions.index.get(name, UNKNOWN) if name else HIDDEN
        if out[j] == UNKNOWN:
            say_unknown(table.spot(table.header_row), name, traditions)
    return out


def _motif_columns(table: Table, across: list[int], motifs: MotifRows) -> IntArray:
    out = np.empty(len(across), dtype=np.int32)
    for j, at in enumerate(across):
        name = table.header[at]
        out[j] = motifs.index.get(name, UNKNOWN) if name else HIDDEN
        if out[j] != UNKNOWN:
            continue
        if motifs.closed:
            say_unknown(table.spot(table.header_row), name, motifs)
            continue
        identity = clean_id(name, table.spot(table.header_row, column=name))
        out[j] = motifs.add(identity) if identity else HIDDEN
    return out


def _motif_of(table: Table, chunk: Chunk, k: int, motifs: MotifRows, beside: dict[str, int]) -> int:
    raw, row = chunk.columns[0][k], int(chunk.rows[k])
    code = motifs.index.get(raw.strip(), UNKNOWN)
    if code == HIDDEN:
        return HIDDEN
    identity = clean_id(raw, table.spot(row, 0))
    if not identity:
        return HIDDEN
    if code != UNKNOWN:
        return code
    if motifs.closed:
        say_unknown(table.spot(row), identity, motifs)
        return HIDDEN
    text = {"name": "", "category": ""}
    for part, at in beside.items():
        text[part] = clean_text(chunk.columns[at][k], table.spot(row, at))
        warn_formula(text[part], table.spot(row, at))
    warn_formula(identity, table.spot(row, 0))
    return motifs.add(identity, text["name"], optional_text(text["category"]), row=row)


def _tradition_of(table: Table, chunk: Chunk, k: int, traditions: TraditionRows) -> int:
    raw, row = chunk.columns[0][k], int(chunk.rows[k])
    code = traditions.index.get(raw.strip(), UNKNOWN)
    if code == HIDDEN:
        return HIDDEN
    identity = clean_id(raw, table.spot(row, 0))
    if identity and code == UNKNOWN:
        say_unknown(table.spot(row), identity, traditions)
    return code if identity and code != UNKNOWN else HIDDEN


def _is_first(code: int, seen: dict[int, int], spot: Spot, kind: str) -> bool:
    if code in seen:
        spot.error(
            f"repeated {kind}",
            f"stands for the same {kind} as row {seen[code]}.",
            f"Give each {kind} one row.",
        )
        return False
    seen[code] = spot.row
    return True
