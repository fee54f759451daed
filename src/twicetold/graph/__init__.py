"""Contact graphs over traditions: build, exchange with libpysal, summarise.

Layer rule: may import ``catalogue``; knows nothing of motifs or statistics.
"""

from twicetold.graph.build import build_graph, contact_graph
from twicetold.graph.exchange import from_libpysal, read_neighbours, to_libpysal, write_gal
from twicetold.graph.model import ContactGraph
from twicetold.graph.regions import regions
from twicetold.graph.rules import Rule, parse_rule
from twicetold.graph.sphere import great_circle_km, round_coordinates, unit_vectors
from twicetold.graph.summary import GraphSummary, components, hop_distances, summarise

__all__ = [
    "ContactGraph",
    "GraphSummary",
    "Rule",
    "build_graph",
    "components",
    "contact_graph",
    "from_libpysal",
    "great_circle_km",
    "hop_distances",
    "parse_rule",
    "read_neighbours",
    "regions",
    "round_coordinates",
    "summarise",
    "to_libpysal",
    "unit_vectors",
    "write_gal",
]
