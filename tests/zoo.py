"""A zoo of small graphs for the exact and the parity tests."""

from __future__ import annotations

import numpy as np


def small_graphs() -> dict[str, tuple[int, list[tuple[int, int]]]]:
    """Zoo of small graphs as (number of vertices, edges)."""
    return {
        "path5": (5, [(0, 1), (1, 2), (2, 3), (3, 4)]),
        "path7+2": (9, [(i, i + 1) for i in range(6)]),
        "star6": (7, [(0, i) for i in range(1, 7)]),
        "cycle6": (6, [(i, (i + 1) % 6) for i in range(5)] + [(0, 5)]),
        "complete5": (5, [(i, j) for i in range(5) for j in range(i + 1, 5)]),
        "two_triangles": (6, [(0, 1), (0, 2), (1, 2), (3, 4), (3, 5), (4, 5)]),
        "matching4": (8, [(0, 1), (2, 3), (4, 5), (6, 7)]),
        "grid3": (
            9,
            [(r * 3 + c, r * 3 + c + 1) for r in range(3) for c in range(2)]
            + [(r * 3 + c, r * 3 + c + 3) for r in range(2) for c in range(3)],
        ),
        "empty4": (4, []),
    }


def as_contact_graph(n, edges):
    """Make a ContactGraph without coordinates (lengths zero) for exact tests."""
    from twicetold.graph import ContactGraph

    pairs = np.array(sorted(tuple(sorted(e)) for e in edges), dtype=np.int32).reshape(-1, 2)
    return ContactGraph(
        n=n,
        edges=pairs,
        length_km=np.zeros(len(pairs)),
        bridge=np.zeros(len(pairs), dtype=bool),
        rule="given",
    )
