"""From logged rows to presence: attested cells, sets of traditions searched, cells that cannot be.

What a motif's surveyed set is made of: everybody (or nobody, when the plan says that a missing row
means "not searched"), or the traditions that the ``surveyed`` table lists for it; plus cells with
an explicit record; minus cells marked not searched or not applicable.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from twicetold.catalogue import limits
from twicetold.catalogue.attestations import STAR, CellLog, StateArray
from twicetold.catalogue.model import BoolArray, CellState, IntArray
from twicetold.catalogue.notes import Notes, Spot

_STRENGTH = np.array([0, 2, 3, 1], dtype=np.int8)  # by CellState: which of two records counts


@dataclass
class Presence:
    """Cells of M motifs in N located traditions, before they are frozen."""

    attested: sp.csr_array
    not_applicable: sp.csr_array
    surveyed_sets: list[BoolArray]
    surveyed_of: IntArray
    unlocated: IntArray


@dataclass
class SurveyedSets:
    """The distinct sets met so far, told apart by their packed bits."""

    n: int
    sets: list[BoolArray] = field(default_factory=list)
    _seen: dict[bytes, int] = field(default_factory=dict)

    def code(self, mask: BoolArray) -> int:
        """Number of this set; a new set gets the next one."""
        key = np.packbits(mask).tobytes()
        if key not in self._seen:
            self._seen[key] = len(self.sets)
            self.sets.append(mask.copy())
        return self._seen[key]

    @property
    def too_many(self) -> bool:
        """Whether the sets would need more memory than allowed."""
        return len(self.sets) * self.n > limits.SURVEYED_BYTES


@dataclass
class Cells:
    """Logged rows after duplicates are settled, sorted by motif, then tradition."""

    motif: IntArray
    tradition: IntArray
    state: StateArray
    row: IntArray


def settle_duplicates(log: CellLog, notes: Notes, *, lenient: bool) -> Cells:
    """One record per cell: identical ones are warned of, contradicting ones are an error.

    ``lenient`` is for datasets in which several values per cell are regular (CLDF): nothing is
    said of identical ones, and of contradicting ones the attestation counts, with a warning.
    """
    motif, tradition, state, row = log.joined()
    wide = int(tradition.max()) + 1 if len(tradition) else 1
    key = motif.astype(np.int64) * wide + tradition
    order = np.argsort(key, kind="stable")
    key = key[order]
    state, row = state[order], row[order]
    start = np.flatnonzero(np.r_[True, key[1:] != key[:-1]]) if len(key) else np.empty(0, np.intp)
    group = np.repeat(np.arange(len(start)), np.diff(np.r_[start, len(key)]))
    again = np.flatnonzero(np.r_[False, key[1:] == key[:-1]]) if len(key) else start
    if len(again):
        first = start[group[again]]
        differs = state[again] != state[first]
        if not lenient:
            _say_duplicates(log.file, row[again], row[first], differs, notes)
        elif differs.any():
            known = (state[again] != CellState.NOT_SEARCHED) & (
                state[first] != CellState.NOT_SEARCHED
            )
            _warn_contradictions(log.file, row[again], row[first], differs & known, notes)
            # The strongest record of a cell counts: attested, absent, not applicable.
            strength = np.maximum.reduceat(_STRENGTH[state], start)
            state = np.argsort(_STRENGTH).astype(np.int8)[strength][group]
    return Cells(
        (key[start] // wide).astype(np.int32),
        (key[start] % wide).astype(np.int32),
        state[start],
        row[start],
    )


def _say_duplicates(
    file: str, rows: IntArray, firsts: IntArray, differs: BoolArray, notes: Notes
) -> None:
    for k in np.argsort(rows, kind="stable").tolist():
        row, first = int(rows[k]), int(firsts[k])
        if differs[k]:
            Spot(notes, file, row=row).error(
                "contradicting attestations",
                f"says of the same motif and tradition something else than row {first}.",
                "Keep the row that is right.",
            )
        else:
            Spot(notes, file, row=row).warn(
                "duplicate attestation",
                f"repeats row {first}; it counts once.",
                "Remove one of the rows.",
            )


def _warn_contradictions(
    file: str, rows: IntArray, firsts: IntArray, differs: BoolArray, notes: Notes
) -> None:
    for k in np.flatnonzero(differs).tolist():
        Spot(notes, file, row=int(rows[k])).warn(
            "contradicting values",
            f"says of the same motif and tradition something else than row {int(firsts[k])}.",
            "An attestation counts over an absence; mend the dataset to have it otherwise.",
        )


def build_presence(
    cells: Cells,
    surveyed: CellLog | None,
    *,
    file: str,
    m: int,
    n: int,
    searched: bool,
    notes: Notes,
) -> Presence:
    """Sparse matrices and surveyed sets of m motifs in the n located traditions.

    Parameters
    ----------
    cells : Cells
        Records; tradition codes from n on belong to traditions without coordinates.
    surveyed : CellLog or None
        Rows of the ``surveyed`` table.
    file : str
        Where the records stand, for messages.
    m, n : int
        Number of motifs and of located traditions.
    searched : bool
        Whether no row means searched and absent.
    notes : Notes
        Collects the problems.
    """
    held = cells.state == CellState.ATTESTED
    unlocated = np.bincount(cells.motif[held & (cells.tradition >= n)], minlength=m).astype(
        np.int32
    )
    inside = cells.tradition < n
    motif, tradition = cells.motif[inside], cells.tradition[inside]
    state, row = cells.state[inside], cells.row[inside]
    sets = SurveyedSets(n)
    listed = _listed(surveyed, n)
    of = np.empty(m, dtype=np.int32)
    edges = np.searchsorted(motif, np.arange(m + 1))
    plain = np.bincount(motif[state != CellState.ATTESTED], minlength=m) == 0
    usual = sets.code(np.full(n, searched)) if searched and not listed.star_given else -1
    if searched and surveyed is None:
        _warn_mixed(motif, state, (m, n), Spot(notes, file))
    for k in range(m):
        if usual >= 0 and plain[k] and k not in listed.rows:
            of[k] = usual
            continue
        here = slice(edges[k], edges[k + 1])
        mask = listed.mask(k, n, searched)
        if mask is not None:
            found = Cells(motif[here], tradition[here], state[here], row[here])
            _check_listed(mask, found, file, notes)
        else:
            mask = np.full(n, searched)
        _apply(mask, tradition[here], state[here])
        of[k] = sets.code(mask)
        if sets.too_many:
            Spot(notes, file).error(
                "too many surveyed sets",
                f"the sets of traditions searched need more than "
                f"{limits.SURVEYED_BYTES // limits.MEBIBYTE:,} MiB.",
                "Give fewer distinct sets, or split the catalogue.",
            )
            break
    return Presence(
        sparse_cells(motif, tradition, state == CellState.ATTESTED, m, n),
        sparse_cells(motif, tradition, state == CellState.NOT_APPLICABLE, m, n),
        sets.sets,
        of,
        unlocated,
    )


def _warn_mixed(motif: IntArray, state: StateArray, shape: tuple[int, int], spot: Spot) -> None:
    """Warn where absences are recorded for some traditions and nothing at all for others."""
    m, n = shape
    absences = np.bincount(motif[state == CellState.ABSENT], minlength=m)
    mixed = np.flatnonzero((absences > 0) & (np.bincount(motif, minlength=m) < n))
    if len(mixed):
        spot.warn(
            "absences beside missing rows",
            f"for {len(mixed):,} motif(s) some traditions have a recorded absence and others no "
            "row at all; both are read as searched and absent.",
            'Set absent_rows = "not searched" in the plan if no row means that nobody looked.',
        )


def _apply(mask: BoolArray, tradition: IntArray, state: StateArray) -> None:
    mask[tradition[(state == CellState.ATTESTED) | (state == CellState.ABSENT)]] = True
    mask[tradition[(state == CellState.NOT_SEARCHED) | (state == CellState.NOT_APPLICABLE)]] = False


def _check_listed(mask: BoolArray, cells: Cells, file: str, notes: Notes) -> None:
    explicit = (cells.state == CellState.ATTESTED) | (cells.state == CellState.ABSENT)
    for k in np.flatnonzero(explicit & ~mask[cells.tradition]).tolist():
        Spot(notes, file, row=int(cells.row[k])).error(
            "attested but not surveyed",
            "records a tradition that the surveyed table does not list for this motif.",
            "Add the pair to the surveyed table, or take the row out: chance finds outside the "
            "survey would bias the test.",
        )


@dataclass
class _Listed:
    """Traditions that the surveyed table lists, by motif; ``star`` are those for all motifs."""

    rows: dict[int, IntArray]
    star: IntArray
    star_given: bool

    def mask(self, k: int, n: int, searched: bool) -> BoolArray | None:
        if not self.star_given and k not in self.rows:
            return None
        mask = np.zeros(n, dtype=bool)
        mask[self.star] = True
        mask[self.rows.get(k, self.star)] = True
        return mask


def _listed(surveyed: CellLog | None, n: int) -> _Listed:
    if surveyed is None:
        return _Listed({}, np.empty(0, dtype=np.int32), False)
    motif, tradition, _, _ = surveyed.joined()
    star = motif == STAR
    stars = tradition[star]
    order = np.argsort(motif[~star], kind="stable")
    motif, tradition = motif[~star][order], tradition[~star][order]
    codes, starts = np.unique(motif, return_index=True)
    rows = {
        int(code): part[part < n]
        for code, part in zip(codes, np.split(tradition, starts[1:]), strict=bool(len(codes)))
    }
    return _Listed(rows, stars[stars < n], bool(star.any()))


def sparse_cells(
    motif: IntArray, tradition: IntArray, chosen: npt.NDArray[np.bool_], m: int, n: int
) -> sp.csr_array:
    """CSR matrix of the chosen cells; they come sorted, so no sorting is needed here."""
    counts = np.bincount(motif[chosen], minlength=m)
    indptr = np.concatenate([[0], np.cumsum(counts)]).astype(np.int32)
    indices = tradition[chosen].astype(np.int32)
    out = sp.csr_array((np.ones(len(indices), dtype=bool), indices, indptr), shape=(m, n))
    out.has_sorted_indices = True
    return out
