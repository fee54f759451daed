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
IntArray = npt.NDArray[np.int64]

#: Motifs whose numbers of holders lie within this factor share a class of the covariate fit.
CLASS_WIDTH = 1.5


@dataclass(frozen=True)
class WithoutOwnRecord:
    """Propensities from row totals, for each motif without its own record.

    Parameters
    ----------
    attested : (M, N) scipy.sparse.csr_array of bool
    common, lowered : (N,) float64
        Propensities from all motifs, and with one record fewer: see
        :class:`twicetold.references.saturation.RecordedRates`.
    """

    attested: sp.csr_array
    common: FloatArray
    lowered: FloatArray

    def __call__(self, motif: int) -> FloatArray:
        """(N,) propensities for the motif with this catalogue index."""
        out = self.common.copy()
        held = self.attested.indices[self.attested.indptr[motif] : self.attested.indptr[motif + 1]]
        out[held] = self.lowered[held]
        return out


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
    from twicetold.references.saturation import recorded_rates

    catalogue = study.catalogue
    sets = np.array(catalogue.surveyed_sets)
    found = recorded_rates(catalogue.attested, sets, catalogue.surveyed_of)
    own = WithoutOwnRecord(
        catalogue.attested[:, group.traditions],
        found.common[group.traditions],
        found.lowered[group.traditions],
    )
    return GroupPropensity(own.common, own)


def _covariates(study: Study, group: Group) -> GroupPropensity:
    from twicetold.references.propensity import covariate_propensity

    catalogue = study.catalogue
    frame = pd.DataFrame(
        {c: catalogue.covariates[c][group.traditions] for c in study.plan.emergence.covariates}
    )
    effort = None if catalogue.effort is None else catalogue.effort[group.traditions]
    held, searched = _by_commonness(study, group)
    fit = covariate_propensity(held, frame, effort, searched)
    return GroupPropensity(
        fit.propensity,
        fits={"covariates": fit.summary()},
        tables={"propensity_fit": fit.to_frame()},
    )


def _by_commonness(study: Study, group: Group) -> tuple[IntArray, IntArray]:
    """(C, N) motifs held, and searched for, by classes of about equally common motifs.

    Common motifs saturate and rare ones do not, so each class has a time of its own in the fit.
    """
    catalogue = study.catalogue
    held = np.diff(catalogue.attested.indptr)
    sizes = np.array([mask.sum() for mask in catalogue.surveyed_sets])[catalogue.surveyed_of]
    told = (held > 0) & (held < sizes)
    # Classes by a constant factor of holders; from 1 up, so that none is empty by construction.
    code = np.floor(np.log(np.maximum(held, 1)) / np.log(CLASS_WIDTH) + 1e-9).astype(np.int64)
    classes = np.unique(code[told])
    if not len(classes):
        classes, told = np.unique(code), np.ones(len(held), dtype=bool)
    counts = np.zeros((len(classes), group.n), dtype=np.int64)
    searched = np.zeros_like(counts)
    for k, one in enumerate(classes):
        mine = told & (code == one)
        rows = catalogue.attested[np.flatnonzero(mine)][:, group.traditions]
        counts[k] = np.asarray(rows.sum(axis=0, dtype=np.int64)).ravel()
        for s, mask in enumerate(catalogue.surveyed_sets):
            searched[k] += mask[group.traditions] * int((mine & (catalogue.surveyed_of == s)).sum())
    return counts, searched
