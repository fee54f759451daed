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
from twicetold.catalogue.columns import (
    TRADITION_PARTS,
    Columns,
    misspelt_access,
    row_access,
    unnamed_access,
)
from twicetold.catalogue.model import FloatArray
from twicetold.catalogue.notes import Spot, shown, suggestion
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


def read_traditions(table: Table, columns: Columns, rules: CatalogueRules) -> TraditionRows | None:
    """Read and check the traditions table; None when it cannot be used at all."""
    if misspelt_access(table, columns):
        return None
    out = TraditionRows(table.file)
    hidden: set[str] = set()
    kept: dict[str, Tradition] = {}
    used = set(columns.values())
    taken = {name for names in TRADITION_PARTS.values() for name in names}
    spare = [
        k
        for k, name in enumerate(table.header)
        if k not in used and name and name.casefold() not in taken
    ]
    for chunk in table.chunks():
        if unnamed_access(table, chunk, columns):
            return None
        marks = chunk.columns[columns["access"]] if "access" in columns else None
        for k, row in enumerate(chunk.rows.tolist()):
            access = row_access(table, columns, marks, k, row)
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
            cells = _Cells(table, columns, [column[k] for column in chunk.columns], row)
            found = _read_row(cells, spare, access)
            if found is None:
                hidden.add(identity)
            elif found.tradition_id in kept:
                _say_repeated(table, columns, row, kept[found.tradition_id])
            else:
                kept[found.tradition_id] = found
    if table.stopped:
        return None
    at = columns["id"]
    hidden.update(cells[at].strip() for cells in table.ragged if len(cells) > at)
    _settle(out, kept, hidden, table, columns)
    _numbers(out, table, columns, spare)
    _check_withdrawn(out, table, rules, hidden)
    return out


@dataclass(frozen=True)
class _Cells:
    """The cells of one row, asked for by the part they play."""

    table: Table
    columns: Columns
    cells: list[str]
    row: int

    def spot(self, part: str) -> Spot:
        return self.table.spot(self.row, self.columns[part])

    def text(self, part: str) -> str:
        """A checked text cell; blank where the column or the value is missing."""
        at = self.columns.get(part, -1)
        if at < 0 or self.cells[at] in self.table.nulls.get(at, ()):
            return ""
        out = clean_text(self.cells[at], self.spot(part))
        warn_formula(out, self.spot(part))
        return out


def _read_row(cells: _Cells, spare: list[int], access: str) -> Tradition | None:
    identity = clean_id(cells.cells[cells.columns["id"]], cells.spot("id"))
    if not identity:
        return None
    warn_formula(identity, cells.spot("id"))
    point = _coordinates(cells.table, cells.columns, cells.cells, cells.row)
    if point is None:
        return None
    return Tradition(
        row=cells.row,
        tradition_id=identity,
        name=cells.text("name") or identity,
        latitude=point[0],
        longitude=point[1],
        access=access,
        family=optional_text(cells.text("family")),
        branch=optional_text(cells.text("branch")),
        region=optional_text(cells.text("region")),
        effort=cells.cells[cells.columns["effort"]].strip() if "effort" in cells.columns else "",
        labels=tuple(x.strip() for x in cells.text("label").split("|") if x.strip()),
        extra=tuple(cells.cells[k].strip() for k in spare),
    )


def _coordinates(
    table: Table, columns: Columns, cells: list[str], row: int
) -> tuple[float, float] | None:
    """Latitude and longitude; NaN twice when both are blank; None when faulty."""
    values: dict[str, float] = {}
    for part in ("latitude", "longitude"):
        at = columns[part]
        raw = cells[at].strip()
        if raw in MISSING or raw in table.nulls.get(at, ()):
            continue
        values[part] = check_number(raw, table.spot(row, at))
    if not values:
        return math.nan, math.nan
    if len(values) == 1:
        have = next(iter(values))
        lacks = "longitude" if have == "latitude" else "latitude"
        table.spot(row, columns[lacks]).error(
            "half a coordinate",
            f"has a {have} but no {lacks}.",
            "Give both, or leave both blank to list the tradition without a place.",
        )
        return None
    latitude, longitude = values["latitude"], values["longitude"]
    if math.isnan(latitude) or math.isnan(longitude):
        return None
    if not _in_range(table, columns, row, latitude, longitude):
        return None
    if latitude == 0 and longitude == 0:
        table.spot(row).warn(
            "point 0/0",
            "stands at latitude 0, longitude 0, which usually marks a missing place.",
            "Check it; leave both cells blank if the place is not known.",
        )
    return latitude, longitude


def _in_range(table: Table, columns: Columns, row: int, latitude: float, longitude: float) -> bool:
    if abs(latitude) <= 90 and abs(longitude) <= 180:
        return True
    if 90 < abs(latitude) <= 180 and abs(longitude) <= 90:
        table.spot(row, columns["latitude"]).error(
            "swapped coordinates",
            f"latitude {latitude:g} and longitude {longitude:g} look swapped.",
            "Exchange the two cells (latitude runs from -90 to 90).",
        )
        return False
    if abs(latitude) > 90:
        table.spot(row, columns["latitude"]).error(
            "latitude out of range",
            f"latitude {latitude:g} lies outside -90 to 90.",
            "Give decimal degrees; check for a lost decimal point.",
        )
    if abs(longitude) > 180:
        east = f"{longitude - 360:g}" if 180 < longitude <= 360 else ""
        table.spot(row, columns["longitude"]).error(
            "longitude out of range",
            f"longitude {longitude:g} lies outside -180 to 180.",
            f"Write {east}." if east else "Give decimal degrees; check for a lost decimal point.",
        )
    return False


