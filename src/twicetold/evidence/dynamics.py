"""The same question put to another dynamics: the rate-based contact process (Harris 1974).

In the spread chain the *number* of holders walks by itself and geography decides who gains. In the
contact process every holder tells each neighbour at a fixed rate, so that geography decides how
many there are as well. Both are set against the motifs as worlds of contact alone, with the same
prevalence and complete recording; how many verdicts differ says how much hangs on the dynamics.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import pandas as pd

from twicetold.evidence.results import Comparison
from twicetold.evidence.study import Study
from twicetold.references.law import Law
from twicetold.references.pvalue import p_attainable, p_many
from twicetold.spread.chain import SpreadError, SpreadModel
from twicetold.spread.rates import RARE, RateModel, match_contact, rate_world
from twicetold.spread.world import spread_world
from twicetold.workers import Pool

if TYPE_CHECKING:
    from twicetold.evidence.ranking import Worlds
    from twicetold.evidence.spreading import Ground
    from twicetold.evidence.worlds import ObservedMotifs

#: Excursions of the contact process, and walks of the chain beside it.
EXCURSIONS, WALKS = 60_000, 4_000
#: Fewer effective draws than this and a count is left out: the process seldom comes by.
LEAST_DRAWS = 100.0


@dataclass(frozen=True)
class Dynamics:
    """Verdicts under both dynamics.

    Parameters
    ----------
    frame : pandas.DataFrame
        One row a motif: ``motif_id, holders, clusters, p_spread_chain, p_contact_process,
        verdict_spread_chain, verdict_contact_process``.
    contact : float
        Rate of telling each neighbour, per loss, that gives the catalogue's prevalence.
    """

    frame: pd.DataFrame
    contact: float

    @property
    def differ(self) -> int:
        """Number of motifs whose verdict differs."""
        one, other = self.frame["verdict_spread_chain"], self.frame["verdict_contact_process"]
        return int((one != other).sum())


def dynamics(
    study: Study, observed: ObservedMotifs, worlds: Worlds, pool: Pool
) -> tuple[Dynamics | None, str]:
    """Judge the motifs of the main surveyed set under both dynamics; and say what came of it.

    Parameters
    ----------
    study, observed, worlds
        Of the main run; ``worlds.main`` must be there.
    pool : Pool
    """
    assert worlds.main is not None
    ground, _ = worlds.main
    counts = [int(n) for n in ground.wanted]
    model = SpreadModel(ground.group.graph, ground.confidence.points[0].centre)
    seed = study.plan.evidence.seed
    try:
        rate = match_contact(
            ground.group.graph, model.turnover, least=counts[0], largest=counts[-1], seed=seed,
            pool=pool,
        )  # fmt: skip
    except SpreadError as err:
        return None, f"The rate-based contact process was not run: {err}"
    process = rate_world(
        RateModel(ground.group.graph, rate, RARE / ground.group.n), counts,
        excursions=EXCURSIONS, seed=seed, pool=pool,
    )  # fmt: skip
    chain = spread_world(model, counts, largest=counts[-1], walks=WALKS, seed=seed, pool=pool)
    laws: dict[int, tuple[Law, Law]] = {}
    for n in counts:
        try:
            # Without families every strand is a cluster.
            pair = (chain.law("clusters", n), process.law("clusters", n))
        except SpreadError:
            continue
        if pair[1].effective >= LEAST_DRAWS:
            laws[n] = pair
    frame = _judged(study, observed, worlds, ground, laws)
    told = Dynamics(frame, rate)
    return told, (
        f"Under the rate-based contact process instead of the spread chain (both contact alone, "
        f"all recorded) {told.differ:,} of {len(frame):,} verdicts differ."
    )


def _judged(
    study: Study,
    observed: ObservedMotifs,
    worlds: Worlds,
    ground: Ground,
    laws: dict[int, tuple[Law, Law]],
) -> pd.DataFrame:
    from twicetold.evidence.ranking import judge

    motifs: list[int] = [
        m
        for m, held in zip(ground.group.motifs, ground.group.holders, strict=True)
        if len(held) in laws
    ]
    if not motifs:
        return pd.DataFrame(columns=["verdict_spread_chain", "verdict_contact_process"])
    made = []
    for k in (0, 1):
        joined = {}
        for m in motifs:
            n = int(observed.holders[observed.place[m]])
            rest = tuple(c for c in worlds.comparisons[m] if c.world in ("emergence", "ancestry"))
            joined[m] = (*rest, _scatter(observed.value(m, "clusters"), laws[n][k]))
        named = tuple(dict.fromkeys((*study.plan.evidence.worlds, "transmission")))
        plan = study.plan.replace(evidence__worlds=named)
        made.append(
            judge(replace(study, plan=plan), observed, replace(worlds, comparisons=joined), motifs)
        )
    chain, process = made
    return pd.DataFrame(
        {
            "motif_id": chain["motif_id"],
            "holders": chain["holders"],
            "clusters": chain["clusters"],
            "p_spread_chain": chain["p_against_transmission"],
            "p_contact_process": process["p_against_transmission"],
            "verdict_spread_chain": chain["verdict"],
            "verdict_contact_process": process["verdict"],
        }
    )


def _scatter(clusters: int, law: Law) -> Comparison:
    return Comparison(
        world="transmission",
        statistic="clusters",
        direction="many",
        observed=clusters,
        expected=law.mean(),
        p=float(p_many(law, clusters)),
        p_attainable=p_attainable(law, "many", known=clusters),
        primary=True,
        law=law,
    )
