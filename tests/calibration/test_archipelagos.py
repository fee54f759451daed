"""The whole tool on archipelagos it has never seen, everything fitted. Writes reports/calibration.

Run by hand: ``nice pytest -m calibration tests/calibration/test_archipelagos.py``. Every seed gives
another sea, other peoples and other histories, told by code that shares nothing with the analysis.
Turnover and recording are fitted to each catalogue, as for a user.
"""

from __future__ import annotations

import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from statsmodels.stats.proportion import proportion_confint

from twicetold.catalogue import read_catalogue
from twicetold.evidence import rank_catalogue
from twicetold.evidence.verdict import VERDICTS, Grounds, verdict
from twicetold.example import make_example
from twicetold.example._history import RECORDING, TURNOVER
from twicetold.example._tables import table_files
from twicetold.plan import Plan
from twicetold.workers import ThreadPool

pytestmark = pytest.mark.calibration
REPORT = Path(__file__).resolve().parents[2] / "reports" / "calibration" / "archipelagos.md"
COMMAND = "nice pytest -m calibration tests/calibration/test_archipelagos.py"
SEEDS = range(101, 111)
ROUTES = ("emergence", "contact", "inheritance")
ALPHA, MOST = 0.05, 0.06
PLAN = Plan().replace(evidence__draws=19_999, sensitivity__hidden=False)
LINES: list[str] = []


def say(*lines):
    LINES.extend(lines)
    print("\n".join(lines), flush=True)


def cell(hits):
    """Per cent with a 95 % Clopper-Pearson interval, and the number it is of."""
    hits = np.asarray(hits, dtype=bool)
    if not len(hits):
        return "–"
    low, high = proportion_confint(int(hits.sum()), len(hits), method="beta")
    return f"{100 * hits.mean():.1f} ({100 * low:.1f}–{100 * high:.1f}) of {len(hits)}"


def table(head, rows):
    say("", "| " + " | ".join(head) + " |", "|---" * len(head) + "|")
    say(*("| " + " | ".join(map(str, row)) + " |" for row in rows))


def study(seed, folder):
    """Rank one archipelago; its motifs beside their truth, and the fits."""
    folder.mkdir()
    for name, content in table_files(make_example(seed)).items():
        (folder / name).write_bytes(content)
    found = rank_catalogue(
        read_catalogue(folder), PLAN, pool=ThreadPool(2), details=False, cache=False
    )
    truth = pd.read_csv(folder / "truth.csv")
    truth = truth.rename(columns={f"{r}_share": f"{r}_true" for r in ROUTES})
    both = found.motifs.merge(truth, on="motif_id")
    assert len(both) == len(truth) == 120
    return both.assign(seed=seed), found.fits


def alone(row):
    """The verdict by plain p."""
    too_rare = np.isnan(row.q_against_emergence)
    grounds = Grounds(
        emergence=float("nan") if too_rare else row.p_against_emergence,
        ancestry=row.p_against_ancestry,
        transmission=row.p_against_transmission,
        attainable=row.p_attainable,
        families=True,
        transmission_known=True,
        holders=row.holders,
        surveyed=row.surveyed,
    )
    return verdict(grounds, ALPHA)[0]


def fits_of(fits):
    say("", "## Fits", "", f"True turnover {TURNOVER}, true recording rate κ {RECORDING}.")
    rows = []
    for seed, f in zip(SEEDS, fits, strict=True):
        x = f"{f['turnover']:.3f} ({f['turnover_low']:.3f}–{f['turnover_high']:.3f})"
        kappa = f"{f['recording_rate']:.3f} ({f['recording_rate_low']:.3f}–"
        kappa += f"{f['recording_rate_high']:.3f})"
        rows.append((seed, x, f"{f['turnover_goodness_p']:.2f}", kappa))
    table(("seed", "turnover, 95 %", "goodness p", "κ, 95 %"), rows)
    held = [f["turnover_low"] <= TURNOVER <= f["turnover_high"] for f in fits]
    kappas = [f["recording_rate_low"] <= RECORDING <= f["recording_rate_high"] for f in fits]
    say("", f"The intervals hold the truth in {sum(held)} and {sum(kappas)} of {len(fits)}.")


def verdicts(motifs):
    for name, column in (("by q, 120 motifs judged together", "verdict"), ("by plain p", "alone")):
        say("", f"## Verdicts {name}, per cent")
        rows = []
        for route in (*ROUTES, "mixed"):
            some = motifs[motifs["route"] == route]
            shares = [f"{100 * (some[column] == v).mean():.1f}" for v in VERDICTS]
            rows.append((f"{route} ({len(some)})", *shares))
        table(("truth", *VERDICTS), rows)
    say("", "## Right and wrong by plain p, by recorded holders")
    wrong = {
        "emergence": ("contact spread", "contact or ancestry", "several origins, then spread"),
        "contact": ("parallel emergence", "several origins, then spread"),
        "inheritance": ("contact spread", "parallel emergence", "several origins, then spread"),
    }
    right = {
        "emergence": ("parallel emergence",),
        "contact": ("contact spread", "contact or ancestry"),
        "inheritance": ("contact or ancestry",),
    }
    say(
        "",
        "Right here is, for contact, either verdict that leaves contact open. Motifs of "
        "inheritance count only where inheritance was all that happened (a tradition without kin "
        "has nobody to hand a motif to, and it emerges anew).",
    )
    rows = []
    for route in ROUTES:
        some = motifs[(motifs["route"] == route) & (motifs[f"{route}_realised"] == 1.0)]
        for low, high in CLASSES:
            part = some[some["holders"].between(low, high)]["alone"]
            rows.append(
                (
                    route,
                    f"{low}–{high}",
                    cell(part.isin(right[route])),
                    cell(part.isin(wrong[route])),
                )
            )
    table(("truth", "holders", "right", "wrong definite"), rows)


