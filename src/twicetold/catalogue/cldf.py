"""CLDF StructureDatasets: tables found by ``dc:conformsTo``, columns by ``propertyUrl``.

Standard: Forkel et al. 2018, Cross-Linguistic Data Formats (Scientific Data 5:180205), which builds
on the W3C Recommendations "Model for Tabular Data and Metadata on the Web" and "Metadata
Vocabulary for Tabular Data" (2015).
"""

from __future__ import annotations

import json
import zipfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO, Final

from twicetold.catalogue import limits
from twicetold.catalogue.model import SourceFile
from twicetold.catalogue.notes import Notes, Spot, shown
from twicetold.catalogue.tables import Dialect, Table, open_table

_ENCODINGS: Final = {
    "utf-8": "utf-8",
    "utf8": "utf-8",
    "utf-8-sig": "utf-8",
    "us-ascii": "utf-8",
    "ascii": "utf-8",
    "iso-8859-1": "latin-1",
    "latin-1": "latin-1",
    "latin1": "latin-1",
    "windows-1252": "cp1252",
    "cp1252": "cp1252",
}
_MOST_TABLES: Final = 500

Json = dict[str, Any]


@dataclass
class CldfTable:
    """One table of the dataset with its columns by property (last part of the ``propertyUrl``)."""

    table: Table
    properties: dict[str, int]

    def named(self, *names: str) -> int | None:
        """First column with one of these names, in any case."""
        folded = {h.casefold(): k for k, h in reversed(list(enumerate(self.table.header)))}
        return next((folded[n] for n in names if n in folded), None)

    def first_filled(self, *places: int | None) -> int | None:
        """First of these columns that has anything in it."""
        filled: set[int] = set()
        for chunk in self.table.chunks():
            filled.update(k for k, cells in enumerate(chunk.columns) if any(set(cells)))
        return next((k for k in places if k is not None and k in filled), None)


def family_label(text: str) -> str:
    """A family's name without a trailing glottocode in brackets."""
    head, bracket, tail = text.rpartition(" [")
    code = tail.removesuffix("]")
    if bracket and tail.endswith("]") and len(code) == 8 and code[4:].isdigit():
        return head.strip()
    return text


@dataclass
class CldfDataset:
    """Tables of a dataset by their component (``ValueTable`` ...), and what its metadata say."""

    name: str
    title: str
    license: str
    citation: str
    tables: dict[str, CldfTable]


def is_cldf_metadata(path: Path) -> bool:
    """Whether a JSON file seems to describe a CLDF dataset (looked at, not judged)."""
    try:
        if path.stat().st_size > limits.METADATA_BYTES:
            return False
        return b"cldf.clld.org" in path.read_bytes()
    except OSError:
        return False


def open_cldf(path: Path, notes: Notes, sources: list[SourceFile]) -> CldfDataset | None:
    """Open the dataset that a metadata file describes; None, with the reasons, when it cannot."""
    metadata = read_json(path, limits.METADATA_BYTES, notes, sources)
    if metadata is None:
        return None
    entries = metadata.get("tables")
    if not isinstance(entries, list) or not entries or len(entries) > _MOST_TABLES:
        Spot(notes, path.name).error(
            "not CLDF", "lists no tables.", "Give the metadata file of a CLDF StructureDataset."
        )
        return None
    module = str(metadata.get("dc:conformsTo", "")).rpartition("#")[2]
    if module != "StructureDataset":
        Spot(notes, path.name).warn(
            "other CLDF module",
            f"describes {shown(module or 'no module')}, not a StructureDataset; its values are "
            "read all the same.",
            "Check that each parameter is a motif.",
        )
    tables: dict[str, CldfTable] = {}
    for entry in entries:
        component = _component(entry)
        if component not in ("ValueTable", "LanguageTable", "ParameterTable", "CodeTable"):
            continue
        if component in tables:
            Spot(notes, path.name).error(
                "repeated table", f"lists two tables of the kind {component}.", "Keep one."
            )
            continue
        opened = _open(entry, metadata, path.parent, notes, sources)
        if opened is not None:
            tables[component] = opened
    for component in ("ValueTable", "LanguageTable"):
        if component not in tables and not notes.broken:
            Spot(notes, path.name).error(
                "missing table",
                f"lists no {component}.",
                "The dataset needs values and languages (with coordinates).",
            )
    if notes.broken:
        return None
    return CldfDataset(
        path.name,
        _words(metadata, "dc:title"),
        _words(metadata, "dc:license"),
        _words(metadata, "dc:bibliographicCitation"),
        tables,
    )


