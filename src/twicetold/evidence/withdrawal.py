"""A tradition is withdrawn: rank again without it and say what moved."""

from __future__ import annotations

import numpy as np
import pandas as pd

from twicetold.catalogue import Catalogue
from twicetold.errors import TwicetoldError
from twicetold.evidence.ranking import rank_catalogue
from twicetold.evidence.results import Ranking
from twicetold.plan import Plan
from twicetold.workers import Pool

#: Columns shown beside their value with everybody in.
SHOWN = ("holders", "joins", "p_against_emergence", "verdict")


def rank_without(
    catalogue: Catalogue,
    plan: Plan,
    without: tuple[str, ...],
    *,
    pool: Pool,
    by: str = "evidence",
    cache: bool = True,
) -> tuple[Ranking, pd.DataFrame]:
    """Rank without some traditions, and compare with the ranking that has them.

    Parameters
    ----------
    catalogue : Catalogue
    plan : Plan
    without : tuple of str
        Tradition ids.
    pool : Pool
    by : str
    cache : bool

    Returns
    -------
    ranking : Ranking
        Without them; its plan says so.
    moved : pandas.DataFrame
        One row a motif of which anything shown moved: each of :data:`SHOWN` without, and with
        (``_with``), the withdrawn traditions.

    Raises
    ------
    TwicetoldError
        When an id is unknown or fewer than two traditions would be left.
    """
    known = {t: k for k, t in enumerate(catalogue.tradition_ids)}
    unknown = [t for t in without if t not in known]
    if unknown:
        raise TwicetoldError(
            f"`--without` must name traditions of the catalogue, got {', '.join(unknown)}. "
            "Tradition ids are case-sensitive."
        )
    keep = np.ones(catalogue.n_traditions, dtype=bool)
    keep[[known[t] for t in without]] = False
    if keep.sum() < 2:
        raise TwicetoldError("Fewer than two traditions would be left. Withdraw fewer.")
    # The plan of both runs is the same but for the withdrawal itself.
    everybody = rank_catalogue(catalogue, plan, pool=pool, by=by, cache=cache, details=False)
    gone = tuple(dict.fromkeys((*plan.catalogue.without, *without)))
    named = plan.replace(catalogue__without=gone)
    rest = rank_catalogue(catalogue.subset(keep), named, pool=pool, by=by, cache=cache)
    return rest, _moved(rest.motifs, everybody.motifs)


def _moved(after: pd.DataFrame, before: pd.DataFrame) -> pd.DataFrame:
    shown = [c for c in SHOWN if c in after and c in before]
    both = after[["motif_id", "name", *shown]].merge(
        before[["motif_id", *shown]], on="motif_id", suffixes=("", "_with"), validate="1:1"
    )
    moved = np.zeros(len(both), dtype=bool)
    for column in shown:
        one, other = both[column], both[f"{column}_with"]
        moved |= ~((one == other) | (one.isna() & other.isna())).to_numpy()
    paired = [name for c in shown for name in (c, f"{c}_with")]
    return both.loc[moved, ["motif_id", "name", *paired]].reset_index(drop=True)
