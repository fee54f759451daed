"""The tables S1 to S5 of a deposit, from a run's folder."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold import __version__
from twicetold.catalogue import Catalogue
from twicetold.catalogue.write import number
from twicetold.evidence.contacts import KnownContacts
from twicetold.graph import ContactGraph
from twicetold.plan import Plan
from twicetold.report.common import SMALLEST_TOTAL, open_traditions
from twicetold.report.supplement.dictionary import describe
from twicetold.report.supplement.source import Rows, Run
from twicetold.report.supplement.table import Table, infinite, kind_of

#: What stays of a motif whose totals would be too small beside restricted traditions.
NAMED = ("rank", "motif_id", "name", "category")
TOO_FEW = f"fewer than {SMALLEST_TOTAL} holders: not listed, since restricted traditions took part"

_TITLES = {
    "stability": "Verdict of every motif under other graphs, exponents, families and regions.",
    "rounded": "Verdict of every motif on exact and on rounded coordinates.",
    "hidden": "How strong a hidden propensity would have to be, motif by motif.",
    "hidden_lengths": "The same at other correlation lengths, over motifs.",
    "moved": "What moved when traditions were withdrawn.",
    "bands": "Number of clusters to expect for each number of holders, by world.",
    "prevalence": "Motifs by number of holders, with the fitted curve.",
    "categories": "Categories of motifs.",
    "propensity_fit": "Fit of the propensities to the covariates.",
    "power_smallest": "Fewest holders at which the right verdict can be hoped for.",
    "stability_runs": "The sensitivity runs, and how many verdicts stayed the same in each.",
    "dynamics": "Verdicts under the rate-based contact process beside the spread chain.",
    "category_pairs": "Pairs of categories, compared at equal numbers of holders.",
    "needed": "Joins needed to tell contact or ancestry from emergence, by number of holders.",
    "turnover_fit": "Fit of the prevalence curve, by classes of holders.",
    "worlds_alone": "How many motifs emergence alone, contact alone, either or neither reproduces.",
    "route_shares": "Shares of the routes over the catalogue and its categories.",
    "power": "What these traditions could show, by number of holders.",
}


@dataclass(frozen=True)
class Published:
    """What of a run may be published.

    Parameters
    ----------
    run : Run
    plan : Plan
        Without the ids of withdrawn traditions and without the place of a file.
    catalogue : Catalogue
        With rounded coordinates; restricted rows still in it.
    graph : ContactGraph
        With lengths between rounded coordinates: exact ones would give the places away.
    bridges : KnownContacts
        Of the exact coordinates.
    small : frozenset of str
        Motif ids whose numbers are left out (see :data:`TOO_FEW`).
    """

    run: Run
    plan: Plan
    catalogue: Catalogue
    graph: ContactGraph
    bridges: KnownContacts
    small: frozenset[str]


def small_motifs(run: Run) -> frozenset[str]:
    """Motifs whose totals could single out a restricted tradition."""
    if not run.restricted_traditions:
        return frozenset()
    c = run.catalogue
    return frozenset(
        c.motif_ids[m] for m in run.open_motifs() if len(c.holders(m)) < SMALLEST_TOTAL
    )


def all_tables(published: Published, extra: Mapping[str, Rows]) -> list[Table]:
    """Every table of the deposit but the column dictionary and the list of files."""
    run = published.run
    catalogue, graph = published.catalogue, published.graph
    out = [
        motifs_table(published),
        traditions_table(catalogue, graph, run.open_motifs()),
        contacts_table(catalogue, graph),
    ]
    if not run.restricted and (bridges := bridges_table(published)) is not None:
        out.append(bridges)
    given = {**run.tables, **extra}
    out += [sensitivity_table(published, name, given[name]) for name in sorted(given)]
    return [*out, plan_table(published.plan), provenance_table(published)]


def columns_table(tables: Sequence[Table]) -> Table:
    """The column dictionary of these tables."""
    rows = [(t.name, c.name, c.kind, c.meaning) for t in tables for c in t.columns]
    return table(
        "columns", "What every column means.", ("table", "column", "kind", "meaning"), rows
    )


def table(
    name: str,
    title: str,
    header: Sequence[str],
    rows: Iterable[Sequence[str]],
    *,
    key: tuple[str, ...] = (),
    references: tuple[tuple[str, str, str], ...] = (),
) -> Table:
    """Make a table; the dictionary says what its columns are."""
    body = with_infinity(rows)
    cells = list(zip(*body, strict=True)) if body else [()] * len(header)
    columns = tuple(describe(name, h, c) for h, c in zip(header, cells, strict=True))
    return Table(name, title, columns, body, key, references)


def with_infinity(rows: Iterable[Sequence[str]]) -> tuple[tuple[str, ...], ...]:
    """Rows with infinite numbers written as table schemas want them, text left alone."""
    body = [tuple(row) for row in rows]
    marked = {k for row in body for k, cell in enumerate(row) if cell in ("inf", "-inf")}
    numeric = {k for k in marked if kind_of(infinite(row[k]) for row in body) != "string"}
    if not numeric:
        return tuple(body)
    return tuple(
        tuple(infinite(c) if k in numeric else c for k, c in enumerate(row)) for row in body
    )


def motifs_table(published: Published) -> Table:
    """S1: ``motifs.csv`` without restricted motifs, ranked among those listed."""
    header, rows = published.run.motifs
    at = header.index("motif_id")
    kept = [row for row in rows if row[at] in _listed(published)]
    out = []
    for rank, row in enumerate(kept, 1):
        cells = dict(zip(header, row, strict=True)) | {"rank": str(rank)}
        if row[at] in published.small:
            cells = {k: v if k in NAMED else "" for k, v in cells.items()} | {"reason": TOO_FEW}
        out.append([cells[h] for h in header])
    return table(
        "S1_motifs", "Every motif, ranked, with its verdict.", header, out, key=("motif_id",)
    )


def _listed(published: Published) -> frozenset[str]:
    ids = published.run.catalogue.motif_ids
    return frozenset(ids[m] for m in published.run.open_motifs())


def traditions_table(c: Catalogue, graph: ContactGraph, motifs: Sequence[int]) -> Table:
    """S2: the traditions that may be named, with the coordinates of the catalogue.

    Parameters
    ----------
    c : Catalogue
        With rounded coordinates.
    graph : ContactGraph
    motifs : sequence of int
        Indices of the motifs that may be listed.
    """
    shown = open_traditions(c)
    held = np.asarray(c.attested[motifs].sum(axis=0)).ravel() if motifs else np.zeros(len(shown))
    near = graph.edges[shown[graph.edges].all(axis=1)]
    degree = np.bincount(near.ravel(), minlength=c.n_traditions)
    effort = [] if c.effort is None else ["effort"]
    own = list(c.covariates)
    fixed = ["tradition_id", "name", "latitude", "longitude", "family", "branch", "region"]
    tail = ["motifs_held", "neighbours", "located", "label"]
    taken = {*fixed, *effort, *tail}
    named = [f"catalogue_{x}" if x in taken else x for x in own]
    rows = []
    for i in np.flatnonzero(shown).tolist():
        row = [c.tradition_ids[i], c.tradition_names[i]]
        row += [number(float(c.latitude[i])), number(float(c.longitude[i]))]
        row += [c.family[i], c.branch[i], c.region[i]]
        row += [] if c.effort is None else [number(float(c.effort[i]))]
        row += [number(float(c.covariates[x][i])) for x in own]
        label = " | ".join(c.labels.get(c.tradition_ids[i], ()))
        rows.append([*row, str(int(held[i])), str(int(degree[i])), "yes", label])
    blank = [""] * (len(fixed) - 1 + len(effort) + len(own) + 2)
    rows += [[identity, *blank, "no", ""] for identity in c.unlocated]
    header = [*fixed, *effort, *named, *tail]
    title = "Every tradition that may be listed."
    return table("S2_traditions", title, header, rows, key=("tradition_id",))


def contacts_table(c: Catalogue, g: ContactGraph) -> Table:
    """S3: the contact graph among the traditions of S2."""
    shown = open_traditions(c)[g.edges].all(axis=1)
    ids = c.tradition_ids
    rows = [
        (ids[i], ids[j], number(round(float(km), 1)), "yes" if bridge else "no")
        for (i, j), km, bridge in zip(
            g.edges[shown].tolist(), g.length_km[shown], g.bridge[shown], strict=True
        )
    ]
    ends = ("tradition_id", "neighbour_id")
    references = tuple((end, "S2_traditions", "tradition_id") for end in ends)
    title = "The contact graph, one row an edge."
    header = (*ends, "length_km", "bridge")
    return table("S3_contacts", title, header, rows, key=ends, references=references)


def bridges_table(published: Published) -> Table | None:
    """S3: bridges of the motifs searched in part of the traditions; None where there are none."""
    c = published.catalogue
    rows = []
    for s, mask in enumerate(c.surveyed_sets):
        if mask.all():
            continue
        motif = c.motif_ids[int(np.flatnonzero(c.surveyed_of == s)[0])]
        graph = published.bridges.among(mask)
        place = np.flatnonzero(mask)
        rows += [
            (motif, c.tradition_ids[i], c.tradition_ids[j])
            for i, j in place[graph.edges[graph.bridge]].tolist()
        ]
    if not rows:
        return None
    ends = ("tradition_id", "neighbour_id")
    references = (
        ("motif_id", "S1_motifs", "motif_id"),
        *((end, "S2_traditions", "tradition_id") for end in ends),
    )
    title = (
        "Bridges of the contact graph among the traditions searched, where a motif was searched "
        "in some of them only (the bridges of S3_contacts are for all traditions)."
    )
    header = ("motif_id", *ends)
    return table("S3_bridges", title, header, sorted(rows), key=header, references=references)


def sensitivity_table(published: Published, name: str, rows: Rows) -> Table:
    """S4: one of the run's other tables, without rows of what may not be listed."""
    header, body = rows
    if "motif_id" in header:
        at = header.index("motif_id")
        allowed = _listed(published) - published.small
        body = [row for row in body if row[at] in allowed]
    if hidden := protected_words(published.catalogue):
        body = [row for row in body if hidden.isdisjoint(row)]
    title = _TITLES.get(name, f"{name[:1].upper()}{name[1:].replace('_', ' ')} of the run.")
    motif_rows = header.count("motif_id") and len({r[header.index("motif_id")] for r in body})
    key = ("motif_id",) if body and motif_rows == len(body) else ()
    refers = (("motif_id", "S1_motifs", "motif_id"),) if "motif_id" in header else ()
    return table(f"S4_{name}", title, header, body, key=key, references=refers)


