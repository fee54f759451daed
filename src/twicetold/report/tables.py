"""Data of the run page's table, and the small tables of numbers beside figures."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from twicetold.report.common import (
    as_float,
    known,
    listed,
    number,
    page_name,
    percent,
    probability,
    sig,
)
from twicetold.report.motif_charts import distances
from twicetold.report.rows import records
from twicetold.report.theme import STATISTICS, WORLDS

if TYPE_CHECKING:
    import pandas as pd

    from twicetold.evidence import MotifEvidence, Ranking


@dataclass(frozen=True)
class Sheet:
    """A small table for a page: heads, rows of text, and which columns hold numbers."""

    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    numeric: frozenset[int] = field(default_factory=frozenset)
    links: tuple[str, ...] = ()


#: Columns of the motif table: (column, head, kind, shown at first).
#: Kinds: w whole number, n number, p probability, s share, t text.
COLUMNS: tuple[tuple[str, str, str, bool], ...] = (
    ("rank", "rank", "w", True),
    ("category", "category", "t", True),
    ("holders", "holders", "w", True),
    ("surveyed", "searched", "w", False),
    ("verdict", "verdict", "t", True),
    ("joins", "joins", "w", True),
    ("joins_expected", "joins expected", "n", False),
    ("joins_ratio", "joins ratio", "n", True),
    ("joins_cross_family", "cross-family joins", "w", False),
    ("joins_same_family", "same-family joins", "w", False),
    ("moran_i", "Moran's I", "n", False),
    ("clusters", "clusters", "w", True),
    ("largest_cluster", "largest cluster", "w", False),
    ("strands", "strands", "w", False),
    ("p_against_emergence", "p emergence", "p", True),
    ("q_against_emergence", "q emergence", "p", False),
    ("p_against_ancestry", "p ancestry", "p", True),
    ("q_against_ancestry", "q ancestry", "p", False),
    ("p_against_contact", "p contact", "p", False),
    ("p_against_transmission", "p transmission", "p", True),
    ("q_against_transmission", "q transmission", "p", False),
    ("emergence_share", "emergence share", "s", False),
    ("contact_share", "contact share", "s", False),
    ("inheritance_share", "inheritance share", "s", False),
    ("stability", "stability", "s", True),
    ("hidden_bound", "hidden bound", "n", False),
)


def motif_table(ranking: Ranking) -> dict[str, Any]:
    """Data behind the table of all motifs, by column; absent columns are left out."""
    from twicetold.evidence import columns

    shown = listed(ranking)
    rows = [e.row for e in shown]
    present = [c for c in COLUMNS if c[0] in ranking.motifs.columns]
    # A column without a single value says nothing: a catalogue without categories, say.
    present = [c for c in present if any(known(r.get(c[0])) for r in rows)]
    data = []
    for name, _, kind, _ in present:
        values = [r.get(name) for r in rows]
        if kind == "t":
            data.append(_factor([str(v) if known(v) else "" for v in values]))
        elif kind == "w":
            data.append({"v": [int(as_float(v)) if known(v) else None for v in values]})
        else:
            data.append({"v": [sig(v, 4) for v in values]})
    files = [page_name(e.motif_id) for e in shown]
    plain = [f == f"{e.motif_id}.html" for f, e in zip(files, shown, strict=True)]
    meanings = {c.name: c.meaning for c in columns.COLUMNS}
    return {
        "columns": [
            {"name": n, "head": h, "kind": k, "shown": s, "meaning": meanings.get(n, "")}
            for n, h, k, s in present
        ],
        "data": data,
        "ids": [e.motif_id for e in shown],
        "names": [e.name for e in shown],
        "files": {str(i): f for i, (f, p) in enumerate(zip(files, plain, strict=True)) if not p},
    }


def _factor(values: list[str]) -> dict[str, Any]:
    levels = sorted(set(values))
    place = {level: k for k, level in enumerate(levels)}
    return {"levels": levels, "codes": [place[v] for v in values]}


def first_rows(ranking: Ranking, most: int) -> Sheet:
    """The first rows of the ranking as plain text, for readers without JavaScript."""
    present = [c for c in COLUMNS if c[0] in ranking.motifs.columns and c[3]]
    rows, links = [], []
    for e in listed(ranking)[:most]:
        cells = [written(e.row.get(name), kind) for name, _, kind, _ in present]
        rows.append((e.name or e.motif_id, *cells))
        links.append(f"motifs/{page_name(e.motif_id)}")
    numeric = frozenset(k + 1 for k, c in enumerate(present) if c[2] != "t")
    return Sheet(("motif", *[c[1] for c in present]), tuple(rows), numeric, tuple(links))


def written(value: object, kind: str) -> str:
    """Write one cell for reading, by the kind of its column."""
    if not known(value):
        return ""
    if kind == "p":
        return probability(value)
    if kind == "s":
        return percent(value)
    return str(value) if kind == "t" else number(value)


def comparison_sheet(evidence: MotifEvidence) -> Sheet:
    """Every comparison of a motif with a world, primary ones first in each world."""
    order = {w: k for k, w in enumerate(WORLDS)}
    made = sorted(
        evidence.comparisons, key=lambda c: (order.get(c.world, 9), not c.primary, c.statistic)
    )
    rows = []
    for c in made:
        drawn = ""
        if c.law is not None:
            drawn = "enumerated" if c.law.exact else f"{number(c.law.draws)} draws"
        rows.append(
            (
                WORLDS.get(c.world, (c.world,))[0],
                STATISTICS.get(c.statistic, c.statistic),
                number(c.observed),
                number(c.expected),
                "many" if c.direction == "many" else "few",
                probability(c.p) or "none",
                probability(c.p_attainable),
                "decides" if c.primary else "sensitivity",
                "; ".join(x for x in (drawn, c.note) if x),
            )
        )
    heads = ("world", "statistic", "observed", "expected", "against it", "p", "smallest possible p")
    return Sheet((*heads, "role", "how"), tuple(rows), frozenset({2, 3, 5, 6}))


def correlogram_sheet(evidence: MotifEvidence) -> Sheet:
    """Numbers behind the correlogram."""
    assert evidence.correlogram is not None
    rows = [
        (
            distances(r["from_km"], r["to_km"]),
            number(r["pairs"]),
            percent(r["observed"], 1),
            percent(r["expected"], 1),
            f"{percent(r['low'], 1)} to {percent(r['high'], 1)}",
        )
        for r in records(evidence.correlogram)
    ]
    heads = ("km", "pairs", "both hold it", "expected", "95 % envelope")
    return Sheet(heads, tuple(rows), frozenset({0, 1, 2, 3, 4}))


def shares_sheet(evidence: MotifEvidence) -> Sheet:
    """Route shares with their intervals."""
    s = evidence.shares
    assert s is not None
    rows = [
        (route, percent(m), f"{percent(low)} to {percent(high)}")
        for route, m, low, high in zip(s.routes, s.mean, s.low, s.high, strict=True)
    ]
    return Sheet(("route", "mean share", "90 % interval"), tuple(rows), frozenset({1, 2}))


def stability_sheet(evidence: MotifEvidence) -> Sheet:
    """Every sensitivity run of a motif."""
    assert evidence.stability is not None
    table = evidence.stability
    worlds = [w for w in WORLDS if f"p_against_{w}" in table.columns]
    rows = [
        (
            str(r["kind"]),
            str(r["setting"]),
            str(r["verdict"]),
            *[probability(r[f"p_against_{w}"]) for w in worlds],
        )
        for r in records(table)
    ]
    heads = ("changed", "to", "verdict", *[f"p {w}" for w in worlds])
    return Sheet(heads, tuple(rows), frozenset(range(3, 3 + len(worlds))))


def power_sheet(evidence: MotifEvidence) -> Sheet:
    """How often each verdict comes out under each truth."""
    assert evidence.power is not None
    return frame_sheet(evidence.power, shares=("probability",))


def pairs_sheet(evidence: MotifEvidence, pages: dict[str, str]) -> Sheet:
    """Motifs on the same traditions, each leading to its page."""
    assert evidence.pairs is not None
    rows, links = [], []
    for r in records(evidence.pairs):
        motif = str(r["motif_id"])
        if motif not in pages:
            continue
        name = str(r["name"]) if known(r.get("name")) else motif
        cells = (number(r["shared"]), number(r["expected"]), probability(r["p"]))
        rows.append((name, *cells, probability(r["q"])))
        links.append(pages[motif])
    heads = ("motif", "traditions shared", "expected", "p", "q")
    return Sheet(heads, tuple(rows), frozenset({1, 2, 3, 4}), tuple(links))


def frame_sheet(table: pd.DataFrame, *, shares: tuple[str, ...] = (), most: int = 200) -> Sheet:
    """Any small table of results, written for reading."""
    heads = tuple(str(c) for c in table.columns)
    rows = []
    for r in records(table.head(most)):
        rows.append(
            tuple(
                percent(v, 1)
                if c in shares
                else probability(v)
                if str(c) in ("p", "q") or str(c).startswith(("p_", "q_"))
                else _plain(v)
                for c, v in r.items()
            )
        )
    numeric = frozenset(k for k, d in enumerate(table.dtypes) if d.kind in "iuf")
    return Sheet(tuple(h.replace("_", " ") for h in heads), tuple(rows), numeric)


def _plain(value: object) -> str:
    if not known(value):
        return ""
    if isinstance(value, str | bool):
        return str(value)
    x = as_float(value)
    return number(value) if known(x) else str(value)
