"""Figures of the whole catalogue: clusters against holders, prevalence, q-q plot, categories."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from twicetold.report.common import Spec, as_float, listed, number, plural, sig
from twicetold.report.rows import records
from twicetold.report.theme import VERDICTS, WORLDS, light, look_of, titled

if TYPE_CHECKING:
    from twicetold.evidence import Ranking

BAND_WORLDS = (("emergence", "emergence"), ("contact", "contact"))
#: Points at one place but of different verdicts are nudged apart by this factor on the log axes.
_NUDGE = 1.035
_QQ_POINTS = 500
#: Lowest value on the log axis of numbers of motifs.
_FLOOR = 0.5
_QQ_COLOURS = {"emergence": "emergence", "ancestry": "inheritance"}
_QQ_COLOURS |= {"contact": "contact", "transmission": "several"}
_QQ_SHAPES = {"emergence": "circle", "ancestry": "square"}
_QQ_SHAPES |= {"contact": "triangle-up", "transmission": "diamond"}


def signature_chart(ranking: Ranking) -> Spec:
    """Clusters against holders: every motif a point, with the bands of two worlds."""
    points = _points(ranking)
    top = max((p["h"] for p in points), default=10)
    layers: list[Spec] = []
    bands, worlds = _bands(ranking, top) if ranking.bands is not None else ([], [])
    datasets: dict[str, Any] = {"points": points} | ({"bands": bands} if bands else {})
    axes = _axes(points, bands)
    layers += _band_layers(worlds, axes) if bands else []
    said = [WORLDS[w][0] for w in worlds] if bands else []
    layers.append(_point_layer(points, axes))
    shown = sum(p["n"] for p in points)
    subtitle = f"{plural(shown, 'motif')}; larger signs stand for several motifs at one place"
    band = f"bands: where 95 % of motifs would lie in the {' and the '.join(said)} world"
    return {
        "title": titled(
            "Clusters against holders", subtitle, band if said else "", ranking.catalogue.notice
        ),
        "width": 760,
        "height": 440,
        "layer": layers,
        "datasets": datasets,
        "usermeta": {"aspect": 0.56, "lowest": 320},
    }


def _points(ranking: Ranking) -> list[dict[str, Any]]:
    where: dict[tuple[int, int, str], list[Any]] = {}
    for e in listed(ranking):
        holders, clusters = as_float(e.row.get("holders")), as_float(e.row.get("clusters"))
        if not (holders >= 1 and clusters >= 1):
            continue
        key = (int(holders), int(clusters), look_of(str(e.row.get("verdict", ""))).verdict)
        where.setdefault(key, []).append(e)
    order = [v.verdict for v in VERDICTS]
    rows = []
    # Undecided ones first, so that definite verdicts are drawn over them.
    for (h, c, verdict), here in sorted(where.items(), key=lambda kv: -order.index(kv[0][2])):
        step = _NUDGE ** (order.index(verdict) - 2)
        names = [e.name or e.motif_id for e in here[:4]]
        more = f" and {len(here) - 4} more" if len(here) > 4 else ""
        row: dict[str, Any] = {
            "h": h,
            "c": c,
            "x": sig(h * step, 5),
            "y": sig(c, 5),
            "n": len(here),
            "v": verdict,
            "m": "; ".join(names) + more,
        }
        if len(here) == 1:
            row["id"] = here[0].motif_id
        rows.append(row)
    return rows


def _bands(ranking: Ranking, top: int) -> tuple[list[dict[str, Any]], list[str]]:
    assert ranking.bands is not None
    table = ranking.bands
    rows: list[dict[str, Any]] = []
    worlds = [w for w in dict.fromkeys(str(w) for w in table["world"]) if w in WORLDS]
    for world in worlds:
        here = table[(table["world"] == world) & (table["holders"] <= top)]
        here = here.dropna(subset=["low", "high"]).sort_values("holders")
        # Some 160 places on a log axis are as many as an eye can follow.
        keep = np.unique(np.round(np.geomspace(1, max(len(here), 1), 160)).astype(int)) - 1
        for r in records(here.iloc[keep]) if len(here) else ():
            rows.append(
                {
                    "w": world,
                    "h": int(r["holders"]),
                    "l": sig(r["low"], 4),
                    "m": sig(r["median"], 4),
                    "u": sig(r["high"], 4),
                    "s": f"{number(r['low'])} to {number(r['high'])}",
                }
            )
    return rows, worlds


def _axes(points: list[dict[str, Any]], bands: list[dict[str, Any]]) -> tuple[Spec, Spec]:
    """Log axes with room around the outermost points and bands."""
    axis = {"grid": False, "tickCount": 6, "labelOverlap": True, "format": "d"}
    across = [p["x"] for p in points] + [r["h"] for r in bands]
    up = [p["y"] for p in points] + [r[k] for r in bands for k in "lu" if r[k]]

    def along(title: str, values: list[float]) -> Spec:
        ends = [sig(0.88 * min(values, default=1)), sig(1.12 * max(values, default=10))]
        scale = {"type": "log", "nice": False, "domain": ends}
        return {"type": "quantitative", "scale": scale, "axis": axis | {"title": title}}

    return along("holders (traditions that have the motif)", across), along("clusters", up)


def _band_layers(worlds: list[str], axes: tuple[Spec, Spec]) -> list[Spec]:
    """Band, median and name of each world; the name stands at the end of its median."""
    x, y = axes
    out: list[Spec] = []
    dashes = {"emergence": [1, 0], "contact": [7, 4]}
    for world in worlds:
        colour = light(dict(BAND_WORLDS).get(world, "soft"))
        own: Spec = {
            "data": {"name": "bands"},
            "transform": [{"filter": f"datum.w === '{world}'"}],
        }
        across = {"x": {"field": "h"} | x}
        last = [
            *own["transform"],
            {"window": [{"op": "last_value", "field": "h", "as": "end"}], "frame": [None, None]},
            {"filter": "datum.h === datum.end"},
        ]
        area = {"type": "area", "opacity": 0.22, "color": colour}
        line = {"type": "line", "color": colour, "strokeWidth": 1.4}
        word = {"type": "text", "align": "right", "dx": -6, "dy": -9, "fontWeight": 600}
        out += [
            own
            | {"mark": area}
            | {"encoding": across | {"y": {"field": "l"} | y, "y2": {"field": "u"}}},
            own
            | {"mark": line | {"strokeDash": dashes.get(world, [2, 2])}}
            | {"encoding": across | {"y": {"field": "m"} | y}},
            own
            | {"transform": last, "mark": word | {"color": light("ink")}}
            | {"encoding": across | {"y": {"field": "m"} | y, "text": {"value": WORLDS[world][0]}}},
        ]
    return out


def _point_layer(points: list[dict[str, Any]], axes: tuple[Spec, Spec]) -> Spec:
    x, y = axes
    present = [v for v in VERDICTS if any(p["v"] == v.verdict for p in points)]
    domain = [v.verdict for v in present]
    most = max((p["n"] for p in points), default=1)
    usual = 62 if len(points) < 300 else 40 if len(points) < 900 else 24
    return {
        "data": {"name": "points"},
        "mark": {"type": "point", "filled": True, "opacity": 0.9, "cursor": "pointer"}
        | {"stroke": light("paper"), "strokeWidth": 0.6},
        "encoding": {
            "x": {"field": "x"} | x,
            "y": {"field": "y"} | y,
            "shape": {"field": "v", "type": "nominal", "title": "verdict"}
            | {"scale": {"domain": domain, "range": [v.symbol for v in present]}},
            "fill": {"field": "v", "type": "nominal", "title": "verdict"}
            | {"scale": {"domain": domain, "range": [light(v.colour) for v in present]}},
            "size": {"field": "n", "type": "quantitative", "legend": None}
            | {"scale": {"type": "sqrt", "domain": [1, max(most, 2)], "range": [usual, 6 * usual]}},
            "tooltip": [
                {"field": "m", "title": "motif"},
                {"field": "h", "title": "holders"},
                {"field": "c", "title": "clusters"},
                {"field": "n", "title": "motifs here"},
                {"field": "v", "title": "verdict"},
            ],
        },
    }


def prevalence_chart(ranking: Ranking) -> Spec:
    """How many motifs have how many holders, with the fitted curve and its band."""
    rows = _prevalence_rows(ranking)
    x: Spec = {"field": "h", "type": "quantitative", "scale": {"type": "log", "nice": False}}
    x |= {"axis": {"title": "holders", "grid": False, "format": "d", "labelOverlap": True}}
    y: Spec = {"type": "quantitative", "scale": {"type": "log", "nice": False, "clamp": True}}
    top = max((max(r["m"] or 1.0, r["u"] or 1.0) for r in rows), default=1.0)
    y["scale"] = y["scale"] | {"domain": [_FLOOR, sig(top * 1.2, 3)]}
    y |= {"axis": {"title": "motifs", "format": "~r", "tickCount": 4, "labelOverlap": True}}
    return {
        "title": titled(
            "How widely motifs are held",
            "dots: the catalogue; line and band: fitted log-series, with its 95 % band",
            ranking.catalogue.notice,
        ),
        "width": 420,
        "height": 280,
        "data": {"name": "prevalence"},
        "layer": _prevalence_layers(x, y),
        "datasets": {"prevalence": rows},
        "usermeta": {"height": 280},
    }


def _prevalence_rows(ranking: Ranking) -> list[dict[str, Any]]:
    assert ranking.prevalence is not None
    rows = []
    for r in records(ranking.prevalence.sort_values("holders")):
        row: dict[str, Any] = {"h": int(r["holders"])}
        for key, short in (("motifs", "m"), ("fitted", "f"), ("low", "l"), ("high", "u")):
            value = as_float(r.get(key))
            # A log axis has no place for nought: nothing is drawn there.
            row[short] = sig(value, 4) if value > 0 else None
        if row["u"] is not None:
            row["l"] = max(row["l"] or 0.0, _FLOOR)
            row["u"] = max(row["u"], _FLOOR)
        rows.append(row)
    return rows


def _prevalence_layers(x: Spec, y: Spec) -> list[Spec]:
    hover = [
        {"field": "h", "title": "holders"},
        {"field": "m", "title": "motifs"},
        {"field": "f", "title": "fitted", "format": ".2f"},
    ]
    return [
        {
            "transform": [{"filter": "isValid(datum.u)"}],
            "mark": {"type": "area", "color": light("bar"), "opacity": 0.5, "clip": True},
            "encoding": {"x": x, "y": {"field": "l"} | y, "y2": {"field": "u"}},
        },
        {
            "transform": [{"filter": f"isValid(datum.f) && datum.f >= {_FLOOR}"}],
            "mark": {"type": "line", "color": light("soft"), "strokeWidth": 1.4, "clip": True},
            "encoding": {"x": x, "y": {"field": "f"} | y},
        },
        {
            "transform": [{"filter": "isValid(datum.m)"}],
            "mark": {"type": "point", "filled": True, "size": 34, "color": light("holder")}
            | {"opacity": 1},
            "encoding": {"x": x, "y": {"field": "m"} | y, "tooltip": hover},
        },
    ]


def qq_chart(ranking: Ranking) -> Spec:
    """Observed p-values against those expected if no motif departed from the world."""
    rows, worlds = _quantiles(ranking)
    end = max((r["x"] for r in rows), default=0.0)
    axis = {"values": list(range(12)), "labelOverlap": True, "labelExpr": _POWER}
    scales: Spec = {"scale": {"zero": True, "nice": False}}
    x: Spec = {"field": "x", "type": "quantitative"} | scales
    x |= {"axis": axis | {"title": "p expected if nothing departed", "grid": False}}
    y: Spec = {
        "field": "y",
        "type": "quantitative",
        "axis": axis | {"title": "p observed"},
    } | scales
    names = [WORLDS[w][0] for w in worlds]
    world: Spec = {"field": "w", "type": "nominal", "title": None}
    colours = {"domain": names, "range": [light(_QQ_COLOURS[w]) for w in worlds]}
    shapes = {"domain": names, "range": [_QQ_SHAPES[w] for w in worlds]}
    return {
        "title": titled(
            "Observed p-values against expected",
            "testable motifs; above the line: smaller than expected",
            ranking.catalogue.notice,
        ),
        "width": 420,
        "height": 280,
        "encoding": {"x": x, "y": y},
        "layer": [
            {
                "data": {"values": [{"x": 0, "y": 0}, {"x": end, "y": end}]},
                "mark": {"type": "line", "color": light("soft"), "strokeDash": [4, 3]},
            },
            {
                "data": {"name": "quantiles"},
                "mark": {"type": "point", "filled": True, "size": 26, "opacity": 0.8},
                "encoding": {
                    "color": world | {"scale": colours},
                    "shape": world | {"scale": shapes},
                },
            },
        ],
        "datasets": {"quantiles": rows},
        "usermeta": {"height": 280},
    }


def _quantiles(ranking: Ranking) -> tuple[list[dict[str, Any]], list[str]]:
    """Sorted p-values beside their places, on a log scale, and the worlds that gave any."""
    rows: list[dict[str, Any]] = []
    worlds = []
    alpha = ranking.plan.evidence.alpha
    tested = [e for e in ranking.evidence if as_float(e.row.get("p_attainable")) <= alpha]
    for world in WORLDS:
        if f"p_against_{world}" not in ranking.motifs.columns:
            continue
        values = [as_float(e.row.get(f"p_against_{world}")) for e in tested]
        p = np.sort([v for v in values if v > 0])
        if not len(p):
            continue
        worlds.append(world)
        place = (np.arange(len(p)) + 0.5) / len(p)
        keep = np.unique(np.round(np.geomspace(1, len(p), _QQ_POINTS)).astype(int)) - 1
        for k in keep.tolist():
            awaited, seen = -math.log10(place[k]), -math.log10(p[k])
            rows.append({"w": WORLDS[world][0], "x": sig(awaited, 4), "y": sig(seen, 4)})
    return rows, worlds


_POWER = "datum.value < 4 ? format(pow(10, -datum.value), '~r') : '1e-' + datum.value"


def has_quantiles(ranking: Ranking) -> bool:
    """Whether any world gave p-values to draw."""
    columns = [f"p_against_{w}" for w in WORLDS if f"p_against_{w}" in ranking.motifs.columns]
    return any(as_float(e.row.get(c)) > 0 for e in ranking.evidence for c in columns)
