"""Figures of one motif beside its map: worlds, correlogram, route shares, stability, power."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from twicetold.report.common import Spec, number, percent, plural, probability, sig, title_name
from twicetold.report.rows import records
from twicetold.report.theme import CHANGES, STATISTICS, VERDICTS, WORLDS, light, look_of, titled

if TYPE_CHECKING:
    import pandas as pd

    from twicetold.evidence import Comparison, MotifEvidence
    from twicetold.references.law import Law

_MOST_BARS = 60
_ROW = 26


def drawn_comparisons(evidence: MotifEvidence) -> list[Comparison]:
    """Comparisons that get a picture: one a world, the primary one, in the order of the worlds."""
    out = []
    for world in WORLDS:
        here = [c for c in evidence.comparisons if c.world == world and c.law is not None]
        here.sort(key=lambda c: not c.primary)
        out += here[:1]
    return out


def world_chart(evidence: MotifEvidence, comparison: Comparison, notice: str = "") -> Spec:
    """Distribution of a statistic in one world, with the observed value marked."""
    law = comparison.law
    assert law is not None
    words = STATISTICS.get(comparison.statistic, comparison.statistic)
    name = WORLDS.get(comparison.world, (comparison.world, ""))[0]
    seen = int(comparison.observed)
    rows, width = _bars(law, seen, comparison.direction)
    subtitle = f"{title_name(evidence)}: observed {number(seen)}, expected "
    subtitle += f"{number(comparison.expected)}, p = {probability(comparison.p) or 'none'}"
    low = min(rows[0]["a"], seen - width / 2)
    high = max(rows[-1]["b"], seen + width / 2)
    pad = 0.04 * (high - low)
    x = {"scale": {"domain": [sig(low - pad), sig(high + pad)], "nice": False, "zero": False}}
    axis = {"title": words, "format": "d", "tickCount": 6, "grid": False, "tickMinStep": 1}
    side = "right" if (seen - low) > 0.6 * (high - low) else "left"
    return {
        "title": titled(f"The {name} world", subtitle, notice),
        "width": 360,
        "height": 150,
        "data": {"name": "law"},
        "layer": [
            {
                "mark": {"type": "bar", "binSpacing": 0.6, "stroke": None},
                "encoding": {
                    "x": {"field": "a", "type": "quantitative", "axis": axis} | x,
                    "x2": {"field": "b"},
                    "y": {"field": "w", "type": "quantitative", "axis": _shares_axis()},
                    "y2": {"datum": 0},
                    "color": {
                        "field": "t",
                        "type": "nominal",
                        "legend": None,
                        "scale": {"domain": [0, 1], "range": [light("bar"), light("tail")]},
                    },
                    "tooltip": [{"field": "v", "title": words}, {"field": "p", "title": "share"}],
                },
            },
            _observed(seen, side),
        ],
        "datasets": {"law": rows},
        "usermeta": {"height": 150},
    }


def _shares_axis() -> dict[str, Any]:
    return {"title": "share of this world", "format": ".0%", "tickCount": 3}


def _observed(seen: int, side: str) -> Spec:
    ink = light("ink")
    return {
        "data": {"values": [{"x": seen, "label": f"observed {number(seen)}"}]},
        "layer": [
            {
                "mark": {"type": "rule", "color": ink, "strokeWidth": 1.8},
                "encoding": {"x": {"field": "x", "type": "quantitative"}},
            },
            {
                "mark": {"type": "text", "align": side, "dx": 5 if side == "left" else -5}
                | {"y": -2, "baseline": "bottom", "color": ink, "fontWeight": 600},
                "encoding": {
                    "x": {"field": "x", "type": "quantitative"},
                    "text": {"field": "label"},
                },
            },
        ],
    }


def _bars(law: Law, seen: int, direction: str) -> tuple[list[dict[str, Any]], int]:
    """Bars of whole values; several values share a bar when there are too many.

    A bar edge always falls at the observed value, so that no bar is half in the tail.
    """
    values, weights = law.values, law.weights / law.total
    # Far ends that no eye could see are left out of the picture (not of any number).
    visible = weights > weights.max() * 1e-3
    values, weights = values[visible], weights[visible]
    span = int(values[-1] - values[0]) + 1
    width = max(1, math.ceil(span / _MOST_BARS))
    many = direction == "many"
    start = seen if many else seen + 1
    slot = np.floor_divide(values - start, width)
    rows = []
    for k in np.unique(slot).tolist():
        here = slot == k
        a, b = start + k * width, start + (k + 1) * width - 1
        tail = k >= 0 if many else k < 0
        share = float(weights[here].sum())
        label = number(a) if width == 1 else f"{number(a)} to {number(b)}"
        row = {"a": a - 0.5, "b": b + 0.5, "w": sig(share, 4), "t": int(tail)}
        rows.append(row | {"v": label, "p": percent(share, 2)})
    return rows, width


def worlds_chart(evidence: MotifEvidence, notice: str = "") -> Spec:
    """All worlds of one motif, one under another."""
    parts = [world_chart(evidence, c) for c in drawn_comparisons(evidence)]
    datasets: dict[str, Any] = {}
    for part, comparison in zip(parts, drawn_comparisons(evidence), strict=True):
        own = f"law_{comparison.world}"
        datasets[own] = part.pop("datasets")["law"]
        part["data"] = {"name": own}
        part.pop("usermeta")
        part["width"] = 560
    return {
        "title": titled(f"{title_name(evidence)} against each world", notice),
        "vconcat": parts,
        "datasets": datasets,
        "spacing": 28,
    }


#: Farther than any two places on the globe: the last class of distance has no end.
_FARTHEST_KM = 20_000


def distances(low: float, high: float) -> str:
    """Write a class of distances; the last one holds all that is farther."""
    return f"over {number(low)}" if high > _FARTHEST_KM else f"{number(low)}–{number(high)}"


def correlogram_chart(evidence: MotifEvidence, notice: str = "") -> Spec:
    """Share of pairs that both hold the motif, by distance, with the envelope beside it."""
    assert evidence.correlogram is not None
    rows: list[dict[str, Any]] = []
    for r in records(evidence.correlogram):
        row: dict[str, Any] = {
            "d": distances(r["from_km"], r["to_km"]),
            "n": number(r["pairs"]),
        }
        for key in ("observed", "expected", "low", "high"):
            row[key[0]] = sig(r[key])
        rows.append(row)
    classes = [r["d"] for r in rows]
    x: Spec = {"field": "d", "type": "ordinal", "sort": classes}
    x |= {"scale": {"paddingInner": 0.25, "paddingOuter": 0.1}}
    x |= {"axis": {"title": "kilometres between the two traditions", "labelAngle": -35}}
    axis: Spec = {"title": "pairs that both hold it", "format": ".0%", "tickCount": 5}
    if max(max(r["h"] or 0.0, r["o"] or 0.0) for r in rows) < 0.05:
        axis["format"] = ".1%"
    y = {"type": "quantitative", "axis": axis}
    hover = [
        {"field": "d", "title": "kilometres"},
        {"field": "n", "title": "pairs"},
        {"field": "o", "title": "observed", "format": ".2%"},
        {"field": "e", "title": "expected", "format": ".2%"},
        {"field": "l", "title": "envelope from", "format": ".2%"},
        {"field": "h", "title": "envelope to", "format": ".2%"},
    ]
    tick = {"type": "tick", "color": light("soft"), "thickness": 1.5, "bandSize": 30}
    return {
        "title": titled(
            f"{title_name(evidence)}: likeness by distance",
            "dots: observed; bars: mean and 95 % envelope when place plays no part",
            notice,
        ),
        "width": 640,
        "height": 240,
        "data": {"name": "classes"},
        "encoding": {"x": x, "tooltip": hover},
        "layer": [
            {
                "mark": {"type": "bar", "color": light("bar"), "opacity": 0.55},
                "encoding": {"y": {"field": "l"} | y, "y2": {"field": "h"}},
            },
            {"mark": tick, "encoding": {"y": {"field": "e"} | y}},
            {
                "mark": {"type": "line", "color": light("holder"), "strokeWidth": 1.2},
                "encoding": {"y": {"field": "o"} | y},
            },
            {
                "mark": {"type": "point", "filled": True, "size": 60, "opacity": 1}
                | {"color": light("holder"), "stroke": light("paper"), "strokeWidth": 1},
                "encoding": {"y": {"field": "o"} | y},
            },
        ],
        "datasets": {"classes": rows},
        "usermeta": {"height": 250},
    }


def stability_chart(evidence: MotifEvidence, notice: str = "") -> Spec:
    """Every sensitivity run as one mark, by what was changed; same verdict filled."""
    assert evidence.stability is not None
    own = str(evidence.row.get("verdict", ""))
    rows, kinds = _runs(evidence.stability, own)
    same = sum(r["same"] for r in rows)
    present = [v for v in VERDICTS if any(r["verdict"] == v.verdict for r in rows)]
    domain = [v.verdict for v in present]
    width = max((r["x"] for r in rows), default=0) + 1
    look = {
        "shape": [v.symbol for v in present],
        "color": [light(v.colour) for v in present],
    }
    encoding = {
        "x": {"field": "x", "type": "quantitative", "axis": None}
        | {"scale": {"domain": [-0.5, max(width, 12) - 0.5], "nice": False}},
        "y": {"field": "y", "type": "nominal", "sort": kinds}
        | {"axis": {"title": None, "domain": False, "labelLimit": 200, "labelExpr": _BLANKS}},
        "tooltip": [
            {"field": "setting", "title": "changed"},
            {"field": "verdict", "title": "verdict"},
            {"field": "pe", "title": "p against emergence-only"},
            {"field": "pt", "title": "p against transmission-only"},
        ],
    }
    for channel, values in look.items():
        scale = {"domain": domain, "range": values}
        encoding[channel] = {"field": "verdict", "type": "nominal", "scale": scale, "title": None}
    return {
        "title": titled(
            f"{title_name(evidence)}: does the verdict hold?",
            f"{same} of {plural(len(rows), 'run')} give the same verdict; one mark is one run",
            notice,
        ),
        "width": 560,
        "height": _ROW * len(kinds),
        "data": {"name": "runs"},
        "mark": {"type": "point", "filled": True, "size": 72, "opacity": 1},
        "encoding": encoding,
        "datasets": {"runs": rows},
        "usermeta": {"height": _ROW * len(kinds)},
    }


#: A kind that needs more than one line is labelled on its first line only.
_BLANKS = "indexof(datum.value, '\\u2009') >= 0 ? '' : datum.value"
_PER_LINE = 18


def _runs(table: pd.DataFrame, own: str) -> tuple[list[dict[str, Any]], list[str]]:
    rows: list[dict[str, Any]] = []
    kinds: list[str] = []
    count: dict[str, int] = {}
    for r in records(table):
        kind = str(r["kind"])
        kind = CHANGES.get(kind, (kind,))[0]
        k = count.get(kind, 0)
        count[kind] = k + 1
        line = kind + "\u2009" * (k // _PER_LINE)
        if line not in kinds:
            kinds.append(line)
        rows.append(
            {
                "x": k % _PER_LINE,
                "y": line,
                "setting": str(r["setting"]),
                "verdict": look_of(str(r["verdict"])).verdict,
                "same": int(str(r["verdict"]) == own),
                "pe": probability(r.get("p_against_emergence")) or "none",
                "pt": probability(r.get("p_against_transmission")) or "none",
            }
        )
    kinds.sort(key=lambda line: list(count).index(line.rstrip("\u2009")))
    return rows, kinds


def power_chart(evidence: MotifEvidence, notice: str = "") -> Spec:
    """What this many holders could show: how often each verdict comes out under each truth."""
    assert evidence.power is not None
    table = evidence.power
    truths = list(dict.fromkeys(str(t) for t in table["truth"]))
    order = {v.verdict: k for k, v in enumerate(VERDICTS)}
    rows = [
        {
            "t": str(r["truth"]),
            "v": str(r["verdict"]),
            "p": sig(r["probability"], 4),
            "k": order.get(str(r["verdict"]), 9),
        }
        for r in records(table)
    ]
    present = [v for v in VERDICTS if any(r["v"] == v.verdict for r in rows)]
    scale = {
        "domain": [v.verdict for v in present],
        "range": [light(v.colour) for v in present],
    }
    return {
        "title": titled(
            f"What {plural(len(evidence.holders), 'holder')} could show",
            "how often each verdict comes out if the route on the left is the truth",
            notice,
        ),
        "width": 560,
        "height": (_ROW + 8) * len(truths),
        "data": {"name": "power"},
        "mark": {"type": "bar", "stroke": light("paper"), "strokeWidth": 1},
        "encoding": {
            "y": {"field": "t", "type": "nominal", "sort": truths}
            | {"axis": {"title": None, "labelLimit": 220}, "scale": {"paddingInner": 0.3}},
            "x": {"field": "p", "type": "quantitative", "stack": "zero"}
            | {"axis": {"title": "probability", "format": ".0%", "grid": False, "tickCount": 5}}
            | {"scale": {"domain": [0, 1]}},
            "color": {"field": "v", "type": "nominal", "scale": scale, "title": None},
            "order": {"field": "k", "type": "quantitative"},
            "tooltip": [
                {"field": "t", "title": "truth"},
                {"field": "v", "title": "verdict"},
                {"field": "p", "title": "probability", "format": ".1%"},
            ],
        },
        "datasets": {"power": rows},
        "usermeta": {"height": (_ROW + 8) * len(truths)},
    }
