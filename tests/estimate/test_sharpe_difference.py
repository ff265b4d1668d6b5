"""Differences of Sharpe ratios: literal loops, degenerate pairs, and the size of the bootstrap test."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from soffit.errors import EstimationError, InputError
from soffit.estimate.sharpe_difference import (
    DifferenceErrors,
    bootstrap_difference,
    memmel_error,
    sharpe_difference,
)
from soffit.estimate.statistic import NotApplicable
from soffit.settings import LagRule


def _pair(T: int = 120, seed: int = 1, gap: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    common = rng.standard_normal(T)
    one = 0.1 + gap + 0.6 * common + 0.8 * rng.standard_normal(T)
    two = 0.1 + 0.6 * common + 0.8 * rng.standard_normal(T)
    return one, two


def test_delta_error_against_a_literal_loop() -> None:
    one, two = _pair()
    lags, T = 3, len(one)
    found = sharpe_difference(one, two, lag_rule=LagRule.FIXED, lags=lags)
    # Ledoit and Wolf (2008), equations 3 to 5: moments (μ₁, μ₂, γ₁, γ₂).
    moments = np.column_stack([one, two, one**2, two**2])
    m = moments.mean(axis=0)
    v1, v2 = m[2] - m[0] ** 2, m[3] - m[1] ** 2
    gradient = np.array([m[2] / v1**1.5, -m[3] / v2**1.5, -0.5 * m[0] / v1**1.5, 0.5 * m[1] / v2**1.5])
    centred = moments - m
    psi = np.zeros((4, 4))
    for t in range(T):
        psi += np.outer(centred[t], centred[t]) / T
    for j in range(1, lags + 1):
        for t in range(j, T):
            cross = np.outer(centred[t], centred[t - j]) / T
            psi += (1 - j / (lags + 1)) * (cross + cross.T)
    np.testing.assert_allclose(found.hac[0], np.sqrt(gradient @ psi @ gradient / T), rtol=1e-10)
    np.testing.assert_allclose(
        found.difference[0], one.mean() / one.std() - two.mean() / two.std(), rtol=1e-10
    )
    np.testing.assert_allclose(found.correlation[0], np.corrcoef(one, two)[0, 1], rtol=1e-10)
    z = found.difference[0] / found.hac[0]
    np.testing.assert_allclose(found.pvalues()[0], 2 * stats.norm.sf(abs(z)), rtol=1e-10)
    low, high = found.interval(0.9, DifferenceErrors.MEMMEL)
    np.testing.assert_allclose((high - low) / 2, 1.6448536269514722 * found.memmel, rtol=1e-10)


def test_one_benchmark_against_many() -> None:
    one, two = _pair()
    three, _ = _pair(seed=7)
    many = sharpe_difference(np.column_stack([one, three]), two)
    for n, series in enumerate((one, three)):
        alone = sharpe_difference(series, two)
        np.testing.assert_allclose(many.hac[n], alone.hac[0], rtol=1e-12)
        np.testing.assert_allclose(many.memmel[n], alone.memmel[0], rtol=1e-12)


def test_the_same_series_and_a_constant_one_have_no_difference_to_test() -> None:
    one, _ = _pair()
    levered = sharpe_difference(one, 3.0 * one)
    np.testing.assert_allclose(levered.difference, 0.0, atol=1e-14)
    assert levered.hac[0] == 0.0
    assert np.isnan(levered.pvalues()[0])
    constant = sharpe_difference(one, np.full(120, 0.01))
    assert np.isnan(constant.hac[0])
    for other in (3.0 * one, np.full(120, 0.01)):
        result = bootstrap_difference(one, other, draws=99, seed=1)
        assert isinstance(result, NotApplicable)
        assert "constant or multiples" in result.reason


def test_bootstrap_is_seeded_and_sees_a_large_difference() -> None:
    one, two = _pair(T=240, gap=0.5)
    first = bootstrap_difference(one, two, draws=499, seed=3, block=4)
    again = bootstrap_difference(one, two, draws=499, seed=3, block=4)
    assert first.pvalue == again.pvalue
    assert first.pvalue == pytest.approx(1 / 500)  # nothing resampled comes near
    assert first.distribution.label == "bootstrap"
    turned = bootstrap_difference(two, one, draws=499, seed=3, block=4)
    assert turned.value == pytest.approx(first.value)


def test_bootstrap_against_a_literal_loop() -> None:
    one, two = _pair(T=30)
    block, draws = 4, 25
    found = bootstrap_difference(one, two, draws=draws, seed=5, block=block, lag_rule=LagRule.FIXED, lags=2)
    sample = sharpe_difference(one, two, lag_rule=LagRule.FIXED, lags=2)
    difference = float(sample.difference[0])
    statistic = abs(difference) / float(sample.hac[0])
    starts = np.random.default_rng(5).integers(0, 30, size=(draws, 8))
    count = 0
    for draw in range(draws):
        rows = [(start + j) % 30 for start in starts[draw] for j in range(block)][:30]
        a, b = one[rows], two[rows]
        m = np.array([a.mean(), b.mean(), (a * a).mean(), (b * b).mean()])
        v1, v2 = m[2] - m[0] ** 2, m[3] - m[1] ** 2
        gradient = np.array([m[2] / v1**1.5, -m[3] / v2**1.5, -0.5 * m[0] / v1**1.5, 0.5 * m[1] / v2**1.5])
        y = np.column_stack([a, b, a * a, b * b]) - m
        blocks = [y[j * block : (j + 1) * block].sum(axis=0) / np.sqrt(block) for j in range(30 // block)]
        psi = sum(np.outer(z, z) for z in blocks) / len(blocks)
        error = np.sqrt(gradient @ psi @ gradient / 30)
        count += abs(m[0] / np.sqrt(v1) - m[1] / np.sqrt(v2) - difference) / error >= statistic
    assert found.value == pytest.approx(statistic)
    assert found.pvalue == pytest.approx((1 + count) / (1 + draws))


@pytest.mark.simulation
def test_size_of_the_difference_tests() -> None:
    # True ratios are equal, tails are heavy: 5% ± 3.3 Monte Carlo errors (0.0109 each at 400 samples).
    rejected = {"bootstrap": 0, "hac": 0}
    rng = np.random.default_rng(8)
    for sample in range(400):
        shocks = rng.standard_t(5, (120, 3))
        one = 0.2 + 0.6 * shocks[:, 0] + 0.8 * shocks[:, 1]
        two = 0.2 + 0.6 * shocks[:, 0] + 0.8 * shocks[:, 2]
        rejected["bootstrap"] += bootstrap_difference(one, two, draws=199, seed=sample, block=2).pvalue < 0.05
        rejected["hac"] += sharpe_difference(one, two).pvalues()[0] < 0.05
    assert 0.014 < rejected["bootstrap"] / 400 < 0.086
    assert rejected["hac"] / 400 < 0.12  # known to reject too often in short samples (Ledoit and Wolf 2008)


def test_bad_arguments_are_refused() -> None:
    one, two = _pair(T=20)
    with pytest.raises(InputError, match="do not pair"):
        sharpe_difference(one, two[:10])
    with pytest.raises(InputError, match="missing"):
        sharpe_difference(np.where(np.arange(20) == 3, np.nan, one), two)
    with pytest.raises(InputError, match="one pair at a time"):
        bootstrap_difference(np.column_stack([one, two]), two, draws=9, seed=0)
    with pytest.raises(InputError, match="0 bootstrap draws"):
        bootstrap_difference(one, two, draws=0, seed=0)
    with pytest.raises(EstimationError, match="Blocks of 11"):
        bootstrap_difference(one, two, draws=9, seed=0, block=11)
    with pytest.raises(EstimationError, match="Newey-West lags"):
        sharpe_difference(one, two, lag_rule=LagRule.FIXED, lags=40)


def test_memmel_error_of_perfect_correlation_is_zero() -> None:
    np.testing.assert_allclose(memmel_error(0.2, 0.2, 1.0, 60), 0.0, atol=1e-9)
