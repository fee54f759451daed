"""Turnover from the prevalence curve: a left-truncated log-series, with no look at geography.

Motifs that appear at a constant rate and are seen at a fixed time have P(n holders) in proportion
to x**n / n, n = 1 .. N, whatever the graph and the shares of the routes (Fisher, Corbet & Williams
1943; the birth-death derivation is Kendall's of 1948, cited from memory). Motifs in few traditions
are under-recorded, so counts under ``min_holders`` are left out and the law is conditioned on that.
With a mean recording probability r the recorded count is a binomial thinning of the true one; that
of an untruncated log-series is again a log-series, at x r / (1 - x (1 - r)).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from twicetold.randomness import Stream, chunk_generator
from twicetold.spread.chain import SpreadError

FloatArray = npt.NDArray[np.float64]

#: Fewest motifs at or over ``min_holders`` from which a turnover is fitted.
FEWEST = 12
#: Below this many the fit is given with a warning.
FEW = 40
#: Bootstrap samples of the goodness of fit.
SAMPLES = 999
#: Grid of 1 - x: dense where it matters, down to 1 - x = 1/50 of the smallest 1/N in sight.
_GRID = 240


def log_series(turnover: float, n: int, recorded: float = 1.0) -> FloatArray:
    """(n + 1,) probabilities of 0 .. n recorded holders, given at least one true holder.

    Parameters
    ----------
    turnover : float
        x, 0 < x <= 1.
    n : int
        Number of traditions, N.
    recorded : float
        Probability r that a true holder is recorded, 0 < r <= 1 (entry 0 is 0 at r = 1).
    """
    if not (0.0 < turnover <= 1.0 and 0.0 < recorded <= 1.0 and n >= 1):
        raise SpreadError(
            "A log-series needs 0 < turnover <= 1, 0 < recorded <= 1 and n >= 1, got "
            f"{turnover}, {recorded} and {n}."
        )
    m = np.arange(1, n + 1, dtype=np.float64)
    true = np.exp(m * np.log(turnover)) / m
    true /= true.sum()
    if recorded == 1.0:
        return np.concatenate([[0.0], true])
    return thinned(true, recorded)


def thinned(true: FloatArray, recorded: float) -> FloatArray:
    """(n + 1,) law of a binomially thinned count whose law on 1 .. n is ``true``.

    Equation: sum over m of true(m) C(m, k) r**k (1 - r)**(m - k); only counts m within the bulk of
    each binomial (less than 1e-16 left out) are visited.
    """
    n = len(true)
    out = np.zeros(n + 1)
    low = stats.binom.ppf(1e-17, np.arange(1, n + 1), recorded).astype(int)
    high = stats.binom.isf(1e-17, np.arange(1, n + 1), recorded).astype(int)
    logs = np.concatenate([[0.0], np.cumsum(np.log(np.arange(1, n + 1)))])
    for m in range(1, n + 1):
        k = np.arange(max(low[m - 1], 0), min(high[m - 1], m) + 1)
        log_p = logs[m] - logs[k] - logs[m - k]
        log_p += k * np.log(recorded) + (m - k) * np.log1p(-recorded)
        out[k] += true[m - 1] * np.exp(log_p)
    return np.asarray(out / out.sum())


@dataclass(frozen=True)
class TurnoverFit:
    """Turnover fitted to a catalogue's prevalence curve. Arrays are read-only.

    Parameters
    ----------
    turnover : float
        Maximum-likelihood x of *true* holders; NaN when ``refused``.
    low, high : float
        Ends of the 95 % profile-likelihood interval.
    recorded : float
        Mean recording probability taken as known.
    motifs, left_out : int
        Motifs used, and motifs under ``min_holders``.
    min_holders, n : int
        Left truncation, and number of traditions.
    fit_p : float
        Parametric-bootstrap p-value of the goodness of fit (likelihood-ratio statistic over the
        octave classes of ``classes``); small is bad.
    dispersion : float
        Pearson's chi-square of the classes over its degrees of freedom where the fit is bad
        (``fit_p`` at most .05), else 1; widens intervals (quasi-likelihood, Wedderburn 1974).
    classes : pandas.DataFrame
        ``from_holders, to_holders, observed, expected``.
    grid, profile : (G,) float64
        Values of x, increasing, and their log-likelihood less the largest.
    warning : str
        What a reader must know of the fit, or empty.
    refused : str
        Why there is no fit, or empty.
    """

    turnover: float
    low: float
    high: float
    recorded: float
    motifs: int
    left_out: int
    min_holders: int
    n: int
    fit_p: float = float("nan")
    dispersion: float = 1.0
    classes: pd.DataFrame = field(default_factory=pd.DataFrame)
    grid: FloatArray = field(default_factory=lambda: np.zeros(0))
    profile: FloatArray = field(default_factory=lambda: np.zeros(0))
    warning: str = ""
    refused: str = ""

    def interval(self, level: float) -> tuple[float, float]:
        """Profile-likelihood interval of x, widened by ``dispersion``."""
        if self.refused:
            return float("nan"), float("nan")
        return profile_interval(
            self.grid, self.profile, float(stats.chi2.ppf(level, 1)) * self.dispersion
        )

    def curve(self) -> pd.DataFrame:
        """Prevalence curve: ``holders, fitted, low, high`` (95 % binomial band) for 1 .. N.

        Expected numbers of motifs, scaled to the motifs used; counts under ``min_holders`` are what
        the fit predicts there.
        """
        p = log_series(self.turnover, self.n, self.recorded)[1:]
        over = p[self.min_holders - 1 :].sum()
        share = p / over
        total = round(self.motifs / over)
        q = p / p.sum()
        return pd.DataFrame(
            {
                "holders": np.arange(1, self.n + 1),
                "fitted": self.motifs * share,
                "low": stats.binom.ppf(0.025, total, q),
                "high": stats.binom.ppf(0.975, total, q),
            }
        )


def profile_interval(grid: FloatArray, profile: FloatArray, drop: float) -> tuple[float, float]:
    """Ends of {grid : 2 (max - profile) <= drop}, interpolated; the grid's own ends bound it."""
    inside = np.flatnonzero(-2.0 * profile <= drop)
    first, last = int(inside[0]), int(inside[-1])

    def cross(out: int, near: int) -> float:
        a, b = -2.0 * profile[out], -2.0 * profile[near]
        share = (a - drop) / (a - b)
        return float(grid[out] + share * (grid[near] - grid[out]))

    low = float(grid[0]) if first == 0 else cross(first - 1, first)
    high = float(grid[-1]) if last == len(grid) - 1 else cross(last + 1, last)
    return low, high


