"""What the tool says of a motif and of a catalogue, as frozen records."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from twicetold import display
from twicetold.references.law import Law

if TYPE_CHECKING:
    import pandas as pd

    from twicetold.catalogue import Catalogue
    from twicetold.graph import ContactGraph
    from twicetold.plan import Plan


@dataclass(frozen=True)
class Comparison:
    """One statistic of one motif compared with one world.

    Parameters
    ----------
    world : str
        ``emergence``, ``ancestry``, ``contact`` or ``transmission``.
    statistic : str
        ``joins``, ``joins_cross_family``, ``joins_same_family``, ``moran_i``, ``clusters``,
        ``largest_cluster`` or ``strands``.
    direction : str
        ``many``: large values speak against the world; ``few``: small values do.
    observed : float
        The observed value (an integer for every statistic but ``moran_i``).
    expected : float
        Mean in the world.
    p : float
        In (0, 1]; NaN when the world has nothing to say (see ``note``).
    p_attainable : float
        Smallest p this motif could ever reach in this comparison.
    primary : bool
        True for the statistic that decides in this world; the others are sensitivity.
    law : Law or None
        The drawn or exact distribution, for pictures; None for ``moran_i``.
    note : str
        Anything a reader must know, in words; usually empty.
    """

    world: str
    statistic: str
    direction: str
    observed: float
    expected: float
    p: float
    p_attainable: float
    primary: bool
    law: Law | None = None
    note: str = ""


@dataclass(frozen=True)
class RouteShares:
    """Posterior of the shares of the three routes for one motif.

    Parameters
    ----------
    routes : tuple of str
        ``("emergence", "contact", "inheritance")``; without families the last is absent.
    mean, low, high : (3,) or (2,) float64
        Posterior mean and the ends of the 90 % interval.
    grid : (G, 3) float64
        Share points the posterior stands on.
    weight : (G,) float64
        Posterior weight of each grid point (sums to 1).
    refused : str
        Why no shares are given (too few holders to learn anything), or empty.
    """

    routes: tuple[str, ...]
    mean: npt.NDArray[np.float64]
    low: npt.NDArray[np.float64]
    high: npt.NDArray[np.float64]
    grid: npt.NDArray[np.float64]
    weight: npt.NDArray[np.float64]
    refused: str = ""


@dataclass(frozen=True)
class MotifEvidence:
    """Everything found for one motif.

    Parameters
    ----------
    index : int
        Row of the motif in the catalogue.
    motif_id, name, category : str
    row : mapping of str to object
        The motif's row of ``motifs.csv`` (column to value; NaN or empty where nothing can be said).
    holders : (n,) int32
        Tradition indices that hold it.
    cluster_of : (n,) int32
        Cluster number (from 0, largest first) of each holder.
    local_joins : (n,) int32
        Number of neighbouring holders of each holder.
    comparisons : tuple of Comparison
    correlogram : pandas.DataFrame or None
        Columns ``from_km, to_km, pairs, observed, expected, low, high`` (share of pairs in the
        distance class whose two ends both hold the motif, and its 95 % envelope).
    shares : RouteShares or None
    stability : pandas.DataFrame or None
        One row per sensitivity run: ``kind, setting, verdict, p_against_emergence,
        p_against_ancestry, p_against_transmission``.
    hidden_bound : mapping of str to float
        ``log_sd, ratio, log_sd_low, log_sd_high, length_km``; empty when not computed.
    power : pandas.DataFrame or None
        One row per truth at this number of holders: ``truth, verdict, probability``.
    pairs : pandas.DataFrame or None
        Motifs on the same traditions: ``motif_id, name, shared, expected, p, q``.
    """

    index: int
    motif_id: str
    name: str
    category: str
    row: Mapping[str, object]
    holders: npt.NDArray[np.int32]
    cluster_of: npt.NDArray[np.int32]
    local_joins: npt.NDArray[np.int32]
    comparisons: tuple[Comparison, ...]
    correlogram: pd.DataFrame | None = None
    shares: RouteShares | None = None
    stability: pd.DataFrame | None = None
    hidden_bound: Mapping[str, float] = field(default_factory=dict)
    power: pd.DataFrame | None = None
    pairs: pd.DataFrame | None = None

    def figure(self, kind: str, **options: Any) -> Any:
        """Give a figure (``worlds``, ...) as an altair chart; ``map`` needs ``ranking=``."""
        return display.as_figure(self, kind, **options)

    def _repr_html_(self) -> str:
        return display.as_html(self)


@dataclass(frozen=True)
class Ranking:
    """The whole catalogue, ranked: what ``rank`` writes and the pages show.

    Parameters
    ----------
    catalogue : Catalogue
    graph : ContactGraph
        Over all located traditions.
    plan : Plan
        Resolved: every choice written out.
    motifs : pandas.DataFrame
        The table ``motifs.csv``, ranked, one row a motif.
    evidence : tuple of MotifEvidence
        In the order of ``motifs``.
    bands : pandas.DataFrame or None
        Clusters against holders: ``world, holders, low, median, high`` (95 % band).
    prevalence : pandas.DataFrame or None
        ``holders, motifs, fitted, low, high``.
    fits : mapping of str to object
        Turnover, recording and propensity fits: plain numbers and strings.
    categories : pandas.DataFrame or None
        One row per category: ``category, motifs, testable, joins_ratio, joins_ratio_low,
        joins_ratio_high, rejected_share, rejected_low, rejected_high`` and route shares.
    tables : mapping of str to pandas.DataFrame
        Further catalogue-level tables by name (``sensitivity``, ``power``, ``propensity_fit`` ...).
    notes : tuple of str
        What a reader must know of the run as a whole, in sentences.
    """

    catalogue: Catalogue
    graph: ContactGraph
    plan: Plan
    motifs: pd.DataFrame
    evidence: tuple[MotifEvidence, ...]
    bands: pd.DataFrame | None = None
    prevalence: pd.DataFrame | None = None
    fits: Mapping[str, object] = field(default_factory=dict)
    categories: pd.DataFrame | None = None
    tables: Mapping[str, pd.DataFrame] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    def to_frame(self) -> pd.DataFrame:
        """Give a copy of the ranked table."""
        return self.motifs.copy()

    def figure(self, kind: str, **options: Any) -> Any:
        """Give a figure of the catalogue, or with ``motif=`` of a motif, as an altair chart."""
        return display.as_figure(self, kind, **options)

    def _repr_html_(self) -> str:
        return display.as_html(self)
