"""Compiled kernels of the summaries of a holder set. They take plain arrays and raise nothing.

The readable twin is in ``_plain.py``.
"""
# ruff: noqa: PLR0917 - kernels take plain arrays, one by one

from __future__ import annotations

import math

import numba as nb
import numpy as np

#: Columns of a summary row. "Hop d" means that the shortest way between two traditions over the
#: contact graph has d edges. Linked "up to d" means that holders at most d hops apart are linked.
SUMMARIES = (
    *(f"{what}_{d}" for d in (1, 2, 3, 4) for what in ("same_pairs", "cross_pairs", "groups")),
    "largest_cluster",
    "second_cluster",
    "largest_group_2",
    "strands",
    "largest_strand",
    "fragments",  # groups linked by joins inside families
    "strands_2",  # groups linked up to 2 hops or by a shared family
    "families",
    "family_pairs",
    "family_squares",
    "single_families",  # families with one holder
    "entropy",  # of holders over families
    "same_joins_expected",  # given how many holders each family has
    "cross_joins_expected",
    "largest_family",
    "saturation",  # sum over families of k (k - 1) / (size - 1)
    "same_degree",
    "cross_degree",
    "propensity",  # sums of standardised log propensities
    "propensity_lone",
    "lone_1",  # the only holder of its family, with no holder within d hops
    "lone_2",
    "lone_3",
    *(f"nearest_{d}" for d in (1, 2, 3, 4, 5)),  # holders whose nearest holder is at hop d, 5: far
    *(f"nearest_same_{d}" for d in (1, 2, 3, 4, 5)),
    *(f"nearest_cross_{d}" for d in (1, 2, 3, 4, 5)),
    "cut_off",  # no join, but another holder of its family somewhere
    "mixed_clusters",  # clusters of more than one family
)
_FAR = 5


@nb.njit(nogil=True, cache=True)
def _walk_out(i, indptr, indices, hops, seen, queue, reached):  # type: ignore[no-untyped-def]
    """Breadth-first from i: fill ``queue``, and ``reached[d]`` with how many are within d hops."""
    seen[i] = i + 1
    queue[0] = i
    head = 0
    tail = 1
    for d in range(1, hops + 1):
        stop = tail
        while head < stop:
            v = queue[head]
            head += 1
            for k in range(indptr[v], indptr[v + 1]):
                u = indices[k]
                if seen[u] != i + 1:
                    seen[u] = i + 1
                    queue[tail] = u
                    tail += 1
        reached[d] = tail - 1


@nb.njit(nogil=True, cache=True)
def ball_sizes(indptr, indices, hops):  # type: ignore[no-untyped-def]
    """(N, hops) int64: traditions within 1 .. hops hops of each, itself left out."""
    n = len(indptr) - 1
    seen = np.zeros(n, dtype=np.int32)
    queue = np.empty(n, dtype=np.int32)
    reached = np.zeros(hops + 1, dtype=np.int64)
    out = np.empty((n, hops), dtype=np.int64)
    for i in range(n):
        _walk_out(i, indptr, indices, hops, seen, queue, reached)
        for d in range(hops):
            out[i, d] = reached[d + 1]
    return out


@nb.njit(nogil=True, cache=True)
def fill_balls(indptr, indices, hops, start, index, hop):  # type: ignore[no-untyped-def]
    """Fill ``index`` and ``hop`` with the traditions around each, nearest first."""
    n = len(indptr) - 1
    seen = np.zeros(n, dtype=np.int32)
    queue = np.empty(n, dtype=np.int32)
    reached = np.zeros(hops + 1, dtype=np.int64)
    for i in range(n):
        _walk_out(i, indptr, indices, hops, seen, queue, reached)
        d = 1
        for k in range(reached[hops]):
            while k >= reached[d]:
                d += 1
            index[start[i] + k] = queue[k + 1]
            hop[start[i] + k] = d


