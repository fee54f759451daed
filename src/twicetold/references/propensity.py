"""Propensities from what the records show: row totals, and covariates of the traditions.

Either way the result is the rate of a tradition's own clock, up to a common factor.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from twicetold.errors import TwicetoldError

if TYPE_CHECKING:
    import pandas as pd

FloatArray = npt.NDArray[np.float64]

#: Added to every row total, so that a tradition with nothing else on record keeps a small chance.
HALF_COUNT = 0.5


class PropensityError(TwicetoldError):
    """The covariates cannot carry a fit of propensities."""


def recorded_propensity(attested: sp.csr_array, motif: int | None = None) -> FloatArray:
    r"""Propensities from the catalogue's own row totals, without the tested motif.

    .. math:: \lambda_i \propto \tfrac12 + \sum_{k \ne m} x_{ik}

    For motifs held by few, the number of motifs recorded in a tradition is proportional to its
    clock's rate times the time the motifs were abroad. The motif is left out because it would
    otherwise explain itself; the half count (as in Anscombe 1948, Biometrika 35, added to every
    total alike) keeps a tradition with nothing else on record possible, and can be told apart
    from none. Motifs must have been searched for in the same traditions.

    Parameters
    ----------
    attested : (M, N) scipy.sparse.csr_array of bool
    motif : int or None
        Row left out; None leaves none out.

    Returns
    -------
    (N,) float64, >= 0.5
    """
    totals = np.asarray(attested.sum(axis=0, dtype=np.int64), dtype=np.float64).ravel()
    if motif is not None:
        totals[attested.indices[attested.indptr[motif] : attested.indptr[motif + 1]]] -= 1.0
    return np.asarray(totals + HALF_COUNT, dtype=np.float64)


@dataclass(frozen=True)
class CovariateFit:
    """A binomial GLM with complementary log-log link over traditions.

    Parameters
    ----------
    propensity : (N,) float64
        Fitted clock rates, exp(linear predictor), effort included.
    names : tuple of str
        ``(intercept)``, or one constant for each class of motifs, and the covariates.
    coefficients, se : (P,) float64
        In the covariates' own units; standard errors as if the counts were binomial.
    deviance : float
    dispersion : float
        Pearson's X2 over its degrees of freedom; far above 1, traditions differ by more than the
        covariates say, and standard errors are too small by its square root.
    residual_df : int
    log_likelihood : float
    offset : str
        What entered with coefficient 1.
    """

    propensity: FloatArray
    names: tuple[str, ...]
    coefficients: FloatArray
    se: FloatArray
    deviance: float
    dispersion: float
    residual_df: int
    log_likelihood: float
    offset: str

    def to_frame(self) -> pd.DataFrame:
        """One row per coefficient: ``term, estimate, se, se_dispersed, z, rate_ratio``."""
        import pandas as pd

        dispersed = self.se * np.sqrt(max(self.dispersion, 1.0))
        return pd.DataFrame(
            {
                "term": list(self.names),
                "estimate": self.coefficients,
                "se": self.se,
                "se_dispersed": dispersed,
                "z": self.coefficients / dispersed,
                "rate_ratio": np.exp(self.coefficients),
            }
        )

    def summary(self) -> dict[str, object]:
        """Plain numbers for the run record."""
        return {
            "deviance": self.deviance,
            "dispersion": self.dispersion,
            "residual_df": self.residual_df,
            "log_likelihood": self.log_likelihood,
            "offset": self.offset,
            "coefficients": dict(zip(self.names, self.coefficients.tolist(), strict=True)),
        }


def covariate_propensity(
    attested: npt.ArrayLike,
    covariates: pd.DataFrame,
    effort: npt.ArrayLike | None,
    surveyed: npt.ArrayLike,
) -> CovariateFit:
    r"""Fit propensities to covariates of the traditions.

    Of the :math:`s_i` motifs searched for in tradition i, :math:`k_i` are held. A clock of rate
    :math:`\lambda_i` has rung by the time looked at with chance :math:`1 - e^{-\lambda_i}`, so

    .. math:: k_i \sim \mathrm{Bin}(s_i, 1 - e^{-\lambda_i}), \qquad
              \log \lambda_i = \log \mathrm{effort}_i + \beta_0 + x_i^\top \beta

    is a GLM with complementary log-log link (McCullagh & Nelder 1989, Generalized Linear Models,
    section 4.3), fitted by statsmodels. Motifs of several classes (about equally common ones) each
    have a constant of their own: the time they were looked at.

    Parameters
    ----------
    attested : (N,) or (C, N) int
        Motifs held, of each class.
    covariates : pandas.DataFrame of N rows
        One numeric column per covariate.
    effort : (N,) float or None
        Relative effort, > 0; None leaves the offset out.
    surveyed : (N,) or (C, N) int
        Motifs searched for; traditions with 0 do not enter the fit but get a propensity.

    Raises
    ------
    PropensityError
        When a covariate is missing somewhere, constant, a combination of others, or separates
        traditions that hold nothing (or everything) from the rest; or counts cannot be used.
    """
    held = np.atleast_2d(np.asarray(attested, dtype=np.int64))
    trials = np.atleast_2d(np.asarray(surveyed, dtype=np.int64))
    _check_counts(held, trials)
    names = tuple(str(c) for c in covariates.columns)
    columns = _checked_columns(covariates, names)
    offset = np.zeros(len(columns)) if effort is None else _log_effort(effort)
    if not held.shape[1] == len(columns) == len(offset):
        raise PropensityError(
            f"Counts, covariates and effort must have one entry per tradition, got "
            f"{held.shape[1]}, {len(columns)} and {len(offset)}."
        )
    centre, spread = columns.mean(axis=0), columns.std(axis=0)
    standard = (columns - centre) / spread
    searched = trials.sum(axis=0) > 0
    _check_design(np.column_stack([np.ones(searched.sum()), standard[searched]]), names)
    which, where = np.nonzero(trials)  # one row of the fit for each class and tradition
    constants = np.eye(len(held))[which]
    design = np.column_stack([constants, standard[where]])
    counts = (held[which, where], trials[which, where])
    _check_separation(design, *counts, names)
    fit = _fit(*counts, design, offset[where], len(held))
    # Back from standard units: beta = turn @ gamma.
    classes, gamma = len(held), np.asarray(fit.params)
    turn = np.diag(np.concatenate([np.ones(classes), 1.0 / spread]))
    turn[:classes, classes:] = -centre / spread
    covariance = turn @ np.asarray(fit.cov_params()) @ turn.T
    constant = float(np.average(gamma[:classes], weights=trials.sum(axis=1)))
    rates = np.exp(constant + standard @ gamma[classes:] + offset)
    rates.flags.writeable = False
    own = ("(intercept)",) if classes == 1 else tuple(f"(class {k + 1})" for k in range(classes))
    return CovariateFit(
        propensity=rates,
        names=(*own, *names),
        coefficients=turn @ gamma,
        se=np.sqrt(np.diag(covariance)),
        deviance=float(fit.deviance),
        dispersion=float(fit.pearson_chi2 / fit.df_resid),
        residual_df=int(fit.df_resid),
        log_likelihood=float(fit.llf),
        offset="log(effort)" if effort is not None else "none",
    )


def _check_counts(held: npt.NDArray[np.int64], trials: npt.NDArray[np.int64]) -> None:
    if held.shape != trials.shape or held.ndim != 2:
        raise PropensityError(
            f"`attested` and `surveyed` must have one entry per tradition, got {held.shape} and "
            f"{trials.shape}."
        )
    if np.any(held < 0) or np.any(held > trials):
        raise PropensityError(
            "A tradition cannot hold fewer than 0 motifs or more than were searched for there; "
            f"{int(((held < 0) | (held > trials)).sum())} do. Mend the surveyed table."
        )
    if held.sum() == 0 or held.sum() == trials.sum():
        raise PropensityError(
            "A fit needs some cells with and some without a record, got only "
            f"{'absences' if held.sum() == 0 else 'records'}. Use another propensity."
        )


def _log_effort(effort: npt.ArrayLike) -> FloatArray:
    given = np.asarray(effort, dtype=np.float64)
    if not np.all(np.isfinite(given) & (given > 0)):
        raise PropensityError("Effort must be a finite number above 0 in every tradition.")
    return np.asarray(np.log(given), dtype=np.float64)


def _checked_columns(covariates: pd.DataFrame, names: tuple[str, ...]) -> FloatArray:
    if not names:
        raise PropensityError(
            "At least one covariate must be named, got none. Use propensity effort or recorded."
        )
    for name in names:
        values = np.asarray(covariates[name], dtype=np.float64)
        missing = int((~np.isfinite(values)).sum())
        if missing:
            raise PropensityError(
                f"Covariate {name!r} must be known in every tradition, but is missing in "
                f"{missing} of {len(values)}. Fill it in, leave those traditions out, or drop it."
            )
        if np.ptp(values) <= 1e-12 * np.abs(values).max():
            raise PropensityError(
                f"Covariate {name!r} must vary, but is {values[0]:g} in every tradition. Drop it."
            )
    return np.asarray(covariates[list(names)], dtype=np.float64)


def _check_design(design: FloatArray, names: tuple[str, ...]) -> None:
    """Refuse columns that the columns before them (and a constant) already give."""
    n, p = design.shape
    if n <= p:
        raise PropensityError(
            f"A fit of {p - 1} covariates needs more than {p} traditions searched, got {n}. Name "
            "fewer covariates."
        )
    for j in range(1, p):
        column = design[:, j]
        before = design[:, :j]
        rest = column - before @ np.linalg.lstsq(before, column, rcond=None)[0]
        if np.linalg.norm(rest) <= 1e-7 * np.linalg.norm(column):
            what = ", ".join(repr(x) for x in names[: j - 1]) or "a constant"
            raise PropensityError(
                f"Covariate {names[j - 1]!r} must not follow from the others, but is a "
                f"combination of {what} where traditions were searched. Drop one of them."
            )


def _check_separation(
    design: FloatArray,
    held: npt.NDArray[np.int64],
    trials: npt.NDArray[np.int64],
    names: tuple[str, ...],
) -> None:
    """Look for a direction along which the likelihood climbs for ever, by linear programming.

    It exists if and only if some combination of the columns is zero in every tradition that
    holds some but not all, at most zero where nothing is held and at least zero where everything
    is, without being zero throughout (Albert & Anderson 1984, Biometrika 71; Konis 2007, thesis).
    """
    from scipy.optimize import linprog

    none, every = held == 0, held == trials
    sign = np.where(none, -1.0, 1.0)
    ends = none | every
    if not ends.any():
        return
    tilt = sign[ends, None] * design[ends]
    mixed = design[~ends]
    found = linprog(
        -tilt.sum(axis=0),
        A_ub=-tilt,
        b_ub=np.zeros(len(tilt)),
        A_eq=mixed if len(mixed) else None,
        b_eq=np.zeros(len(mixed)) if len(mixed) else None,
        bounds=(-1.0, 1.0),
        method="highs",
    )
    if found.status == 0 and -found.fun > 1e-6:
        guilty = [
            n for n, b in zip(names, found.x[-len(names) :], strict=True) if abs(b) > 1e-6
        ] or list(names)
        raise PropensityError(
            "Covariates must not part the traditions that hold nothing (or everything) from the "
            f"rest, but {', '.join(repr(g) for g in guilty)} does: its coefficient would be "
            "infinite. Drop it, or merge its values into coarser ones."
        )


def _fit(
    held: npt.NDArray[np.int64],
    trials: npt.NDArray[np.int64],
    design: FloatArray,
    offset: FloatArray,
    classes: int,
) -> Any:
    """Fit by iteratively reweighted least squares; anything but convergence is refused."""
    import statsmodels.api as sm

    model = sm.GLM(
        np.column_stack([held, trials - held]),
        design,
        family=sm.families.Binomial(link=sm.families.links.CLogLog()),
        offset=offset,
    )
    start = np.zeros(design.shape[1])
    # From the pooled rate: IRLS from statsmodels' own start can step out of bounds here.
    for k in range(classes):
        mine = design[:, k] == 1.0
        share = np.clip(held[mine].sum() / trials[mine].sum(), 1e-9, 1 - 1e-9)
        start[k] = np.log(-np.log1p(-share)) - np.average(offset[mine], weights=trials[mine])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        # The deviance grows with the catalogue: what counts as settled must grow with it.
        fit = model.fit(start_params=start, maxiter=200, tol=1e-10, rtol=1e-12)
    if not fit.converged or not np.all(np.isfinite(fit.params)):
        raise PropensityError(
            "The fit of propensities to covariates did not settle. Drop covariates, or take logs "
            "of those that span several orders of magnitude."
        )
    return fit
