"""Cross-sectional R², its bootstrap interval, and the pricing-error tests."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import stats

from soffit.errors import EstimationError
from soffit.estimate.cross_section import two_pass
from soffit.estimate.cross_section_fit import R2Interval, cross_sectional_r2, r2_interval
from soffit.estimate.statistic import Interval, NotApplicable
from soffit.settings import SecondPass


def market(seed: int, T: int = 120, N: int = 8, alpha: float = 0.002) -> tuple[np.ndarray, np.ndarray]:
    draw = np.random.default_rng(seed)
    F = 0.006 + 0.04 * draw.normal(size=(T, 2))
    mix = np.eye(N) + 0.3 * draw.normal(size=(N, N))
    B = draw.normal(0.9, 0.5, size=(2, N))
    return alpha * draw.normal(size=N) + F @ B + 0.03 * draw.normal(size=(T, N)) @ mix, F


@pytest.mark.parametrize("constant", [True, False])
def test_r2_equals_the_regression_of_means_on_betas(constant: bool) -> None:
    R, F = market(1)
    got = two_pass(R, F, constant=constant)
    mu, B = R.mean(axis=0), got.betas
    for value, W in ((got.r2_ols, np.eye(8)), (got.r2_gls, np.linalg.inv(np.cov(R.T, bias=True)))):
        ones = np.ones((8, 1))
        Z = np.hstack([ones, B]) if constant else B
        e = mu - Z @ np.linalg.solve(Z.T @ W @ Z, Z.T @ W @ mu)
        level = np.linalg.solve(ones.T @ W @ ones, ones.T @ W @ mu)[0] if constant else 0.0
        e0 = mu - level
        assert_allclose(value, 1 - (e @ W @ e) / (e0 @ W @ e0), rtol=1e-9)
    errors = got.pricing_errors
    total = ((mu - mu.mean() * constant) ** 2).sum()
    assert_allclose(got.r2_ols, 1 - (errors**2).sum() / total, rtol=1e-9)


@given(st.integers(0, 10_000), st.booleans())
@settings(max_examples=30, deadline=None)
def test_r2_is_a_share_and_does_not_depend_on_the_scale_of_betas(seed: int, constant: bool) -> None:
    draw = np.random.default_rng(seed)
    mean, betas = draw.normal(size=6), draw.normal(size=(6, 2))
    value = cross_sectional_r2(mean, betas, constant=constant)
    assert 0.0 <= value <= 1.0
    assert_allclose(
        cross_sectional_r2(mean * 9, betas * np.array([1e-4, 1e4]), constant=constant), value, atol=1e-9
    )


@pytest.mark.parametrize("constant", [True, False])
@pytest.mark.parametrize("kind", list(SecondPass))
def test_pricing_error_tests_equal_the_pseudo_inverse_form(kind: SecondPass, constant: bool) -> None:
    R, F = market(2)
    got = two_pass(R, F, second_pass=kind, constant=constant)
    T, N = R.shape
    X = np.column_stack([np.ones(T), F])
    E = R - X @ np.linalg.lstsq(X, R, rcond=None)[0]
    sigma = E.T @ E / T
    Z = np.column_stack([np.ones(N), got.betas]) if constant else got.betas
    W = {
        SecondPass.OLS: np.eye(N),
        SecondPass.WLS: np.diag(1 / np.diag(sigma)),
        SecondPass.GLS: np.linalg.inv(sigma),
    }[kind]
    M = np.eye(N) - Z @ np.linalg.inv(Z.T @ W @ Z) @ Z.T @ W
    V = M @ sigma @ M.T
    form = got.pricing_errors @ np.linalg.pinv(V, rcond=1e-10) @ got.pricing_errors / (1 + got.inflation)
    df = N - Z.shape[1]
    assert_allclose(got.pricing_chi2.value, T * form, rtol=1e-7)
    assert_allclose(got.pricing_chi2.pvalue, stats.chi2(df).sf(T * form), rtol=1e-6)
    df2 = T - 2 - df
    assert got.pricing_f.distribution.df == (df, df2)
    assert_allclose(got.pricing_f.pvalue, stats.f(df, df2).sf(form * df2 / df), rtol=1e-6)


@pytest.mark.simulation
def test_sizes_of_the_pricing_error_tests() -> None:
    """Shanken (1985): the F form holds its 5% at T = 60, N = 20, where the χ² rejects far too often."""
    draw = np.random.default_rng(3)
    draws, N, T = 800, 20, 60
    B = np.column_stack([np.linspace(0.4, 1.6, N), np.cos(np.arange(N))]).T
    mix = np.linalg.cholesky(0.7 * np.eye(N) + 0.3)
    small = wald = 0
    for _ in range(draws):
        F = 0.2 + draw.normal(size=(T, 2))
        got = two_pass(F @ B + draw.normal(size=(T, N)) @ mix.T, F, second_pass=SecondPass.GLS)
        small += got.pricing_f.pvalue < 0.05
        wald += got.pricing_chi2.pvalue < 0.05
    assert abs(small / draws - 0.05) < 3.5 * np.sqrt(0.05 * 0.95 / draws)
    assert wald / draws > 0.15


@pytest.mark.parametrize("constant", [True, False])
@pytest.mark.parametrize("generalised", [True, False])
def test_the_bootstrap_distribution_equals_a_loop(constant: bool, generalised: bool) -> None:
    """Lewellen, Nagel and Shanken (2010), drawn sample by sample from resampled rows with shifted means."""
    R, F = market(4, T=90, N=6)
    T, N = R.shape
    betas = two_pass(R, F, constant=constant).betas
    got = r2_interval(R, F, betas, constant=constant, generalised=generalised, draws=120, level=0.9, seed=5)
    assert isinstance(got, R2Interval)
    draw = np.random.default_rng(5)
    counts = draw.multinomial(T, np.full(T, 1 / T), size=120)
    noise = draw.standard_normal((120, N))
    mu = R.mean(axis=0)
    half = np.linalg.cholesky(np.cov(R.T, bias=True)) if generalised else np.eye(N)
    inner = np.linalg.inv(half)  # maps returns into units where the metric is the identity
    Z = np.column_stack([np.ones(N), betas]) if constant else betas
    P = inner @ Z @ np.linalg.pinv(inner @ Z)
    C = inner @ Z[:, : int(constant)]
    L = C @ np.linalg.pinv(C) if constant else np.zeros((N, N))
    x = inner @ mu
    fitted, level, size = P @ x - L @ x, L @ x, np.linalg.norm(x - L @ x)
    drawn = np.empty((120, len(got.grid)))
    for i in range(120):
        rows = np.repeat(np.arange(T), counts[i])
        across = noise[i] - P @ noise[i]
        for g, true in enumerate(got.grid):
            world = level + size * (
                np.sqrt(true) * fitted / np.linalg.norm(fitted)
                + np.sqrt(1 - true) * across / np.linalg.norm(across)
            )
            r, f = (R - mu + half @ world)[rows], F[rows]
            X = np.column_stack([np.ones(T), f])
            b = np.linalg.lstsq(X, r, rcond=None)[0][1:].T
            root = np.linalg.cholesky(np.cov(r.T, bias=True)) if generalised else None
            drawn[i, g] = cross_sectional_r2(r.mean(axis=0), b, constant=constant, root=root)
    assert_allclose(got.low, np.quantile(drawn, 0.05, axis=0), rtol=1e-6, atol=1e-9)
    assert_allclose(got.high, np.quantile(drawn, 0.95, axis=0), rtol=1e-6, atol=1e-9)


@pytest.mark.parametrize("generalised", [True, False])
@pytest.mark.parametrize("constant", [True, False])
def test_the_true_r2_of_the_bootstrap_world_is_what_the_grid_says(constant: bool, generalised: bool) -> None:
    """With next to no noise in a sample, its R² is the true one: the quantiles close in on the diagonal."""
    draw = np.random.default_rng(6)
    F = 1e-3 * draw.normal(size=(1500, 2))
    betas = draw.normal(0.9, 0.5, size=(8, 2))
    R = draw.normal(size=8) + F @ betas.T + 1e-5 * draw.normal(size=(1500, 8))
    betas = two_pass(R, F, constant=constant).betas
    got = r2_interval(R, F, betas, constant=constant, generalised=generalised, draws=99)
    assert_allclose(got.low[1:-1], got.grid[1:-1], atol=0.05)
    assert_allclose(got.high[1:-1], got.grid[1:-1], atol=0.05)
    if not generalised:
        assert abs(got.sample - (got.interval.low + got.interval.high) / 2) < 0.01


def test_the_same_seed_gives_the_same_interval_and_more_level_a_wider_one() -> None:
    R, F = market(13)
    betas = two_pass(R, F).betas
    first, again, other = (
        r2_interval(R, F, betas, constant=True, draws=300, seed=seed) for seed in (1, 1, 2)
    )
    assert first.interval == again.interval
    assert not np.array_equal(first.low, other.low)
    narrow = r2_interval(R, F, betas, constant=True, draws=300, seed=1, level=0.6)
    assert narrow.interval.low >= first.interval.low
    assert narrow.interval.high <= first.interval.high
    assert narrow.interval.high - narrow.interval.low < first.interval.high - first.interval.low


@pytest.mark.simulation
def test_the_interval_covers_the_true_r2() -> None:
    """Coverage of the 90% interval over samples whose true R² is known to be a half."""
    draw = np.random.default_rng(8)
    N, T, samples = 10, 200, 120
    B = np.column_stack([np.ones(N), np.linspace(-1.0, 1.0, N)])
    q, _ = np.linalg.qr(np.column_stack([B, draw.normal(size=N)]))
    mean = 0.5 + 0.4 * (q[:, 1] + q[:, 2])  # as much along the betas as across them
    covered = 0
    for i in range(samples):
        F = draw.normal(size=(T, 1))
        R = mean + F @ B[:, 1:].T + draw.normal(size=(T, N))
        betas = two_pass(R, F).betas
        got = r2_interval(R, F, betas, constant=True, draws=250, level=0.9, seed=i)
        covered += isinstance(got.interval, Interval) and 0.5 in got.interval
    assert 0.82 <= covered / samples <= 0.98


def test_intervals_that_do_not_exist_say_why() -> None:
    R, F = market(9, T=40, N=30)
    betas = two_pass(R, F).betas
    many = r2_interval(R, F, betas, constant=True, generalised=True)
    assert isinstance(many, NotApplicable)
    assert "too many for 40 periods" in many.reason
    exact = r2_interval(R[:, :3], F, betas[:3], constant=True)
    assert isinstance(exact, NotApplicable)
    assert "fitted exactly" in exact.reason
    same = R - R.mean(axis=0) + 0.01
    assert isinstance(r2_interval(same, F, betas, constant=True), NotApplicable)
    twice = np.column_stack([R[:, :5], R[:, 0]])
    repeated = r2_interval(twice, F, two_pass(twice, F).betas, constant=True, generalised=True)
    assert isinstance(repeated, NotApplicable)
    assert "repeat others" in repeated.reason
    with pytest.raises(EstimationError, match="99 or more"):
        r2_interval(R, F, betas, constant=True, draws=10)


def test_a_fit_worse_than_any_true_r2_would_give_has_no_interval() -> None:
    """Mean returns almost orthogonal to betas on purpose: even a true R² of zero would fit better by chance."""
    R, F = market(10)
    betas = two_pass(R, F).betas
    Z = np.column_stack([np.ones(8), betas])
    draw = np.random.default_rng(1)
    across = draw.normal(size=8)
    across -= Z @ np.linalg.lstsq(Z, across, rcond=None)[0]
    hidden = R - R.mean(axis=0) + 0.01 * across / np.abs(across).max() + 1e-7 * betas[:, 0]
    got = r2_interval(hidden, F, betas, constant=True, draws=300, level=0.9)
    assert got.sample < 1e-6
    assert isinstance(got.interval, NotApplicable)
    assert "no true R²" in got.interval.reason
