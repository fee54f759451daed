"""How the shares of the three routes are spread over a catalogue, and over its categories.

Motifs are taken as draws from an unknown distribution of shares; its nonparametric maximum-
likelihood estimate stands on the knots of a grid of step 0.1 (Kiefer & Wolfowitz 1956; Laird 1978)
and is found by EM from each motif's likelihood, which is posterior over prior. Intervals come from
drawing the motifs again with replacement (Efron 1979). The spread of single posteriors, which is
mostly the vagueness of each, is taken out: a catalogue of pure routes shows as pure routes.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.evidence.results import RouteShares
from twicetold.evidence.shares._mixture_kernels import mixing_weights
from twicetold.evidence.shares.simplex import simplex
from twicetold.randomness import Stream, chunk_generator

FloatArray = npt.NDArray[np.float64]

#: The row that stands for the whole catalogue.
EVERY = "(all)"
#: Fewer motifs with shares than this give a category no figures.
FEWEST = 10
#: Contact's part of the gains from which it alone is said to reproduce a motif.
ALONE = 0.9
#: Step of the grid of the mixture.
STEP = 10
#: Rounds of EM, and gain per motif below which it stops; replicates start near the fit and need
#: only the figures' spread.
_ROUNDS, _TOLERANCE = 2000, 1e-4
_REPLICATE_ROUNDS, _REPLICATE_TOLERANCE = 300, 1e-3


def grid_of(routes: int) -> tuple[npt.NDArray[np.int64], FloatArray]:
    """Give the knots of the simplex that lie on the grid of step 0.1, and their shares.

    Returns
    -------
    (K,) int64, (K, 3) float64
    """
    knots = simplex(routes).knots
    steps = knots * STEP
    rows = np.flatnonzero(np.all(np.abs(steps - np.rint(steps)) < 1e-9, axis=1))
    return rows, knots[rows]


def likelihoods(posteriors: Sequence[RouteShares]) -> tuple[FloatArray, npt.NDArray[np.intp]]:
    """Give each told motif's likelihood at the grid points, scaled to a maximum of 1.

    Returns
    -------
    (M, K) float64
    (M,) int64
        Which of ``posteriors`` were told (not refused).
    """
    told = np.array([k for k, p in enumerate(posteriors) if not p.refused], dtype=np.intp)
    routes = len(posteriors[0].routes) if posteriors else 3
    rows, _ = grid_of(routes)
    prior = simplex(routes).prior[rows]
    out = np.empty((len(told), len(rows)))
    for m, k in enumerate(told):
        out[m] = posteriors[k].weight[rows] / prior
        out[m] /= out[m].max()
    return out, told


def fit_mixture(
    likelihood: FloatArray, times: npt.ArrayLike | None = None, start: FloatArray | None = None
) -> FloatArray:
    """Weights of the grid points that make the motifs most likely.

    Parameters
    ----------
    likelihood : (M, K) float64
    times : (M,) float64, optional
        How often each motif counts; once by default.
    start : (K,) float64, optional
        Where EM starts (near the answer, so it takes fewer rounds); all > 0. Even by default.

    Returns
    -------
    (K,) float64, sums to 1.
    """
    count = np.ones(len(likelihood)) if times is None else np.asarray(times, dtype=np.float64)
    size = likelihood.shape[1]
    out = np.full(size, 1.0 / size) if start is None else np.array(start, dtype=np.float64)
    rounds, tolerance = _ROUNDS, _TOLERANCE
    if start is not None:
        rounds, tolerance = _REPLICATE_ROUNDS, _REPLICATE_TOLERANCE
    mixing_weights(np.ascontiguousarray(likelihood), count, out, rounds, tolerance)
    return out


def catalogue_shares(
    posteriors: Sequence[RouteShares],
    categories: Sequence[str],
    *,
    seed: int,
    replicates: int = 200,
) -> pd.DataFrame:
    """Distribution of the route shares over the catalogue and within each category.

    Parameters
    ----------
    posteriors : sequence of RouteShares, length M
    categories : sequence of str, length M
        Empty where a motif has none.
    seed : int
    replicates : int
        Bootstrap replicates behind the 90 % intervals.

    Returns
    -------
    pandas.DataFrame
        One row for the whole catalogue (``(all)``) and one per category, in order of name:
        ``category``, ``motifs``, ``motifs_with_shares``; then with ``_low`` and ``_high`` beside
        each ``<route>_share`` (mean share of the route in a motif's gains), ``<route>_led`` (share
        of motifs in which the route is the largest) and ``contact_alone`` (share of motifs of
        which contact makes nine tenths of the gains or more). NaN with fewer than 10 motifs.
    """
    if len(posteriors) != len(categories):
        raise ValueError(
            f"`categories` must have one entry per motif, got {len(categories)} for "
            f"{len(posteriors)} motifs."
        )
    likelihood, told = likelihoods(posteriors)
    routes = posteriors[0].routes if posteriors else ("emergence", "contact", "inheritance")
    measures, names = _measures(routes)
    labels = np.array([categories[k] for k in told], dtype=object)
    records = []
    for number, category in enumerate([EVERY, *sorted({c for c in categories if c})]):
        mine = np.arange(len(told)) if category == EVERY else np.flatnonzero(labels == category)
        motifs = len(categories) if category == EVERY else sum(c == category for c in categories)
        record: dict[str, object] = {
            "category": category,
            "motifs": motifs,
            "motifs_with_shares": len(mine),
        }
        # Seeded by the category's name, so that it does not hang on which others there are.
        words = list(category.encode()) if number else []
        rng = chunk_generator(seed, Stream.CATEGORIES, *words)
        record.update(_figures(likelihood[mine], measures, names, rng, replicates))
        records.append(record)
    return pd.DataFrame(records)


def _measures(routes: Sequence[str]) -> tuple[FloatArray, list[str]]:
    """(K, Q): what each grid point adds to each figure, and the figures' names."""
    _, grid = grid_of(len(routes))
    shares = grid[:, : len(routes)]
    largest = np.abs(shares - shares.max(axis=1, keepdims=True)) < 1e-9
    # Where two routes are equally large, each leads half.
    led = largest / largest.sum(axis=1, keepdims=True)
    alone = (grid[:, [1]] >= ALONE - 1e-9).astype(np.float64)
    names = [f"{r}_share" for r in routes] + [f"{r}_led" for r in routes] + ["contact_alone"]
    return np.concatenate([shares, led, alone], axis=1), names


def _figures(
    likelihood: FloatArray,
    measures: FloatArray,
    names: list[str],
    rng: np.random.Generator,
    replicates: int,
) -> dict[str, float]:
    motifs = len(likelihood)
    columns = [c for n in names for c in (n, f"{n}_low", f"{n}_high")]
    if motifs < FEWEST:
        return dict.fromkeys(columns, np.nan)
    fitted = fit_mixture(likelihood)
    # EM never leaves 0, so replicates start a little away from the fit.
    start = 0.9 * fitted + 0.1 / len(fitted)
    drawn = np.empty((replicates, measures.shape[1]))
    for k in range(replicates):
        times = rng.multinomial(motifs, np.full(motifs, 1.0 / motifs))
        drawn[k] = (fit_mixture(likelihood, times, start)[:, None] * measures).sum(axis=0)
    value = (fitted[:, None] * measures).sum(axis=0)
    low, high = np.quantile(drawn, [0.05, 0.95], axis=0)
    return {
        column: float(part[q])
        for q, name in enumerate(names)
        for column, part in ((name, value), (f"{name}_low", low), (f"{name}_high", high))
    }
