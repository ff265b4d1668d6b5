"""The GMM pricing-error test against linearmodels' own J, a literal GMM, and its size under heteroskedasticity."""

from __future__ import annotations

import numpy as np
import pytest
from linearmodels.asset_pricing import LinearFactorModel
from numpy.testing import assert_allclose
from scipy import stats

from soffit.estimate.cross_section import two_pass
from soffit.estimate.cross_section_gmm import gmm_pricing_test
from soffit.estimate.statistic import NotApplicable
from soffit.settings import SecondPass


def market(seed: int, T: int = 150, N: int = 6, K: int = 2) -> tuple[np.ndarray, np.ndarray]:
    draw = np.random.default_rng(seed)
    F = 0.005 + 0.04 * draw.normal(size=(T, K))
    R = 0.002 * draw.normal(size=N) + F @ draw.normal(0.9, 0.5, size=(K, N)) + 0.03 * draw.normal(size=(T, N))
    return R, F


@pytest.mark.parametrize("constant", [True, False])
@pytest.mark.parametrize("lags", [0, 3])
@pytest.mark.parametrize("kind", list(SecondPass))
def test_equals_linearmodels_j_statistic(kind: SecondPass, lags: int, constant: bool) -> None:
    R, F = market(1)
    X = np.column_stack([np.ones(150), F])
    E = R - X @ np.linalg.lstsq(X, R, rcond=None)[0]
    sigma = {
        SecondPass.OLS: None,
        SecondPass.WLS: np.diag((E**2).mean(axis=0)),
        SecondPass.GLS: np.cov(R.T, bias=True),
    }[kind]
    options = {"cov_type": "kernel", "kernel": "bartlett", "bandwidth": lags} if lags else {}
    fit = LinearFactorModel(R, F, risk_free=constant, sigma=sigma).fit(debiased=False, **options)
    got = gmm_pricing_test(R, F, second_pass=kind, constant=constant, lags=lags)
    assert_allclose(got.value, fit.j_statistic.stat, rtol=1e-7)
    assert_allclose(got.pvalue, stats.chi2(6 - 2 - constant).sf(got.value), rtol=1e-7)


def test_equals_a_literal_gmm() -> None:
    """One factor, no constant: influence of each period on α = R̄ − βλ by a numerical derivative."""
    R, F = market(2, T=60, N=4, K=1)

    def alpha(p: np.ndarray) -> np.ndarray:
        mean, f = p @ R, F[:, 0] - p @ F[:, 0]
        beta = (p * f) @ (R - mean) / (p @ f**2)
        return mean - beta * (beta @ mean) / (beta @ beta)

    even, influence = np.full(60, 1 / 60), np.empty((60, 4))
    for t in range(60):
        push = -even.copy()
        push[t] += 1.0
        influence[t] = (alpha(even + 1e-5 * push) - alpha(even - 1e-5 * push)) / 2e-5
    V = influence.T @ influence / 60**2
    beta = two_pass(R, F, constant=False).betas[:, 0]
    Q = np.linalg.svd(beta[:, None])[0][:, 1:]
    a = Q.T @ alpha(even)
    expected = a @ np.linalg.solve(Q.T @ V @ Q, a)
    assert_allclose(gmm_pricing_test(R, F, constant=False).value, expected, rtol=1e-5)


@pytest.mark.simulation
def test_size_when_residuals_move_with_the_factor() -> None:
    """Residual variance rises with |f|: the GMM test holds its size where the classical χ² does not."""
    draw = np.random.default_rng(3)
    draws, T, B = 300, 600, np.linspace(0.4, 1.6, 5)[None, :]
    hits = np.zeros(2)
    for _ in range(draws):
        F = 1.0 + draw.normal(size=(T, 1))
        R = F @ B + draw.normal(size=(T, 5)) * (0.4 + np.abs(F - 1.0))
        hits += [gmm_pricing_test(R, F).pvalue < 0.05, two_pass(R, F).pricing_chi2.pvalue < 0.05]
    assert abs(hits[0] / draws - 0.05) < 3.5 * np.sqrt(0.05 * 0.95 / draws)
    assert hits[1] / draws > 0.15


def test_what_does_not_exist_says_why() -> None:
    R, F = market(4, T=30, N=40)
    reasons = {
        "too many for 30 periods": gmm_pricing_test(R, F),
        "priced exactly": gmm_pricing_test(R[:, :3], F),
        "repeats a combination": gmm_pricing_test(R[:, [0, 1, 2, 3, 3]], F, second_pass=SecondPass.GLS),
    }
    many = np.random.default_rng(5).normal(size=(1500, 600))
    reasons["more moments"] = gmm_pricing_test(many, many[:, :2])
    for words, found in reasons.items():
        assert isinstance(found, NotApplicable)
        assert words in found.reason
