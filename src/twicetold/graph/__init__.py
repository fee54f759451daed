"""Contact graphs over traditions: build, exchange with libpysal, summarise.

Layer rule: may import ``catalogue``; knows nothing of motifs or statistics.
"""

from twicetold.graph.build import build_graph, contact_graph
from twicetold.graph.model import ContactGraph
from twicetold.graph.rules import Rule, parse_rule
from twicetold.graph.sphere import great_circle_km, round_coordinates, unit_vectors

__all__ = [
    "ContactGraph",
    "Rule",
    "build_graph",
    "contact_graph",
    "great_circle_km",
    "parse_rule",
    "round_coordinates",
    "unit_vectors",
]
