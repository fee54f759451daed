"""The ancestry-only world: how many hold a motif in each family is given, who they are is not.

Within every family (or branch) the holders are the first to ring, each tradition with its own
clock (a Plackett-Luce prefix). The statistic is the joins between different families: if
neighbours of different families share a motif more often than this world gives, descent within
families cannot explain it. Where the configurations are few they are all enumerated, otherwise
drawn; draws are shared by all motifs, and a motif alone gives what it gives in a batch.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from twicetold.errors import TwicetoldError
from twicetold.graph.model import ContactGraph
from twicetold.randomness import Stream, chunk_words
from twicetold.references import _ancestry_kernels as kernels
from twicetold.references import _ancestry_tables as tables
from twicetold.references.law import Law
from twicetold.workers import Pool, ThreadPool

IntArray = npt.NDArray[np.int64]
FloatArray = npt.NDArray[np.float64]

#: Draws of one chunk. Part of the seeding scheme: changing it changes every drawn number.
CHUNK = 512
#: Motifs with at most this many configurations are enumerated.
ENUMERATE = 10_000


@dataclass(frozen=True)
class Lineages:
    """Descent of n traditions.

    Parameters
    ----------
    family : (n,) int
        Codes; joins between different families are counted.
    level : (n,) int
        Codes of the groups whose holder counts are held fixed: the families themselves, or
        branches within them, which hold more fixed and so leave less to chance.
    """

    family: npt.NDArray[np.integer]
    level: npt.NDArray[np.integer]

    def __post_init__(self) -> None:
        if len(self.family) != len(self.level):
            raise ValueError(
                f"`family` and `level` must have one code per tradition each, got "
                f"{len(self.family)} and {len(self.level)}."
            )

    @classmethod
    def none(cls, n: int) -> Lineages:
        """Everyone in one group and every join counted: only the number of holders is fixed."""
        return cls(family=np.arange(n), level=np.zeros(n, dtype=np.int64))


@dataclass(frozen=True)
class HolderSets:
    """Holders of M motifs in one row-compressed list. Every motif is surveyed in all n traditions.

    Parameters
    ----------
    indptr : (M + 1,) int
    indices : (H,) int
        Tradition numbers; motif m is held by ``indices[indptr[m]:indptr[m + 1]]``.
    own : (H,) float64 or None
        Propensity of each holder when *its* motif is left out of the records, where propensities
        come from the records themselves (never above the common one, and the same as the common
        one for those who do not hold the motif); None when motifs do not touch the propensities.
    """

    indptr: npt.NDArray[np.integer]
    indices: npt.NDArray[np.integer]
    own: FloatArray | None = None

    @classmethod
    def of(
        cls,
        holders: Iterable[Sequence[int] | npt.NDArray[np.integer]],
        own: FloatArray | None = None,
    ) -> HolderSets:
        """Make the list from one sequence of holders per motif."""
        rows = [np.asarray(h, dtype=np.int64) for h in holders]
        lengths = [len(r) for r in rows]
        flat = np.concatenate(rows) if rows else np.empty(0, dtype=np.int64)
        return cls(np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64), flat, own)

    def __len__(self) -> int:
        return len(self.indptr) - 1

    def row(self, motif: int) -> npt.NDArray[np.integer]:
        """Holders of one motif."""
        return self.indices[self.indptr[motif] : self.indptr[motif + 1]]

    def own_row(self, motif: int) -> FloatArray | None:
        """Own propensities of one motif's holders, if any."""
        if self.own is None:
            return None
        return self.own[self.indptr[motif] : self.indptr[motif + 1]]


