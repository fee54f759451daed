"""The coastline: contour of the terrain at sea level, as GeoJSON (RFC 7946, 2016).

Outer rings run counter-clockwise (section 3.1.6) and islands that cross the antimeridian are cut
there (section 3.1.9). Lakes are filled.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

import numpy as np

from twicetold.example._terrain import STEP_KM, Terrain, to_lonlat

Point = tuple[float, float]
_Edge = tuple[str, int, int]
_SMALLEST_KM2 = 60.0
DECIMALS = 3

# Sides of a grid cell crossed by the coast, from and to, with land on the left. Keys are sums of
# 1 (south-west corner is land), 2 (south-east), 4 (north-east), 8 (north-west).
_CROSSINGS = {
    1: ("SW",),
    2: ("ES",),
    3: ("EW",),
    4: ("NE",),
    6: ("NS",),
    7: ("NW",),
    8: ("WN",),
    9: ("SN",),
    11: ("EN",),
    12: ("WE",),
    13: ("SE",),
    14: ("WS",),
}
# Two opposite corners are land: the mean of the four decides whether they touch.
_SADDLES = {
    (5, True): ("SE", "NW"),
    (5, False): ("SW", "NE"),
    (10, True): ("WS", "EN"),
    (10, False): ("ES", "WN"),
}


def coast_rings(terrain: Terrain) -> list[list[Point]]:
    """Closed outer coastlines in map kilometres, counter-clockwise, largest first."""
    after = _segments(terrain.height)
    rings: list[tuple[float, list[Point]]] = []
    while after:
        first, here = after.popitem()
        ring = [_place(first, terrain)]
        while here != first:
            ring.append(_place(here, terrain))
            here = after.pop(here)
        area = signed_area(ring)
        if area >= _SMALLEST_KM2:
            rings.append((area, ring))
    rings.sort(key=lambda pair: (-pair[0], pair[1]))
    return [_from_least(ring) for _, ring in rings]


def _segments(height: Any) -> dict[_Edge, _Edge]:
    land = (height > 0.0).astype(np.int64)
    kind = land[:-1, :-1] + 2 * land[:-1, 1:] + 4 * land[1:, 1:] + 8 * land[1:, :-1]
    after: dict[_Edge, _Edge] = {}
    for row, column in np.argwhere((kind > 0) & (kind < 15)).tolist():
        code = int(kind[row, column])
        if code in (5, 10):
            middle = bool(height[row : row + 2, column : column + 2].sum() > 0.0)
            crossings: tuple[str, ...] = _SADDLES[code, middle]
        else:
            crossings = _CROSSINGS[code]
        side: dict[str, _Edge] = {
            "S": ("h", row, column),
            "N": ("h", row + 1, column),
            "W": ("v", row, column),
            "E": ("v", row, column + 1),
        }
        for start, end in map(tuple, crossings):
            after[side[start]] = side[end]
    return after


def _place(edge: _Edge, terrain: Terrain) -> Point:
    """Where the height passes through zero along a grid edge."""
    way, row, column = edge
    here = float(terrain.height[row, column])
    if way == "h":
        there = float(terrain.height[row, column + 1])
        return float(terrain.x[column]) + STEP_KM * here / (here - there), float(terrain.y[row])
    there = float(terrain.height[row + 1, column])
    return float(terrain.x[column]), float(terrain.y[row]) + STEP_KM * here / (here - there)


def signed_area(ring: list[Point]) -> float:
    """Area of a ring (first point not repeated), positive when counter-clockwise."""
    total = 0.0
    for (x1, y1), (x2, y2) in zip(ring, ring[1:] + ring[:1], strict=True):
        total += x1 * y2 - x2 * y1
    return total / 2.0


def _from_least(ring: list[Point]) -> list[Point]:
    """Start at the least point, so that the order of tracing leaves no mark."""
    start = ring.index(min(ring))
    return ring[start:] + ring[:start]


def _rounded(ring: list[Point]) -> list[Point]:
    """Degrees, longitude 0..360, to DECIMALS places, never on the antimeridian itself."""
    out: list[Point] = []
    for x, y in ring:
        lon, lat = to_lonlat(x, y)
        point = (round(lon, DECIMALS), round(lat, DECIMALS))
        if point[0] == 180.0:
            point = (179.999, point[1])
        if not out or point != out[-1]:
            out.append(point)
    return out[:-1] if out[0] == out[-1] else out


def cut_at_antimeridian(ring: list[Point]) -> list[list[Point]]:
    """Cut a ring in longitudes 0..360 into rings in -180..180, keeping its direction.

    Along the meridian land lies between the first and second crossing from the south, between the
    third and fourth, and so on; each piece of coast ends at a crossing and goes on from its twin.
    """
    chains = _chains(ring)
    if len(chains) == 1:
        return [_wrapped(ring)]
    heights = sorted(chain[0][1] for chain in chains)
    twin = dict(zip(heights[0::2], heights[1::2], strict=True))
    twin |= {high: low for low, high in twin.items()}
    starts = {(chain[1][0] < 180.0, chain[0][1]): chain for chain in chains}
    pieces = []
    while starts:
        (west, first), chain = min(starts.items())
        piece: list[Point] = []
        at = first
        while (west, at) in starts:
            chain = starts.pop((west, at))
            piece += chain
            at = twin[chain[-1][1]]
        pieces.append(_wrapped(piece, west=west))
    return pieces


def _chains(ring: list[Point]) -> list[list[Point]]:
    """Pieces of a ring from one crossing of 180 degrees to the next, crossings at both ends."""
    chains: list[list[Point]] = [[]]
    for (x1, y1), (x2, y2) in zip(ring, ring[1:] + ring[:1], strict=True):
        chains[-1].append((x1, y1))
        if (x1 < 180.0) != (x2 < 180.0):
            crossing = (180.0, round(y1 + (y2 - y1) * (180.0 - x1) / (x2 - x1), 6))
            chains[-1].append(crossing)
            chains.append([crossing])
    if len(chains) == 1:
        return chains
    return [chains[-1] + chains[0], *chains[1:-1]]


def _wrapped(ring: list[Point], *, west: bool | None = None) -> list[Point]:
    """Longitudes -180..180; ``west`` says which side a point at 180 belongs to (True: +180)."""
    west = ring[0][0] < 180.0 if west is None else west
    shift = 0.0 if west else 360.0
    return [(round(x - shift, DECIMALS), round(y, DECIMALS)) for x, y in ring]


def land_geojson(terrain: Terrain, words: Mapping[str, Any]) -> str:
    """Write every island as a feature, labelled invented."""
    features = []
    everywhere: list[Point] = []
    for number, ring in enumerate(coast_rings(terrain), start=1):
        degrees = _rounded(ring)
        everywhere += degrees
        parts = [[[*map(list, part), list(part[0])]] for part in cut_at_antimeridian(degrees)]
        single = len(parts) == 1
        geometry = {
            "type": "Polygon" if single else "MultiPolygon",
            "coordinates": parts[0] if single else parts,
        }
        name = words["regions"][_region_of(ring, terrain)]["name"]
        properties = {"island": number, "region": name, "invented": True}
        features.append({"type": "Feature", "properties": properties, "geometry": geometry})
    lon, lat = [p[0] for p in everywhere], [p[1] for p in everywhere]
    # Section 5.2: a box that crosses the antimeridian has its west edge greater than its east edge.
    box = [min(lon), min(lat), round(max(lon) - 360.0, DECIMALS), max(lat)]
    head = {
        "type": "FeatureCollection",
        "title": words["title"],
        "notice": words["notice"],
        "license": words["license"],
        "bbox": box,
    }
    lines = ",\n".join(json.dumps(f, separators=(",", ":")) for f in features)
    opening = json.dumps(head, ensure_ascii=False)[:-1]
    return f'{opening}, "features": [\n{lines}\n]}}\n'


def _region_of(ring: list[Point], terrain: Terrain) -> int:
    x, y = ring[0]
    column = min(max(round((x - float(terrain.x[0])) / STEP_KM), 0), len(terrain.x) - 1)
    row = min(max(round((y - float(terrain.y[0])) / STEP_KM), 0), len(terrain.y) - 1)
    return int(terrain.region[row, column])
