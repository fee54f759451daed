"""How completely each tradition is recorded, from how its row total saturates with effort.

A motif truly held is recorded with probability r_i = 1 - exp(-kappa effort_i): records arrive at a
constant rate as material is collected. If traditions hold about the same number A of motifs, the
expected row total is A r_i. A is profiled out; the variance is taken in proportion to the mean, the
factor estimated by Pearson's statistic (quasi-Poisson; Wedderburn 1974, McCullagh & Nelder 1989),
because traditions do differ in what they hold.
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
    dispersion : float
        Variance over mean, at least 1.
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
    dispersion: float
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
    capacity = totals.sum() / rates.sum(axis=1)
    # Poisson log-likelihood with the capacity profiled out, up to a constant.
    raw = (totals * np.log(capacity[:, None] * rates)).sum(axis=1)
    best = int(np.argmax(raw))
    expected = capacity[best] * rates[best]
    pearson = float(np.sum((totals - expected) ** 2 / expected)) / (len(totals) - 2)
    dispersion = max(1.0, pearson)
    profile = (raw - raw[best]) / dispersion
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
        dispersion=dispersion,
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
