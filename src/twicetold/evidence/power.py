"""What a catalogue's traditions could show at all: how often each verdict would come out.

Motifs are simulated on the catalogue's own map, at its turnover and recording, under four truths;
each is then judged as a motif of the catalogue would be, one motif at a time (plain p-values at the
plan's level: what multiplicity takes away depends on the other motifs).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
import pandas as pd
from statsmodels.stats.proportion import proportion_confint

from twicetold.catalogue import Catalogue
from twicetold.errors import TwicetoldError
from twicetold.evidence.scatter import ScatterWorlds, scatter_worlds
from twicetold.evidence.spreading import Ground, invention_rates, main_set, prepare_ground
from twicetold.evidence.study import Study, prepare
from twicetold.evidence.verdict import VERDICTS, Grounds, verdict
from twicetold.plan import Plan
from twicetold.randomness import Stream, chunk_generator
from twicetold.references.ancestry import HolderSets, Lineages, ancestry_world
from twicetold.references.emergence import EmergenceWorld, emergence_world
from twicetold.references.multiplicity import testable
from twicetold.references.pvalue import p_attainable, p_many
from twicetold.spread import SpreadModel, cap_for, chain_tables, walk_chunk
from twicetold.spread.chain import ChainTables
from twicetold.spread.world import spread_words
from twicetold.statistics import STATISTICS, observe
from twicetold.workers import Pool, ThreadPool

#: Truths under which motifs are simulated: shares of emergence, contact and inheritance.
TRUTHS: dict[str, tuple[float, float, float]] = {
    "contact": (0.0, 1.0, 0.0),
    "a tenth emergence": (0.1, 0.9, 0.0),
    "a third emergence": (1 / 3, 2 / 3, 0.0),
    "emergence": (1.0, 0.0, 0.0),
}
#: The verdict each truth hopes for; between the two pure routes, any that sees both.
HOPED = {
    "contact": "contact spread",
    "a tenth emergence": "several origins, then spread",
    "a third emergence": "several origins, then spread",
    "emergence": "parallel emergence",
}
#: Numbers of holders looked at; the catalogue's own nearest to them.
COUNTS = (3, 5, 8, 12, 20, 30, 50, 75, 100, 150, 200, 300)
#: Simulated motifs for each truth and number of holders, and walks they are taken from.
MOTIFS, WALKS = 400, 2_000
#: Draws of the emergence-only and ancestry-only worlds.
DRAWS = 9_999
#: Power asked of the smallest number of holders.
WANTED = 0.8
_PIECE = 50


@dataclass(frozen=True)
class PowerTable:
    """How often each verdict comes out.

    Parameters
    ----------
    frame : pandas.DataFrame
        ``holders, truth, verdict, probability, low, high`` (95 % binomial interval, Wilson 1927)
        and ``motifs``, the number simulated.
    smallest : pandas.DataFrame
        ``truth, verdict, holders``: the smallest number of holders from which on the verdict the
        truth hopes for comes out in 80 % of motifs; NaN where none looked at reaches that.
    alpha : float
        Level of each test.
    turnover : float
    notes : tuple of str
        What must be known of the turnover and recording it rests on.
    """

    frame: pd.DataFrame
    smallest: pd.DataFrame
    alpha: float
    turnover: float
    notes: tuple[str, ...] = ()

    def to_frame(self) -> pd.DataFrame:
        """Give a copy of ``frame``."""
        return self.frame.copy()


@dataclass(frozen=True)
class Judge:
    """Judges holder sets on one surveyed set of traditions as motifs of the catalogue are judged.

    Parameters
    ----------
    study : Study
    ground : Ground
    emergence : EmergenceWorld
    worlds : ScatterWorlds
    """

    study: Study
    ground: Ground
    emergence: EmergenceWorld
    worlds: ScatterWorlds

    def verdicts(self, holders: Sequence[npt.NDArray[np.int32]], pool: Pool) -> list[str]:
        """Verdict on each holder set (local indices), all of sizes the worlds were made for."""
        group, plan = self.ground.group, self.study.plan
        alpha = plan.evidence.alpha
        seen = observe(group.graph, holders, group.family_codes)
        ancestry = self._ancestry(holders, pool)
        joins, strands = (seen.values[:, STATISTICS.index(s)] for s in ("joins", "strands"))
        out = []
        for k, held in enumerate(holders):
            n = len(held)
            law = self.emergence.law("joins", n)
            attainable = p_attainable(law, "many", known=int(joins[k]))
            told = bool(testable(np.array([attainable]), alpha)[0])
            grounds = Grounds(
                emergence=float(p_many(law, int(joins[k]))) if told else float("nan"),
                ancestry=ancestry[k],
                transmission=self.worlds.p_scatter(n, joins=int(joins[k]), strands=int(strands[k])),
                attainable=attainable,
                families=self.study.families,
                transmission_known=True,
                holders=n,
                surveyed=group.n,
            )
            out.append(verdict(grounds, alpha)[0])
        return out

    def _ancestry(self, holders: Sequence[npt.NDArray[np.int32]], pool: Pool) -> list[float]:
        group = self.ground.group
        if not self.study.families:
            return [float("nan")] * len(holders)
        world = ancestry_world(
            group.graph,
            Lineages(group.family_codes, group.level_codes),
            self.ground.propensity,
            HolderSets.of(holders),
            draws=DRAWS,
            seed=self.study.plan.evidence.seed,
            pool=pool,
        )
        return [
            float(p_many(law, int(t))) if i else float("nan")
            for law, t, i in zip(world.laws, world.observed, world.informative, strict=True)
        ]


def catalogue_power(
    catalogue: Catalogue, plan: Plan | None = None, *, pool: Pool | None = None, cache: bool = True
) -> PowerTable:
    """Simulate motifs under four truths on the catalogue's map and judge them.

    Parameters
    ----------
    catalogue : Catalogue
    plan : Plan, optional
    pool : Pool, optional
    cache : bool
        Whether worlds are kept on disk between runs.

    Raises
    ------
    TwicetoldError
        When no motif is held by two traditions or more and not by all.
    """
    pool = pool or ThreadPool()
    study = prepare(catalogue, plan or Plan())
    ground = main_ground(study)
    worlds = scatter_worlds(
        ground.transmission(study),
        ground.wanted,
        largest=int(ground.wanted[-1]),
        pool=pool,
        use_cache=cache,
    )
    return power_on(study, ground, worlds, pool)


def power_on(study: Study, ground: Ground, worlds: ScatterWorlds, pool: Pool) -> PowerTable:
    """Simulate and judge on worlds that are there already, at some of their counts."""
    counts = some_counts(ground.wanted)
    judge = make_judge(study, ground, worlds, counts, pool)
    rows = []
    for truth, shares in TRUTHS.items():
        sets = simulate(study, ground, shares, counts, pool)
        flat = [held for n in counts for held in sets[n]]
        said = iter(judge.verdicts(flat, pool))
        for n in counts:
            got = [next(said) for _ in sets[n]]
            rows += [_row(n, truth, v, got.count(v), len(got)) for v in VERDICTS if got]
    frame = pd.DataFrame(rows)
    turnover = float(ground.confidence.points[0].centre)
    alpha, notes = study.plan.evidence.alpha, ground.confidence.notes
    return PowerTable(frame, _smallest(frame), alpha, turnover, notes)


def some_counts(wanted: npt.NDArray[np.int32]) -> list[int]:
    """The catalogue's counts nearest to :data:`COUNTS` (in ratio), each once."""
    near = {int(wanted[np.argmin(np.abs(np.log(wanted / n)))]) for n in COUNTS}
    return sorted(near)


