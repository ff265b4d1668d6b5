"""Wald tests of the alphas: the batched engine against linearmodels, slow loops, and their true size."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from linearmodels.asset_pricing import TradedFactorModel
from linearmodels.datasets import french

from soffit.errors import EstimationError
from soffit.estimate.hac import long_run_covariance
from soffit.estimate.regression import Regression, regress
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.judge.joint import joint_alphas
from soffit.judge.wald import (
    OverRejection,
    WaldEngine,
    alpha_influence,
    classical_wald,
    exact_size,
    linearmodels_bytes,
    linearmodels_wald,
    robust_wald,
    simulated_size,
    wald_lags,
    wald_tests,
)
from soffit.settings import LagRule


def sample(T: int = 120, N: int = 8, K: int = 3, seed: int = 2) -> tuple[Regression, np.ndarray]:
    rng = np.random.default_rng(seed)
    f = rng.normal(0.005, 0.04, (T, K))
    noise = rng.standard_t(6, (T, N)) * 0.02 * (1 + 5 * np.abs(f).mean(axis=1, keepdims=True) if K else 1)
    noise[1:] += 0.3 * noise[:-1]
    returns = 0.001 + f @ rng.normal(1, 0.3, (K, N)) + noise + rng.normal(0, 0.01, (T, 1))
    return regress(returns, f), f


@pytest.mark.parametrize("lags", [0, 1, 5])
@pytest.mark.parametrize("debiased", [False, True])
def test_batched_engine_equals_linearmodels(lags: int, debiased: bool) -> None:
    regression, f = sample()
    mine = robust_wald(regression, f, lags=lags, debiased=debiased)
    theirs = linearmodels_wald(regression, f, lags=lags, debiased=debiased)
    assert isinstance(mine, TestStatistic)
    assert isinstance(theirs, TestStatistic)
    assert mine.value == pytest.approx(theirs.value, rel=1e-8)
    assert mine.distribution == theirs.distribution


@pytest.mark.parametrize("portfolios", ["S", "industries"])
def test_batched_engine_equals_linearmodels_on_real_portfolios(portfolios: str) -> None:
    data = french.load().set_index("dates")
    chosen = (
        [f"S{i}V{j}" for i in (1, 3, 5) for j in (1, 3, 5)]
        if portfolios == "S"
        else [
            "NoDur",
            "Durbl",
            "Manuf",
            "Enrgy",
            "Chems",
            "BusEq",
            "Telcm",
            "Utils",
            "Shops",
            "Hlth",
            "Money",
        ]
    )
    y = data[chosen].sub(data["RF"], axis=0)
    x = data[["MktRF", "SMB", "HML"]]
    regression = regress(y.to_numpy(), x.to_numpy())
    white = TradedFactorModel(y, x).fit(cov_type="robust", debiased=True).j_statistic
    kernel = TradedFactorModel(y, x).fit(cov_type="kernel", debiased=True, kernel="bartlett", bandwidth=6)
    assert robust_wald(regression, x.to_numpy(), debiased=True).value == pytest.approx(white.stat, rel=1e-8)
    assert robust_wald(regression, x.to_numpy(), debiased=True).pvalue == pytest.approx(white.pval, rel=1e-6)
    hac = robust_wald(regression, x.to_numpy(), lags=6, debiased=True)
    assert hac.value == pytest.approx(kernel.j_statistic.stat, rel=1e-8)


@pytest.mark.parametrize("lags", [0, 4])
def test_batched_engine_by_the_full_sandwich(lags: int) -> None:
    # White (1980), Newey and West (1987): all N(K+1) moments, explicit inverses.
    regression, f = sample(T=80, N=3, K=2)
    x = np.column_stack([np.ones(80), f])
    moments = np.hstack([x * regression.residuals[:, [i]] for i in range(3)])
    bread = np.kron(np.eye(3), np.linalg.inv(x.T @ x / 80))
    covariance = bread @ long_run_covariance(moments, lags) @ bread / 80
    alphas = covariance[::3, ::3]
    value = regression.alpha @ np.linalg.inv(alphas) @ regression.alpha
    assert robust_wald(regression, f, lags=lags).value == pytest.approx(value, rel=1e-9)


def test_influence_gives_the_alphas() -> None:
    regression, f = sample()
    returns = regression.alpha + f @ regression.beta.T + regression.residuals
    weights = alpha_influence(f)
    np.testing.assert_allclose(weights @ returns, regression.alpha, rtol=1e-9)
    assert weights.sum() == pytest.approx(1.0, rel=1e-12)
    np.testing.assert_allclose(weights @ f, 0.0, atol=1e-15)
    np.testing.assert_allclose(alpha_influence(np.empty((4, 0))), 0.25)


def test_classical_wald_and_its_debt_to_grs() -> None:
    # W = T N/(T − N − K) GRS: Campbell, Lo and MacKinlay (1997), section 5.3.
    regression, _ = sample()
    joint = joint_alphas(regression)
    wald = classical_wald(joint)
    assert wald.value == pytest.approx(joint.grs.value * 120 * 8 / (120 - 8 - 3), rel=1e-12)


@given(seed=st.integers(0, 1000))
@settings(max_examples=15, deadline=None)
def test_recombining_the_assets_changes_nothing(seed: int) -> None:
    rng = np.random.default_rng(seed)
    f, y = rng.normal(0.01, 0.04, (60, 2)), rng.normal(0, 0.05, (60, 4))
    mix = rng.normal(size=(4, 4)) + 3 * np.eye(4)
    before, after = regress(y, f), regress(y @ mix, f)
    assert robust_wald(after, f, lags=2).value == pytest.approx(
        robust_wald(before, f, lags=2).value, rel=1e-7
    )


def test_the_engine_depends_on_the_memory_it_would_take_and_the_numbers_do_not() -> None:
    regression, f = sample()
    joint = joint_alphas(regression)
    through = wald_tests(regression, joint, f, lags=3)
    around = wald_tests(regression, joint, f, lags=3, memory=1000)
    assert (through.engine, around.engine) == (WaldEngine.LINEARMODELS, WaldEngine.BATCHED)
    assert through.robust.value == pytest.approx(around.robust.value, rel=1e-8)
    assert through.hac.value == pytest.approx(around.hac.value, rel=1e-8)
    # Measured once with N = 2,000 and K = 6: 6.5 GB.
    assert linearmodels_bytes(2000, 6) / 1e9 == pytest.approx(6.5, rel=0.05)
    refused = linearmodels_wald(regression, f, memory=1000)
    assert isinstance(refused, NotApplicable)
    assert "the batched engine gives the same number" in refused.reason


def test_a_large_cross_section_runs() -> None:
    rng = np.random.default_rng(3)
    f = rng.normal(0.005, 0.04, (900, 6))
    regression = regress(rng.normal(0, 0.02, (900, 600)) + f[:, :1], f)
    tests = wald_tests(regression, joint_alphas(regression), f, lags=5)
    assert tests.engine is WaldEngine.BATCHED
    assert tests.robust.value > 0.0
    assert tests.classical_size.actual > 0.99


def test_without_factors() -> None:
    regression, f = sample(K=0)
    tests = wald_tests(regression, joint_alphas(regression), f, lags=0)
    assert tests.engine is WaldEngine.BATCHED
    assert tests.hac is tests.robust
    assert isinstance(linearmodels_wald(regression, f), NotApplicable)


@pytest.mark.parametrize("case", ["many", "spanned", "repeated"])
def test_no_statistic_without_an_invertible_covariance(case: str) -> None:
    rng = np.random.default_rng(6)
    f = rng.normal(0.01, 0.04, (24, 2))
    y = rng.normal(0, 0.03, (24, 22 if case == "many" else 4))
    if case == "spanned":
        y[:, 1] = 0.7 * f[:, 0]
    if case == "repeated":
        y[:, 3] = 2.0 * y[:, 0]
    regression = regress(y, f)
    tests = wald_tests(regression, joint_alphas(regression), f, lags=1)
    for test in (tests.classical, tests.robust, tests.hac, robust_wald(regression, f, lags=1)):
        assert isinstance(test, NotApplicable)
        assert test.reason


def test_lags_of_the_joint_test() -> None:
    regression, f = sample()
    assert wald_lags(LagRule.FIXED, regression, f, fixed=7) == 7
    assert wald_lags(LagRule.RULE_OF_THUMB, regression, f) == 4
    # The automatic rule by its definition: standardised moment series, added up.
    moments = [f[:, k] * regression.residuals[:, i] for k in range(3) for i in range(8)]
    total = sum(m / np.sqrt(np.sum(m**2)) for m in moments)
    from soffit.estimate.hac import newey_west_lags

    assert wald_lags(LagRule.AUTOMATIC, regression, f) == newey_west_lags(
        LagRule.AUTOMATIC, 120, moments=total
    )
    scaled = regress(regression.residuals * np.array([1, 100, 1, 1, 1e-3, 1, 1, 1]), f)
    assert wald_lags(LagRule.AUTOMATIC, scaled, f) == wald_lags(LagRule.AUTOMATIC, regression, f)
    with pytest.raises(EstimationError, match="0 to 119"):
        robust_wald(regression, f, lags=120)
    beyond = wald_tests(regression, joint_alphas(regression), f, lags=120)
    assert isinstance(beyond.robust, TestStatistic)
    assert isinstance(beyond.hac, NotApplicable)
    assert "do not fit" in beyond.hac.reason


def test_exact_size() -> None:
    # With N/T not small the asymptotic test cries wolf: exact from F(25, 34), a one-factor model with T = 60.
    size = exact_size(25, 1, 60)
    assert isinstance(size, OverRejection)
    assert size.actual == pytest.approx(0.6557, abs=1e-4)
    assert exact_size(1, 1, 100_000).actual == pytest.approx(0.05, abs=1e-4)
    assert isinstance(exact_size(60, 1, 60), NotApplicable)


@pytest.mark.simulation
def test_simulated_size_agrees_with_the_exact_one_and_shows_what_hac_does() -> None:
    rng = np.random.default_rng(1)
    f = rng.normal(0.005, 0.04, (60, 1))
    # For the classical statistic the size is known: simulate it the same way, by GRS.
    rejected = 0
    critical = 37.652484  # chi-squared, 25 degrees of freedom, 5%
    for _ in range(400):
        wald = classical_wald(joint_alphas(regress(rng.normal(size=(60, 25)), f)))
        rejected += wald.value > critical
    assert abs(rejected / 400 - exact_size(25, 1, 60).actual) < 4 * np.sqrt(0.66 * 0.34 / 400)
    white = simulated_size(f, 25, draws=300)
    hac = simulated_size(f, 25, lags=3, draws=300)
    assert abs(white.actual - 0.67) < 0.12
    assert hac.actual > 0.9
    assert simulated_size(f, 2, draws=300).actual < 0.15
    assert isinstance(simulated_size(f, 60), NotApplicable)
