"""Results in words, for the terminal."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from twicetold.evidence.power import PowerTable
    from twicetold.evidence.results import MotifEvidence, Ranking

STATISTIC_WORDS = {
    "joins": "joins",
    "joins_cross_family": "cross-family joins",
    "joins_same_family": "same-family joins",
    "moran_i": "Moran's I",
    "clusters": "clusters",
    "largest_cluster": "largest cluster",
    "strands": "strands",
}

CAUTION = (
    "One snapshot of records cannot tell contact from a shared environment nobody measured, nor "
    "emergence from carriage that distance does not hinder. Association is not history."
)


def p_words(p: float) -> str:
    """Write a p-value as people print it."""
    if math.isnan(p):
        return "-"
    if p < 0.0001:
        return f"{p:.1e}"
    return f"{p:.4f}" if p < 0.1 else f"{p:.3f}"


def number(value: float) -> str:
    """Write a count or a mean with sensible digits."""
    if isinstance(value, float) and math.isnan(value):
        return "-"
    if float(value).is_integer():
        return f"{int(value):,}"
    return f"{value:,.3f}" if abs(value) < 10 else f"{value:,.1f}"


def tell(ranking: Ranking, evidence: MotifEvidence) -> str:
    """Say what was found for one motif, in a page of plain text."""
    row = evidence.row
    lines = []
    if ranking.catalogue.notice:
        lines += [ranking.catalogue.notice, ""]
    lines += [
        f"{evidence.name} [{evidence.motif_id}]",
        f"Held in {row['holders']:,} of {row['surveyed']:,} traditions searched: "
        f"{row['joins']:,} joins, {row['clusters']:,} clusters "
        f"(largest {row['largest_cluster']:,}), {row['strands']:,} strands.",
        "",
        f"Verdict: {row['verdict']} - {row['reason']}.",
        "",
        f"{'world':<14}{'statistic':<20}{'observed':>10}{'expected':>10}{'p':>10}",
    ]
    for c in evidence.comparisons:
        mark = " *" if c.primary else ""
        lines.append(
            f"{c.world:<14}{STATISTIC_WORDS[c.statistic]:<20}{number(c.observed):>10}"
            f"{number(c.expected):>10}{p_words(c.p):>10}{mark}"
        )
    lines += ["* decides in its world; the others are sensitivity.", ""]
    shares = evidence.shares
    if shares is not None:
        if shares.refused:
            lines.append(f"Route shares: none given; {shares.refused}")
        else:
            said = ", ".join(
                f"{route} {100 * m:.0f} % ({100 * a:.0f} to {100 * b:.0f})"
                for route, m, a, b in zip(
                    shares.routes, shares.mean, shares.low, shares.high, strict=True
                )
            )
            lines.append(f"Route shares, 90 % intervals: {said}.")
        lines.append("")
    beside = _beside(ranking, evidence)
    lines += [*beside, ""] if beside else []
    lines += [f"Note: {note}" for note in ranking.notes]
    lines.append(CAUTION)
    return "\n".join(lines)


def _beside(ranking: Ranking, evidence: MotifEvidence) -> list[str]:
    """How far to trust it, and who goes along: a line for each that was computed."""
    from twicetold.evidence.hidden import hidden_sentence

    lines = []
    if evidence.hidden_bound:
        lines.append(hidden_sentence(dict(evidence.hidden_bound), ranking.plan.evidence.alpha))
    if evidence.stability is not None and len(evidence.stability):
        same = int((evidence.stability["verdict"] == evidence.row["verdict"]).sum())
        lines.append(
            f"The same verdict comes out in {same} of {len(evidence.stability)} other runs."
        )
    if evidence.pairs is not None and len(evidence.pairs):
        names = [
            f"{n} ({k})"
            for n, k in zip(
                evidence.pairs["name"].head(5), evidence.pairs["shared"].head(5), strict=True
            )
        ]
        more = len(evidence.pairs) - len(names)
        lines.append(
            "On the same traditions more than both margins explain (traditions shared): "
            + ", ".join(names)
            + (f" and {more} more." if more > 0 else ".")
        )
    return lines


def tell_power(table: PowerTable) -> str:
    """Say how often each verdict would come out, in a table of plain text."""
    lines = [
        f"Motifs simulated on this map at a turnover of {table.turnover:.4g} and judged one at a "
        f"time at the level {table.alpha:g}.",
        "How often each verdict came out, in per cent:",
    ]
    for truth, part in table.frame.groupby("truth", sort=False):
        wide = part.pivot_table(index="holders", columns="verdict", values="probability")
        shown = [v for v in dict.fromkeys(part["verdict"]) if (wide[v] > 0).any()]
        lines += ["", f"If the truth is {truth}:"]
        lines.append(f"{'holders':>9}  " + "  ".join(shown))
        for n, row in wide.iterrows():
            cells = "  ".join(f"{100 * row[v]:>{len(v)}.0f}" for v in shown)
            lines.append(f"{n:>9}  {cells}")
    lines += ["", "Fewest holders with 80 % power:"]
    for found in table.smallest.to_dict("records"):
        fewest = float(found["holders"])
        n = "more than were looked at" if math.isnan(fewest) else f"{fewest:.0f}"
        lines.append(f"  {found['truth']} seen as {found['verdict']}: {n}")
    if table.notes:
        lines += ["", *table.notes]
    return "\n".join(lines)