def main_ground(study: Study) -> Ground:
    """Ground of the surveyed set with the most motifs.

    Raises
    ------
    TwicetoldError
        When there is no count that any power could be told of.
    """
    main = main_set(study)
    group = next(g for g in study.groups if study.catalogue.surveyed_of[g.motifs[0]] == main)
    ground = prepare_ground(study, group)
    if not len(ground.wanted):
        raise TwicetoldError(
            "No motif is held by two traditions or more and not by all: there is nothing whose "
            "power could be told. Add attestations."
        )
    return ground


def make_judge(
    study: Study, ground: Ground, worlds: ScatterWorlds, counts: Sequence[int], pool: Pool
) -> Judge:
    """Make what holder sets of these sizes are judged by."""
    group = ground.group
    emergence = emergence_world(
        group.graph,
        group.family_codes,
        ground.propensity,
        counts,
        draws=DRAWS,
        seed=study.plan.evidence.seed,
        pool=pool,
    )
    return Judge(study, ground, emergence, worlds)


@dataclass(frozen=True)
class _Job:
    tables: ChainTables
    counts: npt.NDArray[np.int32]
    seed: int
    key: tuple[int, ...]
    walks: int


def _walk(job: _Job, piece: int) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.uint64]]:
    first = piece * _PIECE
    words = spread_words(job.seed, first, min(_PIECE, job.walks - first), key=job.key)
    got = walk_chunk(job.tables, words, job.counts)
    return got.weight, got.bits


