"""Errors of prices of risk: influence functions by numerical derivative, sizes by simulation."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from soffit.errors import EstimationError
from soffit.estimate.cross_section import PremiumError, two_pass
from soffit.estimate.cross_section_errors import (
    fama_macbeth_covariance,
    premium_lags,
    premium_tests,
    wald_test,
)
from soffit.estimate.hac import newey_west_bandwidth
from soffit.estimate.statistic import NotApplicable
from soffit.settings import LagRule, Reference, SecondPass


def weighted_premia(
    R: np.ndarray, F: np.ndarray, p: np.ndarray, kind: SecondPass, constant: bool
) -> np.ndarray:
    """Two-pass premia as a function of the probability of each period: the functional the errors linearise."""
    mu, m = p @ R, p @ F
    r, f = R - mu, F - m
    omega, cross = (f.T * p) @ f, (r.T * p) @ f
    B = cross @ np.linalg.inv(omega)
    e = r - f @ B.T
    if kind is SecondPass.OLS:
        W = np.eye(R.shape[1])
    elif kind is SecondPass.WLS:
        W = np.diag(1.0 / (p @ e**2))
    else:
        W = np.linalg.inv((r.T * p) @ r)
    Z = np.column_stack([np.ones(len(mu)), B]) if constant else B
    return np.linalg.solve(Z.T @ W @ Z, Z.T @ W @ mu)


@pytest.mark.parametrize("constant", [True, False])
@pytest.mark.parametrize("kind", list(SecondPass))
def test_robust_errors_are_the_infinitesimal_jackknife(kind: SecondPass, constant: bool) -> None:
    """Kan, Robotti and Shanken (2013), formula from memory: held to a numerical derivative of the estimator itself.

    The model is wrong on purpose (large pricing errors), so every term of the formula counts.
    """
    draw = np.random.default_rng(1)
    T, N = 50, 6
    F = 0.3 + draw.normal(size=(T, 2))
    R = draw.normal(size=N) + F @ draw.normal(1.0, 0.6, size=(2, N)) + draw.normal(size=(T, N))
    got = two_pass(R, F, second_pass=kind, constant=constant)
    step, even = 1e-5, np.full(T, 1.0 / T)
    influence = np.empty((T, len(got.premia)))
    for t in range(T):
        push = -even.copy()
        push[t] += 1.0
        up, down = (weighted_premia(R, F, even + s * step * push, kind, constant) for s in (1, -1))
        influence[t] = (up - down) / (2 * step)
    expected = influence.T @ influence / T**2
    found = got.covariances[PremiumError.ROBUST]
    assert_allclose(found, expected, rtol=2e-6, atol=1e-9)
    gap = influence[:, int(constant) :] - (F - F.mean(axis=0))
    assert_allclose(got.gap_covariances[PremiumError.ROBUST], gap.T @ gap / T**2, rtol=2e-6, atol=1e-9)
    # The terms matter here: without them the errors would be Fama-MacBeth's, or Shanken's.
    for other in (PremiumError.FAMA_MACBETH, PremiumError.SHANKEN):
        assert np.abs(np.diag(got.covariances[other]) / np.diag(expected) - 1.0).max() > 0.05


def scatter(
    kind: SecondPass, *, alpha: np.ndarray, price: float, T: int, draws: int, seed: int
) -> tuple[np.ndarray, dict[PremiumError, np.ndarray]]:
    """Premia (draws, 2) of simulated samples with one factor, and mean variances under each kind of error."""
    draw = np.random.default_rng(seed)
    N = len(alpha)
    B = np.linspace(0.4, 1.6, N)
    mix = np.linalg.cholesky(0.7 * np.eye(N) + 0.3)
    premia = np.empty((draws, 2))
    variances = {error: np.zeros(2) for error in PremiumError}
    for i in range(draws):
        F = price + draw.normal(size=(T, 1))
        R = alpha + F @ B[None, :] + draw.normal(size=(T, N)) @ mix.T
        got = two_pass(R, F, second_pass=kind)
        premia[i] = got.premia
        for error, total in variances.items():
            total += np.diag(got.covariances[error]) / draws
    return premia, variances


@pytest.mark.simulation
@pytest.mark.parametrize("kind", [SecondPass.OLS, SecondPass.GLS])
def test_shanken_errors_match_the_scatter_of_a_right_model(kind: SecondPass) -> None:
    """Shanken (1992). A factor with a Sharpe ratio of 1.2 a period makes the correction 1 + c about 2.4."""
    draws = 600
    premia, variances = scatter(kind, alpha=np.zeros(8), price=1.2, T=200, draws=draws, seed=2)
    true = premia.var(axis=0, ddof=1)
    margin = 3.5 * np.sqrt(2.0 / draws)  # Monte Carlo error of a variance, relative
    shanken = variances[PremiumError.SHANKEN] / true
    assert np.abs(shanken - 1.0).max() < margin
    assert np.abs(variances[PremiumError.ROBUST] / true - 1.0).max() < margin + 0.05
    assert (variances[PremiumError.FAMA_MACBETH] / true).max() < 0.7  # far too small


@pytest.mark.simulation
@pytest.mark.parametrize("kind", [SecondPass.OLS, SecondPass.GLS])
def test_robust_errors_match_the_scatter_of_a_wrong_model(kind: SecondPass) -> None:
    """Kan, Robotti and Shanken (2013): large pricing errors; Shanken's errors fall far short."""
    draws = 400
    alpha = 0.8 * np.array([1.0, -1.0, 1.0, -1.0, -1.0, 1.0, -1.0, 1.0])
    premia, variances = scatter(kind, alpha=alpha, price=0.4, T=200, draws=draws, seed=3)
    true = premia.var(axis=0, ddof=1)
    margin = 3.5 * np.sqrt(2.0 / draws)
    assert np.abs(variances[PremiumError.ROBUST] / true - 1.0).max() < margin
    assert (variances[PremiumError.SHANKEN] / true).max() < 0.6


