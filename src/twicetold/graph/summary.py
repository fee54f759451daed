"""What a contact graph looks like: its summary, its pieces and its hop distances."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from twicetold.errors import GraphError
from twicetold.graph.bridges import piece_labels
from twicetold.graph.model import ContactGraph
from twicetold.graph.sphere import IntArray

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class GraphSummary:
    """A contact graph in numbers.

    Parameters
    ----------
    rule : str
        The rule it was built by.
    traditions : int
        Vertices, isolated ones included.
    edges : int
        Bridges included.
    bridges : int
        Edges added only so that every tradition can be reached.
    components : int
        Connected pieces, isolated traditions among them.
    largest_component : int
        Traditions in the largest piece.
    isolates : int
        Traditions without a neighbour.
    degree_min, degree_max : int
        Fewest and most neighbours of a tradition.
    degree_median, degree_mean : float
    edge_median_km, edge_longest_km : float
        Great-circle kilometres; NaN without edges.
    """

    rule: str
    traditions: int
    edges: int
    bridges: int
    components: int
    largest_component: int
    isolates: int
    degree_min: int
    degree_median: float
    degree_mean: float
    degree_max: int
    edge_median_km: float
    edge_longest_km: float

    def to_frame(self) -> pd.DataFrame:
        """One row, one column for each field."""
        import pandas as pd

        return pd.DataFrame([asdict(self)])


def summarise(graph: ContactGraph) -> GraphSummary:
    """Summarise a contact graph."""
    label = components(graph)
    degree = graph.degree if graph.n else np.zeros(1, dtype=np.int32)
    length = graph.length_km if graph.n_edges else np.array([np.nan])
    return GraphSummary(
        rule=graph.rule,
        traditions=graph.n,
        edges=graph.n_edges,
        bridges=int(graph.bridge.sum()),
        components=int(label.max(initial=-1)) + 1,
        largest_component=int(np.bincount(label, minlength=1).max()),
        isolates=int((graph.degree == 0).sum()),
        degree_min=int(degree.min()),
        degree_median=float(np.median(degree)),
        degree_mean=float(degree.mean()),
        degree_max=int(degree.max()),
        edge_median_km=float(np.median(length)),
        edge_longest_km=float(length.max()),
    )


def components(graph: ContactGraph) -> IntArray:
    """(n,) int32 connected piece of each tradition, numbered by first appearance."""
    return piece_labels(graph.n, graph.edges)


def hop_distances(graph: ContactGraph, sources: npt.ArrayLike) -> IntArray:
    """Fewest edges from each source to every tradition (breadth-first search).

    Parameters
    ----------
    graph : ContactGraph
    sources : (S,) array_like of int
        Tradition indices.

    Returns
    -------
    (S, n) ndarray of int32
        -1 where there is no way.

    Raises
    ------
    GraphError
        When a source is not a tradition of the graph.
    """
    from twicetold.graph._kernels import hops

    start = np.atleast_1d(np.asarray(sources))
    if start.size == 0:
        return np.zeros((0, graph.n), dtype=np.int32)
    whole = np.issubdtype(start.dtype, np.integer)
    if start.ndim != 1 or not whole or start.min() < 0 or start.max() >= graph.n:
        raise GraphError(f"`sources` must be tradition indices from 0 to {graph.n - 1}.")
    out = np.full((len(start), graph.n), -1, dtype=np.int32)
    hops(graph.indptr, graph.indices, start.astype(np.int32), out)
    return out
