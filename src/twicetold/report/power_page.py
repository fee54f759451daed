"""The page and the picture of a power table: what these traditions could show at all."""

from __future__ import annotations

import re
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

from markupsafe import Markup

from twicetold import __version__
from twicetold.report import words
from twicetold.report.common import Spec, known, number, percent, sig
from twicetold.report.figures import render
from twicetold.report.rows import records
from twicetold.report.shelf import style, templates, write
from twicetold.report.tables import Sheet
from twicetold.report.theme import COLOURS, VERDICTS, config, light, look_of, titled

if TYPE_CHECKING:
    import pandas as pd

_WIDTH, _HEIGHT = 340, 210
#: Power that is usually asked for before a study is begun (common practice, no source).
WANTED = 0.8


class PowerTable(Protocol):
    """What is drawn: how often each verdict comes out, by truth and number of holders."""

    @property
    def frame(self) -> pd.DataFrame:
        """Columns ``holders, truth, verdict, probability, low, high``."""

    @property
    def smallest(self) -> pd.DataFrame:
        """Columns ``truth, verdict, holders``: fewest holders with 80 % power, or NaN."""


def write_power(table: PowerTable, folder: Path, *, notice: str = "") -> None:
    """Write ``power.html`` (complete in itself) and ``power.svg`` into ``folder``.

    Parameters
    ----------
    table : PowerTable
        With ``frame`` and ``smallest``.
    folder : Path
        Made when it does not exist.
    notice : str
        Shown at the head of the page and in the picture (that data are invented, for instance).
    """
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    whole = {**power_picture(table, notice), "config": config()}
    (folder / "power.svg").write_bytes(render(whole, "svg"))
    text = (
        templates()
        .get_template("power.html.j2")
        .render(
            root="",
            has_index=False,
            version=__version__,
            notice=notice,
            style=Markup(style()),
            panels=[_drawn(spec, truth) for truth, spec in _panels(table).items()],
            looks=_present(table),
            smallest=_smallest_sheet(table),
            numbers=_numbers_sheet(table),
            wanted=percent(WANTED),
            caution_list=words.CAUTIONS,
        )
    )
    write(folder / "power.html", text)


def power_picture(table: PowerTable, notice: str = "") -> Spec:
    """All truths in one picture, two beside each other."""
    panels = []
    for spec in _panels(table).values():
        own = dict(spec)
        own["title"] = {"text": own["title"]["text"]}
        panels.append(own)
    lines = f"how often each verdict comes out; dashed: {percent(WANTED)}; bands: 95 % intervals"
    return {
        "title": titled("What these traditions could show", lines, notice),
        "concat": panels,
        "columns": 2,
        "spacing": 30,
    }


def _panels(table: PowerTable) -> dict[str, Spec]:
    frame = table.frame
    looks = _present(table)
    most = float(frame["holders"].max()) if len(frame) else 10.0
    least = float(frame["holders"].min()) if len(frame) else 1.0
    out = {}
    for truth in dict.fromkeys(str(t) for t in frame["truth"]):
        rows = [
            {
                "h": int(r["holders"]),
                "v": look_of(str(r["verdict"])).verdict,
                "p": sig(r["probability"], 4),
                "l": sig(r["low"], 4),
                "u": sig(r["high"], 4),
            }
            for r in records(frame[frame["truth"].astype(str) == truth])
        ]
        out[truth] = _panel(truth, rows, looks, (least, most))
    return out


