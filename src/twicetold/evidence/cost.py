"""What a ranking will take, before it is begun: a few timed draws and walks, scaled up.

An estimate for planning, right within a factor of about two on an idle machine; what lies in the
cache already takes no time and is not known here.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from twicetold.evidence.propensities import group_propensity
from twicetold.evidence.scatter import BESIDE
from twicetold.evidence.spreading import Ground, bank_walks, banked_up_to, prepare_ground
from twicetold.evidence.study import Group, Study
from twicetold.randomness import Stream, chunk_words
from twicetold.references._engine import check_propensity, draw_chunk, make_engine
from twicetold.references.exact import few_enough
from twicetold.spread.chain import cap_for, chain_tables, walk_chunk
from twicetold.spread.world import expected_events
from twicetold.statistics._check import family_array
from twicetold.workers import Pool

#: Seconds from which a run is said to be long.
LONG = 60.0
#: Draws timed, and seconds that the timed walks should take together.
DRAWS, WALKING = 100, 0.1
#: Seconds of one motif, draw and counted edge in the ancestry-only world; the second where each
#: motif leaves its own record out (reports/benchmarks/ancestry.md).
ANCESTRY, ANCESTRY_OWN = 4e-11, 8e-10
#: Seconds of one record in one sweep of trades with both margins held.
TRADE = 2.5e-8
#: Walks of the spread worlds beyond those asked for: counts that are visited too seldom, turnovers
#: that reweighting does not reach.
MORE_WALKS = 2.0
#: Seconds that learning the shares takes (reports/benchmarks/shares.md).
LEARNING = 22.0
#: Seconds a motif by itself: comparing and judging it; showing it (clusters, correlogram, hidden
#: bound, companions); its page. And the pages of the catalogue as a whole.
JUDGE, SHOW, PAGE, PAGES = 6e-4, 5e-3, 1.7e-2, 4.0
#: Runs of the sensitivity to graphs, exponents, families and regions; how many is not known before.
STABILITY_RUNS = 30


def estimate(study: Study, pool: Pool, *, pages: bool = True) -> dict[str, float]:
    """Estimate the seconds that ranking takes, by part.

    Parameters
    ----------
    study : Study
    pool : Pool
        Its number of threads shares out what can be shared.
    pages : bool
        Whether what only pages show is computed and written too.

    Returns
    -------
    dict of str to float
        Parts that the plan asks for; their sum is the whole.
    """
    threads = float(getattr(pool, "threads", getattr(pool, "workers", 1)))
    asked = set(study.plan.evidence.worlds)
    motifs = sum(len(g.motifs) for g in study.groups)
    parts: dict[str, float] = {}
    if "emergence" in asked:
        parts["emergence-only"] = sum(_emergence(study, g) for g in study.groups) / threads
    if "ancestry" in asked and study.families:
        parts["ancestry-only"] = sum(_ancestry(study, g) for g in study.groups) / threads
    if asked & {"contact", "transmission", "shares"}:
        parts |= _spread(study, asked, threads)
    worlds = sum(parts.values())
    parts["judging"] = JUDGE * motifs
    if pages:
        parts["details"] = SHOW * motifs / threads
        if study.plan.sensitivity.stability:
            part = min(1.0, study.plan.sensitivity.draws / study.plan.evidence.draws)
            parts["stability"] = STABILITY_RUNS * (worlds * part + JUDGE * motifs)
        parts["pages"] = PAGES + PAGE * motifs
    return parts


def forewarning(study: Study, pool: Pool) -> str:
    """Say what a run will take, in one line; nothing where it is under a minute."""
    if _surely_short(study):
        return ""
    parts = estimate(study, pool)
    return told(parts) if sum(parts.values()) > LONG else ""


def _surely_short(study: Study) -> bool:
    """Whether not even the estimate is worth its second."""
    plan, motifs = study.plan, study.catalogue.n_motifs
    walked = {"contact", "transmission", "shares"} & set(plan.evidence.worlds)
    heavy = plan.sensitivity.stability or plan.emergence.propensity in ("recorded", "margins")
    return not (walked or heavy) and plan.evidence.draws * motifs <= 1_000_000


def told(parts: dict[str, float]) -> str:
    """Say an estimate in one line, the longest parts by name."""
    longest = sorted(parts, key=lambda name: -parts[name])[:3]
    named = ", ".join(f"{name} {_clock(parts[name])}" for name in longest if parts[name] >= 1)
    return (
        f"This will take about {_clock(sum(parts.values()))} ({named}); less where earlier runs "
        "left banks in the cache."
    )


def _clock(seconds: float) -> str:
    if seconds < 90:
        return f"{max(1, round(seconds))} s"
    if seconds < 5400:
        return f"{round(seconds / 60)} min"
    return f"{seconds / 3600:.1f} h"


def _timed(function: Callable[[], Any]) -> float:
    """Seconds that this thread works in the second call: the first may compile."""
    function()
    begin = time.thread_time()
    function()
    return time.thread_time() - begin


def _emergence(study: Study, group: Group) -> float:
    """Seconds on one thread: a hundred draws, scaled."""
    sizes = np.array([len(h) for h in group.holders])
    sizes = sizes[(sizes >= 1) & (sizes <= group.n)]
    draws = study.plan.evidence.draws
    if study.plan.emergence.propensity == "margins":
        motifs = study.catalogue.n_motifs
        sweeps = 20 + 2 * math.ceil(math.log2(max(2, motifs)))
        return TRADE * draws * sweeps * float(sizes.sum())
    propensity = group_propensity(study, group)
    weights = check_propensity(group.n, propensity.shared)
    drawn = [int(n) for n in np.unique(sizes) if not few_enough(weights, int(n))]
    if not drawn:
        return 0.0
    family = family_array(group.n, group.family_codes)
    engine = make_engine(
        group.graph, family, weights, drawn, None, source=(1, Stream.EMERGENCE, DRAWS)
    )
    each = _timed(lambda: draw_chunk(engine, 0)) / DRAWS
    if propensity.own is None:
        return each * draws
    # Every motif has its own sweep, as long as its holders are many.
    return each * draws * float(sizes.sum()) / drawn[-1]


def _ancestry(study: Study, group: Group) -> float:
    """Seconds on one thread, from what was measured elsewhere."""
    a, b = group.graph.edges.T
    cross = int((group.family_codes[a] != group.family_codes[b]).sum())
    own = study.plan.emergence.propensity in ("recorded", "margins")
    each = ANCESTRY_OWN if own else ANCESTRY
    return each * study.plan.evidence.draws * len(group.motifs) * (cross + group.n)


def _spread(study: Study, asked: set[str], threads: float) -> dict[str, float]:
    """Walks of the largest surveyed set, timed and scaled; other sets by their size."""
    first = max(study.groups, key=lambda g: (len(g.motifs), g.n))
    ground = prepare_ground(study, first)
    if not len(ground.wanted):
        return {}
    others = sum(g.n for g in study.groups) / first.n
    out = {}
    if asked & {"contact", "transmission"}:
        what = ground.transmission(study)
        worlds = len(what.shares) * len(what.confidence.points)
        walks = what.walks * (1 + BESIDE * (worlds - 1))
        each = _walk_seconds(ground, study, ground.wanted)
        scattered = each * walks * _more_walks(ground, study) * others / threads
        out["contact-only and transmission-only"] = scattered
    if "shares" in asked:
        from twicetold.evidence.shares.bank import estimate_cost

        model, walks = ground.model(study), bank_walks(study)
        largest = banked_up_to(model, ground.wanted, walks)
        walking = estimate_cost(model, largest=largest, walks=walks, workers=max(1, int(threads)))
        out["route shares"] = (walking + LEARNING) * others
    return out


def _more_walks(ground: Ground, study: Study) -> float:
    """What is walked beyond one world at the fitted turnover, as a multiple of it."""
    if ground.confidence.assumed is None:
        return MORE_WALKS
    # Turnovers so far apart are walked each for itself, and the higher ones much longer.
    model, largest = ground.model(study), int(ground.wanted[-1])
    events = [
        expected_events(chain_tables(replace(model, turnover=x), cap_for(model, largest)))
        for x in ground.confidence.points[0].turnovers
    ]
    return sum(events) / events[len(events) // 2]


def _walk_seconds(ground: Ground, study: Study, counts: npt.NDArray[np.int32]) -> float:
    """Seconds of one contact-only walk with its statistics."""
    model = replace(ground.model(study), shares=(0.0, 1.0, 0.0), spill="transmission")
    tables = chain_tables(model, cap_for(model, int(counts[-1])))
    walks = int(np.clip(WALKING / (1.5e-7 * expected_events(tables)), 1, 64))
    words = chunk_words(1, Stream.SPREAD, 0, draws=64)[:walks]
    return _timed(lambda: walk_chunk(tables, words, counts).summaries(tables)) / walks
