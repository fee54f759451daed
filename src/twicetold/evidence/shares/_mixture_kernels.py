"""Compiled kernel of the mixture over the catalogue. Sums run in a fixed order."""

from __future__ import annotations

import numba as nb
import numpy as np


@nb.njit(nogil=True, cache=True)
def mixing_weights(likelihood, times, weight, rounds, tolerance):  # type: ignore[no-untyped-def]
    """Improve ``weight`` ((K,), in place) by EM until no direction gains ``tolerance`` a motif.

    Multiplying a weight by the mean of likelihood over mixture likelihood is the EM step; the
    largest such mean less 1 bounds what is still to gain per motif (Lindsay 1983). Returns the
    number of rounds.
    """
    motifs, points = likelihood.shape
    factor = np.empty(points)
    total = 0.0
    for i in range(motifs):
        total += times[i]
    for turn in range(rounds):
        for k in range(points):
            factor[k] = 0.0
        for i in range(motifs):
            if times[i] == 0.0:
                continue
            # Four running sums: one alone would wait for each addition to end.
            m0 = 0.0
            m1 = 0.0
            m2 = 0.0
            m3 = 0.0
            k = 0
            while k + 4 <= points:
                m0 += likelihood[i, k] * weight[k]
                m1 += likelihood[i, k + 1] * weight[k + 1]
                m2 += likelihood[i, k + 2] * weight[k + 2]
                m3 += likelihood[i, k + 3] * weight[k + 3]
                k += 4
            while k < points:
                m0 += likelihood[i, k] * weight[k]
                k += 1
            part = times[i] / ((m0 + m1) + (m2 + m3))
            for k in range(points):
                factor[k] += part * likelihood[i, k]
        best = 0.0
        for k in range(points):
            best = max(best, factor[k] / total)
            weight[k] *= factor[k] / total
        if best - 1.0 < tolerance:
            return turn + 1
    return rounds
