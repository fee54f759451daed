"""How every figure looks: colours by meaning, shapes, type, and the words for verdicts and worlds.

Each colour has one meaning and one name. The pages put a style-sheet variable of that name in its
place, so that a figure follows the page into the dark; a picture file has the colour itself.
Meaning never rests on hue alone: shapes and lightness tell the same in grey print.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

#: name -> (on light paper, on a dark screen)
COLOURS: dict[str, tuple[str, str]] = {
    "ink": ("#1f1d1a", "#ebe7df"),
    "soft": ("#5c5850", "#b0aaa0"),
    "faint": ("#8d887e", "#8a857b"),
    "rule": ("#d9d4c9", "#3d3a35"),
    "paper": ("#fefdfb", "#191816"),
    "land": ("#ece7db", "#2b2926"),
    "coast": ("#c9c2b2", "#4b4740"),
    "edge": ("#b7b0a3", "#57524a"),
    "holder": ("#123f63", "#9cc9ea"),
    "halo": ("#cfe0ec", "#26405a"),
    "tail": ("#a8480f", "#f0a06a"),
    "bar": ("#c3bdb0", "#6a655c"),
    "contact": ("#17527d", "#79b6e2"),
    "ancestry": ("#5787a8", "#56809c"),
    "emergence": ("#e0962c", "#e6a94f"),
    "several": ("#8c2f5d", "#dc7fb0"),
    "undecided": ("#928c81", "#7d786e"),
    "inheritance": ("#5d7f3c", "#9cc178"),
}


def light(name: str) -> str:
    """Colour of that name on paper."""
    return COLOURS[name][0]


@dataclass(frozen=True)
class VerdictLook:
    """How one verdict is drawn: colour name, Vega symbol, and the one-line meaning."""

    verdict: str
    colour: str
    symbol: str
    meaning: str


#: Verdicts in the order they are listed everywhere. An unknown one is drawn as undecided.
VERDICTS: tuple[VerdictLook, ...] = (
    VerdictLook(
        "contact spread",
        "contact",
        "circle",
        "neighbours share it more than separate invention or descent would give",
    ),
    VerdictLook(
        "contact or ancestry",
        "ancestry",
        "square",
        "neighbours share it, but mostly inside families, where descent would do the same",
    ),
    VerdictLook(
        "parallel emergence",
        "emergence",
        "triangle-up",
        "its holders lie too scattered for one origin with contact and inheritance",
    ),
    VerdictLook(
        "several origins, then spread",
        "several",
        "diamond",
        "clustered, yet in too many separate strands for one origin",
    ),
    VerdictLook("undecided", "undecided", "cross", "the records cannot tell"),
)
LOOK = {look.verdict: look for look in VERDICTS}


def look_of(verdict: str) -> VerdictLook:
    """How a verdict is drawn; anything unknown looks undecided."""
    return LOOK.get(verdict, VERDICTS[-1])


#: world -> (name in running text, what it supposes)
WORLDS: dict[str, tuple[str, str]] = {
    "emergence": (
        "emergence-only",
        "every holder came to it alone, and nobody listened to neighbours",
    ),
    "ancestry": (
        "ancestry-only",
        "families handed it down, and neighbours of other families did not pass it on",
    ),
    "contact": ("contact-only", "it arose once, and went from neighbour to neighbour"),
    "transmission": (
        "transmission-only",
        "it arose once, and went on by contact and inheritance in whatever mixture",
    ),
}

#: statistic -> the words for it on an axis
STATISTICS: dict[str, str] = {
    "joins": "joins",
    "joins_cross_family": "cross-family joins",
    "joins_same_family": "same-family joins",
    "moran_i": "Moran's I",
    "clusters": "clusters",
    "largest_cluster": "holders in the largest cluster",
    "strands": "strands",
}

#: what a sensitivity run changes -> (label in a figure, words in a sentence)
CHANGES: dict[str, tuple[str, str]] = {
    "graph": ("contact graph", "another contact graph"),
    "exponent": ("exponent of effort", "another exponent of effort"),
    "propensity": ("propensity", "another rule of propensity"),
    "reach": ("reach of contact", "contact that reaches further"),
    "process": ("contact process", "another process of contact"),
    "without family": ("without a family", "a family left out"),
    "without region": ("without a region", "a region left out"),
}

ROUTE_COLOURS = {"emergence": "emergence", "contact": "contact", "inheritance": "inheritance"}

FONT = "'Helvetica Neue', Helvetica, Arial, 'Liberation Sans', 'DejaVu Sans', sans-serif"


def config() -> dict[str, Any]:
    """Give the Vega-Lite configuration shared by every figure."""
    ink, soft, rule = light("ink"), light("soft"), light("rule")
    return {
        "font": FONT,
        "background": light("paper"),
        "padding": 6,
        "aria": False,
        "view": {"stroke": None},
        "title": {
            "anchor": "start",
            "color": ink,
            "fontSize": 14,
            "fontWeight": 600,
            "subtitleColor": soft,
            "subtitleFontSize": 11,
            "subtitlePadding": 4,
            "offset": 14,
            "frame": "group",
        },
        "axis": {
            "domainColor": soft,
            "tickColor": soft,
            "gridColor": rule,
            "gridOpacity": 0.7,
            "labelColor": soft,
            "titleColor": ink,
            "labelFontSize": 11,
            "titleFontSize": 11.5,
            "titleFontWeight": 500,
            "titlePadding": 8,
            "tickSize": 4,
        },
        "axisY": {"domain": False, "ticks": False, "labelPadding": 6},
        "legend": {
            "orient": "bottom",
            "direction": "horizontal",
            "labelColor": ink,
            "titleColor": soft,
            "labelFontSize": 11,
            "titleFontSize": 11,
            "titleFontWeight": 500,
            "labelLimit": 260,
            "symbolStrokeWidth": 1.5,
            "symbolSize": 70,
            "columnPadding": 22,
            "rowPadding": 4,
        },
        "text": {"color": ink, "fontSize": 11},
        "rule": {"color": soft},
    }


def titled(title: str, *subtitles: str) -> dict[str, Any]:
    """Title of a figure, with those subtitle lines that are not empty."""
    lines = [line for line in subtitles if line]
    return {"text": title, "subtitle": lines} if lines else {"text": title}
