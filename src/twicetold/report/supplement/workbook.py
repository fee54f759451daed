"""All tables of a deposit in one workbook, the same bytes every time; no cell can run."""

from __future__ import annotations

import io
import re
import zipfile
from collections.abc import Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from twicetold.report.supplement.table import NUMERIC, Table, is_formula_like

#: Longest text a cell of a workbook holds, and most rows of a sheet (common limits of .xlsx).
CELL_CHARS = 32_767
SHEET_ROWS = 1_048_576
_MOMENT = datetime(1980, 1, 1, tzinfo=UTC)
#: Characters XML cannot hold, and escapes that a spreadsheet would turn into other characters.
_BROKEN = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\ud800-\udfff\ufffe\uffff]")
_ESCAPE = re.compile(r"_(x[0-9A-Fa-f]{4}_)")


def write_workbook(tables: Sequence[Table], path: Path, *, title: str) -> None:
    """Write the tables as sheets of one workbook.

    Text that looks like a formula is stored as text and marked as such, so that it does not run
    when its cell is opened and closed either.
    """
    from openpyxl import Workbook

    book = Workbook(write_only=True)
    book.properties.creator = "twicetold"
    book.properties.title = _clean(title)
    book.properties.created = book.properties.modified = _MOMENT.replace(tzinfo=None)
    for table in tables:
        _sheet(book.create_sheet(table.name[:31]), table)
    raw = io.BytesIO()
    book.save(raw)
    path.write_bytes(_steady(raw.getvalue()))


def _sheet(sheet: Any, table: Table) -> None:
    from openpyxl.cell import WriteOnlyCell
    from openpyxl.styles import Font
    from openpyxl.utils import get_column_letter

    bold = Font(bold=True)
    sheet.freeze_panes = "A2"
    for k, column in enumerate(table.columns, 1):
        longest = max([len(column.name), *(len(row[k - 1]) for row in table.rows[:200])])
        sheet.column_dimensions[get_column_letter(k)].width = min(max(longest, 8), 48) + 2
    head = []
    for column in table.columns:
        cell = WriteOnlyCell(sheet, value=column.name)
        cell.font = bold
        head.append(cell)
    sheet.append(head)
    kinds = [c.kind for c in table.columns]
    for row in table.rows[: SHEET_ROWS - 1]:
        sheet.append([_cell(sheet, text, kind) for text, kind in zip(row, kinds, strict=True)])


def _cell(sheet: Any, text: str, kind: str) -> Any:
    from openpyxl.cell import WriteOnlyCell

    if text == "":
        return None
    if kind in NUMERIC and not text.endswith("INF"):  # a workbook has no infinite numbers
        return int(text) if kind == "integer" else float(text)
    clean = _clean(text)
    cell = WriteOnlyCell(sheet, value="")
    # Set past the guessing of types: a text that begins with = is no formula here.
    cell._value = clean
    cell.data_type = "s"
    if is_formula_like(text):
        cell.quotePrefix = True
    return cell


def _clean(text: str) -> str:
    return _ESCAPE.sub(r"_x005F_\1", _BROKEN.sub("\ufffd", text))[:CELL_CHARS]


def _steady(raw: bytes) -> bytes:
    """Pack a workbook again with fixed times, in a fixed order."""
    out = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(raw)) as old, zipfile.ZipFile(out, "w") as new:
        for name in sorted(old.namelist()):
            content = old.read(name)
            if name == "docProps/core.xml":
                content = re.sub(
                    rb"(<dcterms:(?:created|modified)[^>]*>)[^<]*",
                    rb"\g<1>" + _MOMENT.strftime("%Y-%m-%dT%H:%M:%SZ").encode(),
                    content,
                )
            entry = zipfile.ZipInfo(name, date_time=(1980, 1, 1, 0, 0, 0))
            entry.compress_type = zipfile.ZIP_DEFLATED
            entry.create_system = 3
            entry.external_attr = 0o644 << 16
            new.writestr(entry, content, compresslevel=6)
    return out.getvalue()
