"""The hidden-propensity bound: how strong an unmeasured environment would have to be.

A snapshot cannot separate contact from an environment shared by neighbours that nobody measured.
This number says how much of it would be needed: the spread (standard deviation of the logarithm)
of a smooth propensity over the map under which emergence alone gives as many joins as observed
5 % of the time.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.errors import TwicetoldError
from twicetold.evidence import _hidden_kernels as kernels
from twicetold.evidence.smooth import SmoothField
from twicetold.graph import ContactGraph
from twicetold.randomness import Stream, chunk_words
from twicetold.workers import Pool, ThreadPool

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

#: Draws of one chunk. Part of what a seed means: never change it.
CHUNK = 64
#: Strengths tried: 0 to LARGEST in steps of LARGEST / STEPS, bisected, then interpolated.
LARGEST, STEPS = 4.0, 32
#: Fields are kept between strengths when they are at most this many numbers in all.
KEPT = 20_000_000
_CLOCKS = 0


@dataclass(frozen=True)
class Search:
    """How the bound is looked for.

    Parameters
    ----------
    draws : int
        Fields, each with one set of clocks; the same ones at every strength.
    seed : int
    alpha : float
        Chance of the observed joins at the bound.
    """

    draws: int = 1999
    seed: int = 1
    alpha: float = 0.05


@dataclass(frozen=True)
class HiddenBounds:
    """Bounds of M motifs.

    Parameters
    ----------
    log_sd : (M,) float64
        0 where emergence alone already gives the joins often enough; infinity where no strength
        tried (up to 4) does.
    low, high : (M,) float64
        95 % interval from the finite number of draws.
    ratio : (M,) float64
        Greatest over least mean propensity of a region at the bound (median over fields).
    length_km : float
    """

    log_sd: FloatArray
    low: FloatArray
    high: FloatArray
    ratio: FloatArray
    length_km: float

    def of(self, k: int) -> dict[str, float]:
        """Plain numbers of one motif."""
        return {
            "log_sd": float(self.log_sd[k]),
            "ratio": float(self.ratio[k]),
            "log_sd_low": float(self.low[k]),
            "log_sd_high": float(self.high[k]),
            "length_km": self.length_km,
        }


@dataclass(frozen=True)
class _Setting:
    search: Search
    field: SmoothField
    log_rate: FloatArray
    graph: tuple[IntArray, IntArray]
    wanted: tuple[IntArray, IntArray]
    kept: tuple[FloatArray, ...] = ()

    def draw(self, k: int) -> FloatArray:
        """Fields of chunk k."""
        if self.kept:
            return self.kept[k]
        size = min(CHUNK, self.search.draws - k * CHUNK)
        return self.field.draw(self.search.seed, k, size)


@dataclass
class _Tails:
    """Tails at the strengths asked for so far; each strength is drawn once."""

    setting: _Setting
    pool: Pool
    known: dict[int, IntArray] = field(default_factory=dict)

    def at(self, strengths: Iterable[int]) -> None:
        """Draw the strengths (in steps) not known yet."""
        new = sorted(set(strengths) - set(self.known))
        if not new:
            return
        chunks = -(-self.setting.search.draws // CHUNK)
        sigmas = tuple(g * LARGEST / STEPS for g in new)
        total = np.zeros((len(new), len(self.setting.wanted[1])), dtype=np.int64)
        keys = [(k, sigmas) for k in range(chunks)]
        for part in self.pool.run(_chunk, self.setting, keys, label="hidden propensity"):
            total += part
        self.known |= dict(zip(new, total, strict=True))


def hidden_bounds(
    graph: ContactGraph,
    smooth: SmoothField,
    propensity: npt.ArrayLike,
    holders: npt.ArrayLike,
    joins: npt.ArrayLike,
    *,
    search: Search | None = None,
    pool: Pool | None = None,
) -> HiddenBounds:
    r"""Solve for the strength of a hidden propensity that would explain each motif's joins.

    The rates are :math:`\lambda_i e^{\sigma z_i}` with z a fresh smooth field in every draw. By
    bisection, :math:`P(\text{joins} \ge \text{observed}) = \alpha` over fields and clocks. All
    strengths see the same fields and clocks, and a draw serves every number of holders, so the
    whole catalogue costs at most 33 sweeps a draw, and a motif alone gets what it gets in a batch.

    Parameters
    ----------
    graph : ContactGraph
        Over the n traditions surveyed for these motifs.
    smooth : SmoothField
        Over the same.
    propensity : (n,) float
        What is known, > 0.
    holders, joins : (M,) int
        Observed.
    search : Search, optional
    pool : Pool, optional

    Raises
    ------
    TwicetoldError
        When propensities or holders cannot be used.
    """
    search = search or Search()
    n, observed = np.asarray(holders, dtype=np.int64), np.asarray(joins, dtype=np.int64)
    rate = np.asarray(propensity, dtype=np.float64)
    if rate.shape != (graph.n,) or not np.all(np.isfinite(rate) & (rate > 0)):
        raise TwicetoldError(
            f"Propensities must be {graph.n} finite numbers above 0 for a hidden one to add to."
        )
    if np.any((n < 0) | (n > graph.n)):
        raise TwicetoldError(f"Holders must be from 0 to {graph.n}, got {n.min()} to {n.max()}.")
    pairs, which = np.unique(np.stack([n, observed], axis=1), axis=0, return_inverse=True)
    first = np.searchsorted(pairs[:, 0], np.arange(graph.n + 2)).astype(np.int64)
    setting = _Setting(
        search,
        smooth,
        np.log(rate),
        (graph.indptr.astype(np.int64), graph.indices.astype(np.int64)),
        (first, np.ascontiguousarray(pairs[:, 1])),
    )
    pool = pool or ThreadPool()
    tails = _Tails(_with_fields(setting, pool), pool)
    draws = search.draws
    middle, low, high = (
        _crossing(tails, chance, search.alpha)
        for chance in (
            lambda t: (1.0 + t) / (draws + 1.0),
            lambda t: _wilson(t, draws, 1.96),
            lambda t: _wilson(t, draws, -1.96),
        )
    )
    where = which.ravel()
    found = [x[where] for x in (middle, low, high)]
    # With fewer than two holders there is nothing to join, and nothing to explain.
    for x in found:
        x[(n < 2) | (observed == 0)] = 0.0
    return HiddenBounds(
        found[0], found[1], found[2], _region_ratio(smooth, search.seed, found[0]), smooth.length_km
    )


def _with_fields(setting: _Setting, pool: Pool) -> _Setting:
    """Draw the fields once for all strengths, where they fit in memory."""
    if setting.search.draws * len(setting.log_rate) > KEPT:
        return setting
    chunks = range(-(-setting.search.draws // CHUNK))
    return replace(setting, kept=tuple(pool.run(_fields, setting, chunks, label="hidden fields")))


def _fields(setting: _Setting, k: int) -> FloatArray:
    return setting.draw(k)


def _chunk(setting: _Setting, key: tuple[int, tuple[float, ...]]) -> IntArray:
    k, sigmas = key
    fields = setting.draw(k)
    tails = np.zeros((len(sigmas), len(setting.wanted[1])), dtype=np.int64)
    kernels.count_tails(
        chunk_words(setting.search.seed, Stream.HIDDEN, _CLOCKS, k, draws=len(fields)),
        setting.log_rate,
        fields,
        np.array(sigmas),
        setting.graph,
        setting.wanted,
        tails,
    )
    return tails


def _wilson(tail: IntArray, draws: int, z: float) -> FloatArray:
    """One end of Wilson's (1927) interval for a share; z < 0 gives the lower one."""
    share = tail / draws
    middle = share + z * z / (2 * draws)
    half = z * np.sqrt(share * (1 - share) / draws + z * z / (4 * draws * draws))
    return np.asarray((middle + half) / (1 + z * z / draws), dtype=np.float64)


