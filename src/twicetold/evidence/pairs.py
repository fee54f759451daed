r"""Motifs that lie on the same traditions more than both their margins explain.

If a tradition's readiness and a motif's commonness were all there is, the odds of a record would
be a product of the two (Rasch 1960, Probabilistic Models for Some Intelligence and Attainment
Tests): :math:`\Pr(x_{ik} = 1) = w_i v_k / (1 + w_i v_k)`. Given how many traditions hold motif k,
its holders are then a set drawn in proportion to the product of their :math:`w_i`, whatever
:math:`v_k`, and the law of how many of them also hold motif m is a ratio of Poisson-binomial laws,
exact once the :math:`w_i` are. Effort is in :math:`w_i`: it is fitted to how much each tradition
has on record. Given both margins of the whole catalogue, all tables would be equally likely: the
world of :mod:`twicetold.references.margins`, of which this is the large-catalogue form.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd
import scipy.sparse as sp

from twicetold.catalogue import Catalogue
from twicetold.evidence import _pairs_kernels as kernels
from twicetold.references.multiplicity import adjust
from twicetold.workers import Pool

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]

#: At most so many companions of a motif are listed.
MOST = 25
#: Above this many steps only motifs searched in the same traditions are compared.
DEAR = 4e10
_SWEEPS, _NEWTON, _WITHIN, _STEEPEST = 400, 4, 1e-7, 30.0
_CHUNK = 16


@dataclass(frozen=True)
class Companions:
    """Lists of companions by motif index, and what must be said of them.

    Parameters
    ----------
    by_motif : mapping of int to pandas.DataFrame
        ``motif_id, name, shared, expected, p, q``, most telling first; only q <= alpha. Motifs
        held by nobody or everybody are left out.
    notes : tuple of str
    """

    by_motif: Mapping[int, pd.DataFrame] = field(default_factory=dict)
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class _Setting:
    odds: Floats
    rows: tuple[Ints, Ints]
    sets: Bools
    set_of: Ints
    same_only: bool


def companions(
    catalogue: Catalogue, motifs: Sequence[int], *, alpha: float, pool: Pool
) -> Companions:
    """Find the motifs that share more traditions with each of ``motifs`` than margins explain.

    Each motif is compared with the whole catalogue: p is the chance of sharing at least as many
    traditions, and q its Benjamini-Hochberg value among the motifs that could reach ``alpha`` at
    all. Two motifs searched in different traditions are compared where both were searched.

    Parameters
    ----------
    catalogue : Catalogue
    motifs : sequence of int
        Motif indices.
    alpha : float
    pool : Pool
    """
    setting = _setting(catalogue)
    wanted = [m for m in motifs if setting.rows[0][m + 1] > setting.rows[0][m]]
    keys = [tuple(wanted[k : k + _CHUNK]) for k in range(0, len(wanted), _CHUNK)]
    found: dict[int, pd.DataFrame] = {}
    for key, tables in zip(
        keys, pool.run(_compare, setting, keys, label="motifs on the same traditions"), strict=True
    ):
        for motif, table in zip(key, tables, strict=True):
            found[motif] = _listed(catalogue, table, alpha)
    notes: tuple[str, ...] = ()
    if setting.same_only:
        notes = (
            "Motifs were compared with others searched in the same traditions only; the catalogue "
            "has too many different surveys to compare them all.",
        )
    return Companions(found, notes)


def _setting(catalogue: Catalogue) -> _Setting:
    rows = (
        catalogue.attested.indptr.astype(np.int64),
        catalogue.attested.indices.astype(np.int64),
    )
    sets = np.array(catalogue.surveyed_sets)
    set_of = np.asarray(catalogue.surveyed_of, dtype=np.int64)
    sizes = np.diff(rows[0])
    largest = np.array([sizes[set_of == s].max(initial=0) for s in range(len(sets))])
    steps = 2.0 * len(sizes) * catalogue.n_traditions * largest.sum()
    odds = tradition_odds(catalogue.attested, sets, set_of)
    return _Setting(odds, rows, sets, set_of, bool(steps > DEAR))


def tradition_odds(attested: sp.csr_array, sets: Bools, set_of: Ints) -> Floats:
    r"""Odds :math:`w_i` of traditions by maximum likelihood, fitted together with the motifs'.

    Row and column totals of the fitted chances equal the observed ones. Found by turns, a few
    Newton steps for the motifs, then for the traditions.

    Parameters
    ----------
    attested : (M, N) scipy.sparse.csr_array of bool
    sets : (S, N) bool
        Sets of traditions searched.
    set_of : (M,) int
        Which of them each motif was searched in.

    Returns
    -------
    (N,) float64
        Geometric mean about 1; 0 for a tradition with nothing on record, infinity for one that
        holds everything searched for.
    """
    held = np.diff(attested.indptr)
    classes, count = np.unique(np.stack([set_of, held]), axis=1, return_counts=True)
    cells, total = sets[classes[0]], classes[1].astype(float)
    rows = np.bincount(attested.indices, minlength=attested.shape[1]).astype(float)
    exposed = count @ cells
    open_ = (rows > 0) & (rows < exposed)
    # What always or never holds leaves the totals of the others as they are.
    total = total - (cells & (rows == exposed)).sum(axis=1)
    cells = cells & open_
    told = (total > 0) & (total < cells.sum(axis=1))
    always = count[total >= cells.sum(axis=1)] @ cells[total >= cells.sum(axis=1)]
    rows = rows - always
    cells, total, count = cells[told], total[told], count[told].astype(float)
    out = np.where(rows + always >= exposed, np.inf, 0.0)
    still = open_ & (rows > 0) & (rows < count @ cells)
    out[open_ & ~still & (rows > 0)] = np.exp(_STEEPEST)
    out[open_ & ~still & (rows <= 0)] = np.exp(-_STEEPEST)
    if not still.any() or not len(total):
        out[open_] = 1.0
        return out
    cells = cells[:, still]
    out[still] = np.exp(_fit(cells, total, count, rows[still]))
    return out


def _fit(cells: Bools, total: Floats, count: Floats, rows: Floats) -> Floats:
    """Log odds of traditions from (U, N) cells, column totals, their number and row totals."""
    a = np.log(rows / (count @ cells - rows))
    b = np.zeros(len(total))
    for _ in range(_SWEEPS):
        for _ in range(_NEWTON):
            b += _step(cells, a, b, np.ones(len(a)), total, axis=1)
        for _ in range(_NEWTON):
            a += _step(cells, a, b, count, rows, axis=0)
        chance = cells / (1.0 + np.exp(-(b[:, None] + a)))
        if np.abs(chance.sum(axis=1) - total).max() < _WITHIN * len(a):
            break
    a -= a.mean()
    return np.clip(a, -_STEEPEST, _STEEPEST)


def _step(
    cells: Bools, a: Floats, b: Floats, weight: Floats, target: Floats, *, axis: int
) -> Floats:
    """One damped Newton step of the margins along an axis."""
    chance = cells / (1.0 + np.exp(-np.clip(b[:, None] + a, -500.0, 500.0)))
    weights = weight if axis == 1 else weight[:, None]
    slope = (weights * chance * (1.0 - chance)).sum(axis=axis)
    off = target - (weights * chance).sum(axis=axis)
    return np.asarray(np.clip(off / np.maximum(slope, 1e-12), -1.0, 1.0), dtype=np.float64)


def _compare(setting: _Setting, key: tuple[int, ...]) -> list[Floats]:
    """Compare some motifs with all others: (6, K) motif, shared, expected, p, attainable, held."""
    out = []
    for one in key:
        parts = []
        for s in range(len(setting.sets)):
            if setting.same_only and s != setting.set_of[one]:
                continue
            others = np.flatnonzero(setting.set_of == s)
            others = others[others != one].astype(np.int64)
            if not len(others):
                continue
            made = tuple(np.zeros(len(others)) for _ in range(5))
            sets = setting.sets[[setting.set_of[one], s]]
            kernels.shared_laws(one, setting.odds, setting.rows, sets, others, made)
            shared, held, expected, p, attainable = made
            parts.append(np.stack([others, shared, expected, p, attainable, held]))
        out.append(np.concatenate(parts, axis=1) if parts else np.zeros((6, 0)))
    return out


def _listed(catalogue: Catalogue, table: Floats, alpha: float) -> pd.DataFrame:
    """Adjust within one motif's family and list the companions."""
    others, shared, expected, p, attainable, _ = table
    q = adjust(np.where(attainable <= alpha, np.minimum(p, 1.0), np.nan), "bh")
    order = np.lexsort([others, -shared, p])
    shown = [
        k for k in order if q[k] <= alpha and catalogue.motif_access[int(others[k])] != "restricted"
    ][:MOST]
    return pd.DataFrame(
        {
            "motif_id": [catalogue.motif_ids[int(others[k])] for k in shown],
            "name": [catalogue.motif_names[int(others[k])] for k in shown],
            "shared": [int(shared[k]) for k in shown],
            "expected": [float(expected[k]) for k in shown],
            "p": [float(p[k]) for k in shown],
            "q": [float(q[k]) for k in shown],
        }
    )