def read_json(path: Path, most: int, notes: Notes, sources: list[SourceFile]) -> Json | None:
    """A JSON object from a file of limited size; None, with the reason, when it is none."""
    import hashlib

    size = path.stat().st_size
    if size > most:
        Spot(notes, path.name).error(
            "too large",
            f"is larger than {most // limits.MEBIBYTE} MiB.",
            "Check that it is the right file.",
        )
        return None
    raw = path.read_bytes()
    sources.append(SourceFile(path.name, len(raw), hashlib.sha256(raw).hexdigest()))
    try:
        found = json.loads(raw.decode("utf-8-sig"))
    except UnicodeDecodeError as exc:
        Spot(notes, path.name).error(
            "not UTF-8",
            f"is not UTF-8: byte {exc.start + 1:,} of the file is 0x{raw[exc.start]:02X}.",
            "Save it with the encoding UTF-8.",
        )
        return None
    except json.JSONDecodeError as exc:
        Spot(notes, path.name, row=exc.lineno).error(
            "broken JSON",
            f"is no valid JSON (line {exc.lineno}, character {exc.colno}).",
            "Check it with a JSON validator.",
        )
        return None
    except (RecursionError, ValueError):
        Spot(notes, path.name).error(
            "broken JSON",
            "is nested too deeply or holds a number too long.",
            "Check that it is the right file.",
        )
        return None
    if not isinstance(found, dict):
        Spot(notes, path.name).error(
            "broken JSON", "holds no JSON object.", "Check that it is the right file."
        )
        return None
    return found


def _component(entry: object) -> str:
    if not isinstance(entry, dict):
        return ""
    return str(entry.get("dc:conformsTo", "")).rpartition("#")[2]


def _words(metadata: Json, key: str) -> str:
    value = metadata.get(key, "")
    if isinstance(value, dict):
        value = value.get("@value", "")
    if not isinstance(value, str):
        return ""
    return " ".join("".join(c if c.isprintable() else " " for c in value[:5_000]).split())


def _open(
    entry: Json, metadata: Json, folder: Path, notes: Notes, sources: list[SourceFile]
) -> CldfTable | None:
    path = _inside(entry.get("url"), folder, notes)
    if path is None:
        return None
    dialect = _dialect(entry, metadata, path.name, notes)
    if dialect is None:
        return None
    schema = entry.get("tableSchema")
    schema = schema if isinstance(schema, dict) else {}
    listed = schema.get("columns")
    described = [c for c in listed if isinstance(c, dict)] if isinstance(listed, list) else []
    described = [c for c in described if not c.get("virtual")]
    names = tuple(_column_name(c, k) for k, c in enumerate(described))
    opener = _opener(path, notes)
    if opener is None:
        return None
    table = open_table(opener, path.name, notes, dialect=dialect, names=names, sources=sources)
    if table is None:
        return None
    return _bind(table, described, names, (schema, entry, metadata))


def _bind(
    table: Table, described: list[Json], names: tuple[str, ...], outer: tuple[Json, ...]
) -> CldfTable:
    """Match described columns with those in the file, by name, and keep their null marks."""
    places = {name: k for k, name in reversed(list(enumerate(table.header)))}
    properties: dict[str, int] = {}
    for name, column in zip(names, described, strict=True):
        at = places.get(name)
        if at is None:
            continue
        url = column.get("propertyUrl")
        if isinstance(url, str) and "cldf.clld.org" in url:
            properties.setdefault(url.rpartition("#")[2], at)
        null = _inherited("null", (column, *outer), "")
        marks = null if isinstance(null, list) else [null]
        table.nulls[at] = frozenset(m for m in marks if isinstance(m, str))
        separator = _inherited("separator", (column, *outer), None)
        if isinstance(separator, str) and separator:
            table.separators[at] = separator
    return CldfTable(table, properties)


def _inherited(key: str, levels: tuple[Json, ...], default: object) -> object:
    return next((level[key] for level in levels if key in level), default)


