"""p-values per world, shares, verdict, multiplicity, power, stability, hidden bound.

Layer rule: the only place that sees both worlds; may import everything but ``report``.
"""

from twicetold.evidence.results import Comparison, MotifEvidence, Ranking, RouteShares

__all__ = ["Comparison", "MotifEvidence", "Ranking", "RouteShares"]
