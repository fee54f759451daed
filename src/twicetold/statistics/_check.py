"""Checks shared by the statistics: holders and family codes as clean arrays."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError


def holder_array(n: int, holders: npt.ArrayLike) -> npt.NDArray[np.int32]:
    """(h,) int32 sorted holders, each a tradition index 0 .. n - 1, none twice.

    Raises
    ------
    TwicetoldError
        When an index is not a whole number, out of range or repeated.
    """
    given = np.asarray(holders)
    if given.ndim != 1 or (given.size and given.dtype.kind not in "iu"):
        raise TwicetoldError(
            "`holders` must be a flat list of tradition indices (whole numbers), got "
            f"{given.dtype} of shape {given.shape}. For a mask, pass np.flatnonzero(mask)."
        )
    out = np.sort(given).astype(np.int32)
    if out.size and (given.min() < 0 or given.max() >= n):
        raise TwicetoldError(
            f"`holders` must be tradition indices from 0 to {n - 1}, got {given.min()} to "
            f"{given.max()}. Index the graph's own traditions."
        )
    if np.any(out[1:] == out[:-1]):
        raise TwicetoldError(
            "`holders` must name each tradition once, got "
            f"{int(out[1:][out[1:] == out[:-1]][0])} twice. Drop the repeats."
        )
    return out


def holder_mask(n: int, holders: npt.ArrayLike) -> npt.NDArray[np.bool_]:
    """(n,) bool, True where the tradition holds the motif."""
    mask = np.zeros(n, dtype=bool)
    mask[holder_array(n, holders)] = True
    return mask


def family_array(n: int, family_codes: npt.ArrayLike | None) -> npt.NDArray[np.int32]:
    """(n,) int32 family codes renumbered 0, 1, ...; None makes each tradition its own family.

    Raises
    ------
    TwicetoldError
        When there is not one whole number per tradition.
    """
    if family_codes is None:
        return np.arange(n, dtype=np.int32)
    given = np.asarray(family_codes)
    if given.shape != (n,) or (n and given.dtype.kind not in "iu"):
        raise TwicetoldError(
            f"`family_codes` must hold one whole number for each of {n} traditions, got "
            f"{given.dtype} of shape {given.shape}."
        )
    return np.unique(given, return_inverse=True)[1].reshape(n).astype(np.int32)
