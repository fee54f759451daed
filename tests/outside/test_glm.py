"""The covariate fit against statsmodels called directly, and against IRLS by hand.

Data: star98, Californian schools' test results (Gill 2001, Generalized Linear Models: A Unified
Approach, Sage), shipped with statsmodels in the public domain; counts of pupils above and below
the median, standing in for motifs held and not.
"""

from __future__ import annotations

import numpy as np
import pytest

from twicetold.references.propensity import covariate_propensity


@pytest.fixture(scope="module")
def star98():
    import statsmodels.api as sm

    data = sm.datasets.star98.load_pandas()
    above, below = (data.endog[c].to_numpy().astype(int) for c in ("NABOVE", "NBELOW"))
    frame = data.exog[["LOWINC", "PERASIAN", "PCTCHRT", "PCTYRRND"]]
    return above, above + below, frame


def hand_irls(held, trials, x, offset):
    """Fisher scoring for the binomial with complementary log-log link (McCullagh & Nelder 1989)."""
    beta = np.zeros(x.shape[1])
    beta[0] = np.log(-np.log1p(-held.sum() / trials.sum())) - offset.mean()
    for _ in range(100):
        eta = x @ beta + offset
        mu = -np.expm1(-np.exp(eta))
        slope = np.exp(eta - np.exp(eta))
        weight = trials * slope**2 / (mu * (1 - mu))
        work = eta - offset + (held / trials - mu) / slope
        new = np.linalg.solve(x.T @ (weight[:, None] * x), x.T @ (weight * work))
        done = np.abs(new - beta).max() < 1e-13
        beta = new
        if done:
            break
    return beta, np.sqrt(np.diag(np.linalg.inv(x.T @ (weight[:, None] * x))))


@pytest.mark.parametrize("with_effort", [False, True])
def test_star98_by_statsmodels_and_by_hand(star98, with_effort):
    import statsmodels.api as sm

    held, trials, frame = star98
    effort = np.linspace(0.5, 2.0, len(held)) if with_effort else None
    offset = np.log(effort) if with_effort else np.zeros(len(held))
    fit = covariate_propensity(held, frame, effort, trials)
    x = sm.add_constant(frame.to_numpy())
    family = sm.families.Binomial(link=sm.families.links.CLogLog())
    direct = sm.GLM(np.column_stack([held, trials - held]), x, family=family, offset=offset).fit()
    assert np.allclose(fit.coefficients, direct.params, rtol=1e-6)
    assert np.allclose(fit.se, direct.bse, rtol=1e-5)
    assert fit.deviance == pytest.approx(direct.deviance, rel=1e-9)
    assert fit.dispersion == pytest.approx(direct.pearson_chi2 / direct.df_resid, rel=1e-7)
    beta, se = hand_irls(held, trials, x, offset)
    assert np.allclose(fit.coefficients, beta, rtol=1e-8)
    assert np.allclose(fit.se, se, rtol=1e-6)
    # The fitted chance of a record is 1 - exp(-rate).
    assert np.allclose(-np.expm1(-fit.propensity), direct.fittedvalues, rtol=1e-6)
