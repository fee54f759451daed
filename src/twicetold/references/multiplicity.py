"""Many motifs at once: who is in the family, and adjusted p-values."""

from __future__ import annotations

from typing import Literal

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError

Floats = npt.NDArray[np.float64]


def testable(p_attainable: npt.ArrayLike, alpha: float) -> npt.NDArray[np.bool_]:
    """Which motifs could be significant at all: those with p_attainable <= alpha.

    The others are too rare to tell and leave the family before it is counted (Tarone 1990,
    Biometrics 46, 515-522). NaN (nothing to test) is never testable.

    Raises
    ------
    TwicetoldError
        When alpha lies outside (0, 1).
    """
    _check_alpha(alpha)
    return np.asarray(p_attainable, dtype=np.float64) <= alpha


def tarone_count(p_attainable: npt.ArrayLike, alpha: float) -> int:
    """Give Tarone's K: the smallest K for which at most K motifs could reach alpha / K.

    Testing those at alpha / K holds the family-wise error at alpha (Tarone 1990); K is never more
    than the number of motifs. 1 when there is none.

    Raises
    ------
    TwicetoldError
        When alpha lies outside (0, 1).
    """
    _check_alpha(alpha)
    floor = np.asarray(p_attainable, dtype=np.float64)
    k = 1
    while int((floor <= alpha / k).sum()) > k:
        k += 1
    return k


def adjust(p: npt.ArrayLike, method: Literal["bh", "by"] = "bh") -> Floats:
    """Adjusted p-values that control the false discovery rate, by statsmodels.

    Parameters
    ----------
    p : (M,) float
        p-values; NaN marks a motif outside the family, which stays NaN and does not count.
    method : {"bh", "by"}
        Benjamini & Hochberg 1995 (independent or positively dependent tests), or Benjamini &
        Yekutieli 2001 (any dependence).

    Raises
    ------
    TwicetoldError
        When the method is unknown or a p-value lies outside 0 .. 1.
    """
    # Loading it takes a second, and one motif alone needs none of it.
    from statsmodels.stats.multitest import multipletests

    names = {"bh": "fdr_bh", "by": "fdr_by"}
    if method not in names:
        raise TwicetoldError(f'`method` must be "bh" or "by", got {method!r}.')
    given = np.asarray(p, dtype=np.float64)
    inside = ~np.isnan(given)
    if np.any((given[inside] < 0) | (given[inside] > 1)):
        raise TwicetoldError("p-values must lie from 0 to 1.")
    out = np.full(given.shape, np.nan)
    if inside.any():
        out[inside] = multipletests(given[inside], method=names[method])[1]
    return out


def _check_alpha(alpha: float) -> None:
    if not 0.0 < alpha < 1.0:
        raise TwicetoldError(f"`alpha` must lie above 0 and below 1, got {alpha}.")
