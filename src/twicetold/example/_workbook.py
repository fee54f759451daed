"""The example as one .xlsx workbook, equal to the byte on every machine.

Written by hand (ECMA-376, Office Open XML: inline strings, no styles, stored without compression)
because spreadsheet libraries stamp the time, and compressors differ between machines.
"""

from __future__ import annotations

import io
import zipfile
from collections.abc import Mapping, Sequence
from xml.sax.saxutils import escape, quoteattr

from twicetold.example._tables import Archipelago, Row, sheets

_HEAD = '<?xml version="1.0" encoding="UTF-8" standalone="yes"?>\n'
_MAIN = "http://schemas.openxmlformats.org/spreadsheetml/2006/main"
_OFFICE = "http://schemas.openxmlformats.org/officeDocument/2006/relationships"
_PACKAGE = "http://schemas.openxmlformats.org/package/2006"
_SHEET_TYPE = "application/vnd.openxmlformats-officedocument.spreadsheetml"
_WHEN = (1980, 1, 1, 0, 0, 0)


def workbook_bytes(world: Archipelago) -> bytes:
    """Write the tables as sheets, with a first sheet that says what this is."""
    words = world.words
    about: list[Row] = [
        ("key", "value"),
        ("title", words["title"]),
        ("notice", words["notice"]),
        ("invented", "true"),
        ("license", words["license"]),
    ]
    return _zipped(_parts({**sheets(world), "about": about}))


def _parts(tables: Mapping[str, Sequence[Row]]) -> dict[str, str]:
    numbers = range(1, len(tables) + 1)
    overrides = "".join(
        f'<Override PartName="/xl/worksheets/sheet{n}.xml" '
        f'ContentType="{_SHEET_TYPE}.worksheet+xml"/>'
        for n in numbers
    )
    names = "".join(
        f'<sheet name={quoteattr(name)} sheetId="{n}" r:id="rId{n}"/>'
        for n, name in zip(numbers, tables, strict=True)
    )
    links = "".join(
        f'<Relationship Id="rId{n}" Type="{_OFFICE}/worksheet" Target="worksheets/sheet{n}.xml"/>'
        for n in numbers
    )
    parts = {
        "[Content_Types].xml": f'{_HEAD}<Types xmlns="{_PACKAGE}/content-types">'
        '<Default Extension="rels" '
        'ContentType="application/vnd.openxmlformats-package.relationships+xml"/>'
        '<Default Extension="xml" ContentType="application/xml"/>'
        f'<Override PartName="/xl/workbook.xml" ContentType="{_SHEET_TYPE}.sheet.main+xml"/>'
        f"{overrides}</Types>",
        "_rels/.rels": f'{_HEAD}<Relationships xmlns="{_PACKAGE}/relationships">'
        f'<Relationship Id="rId1" Type="{_OFFICE}/officeDocument" Target="xl/workbook.xml"/>'
        "</Relationships>",
        "xl/workbook.xml": f'{_HEAD}<workbook xmlns="{_MAIN}" xmlns:r="{_OFFICE}">'
        f"<sheets>{names}</sheets></workbook>",
        "xl/_rels/workbook.xml.rels": f'{_HEAD}<Relationships xmlns="{_PACKAGE}/relationships">'
        f"{links}</Relationships>",
    }
    for n, rows in zip(numbers, tables.values(), strict=True):
        parts[f"xl/worksheets/sheet{n}.xml"] = _sheet(rows)
    return parts


def _sheet(rows: Sequence[Row]) -> str:
    body = "".join(
        f'<row r="{r}">{"".join(_cell(chr(65 + c) + str(r), v) for c, v in enumerate(row))}</row>'
        for r, row in enumerate(rows, start=1)
    )
    return f'{_HEAD}<worksheet xmlns="{_MAIN}"><sheetData>{body}</sheetData></worksheet>'


def _cell(place: str, value: str | int | float) -> str:
    if value == "":
        return ""
    if isinstance(value, str):
        return f'<c r="{place}" t="inlineStr"><is><t>{escape(value)}</t></is></c>'
    return f'<c r="{place}"><v>{value!r}</v></c>'


def _zipped(parts: Mapping[str, str]) -> bytes:
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_STORED) as archive:
        for name, text in parts.items():
            entry = zipfile.ZipInfo(name, _WHEN)
            entry.create_system = 3
            entry.external_attr = 0o644 << 16
            archive.writestr(entry, text.encode())
    return out.getvalue()