def _crossing(tails: _Tails, chance: Callable[[IntArray], FloatArray], alpha: float) -> FloatArray:
    """Strength at which ``chance`` of the tail reaches alpha: bisected to a step, interpolated."""
    tails.at([0, STEPS])
    n_wanted = len(tails.setting.wanted[1])
    below, above = np.zeros(n_wanted, np.int64), np.full(n_wanted, STEPS)
    never = chance(tails.known[STEPS]) < alpha
    already = chance(tails.known[0]) >= alpha
    open_ = ~never & ~already
    while np.any(open_ & (above - below > 1)):
        middle = (below + above) // 2
        tails.at(middle[open_].tolist())
        for t in np.flatnonzero(open_ & (above - below > 1)):
            g = int(middle[t])
            if chance(tails.known[g][t : t + 1])[0] >= alpha:
                above[t] = g
            else:
                below[t] = g
    out = np.zeros(n_wanted)
    for t in np.flatnonzero(open_):
        a, b = (_logit(chance(tails.known[int(g[t])][t : t + 1])[0]) for g in (below, above))
        part = (_logit(alpha) - a) / (b - a) if b > a else 1.0
        out[t] = (below[t] + np.clip(part, 0.0, 1.0)) * LARGEST / STEPS
    out[never] = np.inf
    return out


