"""A made-up Ranking for the tests of figures and pages.

Numbers in it are drawn, not computed from one another: these tests are about what is shown. The
places lie on both sides of the antimeridian, as an archipelago's may.
"""

from __future__ import annotations

import dataclasses

import numpy as np
import pandas as pd
import scipy.sparse as sp

from twicetold.catalogue.model import Catalogue
from twicetold.errors import Problem
from twicetold.evidence.results import Comparison, MotifEvidence, Ranking, RouteShares
from twicetold.graph.model import ContactGraph
from twicetold.plan import Plan
from twicetold.references.law import Law

COMMAND = {"rank": "twicetold rank isles --plan plan.toml --out RUN", "catalogue": "isles"}

ODD_NAMES = (
    "<script>alert(1)</script>",
    "القمر الذي ابتلعه السمك",
    "समुद्र में खोई हुई लड़की",
    'Ends with "quotes" & </script><!-- comment',
    '=HYPERLINK("x")',
)
ODD_IDS = ("a/../b", "CON", "Case", "case", "ид-7")
FAMILIES = ("Oru", "Tevan", "Lissic", "Old Shore", "")
CATEGORIES = ("sky", "sea", "tricksters", "origins")
VERDICTS = (
    "contact spread",
    "contact or ancestry",
    "parallel emergence",
    "several origins, then spread",
    "undecided",
)


def frozen(array):
    array = np.ascontiguousarray(array)
    array.flags.writeable = False
    return array


def make_catalogue(n=80, motifs=40, *, seed=3, rich=True, world=False) -> Catalogue:
    rng = np.random.default_rng(seed)
    middles = np.array([[-8, 172], [4, 179], [-14, -176], [1, -168], [-4, 160]])
    which = rng.integers(len(middles), size=n)
    lat = middles[which, 0] + rng.normal(0, 2.2, n)
    lon = (middles[which, 1] + rng.normal(0, 3.0, n) + 180) % 360 - 180
    if world:
        lat, lon = np.degrees(np.arcsin(rng.uniform(-0.6, 0.93, n))), rng.uniform(-180, 180, n)
    p = np.minimum(0.95, 0.04 + 0.4 * rng.random(motifs) ** 3)
    attested = rng.random((motifs, n)) < p[:, None]
    for k in range(motifs):
        near = np.hypot(lat - lat[k % n], (lon - lon[k % n] + 180) % 360 - 180) < 5
        attested[k] |= near & (rng.random(n) < 0.5) & (k % 3 == 0)
        attested[k, k % n] = True
    sets = [np.ones(n, dtype=bool), rng.random(n) < 0.85]
    of = (np.arange(motifs) % 5 == 2).astype(np.int32)
    if not rich:
        sets, of = sets[:1], np.zeros(motifs, dtype=np.int32)
    missing = np.zeros((motifs, n), dtype=bool)
    for k in range(motifs):
        attested[k] &= sets[of[k]]
        if of[k]:
            missing[k] = ~sets[of[k]] & (rng.random(n) < 0.3)
    names = [f"The {w} motif {k}" for k, w in enumerate(np.resize(WORDS, motifs))]
    ids = [f"m{k:03d}" for k in range(motifs)]
    if rich:
        names[: len(ODD_NAMES)] = ODD_NAMES
        ids[: len(ODD_IDS)] = ODD_IDS
    family = tuple(FAMILIES[w] for w in which) if rich else ("",) * n
    return Catalogue(
        title="Stories of the Invented Isles",
        notice="Invented data: no such peoples, places or stories exist." if rich else "",
        tradition_ids=tuple(f"t{i:04d}" for i in range(n)),
        tradition_names=tuple(
            f"{SYLLABLES[i % 9]}{SYLLABLES[(i * 7 + 3) % 9].lower()} {i}" for i in range(n)
        ),
        latitude=frozen(lat),
        longitude=frozen(lon),
        family=family,
        branch=("",) * n,
        region=("",) * n,
        effort=frozen(rng.lognormal(3, 1, n)) if rich else None,
        covariates={},
        access=tuple("restricted" if rich and i == 5 else "open" for i in range(n)),
        motif_ids=tuple(ids),
        motif_names=tuple(names),
        motif_categories=tuple(CATEGORIES[k % 4] if rich else "" for k in range(motifs)),
        motif_access=tuple("restricted" if rich and k == 6 else "open" for k in range(motifs)),
        attested=sp.csr_array(attested),
        surveyed_sets=tuple(frozen(s) for s in sets),
        surveyed_of=frozen(of),
        not_applicable=sp.csr_array(missing),
        unlocated=("t9001", "t9002") if rich else (),
        withheld_traditions=2 if rich else 0,
        labels={"t0003": ("TK Attribution: ask the island council first",)} if rich else {},
        warnings=(
            Problem(
                "traditions.csv", 12, "latitude", "two traditions share one place.", "Check them."
            ),
            Problem("attestations.csv", 0, "", "3 repeated rows were merged.", ""),
        )
        if rich
        else (),
    )


