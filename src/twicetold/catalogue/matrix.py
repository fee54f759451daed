"""A wide matrix: motifs down and traditions across, or the other way round."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from twicetold.catalogue import limits
from twicetold.catalogue.attestations import UNKNOWN
from twicetold.catalogue.cells import clean_id, clean_text, optional_text, warn_formula
from twicetold.catalogue.model import CellState, IntArray
from twicetold.catalogue.motifs import MotifRows
from twicetold.catalogue.notes import Notes, shown, suggestion
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
class _Sparse:
    """Attested and not applicable cells found so far, as (row, column) codes."""

    motif: list[IntArray]
    tradition: list[IntArray]
    state: list[States]


def read_matrix(
    table: Table, traditions: TraditionRows, motifs: MotifRows, notes: Notes
) -> Presence | None:
    """Read a wide matrix; new motifs are added when no motifs table listed them."""
    first = table.header[0].casefold() if table.header else ""
    if first in _BY_MOTIF:
        transposed = False
    elif first in _BY_TRADITION:
        transposed = True
    else:
        notes.error(
            "missing column",
            f"begins with the column {shown(table.header[0] if table.header else '')}.",
            "Call the first column 'motif_id' (the others then are tradition ids), or "
            "'tradition_id' (the others then are motif ids).",
            file=table.file,
            row=table.header_row,
        )
        return None
    if len(table.header) * table.lines > limits.MATRIX_CELLS:
        _say_too_large(table, notes)
        return None
    if transposed:
        return _read_transposed(table, traditions, motifs, notes)
    return _read_by_motif(table, traditions, motifs, notes)


def _say_too_large(table: Table, notes: Notes) -> None:
    notes.error(
        "matrix too large",
        f"has more than {limits.MATRIX_CELLS:,} cells.",
        "Give it as an attestations table (motif_id, tradition_id), one row per record.",
        file=table.file,
    )


def _read_by_motif(
    table: Table, traditions: TraditionRows, motifs: MotifRows, notes: Notes
) -> Presence | None:
    beside = {h.casefold(): k for k, h in enumerate(table.header) if h.casefold() in _BESIDE}
    across = [k for k in range(1, len(table.header)) if k not in beside.values()]
    codes = _tradition_codes(table, across, traditions, notes)
    n = len(traditions.located)
    sets = SurveyedSets(n)
    found = _Sparse([], [], [])
    surveyed_of: dict[int, int] = {}
    unlocated: dict[int, int] = {}
    seen: dict[int, int] = {}
    cells_read = 0
    for chunk in table.chunks():
        cells_read += len(chunk.rows) * len(table.header)
        if cells_read > limits.MATRIX_CELLS:
            _say_too_large(table, notes)
            return None
        block = _states(table, chunk, across, codes, notes)
        for k, row in enumerate(chunk.rows.tolist()):
            motif = _motif_of(table, chunk, k, row, motifs, seen, beside, notes)
            if motif < 0:
                continue
            states = np.zeros(n + len(traditions.unlocated), dtype=np.int8)
            visible = codes >= 0
            states[codes[visible]] = block[visible, k]
            _say_bad(table, chunk, k, row, block[:, k], across, visible, notes)
            here = states[:n]
            surveyed_of[motif] = sets.code((here == 1) | (here == 2))
            unlocated[motif] = int(np.count_nonzero(states[n:] == CellState.ATTESTED))
            marked = np.flatnonzero(here >= CellState.ATTESTED).astype(np.int32)
            found.motif.append(np.full(len(marked), motif, dtype=np.int32))
            found.tradition.append(marked)
            found.state.append(here[marked])
            if sets.too_many:
                _say_too_large(table, notes)
                return None
    return _gather(found, sets, surveyed_of, unlocated, len(motifs.ids), n)


def _read_transposed(
    table: Table, traditions: TraditionRows, motifs: MotifRows, notes: Notes
) -> Presence | None:
    across = list(range(1, len(table.header)))
    codes = _motif_columns(table, across, motifs, notes)
    n, extra = len(traditions.located), len(traditions.unlocated)
    if len(across) * (n + extra) > limits.MATRIX_CELLS:
        _say_too_large(table, notes)
        return None
    whole = np.zeros((len(across), n + extra), dtype=np.int8)
    seen: dict[int, int] = {}
    for chunk in table.chunks():
        block = _states(table, chunk, across, codes, notes)
        for k, row in enumerate(chunk.rows.tolist()):
            place = _tradition_of(table, chunk, k, row, traditions, seen, notes)
            if place < 0:
                continue
            _say_bad(table, chunk, k, row, block[:, k], across, codes >= 0, notes)
            whole[:, place] = block[:, k]
    sets = SurveyedSets(n)
    found = _Sparse([], [], [])
    surveyed_of: dict[int, int] = {}
    unlocated: dict[int, int] = {}
    for column, motif in enumerate(codes.tolist()):
        if motif < 0:
            continue
        here = whole[column, :n]
        surveyed_of[motif] = sets.code((here == 1) | (here == 2))
        unlocated[motif] = int(np.count_nonzero(whole[column, n:] == CellState.ATTESTED))
        marked = np.flatnonzero(here >= CellState.ATTESTED).astype(np.int32)
        found.motif.append(np.full(len(marked), motif, dtype=np.int32))
        found.tradition.append(marked)
        found.state.append(here[marked])
    return _gather(found, sets, surveyed_of, unlocated, len(motifs.ids), n)


def _gather(
    found: _Sparse,
    sets: SurveyedSets,
    surveyed_of: dict[int, int],
    unlocated: dict[int, int],
    m: int,
    n: int,
) -> Presence:
    """Put the rows in order of their motif; a motif without a row was searched nowhere."""
    motif = np.concatenate(found.motif) if found.motif else np.empty(0, dtype=np.int32)
    place = np.concatenate(found.tradition) if found.tradition else np.empty(0, dtype=np.int32)
    state = np.concatenate(found.state) if found.state else np.empty(0, dtype=np.int8)
    order = np.argsort(motif, kind="stable")
    motif, place, state = motif[order], place[order], state[order]
    nowhere = -1
    if len(surveyed_of) < m:
        nowhere = sets.code(np.zeros(n, dtype=bool))
    return Presence(
        sparse_cells(motif, place, state == CellState.ATTESTED, m, n),
        sparse_cells(motif, place, state == CellState.NOT_APPLICABLE, m, n),
        sets.sets,
        np.array([surveyed_of.get(k, nowhere) for k in range(m)], dtype=np.int32),
        np.array([unlocated.get(k, 0) for k in range(m)], dtype=np.int32),
    )


def _states(table: Table, chunk: Chunk, across: list[int], codes: IntArray, notes: Notes) -> States:
    """(columns, rows) int8 of the cells; ``_BAD`` where a cell is none of the allowed marks."""
    out = np.zeros((len(across), len(chunk.rows)), dtype=np.int8)
    words: dict[str, int] = {k: int(v) for k, v in CELL_WORDS.items()}
    for j, at in enumerate(across):
        if codes[j] < 0:
            continue
        cells = chunk.columns[at]
        for word in set(cells) - words.keys():
            words[word] = int(CELL_WORDS.get(word.strip(), _BAD))
        out[j] = np.fromiter(map(words.__getitem__, cells), dtype=np.int8, count=len(cells))
    return out


def _say_bad(
    table: Table,
    chunk: Chunk,
    k: int,
    row: int,
    states: States,
    across: list[int],
    visible: npt.NDArray[np.bool_],
    notes: Notes,
) -> None:
    for j in np.flatnonzero((states == _BAD) & visible).tolist():
        notes.error(
            "unknown mark",
            f"{shown(chunk.columns[across[j]][k])} is no mark of the matrix.",
            "Write 1 (attested), 0 (searched and absent), blank (not searched) or NA "
            "(not applicable).",
            file=table.file,
            row=row,
            column=table.header[across[j]][: limits.ID_CHARS],
        )


def _tradition_codes(
    table: Table, across: list[int], traditions: TraditionRows, notes: Notes
) -> IntArray:
    out = np.empty(len(across), dtype=np.int32)
    for j, at in enumerate(across):
        name = table.header[at]
        out[j] = traditions.index.get(name, UNKNOWN) if name else HIDDEN
        if out[j] == UNKNOWN:
            _say_unknown(
                "tradition",
                name,
                traditions.public_ids,
                traditions.file,
                table,
                table.header_row,
                notes,
            )
    return out


def _motif_columns(table: Table, across: list[int], motifs: MotifRows, notes: Notes) -> IntArray:
    out = np.empty(len(across), dtype=np.int32)
    for j, at in enumerate(across):
        name = table.header[at]
        out[j] = motifs.index.get(name, UNKNOWN) if name else HIDDEN
        if out[j] != UNKNOWN:
            continue
        if motifs.closed:
            _say_unknown(
                "motif", name, motifs.public_ids, motifs.file, table, table.header_row, notes
            )
            continue
        identity = clean_id(
            name, notes, file=table.file, row=table.header_row, column=name[: limits.ID_CHARS]
        )
        out[j] = motifs.add(identity) if identity else HIDDEN
    return out


def _motif_of(
    table: Table,
    chunk: Chunk,
    k: int,
    row: int,
    motifs: MotifRows,
    seen: dict[int, int],
    beside: dict[str, int],
    notes: Notes,
) -> int:
    raw = chunk.columns[0][k]
    code = motifs.index.get(raw.strip(), UNKNOWN)
    if code == HIDDEN:
        return HIDDEN
    identity = clean_id(raw, notes, file=table.file, row=row, column=table.header[0])
    if not identity:
        return HIDDEN
    if code == UNKNOWN:
        if motifs.closed:
            _say_unknown("motif", identity, motifs.public_ids, motifs.file, table, row, notes)
            return HIDDEN
        text = {"name": "", "category": ""}
        for part, at in beside.items():
            text[part] = clean_text(
                chunk.columns[at][k], notes, file=table.file, row=row, column=table.header[at]
            )
            warn_formula(text[part], notes, file=table.file, row=row, column=table.header[at])
        warn_formula(identity, notes, file=table.file, row=row, column=table.header[0])
        code = motifs.add(identity, text["name"], optional_text(text["category"]), row=row)
    return _once(code, row, seen, table, "motif", notes)


def _tradition_of(
    table: Table,
    chunk: Chunk,
    k: int,
    row: int,
    traditions: TraditionRows,
    seen: dict[int, int],
    notes: Notes,
) -> int:
    raw = chunk.columns[0][k]
    code = traditions.index.get(raw.strip(), UNKNOWN)
    if code == HIDDEN:
        return HIDDEN
    identity = clean_id(raw, notes, file=table.file, row=row, column=table.header[0])
    if code == UNKNOWN:
        if identity:
            _say_unknown(
                "tradition", identity, traditions.public_ids, traditions.file, table, row, notes
            )
        return HIDDEN
    return _once(code, row, seen, table, "tradition", notes)


def _once(code: int, row: int, seen: dict[int, int], table: Table, kind: str, notes: Notes) -> int:
    if code in seen:
        notes.error(
            f"repeated {kind}",
            f"stands for the same {kind} as row {seen[code]}.",
            f"Give each {kind} one row.",
            file=table.file,
            row=row,
            column=table.header[0],
        )
        return HIDDEN
    seen[code] = row
    return code


def _say_unknown(
    kind: str,
    identity: str,
    known: list[str],
    home: str,
    table: Table,
    row: int,
    notes: Notes,
) -> None:
    hint = "" if notes.full(f"unknown {kind}", table.file) else suggestion(identity, known)
    notes.error(
        f"unknown {kind}",
        f"the {kind} {shown(identity)} is not in {home or 'the catalogue'}.",
        f"Add it there or correct the id.{hint}",
        file=table.file,
        row=row,
    )
