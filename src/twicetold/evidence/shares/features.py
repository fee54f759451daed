"""From summaries to what the network reads: comparable across numbers of holders."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from twicetold.evidence.shares._kernels import SUMMARIES

FloatArray = npt.NDArray[np.float64]

#: Standardised features are cut here: beyond it the bank has next to nothing to learn from.
CUT = 5.0
#: A feature whose sd falls below this at some number of holders says nothing there.
_CONSTANT = 1e-4
#: Counts of holders or of groups of them, from 0 to n.
_COUNTED = (
    *(f"groups_{d}" for d in (1, 2, 3, 4)),
    *("strands", "strands_2", "families", "largest_cluster", "largest_strand", "largest_family"),
    *("lone_1", "lone_2", "lone_3", "cut_off", "mixed_clusters", "fragments"),
)
_COLUMN = {name: k for k, name in enumerate(SUMMARIES)}


def features(summaries: npt.ArrayLike, holders: npt.ArrayLike) -> FloatArray:
    """Turn summaries into ratios, roots and logs.

    Parameters
    ----------
    summaries : (S, K) float
        Columns :data:`SUMMARIES`.
    holders : (S,) int
        Number of holders of each set, n >= 1.

    Returns
    -------
    (S, D) float64
    """
    raw = np.asarray(summaries, dtype=np.float64)
    n = np.asarray(holders, dtype=np.float64)

    def c(name: str) -> FloatArray:
        return raw[:, _COLUMN[name]]

    columns: list[FloatArray] = []
    for d in (1, 2, 3, 4):
        # Counts of pairs are roughly Poisson: their roots have a steady spread.
        columns += [np.sqrt(c(f"same_pairs_{d}") / n), np.sqrt(c(f"cross_pairs_{d}") / n)]
    for name in _COUNTED:
        # The share of holders tells many from few; the log tells one from two.
        columns += [c(name) / n, np.log1p(c(name))]
    for name in ("second_cluster", "largest_group_2", "single_families", "saturation"):
        columns.append(c(name) / n)
    for kind in ("nearest", "nearest_same", "nearest_cross"):
        columns += [c(f"{kind}_{d}") / n for d in (1, 2, 3, 4, 5)]
    columns += [np.sqrt(c("family_pairs") / n), c("family_squares") / n**2, c("entropy")]
    for kind in ("same", "cross"):
        joins, expected = c(f"{kind}_pairs_1"), c(f"{kind}_joins_expected")
        columns += [(joins - expected) / n, (joins - expected) / np.sqrt(expected + 1.0)]
        columns.append(2.0 * joins / (c(f"{kind}_degree") + 1.0))
    columns.append(c("cross_degree") / (c("same_degree") + c("cross_degree") + 1.0))
    columns += [(c("groups_1") - c("strands")) / n, (c("fragments") - c("families")) / n]
    columns += [c("propensity") / n, c("propensity") / np.sqrt(n)]
    columns.append(c("propensity_lone") / np.sqrt(c("lone_1") + 1.0))
    return np.stack(columns, axis=1)


@dataclass(frozen=True)
class Scale:
    """Centre and gain of every feature, by number of holders. Arrays are read-only.

    Parameters
    ----------
    knots : (Q,) float64
        Log numbers of holders, increasing.
    centre, gain : (Q, D) float64
        Mean and inverse standard deviation, interpolated linearly between knots; a feature that
        is constant has gain 0.
    """

    knots: FloatArray
    centre: FloatArray
    gain: FloatArray

    def apply(self, values: npt.NDArray[Any], holders: npt.ArrayLike) -> npt.NDArray[np.float32]:
        """Standardise, and add the log number of holders as the last column; (S, D + 1)."""
        log = np.log(np.asarray(holders, dtype=np.float64))
        left, inside = hats(log, self.knots)
        right = np.minimum(left + 1, len(self.knots) - 1)
        out = np.empty((len(values), values.shape[1] + 1), dtype=np.float32)
        for k in range(values.shape[1]):
            centre = (1.0 - inside) * self.centre[left, k] + inside * self.centre[right, k]
            gain = (1.0 - inside) * self.gain[left, k] + inside * self.gain[right, k]
            out[:, k] = np.clip((values[:, k] - centre) * gain, -CUT, CUT)
        out[:, -1] = (log - self.knots[0]) / max(float(self.knots[-1] - self.knots[0]), 1.0) - 0.5
        return out


def hats(log: FloatArray, knots: FloatArray) -> tuple[npt.NDArray[np.int64], FloatArray]:
    """Give the knot to the left of each value and how far it is towards the next (0 .. 1)."""
    if len(knots) == 1:
        return np.zeros(len(log), dtype=np.int64), np.zeros(len(log))
    left = np.clip(np.searchsorted(knots, log, side="right") - 1, 0, len(knots) - 2)
    inside = (log - knots[left]) / (knots[left + 1] - knots[left])
    return left.astype(np.int64), np.clip(inside, 0.0, 1.0)


def holder_knots(smallest: int, largest: int) -> FloatArray:
    """Logs of whole numbers from ``smallest`` to ``largest``, each about 1.4 times the last."""
    values = [smallest]
    while values[-1] < largest:
        values.append(min(max(values[-1] + 1, round(values[-1] * 1.4)), largest))
    return np.log(np.array(values, dtype=np.float64))


def fit_scale(
    values: npt.NDArray[Any], holders: npt.ArrayLike, weight: FloatArray, knots: FloatArray
) -> Scale:
    """Fit centre and gain as weighted averages around each knot.

    Parameters
    ----------
    values : (S, D) float
    holders : (S,) int
    weight : (S,) float64
    knots : (Q,) float64
    """
    left, inside = hats(np.log(np.asarray(holders, dtype=np.float64)), knots)
    shape = (len(knots), values.shape[1])
    centre, gain = np.zeros(shape), np.zeros(shape)
    cells = np.concatenate([left, np.minimum(left + 1, len(knots) - 1)])
    masses = np.concatenate([weight * (1.0 - inside), weight * inside])
    total = np.maximum(np.bincount(cells, masses, len(knots)), 1e-300)

    def mean(column: FloatArray) -> FloatArray:
        out = np.bincount(cells, masses * np.concatenate([column, column]), len(knots))
        return np.asarray(out / total)

    for k in range(values.shape[1]):
        column = values[:, k].astype(np.float64)
        centre[:, k] = mean(column)
        fitted = (1.0 - inside) * centre[left, k]
        fitted += inside * centre[np.minimum(left + 1, len(knots) - 1), k]
        sd = np.sqrt(mean((column - fitted) ** 2))
        gain[:, k] = np.where(sd > _CONSTANT, 1.0 / np.maximum(sd, _CONSTANT), 0.0)
    for array in (centre, gain):
        array.flags.writeable = False
    return Scale(knots, centre, gain)
