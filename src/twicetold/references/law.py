"""The law of an integer statistic in some world, drawn or enumerated, and p-values from it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt


@dataclass(frozen=True)
class Law:
    """Weights of an integer statistic's values. Arrays are read-only.

    Parameters
    ----------
    values : (k,) int64
        Strictly increasing.
    weights : (k,) float64
        Weight of each value: counts of draws, numbers of configurations, or sums of importance
        weights; all > 0.
    draws : int
        Number of draws; 0 when ``exact``.
    exact : bool
        True when every configuration was enumerated.
    effective : float
        Effective number of independent draws (equals ``draws`` when unweighted).
    """

    values: npt.NDArray[np.int64]
    weights: npt.NDArray[np.float64]
    draws: int
    exact: bool = False
    effective: float = float("nan")

    @property
    def total(self) -> float:
        """Sum of the weights."""
        return float(self.weights.sum())

    def mean(self) -> float:
        """Mean of the statistic."""
        return float(self.values @ self.weights / self.total)

    def variance(self) -> float:
        """Variance of the statistic (population form)."""
        return float(((self.values - self.mean()) ** 2) @ self.weights / self.total)

    def at_least(self, value: int) -> float:
        """Weight of values >= ``value``."""
        return float(self.weights[self.values >= value].sum())

    def at_most(self, value: int) -> float:
        """Weight of values <= ``value``."""
        return float(self.weights[self.values <= value].sum())

    def quantile(self, q: float) -> int:
        """Smallest value whose cumulated share is at least ``q`` (0 < q <= 1)."""
        cumulated = np.cumsum(self.weights)
        k = int(np.searchsorted(cumulated, q * cumulated[-1] * (1 - 1e-12)))
        return int(self.values[min(k, len(self.values) - 1)])
