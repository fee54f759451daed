"""How completely each tradition is recorded, from how its row total saturates with effort.

A motif truly held is recorded with probability r_i = 1 - exp(-kappa effort_i): records arrive at a
constant rate as material is collected. If traditions hold about the same number A of motifs, the
expected row total is mu_i = A r_i. A is profiled out. Traditions do differ in what they hold, in
proportion to it, so the variance is mu + v mu**2 (negative binomial; v, the squared coefficient of
variation of what they hold, from Pearson's statistic). A variance in proportion to the mean, the
simpler quasi-Poisson choice (Wedderburn 1974; McCullagh & Nelder 1989), gave 95 % intervals that
held 83 % where repertoires varied by a fifth; v = 0 is the Poisson case.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy import stats

from twicetold.spread.chain import SpreadError
from twicetold.spread.turnover import profile_interval

FloatArray = npt.NDArray[np.float64]

#: Fewest traditions, and fewest distinct efforts, from which recording is fitted.
FEWEST = 10
#: Mean recording probability under which the spread chain would rest on unseen holders.
LEAST_RECORDED = 0.05
_GRID = 400


@dataclass(frozen=True)
class RecordingFit:
    """Recording fitted to row totals. Arrays are read-only.

    Parameters
    ----------
    kappa : float
        Records per unit of effort for each motif held; ``inf`` means complete recording; NaN when
        ``refused``.
    low, high : float
        Ends of the 95 % quasi-likelihood interval; ``high`` is ``inf`` when complete recording
        cannot be excluded, ``low`` is 0 when no saturation can be seen.
    capacity : float
        Motifs a fully recorded tradition would show.
    variation : float
        v, squared coefficient of variation of the number of motifs held, at least 0.
    mean_recorded : float
        Mean of r_i at ``kappa``.
    traditions : int
        Traditions used.
    grid, profile : (G,) float64
        Values of kappa, increasing (the last is ``inf``), and quasi-log-likelihood less its top.
    warning, refused : str
        What a reader must know; why there is no fit.
    """

    kappa: float
    low: float
    high: float
    capacity: float
    variation: float
    mean_recorded: float
    traditions: int
    grid: FloatArray = field(default_factory=lambda: np.zeros(0))
    profile: FloatArray = field(default_factory=lambda: np.zeros(0))
    warning: str = ""
    refused: str = ""

    def interval(self, level: float) -> tuple[float, float]:
        """Interval of kappa at another level; the ends may be 0 and ``inf``."""
        if self.refused:
            return float("nan"), float("nan")
        return _interval(self.grid, self.profile, level)


def recorded_probability(effort: FloatArray, kappa: float) -> FloatArray:
    """(N,) probabilities r_i = 1 - exp(-kappa effort_i); all 1 at ``kappa`` = inf."""
    if np.isinf(kappa):
        return np.ones(len(effort))
    return np.asarray(-np.expm1(-kappa * np.asarray(effort, dtype=np.float64)))


def fit_recording(
    row_totals: npt.NDArray[np.integer],
    effort: FloatArray | None,
    *,
    searched: npt.NDArray[np.integer] | None = None,
) -> RecordingFit:
    """Fit kappa to how the row totals saturate with effort.

    Parameters
    ----------
    row_totals : (N,) int
        Motifs attested in each tradition.
    effort : (N,) float64 or None
        Relative amounts collected, > 0; None refuses.
    searched : (N,) int or None
        Motifs each tradition was searched for, when they differ; expected totals are in proportion.

    Returns
    -------
    RecordingFit
        ``refused`` without effort, with fewer than :data:`FEWEST` traditions that were searched, or
        fewer distinct efforts: nothing can then be said of saturation.

    Raises
    ------
    SpreadError
        When an effort is not a positive number.
    """
    totals = np.asarray(row_totals, dtype=np.float64)
    exposure = np.ones(len(totals)) if searched is None else np.asarray(searched, dtype=np.float64)
    if effort is None:
        return _refusal("There is no effort column; recording is taken as complete.")
    work = np.asarray(effort, dtype=np.float64)
    if work.shape != totals.shape or not np.all(np.isfinite(work) & (work > 0.0)):
        raise SpreadError(f"`effort` must be {len(totals)} numbers above 0, one per tradition.")
    use = exposure > 0.0
    totals, work, exposure = totals[use], work[use], exposure[use]
    if len(totals) < FEWEST or len(np.unique(work)) < FEWEST or totals.sum() <= 0.0:
        return _refusal(
            f"Recording is not fitted from fewer than {FEWEST} traditions with different efforts; "
            "it is taken as complete."
        )
    exposure = exposure / exposure.max()
    middle = float(np.median(work))
    grid = np.concatenate([np.geomspace(1e-4, 50.0, _GRID) / middle, [np.inf]])
    rates = np.array([recorded_probability(work, k) for k in grid]) * exposure
    variation = 0.0
    for _ in range(6):
        capacity, raw = _profiled(totals, rates, variation)
        best = int(np.argmax(raw))
        variation = _variation(totals, capacity[best] * rates[best])
    profile = raw - raw[best]
    for array in (grid, profile):
        array.flags.writeable = False
    low, high = _interval(grid, profile, 0.95)
    kappa = float(grid[best])
    if best == 0:
        kappa = 0.0
    mean = float(recorded_probability(work, kappa).mean())
    return RecordingFit(
        kappa=kappa,
        low=low,
        high=high,
        capacity=float(capacity[best]),
        variation=variation,
        mean_recorded=mean,
        traditions=len(totals),
        grid=grid,
        profile=profile,
        warning=_warning(kappa, low, mean),
    )


def least_kappa(effort: FloatArray, mean_recorded: float = LEAST_RECORDED) -> float:
    """Give the kappa at which the mean recording probability is ``mean_recorded`` (bisection)."""
    work = np.asarray(effort, dtype=np.float64)
    low, high = 0.0, 1.0 / float(work.min())
    while recorded_probability(work, high).mean() < mean_recorded:
        high *= 2.0
    for _ in range(200):
        middle = 0.5 * (low + high)
        if recorded_probability(work, middle).mean() < mean_recorded:
            low = middle
        else:
            high = middle
    return high


def _profiled(
    totals: FloatArray, rates: FloatArray, variation: float
) -> tuple[FloatArray, FloatArray]:
    """(G,) best capacity at each kappa (Fisher scoring in its logarithm), and log-likelihood."""
    log_a = np.log(totals.sum() / rates.sum(axis=1))
    for _ in range(25 if variation > 0.0 else 0):
        mu = np.exp(log_a)[:, None] * rates
        step = ((totals - mu) / (1.0 + variation * mu)).sum(axis=1)
        step /= (mu / (1.0 + variation * mu)).sum(axis=1)
        log_a += np.clip(step, -1.0, 1.0)
        if np.abs(step).max() < 1e-12:
            break
    mu = np.exp(log_a)[:, None] * rates
    if variation > 0.0:
        terms = totals * (np.log(mu) - np.log1p(variation * mu)) - np.log1p(variation * mu) / (
            variation
        )
    else:
        terms = totals * np.log(mu) - mu
    return np.exp(log_a), terms.sum(axis=1)


def _variation(totals: FloatArray, mu: FloatArray) -> float:
    """Give the v at which Pearson's statistic equals its degrees of freedom (bisection), or 0."""
    freedom = len(totals) - 2
    square = (totals - mu) ** 2

    def pearson(v: float) -> float:
        return float(np.sum(square / (mu + v * mu**2)))

    if pearson(0.0) <= freedom:
        return 0.0
    low, high = 0.0, 1.0
    while pearson(high) > freedom:
        high *= 2.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if pearson(middle) > freedom else (low, middle)
    return high


def _interval(grid: FloatArray, profile: FloatArray, level: float) -> tuple[float, float]:
    drop = float(stats.chi2.ppf(level, 1))
    inside = -2.0 * profile <= drop
    low, high = profile_interval(grid[:-1], profile[:-1], drop) if inside[:-1].any() else (0.0, 0.0)
    if not inside[:-1].any():
        return float(grid[-2]), float("inf")
    if inside[0]:
        low = 0.0
    if inside[-1] or inside[-2]:
        high = float("inf")
    return low, high


def _refusal(why: str) -> RecordingFit:
    nan = float("nan")
    return RecordingFit(nan, nan, nan, nan, nan, 1.0, 0, refused=why)


def _warning(kappa: float, low: float, mean: float) -> str:
    if kappa == 0.0 or mean < LEAST_RECORDED:
        return (
            "Row totals grow with effort without any sign of saturation: how much is still "
            "unrecorded cannot be estimated from them. Read results that hang on it beside "
            'those under spread.recording = "complete".'
        )
    if low == 0.0:
        return (
            "Row totals show little saturation with effort: recording might be much poorer than "
            "estimated, and intervals say so."
        )
    return ""
