"""Whether a verdict survives another graph, another propensity, or the loss of a family or region.

Every run is the whole analysis again (worlds, multiplicity, the verdict table), with one thing
changed and fewer draws. The transmission-only world is the dear one: it is walked again, with
fewer walks, on other graphs and reaches only; its p is the main run's where just the propensities
change, which it does not know wherever recording is fitted; and it is taken over from the main run
where a family or a region is left out. The tables say which.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

from twicetold.catalogue import Catalogue
from twicetold.errors import TwicetoldError
from twicetold.evidence.contacts import KnownContacts, known_contacts
from twicetold.evidence.study import Study, prepare
from twicetold.evidence.unmeasured import region_labels
from twicetold.evidence.worlds import observe_motifs
from twicetold.plan import Plan
from twicetold.workers import Pool

if TYPE_CHECKING:
    from twicetold.evidence.ranking import Worlds

#: What is said of the p against transmission-only in each run.
SAME, AGAIN, CARRIED, NOT_ASKED = (
    "same world",
    "walked again",
    "from the main run",
    "not computed",
)
#: Walks of a run are this many times fewer than the plan's, but at least so many.
FEWER_WALKS, LEAST_WALKS = 10, 1000
#: A run needs this many traditions.
LEAST_TRADITIONS = 4
#: Columns of a motif's table.
RUN_COLUMNS = (
    "verdict",
    "p_against_emergence",
    "p_against_ancestry",
    "p_against_transmission",
)


@dataclass(frozen=True)
class Setting:
    """One run: what is changed.

    Parameters
    ----------
    kind : str
        ``graph``, ``exponent``, ``propensity``, ``reach``, ``without family`` or
        ``without region``.
    setting : str
        The other rule, the exponent, or the name left out.
    catalogue : Catalogue
    plan : Plan
    transmission : str
        Where the p against transmission-only comes from: one of the four words of this module.
    contacts : KnownContacts or None
        Contact graph that stays as it is, where it cannot be built afresh.
    """

    kind: str
    setting: str
    catalogue: Catalogue
    plan: Plan
    transmission: str
    contacts: KnownContacts | None = None


@dataclass(frozen=True)
class Stability:
    """How the verdicts held.

    Parameters
    ----------
    share : mapping of int to float
        Share of runs with the main run's verdict, by motif index; motifs too rare for any verdict
        are left out.
    by_motif : mapping of int to pandas.DataFrame
        One row a run: ``kind, setting, verdict, p_against_emergence, p_against_ancestry,
        p_against_transmission, transmission``.
    runs : pandas.DataFrame or None
        One row a run: ``kind, setting, draws, traditions, transmission, motifs, same_verdict``.
    notes : tuple of str
    """

    share: Mapping[int, float] = field(default_factory=dict)
    by_motif: Mapping[int, pd.DataFrame] = field(default_factory=dict)
    runs: pd.DataFrame | None = None
    notes: tuple[str, ...] = ()


def stability(
    study: Study, worlds: Worlds, table: pd.DataFrame, pool: Pool, *, cache: bool = True
) -> Stability:
    """Judge every motif again under every setting.

    Parameters
    ----------
    study : Study
        Of the main run.
    worlds : Worlds
        Of the main run.
    table : pandas.DataFrame
        Its judged table, with ``_motif`` and ``_attainable_emergence``.
    pool : Pool
    cache : bool
        Whether banks of snapshots may be kept on disk.
    """
    judged = table["_attainable_emergence"] <= study.plan.evidence.alpha
    motifs = tuple(int(m) for m in table["_motif"])
    alone = len(motifs) < study.catalogue.n_motifs
    main = dict(zip(motifs, table["verdict"], strict=True))
    wanted = [m for m, yes in zip(motifs, judged, strict=True) if yes]
    parts: list[pd.DataFrame] = []
    runs: list[dict[str, object]] = []
    refused: list[str] = []
    for setting in settings(study):
        try:
            found = _run(setting, worlds, motifs, pool, alone=alone, cache=cache)
        except TwicetoldError as err:
            refused.append(f"The stability run {setting.kind} {setting.setting} failed: {err}")
            continue
        part = found.loc[wanted]
        same = np.array([part.at[m, "verdict"] == main[m] for m in wanted], dtype=bool)
        parts.append(part.assign(kind=setting.kind, setting=setting.setting, same=same,
                                 transmission=setting.transmission))  # fmt: skip
        runs.append(
            {
                "kind": setting.kind,
                "setting": setting.setting,
                "draws": setting.plan.evidence.draws,
                "traditions": setting.catalogue.n_traditions,
                "transmission": setting.transmission,
                "motifs": len(wanted),
                "same_verdict": float(same.mean()) if len(same) else float("nan"),
            }
        )
    if not parts or not wanted:
        return Stability(notes=tuple(refused))
    together = pd.concat(parts).sort_index(kind="stable")
    by_motif = {
        int(str(m)): rows[["kind", "setting", *RUN_COLUMNS, "transmission"]].reset_index(drop=True)
        for m, rows in together.groupby(level=0)
    }
    share = {int(str(m)): float(v) for m, v in together.groupby(level=0)["same"].mean().items()}
    return Stability(share, by_motif, pd.DataFrame(runs), (*refused, *_notes(study)))


def _run(
    setting: Setting,
    worlds: Worlds,
    motifs: Sequence[int],
    pool: Pool,
    *,
    alone: bool,
    cache: bool,
) -> pd.DataFrame:
    """One run's judged columns, by motif index."""
    from twicetold.evidence.ranking import compute_worlds, judge, primary

    wanted = motifs if alone else None
    study = prepare(setting.catalogue, setting.plan, motifs=wanted, contacts=setting.contacts)
    observed = observe_motifs(study)
    found = compute_worlds(study, observed, pool, cache=cache)
    if setting.transmission in (SAME, CARRIED):
        joined = {}
        for m in motifs:
            known = primary(worlds.comparisons[m], "transmission")
            joined[m] = found.comparisons[m] + ((known,) if known else ())
        found = replace(found, comparisons=joined, power=worlds.power)
        named = (*study.plan.evidence.worlds, "transmission")
        study = replace(study, plan=study.plan.replace(evidence__worlds=named))
    table = judge(study, observed, found, motifs, alone=alone)
    return table.set_index("_motif")[list(RUN_COLUMNS)]


