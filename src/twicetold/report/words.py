"""Sentences of the pages: what a verdict, a comparison, a bound or a power figure says."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from twicetold.report.common import as_float, known, listing, number, percent, plural, probability
from twicetold.report.rows import records
from twicetold.report.theme import CHANGES, STATISTICS, WORLDS, look_of

if TYPE_CHECKING:
    from twicetold.evidence import Comparison, MotifEvidence, Ranking

#: Cautions on every motif's page: (heading, text).
CAUTIONS: tuple[tuple[str, str], ...] = (
    (
        "Association is not history.",
        "A verdict says which simple world the records fit. It is not an account of what happened, "
        "of who told it first, or of whose story it is.",
    ),
    (
        "A map of verdicts is not a map of origins.",
        "Nothing here dates a motif or says where it began.",
    ),
    (
        "Contact cannot be separated from a shared environment nobody measured.",
        "Neighbours also share land, sea, weather and work. The hidden-propensity figure, where it "
        "is given, says how strong such a cause would have to be.",
    ),
    (
        "Carriage that ignores distance looks exactly like emergence.",
        "Migration, trade and print can scatter a motif as separate invention would. Records of "
        "one moment cannot tell the two apart.",
    ),
    (
        "A record depends on the recorder.",
        "What was not written down is not the same as what was not told, however carefully effort "
        "is allowed for.",
    ),
    (
        "Consult the communities concerned.",
        "Follow their protocols and your institution's ethics review before you publish, map or "
        "reuse what they told. Where a community has labelled its materials, the labels go with "
        "them.",
    ),
)


def verdict_sentence(evidence: MotifEvidence, *, families: bool) -> str:
    """Say the verdict in one sentence a historian understands."""
    verdict = str(evidence.row.get("verdict", ""))
    reason = str(evidence.row.get("reason", "") or "")
    if verdict == "contact spread":
        return (
            "Neighbours of different families share it more often than they would if each had come "
            "to it alone or families had handed it down: the map favours contact spread."
        )
    if verdict == "contact or ancestry":
        if families and "could not be examined" not in reason:
            return (
                "Neighbours share it more often than separate invention would give, but no more "
                "between families than descent would: contact or shared ancestry, and these "
                "records cannot say which."
            )
        return (
            "Neighbours share it more often than separate invention would give; with no families "
            "to compare, contact and shared ancestry cannot be told apart."
        )
    if verdict == "parallel emergence":
        return (
            "Its holders lie too scattered to go back to one origin: the map favours invention "
            "more than once, or carriage that ignores distance, which looks the same."
        )
    if verdict == "several origins, then spread":
        return (
            "Its holders cluster, but in too many separate strands for one origin: it seems to "
            "have arisen, or to have been carried far, several times, and then passed between "
            "neighbours."
        )
    return (
        f"The records cannot tell how it came to where it is: {reason or 'see the worlds below'}."
    )


def reason_sentence(evidence: MotifEvidence) -> str:
    """The reason of the verdict as a sentence of its own; empty when already said."""
    reason = str(evidence.row.get("reason", "") or "")
    if not reason or str(evidence.row.get("verdict", "")) == "undecided":
        return ""
    return reason[0].upper() + reason[1:] + ("" if reason.endswith(".") else ".")


def comparison_sentence(comparison: Comparison) -> str:
    """Say in words what one world gives and what was observed."""
    words = counted(comparison.statistic, comparison.observed)
    more = "at least" if comparison.direction == "many" else "at most"
    p = as_float(comparison.p)
    out = f"Observed {words}; this world gives {number(comparison.expected)} on average"
    if known(p):
        out += f", and {more} as many with probability {probability(p)}"
    return out + "." + (f" {_sentence(comparison.note)}" if comparison.note else "")


def counted(statistic: str, value: float) -> str:
    """Write a statistic's value with its word: 1 join, 3 joins."""
    many = STATISTICS.get(statistic, statistic)
    if value == 1 and statistic.startswith(("joins", "clusters", "strands")):
        many = many.removesuffix("s")
    return f"{number(value)} {many}"


def finding(comparison: Comparison, alpha: float) -> str:
    """Say whether this world alone could have done it, at the plan's level (before adjusting)."""
    p = as_float(comparison.p)
    if not known(p):
        return "Nothing can be said against this world."
    if as_float(comparison.p_attainable) > alpha:
        return "So few holders could never speak against this world."
    if p <= alpha:
        return "Taken alone, this speaks against this world."
    return "This world fits."


