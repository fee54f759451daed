"""What the terminal says beside the verdict: bound, stability and companions, if any."""

from __future__ import annotations

import numpy as np

from made_up import catalogue_of
from twicetold.evidence import test_motif
from twicetold.evidence.words import tell
from twicetold.plan import Plan


def test_a_motif_is_told_with_its_bound_stability_and_companions():
    rng = np.random.default_rng(3)
    lat, lon = rng.uniform(-20, 40, 50), rng.uniform(20, 90, 50)
    near = np.argsort((lat - 10) ** 2 + (lon - 50) ** 2)[:9]
    rows = [near, near[:8], *[rng.choice(50, 6, replace=False) for _ in range(20)]]
    catalogue = catalogue_of(rows, 50, families=10, places=(lat, lon))
    plan = Plan().replace(
        evidence__worlds=("emergence", "ancestry"), evidence__draws=999,
        emergence__propensity="equal", sensitivity__stability=True, sensitivity__draws=199,
    )  # fmt: skip
    ranking = test_motif(catalogue, "M000", plan)
    evidence = ranking.evidence[0]
    said = tell(ranking, evidence)
    assert "environment that nobody measured" in said or "No smooth unmeasured" in said
    same = (evidence.stability["verdict"] == evidence.row["verdict"]).sum()
    assert f"in {same} of {len(evidence.stability)} other runs" in said
    assert "motif 1 (8)" in said
    bare = test_motif(catalogue, "M000", plan.replace(
        sensitivity__stability=False, sensitivity__hidden=False))  # fmt: skip
    quiet = tell(bare, bare.evidence[0])
    assert "other runs" not in quiet
    assert "environment that nobody" not in quiet
