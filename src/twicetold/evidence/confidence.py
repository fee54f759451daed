"""What the prevalence curve and the row totals leave open about turnover and recording.

p-values against the spread worlds are made honest about fitted nuisance parameters as Berger & Boos
(1994, JASA 89:1012) do it: the largest p over a confidence set of level 1 - beta, plus beta.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold.spread.recording import (
    RecordingFit,
    fit_recording,
    least_kappa,
    recorded_probability,
)
from twicetold.spread.turnover import TurnoverFit, fit_turnover

FloatArray = npt.NDArray[np.float64]

#: Error rate of the confidence set, given away in full by every p-value that uses it.
BETA = 1e-4
#: Recording fits whose mean recording probabilities lie closer than this count as one.
SAME_RECORDING = 0.02


@dataclass(frozen=True)
class Point:
    """One recording and the turnovers it allows.

    Parameters
    ----------
    kappa : float
        ``inf`` for complete recording.
    recorded : (N,) float64 or None
        Recording probabilities; None for complete recording.
    centre : float
        Fitted (or given) turnover under this recording.
    turnovers : tuple of float
        Turnovers over which the worst case is taken, ``centre`` among them, increasing.
    """

    kappa: float
    recorded: FloatArray | None
    centre: float
    turnovers: tuple[float, ...]


@dataclass(frozen=True)
class Prevalence:
    """What turnover and recording are fitted to, for one set of surveyed traditions.

    Parameters
    ----------
    counts : (M,) int
        Recorded holders of the motifs.
    n : int
        Number of traditions.
    effort : (N,) float64 or None
    row_totals, searched : (N,) int or None
        Motifs attested in, and searched for in, each tradition; needed when recording is fitted.
    """

    counts: Sequence[int] | npt.NDArray[np.integer]
    n: int
    effort: FloatArray | None = None
    row_totals: npt.NDArray[np.integer] | None = None
    searched: npt.NDArray[np.integer] | None = None


@dataclass(frozen=True)
class ConfidenceSet:
    """Turnover and recording, with what is left open.

    Parameters
    ----------
    points : tuple of Point
        The fitted recording first; empty when ``refused``.
    beta : float
        Error rate of the set; 0 when both were given.
    turnover, recording : fits, or None where a number (or completeness) was given
    notes : tuple of str
        Warnings of the fits.
    refused : str
        Why there is no turnover, or empty.
    """

    points: tuple[Point, ...]
    beta: float
    turnover: TurnoverFit | None
    recording: RecordingFit | None
    notes: tuple[str, ...] = ()
    refused: str = ""


def confidence_set(
    prevalence: Prevalence,
    *,
    turnover: float | str = "fit",
    recording: str = "fit",
    min_holders: int = 3,
    beta: float = BETA,
    seed: int = 1,
) -> ConfidenceSet:
    """Fit what the plan leaves to be fitted, and lay out the confidence set.

    Parameters
    ----------
    prevalence : Prevalence
    turnover : float or "fit"
    recording : {"fit", "complete"}
    min_holders : int
        Left truncation of the prevalence fit.
    beta : float
        Error rate of the whole set; halved between turnover and recording when both are fitted.
    seed : int
        Of the bootstrap goodness of fit.
    """
    fit_x = isinstance(turnover, str)
    record = None
    if recording == "fit" and prevalence.row_totals is not None:
        record = fit_recording(
            prevalence.row_totals, prevalence.effort, searched=prevalence.searched
        )
    fitted_recording = record is not None and not record.refused
    parts = int(fit_x) + int(fitted_recording)
    level = 1.0 - beta / parts if parts else 1.0
    points, first = [], None
    for kappa in _kappas(record, prevalence.effort, level):
        recorded = None
        if np.isfinite(kappa) and prevalence.effort is not None:
            recorded = recorded_probability(prevalence.effort, kappa)
        if not fit_x:
            points.append(Point(kappa, recorded, float(turnover), (float(turnover),)))
            continue
        fit = fit_turnover(
            prevalence.counts,
            prevalence.n,
            min_holders=min(min_holders, prevalence.n),
            recorded=1.0 if recorded is None else float(recorded.mean()),
            seed=seed,
        )
        first = fit if first is None else first
        if fit.refused:
            return ConfidenceSet((), beta, fit, record, refused=fit.refused)
        points.append(Point(kappa, recorded, fit.turnover, _spread_out(fit, level)))
    said = [f.warning or f.refused for f in (first, record) if f is not None]
    return ConfidenceSet(
        points=tuple(points),
        beta=beta if parts else 0.0,
        turnover=first,
        recording=record,
        notes=tuple(s for s in said if s),
    )


def _kappas(record: RecordingFit | None, effort: FloatArray | None, level: float) -> list[float]:
    """Fitted kappa first, then the ends of its interval where they make a difference."""
    if record is None or record.refused or effort is None:
        return [float("inf")]
    floor = least_kappa(effort)
    out: list[float] = []
    for kappa in (record.kappa, *record.interval(level)):
        near = max(kappa, floor)
        mean = float(recorded_probability(effort, near).mean())
        if 1.0 - mean < SAME_RECORDING / 4:
            near = float("inf")
        taken = [float(recorded_probability(effort, k).mean()) for k in out]
        if all(abs(mean - t) >= SAME_RECORDING for t in taken):
            out.append(near)
    return out


def _spread_out(fit: TurnoverFit, level: float) -> tuple[float, ...]:
    low, high = fit.interval(level)
    low, high = min(low, fit.turnover), max(high, fit.turnover)
    middle = fit.turnover
    five = {low, 0.5 * (low + middle), middle, 0.5 * (middle + high), high}
    return tuple(sorted(five))