def fit_turnover(
    counts: Sequence[int] | npt.NDArray[np.integer],
    n: int,
    *,
    min_holders: int = 3,
    recorded: float = 1.0,
    seed: int = 1,
    samples: int = SAMPLES,
) -> TurnoverFit:
    """Fit the turnover to the numbers of holders of a catalogue's motifs.

    Parameters
    ----------
    counts : (M,) int
        Recorded holders of each motif, 0 .. n; those under ``min_holders`` are left out.
    n : int
        Number of traditions.
    min_holders : int
        Left truncation, >= 1.
    recorded : float
        Mean recording probability (see :mod:`twicetold.spread.recording`).
    seed : int
        Of the bootstrap.
    samples : int
        Bootstrap samples of the goodness of fit.

    Returns
    -------
    TurnoverFit
        ``refused`` when fewer than :data:`FEWEST` motifs are left, or all have ``n`` holders.

    Raises
    ------
    SpreadError
        When a count lies outside 0 .. n or ``min_holders`` outside 1 .. n.
    """
    held = np.asarray(counts, dtype=np.int64)
    if held.size and (held.min() < 0 or held.max() > n):
        raise SpreadError(f"Counts of holders must lie from 0 to {n}, got {held.min()} and up.")
    if not 1 <= min_holders <= n:
        raise SpreadError(f"`min_holders` must be a whole number from 1 to {n}, got {min_holders}.")
    used = held[held >= min_holders]
    left_out = int(np.sum((held > 0) & (held < min_holders)))
    if len(used) < FEWEST or min_holders == n:
        return _refusal(n, recorded, min_holders, (len(used), left_out))
    grid, table = _likelihood_table(n, min_holders, recorded)
    observed = np.bincount(used, minlength=n + 1)[min_holders:].astype(np.float64)
    likelihood = table @ observed
    best = int(np.argmax(likelihood))
    turnover, peak = _refine(grid, likelihood, best)
    classes, fit_p, dispersion = _goodness(
        observed, grid, table, turnover, min_holders, seed, samples
    )
    profile = np.minimum(likelihood - peak, 0.0)
    low, high = profile_interval(grid, profile, float(stats.chi2.ppf(0.95, 1)) * dispersion)
    for array in (grid, profile):
        array.flags.writeable = False
    return TurnoverFit(
        turnover=turnover,
        low=min(low, turnover),
        high=max(high, turnover),
        recorded=recorded,
        motifs=len(used),
        left_out=left_out,
        min_holders=min_holders,
        n=n,
        fit_p=fit_p,
        dispersion=dispersion,
        classes=classes,
        grid=grid,
        profile=profile,
        warning=_warning(len(used), fit_p, classes, high, n),
    )


