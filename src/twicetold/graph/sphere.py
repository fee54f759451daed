"""Distances and directions on the globe.

Everything works on the sphere of mean radius, so that the antimeridian and the poles are ordinary
places; degrees of longitude are never treated as lengths.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from twicetold.errors import GraphError

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int32]

#: Mean radius of the Earth in kilometres (IUGG; Moritz 2000, Journal of Geodesy 74).
EARTH_RADIUS_KM = 6371.0088
#: Traditions closer than this are at one place, for triangulation and spanning trees.
SAME_PLACE_KM = 0.001


def great_circle_km(
    lat1: npt.ArrayLike, lon1: npt.ArrayLike, lat2: npt.ArrayLike, lon2: npt.ArrayLike
) -> FloatArray:
    r"""Great-circle distance between points, in kilometres.

    With half-angles, :math:`d = 2R\,\mathrm{atan2}(\sqrt a, \sqrt b)` where

    .. math::
        a &= \cos^2\tfrac{\Delta\lambda}2 \sin^2\tfrac{\phi_1-\phi_2}2
             + \sin^2\tfrac{\Delta\lambda}2 \cos^2\tfrac{\phi_1+\phi_2}2 \\
        b &= \cos^2\tfrac{\Delta\lambda}2 \cos^2\tfrac{\phi_1-\phi_2}2
             + \sin^2\tfrac{\Delta\lambda}2 \sin^2\tfrac{\phi_1+\phi_2}2 = 1 - a

    This is the haversine formula with both squares written as sums of squares: nothing cancels, so
    it is as accurate at the antipode as next door, and exactly symmetric in its two points.

    Parameters
    ----------
    lat1, lon1, lat2, lon2 : array_like
        Degrees; broadcast against each other.

    Returns
    -------
    ndarray of float64
        Kilometres on a sphere of radius 6371.0088 km.
    """
    p1, p2 = np.radians(np.asarray(lat1, float)), np.radians(np.asarray(lat2, float))
    turn = np.abs(np.asarray(lon2, float) - np.asarray(lon1, float)) % 360.0
    half = np.radians(np.minimum(turn, 360.0 - turn)) / 2
    c2, s2 = np.cos(half) ** 2, np.sin(half) ** 2
    less, more = (p1 - p2) / 2, (p1 + p2) / 2
    a = c2 * np.sin(less) ** 2 + s2 * np.cos(more) ** 2
    b = c2 * np.cos(less) ** 2 + s2 * np.sin(more) ** 2
    return np.asarray(2 * EARTH_RADIUS_KM * np.arctan2(np.sqrt(a), np.sqrt(b)), dtype=np.float64)


def unit_vectors(lat: npt.ArrayLike, lon: npt.ArrayLike) -> FloatArray:
    """Points as unit vectors: x towards 0°N 0°E, y towards 0°N 90°E, z towards the north pole.

    Parameters
    ----------
    lat, lon : (N,) array_like
        Degrees.

    Returns
    -------
    (N, 3) ndarray of float64
    """
    phi, lam = np.radians(np.asarray(lat, float)), np.radians(np.asarray(lon, float))
    return np.stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)], axis=-1)


def chord(km: float) -> float:
    """Straight-line distance on the unit sphere of two points this far apart on the ground."""
    return float(2 * np.sin(min(km / EARTH_RADIUS_KM, np.pi) / 2))


def millimetres(km: npt.ArrayLike) -> npt.NDArray[np.int64]:
    """Distances as whole millimetres.

    Distances are compared as whole millimetres, so that places on a regular grid tie as they
    should, whatever the last bit of a sine on this machine.
    """
    return np.rint(np.asarray(km, float) * 1e6).astype(np.int64)


def place_labels(xyz: FloatArray) -> IntArray:
    """(N,) int32 place of each point, numbered by first appearance.

    Points within a metre of one another (in chains) are one place.
    """
    n = len(xyz)
    if n == 0:
        return np.zeros(0, dtype=np.int32)
    # Exact repeats go first: ten thousand traditions at one point have too many pairs to list.
    cells = np.rint(xyz * 1e9).astype(np.int64)
    _, first, cell = np.unique(cells, axis=0, return_index=True, return_inverse=True)
    cell = cell.reshape(-1)
    pairs = cKDTree(xyz[first]).query_pairs(chord(SAME_PLACE_KM), output_type="ndarray")
    near = coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(first),) * 2)
    _, label = connected_components(near, directed=False)
    return by_first_appearance(label[cell])


def by_first_appearance(label: npt.NDArray[np.integer]) -> IntArray:
    """Renumber labels 0, 1, 2 ... in the order in which they first appear."""
    _, first, inverse = np.unique(label, return_index=True, return_inverse=True)
    number = np.empty(len(first), dtype=np.int32)
    number[np.argsort(first, kind="stable")] = np.arange(len(first), dtype=np.int32)
    return np.asarray(number[inverse.reshape(-1)], dtype=np.int32)


def checked_coordinates(
    latitude: npt.ArrayLike, longitude: npt.ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Coordinates as two float arrays of one length.

    Raises
    ------
    GraphError
        When the lengths differ, a number is missing, or a latitude is beyond a pole.
    """
    lat, lon = np.array(latitude, dtype=float), np.array(longitude, dtype=float)
    if lat.ndim != 1 or lat.shape != lon.shape:
        raise GraphError(
            "`latitude` and `longitude` must be two lists of one length, "
            f"got shapes {lat.shape} and {lon.shape}."
        )
    if not (np.isfinite(lat).all() and np.isfinite(lon).all()):
        raise GraphError(
            "Every tradition in a contact graph must have a latitude and a longitude; "
            "leave the others out."
        )
    if (np.abs(lat) > 90).any():
        raise GraphError(
            f"Latitudes must lie between -90 and 90 degrees, got {lat[np.abs(lat) > 90][0]:g}. "
            "Are latitude and longitude swapped?"
        )
    return lat, lon


def round_coordinates(
    lat: npt.ArrayLike, lon: npt.ArrayLike, degrees: float
) -> tuple[FloatArray, FloatArray]:
    """Round coordinates to the nearest multiple of ``degrees``, for publication.

    Parameters
    ----------
    lat, lon : (N,) array_like
        Degrees.
    degrees : float
        Step, above 0 and at most 90; 0 gives the coordinates back unrounded.

    Returns
    -------
    lat, lon : (N,) ndarray of float64
        New arrays, within -90..90 and -180..180.

    Raises
    ------
    GraphError
        When ``degrees`` is not between 0 and 90.
    """
    a, b = checked_coordinates(lat, lon)
    if not 0 <= degrees <= 90:
        raise GraphError(
            f"`degrees` must be a step from 0 (no rounding) to 90 degrees, got {degrees!r}."
        )
    if degrees == 0:
        return a, b
    # The second rounding removes the dust of the multiplication (3 × 0.1 = 0.30000000000000004).
    a = np.clip(np.round(np.round(a / degrees) * degrees, 9), -90, 90) + 0.0
    b = np.clip(np.round(np.round(b / degrees) * degrees, 9), -180, 180) + 0.0
    return a, b
