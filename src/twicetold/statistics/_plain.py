"""What the kernels compute, said plainly; the tests hold the two to the same integers."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt


def sweep(
    order: Sequence[int],
    wanted: Sequence[int],
    neighbours: Sequence[Sequence[int]],
    family: Sequence[int],
) -> dict[int, tuple[int, int, int, int, int, int, int]]:
    """Statistics of the first n traditions of ``order`` for each n in ``wanted``.

    Returns
    -------
    dict of n to (joins, cross, same, clusters, largest cluster, strands, Moran score)
    """
    found = {}
    for n in wanted:
        held = set(order[:n])
        joins = [(i, j) for i in held for j in neighbours[i] if j in held and i < j]
        cross = sum(family[i] != family[j] for i, j in joins)
        kin = [(i, j) for i in held for j in held if i < j and family[i] == family[j]]
        groups = components(held, joins)
        degree_sum = sum(len(neighbours[i]) for i in held)
        found[n] = (
            len(joins),
            cross,
            len(joins) - cross,
            len(groups),
            max((len(g) for g in groups), default=0),
            len(components(held, joins + kin)),
            len(neighbours) * len(joins) - n * degree_sum,
        )
    return found


def components(members: set[int], links: Sequence[tuple[int, int]]) -> list[set[int]]:
    """Part ``members`` into sets connected by ``links``."""
    groups = {i: {i} for i in members}
    for i, j in links:
        if groups[i] is not groups[j]:
            merged = groups[i] | groups[j]
            for k in merged:
                groups[k] = merged
    return list({id(g): g for g in groups.values()}.values())


def pair_classes(
    xyz: npt.NDArray[np.float64], rows: Sequence[int], limits: Sequence[float]
) -> tuple[list[int], list[list[int]]]:
    """Pairs of ``rows`` in each class of squared chord, and each row's share in them."""
    classes = len(limits) - 1
    pairs = [0] * classes
    degree = [[0] * classes for _ in rows]
    for i, a in enumerate(rows):
        for j, b in enumerate(rows[:i]):
            chord = float(((xyz[b] - xyz[a]) ** 2).sum())
            for c in range(classes):
                if limits[c] <= chord < limits[c + 1]:
                    pairs[c] += 1
                    degree[i][c] += 1
                    degree[j][c] += 1
    return pairs, degree
