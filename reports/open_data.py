"""Run both open datasets to the end and tell what came out.

python reports/open_data.py FOLDER > reports/calibration/open-data.md

FOLDER holds ``eurasianinventories`` (Nikolaev 2018, as CLDF, MIT) and ``wacl`` (Her, Hammarström
and Allassonnière-Tang 2022, CC BY 4.0), each with its ``cldf`` folder; neither is part of this
project.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import pandas as pd

from twicetold.catalogue import read_catalogue
from twicetold.evidence import Ranking, rank_catalogue, test_motif
from twicetold.plan import Plan

ROUTES = ("emergence", "contact", "inheritance")
FITS = (
    "turnover",
    "turnover_low",
    "turnover_high",
    "turnover_assumed_low",
    "turnover_assumed_high",
    "turnover_motifs",
    "turnover_goodness_p",
    "turnover_dispersion",
    "mean_recorded",
)


def shown(value: object) -> str:
    """Give a number with four digits."""
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def rows(head: tuple[str, ...], body: list[tuple[object, ...]]) -> None:
    """Print a table."""
    print("\n| " + " | ".join(head) + " |\n" + "|---" * len(head) + "|")
    for row in body:
        print("| " + " | ".join(shown(v) for v in row) + " |")
    print()


def said(found: Ranking, begun: tuple[float, float]) -> None:
    """Print fits, notes and time."""
    rows(("fit", "value"), [(k.replace("_", " "), found.fits[k]) for k in FITS if k in found.fits])
    for note in found.notes:
        print(f"> {note}\n>")
    clock, cpu = time.perf_counter() - begun[0], time.process_time() - begun[1]
    print(f"\n{clock:.0f} s by the clock, {cpu:.0f} s of processor.\n")


def segments(folder: Path) -> None:
    """Sound segments: a whole catalogue."""
    begun = time.perf_counter(), time.process_time()
    found = rank_catalogue(read_catalogue(folder), Plan(), cache=False)
    motifs, c = found.motifs, found.catalogue
    print(f"## Sound segments ({folder.parent.name})\n")
    print(
        f"{c.n_traditions:,} languages with a place, {len(c.unlocated):,} without; "
        f"{len(motifs):,} segments; the default plan."
    )
    rows(("verdict", "segments"), list(motifs["verdict"].value_counts().items()))
    few = motifs["holders"] < 2
    print(f"Of the undecided {int(few.sum()):,} have fewer than two holders among the located.")
    rows(
        ("against", "told", "p ≤ .05"),
        [
            (
                world,
                int(motifs[f"p_against_{world}"].notna().sum()),
                int((motifs[f"p_against_{world}"] <= 0.05).sum()),
            )
            for world in ("emergence", "ancestry", "contact", "transmission")
        ],
    )
    alone = found.tables["worlds_alone"]
    rows(tuple(alone.columns), [tuple(r) for r in alone.itertuples(index=False)])
    shares = found.tables["route_shares"].iloc[0]
    rows(
        ("route", "mean share", "low", "high"),
        [(r, *(float(shares[f"{r}_share{end}"]) for end in ("", "_low", "_high"))) for r in ROUTES],
    )
    fit = found.tables["turnover_fit"]
    rows(tuple(fit.columns), [tuple(map(float, r)) for r in fit.itertuples(index=False)])
    said(found, begun)


def classifiers(folder: Path) -> None:
    """Numeral classifiers: one motif."""
    begun = time.perf_counter(), time.process_time()
    found = test_motif(read_catalogue(folder), "CLF", Plan(), cache=False)
    row: pd.Series = found.motifs.iloc[0]
    print(f"## Numeral classifiers ({folder.parent.name})\n")
    print("One motif in 3,338 languages; no families, no effort; the default plan.")
    rows(
        ("column", "value"), [(k, row[k]) for k in found.motifs.columns if not pd.isna(row[k])][3:]
    )
    rows(
        ("world", "statistic", "observed", "expected", "p", "note"),
        [
            (c.world, c.statistic, float(c.observed), float(c.expected), float(c.p), c.note)
            for c in found.evidence[0].comparisons
        ],
    )
    said(found, begun)


def main() -> None:
    """Print the page."""
    data = Path(sys.argv[1])
    print("# Both open datasets, to the end\n")
    print("Command: `python reports/open_data.py FOLDER > reports/calibration/open-data.md`.")
    print("The datasets are not part of the project; nothing was cached.\n")
    segments(data / "eurasianinventories" / "cldf")
    classifiers(data / "wacl" / "cldf")


if __name__ == "__main__":
    main()