@dataclass(frozen=True)
class AncestryWorld:
    """Joins between families of M motifs, and their law when only descent is at work.

    Parameters
    ----------
    observed : (M,) int64
        Joins between different families.
    laws : tuple of Law, length M
        Distribution of that number; exact where every configuration was enumerated.
    informative : (M,) int64
        Number of families (or branches) with some but not all of their traditions holding the
        motif. None: the counts leave nothing to chance, and p is 1.
    draws : int
        Draws behind the laws that are not exact.
    """

    observed: IntArray
    laws: tuple[Law, ...]
    informative: IntArray
    draws: int

    @cached_property
    def expected(self) -> FloatArray:
        """(M,) mean number of joins between families."""
        return np.array([law.mean() for law in self.laws])

    @cached_property
    def exact(self) -> npt.NDArray[np.bool_]:
        """(M,) whether the law was enumerated."""
        return np.array([law.exact for law in self.laws], dtype=bool)


@dataclass(frozen=True)
class _Setting:
    """What every chunk needs."""

    seed: int
    rate: FloatArray
    groups: tuple[IntArray, tables.Csr]
    later: tables.Csr
    motifs: HolderSets
    blocks: tuple[tables.Block, ...] = ()


def ancestry_world(
    graph: ContactGraph,
    lineages: Lineages,
    propensity: FloatArray,
    motifs: HolderSets,
    *,
    draws: int,
    seed: int,
    pool: Pool | None = None,
) -> AncestryWorld:
    r"""Compare each motif's joins between families with the world of descent alone.

    Given that :math:`n_f` of the :math:`N_f` traditions of family f hold the motif, the holders
    are the first :math:`n_f` of the family to ring exponential clocks of rates :math:`\lambda_i`.

    Parameters
    ----------
    graph : ContactGraph
        Over the n traditions surveyed for these motifs.
    lineages : Lineages
    propensity : (n,) float64
        Clock rates, finite and > 0; only ratios within a family matter.
    motifs : HolderSets
    draws : int
        Draws for motifs that have too many configurations to enumerate.
    seed : int
    pool : Pool or None

    Returns
    -------
    AncestryWorld

    Raises
    ------
    TwicetoldError
        When the propensities cannot be used.

    References
    ----------
    Plackett 1975, Applied Statistics 24, for the law of a prefix; restricting a permutation to
    strata: Good 2005, Permutation, Parametric and Bootstrap Tests of Hypotheses.
    """
    pool = pool or ThreadPool()
    rate = _checked_rates(propensity, graph.n)
    if motifs.own is not None:
        _checked_own(motifs, rate)
    groups = tables.group_members(lineages.level)
    family = np.asarray(lineages.family)
    edges = graph.edges[family[graph.edges[:, 0]] != family[graph.edges[:, 1]]].astype(np.int64)
    sizes = np.diff(groups[1][0])
    counts = _counts(motifs, groups[0], len(sizes))
    few = tables.log_configurations(counts, sizes) <= math.log(ENUMERATE) + 1e-9
    holders = (motifs.indptr.astype(np.int64), motifs.indices.astype(np.int64), motifs.own)
    blocks = tables.blocks_of(
        np.flatnonzero(~few), counts, groups, edges, rate=rate, holders=holders
    )
    setting = _Setting(
        seed, rate, groups, tables.later_neighbours(graph.n, edges), motifs, tuple(blocks)
    )
    laws = _exact_laws(setting, np.flatnonzero(few), pool) | _drawn_laws(setting, draws, pool)
    return AncestryWorld(
        observed=_observed(motifs, graph.n, edges),
        laws=tuple(laws[m] for m in range(len(motifs))),
        informative=((counts > 0) & (counts < sizes)).sum(axis=1).astype(np.int64),
        draws=draws,
    )


def _checked_rates(propensity: FloatArray, n: int) -> FloatArray:
    rate = np.asarray(propensity, dtype=np.float64)
    if rate.shape != (n,):
        raise ValueError(f"`propensity` must have shape ({n},), got {rate.shape}.")
    bad = np.flatnonzero(~(np.isfinite(rate) & (rate > 0)))
    if len(bad):
        raise TwicetoldError(
            f"Propensities must be finite numbers above 0; {len(bad)} of {n} are not, the first "
            f"is {rate[bad[0]]} at place {bad[0]}. Mend the effort column, or leave the tradition "
            "out."
        )
    return rate


