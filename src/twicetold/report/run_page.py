"""What the page of the whole catalogue says: everything its template needs."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from twicetold.report import category_charts, maps, overview_charts, tables, words
from twicetold.report.common import SMALLEST_TOTAL, as_float, known, number, plural
from twicetold.report.figures import RANKING_KINDS
from twicetold.report.methods import reference_line
from twicetold.report.theme import VERDICTS

if TYPE_CHECKING:
    from twicetold.evidence import Ranking
    from twicetold.report.pages import Press

_FIRST_ROWS = 200
_MOST_REMARKS = 60
_MOST_NAMES = 500


def run_context(press: Press) -> dict[str, Any]:
    """Give what the template of the catalogue's page shows."""
    ranking, c = press.ranking, press.ranking.catalogue
    counts = words.verdict_counts(ranking)
    figures: dict[str, Any] = dict.fromkeys(RANKING_KINDS)
    figures["clusters"] = press.figure("clusters", overview_charts.signature_chart(ranking))
    figures["map"] = press.figure("map", maps.catalogue_map(press.atlas))
    if ranking.prevalence is not None and len(ranking.prevalence):
        figures["prevalence"] = press.figure(
            "prevalence", overview_charts.prevalence_chart(ranking)
        )
    if overview_charts.has_quantiles(ranking):
        figures["qq"] = press.figure("qq", overview_charts.qq_chart(ranking))
    categories = None
    if ranking.categories is not None and len(ranking.categories):
        if category_charts.category_routes(ranking):
            chart = category_charts.categories_chart(ranking)
            figures["categories"] = press.figure("categories", chart)
        figures["ratios"] = press.figure("ratios", category_charts.ratio_chart(ranking))
        shares = [str(x) for x in ranking.categories.columns if "share" in x or "rejected" in x]
        categories = tables.frame_sheet(ranking.categories, shares=tuple(shares))
    hidden = len(ranking.evidence) - len(press.shown)
    return {
        "summary": _summary(ranking),
        "contact_band": ranking.bands is not None and "contact" in set(ranking.bands["world"]),
        "counts": [(v, number(counts[v.verdict])) for v in VERDICTS],
        "notes": ranking.notes,
        "figures": figures,
        "categories": categories,
        "first": tables.first_rows(ranking, _FIRST_ROWS),
        "hidden_motifs": _few(hidden, "restricted motif counts", "restricted motifs count")
        + (" in totals only." if hidden else ""),
        "quality": _quality(press),
        **_remarks(press),
        "labels": press.labels(),
        "fits": _fits(ranking),
        "extra": _extra(ranking),
        "methods": press.methods,
        "references": [reference_line(key) for key in press.methods.cited],
        "choices": tables.Sheet(("choice", "value", "meaning"), press.methods.choices),
        "command": press.command.get("rank") or press.command.get("test") or "twicetold rank",
        "unlocated_words": plural(len(c.unlocated), "tradition") + " left out: no coordinates",
    }


def _summary(ranking: Ranking) -> str:
    c, g = ranking.catalogue, ranking.graph
    families = len({f for f in c.family if f})
    parts = [
        plural(len(ranking.motifs), "motif"),
        plural(c.n_traditions, "tradition"),
        plural(int(c.attested.nnz), "attestation"),
        *([plural(families, "family", "families")] if families else []),
        f"contact graph {g.rule}",
    ]
    return " · ".join(parts)


def _few(n: int, one: str, many: str) -> str:
    """Say how many, but never a total so small that it points at somebody."""
    if not n:
        return ""
    return f"Fewer than {SMALLEST_TOTAL} {many}" if n < SMALLEST_TOTAL else plural(n, one, many)


def _quality(press: Press) -> tables.Sheet:
    c, g = press.ranking.catalogue, press.ranking.graph
    families = [f for f in c.family if f]
    named = len(set(families))
    searched = [int(s.sum()) for s in c.surveyed_sets]
    restricted = int((~press.atlas.shown).sum())
    rows = [
        ("traditions with a place", number(c.n_traditions)),
        ("without coordinates, left out", number(len(c.unlocated))),
        ("motifs", number(c.n_motifs)),
        ("attestations", number(int(c.attested.nnz))),
        (
            "searched for a motif, fewest and most",
            f"{number(min(searched, default=0))} to {number(max(searched, default=0))}",
        ),
        ("distinct sets of traditions searched", number(len(searched))),
        ("cells marked not applicable", number(int(c.not_applicable.nnz))),
        ("families named", number(named) if named else "none"),
        ("traditions with a family", number(len(families))),
        (
            "effort",
            "not given"
            if c.effort is None
            else f"{number(float(c.effort.min()))} to {number(float(c.effort.max()))}",
        ),
        ("contact edges", f"{number(g.n_edges)} ({g.rule})"),
        ("of them bridges", number(int(g.bridge.sum()))),
        ("traditions without neighbours", number(int((g.degree == 0).sum()))),
        (
            "restricted traditions, in totals only",
            _few(restricted, "tradition", "traditions") or "0",
        ),
        ("withheld rows, dropped at reading", number(c.withheld_traditions + c.withheld_motifs)),
    ]
    return tables.Sheet(("", ""), tuple(rows), frozenset({1}))


def _remarks(press: Press) -> dict[str, Any]:
    c = press.ranking.catalogue
    rows = []
    for w in c.warnings[:_MOST_REMARKS]:
        place = w.file + (f", row {w.row}" if w.row else "") + (f", {w.column}" if w.column else "")
        rows.append((place, f"{w.what} {w.remedy}".strip()))
    more = len(c.warnings) - len(rows)
    unlocated = list(c.unlocated[:_MOST_NAMES])
    rest = len(c.unlocated) - len(unlocated)
    return {
        "warnings": tables.Sheet(("where", "remark"), tuple(rows)),
        "warnings_more": f"And {plural(more, 'more remark')}; `twicetold check` lists them all."
        if more
        else "",
        "unlocated": unlocated,
        "unlocated_more": f"And {number(rest)} more." if rest > 0 else "",
    }


def _fits(ranking: Ranking) -> tables.Sheet:
    rows: list[tuple[str, ...]] = []
    for key, value in ranking.fits.items():
        if isinstance(value, Mapping):
            rows += [(f"{key}: {k}".replace("_", " "), _said(k, v)) for k, v in value.items()]
        else:
            rows.append((str(key).replace("_", " "), _said(str(key), value)))
    return tables.Sheet(("fit", "value"), tuple(r for r in rows if r[1]), frozenset({1}))


def _said(key: object, value: object) -> str:
    if isinstance(value, str | bool):
        return str(value)
    if isinstance(value, list | tuple):
        return ", ".join(_said(key, v) for v in value)
    x = as_float(value)
    return number(x, 4) if known(x) else (str(value) if known(value) else "")


def _extra(ranking: Ranking) -> list[tuple[str, tables.Sheet]]:
    out = []
    for name, table in ranking.tables.items():
        if len(table) and len(table.columns) <= 14:
            words_ = name.replace("_", " ")
            cut = f" (first 200 of {number(len(table))} rows)" if len(table) > 200 else ""
            head = f"Table: {words_}{cut}"
            out.append((head, tables.frame_sheet(table, shares=("probability",))))
    return out
