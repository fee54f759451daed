"""The hidden-propensity bound of a whole study."""

from __future__ import annotations

import numpy as np
import pytest

from made_up import catalogue_of
from twicetold.evidence import rank_catalogue, test_motif
from twicetold.evidence.hidden import Search, hidden_bounds
from twicetold.evidence.smooth import family_extent_km, smooth_field
from twicetold.evidence.unmeasured import DRAWS
from twicetold.graph import contact_graph
from twicetold.plan import Plan

PLAN = Plan().replace(
    evidence__worlds=("emergence", "ancestry"),
    evidence__draws=999,
    emergence__propensity="equal",
)


@pytest.fixture(scope="module")
def catalogue():
    rng = np.random.default_rng(2)
    lat, lon = rng.uniform(-20, 40, 50), rng.uniform(20, 90, 50)
    rows = [np.argsort((lat - lat[k]) ** 2 + (lon - lon[k]) ** 2)[: 5 + k] for k in range(4)]
    rows += [rng.choice(50, 6, replace=False) for _ in range(4)]
    return catalogue_of(rows, 50, families=7, places=(lat, lon))


@pytest.fixture(scope="module")
def ranking(catalogue):
    return rank_catalogue(catalogue, PLAN)


def test_column_mapping_and_tables_agree(catalogue, ranking):
    length = family_extent_km(catalogue.latitude, catalogue.longitude, catalogue.family_codes)
    rejected = 0
    hidden = ranking.tables["hidden"]
    for evidence in ranking.evidence:
        bound = evidence.hidden_bound
        assert bound["length_km"] == pytest.approx(length)
        assert evidence.row["hidden_bound"] == bound["log_sd"]
        rows = hidden[hidden["motif_id"] == evidence.motif_id]
        if evidence.row["p_against_emergence"] > 0.05:
            assert bound["log_sd"] == 0
            assert bound["ratio"] == 1
            assert rows.empty
            continue
        rejected += 1
        assert bound["log_sd_low"] <= bound["log_sd"] <= bound["log_sd_high"]
        assert rows["length_km"].to_numpy() == pytest.approx(length * np.array([0.5, 1, 2, 4]))
        assert rows["log_sd"].iloc[1] == bound["log_sd"]
    assert rejected >= 4
    lengths = ranking.tables["hidden_lengths"]
    assert (lengths["motifs"] == rejected).all()
    middle = np.sort(hidden[np.isclose(hidden["length_km"], length)]["log_sd"])
    assert lengths["log_sd_median"].iloc[1] == middle[rejected // 2]


def test_it_is_the_bound_of_the_motif_alone(catalogue, ranking):
    evidence = next(e for e in ranking.evidence if e.motif_id == "M002")
    graph = contact_graph(catalogue, "nearest:6")
    length = evidence.hidden_bound["length_km"]
    field = smooth_field(catalogue.latitude, catalogue.longitude, length)
    alone = hidden_bounds(
        graph, field, np.ones(50), [evidence.row["holders"]], [evidence.row["joins"]],
        search=Search(DRAWS, 1, 0.05),
    )  # fmt: skip
    assert alone.of(0) == dict(evidence.hidden_bound)
    assert test_motif(catalogue, "M002", PLAN).evidence[0].hidden_bound == evidence.hidden_bound


def test_the_plan_sets_the_length_or_leaves_it_out(catalogue):
    given = test_motif(catalogue, "M001", PLAN.replace(sensitivity__hidden_km=900.0))
    assert given.evidence[0].hidden_bound["length_km"] == 900.0
    without = test_motif(catalogue, "M001", PLAN.replace(sensitivity__hidden=False))
    assert without.evidence[0].hidden_bound == {}
    assert "hidden" not in without.tables
