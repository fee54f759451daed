"""How time and memory of a ranking grow with motifs, traditions and draws.

Run by hand: ``python -m tests.benchmarks.test_growth`` writes ``reports/benchmarks/growth.md``. Each
line is a process of its own, so that its peak memory is its own (``... child MOTIFS TRADITIONS
DRAWS`` runs one). ``pytest -m benchmark tests/benchmarks/test_growth.py`` checks the large one:
100,000 motifs over 10,000 traditions within 16 GB.

The catalogue: places at random on the globe, families by nearness, log-normal effort; numbers of
holders fall off as 1/n from 1 to a fifth of the traditions (2,000 at most), holders in proportion
to effort (half of the motifs) or grown along the map (the other half). Presence is sparse
throughout. The run is ``rank_catalogue`` against the emergence-only world, without what only pages
show.
"""

from __future__ import annotations

import json
import os
import platform
import resource
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.spatial import cKDTree

from twicetold.catalogue import Catalogue
from twicetold.evidence.details import Details
from twicetold.evidence.ranking import _assemble, compute_worlds, judge, ordered
from twicetold.evidence.study import prepare
from twicetold.evidence.worlds import observe_motifs
from twicetold.plan import Plan
from twicetold.workers import ThreadPool

REPO = Path(__file__).parents[2]
REPORT = REPO / "reports" / "benchmarks" / "growth.md"
#: (motifs, traditions, draws); the first is what the others are varied from.
BASE = (2_200, 1_000, 99_999)
LINES = {
    "motifs": [BASE, (22_000, 1_000, 99_999), (100_000, 1_000, 99_999)],
    "traditions": [BASE, (2_200, 5_000, 99_999), (2_200, 20_000, 99_999)],
    "draws": [(2_200, 1_000, 10_000), BASE, (2_200, 1_000, 1_000_000)],
}
LARGE = (100_000, 10_000, 99_999)
PARTS = ("graph", "observe", "worlds", "judge", "assemble")


