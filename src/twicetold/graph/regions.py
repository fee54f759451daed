"""Parting the map into compact regions, to leave one out at a time."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from twicetold.errors import GraphError
from twicetold.graph.sphere import (
    FloatArray,
    IntArray,
    by_first_appearance,
    checked_coordinates,
    unit_vectors,
)
from twicetold.randomness import Stream, chunk_generator

_STARTS = 10
_ROUNDS = 200


def regions(latitude: npt.ArrayLike, longitude: npt.ArrayLike, k: int, seed: int) -> IntArray:
    """Part points into k compact regions: k-means on the sphere (Dhillon & Modha 2001).

    Each point goes to the centre with the smallest angle and each centre to the direction of the
    sum of its points, from ten seeded starts (k-means++, Arthur & Vassilvitskii 2007); the start
    with the greatest total cosine is kept.

    Parameters
    ----------
    latitude, longitude : (N,) array_like
        Degrees.
    k : int
        Number of regions, at least 1; with fewer distinct points than k, one for each point.
    seed : int

    Returns
    -------
    (N,) ndarray of int32
        Region of each point, numbered by first appearance.

    Raises
    ------
    GraphError
        When ``k`` is not a whole number from 1 up.
    """
    if isinstance(k, bool) or not isinstance(k, int | np.integer) or k < 1:
        raise GraphError(f"`k` must be a whole number of regions from 1 up, got {k!r}.")
    xyz = unit_vectors(*checked_coordinates(latitude, longitude))
    distinct, point = np.unique(np.rint(xyz * 1e12), axis=0, return_inverse=True)
    if len(distinct) <= k:
        return by_first_appearance(point.reshape(-1))
    best, best_fit = np.zeros(len(xyz), dtype=np.int32), -np.inf
    for start in range(_STARTS):
        rng = chunk_generator(seed, Stream.REGIONS, int(k), start)
        label, fit = _settle(xyz, _spread_centres(xyz, int(k), rng))
        # A hair of margin, so that equally good starts do not swap places with the last bit.
        if fit > best_fit + 1e-9 * len(xyz):
            best, best_fit = label, fit
    return by_first_appearance(best)


def _spread_centres(xyz: FloatArray, k: int, rng: np.random.Generator) -> FloatArray:
    centres = [xyz[rng.integers(len(xyz))]]
    for _ in range(k - 1):
        apart = np.clip(1 - np.max(xyz @ np.array(centres).T, axis=1), 0, None)
        apart[apart < 1e-12] = 0.0  # points at a centre already taken
        centres.append(xyz[rng.choice(len(xyz), p=apart / apart.sum())])
    return np.array(centres)


def _settle(xyz: FloatArray, centres: FloatArray) -> tuple[IntArray, float]:
    label = np.full(len(xyz), -1, dtype=np.int32)
    for _ in range(_ROUNDS):
        closeness = xyz @ centres.T
        new = np.argmax(closeness, axis=1).astype(np.int32)
        fit = closeness[np.arange(len(xyz)), new]
        for empty in np.setdiff1d(np.arange(len(centres)), new):
            # A region that lost all its points starts again from the worst-placed one.
            worst = int(np.argmin(fit))
            new[worst], fit[worst] = empty, 1.0
        if (new == label).all():
            break
        label = new
        sums = np.stack([np.bincount(label, xyz[:, d], len(centres)) for d in range(3)], axis=1)
        size = np.linalg.norm(sums, axis=1, keepdims=True)
        centres = np.where(size > 1e-12, sums / np.maximum(size, 1e-12), centres)
    return label, float((xyz * centres[label]).sum())
