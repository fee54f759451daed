"""Files that pages share: templates, style, scripts and the drawing library."""

from __future__ import annotations

from functools import lru_cache
from importlib import resources
from pathlib import Path
from typing import Any

import jinja2

from twicetold.report.common import to_json
from twicetold.report.theme import COLOURS


@lru_cache(maxsize=1)
def templates() -> jinja2.Environment:
    """Give the page templates; whatever they are handed is escaped."""
    return jinja2.Environment(
        loader=jinja2.PackageLoader("twicetold.report", "templates"),
        autoescape=True,
        trim_blocks=True,
        lstrip_blocks=True,
        undefined=jinja2.StrictUndefined,
    )


def style() -> str:
    """Style sheet with the figures' colours, for paper and for the dark."""
    text = asset("page.css")
    for k, tag in enumerate(("LIGHT", "DARK")):
        lines = " ".join(f"--f-{name}: {pair[k]};" for name, pair in COLOURS.items())
        text = text.replace(f"/*FIGURE-{tag}*/", "  " + lines)
    return text


@lru_cache(maxsize=1)
def drawing_library() -> str:
    """Vega, Vega-Lite and Vega-Embed as one script, as the figure converter carries them."""
    import vl_convert

    text = vl_convert.javascript_bundle(
        "window.vegaEmbed = vegaEmbed;",
        vl_version=str(vl_convert.get_vegalite_versions()[-1]),
    )
    return str(text)


def asset(name: str) -> str:
    """Give a file of this package as text."""
    return resources.files("twicetold.report").joinpath(f"assets/{name}").read_text("utf-8")


def script(name: str, value: Any) -> str:
    """A script that puts data under ``window.twicetold`` (a page on disk may not fetch any)."""
    text = to_json(to_json(value))
    return f"(window.twicetold = window.twicetold || {{}}).{name} = JSON.parse({text});\n"


def write(path: Path, text: str) -> None:
    """Write a page or a script: UTF-8 and line feeds on every system."""
    path.write_text(text, encoding="utf-8", newline="\n")
