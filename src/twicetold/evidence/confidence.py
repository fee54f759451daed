"""What the prevalence curve and the row totals leave open about turnover and recording.

p-values against the spread worlds are made honest about fitted nuisance parameters as Berger & Boos
(1994, JASA 89:1012) do it: the largest p over a confidence set of level 1 - beta, plus beta.
"""

from __future__ import annotations

import math
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
from twicetold.spread.turnover import FEWEST, TurnoverFit, fit_turnover

FloatArray = npt.NDArray[np.float64]

#: Error rate of the confidence set, given away in full by every p-value that uses it.
BETA = 1e-4
#: Turnovers that all count as possible where none can be fitted. Catalogues of sound segments of
#: 203, 354 and 584 languages gave .987, .996 and .998; the lower end has no source: below it
#: hardly a motif would ever reach thirty traditions.
PLAUSIBLE = (0.9, 0.998)
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
        The fitted recording first.
    beta : float
        Error rate of the set; 0 when nothing was fitted.
    turnover, recording : fits, or None where a number, a range (or completeness) was given
    notes : tuple of str
        Warnings of the fits.
    assumed : (float, float) or None
        Range over which the turnover is left open, where it was not fitted; None where it was, or
        was given as a number.
    """

    points: tuple[Point, ...]
    beta: float
    turnover: TurnoverFit | None
    recording: RecordingFit | None
    notes: tuple[str, ...] = ()
    assumed: tuple[float, float] | None = None


def confidence_set(
    prevalence: Prevalence,
    *,
    turnover: float | str | tuple[float, ...] = "fit",
    recording: str = "fit",
    min_holders: int = 3,
    beta: float = BETA,
    seed: int = 1,
) -> ConfidenceSet:
    """Fit what the plan leaves to be fitted, and lay out the confidence set.

    A catalogue too small for a prevalence curve has its turnover anywhere in :data:`PLAUSIBLE`.

    Parameters
    ----------
    prevalence : Prevalence
    turnover : float, (low, high), or "fit"
    recording : {"fit", "complete"}
    min_holders : int
        Left truncation of the prevalence fit.
    beta : float
        Error rate of the whole set; halved between turnover and recording when both are fitted.
    seed : int
        Of the bootstrap goodness of fit.
    """
    record = None
    if recording == "fit" and prevalence.row_totals is not None:
        record = fit_recording(
            prevalence.row_totals, prevalence.effort, searched=prevalence.searched
        )
    fitted_recording = record is not None and not record.refused
    least = min(min_holders, prevalence.n)
    too_few = _refused(prevalence, least) if turnover == "fit" else ""
    assumed = PLAUSIBLE if too_few else _range(turnover)
    fit_x = turnover == "fit" and not too_few
    parts = int(fit_x) + int(fitted_recording)
    level = 1.0 - beta / parts if parts else 1.0
    points, first = [], None
    for kappa in _kappas(record, prevalence.effort, level):
        recorded = None
        if np.isfinite(kappa) and prevalence.effort is not None:
            recorded = recorded_probability(prevalence.effort, kappa)
        if not fit_x:
            given = _across(assumed) if assumed else (float(turnover),)  # type: ignore[arg-type]
            points.append(Point(kappa, recorded, given[len(given) // 2], given))
            continue
        fit = fit_turnover(
            prevalence.counts,
            prevalence.n,
            min_holders=least,
            recorded=1.0 if recorded is None else float(recorded.mean()),
            seed=seed,
        )
        first = fit if first is None else first
        points.append(Point(kappa, recorded, fit.turnover, _spread_out(fit, level)))
    said = [f.warning or f.refused for f in (first, record) if f is not None]
    if too_few and assumed:
        said.insert(0, _unfitted(too_few, assumed))
    return ConfidenceSet(
        points=tuple(points),
        beta=beta if parts else 0.0,
        turnover=first,
        recording=record,
        notes=tuple(s for s in said if s),
        assumed=assumed,
    )


def _refused(prevalence: Prevalence, least: int) -> str:
    """Why no turnover can be fitted, or empty."""
    counts = np.asarray(prevalence.counts, dtype=np.int64)
    motifs = int(np.sum(counts >= least))
    if motifs >= FEWEST and least < prevalence.n:
        return ""
    have = "motif has" if motifs == 1 else "motifs have"
    return (
        f"Only {motifs:,} {have} {least} holders or more, and a turnover is not fitted from fewer "
        f"than {FEWEST}."
    )


def _range(turnover: float | str | tuple[float, ...]) -> tuple[float, float] | None:
    if isinstance(turnover, float | int | str):
        return None
    low, high = turnover
    return float(low), float(high)


def _across(assumed: tuple[float, float]) -> tuple[float, float, float]:
    """Ends of a range and its middle by ratio of 1 - x, which is what scatter goes by."""
    low, high = assumed
    return low, 1.0 - math.sqrt((1.0 - low) * (1.0 - high)), high


def _unfitted(too_few: str, assumed: tuple[float, float]) -> str:
    low, middle, high = _across(assumed)
    return (
        f"{too_few} It may then be anything from {low:g} to {high:g}: each p-value against "
        "contact-only and transmission-only is the largest in that range, route shares and bands "
        f"are those at {middle:.4g}. If you know better, give a number or a range "
        "(spread.turnover)."
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
