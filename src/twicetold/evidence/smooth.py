"""Smooth Gaussian fields over the globe, and how far families reach."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.linalg.lapack import dpstrf

from twicetold.errors import TwicetoldError
from twicetold.graph import regions, unit_vectors
from twicetold.graph.sphere import EARTH_RADIUS_KM
from twicetold.randomness import Stream, chunk_generator

FloatArray = npt.NDArray[np.float64]

#: Correlation length in kilometres where no families tell one.
DEFAULT_KM = 1500.0
#: Columns of a field's factor; what they leave unexplained becomes unrelated noise.
MOST_COLUMNS = 1500
#: Up to this many traditions the whole covariance is factored.
DENSE = 4000
_LEFT = 1e-4
#: Second word of the spawn key: fields here, clocks in ``hidden``.
FIELDS = 1


@dataclass(frozen=True)
class SmoothField:
    r"""A Gaussian field over traditions, correlated by distance.

    Correlation :math:`\exp(-(d/\ell)^2)` at chord distance d: a valid covariance on the sphere,
    as it is one in space. Each draw is centred and scaled to standard deviation 1 over the
    traditions, so that sigma times it *is* a log-sd.

    Parameters
    ----------
    length_km : float
        Distance at which the correlation has fallen to 1/e.
    factor : (n, r) float64
        The covariance is ``factor @ factor.T`` plus ``noise**2`` on the diagonal (pivoted
        Cholesky, Harbrecht, Peters & Schneider 2012, Applied Numerical Mathematics 62).
    noise : (n,) float64
    region : (n,) int
        Regions whose mean propensities are compared.
    """

    length_km: float
    factor: FloatArray
    noise: FloatArray
    region: npt.NDArray[np.integer]

    def draw(self, seed: int, chunk: int, size: int) -> FloatArray:
        """(size, n) fields of one chunk."""
        rng = chunk_generator(seed, Stream.HIDDEN, FIELDS, chunk)
        out = rng.standard_normal((size, self.factor.shape[1])) @ self.factor.T
        if self.noise.any():
            out += self.noise * rng.standard_normal(out.shape)
        out -= out.mean(axis=1, keepdims=True)
        spread = out.std(axis=1, keepdims=True)
        return np.asarray(out / np.where(spread > 0, spread, 1.0), dtype=np.float64)


def smooth_field(
    latitude: npt.ArrayLike,
    longitude: npt.ArrayLike,
    length_km: float,
    region: npt.ArrayLike | None = None,
) -> SmoothField:
    """Prepare a field over points on the globe.

    Parameters
    ----------
    latitude, longitude : (n,) float
        Degrees.
    length_km : float
        Above 0.
    region : (n,) int or str, optional
        Region of each tradition; six compact ones (k-means on the sphere) where not given.

    Raises
    ------
    TwicetoldError
        When the length is not above 0, or all points lie at one place.
    """
    xyz = unit_vectors(latitude, longitude)
    if not (math.isfinite(length_km) and length_km > 0):
        raise TwicetoldError(
            f"The correlation length must be a number of kilometres above 0, got {length_km}."
        )
    if len(xyz) < 2 or np.ptp(xyz, axis=0).max() < 1e-9:
        raise TwicetoldError(
            "A hidden propensity needs traditions at two places at least, got one place."
        )
    if region is None:
        region = regions(latitude, longitude, 6, 1)
    codes = np.unique(np.asarray(region), return_inverse=True)[1]
    scaled = xyz * (EARTH_RADIUS_KM / length_km)
    factor, left = _dense_factor(scaled) if len(scaled) <= DENSE else _thin_factor(scaled)
    noise = np.sqrt(left) if left.max() > _LEFT else np.zeros(len(left))
    for array in (factor, noise, codes):
        array.flags.writeable = False
    return SmoothField(float(length_km), factor, noise, codes)


def _dense_factor(points: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Factor of exp(-distance**2) by LAPACK's pivoted Cholesky, and the variance it leaves."""
    squares = (points**2).sum(axis=1)
    apart = np.maximum(squares[:, None] + squares - 2 * points @ points.T, 0.0)
    lower, pivot, rank, _ = dpstrf(np.exp(-apart), tol=_LEFT, lower=1)
    factor = np.empty((len(points), rank))
    factor[pivot - 1] = np.tril(lower)[:, :rank]
    return factor, np.maximum(1.0 - (factor**2).sum(axis=1), 0.0)


def _thin_factor(points: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Give the same for many points, column by column, best first, at most MOST_COLUMNS."""
    n = len(points)
    left = np.ones(n)
    factor = np.empty((n, min(n, MOST_COLUMNS)))
    for k in range(factor.shape[1]):
        pivot = int(np.argmax(left))
        if left[pivot] <= _LEFT:
            return np.ascontiguousarray(factor[:, :k]), left
        column = np.exp(-((points - points[pivot]) ** 2).sum(axis=1))
        column -= factor[:, :k] @ factor[pivot, :k]
        factor[:, k] = column / math.sqrt(left[pivot])
        left = np.maximum(left - factor[:, k] ** 2, 0.0)
        left[pivot] = 0.0
    return factor, left


def family_extent_km(
    latitude: npt.ArrayLike, longitude: npt.ArrayLike, family_codes: npt.ArrayLike
) -> float:
    """Median over families of the greatest distance between two of their traditions.

    Families of one place do not count; without any, :data:`DEFAULT_KM`.
    """
    xyz = unit_vectors(latitude, longitude)
    codes = np.asarray(family_codes)
    extents = []
    for code in np.unique(codes):
        mine = xyz[codes == code]
        chord = 0.0
        for first in range(0, len(mine), 512):
            apart = 2 - 2 * mine[first : first + 512] @ mine.T
            chord = max(chord, float(apart.max()))
        km = 2 * EARTH_RADIUS_KM * math.asin(min(1.0, math.sqrt(max(chord, 0.0)) / 2))
        if km > 1.0:
            extents.append(km)
    return float(np.median(extents)) if extents else DEFAULT_KM
