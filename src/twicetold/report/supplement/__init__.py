"""The deposit of a finished run: tables S1 to S5 in every form a journal asks for.

Layer rule: part of ``report``. It reads the run's folder and recomputes no result.
"""

from __future__ import annotations

import csv
import hashlib
import io
import shutil
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

import pandas as pd

from twicetold.catalogue import write_catalogue
from twicetold.evidence.contacts import known_contacts
from twicetold.evidence.rounded import round_coordinates
from twicetold.folders import write_text
from twicetold.graph.build import assemble
from twicetold.graph.rules import parse_rule
from twicetold.report.supplement import geojson, latex
from twicetold.report.supplement.package import descriptor
from twicetold.report.supplement.pictures import draw_figures, keep_figures
from twicetold.report.supplement.readme import readme
from twicetold.report.supplement.source import Rows, Run, read_run
from twicetold.report.supplement.table import Table, csv_text, read_rows
from twicetold.report.supplement.tables import (
    Published,
    all_tables,
    columns_table,
    small_motifs,
    table,
)
from twicetold.report.supplement.workbook import write_workbook

__all__ = ["Run", "frame_rows", "keep_figures", "published", "read_run", "write_supplement"]


def write_supplement(
    run: Path, part: Path, *, cldf: bool, rounded: pd.DataFrame | None = None
) -> list[str]:
    """Write the deposit of a run.

    Parameters
    ----------
    run : Path
        Folder that ``rank`` wrote.
    part : Path
        Empty folder to fill.
    cldf : bool
        Also a CLDF dataset of the results.
    rounded : pandas.DataFrame, optional
        What :func:`twicetold.evidence.rounded.rerun_rounded` found.

    Returns
    -------
    list of str
        Files written, relative to ``part``, in order.

    Raises
    ------
    TwicetoldError
        When ``run`` is no complete run, or its records may not be published in the form asked for.
    """
    found = published(read_run(run))
    extra = {} if rounded is None else {"rounded": frame_rows(rounded)}
    tables = _write_tables(found, part, extra)
    by_name = {t.name: t for t in tables}
    motifs, traditions = by_name["S1_motifs"], by_name["S2_traditions"]
    write_text(part / "traditions.geojson", geojson.traditions_geojson(found, traditions))
    write_text(part / "contacts.geojson", geojson.contacts_geojson(found, by_name["S3_contacts"]))
    write_text(part / "plan.toml", found.plan.to_toml())
    if not found.run.restricted:
        _write_used(found, part / "catalogue")
        draw_figures(run / "figures", part / "figures")
        _carry(run, part)
    if cldf:
        from twicetold.report.supplement.cldf import write_cldf

        write_cldf(found, motifs, traditions, part / "cldf")
    write_text(part / "README.md", readme(found, tables, part))
    _write_files(part)
    write_text(part / "datapackage.json", descriptor(found, tables, part))
    return [p.relative_to(part).as_posix() for p in _files(part)]


def published(run: Run) -> Published:
    """Give what of a run may be published, see :class:`Published`."""
    plan = run.plan.replace(catalogue__without=(), graph__rule=str(parse_rule(run.plan.graph.rule)))
    coarse = round_coordinates(run.catalogue, plan.report.round_degrees)
    own, bridge = run.graph.edges[~run.graph.bridge], run.graph.edges[run.graph.bridge]
    lat, lon = coarse.latitude, coarse.longitude
    graph = assemble(run.graph.n, own, bridge, lat, lon, rule=plan.graph.rule)
    return Published(
        run=run,
        plan=plan,
        catalogue=replace(coarse, sources=()),
        graph=graph,
        bridges=known_contacts(run.catalogue, run.graph, bridges=plan.graph.bridges),
        small=small_motifs(run),
    )


def _write_tables(found: Published, part: Path, extra: Mapping[str, Rows]) -> list[Table]:
    """Write every table as CSV, in the workbook and for LaTeX."""
    tables = all_tables(found, extra)
    tables.append(columns_table(tables))
    (part / "latex").mkdir()
    for t in tables:
        write_text(part / f"{t.name}.csv", t.csv())
        write_text(part / "latex" / f"{t.name}.tex", latex.fragment(t))
    title = f"Supplementary tables: {found.catalogue.title or 'a catalogue of motifs'}"
    text = latex.document(tables, title=title, notice=found.catalogue.notice)
    write_text(part / "latex" / "supplement.tex", text)
    write_workbook(tables, part / "supplement.xlsx", title=title)
    return tables


def _write_used(found: Published, folder: Path) -> None:
    """Write the catalogue as used, its CSV guarded against formulas."""
    write_catalogue(found.catalogue, folder)
    for path in sorted(folder.glob("*.csv")):
        header, rows = read_rows(path)
        numeric = {"latitude", "longitude", "effort", *found.catalogue.covariates}
        text = [path.name != "traditions.csv" or h not in numeric for h in header]
        path.unlink()
        write_text(path, csv_text(header, rows, text))


def _carry(run: Path, part: Path) -> None:
    """Carry the methods through; the table of choices in them is S5_plan here."""
    if (run / "methods.md").exists():
        text = (run / "methods.md").read_text(encoding="utf-8")
        write_text(part / "methods.md", text.split("\n## Every choice made")[0].rstrip() + "\n")
    if (run / "references.bib").exists():
        shutil.copyfile(run / "references.bib", part / "references.bib")


def frame_rows(frame: pd.DataFrame) -> Rows:
    """A table of results as text, written as in the run's own folder."""
    text = frame.to_csv(index=False, lineterminator="\n", na_rep="", float_format="%.12g")
    lines = [tuple(row) for row in csv.reader(io.StringIO(text, newline=""))]
    return lines[0], lines[1:]


def _files(part: Path) -> list[Path]:
    return sorted(p for p in part.rglob("*") if p.is_file())


def _write_files(part: Path) -> None:
    """List every file with its digest (but the list itself, and what will describe the tables)."""
    rows = []
    for path in _files(part):
        raw = path.read_bytes()
        name = path.relative_to(part).as_posix()
        rows.append((name, str(len(raw)), hashlib.sha256(raw).hexdigest()))
    listing = table("files", "Every file with its digest.", ("file", "bytes", "sha256"), rows)
    write_text(part / "files.csv", listing.csv())
