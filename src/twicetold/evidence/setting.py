"""One world without a second invention, as the laws it gives, and how it lies in the cache."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from twicetold.evidence.confidence import Point
from twicetold.references.law import Law

#: Statistics whose laws are kept; the clusters are for pictures.
KEPT = ("joins", "strands", "clusters", "scatter")


@dataclass(frozen=True)
class Setting:
    """One world of the worst case.

    Parameters
    ----------
    inheritance, kappa, turnover : float
    laws : mapping of (str, int) to Law
        By statistic (:data:`KEPT`) and count; a count no walk came by is absent.
    walked : frozenset of int
        Counts whose laws were walked at this turnover itself; the others are reweighted.
    """

    inheritance: float
    kappa: float
    turnover: float
    laws: Mapping[tuple[str, int], Law]
    walked: frozenset[int] = frozenset()

    def law(self, statistic: str, count: int) -> Law | None:
        """Law at this setting, or None where no walk came by."""
        return self.laws.get((statistic, count))


def packed(settings: Sequence[Setting]) -> dict[str, npt.NDArray[Any]]:
    """Lay settings of one share and recording out as flat arrays."""
    rows, values, weights = [], [], []
    for k, setting in enumerate(settings):
        for (name, count), law in setting.laws.items():
            own = int(count in setting.walked)
            rows.append((k, KEPT.index(name), count, len(law.values), law.draws, own))
            values.append(law.values)
            weights.append(law.weights)
    effective = [law.effective for s in settings for law in s.laws.values()]
    return {
        "rows": np.array(rows, dtype=np.int64).reshape(-1, 6),
        "values": np.concatenate([np.zeros(0, np.int64), *values]),
        "weights": np.concatenate([np.zeros(0), *weights]),
        "effective": np.array(effective, dtype=np.float64),
    }


def unpacked(arrays: Mapping[str, npt.NDArray[Any]], share: float, point: Point) -> list[Setting]:
    """Give the settings back; the inverse of :func:`packed`."""
    laws: list[dict[tuple[str, int], Law]] = [{} for _ in point.turnovers]
    walked: list[set[int]] = [set() for _ in point.turnovers]
    at = 0
    for (k, name, count, size, draws, own), effective in zip(
        arrays["rows"].tolist(), arrays["effective"].tolist(), strict=True
    ):
        part = slice(at, at + size)
        at += size
        laws[k][KEPT[name], count] = Law(
            arrays["values"][part], arrays["weights"][part], draws, effective=effective
        )
        if own:
            walked[k].add(count)
    return [
        Setting(share, point.kappa, turnover, laws[k], frozenset(walked[k]))
        for k, turnover in enumerate(point.turnovers)
    ]