def protected_words(c: Catalogue) -> frozenset[str]:
    """Ids, names, families, regions and labels that only restricted rows have."""
    shown = open_traditions(c)
    closed = [access == "restricted" for access in c.motif_access]

    def words(mask: npt.NDArray[np.bool_], motifs: list[bool]) -> set[str]:
        found: set[str] = set()
        for values in (c.tradition_ids, c.tradition_names, c.family, c.branch, c.region):
            found.update(values[i] for i in np.flatnonzero(mask).tolist())
        for values in (c.motif_ids, c.motif_names, c.motif_categories):
            found.update(v for v, chosen in zip(values, motifs, strict=True) if chosen)
        return found - {""}

    return frozenset(words(~shown, closed) - words(shown, [not x for x in closed]))


def plan_table(plan: Plan) -> Table:
    """S5: every choice of the plan."""
    rows = [(name, _said(value), meaning) for name, value, meaning in plan.choices()]
    header = ("choice", "value", "meaning")
    return table("S5_plan", "Every choice of the analysis plan.", header, rows, key=("choice",))


def _said(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, Mapping):
        return "; ".join(f"{k} = {_said(v)}" for k, v in value.items())
    if isinstance(value, list | tuple):
        return ", ".join(map(_said, value))
    return number(value) if isinstance(value, float) else str(value)


