"""Are the route shares calibrated, and how much do they tell? Writes reports/calibration/shares.md.

Run by hand: ``nice pytest -m calibration tests/calibration/test_shares_calibration.py``.
Simulation-based calibration: Talts et al. 2018, arXiv:1804.06788, with weighted snapshots.
"""

from __future__ import annotations

import dataclasses
import time
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import chi2

from twicetold.evidence.mixture import catalogue_shares
from twicetold.evidence.results import RouteShares
from twicetold.evidence.shares import build_bank, fit_posterior
from twicetold.evidence.shares._kernels import SUMMARIES, unpack_bits
from twicetold.graph import build_graph
from twicetold.randomness import Stream, chunk_generator, chunk_words
from twicetold.spread import SpreadModel, cap_for, chain_tables, walk_chunk
from twicetold.workers import ThreadPool

pytestmark = pytest.mark.calibration
REPORT = Path(__file__).resolve().parents[2] / "reports" / "calibration" / "shares.md"
COUNTS = np.array([3, 10, 30, 100, 200], dtype=np.int32)
PROTOTYPE = {10: (0.16, 0.18, 0.65), 30: (0.12, 0.14, 0.75), 100: (0.11, 0.14, 0.79)}
SEVEN = ("groups_1", "same_pairs_1", "cross_pairs_1", "families", "largest_cluster", "strands")
LINES: list[str] = []


def say(*lines):
    LINES.extend(lines)
    print("\n".join(lines))


def made_up_world(x, *, uneven=False):
    """1,000 traditions at random on the globe, 60 compact families of 1 to some 50."""
    rng = np.random.default_rng(12)
    latitude = np.degrees(np.arcsin(rng.uniform(-0.85, 0.85, 1000)))
    longitude = rng.uniform(-180, 180, 1000)
    graph = build_graph(latitude, longitude, "nearest:6")
    a, b = np.radians(latitude), np.radians(longitude)
    at = np.stack([np.cos(a) * np.cos(b), np.cos(a) * np.sin(b), np.sin(a)], axis=1)
    centres = at[rng.choice(1000, 60, replace=False)]
    reach = rng.uniform(0, 0.12, 60)
    family = np.argmin(((at[:, None] - centres) ** 2).sum(axis=2) - reach, axis=1)
    more = {}
    if uneven:
        effort = rng.lognormal(sigma=0.8, size=1000)
        more = {"propensity": effort, "recorded": 1 - np.exp(-1.5 * effort)}
    return SpreadModel(graph, x, family=np.unique(family, return_inverse=True)[1], **more)


def _some(shared, key):
    """One chunk of test walks: shares and counts apart from any bank's."""
    tables, place, counts, truths = shared
    rng = chunk_generator(2024, Stream.POWER, key)
    words = chunk_words(2024, Stream.POWER, key, 1, draws=50)
    shares = rng.dirichlet(np.ones(3), 50) if truths is None else truths[key]
    weight = np.zeros((50, len(counts)))
    rows = np.zeros((50, len(counts), len(SUMMARIES)), dtype=np.float32)
    for w in range(50):
        kept = walk_chunk(dataclasses.replace(tables, shares=shares[w]), words[w : w + 1], counts)
        weight[w] = kept.weight[0]
        seen = weight[w] > 0
        sizes = np.where(seen, counts, 0).astype(np.int64)
        members = np.empty(sizes.sum(), dtype=np.int32)
        unpack_bits(kept.bits[0], sizes, members)
        start = np.concatenate([[0], np.cumsum(sizes[seen])]).astype(np.int64)
        rows[w, seen] = place.summaries(members, start)
    return shares, weight, rows


