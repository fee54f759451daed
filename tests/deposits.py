"""A small invented catalogue with everything that is hard to publish, and its deposit.

Names hold every sign that means something to LaTeX or to a spreadsheet, several scripts, places on
both sides of the antimeridian, motifs searched in part of the traditions, labels, a tradition
without a place, and rows that are restricted or withheld.
"""

from __future__ import annotations

import atexit
import csv
import shutil
import tempfile
from functools import cache
from pathlib import Path

import numpy as np

from twicetold.plan import Plan
from twicetold.run import rank_run, supplement_run
from twicetold.workers import ThreadPool

#: In every id, name, family, label and source of a withheld row, and nowhere else.
WITHHELD = "Zqxwv"
#: The same for restricted rows.
RESTRICTED = "Kjxqy"
LABEL = "Told only in winter; ask the Keepers (invented label)"
SPECIAL = r"""\ { } $ & # % _ ^ ~ < > | " ' ` [ ] * - -- --- , ,, << >> ?` !` @ = + / ; : ( )"""
NAMES = (
    SPECIAL,
    '=HYPERLINK("https://example.org","x")',
    "+1+1",
    "-2+3",
    "@SUM(A1:A9)",
    "'quoted by its own apostrophe",
    "tail;=1+1",
    "القمر الذي ابتلعه السمك",
    "समुद्र में खोई हुई लड़की",
    "Čo ťažký ňom ő Ł ø ß æ ŋ ṣ ḥ ǎ ı é à ü ñ ç",
    "e\u0301 decomposed, ʻokina, naïve – “quotes” …",
    "月を飲んだ魚",
    "[optional] * starred",
    "W" * 70,
    "a_b^c#d%e&f{g}h~i\\j",
)
FAMILIES = ("Oru", "Tevan & Co", "Lissic_x", "Old Shore", "")
N = 40


def pool():
    return ThreadPool(1)


def plan(**changes):
    few = {"evidence__draws": 499, "evidence__worlds": ("emergence", "ancestry")}
    few["graph__rule"] = "nearest:3"  # sparse, so that motifs searched in part need bridges
    return Plan().replace(**{**few, "sensitivity__draws": 99, **changes})


def write_tables(folder: Path, *, protected: bool = True) -> Path:
    """Write the catalogue's tables; without protected rows where asked."""
    rng = np.random.default_rng(5)
    folder.mkdir(parents=True)
    ids = [f"T{k:02d}" for k in range(N)]
    lon = 172 + 16 * rng.random(N)
    lon = np.where(lon > 180, lon - 360, lon).round(3)
    lat = (-45 - 12 * rng.random(N)).round(3)
    traditions = []
    for k, identity in enumerate(ids):
        label = LABEL if k in (3, 7) else ""
        name = NAMES[k] if k < len(NAMES) else f"Tradition {k}"
        family = FAMILIES[k * len(FAMILIES) // N]
        row = [identity, name, lat[k], lon[k], family, int(rng.integers(3, 90)), "", label]
        traditions.append([*row, round(float(rng.random()), 3)])
    traditions.append(["T99", "Nowhere", "", "", "Oru", 4, "", "", 0.5])
    motifs = [[f"M{k:02d}", NAMES[k % len(NAMES)], "sea & sky", ""] for k in range(30)]
    motifs[4][0] = "=M04"
    pairs, surveyed = [], []
    for k, (motif, *_) in enumerate(motifs):
        near = np.argsort(np.hypot(lat - lat[k], (lon - lon[k]) % 360))
        n = 2 + k % 11
        chosen = near[:n] if k % 2 else rng.choice(N, n, replace=False)
        asked = set(range(N)) if k < 24 else set(range(0, N, 2)) | {int(i) for i in chosen}
        pairs += [[motif, ids[int(i)], "notebook"] for i in sorted(chosen)]
        if k >= 24:
            surveyed += [[motif, ids[i]] for i in sorted(asked)]
    if protected:
        for mark, access in ((WITHHELD, "withheld"), (RESTRICTED, "restricted")):
            for k in range(6):
                row = [f"{mark}{k}", f"{mark} people {k}", -50 + 0.3 * k, 175 + 0.2 * k]
                traditions.append([*row, f"{mark} family", 7, access, f"{mark} label", 0.25])
            motifs.append([f"{mark}M", f"{mark} motif", f"{mark} category", access])
            pairs += [[f"{mark}M", ids[k], f"{mark} source"] for k in range(5)]
            pairs += [["M01", f"{mark}{k}", f"{mark} source"] for k in range(6)]
            pairs += [["M00", f"{mark}0", f"{mark} source"]]
    head = ["id", "name", "latitude", "longitude", "family", "effort", "access", "label", "reef"]
    _write(folder / "traditions.csv", head, traditions)
    _write(folder / "motifs.csv", ["id", "name", "category", "access"], motifs)
    _write(folder / "attestations.csv", ["motif_id", "tradition_id", "source"], pairs)
    _write(folder / "surveyed.csv", ["motif_id", "tradition_id"], surveyed)
    about = 'title = "Tales & tides_1 (invented)"\nnotice = "Invented: 100 % made up."\n'
    about += 'invented = true\nlicense = "CC0-1.0"\ncitation = "Nobody (1). Nothing."\n'
    (folder / "about.toml").write_text(about, encoding="utf-8")
    return folder


def _write(path, header, rows):
    with path.open("w", encoding="utf-8", newline="") as out:
        csv.writer(out, lineterminator="\n").writerows([header, *rows])


@cache
def scratch() -> Path:
    folder = Path(tempfile.mkdtemp(prefix="twicetold-tests-"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return folder


@cache
def tables() -> Path:
    return write_tables(scratch() / "tables")


@cache
def finished_run() -> Path:
    """A run on the tables; restricted rows stay out."""
    out = scratch() / "run"
    rank_run(tables(), out, plan(), pool=pool())
    return out


@cache
def deposit() -> Path:
    out = scratch() / "deposit"
    supplement_run(finished_run(), out, cldf=True, force=False, pool=pool())
    return out


def without_pictures(run: Path) -> Path:
    """Leave a run's figures out of what follows: drawing them takes most of a deposit's time."""
    shutil.rmtree(run / "figures")
    return run


@cache
def restricted_run() -> Path:
    """A run that lets restricted rows in."""
    out = scratch() / "restricted-run"
    rank_run(tables(), out, plan(catalogue__restricted=True), pool=pool())
    return out