def world_heading(world: str) -> str:
    """Heading of a world's panel: what it supposes."""
    return f"Suppose {WORLDS.get(world, (world, world))[1]}"


def hidden_sentence(evidence: MotifEvidence) -> str:
    """Say the hidden-propensity bound; empty when it was not computed."""
    bound = evidence.hidden_bound
    log_sd, ratio = as_float(bound.get("log_sd")), as_float(bound.get("ratio"))
    if not known(log_sd):
        return ""
    if log_sd == float("inf"):
        return (
            "No smooth unmeasured leaning of whole regions, however strong, makes the "
            "emergence-only world give these joins 5\u202f% of the time."
        )
    if log_sd <= 0:
        return (
            "No hidden leaning is needed: the emergence-only world as it stands gives these joins "
            "at least 5\u202f% of the time."
        )
    length = as_float(bound.get("length_km"))
    scale = f" over some {number(round(length, -1))} km" if known(length) else ""
    low, high = as_float(bound.get("log_sd_low")), as_float(bound.get("log_sd_high"))
    spread = f"; Monte Carlo interval {number(low)} to {number(high)}" if known(low) else ""
    apart = (
        f", about {number(ratio, 2)} times between the highest and lowest region,"
        if known(ratio)
        else ""
    )
    return (
        "To give these joins without contact 5\u202f% of the time, something nobody measured would "
        f"have to make whole regions lean towards the motif: a smooth leaning{scale} of log-sd "
        f"{number(log_sd)}{apart} in how readily traditions show it (log scale{spread})."
    )


def power_sentences(evidence: MotifEvidence) -> list[str]:
    """Say, truth by truth, which verdict comes out most often at this number of holders."""
    if evidence.power is None:
        return []
    best: dict[str, dict[Any, Any]] = {}
    for r in records(evidence.power):
        held = best.setdefault(str(r["truth"]), r)
        if as_float(r["probability"]) > as_float(held["probability"]):
            best[str(r["truth"])] = r
    out = []
    for truth, row in best.items():
        out.append(
            f"If the truth were {truth}, {plural(len(evidence.holders), 'holder')} would most "
            f"often give “{row['verdict']}” ({percent(row['probability'])})."
        )
    return out


def stability_sentence(evidence: MotifEvidence) -> str:
    """Say in how many sensitivity runs the verdict stays."""
    share = as_float(evidence.row.get("stability"))
    if evidence.stability is None or not known(share):
        return ""
    kinds = dict.fromkeys(str(k) for k in evidence.stability["kind"])
    return (
        f"The same verdict comes out in {percent(share)} of "
        f"{plural(len(evidence.stability), 'run')} with another choice: "
        f"{listing([changed(k) for k in kinds], 'or')}."
    )


def changed(kind: str) -> str:
    """Say what a kind of sensitivity run changes."""
    return CHANGES[kind][1] if kind in CHANGES else kind


def shares_sentence(evidence: MotifEvidence) -> str:
    """Say the posterior of the route shares in words; why there is none when refused."""
    shares = evidence.shares
    if shares is None:
        return ""
    if shares.refused:
        return f"No shares are given: {shares.refused.rstrip('.')}."
    parts = [
        f"{route} {percent(m)} ({percent(low)} to {percent(high)})"
        for route, m, low, high in zip(
            shares.routes, shares.mean, shares.low, shares.high, strict=True
        )
    ]
    return f"Share of gains by route, mean and 90\u202f% interval: {'; '.join(parts)}."


def catalogue_sentence(ranking: Ranking) -> str:
    """Say in one sentence how many motifs got which verdict."""
    counts = verdict_counts(ranking)
    total = sum(counts.values())
    if not total:
        return "No motif was judged."
    parts = [f"{number(k)} {name}" for name, k in counts.items() if k]
    return f"Of {plural(total, 'motif')}: {', '.join(parts)}."


def verdict_counts(ranking: Ranking) -> dict[str, int]:
    """Number of motifs by verdict, restricted ones included (totals only), in the usual order."""
    from twicetold.report.theme import VERDICTS

    counts = {v.verdict: 0 for v in VERDICTS}
    if "verdict" in ranking.motifs.columns:
        for value in ranking.motifs["verdict"]:
            if known(value):
                counts[look_of(str(value)).verdict] += 1
    return counts


def _sentence(text: str) -> str:
    text = text.strip()
    return text[:1].upper() + text[1:] + ("" if text.endswith((".", "!", "?")) else ".")