@pytest.mark.simulation
def test_t_ratios_of_the_gap_have_the_right_size() -> None:
    """Price of risk against factor mean under a right model: 5% of Shanken t ratios beyond the normal's 5% point."""
    draw = np.random.default_rng(4)
    draws, B = 600, np.linspace(0.4, 1.6, 8)[None, :]
    beyond = 0
    for _ in range(draws):
        F = 0.5 + draw.normal(size=(200, 1))
        got = two_pass(F @ B + draw.normal(size=(200, 8)), F)
        beyond += got.gap_tests(PremiumError.SHANKEN)[0].pvalue < 0.05
    assert abs(beyond / draws - 0.05) < 3.5 * np.sqrt(0.05 * 0.95 / draws)


def test_lag_rules_of_mean_slopes() -> None:
    draw = np.random.default_rng(5)
    slopes = np.zeros((300, 3))
    for t in range(1, 300):
        slopes[t] = 0.8 * slopes[t - 1] + draw.normal(size=3)
    assert premium_lags(slopes, 7, True) == 7
    assert premium_lags(slopes, LagRule.RULE_OF_THUMB, True) == 5  # floor(4 * 3^(2/9))
    automatic = premium_lags(slopes, LagRule.AUTOMATIC, True)
    centred = slopes[:, 1:] - slopes[:, 1:].mean(axis=0)
    assert automatic == np.floor(newey_west_bandwidth(centred / centred.std(axis=0))) > 5
    assert premium_lags(slopes * np.array([1.0, 1e6, 1e-6]), LagRule.AUTOMATIC, True) == automatic
    with pytest.raises(EstimationError, match="Newey-West lags"):
        premium_lags(slopes, 300, True)


def test_wald_test_against_scipy() -> None:
    covariance = np.array([[2.0, 0.5], [0.5, 1.0]])
    got = wald_test(np.array([1.0, -2.0]), covariance, "W", "zero", "")
    value = np.array([1.0, -2.0]) @ np.linalg.inv(covariance) @ np.array([1.0, -2.0])
    assert_allclose([got.value, got.pvalue], [value, stats.chi2(2).sf(value)], rtol=1e-12)


def test_what_has_no_scatter_has_no_test() -> None:
    singular = np.ones((2, 2))
    assert isinstance(wald_test(np.ones(2), singular, "W", "zero", ""), NotApplicable)
    tests = premium_tests(np.ones(2), np.diag([1.0, 0.0]), PremiumError.SHANKEN, 60, Reference.NORMAL, "zero")
    assert tests[0].value == 1.0
    assert isinstance(tests[1], NotApplicable)
    with pytest.raises(EstimationError, match="two cross-sections"):
        fama_macbeth_covariance(np.ones((1, 2)))
