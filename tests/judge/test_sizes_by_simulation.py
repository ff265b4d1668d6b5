"""Sizes of the joint test and of the ceiling test in samples whose truth is known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from soffit.estimate.regression import factor_moments, regress
from soffit.judge.ceiling import JointCeiling
from soffit.judge.joint import joint_alphas


def pvalues(true_sharpe2: float, tested: float, *, draws: int, seed: int) -> np.ndarray:
    """P-values of θ* ≤ `tested` in samples of one set of factors whose assets reach `true_sharpe2` with them."""
    rng = np.random.default_rng(seed)
    T, N = 72, 8
    f = rng.normal(0.006, 0.045, (T, 2))
    theta2 = factor_moments(f).theta2
    root = np.linalg.cholesky(0.5 * np.ones((N, N)) + 0.5 * np.eye(N)) * 0.03
    direction = root @ rng.normal(size=N)
    room = true_sharpe2 - theta2
    alpha = direction * np.sqrt(room / np.sum(np.linalg.solve(root, direction) ** 2))
    beta = rng.normal(1.0, 0.3, (2, N))
    p = np.empty(draws)
    for i in range(draws):
        joint = joint_alphas(regress(alpha + f @ beta + rng.normal(size=(T, N)) @ root.T, f))
        p[i] = joint.grs.pvalue if tested == 0 else JointCeiling(joint).pvalue(tested)
    return p


@pytest.mark.simulation
def test_grs_is_exact_in_short_samples() -> None:
    # Gibbons, Ross and Shanken (1989): p-values uniform under zero alphas. Kolmogorov-Smirnov at 0.1%.
    theta2 = factor_moments(np.random.default_rng(72).normal(0.006, 0.045, (72, 2))).theta2
    p = pvalues(theta2, 0.0, draws=1200, seed=72)
    assert stats.kstest(p, "uniform").pvalue > 0.001
    assert abs(np.mean(p <= 0.05) - 0.05) < 3 * np.sqrt(0.05 * 0.95 / 1200)


@pytest.mark.simulation
def test_ceiling_pvalue_is_exact_at_the_true_ceiling() -> None:
    # At s = θ* the p-value of H0: θ*² ≤ s² is uniform: the noncentral F conditional on the factors.
    p = pvalues(0.35, np.sqrt(0.35), draws=1200, seed=73)
    assert stats.kstest(p, "uniform").pvalue > 0.001
    assert abs(np.mean(p <= 0.05) - 0.05) < 3 * np.sqrt(0.05 * 0.95 / 1200)


@pytest.mark.simulation
def test_ceiling_test_is_sparing_above_and_sharp_below_the_truth() -> None:
    above = pvalues(0.35, np.sqrt(0.60), draws=400, seed=74)
    below = pvalues(0.35, np.sqrt(0.10), draws=400, seed=74)
    assert np.mean(above <= 0.05) < 0.05
    assert np.mean(below <= 0.05) > 0.30