def _logit(p: float) -> float:
    p = min(max(p, 1e-9), 1 - 1e-9)
    return math.log(p / (1 - p))


def _region_ratio(smooth: SmoothField, seed: int, log_sd: FloatArray) -> FloatArray:
    """Greatest over least regional mean of exp(sigma z), median over the first fields."""
    z = np.concatenate([smooth.draw(seed, k, CHUNK) for k in range(4)])
    member = np.eye(int(smooth.region.max()) + 1)[smooth.region]
    member /= member.sum(axis=0)
    steps = np.linspace(0.0, LARGEST, STEPS + 1)
    logs = []
    for sigma in steps:
        means = np.exp(sigma * z) @ member
        logs.append(np.median(np.log(means.max(axis=1) / means.min(axis=1))))
    out = np.exp(np.interp(np.where(np.isfinite(log_sd), log_sd, 0.0), steps, logs))
    return np.where(np.isfinite(log_sd), out, np.inf)


def hidden_sensitivity(
    graph: ContactGraph,
    fields: Sequence[SmoothField],
    propensity: npt.ArrayLike,
    holders: npt.ArrayLike,
    joins: npt.ArrayLike,
    *,
    search: Search | None = None,
    pool: Pool | None = None,
) -> pd.DataFrame:
    """Bounds at several correlation lengths: ``motif`` (its place), and the fields of a bound."""
    rows = []
    for smooth in fields:
        found = hidden_bounds(graph, smooth, propensity, holders, joins, search=search, pool=pool)
        rows += [{"motif": k, **found.of(k)} for k in range(len(found.log_sd))]
    return pd.DataFrame(rows)


def hidden_sentence(bound: dict[str, float], alpha: float = 0.05) -> str:
    """Say the bound in one plain sentence."""
    rounded = float(f"{bound['length_km']:.2g}")
    length, share = f"{rounded:,.0f} km", f"{100 * alpha:g} %"
    if math.isinf(bound["log_sd"]):
        return (
            f"No smooth unmeasured propensity we tried (log-sd up to {LARGEST:g}, varying over "
            f"about {length}) makes these joins as likely as {share} without contact."
        )
    if bound["log_sd"] == 0:
        return (
            "No hidden environment is needed: emergence alone, as propensities stand, gives this "
            f"many joins more than {share} of the time."
        )
    high = bound["log_sd_high"]
    ratio = float(f"{bound['ratio']:.2g}")
    times = f"{ratio:,g}"
    upper = f"{high:.2f}" if math.isfinite(high) else f"more than {LARGEST:g}"
    return (
        f"An environment that nobody measured, varying smoothly over about {length}, would have to "
        f"make the most favoured region about {times} times as ready to bring forth "
        f"this motif as the least favoured one (log-sd {bound['log_sd']:.2f}, interval "
        f"{bound['log_sd_low']:.2f} to {upper}) for emergence alone to give this many joins "
        f"{share} of the time."
    )
