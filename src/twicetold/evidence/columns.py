"""The columns of ``motifs.csv``, in order, each with its kind and meaning.

The table, the pages and the deposit's column dictionary all read this list.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Column:
    """One column: its name, kind (``integer``, ``number`` or ``string``) and meaning."""

    name: str
    kind: str
    meaning: str


def _share(route: str) -> tuple[Column, ...]:
    return (
        Column(
            f"{route}_share",
            "number",
            f"Share of gains by {route}: posterior mean; blank where shares are refused.",
        ),
        Column(f"{route}_share_low", "number", "Lower end of its 90 % interval."),
        Column(f"{route}_share_high", "number", "Upper end of its 90 % interval."),
    )


COLUMNS: tuple[Column, ...] = (
    Column("rank", "integer", "Place in the ranking, from 1."),
    Column("motif_id", "string", "Motif id, as in the catalogue."),
    Column("name", "string", "Motif name."),
    Column("category", "string", "Motif category, where the catalogue has one."),
    Column("holders", "integer", "Traditions in which the motif is attested."),
    Column("surveyed", "integer", "Traditions searched for the motif."),
    Column("joins", "integer", "Edges of the contact graph whose two ends hold the motif."),
    Column("joins_expected", "number", "Mean joins in the emergence-only world."),
    Column("joins_ratio", "number", "joins divided by joins_expected."),
    Column("joins_cross_family", "integer", "Joins between traditions of different families."),
    Column("joins_same_family", "integer", "Joins between traditions of one family."),
    Column("moran_i", "number", "Moran's I of the motif's presence, binary weights."),
    Column("moran_i_expected", "number", "Mean Moran's I in the emergence-only world."),
    Column("clusters", "integer", "Connected components of holders in the contact graph."),
    Column("largest_cluster", "integer", "Holders in the largest cluster."),
    Column("strands", "integer", "Sets of holders linked by joins or a shared family."),
    Column(
        "p_attainable",
        "number",
        "Smallest p_against_emergence this motif could ever reach; above the level it is too rare "
        "to tell and leaves the multiplicity family.",
    ),
    Column(
        "p_against_emergence", "number", "P(at least this many joins) in an emergence-only world."
    ),
    Column("q_against_emergence", "number", "The same, adjusted across testable motifs."),
    Column(
        "p_against_ancestry",
        "number",
        "P(at least as many cross-family joins) in the ancestry-only world.",
    ),
    Column("q_against_ancestry", "number", "The same, adjusted across testable motifs."),
    Column(
        "p_against_contact",
        "number",
        "P(at most as many joins) in the contact-only world, worst case over what the fits allow.",
    ),
    Column(
        "p_against_transmission",
        "number",
        "P(at least as many strands) without second invention, worst case over the inheritance "
        "share and what the fits allow.",
    ),
    Column("q_against_transmission", "number", "The same, adjusted across testable motifs."),
    *_share("emergence"),
    *_share("contact"),
    *_share("inheritance"),
    Column("verdict", "string", "What the pre-declared table says; see reason."),
    Column("reason", "string", "Why, in words."),
    Column("stability", "number", "Share of sensitivity runs with the same verdict."),
    Column(
        "hidden_bound",
        "number",
        "Log-sd of a smooth unmeasured propensity that would give these joins 5 % of the time.",
    ),
)

NAMES = tuple(column.name for column in COLUMNS)
BY_NAME = {column.name: column for column in COLUMNS}
