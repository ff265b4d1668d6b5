"""Power of the joint test: published power, slow simulation, and what must hold at the edges."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from soffit.errors import SettingError
from soffit.estimate.regression import regress
from soffit.estimate.statistic import NotApplicable
from soffit.judge.joint import joint_alphas
from soffit.judge.power import GRSPower


def test_published_power_of_an_f_test() -> None:
    # Cohen (1988) exercise as printed in R's pwr documentation: k = 4 groups of n = 20, f = 0.28: power 0.5149793.
    # The same F(3, 76) with noncentrality k n f² as a GRS test of three assets without factors.
    power = GRSPower(count=3, width=0, periods=79, theta_f2=0.0)
    assert float(power.at(np.sqrt(80 * 0.28**2 / 79))) == pytest.approx(0.5149793, abs=5e-8)


def test_power_by_scipy() -> None:
    power = GRSPower(25, 3, 240, 0.02)
    grid = np.array([0.15, 0.2, 0.3, 0.4])
    shift = 240 * (grid**2 - 0.02) / 1.02
    expected = stats.ncf.sf(stats.f.ppf(0.95, 25, 212), 25, 212, np.maximum(shift, 1e-12))
    np.testing.assert_allclose(power.at(grid), expected, rtol=1e-8)


@given(low=st.floats(0.0, 0.6), high=st.floats(0.0, 0.6))
@settings(max_examples=30, deadline=None)
def test_power_rises_with_the_sharpe_ratio(low: float, high: float) -> None:
    low, high = sorted((low, high))
    power = GRSPower(10, 1, 120, 0.01)
    assert power.at(low) <= power.at(high) + 1e-14


def test_at_or_below_the_factors_power_is_the_size() -> None:
    power = GRSPower(10, 1, 120, 0.04, size=0.10)
    np.testing.assert_allclose(power.at([0.0, 0.1, 0.2]), 0.10, rtol=1e-10)
    answer = power.periods_needed(0.2)
    assert isinstance(answer, NotApplicable)
    assert "needs no alpha" in answer.reason


@pytest.mark.parametrize("target", [0.5, 0.8, 0.95])
def test_sample_length_is_the_first_that_reaches_the_power(target: float) -> None:
    power = GRSPower(25, 3, 240, 0.02)
    needed = power.periods_needed(0.3, target)
    assert isinstance(needed, int)
    assert GRSPower(25, 3, needed, 0.02).at(0.3) >= target
    assert GRSPower(25, 3, needed - 1, 0.02).at(0.3) < target


def test_detectable_ratio_has_that_power() -> None:
    power = GRSPower(25, 3, 240, 0.02)
    found = power.detectable(0.8)
    assert isinstance(found, float)
    assert float(power.at(found)) == pytest.approx(0.8, rel=1e-9)


def test_a_sample_without_the_test_says_why_but_knows_the_length_needed() -> None:
    power = GRSPower(100, 3, 60, 0.02)
    for absent in (power.at(0.3), power.critical, power.detectable()):
        assert isinstance(absent, NotApplicable)
        assert "100 assets" in absent.reason
    needed = power.periods_needed(0.3)
    assert isinstance(needed, int)
    assert needed > 103


def test_an_alternative_too_close_has_no_sample_length() -> None:
    answer = GRSPower(5, 1, 120, 0.04).periods_needed(0.2 * (1 + 1e-9))
    assert isinstance(answer, NotApplicable)
    assert "10,000,000" in answer.reason


def test_refusals() -> None:
    with pytest.raises(SettingError, match="size of the test"):
        GRSPower(5, 1, 120, 0.04, size=1.0)
    with pytest.raises(SettingError, match="The power is 0.05"):
        GRSPower(5, 1, 120, 0.04).periods_needed(0.3, 0.05)
    with pytest.raises(SettingError, match="negative or not finite"):
        GRSPower(5, 1, 120, 0.04).at([-0.1])


@pytest.mark.simulation
def test_power_in_simulated_samples() -> None:
    # Gibbons, Ross and Shanken (1989), section 4: conditional on the factors. Within four Monte Carlo errors.
    rng = np.random.default_rng(8)
    T, N, draws = 90, 6, 600
    f = rng.normal(0.006, 0.045, (T, 2))
    root = np.linalg.cholesky(0.4 * np.ones((N, N)) + 0.6 * np.eye(N)) * 0.03
    theta2 = joint_alphas(regress(rng.normal(size=(T, N)), f)).theta_f2
    sharpe = np.sqrt(theta2 + 0.18)
    alpha = root @ rng.normal(size=N)
    alpha *= np.sqrt(0.18 / np.sum(np.linalg.solve(root, alpha) ** 2))
    rejected = sum(
        joint_alphas(regress(alpha + rng.normal(size=(T, N)) @ root.T, f)).grs.pvalue <= 0.05
        for _ in range(draws)
    )
    power = float(GRSPower(N, 2, T, theta2).at(sharpe))
    assert 0.5 < power < 0.95
    assert abs(rejected / draws - power) < 4 * np.sqrt(power * (1 - power) / draws)
