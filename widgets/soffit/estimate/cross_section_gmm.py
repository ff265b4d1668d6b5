"""The pricing-error test that allows for heteroskedasticity and autocorrelation: GMM, through linearmodels."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy import linalg

from soffit.estimate.second_pass import covariance_root, no_inverse
from soffit.estimate.statistic import Distribution, Family, NotApplicable, TestStatistic
from soffit.settings import SecondPass

__all__ = ["gmm_pricing_test"]

Floats = npt.NDArray[np.float64]

NAME = "Pricing errors, GMM"
_MOST_MOMENTS = 2000  # the covariance of the moments is dense: 32 MB at this size


def gmm_pricing_test(
    returns: Floats,
    factors: Floats,
    *,
    second_pass: SecondPass = SecondPass.OLS,
    constant: bool = True,
    lags: int = 0,
) -> TestStatistic | NotApplicable:
    """Test that all pricing errors are zero, with full-sample betas.

    Parameters
    ----------
    returns : ndarray, shape (T, N)
        Excess returns.
    factors : ndarray, shape (T, K)
        Factors.
    second_pass : SecondPass
        Weighting of the cross-section; it is taken as known.
    constant : bool
        Whether the cross-section has a free zero-beta return.
    lags : int
        Newey-West lags; 0 for errors that allow for heteroskedasticity alone.

    Returns
    -------
    TestStatistic or NotApplicable
        ``α'V⁺α`` against χ²(N − P), with α and V from linearmodels' LinearFactorModel and V inverted in the
        space that the cross-section leaves to pricing errors. Not applicable with as many premia as assets, or
        too many assets.

    References
    ----------
    Cochrane (2005), Asset Pricing, section 12.2; Hansen (1982), Econometrica 50, 1029-1054.
    """
    from linearmodels.asset_pricing import LinearFactorModel

    (T, N), K = returns.shape, factors.shape[1]
    spare = N - K - int(constant)
    if spare <= 0:
        return NotApplicable(NAME, f"{N} assets are priced exactly by {K + int(constant)} premia")
    if spare >= T - K - 1:
        return NotApplicable(NAME, f"{N} assets are too many for {T} periods")
    if N * (K + 2) > _MOST_MOMENTS:
        return NotApplicable(NAME, f"{N} assets and {K} factors make more moments than {_MOST_MOMENTS:,}")
    centred = returns - returns.mean(axis=0)
    metric: Floats | None = None
    if second_pass is SecondPass.GLS:
        metric = centred.T @ centred / T
        if covariance_root(metric) is None:
            return NotApplicable(NAME, no_inverse(N, T))
    elif second_pass is SecondPass.WLS:
        x = np.column_stack([np.ones(T), factors])
        residuals = returns - x @ np.linalg.lstsq(x, returns, rcond=None)[0]
        metric = np.diag((residuals**2).mean(axis=0))
    model = LinearFactorModel(returns, factors, risk_free=constant, sigma=metric)
    options = (
        {"cov_type": "kernel", "kernel": "bartlett", "bandwidth": lags} if lags else {"cov_type": "robust"}
    )
    fit = model.fit(debiased=False, **options)
    design = np.column_stack([np.ones((N, int(constant))), np.asarray(fit.betas)])
    if metric is not None:
        design = np.linalg.solve(metric, design)
    across = np.linalg.qr(design / np.linalg.norm(design, axis=0), mode="complete")[0][:, design.shape[1] :]
    alphas = [str(name).startswith("alpha-") for name in fit.cov.index]
    covariance = fit.cov.to_numpy()[np.ix_(alphas, alphas)]
    root = covariance_root(across.T @ covariance @ across)
    if root is None:
        return NotApplicable(NAME, "the covariance of the pricing errors has no inverse")
    scaled = linalg.solve_triangular(root, across.T @ np.asarray(fit.alphas), lower=True)
    value, law = float(scaled @ scaled), Distribution(Family.CHI2, (float(spare),))
    return TestStatistic(NAME, value, "all pricing errors are zero", law, law.sf(value), "hansen-1982")
