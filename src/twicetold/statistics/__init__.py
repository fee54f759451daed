"""Joins, Moran's I, clusters, strands, correlogram, and their exact moments.

Layer rule: may import ``graph``; knows nothing of p-values.
"""

from twicetold.statistics.clusters import Clusters, clusters, strands
from twicetold.statistics.correlogram import (
    Correlogram,
    DistanceClasses,
    correlogram,
    distance_classes,
)
from twicetold.statistics.joins import (
    JoinCounts,
    JoinMoments,
    join_counts,
    join_moments,
    local_joins,
)
from twicetold.statistics.moran import (
    MoranMoments,
    moran_from_score,
    moran_i,
    moran_moments,
    moran_of_values,
    moran_score,
)
from twicetold.statistics.observe import STATISTICS, Observed, observe

__all__ = [
    "STATISTICS",
    "Clusters",
    "Correlogram",
    "DistanceClasses",
    "JoinCounts",
    "JoinMoments",
    "MoranMoments",
    "Observed",
    "clusters",
    "correlogram",
    "distance_classes",
    "join_counts",
    "join_moments",
    "local_joins",
    "moran_from_score",
    "moran_i",
    "moran_moments",
    "moran_of_values",
    "moran_score",
    "observe",
    "strands",
]
