"""A small sound catalogue written as CSV tables, to be broken by the tests of the commands."""

from __future__ import annotations

import csv
from pathlib import Path

Tables = dict[str, list[list[str]]]


def small_world() -> Tables:
    """Twenty invented traditions in four families along a coast, seven motifs."""
    traditions = [["tradition_id", "name", "latitude", "longitude", "family", "effort", "access"]]
    for k in range(20):
        latitude, longitude = f"{-3 + 1.5 * (k % 4):g}", f"{10 + 2 * (k // 4):g}"
        traditions.append(
            [f"t{k}", f"Place {k}", latitude, longitude, f"F{k // 5}", str(3 + k % 7), ""]
        )
    held = {
        "m1": range(6),
        "m2": (0, 7, 13, 19),
        "m3": (2, 3, 6, 7, 10, 11, 15),
        "m4": (4, 9),
        "m5": range(0, 20, 2),
        "m6": (12, 13, 16, 17, 18),
        "m7": (1, 5, 8),
    }
    names = [
        "stone boat",
        "twin drums",
        "salt debt",
        "late wave",
        "cold fire",
        "spare moon",
        "echo",
    ]
    motifs = [["motif_id", "name", "category", "access"]]
    motifs += [[m, f"the {n}", "sea", ""] for m, n in zip(held, names, strict=True)]
    attestations = [["motif_id", "tradition_id", "source"]]
    attestations += [[m, f"t{k}", "notebook"] for m, who in held.items() for k in who]
    return {"traditions": traditions, "motifs": motifs, "attestations": attestations}


def put(tables: Tables, folder: Path) -> Path:
    """Write the tables as CSV."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, rows in tables.items():
        with (folder / f"{name}.csv").open("w", encoding="utf-8", newline="") as file:
            csv.writer(file, lineterminator="\n").writerows(rows)
    return folder
