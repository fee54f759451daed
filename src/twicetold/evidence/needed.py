"""Power before looking: how many joins would be needed at each number of holders."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.evidence.propensities import group_propensity
from twicetold.evidence.study import Group, Study
from twicetold.references.emergence import emergence_world
from twicetold.references.law import Law
from twicetold.references.pvalue import p_many
from twicetold.workers import Pool

#: Every number of holders up to this one, then steps of a tenth up to half of the traditions.
EVERY = 40


def joins_needed(study: Study, pool: Pool) -> pd.DataFrame | None:
    """Say, for each number of holders, how many joins reject emergence alone.

    Nothing but the traditions, their propensities and their contact graph enters; no motif's
    whereabouts do. Where motifs were searched in different traditions, the set with the most
    motifs is taken. With propensities from the records, those of all motifs together stand in for
    each motif's own.

    Parameters
    ----------
    study : Study
    pool : Pool

    Returns
    -------
    pandas.DataFrame or None
        ``holders, surveyed, joins_expected, joins_needed, ratio_needed, p_needed``:
        the fewest joins with p <= alpha, that number over the expected one (the smallest ratio that
        can be told from emergence), and its p. Blank where no number of joins is that rare.
        None without a set of three traditions.
    """
    group = max(study.groups, key=lambda g: len(g.motifs), default=None)
    if group is None or group.n < 3:
        return None
    counts = holders_grid(group.n)
    plan = study.plan
    world = emergence_world(
        group.graph,
        group.family_codes,
        group_propensity(study, group).shared,
        counts,
        draws=min(plan.sensitivity.draws, plan.evidence.draws),
        seed=plan.evidence.seed,
        pool=pool,
    )
    return pd.DataFrame(
        [_row(group, int(n), world.law("joins", int(n)), plan.evidence.alpha) for n in counts]
    )


def holders_grid(n: int) -> npt.NDArray[np.int64]:
    """Numbers of holders worth a row, from 2 to half of n traditions (never all of them)."""
    most = max(2, n // 2)
    counts = list(range(2, min(EVERY, most) + 1))
    while counts[-1] < most:
        counts.append(min(most, int(np.ceil(counts[-1] * 1.1))))
    return np.array(counts, dtype=np.int64)


def _row(group: Group, n: int, law: Law, alpha: float) -> dict[str, float]:
    expected = law.mean()
    row = {"holders": n, "surveyed": group.n, "joins_expected": expected}
    values = np.arange(int(law.values[-1]) + 1)
    p = p_many(law, values)
    # Values beyond the drawn ones are left out, as p_attainable does: they may not exist.
    enough = np.flatnonzero(p <= alpha)
    if not len(enough):
        return {**row, "joins_needed": np.nan, "ratio_needed": np.nan, "p_needed": np.nan}
    needed = int(values[enough[0]])
    ratio = needed / expected if expected > 0 else np.nan
    return {**row, "joins_needed": needed, "ratio_needed": ratio, "p_needed": float(p[enough[0]])}
