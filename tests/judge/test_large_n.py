"""Large-N test: by the published formula in loops, in parts by scipy, and by its size in simulated samples."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal, stats

from soffit.errors import SettingError
from soffit.estimate.regression import regress
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.judge import large_n
from soffit.judge.large_n import large_n_test, residual_correlations


def blocks(rng: np.random.Generator, T: int, N: int, rho: float = 0.5) -> np.ndarray:
    """Residuals in blocks of ten assets correlated at `rho`."""
    root = np.linalg.cholesky(np.full((10, 10), rho) + (1 - rho) * np.eye(10))
    return (rng.normal(size=(T, N // 10, 10)) @ root.T).reshape(T, N)


def fading(rng: np.random.Generator, T: int, N: int) -> np.ndarray:
    """Residuals correlated at 0.5^|i − j|."""
    return signal.lfilter([np.sqrt(0.75)], [1, -0.5], rng.normal(size=(T, N)), axis=1)


def test_published_statistic_by_loops() -> None:
    # Pesaran and Yamagata (2024), from memory: the statistic J with threshold p/(N − 1) on each correlation.
    rng = np.random.default_rng(5)
    T, N, K = 50, 30, 2
    f = rng.normal(0.005, 0.04, (T, K))
    regression = regress(blocks(rng, T, N) * 0.03, f)
    v = T - K - 1
    x = np.column_stack([np.ones(T), f])
    e = regression.residuals
    squares = []
    for i in range(N):
        variance = e[:, i] @ e[:, i] / v * np.linalg.inv(x.T @ x)[0, 0]
        squares.append(regression.alpha[i] ** 2 / variance)
    cut = stats.norm.ppf(1 - 0.05 / (2 * (N - 1)))
    total = 0.0
    for i in range(N):
        for j in range(i):
            rho = e[:, i] @ e[:, j] / np.sqrt((e[:, i] @ e[:, i]) * (e[:, j] @ e[:, j]))
            if np.sqrt(v) * abs(rho) >= cut:
                total += rho**2
    spread = v / (v - 2) * np.sqrt(2 * (v - 1) / (v - 4) * (1 + (N - 1) * 2 * total / (N * (N - 1))))
    expected = sum(s - v / (v - 2) for s in squares) / np.sqrt(N) / spread
    result = large_n_test(regression)
    assert result.published.value == pytest.approx(expected, rel=1e-10)
    assert result.published.pvalue == pytest.approx(stats.norm.sf(expected), rel=1e-8)
    assert result.mean_square_t == pytest.approx(np.mean(squares), rel=1e-10)


@pytest.mark.parametrize("v", [7, 20, 200])
def test_moments_of_a_squared_t_equal_scipy(v: int) -> None:
    mean, variance, skewness = stats.f.stats(1, v, moments="mvs")
    assert large_n._moments_of_squared_t(v) == pytest.approx((mean, np.sqrt(variance)))
    assert large_n._skewness_of_squared_t(v) == pytest.approx(float(skewness))


@pytest.mark.parametrize(("T", "N"), [(200, 30), (30, 200)])
def test_power_sums_whichever_side_is_smaller(T: int, N: int) -> None:
    unit = np.random.default_rng(0).normal(size=(T, N))
    unit /= np.linalg.norm(unit, axis=0)
    R = unit.T @ unit
    squares, cubes = large_n._power_sums(unit)
    assert squares == pytest.approx(np.trace(R @ R), rel=1e-11)
    assert cubes == pytest.approx(np.trace(R @ R @ R), rel=1e-11)


def test_blocks_add_up_to_the_whole(monkeypatch: pytest.MonkeyPatch) -> None:
    e = blocks(np.random.default_rng(9), 40, 70)
    whole = residual_correlations(e, 39)
    monkeypatch.setattr(large_n, "_BLOCK", 17)
    assert residual_correlations(e, 39).thresholded == pytest.approx(whole.thresholded, rel=1e-12)
    assert residual_correlations(e, 39).passing == whole.passing


@pytest.mark.simulation
def test_correlations_are_recovered_without_the_bias_of_short_samples() -> None:
    # Blocks of ten at 0.5: (N − 1) ρ̄² = 9/4, tr(R³)/N = (5.5³ + 9/8)/10 = 16.75. Independent: 0 and 1.
    rng = np.random.default_rng(12)
    draws = [residual_correlations(blocks(rng, 120, 200), 120) for _ in range(20)]
    assert np.mean([d.unbiased for d in draws]) == pytest.approx(2.25, rel=0.04)
    assert np.mean([d.cubes for d in draws]) == pytest.approx(16.75, rel=0.10)
    none = [residual_correlations(rng.normal(size=(60, 200)), 60) for _ in range(20)]
    assert np.mean([d.unbiased for d in none]) < 0.03
    assert np.mean([d.cubes for d in none]) == pytest.approx(1.0, abs=0.15)


@given(scale=st.floats(1e-6, 1e3), seed=st.integers(0, 100))
@settings(max_examples=15, deadline=None)
def test_units_order_and_signs_of_assets_do_not_matter(scale: float, seed: int) -> None:
    rng = np.random.default_rng(seed)
    f, y = rng.normal(0.01, 0.04, (40, 1)), blocks(rng, 40, 50)
    flipped = y[:, ::-1] * scale * np.where(np.arange(50) % 3, 1.0, -1.0)
    before, after = large_n_test(regress(y, f)), large_n_test(regress(flipped, f))
    assert after.test.pvalue == pytest.approx(before.test.pvalue, rel=1e-7)
    assert after.published.value == pytest.approx(before.published.value, rel=1e-8, abs=1e-10)


def test_alphas_are_found_where_grs_does_not_exist() -> None:
    rng = np.random.default_rng(2)
    f = rng.normal(0.005, 0.04, (60, 3))
    noise = blocks(rng, 60, 300) * 0.05
    nothing = large_n_test(regress(noise, f))
    there = large_n_test(regress(noise + rng.choice([-0.012, 0.012], 300), f))
    assert nothing.test.pvalue > 0.05
    assert there.test.pvalue < 1e-4
    assert isinstance(there.effective_count, float)
    assert 60 < there.effective_count < 140  # 300/3.25 is 92


def test_ten_thousand_assets_without_an_n_by_n_matrix() -> None:
    rng = np.random.default_rng(3)
    f = rng.normal(0.005, 0.04, (24, 1))
    import tracemalloc

    regression = regress(rng.normal(0, 0.05, (24, 10_000)), f)
    tracemalloc.start()
    result = large_n_test(regression)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert isinstance(result.test, TestStatistic)
    assert peak < 0.5 * 8 * 10_000**2


def test_one_asset_is_close_to_its_own_t_test() -> None:
    rng = np.random.default_rng(0)
    f, y = rng.normal(0.01, 0.04, (200, 1)), rng.normal(0.004, 0.03, (200, 1))
    regression = regress(y, f)
    two_sided = 2 * stats.t.sf(abs(regression.classical_t[0]), 198)
    assert large_n_test(regression).test.pvalue == pytest.approx(two_sided, abs=0.01)


def test_reasons() -> None:
    rng = np.random.default_rng(0)
    f = rng.normal(0.01, 0.04, (40, 2))
    y = rng.normal(0, 0.03, (40, 5))
    y[:, 2] = f[:, 0]
    spanned = large_n_test(regress(y, f))
    assert isinstance(spanned.test, NotApplicable)
    assert "1 of 5 assets exactly (the first is asset 3)" in spanned.test.reason
    assert isinstance(spanned.effective_count, NotApplicable)
    short = large_n_test(regress(y[:9, :2], f[:9]))
    assert isinstance(short.test, NotApplicable)
    assert "6 degrees of freedom" in short.test.reason
    with pytest.raises(SettingError, match="threshold level"):
        large_n_test(regress(y[:, :2], f), threshold_level=0.0)


@pytest.mark.simulation
@pytest.mark.parametrize("residuals", [blocks, fading])
def test_size_with_correlated_residuals(residuals) -> None:
    # N = 100, T = 60, 5% within three Monte Carlo errors; longer runs are in the module's documentation.
    rng = np.random.default_rng(77)
    draws = 1000
    rejected = np.zeros(2)
    for _ in range(draws):
        result = large_n_test(regress(residuals(rng, 60, 100), rng.normal(0.005, 0.04, (60, 3))))
        rejected += [result.test.pvalue <= 0.05, result.published.pvalue <= 0.05]
    ours, published = rejected / draws
    assert abs(ours - 0.05) < 3 * np.sqrt(0.05 * 0.95 / draws)
    # As published it rejects more often than it says in a sample this short.
    assert 0.05 < published < 0.10