def _refusal(n: int, recorded: float, min_holders: int, motifs: tuple[int, int]) -> TurnoverFit:
    nan = float("nan")
    refused = (
        f"Only {motifs[0]} motifs have {min_holders} holders or more; the turnover is not "
        f"fitted from fewer than {FEWEST}. Give it as a number (spread.turnover) or lower "
        "spread.min_holders."
    )
    return TurnoverFit(nan, nan, nan, recorded, *motifs, min_holders, n, refused=refused)


def _likelihood_table(n: int, least: int, recorded: float) -> tuple[FloatArray, FloatArray]:
    """Grid of x and (G, n - least + 1) log-probabilities of each count >= least."""
    gaps = np.concatenate([np.geomspace(0.97, 0.02 / n, _GRID), [0.0]])
    grid = 1.0 - gaps
    rows = []
    basis = _thinning(n, recorded) if recorded < 1.0 and n <= 1500 else None
    m = np.arange(1, n + 1, dtype=np.float64)
    for x in grid:
        true = np.exp(m * np.log(x)) / m
        if recorded == 1.0:
            p = true[least - 1 :]
        elif basis is not None:
            p = (basis @ true)[least:]
        else:
            # Above 1,500 traditions: the thinned law without a ceiling is again a log-series.
            thin = x * recorded / (1.0 - x * (1.0 - recorded))
            p = (np.exp(m * np.log(thin)) / m)[least - 1 :]
        rows.append(np.log(np.maximum(p / p.sum(), 1e-300)))
    return grid, np.array(rows)


def _thinning(n: int, recorded: float) -> FloatArray:
    """(n + 1, n) binomial probabilities of k recorded (row) of m true holders (column)."""
    m = np.arange(1, n + 1)
    return np.asarray(stats.binom.pmf(np.arange(n + 1)[:, None], m[None, :], recorded))


def _refine(grid: FloatArray, likelihood: FloatArray, best: int) -> tuple[float, float]:
    """Top of the parabola through the best grid point and its neighbours, in log(1 - x)."""
    if best in (0, len(grid) - 1, len(grid) - 2):
        return float(grid[best]), float(likelihood[best])
    three = slice(best - 1, best + 2)
    u = np.log1p(-grid[three])
    a, b, c = np.polyfit(u - u[1], likelihood[three] - likelihood[best], 2)
    if not a < 0.0:
        return float(grid[best]), float(likelihood[best])
    top = float(np.clip(-b / (2 * a), (u - u[1]).min(), (u - u[1]).max()))
    value = float(likelihood[best] + a * top**2 + b * top + c)
    return float(-np.expm1(u[1] + top)), max(value, float(likelihood[best]))


