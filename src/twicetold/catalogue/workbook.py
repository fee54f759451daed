"""Sheets of one .xlsx workbook as tables, after a look at what the archive would unpack to."""

from __future__ import annotations

import datetime as dt
import hashlib
import re
import warnings
import zipfile
from collections.abc import Callable, Generator, Iterator
from contextlib import ExitStack
from functools import partial
from itertools import islice
from pathlib import Path
from typing import Any

from twicetold.catalogue import limits
from twicetold.catalogue.model import SourceFile
from twicetold.catalogue.notes import Notes, Spot, shown
from twicetold.catalogue.tables import (
    Table,
    TableStoppedError,
    check_header,
    first_filled_row,
)

_ENCODING = re.compile(rb"""^<\?xml[^>]{0,200}encoding\s*=\s*["']([A-Za-z0-9._-]+)["']""")
_HARMLESS_ENCODINGS = (b"utf-8", b"us-ascii", b"ascii", b"iso-8859-1", b"windows-1252")
_FORBIDDEN = (b"<!doctype", b"<!entity")
_OVERLAP = 16


def workbook_tables(
    path: Path, notes: Notes, sources: list[SourceFile], stack: ExitStack
) -> dict[str, Table] | None:
    """Tables of a workbook by sheet name in lower case; None, with the reason, when unsafe.

    The workbook stays open until the ``stack`` is left.
    """
    if not _is_safe(path, notes):
        return None
    import openpyxl

    digest = hashlib.sha256()
    with path.open("rb") as handle:
        while block := handle.read(limits.MEBIBYTE):
            digest.update(block)
    sources.append(SourceFile(path.name, path.stat().st_size, digest.hexdigest()))
    handle = stack.enter_context(path.open("rb"))
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # styles and extensions that carry no data
            book = openpyxl.load_workbook(handle, read_only=True, data_only=False, keep_links=False)
    except Exception:  # whatever damaged XML makes the library raise
        _say_damaged(path.name, notes)
        return None
    stack.callback(book.close)
    tables: dict[str, Table] = {}
    for sheet in book.worksheets:
        key = sheet.title.strip().casefold()
        if key in tables:
            Spot(notes, path.name).error(
                "repeated sheet",
                f"two sheets are called {shown(sheet.title)}.",
                "Rename or remove one of them.",
            )
            continue
        table = _sheet_table(sheet, f"{path.name}[{sheet.title[:60]}]", notes)
        if table is not None:
            tables[key] = table
    return tables


def _sheet_table(sheet: Any, file: str, notes: Notes) -> Table | None:
    reset = getattr(sheet, "reset_dimensions", None)
    if reset is not None:
        reset()  # the size a sheet claims may be false

    records = partial(_rows, sheet, file, notes)
    found = first_filled_row(records())
    if found is None or not check_header(found[1], file, found[0], notes):
        return None
    row, header = found
    return Table(file, header, row, partial(_body, records, row, len(header)), notes)


def _body(
    records: Callable[[], Iterator[list[str]]], start: int, width: int
) -> Iterator[list[str]]:
    """Rows below the header, padded to its width (a sheet does not store trailing blanks)."""
    for cells in islice(records(), start, None):
        yield cells + [""] * (width - len(cells)) if cells else cells


def _rows(sheet: Any, file: str, notes: Notes) -> Generator[list[str], None, None]:
    """Rows as text without trailing blanks, in the order of their numbers."""
    visited = 0
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for number, values in enumerate(_cells(sheet, file, notes), start=1):
            visited += len(values) + 1
            if number > limits.SHEET_ROWS or visited > limits.SHEET_CELLS:
                Spot(notes, file).error(
                    "sheet too large",
                    "has more rows or cells than a sheet may hold.",
                    "Remove far-off stray cells, or give the tables as CSV.",
                )
                raise TableStoppedError
            end = len(values)
            while end and (values[end - 1] is None or values[end - 1] == ""):
                end -= 1
            yield [_text(value) for value in values[:end]]


def _cells(sheet: Any, file: str, notes: Notes) -> Iterator[tuple[Any, ...]]:
    """The library's rows; whatever damaged XML makes it raise ends the table."""
    try:
        yield from sheet.iter_rows(values_only=True)
    except Exception as exc:
        _say_damaged(file, notes)
        raise TableStoppedError from exc


