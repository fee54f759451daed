"""The README of a deposit: what is in it, how to check it, and what must be kept in mind."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from twicetold import __version__
from twicetold.report.common import SMALLEST_TOTAL
from twicetold.report.supplement.table import Table
from twicetold.report.supplement.tables import Published

CAUTIONS = (
    "Association is not history. A verdict says which simple world the places of a motif fit, not "
    "who told it to whom.",
    "A map of verdicts is not a map of origins.",
    "One snapshot cannot tell contact from a shared environment that nobody measured, nor "
    "carriage that takes no notice of distance (migration, trade, print) from parallel emergence.",
    "A motif that nobody recorded may have been told all the same.",
    "Consult the communities concerned before building on these tables, and follow their "
    "protocols and the ethics review of your institution.",
)

_OTHERS = (
    ("supplement.xlsx", "the tables above in one workbook; no cell of it can run"),
    ("latex/supplement.tex", "the tables for LaTeX, one file each, with a document that sets all"),
    ("traditions.geojson", "the traditions as points (RFC 7946)"),
    ("contacts.geojson", "the contact graph as lines, cut at the antimeridian (RFC 7946)"),
    ("plan.toml", "the analysis plan"),
    ("catalogue", "the catalogue as used, with rounded coordinates"),
    ("cldf", "the catalogue with its results as a CLDF dataset"),
    ("figures", "figures as PDF and SVG"),
    ("methods.md", "the methods paragraph"),
    ("references.bib", "the works it cites"),
    ("datapackage.json", "the tables described for machines (Data Package 2)"),
    ("files.csv", "size and SHA-256 of every file"),
)


def readme(published: Published, tables: Sequence[Table], folder: Path) -> str:
    """Give the README as Markdown."""
    c = published.catalogue
    parts = [f"# Supplementary tables: {c.title or 'a catalogue of motifs'}"]
    if c.notice:
        parts.append(f"**{c.notice}**")
    if c.citation:
        parts.append(f"Catalogue: {c.citation}")
    if c.license:
        parts.append(f"Licence of the catalogue: {c.license}")
    parts.append(
        "For every motif of a catalogue these tables say whether geography favours contact spread, "
        "parallel emergence or shared ancestry, or cannot tell. Written by twicetold "
        f"{__version__}."
    )
    parts += ["## Cautions", "\n".join(f"- {line}" for line in CAUTIONS)]
    parts += _labels(published)
    parts += ["## Tables", "\n".join(f"- `{t.name}.csv`: {t.title}" for t in tables)]
    others = [f"- `{name}`: {what}" for name, what in _OTHERS if _there(folder, name)]
    parts += ["## Other files", "\n".join(others)]
    parts += ["## Coordinates", _coordinates(published)]
    if published.run.restricted:
        parts += ["## Restricted records", _restricted()]
    parts += ["## Computing the tables again", _verifying(published)]
    parts += [
        "## Text in the CSV tables",
        "A text cell that a spreadsheet could take for a formula (it begins with `=`, `+`, `-` or "
        "`@`, also after a semicolon or a tab) has one apostrophe put in front, in every CSV file "
        "here. Where the text itself begins with an apostrophe, one more is put in front, so that "
        "taking one away always gives the text as it was. `twicetold verify` does so. Numbers are "
        "never changed.",
    ]
    return "\n\n".join(parts) + "\n"


def _there(folder: Path, name: str) -> bool:
    return name in ("datapackage.json", "files.csv") or (folder / name).exists()


def _labels(published: Published) -> list[str]:
    c = published.catalogue
    lines = [
        f"- {name} ({identity}): {' | '.join(c.labels[identity])}"
        for identity, name, access in zip(c.tradition_ids, c.tradition_names, c.access, strict=True)
        if access != "restricted" and c.labels.get(identity)
    ]
    if not lines:
        return []
    said = "Made by the communities and carried through word for word. Please respect them."
    return ["## Labels and notices", said, "\n".join(lines)]


def _coordinates(published: Published) -> str:
    step = published.plan.report.round_degrees
    if step <= 0:
        return "Coordinates are given as they were used."
    return (
        f"Every published coordinate is rounded ({step:g}°): tables, maps, GeoJSON and the "
        "catalogue in this deposit. The contact graph was built from the exact ones and is given "
        "as table S3, with lengths between the rounded ones (exact lengths would give the places "
        "away; the graph itself still says which places are near each other). Table S4_rounded, "
        "where present, says which verdicts move when everything is computed from the rounded "
        "ones."
    )


def _restricted() -> str:
    return (
        "Restricted records took part and appear only in totals. No restricted tradition or motif "
        "is listed, and ranks count the motifs listed. No attestation and no figure is deposited: "
        "a total less what is listed would point at them. Where restricted traditions took part, "
        f"no number is given of a motif with fewer than {SMALLEST_TOTAL} holders."
    )


def _verifying(published: Published) -> str:
    if published.run.restricted:
        return (
            "`twicetold verify` compares every file with its digest here. The numbers cannot be "
            "computed again from this deposit, since records they rest on may not be published; "
            "who may see those can run `twicetold verify` on the run's own folder."
        )
    exact = published.plan.report.round_degrees <= 0
    words = (
        "`twicetold verify DIR` compares every file with its digest, then computes tables S1, S2, "
        "S3 and S4 again from the catalogue, the plan and the contact graph deposited here, and "
        "says whether every number agrees to the last digit."
    )
    if exact:
        return words + " What moved by a withdrawal cannot be computed again from what is left."
    return words + (
        " What rests on exact distances cannot be computed again from rounded coordinates: the "
        "contact graph itself and its bridges, the columns `stability` and `hidden_bound`, and "
        "the tables that `twicetold verify` names. Nor can what moved by a withdrawal."
    )