def made_up(motifs: int, traditions: int, seed: int = 1) -> Catalogue:
    """Give a catalogue of that size."""
    rng = np.random.default_rng(seed)
    xyz = rng.normal(size=(traditions, 3))
    xyz /= np.linalg.norm(xyz, axis=1)[:, None]
    tree = cKDTree(xyz)
    seats = xyz[rng.choice(traditions, max(2, traditions // 16), replace=False)]
    family = cKDTree(seats).query(xyz)[1]
    effort = np.exp(rng.normal(size=traditions))
    most = min(2_000, traditions // 5)
    sizes = np.exp(rng.random(motifs) * np.log(most + 1)).astype(int).clip(1, most)
    chance = np.cumsum(effort / effort.sum())
    rows = []
    for k, n in enumerate(sizes):
        if k % 2:
            # Among the nearest two n to a random place: grown along the map.
            near = tree.query(xyz[rng.integers(traditions)], k=min(traditions, 2 * n))[1]
            held = rng.permutation(np.atleast_1d(near))[:n]
        else:
            held = np.unique(np.searchsorted(chance, rng.random(3 * n)).clip(0, traditions - 1))
            held = rng.permutation(held)[:n]
        rows.append(np.sort(held).astype(np.int32))
    indptr = np.concatenate([[0], np.cumsum([len(r) for r in rows])])
    attested = sp.csr_array(
        (np.ones(indptr[-1], dtype=bool), np.concatenate(rows), indptr), shape=(motifs, traditions)
    )
    return Catalogue(
        title="made up",
        notice="Invented for a benchmark.",
        tradition_ids=tuple(f"T{k:06d}" for k in range(traditions)),
        tradition_names=tuple(f"tradition {k}" for k in range(traditions)),
        latitude=np.degrees(np.arcsin(xyz[:, 2])),
        longitude=np.degrees(np.arctan2(xyz[:, 1], xyz[:, 0])),
        family=tuple(f"F{f}" for f in family),
        branch=("",) * traditions,
        region=("",) * traditions,
        effort=effort,
        covariates={},
        access=("open",) * traditions,
        motif_ids=tuple(f"M{k:07d}" for k in range(motifs)),
        motif_names=tuple(f"motif {k}" for k in range(motifs)),
        motif_categories=("",) * motifs,
        motif_access=("open",) * motifs,
        attested=attested,
        surveyed_sets=(np.ones(traditions, dtype=bool),),
        surveyed_of=np.zeros(motifs, dtype=np.int32),
        not_applicable=sp.csr_array((motifs, traditions), dtype=bool),
        invented=True,
    )


def ranked(catalogue: Catalogue, draws: int, workers: int = 2) -> dict[str, float]:
    """Processor seconds by part; the steps are those of ``rank_catalogue(..., details=False)``."""
    plan = Plan().replace(evidence__worlds=("emergence",), evidence__draws=draws)
    clock = [time.process_time()]

    def lap():
        clock.append(time.process_time())

    study = prepare(catalogue, plan)
    lap()
    observed = observe_motifs(study)
    lap()
    worlds = compute_worlds(study, observed, ThreadPool(workers), cache=False)
    lap()
    table = ordered(judge(study, observed, worlds, tuple(range(catalogue.n_motifs))), "evidence")
    lap()
    ranking = _assemble(study, worlds, table, Details())
    lap()
    assert len(ranking.motifs) == catalogue.n_motifs
    assert (ranking.motifs["p_against_emergence"] > 0).all()
    return dict(zip(PARTS, np.diff(clock).tolist(), strict=True))


def child(motifs: int, traditions: int, draws: int) -> None:
    """Run one line and print what it took as JSON."""
    ranked(made_up(50, 200), 200)  # compile
    catalogue = made_up(motifs, traditions)
    before, begin = high_water(), time.perf_counter()
    seconds = ranked(catalogue, draws)
    clock = time.perf_counter() - begin
    print(
        json.dumps(
            {
                "seconds": seconds,
                "clock": clock,
                "before_mb": before,
                "peak_mb": high_water(),
                "attestations": int(catalogue.attested.nnz),
                "counts": len(set(np.diff(catalogue.attested.indptr).tolist())),
                "largest": int(np.diff(catalogue.attested.indptr).max()),
            }
        )
    )


def high_water() -> float:
    """Peak resident memory of this process in MB."""
    status = Path("/proc/self/status")
    if status.exists():
        line = next(x for x in status.read_text().splitlines() if x.startswith("VmHWM"))
        return int(line.split()[1]) / 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def measured(line: tuple[int, int, int]) -> dict:
    """Run one line in a process of its own."""
    command = [sys.executable, "-m", "tests.benchmarks.test_growth", "child", *map(str, line)]
    out = subprocess.run(command, check=True, capture_output=True, text=True, cwd=REPO)
    return json.loads(out.stdout.strip().splitlines()[-1])


def exponent(sizes, values) -> float:
    """Slope of log value over log size."""
    return float(np.polyfit(np.log(sizes), np.log(values), 1)[0])


# ---- the report --------------------------------------------------------------------------------


def million(base: dict, many: dict, large: dict) -> list[str]:
    """What a million motifs would need, from what was measured; memory by motif and by statistic."""
    more = LINES["motifs"][-1][0] - BASE[0]
    slope = (many["peak_mb"] - base["peak_mb"]) / more * 1024
    each = (total(many, PARTS[2:]) - total(base, PARTS[2:])) / more
    rows = 10 * large["attestations"]
    return [
        "## On paper: a million motifs",
        "",
        "Drawing does not know how many motifs there are: a draw serves them all. Comparing, judging and keeping",
        f"grow by {slope:.1f} kB and {1e3 * each:.2f} ms a motif (measured, first to third line): for a million",
        f"{slope * 1e6 / 1024**2:.0f} GB and {each * 1e6 / 60:.0f} min. With presence as in the large line",
        f"({rows:,} attestations, {rows * 5 / 1e9:.1f} GB as sparse rows of 32-bit ids) that is a machine of 16 GB, just. What",
        "would have to change before:",
        "",
        "- **memory to spare**: a motif's record as Python objects takes nearly all of it; as columns (forty numbers of",
        "  eight bytes and two short texts) a million take 0.4 GB. A record would be built when it is asked for.",
        "- **Moran scores**: thresholds are kept for every distinct score at every count: at most a million, 16 MB with",
        "  their counters for each chunk under way. No change.",
        "- **multiplicity and ranking** sort a million numbers: a second. No change.",
        "- **pages**: at 17 ms and up to 130 kB a motif a million take five hours and 130 GB. A run of that size should",
        "  write tables, and pages of what was asked for.",
        f"- **reading**: {rows:,} rows are {rows * 20 / 1e9:.0f} GB of CSV; the reader takes 50 million rows to a table. A",
        "  binary table (CLDF in pieces, or one file a chunk of motifs) would be needed.",
        "- **companions** (motifs on the same traditions) compare all pairs: 10^12 are out of reach; left out.",
        "",
    ]


def total(found: dict, parts=PARTS) -> float:
    """Seconds of some parts together."""
    return sum(found["seconds"][part] for part in parts)


def report(found: dict[tuple, dict], imports: float) -> str:
    """Give the text of reports/benchmarks/growth.md; ``imports`` in MB."""
    lines = [
        "# Growth with motifs, traditions and draws",
        "",
        "Made by `python -m tests.benchmarks.test_growth`; the module's docstring says what was run.",
        "",
        f"Python {platform.python_version()}, NumPy {np.__version__}, {platform.machine()}, two threads",
        "on two cores. Each line is one process; parts are seconds of processor, both threads",
        "together, compilation left out; memory is the process's peak, imports and the catalogue",
        "included. Exponents are slopes of log time over log size. Load of the machine at the end",
        f"(runnable tasks, one minute): {os.getloadavg()[0]:.1f}; above two, the clock runs longer than",
        "it would on an idle machine.",
        "",
        "| motifs | traditions | draws | attestations | distinct counts | "
        + " | ".join(PARTS)
        + " | all, s | by the clock, s | peak, MB |",
        "|" + "---|" * (8 + len(PARTS)),
    ]
    for line, one in found.items():
        seconds = " | ".join(f"{one['seconds'][p]:.2f}" for p in PARTS)
        lines.append(
            f"| {line[0]:,} | {line[1]:,} | {line[2]:,} | {one['attestations']:,} | "
            f"{one['counts']:,} | {seconds} | **{total(one):.1f}** | {one['clock']:.1f} | "
            f"{one['peak_mb']:,.0f} |"
        )
    lines += [
        "",
        "| grows with | all | worlds | judge, assemble | memory over imports |",
    ]
    lines.append("|---|---|---|---|---|")
    for place, name in enumerate(LINES):
        sizes = [line[place] for line in LINES[name]]
        ones = [found[line] for line in LINES[name]]
        slopes = [
            exponent(sizes, [total(o) for o in ones]),
            exponent(sizes, [o["seconds"]["worlds"] for o in ones]),
            exponent(sizes, [total(o, PARTS[3:]) for o in ones]),
            exponent(sizes, [max(o["peak_mb"] - imports, 1.0) for o in ones]),
        ]
        lines.append(f"| {name} | " + " | ".join(f"{s:.2f}" for s in slopes) + " |")
    one = found[LARGE]
    lines += [
        "",
        f"The large one (100,000 motifs, 10,000 traditions, {one['attestations']:,} attestations in",
        f"10^9 cells): {total(one):.0f} s of processor, {one['clock']:.0f} s by the clock, and",
        f"**{one['peak_mb'] / 1024:.2f} GB** (aim: within 16 GB on two cores).",
        "",
    ]
    return "\n".join(lines + million(found[BASE], found[LINES["motifs"][-1]], one))


@pytest.mark.benchmark
def test_large_catalogue_fits_sixteen_gigabytes():
    assert measured(LARGE)["peak_mb"] < 16 * 1024


def main() -> None:
    """Measure every line, or (as a child) one."""
    if len(sys.argv) > 2:
        child(*map(int, sys.argv[2:]))
        return
    lines = list(dict.fromkeys([*(x for part in LINES.values() for x in part), LARGE]))
    found = {}
    for line in lines:
        found[line] = measured(line)
        print(line, json.dumps(found[line]), flush=True)
    imports = measured((3, 50, 99))["before_mb"]
    REPORT.write_text(report(found, imports), encoding="utf-8")
    print(REPORT.read_text(encoding="utf-8"))


if __name__ == "__main__":
    main()
