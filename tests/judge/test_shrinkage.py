"""Alphas under a ceiling: against Monte Carlo integration, direct optimisation, and the edges."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize, special, stats

from soffit.errors import SettingError
from soffit.estimate.regression import Regression, regress
from soffit.estimate.statistic import NotApplicable
from soffit.judge.joint import JointAlphas, joint_alphas
from soffit.judge.shrinkage import (
    CeilingPrior,
    IntervalBasis,
    bounded_alphas,
    nearest_alphas,
    prior_scale,
    shrunk_alphas,
)


def sample(
    T: int = 60, N: int = 3, K: int = 2, seed: int = 3, alpha: float = 0.004
) -> tuple[Regression, JointAlphas]:
    rng = np.random.default_rng(seed)
    f = rng.normal(0.005, 0.04, (T, K))
    mix = np.eye(N) + 0.3 * rng.normal(size=(N, N))
    returns = (
        alpha + f @ rng.normal(1, 0.3, (K, N)) + rng.normal(0, 0.02, (T, N)) @ mix
        if K
        else alpha + rng.normal(0, 0.02, (T, N))
    )
    regression = regress(returns, f)
    return regression, joint_alphas(regression)


def inverse_wishart_draws(regression: Regression, draws: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Roots L of Σ⁻¹ = L L' with Σ inverse Wishart: T − K degrees of freedom, scale E'E. And standard normals."""
    rng = np.random.default_rng(seed)
    e = regression.residuals
    precision = stats.wishart(regression.periods - regression.width, np.linalg.inv(e.T @ e)).rvs(
        draws, random_state=rng
    )
    N = regression.count
    return np.linalg.cholesky(precision.reshape(draws, N, N)), rng.normal(size=(draws, N))