def _column_name(column: Json, k: int) -> str:
    name = column.get("name")
    if isinstance(name, str) and name:
        return name.strip()
    titles = column.get("titles")
    if isinstance(titles, Mapping):
        titles = next(iter(titles.values()), None)
    if isinstance(titles, list):
        titles = next(iter(titles), None)
    return titles.strip() if isinstance(titles, str) else f"_col.{k + 1}"


def _inside(url: object, folder: Path, notes: Notes) -> Path | None:
    """The file a table's ``url`` names, if it lies inside the dataset's own folder."""
    if not isinstance(url, str) or not url or not url.isprintable() or len(url) > 1_000:
        Spot(notes, "CLDF metadata").error(
            "bad table url",
            "a table of the dataset has no usable url.",
            "Give the file name of the table, inside the dataset's folder.",
        )
        return None
    parts = url.replace("\\", "/").split("/")
    if "://" in url or url.startswith(("/", "~")) or ".." in parts or ":" in parts[0]:
        Spot(notes, "CLDF metadata").error(
            "table outside the dataset",
            f"the table url {shown(url)} leads out of the dataset's folder.",
            "Put the table beside the metadata file; nothing is fetched from elsewhere.",
        )
        return None
    root = folder.resolve()
    for name in (url, url + ".zip"):
        try:
            path = (folder / name).resolve()
            there = path.is_file()
        except (OSError, RuntimeError, ValueError):  # a name no file can have
            continue
        if not path.is_relative_to(root):
            Spot(notes, "CLDF metadata").error(
                "table outside the dataset",
                f"the table {shown(url)} is a link that leads out of the dataset's folder.",
                "Put the file itself beside the metadata file.",
            )
            return None
        if there:
            return path
    Spot(notes, "CLDF metadata").error(
        "missing table",
        f"the file {shown(url)} is missing.",
        "Put it where the metadata say, or correct the url.",
    )
    return None


def _opener(path: Path, notes: Notes) -> Any:
    """How to open a table, plain or as the one member of a .zip."""
    if path.suffix.lower() != ".zip":
        return lambda: path.open("rb")
    try:
        with zipfile.ZipFile(path) as archive:
            members = [m for m in archive.infolist() if not m.is_dir()]
    except Exception:  # whatever a damaged archive raises
        members = []
    if len(members) != 1 or members[0].flag_bits & 1:
        Spot(notes, path.name).error(
            "bad archive",
            "is not a .zip with one readable table.",
            "Unpack it, or pack the table alone.",
        )
        return None
    if members[0].file_size > limits.TABLE_BYTES:
        Spot(notes, path.name).error(
            "too large",
            f"would unpack to more than {limits.TABLE_BYTES // limits.MEBIBYTE:,} MiB.",
            "Split the dataset.",
        )
        return None

    def opener() -> BinaryIO:
        return zipfile.ZipFile(path).open(members[0])  # type: ignore[return-value]

    return opener


def _dialect(entry: Json, metadata: Json, file: str, notes: Notes) -> Dialect | None:
    own = entry.get("dialect", metadata.get("dialect"))
    given: Json = own if isinstance(own, dict) else {}
    encoding = _ENCODINGS.get(str(given.get("encoding", "utf-8")).lower())
    delimiter, quote = given.get("delimiter", ","), given.get("quoteChar", '"')
    comment = given.get("commentPrefix") or ""
    header_rows = given.get("headerRowCount", 1 if given.get("header", True) else 0)
    skip = given.get("skipRows", 0)
    quote = "" if quote is None else quote
    sound = (
        encoding is not None
        and _is_one_sign(delimiter)
        and (quote == "" or _is_one_sign(quote))
        and isinstance(comment, str)
        and all(isinstance(x, int) and 0 <= x <= 1_000 for x in (header_rows, skip))
    )
    if not sound or encoding is None:
        Spot(notes, file).error(
            "odd dialect",
            "is described with a dialect that cannot be read.",
            "Use one sign as delimiter and quoteChar, and UTF-8 as encoding.",
        )
        return None
    return Dialect(
        delimiter=delimiter,
        quote=quote,
        double_quote=bool(given.get("doubleQuote", True)),
        encoding=encoding,
        comment=comment,
        skip_rows=int(skip),
        header_rows=int(header_rows),
        skip_space=bool(given.get("skipInitialSpace", False)),
    )


def _is_one_sign(text: object) -> bool:
    return isinstance(text, str) and len(text) == 1 and text not in "\r\n\x00"
