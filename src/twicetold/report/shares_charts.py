"""Picture of the route shares of one motif: a triangle for three routes, a line for two."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from twicetold.report.common import Spec, percent, sig, title_name
from twicetold.report.theme import light, titled

if TYPE_CHECKING:
    from twicetold.evidence import MotifEvidence, RouteShares


def shares_chart(evidence: MotifEvidence, notice: str = "") -> Spec:
    """Posterior of the route shares: a triangle for three routes, a line for two."""
    shares = evidence.shares
    assert shares is not None
    where = title_name(evidence)
    if len(shares.routes) == 3:
        title = titled(
            f"{where}: by which route?",
            "darker: more probable; outline: the 90 % intervals; cross: mean",
            notice,
        )
        return {"title": title} | _triangle(shares)
    title = titled(f"{where}: by which route?", "bars: posterior; line: 90 % interval", notice)
    return {"title": title} | _two_routes(shares)


_H = math.sqrt(3) / 2


def _corner(e: float, c: float, i: float) -> dict[str, float]:
    """Place of a share point: emergence at the top, contact left, inheritance right."""
    return {"x": round(0.5 * e + i, 4), "y": round(_H * e, 4)} | {"z": round(c, 4)}


def _triangle(shares: RouteShares) -> Spec:
    side = np.unique(np.round(shares.grid[:, 0], 6))
    step = float(np.diff(side).min()) if len(side) > 1 else 0.1
    # Symbols that touch on the grid at the usual width; the page scales the rest.
    area = (340 / 1.28 * step) ** 2 * 0.82
    along: Spec = {"type": "quantitative", "axis": None}
    x = {"field": "x"} | along | {"scale": {"domain": [-0.14, 1.14], "nice": False, "zero": False}}
    y = {"field": "y"} | along | {"scale": {"domain": [-0.13, 1.0], "nice": False, "zero": False}}
    return {
        "width": 340,
        "height": 300,
        "encoding": {"x": x, "y": y},
        "layer": [*_triangle_layers(area), *_corner_words()],
        "datasets": _triangle_data(shares),
        "usermeta": {"aspect": 0.885, "widest": 420},
    }


def _triangle_data(shares: RouteShares) -> dict[str, list[dict[str, Any]]]:
    top = float(shares.weight.max())
    cells = []
    for (e, c, i), w in zip(shares.grid.tolist(), shares.weight.tolist(), strict=True):
        cell: dict[str, Any] = {"w": sig(w / top, 3), "p": percent(w, 1)}
        said = {"E": percent(e), "C": percent(c), "I": percent(i)}
        cells.append({k: v for k, v in _corner(e, c, i).items() if k != "z"} | cell | said)
    corners = {"emergence": (1, 0, 0), "contact": (0, 1, 0), "inheritance": (0, 0, 1)}
    region = _region(shares.low.tolist(), shares.high.tolist())

    def closed(points: list[Any]) -> list[dict[str, Any]]:
        return [_corner(*p) | {"k": k} for k, p in enumerate([*points, *points[:1]])]

    return {
        "cells": cells,
        "frame": closed(list(corners.values())),
        "outline": closed(region),
        "mean": [_corner(*shares.mean.tolist())],
        "labels": [_corner(*place) | {"t": word} for word, place in corners.items()],
        "thirds": _thirds(),
    }


def _triangle_layers(area: float) -> list[Spec]:
    """Grid, posterior, frame, the 90 % intervals and the mean, from below to above."""
    hover = [
        {"field": "E", "title": "emergence"},
        {"field": "C", "title": "contact"},
        {"field": "I", "title": "inheritance"},
        {"field": "p", "title": "probability"},
    ]
    line = {"type": "line", "color": light("soft"), "strokeWidth": 1}
    strong = {"type": "line", "color": light("tail"), "strokeWidth": 2, "strokeJoin": "round"}
    order = {"order": {"field": "k"}}
    cross = {"type": "point", "shape": "cross", "filled": True, "size": 130, "opacity": 1}
    cross |= {"color": light("tail"), "stroke": light("paper"), "strokeWidth": 1}
    return [
        {"data": {"name": "thirds"}, "mark": line | {"color": light("rule")}}
        | {"encoding": order | {"detail": {"field": "g"}}},
        {
            "data": {"name": "cells"},
            "mark": {"type": "point", "shape": "circle", "filled": True, "size": area}
            | {"color": light("contact")},
            "encoding": {
                "opacity": {"field": "w", "type": "quantitative", "legend": None}
                | {"scale": {"domain": [0, 1], "range": [0, 0.9]}},
                "tooltip": hover,
            },
        },
        {"data": {"name": "frame"}, "mark": line | {"strokeWidth": 1.3}, "encoding": order},
        {"data": {"name": "outline"}, "mark": strong, "encoding": order},
        {"data": {"name": "mean"}, "mark": cross},
    ]


def _thirds() -> list[dict[str, Any]]:
    """Lines at a quarter, a half and three quarters of each share."""
    out: list[dict[str, Any]] = []
    for g, s in enumerate((0.25, 0.5, 0.75)):
        r = 1 - s
        ends = (((s, r, 0), (s, 0, r)), ((r, s, 0), (0, s, r)), ((r, 0, s), (0, r, s)))
        for axis, line in enumerate(ends):
            out += [_corner(*p) | {"g": 3 * g + axis, "k": k} for k, p in enumerate(line)]
    return out


def _corner_words() -> list[Spec]:
    def layer(word: str, align: str, dx: int, dy: int) -> Spec:
        mark = {"type": "text", "align": align, "dx": dx, "dy": dy, "fontSize": 12}
        mark |= {"fontWeight": 600, "color": light("ink")}
        return {
            "data": {"name": "labels"},
            "transform": [{"filter": f"datum.t === '{word}'"}],
            "mark": mark,
            "encoding": {"text": {"field": "t"}},
        }

    return [
        layer("emergence", "center", 0, -12),
        layer("contact", "center", 4, 16),
        layer("inheritance", "center", -4, 16),
    ]


def _region(low: list[float], high: list[float]) -> list[tuple[float, float, float]]:
    """Corners of the part of the triangle where every share lies in its interval."""
    shape = [(1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0)]
    for k in range(3):
        for sign, bound in ((1.0, low[k]), (-1.0, -high[k])):
            shape = _cut(shape, k, sign, bound)
    return shape


def _cut(
    shape: list[tuple[float, float, float]], k: int, sign: float, bound: float
) -> list[tuple[float, float, float]]:
    """Keep of a convex shape what has ``sign * p[k] >= bound`` (Sutherland & Hodgman 1974)."""
    out: list[tuple[float, float, float]] = []
    for a, b in zip(shape, shape[1:] + shape[:1], strict=True):
        fa, fb = sign * a[k] - bound, sign * b[k] - bound
        if fa >= -1e-12:
            out.append(a)
        if (fa > 1e-12 and fb < -1e-12) or (fa < -1e-12 and fb > 1e-12):
            t = fa / (fa - fb)
            p, q, r = (u + t * (v - u) for u, v in zip(a, b, strict=True))
            out.append((p, q, r))
    return out


def _two_routes(shares: RouteShares) -> Spec:
    top = float(shares.weight.max())
    step = 1 / max(len(shares.weight) - 1, 1)
    cells = []
    for point, w in zip(shares.grid.tolist(), shares.weight.tolist(), strict=True):
        e = float(point[0])
        cells.append(
            {
                "a": round(max(0.0, e - step / 2), 4),
                "b": round(min(1.0, e + step / 2), 4),
                "w": sig(w / top, 3),
                "p": percent(w, 1),
                "E": percent(e),
            }
        )
    span = {"a": sig(shares.low[0]), "b": sig(shares.high[0]), "m": sig(shares.mean[0])}
    axis = {"title": "share of gains by emergence (the rest by contact)", "format": ".0%"}
    x = {"type": "quantitative", "scale": {"domain": [0, 1]}, "axis": axis | {"grid": False}}
    return {
        "width": 420,
        "height": 150,
        "layer": [
            {
                "data": {"name": "cells"},
                "mark": {"type": "bar", "color": light("bar")},
                "encoding": {
                    "x": {"field": "a"} | x,
                    "x2": {"field": "b"},
                    "y": {"field": "w", "type": "quantitative", "axis": None}
                    | {"scale": {"domain": [-0.22, 1], "nice": False}},
                    "y2": {"datum": 0},
                    "tooltip": [
                        {"field": "E", "title": "emergence"},
                        {"field": "p", "title": "probability"},
                    ],
                },
            },
            {
                "data": {"name": "span"},
                "mark": {"type": "rule", "color": light("tail"), "strokeWidth": 3},
                "encoding": {"x": {"field": "a"} | x, "x2": {"field": "b"}, "y": {"datum": -0.12}},
            },
            {
                "data": {"name": "span"},
                "mark": {"type": "point", "filled": True, "size": 110, "color": light("tail")}
                | {"opacity": 1},
                "encoding": {"x": {"field": "m"} | x, "y": {"datum": -0.12}},
            },
        ],
        "datasets": {"cells": cells, "span": [span]},
        "usermeta": {"height": 150},
    }
