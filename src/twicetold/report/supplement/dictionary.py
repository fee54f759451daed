"""What every column of a deposit means."""

from __future__ import annotations

from collections.abc import Iterable

from twicetold.evidence import columns as motif_columns
from twicetold.report.supplement.table import Column, kind_of

_SHARED = (
    Column("motif_id", "string", "Motif id, as in the catalogue."),
    Column("name", "string", "Name, as in the catalogue."),
    Column("tradition_id", "string", "Tradition id, as in the catalogue."),
    Column("category", "string", "Motif category, as in the catalogue."),
    Column("holders", "integer", "Number of traditions in which a motif is attested."),
    Column("motifs", "integer", "Number of motifs."),
    Column("verdict", "string", "What the pre-declared table of the plan says."),
    Column("probability", "number", "Probability, 0 to 1."),
    Column("world", "string", "World the motifs are compared with."),
    Column("low", "number", "Lower end of the interval or band."),
    Column("median", "number", "Median."),
    Column("high", "number", "Upper end of the interval or band."),
    Column("fitted", "number", "Value fitted."),
    Column("kind", "string", "What was changed in the sensitivity run."),
    Column("setting", "string", "To what it was changed."),
    Column("truth", "string", "Route by which simulated motifs spread."),
    Column("testable", "integer", "Motifs that could be rejected at all."),
    Column("rejected_share", "number", "Share of testable motifs that reject emergence alone."),
    Column("rejected_low", "number", "Lower end of the interval of rejected_share."),
    Column("rejected_high", "number", "Upper end of the interval of rejected_share."),
    Column("joins_ratio_low", "number", "Lower end of the interval of joins_ratio."),
    Column("joins_ratio_high", "number", "Upper end of the interval of joins_ratio."),
    Column("moved", "string", "Whether the verdict is another: yes or no."),
)

_ROUTES = (
    *(
        column
        for route in ("emergence", "contact", "inheritance")
        for column in (
            Column(f"{route}_share", "number", f"Mean share of {route} in the gains of a motif."),
            Column(f"{route}_share_low", "number", "Lower end of its 90 % interval."),
            Column(f"{route}_share_high", "number", "Upper end of its 90 % interval."),
            Column(f"{route}_led", "number", f"Share of motifs of which {route} is the largest."),
            Column(f"{route}_led_low", "number", "Lower end of its 90 % interval."),
            Column(f"{route}_led_high", "number", "Upper end of its 90 % interval."),
        )
    ),
    Column("contact_alone", "number", "Share of motifs with nine tenths or more by contact."),
    Column("contact_alone_low", "number", "Lower end of its 90 % interval."),
    Column("contact_alone_high", "number", "Upper end of its 90 % interval."),
)

