"""Traditions and contact edges as GeoJSON (RFC 7946): WGS 84, lines cut at the antimeridian."""

from __future__ import annotations

import itertools
import json
import math
from typing import Any

import numpy as np

from twicetold.report.common import open_traditions
from twicetold.report.supplement.table import Table
from twicetold.report.supplement.tables import Published

Point = tuple[float, float]
#: A contact edge longer than this (degrees of arc) gets points between, to follow the great circle.
STRIDE = 5.0
_DIGITS = 6


def traditions_geojson(published: Published, table: Table) -> str:
    """Traditions of S2 as points, with its columns as properties."""
    header = table.header
    features = []
    for row in table.rows:
        cells = dict(zip(header, row, strict=True))
        if cells["located"] != "yes":
            continue
        at = (float(cells.pop("longitude")), float(cells.pop("latitude")))
        properties = {
            c.name: _value(cells[c.name], c.kind) for c in table.columns if cells.get(c.name)
        }
        features.append(_feature("Point", list(at), properties))
    return _collection(features, published)


def contacts_geojson(published: Published, table: Table) -> str:
    """Contact edges of S3 as great circles."""
    c, g = published.catalogue, published.graph
    shown = np.flatnonzero(open_traditions(c)[g.edges].all(axis=1))
    features = []
    for edge, row in zip(shown.tolist(), table.rows, strict=True):
        i, j = g.edges[edge].tolist()
        ends = [(float(c.longitude[k]), float(c.latitude[k])) for k in (i, j)]
        lines = cut(great_circle(ends[0], ends[1]))
        properties = {
            col.name: _value(text, col.kind)
            for text, col in zip(row, table.columns, strict=True)
            if text
        }
        if len(lines) == 1:
            features.append(_feature("LineString", lines[0], properties))
        else:
            features.append(_feature("MultiLineString", lines, properties))
    return _collection(features, published)


def great_circle(a: Point, b: Point) -> list[Point]:
    """Points (longitude, latitude) from a to b, longitudes unwrapped: they may pass 180 degrees."""
    p, q = _xyz(a), _xyz(b)
    angle = math.acos(max(-1.0, min(1.0, float(p @ q))))
    steps = max(1, math.ceil(math.degrees(angle) / STRIDE))
    out = [a]
    for k in range(1, steps):
        if angle > math.pi - 1e-6:  # antipodes: every way is as short; go along the parallel
            break
        t = k / steps
        v = (math.sin((1 - t) * angle) * p + math.sin(t * angle) * q) / math.sin(angle)
        lat = math.degrees(math.atan2(v[2], math.hypot(v[0], v[1])))
        out.append((math.degrees(math.atan2(v[1], v[0])), lat))
    out.append(b)
    longitudes = np.unwrap([p[0] for p in out], period=360.0).tolist()
    return [(lon, lat) for lon, (_, lat) in zip(longitudes, out, strict=True)]


def cut(points: list[Point]) -> list[list[Point]]:
    """Cut a line at the antimeridian, as section 3.1.9 of RFC 7946 asks.

    Parameters
    ----------
    points : list of (longitude, latitude)
        With unwrapped longitudes: neighbouring ones differ by at most 180 degrees.

    Returns
    -------
    list of lines
        Each with longitudes from -180 to 180.
    """
    pieces: list[tuple[Point, Point]] = []
    for (x0, y0), (x1, y1) in itertools.pairwise(points):
        here = (x0, y0)
        for edge in _crossed(x0, x1):
            there = (edge, y0 + (y1 - y0) * (edge - x0) / (x1 - x0))
            pieces.append((here, there))
            here = there
        pieces.append((here, (x1, y1)))
    lines = []
    for turn, group in itertools.groupby(pieces, key=_turn):
        run = list(group)
        lines.append([_back(p, turn) for p in (run[0][0], *(end for _, end in run))])
    return lines


def _crossed(x0: float, x1: float) -> list[float]:
    """Antimeridians strictly between two longitudes, in the order they are met."""
    low, high = min(x0, x1), max(x0, x1)
    first = math.floor((low + 180.0) / 360.0) + 1
    found = []
    while (edge := 360.0 * first - 180.0) < high:
        if edge > low:
            found.append(edge)
        first += 1
    return found if x0 <= x1 else found[::-1]


def _turn(piece: tuple[Point, Point]) -> int:
    """How many whole turns of the globe a piece between two antimeridians is away."""
    middle = (piece[0][0] + piece[1][0]) / 2
    return math.floor((middle + 180.0) / 360.0)


def _back(point: Point, turn: int) -> Point:
    return (round(point[0] - 360.0 * turn, _DIGITS) + 0.0, round(point[1], _DIGITS) + 0.0)


def _xyz(point: Point) -> Any:
    lon, lat = math.radians(point[0]), math.radians(point[1])
    return np.array([math.cos(lat) * math.cos(lon), math.cos(lat) * math.sin(lon), math.sin(lat)])


def _value(text: str, kind: str) -> object:
    if kind == "integer":
        return int(text)
    return float(text) if kind == "number" else text


def _feature(kind: str, coordinates: Any, properties: dict[str, object]) -> dict[str, Any]:
    return {
        "type": "Feature",
        "properties": properties,
        "geometry": {"type": kind, "coordinates": coordinates},
    }


def _collection(features: list[dict[str, Any]], published: Published) -> str:
    head: dict[str, Any] = {"type": "FeatureCollection"}
    c = published.catalogue
    head |= {k: v for k, v in (("title", c.title), ("notice", c.notice)) if v}
    body = ",\n".join(json.dumps(f, ensure_ascii=False) for f in features)
    start = json.dumps(head, ensure_ascii=False)[:-1]
    return f'{start}, "features": [\n{body}\n]}}\n'
