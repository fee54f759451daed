"""What a catalogue says of itself (title, notice, licence), and its outline of land."""

from __future__ import annotations

import hashlib
import tomllib
from dataclasses import dataclass, fields
from pathlib import Path

from twicetold.catalogue import limits
from twicetold.catalogue.cells import clean_text
from twicetold.catalogue.cldf import read_json
from twicetold.catalogue.model import SourceFile
from twicetold.catalogue.notes import Notes, Spot, shown, suggestion
from twicetold.catalogue.tables import Table

INVENTED_NOTICE = "Invented data: these traditions, motifs and records describe no real people."
_GEOJSON = frozenset(
    {
        "FeatureCollection",
        "Feature",
        "Polygon",
        "MultiPolygon",
        "GeometryCollection",
        "LineString",
        "MultiLineString",
    }
)


@dataclass
class About:
    """What ``about.toml`` or the sheet ``about`` may hold."""

    title: str = ""
    notice: str = ""
    invented: bool = False
    license: str = ""
    citation: str = ""

    def shown_notice(self) -> str:
        """The notice for every page; invented data always carry one."""
        if self.invented and not self.notice:
            return INVENTED_NOTICE
        return self.notice

    def take(self, key: str, value: object, notes: Notes, *, file: str, row: int = 0) -> None:
        """Set one key, or say why not."""
        known = [f.name for f in fields(self)]
        if key not in known:
            Spot(notes, file, row=row).warn(
                "unknown key",
                f"has the key {shown(key)}, which means nothing here.",
                f"Use {', '.join(known)}.{suggestion(key, known)}",
            )
            return
        if key == "invented":
            truth = {"true": True, "1": True, "yes": True, "false": False, "0": False, "no": False}
            word = str(value).strip().casefold()
            if word not in truth:
                _say_value(Spot(notes, file, row, key), value, "true or false")
                return
            self.invented = truth[word]
            return
        if not isinstance(value, str):
            _say_value(Spot(notes, file, row, key), value, "text in quotes")
            return
        setattr(self, key, clean_text(value, Spot(notes, file, row=row, column=key)))


def _say_value(spot: Spot, value: object, wanted: str) -> None:
    spot.error("bad value", f"must be {wanted}, got {shown(str(value)[:200])}.", "Correct it.")


def read_about_file(folder: Path, about: About, notes: Notes, sources: list[SourceFile]) -> None:
    """Read ``about.toml`` beside the tables, if it is there."""
    path = folder / "about.toml"
    if not path.exists():
        return
    if not path.is_file() or path.stat().st_size > limits.ABOUT_BYTES:
        Spot(notes, path.name).error(
            "bad about.toml",
            "is not a small ordinary file.",
            "Keep to a few lines: title, notice, invented, license, citation.",
        )
        return
    raw = path.read_bytes()
    try:
        found = tomllib.loads(raw.decode("utf-8-sig"))
    except (ValueError, RecursionError) as exc:
        reason = (
            f" ({exc})" if isinstance(exc, tomllib.TOMLDecodeError) and len(str(exc)) < 200 else ""
        )
        Spot(notes, path.name).error(
            "broken TOML",
            f"is no valid TOML in UTF-8{reason}.",
            'Write lines such as title = "My catalogue".',
        )
        return
    sources.append(SourceFile(path.name, len(raw), hashlib.sha256(raw).hexdigest()))
    for key, value in found.items():
        about.take(key, value, notes, file=path.name)


def read_about_sheet(table: Table, about: About, notes: Notes) -> None:
    """Read a sheet (or table) of keys and values."""
    if len(table.header) < 2:
        return
    pairs = [(table.header_row, table.header[0], table.header[1])]
    for chunk in table.chunks():
        pairs += zip(chunk.rows.tolist(), chunk.columns[0], chunk.columns[1], strict=True)
    for row, key, value in pairs:
        if row == table.header_row and key.casefold() == "key":
            continue
        about.take(key.strip().casefold(), value, notes, file=table.file, row=row)


def read_land(folder: Path, notes: Notes, sources: list[SourceFile]) -> Path | None:
    """The catalogue's own outline of land, checked for being GeoJSON, if it is there."""
    path = folder / "land.geojson"
    if not path.exists():
        return None
    if not path.is_file():
        Spot(notes, path.name).error("bad land", "is not an ordinary file.", "Remove it.")
        return None
    found = read_json(path, limits.LAND_BYTES, notes, sources)
    if found is None:
        return None
    if found.get("type") not in _GEOJSON:
        Spot(notes, path.name).error(
            "bad land",
            "is no GeoJSON outline.",
            "Give a FeatureCollection of polygons with longitude and latitude.",
        )
        return None
    return path.resolve()
