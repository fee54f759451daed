r"""Clock rates from row totals, with saturation taken out.

A tradition whose clock has all but rung holds nearly every common motif, so among common motifs
totals say less than the rates differ. With :math:`t_k` the time at which motif k was looked at,

.. math:: \sum_i (1 - e^{-\lambda_i t_k}) = n_k, \qquad \sum_k (1 - e^{-\lambda_i t_k}) = r_i,

one equation for each motif held by :math:`n_k` and one for each tradition with :math:`r_i` on
record, sums running over what was searched: the margins that the clocks would give. Where motifs
are held by few, :math:`\lambda_i` is proportional to the total over what was searched for.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from twicetold.references.propensity import HALF_COUNT

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

_TURNS, _NEWTON, _WITHIN = 200, 3, 1e-6


@dataclass(frozen=True)
class RecordedRates:
    """Rates of N traditions up to a common factor.

    Parameters
    ----------
    common : (N,) float64
        From every motif.
    lowered : (N,) float64
        The same had one record fewer been made: the rate of a holder when the motif it holds is
        left out. Never above ``common``.
    turns : int
        Turns until both sets of equations held.
    """

    common: Floats
    lowered: Floats
    turns: int


def recorded_rates(
    attested: sp.csr_array, sets: npt.NDArray[np.bool_], set_of: npt.NDArray[np.integer]
) -> RecordedRates:
    """Solve for the rates that give the catalogue's margins.

    Half a record is added to every total, as in
    :func:`twicetold.references.propensity.recorded_propensity`. Motifs held by nobody, or by
    everybody searched, say nothing and take no part.

    Parameters
    ----------
    attested : (M, N) scipy.sparse.csr_array of bool
    sets : (S, N) bool
        Sets of traditions searched.
    set_of : (M,) int
        Which of them each motif was searched in.

    Returns
    -------
    RecordedRates
    """
    held = np.diff(attested.indptr)
    sizes = np.asarray(sets).sum(axis=1)[set_of]
    open_ = (held > 0) & (held < sizes)
    row = np.repeat(np.arange(len(held)), held)
    total = np.bincount(attested.indices[open_[row]], minlength=attested.shape[1]).astype(float)
    if not open_.any():
        ones = np.ones(attested.shape[1])
        return RecordedRates(ones, ones, 0)
    classes, count = np.unique(
        np.stack([np.asarray(set_of)[open_], held[open_]]), axis=1, return_counts=True
    )
    cells = np.asarray(sets)[classes[0]].astype(float)
    exposed = count @ cells
    # Never all of what was searched for: a clock cannot have rung for certain.
    target = np.minimum(total + HALF_COUNT, np.maximum(exposed - HALF_COUNT, HALF_COUNT / 2))
    below = np.minimum(np.maximum(total - HALF_COUNT, HALF_COUNT / 2), target)
    rates, times, turns = _solve(cells, classes[1].astype(float), count.astype(float), target)
    lowered = _rates_for(cells, times, count.astype(float), below, rates)
    scale = float(np.exp(np.log(rates).mean()))
    return RecordedRates(rates / scale, np.minimum(lowered, rates) / scale, turns)


def _solve(
    cells: Floats, held: Floats, count: Floats, target: Floats
) -> tuple[Floats, Floats, int]:
    """By turns: the motifs' times given the rates, then the rates given the times."""
    exposed = np.maximum(count @ cells, 1.0)
    rates = target / exposed
    times = held / np.maximum(cells @ rates, 1e-12)
    turns = 0
    while turns < _TURNS:
        turns += 1
        for _ in range(_NEWTON):
            times = times * np.exp(_times_step(cells, rates, times, held))
        before = rates
        rates = _rates_for(cells, times, count, target, rates, steps=_NEWTON)
        # Only ratios matter; keep the scale from drifting between rates and times.
        rates = rates / np.exp(np.log(rates / before).mean())
        if np.abs(np.log(rates / before)).max() < _WITHIN:
            break
    return rates, times, turns


def _times_step(cells: Floats, rates: Floats, times: Floats, held: Floats) -> Floats:
    """One damped Newton step of log times (U,)."""
    load = times[:, None] * rates
    ahead = np.exp(-load)
    off = held - (cells * (1.0 - ahead)).sum(axis=1)
    slope = (cells * load * ahead).sum(axis=1)
    return np.asarray(np.clip(off / np.maximum(slope, 1e-12), -1.0, 1.0), dtype=np.float64)


def _rates_for(
    cells: Floats,
    times: Floats,
    count: Floats,
    target: Floats,
    start: Floats,
    *,
    steps: int = 60,
) -> Floats:
    """Rates (N,) at which the expected totals are ``target``, by damped Newton steps."""
    rates = start.copy()
    weight = count[:, None] * cells
    for _ in range(steps):
        load = times[:, None] * rates
        ahead = np.exp(-load)
        off = target - (weight * (1.0 - ahead)).sum(axis=0)
        slope = (weight * load * ahead).sum(axis=0)
        step = np.clip(off / np.maximum(slope, 1e-12), -1.0, 1.0)
        rates = rates * np.exp(step)
        if np.abs(step).max(initial=0.0) < _WITHIN / 100:
            break
    return rates
