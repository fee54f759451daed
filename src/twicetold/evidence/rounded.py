"""Published coordinates are rounded; a run on the rounded ones says whether verdicts move."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.catalogue import Catalogue
from twicetold.errors import PlanError
from twicetold.evidence.ranking import rank_catalogue
from twicetold.plan import Plan
from twicetold.workers import Pool

FloatArray = npt.NDArray[np.float64]

#: Columns shown with exact and with rounded coordinates, where both runs have them.
SHOWN = (
    "joins",
    "clusters",
    "p_against_emergence",
    "p_against_ancestry",
    "p_against_transmission",
    "verdict",
)


def round_coordinates(catalogue: Catalogue, degrees: float) -> Catalogue:
    """Give the catalogue with every latitude and longitude rounded to a multiple of ``degrees``.

    Parameters
    ----------
    catalogue : Catalogue
    degrees : float
        Step of the grid; 0 leaves the coordinates as they are.

    Raises
    ------
    PlanError
        When all traditions would stand at one point.
    """
    if degrees <= 0:
        return catalogue
    latitude = np.clip(_to_step(catalogue.latitude, degrees), -90.0, 90.0)
    longitude = _to_step(catalogue.longitude, degrees)
    # A step that does not divide 180 could leave the range; the place is the same one turn on.
    longitude = np.where(longitude > 180.0, longitude - 360.0, longitude)
    longitude = np.where(longitude < -180.0, longitude + 360.0, longitude)
    if np.ptp(latitude) == 0.0 and np.ptp(longitude) == 0.0:
        raise PlanError(
            f"`report.round_degrees` must leave the traditions apart, but {degrees:g} degrees put "
            "all of them on one point. Set a smaller one in the plan: round_degrees under [report]."
        )
    for array in (latitude, longitude):
        array.flags.writeable = False
    return replace(catalogue, latitude=latitude, longitude=longitude)


def _to_step(values: FloatArray, step: float) -> FloatArray:
    # The second rounding takes away what 0.1 and its like leave behind (0.30000000000000004);
    # adding zero turns -0 into 0.
    return np.asarray(np.round(np.round(values / step) * step, 9) + 0.0)


def rerun_rounded(
    catalogue: Catalogue,
    plan: Plan,
    before: pd.DataFrame,
    *,
    pool: Pool,
    cache: bool = True,
) -> pd.DataFrame:
    """Rank again on rounded coordinates, contact graph included, and compare.

    Parameters
    ----------
    catalogue : Catalogue
        With exact coordinates.
    plan : Plan
        Its ``report.round_degrees`` says how coarse.
    before : pandas.DataFrame
        The table of motifs of the run on exact coordinates.
    pool : Pool
    cache : bool

    Returns
    -------
    pandas.DataFrame
        One row a motif in the order of ``before``: ``motif_id``, ``moved`` (yes or no: whether
        the verdict is another), then each of :data:`SHOWN` with its value on rounded coordinates
        (``_rounded``) beside it.
    """
    coarse = round_coordinates(catalogue, plan.report.round_degrees)
    plain = plan.replace(sensitivity__stability=False, sensitivity__hidden=False)
    after = rank_catalogue(coarse, plain, pool=pool, cache=cache, details=False).motifs
    return compare_rounded(before, after)


def compare_rounded(before: pd.DataFrame, after: pd.DataFrame) -> pd.DataFrame:
    """Set two tables of motifs side by side, see :func:`rerun_rounded`."""
    shown = [c for c in SHOWN if c in before and c in after]
    both = before[["motif_id", *shown]].merge(
        after[["motif_id", *shown]], on="motif_id", suffixes=("", "_rounded"), validate="1:1"
    )
    differs = both["verdict"].astype(str) != both["verdict_rounded"].astype(str)
    both.insert(1, "moved", np.where(differs, "yes", "no"))
    paired = [name for c in shown for name in (c, f"{c}_rounded")]
    return both[["motif_id", "moved", *paired]]