WORDS = ("drowned", "borrowed", "sleeping", "woven", "salt", "twice-born", "hollow")
SYLLABLES = ("Ano", "Bei", "Tavo", "Kesi", "Lumo", "Ree", "Oshi", "Pala", "Wen")


def make_graph(catalogue: Catalogue, k=3) -> ContactGraph:
    lat, lon = np.radians(catalogue.latitude), np.radians(catalogue.longitude)
    xyz = np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], 1)
    n = len(xyz)
    pairs = set()
    for i in range(n):
        for j in np.argsort(-(xyz @ xyz[i]))[1 : k + 1]:
            if i != n - 1 and j != n - 1:
                pairs.add((min(i, int(j)), max(i, int(j))))
    edges = np.array(sorted(pairs), dtype=np.int32)
    km = 6371.0088 * np.arccos(np.clip((xyz[edges[:, 0]] * xyz[edges[:, 1]]).sum(1), -1, 1))
    return ContactGraph(
        n, frozen(edges), frozen(km), frozen(km > np.quantile(km, 0.985)), "nearest:3"
    )


def make_law(rng, middle, spread, draws=99_999, exact=False) -> Law:
    values, counts = np.unique(
        np.maximum(0, rng.normal(middle, spread, 4000).round()), return_counts=True
    )
    return Law(
        frozen(values.astype(np.int64)),
        frozen(counts * (draws / 4000)),
        0 if exact else draws,
        exact,
        float(draws),
    )


def components(holders, edges):
    place = {int(h): k for k, h in enumerate(holders)}
    root = list(range(len(holders)))

    def find(a):
        while root[a] != a:
            a = root[a]
        return a

    local = np.zeros(len(holders), dtype=np.int32)
    for a, b in edges.tolist():
        if a in place and b in place:
            local[[place[a], place[b]]] += 1
            root[find(place[a])] = find(place[b])
    top = [find(k) for k in range(len(holders))]
    order = sorted(set(top), key=lambda r: (-top.count(r), r))
    return np.array([order.index(r) for r in top], dtype=np.int32), local


def make_shares(rng, routes=3) -> RouteShares:
    if routes == 3:
        grid = np.array([(a, b, 10 - a - b) for a in range(11) for b in range(11 - a)]) / 10
    else:
        grid = np.array([(a, 20 - a, 0) for a in range(21)]) / 20
    centre = rng.dirichlet([2.0] * 3) if routes == 3 else np.array([0.3, 0.7, 0])
    weight = np.exp(-((grid - centre) ** 2).sum(1) / 0.06)
    weight /= weight.sum()
    mean = (grid * weight[:, None]).sum(0)
    low, high = np.empty(3), np.empty(3)
    for k in range(3):
        order = np.argsort(grid[:, k], kind="stable")
        total = np.cumsum(weight[order])
        low[k] = grid[order[np.searchsorted(total, 0.05)], k]
        high[k] = grid[order[min(np.searchsorted(total, 0.95), len(order) - 1)], k]
    names = ("emergence", "contact", "inheritance")[:routes]
    return RouteShares(
        names,
        frozen(mean[:routes]),
        frozen(low[:routes]),
        frozen(high[:routes]),
        frozen(grid),
        frozen(weight),
    )