def simulate(
    study: Study,
    ground: Ground,
    shares: tuple[float, float, float],
    counts: Sequence[int],
    pool: Pool,
    *,
    motifs: int = MOTIFS,
    walks: int = WALKS,
) -> dict[int, list[npt.NDArray[np.int32]]]:
    """Recorded holder sets of simulated motifs, by number of holders.

    Each is one walk's snapshot, taken with a chance in proportion to the walk's weight (systematic
    resampling), so that equally many stand for equal probability.
    """
    base = ground.model(study)
    model: SpreadModel = replace(base, shares=shares, propensity=invention_rates(study, ground))
    wanted = np.unique(np.asarray(counts, dtype=np.int32))
    tables = chain_tables(model, cap_for(model, int(wanted[-1])))
    word = round(1000 * shares[0]) * 1001 + round(1000 * shares[2])
    key = (int(Stream.POWER), word)
    job = _Job(tables, wanted, study.plan.evidence.seed, key, walks)
    parts = list(pool.run(_walk, job, range(-(-walks // _PIECE)), label="simulated motifs"))
    weight = np.concatenate([p[0] for p in parts])
    bits = np.concatenate([p[1] for p in parts])
    rng = chunk_generator(study.plan.evidence.seed, Stream.POWER, word, 1)
    out: dict[int, list[npt.NDArray[np.int32]]] = {}
    for k, n in enumerate(wanted.tolist()):
        total = np.cumsum(weight[:, k])
        if total[-1] <= 0.0:
            out[n] = []
            continue
        marks = (np.arange(motifs) + rng.uniform()) / motifs * total[-1]
        chosen = np.minimum(np.searchsorted(total, marks, side="right"), len(total) - 1)
        out[n] = [_members(bits[w, k]) for w in chosen.tolist()]
    return out


def _members(words: npt.NDArray[np.uint64]) -> npt.NDArray[np.int32]:
    """Tradition indices whose bits are set."""
    flat = np.ascontiguousarray(words).astype("<u8").view(np.uint8)
    return np.flatnonzero(np.unpackbits(flat, bitorder="little")).astype(np.int32)


def _row(n: int, truth: str, said: str, times: int, of: int) -> dict[str, object]:
    low, high = proportion_confint(times, of, method="wilson")
    return {
        "holders": n,
        "truth": truth,
        "verdict": said,
        "probability": times / of,
        "low": float(low),
        "high": float(high),
        "motifs": of,
    }


def _smallest(frame: pd.DataFrame) -> pd.DataFrame:
    """Smallest number of holders from which on the hoped-for verdict has the wanted power."""
    rows = []
    for truth, hoped in HOPED.items():
        part = frame[(frame["truth"] == truth) & (frame["verdict"] == hoped)]
        part = part.sort_values("holders")
        enough = (part["probability"] >= WANTED).to_numpy()
        # From the last shortfall on: power that dips again is not power.
        first = int(np.flatnonzero(~enough)[-1]) + 1 if (~enough).any() else 0
        n = float(part["holders"].iloc[first]) if first < len(part) else float("nan")
        rows.append({"truth": truth, "verdict": hoped, "holders": n})
    return pd.DataFrame(rows)


def at_holders(table: PowerTable, holders: int) -> pd.DataFrame:
    """Rows of the simulated number of holders nearest (in ratio) to a motif's own."""
    looked = np.unique(table.frame["holders"].to_numpy(float))
    near = looked[np.argmin(np.abs(np.log(looked / max(holders, 1))))]
    here: pd.DataFrame = table.frame[table.frame["holders"] == near]
    return here.reset_index(drop=True)
