"""The invented sea floor: a height over a grid of kilometres, land where it is above zero.

Islands are bumps written by hand; fractal value noise makes their coasts.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from twicetold.example._dice import Dice

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

STEP_KM = 6.0
WEST_KM, EAST_KM, SOUTH_KM, NORTH_KM = -1140.0, 2520.0, -780.0, 780.0
# Middle of the map. The spot was chosen for having no land: open ocean far south-east of the
# nearest real islands, so that nobody takes the example for a real place.
CENTRE_LAT, CENTRE_LON = -57.5, -177.0
EARTH_KM = 6371.0088  # mean radius of the Earth, IUGG 1980 (Moritz 2000)
_NOISE_AMPLITUDE = 0.75
_COARSEST_KM = 150.0
_OCTAVES = 5


@dataclass(frozen=True)
class Terrain:
    """Heights on a grid.

    Parameters
    ----------
    x, y : (W,), (H,) float64
        Kilometres east and north of the map's middle.
    height : (H, W) float64
        Above zero on land.
    region : (H, W) int64
        Index of the region whose island is nearest in its own scale.
    """

    x: FloatArray
    y: FloatArray
    height: FloatArray
    region: IntArray


def make_terrain(words: Mapping[str, Any], seed: int) -> Terrain:
    """Raise the islands out of the sea."""
    x = np.arange(WEST_KM, EAST_KM + 0.5, STEP_KM)
    y = np.arange(SOUTH_KM, NORTH_KM + 0.5, STEP_KM)
    base = np.full((len(y), len(x)), -0.9)
    region = np.zeros(base.shape, dtype=np.int64)
    dice = Dice(seed, 1)
    for code, group in enumerate(words["regions"]):
        for island in _islands(group, dice):
            bump = _bump(x, y, island)
            region[bump > base] = code
            np.maximum(base, bump, out=base)
    noise = _value_noise(x, y, Dice(seed, 2))
    return Terrain(x, y, base + _NOISE_AMPLITUDE * noise, region)


def _islands(group: Mapping[str, Any], dice: Dice) -> list[list[float]]:
    """Bumps as [x, y, half length, half width, degrees, height]; low islands are strewn about."""
    if "scatter" not in group:
        return list(group["islands"])
    how = group["scatter"]
    low, high = how["radius"]
    placed: list[list[float]] = []
    while len(placed) < how["count"]:
        x = how["centre"][0] + how["spread"][0] * (2.0 * dice.uniform() - 1.0)
        y = how["centre"][1] + how["spread"][1] * (2.0 * dice.uniform() - 1.0)
        size = low + (high - low) * dice.uniform()
        turn = 180.0 * dice.uniform()
        if all((x - p[0]) ** 2 + (y - p[1]) ** 2 > 60.0**2 for p in placed):
            placed.append([x, y, size, 0.7 * size, turn, 0.5])
    return placed


def _bump(x: FloatArray, y: FloatArray, island: list[float]) -> FloatArray:
    x0, y0, length, width, degrees, height = island
    cos, sin = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    dx, dy = x[None, :] - x0, y[:, None] - y0
    along = (dx * cos + dy * sin) / length
    across = (dy * cos - dx * sin) / width
    return np.asarray(height * (1.0 - (along * along + across * across)), dtype=np.float64)


def _value_noise(x: FloatArray, y: FloatArray, dice: Dice) -> FloatArray:
    """Sum of octaves of smoothed lattice noise, about -1..1. No transcendental functions."""
    total = np.zeros((len(y), len(x)))
    scale, weight = _COARSEST_KM, 0.5
    for _ in range(_OCTAVES):
        u, v = (x - x[0]) / scale, (y - y[0]) / scale
        i, j = u.astype(np.int64), v.astype(np.int64)
        rows, columns = int(j[-1]) + 2, int(i[-1]) + 2
        lattice = 2.0 * dice.uniforms(rows * columns).reshape(rows, columns) - 1.0
        s, t = _smooth(u - i)[None, :], _smooth(v - j)[:, None]
        low = lattice[np.ix_(j, i)] * (1.0 - s) + lattice[np.ix_(j, i + 1)] * s
        high = lattice[np.ix_(j + 1, i)] * (1.0 - s) + lattice[np.ix_(j + 1, i + 1)] * s
        total += weight * (low * (1.0 - t) + high * t)
        scale, weight = scale / 2.0, weight * 0.55
    return total


def _smooth(t: FloatArray) -> FloatArray:
    return t * t * (3.0 - 2.0 * t)


def to_lonlat(x: float, y: float) -> tuple[float, float]:
    """Longitude (0..360) and latitude of a point of the map: azimuthal equidistant, inverse.

    Equations 20-14 and 20-15 of Snyder (1987), Map projections: a working manual.
    """
    rho = math.hypot(x, y)
    if rho == 0.0:
        return CENTRE_LON % 360.0, CENTRE_LAT
    c = rho / EARTH_KM
    phi = math.radians(CENTRE_LAT)
    sin_c, cos_c = math.sin(c), math.cos(c)
    lat = math.asin(cos_c * math.sin(phi) + y * sin_c * math.cos(phi) / rho)
    lon = math.atan2(x * sin_c, rho * math.cos(phi) * cos_c - y * math.sin(phi) * sin_c)
    return (CENTRE_LON + math.degrees(lon)) % 360.0, math.degrees(lat)


def shallow_share(terrain: Terrain, row: int, column: int, reach: int = 6) -> float:
    """Share of the sea around a place that is shallow (reef or flat), 0..1."""
    window = terrain.height[
        max(0, row - reach) : row + reach + 1, max(0, column - reach) : column + reach + 1
    ]
    sea = int(np.count_nonzero(window <= 0.0))
    return int(np.count_nonzero((window <= 0.0) & (window > -0.3))) / sea if sea else 0.0
