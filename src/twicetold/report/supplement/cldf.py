"""A CLDF StructureDataset of a run: traditions, motifs with their results, attestations."""

from __future__ import annotations

import hashlib
import json
import re
import unicodedata
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

from twicetold import __version__
from twicetold.catalogue import CellState
from twicetold.errors import TwicetoldError
from twicetold.folders import write_text
from twicetold.report.supplement.table import Column, Table, csv_text
from twicetold.report.supplement.tables import Published

_TERMS = "http://cldf.clld.org/v1.0/terms.rdf#"
METADATA = "StructureDataset-metadata.json"


def write_cldf(published: Published, motifs: Table, traditions: Table, folder: Path) -> None:
    """Write the dataset into a new folder.

    No row for a motif and a tradition means searched and not found; a row with an empty value,
    not searched.

    Raises
    ------
    TwicetoldError
        When restricted records took part: their attestations may not be deposited.
    """
    if published.run.restricted:
        raise TwicetoldError(
            "A CLDF dataset lists attestations one by one, and restricted records took part in "
            "this run, so none can be written. Leave --cldf out."
        )
    folder.mkdir()
    language = _identifiers(traditions.column("tradition_id"))
    parameter = _identifiers(motifs.column("motif_id"))
    languages = [[language[row[0]], row[0], *row[1:]] for row in traditions.rows]
    _write(folder / "languages.csv", ["ID", *_named(traditions.columns)], languages)
    at = motifs.header.index("motif_id")
    parameters = [[parameter[row[at]], *row] for row in motifs.rows]
    _write(folder / "parameters.csv", ["ID", *_named(motifs.columns)], parameters)
    _write(
        folder / "values.csv",
        ["ID", "Language_ID", "Parameter_ID", "Value"],
        _values(published, language, parameter),
    )
    write_text(folder / METADATA, _metadata(published, motifs, traditions))


def _write(path: Path, header: Sequence[str], rows: Iterable[Sequence[str]]) -> None:
    # Numbers never begin as a formula does but for a minus, which is theirs.
    lines = [list(row) for row in rows]
    text = [not all(_plain_number(row[k]) for row in lines) for k in range(len(header))]
    write_text(path, csv_text(header, lines, text))


def _plain_number(cell: str) -> bool:
    return re.fullmatch(r"-?[\d.]+([eE][+-]?\d+)?|", cell) is not None


def _named(columns: Sequence[Column]) -> list[str]:
    special = {"name": "Name", "latitude": "Latitude", "longitude": "Longitude"}
    return [special.get(c.name, c.name) for c in columns]


def _identifiers(ids: Iterable[str]) -> dict[str, str]:
    """Ids as CLDF wants them (letters, figures, hyphen, underscore); plain ones stay."""
    out = {}
    for identity in ids:
        if re.fullmatch(r"[A-Za-z0-9_\-]+", identity):
            out[identity] = identity
            continue
        folded = unicodedata.normalize("NFKD", identity).encode("ascii", "ignore").decode()
        slug = re.sub(r"[^A-Za-z0-9]+", "-", folded).strip("-")[:40] or "id"
        digest = hashlib.sha256(identity.encode()).hexdigest()[:12]
        out[identity] = f"{slug}-{digest}"
    return out


def _values(
    published: Published, language: dict[str, str], parameter: dict[str, str]
) -> Iterable[list[str]]:
    c = published.catalogue
    for m, motif in enumerate(c.motif_ids):
        states = c.states(m)
        for i in (states != CellState.ABSENT).nonzero()[0].tolist():
            value = "attested" if states[i] == CellState.ATTESTED else ""
            own, other = parameter[motif], language[c.tradition_ids[i]]
            yield [f"{own}-{other}", other, own, value]


def _column(name: str, term: str = "", **more: Any) -> dict[str, Any]:
    column: dict[str, Any] = {"name": name, "datatype": "string"}
    if term:
        column["propertyUrl"] = _TERMS + term
    return column | more


def _described(columns: Sequence[Column]) -> list[dict[str, Any]]:
    terms = {"name": "name", "latitude": "latitude", "longitude": "longitude"}
    bounds: dict[str, Any] = {
        "latitude": {"base": "decimal", "minimum": "-90", "maximum": "90"},
        "longitude": {"base": "decimal", "minimum": "-180", "maximum": "180"},
    }
    kinds = {"integer": "integer", "number": "double", "string": "string"}
    return [
        _column(
            name,
            terms.get(c.name, ""),
            datatype=bounds.get(c.name, kinds[c.kind]),
            **{"dc:description": c.meaning},
        )
        for name, c in zip(_named(columns), columns, strict=True)
    ]


def _metadata(published: Published, motifs: Table, traditions: Table) -> str:
    c = published.catalogue
    keys = [
        {
            "columnReference": [column],
            "reference": {"resource": table, "columnReference": ["ID"]},
        }
        for column, table in (
            ("Language_ID", "languages.csv"),
            ("Parameter_ID", "parameters.csv"),
        )
    ]
    values = [
        _column("ID", "id", required=True),
        _column("Language_ID", "languageReference", required=True),
        _column("Parameter_ID", "parameterReference", required=True),
        _column("Value", "value", null=[""]),
    ]
    identity = _column("ID", "id", required=True)
    described: dict[str, Any] = {
        "@context": ["http://www.w3.org/ns/csvw", {"@language": "en"}],
        "dc:conformsTo": _TERMS + "StructureDataset",
        "dc:title": c.title or "Motifs with their results",
        "dc:description": f"{c.notice} Results computed by twicetold {__version__}.".strip(),
        "rdf:ID": "results",
        "rdf:type": "http://www.w3.org/ns/dcat#Distribution",
        "dialect": {"commentPrefix": None},
        "tables": [
            _table("values.csv", "ValueTable", values, foreignKeys=keys),
            _table("languages.csv", "LanguageTable", [identity, *_described(traditions.columns)]),
            _table("parameters.csv", "ParameterTable", [identity, *_described(motifs.columns)]),
        ],
    }
    if c.license:
        described["dc:license"] = c.license
    if c.citation:
        described["dc:bibliographicCitation"] = c.citation
    return json.dumps(described, ensure_ascii=False, indent=1) + "\n"


def _table(url: str, term: str, columns: list[dict[str, Any]], **schema: Any) -> dict[str, Any]:
    return {
        "url": url,
        "dc:conformsTo": _TERMS + term,
        "tableSchema": {"columns": columns, "primaryKey": ["ID"], **schema},
    }
