"""The one p-value function of the package, and the smallest p a motif could reach."""

from __future__ import annotations

from typing import Literal

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError
from twicetold.references.law import Law

Direction = Literal["many", "few"]
Floats = npt.NDArray[np.float64]


def p_value(at_least: npt.ArrayLike, draws: float, *, exact: bool = False) -> Floats:
    """Turn a tail into a p: (1 + tail) / (draws + 1), or its share where all was enumerated.

    The observed motif counts as one more draw of the world, which makes P(p <= a) <= a at every a
    whatever the number of draws (Phipson & Smyth 2010, Stat. Appl. Genet. Mol. Biol. 9, 39). Ties
    belong to the tail.

    Parameters
    ----------
    at_least : float or array
        Draws (or enumerated weight) at least as extreme as the observed value.
    draws : float
        Number of draws; the effective number for weighted draws; the total weight when ``exact``.
    exact : bool
        Whether every configuration was enumerated.

    Returns
    -------
    array of the shape of ``at_least``, in (0, 1] (0 only for an impossible value when ``exact``)

    Raises
    ------
    TwicetoldError
        When the tail is negative or larger than the draws, or nothing was drawn.
    """
    tail = np.asarray(at_least, dtype=np.float64)
    slack = 1e-9 * abs(draws)
    if not draws > 0 or not np.all((tail >= 0) & (tail <= draws + slack)):
        raise TwicetoldError(
            f"A tail must lie from 0 to the number of draws (above 0), got {tail} of {draws}."
        )
    if exact:
        return np.minimum(tail / draws, 1.0)
    return np.minimum((1.0 + tail) / (draws + 1.0), 1.0)


def p_many(law: Law, observed: npt.ArrayLike) -> Floats:
    """P(statistic >= observed): small where the motif shows *more* than the world."""
    return _p(law, observed, "many")


def p_few(law: Law, observed: npt.ArrayLike) -> Floats:
    """P(statistic <= observed): small where the motif shows *less* than the world."""
    return _p(law, observed, "few")


def p_floor(law: Law) -> float:
    """Smallest p that can be reported from this law at all: 1 / (draws + 1); 0 when exact."""
    return 0.0 if law.exact else 1.0 / (_draws(law) + 1.0)


def p_attainable(law: Law, direction: Direction, *, known: int | None = None) -> float:
    """Smallest p a motif with this number of holders could reach.

    The p of the most extreme value in the law: exact when the law is (two holders: mean degree /
    (N - 1)); for a drawn law, of the most extreme value drawn, hence never below 1/(draws + 1).
    It depends on the world and the number of holders, never on where the holders are, so leaving
    out motifs by it keeps every test valid (Tarone 1990).

    Parameters
    ----------
    law : Law
    direction : {"many", "few"}
    known : int or None
        A value known to be attainable (the observed one). Beyond the drawn support it lowers the
        result to 1/(draws + 1), so that no p lies under its attainable p.
    """
    extreme = law.values[-1] if direction == "many" else law.values[0]
    if known is not None:
        extreme = max(extreme, known) if direction == "many" else min(extreme, known)
    return float(_p(law, int(extreme), direction))


def _draws(law: Law) -> float:
    """Draws that count: Kish's (1965) effective number for weighted ones."""
    return law.effective if np.isfinite(law.effective) else float(law.draws)


def _p(law: Law, observed: npt.ArrayLike, direction: Direction) -> Floats:
    """Tail of a law as a p-value.

    Weighted draws (the spread chain's) enter as their share times their effective number, so the
    +1 weighs as much as one effective draw: an approximation, exact when weights are equal.
    """
    if direction not in ("many", "few"):
        raise TwicetoldError(f'`direction` must be "many" or "few", got {direction!r}.')
    value = np.asarray(observed)
    if value.dtype.kind not in "iu":
        raise TwicetoldError(f"Tails are counted on whole numbers, got {value.dtype}.")
    below = np.concatenate([[0.0], np.cumsum(law.weights)])
    above = np.concatenate([np.cumsum(law.weights[::-1])[::-1], [0.0]])
    if direction == "many":
        tail = above[np.searchsorted(law.values, value, side="left")]
    else:
        tail = below[np.searchsorted(law.values, value, side="right")]
    total = above[0]
    if law.exact:
        return p_value(tail, total, exact=True)
    draws = _draws(law)
    return p_value(tail if total == draws else tail / total * draws, draws)
