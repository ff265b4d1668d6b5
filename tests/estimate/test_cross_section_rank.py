"""Rank and spread of betas: literal forms, statsmodels, and sizes under a useless factor."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import linalg, stats

from soffit.errors import EstimationError
from soffit.estimate.rank import identification
from soffit.estimate.statistic import NotApplicable


def market(
    seed: int, T: int = 150, N: int = 6, K: int = 2, second: float = 0.5
) -> tuple[np.ndarray, np.ndarray]:
    draw = np.random.default_rng(seed)
    F = 0.04 * draw.normal(size=(T, K))
    B = draw.normal(1.0, 0.5, size=(N, K))
    B[:, -1] *= second
    mix = np.eye(N) + 0.3 * draw.normal(size=(N, N))
    return F @ B.T + 0.03 * draw.normal(size=(T, N)) @ mix, F


def parts(R: np.ndarray, F: np.ndarray, constant: bool) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Contrasts of betas against the last asset (or the betas), their residuals, and the factors' inverse."""
    X = np.column_stack([np.ones(len(F)), F])
    C = np.linalg.lstsq(X, R, rcond=None)[0]
    E = R - X @ C
    N = R.shape[1]
    L = np.hstack([np.eye(N - 1), -np.ones((N - 1, 1))]) if constant else np.eye(N)
    f = F - F.mean(axis=0)
    return L @ C[1:].T, E @ L.T, np.linalg.inv(f.T @ f)


@pytest.mark.parametrize("constant", [True, False])
def test_spread_is_hotellings_test(constant: bool) -> None:
    """Hotelling (1931); any set of contrasts gives the same statistic."""
    R, F = market(1)
    got = identification(R, F, constant=constant)
    B, E, inverse = parts(R, F, constant)
    q, df = B.shape[0], 150 - 3
    S = E.T @ E / df
    for k in range(2):
        hotelling = B[:, k] @ np.linalg.solve(S, B[:, k]) / inverse[k, k]
        value = hotelling * (df - q + 1) / (df * q)
        assert_allclose(got.spread[k].value, value, rtol=1e-8)
        assert_allclose(got.spread[k].pvalue, stats.f(q, df - q + 1).sf(value), rtol=1e-6)


def test_spread_of_one_asset_is_the_squared_t_ratio_of_its_beta() -> None:
    R, F = market(2, K=1)
    got = identification(R[:, :1], F, constant=False)
    fit = sm.OLS(R[:, 0], sm.add_constant(F)).fit()
    assert_allclose(got.spread[0].value, fit.tvalues[1] ** 2, rtol=1e-9)
    assert_allclose(got.spread[0].pvalue, fit.pvalues[1], rtol=1e-7)
    assert_allclose(got.cragg_donald.value, fit.tvalues[1] ** 2, rtol=1e-9)
    white = sm.OLS(R[:, 0], sm.add_constant(F)).fit(cov_type="HC0")
    assert_allclose(got.kleibergen_paap.value, white.tvalues[1] ** 2, rtol=1e-9)


@pytest.mark.parametrize("constant", [True, False])
def test_cragg_donald_is_the_smallest_characteristic_root(constant: bool) -> None:
    """Cragg and Donald (1997) under iid residuals: smallest root of B'S⁻¹B against (F'F)⁻¹."""
    R, F = market(3, K=3)
    got = identification(R, F, constant=constant)
    B, E, inverse = parts(R, F, constant)
    roots = linalg.eigh(B.T @ np.linalg.solve(E.T @ E / (150 - 4), B), inverse, eigvals_only=True)
    assert_allclose(got.cragg_donald.value, roots.min(), rtol=1e-8)
    df = B.shape[0] - 3 + 1
    assert got.cragg_donald.distribution.df == (df,)
    assert_allclose(got.cragg_donald.pvalue, stats.chi2(df).sf(roots.min()), rtol=1e-6)


@pytest.mark.parametrize("constant", [True, False])
def test_kleibergen_paap_in_its_full_kronecker_form(constant: bool) -> None:
    """Kleibergen and Paap (2006), equations 3 to 10, with vec's covariance formed in full."""
    R, F = market(4, K=2)
    got = identification(R, F, constant=constant)
    B, E, inverse = parts(R, F, constant)
    T, q, K = len(F), *B.shape
    f = F - F.mean(axis=0)
    G = np.linalg.inv(linalg.sqrtm(E.T @ E / (T - K - 1)).real)
    D = linalg.sqrtm(f.T @ f).real
    theta = G @ B @ D
    V = np.zeros((q * K, q * K))
    for t in range(T):
        score = np.kron(D @ inverse @ f[t], G @ E[t])  # vec by columns
        V += np.outer(score, score)
    U, _, Vt = np.linalg.svd(theta)
    lower = K - 1
    U2, V2 = U[:, lower:], Vt.T[:, lower:]
    u22, v22 = U2[lower:, :], V2[lower:, :]
    A = U2 @ np.linalg.inv(u22) @ linalg.sqrtm(u22 @ u22.T).real
    b = linalg.sqrtm(v22 @ v22.T).real @ np.linalg.inv(v22.T) @ V2.T
    select = np.kron(b, A.T)
    lam = select @ theta.ravel(order="F")
    value = lam @ np.linalg.solve(select @ V @ select.T, lam)
    assert_allclose(got.kleibergen_paap.value, value, rtol=1e-7)