_BY_TABLE: dict[str, tuple[Column, ...]] = {
    "S2_traditions": (
        Column("name", "string", "Tradition name, as in the catalogue."),
        Column("latitude", "number", "Degrees north, rounded as the plan says."),
        Column("longitude", "number", "Degrees east, rounded as the plan says."),
        Column("family", "string", "Language family; blank where none is named."),
        Column("branch", "string", "Branch within the family; blank where none is named."),
        Column("region", "string", "Region; blank where none is named."),
        Column("effort", "number", "How much was collected, relative; as in the catalogue."),
        Column("motifs_held", "integer", "Listed motifs attested in the tradition."),
        Column("neighbours", "integer", "Listed traditions next to it in the contact graph."),
        Column("located", "string", "yes, or no: without coordinates it was left out."),
        Column("label", "string", "Labels and notices the community made, word for word."),
    ),
    "S3_contacts": (
        Column("tradition_id", "string", "One end of the contact edge."),
        Column("neighbour_id", "string", "The other end."),
        Column(
            "length_km", "number", "Great-circle kilometres between the coordinates of table S2."
        ),
        Column("bridge", "string", "yes: added only so that every tradition can be reached."),
    ),
    "S3_bridges": (
        Column(
            "motif_id",
            "string",
            "First motif (by id) of those searched in one and the same part of the traditions.",
        ),
        Column("tradition_id", "string", "One end of a bridge among the traditions searched."),
        Column("neighbour_id", "string", "The other end."),
    ),
    "S5_plan": (
        Column("choice", "string", "Section and key of the analysis plan."),
        Column("value", "string", "What was chosen, as in plan.toml."),
        Column("meaning", "string", "What the choice decides."),
    ),
    "S5_provenance": (
        Column("item", "string", "What is recorded."),
        Column("value", "string", "Its value."),
    ),
    "columns": (
        Column("table", "string", "Table of the deposit."),
        Column("column", "string", "Column of the table."),
        Column("kind", "string", "integer, number or string."),
        Column("meaning", "string", "What the column holds."),
    ),
    "files": (
        Column("file", "string", "File of the deposit."),
        Column("bytes", "integer", "Its size."),
        Column("sha256", "string", "Its SHA-256 digest, in hexadecimal."),
    ),
    "S4_prevalence": (
        Column("motifs", "integer", "Motifs with this number of holders."),
        Column("fitted", "number", "Motifs expected by the fitted prevalence curve."),
    ),
    "S4_hidden": (
        Column("length_km", "number", "Correlation length of the hidden propensity, kilometres."),
        Column("log_sd", "number", "Its standard deviation (natural log) that would suffice."),
        Column("log_sd_low", "number", "Lower end of the interval of log_sd."),
        Column("log_sd_high", "number", "Upper end of the interval of log_sd."),
        Column("ratio", "number", "The same as a ratio of the highest to the lowest propensity."),
    ),
    "S4_hidden_lengths": (
        Column("length_km", "number", "Correlation length of the hidden propensity, kilometres."),
        Column("motifs", "integer", "Motifs it was computed for."),
        Column("log_sd_quarter", "number", "Lower quartile of log_sd over these motifs."),
        Column("log_sd_median", "number", "Median of log_sd over these motifs."),
        Column("log_sd_three_quarters", "number", "Upper quartile of log_sd over these motifs."),
        Column("ratio_median", "number", "Median of ratio over these motifs."),
        Column("beyond", "integer", "Motifs for which no strength tried would suffice."),
    ),
    "S4_stability": (
        Column("kind", "string", "What was changed in the sensitivity run."),
        Column("setting", "string", "To what it was changed."),
        Column("verdict", "string", "Verdict in that run."),
        Column("transmission", "string", "Where its p against transmission-only comes from."),
    ),
    "S4_stability_runs": (
        Column("draws", "integer", "Draws of the run."),
        Column("traditions", "integer", "Traditions that took part in the run."),
        Column("transmission", "string", "Where its p against transmission-only comes from."),
        Column("motifs", "integer", "Motifs judged in the run."),
        Column("same_verdict", "number", "Share of these motifs with the same verdict."),
    ),
    "S4_dynamics": (
        Column("p_spread_chain", "number", "P against transmission-only in the spread chain."),
        Column("p_contact_process", "number", "The same in the rate-based contact process."),
        Column("verdict_spread_chain", "string", "Verdict by the spread chain."),
        Column("verdict_contact_process", "string", "Verdict by the contact process."),
    ),
    "S4_worlds_alone": (
        Column("emergence_only", "string", "Emergence-only at the plan's level: fits or rejected."),
        Column("contact_only", "string", "Contact-only at the plan's level: fits or rejected."),
        Column("motifs", "integer", "Testable motifs of which both are so."),
        Column("share", "number", "Their share of the testable motifs."),
    ),
    "S4_category_pairs": (
        Column("other", "string", "The category it is compared with."),
        Column("motifs", "integer", "Testable motifs of the category."),
        Column("other_motifs", "integer", "Testable motifs of the other category."),
        Column("compared", "integer", "Motifs that could be compared at equal holders."),
        Column("ratio", "number", "Joins ratio of the category over that of the other."),
        Column("p", "number", "P of so large a difference, categories shuffled at equal holders."),
        Column("q", "number", "The same, adjusted across pairs (Benjamini-Hochberg)."),
    ),
    "S4_needed": (
        Column("holders", "integer", "Number of holders."),
        Column("joins_needed", "integer", "Fewest joins that reject emergence alone."),
        Column("ratio_needed", "number", "joins_needed divided by joins_expected."),
        Column("p_needed", "number", "P of joins_needed in the emergence-only world."),
    ),
    "S4_power": (
        Column("holders", "integer", "Number of holders."),
        Column("probability", "number", "Share of simulated motifs that get this verdict."),
        Column("low", "number", "Lower end of its 95 % interval."),
        Column("high", "number", "Upper end of its 95 % interval."),
        Column("motifs", "integer", "Motifs simulated."),
    ),
    "S4_power_smallest": (
        Column("verdict", "string", "The verdict this truth hopes for."),
        Column(
            "holders",
            "integer",
            "Fewest holders from which on that verdict comes out in 80 % of motifs.",
        ),
    ),
    "S4_turnover_fit": (
        Column("from_holders", "integer", "Fewest holders of the class."),
        Column("to_holders", "integer", "Most holders of the class."),
        Column("observed", "integer", "Motifs in the class."),
        Column("expected", "number", "Motifs expected there by the fitted prevalence curve."),
    ),
    "S4_propensity_fit": (
        Column("term", "string", "Term of the fit of row totals to covariates."),
        Column("estimate", "number", "Its coefficient, on the log of the rate."),
        Column("se", "number", "Standard error."),
        Column("se_dispersed", "number", "Standard error, widened for overdispersion."),
        Column("z", "number", "estimate divided by se_dispersed."),
        Column("rate_ratio", "number", "exp(estimate)."),
    ),
    "S4_route_shares": (
        Column("category", "string", "Category; (all) for the whole catalogue."),
        Column("motifs_with_shares", "integer", "Motifs whose route shares could be told."),
        *_ROUTES,
    ),
    "S4_categories": (
        Column("motifs", "integer", "Motifs in the category."),
        Column("joins_ratio", "number", "All joins of its motifs over all joins expected."),
        Column("motifs_with_shares", "integer", "Motifs whose route shares could be told."),
        *_ROUTES,
    ),
    "S4_bands": (
        Column("low", "number", "Lower end of the 95 % band of the number of clusters."),
        Column("median", "number", "Median number of clusters."),
        Column("high", "number", "Upper end of the 95 % band of the number of clusters."),
    ),
}


def describe(table: str, name: str, cells: Iterable[str]) -> Column:
    """Give the description of a column; its kind is taken from the cells where nothing is known."""
    cells = list(cells)
    for column in (*_BY_TABLE.get(table, ()), *motif_columns.COLUMNS, *_SHARED):
        if column.name == name:
            return _fitting(Column(name, column.kind, column.meaning), cells)
    for suffix, words in (("_rounded", "on rounded coordinates"), ("_with", "with everybody in")):
        if name.endswith(suffix):
            plain = describe(table, name.removesuffix(suffix), cells)
            return Column(name, plain.kind, f"{plain.meaning.rstrip('.')}; {words}.")
    said = name.replace("_", " ")
    if table == "S2_traditions":
        said = f"the catalogue's own column {name}"
    return Column(name, kind_of(cells), said[:1].upper() + said[1:] + ".")


def _fitting(column: Column, cells: list[str]) -> Column:
    """Never call a column numeric when a cell of it is not: a spreadsheet would be told a lie."""
    if column.kind != "string" and (found := kind_of(cells)) != column.kind and any(cells):
        kind = "number" if found in ("integer", "number") and column.kind == "number" else found
        return Column(column.name, kind, column.meaning)
    return column
