"""``datapackage.json`` (Data Package, version 2) for the tables of a deposit."""

from __future__ import annotations

import hashlib
import json
import re
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from twicetold import __version__
from twicetold.report.supplement.table import Table
from twicetold.report.supplement.tables import Published

PROFILE = "https://datapackage.org/profiles/2.0/datapackage.json"
TABLE_PROFILE = "https://datapackage.org/profiles/2.0/tableschema.json"


def descriptor(published: Published, tables: Sequence[Table], folder: Path) -> str:
    """Give the descriptor of the tables, which stand in ``folder`` already."""
    c = published.catalogue
    resources = [_resource(t, folder / f"{t.name}.csv") for t in tables]
    package: dict[str, Any] = {
        "$schema": PROFILE,
        "name": _slug(c.title) or "twicetold-deposit",
        "title": f"Supplementary tables: {c.title or 'a catalogue of motifs'}",
        "description": (
            "Motif by motif, whether geography favours contact spread, parallel emergence or "
            "shared ancestry. Written by twicetold " + __version__ + "; `twicetold verify` "
            "computes the tables again. Text cells that a spreadsheet could take for a formula "
            "have one apostrophe in front. " + c.notice
        ).strip(),
        "keywords": ["folklore", "motifs", "cultural evolution", "spatial statistics"],
        "resources": resources,
    }
    if c.license:
        package["licenses"] = [_licence(c.license)]
    if c.citation:
        package["sources"] = [{"title": c.citation}]
    return json.dumps(package, ensure_ascii=False, indent=1) + "\n"


def _licence(said: str) -> dict[str, str]:
    """The catalogue's licence; a name only where it has the form of one."""
    if re.match(r"https?://\S+$", said):
        return {"path": said}
    name = said if re.fullmatch(r"[-A-Za-z0-9._]+", said) else "other"
    return {"name": name} if name == said else {"name": name, "title": said}


def _slug(text: str) -> str:
    return re.sub(r"[^a-z0-9]+", "-", text.lower()).strip("-")[:60].strip("-")


def _resource(table: Table, path: Path) -> dict[str, Any]:
    raw = path.read_bytes()
    schema: dict[str, Any] = {
        "$schema": TABLE_PROFILE,
        "fields": [
            {"name": c.name, "type": c.kind, "description": c.meaning} for c in table.columns
        ],
        "missingValues": [""],
    }
    if table.key and _unique(table):
        schema["primaryKey"] = list(table.key)
    if table.references:
        schema["foreignKeys"] = [
            {"fields": [own], "reference": {"resource": _name(other), "fields": [theirs]}}
            for own, other, theirs in table.references
        ]
    return {
        "name": _name(table.name),
        "type": "table",
        "title": table.title,
        "path": path.name,
        "scheme": "file",
        "format": "csv",
        "mediatype": "text/csv",
        "encoding": "utf-8",
        "bytes": len(raw),
        "hash": f"sha256:{hashlib.sha256(raw).hexdigest()}",
        "schema": schema,
    }


def _unique(table: Table) -> bool:
    names = list(zip(*map(table.column, table.key), strict=True))
    return len(set(names)) == len(names)


def _name(table: str) -> str:
    return re.sub(r"[^a-z0-9._-]+", "-", table.lower())
