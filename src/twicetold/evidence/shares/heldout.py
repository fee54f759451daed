"""What held-out walks say of the networks: too sharp or too flat, and how much is learnt."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import minimize_scalar

from twicetold.evidence.shares.features import hats
from twicetold.evidence.shares.simplex import Simplex

FloatArray = npt.NDArray[np.float64]

#: Fewest rows around a number of holders from which a power is fitted.
_FEWEST = 100
#: Rows that give the mean width of intervals within a few percent.
_ENOUGH = 200


def at_knots(values: FloatArray, holders: npt.ArrayLike, knots: FloatArray) -> FloatArray:
    """Interpolate values given at log numbers of holders."""
    log = np.log(np.maximum(np.asarray(holders, dtype=np.float64), 1.0))
    return np.asarray(np.interp(log, knots, values))


def sharpened(weight: FloatArray, prior: FloatArray, power: FloatArray) -> FloatArray:
    """Raise densities to a power: ``prior (weight / prior) ** power``, summing to 1.

    Parameters
    ----------
    weight : (S, G) float64
    prior : (G,) float64
    power : (S,) float64
    """
    log = np.log(np.maximum(weight, 1e-30) / prior) * power[:, None]
    out = prior * np.exp(log - log.max(axis=1, keepdims=True))
    return np.asarray(out / out.sum(axis=1, keepdims=True))


@dataclass(frozen=True)
class HeldOut:
    """Snapshots the networks have not seen.

    Parameters
    ----------
    told : (S, G) float64
        The networks' weights.
    around, factors : (S, C) int64, (S, C) float64
        Density of the true shares over the prior is ``sum(told[around] * factors)``.
    holders : (S,) int32
    weight : (S,) float64
        Importance.
    """

    told: FloatArray
    around: npt.NDArray[np.int64]
    factors: FloatArray
    holders: npt.NDArray[np.int32]
    weight: FloatArray

    def sharpness(self, where: Simplex, knots: FloatArray) -> FloatArray:
        """Power at each knot that gives the true shares the highest mean log density.

        Temperature scaling (Guo et al. 2017), by number of holders.
        """
        out = np.ones(len(knots))
        for q in range(len(knots)):
            rows, part = self._window(knots, q)
            if len(rows) >= _FEWEST:
                out[q] = self._best_power(where, rows, part)
        out.flags.writeable = False
        return out

    def _best_power(self, where: Simplex, rows: npt.NDArray[np.intp], part: FloatArray) -> float:
        around, factors = self.around[rows], self.factors[rows]

        def cost(power: float) -> float:
            told = sharpened(self.told[rows], where.prior, np.full(len(rows), power))
            density = (np.take_along_axis(told, around, axis=1) * factors).sum(axis=1)
            return -float(np.sum(part * np.log(np.maximum(density, 1e-30))) / part.sum())

        best = minimize_scalar(cost, bounds=(0.5, 1.5), method="bounded", options={"xatol": 1e-3})
        return float(best.x)

    def width(self, where: Simplex, knots: FloatArray, sharpness: FloatArray) -> FloatArray:
        """Mean width of the 90 % intervals over that of the prior's, at each knot."""
        prior_low, prior_high = where.intervals(where.prior[None, :])
        prior = float((prior_high - prior_low).mean())
        out = np.ones(len(knots))
        for q in range(len(knots)):
            rows, part = self._window(knots, q)
            rows, part = rows[:_ENOUGH], part[:_ENOUGH]
            if len(rows) == 0:
                continue
            power = at_knots(sharpness, self.holders[rows], knots)
            low, high = where.intervals(sharpened(self.told[rows], where.prior, power))
            out[q] = float(np.sum(part * (high - low).mean(axis=1)) / part.sum()) / prior
        out.flags.writeable = False
        return out

    def _window(self, knots: FloatArray, q: int) -> tuple[npt.NDArray[np.intp], FloatArray]:
        """Rows around knot q and their weights (falling to 0 at the neighbouring knots)."""
        left, inside = hats(np.log(self.holders.astype(np.float64)), knots)
        part = np.where(left == q, 1.0 - inside, np.where(left + 1 == q, inside, 0.0))
        part = part * self.weight
        rows = np.flatnonzero(part)
        return rows, part[rows]
