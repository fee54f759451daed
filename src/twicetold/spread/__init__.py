"""The spread chain, turnover and recording fits, snapshot banks.

Layer rule: may import ``graph``, ``statistics`` and ``references``; knows nothing of inference.
"""

from twicetold.spread.chain import (
    ROUTES,
    STATISTICS,
    ChainTables,
    Snapshots,
    SpreadError,
    SpreadModel,
    cap_for,
    chain_tables,
    walk_chunk,
)
from twicetold.spread.world import SpreadWorld, spread_world

__all__ = [
    "ROUTES",
    "STATISTICS",
    "ChainTables",
    "Snapshots",
    "SpreadError",
    "SpreadModel",
    "SpreadWorld",
    "cap_for",
    "chain_tables",
    "spread_world",
    "walk_chunk",
]