def _say_damaged(file: str, notes: Notes) -> None:
    Spot(notes, file).error(
        "damaged workbook",
        "is damaged: its parts cannot be understood.",
        "Save it again as .xlsx in the spreadsheet, or give the tables as CSV.",
    )


def _text(value: object) -> str:
    """A cell as the same text that a CSV export would hold."""
    if value is None:
        return ""
    if isinstance(value, str):
        return value
    if isinstance(value, bool):
        return "TRUE" if value else "FALSE"
    if isinstance(value, float):
        return str(int(value)) if value.is_integer() and abs(value) < 1e15 else repr(value)
    if isinstance(value, dt.datetime | dt.date | dt.time):
        return value.isoformat()
    return str(getattr(value, "text", value))


def _is_safe(path: Path, notes: Notes) -> bool:
    def refuse(kind: str, what: str, remedy: str) -> bool:
        Spot(notes, path.name).error(kind, what, remedy)
        return False

    if path.stat().st_size > limits.WORKBOOK_BYTES:
        most = limits.WORKBOOK_BYTES // limits.MEBIBYTE
        return refuse("too large", f"is larger than {most} MiB.", "Give the tables as CSV.")
    again = "Save it again as .xlsx in the spreadsheet, or give the tables as CSV."
    try:
        archive = zipfile.ZipFile(path)
    except (zipfile.BadZipFile, OSError, ValueError, NotImplementedError, EOFError):
        return refuse("not a workbook", "is not an .xlsx workbook.", again)
    with archive:
        parts = archive.infolist()
        unpacked = sum(part.file_size for part in parts)
        if len(parts) > limits.WORKBOOK_PARTS or unpacked > limits.WORKBOOK_UNPACKED:
            most = limits.WORKBOOK_UNPACKED // limits.MEBIBYTE
            return refuse(
                "unpacks too large",
                f"would unpack to {unpacked / limits.MEBIBYTE:,.0f} MiB in {len(parts):,} parts, "
                f"more than {most:,} MiB or {limits.WORKBOOK_PARTS:,} parts.",
                "Give the tables as CSV.",
            )
        for part in parts:
            ratio = part.file_size / max(1, part.compress_size)
            if part.file_size > limits.WORKBOOK_RATIO_FROM and ratio > limits.WORKBOOK_RATIO:
                return refuse(
                    "unpacks too large",
                    f"holds a part that unpacks to {ratio:,.0f} times its size.",
                    "Give the tables as CSV.",
                )
            if part.flag_bits & 1:
                return refuse("encrypted", "is protected by a password.", again)
        return _plain_xml(archive, parts, refuse)


def _plain_xml(archive: zipfile.ZipFile, parts: list[zipfile.ZipInfo], refuse: Any) -> bool:
    """Whether no XML part declares entities or a document type, in an encoding we can read."""
    for part in parts:
        if not part.filename.lower().endswith((".xml", ".rels", ".vml")):
            continue
        tail = b""
        try:
            with archive.open(part) as handle:
                while block := handle.read(limits.MEBIBYTE):
                    if not tail:
                        named = _ENCODING.match(block.lstrip(b"\xef\xbb\xbf"))
                        odd = named and named[1].lower() not in _HARMLESS_ENCODINGS
                        if odd or b"\x00" in block[:64]:
                            return bool(
                                refuse(
                                    "odd encoding",
                                    "holds XML in an encoding other than UTF-8.",
                                    "Save it again as .xlsx, or give the tables as CSV.",
                                )
                            )
                    window = (tail + block).lower()
                    if any(word in window for word in _FORBIDDEN):
                        return bool(
                            refuse(
                                "XML entities",
                                "declares a document type or entities, which no workbook needs.",
                                "Do not open it elsewhere either; ask for a clean copy.",
                            )
                        )
                    tail = block[-_OVERLAP:]
        except Exception:  # whatever a damaged archive makes its decoder raise
            return bool(
                refuse(
                    "damaged workbook",
                    "is damaged: a part cannot be unpacked.",
                    "Save it again as .xlsx, or give the tables as CSV.",
                )
            )
    return True