def log_likelihoods(
    regression: Regression, ceiling: float, draws: int, seed: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Log likelihood terms of α = 0 and of α drawn from the prior, and those α, one row a draw."""
    root, z = inverse_wishart_draws(regression, draws, seed)
    a = (1 + regression.factors.theta2) / regression.periods
    k = float(prior_scale(ceiling, regression.factors.theta2, regression.count))
    drawn = np.sqrt(k) * np.linalg.solve(root.transpose(0, 2, 1), z[:, :, None])[:, :, 0]
    zero = np.einsum("dij,i->dj", root, regression.alpha)
    off = np.einsum("dij,di->dj", root, regression.alpha - drawn)
    return -0.5 * (zero**2).sum(axis=1) / a, -0.5 * (off**2).sum(axis=1) / a, drawn


@pytest.mark.simulation
@pytest.mark.parametrize("seed", [3, 4])
def test_bayes_factor_by_monte_carlo_integration(seed: int) -> None:
    # Both marginal likelihoods over the inverse-Wishart posterior of Σ, α integrated by draws from the prior:
    # no closed form of Barillas and Shanken (2018) is used.
    regression, joint = sample(seed=seed)
    ceiling = np.sqrt(joint.theta_f2 + 0.06)
    zero, prior, _ = log_likelihoods(regression, ceiling, 200_000, seed)
    top = zero.max()
    ratio = np.mean(np.exp(zero - top)) / np.mean(np.exp(prior - top))
    error = np.hypot(
        np.std(np.exp(zero - top)) / np.mean(np.exp(zero - top)),
        np.std(np.exp(prior - top)) / np.mean(np.exp(prior - top)),
    ) / np.sqrt(len(zero))
    assert error < 0.02
    assert float(CeilingPrior(joint).log_bayes_factor(ceiling)) == pytest.approx(np.log(ratio), abs=4 * error)


@pytest.mark.simulation
def test_posterior_alphas_by_weighting_draws_from_the_prior() -> None:
    regression, joint = sample(T=40)
    ceiling = np.sqrt(joint.theta_f2 + 0.09)
    _, prior, drawn = log_likelihoods(regression, ceiling, 300_000, 5)
    weight = np.exp(prior - prior.max())
    weight /= weight.sum()
    shrunk = shrunk_alphas(regression, ceiling, level=0.9)
    effective = 1 / np.sum(weight**2)
    assert effective > 2000
    for i in range(3):
        order = np.argsort(drawn[:, i])
        below = np.cumsum(weight[order])
        at = np.interp([shrunk.low[i], shrunk.high[i]], drawn[order, i], below)
        np.testing.assert_allclose(at, [0.05, 0.95], atol=4 * np.sqrt(0.05 * 0.95 / effective))
        spread = np.sqrt(weight @ (drawn[:, i] - shrunk.mean[i]) ** 2)
        assert weight @ drawn[:, i] == pytest.approx(shrunk.mean[i], abs=4 * spread / np.sqrt(effective))


def test_bayes_factor_as_written_in_the_source() -> None:
    # Barillas and Shanken (2018), the formula term by term.
    _, joint = sample()
    T, N, K = 60, 3, 2
    W = T * joint.quadratic / (1 + joint.theta_f2)
    a = (1 + joint.theta_f2) / T
    for s2 in (joint.theta_f2 + 0.01, joint.theta_f2 + 0.2):
        k = (s2 - joint.theta_f2) / N
        factor = (
            (1 + W / T) ** (-(T - K) / 2)
            * (1 + k / a) ** (N / 2)
            * (1 + a / (a + k) * W / T) ** ((T - K) / 2)
        )
        mine = CeilingPrior(joint).log_bayes_factor(np.sqrt(s2))
        assert float(np.exp(mine)) == pytest.approx(factor, rel=1e-10)


def test_bayes_factor_is_lowest_at_the_best_supported_ceiling() -> None:
    _, joint = sample(alpha=0.01)
    prior = CeilingPrior(joint)
    found = optimize.minimize_scalar(
        lambda s: float(prior.log_bayes_factor(s)),
        bounds=(np.sqrt(joint.theta_f2) + 1e-6, 3.0),
        method="bounded",
        options={"xatol": 1e-10},
    )
    assert prior.best_supported == pytest.approx(found.x, rel=1e-5)
    quiet = sample(alpha=0.0, seed=11)[1]
    assert quiet.grs.value < 1
    assert CeilingPrior(quiet).best_supported == pytest.approx(np.sqrt(quiet.theta_f2))


def test_a_grid_gives_what_single_ceilings_give() -> None:
    prior = CeilingPrior(sample()[1])
    grid = np.linspace(0.0, 1.5, 31)
    many = prior.log_bayes_factor(grid)
    np.testing.assert_array_equal(many, [float(prior.log_bayes_factor(s)) for s in grid])
    theta_f = np.sqrt(prior.joint.theta_f2)
    np.testing.assert_array_equal(np.isnan(many), grid < theta_f)
    probability = prior.probability_of_zero(grid, prior_odds=2.0)
    np.testing.assert_allclose(probability, special.expit(many + np.log(2.0)))


def test_the_posterior_mean_is_the_weighted_middle_of_prior_and_estimate() -> None:
    regression, joint = sample()
    ceiling = 0.5
    shrunk = shrunk_alphas(regression, ceiling)
    a = (1 + joint.theta_f2) / 60
    k = (ceiling**2 - joint.theta_f2) / 3
    np.testing.assert_allclose(shrunk.mean, (regression.alpha / a) / (1 / a + 1 / k), rtol=1e-12)
    assert shrunk.weight == pytest.approx(float(CeilingPrior(joint).weight(ceiling)), rel=1e-14)


def test_a_ceiling_far_off_leaves_the_classical_interval() -> None:
    # With k → ∞ and one asset the posterior is α̂ ± t(T − K) √(a e'e/(T − K)).
    regression, _ = sample(N=1)
    shrunk = shrunk_alphas(regression, 1e6)
    half = stats.t.ppf(0.975, 58) * np.sqrt(
        (1 + regression.factors.theta2) / 60 * np.sum(regression.residuals**2) / 58
    )
    np.testing.assert_allclose(shrunk.high - shrunk.mean, half, rtol=1e-6)
    np.testing.assert_allclose(shrunk.mean, regression.alpha, rtol=1e-6)


def test_at_the_factors_own_ratio_every_alpha_is_zero() -> None:
    regression, joint = sample()
    ceiling = float(np.sqrt(joint.theta_f2))
    shrunk = shrunk_alphas(regression, ceiling)
    assert shrunk.weight == 0.0
    np.testing.assert_array_equal(np.stack([shrunk.mean, shrunk.low, shrunk.high]), 0.0)
    assert float(CeilingPrior(joint).log_bayes_factor(ceiling)) == 0.0
    np.testing.assert_array_equal(nearest_alphas(regression, joint, ceiling), 0.0)


def test_below_the_factors_nothing_is_defined_and_says_so() -> None:
    regression, joint = sample()
    for answer in (shrunk_alphas(regression, 0.0), nearest_alphas(regression, joint, 0.0)):
        assert isinstance(answer, NotApplicable)
        assert "the factors alone already reach" in answer.reason
    assert np.isnan(CeilingPrior(joint).weight(0.0))


def test_no_alphas_favour_zero_at_every_ceiling() -> None:
    # Q = 0: the factor is (1 + k/a)^{N/2}.
    joint = JointAlphas(3, 1, 60, 0.01, 0.0, sample()[1].grs)
    factor = CeilingPrior(joint).log_bayes_factor([0.1, 0.3, 1.0])
    k_over_a = (np.array([0.01, 0.09, 1.0]) - 0.01) / 3 / (1.01 / 60)
    np.testing.assert_allclose(factor, 1.5 * np.log1p(k_over_a), rtol=1e-12, atol=1e-15)
    regression, _ = sample()
    np.testing.assert_array_equal(nearest_alphas(regression, joint, 0.5), regression.alpha)


def test_more_assets_than_periods_are_taken_one_at_a_time() -> None:
    regression, joint = sample(T=24, N=40)
    shrunk = shrunk_alphas(regression, 0.6)
    assert shrunk.basis is IntervalBasis.ALONE
    assert shrunk.df == 22
    assert (shrunk.low < shrunk.mean).all()
    prior = CeilingPrior(joint)
    for answer in (
        prior.log_bayes_factor(0.6),
        prior.probability_of_zero(0.6),
        prior.best_supported,
        nearest_alphas(regression, joint, 0.6),
    ):
        assert isinstance(answer, NotApplicable)
        assert "no degrees of freedom" in answer.reason


def test_an_asset_the_factors_replicate_has_no_alpha_to_use() -> None:
    rng = np.random.default_rng(0)
    f = rng.normal(0.01, 0.04, (40, 1))
    regression = regress(np.column_stack([0.5 * f[:, 0], rng.normal(0.01, 0.03, 40)]), f)
    shrunk = shrunk_alphas(regression, 1.0)
    assert (shrunk.mean[0], shrunk.low[0], shrunk.high[0]) == (0.0, 0.0, 0.0)
    assert shrunk.mean[1] != 0.0


@given(seed=st.integers(0, 500), low=st.floats(0.0, 2.0), high=st.floats(0.0, 2.0))
@settings(max_examples=30, deadline=None)
def test_a_higher_ceiling_keeps_more(seed: int, low: float, high: float) -> None:
    regression, joint = sample(seed=seed)
    theta_f = np.sqrt(joint.theta_f2)
    low, high = theta_f + min(low, high), theta_f + max(low, high)
    less, more = shrunk_alphas(regression, low), shrunk_alphas(regression, high)
    assert 0.0 <= less.weight <= more.weight < 1.0
    near = nearest_alphas(regression, joint, low)
    assert np.all(np.abs(near) <= np.abs(regression.alpha) * (1 + 1e-12))


def test_no_alphas_that_fit_are_nearer() -> None:
    regression, joint = sample(alpha=0.02)
    room = 0.3 * joint.quadratic
    nearest = nearest_alphas(regression, joint, float(np.sqrt(joint.theta_f2 + room)))
    precision = np.linalg.inv(regression.residuals.T @ regression.residuals / 60)
    assert nearest @ precision @ nearest == pytest.approx(room, rel=1e-10)

    def length(x: np.ndarray) -> np.ndarray:
        return np.einsum("...i,ij,...j->...", x, precision, x)

    # Rivals: the nearest ones shaken, from slightly to entirely, and brought back onto the ceiling.
    rng = np.random.default_rng(0)
    shake = np.geomspace(1e-4, 1.0, 4000)[:, None] * rng.normal(size=(4000, 3)) * np.abs(nearest).max()
    rivals = nearest + shake
    rivals *= np.sqrt(room / length(rivals))[:, None]
    best = length(nearest - regression.alpha)
    assert (length(rivals - regression.alpha) >= best * (1 - 1e-10)).all()


def test_hard_bound_stays_within_and_far_tails_hold() -> None:
    alpha = np.array([0.0, 0.05, -0.05, 0.4])
    error, bound = np.full(4, 0.01), np.array([0.02, 0.02, 0.02, 0.0])
    posterior = bounded_alphas(alpha, error, bound)
    assert (np.abs(posterior.mean) <= bound).all()
    assert (posterior.low >= -bound).all()
    assert (posterior.high <= bound).all()
    assert posterior.mean[2] == pytest.approx(-posterior.mean[1], rel=1e-12)
    # Three errors outside: the mean is the bound less Mills' ratio; Greene, Econometric Analysis, theorem 19.2.
    reference = stats.truncnorm(-7, -3, 0.05, 0.01)
    assert posterior.mean[1] == pytest.approx(reference.mean(), rel=1e-9)
    assert posterior.inside[0] == pytest.approx(np.log(stats.norm.cdf(2) - stats.norm.cdf(-2)), rel=1e-12)
    undefined = bounded_alphas(alpha[:1], error[:1], np.array([np.nan]))
    assert np.isnan(undefined.mean[0])


def test_refusals() -> None:
    regression, joint = sample()
    with pytest.raises(SettingError, match="ceiling"):
        shrunk_alphas(regression, -0.1)
    with pytest.raises(SettingError, match="ceiling"):
        CeilingPrior(joint).log_bayes_factor([0.5, np.nan])
    with pytest.raises(SettingError, match="interval level"):
        shrunk_alphas(regression, 0.5, level=1.0)
    with pytest.raises(SettingError, match="prior odds"):
        CeilingPrior(joint).probability_of_zero(0.5, 0.0)