def provenance_table(published: Published) -> Table:
    """S5: where the numbers come from."""
    run, c, record = published.run, published.catalogue, published.run.record
    rows: list[tuple[str, str]] = [
        ("title", c.title),
        ("notice", c.notice),
        ("invented data", _said(c.invented)),
        ("licence", c.license),
        ("citation", c.citation),
        ("twicetold", str(record.get("twicetold", ""))),
        ("deposit written by twicetold", __version__),
        ("order", str(record.get("by", "evidence"))),
        ("seed", str(published.plan.evidence.seed)),
        ("plan_sha256", published.plan.digest()),
        ("coordinates rounded to degrees", number(published.plan.report.round_degrees)),
        ("contact graph", published.graph.rule),
        ("traditions", str(c.n_traditions)),
        ("traditions without coordinates", str(len(c.unlocated))),
        ("traditions withdrawn", str(len(run.plan.catalogue.without))),
        ("restricted traditions", _few(run.restricted_traditions)),
        ("restricted motifs", _few(c.n_motifs - len(run.open_motifs()))),
        ("motifs", str(c.n_motifs)),
    ]
    for source in record.get("catalogue", {}).get("inputs", []):
        rows.append((f"input {source.get('name', '')} sha256", str(source.get("sha256", ""))))
    rows += [(f"version {k}", str(v)) for k, v in record.get("versions", {}).items()]
    rows += _flat("fit", record.get("fits", {}))
    notes = [str(n) for n in record.get("notes", []) if not _names_any(str(n), protected_words(c))]
    rows += [(f"note {k}", n) for k, n in enumerate(notes, 1)]
    rows = [row for row in rows if row[1]]
    title = "Where the numbers come from."
    return table("S5_provenance", title, ("item", "value"), rows, key=("item",))


def _names_any(text: str, words: frozenset[str]) -> bool:
    """Whether a text holds one of the words as a word of its own."""
    return any(re.search(rf"(?<!\w){re.escape(w)}(?!\w)", text) for w in words)


def _few(n: int) -> str:
    return f"fewer than {SMALLEST_TOTAL}" if 0 < n < SMALLEST_TOTAL else str(n)


def _flat(name: str, value: object) -> list[tuple[str, str]]:
    """Nested numbers as rows."""
    if isinstance(value, Mapping):
        return [pair for k, v in value.items() for pair in _flat(f"{name} {k}", v)]
    if isinstance(value, list | tuple):
        if any(isinstance(v, Mapping | list | tuple) for v in value):
            return [pair for k, v in enumerate(value, 1) for pair in _flat(f"{name} {k}", v)]
        return [(name, ", ".join("" if v is None else _said(v) for v in value))]
    return [(name, "" if value is None else _said(value))]
