"""The GRS test: its identity, its invariance, and where it does not exist."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from soffit.errors import NotApplicableError
from soffit.estimate.regression import factor_moments, regress
from soffit.estimate.statistic import NotApplicable
from soffit.judge.joint import joint_alphas


def _sample(seed: int, periods: int = 72, count: int = 5, width: int = 2) -> tuple[np.ndarray, np.ndarray]:
    draw = np.random.default_rng(seed)
    factors = draw.normal(0.005, 0.04, (periods, width))
    mix = draw.normal(0, 1, (count, count)) + 2 * np.eye(count)
    noise = draw.normal(0, 0.02, (periods, count)) @ mix
    return draw.normal(0, 0.003, count) + factors @ draw.normal(1, 0.3, (width, count)) + noise, factors


def test_statistic_by_inverted_covariances() -> None:
    # Gibbons, Ross and Shanken (1989), written out with explicit inverses.
    returns, factors = _sample(1)
    periods, count, width = len(returns), returns.shape[1], factors.shape[1]
    design = np.column_stack([np.ones(periods), factors])
    coefficients = np.linalg.inv(design.T @ design) @ design.T @ returns
    residuals = returns - design @ coefficients
    sigma = residuals.T @ residuals / periods
    mean, omega = factors.mean(axis=0), np.cov(factors.T, bias=True)
    quadratic = coefficients[0] @ np.linalg.inv(sigma) @ coefficients[0]
    value = (periods - count - width) / count * quadratic / (1 + mean @ np.linalg.inv(omega) @ mean)
    found = joint_alphas(regress(returns, factors))
    assert found.grs.value == pytest.approx(value, rel=1e-10)
    assert found.grs.pvalue == pytest.approx(stats.f.sf(value, count, periods - count - width), rel=1e-10)
    assert found.grs.distribution.label == "F(5, 65)"
    assert found.grs.null == "all alphas are zero"


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 100_000), width=st.integers(0, 4), count=st.integers(1, 8))
def test_identity_of_the_squared_sharpe_ratios(seed: int, width: int, count: int) -> None:
    # α'Σ⁻¹α = θ*² − θf²: Gibbons, Ross and Shanken (1989), equation 22.
    returns, factors = _sample(seed, count=count, width=width)
    found = joint_alphas(regress(returns, factors))
    together = factor_moments(np.column_stack([factors, returns])).theta2
    np.testing.assert_allclose(found.quadratic, together - found.theta_f2, rtol=1e-8, atol=1e-12)


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 100_000))
def test_repackaging_the_assets_changes_nothing(seed: int) -> None:
    # R → RA with A invertible leaves GRS as it is.
    returns, factors = _sample(seed)
    draw = np.random.default_rng(seed + 1)
    repack = draw.normal(0, 1, (5, 5)) + 3 * np.eye(5)
    base, moved = (joint_alphas(regress(r, factors)).grs.value for r in (returns, returns @ repack))
    np.testing.assert_allclose(moved, base, rtol=1e-6)


def test_one_asset_is_the_squared_t() -> None:
    returns, factors = _sample(4, count=1)
    fit = regress(returns, factors)
    assert joint_alphas(fit).grs.value == pytest.approx(fit.fit.t[0, 0] ** 2, rel=1e-10)


def test_too_many_assets_is_a_reason_not_a_number() -> None:
    draw = np.random.default_rng(2)
    returns, factors = draw.normal(0, 0.04, (24, 22)), draw.normal(0, 0.04, (24, 2))
    found = joint_alphas(regress(returns, factors))
    assert isinstance(found.grs, NotApplicable)
    assert "N < T − K = 22" in found.grs.reason
    with pytest.raises(NotApplicableError, match="does not exist here"):
        _ = found.grs.value
    assert isinstance(found.theta_star2, NotApplicable)
    # One asset fewer, and it exists with one degree of freedom.
    assert joint_alphas(regress(returns[:, :21], factors)).df == (21, 1)


def test_dependent_and_replicated_assets_are_named() -> None:
    returns, factors = _sample(6)
    dependent = np.column_stack([returns, returns[:, 0] - returns[:, 1]])
    assert "combination of other assets" in joint_alphas(regress(dependent, factors)).grs.reason
    returns[:, 2] = factors[:, 0] + factors[:, 1]
    assert "replicate asset 3 exactly" in joint_alphas(regress(returns, factors)).grs.reason
