"""Figures by category of motif: clustering, and the routes beside each other."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from twicetold.report.common import Spec, known, number, sig
from twicetold.report.rows import records
from twicetold.report.theme import light, titled

if TYPE_CHECKING:
    from twicetold.evidence import Ranking


def category_routes(ranking: Ranking) -> list[str]:
    """Routes that the category table gives shares for."""
    if ranking.categories is None:
        return []
    columns = set(ranking.categories.columns)
    return [r for r in ("emergence", "contact", "inheritance") if f"{r}_share" in columns]


def categories_chart(ranking: Ranking) -> Spec:
    """Joins over expected by category; with route shares, those beside each other."""
    assert ranking.categories is not None
    routes = category_routes(ranking)
    return _share_rows(ranking, routes) if routes else _ratio_rows(ranking)


def ratio_chart(ranking: Ranking) -> Spec:
    """Joins over expected by category, whatever else the table holds."""
    return _ratio_rows(ranking)


def _category_names(ranking: Ranking) -> list[tuple[str, dict[Any, Any]]]:
    assert ranking.categories is not None
    return [
        (str(r["category"]) if known(r["category"]) else "no category", r)
        for r in records(ranking.categories)
    ]


def _ratio_rows(ranking: Ranking) -> Spec:
    rows = [
        {
            "c": name,
            "m": sig(r.get("joins_ratio"), 4),
            "l": sig(r.get("joins_ratio_low"), 4),
            "u": sig(r.get("joins_ratio_high"), 4),
            "n": number(r.get("motifs")),
            "t": number(r.get("testable")),
        }
        for name, r in _category_names(ranking)
    ]
    axis = {"title": "joins, observed over expected", "grid": True, "tickCount": 6}
    hover = [
        {"field": "c", "title": "category"},
        {"field": "n", "title": "motifs"},
        {"field": "t", "title": "testable"},
        {"field": "m", "title": "ratio", "format": ".2f"},
        {"field": "l", "title": "from", "format": ".2f"},
        {"field": "u", "title": "to", "format": ".2f"},
    ]
    x = {"type": "quantitative", "axis": axis, "scale": {"zero": False}}
    return {
        "title": titled(
            "Clustering by category",
            "observed over expected joins in the emergence-only world, with its interval",
            ranking.catalogue.notice,
        ),
        "width": 560,
        "height": 30 * len(rows),
        "data": {"name": "categories"},
        "encoding": {"y": _category_axis([str(r["c"]) for r in rows])},
        "layer": [
            {
                "data": {"values": [{"x": 1}]},
                "mark": {"type": "rule", "color": light("soft"), "strokeDash": [4, 3]},
                "encoding": {"x": {"field": "x"} | x, "y": {"value": 0}, "y2": {"value": "height"}},
            },
            {
                "mark": {"type": "rule", "color": light("holder"), "strokeWidth": 2.2},
                "encoding": {"x": {"field": "l"} | x, "x2": {"field": "u"}, "tooltip": hover},
            },
            {
                "mark": {"type": "point", "filled": True, "size": 80, "opacity": 1}
                | {"color": light("holder")},
                "encoding": {"x": {"field": "m"} | x, "tooltip": hover},
            },
        ],
        "datasets": {"categories": rows},
        "usermeta": {"height": 30 * len(rows)},
    }


def _category_axis(names: list[str]) -> dict[str, Any]:
    axis = {"title": None, "labelLimit": 180, "domain": False}
    return {"field": "c", "type": "nominal", "sort": list(names), "axis": axis}


def _share_rows(ranking: Ranking, routes: list[str]) -> Spec:
    rows = []
    for name, r in _category_names(ranking):
        for route in routes:
            row = {"c": name, "r": route, "m": sig(r[f"{route}_share"], 4)}
            for end, short in (("low", "l"), ("high", "u")):
                found = next(
                    (k for k in (f"{route}_share_{end}", f"{route}_{end}") if k in r), None
                )
                row[short] = sig(r[found], 4) if found else row["m"]
            rows.append(row)
    names = list(dict.fromkeys(str(r["c"]) for r in rows))
    shapes = {"emergence": "triangle-up", "contact": "circle", "inheritance": "square"}
    axis = {"title": "share of the category's motifs", "format": ".0%", "tickCount": 5}
    x = {"type": "quantitative", "axis": axis, "scale": {"domain": [0, 1]}}
    offset = {"field": "r", "type": "nominal", "scale": {"domain": routes}}
    colour = {"domain": routes, "range": [light(r) for r in routes]}
    shape = {"domain": routes, "range": [shapes[r] for r in routes]}
    hover = [
        {"field": "c", "title": "category"},
        {"field": "r", "title": "route"},
        {"field": "m", "title": "share", "format": ".0%"},
        {"field": "l", "title": "from", "format": ".0%"},
        {"field": "u", "title": "to", "format": ".0%"},
    ]
    kind = {"field": "r", "type": "nominal", "title": None}
    return {
        "title": titled(
            "Routes by category",
            "share of each category's motifs by route, with its 90 % interval",
            ranking.catalogue.notice,
        ),
        "width": 560,
        "height": 48 * len(names),
        "data": {"name": "categories"},
        "encoding": {"y": _category_axis(names), "yOffset": offset},
        "layer": [
            {
                "mark": {"type": "rule", "strokeWidth": 2},
                "encoding": {
                    "x": {"field": "l"} | x,
                    "x2": {"field": "u"},
                    "color": kind | {"scale": colour},
                    "tooltip": hover,
                },
            },
            {
                "mark": {"type": "point", "filled": True, "size": 62, "opacity": 1},
                "encoding": {
                    "x": {"field": "m"} | x,
                    "color": kind | {"scale": colour},
                    "shape": kind | {"scale": shape},
                    "tooltip": hover,
                },
            },
        ],
        "datasets": {"categories": rows},
        "usermeta": {"height": 48 * len(names)},
    }
