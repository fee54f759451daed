"""The emergence-only world with both margins of the whole catalogue held fixed.

How many traditions hold each motif, and how many motifs each tradition holds, are given; which
cells they fill is drawn, all tables with these margins being equally likely. What a tradition is
known to hold already tells how readily it shows a motif, so no effort is needed.

A chain of trades ("curveball", Strona et al. 2014) walks over the tables. Cells that were not
surveyed can hold nothing. Its draws are made valid by the parallel scheme of Besag & Clifford
(1989): from the catalogue the chain runs backward to a hub, and from the hub every draw runs
forward on its own, as many sweeps. Catalogue and draws are then exchangeable if the catalogue
came from this world, so p = (1 + tail) / (draws + 1) is valid however slowly the chain mixes.
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError, TwicetoldWarning
from twicetold.graph import ContactGraph
from twicetold.randomness import Stream, chunk_words
from twicetold.references import _margins_kernels as kernels
from twicetold.references.law import Law
from twicetold.references.pvalue import p_value
from twicetold.references.tally import Tally
from twicetold.statistics import _kernels as counting
from twicetold.statistics import moran_from_score
from twicetold.statistics._check import family_array
from twicetold.statistics.observe import STATISTICS, graph_arrays
from twicetold.workers import Pool, ThreadPool

Ints = npt.NDArray[np.int64]
Floats = npt.NDArray[np.float64]
Csr = tuple[Ints, Ints, Ints]

#: Draws of one chunk. Part of what a seed means: never change it.
CHUNK = 32
_HUB, _PILOT, _DRAWS = 0, 1, 2


@dataclass(frozen=True)
class View:
    """One set of traditions searched, the graph over it, and its motifs.

    Parameters
    ----------
    traditions : (n,) int
        Catalogue numbers; the position is the number within the view.
    graph : ContactGraph
        Over the n.
    family_codes : (n,) int or None
    motifs : sequence of int
        Catalogue numbers.
    holders : sequence of (h,) int
        Of each motif, as numbers within the view.
    """

    traditions: npt.NDArray[np.integer]
    graph: ContactGraph
    family_codes: npt.NDArray[np.integer] | None
    motifs: Sequence[int]
    holders: Sequence[npt.NDArray[np.integer]]


@dataclass(frozen=True)
class Mixing:
    """How fast the chain forgets the catalogue.

    Parameters
    ----------
    sweeps : int
        Sweeps between the hub and a draw.
    overlap : (4 * sweeps + 1,) float64
        Share of the records still in place after 0, 1, 2 ... sweeps from the catalogue.
    plateau : float
        Where it levels off (mean of the second half): what chance alone keeps in place.
    plateau_sweeps : int
        First sweep at which the overlap is within two standard deviations of the plateau.
    autocorrelation : float
        Of the overlap, after the plateau is reached, from one sweep to the next.
    frozen : int
        Motifs held by some that no draw and no pilot sweep ever changed.
    """

    sweeps: int
    overlap: Floats
    plateau: float
    plateau_sweeps: int
    autocorrelation: float
    frozen: int

    @property
    def mixed(self) -> bool:
        """Whether draws are as far from the hub as chance alone puts them."""
        return self.plateau_sweeps <= self.sweeps

    def summary(self) -> dict[str, object]:
        """Plain numbers for the run record."""
        return {
            "sweeps": self.sweeps,
            "plateau": self.plateau,
            "plateau_sweeps": self.plateau_sweeps,
            "autocorrelation": self.autocorrelation,
            "frozen_motifs": self.frozen,
            "mixed": self.mixed,
        }


@dataclass(frozen=True)
class MarginsWorld:
    """Laws of every statistic of every motif with both margins fixed.

    Parameters
    ----------
    motifs : (M,) int64
        Catalogue numbers in the order of the rows below.
    observed : (M, 6) int32
        Columns as in ``statistics.STATISTICS``.
    scores : (M,) int64
        Observed Moran scores.
    draws : int
    tally : Tally
    score_hits : (M,) int64
        Draws with a Moran score of at least the observed one.
    score_sums : (M,) int64
    mixing : Mixing
    views : tuple of View
    """

    motifs: Ints
    observed: npt.NDArray[np.int32]
    scores: Ints
    draws: int
    tally: Tally
    score_hits: Ints
    score_sums: Ints
    mixing: Mixing
    views: tuple[View, ...]

    @cached_property
    def place(self) -> dict[int, int]:
        """Row of each motif by its catalogue number."""
        return {int(m): k for k, m in enumerate(self.motifs)}

    def law(self, motif: int, statistic: str) -> Law:
        """Law of one of ``statistics.STATISTICS`` for the motif with this catalogue number.

        Raises
        ------
        TwicetoldError
            When the statistic is unknown.
        """
        if statistic not in STATISTICS:
            raise TwicetoldError(
                f"`statistic` must be one of {', '.join(STATISTICS)}, got {statistic!r}."
            )
        row = self.place[motif] * len(STATISTICS) + STATISTICS.index(statistic)
        values, counts = self.tally.row(row)
        weights = counts.astype(np.float64)
        values.flags.writeable = False
        weights.flags.writeable = False
        return Law(values, weights, self.draws, effective=self.draws)

    def moran_p(self, motif: int) -> float:
        """P(Moran's I >= observed)."""
        return float(p_value(int(self.score_hits[self.place[motif]]), self.draws))

    def moran_mean(self, motif: int) -> float:
        """Mean of Moran's I; NaN where it is not defined."""
        row = self.place[motif]
        view = next(v for v in self.views if motif in v.motifs)
        n = len(view.holders[list(view.motifs).index(motif)])
        return moran_from_score(view.graph, n, int(self.score_sums[row]) / self.draws)


@dataclass(frozen=True)
class _Setting:
    """What every chunk needs; rows are the motifs, view by view."""

    seed: int
    table: Csr
    allowed: npt.NDArray[np.bool_]
    views: tuple[View, ...]
    sweeps: int
    draws: int
    scores: Ints


def margins_world(
    views: Sequence[View],
    n_traditions: int,
    *,
    draws: int,
    seed: int,
    sweeps: int | None = None,
    pool: Pool | None = None,
) -> MarginsWorld:
    """Draw tables with the catalogue's margins and note every statistic of every motif.

    The table is the whole catalogue's: ``views`` must hold every motif, not only those of
    interest. Motifs with the same survey trade all they do not share. Two with different surveys
    trade only what both may hold: what each could give away is dealt afresh, the rest stays, so
    trades remain symmetric and all tables within reach equally likely; three-way rotations
    (Rao, Jana & Bandyopadhyay 1996, for tables with cells that must be empty) reach what
    exchanges between two cannot. Surveys can be so entangled that longer cycles would be needed;
    p-values then hold within the tables that can be reached.

    Parameters
    ----------
    views : sequence of View
        One for each set of traditions searched.
    n_traditions : int
        In the whole catalogue.
    draws : int
    seed : int
    sweeps : int or None
        Sweeps between the hub and each draw; None takes 20 + 2 log2(M).
    pool : Pool or None

    Warns
    -----
    TwicetoldWarning
        When the chain has not levelled off within ``sweeps``. p-values stay valid; power is lost.

    Raises
    ------
    TwicetoldError
        When draws or sweeps are not whole numbers from 1 up, or nothing is held.

    References
    ----------
    Strona et al. 2014, Nature Communications 5, 4114; uniformity: Carstens 2015, Physical Review E
    91, 042812; sweeps over disjoint pairs: Carstens, Berger & Strona 2018, MethodsX 5. Besag &
    Clifford 1989, Biometrika 76, 633-642.
    """
    table, allowed, motifs = _table(views, n_traditions)
    if sweeps is None:
        sweeps = 20 + 2 * math.ceil(math.log2(max(2, len(motifs))))
    if draws < 1 or sweeps < 1 or not len(table[1]):
        raise TwicetoldError(
            "Fixed margins need at least one record, one draw and one sweep, got "
            f"{len(table[1])}, {draws} and {sweeps}."
        )
    observed, scores = _observe(tuple(views), table)
    pilot, touched = _pilot(seed, table, allowed, sweeps)
    _run(table, allowed, chunk_words(seed, Stream.MARGINS, _HUB, draws=1)[0], sweeps, backward=True)
    setting = _Setting(seed, table, allowed, tuple(views), sweeps, draws, scores)
    tally = Tally.empty(len(motifs) * len(STATISTICS))
    hits, sums = np.zeros(len(motifs), np.int64), np.zeros(len(motifs), np.int64)
    chunks = range(-(-draws // CHUNK))
    for part in (pool or ThreadPool()).run(_chunk, setting, chunks, label="fixed margins"):
        tally.merge(part[0])
        hits += part[1]
        sums += part[2]
        touched |= part[3]
    mixing = _mixing(pilot, sweeps, int((~touched & (np.diff(table[0]) > 0)).sum()))
    if not mixing.mixed:
        warnings.warn(
            f"Trades keep {pilot[sweeps]:.0%} of the records in place after {sweeps} sweeps, and "
            f"level off at {mixing.plateau:.0%} only after {mixing.plateau_sweeps}: p-values are "
            "valid but weak. Give more sweeps.",
            TwicetoldWarning,
            stacklevel=2,
        )
    return MarginsWorld(motifs, observed, scores, draws, tally, hits, sums, mixing, tuple(views))


def _table(views: Sequence[View], n: int) -> tuple[Csr, npt.NDArray[np.bool_], Ints]:
    """Stack the views' motifs into one table of catalogue numbers."""
    rows = [np.asarray(v.traditions)[np.asarray(h)] for v in views for h in v.holders]
    sizes = [len(r) for r in rows]
    allowed = np.zeros((len(views), n), dtype=bool)
    for k, view in enumerate(views):
        allowed[k, view.traditions] = True
    table = (
        np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64),
        np.concatenate([*rows, np.zeros(0, np.int64)]).astype(np.int64),
        np.repeat(np.arange(len(views)), [len(v.motifs) for v in views]).astype(np.int64),
    )
    motifs = np.array([m for v in views for m in v.motifs], dtype=np.int64)
    return table, allowed, motifs


def _run(
    table: Csr,
    allowed: npt.NDArray[np.bool_],
    word: npt.NDArray[np.uint64],
    sweeps: int,
    *,
    backward: bool = False,
) -> None:
    by_size = np.argsort(np.diff(table[0]), kind="stable")
    kernels.run_sweeps(word, table, by_size, allowed, sweeps, backward)


def _observe(views: tuple[View, ...], table: Csr) -> tuple[npt.NDArray[np.int32], Ints]:
    """(M, 6) statistics and (M,) Moran scores of every row."""
    indptr, indices, _ = table
    values = np.zeros((len(indptr) - 1, len(STATISTICS)), dtype=np.int32)
    scores = np.zeros(len(indptr) - 1, dtype=np.int64)
    first = 0
    for view in views:
        last = first + len(view.motifs)
        local = np.zeros(int(view.traditions.max(initial=0)) + 1, dtype=np.int32)
        local[view.traditions] = np.arange(len(view.traditions))
        held = local[indices[indptr[first] : indptr[last]]]
        arrays = graph_arrays(view.graph, family_array(view.graph.n, view.family_codes))
        starts = indptr[first : last + 1] - indptr[first]
        counting.observe_sets(starts, held, *arrays, values[first:last], scores[first:last])
        first = last
    return values, scores


def _pilot(
    seed: int, table: Csr, allowed: npt.NDArray[np.bool_], sweeps: int
) -> tuple[Floats, npt.NDArray[np.bool_]]:
    """Overlap with the catalogue along a chain of its own, and which rows it changed."""
    indptr, first, set_of = table
    now = first.copy()
    words = chunk_words(seed, Stream.MARGINS, _PILOT, draws=4 * sweeps)
    overlap = np.ones(len(words) + 1)
    touched = np.zeros(len(indptr) - 1, dtype=bool)
    for k, word in enumerate(words, 1):
        _run((indptr, now, set_of), allowed, word, 1)
        still = _still(indptr, now, first, allowed.shape[1])
        overlap[k] = still.sum() / len(first)
        touched |= still < np.diff(indptr)
    return overlap, touched


def _still(indptr: Ints, now: Ints, first: Ints, n: int) -> Ints:
    """(M,) how many columns of each row are where they were."""
    out = np.empty(len(indptr) - 1, dtype=np.int64)
    kernels.cells_in_place(indptr, now, first, n, out)
    return out


def _mixing(overlap: Floats, sweeps: int, frozen: int) -> Mixing:
    rest = overlap[len(overlap) // 2 :]
    plateau, spread = float(rest.mean()), float(rest.std())
    reached = int(np.argmax(overlap <= plateau + 2 * spread + 1e-12))
    centred = overlap[reached:] - overlap[reached:].mean()
    energy = float(centred @ centred)
    correlation = float(centred[1:] @ centred[:-1]) / energy if energy > 0 else 0.0
    overlap.flags.writeable = False
    return Mixing(sweeps, overlap, plateau, reached, correlation, frozen)


def _chunk(setting: _Setting, k: int) -> tuple[Tally, Ints, Ints, npt.NDArray[np.bool_]]:
    """Run a chunk of draws from the hub."""
    indptr, hub, set_of = setting.table
    size = min(CHUNK, setting.draws - k * CHUNK)
    m = len(indptr) - 1
    noted = np.empty((size, m * len(STATISTICS)), dtype=np.int32)
    hits, sums = np.zeros(m, np.int64), np.zeros(m, np.int64)
    touched = np.zeros(m, dtype=bool)
    words = chunk_words(setting.seed, Stream.MARGINS, _DRAWS, k, draws=size)
    for d in range(size):
        now = hub.copy()
        table = (indptr, now, set_of)
        _run(table, setting.allowed, words[d], setting.sweeps)
        values, scores = _observe(setting.views, table)
        noted[d] = values.ravel()
        hits += scores >= setting.scores
        sums += scores
        touched |= _still(indptr, now, hub, setting.allowed.shape[1]) < np.diff(indptr)
    tally = Tally.empty(noted.shape[1])
    tally.add(noted)
    return tally, hits, sums, touched
