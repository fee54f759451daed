"""p-values per world, shares, verdict, multiplicity, power, stability, hidden bound.

Layer rule: the only place that sees both worlds; may import everything but ``report``.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from twicetold.evidence.results import Comparison, MotifEvidence, Ranking, RouteShares

if TYPE_CHECKING:
    from twicetold.evidence.ranking import rank_catalogue, test_motif

__all__ = [
    "Comparison",
    "MotifEvidence",
    "Ranking",
    "RouteShares",
    "rank_catalogue",
    "test_motif",
]


def __getattr__(name: str) -> Any:
    # The records are light; what computes them brings compiled kernels and is loaded on first use.
    if name in ("rank_catalogue", "test_motif"):
        return getattr(importlib.import_module("twicetold.evidence.ranking"), name)
    raise AttributeError(f"module 'twicetold.evidence' has no attribute {name!r}")
