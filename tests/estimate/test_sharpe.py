"""Sharpe ratios: literal loops, exact intervals and their coverage, gaps and degenerate series."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.sandwich_covariance import S_hac_simple

from soffit.errors import EstimationError, InputError
from soffit.estimate.sharpe import (
    SharpeErrors,
    aggregation_factor,
    annual_ratio,
    autocorrelations,
    iid_error,
    mertens_error,
    return_moments,
    sharpe_influence,
    sharpe_ratios,
)
from soffit.settings import LagRule


def _returns(T: int = 120, N: int = 3, seed: int = 11) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return 0.005 + 0.04 * rng.standard_t(6, (T, N))


def test_moments_against_a_literal_loop() -> None:
    x = _returns()
    found = return_moments(x)
    for n in range(x.shape[1]):
        column = x[:, n]
        np.testing.assert_allclose(found.mean[n], sum(column) / len(column), rtol=1e-12)
        np.testing.assert_allclose(found.deviation[n], np.std(column, ddof=1), rtol=1e-12)
        np.testing.assert_allclose(found.skewness[n], stats.skew(column), rtol=1e-10)
        np.testing.assert_allclose(found.kurtosis[n], stats.kurtosis(column, fisher=False), rtol=1e-10)
    assert (found.periods == 120).all()


@pytest.mark.parametrize("lags", [0, 1, 5])
def test_hac_error_is_the_delta_method_on_the_first_two_moments(lags: int) -> None:
    # Lo (2002), GMM: moments E r and E r², gradient of m/√(m2 − m²), Bartlett weights from statsmodels.
    x = _returns()
    found = sharpe_ratios(x, ddof=0, lag_rule=LagRule.FIXED, lags=lags)
    for n in range(x.shape[1]):
        r = x[:, n]
        mean, second = r.mean(), (r * r).mean()
        v = second - mean**2
        gradient = np.array([second / v**1.5, -0.5 * mean / v**1.5])
        moments = np.column_stack([r - mean, r * r - second])
        long_run = S_hac_simple(moments, nlags=lags) / len(r)
        np.testing.assert_allclose(
            found.hac_error[n], np.sqrt(gradient @ long_run @ gradient / len(r)), rtol=1e-10
        )
    assert (found.lags == lags).all()


def test_hac_error_without_lags_is_mertens() -> None:
    x = _returns()
    found = sharpe_ratios(x, ddof=0, lag_rule=LagRule.FIXED, lags=0)
    np.testing.assert_allclose(found.hac_error, found.error(SharpeErrors.IID), rtol=1e-12)


def test_divisor_changes_ratio_and_hac_error_alike() -> None:
    x = _returns(T=30)
    trade, joint = sharpe_ratios(x), sharpe_ratios(x, ddof=0)
    np.testing.assert_allclose(trade.ratio / joint.ratio, np.sqrt(29 / 30), rtol=1e-12)
    np.testing.assert_allclose(trade.hac_error / joint.hac_error, np.sqrt(29 / 30), rtol=1e-12)
    np.testing.assert_allclose(trade.t, joint.t, rtol=1e-12)
    np.testing.assert_allclose(trade.t, stats.ttest_1samp(x, 0.0).statistic, rtol=1e-10)


def test_errors_of_normal_moments_are_lo() -> None:
    np.testing.assert_allclose(mertens_error(0.3, 0.0, 3.0, 60), np.sqrt((1 + 0.3**2 / 2) / 60), rtol=1e-14)
    np.testing.assert_allclose(iid_error([0.1, 0.2], 60), mertens_error([0.1, 0.2], 0, 3, 60))


def test_influence_is_the_derivative_of_the_ratio() -> None:
    x = _returns(T=40, N=1)[:, 0]
    influence = sharpe_influence(x)[:, 0]
    for row in (0, 7, 39):
        weights = np.full(40, 1 / 40)
        step = 1e-6
        weights = (1 - step) * weights
        weights[row] += step
        mean = weights @ x
        moved = mean / np.sqrt(weights @ (x - mean) ** 2)
        np.testing.assert_allclose((moved - x.mean() / x.std()) / step, influence[row], rtol=1e-4, atol=1e-5)


@given(scale=st.floats(1e-6, 1e6), seed=st.integers(0, 50))
def test_a_ratio_does_not_depend_on_leverage(scale: float, seed: int) -> None:
    x = _returns(T=60, N=2, seed=seed)
    plain, levered = sharpe_ratios(x), sharpe_ratios(scale * x)
    np.testing.assert_allclose(levered.ratio, plain.ratio, rtol=1e-9)
    np.testing.assert_allclose(levered.hac_error, plain.hac_error, rtol=1e-9)
    mirrored = sharpe_ratios(-x)
    np.testing.assert_allclose(mirrored.ratio, -plain.ratio, rtol=1e-12)
    np.testing.assert_allclose(
        mirrored.exact_interval(0.9)[0], -plain.exact_interval(0.9)[1], rtol=1e-9, atol=1e-12
    )


def test_own_histories_equal_each_series_alone() -> None:
    x = _returns(T=90, N=3)
    holed = x.copy()
    holed[:20, 0] = np.nan
    holed[80:, 1] = np.nan
    found = sharpe_ratios(holed, own_history=True, lag_rule=LagRule.AUTOMATIC)
    for n, rows in enumerate((slice(20, 90), slice(0, 80), slice(0, 90))):
        alone = sharpe_ratios(x[rows, n], lag_rule=LagRule.AUTOMATIC)
        np.testing.assert_allclose(found.ratio[n], alone.ratio[0], rtol=1e-12)
        np.testing.assert_allclose(found.hac_error[n], alone.hac_error[0], rtol=1e-12)
        assert found.lags[n] == alone.lags[0]
        np.testing.assert_allclose(
            found.exact_interval(0.95)[0][n], alone.exact_interval(0.95)[0][0], rtol=1e-9
        )
    with pytest.raises(InputError, match="Series 1 has 20 missing returns"):
        sharpe_ratios(holed)


def test_a_gap_counts_as_a_zero_moment() -> None:
    x = _returns(T=50, N=1)
    x[25, 0] = np.nan
    found = sharpe_ratios(x, ddof=0, own_history=True, lag_rule=LagRule.FIXED, lags=1)
    there = x[np.isfinite(x[:, 0]), 0]
    influence = np.insert(sharpe_influence(there)[:, 0], 25, 0.0)
    total = sum(v * v for v in influence) + 2 * 0.5 * sum(influence[1:] * influence[:-1])
    np.testing.assert_allclose(found.hac_error[0], np.sqrt(total) / 49, rtol=1e-12)


def test_constant_short_and_broken_series() -> None:
    x = np.column_stack([np.full(24, 0.003), np.zeros(24), _returns(T=24, N=1)[:, 0]])
    found = sharpe_ratios(x)
    assert np.isnan(found.ratio[:2]).all()
    assert np.isnan(found.hac_error[:2]).all()
    assert np.isnan(found.exact_interval(0.95)[0][:2]).all()
    assert np.isfinite(found.exact_interval(0.95)).all(axis=0)[2]
    one = np.full((24, 2), np.nan)
    one[3, 0] = 0.01
    alone = sharpe_ratios(one, own_history=True)
    assert np.isnan(alone.ratio).all()
    assert list(alone.moments.periods) == [1, 0]
    with pytest.raises(InputError, match="infinite"):
        sharpe_ratios(np.array([0.1, np.inf, 0.2]))
    with pytest.raises(EstimationError, match="Moments were asked of 1 periods"):
        sharpe_ratios(np.array([0.1]))
    with pytest.raises(InputError, match="shape"):
        sharpe_ratios(np.zeros((2, 2, 2)))


def test_exact_interval_inverts_the_noncentral_t() -> None:
    x = _returns(T=60, N=4)
    found = sharpe_ratios(x)
    low, high = found.exact_interval(0.9)
    for n in range(4):
        np.testing.assert_allclose(stats.nct.sf(found.t[n], 59, low[n] * np.sqrt(60)), 0.05, rtol=1e-7)
        np.testing.assert_allclose(stats.nct.cdf(found.t[n], 59, high[n] * np.sqrt(60)), 0.05, rtol=1e-7)


@pytest.mark.simulation
def test_exact_interval_covers_and_the_asymptotic_one_is_close() -> None:
    rng = np.random.default_rng(2)
    truth, draws, T = 0.3, 4000, 24
    x = truth + rng.standard_normal((T, draws))
    found = sharpe_ratios(x, lag_rule=LagRule.FIXED, lags=0)
    low, high = found.exact_interval(0.9)
    # 0.9 ± 3.3 Monte Carlo errors of √(0.9·0.1/4000) = 0.0047.
    assert abs(((low <= truth) & (truth <= high)).mean() - 0.9) < 0.0157
    low, high = found.interval(0.9, SharpeErrors.IID_NORMAL)
    assert abs(((low <= truth) & (truth <= high)).mean() - 0.9) < 0.03


@pytest.mark.simulation
def test_hac_interval_holds_under_serial_dependence_where_the_iid_one_fails() -> None:
    rng = np.random.default_rng(4)
    T, draws, rho, truth = 600, 800, 0.4, 0.1
    shock = rng.standard_normal((T + 50, draws))
    x = np.zeros_like(shock)
    for t in range(1, T + 50):
        x[t] = rho * x[t - 1] + np.sqrt(1 - rho**2) * shock[t]
    found = sharpe_ratios(truth + x[50:], lag_rule=LagRule.FIXED, lags=12)
    covered = {}
    for kind in (SharpeErrors.HAC, SharpeErrors.IID_NORMAL):
        low, high = found.interval(0.9, kind)
        covered[kind] = ((low <= truth) & (truth <= high)).mean()
    assert 0.84 < covered[SharpeErrors.HAC] < 0.93  # Bartlett weights fall a little short
    assert covered[SharpeErrors.IID_NORMAL] < 0.78


def test_autocorrelations_against_a_literal_loop() -> None:
    x = _returns(T=30, N=2)
    found = autocorrelations(x, 4)
    for n in range(2):
        d = x[:, n] - x[:, n].mean()
        for lag in range(1, 5):
            expected = sum(d[t] * d[t - lag] for t in range(lag, 30)) / sum(d * d)
            np.testing.assert_allclose(found[lag - 1, n], expected, rtol=1e-11)
    assert np.isnan(autocorrelations(np.full(10, 0.01), 2)).all()
    shorter = x.copy()
    shorter[:10, 0] = np.nan
    own = autocorrelations(shorter, 4, own_history=True)
    np.testing.assert_allclose(own[:, 0], autocorrelations(x[10:, 0], 4)[:, 0], rtol=1e-11)
    np.testing.assert_allclose(own[:, 1], found[:, 1], rtol=1e-12)
    with pytest.raises(EstimationError, match="lag 30"):
        autocorrelations(x, 30)


def test_aggregation_factor_is_the_variance_of_a_sum() -> None:
    # Var of a sum of q AR(1) terms, from the q×q Toeplitz matrix.
    q, rho = 12, 0.35
    toeplitz = rho ** np.abs(np.subtract.outer(np.arange(q), np.arange(q)))
    lags = rho ** np.arange(1, q)
    np.testing.assert_allclose(aggregation_factor(q, lags), q / np.sqrt(toeplitz.sum()), rtol=1e-13)
    np.testing.assert_allclose(aggregation_factor(q, []), np.sqrt(q), rtol=1e-15)
    np.testing.assert_allclose(aggregation_factor(1, lags), 1.0)
    np.testing.assert_allclose(
        aggregation_factor(q, lags[:2]), q / np.sqrt(q + 2 * (11 * lags[0] + 10 * lags[1]))
    )
    both = aggregation_factor(q, np.column_stack([lags, 0 * lags]))
    np.testing.assert_allclose(both, [q / np.sqrt(toeplitz.sum()), np.sqrt(q)], rtol=1e-13)
    assert np.isnan(aggregation_factor(2, [-1.0]))
    with pytest.raises(InputError, match="0 periods"):
        aggregation_factor(0, lags)


def test_annual_ratio_is_explicit() -> None:
    np.testing.assert_allclose(annual_ratio([0.1, np.nan], 12), [0.1 * np.sqrt(12), np.nan])
    np.testing.assert_allclose(annual_ratio(0.4, 1), 0.4)


def test_ten_thousand_series() -> None:
    rng = np.random.default_rng(9)
    found = sharpe_ratios(rng.normal(0.01, 0.05, (60, 10_000)))
    low, high = found.exact_interval(0.95)
    assert (low < found.ratio).all()
    assert (found.ratio < high).all()