def settings(study: Study) -> list[Setting]:
    """List the runs: graphs, exponents or propensities, families and regions left out."""
    plan = study.plan
    asked = plan.evidence.worlds
    base = plan.replace(
        evidence__draws=min(plan.sensitivity.draws, plan.evidence.draws),
        evidence__worlds=tuple(w for w in ("emergence", "ancestry") if w in asked)
        or ("emergence",),
        sensitivity__stability=False,
    )
    told = "transmission" in asked
    carried = CARRIED if told else NOT_ASKED
    same = SAME if told and _blind_to_propensity(plan) else carried
    return [
        *_other_graphs(study, base, AGAIN if told else NOT_ASKED),
        *_other_propensities(study, base, same),
        *(_other_reaches(study, base) if told else []),
        *_left_out(study, base, carried, "family"),
        *_left_out(study, base, carried, "region"),
    ]


def _blind_to_propensity(plan: Plan) -> bool:
    """Whether the spread chain's worlds are the same under any propensity rule.

    They are where recording is fitted, which takes what was collected out of the propensities
    (see ``spreading.invention_rates``) and leaves no more but covariates in them.
    """
    return plan.spread.recording == "fit" and plan.emergence.propensity != "covariates"


def _other_graphs(study: Study, base: Plan, transmission: str) -> list[Setting]:
    if transmission == AGAIN:
        base = _walking(base)
    return [
        Setting("graph", rule, study.catalogue, base.replace(graph__rule=rule), transmission)
        for rule in dict.fromkeys(study.plan.sensitivity.graphs)
        if rule != study.plan.graph.rule
    ]