def _checked_own(motifs: HolderSets, rate: FloatArray) -> None:
    assert motifs.own is not None
    own = _checked_rates(motifs.own, len(motifs.indices))
    above = int((own > rate[motifs.indices]).sum())
    if above:
        raise TwicetoldError(
            "A holder's own propensity (its motif left out) must not be above its common one, got "
            f"{above} that are. Leave records out of the same totals that give the common one."
        )


def _counts(motifs: HolderSets, code: IntArray, n_groups: int) -> npt.NDArray[np.int32]:
    """(M, S) holders of each motif in each group."""
    row = np.repeat(np.arange(len(motifs)), np.diff(motifs.indptr))
    out = np.zeros((len(motifs), n_groups), dtype=np.int32)
    np.add.at(out, (row, code[motifs.indices]), 1)
    return out


def _observed(motifs: HolderSets, n: int, edges: IntArray) -> IntArray:
    """(M,) joins among the counted edges."""
    shape = (len(motifs), n)
    held = sp.csr_array(
        (np.ones(len(motifs.indices), dtype=np.int64), motifs.indices, motifs.indptr), shape=shape
    )
    touching = sp.csr_array(
        (np.ones(len(edges), dtype=np.int64), (edges[:, 0], edges[:, 1])), shape=(n, n)
    )
    return np.asarray((held @ touching).multiply(held).sum(axis=1), dtype=np.int64).ravel()


def _exact_laws(setting: _Setting, motifs: IntArray, pool: Pool) -> dict[int, Law]:
    keys = [tuple(int(m) for m in motifs[k : k + 32]) for k in range(0, len(motifs), 32)]
    out: dict[int, Law] = {}
    for key, laws in zip(
        keys, pool.run(_exact_chunk, setting, keys, label="ancestry, exact"), strict=True
    ):
        out |= dict(zip(key, laws, strict=True))
    return out


def _exact_chunk(setting: _Setting, key: tuple[int, ...]) -> list[Law]:
    out = []
    for m in key:
        held = setting.motifs.row(m).astype(np.int64)
        own = setting.motifs.own_row(m)
        rate = setting.rate
        if own is not None:
            rate = rate.copy()
            rate[held] = own
        out.append(tables.exact_law(held, rate, setting.groups, setting.later))
    return out


def _drawn_laws(setting: _Setting, draws: int, pool: Pool) -> dict[int, Law]:
    chunks = [(k, min(CHUNK, draws - k * CHUNK)) for k in range(-(-draws // CHUNK))]
    keys = [(b, k, size) for b in range(len(setting.blocks)) for k, size in chunks]
    out: dict[int, Law] = {}
    total = np.zeros(0, dtype=np.int64)
    for key, hist in zip(keys, pool.run(_chunk, setting, keys, label="ancestry"), strict=True):
        total = hist if key[1] == 0 else total + hist
        if key[1] == len(chunks) - 1:
            block = setting.blocks[key[0]]
            for m, first, last in zip(
                block.motifs, block.hist_start[:-1], block.hist_start[1:], strict=True
            ):
                values = np.flatnonzero(total[first:last]).astype(np.int64)
                weights = total[first:last][values].astype(np.float64)
                out[int(m)] = tables.frozen_law(values, weights, draws, exact=False)
    return out


def _chunk(setting: _Setting, key: tuple[int, int, int]) -> IntArray:
    """Draw one chunk for one block; the seed knows the chunk alone, never the block."""
    block = setting.blocks[key[0]]
    words = chunk_words(setting.seed, Stream.ANCESTRY, key[1], draws=key[2])
    hist = np.zeros(block.hist_start[-1], dtype=np.int64)
    strata, own = setting.groups[1], block.own
    if own is None:
        table = (*block.bits, block.hist_start)
        kernels.count_shared(words, setting.rate, strata, block.most, block.edges, table, hist)
    else:
        kernels.count_own(
            words,
            setting.rate,
            strata,
            (block.most, own.far),
            (block.edges, *setting.later),
            (*block.bits, own.holds, own.shrink, block.hist_start),
            own.parts,
            hist,
        )
    return hist
