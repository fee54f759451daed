"""Categories of motifs: how clustered each is, and whether two differ at the same holders."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.plan import Plan
from twicetold.randomness import Stream, chunk_generator
from twicetold.references.multiplicity import adjust
from twicetold.references.pvalue import p_value

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

#: Resamples behind the interval of a category's joins ratio.
RESAMPLES = 1999
#: Categories with fewer testable motifs are not compared with others.
LEAST = 3
#: Numbers of holders within this factor of each other share a stratum.
WIDTH = 1.25
#: Shuffles made at once.
_BATCH = 1000
_BOOTSTRAP, _SHUFFLE = 0, 1


@dataclass(frozen=True)
class Categories:
    """Both tables; None where the catalogue names no category, or only one.

    Parameters
    ----------
    frame : pandas.DataFrame or None
        ``category, motifs, testable, joins_ratio, joins_ratio_low, joins_ratio_high,
        rejected_share, rejected_low, rejected_high``.
    pairs : pandas.DataFrame or None
        ``category, other, motifs, other_motifs, compared, ratio, p, q``.
    """

    frame: pd.DataFrame | None = None
    pairs: pd.DataFrame | None = None


def categories(table: pd.DataFrame, plan: Plan) -> Categories:
    """Describe and compare the categories of a judged table.

    Parameters
    ----------
    table : pandas.DataFrame
        Columns ``category, holders, joins, joins_expected, p_against_emergence,
        q_against_emergence, _attainable_emergence``.
    plan : Plan
        Its alpha, seed, multiplicity and number of sensitivity draws.
    """
    names = sorted({str(c) for c in table["category"]})
    if not any(names):
        return Categories()
    tested = table[
        (table["_attainable_emergence"] <= plan.evidence.alpha) & (table["joins_expected"] > 0)
    ]
    rows = [_row(table, tested, name, plan) for name in names]
    return Categories(pd.DataFrame(rows), _pairs(tested, names, plan))


def _row(table: pd.DataFrame, tested: pd.DataFrame, name: str, plan: Plan) -> dict[str, object]:
    """One category: all joins over all expected joins, and how many reject."""
    # Loading it takes a second, and one motif alone needs none of it.
    from statsmodels.stats.proportion import proportion_confint

    mine = tested[tested["category"] == name]
    joins = mine["joins"].to_numpy(float)
    expected = mine["joins_expected"].to_numpy(float)
    ratio, low, high = _ratio(joins, expected, plan.evidence.seed)
    by = "p" if plan.evidence.multiplicity == "none" else "q"
    rejected = int((mine[f"{by}_against_emergence"] <= plan.evidence.alpha).sum())
    share = (math.nan, math.nan, math.nan)
    if len(mine):
        ends = proportion_confint(rejected, len(mine), alpha=0.05, method="beta")
        share = (rejected / len(mine), float(ends[0]), float(ends[1]))
    return {
        "category": name,
        "motifs": int((table["category"] == name).sum()),
        "testable": len(mine),
        "joins_ratio": ratio,
        "joins_ratio_low": low,
        "joins_ratio_high": high,
        "rejected_share": share[0],
        "rejected_low": share[1],
        "rejected_high": share[2],
    }


def _ratio(joins: Floats, expected: Floats, seed: int) -> tuple[float, float, float]:
    """Sum over sum, and a 95 % percentile interval over motifs drawn with replacement.

    Its mean is 1 in the emergence-only world whatever the numbers of holders (Efron & Tibshirani
    1993, An Introduction to the Bootstrap, section 13.3, for the interval).
    """
    if not len(joins):
        return math.nan, math.nan, math.nan
    ratio = float(joins.sum() / expected.sum())
    if len(joins) < LEAST:
        return ratio, math.nan, math.nan
    rng = chunk_generator(seed, Stream.CATEGORIES, _BOOTSTRAP)
    drawn = np.empty(RESAMPLES)
    for first in range(0, RESAMPLES, _BATCH):
        size = min(_BATCH, RESAMPLES - first)
        which = rng.integers(len(joins), size=(size, len(joins)))
        drawn[first : first + size] = joins[which].sum(axis=1) / expected[which].sum(axis=1)
    low, high = np.quantile(drawn, [0.025, 0.975], method="inverted_cdf")
    return ratio, float(low), float(high)


def strata(holders: Ints) -> Ints:
    """(M,) stratum of each motif: numbers of holders within a factor of 1.25 go together."""
    return np.floor(np.log(np.maximum(holders, 1)) / math.log(WIDTH) + 1e-9).astype(np.int64)


def _pairs(tested: pd.DataFrame, names: list[str], plan: Plan) -> pd.DataFrame | None:
    enough = [n for n in names if n and int((tested["category"] == n).sum()) >= LEAST]
    if len(enough) < 2:
        return None
    rows = []
    for k, (one, other) in enumerate(itertools.combinations(enough, 2)):
        rng = chunk_generator(plan.evidence.seed, Stream.CATEGORIES, _SHUFFLE, k)
        both = tested[tested["category"].isin((one, other))]
        found = compare_two(
            (both["category"] == one).to_numpy(bool),
            both["holders"].to_numpy(np.int64),
            log_ratios(both["joins"].to_numpy(float), both["joins_expected"].to_numpy(float)),
            shuffles=plan.sensitivity.draws,
            rng=rng,
        )
        rows.append(
            {
                "category": one,
                "other": other,
                "motifs": int((both["category"] == one).sum()),
                "other_motifs": int((both["category"] == other).sum()),
                "compared": found[0],
                "ratio": found[1],
                "p": found[2],
            }
        )
    frame = pd.DataFrame(rows)
    return frame.assign(q=adjust(frame["p"].to_numpy(float), "bh"))


def log_ratios(joins: Floats, expected: Floats) -> Floats:
    """Log of joins over expected joins, half a join added to both so that none is infinite."""
    return np.asarray(np.log((joins + 0.5) / (expected + 0.5)), dtype=np.float64)


def compare_two(
    first: npt.NDArray[np.bool_],
    holders: Ints,
    scores: Floats,
    *,
    shuffles: int,
    rng: np.random.Generator,
) -> tuple[int, float, float]:
    """Compare two categories at equal numbers of holders, by shuffling who belongs to which.

    Names are shuffled within strata of about the same number of holders, so a category does not
    differ merely because its motifs are rarer. The statistic is the difference of mean log ratios
    within strata, weighted as in van Elteren (1960, Bulletin of the ISI 37) by a b / (a + b).

    Parameters
    ----------
    first : (M,) bool
        True in the first category, False in the second.
    holders : (M,) int
    scores : (M,) float
        See :func:`log_ratios`.
    shuffles : int
    rng : numpy.random.Generator

    Returns
    -------
    compared : int
        Motifs in strata that both categories share; the others cannot be compared.
    ratio : float
        How many times as clustered the first is (exp of the difference); NaN when none is shared.
    p : float
        Two-sided, in (0, 1]; NaN when none is shared.
    """
    parts: list[tuple[Floats, int]] = []
    stratum = strata(holders)
    seen, compared, weight = 0.0, 0, 0.0
    for code in np.unique(stratum):
        here = stratum == code
        a, b = int((here & first).sum()), int((here & ~first).sum())
        if not a or not b:
            continue
        own = scores[here] - scores[here].mean()
        # Weight a b / (a + b) times the difference of means is the sum of the first's deviations.
        seen += float(own[first[here]].sum())
        parts.append((own, a))
        compared += a + b
        weight += a * b / (a + b)
    if not parts:
        return 0, math.nan, math.nan
    extreme = 0
    for begin in range(0, shuffles, _BATCH):
        size = min(_BATCH, shuffles - begin)
        drawn = np.zeros(size)
        for own, a in parts:
            drawn += rng.permuted(np.tile(own, (size, 1)), axis=1)[:, :a].sum(axis=1)
        # A hair of slack: sums in another order must still tie.
        extreme += int((np.abs(drawn) >= abs(seen) - 1e-9).sum())
    return compared, math.exp(seen / weight), float(p_value(extreme, shuffles))
