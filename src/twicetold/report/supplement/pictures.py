"""Figures of a run: kept as specifications by ``rank``, drawn for print in the deposit."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from twicetold.evidence.rounded import round_coordinates
from twicetold.folders import write_text
from twicetold.report.figures import RANKING_KINDS, FigureError, render, specification

if TYPE_CHECKING:
    from twicetold.evidence import Ranking

FORMATS = ("svg", "pdf")


def keep_figures(ranking: Ranking, folder: Path) -> list[str]:
    """Write the specification of every figure of the catalogue, maps with rounded coordinates.

    Parameters
    ----------
    ranking : Ranking
    folder : Path
        Made here.

    Returns
    -------
    list of str
        Kinds that the results could give.
    """
    folder.mkdir()
    coarse = round_coordinates(ranking.catalogue, ranking.plan.report.round_degrees)
    published = replace(ranking, catalogue=coarse)
    kept = []
    for kind in RANKING_KINDS:
        try:
            spec = specification(published, kind)
        except FigureError:  # these results have nothing to draw for it
            continue
        text = json.dumps(spec, ensure_ascii=False, sort_keys=True, separators=(",", ":"))
        write_text(folder / f"{kind}.json", text + "\n")
        kept.append(kind)
    return kept


def draw_figures(kept: Path, folder: Path) -> list[Path]:
    """Draw the specifications kept in a run's folder as SVG and PDF."""
    out = []
    for source in sorted(kept.glob("*.json")):
        spec = json.loads(source.read_text(encoding="utf-8"))
        for kind in FORMATS:
            folder.mkdir(exist_ok=True)
            path = folder / f"{source.stem}.{kind}"
            path.write_bytes(render(spec, kind))
            out.append(path)
    return out