@given(st.integers(0, 10_000), st.booleans())
@settings(max_examples=25, deadline=None)
def test_rank_does_not_depend_on_units_or_on_how_factors_are_combined(seed: int, constant: bool) -> None:
    R, F = market(seed)
    turn = np.array([[2.0, 30.0], [-0.01, 1.0]])
    one, two = (identification(r, f, constant=constant) for r, f in ((R, F), (100 * R, F @ turn)))
    assert_allclose(two.cragg_donald.value, one.cragg_donald.value, rtol=1e-6)
    assert_allclose(two.kleibergen_paap.value, one.kleibergen_paap.value, rtol=1e-5)
    scaled = identification(R, F * np.array([1e-3, 1e3]), constant=constant)
    for a, b in zip(one.spread, scaled.spread, strict=True):
        assert_allclose(b.value, a.value, rtol=1e-6)


@pytest.mark.simulation
@pytest.mark.parametrize("constant", [True, False])
def test_sizes_under_a_useless_factor(constant: bool) -> None:
    draw = np.random.default_rng(5)
    draws, T, N = 600, 500, 5
    mix = np.eye(N) + 0.4 * draw.normal(size=(N, N))
    B = np.zeros((2, N))
    B[0] = np.linspace(0.5, 1.5, N)
    hits = np.zeros(4)
    for _ in range(draws):
        F = draw.normal(size=(T, 2))
        got = identification(F @ B + draw.normal(size=(T, N)) @ mix, F, constant=constant)
        tests = (*got.spread, got.cragg_donald, got.kleibergen_paap)
        hits += [test.pvalue < 0.05 for test in tests]
    margin = 3.5 * np.sqrt(0.05 * 0.95 / draws)
    assert hits[0] == draws  # the real factor is always seen
    assert np.abs(hits[1:] / draws - 0.05).max() < margin


@pytest.mark.simulation
def test_size_of_the_robust_rank_test_under_heteroskedasticity() -> None:
    """Residual variance rises with the factor: Cragg-Donald rejects too often, Kleibergen-Paap does not."""
    draw = np.random.default_rng(6)
    draws, T, N = 600, 800, 4
    hits = np.zeros(2)
    for _ in range(draws):
        F = draw.normal(size=(T, 1))
        got = identification(draw.normal(size=(T, N)) * (0.3 + np.abs(F)), F, constant=False)
        hits += [got.cragg_donald.pvalue < 0.05, got.kleibergen_paap.pvalue < 0.05]
    assert abs(hits[1] / draws - 0.05) < 3.5 * np.sqrt(0.05 * 0.95 / draws)
    assert hits[0] / draws > 0.2


def test_verdicts() -> None:
    draw = np.random.default_rng(7)
    R, F = market(8, K=2)
    useless = np.column_stack([F[:, 0], 0.04 * draw.normal(size=150)])
    sound, poor = identification(R, F), identification(R, useless)
    assert sound.useless() == ()
    assert sound.identified() is True
    assert poor.useless() == (1,)
    assert poor.identified() is False


def test_two_factors_that_the_assets_cannot_tell_apart() -> None:
    """Each factor alone has spread; only the rank test sees that the betas on both are proportional."""
    draw = np.random.default_rng(10)
    F = 0.04 * draw.normal(size=(400, 2))
    b = np.linspace(-1.0, 1.0, 6)
    R = F @ np.array([b, 0.5 * b]) + 0.02 * draw.normal(size=(400, 6))
    got = identification(R, F)
    assert got.useless() == ()
    assert got.identified() is False


def test_what_does_not_exist_says_why() -> None:
    R, F = market(10, T=30, N=40)
    got = identification(R, F)
    verdict = got.identified()
    assert isinstance(verdict, NotApplicable)
    assert "too many for 30 periods" in verdict.reason
    assert all(isinstance(test, NotApplicable) for test in got.spread)
    assert got.useless() == ()
    R, F = market(11)
    R[:, 0] = R[:, 1] + F @ np.array([0.5, 0.5])
    assert "replicated" in identification(R, F).cragg_donald.reason
    with pytest.raises(EstimationError, match="add test assets"):
        identification(R[:, :2], F)
    with pytest.raises(EstimationError, match="at least one factor"):
        identification(R, F[:, :0])
