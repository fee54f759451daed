"""What every world needs of a catalogue: one group for each set of traditions surveyed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold.catalogue import Catalogue
from twicetold.errors import PlanError
from twicetold.evidence.contacts import KnownContacts
from twicetold.graph import ContactGraph, contact_graph, parse_rule
from twicetold.plan import Plan

IntArray = npt.NDArray[np.int32]
FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Group:
    """Motifs searched in the same traditions; the other traditions have left the graph.

    Parameters
    ----------
    traditions : (N,) int32
        Catalogue indices of the surveyed traditions; position in it is the local index.
    graph : ContactGraph
        Over the local indices.
    family_codes, level_codes : (N,) int32
        Family, and the level within which ancestry draws (family or branch).
    motifs : tuple of int
        Catalogue indices of the motifs.
    holders : tuple of (n,) int32
        Local indices of each motif's holders, sorted.
    """

    traditions: IntArray
    graph: ContactGraph
    family_codes: IntArray
    level_codes: IntArray
    motifs: tuple[int, ...]
    holders: tuple[IntArray, ...]

    @property
    def n(self) -> int:
        """Number of surveyed traditions."""
        return len(self.traditions)

    def counts(self) -> IntArray:
        """Give the distinct numbers of holders that any world can say something of."""
        sizes = {len(h) for h in self.holders}
        return np.array(sorted(k for k in sizes if 1 <= k <= self.n), dtype=np.int32)


@dataclass(frozen=True)
class Study:
    """A catalogue made ready under a resolved plan.

    Parameters
    ----------
    catalogue : Catalogue
    plan : Plan
        Resolved, see :func:`resolve`.
    graph : ContactGraph
        Over all located traditions.
    groups : tuple of Group
    families : bool
        Whether ancestry can be examined at all.
    notes : tuple of str
        What was decided for want of data, in sentences.
    """

    catalogue: Catalogue
    plan: Plan
    graph: ContactGraph
    groups: tuple[Group, ...]
    families: bool
    notes: tuple[str, ...]


def resolve(catalogue: Catalogue, plan: Plan) -> tuple[Plan, tuple[str, ...]]:
    """Write out what the plan leaves to the catalogue, and say so in sentences.

    Raises
    ------
    PlanError
        When the plan asks for something the catalogue does not have.
    GraphError
        When a rule of a contact graph cannot be used.
    """
    parse_rule(plan.graph.rule)
    for rule in plan.sensitivity.graphs:
        parse_rule(rule, key="sensitivity.graphs")
    notes = []
    changes: dict[str, object] = {}
    if plan.emergence.propensity == "effort" and catalogue.effort is None:
        changes["emergence__propensity"] = "recorded"
        notes.append(
            "The catalogue has no effort column, so propensity was taken from what is recorded "
            "of each tradition (its row total without the tested motif) instead of effort."
        )
    if plan.emergence.propensity == "covariates":
        missing = [c for c in plan.emergence.covariates if c not in catalogue.covariates]
        if missing:
            known = ", ".join(catalogue.covariates) or "none"
            raise PlanError(
                f"`emergence.covariates` must name numeric columns of the traditions table, got "
                f"{', '.join(missing)}. It has: {known}."
            )
    if plan.ancestry.level == "branch" and not catalogue.has_branches:
        raise PlanError(
            "`ancestry.level` is branch, but no two traditions share a branch. Fill the branch "
            'column, or use level = "family".'
        )
    if plan.ancestry.level == "family" and not catalogue.has_families:
        changes["ancestry__level"] = "none"
        notes.append(
            "No two traditions share a family, so shared ancestry could not be examined: "
            "wherever a cluster is found, contact and ancestry are both open."
        )
    if plan.spread.recording == "fit" and catalogue.effort is None:
        changes["spread__recording"] = "complete"
        notes.append(
            "Without an effort column every true holder is taken as recorded; the spread chain "
            "then explains gaps in the record as losses."
        )
    if plan.graph.rule == "given" and catalogue.contacts is None:
        raise PlanError(
            "`graph.rule` is given, but the catalogue has no contacts table. Add one "
            "(tradition_id, neighbour_id) or use another rule, for instance nearest:6."
        )
    return (plan.replace(**changes) if changes else plan), tuple(notes)


def prepare(
    catalogue: Catalogue,
    plan: Plan,
    *,
    motifs: Sequence[int] | None = None,
    contacts: KnownContacts | None = None,
) -> Study:
    """Build the graph and one group for each surveyed set.

    Parameters
    ----------
    catalogue : Catalogue
    plan : Plan
    motifs : sequence of int, optional
        Only these motifs; all by default.
    contacts : KnownContacts, optional
        Contact graphs known already; built from the coordinates by default.

    Raises
    ------
    PlanError, GraphError
        When the plan does not fit the catalogue.
    """
    plan, notes = resolve(catalogue, plan)
    if contacts is not None:
        graph = contacts.whole
    else:
        graph = contact_graph(catalogue, plan.graph.rule, bridges=plan.graph.bridges)
    wanted = range(catalogue.n_motifs) if motifs is None else motifs
    members: dict[int, list[int]] = {}
    for motif in wanted:
        members.setdefault(int(catalogue.surveyed_of[motif]), []).append(int(motif))
    groups = tuple(
        _group(
            catalogue,
            plan,
            _graph_of(catalogue, plan, graph, catalogue.surveyed_sets[s], contacts),
            catalogue.surveyed_sets[s],
            members[s],
        )
        for s in sorted(members)
    )
    return Study(
        catalogue=catalogue,
        plan=plan,
        graph=graph,
        groups=groups,
        families=plan.ancestry.level != "none",
        notes=notes,
    )


def _graph_of(
    catalogue: Catalogue,
    plan: Plan,
    graph: ContactGraph,
    mask: npt.NDArray[np.bool_],
    contacts: KnownContacts | None,
) -> ContactGraph:
    """Contact graph among the traditions of a surveyed set."""
    if contacts is not None:
        return contacts.among(mask)
    if mask.all():
        return graph
    return graph.restricted_to(
        mask, catalogue.latitude, catalogue.longitude, bridges=plan.graph.bridges
    )


def _group(
    catalogue: Catalogue,
    plan: Plan,
    own: ContactGraph,
    mask: npt.NDArray[np.bool_],
    motifs: list[int],
) -> Group:
    traditions = np.flatnonzero(mask).astype(np.int32)
    local = np.full(catalogue.n_traditions, -1, dtype=np.int32)
    local[traditions] = np.arange(len(traditions), dtype=np.int32)
    if plan.ancestry.level == "none":
        families = np.arange(len(traditions), dtype=np.int32)
    else:
        families = catalogue.family_codes[traditions]
    levels = catalogue.branch_codes[traditions] if plan.ancestry.level == "branch" else families
    return Group(
        traditions=traditions,
        graph=own,
        family_codes=_dense(families),
        level_codes=_dense(levels),
        motifs=tuple(motifs),
        holders=tuple(local[catalogue.holders(m)] for m in motifs),
    )


def _dense(codes: IntArray) -> IntArray:
    """Number codes from 0 without gaps, in order of first code."""
    return np.unique(codes, return_inverse=True)[1].astype(np.int32)
