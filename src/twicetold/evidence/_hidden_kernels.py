"""Compiled tails of joins under hidden propensities; `_hidden_plain.py` says them readably."""
# ruff: noqa: PLR0917 - kernels take plain arrays, one by one

from __future__ import annotations

import math

import numba as nb
import numpy as np

from twicetold._sfc64 import next_exponential, seed_state


@nb.njit(nogil=True, cache=True)
def count_tails(words, log_rate, fields, sigmas, graph, wanted, tails):  # type: ignore[no-untyped-def]
    """Add to ``tails`` the draws with at least so many joins at so many holders.

    Every strength sigma sees the same clocks and the same field: log rate + sigma * field.

    Parameters
    ----------
    words : (D, 3) uint64
    log_rate : (n,) float64
    fields : (D, n) float64
    sigmas : (S,) float64
    graph : (indptr (n + 1,), indices (2A,)) int64
    wanted : (first (n + 2,), joins (T,)) int64
        For n holders the thresholds ``joins[first[n]:first[n + 1]]``, increasing.
    tails : (S, T) int64
    """
    indptr, indices = graph
    first, joins_wanted = wanted
    n = len(log_rate)
    most = n
    while most > 0 and first[most] == first[most + 1]:
        most -= 1
    state = np.empty(4, dtype=np.uint64)
    wait, key = np.empty(n), np.empty(n)
    mark = np.zeros(n, dtype=np.int64)
    stamp = 0
    for d in range(len(words)):
        seed_state(state, words[d, 0], words[d, 1], words[d, 2])
        for v in range(n):
            w = next_exponential(state)
            wait[v] = (math.log(w) if w > 0.0 else -np.inf) - log_rate[v]
        for s in range(len(sigmas)):
            for v in range(n):
                key[v] = wait[v] - sigmas[s] * fields[d, v]
            order = np.argsort(key)
            stamp += 1
            joins = 0
            for r in range(most):
                v = order[r]
                mark[v] = stamp
                for e in range(indptr[v], indptr[v + 1]):
                    joins += mark[indices[e]] == stamp
                for t in range(first[r + 1], first[r + 2]):
                    if joins_wanted[t] > joins:
                        break
                    tails[s, t] += 1
