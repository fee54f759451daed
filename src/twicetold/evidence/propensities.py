"""How readily each tradition shows a motif by itself: the plan's rule, applied to one group."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd
import scipy.sparse as sp

from twicetold.evidence.study import Group, Study
from twicetold.references.emergence import effort_propensity, equal_propensity

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class WithoutOwnRecord:
    """Propensities from row totals, for each motif without its own record.

    Parameters
    ----------
    attested : (M, N) scipy.sparse.csr_array of bool
    exposure : (N,) float64
        Motifs searched for in each tradition, relative to the most searched one: a total means
        less where more was looked for.
    """

    attested: sp.csr_array
    exposure: FloatArray

    def __call__(self, motif: int | None) -> FloatArray:
        """(N,) propensities without the motif of this catalogue index (None: from them all)."""
        from twicetold.references.propensity import recorded_propensity

        return recorded_propensity(self.attested, motif) / self.exposure


@dataclass(frozen=True)
class GroupPropensity:
    """Propensities of a group's traditions.

    Parameters
    ----------
    shared : (N,) float64
        What holds for the group as a whole (for ``recorded``: from all motifs' records).
    own : WithoutOwnRecord or None
        Gives the (N,) propensities for one motif where they depend on it; None where all motifs
        share ``shared``.
    fits, tables, notes
        What to say of how they came about.
    """

    shared: FloatArray
    own: WithoutOwnRecord | None = None
    fits: Mapping[str, object] = field(default_factory=dict)
    tables: Mapping[str, pd.DataFrame] = field(default_factory=dict)
    notes: tuple[str, ...] = ()


def group_propensity(study: Study, group: Group) -> GroupPropensity:
    """Apply the plan's propensity rule to the traditions of one group.

    Raises
    ------
    TwicetoldError
        When the catalogue's columns cannot carry the rule.
    """
    rule = study.plan.emergence.propensity
    catalogue = study.catalogue
    if rule == "effort":
        assert catalogue.effort is not None  # resolve() has seen to it
        effort = catalogue.effort[group.traditions]
        return GroupPropensity(effort_propensity(effort, study.plan.emergence.exponent))
    if rule in ("recorded", "margins"):
        return _recorded(study, group)
    if rule == "covariates":
        return _covariates(study, group)
    return GroupPropensity(equal_propensity(group.n))


def _recorded(study: Study, group: Group) -> GroupPropensity:
    """Row totals; for a motif, without its own record (or it would explain itself)."""
    surveyed = _surveyed(study, group)
    own = WithoutOwnRecord(
        study.catalogue.attested[:, group.traditions], surveyed / max(surveyed.max(initial=1), 1)
    )
    return GroupPropensity(own(None), own)


def _surveyed(study: Study, group: Group) -> npt.NDArray[np.int64]:
    """(N,) motifs searched for in each tradition of a group, at least the group's own."""
    catalogue = study.catalogue
    surveyed = np.zeros(group.n, dtype=np.int64)
    for k, mask in enumerate(catalogue.surveyed_sets):
        surveyed += mask[group.traditions] * int((catalogue.surveyed_of == k).sum())
    return surveyed


def _covariates(study: Study, group: Group) -> GroupPropensity:
    from twicetold.references.propensity import covariate_propensity

    catalogue = study.catalogue
    frame = pd.DataFrame(
        {c: catalogue.covariates[c][group.traditions] for c in study.plan.emergence.covariates}
    )
    effort = None if catalogue.effort is None else catalogue.effort[group.traditions]
    held = np.asarray(catalogue.attested[:, group.traditions].sum(axis=0)).ravel()
    fit = covariate_propensity(held, frame, effort, _surveyed(study, group))
    return GroupPropensity(
        fit.propensity,
        fits={"covariates": fit.summary()},
        tables={"propensity_fit": fit.to_frame()},
    )