CLASSES = ((3, 5), (6, 12), (13, 150))


def levels(motifs):
    say(
        "",
        "## Level: share of motifs with p ≤ .05 where the world is true",
        "",
        "Emergence alone, of motifs whose gains were all emergences (the reefs' pull is unknown to "
        "the default plan: *sea and weather* apart); contact alone; no second invention for "
        "transmission; inheritance alone for ancestry.",
    )
    pure = {r: motifs[motifs[f"{r}_realised"] == 1.0] for r in ROUTES}
    sea = pure["emergence"]["category"] == "sea and weather"
    worlds = (
        ("emergence-only", "p_against_emergence", pure["emergence"][~sea]),
        ("emergence-only, sea and weather", "p_against_emergence", pure["emergence"][sea]),
        ("ancestry-only", "p_against_ancestry", pure["inheritance"]),
        ("contact-only", "p_against_contact", pure["contact"]),
        (
            "transmission-only",
            "p_against_transmission",
            motifs[motifs["emergence_realised"] == 0.0],
        ),
    )
    rows, over = [], []
    for name, column, true in worlds:
        some = true.dropna(subset=[column])
        hits = some[column] <= ALPHA
        by = [cell(hits[some["holders"].between(a, b)]) for a, b in CLASSES]
        rows.append((name, *by, cell(hits)))
        low = proportion_confint(int(hits.sum()), len(hits), method="beta")[0]
        if low > MOST and "sea" not in name:
            over.append(name)
    table(("world", *(f"{a}–{b} holders" for a, b in CLASSES), "all"), rows)
    return over


def shares(motifs):
    say(
        "",
        "## Route shares",
        "",
        "Against the shares of gains the motif's history was told with. Intervals of pure routes "
        "cannot hold the corner of the triangle, so coverage is of the mixed motifs.",
    )
    told = motifs.dropna(subset=["contact_share"])
    mean = told[[f"{r}_share" for r in ROUTES]].to_numpy()
    true = told[[f"{r}_true" for r in ROUTES]].to_numpy()
    rows = []
    for low, high in CLASSES:
        at = told["holders"].between(low, high).to_numpy()
        error = np.sqrt(((mean - true)[at] ** 2).mean(axis=0))
        pure = at & (true.max(axis=1) == 1.0)
        most = mean[pure].argmax(axis=1) == true[pure].argmax(axis=1)
        mixed = at & (told["route"] == "mixed").to_numpy()
        held = [
            told[f"{r}_share_low"].to_numpy()[mixed] <= true[mixed, k] for k, r in enumerate(ROUTES)
        ]
        held = [
            a & (true[mixed, k] <= told[f"{r}_share_high"].to_numpy()[mixed])
            for k, (a, r) in enumerate(zip(held, ROUTES, strict=True))
        ]
        rows.append(
            (
                f"{low}–{high}",
                at.sum(),
                *(f"{e:.2f}" for e in error),
                cell(most),
                *(cell(h) for h in held),
            )
        )
    names = (
        "holders",
        "motifs",
        *(f"RMSE {r}" for r in ROUTES),
        "largest share is the truth (pure)",
        *(f"coverage {r} (mixed)" for r in ROUTES),
    )
    table(names, rows)


def test_the_tool_on_unseen_archipelagos(tmp_path):
    begun, cpu = time.perf_counter(), time.process_time()
    parts, fits = [], []
    for seed in SEEDS:
        both, found = study(seed, tmp_path / str(seed))
        parts.append(both)
        fits.append(found)
        print(seed, f"{time.perf_counter() - begun:.0f} s", flush=True)
    motifs = pd.concat(parts, ignore_index=True)
    motifs["alone"] = [alone(row) for row in motifs.itertuples()]
    say(
        "# Archipelagos never seen before",
        "",
        f"Command: `{COMMAND}`.",
        "",
        f"{len(SEEDS)} archipelagos (seeds {SEEDS[0]} to {SEEDS[-1]}; invented, 150 traditions and "
        "120 motifs each), histories told by the example's own code; the default plan but for "
        f"{PLAN.evidence.draws:,} draws: turnover, recording and effort all taken from the "
        "catalogue. Per cent with 95 % Clopper–Pearson intervals.",
    )
    fits_of(fits)
    over = levels(motifs)
    verdicts(motifs)
    shares(motifs)
    say(
        "",
        f"Worlds rejected too often (whole interval over {100 * MOST:.0f} %): "
        f"{', '.join(over) or 'none'}.",
        "",
        f"Whole study: {time.perf_counter() - begun:.0f} s on two shared cores, "
        f"{time.process_time() - cpu:.0f} s of processor time.",
    )
    REPORT.write_text("\n".join(LINES) + "\n", encoding="utf-8")
    assert not over