def _say_repeated(table: Table, columns: Columns, row: int, first: Tradition) -> None:
    name = shown(first.tradition_id) if first.access == "open" else "of a restricted row"
    table.spot(row, columns["id"]).error(
        "repeated tradition",
        f"the id {name} already stands in row {first.row}.",
        "Give each tradition one row and its own id.",
    )


def _settle(
    out: TraditionRows,
    kept: dict[str, Tradition],
    hidden: set[str],
    table: Table,
    columns: Columns,
) -> None:
    """Sort by id, so that the order of rows never matters, and give out the codes."""
    for key in sorted(kept):
        if key in hidden:
            table.spot(kept[key].row, columns["id"]).error(
                "repeated tradition",
                "its id stands in more than one row of the table.",
                "Give each tradition one row and its own id.",
            )
        elif math.isnan(kept[key].latitude):
            out.unlocated.append(kept[key])
        else:
            out.located.append(kept[key])
    out.index = dict.fromkeys(hidden, HIDDEN)
    for code, tradition in enumerate(out.located + out.unlocated):
        out.index[tradition.tradition_id] = code
    _warn_same_place(out, table)
    _check_enough(out, table)


def _warn_same_place(out: TraditionRows, table: Table) -> None:
    places: dict[tuple[float, float], Tradition] = {}
    for tradition in sorted(out.located, key=lambda t: t.row):
        point = (tradition.latitude, (tradition.longitude + 180.0) % 360.0)
        first = places.setdefault(point, tradition)
        if first is not tradition:
            table.spot(tradition.row).warn(
                "same place",
                f"stands at the same point as row {first.row}; such ties are ordered by id.",
                "Give each tradition its own place if you can.",
            )


def _check_enough(out: TraditionRows, table: Table) -> None:
    n = len(out.located)
    if n < 2:
        some = "No tradition has" if n == 0 else "Only one tradition has"
        table.spot().error(
            "too few traditions",
            f"{some} coordinates and may enter.",
            "Give latitude and longitude for at least two traditions at different places.",
        )
        return
    first = out.located[0]
    if all((t.latitude, t.longitude) == (first.latitude, first.longitude) for t in out.located):
        table.spot().error(
            "one place",
            f"all {n:,} located traditions stand at one point.",
            "Give each its own coordinates; geography cannot be tested otherwise.",
        )


def _numbers(out: TraditionRows, table: Table, columns: Columns, spare: list[int]) -> None:
    if "effort" in columns:
        out.effort = _effort(out, table, columns["effort"])
    for k, at in enumerate(spare):
        cells = [t.extra[k] for t in out.located]
        nulls = MISSING | table.nulls.get(at, frozenset())
        given = [(t.row, c) for t, c in zip(out.located, cells, strict=True) if c not in nulls]
        odd = [(row, c) for row, c in given if as_number(c) is None]
        if not given or len(odd) * 2 > len(given):
            continue
        if odd:
            table.spot(odd[0][0], at).warn(
                "covariate left out",
                f"is a number in most rows but {shown(odd[0][1])} here; the column is left out.",
                "Correct the cell to use the column as a covariate.",
            )
            continue
        out.covariates[table.header[at]] = np.array(
            [math.nan if c in nulls else float(c) for c in cells], dtype=np.float64
        )


def _effort(out: TraditionRows, table: Table, at: int) -> FloatArray | None:
    column = table.header[at]
    nulls = MISSING | table.nulls.get(at, frozenset())
    if all(t.effort in nulls for t in out.located):
        table.spot(0, column=column).warn(
            "effort blank",
            "the effort column is blank, so there is no effort.",
            "Fill it in to allow for how much was collected.",
        )
        return None
    values = np.empty(len(out.located))
    for k, tradition in enumerate(out.located):
        if tradition.effort in nulls:
            table.spot(tradition.row, column=column).error(
                "effort missing",
                "has no effort, though other traditions have.",
                "Estimate it (any unit, greater than 0), or remove the column.",
            )
            continue
        values[k] = check_number(tradition.effort, table.spot(tradition.row, column=column))
        if values[k] <= 0:
            table.spot(tradition.row, column=column).error(
                "effort not positive",
                f"effort must be greater than 0, got {tradition.effort}.",
                "Give a positive amount; a tradition never searched should be left out.",
            )
    return values


def _check_withdrawn(
    out: TraditionRows, table: Table, rules: CatalogueRules, hidden: set[str]
) -> None:
    for identity in _unknown(rules, out, hidden):
        table.spot().error(
            "unknown tradition",
            f"no tradition has the id {shown(identity)}, which the plan withdraws.",
            f"Correct the plan.{suggestion(identity, out.public_ids)}",
        )


def _unknown(rules: CatalogueRules, out: TraditionRows, hidden: set[str]) -> Iterator[str]:
    return (x for x in rules.without if x not in out.index and x not in hidden)
