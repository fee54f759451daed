"""Joins, Moran's I, clusters, strands, correlogram, and their exact moments.

Layer rule: may import ``graph``; knows nothing of p-values.
"""
