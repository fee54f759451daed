"""What a motif's page says: everything its template needs."""

from __future__ import annotations

import shlex
from typing import TYPE_CHECKING, Any

from twicetold.report import maps, motif_charts, shares_charts, tables, words
from twicetold.report.common import known, number, percent, probability, title_name
from twicetold.report.figures import MOTIF_KINDS
from twicetold.report.theme import WORLDS, look_of

if TYPE_CHECKING:
    from twicetold.evidence import MotifEvidence, Ranking
    from twicetold.report.pages import Press


def motif_context(press: Press, e: MotifEvidence) -> dict[str, Any]:
    """Give what the template of a motif's page shows."""
    ranking = press.ranking
    alpha = ranking.plan.evidence.alpha
    figures, sheets, stability = _drawn(press, e)
    row = e.row
    at = press.place[e.motif_id]
    rank = row.get("rank") if len(ranking.evidence) > 1 else None
    return {
        "name": title_name(e),
        "motif_id": e.motif_id,
        "category": e.category,
        "holders": number(row.get("holders", len(e.holders))),
        "surveyed": number(row.get("surveyed")),
        "rank": number(rank) if known(rank) else "",
        "motifs": number(len(ranking.motifs)),
        "before": _neighbour(press, at - 1),
        "after": _neighbour(press, at + 1),
        "look": look_of(str(row.get("verdict", ""))),
        "sentence": words.verdict_sentence(e, families=press.families),
        "reason": words.reason_sentence(e),
        "facts": _facts(e),
        "figures": figures,
        "sheets": sheets,
        "worlds": _worlds(press, e, alpha),
        "comparisons": tables.comparison_sheet(e),
        "judged_by": _judged_by(ranking),
        "alpha": number(alpha),
        "adjusted": _adjusted(e),
        "shares_sentence": words.shares_sentence(e),
        "stability_sentence": stability,
        "hidden": words.hidden_sentence(e),
        "power": words.power_sentences(e),
        "holders_by_family": _holders(press, e),
        "restricted": not press.atlas.shown.all(),
        "labels": press.labels(set(e.holders.tolist())),
        "command": _test_command(press, e),
    }


def _drawn(press: Press, e: MotifEvidence) -> tuple[dict[str, Any], dict[str, Any], str]:
    """Figures and the numbers behind them, those that there are, and the sentence on stability."""
    notice = press.ranking.catalogue.notice
    figures: dict[str, Any] = dict.fromkeys(MOTIF_KINDS)
    sheets: dict[str, Any] = dict.fromkeys((*MOTIF_KINDS, "pairs"))
    figures["map"] = press.figure("map", maps.motif_map(press.atlas, e))
    if e.correlogram is not None and len(e.correlogram):
        spec = motif_charts.correlogram_chart(e, notice)
        figures["correlogram"] = press.figure("correlogram", spec)
        sheets["correlogram"] = tables.correlogram_sheet(e)
    if e.shares is not None and not e.shares.refused:
        label = words.shares_sentence(e)
        figures["shares"] = press.figure("shares", shares_charts.shares_chart(e, notice), label)
        sheets["shares"] = tables.shares_sheet(e)
    stability = ""
    if e.stability is not None and len(e.stability):
        stability = words.stability_sentence(e) or "The verdict of every run:"
        spec = motif_charts.stability_chart(e, notice)
        figures["stability"] = press.figure("stability", spec, stability)
        sheets["stability"] = tables.stability_sheet(e)
    if e.power is not None and len(e.power):
        figures["power"] = press.figure("power", motif_charts.power_chart(e, notice))
        sheets["power"] = tables.power_sheet(e)
    if e.pairs is not None and len(e.pairs):
        sheets["pairs"] = tables.pairs_sheet(e, press.pages)
    return figures, sheets, stability


def _neighbour(press: Press, k: int) -> tuple[str, str] | None:
    if not 0 <= k < len(press.shown):
        return None
    e = press.shown[k]
    return title_name(e), press.pages[e.motif_id]


def _facts(e: MotifEvidence) -> list[tuple[str, str, str]]:
    row = e.row
    expected, ratio = row.get("joins_expected"), row.get("joins_ratio")
    more = f"{number(expected)} expected" if known(expected) else ""
    more += f", ratio {number(ratio)}" if known(ratio) and more else ""
    largest = row.get("largest_cluster")
    out = [
        ("holders", number(row.get("holders")), f"of {number(row.get('surveyed'))} searched"),
        ("joins", number(row.get("joins")), more),
        (
            "clusters",
            number(row.get("clusters")),
            f"largest {number(largest)}" if known(largest) else "",
        ),
        ("strands", number(row.get("strands")), ""),
    ]
    if known(row.get("stability")):
        out.append(("stability", percent(row["stability"]), "runs with this verdict"))
    if known(row.get("hidden_bound")):
        out.append(("hidden bound", number(row["hidden_bound"]), "log-sd"))
    return [fact for fact in out if fact[1]]


def _worlds(press: Press, e: MotifEvidence, alpha: float) -> list[dict[str, Any]]:
    notice = press.ranking.catalogue.notice
    out = []
    for c in motif_charts.drawn_comparisons(e):
        spec = motif_charts.world_chart(e, c, notice)
        sentence = words.comparison_sentence(c)
        out.append(
            {
                "heading": words.world_heading(c.world),
                "sentence": sentence,
                "finding": words.finding(c, alpha),
                "figure": press.figure(f"world-{c.world}", spec, sentence),
            }
        )
    return out


def _judged_by(ranking: Ranking) -> str:
    if len(ranking.motifs) == 1:
        return "p, as one motif alone has no q,"
    names = {"bh": "q (adjusted by Benjamini and Hochberg)", "none": "p"}
    names["by"] = "q (adjusted by Benjamini and Yekutieli)"
    return names.get(ranking.plan.evidence.multiplicity, "q")


def _adjusted(e: MotifEvidence) -> list[tuple[str, str]]:
    out = []
    for world, (name, _) in WORLDS.items():
        q = e.row.get(f"q_against_{world}")
        if known(q):
            out.append((name[0].upper() + name[1:], probability(q)))
    return out


def _holders(press: Press, e: MotifEvidence) -> list[tuple[str, list[str]]]:
    c = press.ranking.catalogue
    families = c.has_families
    groups: dict[str, list[str]] = {}
    for i in e.holders.tolist():
        if press.atlas.shown[i]:
            family = c.family[i] if families else ""
            groups.setdefault(family, []).append(c.tradition_names[i] or c.tradition_ids[i])
    if families and "" in groups:
        groups["No family given"] = groups.pop("")
    return sorted((family, sorted(people)) for family, people in groups.items())


def _test_command(press: Press, e: MotifEvidence) -> str:
    if "test" in press.command:
        return press.command["test"]
    name = shlex.quote(press.command.get("catalogue", "CATALOGUE"))
    return f"twicetold test {name} {shlex.quote(e.motif_id)} --plan plan.toml"
