"""Probabilistic and deflated Sharpe ratios, record length, expected maxima, and squared Sharpe ratios."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate, stats

from soffit.errors import EstimationError, InputError
from soffit.estimate.regression import factor_moments
from soffit.estimate.squared_sharpe import squared_sharpe, unbiased_squared_sharpe
from soffit.estimate.statistic import NotApplicable
from soffit.estimate.track_record import (
    ExpectedMaximum,
    deflated_benchmark,
    deflated_sharpe,
    expected_maximum,
    minimum_track_record,
    probabilistic_sharpe,
)


def test_record_of_the_minimum_length_reaches_the_confidence() -> None:
    moments = {"skewness": -0.7, "kurtosis": 5.8, "benchmark": 0.1}
    length = float(minimum_track_record(0.3, confidence=0.95, **moments))
    np.testing.assert_allclose(probabilistic_sharpe(0.3, length, **moments), 0.95, rtol=1e-12)
    assert np.isinf(minimum_track_record(0.1, benchmark=0.1))
    assert np.isinf(minimum_track_record(-0.1))


def test_deflation_is_the_probability_of_beating_the_best_of_luck() -> None:
    hurdle = deflated_benchmark(50, 0.01)
    np.testing.assert_allclose(
        deflated_sharpe(0.4, 120, trials=50, ratio_variance=0.01),
        probabilistic_sharpe(0.4, 120, benchmark=hurdle),
    )
    assert deflated_benchmark(1, 0.01) == 0.0
    assert deflated_benchmark(50, 0.0) == 0.0


@pytest.mark.parametrize("n", [2, 7, 500, 100_000, 10_000_000])
def test_expected_maximum_by_another_integral(n: int) -> None:
    # E max = ∫₀^∞ (1 − Φⁿ) dx − ∫_{−∞}^0 Φⁿ dx.
    upper = integrate.quad(
        lambda x: -np.expm1(n * stats.norm.logcdf(x)), 0, 40, limit=400, points=[2, 4, 6, 8]
    )[0]
    lower = integrate.quad(lambda x: stats.norm.cdf(x) ** n, -12, 0, limit=200)[0]
    np.testing.assert_allclose(expected_maximum(n), upper - lower, rtol=1e-9)


def test_expected_maximum_of_one_draw_and_many_at_once() -> None:
    found = expected_maximum([1, 2, 3])
    # Known in closed form: 0, 1/√π, 3/(2√π).
    np.testing.assert_allclose(found, [0.0, 1 / np.sqrt(np.pi), 1.5 / np.sqrt(np.pi)], atol=1e-12)
    near = expected_maximum([10, 100], ExpectedMaximum.APPROXIMATE) / expected_maximum([10, 100])
    assert 1.022 < near[0] < 1.024
    assert 1.008 < near[1] < 1.010
    assert expected_maximum(1, ExpectedMaximum.APPROXIMATE) == 0.0


def test_bad_arguments_are_refused() -> None:
    with pytest.raises(InputError, match="fewer than two periods"):
        probabilistic_sharpe(0.1, 1)
    with pytest.raises(InputError, match="no positive variance"):
        probabilistic_sharpe(1.0, 60, skewness=2.0, kurtosis=0.5)  # excess kurtosis in place of Pearson's
    with pytest.raises(InputError, match="confidence"):
        minimum_track_record(0.1, confidence=0.4)
    with pytest.raises(InputError, match="draws"):
        expected_maximum(0)
    with pytest.raises(InputError, match="variance"):
        deflated_benchmark(10, -1.0)


def test_squared_sharpe_interval_meets_hotelling() -> None:
    found = squared_sharpe(0.05, 3, 240, 0.9)
    statistic = 0.05 * 237 / 3
    np.testing.assert_allclose(stats.ncf.sf(statistic, 3, 237, 240 * found.interval.low), 0.05, rtol=1e-8)
    np.testing.assert_allclose(stats.ncf.cdf(statistic, 3, 237, 240 * found.interval.high), 0.05, rtol=1e-8)
    np.testing.assert_allclose(found.ratio_interval.high, np.sqrt(found.interval.high))
    assert found.ratio == pytest.approx(np.sqrt(0.05))


def test_one_factor_is_hotelling_with_one_series() -> None:
    # With K = 1 the statistic is the squared t ratio of the mean.
    rng = np.random.default_rng(0)
    f = rng.normal(0.01, 0.05, (60, 1))
    theta2 = factor_moments(f).theta2
    np.testing.assert_allclose(theta2 * 59, stats.ttest_1samp(f[:, 0], 0).statistic ** 2, rtol=1e-10)


def test_too_few_periods_and_no_factors() -> None:
    none = squared_sharpe(0.0, 0, 60)
    assert none.plug_in == none.unbiased == none.interval.high == 0.0
    short = squared_sharpe(1.0, 5, 6)
    assert isinstance(short.unbiased, NotApplicable)
    assert not isinstance(short.interval, NotApplicable)
    shorter = squared_sharpe(1.0, 5, 5)
    assert isinstance(shorter.interval, NotApplicable)
    assert isinstance(shorter.ratio_interval, NotApplicable)
    with pytest.raises(EstimationError, match="more than 7 periods"):
        unbiased_squared_sharpe(0.1, 5, 7)


@pytest.mark.simulation
def test_jobson_korkie_is_unbiased_and_the_exact_interval_covers() -> None:
    rng = np.random.default_rng(6)
    draws, T, K = 4000, 40, 3
    mean = np.array([0.15, 0.1, 0.0])
    truth = float(mean @ mean)
    estimates, plug_in, covered = np.empty(draws), np.empty(draws), 0
    for draw in range(draws):
        f = mean + rng.standard_normal((T, K))
        theta2 = factor_moments(f).theta2
        plug_in[draw] = theta2
        estimates[draw] = unbiased_squared_sharpe(theta2, K, T)
        if draw < 500:
            interval = squared_sharpe(theta2, K, T, 0.9).interval
            covered += interval.low <= truth <= interval.high
    error = estimates.std() / np.sqrt(draws)
    assert abs(estimates.mean() - truth) < 3.3 * error
    assert plug_in.mean() > truth + 10 * error  # the plug-in is far too high here
    assert abs(covered / 500 - 0.9) < 3.3 * np.sqrt(0.09 / 500)
