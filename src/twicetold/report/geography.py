"""Where a map is centred, how it is projected, and the outline of land under it.

Both projections keep areas: Lambert's azimuthal one turned to the middle of the data, so that an
archipelago across the antimeridian is not torn; and Equal Earth (Savric, Patterson & Jenny 2019)
for catalogues that span the world, cut where the traditions leave the widest gap.
"""

from __future__ import annotations

import json
import math
from collections.abc import Iterable
from dataclasses import dataclass
from functools import lru_cache
from importlib import resources
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

#: Farthest tradition from the middle (degrees) up to which the azimuthal projection is used.
LOCAL_LIMIT = 75.0
MARGIN = 0.07
MIN_ASPECT, MAX_ASPECT = 0.42, 0.85
_A1, _A2, _A3, _A4 = 1.340264, -0.081106, 0.000893, 0.003796


@dataclass(frozen=True)
class View:
    """A fitted map projection.

    Parameters
    ----------
    kind : str
        ``azimuthalEqualArea`` or ``equalEarth``, as Vega names them.
    rotate : tuple of float
        Degrees by which the globe is turned (longitude, latitude).
    scale : float
        Projection scale per pixel of picture width.
    centre : tuple of float
        Middle of the picture in projected units (x to the right, y up).
    aspect : float
        Height of the picture over its width.
    step : float
        Degrees between lines of the graticule.
    """

    kind: str
    rotate: tuple[float, float]
    scale: float
    centre: tuple[float, float]
    aspect: float
    step: float

    def projection(self) -> dict[str, Any]:
        """Give the Vega-Lite projection; it follows the width and height of the picture."""
        k, (x, y) = self.scale, self.centre
        return {
            "type": self.kind,
            "rotate": [*self.rotate, 0],
            "scale": {"expr": f"{k:.6g} * width"},
            "translate": {
                "expr": f"[{0.5 - k * x:.6g} * width, 0.5 * height + {k * y:.6g} * width]"
            },
            "precision": 0.3,
        }

    def project(self, longitude: FloatArray, latitude: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Give projected x and y (scale 1, y up) of points in degrees."""
        if self.kind == "equalEarth":
            return _equal_earth(longitude + self.rotate[0], latitude)
        return _azimuthal(longitude, latitude, -self.rotate[0], -self.rotate[1])


def fit_view(longitude: FloatArray, latitude: FloatArray) -> View:
    """Centre and scale an equal-area map on these places (degrees)."""
    if not len(longitude):
        return View("equalEarth", (0.0, 0.0), _world_scale(), (0.0, 0.0), 0.487, 30.0)
    lon, lat = np.radians(longitude), np.radians(latitude)
    xyz = np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], axis=1)
    mean = xyz.mean(axis=0)
    norm = float(np.linalg.norm(mean))
    if norm > 1e-3:
        mean /= norm
        reach = math.degrees(math.acos(max(-1.0, min(1.0, float((xyz @ mean).min())))))
        if reach <= LOCAL_LIMIT:
            lon0 = math.degrees(math.atan2(mean[1], mean[0]))
            lat0 = math.degrees(math.asin(max(-1.0, min(1.0, float(mean[2])))))
            return _local_view(longitude, latitude, round(lon0, 2), round(lat0, 2))
    return _world_view(longitude, latitude)


def _local_view(longitude: FloatArray, latitude: FloatArray, lon0: float, lat0: float) -> View:
    x, y = _azimuthal(longitude, latitude, lon0, lat0)
    # A single place, or places on one spot, still get a map some 600 km wide.
    wide = max(float(np.ptp(x)), 0.1) * (1 + 2 * MARGIN)
    high = max(float(np.ptp(y)), 0.04) * (1 + 2 * MARGIN)
    aspect = min(max(high / wide, MIN_ASPECT), MAX_ASPECT)
    scale = min(1 / wide, aspect / high)
    span = math.degrees(1 / scale)
    step = next((s for s in (30.0, 20.0, 10.0, 5.0, 2.0, 1.0) if span / s >= 4), 0.5)
    centre = (float(x.min() + x.max()) / 2, float(y.min() + y.max()) / 2)
    return View("azimuthalEqualArea", (-lon0, -lat0), scale, centre, round(aspect, 3), step)


def _world_view(longitude: FloatArray, latitude: FloatArray) -> View:
    turned = np.unique(np.mod(longitude, 360.0))
    gaps = np.diff(np.append(turned, turned[0] + 360.0))
    widest = int(np.argmax(gaps))
    cut = turned[widest] + gaps[widest] / 2
    middle = ((cut + 180.0 + 180.0) % 360.0) - 180.0
    _, y = _equal_earth(np.zeros_like(latitude), latitude)
    # Leave out a polar cap with nobody in it, but keep the shape of a world map.
    low, high = max(float(y.min()) - 0.25, -1.317), min(float(y.max()) + 0.25, 1.317)
    scale = _world_scale()
    aspect = round(max((high - low) * scale, 0.36), 3)
    return View(
        "equalEarth", (round(-middle, 1), 0.0), scale, (0.0, (low + high) / 2), aspect, 30.0
    )


def _world_scale() -> float:
    return 0.985 / (2 * 2.70663)


def _azimuthal(
    longitude: FloatArray, latitude: FloatArray, lon0: float, lat0: float
) -> tuple[FloatArray, FloatArray]:
    lam, phi, phi0 = np.radians(longitude - lon0), np.radians(latitude), math.radians(lat0)
    cosine = math.sin(phi0) * np.sin(phi) + math.cos(phi0) * np.cos(phi) * np.cos(lam)
    k = np.sqrt(2 / np.maximum(1 + cosine, 1e-9))
    x = k * np.cos(phi) * np.sin(lam)
    y = k * (math.cos(phi0) * np.sin(phi) - math.sin(phi0) * np.cos(phi) * np.cos(lam))
    return x, y


def _equal_earth(longitude: FloatArray, latitude: FloatArray) -> tuple[FloatArray, FloatArray]:
    lam = np.radians((longitude + 180.0) % 360.0 - 180.0)
    t = np.arcsin(math.sqrt(3) / 2 * np.sin(np.radians(latitude)))
    t2, t6 = t**2, t**6
    slope = _A1 + 3 * _A2 * t2 + t6 * (7 * _A3 + 9 * _A4 * t2)
    x = 2 * math.sqrt(3) * lam * np.cos(t) / (3 * slope)
    y = t * (_A1 + _A2 * t2 + t6 * (_A3 + _A4 * t2))
    return x, y


def land_features(own: Path | None) -> list[dict[str, Any]]:
    """Outline of land as GeoJSON features: the catalogue's own, or else Natural Earth 1:110m."""
    if own is None:
        return _world_land()
    return list(_own_land(json.loads(Path(own).read_text(encoding="utf-8-sig"))))


@lru_cache(maxsize=1)
def _world_land() -> list[dict[str, Any]]:
    text = resources.files("twicetold.report").joinpath("assets/land-110m.json").read_text("utf-8")
    topology = json.loads(text)
    (sx, sy), (tx, ty) = topology["transform"]["scale"], topology["transform"]["translate"]
    arcs = []
    for arc in topology["arcs"]:
        steps = np.cumsum(np.asarray(arc, dtype=np.int64), axis=0)
        arcs.append([[round(x * sx + tx, 2), round(y * sy + ty, 2)] for x, y in steps.tolist()])

    def ring(parts: list[int]) -> list[list[float]]:
        out: list[list[float]] = []
        for k in parts:
            line = arcs[k] if k >= 0 else arcs[~k][::-1]
            out.extend(line[1:] if out else line)
        return out

    features = []
    for shape in topology["objects"]["land"]["geometries"]:
        polygons = shape["arcs"] if shape["type"] == "MultiPolygon" else [shape["arcs"]]
        features += [_feature("Polygon", [ring(r) for r in polygon]) for polygon in polygons]
    return features


def _own_land(node: dict[str, Any]) -> Iterable[dict[str, Any]]:
    """Walk a GeoJSON object; give its polygons with rings wound as the drawing library wants."""
    kind = node.get("type")
    if kind == "FeatureCollection":
        for feature in node.get("features") or ():
            yield from _own_land(feature)
    elif kind == "Feature":
        yield from _own_land(node.get("geometry") or {})
    elif kind == "GeometryCollection":
        for part in node.get("geometries") or ():
            yield from _own_land(part)
    elif kind in ("Polygon", "MultiPolygon"):
        polygons = [node["coordinates"]] if kind == "Polygon" else node["coordinates"]
        for polygon in polygons:
            rings = [_wound(r, outer=not k) for k, r in enumerate(polygon) if len(r) >= 4]
            if rings:
                yield _feature("Polygon", rings)


def _wound(ring: list[list[float]], *, outer: bool) -> list[list[float]]:
    """Outer rings clockwise, holes counter-clockwise (RFC 7946 says the reverse).

    On the sphere a ring wound the other way means everything but its inside.
    """
    points = [[round(float(p[0]), 3), round(float(p[1]), 3)] for p in ring]
    lon = np.unwrap([p[0] for p in points], period=360.0)
    lat = np.array([p[1] for p in points])
    area = float(np.sum(lon[:-1] * lat[1:] - lon[1:] * lat[:-1]))
    return points[::-1] if (area > 0) == outer else points


def _feature(kind: str, coordinates: Any) -> dict[str, Any]:
    return {
        "type": "Feature",
        "properties": {},
        "geometry": {"type": kind, "coordinates": coordinates},
    }