def _edges(n: int, least: int) -> npt.NDArray[np.int64]:
    """Upper ends of octave classes: least, then doubling, the last one n."""
    ends, top = [], least
    while top < n:
        ends.append(top)
        top = 2 * top
    return np.array([*ends, n], dtype=np.int64)


def _statistic(observed: FloatArray, expected: FloatArray) -> FloatArray:
    """Likelihood-ratio statistic 2 sum O log(O / E) over the last axis."""
    safe = np.where(observed > 0, observed, 1.0)
    terms = np.where(observed > 0, observed * np.log(safe / np.maximum(expected, 1e-300)), 0.0)
    return np.asarray(2.0 * terms.sum(axis=-1))


def _goodness(  # noqa: PLR0917
    observed: FloatArray,
    grid: FloatArray,
    table: FloatArray,
    turnover: float,
    least: int,
    seed: int,
    samples: int,
) -> tuple[pd.DataFrame, float, float]:
    """Classes, bootstrap p (the turnover fitted again to every sample), and dispersion."""
    n = len(observed) + least - 1
    ends = _edges(n, least)
    starts = np.concatenate([[least], ends[:-1] + 1])
    laws = np.exp(table)
    in_class = np.add.reduceat(laws, starts - least, axis=1)
    near = int(np.argmin(np.abs(grid - turnover)))
    motifs = int(observed.sum())
    seen = np.add.reduceat(observed, starts - least)
    expected = motifs * in_class[near]
    actual = float(_statistic(seen, expected))
    rng = chunk_generator(seed, Stream.TURNOVER, 0)
    drawn = rng.multinomial(motifs, laws[near] / laws[near].sum(), size=samples).astype(np.float64)
    refit = np.argmax(drawn @ table.T, axis=1)
    again = _statistic(np.add.reduceat(drawn, starts - least, axis=1), motifs * in_class[refit])
    fit_p = (1.0 + float(np.sum(again >= actual - 1e-12))) / (samples + 1.0)
    # Classes expected to be nearly empty would make Pearson's ratio erratic: pooled from the top.
    pooled_seen, pooled_expected = _pool(seen, expected, 5.0)
    freedom = len(pooled_seen) - 2
    pearson = float(np.sum((pooled_seen - pooled_expected) ** 2 / pooled_expected))
    # A fit that holds needs no widening: the ratio would then only add noise of its own.
    bad = fit_p <= 0.05 and freedom >= 1
    dispersion = max(1.0, pearson / freedom) if bad else 1.0
    classes = pd.DataFrame(
        {"from_holders": starts, "to_holders": ends, "observed": seen, "expected": expected}
    )
    return classes, fit_p, dispersion


def _pool(seen: FloatArray, expected: FloatArray, least: float) -> tuple[FloatArray, FloatArray]:
    """Join classes from the top until each is expected to hold ``least`` motifs."""
    a, b = list(seen), list(expected)
    while len(b) > 1 and b[-1] < least:
        a[-2:] = [a[-2] + a[-1]]
        b[-2:] = [b[-2] + b[-1]]
    return np.array(a), np.array(b)


def _warning(motifs: int, fit_p: float, classes: pd.DataFrame, high: float, n: int) -> str:
    said = []
    if motifs < FEW:
        said.append(
            f"The turnover rests on {motifs} motifs only; its interval is wide and its fit hardly "
            "tested."
        )
    enough = classes[classes["expected"] >= 5.0]
    ratio = enough["observed"] / enough["expected"]
    off = enough[(ratio > 2.0) | (ratio < 0.5)]
    if fit_p <= 0.05:
        said.append(
            f"THE PREVALENCE CURVE DOES NOT FIT a log-series (p = {fit_p:.3f}): what contact would "
            "look like is then less certain than its interval says."
        )
    for row in off.itertuples():
        ends = dict.fromkeys((str(row.from_holders), str(row.to_holders)))
        said.append(
            f"Motifs with {' to '.join(ends)} holders: {row.observed:.0f} found, "
            f"{row.expected:.1f} expected."
        )
    if high >= 1.0 - 0.05 / n:
        said.append("The prevalence curve sets no upper bound below 1 to the turnover.")
    return " ".join(said)