def snapshots(model, place, walks, *, counts=COUNTS, truths=None):
    """Independent walks with flat (or given) shares: truths, weights, summaries."""
    even = dataclasses.replace(model, shares=(1 / 3, 1 / 3, 1 / 3))
    tables = chain_tables(even, cap_for(model, 200))
    parts = list(
        ThreadPool(2).run(_some, (tables, place, counts, truths), range(walks // 50), label="")
    )
    return tuple(np.concatenate([p[k] for p in parts]) for k in range(3))


def judged(weights, where, truth, importance):
    """Weighted figures of posteriors against the truth."""
    w = importance / importance.sum()
    mean = weights @ where.centre
    low, high = where.intervals(weights)
    ranks = []
    edges = np.linspace(0, 1, where.marginal.shape[2] + 1)
    for r in range(3):
        below = np.cumsum(weights @ where.marginal[r], axis=1)
        below = np.concatenate([np.zeros((len(below), 1)), below], axis=1)
        ranks.append([np.interp(t, edges, c) for t, c in zip(truth[:, r], below, strict=True)])
    ranks = np.array(ranks)
    histogram = [np.histogram(u, 10, (0, 1), weights=w)[0] for u in ranks]
    effective = 1 / (w @ w)
    # Pearson's statistic on the effective number of draws (Kish).
    p = [chi2.sf(effective * np.sum((h - 0.1) ** 2 / 0.1), 9) for h in histogram]
    return {
        "rmse": np.sqrt(w @ (mean - truth) ** 2),
        "dominant": float(w @ (mean.argmax(axis=1) == truth.argmax(axis=1))),
        "coverage": w @ ((truth >= low) & (truth <= high)),
        "width": w @ (high - low),
        "ranks": histogram,
        "p": p,
        "effective": effective,
    }


def table_row(n, j):
    triple = [" / ".join(f"{v:.3f}" for v in j[k]) for k in ("rmse", "coverage", "width")]
    return f"| {n} | {triple[0]} | {j['dominant']:.3f} | {triple[1]} | {triple[2]} |"


HEAD = (
    "| n | RMSE emergence / contact / inheritance | dominant route right | 90 % intervals hold "
    "| mean width |",
    "|---|---|---|---|---|",
)


def columns(rows, n, names):
    index = [SUMMARIES.index(name) for name in names]
    values = rows[:, index].astype(float)
    return np.column_stack([np.sqrt(values), values[:, -1] / n])


def regression_abc(train, truth, weight, rows, prior_sd):
    """Rejection with local-linear adjustment (Beaumont, Zhang & Balding 2002)."""
    scale = train.std(axis=0) + 1e-9
    out = np.empty((len(rows), 3))
    for k, row in enumerate(rows):
        away = (((train - row) / scale) ** 2).sum(axis=1)
        near = np.argpartition(away, 500)[:500]
        kernel = weight[near] * np.maximum(1 - away[near] / (away[near].max() + 1e-12), 0)
        design = np.column_stack([np.ones(500), (train[near] - row) / scale])
        root = np.sqrt(kernel)[:, None]
        gram = (design * root).T @ (design * root) + 1e-3 * np.eye(design.shape[1])
        out[k] = np.linalg.solve(gram, (design * kernel[:, None]).T @ truth[near])[0]
    out = np.clip(out, 0, 1)
    return out / out.sum(axis=1, keepdims=True)


def synthetic_likelihood(train, truth, weight, rows, grid):
    """A normal law of the summaries at each of 66 grid points (Wood 2010), flat prior."""
    log = np.empty((len(rows), len(grid)))
    for g, point in enumerate(grid):
        kernel = weight * np.exp(-((truth - point) ** 2).sum(axis=1) / (2 * 0.07**2))
        kernel /= kernel.sum()
        mean = kernel @ train
        off = train - mean
        cover = (off * kernel[:, None]).T @ off + 1e-6 * np.eye(train.shape[1])
        away = rows - mean
        log[:, g] = -0.5 * np.einsum("sd,de,se->s", away, np.linalg.inv(cover), away)
        log[:, g] -= 0.5 * np.linalg.slogdet(cover)[1]
    log -= log.max(axis=1, keepdims=True)
    weights = np.exp(log)
    return weights / weights.sum(axis=1, keepdims=True)


def baselines(model, place, test):
    """The two usual ways, on ten thousand walks at each n, judged on the same snapshots."""
    say(
        "",
        "## Against the usual ways",
        "",
        "10,000 walks at exactly this n, seven transformed summaries (joins inside and across "
        "families, clusters, largest cluster, families, strands); RMSE emergence / contact / "
        "inheritance on the first 3,000 test snapshots.",
        "",
        "| n | prior | rejection and regression (Beaumont et al. 2002) | synthetic likelihood "
        "(Wood 2010) | this posterior |",
        "|---|---|---|---|---|",
    )
    counts = np.array([10, 30, 100], dtype=np.int32)
    truths = np.random.default_rng(77).dirichlet(np.ones(3), (200, 50))
    truth, weight, rows = snapshots(model, place.map, 10_000, counts=counts, truths=truths)
    grid = np.array([(i, j, 10 - i - j) for i in range(11) for j in range(11 - i)]) / 10
    ok = []
    for k, n in enumerate(counts):
        t = list(COUNTS).index(n)
        use = np.flatnonzero(test[1][:, t] > 0)[:3000]
        seen, goal = columns(test[2][use, t], n, SEVEN), test[0][use]
        w = test[1][use, t] / test[1][use, t].sum()
        there = weight[:, k] > 0
        train = columns(rows[there, k], n, SEVEN)
        one = regression_abc(train, truth[there], weight[there, k], seen, goal.std())
        other = synthetic_likelihood(train, truth[there], weight[there, k], seen, grid) @ grid
        ours = place.weights(test[2][use, t], np.full(len(use), n)) @ place.where.centre
        errors = [np.sqrt(w @ (m - goal) ** 2) for m in (np.full((1, 3), 1 / 3), one, other, ours)]
        said = " | ".join(" / ".join(f"{v:.3f}" for v in e) for e in errors)
        say(f"| {n} | {said} |")
        ok.append(np.all(errors[3] < errors[1]) and np.all(errors[3] < errors[2]))
    return ok


def test_route_shares_are_calibrated(tmp_path_factory):
    begun, cpu = time.perf_counter(), time.process_time()
    model = made_up_world(0.95)
    bank = build_bank(model, largest=200, seed=1)
    fitted = fit_posterior(bank, seed=1)
    test = snapshots(model, fitted.map, 20_000)
    say(
        "# Route shares: calibration",
        "",
        "Command: `pytest -m calibration tests/calibration/test_shares_calibration.py`. Made-up "
        "world: 1,000 traditions at random on the globe (nearest:6), 60 compact families, x = .95 "
        "known, everything recorded, flat prior on the three shares. Bank: 33,000 walks; judged "
        "on 20,000 other walks (weighted snapshots, some 10,000 effective, so a coverage of .900 "
        "has a standard error of .003).",
        "",
        *HEAD,
    )
    found = {}
    for k, n in enumerate(COUNTS.tolist()):
        use = test[1][:, k] > 0
        weights = fitted.weights(test[2][use, k], np.full(use.sum(), n))
        found[n] = judged(weights, fitted.where, test[0][use], test[1][use, k])
        say(table_row(n, found[n]))
    say(
        "",
        "A prototype's figures on such a world (RMSE emergence, inheritance; dominant route): "
        + "; ".join(f"n = {n}: {a}, {b}; {c}" for n, (a, b, c) in PROTOTYPE.items())
        + ". Prior standard deviation of a share: .236.",
        "",
        "## Rank histograms",
        "",
        "Rank of the true share in its posterior, ten bins (flat: .100 each), and Pearson's p on "
        "the effective number of snapshots.",
        "",
        "| n | share | bins | p |",
        "|---|---|---|---|",
    )
    for n, j in found.items():
        for r, route in enumerate(("emergence", "contact", "inheritance")):
            bins = " ".join(f"{h:.3f}"[1:] for h in j["ranks"][r])
            say(f"| {n} | {route} | {bins} | {j['p'][r]:.3f} |")
    better = baselines(model, fitted, test)
    misstated(fitted)
    pure_truths(model, fitted)
    mixture(model, fitted)
    uneven = uneven_world()
    say(
        "",
        f"Whole study: {time.perf_counter() - begun:.0f} s on two shared cores, "
        f"{time.process_time() - cpu:.0f} s of processor time.",
    )
    REPORT.parent.mkdir(parents=True, exist_ok=True)
    REPORT.write_text("\n".join(LINES) + "\n", encoding="utf-8")
    for n, j in {**found, **{f"uneven {n}": j for n, j in uneven.items()}}.items():
        error = 4 * np.sqrt(0.09 / j["effective"])
        assert np.abs(j["coverage"] - 0.9).max() <= 0.02 + error, n
    for n, (emergence, inheritance, dominant) in PROTOTYPE.items():
        assert found[n]["rmse"][0] < emergence
        assert found[n]["rmse"][2] < inheritance
        assert found[n]["dominant"] > dominant
    assert all(better)


def misstated(fitted):
    say("", "## Turnover misstated", "", "The bank believes x = .95; the truth is another.", "")
    say("| true x " + HEAD[0], "|---" + HEAD[1])
    for x in (0.5, 0.9, 0.975, 0.99):
        other = snapshots(made_up_world(x), fitted.map, 3000)
        for k, n in enumerate(COUNTS.tolist()):
            if n in (10, 30, 100):
                use = other[1][:, k] > 0
                weights = fitted.weights(other[2][use, k], np.full(use.sum(), n))
                j = judged(weights, fitted.where, other[0][use], other[1][use, k])
                say(f"| {x} " + table_row(n, j))


def pure_truths(model, fitted):
    say(
        "",
        "## When one route is all there is",
        "",
        "The flat prior gives little to the corners: a motif carried by one route alone is drawn "
        "towards the middle. Posterior mean and share of motifs whose interval reaches the "
        "corner (all of 1), 1,000 walks each.",
        "",
        "| n | pure route | mean of its share | interval reaches 1 | dominant route right |",
        "|---|---|---|---|---|",
    )
    for r, route in enumerate(("emergence", "contact", "inheritance")):
        truths = np.broadcast_to(np.eye(3)[r], (20, 50, 3))
        _, weight, rows = snapshots(model, fitted.map, 1000, truths=truths)
        for k, n in enumerate(COUNTS.tolist()):
            use = weight[:, k] > 0
            w = weight[use, k] / weight[use, k].sum()
            told = fitted.weights(rows[use, k], np.full(use.sum(), n))
            mean = told @ fitted.where.centre
            _, high = fitted.where.intervals(told)
            right = w @ (mean.argmax(axis=1) == r)
            reached = w @ (high[:, r] == 1)
            say(f"| {n} | {route} | {w @ mean[:, r]:.2f} | {reached:.2f} | {right:.2f} |")


def mixture(model, fitted):
    """A catalogue of 600 motifs of three kinds, its counts from the log-series, n >= 5."""
    rng = np.random.default_rng(31)
    kinds = np.array([[0, 1, 0], [0.3, 0.5, 0.2], [1, 0, 0]], dtype=float)
    kind = rng.choice(3, 600, p=[0.5, 0.3, 0.2])
    n = np.array([5, 6, 8, 10, 13, 17, 22, 29, 38, 50, 65, 85, 110, 145, 200], dtype=np.int32)
    # Each count stands for those up to the next: about even over the logs, thinned by x**n.
    law = 0.95**n
    slot = rng.choice(len(n), 600, p=law / law.sum())
    # Ten walks a motif, of which one is taken in proportion to its weight.
    shares = np.repeat(kinds[kind], 10, axis=0).reshape(120, 50, 3)
    _, weight, rows = snapshots(model, fitted.map, 6000, counts=n, truths=shares)
    mine = weight[np.arange(6000), np.repeat(slot, 10)].reshape(600, 10)
    taken = np.array([rng.choice(10, p=w / w.sum()) for w in mine]) + np.arange(600) * 10
    told = fitted.weights(rows[taken, slot], n[slot])
    truths = kinds[kind]
    nothing = np.zeros(3)
    routes = ("emergence", "contact", "inheritance")
    posteriors = [
        RouteShares(routes, nothing, nothing, nothing, fitted.where.knots, t) for t in told
    ]
    row = catalogue_shares(posteriors, [""] * 600, seed=1).iloc[0]
    plain = (told @ fitted.where.centre).mean(axis=0)
    say(
        "",
        "## A whole catalogue",
        "",
        "600 motifs, n >= 5 from the log-series: half contact alone, three in ten (.3, .5, .2), "
        "two in ten emergence alone.",
        "",
        "| figure | truth | mixture and 90 % interval | mean of single posteriors |",
        "|---|---|---|---|",
    )
    for r, route in enumerate(routes):
        c = f"{route}_share"
        say(
            f"| {c} | {truths.mean(axis=0)[r]:.3f} | {row[c]:.3f} "
            f"({row[c + '_low']:.3f} to {row[c + '_high']:.3f}) | {plain[r]:.3f} |"
        )
    for c, truth in (("emergence_led", (kind == 2).mean()), ("contact_alone", (kind == 0).mean())):
        say(
            f"| {c} | {truth:.3f} | {row[c]:.3f} ({row[c + '_low']:.3f} to "
            f"{row[c + '_high']:.3f}) | |"
        )


def uneven_world():
    """Unequal propensities and incomplete recording, a smaller bank."""
    model = made_up_world(0.95, uneven=True)
    fitted = fit_posterior(build_bank(model, largest=200, seed=1, walks=12_000), seed=1)
    test = snapshots(model, fitted.map, 6000)
    say(
        "",
        "## Unequal effort, incomplete recording",
        "",
        "Propensity log-normal (log-sd .8), recorded with probability 1 - exp(-1.5 effort), mean "
        f"{np.mean(model.recorded):.2f}; bank of 12,000 walks, judged on 6,000.",
        "",
        *HEAD,
    )
    out = {}
    for k, n in enumerate(COUNTS.tolist()):
        use = test[1][:, k] > 0
        weights = fitted.weights(test[2][use, k], np.full(use.sum(), n))
        out[n] = judged(weights, fitted.where, test[0][use], test[1][use, k])
        say(table_row(n, out[n]))
    return out
