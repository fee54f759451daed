"""The example as a CLDF StructureDataset (Forkel et al. 2018, CLDF 1.x), presence only.

A record is a row of the value table; a row with a null value says that nobody asked there; no row
means searched and not found.
"""

from __future__ import annotations

import json
from typing import Any

from twicetold.example._tables import Archipelago, Row, about, csv_bytes, sheets, source_key

_TERMS = "http://cldf.clld.org/v1.0/terms.rdf#"
METADATA = "StructureDataset-metadata.json"


def cldf_files(world: Archipelago) -> dict[str, bytes]:
    """Every file of the dataset, by name."""
    tables = sheets(world)
    return {
        METADATA: (json.dumps(_metadata(world), indent=1, ensure_ascii=False) + "\n").encode(),
        "languages.csv": csv_bytes([_language_header(), *tables["traditions"][1:]]),
        "parameters.csv": csv_bytes([("ID", "Name", "Category"), *tables["motifs"][1:]]),
        "values.csv": csv_bytes(_values(world)),
        "sources.bib": _sources(world).encode(),
        "about.toml": about(world).encode(),
        "land.geojson": world.land.encode(),
    }


def _language_header() -> Row:
    return (
        "ID", "Name", "Latitude", "Longitude", "Family", "Branch", "Region", "effort",
        "reef_share", "altitude",
    )  # fmt: skip


def _values(world: Archipelago) -> list[Row]:
    rows: list[Row] = [("ID", "Language_ID", "Parameter_ID", "Value", "Source")]
    regions = world.words["regions"]
    for k, motif in enumerate(world.motifs):
        recorded = set(motif.recorded)
        for i, asked in enumerate(motif.searched):
            if asked and i not in recorded:
                continue
            tradition, parameter = world.tradition_id(i), world.motif_id(k)
            source = source_key(regions[world.peoples.sites[i].region]["name"]) if asked else ""
            value = "attested" if asked else "?"
            rows.append((f"{parameter}-{tradition}", tradition, parameter, value, source))
    return rows


def _sources(world: Archipelago) -> str:
    entries = [
        f"@misc{{{source_key(group['name'])},\n"
        f"  title = {{Notebook of {group['name']} (invented)}},\n"
        "  note = {Invented source of invented demonstration data}\n}\n"
        for group in world.words["regions"]
    ]
    return "\n".join(entries)


def _column(name: str, term: str = "", **more: Any) -> dict[str, Any]:
    column: dict[str, Any] = {"name": name, "datatype": "string"}
    if term:
        column["propertyUrl"] = _TERMS + term
    return column | more


def _reference(column: str, table: str) -> dict[str, Any]:
    return {
        "columnReference": [column],
        "reference": {"resource": table, "columnReference": ["ID"]},
    }


def _metadata(world: Archipelago) -> dict[str, Any]:
    return {
        "@context": ["http://www.w3.org/ns/csvw", {"@language": "en"}],
        "dc:conformsTo": _TERMS + "StructureDataset",
        "dc:title": world.words["title"],
        "dc:description": world.words["notice"],
        "dc:license": "https://creativecommons.org/publicdomain/zero/1.0/",
        "dc:source": "sources.bib",
        "rdf:ID": "archipelago",
        "rdf:type": "http://www.w3.org/ns/dcat#Distribution",
        "dialect": {"commentPrefix": None},
        "tables": [_value_table(), _language_table(), _parameter_table()],
    }


def _table(url: str, term: str, columns: list[dict[str, Any]], **schema: Any) -> dict[str, Any]:
    return {
        "url": url,
        "dc:conformsTo": _TERMS + term,
        "tableSchema": {"columns": columns, "primaryKey": ["ID"], **schema},
    }


def _value_table() -> dict[str, Any]:
    columns = [
        _column("ID", "id", required=True),
        _column("Language_ID", "languageReference", required=True),
        _column("Parameter_ID", "parameterReference", required=True),
        _column("Value", "value", null=["?", ""]),
        _column("Source", "source", separator=";"),
    ]
    keys = [
        _reference("Language_ID", "languages.csv"),
        _reference("Parameter_ID", "parameters.csv"),
    ]
    return _table("values.csv", "ValueTable", columns, foreignKeys=keys)


def _language_table() -> dict[str, Any]:
    latitude = {"base": "decimal", "minimum": -90, "maximum": 90}
    longitude = {"base": "decimal", "minimum": -180, "maximum": 180}
    effort = {"base": "integer", "minimum": 1}
    columns = [
        _column("ID", "id", required=True),
        _column("Name", "name"),
        _column("Latitude", "latitude", datatype=latitude),
        _column("Longitude", "longitude", datatype=longitude),
        _column("Family"),
        _column("Branch"),
        _column("Region"),
        _column("effort", datatype=effort, **{"dc:description": "Texts collected"}),
        _column(
            "reef_share",
            datatype="decimal",
            **{"dc:description": "Share of the sea around that is shallow, 0 to 1"},
        ),
        _column("altitude", datatype="integer", **{"dc:description": "Metres above the sea"}),
    ]
    return _table("languages.csv", "LanguageTable", columns)


def _parameter_table() -> dict[str, Any]:
    columns = [_column("ID", "id", required=True), _column("Name", "name"), _column("Category")]
    return _table("parameters.csv", "ParameterTable", columns)
