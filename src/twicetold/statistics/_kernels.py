"""Compiled loops of the statistics. Arrays in, arrays out; nothing is raised; see ``_plain``."""
# ruff: noqa: PLR0917 (kernels take arrays by position)

from __future__ import annotations

import numba as nb
import numpy as np


@nb.njit(nogil=True, cache=True)
def _root(link, i):  # type: ignore[no-untyped-def]
    """Root of i; links >= 0 point upward, a root holds minus its size. Halves the path."""
    up = link[i]
    while up >= 0:
        w = np.uint32(up)
        above = link[w]
        if above < 0:
            return w
        link[i] = above
        i = np.uint32(above)
        up = link[i]
    return i


@nb.njit(nogil=True, cache=True)
def sweep(order, start, stop, column, indptr, indices, family, work, kin, epoch, out, scores):  # type: ignore[no-untyped-def]
    """Add traditions ``order[start:stop]`` one at a time and note every statistic on the way.

    Indices are unsigned inside: a signed one is tested for being negative at every look-up, a
    fifth of the time.

    Parameters
    ----------
    order : (any,) int32
        Tradition indices, no repeats between start and stop.
    column : (stop - start + 1,) int32
        Row of ``out`` in which the statistics of the first m traditions go, or -1.
    indptr, indices, family : int32
        Contact graph and families (0 .. F - 1).
    work : (4, N + 1) int32
        Scratch: epoch mark, union-find links of clusters, degree in [2] (filled by the caller),
        neighbours that hold.
    kin : (2, F) int32
        Scratch: epoch mark, union-find links of families.
    epoch : int32
        A number not yet used with this scratch (marks replace clearing).
    out : (K, 6) int32
        joins, cross-family joins, same-family joins, clusters, largest cluster, strands.
    scores : (K,) int64
        N * joins - n * degree sum, which orders as Moran's I does.
    """
    mark, link, degree, near = work[0], work[1], work[2], work[3]
    kin_mark, kin_link = kin[0], kin[1]
    n_all = np.int64(indptr.shape[0] - 1)
    joins = 0
    cross = 0
    degree_sum = np.int64(0)
    clusters = 0
    largest = 0
    strands = 0
    for m in range(stop - start):
        v = np.uint32(order[start + m])
        f = np.uint32(family[v])
        mark[v] = epoch
        link[v] = -1
        clusters += 1
        if largest == 0:
            largest = 1
        if kin_mark[f] != epoch:
            kin_mark[f] = epoch
            kin_link[f] = -1
            strands += 1
        degree_sum += degree[v]
        # Neighbours that hold are gathered without a branch; only they are asked their family.
        met = 0
        for e in range(np.uint32(indptr[v]), np.uint32(indptr[v + np.uint32(1)])):
            u = np.uint32(indices[e])
            near[met] = np.int32(u)
            met += 1 if mark[u] == epoch else 0
        joins += met
        root = v
        for j in range(met):
            u = np.uint32(near[j])
            g = np.uint32(family[u])
            cross += 1 if g != f else 0
            other = _root(link, u)
            if other == root:
                continue
            # Union by size (Newman & Ziff 2001, Phys. Rev. E 64, 016706).
            size = link[root] + link[other]
            if link[other] < link[root]:
                link[root] = np.int32(other)
                root = other
            else:
                link[other] = np.int32(root)
            link[root] = size
            clusters -= 1
            largest = max(largest, -size)
            if g != f:
                # A strand is whole families, so its union-find runs over families; a join inside
                # one cluster can never merge strands.
                a = _root(kin_link, f)
                b = _root(kin_link, g)
                if a != b:
                    both = kin_link[a] + kin_link[b]
                    if kin_link[b] < kin_link[a]:
                        a, b = b, a
                    kin_link[b] = np.int32(a)
                    kin_link[a] = both
                    strands -= 1
        c = column[m + 1]
        if c >= 0:
            out[c, 0] = joins
            out[c, 1] = cross
            out[c, 2] = joins - cross
            out[c, 3] = clusters
            out[c, 4] = largest
            out[c, 5] = strands
            scores[c] = n_all * joins - np.int64(m + 1) * degree_sum


@nb.njit(nogil=True, cache=True)
def observe_sets(sets_indptr, sets, indptr, indices, family, work, kin, out, scores):  # type: ignore[no-untyped-def]
    """Statistics of many sets of holders: set s is ``sets[sets_indptr[s]:sets_indptr[s + 1]]``.

    ``out`` is (S, 6) int32 and ``scores`` (S,) int64, both zeroed by the caller.
    """
    longest = 0
    for s in range(sets_indptr.shape[0] - 1):
        longest = max(longest, sets_indptr[s + 1] - sets_indptr[s])
    column = np.full(longest + 1, -1, dtype=np.int32)
    for s in range(sets_indptr.shape[0] - 1):
        size = sets_indptr[s + 1] - sets_indptr[s]
        column[size] = np.int32(0)
        sweep(
            sets,
            sets_indptr[s],
            sets_indptr[s + 1],
            column,
            indptr,
            indices,
            family,
            work,
            kin,
            np.int32(s + 1),
            out[s : s + 1],
            scores[s : s + 1],
        )
        column[size] = np.int32(-1)


@nb.njit(nogil=True, cache=True)
def pair_classes(xyz, rows, limits, pairs, degree):  # type: ignore[no-untyped-def]
    """Count pairs of ``rows`` by squared chord: class c holds limits[c] <= chord^2 < limits[c + 1].

    ``pairs`` (C,) int64 and ``degree`` (len(rows), C) int64 are added to.
    """
    last = limits.shape[0] - 1
    for i in range(rows.shape[0]):
        a = rows[i]
        for j in range(i + 1, rows.shape[0]):
            b = rows[j]
            dx = xyz[a, 0] - xyz[b, 0]
            dy = xyz[a, 1] - xyz[b, 1]
            dz = xyz[a, 2] - xyz[b, 2]
            chord = dx * dx + dy * dy + dz * dz
            if chord < limits[0] or chord >= limits[last]:
                continue
            c = 0
            while chord >= limits[c + 1]:
                c += 1
            pairs[c] += 1
            degree[i, c] += 1
            degree[j, c] += 1
