"""Lag rules and the long-run covariance, by slow loops and against statsmodels."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st
from statsmodels.stats.sandwich_covariance import S_hac_simple

from soffit.errors import EstimationError
from soffit.estimate.hac import (
    Kernel,
    andrews_bandwidth,
    bartlett_weights,
    long_run_covariance,
    newey_west_bandwidth,
    newey_west_lags,
    newey_west_lags_each,
    rule_of_thumb_lags,
    stock_watson_lags,
)
from soffit.settings import LagRule


def moments(T: int = 200, q: int = 3, seed: int = 3) -> np.ndarray:
    rng = np.random.default_rng(seed)
    m = rng.normal(size=(T, q))
    for t in range(1, T):
        m[t] += 0.4 * m[t - 1]
    return m


def test_bandwidth_by_the_formula() -> None:
    # Newey and West (1994), Bartlett kernel, unit weights, no prewhitening: a literal loop.
    m = moments()
    h = [float(row.sum()) for row in m]
    T = len(h)
    pilot = int(4 * (T / 100) ** (2 / 9))
    s0 = sum(v * v for v in h) / T
    s1 = 0.0
    for j in range(1, pilot + 1):
        gamma = sum(h[t] * h[t - j] for t in range(j, T)) / T
        s0 += 2 * gamma
        s1 += 2 * j * gamma
    bandwidth = 1.1447 * ((s1 / s0) ** 2) ** (1 / 3) * T ** (1 / 3)
    assert newey_west_bandwidth(m) == pytest.approx(bandwidth, rel=1e-12)
    assert newey_west_lags(LagRule.AUTOMATIC, T, moments=m) == int(bandwidth)


def test_long_run_covariance_equals_statsmodels() -> None:
    m = moments()
    for lags in (0, 1, 7):
        np.testing.assert_allclose(
            long_run_covariance(m, lags), S_hac_simple(m, nlags=lags) / len(m), rtol=1e-11, atol=1e-13
        )


def test_sandwich_equals_statsmodels_hac() -> None:
    rng = np.random.default_rng(5)
    x = sm.add_constant(rng.normal(size=(150, 2)))
    y = x @ [0.1, 1.0, -1.0] + moments(150, 1)[:, 0]
    fit = sm.OLS(y, x).fit()
    bread = np.linalg.inv(x.T @ x / 150)
    mine = bread @ long_run_covariance(x * fit.resid[:, None], 5) @ bread / 150
    theirs = fit.get_robustcov_results("HAC", maxlags=5, use_correction=False).cov_params()
    np.testing.assert_allclose(mine, theirs, rtol=1e-10)


@given(seed=st.integers(0, 200), lags=st.integers(0, 39))
@settings(max_examples=30, deadline=None)
def test_bartlett_covariance_is_never_negative(seed: int, lags: int) -> None:
    values = np.linalg.eigvalsh(long_run_covariance(moments(40, 3, seed), lags))
    assert values.min() > -1e-12 * max(values.max(), 1.0)


@given(scale=st.floats(1e-100, 1e100))
@settings(max_examples=20, deadline=None)
def test_bandwidths_have_no_unit(scale: float) -> None:
    m = moments()
    assert newey_west_bandwidth(m * scale) == pytest.approx(newey_west_bandwidth(m), rel=1e-9)


def test_each_asset_gets_the_lag_it_would_get_alone() -> None:
    rng = np.random.default_rng(1)
    x, e = rng.normal(size=(90, 2)), moments(90, 5)
    combined = x.sum(axis=1)[:, None] * e
    each = newey_west_lags_each(LagRule.AUTOMATIC, 90, combined=combined)
    alone = [newey_west_lags(LagRule.AUTOMATIC, 90, moments=x * e[:, [i]]) for i in range(5)]
    assert each.tolist() == alone
    assert newey_west_lags_each(LagRule.FIXED, 90, fixed=7, combined=combined).tolist() == [7] * 5


def test_rules_leave_room_in_tiny_samples() -> None:
    assert [rule_of_thumb_lags(T) for T in (1, 2, 3)] == [0, 1, 1]
    assert [stock_watson_lags(T) for T in (1, 2, 64, 512)] == [0, 0, 3, 6]
    assert newey_west_lags(LagRule.AUTOMATIC, 2, moments=np.array([[1.0], [1.0]])) <= 1


def test_zero_moments_need_no_lags() -> None:
    assert newey_west_bandwidth(np.zeros((30, 2))) == 0.0
    assert andrews_bandwidth(np.zeros((30, 2))) == 0.0
    assert newey_west_lags_each(LagRule.AUTOMATIC, 30, combined=np.zeros((30, 4))).tolist() == [0] * 4


def test_moments_that_cancel_at_frequency_zero_take_the_whole_sample() -> None:
    # 1, -1 repeated: the pilot long-run variance may vanish, and the bandwidth is then without bound.
    m = np.tile([1.0, -1.0], 20)[:, None]
    assert newey_west_lags(LagRule.AUTOMATIC, 40, moments=m) <= 39


def test_andrews_bandwidth_by_ordinary_regressions() -> None:
    # Andrews (1991) equation 6.4 with AR(1) fits by a library regression.
    m = moments(q=2)
    top1 = top2 = below = 0.0
    for j in range(2):
        fit = sm.OLS(m[1:, j], sm.add_constant(m[:-1, j])).fit()
        rho, s4 = fit.params[1], (fit.ssr / fit.nobs) ** 2
        top1 += 4 * rho**2 * s4 / ((1 - rho) ** 6 * (1 + rho) ** 2)
        top2 += 4 * rho**2 * s4 / (1 - rho) ** 8
        below += s4 / (1 - rho) ** 4
    T = len(m)
    assert andrews_bandwidth(m) == pytest.approx(1.1447 * (T * top1 / below) ** (1 / 3), rel=1e-10)
    assert andrews_bandwidth(m, Kernel.PARZEN) == pytest.approx(2.6614 * (T * top2 / below) ** 0.2, rel=1e-10)
    assert andrews_bandwidth(m, Kernel.QUADRATIC_SPECTRAL) == pytest.approx(
        1.3221 * (T * top2 / below) ** 0.2, rel=1e-10
    )


def test_bartlett_weights() -> None:
    assert bartlett_weights(3).tolist() == [1.0, 0.75, 0.5, 0.25]


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: newey_west_lags(LagRule.FIXED, 10, fixed=10), "0 to 9"),
        (lambda: newey_west_lags(LagRule.FIXED, 10, fixed=-1), "-1 Newey-West lags"),
        (lambda: newey_west_lags(LagRule.AUTOMATIC, 10), "no moment series"),
        (lambda: newey_west_lags(LagRule.AUTOMATIC, 10, moments=np.ones((9, 1))), "9 rows"),
        (lambda: newey_west_bandwidth(np.ones((10, 0))), "at least one column"),
        (lambda: newey_west_bandwidth(np.array([1.0, np.nan])), "not finite"),
        (lambda: rule_of_thumb_lags(0), "0 periods"),
        (lambda: andrews_bandwidth(np.ones(3)), "four periods"),
        (lambda: andrews_bandwidth(2.0 ** np.arange(10.0)), "AR\\(1\\) coefficient"),
        (lambda: long_run_covariance(np.ones((5, 1)), 5), "0 to 4"),
    ],
)
def test_refusals(call, words: str) -> None:
    with pytest.raises(EstimationError, match=words):
        call()
