"""What a ranking says against emergence alone, by formulas that know nothing of draws."""

from __future__ import annotations

import numpy as np

from made_up import catalogue_of
from twicetold.evidence import rank_catalogue
from twicetold.graph import contact_graph
from twicetold.plan import Plan
from twicetold.statistics import join_moments, moran_moments


def test_means_are_those_of_the_formulas():
    rng = np.random.default_rng(0)
    rows = [rng.choice(60, 3 + k // 8, replace=False) for k in range(80)]
    catalogue = catalogue_of(rows, 60)
    draws = 4000
    plan = Plan().replace(
        evidence__worlds=("emergence",), emergence__propensity="equal", evidence__draws=draws
    )
    ranking = rank_catalogue(catalogue, plan, details=False)
    graph = contact_graph(catalogue, "nearest:6")
    same: dict[tuple[int, int], set[float]] = {}
    for evidence in ranking.evidence:
        n, joins = evidence.row["holders"], evidence.row["joins"]
        moran, join = moran_moments(graph, n), join_moments(graph, None, n)
        off = abs(evidence.row["moran_i_expected"] - moran.mean)
        assert off < 4 * np.sqrt(moran.var_randomised / draws)
        off = abs(evidence.row["joins_expected"] - join.mean_all)
        assert off < 4 * np.sqrt(join.var_all / draws)
        same.setdefault((n, joins), set()).add(evidence.row["p_against_emergence"])
        statistics = [c.statistic for c in evidence.comparisons]
        assert len(statistics) == len(set(statistics))
        by_name = {c.statistic: c.observed for c in evidence.comparisons}
        assert by_name["joins"] == joins
        assert by_name["clusters"] == evidence.row["clusters"]
        assert by_name["moran_i"] == evidence.row["moran_i"]
    # Motifs with the same holders and joins share one comparison, and so one p.
    assert len(same) < 80
    assert all(len(p) == 1 for p in same.values())
