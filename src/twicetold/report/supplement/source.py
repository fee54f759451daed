"""Reading a finished run's folder."""

from __future__ import annotations

import csv
import json
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from twicetold.catalogue import Catalogue, CatalogueRules, read_catalogue
from twicetold.errors import TwicetoldError
from twicetold.graph import ContactGraph
from twicetold.graph.build import assemble
from twicetold.plan import Plan, read_plan
from twicetold.report.common import is_restricted, open_traditions
from twicetold.report.supplement.table import read_rows

Rows = tuple[tuple[str, ...], list[tuple[str, ...]]]


@dataclass(frozen=True)
class Run:
    """What a run's folder holds.

    Parameters
    ----------
    folder : Path
    catalogue : Catalogue
        As used: exact coordinates, and restricted rows where the plan let them in.
    plan : Plan
    graph : ContactGraph
    record : mapping
        ``run.json``.
    motifs : header and rows
        ``motifs.csv`` as text.
    tables : mapping of str to header and rows
        Every other table, by name.
    """

    folder: Path
    catalogue: Catalogue
    plan: Plan
    graph: ContactGraph
    record: Mapping[str, Any]
    motifs: Rows
    tables: Mapping[str, Rows]

    @property
    def restricted(self) -> bool:
        """Whether restricted traditions or motifs took part."""
        c = self.catalogue
        return "restricted" in c.access or "restricted" in c.motif_access

    @property
    def restricted_traditions(self) -> int:
        """How many restricted traditions took part."""
        return int((~open_traditions(self.catalogue)).sum())

    def open_motifs(self) -> list[int]:
        """Catalogue indices of the motifs that may be listed."""
        c = self.catalogue
        return [m for m in range(c.n_motifs) if not is_restricted(c, m)]


@contextmanager
def whole_tables(folder: Path) -> Iterator[None]:
    """Say of a folder whose tables cannot be understood that it is damaged.

    Raises
    ------
    TwicetoldError
    """
    try:
        yield
    except TwicetoldError:  # says already what is wrong
        raise
    except (ValueError, LookupError, csv.Error, AttributeError, TypeError) as err:
        raise TwicetoldError(
            f"A file in {folder.name} is damaged ({type(err).__name__}: {err}). "
            "Write the folder again."
        ) from err


def read_run(folder: Path) -> Run:
    """Read a run's folder.

    Raises
    ------
    TwicetoldError
        When it is no complete run.
    """
    for name in ("motifs.csv", "plan.toml", "run.json", "contacts.csv", "catalogue"):
        if not (folder / name).exists():
            raise TwicetoldError(
                f"{folder} must be a folder that `twicetold rank` wrote; it has no {name}. "
                "Give such a folder, or rank the catalogue first."
            )
    with whole_tables(folder):
        return _read_run(folder)


def _read_run(folder: Path) -> Run:
    plan = read_plan(folder / "plan.toml")
    rules = CatalogueRules(restricted=plan.catalogue.restricted)
    catalogue = read_catalogue(folder / "catalogue", rules)
    record = dict(json.loads((folder / "run.json").read_text(encoding="utf-8")))
    tables = {p.stem: _even(p) for p in sorted((folder / "tables").glob("*.csv"))}
    motifs = _even(folder / "motifs.csv")
    if sorted(row[motifs[0].index("motif_id")] for row in motifs[1]) != list(catalogue.motif_ids):
        raise TwicetoldError(
            f"motifs.csv and the catalogue in {folder.name} do not list the same motifs. "
            "Rank the catalogue again."
        )
    header, rows = _even(folder / "contacts.csv")
    graph = contacts_graph(catalogue, header, rows, rule=plan.graph.rule)
    return Run(folder, catalogue, plan, graph, record, motifs, tables)


def _even(path: Path) -> Rows:
    """Read a table that must have a heading and as many cells in every row."""
    header, rows = read_rows(path)
    uneven = len(set(header)) < len(header) or any(len(row) != len(header) for row in rows)
    if not header or uneven:
        raise TwicetoldError(
            f"{path.name} in this run is damaged (no heading, or rows of other lengths). Rank the "
            "catalogue again."
        )
    return header, rows


def contacts_graph(
    catalogue: Catalogue, header: tuple[str, ...], rows: list[tuple[str, ...]], *, rule: str
) -> ContactGraph:
    """Make the contact graph from its table; lengths come from the catalogue's coordinates.

    Raises
    ------
    TwicetoldError
        When the table names a tradition that the catalogue does not have.
    """
    place = {t: k for k, t in enumerate(catalogue.tradition_ids)}
    at = [header.index(c) for c in ("tradition_id", "neighbour_id", "bridge")]
    try:
        pairs = np.array(
            [(place[row[at[0]]], place[row[at[1]]]) for row in rows], dtype=np.int32
        ).reshape(-1, 2)
    except KeyError as err:
        raise TwicetoldError(
            f"The table of contacts names the tradition {err.args[0]!r}, which the catalogue does "
            "not have. Write the folder again."
        ) from err
    bridge = np.array([row[at[2]] == "yes" for row in rows], dtype=bool)
    lat, lon = catalogue.latitude, catalogue.longitude
    return assemble(len(place), pairs[~bridge], pairs[bridge], lat, lon, rule=rule)
