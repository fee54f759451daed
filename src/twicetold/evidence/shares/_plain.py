"""Readable twins of the compiled kernels: slower, and the same to the last digit or nearly so."""

from __future__ import annotations

import itertools
import math
from collections import Counter, deque

import numpy as np
import numpy.typing as npt

from twicetold.evidence.shares._kernels import SUMMARIES
from twicetold.graph import ContactGraph


def hops_from(graph: ContactGraph, i: int) -> dict[int, int]:
    """Hops from i to every tradition that can be reached."""
    hops, queue = {i: 0}, deque([i])
    while queue:
        v = queue.popleft()
        for u in graph.indices[graph.indptr[v] : graph.indptr[v + 1]].tolist():
            if u not in hops:
                hops[u] = hops[v] + 1
                queue.append(u)
    return hops


def groups_of(held: list[int], linked: set[tuple[int, int]]) -> list[set[int]]:
    """Connected groups of holders under a set of links, largest first."""
    groups = [{v} for v in held]
    for a, b in linked:
        one = next(g for g in groups if a in g)
        other = next(g for g in groups if b in g)
        if one is not other:
            groups.remove(other)
            one |= other
    return sorted(groups, key=len, reverse=True)


def summary_plain(
    graph: ContactGraph,
    family: npt.NDArray[np.int32],
    propensity: npt.NDArray[np.float64],
    held: list[int],
    reach: int = 4,
) -> dict[str, float]:
    """Summaries of one holder set, by name."""
    n, fam = len(held), family.tolist()
    hops = {v: hops_from(graph, v) for v in held}
    pairs = {
        (a, b): hops[a][b]
        for a, b in itertools.combinations(held, 2)
        if hops[a].get(b, reach + 1) <= reach
    }
    kin = {(a, b) for a, b in itertools.combinations(held, 2) if fam[a] == fam[b]}
    upto = {d: {p for p, h in pairs.items() if h <= d} for d in (1, 2, 3, 4)}
    counts = Counter(fam[v] for v in held)
    sizes = Counter(fam)
    out: dict[str, float] = {}
    for d in (1, 2, 3, 4):
        at = [p for p, h in pairs.items() if h == d]
        out[f"same_pairs_{d}"] = sum(p in kin for p in at)
        out[f"cross_pairs_{d}"] = sum(p not in kin for p in at)
        out[f"groups_{d}"] = len(groups_of(held, upto[d]))
    clusters = groups_of(held, upto[1])
    strands = groups_of(held, upto[1] | kin)
    out["largest_cluster"] = len(clusters[0])
    out["second_cluster"] = len(clusters[1]) if len(clusters) > 1 else 0
    out["largest_group_2"] = len(groups_of(held, upto[2])[0])
    out["strands"], out["largest_strand"] = len(strands), len(strands[0])
    out["fragments"] = len(groups_of(held, upto[1] & kin))
    out["strands_2"] = len(groups_of(held, upto[2] | kin))
    out["families"], out["family_pairs"] = len(counts), len(kin)
    out["family_squares"] = sum(k * k for k in counts.values())
    out["single_families"] = sum(k == 1 for k in counts.values())
    out["entropy"] = -sum(k / n * math.log(k / n) for k in counts.values())
    out["same_joins_expected"] = out["cross_joins_expected"] = 0.0
    for i, j in graph.edges.tolist():
        f, g = fam[i], fam[j]
        if f == g:
            out["same_joins_expected"] += counts[f] * (counts[f] - 1) / (sizes[f] * (sizes[f] - 1))
        else:
            out["cross_joins_expected"] += counts[f] * counts[g] / (sizes[f] * sizes[g])
    out["largest_family"] = max(counts.values())
    out["saturation"] = sum(k * (k - 1) / (sizes[f] - 1) for f, k in counts.items() if sizes[f] > 1)
    around = {v: graph.indices[graph.indptr[v] : graph.indptr[v + 1]].tolist() for v in held}
    out["same_degree"] = sum(fam[u] == fam[v] for v in held for u in around[v])
    out["cross_degree"] = sum(fam[u] != fam[v] for v in held for u in around[v])
    out["propensity"] = float(sum(propensity[v] for v in held))

    def nearest(v: int, others: list[int]) -> int:
        near = min((hops[v].get(u, far) for u in others if u != v), default=far)
        return near if near <= reach else far

    far = 5
    any_ = {v: nearest(v, held) for v in held}
    lone = {v for v in held if counts[fam[v]] == 1}
    out["propensity_lone"] = float(sum(propensity[v] for v in lone if any_[v] > 1))
    for d in (1, 2, 3):
        out[f"lone_{d}"] = sum(any_[v] > d for v in lone)
    same = {v: nearest(v, [u for u in held if fam[u] == fam[v]]) for v in held}
    cross = {v: nearest(v, [u for u in held if fam[u] != fam[v]]) for v in held}
    for d in (1, 2, 3, 4, 5):
        out[f"nearest_{d}"] = sum(any_[v] == d for v in held)
        out[f"nearest_same_{d}"] = sum(same[v] == d for v in held if v not in lone)
        out[f"nearest_cross_{d}"] = sum(cross[v] == d for v in held)
    out["cut_off"] = sum(any_[v] > 1 for v in held if v not in lone)
    out["mixed_clusters"] = sum(len({fam[v] for v in c}) > 1 for c in clusters)
    return {name: float(out[name]) for name in SUMMARIES}
