"""The methods paragraph: written from the plan and the results, with its citations."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from twicetold.report.common import as_float, known, listing, number, plural, probability
from twicetold.report.references import BY_KEY, bibtex, cite
from twicetold.report.words import changed

if TYPE_CHECKING:
    from twicetold.evidence import Ranking

Choice = tuple[str, str, str]


@dataclass(frozen=True)
class Methods:
    """Paragraphs ready to paste, the works they cite, and every choice made.

    Parameters
    ----------
    paragraphs : tuple of str
    cited : tuple of str
        BibTeX keys, in the order of first mention.
    choices : tuple of (key, value, explanation)
    """

    paragraphs: tuple[str, ...]
    cited: tuple[str, ...]
    choices: tuple[Choice, ...]

    def bibtex(self) -> str:
        """Give the BibTeX file of the works cited."""
        return bibtex(list(self.cited))

    def markdown(self) -> str:
        """Give the paragraphs, the works and the table of choices as Markdown."""
        rows = [f"| `{k}` | {_cell(v)} | {_cell(e)} |" for k, v, e in self.choices]
        works = [f"- {reference_line(key)}" for key in self.cited]
        parts = [
            "# Methods",
            *self.paragraphs,
            "## References",
            "\n".join(works),
            "## Every choice made",
            "\n".join(["| choice | value | meaning |", "|---|---|---|", *rows]),
        ]
        return "\n\n".join(parts) + "\n"


def methods(ranking: Ranking) -> Methods:
    """Write the methods from the plan and the results of a run."""
    paragraphs = [_data(ranking), _graph(ranking), _emergence(ranking)]
    asked = set(ranking.plan.evidence.worlds)
    if "ancestry" in asked and _families(ranking):
        paragraphs.append(_ancestry(ranking))
    if asked & {"contact", "transmission", "shares"}:
        paragraphs.append(_spread(ranking))
    paragraphs += [_judging(ranking), _trust(ranking), _software(ranking)]
    text = "\n".join(paragraphs)
    cited = [key for key, ref in BY_KEY.items() if ref.cited in text]
    cited.sort(key=lambda key: text.index(BY_KEY[key].cited))
    choices = tuple((k, _value(v), e) for k, v, e in ranking.plan.choices())
    return Methods(tuple(p for p in paragraphs if p), tuple(cited), choices)


def reference_line(key: str) -> str:
    """Give one work as a line of a list of references."""
    f = dict(BY_KEY[key].fields)
    author = f["author"].replace(" and ", "; ")
    where = f.get("journal") or f.get("publisher") or f.get("note") or ""
    detail = ", ".join(x for x in (f.get("volume", ""), f.get("pages", "")) if x)
    line = f"{author} ({f['year']}). {f['title']}. {where}{' ' + detail if detail else ''}."
    return line.replace("{", "").replace("}", "").replace("--", "–")


def _families(ranking: Ranking) -> bool:
    return ranking.catalogue.has_families and ranking.plan.ancestry.level != "none"


def _data(ranking: Ranking) -> str:
    c, plan = ranking.catalogue, ranking.plan
    out = [
        f"We analysed {plural(len(ranking.motifs), 'motif')} with "
        f"{plural(int(c.attested.nnz), 'attestation')} in {plural(c.n_traditions, 'tradition')} "
        "with known places."
    ]
    if c.unlocated:
        out.append(
            f"{plural(len(c.unlocated), 'tradition')} without coordinates "
            f"{'was' if len(c.unlocated) == 1 else 'were'} left out."
        )
    if plan.catalogue.without:
        out.append(f"{plural(len(plan.catalogue.without), 'tradition')} had been withdrawn.")
    sets = len(c.surveyed_sets)
    if sets > 1 or not all(bool(s.all()) for s in c.surveyed_sets):
        out.append(
            "Traditions that were not searched for a motif left the contact graph for that motif "
            f"and were never counted as absences ({plural(sets, 'distinct set')} of traditions "
            "searched)."
        )
    else:
        out.append("Every tradition counted as searched for every motif.")
    return " ".join(out)


def _graph(ranking: Ranking) -> str:
    g = ranking.graph
    rule, _, value = g.rule.partition(":")
    how = {
        "nearest": f"by joining each tradition to its {value} nearest neighbours (either way)",
        "within": f"by joining all traditions within {value} km",
        "delaunay": "as the Delaunay triangulation on the sphere",
        "gabriel": f"as the Gabriel graph on the sphere {cite('gabriel1969')}",
        "given": "as given with the catalogue",
    }.get(rule, f"by the rule {g.rule}")
    out = [
        "Possible contact between traditions was represented by an undirected graph, built "
        f"{how}; distances are great-circle distances. It has {plural(g.n_edges, 'edge')}."
    ]
    bridges = int(g.bridge.sum())
    if bridges:
        out.append(
            f"{plural(bridges, 'edge')} of the spherical minimum spanning tree "
            f"{'was' if bridges == 1 else 'were'} added between otherwise separate pieces, so that "
            "contact is never impossible by construction."
        )
    alone = int((g.degree == 0).sum())
    if alone:
        out.append(f"{plural(alone, 'tradition')} {'has' if alone == 1 else 'have'} no neighbour.")
    return " ".join(out)


def _emergence(ranking: Ranking) -> str:
    plan = ranking.plan
    if "emergence" not in plan.evidence.worlds:
        return ""
    how = plan.emergence.propensity
    exponent = plan.emergence.exponent
    power = "" if exponent == 1 else f" to the power {number(exponent)}"
    rates = {
        "equal": "equal for all traditions",
        "effort": f"proportional to the amount collected in it{power}",
        "recorded": "proportional to the number of other motifs recorded in it",
        "covariates": (
            "fitted by a binomial regression with complementary log-log link on "
            f"{listing(list(plan.emergence.covariates))}"
        ),
    }
    if how == "margins":
        world = (
            "by randomising the whole catalogue with the number of holders of each motif and the "
            f"number of motifs of each tradition held fixed {cite('strona2014', 'besag1989')}"
        )
    else:
        world = (
            "by letting each tradition come to the motif by itself, at a rate "
            f"{rates.get(how, how)}, until it has as many holders as observed "
            f"{cite('plackett1975')}"
        )
    return (
        "For each motif we counted the joins, that is the edges of the graph whose two ends both "
        f"hold it {cite('cliff1981')}, and compared them with an emergence-only world obtained "
        f"{world}. {number(plan.evidence.draws)} draws were made, each of which serves every "
        f"number of holders {cite('newman2001')}; small cases were enumerated. P-values are "
        f"(1 + number of draws at least as extreme) / (draws + 1) {cite('phipson2010')}. Moran's I "
        f"{cite('moran1950')} and the number of clusters are reported beside them."
    )


def _ancestry(ranking: Ranking) -> str:
    level = ranking.plan.ancestry.level
    groups = {x for x in getattr(ranking.catalogue, level, ranking.catalogue.family) if x}
    many = {"family": "families", "branch": "branches"}.get(level, level)
    one = {"family": "family", "branch": "branch"}.get(level, level)
    return (
        f"To allow for shared ancestry, holders were drawn again with their number in each {one} "
        f"held fixed ({number(len(groups))} {many}), in the same proportions; the statistic is the "
        "number of joins between traditions of different families, which descent within families "
        "does not raise."
    )


def _spread(ranking: Ranking) -> str:
    plan, fits = ranking.plan, ranking.fits
    x, low, high = (as_float(fits.get(k)) for k in ("turnover", "turnover_low", "turnover_high"))
    out = [
        "What contact would look like was simulated with a spread chain on the same graph: a motif "
        "arises in one tradition, is gained by others by contact, inheritance or renewed "
        "emergence, and is lost again; it is a relative of the contact process "
        f"{cite('harris1974')} in which the number of holders follows a birth-death process."
    ]
    assumed = [as_float(fits.get(f"turnover_assumed_{end}")) for end in ("low", "high")]
    if known(assumed[0]):
        why = (
            "too few motifs have a prevalence to fit it to"
            if plan.spread.turnover == "fit"
            else "set beforehand"
        )
        out.append(
            f"The ratio of gains to losses was left open from {number(assumed[0], 4)} to "
            f"{number(assumed[1], 4)} ({why}): p-values are the largest in that range, route "
            f"shares and bands those at {number(x, 4)}."
        )
    elif plan.spread.turnover == "fit":
        said = f" ({number(x)}" if known(x) else ""
        said += (
            f", 95 % interval {number(low, 4)} to {number(high, 4)}" if said and known(low) else ""
        )
        said += ")" if said else ""
        out.append(
            f"The ratio of gains to losses{said} was fitted to the catalogue's prevalence curve by "
            f"left-truncated maximum likelihood (motifs with {plan.spread.min_holders} or more "
            "holders), for which the chain predicts a log-series whatever the geography "
            f"{cite('fisher1943', 'kendall1948')}; no geographical information enters this fit."
        )
        good = next((as_float(fits[k]) for k in fits if "goodness" in k and known(fits[k])), None)
        if good is not None:
            out.append(f"Goodness of fit by parametric bootstrap: p = {probability(good)}.")
    else:
        out.append(f"The ratio of gains to losses was set to {plan.spread.turnover}.")
    if plan.spread.recording == "fit":
        out.append(
            "A true holder is recorded with a probability that rises with effort and levels off; "
            "its rate was fitted to the numbers of motifs recorded per tradition."
        )
    else:
        out.append("Recording was taken to be complete.")
    if plan.spread.reach != 1:
        out.append(f"A contact goes {number(plan.spread.reach)} steps along the graph on average.")
    if "transmission" in plan.evidence.worlds:
        out.append(
            "Parallel emergence is claimed only against a transmission-only world: one origin, "
            "then contact and inheritance in any proportion. The statistic is the number of "
            "strands (sets of holders linked by joins or by a shared family); the p-value is the "
            "largest over the inheritance share and over the confidence set of the fitted "
            f"quantities, plus the error rate of that set {cite('berger1994')}."
        )
    if "shares" in plan.evidence.worlds:
        out.append(
            "Shares of the routes are posterior means with 90 % intervals, from snapshots of the "
            "chain over a grid of shares; intervals of this kind are checked by simulation-based "
            f"calibration {cite('talts2018')}."
        )
    return f"{' '.join(out)} {number(plan.evidence.walks)} walks of the chain were made."


def _judging(ranking: Ranking) -> str:
    e = ranking.plan.evidence
    out = [
        f"The verdict follows a table fixed in advance, at level {number(e.alpha)}. Motifs that "
        "could not reach this level whatever their geography were set apart as too rare before "
        f"adjusting for multiplicity {cite('tarone1990')}."
    ]
    adjusted = {
        "bh": f"The verdict goes by false-discovery-rate adjusted values {cite('benjamini1995')}; "
        f"values valid under any dependence {cite('benjamini2001')} are more cautious.",
        "by": "The verdict goes by false-discovery-rate adjusted values valid under any dependence "
        f"{cite('benjamini2001')}.",
        "none": "The verdict goes by unadjusted p-values.",
    }
    if len(ranking.motifs) == 1:
        return f"{out[0]} The verdict on a single motif goes by p."
    out.append(adjusted.get(e.multiplicity, ""))
    return " ".join(x for x in out if x)


def _trust(ranking: Ranking) -> str:
    out = []
    tried = _tried(ranking)
    if tried:
        told = [changed(kind) + _settings(kind, settings) for kind, settings in tried.items()]
        out.append(
            f"Each verdict was computed again with {listing(told)}; stability is the share of "
            "these runs with the same verdict."
        )
    if any(known(e.hidden_bound.get("log_sd")) for e in ranking.evidence):
        out.append(
            "The hidden-propensity bound is the strength of a smooth unmeasured propensity over "
            "the map at which the emergence-only world gives the observed joins 5 % of the time."
        )
    out.append(
        "Records of one moment cannot separate contact from a shared environment that nobody "
        "measured, nor emergence from carriage that ignores distance."
    )
    return " ".join(out)


def _tried(ranking: Ranking) -> dict[str, list[str]]:
    """Kinds of sensitivity runs, each with the settings that any motif was judged under."""
    tried: dict[str, dict[str, None]] = {}
    for evidence in ranking.evidence:
        table = evidence.stability
        if table is not None:
            # Plain lists: there may be many thousands of these tables.
            for kind, setting in zip(
                table["kind"].tolist(), table["setting"].tolist(), strict=True
            ):
                tried.setdefault(str(kind), {})[str(setting)] = None
    return {kind: list(settings) for kind, settings in tried.items()}


def _settings(kind: str, settings: list[str]) -> str:
    """Settings that runs of one kind tried, in brackets; what was left out is only counted."""
    if kind.startswith("without"):
        return f" ({number(len(settings))} in turn)"
    return f" ({', '.join(settings)})"


def _software(ranking: Ranking) -> str:
    from twicetold import __version__

    digest = ranking.plan.digest()[:12]
    return (
        f"Computed with twicetold {__version__}, seed {ranking.plan.evidence.seed}; SHA-256 of the "
        f"analysis plan begins {digest}."
    )


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, tuple | list):
        return ", ".join(_value(v) for v in value) or "none"
    if isinstance(value, dict) or hasattr(value, "items"):
        return "; ".join(f"{k}: {_value(v)}" for k, v in value.items())
    if isinstance(value, int | float):
        return f"{value:g}" if isinstance(value, float) else str(value)
    return str(value)


def _cell(text: str) -> str:
    return text.replace("|", "\\|").replace("\n", " ")