@nb.njit(nogil=True, cache=True)
def unpack_bits(bits, sizes, members):  # type: ignore[no-untyped-def]
    """Write the set bits of row k of ``bits``, ``sizes[k]`` of them, one row after the other."""
    at = 0
    for k in range(bits.shape[0]):
        if sizes[k] == 0:
            continue
        for w in range(bits.shape[1]):
            word = bits[k, w]
            i = w << 6
            while word != np.uint64(0):
                if word & np.uint64(1) != np.uint64(0):
                    members[at] = i
                    at += 1
                word >>= np.uint64(1)
                i += 1


@nb.njit(nogil=True, cache=True)
def _root(parent, i):  # type: ignore[no-untyped-def]
    while parent[i] != i:
        parent[i] = parent[parent[i]]
        i = parent[i]
    return i


@nb.njit(nogil=True, cache=True)
def _link(parent, i, j):  # type: ignore[no-untyped-def]
    a = _root(parent, i)
    b = _root(parent, j)
    if a == b:
        return 0
    # The smaller index is the root, so a group is named by its first holder.
    if a < b:
        parent[b] = a
    else:
        parent[a] = b
    return 1


@nb.njit(nogil=True, cache=True)
def _largest(parent, n, size):  # type: ignore[no-untyped-def]
    """Give the sizes of the largest and the second group."""
    for i in range(n):
        size[i] = 0
    for i in range(n):
        size[_root(parent, i)] += 1
    first = 0
    second = 0
    for i in range(n):
        if size[i] > first:
            second = first
            first = size[i]
        elif size[i] > second:
            second = size[i]
    return first, second


@nb.njit(nogil=True, cache=True)
def summary_rows(  # type: ignore[no-untyped-def]
    members,
    start,
    ball_start,
    ball_index,
    ball_hop,
    family,
    family_size,
    family_edges,
    near_start,
    near_family,
    near_rate,
    same_degree,
    cross_degree,
    propensity,
    out,
):
    """Fill ``out[s]`` with the summaries of ``members[start[s]:start[s + 1]]``."""
    most = 0
    for s in range(len(start) - 1):
        most = max(most, start[s + 1] - start[s])
    widest = 0
    for i in range(len(family)):
        widest = max(widest, ball_start[i + 1] - ball_start[i])
    place = np.zeros(len(family), dtype=np.int32)  # position in the set + 1
    count = np.zeros(len(family_size), dtype=np.int32)
    first = np.full(len(family_size), -1, dtype=np.int32)
    room = most * min(widest, most) // 2 + 1
    pair_i = np.empty(room, dtype=np.int32)
    pair_j = np.empty(room, dtype=np.int32)
    pair_hop = np.empty(room, dtype=np.int8)
    near = np.empty((3, most), dtype=np.int8)
    parents = np.empty((4, most), dtype=np.int32)
    size = np.empty(most, dtype=np.int32)
    for s in range(len(start) - 1):
        held = members[start[s] : start[s + 1]]
        pairs = _pairs_of(
            held,
            place,
            count,
            ball_start,
            ball_index,
            ball_hop,
            family,
            near,
            pair_i,
            pair_j,
            pair_hop,
        )
        _groups(held, family, first, pair_i, pair_j, pair_hop, pairs, parents, size, out[s])
        _families(
            held, family, family_size, family_edges, near_start, near_family, near_rate, count,
            first, out[s],
        )  # fmt: skip
        _neighbours(held, family, count, near, same_degree, cross_degree, propensity, out[s])
        for v in held:
            place[v] = 0
            count[family[v]] = 0
            first[family[v]] = -1


@nb.njit(nogil=True, cache=True)
def _pairs_of(  # type: ignore[no-untyped-def]
    held, place, count, ball_start, ball_index, ball_hop, family, near, pair_i, pair_j, pair_hop
):
    """List the pairs of holders in reach and each holder's nearest (any, same, other family)."""
    n = len(held)
    for i in range(n):
        place[held[i]] = i + 1
        count[family[held[i]]] += 1
    pairs = 0
    for i in range(n):
        v = held[i]
        near[0, i] = _FAR
        near[1, i] = _FAR
        near[2, i] = _FAR
        for k in range(ball_start[v], ball_start[v + 1]):
            j = place[ball_index[k]] - 1
            if j < 0:
                continue
            d = ball_hop[k]
            kin = 1 if family[ball_index[k]] == family[v] else 2
            near[0, i] = min(near[0, i], d)
            near[kin, i] = min(near[kin, i], d)
            if j < i:
                pair_i[pairs] = i
                pair_j[pairs] = j
                pair_hop[pairs] = d
                pairs += 1
    return pairs


