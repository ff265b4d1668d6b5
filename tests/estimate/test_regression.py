"""The batched engine against loops, statsmodels, linearmodels, and at its edges."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st
from linearmodels.asset_pricing import TradedFactorModel
from tests.universes import INDUSTRIES

from soffit.errors import EstimationError
from soffit.estimate.regression import ErrorChoice, factor_moments, least_squares, regress
from soffit.settings import ErrorType, LagRule, Reference

FF3 = ["MktRF", "SMB", "HML"]
HC = {ErrorType.HC0: "HC0", ErrorType.HC1: "HC1", ErrorType.HC2: "HC2", ErrorType.HC3: "HC3"}


@pytest.fixture(scope="module")
def us(french: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    return french[INDUSTRIES].sub(french["RF"], axis=0).to_numpy(), french[FF3].to_numpy()


def _sample(
    seed: int = 3, periods: int = 60, count: int = 4, width: int = 2
) -> tuple[np.ndarray, np.ndarray]:
    draw = np.random.default_rng(seed)
    factors = draw.normal(0.005, 0.04, (periods, width))
    returns = 0.002 + factors @ draw.normal(1.0, 0.3, (width, count)) + draw.normal(0, 0.02, (periods, count))
    return returns, factors


def _literal(y: np.ndarray, x: np.ndarray, choice: ErrorChoice) -> np.ndarray:
    """Standard errors by the textbook sums, one asset, no shortcuts."""
    rows = len(y)
    design = np.column_stack([np.ones(rows), x])
    width = design.shape[1]
    inverse = np.linalg.inv(design.T @ design)
    e = y - design @ (inverse @ design.T @ y)
    if choice.kind is ErrorType.CLASSICAL:
        return np.sqrt(np.diag(inverse) * (e @ e) / (rows - width))
    meat = np.zeros((width, width))
    for t in range(rows):
        leverage = design[t] @ inverse @ design[t]
        power = {ErrorType.HC2: 1, ErrorType.HC3: 2}.get(choice.kind, 0)
        meat += e[t] ** 2 / (1 - leverage) ** power * np.outer(design[t], design[t])
    if choice.kind is ErrorType.HAC:
        for lag in range(1, choice.lags + 1):
            for t in range(lag, rows):
                cross = e[t] * e[t - lag] * np.outer(design[t], design[t - lag])
                meat += (1 - lag / (choice.lags + 1)) * (cross + cross.T)
    if choice.kind in (ErrorType.HC1, ErrorType.HAC):
        meat *= rows / (rows - width)
    return np.sqrt(np.diag(inverse @ meat @ inverse))


@pytest.mark.parametrize("kind", list(ErrorType))
def test_errors_equal_the_textbook_sums(kind: ErrorType) -> None:
    # White (1980), MacKinnon and White (1985), Newey and West (1987), summed literally.
    returns, factors = _sample()
    choice = ErrorChoice(kind, LagRule.FIXED, 3)
    fit = regress(returns, factors, choice=choice).fit
    for asset in range(returns.shape[1]):
        np.testing.assert_allclose(
            fit.errors[asset], _literal(returns[:, asset], factors, choice), rtol=1e-10
        )


def test_equal_to_statsmodels_on_us_industries(us: tuple[np.ndarray, np.ndarray]) -> None:
    returns, factors = us
    classical = regress(returns, factors)
    robust = {kind: regress(returns, factors, choice=ErrorChoice(kind)).fit for kind in HC}
    hac = regress(returns, factors, choice=ErrorChoice(ErrorType.HAC, LagRule.FIXED, 6)).fit
    for asset in range(returns.shape[1]):
        other = sm.OLS(returns[:, asset], sm.add_constant(factors)).fit()
        np.testing.assert_allclose(classical.fit.coefficients[asset], other.params, rtol=1e-10)
        np.testing.assert_allclose(classical.fit.errors[asset], other.bse, rtol=1e-10)
        np.testing.assert_allclose(classical.fit.t[asset], other.tvalues, rtol=1e-10)
        np.testing.assert_allclose(classical.fit.pvalues[asset], other.pvalues, rtol=1e-8)
        np.testing.assert_allclose(classical.r2[asset], other.rsquared, rtol=1e-10)
        np.testing.assert_allclose(classical.fit.adjusted_r2[asset], other.rsquared_adj, rtol=1e-10)
        for kind, name in HC.items():
            np.testing.assert_allclose(
                robust[kind].errors[asset], other.get_robustcov_results(name).bse, rtol=1e-10
            )
        newey = other.get_robustcov_results("HAC", maxlags=6, use_correction=True)
        np.testing.assert_allclose(hac.errors[asset], newey.bse, rtol=1e-10)
        np.testing.assert_allclose(
            classical.alpha[asset] - classical.fit.half_width(0.9)[asset, 0],
            other.conf_int(0.1)[0, 0],
            rtol=1e-10,
        )


def test_equal_to_traded_factor_model(us: tuple[np.ndarray, np.ndarray]) -> None:
    returns, factors = us
    found = regress(returns, factors, choice=ErrorChoice(ErrorType.HC0))
    other = TradedFactorModel(returns, factors).fit(cov_type="robust", debiased=False)
    np.testing.assert_allclose(found.alpha, other.alphas.to_numpy(), rtol=1e-10)
    np.testing.assert_allclose(found.beta, other.betas.to_numpy(), rtol=1e-10)
    np.testing.assert_allclose(found.fit.errors, other.params.to_numpy() / other.tstats.to_numpy(), rtol=1e-8)
    kernel = TradedFactorModel(returns, factors).fit(
        cov_type="kernel", kernel="bartlett", bandwidth=6, debiased=False
    )
    hac = regress(returns, factors, choice=ErrorChoice(ErrorType.HAC, LagRule.FIXED, 6, small_sample=False))
    np.testing.assert_allclose(hac.fit.errors, kernel.params.to_numpy() / kernel.tstats.to_numpy(), rtol=1e-8)


def test_one_batch_equals_one_by_one_with_automatic_lags() -> None:
    returns, factors = _sample(periods=120, count=5)
    choice = ErrorChoice(ErrorType.HAC, LagRule.AUTOMATIC)
    together = regress(returns, factors, choice=choice).fit
    assert len(set(together.lags.tolist())) > 1  # the rule looks at each asset's residuals
    for asset in range(5):
        alone = regress(returns[:, [asset]], factors, choice=choice).fit
        assert alone.lags[0] == together.lags[asset]
        np.testing.assert_allclose(alone.errors[0], together.errors[asset], rtol=1e-12)


def test_reference_distribution_is_stated_and_used() -> None:
    returns, factors = _sample()
    student = regress(returns, factors, choice=ErrorChoice(ErrorType.HC1)).fit
    normal = regress(returns, factors, choice=ErrorChoice(ErrorType.HC1, reference=Reference.NORMAL)).fit
    assert student.uses_t
    assert not normal.uses_t
    assert (student.pvalues > normal.pvalues).all()
    assert regress(returns, factors, choice=ErrorChoice(reference=Reference.NORMAL)).fit.uses_t


def test_factor_moments_equal_the_quadratic_form() -> None:
    _, factors = _sample(width=3)
    mean, covariance = factors.mean(axis=0), np.cov(factors.T, bias=True)
    found = factor_moments(factors)
    np.testing.assert_allclose(found.theta2, mean @ np.linalg.inv(covariance) @ mean, rtol=1e-12)
    np.testing.assert_allclose(found.covariance, covariance, rtol=1e-12)
    assert factor_moments(np.empty((60, 0))).theta2 == 0.0


def test_total_volatility_makes_both_bounds_one() -> None:
    returns, factors = _sample()
    found = regress(returns, factors)
    np.testing.assert_allclose(found.total * np.sqrt(1 - found.r2), found.sigma, rtol=1e-12)
    np.testing.assert_allclose(found.appraisal * found.t_scale, found.fit.t[:, 0], rtol=1e-12)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10_000), scale=st.floats(1e-4, 1e4), shift=st.floats(-0.05, 0.05))
def test_scaling_a_factor_or_adding_a_constant(seed: int, scale: float, shift: float) -> None:
    returns, factors = _sample(seed)
    base = regress(returns, factors)
    moved = regress(returns + shift, factors * np.array([scale, 1.0]))
    np.testing.assert_allclose(moved.alpha, base.alpha + shift, atol=1e-12)
    np.testing.assert_allclose(moved.beta[:, 0] * scale, base.beta[:, 0], rtol=1e-8, atol=1e-12)
    np.testing.assert_allclose(moved.sigma, base.sigma, rtol=1e-9)
    np.testing.assert_allclose(moved.factors.theta2, base.factors.theta2, rtol=1e-8, atol=1e-14)


def test_replicated_asset_has_no_appraisal_ratio() -> None:
    returns, factors = _sample()
    returns[:, 1] = 0.5 * factors[:, 0] - 0.25 * factors[:, 1]
    found = regress(returns, factors)
    assert found.spanned.tolist() == [False, True, False, False]
    assert np.isnan(found.appraisal[1])
    assert np.isnan(found.fit.t[1]).all()


def test_constant_asset_has_no_r2() -> None:
    returns, factors = _sample()
    returns[:, 0] = 0.0
    found = regress(returns, factors)
    assert np.isnan(found.r2[0])
    assert found.sigma[0] == 0.0


def test_refusals_name_the_fault() -> None:
    returns, factors = _sample()
    doubled = np.column_stack([factors, factors[:, 0] * 2 + factors[:, 1]])
    with pytest.raises(EstimationError, match="'three' is constant or a combination"):
        regress(returns, doubled, names=["one", "two", "three"])
    with pytest.raises(EstimationError, match="'one' is constant"):
        regress(returns, np.column_stack([np.full(60, 0.01), factors]), names=["one", "two", "three"])
    with pytest.raises(EstimationError, match="3 coefficients has 3 rows"):
        regress(returns[:3], factors[:3])
    returns[4, 2] = np.nan
    with pytest.raises(EstimationError, match="missing or infinite"):
        regress(returns, factors)
    with pytest.raises(EstimationError, match="shapes"):
        least_squares(returns[:10], factors)


def test_ten_thousand_assets_at_once() -> None:
    draw = np.random.default_rng(5)
    factors = draw.normal(0.005, 0.04, (120, 4))
    returns = factors @ draw.normal(1, 0.3, (4, 10_000)) + draw.normal(0, 0.05, (120, 10_000))
    found = regress(returns, factors, choice=ErrorChoice(ErrorType.HAC, LagRule.FIXED, 3))
    one = regress(returns[:, [9_999]], factors, choice=ErrorChoice(ErrorType.HAC, LagRule.FIXED, 3))
    np.testing.assert_allclose(found.fit.errors[9_999], one.fit.errors[0], rtol=1e-10)