def make_evidence(catalogue, graph, index, rank, *, rich=True, seed=11) -> MotifEvidence:
    rng = np.random.default_rng([seed, index])
    holders = catalogue.holders(index)
    n = len(holders)
    cluster_of, local = components(holders, graph.edges)
    joins, clusters = int(local.sum() // 2), int(cluster_of.max()) + 1
    expected = max(0.3, joins / rng.uniform(0.8, 2.5))
    verdict = VERDICTS[int(rng.integers(5))] if n > 3 else "undecided"
    pe, pa, pt = (float(x) for x in 10 ** -rng.uniform(0, 5, 3))
    made = [
        Comparison(
            "emergence",
            "joins",
            "many",
            joins,
            expected,
            pe,
            1e-5 if n > 3 else 0.2,
            True,
            make_law(rng, expected, 1 + expected**0.5),
        ),
        Comparison("emergence", "moran_i", "many", 0.21, -0.01, 0.004, 1e-5, False),
        Comparison(
            "emergence",
            "clusters",
            "few",
            clusters,
            clusters * 1.4,
            0.03,
            1e-5,
            False,
            make_law(rng, clusters * 1.4, 2),
        ),
    ]
    row: dict[str, object] = {
        "rank": rank,
        "motif_id": catalogue.motif_ids[index],
        "name": catalogue.motif_names[index],
        "category": catalogue.motif_categories[index],
        "holders": n,
        "surveyed": int(catalogue.surveyed(index).sum()),
        "joins": joins,
        "joins_expected": expected,
        "joins_ratio": joins / expected,
        "moran_i": 0.21,
        "moran_i_expected": -0.01,
        "clusters": clusters,
        "largest_cluster": int(np.bincount(cluster_of).max()),
        "strands": clusters,
        "p_attainable": 1e-5 if n > 3 else 0.2,
        "p_against_emergence": pe,
        "q_against_emergence": min(1.0, 2 * pe) if n > 3 else float("nan"),
    }
    if not rich:
        if n <= 3:
            verdict = "undecided"
        row |= {
            "verdict": verdict if "ancestry" in verdict or n <= 3 else "undecided",
            "reason": "no more clustered than emergence gives; contact was not examined",
        }
        return MotifEvidence(
            index,
            catalogue.motif_ids[index],
            catalogue.motif_names[index],
            catalogue.motif_categories[index],
            row,
            frozen(holders),
            frozen(cluster_of),
            frozen(local),
            tuple(made),
        )
    made += [
        Comparison(
            "ancestry",
            "joins_cross_family",
            "many",
            joins // 2,
            joins / 3,
            pa,
            0.001,
            True,
            make_law(rng, joins / 3, 2),
        ),
        Comparison(
            "contact",
            "joins",
            "few",
            joins,
            joins * 1.2,
            0.4,
            0.001,
            True,
            make_law(rng, joins * 1.2, 4, 5000),
        ),
        Comparison(
            "transmission",
            "strands",
            "many",
            clusters,
            clusters / 1.3,
            pt,
            0.002,
            True,
            make_law(rng, clusters / 1.3, 2, 5000),
            "worst case at an inheritance share of 0.6",
        ),
        Comparison(
            "transmission",
            "joins",
            "few",
            joins,
            joins * 1.3,
            0.2,
            0.002,
            False,
            make_law(rng, joins * 1.3, 4, 5000),
        ),
    ]
    shares = make_shares(rng)
    if n <= 3:
        shares = dataclasses.replace(
            shares, refused="with 3 holders the records say nothing of the shares"
        )
    kinds = [("graph", f"nearest:{k}") for k in (4, 5, 8)] + [("graph", "gabriel")]
    kinds += [("exponent", str(g)) for g in (0.0, 0.5, 1.0)]
    kinds += [("without family", f) for f in FAMILIES if f]
    kinds += [("without region", f"region {k}") for k in range(1, 31)]
    stability = pd.DataFrame(
        [
            {
                "kind": a,
                "setting": b,
                "verdict": verdict if rng.random() < 0.8 else VERDICTS[4],
                "p_against_emergence": pe * rng.uniform(0.5, 2),
                "p_against_ancestry": pa,
                "p_against_transmission": float("nan") if k == 0 else pt,
            }
            for k, (a, b) in enumerate(kinds)
        ]
    )
    row |= {
        "joins_cross_family": joins // 2,
        "joins_same_family": joins - joins // 2,
        "p_against_ancestry": pa,
        "q_against_ancestry": min(1.0, 2 * pa),
        "p_against_contact": 0.4,
        "p_against_transmission": pt,
        "q_against_transmission": min(1.0, 2 * pt),
        "verdict": verdict,
        "reason": "clustered, also between families",
        "stability": float((stability["verdict"] == verdict).mean()),
        "hidden_bound": 1.31,
    }
    for k, route in enumerate(shares.routes):
        blank = bool(shares.refused)
        row[f"{route}_share"] = float("nan") if blank else shares.mean[k]
        row[f"{route}_share_low"] = float("nan") if blank else shares.low[k]
        row[f"{route}_share_high"] = float("nan") if blank else shares.high[k]
    near = np.arange(10)
    correlogram = pd.DataFrame(
        {
            "from_km": near * 400.0,
            "to_km": near * 400.0 + 400,
            "pairs": rng.integers(50, 500, 10),
            "observed": 0.05 + 0.2 * np.exp(-near / 2) * rng.uniform(0.7, 1.2, 10),
            "expected": np.full(10, 0.08),
            "low": np.full(10, 0.04),
            "high": np.full(10, 0.13),
        }
    )
    truths = ("contact", "emergence", "a tenth emergence", "a third emergence")
    power = pd.DataFrame(
        [
            {"truth": t, "verdict": v, "probability": p}
            for t in truths
            for v, p in zip(VERDICTS, rng.dirichlet(np.ones(5)), strict=True)
        ]
    )
    others = [m for m in range(catalogue.n_motifs) if m not in (index, 6)][:6]
    pairs = pd.DataFrame(
        {
            "motif_id": [catalogue.motif_ids[m] for m in others],
            "name": [catalogue.motif_names[m] for m in others],
            "shared": [9, 8, 7, 6, 5, 4],
            "expected": [3.1, 3.0, 2.9, 2.0, 1.9, 1.1],
            "p": [1e-5, 1e-4, 0.001, 0.002, 0.01, 0.02],
            "q": [1e-4, 1e-3, 0.01, 0.02, 0.04, 0.049],
        }
    )
    bound = {
        "log_sd": 1.31,
        "ratio": 4.2,
        "log_sd_low": 1.2,
        "log_sd_high": 1.45,
        "length_km": 900.0,
    }
    return MotifEvidence(
        index,
        catalogue.motif_ids[index],
        catalogue.motif_names[index],
        catalogue.motif_categories[index],
        row,
        frozen(holders),
        frozen(cluster_of),
        frozen(local),
        tuple(made),
        correlogram,
        shares,
        stability,
        bound,
        power,
        pairs,
    )


def make_ranking(n=80, motifs=40, *, rich=True, seed=3, world=False) -> Ranking:
    """A small Ranking with every optional piece (``rich``), or with none of them."""
    catalogue = make_catalogue(n, motifs, seed=seed, rich=rich, world=world)
    graph = make_graph(catalogue)
    evidence = tuple(make_evidence(catalogue, graph, m, m + 1, rich=rich) for m in range(motifs))
    table = pd.DataFrame([dict(e.row) for e in evidence])
    plan = Plan()
    if not rich:
        plan = plan.replace(emergence__propensity="equal", evidence__worlds=("emergence",))
        return Ranking(catalogue, graph, plan, table, evidence)
    h = np.arange(1, n + 1)
    bands = pd.concat(
        [
            pd.DataFrame(
                {
                    "world": w,
                    "holders": h,
                    "low": np.maximum(1, 0.75 * m),
                    "median": np.maximum(1, m),
                    "high": np.maximum(1, 1.2 * m),
                }
            )
            for w, m in (("emergence", h**0.82), ("contact", h**0.35))
        ]
    )
    fitted = 60 * 0.95**h / h
    seen = np.bincount(table["holders"], minlength=n + 1)[1 : n + 1]
    prevalence = pd.DataFrame(
        {
            "holders": h,
            "motifs": seen,
            "fitted": fitted,
            "low": fitted * 0.5,
            "high": fitted * 1.7 + 0.5,
        }
    )
    categories = pd.DataFrame(
        {
            "category": CATEGORIES,
            "motifs": 10,
            "testable": [8, 9, 7, 10],
            "joins_ratio": [1.2, 1.9, 0.9, 2.4],
            "joins_ratio_low": [0.9, 1.4, 0.7, 1.9],
            "joins_ratio_high": [1.6, 2.5, 1.2, 3.0],
            "rejected_share": [0.3, 0.5, 0.1, 0.7],
            "rejected_low": [0.1, 0.2, 0.0, 0.4],
            "rejected_high": [0.6, 0.8, 0.4, 0.9],
            "emergence_share": [0.4, 0.2, 0.6, 0.1],
            "emergence_share_low": [0.2, 0.1, 0.4, 0.0],
            "emergence_share_high": [0.6, 0.4, 0.8, 0.2],
            "contact_share": [0.4, 0.5, 0.2, 0.7],
            "contact_share_low": [0.2, 0.3, 0.1, 0.5],
            "contact_share_high": [0.6, 0.7, 0.4, 0.9],
            "inheritance_share": [0.2, 0.3, 0.2, 0.2],
            "inheritance_share_low": [0.1, 0.1, 0.1, 0.1],
            "inheritance_share_high": [0.4, 0.5, 0.4, 0.4],
        }
    )
    fits = {
        "turnover": 0.95,
        "turnover_low": 0.93,
        "turnover_high": 0.968,
        "turnover_goodness_p": 0.41,
        "kappa": 0.02,
        "propensity": "effort",
    }
    tables = {
        "sensitivity": pd.DataFrame(
            {"kind": ["contact graph"], "setting": ["nearest:4"], "same": [0.9]}
        ),
        "power": pd.DataFrame(
            {
                "holders": [5, 10, 30],
                "truth": "contact",
                "verdict": "contact spread",
                "probability": [0.1, 0.5, 0.9],
            }
        ),
    }
    notes = ("The prevalence curve fits a log-series (goodness of fit p = .41).",)
    return Ranking(
        catalogue, graph, plan, table, evidence, bands, prevalence, fits, categories, tables, notes
    )


def alone(ranking: Ranking, motif_id: str) -> Ranking:
    """The same results for one motif only, as a test of one motif gives."""
    own = next(e for e in ranking.evidence if e.motif_id == motif_id)
    table = ranking.motifs[ranking.motifs["motif_id"] == motif_id]
    return dataclasses.replace(ranking, motifs=table, evidence=(own,))


def with_plan(ranking: Ranking, **changes) -> Ranking:
    """The same results under another plan (they are not computed again)."""
    return dataclasses.replace(ranking, plan=ranking.plan.replace(**changes))


def many_motifs(ranking: Ranking, n: int) -> Ranking:
    """A ranking of ``n`` motifs: the same evidence over and over, under new ids."""
    kept = [e for e in ranking.evidence if ranking.catalogue.motif_access[e.index] == "open"]
    evidence = []
    for k in range(n):
        e = kept[k % len(kept)]
        row = dict(e.row) | {"rank": k + 1, "motif_id": f"k{k:05d}", "name": f"{e.name} ({k})"}
        evidence.append(dataclasses.replace(e, motif_id=row["motif_id"], name=row["name"], row=row))
    table = pd.DataFrame([e.row for e in evidence])
    return dataclasses.replace(ranking, motifs=table, evidence=tuple(evidence))


def write_run_page(ranking: Ranking, folder):
    """Write the page of the catalogue alone; give its path."""
    from twicetold.report.pages import Press

    press = Press(ranking, folder, COMMAND)
    press.assets()
    press.run_page()
    return folder / "index.html"