@nb.njit(nogil=True, cache=True)
def _groups(held, family, first, pair_i, pair_j, pair_hop, pairs, parents, size, row):  # type: ignore[no-untyped-def]
    """Pairs by hop, and groups of holders under several ways of linking."""
    n = len(held)
    linked, strand, fragment, strand_2 = parents[0], parents[1], parents[2], parents[3]
    for i in range(n):
        linked[i] = i
        strand[i] = i
        fragment[i] = i
        strand_2[i] = i
    strands = n
    strands_2 = n
    fragments = n
    for i in range(n):
        f = family[held[i]]
        if first[f] < 0:
            first[f] = i
        else:
            strands -= _link(strand, i, first[f])
            strands_2 -= _link(strand_2, i, first[f])
    groups = n
    for d in range(1, 5):
        for p in range(pairs):
            if pair_hop[p] != d:
                continue
            i = pair_i[p]
            j = pair_j[p]
            same = family[held[i]] == family[held[j]]
            row[3 * d - 3 if same else 3 * d - 2] += 1
            groups -= _link(linked, i, j)
            if d == 1:
                strands -= _link(strand, i, j)
                if same:
                    fragments -= _link(fragment, i, j)
            if d <= 2:
                strands_2 -= _link(strand_2, i, j)
        row[3 * d - 1] = groups
        if d == 1:
            row[12], row[13] = _largest(linked, n, size)
            # A cluster is mixed when a member's family is not that of its first holder.
            for i in range(n):
                size[i] = 0
            for i in range(n):
                r = _root(linked, i)
                if family[held[i]] != family[held[r]] and size[r] == 0:
                    size[r] = 1
                    row[51] += 1
        if d == 2:
            row[14], _ = _largest(linked, n, size)
    row[15] = strands
    row[16], _ = _largest(strand, n, size)
    row[17] = fragments
    row[18] = strands_2


@nb.njit(nogil=True, cache=True)
def _families(  # type: ignore[no-untyped-def]
    held, family, family_size, family_edges, near_start, near_family, near_rate, count, first, row
):
    """How holders lie over the families, and the joins expected from that alone."""
    n = len(held)
    for i in range(n):
        f = family[held[i]]
        if first[f] != i:
            continue
        k = float(count[f])
        size = family_size[f]
        row[19] += 1
        row[20] += k * (k - 1.0) / 2.0
        row[21] += k * k
        row[22] += k == 1.0
        row[23] -= k / n * math.log(k / n)
        if size > 1.0:
            row[24] += family_edges[f] * k * (k - 1.0) / (size * (size - 1.0))
            row[27] += k * (k - 1.0) / (size - 1.0)
        row[26] = max(row[26], k)
        for q in range(near_start[f], near_start[f + 1]):
            g = near_family[q]
            if g > f and count[g] > 0:
                row[25] += near_rate[q] * k * count[g]


@nb.njit(nogil=True, cache=True)
def _neighbours(held, family, count, near, same_degree, cross_degree, propensity, row):  # type: ignore[no-untyped-def]
    """Sums over holders: degrees, propensities, nearest holders, the lone and the cut off."""
    for i in range(len(held)):
        v = held[i]
        row[28] += same_degree[v]
        row[29] += cross_degree[v]
        row[30] += propensity[v]
        row[34 + near[0, i]] += 1
        row[44 + near[2, i]] += 1
        if count[family[v]] > 1:
            row[39 + near[1, i]] += 1
            row[50] += near[0, i] > 1
            continue
        if near[0, i] > 1:
            row[31] += propensity[v]
            row[32] += 1
        row[33] += near[0, i] > 2
        row[34] += near[0, i] > 3