def _walking(base: Plan) -> Plan:
    """Let a run walk the transmission-only world again, with fewer walks."""
    walks = max(LEAST_WALKS, base.evidence.walks // FEWER_WALKS)
    return base.replace(
        evidence__worlds=(*base.evidence.worlds, "transmission"),
        evidence__walks=min(walks, base.evidence.walks),
    )


def _other_reaches(study: Study, base: Plan) -> list[Setting]:
    """Contact that goes further than the next neighbour."""
    return [
        Setting(
            "reach",
            f"{reach:g}",
            study.catalogue,
            _walking(base).replace(spread__reach=reach),
            AGAIN,
        )
        for reach in dict.fromkeys(study.plan.sensitivity.reaches)
        if reach != study.plan.spread.reach
    ]


def _other_propensities(study: Study, base: Plan, transmission: str) -> list[Setting]:
    """Other exponents of effort; where effort is not what counts, equal chances and effort."""
    emergence = study.plan.emergence
    if emergence.propensity == "effort":
        return [
            Setting(
                "exponent",
                f"{exponent:g}",
                study.catalogue,
                base.replace(emergence__exponent=exponent),
                transmission,
            )
            for exponent in dict.fromkeys(study.plan.sensitivity.exponents)
            if exponent != emergence.exponent
        ]
    rules = ["equal"] if study.catalogue.effort is None else ["equal", "effort"]
    return [
        Setting(
            "propensity",
            rule,
            study.catalogue,
            base.replace(emergence__propensity=rule),
            transmission,
        )
        for rule in rules
        if rule != emergence.propensity
    ]


def _left_out(study: Study, base: Plan, transmission: str, what: str) -> list[Setting]:
    """Every family of two or more traditions left out, or every region."""
    catalogue = study.catalogue
    labels = _family_labels(study) if what == "family" else _region_names(study)
    if base.emergence.propensity == "margins":
        base = base.replace(emergence__propensity="recorded")  # the totals stand in for the chain
    out = []
    for name in sorted(set(labels) - {""}):
        keep = np.array([label != name for label in labels])
        if keep.all() or keep.sum() < LEAST_TRADITIONS:
            continue
        out.append(
            Setting(
                f"without {what}",
                name,
                catalogue.subset(keep),
                base,
                transmission,
                _fixed_graph(study, keep) if study.plan.graph.rule.startswith("given:") else None,
            )
        )
    return out


def _family_labels(study: Study) -> list[str]:
    """Family of each tradition; empty for one that has its family to itself."""
    if not study.families:
        return [""] * study.catalogue.n_traditions
    counts = pd.Series(study.catalogue.family).value_counts()
    return [f if f and counts[f] > 1 else "" for f in study.catalogue.family]


def _region_names(study: Study) -> list[str]:
    """Region of each tradition: the catalogue's own names, or numbers of compact regions."""
    if len({r for r in study.catalogue.region if r}) >= 2:
        return list(study.catalogue.region)
    return [f"{code + 1}" for code in region_labels(study)]


def _fixed_graph(study: Study, keep: npt.NDArray[np.bool_]) -> KnownContacts:
    """Give a graph read from a file among those who stay: the file names those who left too."""
    catalogue, bridges = study.catalogue, study.plan.graph.bridges
    part = study.graph.restricted_to(keep, catalogue.latitude, catalogue.longitude, bridges=bridges)
    return known_contacts(catalogue.subset(keep), part, bridges=bridges)


def _notes(study: Study) -> tuple[str, ...]:
    notes = [
        f"Stability runs used {min(study.plan.sensitivity.draws, study.plan.evidence.draws):,} "
        "draws each; where a family or region is left out, the contact graph is built afresh."
    ]
    if "transmission" in study.plan.evidence.worlds:
        notes.append(
            "In stability runs without a family or a region, p against transmission-only is that "
            "of the main run; on other graphs and reaches it was walked again with fewer walks."
        )
    if study.plan.emergence.propensity == "margins":
        notes.append(
            "Stability runs without a family or a region took propensities from row totals "
            "instead of holding both margins fixed."
        )
    return tuple(notes)
