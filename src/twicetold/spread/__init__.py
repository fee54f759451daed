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

__all__ = [
    "ROUTES",
    "STATISTICS",
    "ChainTables",
    "Snapshots",
    "SpreadError",
    "SpreadModel",
    "cap_for",
    "chain_tables",
    "walk_chunk",
]
