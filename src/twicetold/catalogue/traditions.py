"""The traditions table: who stands where, and which rows may enter."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np

from twicetold.catalogue.cells import (
    MISSING,
    as_number,
    check_number,
    clean_id,
    clean_text,
    optional_text,
    warn_formula,
)
from twicetold.catalogue.columns import Columns, misspelt_access, row_access, unnamed_access
from twicetold.catalogue.model import FloatArray
from twicetold.catalogue.notes import Notes, shown, suggestion
from twicetold.catalogue.rules import CatalogueRules
from twicetold.catalogue.tables import Table

HIDDEN = -2
"""Code of an id that exists but may not be spoken of, or whose row is faulty."""


@dataclass
class Tradition:
    """One row that may enter; coordinates are NaN when it has none."""

    row: int
    tradition_id: str
    name: str
    latitude: float
    longitude: float
    access: str
    family: str = ""
    branch: str = ""
    region: str = ""
    effort: str = ""
    labels: tuple[str, ...] = ()
    extra: tuple[str, ...] = ()


@dataclass
class TraditionRows:
    """Checked rows of the traditions table.

    ``index`` gives each known id its code: 0..N-1 for the located, N.. for those without
    coordinates, ``HIDDEN`` for rows that were dropped.
    """

    file: str
    located: list[Tradition] = field(default_factory=list)
    unlocated: list[Tradition] = field(default_factory=list)
    index: dict[str, int] = field(default_factory=dict)
    withheld: int = 0
    restricted: int = 0
    withdrawn: int = 0
    effort: FloatArray | None = None
    covariates: dict[str, FloatArray] = field(default_factory=dict)

    @property
    def public_ids(self) -> list[str]:
        """Ids that may be named in a message."""
        return [t.tradition_id for t in self.located + self.unlocated if t.access == "open"]


def read_traditions(
    table: Table, columns: Columns, rules: CatalogueRules, notes: Notes
) -> TraditionRows | None:
    """Read and check the traditions table; None when it cannot be used at all."""
    if misspelt_access(table, columns, notes):
        return None
    out = TraditionRows(table.file)
    hidden: set[str] = set()
    kept: dict[str, Tradition] = {}
    used = set(columns.values())
    spare = [k for k, name in enumerate(table.header) if k not in used and name]
    for chunk in table.chunks():
        if unnamed_access(table, chunk, columns, notes):
            return None
        marks = chunk.columns[columns["access"]] if "access" in columns else None
        for k, row in enumerate(chunk.rows.tolist()):
            access = row_access(table, columns, marks, k, row, notes)
            identity = chunk.columns[columns["id"]][k].strip()
            if access == "withheld" or (access == "restricted" and not rules.restricted):
                out.withheld += access == "withheld"
                out.restricted += access == "restricted"
                hidden.add(identity)
                continue
            if identity in rules.without:
                out.withdrawn += 1
                hidden.add(identity)
                continue
            cells = [column[k] for column in chunk.columns]
            found = _read_row(table, columns, spare, cells, row, access, notes)
            if found is None:
                hidden.add(identity)
            elif found.tradition_id in kept:
                _say_repeated(table, columns, row, kept[found.tradition_id], notes)
            else:
                kept[found.tradition_id] = found
    at = columns["id"]
    hidden.update(cells[at].strip() for cells in table.ragged if len(cells) > at)
    _settle(out, kept, hidden, table, columns, notes)
    _numbers(out, table, columns, spare, notes)
    _check_withdrawn(out, rules, hidden, notes)
    return out


def _read_row(
    table: Table,
    columns: Columns,
    spare: list[int],
    cells: list[str],
    row: int,
    access: str,
    notes: Notes,
) -> Tradition | None:
    def named(part: str) -> str:
        return table.header[columns[part]]

    def text(part: str) -> str:
        if part not in columns:
            return ""
        raw = cells[columns[part]]
        if raw in table.nulls.get(columns[part], ()):
            return ""
        out = clean_text(raw, notes, file=table.file, row=row, column=named(part))
        warn_formula(out, notes, file=table.file, row=row, column=named(part))
        return out

    identity = clean_id(cells[columns["id"]], notes, file=table.file, row=row, column=named("id"))
    if not identity:
        return None
    warn_formula(identity, notes, file=table.file, row=row, column=named("id"))
    point = _coordinates(table, columns, cells, row, notes)
    if point is None:
        return None
    effort = cells[columns["effort"]].strip() if "effort" in columns else ""
    label = text("label")
    return Tradition(
        row=row,
        tradition_id=identity,
        name=text("name") or identity,
        latitude=point[0],
        longitude=point[1],
        access=access,
        family=optional_text(text("family")),
        branch=optional_text(text("branch")),
        region=optional_text(text("region")),
        effort=effort,
        labels=tuple(x.strip() for x in label.split("|") if x.strip()),
        extra=tuple(cells[k].strip() for k in spare),
    )


def _coordinates(
    table: Table, columns: Columns, cells: list[str], row: int, notes: Notes
) -> tuple[float, float] | None:
    """Latitude and longitude; NaN twice when both are blank; None when faulty."""
    values: dict[str, float] = {}
    for part in ("latitude", "longitude"):
        at = columns[part]
        raw = cells[at].strip()
        if raw in MISSING or raw in table.nulls.get(at, ()):
            continue
        values[part] = check_number(raw, notes, file=table.file, row=row, column=table.header[at])
    if not values:
        return math.nan, math.nan
    if len(values) == 1:
        have = next(iter(values))
        lacks = "longitude" if have == "latitude" else "latitude"
        notes.error(
            "half a coordinate",
            f"has a {have} but no {lacks}.",
            "Give both, or leave both blank to list the tradition without a place.",
            file=table.file,
            row=row,
            column=table.header[columns[lacks]],
        )
        return None
    latitude, longitude = values["latitude"], values["longitude"]
    if math.isnan(latitude) or math.isnan(longitude):
        return None
    if not _in_range(table, columns, row, latitude, longitude, notes):
        return None
    if latitude == 0 and longitude == 0:
        notes.warn(
            "point 0/0",
            "stands at latitude 0, longitude 0, which usually marks a missing place.",
            "Check it; leave both cells blank if the place is not known.",
            file=table.file,
            row=row,
        )
    return latitude, longitude


def _in_range(
    table: Table, columns: Columns, row: int, latitude: float, longitude: float, notes: Notes
) -> bool:
    if abs(latitude) <= 90 and abs(longitude) <= 180:
        return True
    if 90 < abs(latitude) <= 180 and abs(longitude) <= 90:
        notes.error(
            "swapped coordinates",
            f"latitude {latitude:g} and longitude {longitude:g} look swapped.",
            "Exchange the two cells (latitude runs from -90 to 90).",
            file=table.file,
            row=row,
            column=table.header[columns["latitude"]],
        )
        return False
    if abs(latitude) > 90:
        notes.error(
            "latitude out of range",
            f"latitude {latitude:g} lies outside -90 to 90.",
            "Give decimal degrees; check for a lost decimal point.",
            file=table.file,
            row=row,
            column=table.header[columns["latitude"]],
        )
    if abs(longitude) > 180:
        east = f"{longitude - 360:g}" if 180 < longitude <= 360 else ""
        notes.error(
            "longitude out of range",
            f"longitude {longitude:g} lies outside -180 to 180.",
            f"Write {east}." if east else "Give decimal degrees; check for a lost decimal point.",
            file=table.file,
            row=row,
            column=table.header[columns["longitude"]],
        )
    return False


def _say_repeated(table: Table, columns: Columns, row: int, first: Tradition, notes: Notes) -> None:
    name = shown(first.tradition_id) if first.access == "open" else "of a restricted row"
    notes.error(
        "repeated tradition",
        f"the id {name} already stands in row {first.row}.",
        "Give each tradition one row and its own id.",
        file=table.file,
        row=row,
        column=table.header[columns["id"]],
    )


def _settle(
    out: TraditionRows,
    kept: dict[str, Tradition],
    hidden: set[str],
    table: Table,
    columns: Columns,
    notes: Notes,
) -> None:
    """Sort by id, so that the order of rows never matters, and give out the codes."""
    for key in sorted(kept):
        if key in hidden:
            notes.error(
                "repeated tradition",
                "its id stands in more than one row of the table.",
                "Give each tradition one row and its own id.",
                file=table.file,
                row=kept[key].row,
                column=table.header[columns["id"]],
            )
        elif math.isnan(kept[key].latitude):
            out.unlocated.append(kept[key])
        else:
            out.located.append(kept[key])
    out.index = dict.fromkeys(hidden, HIDDEN)
    for code, tradition in enumerate(out.located + out.unlocated):
        out.index[tradition.tradition_id] = code
    _warn_same_place(out, notes)
    _check_enough(out, notes)


def _warn_same_place(out: TraditionRows, notes: Notes) -> None:
    places: dict[tuple[float, float], Tradition] = {}
    for tradition in sorted(out.located, key=lambda t: t.row):
        point = (tradition.latitude, (tradition.longitude + 180.0) % 360.0)
        first = places.setdefault(point, tradition)
        if first is not tradition:
            notes.warn(
                "same place",
                f"stands at the same point as row {first.row}; such ties are ordered by id.",
                "Give each tradition its own place if you can.",
                file=out.file,
                row=tradition.row,
            )


def _check_enough(out: TraditionRows, notes: Notes) -> None:
    n = len(out.located)
    if n < 2:
        some = "No tradition has" if n == 0 else "Only one tradition has"
        notes.error(
            "too few traditions",
            f"{some} coordinates and may enter.",
            "Give latitude and longitude for at least two traditions at different places.",
            file=out.file,
        )
        return
    first = out.located[0]
    if all((t.latitude, t.longitude) == (first.latitude, first.longitude) for t in out.located):
        notes.error(
            "one place",
            f"all {n:,} located traditions stand at one point.",
            "Give each its own coordinates; geography cannot be tested otherwise.",
            file=out.file,
        )


def _numbers(
    out: TraditionRows, table: Table, columns: Columns, spare: list[int], notes: Notes
) -> None:
    if "effort" in columns:
        out.effort = _effort(out, table, columns["effort"], notes)
    for k, at in enumerate(spare):
        cells = [t.extra[k] for t in out.located]
        nulls = MISSING | table.nulls.get(at, frozenset())
        given = [(t.row, c) for t, c in zip(out.located, cells, strict=True) if c not in nulls]
        odd = [(row, c) for row, c in given if as_number(c) is None]
        if not given or len(odd) * 2 > len(given):
            continue
        if odd:
            notes.warn(
                "covariate left out",
                f"is a number in most rows but {shown(odd[0][1])} here; the column is left out.",
                "Correct the cell to use the column as a covariate.",
                file=table.file,
                row=odd[0][0],
                column=table.header[at],
            )
            continue
        out.covariates[table.header[at]] = np.array(
            [math.nan if c in nulls else float(c) for c in cells], dtype=np.float64
        )


def _effort(out: TraditionRows, table: Table, at: int, notes: Notes) -> FloatArray | None:
    column = table.header[at]
    nulls = MISSING | table.nulls.get(at, frozenset())
    if all(t.effort in nulls for t in out.located):
        notes.warn(
            "effort blank",
            "the effort column is blank, so there is no effort.",
            "Fill it in to allow for how much was collected.",
            file=table.file,
            column=column,
        )
        return None
    values = np.empty(len(out.located))
    for k, tradition in enumerate(out.located):
        if tradition.effort in nulls:
            notes.error(
                "effort missing",
                "has no effort, though other traditions have.",
                "Estimate it (any unit, greater than 0), or remove the column.",
                file=table.file,
                row=tradition.row,
                column=column,
            )
            continue
        values[k] = check_number(
            tradition.effort, notes, file=table.file, row=tradition.row, column=column
        )
        if values[k] <= 0:
            notes.error(
                "effort not positive",
                f"effort must be greater than 0, got {tradition.effort}.",
                "Give a positive amount; a tradition never searched should be left out.",
                file=table.file,
                row=tradition.row,
                column=column,
            )
    return values


def _check_withdrawn(
    out: TraditionRows, rules: CatalogueRules, hidden: set[str], notes: Notes
) -> None:
    for identity in _unknown(rules, out, hidden):
        notes.error(
            "unknown tradition",
            f"no tradition has the id {shown(identity)}, which the plan withdraws.",
            f"Correct the plan.{suggestion(identity, out.public_ids)}",
            file=out.file,
        )


def _unknown(rules: CatalogueRules, out: TraditionRows, hidden: set[str]) -> Iterator[str]:
    return (x for x in rules.without if x not in out.index and x not in hidden)
