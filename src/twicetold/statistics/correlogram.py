"""The distance correlogram: how often two traditions so far apart both hold the motif."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError
from twicetold.statistics import _kernels
from twicetold.statistics._check import holder_array

EARTH_RADIUS_KM = 6371.0088


@dataclass(frozen=True)
class DistanceClasses:
    """Pairs of surveyed traditions by great-circle distance. Arrays are read-only.

    Parameters
    ----------
    edges_km : (C + 1,) float64
        Class c holds ``edges_km[c] <= distance < edges_km[c + 1]``.
    surveyed : int
        Number of traditions searched, S.
    pairs : (C,) int64
        Pairs of surveyed traditions in each class.
    touching : (C,) int64
        Sum over traditions of k(k - 1), k the number of its partners in the class.
    """

    edges_km: npt.NDArray[np.float64]
    surveyed: int
    pairs: npt.NDArray[np.int64]
    touching: npt.NDArray[np.int64]


@dataclass(frozen=True)
class Correlogram:
    """Share of pairs in each distance class whose two ends both hold the motif.

    Parameters
    ----------
    classes : DistanceClasses
    both : (C,) int64
        Pairs of holders in each class.
    observed : (C,) float64
        ``both / pairs``; NaN in an empty class.
    expected : (C,) float64
        n(n - 1) / S(S - 1) under equal propensity, in every class.
    sd : (C,) float64
        Exact standard deviation of ``observed`` under equal propensity (the joins' variance on the
        graph that links the pairs of the class); NaN in an empty class.
    """

    classes: DistanceClasses
    both: npt.NDArray[np.int64]
    observed: npt.NDArray[np.float64]
    expected: npt.NDArray[np.float64]
    sd: npt.NDArray[np.float64]


def distance_classes(
    lat: npt.ArrayLike,
    lon: npt.ArrayLike,
    surveyed: npt.ArrayLike | None,
    edges_km: npt.ArrayLike,
) -> DistanceClasses:
    """Count the pairs of surveyed traditions in each class; once per surveyed set.

    Parameters
    ----------
    lat, lon : (N,) float, degrees
    surveyed : (N,) bool or None
        None: all.
    edges_km : (C + 1,) float, kilometres, increasing

    Raises
    ------
    TwicetoldError
        When the class edges do not increase or the arrays do not fit.
    """
    xyz = _unit_vectors(lat, lon)
    edges = _edges(edges_km)
    mask = np.ones(len(xyz), bool) if surveyed is None else np.asarray(surveyed, bool)
    if mask.shape != (len(xyz),):
        raise TwicetoldError(f"`surveyed` must hold {len(xyz)} values, got shape {mask.shape}.")
    pairs, degree = _count(xyz, np.flatnonzero(mask).astype(np.int32), edges)
    touching = (degree * (degree - 1)).sum(axis=0)
    for array in (edges, pairs, touching):
        array.flags.writeable = False
    return DistanceClasses(edges, int(mask.sum()), pairs, touching)


def correlogram(
    lat: npt.ArrayLike,
    lon: npt.ArrayLike,
    holders: npt.ArrayLike,
    surveyed: npt.ArrayLike | None,
    edges_km: npt.ArrayLike,
    *,
    classes: DistanceClasses | None = None,
) -> Correlogram:
    """Share of pairs per distance class in which both traditions hold the motif.

    Every pair is looked at, none is stored: memory grows with N, not N squared.

    Parameters
    ----------
    lat, lon : (N,) float, degrees
    holders : (n,) int
        Tradition indices, each surveyed.
    surveyed : (N,) bool or None
    edges_km : (C + 1,) float, kilometres
    classes : DistanceClasses or None
        From :func:`distance_classes` with the same ``surveyed`` and ``edges_km``, to save time.

    Raises
    ------
    TwicetoldError
        When a holder was not surveyed or the arrays do not fit.
    """
    xyz = _unit_vectors(lat, lon)
    held = holder_array(len(xyz), holders)
    if surveyed is not None and not np.all(np.asarray(surveyed, bool)[held]):
        raise TwicetoldError("Every holder must have been surveyed. Widen `surveyed`.")
    if classes is None:
        classes = distance_classes(lat, lon, surveyed, edges_km)
    both, _ = _count(xyz, held, classes.edges_km)
    n, total, pairs = len(held), classes.surveyed, classes.pairs
    share = [_falling(n, r) / _falling(total, r) if total >= r else Fraction(0) for r in (2, 3, 4)]
    variance = [
        float(a * share[0] + d * share[1] + (a * (a - 1) - d) * share[2] - (a * share[0]) ** 2)
        for a, d in zip(pairs.tolist(), classes.touching.tolist(), strict=True)
    ]
    with np.errstate(invalid="ignore", divide="ignore"):
        observed = np.where(pairs > 0, both / pairs, np.nan)
        sd = np.where(pairs > 0, np.sqrt(np.maximum(variance, 0.0)) / pairs, np.nan)
    expected = np.full(len(pairs), float(share[0]))
    for array in (both, observed, expected, sd):
        array.flags.writeable = False
    return Correlogram(classes, both, observed, expected, sd)


def _falling(n: int, r: int) -> Fraction:
    out = Fraction(1)
    for i in range(r):
        out *= n - i
    return out


def _unit_vectors(lat: npt.ArrayLike, lon: npt.ArrayLike) -> npt.NDArray[np.float64]:
    phi, lam = np.radians(np.asarray(lat, float)), np.radians(np.asarray(lon, float))
    if phi.ndim != 1 or phi.shape != lam.shape:
        raise TwicetoldError(
            f"`lat` and `lon` must be flat and equally long, got {phi.shape} and {lam.shape}."
        )
    return np.stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)], axis=1)


def _edges(edges_km: npt.ArrayLike) -> npt.NDArray[np.float64]:
    edges = np.array(edges_km, dtype=np.float64)
    if edges.ndim != 1 or len(edges) < 2 or edges[0] < 0 or not np.all(np.diff(edges) > 0):
        raise TwicetoldError(
            f"`edges_km` must be two or more increasing distances from 0 up, got {edges.tolist()}."
        )
    return edges


def _count(
    xyz: npt.NDArray[np.float64], rows: npt.NDArray[np.int32], edges: npt.NDArray[np.float64]
) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
    half = edges / (2.0 * EARTH_RADIUS_KM)
    # An edge at or beyond the antipode closes nothing out.
    limits = np.where(half >= np.pi / 2, np.inf, (2.0 * np.sin(np.minimum(half, np.pi / 2))) ** 2)
    pairs = np.zeros(len(edges) - 1, dtype=np.int64)
    degree = np.zeros((len(rows), len(edges) - 1), dtype=np.int64)
    _kernels.pair_classes(xyz, rows, limits, pairs, degree)
    return pairs, degree
