"""The spread chain solved by linear algebra over all subsets of a small graph.

The solver shares no code with the kernel: it writes down the generator of the chain on the
non-empty subsets and solves for the expected time spent in each before extinction.
"""

from __future__ import annotations

from collections import defaultdict
from itertools import combinations

import numpy as np

PATH5 = [(0, 1), (1, 2), (2, 3), (3, 4)]


class Solver:
    """Expected time in each holder set from a uniform origin to extinction (N <= 8).

    Rates with m holders: each holder loses at rate 1; a gain comes at rate x m (none at m = N).
    """

    def __init__(  # noqa: PLR0917
        self, n, edges, x, shares=(0, 1, 0), family=None, propensity=None, reach=1.0, spill=False
    ):
        self.n, self.edges, self.x = n, [tuple(e) for e in edges], x
        self.shares, self.reach, self.spill = shares, reach, spill
        self.family = list(range(n)) if family is None else list(family)
        self.propensity = np.ones(n) if propensity is None else np.asarray(propensity, float)
        self.near = [[] for _ in range(n)]
        for i, j in self.edges:
            self.near[i].append(j)
            self.near[j].append(i)
        sets = [frozenset(c) for k in range(1, n + 1) for c in combinations(range(n), k)]
        where = {s: k for k, s in enumerate(sets)}
        q = np.zeros((len(sets), len(sets)))
        for s, row in where.items():
            m = len(s)
            for i in s:
                if m > 1:
                    q[row, where[s - {i}]] += 1.0
            q[row, row] -= m
            if m < n:
                for v, p in self.gain(s).items():
                    q[row, where[s | {v}]] += x * m * p
                q[row, row] -= x * m
        origin = np.zeros(len(sets))
        for i in range(n):
            origin[where[frozenset([i])]] = 1 / n
        self.time = dict(zip(sets, np.linalg.solve(-q.T, origin), strict=True))

    def gain(self, s):
        """Law of the next gainer given the holders."""
        e, c, i = self.shares
        law = defaultdict(float)
        out = [v for v in range(self.n) if v not in s]
        # Only traditions without any propensity left: one of them, uniformly.
        weights = self.propensity[out]
        weights = weights if weights.sum() > 0 else np.ones(len(out))
        emergence = dict(zip(out, weights / weights.sum(), strict=True))

        def emerge(p):
            for v, share in emergence.items():
                law[v] += p * share

        boundary = [v for j in s for v in self.near[j] if v not in s]

        def contact(p, otherwise):
            if not boundary:
                return otherwise(p)
            for v in boundary:
                for end, q in self.carried(v, s).items():
                    law[end] += p / len(boundary) * q
            return None

        def inherit(p, otherwise):
            for j in s:
                kin = [v for v in out if self.family[v] == self.family[j]]
                for v in kin:
                    law[v] += p / len(s) / len(kin)
                if not kin:
                    otherwise(p / len(s))

        emerge(e)
        if self.spill:
            contact(c, (lambda p: inherit(p, emerge)) if i > 0 else emerge)
            inherit(i, lambda p: contact(p, emerge))
        else:
            contact(c, emerge)
            inherit(i, emerge)
        assert abs(sum(law.values()) - 1) < 1e-12
        return law

    def carried(self, start, s):
        """Where a contact that first lands on ``start`` ends: (place, last non-holder) solved."""
        if self.reach == 1.0:
            return {start: 1.0}
        go = 1 - 1 / self.reach
        states = [(p, last) for p in range(self.n) for last in range(self.n) if last not in s]
        where = {k: r for r, k in enumerate(states)}
        step = np.zeros((len(states), len(states)))
        for (place, last), row in where.items():
            for v in self.near[place]:
                step[row, where[(v, last if v in s else v)]] += go / len(self.near[place])
        begin = np.zeros(len(states))
        begin[where[(start, start)]] = 1.0
        stopped = (1 - go) * np.linalg.solve((np.eye(len(states)) - step).T, begin)
        law = defaultdict(float)
        for (_, last), row in where.items():
            law[last] += stopped[row]
        return law

    def recorded(self, rate=None):
        """Expected time in each *recorded* holder set (the empty one left out)."""
        if rate is None:
            return self.time
        out = defaultdict(float)
        for s, t in self.time.items():
            members = sorted(s)
            for k in range(1, len(members) + 1):
                for part in combinations(members, k):
                    p = np.prod([rate[i] if i in part else 1 - rate[i] for i in members])
                    out[frozenset(part)] += t * p
        return out

    def prevalence(self, rate=None):
        """P(n recorded), n = 1..N."""
        out = np.zeros(self.n + 1)
        for s, t in self.recorded(rate).items():
            out[len(s)] += t
        return out[1:] / out[1:].sum()

    def law(self, statistic, count, rate=None):
        """P(statistic = value | count recorded holders) as a dict."""
        law = defaultdict(float)
        for s, t in self.recorded(rate).items():
            if len(s) == count:
                law[self.summary(s)[statistic]] += t
        total = sum(law.values())
        return {k: v / total for k, v in sorted(law.items())}

    def summary(self, s):
        joins = [(i, j) for i, j in self.edges if i in s and j in s]
        kin = [(i, j) for i, j in combinations(sorted(s), 2) if self.family[i] == self.family[j]]
        clusters = pieces(s, joins)
        return {
            "joins": len(joins),
            "joins_cross_family": sum(self.family[i] != self.family[j] for i, j in joins),
            "clusters": len(clusters),
            "largest_cluster": max(map(len, clusters)),
            "strands": len(pieces(s, joins + kin)),
        }


def pieces(members, links):
    """Connected components by repeated label spreading (nothing clever)."""
    label = {i: i for i in members}
    for _ in members:
        for i, j in links:
            label[i] = label[j] = min(label[i], label[j])
    groups = defaultdict(set)
    for i, lab in label.items():
        groups[lab].add(i)
    return list(groups.values())