def _panel(
    truth: str, rows: list[dict[str, Any]], looks: list[Any], ends: tuple[float, float]
) -> Spec:
    x: Spec = {"field": "h", "type": "quantitative"}
    x["scale"] = {"type": "log", "nice": False, "domain": [ends[0] * 0.93, ends[1] * 1.07]}
    # Only the numbers of holders that were tried are marked: those of the table.
    marks = sorted({r["h"] for r in rows})
    x["axis"] = {"title": "holders", "grid": False, "values": marks, "labelOverlap": "greedy"}
    x["axis"] |= {"format": "d"}
    y: Spec = {"type": "quantitative", "scale": {"domain": [0, 1]}}
    y["axis"] = {"title": "how often", "format": ".0%", "values": [0, 0.2, 0.4, 0.6, 0.8, 1]}
    domain = [v.verdict for v in looks]
    kind: Spec = {"field": "v", "type": "nominal", "title": None}
    colour = kind | {"scale": {"domain": domain, "range": [light(v.colour) for v in looks]}}
    shape = kind | {"scale": {"domain": domain, "range": [v.symbol for v in looks]}}
    point = {"type": "point", "filled": True, "size": 62, "opacity": 1}
    point |= {"stroke": light("paper"), "strokeWidth": 0.7}
    return {
        "title": titled(f"If the truth is {truth}"),
        "width": _WIDTH,
        "height": _HEIGHT,
        "data": {"values": rows},
        "layer": [
            {
                "mark": {"type": "area", "opacity": 0.2},
                "encoding": {
                    "x": x,
                    "y": {"field": "l"} | y,
                    "y2": {"field": "u"},
                    "color": colour | {"legend": None},
                },
            },
            {
                "data": {"values": [{"y": WANTED}]},
                "mark": {"type": "rule", "color": light("soft"), "strokeDash": [4, 3]},
                "encoding": {"y": {"field": "y"} | y},
            },
            {
                "mark": {"type": "line", "strokeWidth": 1.6},
                "encoding": {"x": x, "y": {"field": "p"} | y, "color": colour | {"legend": None}},
            },
            {
                "mark": point,
                "encoding": {"x": x, "y": {"field": "p"} | y, "fill": colour, "shape": shape},
            },
        ],
    }


def _drawn(spec: Spec, truth: str) -> dict[str, Any]:
    """Draw one panel as SVG for the page, in the page's own colours so that it follows the dark."""
    own: dict[str, Any] = {**spec, "config": {**config(), "background": None}}
    own.pop("title")
    # The page has one key to the signs above all panels.
    for layer in own["layer"]:
        for channel in ("fill", "shape"):
            if channel in layer["encoding"]:
                layer["encoding"][channel] = layer["encoding"][channel] | {"legend": None}
    names = {pair[0]: name for name, pair in COLOURS.items()}
    svg = render(own, "svg").decode()
    # The page gives the panel one name; nothing inside it is announced.
    svg = re.sub(r' (?:role|aria-[a-z]+)="[^"]*"', "", svg)
    svg = re.sub(
        r'"(#[0-9a-fA-F]{6})"',
        lambda m: f'"var(--f-{names[m[1].lower()]})"' if m[1].lower() in names else m[0],
        svg,
    )
    return {"title": f"If the truth is {truth}", "svg": Markup(svg)}


def _present(table: PowerTable) -> list[Any]:
    found = {look_of(str(v)).verdict for v in table.frame["verdict"]}
    return [v for v in VERDICTS if v.verdict in found]


def _smallest_sheet(table: PowerTable) -> Sheet:
    rows = [(str(r["truth"]), str(r["verdict"]), _fewest(r)) for r in records(table.smallest)]
    return Sheet(("if the truth is", "verdict", "holders needed"), tuple(rows), frozenset({2}))


def _fewest(row: Mapping[Any, Any]) -> str:
    return number(row["holders"]) if known(row["holders"]) else "more than were tried"


def _numbers_sheet(table: PowerTable) -> Sheet:
    rows = [
        (
            str(r["truth"]),
            number(r["holders"]),
            str(r["verdict"]),
            percent(r["probability"], 1),
            f"{percent(r['low'], 1)} to {percent(r['high'], 1)}",
        )
        for r in records(table.frame)
    ]
    heads = ("if the truth is", "holders", "verdict", "how often", "95 % interval")
    return Sheet(heads, tuple(rows), frozenset({1, 3, 4}))
