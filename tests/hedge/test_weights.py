"""Hedge ratios re-derived by literal loops and by other libraries."""

from __future__ import annotations

import itertools

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize
from tests.universes import INDUSTRIES

from soffit.errors import EstimationError, SettingError
from soffit.estimate.regression import least_squares, regress
from soffit.hedge.mimicking import mimicking_portfolios
from soffit.hedge.quadratic import nearest_within, select_legs
from soffit.hedge.weights import HedgeRule, beta_prior, hedge_ratios
from soffit.settings import HedgeBeta

FACTORS = ["MktRF", "SMB", "HML", "Mom"]


def _french(frame: pd.DataFrame, start: str, end: str) -> tuple[np.ndarray, np.ndarray]:
    part = frame.loc[start:end]
    return part[INDUSTRIES].sub(part["RF"], axis=0).to_numpy(), part[FACTORS].to_numpy()


def _random(seed: int, T: int, N: int, K: int) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    factors = rng.normal(0.004, 0.04, (T, K)) @ (np.eye(K) + 0.3 * rng.normal(size=(K, K)))
    returns = 0.002 + factors @ rng.normal(0.7, 0.5, (K, N)) + rng.normal(0, 0.03, (T, N))
    return returns, factors


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10_000), st.integers(0, 60), st.integers(1, 5), st.integers(1, 5))
def test_in_sample_the_plain_hedge_earns_alpha_with_variance_sigma_squared(
    seed: int, spare: int, N: int, K: int
) -> None:
    # Identity of least squares; divisor T - K - 1 for both variances.
    returns, factors = _random(seed, K + 3 + spare, N, K)
    hedge, fit = hedge_ratios(returns, factors), regress(returns, factors)
    hedged = returns - factors @ hedge.ratios.T
    df = len(returns) - K - 1
    np.testing.assert_allclose(hedged.mean(axis=0), fit.alpha, rtol=0, atol=1e-12)
    np.testing.assert_allclose(
        ((hedged - hedged.mean(axis=0)) ** 2).sum(axis=0) / df, fit.sigma**2, rtol=0, atol=1e-12
    )
    np.testing.assert_allclose(hedge.mean, fit.alpha, rtol=0, atol=1e-12)
    np.testing.assert_allclose(hedge.volatility**2, fit.sigma**2, rtol=0, atol=1e-12)
    np.testing.assert_allclose(hedge.effectiveness, fit.r2, rtol=0, atol=1e-12)
    assert np.abs(factors.T @ (hedged - hedged.mean(axis=0))).max() < 1e-12


def test_hedge_does_not_change_with_the_scale_of_a_leg(french: pd.DataFrame) -> None:
    returns, factors = _french(french, "1990", "1999")
    once = hedge_ratios(returns, factors)
    scaled = hedge_ratios(returns, factors * np.array([1.0, 10.0, 0.1, 3.0]))
    np.testing.assert_allclose(scaled.ratios * np.array([1.0, 10.0, 0.1, 3.0]), once.ratios, atol=1e-10)
    np.testing.assert_allclose(scaled.volatility, once.volatility, atol=1e-14)


def test_vasicek_by_a_loop(french: pd.DataFrame) -> None:
    # Vasicek (1973); prior variance of true betas as in Lally (1998).
    returns, factors = _french(french, "1990", "1994")
    hedge = hedge_ratios(returns, factors, HedgeRule(beta=HedgeBeta.VASICEK))
    betas, errors = [], []
    for column in returns.T:
        fit = sm.OLS(column, sm.add_constant(factors)).fit()
        betas.append(fit.params[1:])
        errors.append(fit.bse[1:])
    for k in range(len(FACTORS)):
        own = [beta[k] for beta in betas]
        noise = [error[k] ** 2 for error in errors]
        centre = sum(own) / len(own)
        prior = sum((b - centre) ** 2 for b in own) / (len(own) - 1) - sum(noise) / len(noise)
        prior = max(prior, 0.0)
        for i, (b, v) in enumerate(zip(own, noise, strict=True)):
            expected = (b * prior + centre * v) / (prior + v)
            assert hedge.ratios[i, k] == pytest.approx(expected, abs=1e-12)
            assert min(b, centre) - 1e-12 <= hedge.ratios[i, k] <= max(b, centre) + 1e-12


def test_a_prior_from_elsewhere_and_a_fit_that_is_there_are_used(french: pd.DataFrame) -> None:
    returns, factors = _french(french, "1990", "1994")
    rule = HedgeRule(beta=HedgeBeta.VASICEK)
    whole, fit = hedge_ratios(returns, factors, rule), least_squares(returns, factors)
    prior = beta_prior(fit.coefficients[None, :, 1:], fit.errors[None, :, 1:] ** 2)
    for i in range(12):
        alone = hedge_ratios(returns[:, [i]], factors, rule, prior=prior)
        np.testing.assert_allclose(alone.ratios[0], whole.ratios[i], atol=1e-12)
    np.testing.assert_array_equal(hedge_ratios(returns, factors, rule, fit=fit).ratios, whole.ratios)


def test_vasicek_collapses_to_the_mean_when_betas_differ_by_noise_only() -> None:
    rng = np.random.default_rng(5)
    factors = rng.normal(0, 0.01, (20, 1))
    returns = factors + rng.normal(0, 0.2, (20, 3)) * 0 + 0.2 * np.column_stack([rng.normal(size=20)] * 3)
    returns += 1e-3 * rng.normal(size=(20, 3))
    hedge = hedge_ratios(returns, factors, HedgeRule(beta=HedgeBeta.VASICEK))
    np.testing.assert_allclose(hedge.ratios, hedge.beta.mean(), atol=1e-12)


@pytest.mark.parametrize("lags", [1, 3])
def test_dimson_against_statsmodels(french: pd.DataFrame, lags: int) -> None:
    # Dimson (1979): the sum of the betas on current and lagged factor returns.
    returns, factors = _french(french, "1980", "1989")
    hedge = hedge_ratios(returns, factors, HedgeRule(beta=HedgeBeta.DIMSON, dimson_lags=lags))
    for i, column in enumerate(returns.T):
        table = np.column_stack([factors[lags - lag : len(factors) - lag] for lag in range(lags + 1)])
        slopes = sm.OLS(column[lags:], sm.add_constant(table)).fit().params[1:]
        expected = [sum(slopes[lag * 4 + k] for lag in range(lags + 1)) for k in range(4)]
        np.testing.assert_allclose(hedge.ratios[i], expected, atol=1e-11)


def test_dimson_recovers_the_beta_of_a_stale_price() -> None:
    rng = np.random.default_rng(11)
    factors = rng.normal(0.005, 0.04, (2000, 1))
    true = 1.2 * factors[1:, 0] * 0.6 + 1.2 * factors[:-1, 0] * 0.4
    returns = np.column_stack([true + rng.normal(0, 0.01, 1999)])
    plain = hedge_ratios(returns, factors[1:])
    lagged = hedge_ratios(returns, factors[1:], HedgeRule(beta=HedgeBeta.DIMSON))
    assert plain.ratios[0, 0] == pytest.approx(0.72, abs=0.03)
    assert lagged.ratios[0, 0] == pytest.approx(1.2, abs=0.03)


def test_ridge_against_augmented_rows(french: pd.DataFrame) -> None:
    # Hoerl and Kennard (1970): ridge is least squares with K further rows sqrt(penalty) * I.
    returns, factors = _french(french, "2000", "2004")
    hedge = hedge_ratios(returns, factors, HedgeRule(beta=HedgeBeta.RIDGE, ridge=0.3))
    centred = factors - factors.mean(axis=0)
    penalty = 0.3 * (centred**2).sum() / 4
    wide = np.vstack([centred, np.sqrt(penalty) * np.eye(4)])
    for i, column in enumerate(returns.T):
        target = np.concatenate([column - column.mean(), np.zeros(4)])
        np.testing.assert_allclose(hedge.ratios[i], np.linalg.lstsq(wide, target, rcond=None)[0], atol=1e-12)
    none = hedge_ratios(returns, factors, HedgeRule(beta=HedgeBeta.RIDGE, ridge=0.0))
    np.testing.assert_allclose(none.ratios, none.beta, atol=1e-12)


def test_leg_choice_by_trying_every_subset_on_the_data(french: pd.DataFrame) -> None:
    returns, factors = _french(french, "1990", "1999")
    costs, aversion = (4e-4, 3e-4, 2e-4, 1e-4), 3.0
    hedge = hedge_ratios(returns, factors, HedgeRule(leg_costs=costs, risk_aversion=aversion))
    assert hedge.legs is not None
    dropped = 0
    for i, column in enumerate(returns.T):
        best, lowest = np.zeros(4), np.inf
        for size in range(5):
            for subset in itertools.combinations(range(4), size):
                ratios = np.zeros(4)
                if subset:
                    x = sm.add_constant(factors[:, subset])
                    ratios[list(subset)] = sm.OLS(column, x).fit().params[1:]
                left = column - factors @ ratios
                value = 0.5 * aversion * left.var(ddof=1) + np.abs(ratios) @ np.array(costs)
                if value < lowest:
                    best, lowest = ratios, value
        np.testing.assert_allclose(hedge.ratios[i], best, atol=1e-10)
        dropped += int((best == 0).sum())
        full = sm.OLS(column, sm.add_constant(factors)).fit()
        for k in range(4):
            rest = sm.OLS(column, sm.add_constant(np.delete(factors, k, axis=1))).fit()
            saved = 0.5 * aversion * (rest.ssr - full.ssr) / (len(column) - 1)
            assert hedge.legs.saving[i, k] == pytest.approx(saved, rel=1e-8, abs=1e-15)
            assert hedge.legs.cost[i, k] == pytest.approx(abs(full.params[k + 1]) * costs[k], rel=1e-9)
    assert 0 < dropped < 48  # the case is not trivial
    np.testing.assert_array_equal(hedge.legs.kept, hedge.ratios != 0)


def test_leg_costs_of_zero_drop_nothing_and_prohibitive_ones_everything(french: pd.DataFrame) -> None:
    returns, factors = _french(french, "1990", "1999")
    free = hedge_ratios(returns, factors, HedgeRule(leg_costs=(0.0,) * 4))
    np.testing.assert_allclose(free.ratios, free.beta, atol=1e-14)
    dear = hedge_ratios(returns, factors, HedgeRule(leg_costs=(1.0,) * 4))
    np.testing.assert_array_equal(dear.ratios, 0.0)
    np.testing.assert_allclose(dear.effectiveness, 0.0, atol=1e-14)


def test_many_legs_are_dropped_one_at_a_time_and_never_worsen_the_objective() -> None:
    rng = np.random.default_rng(3)
    root = rng.normal(size=(10, 10)) * 0.02
    covariance = root @ root.T + 1e-4 * np.eye(10)
    target, costs = rng.normal(size=(1, 3, 10)), np.full(10, 1e-3)
    choice = select_legs(target, covariance[None], costs, 3.0)
    assert choice.kept.any()
    assert not choice.kept.all()
    for i in range(3):

        def value(h: np.ndarray, i: int = i) -> float:
            gap = h - target[0, i]
            return float(1.5 * gap @ covariance @ gap + np.abs(h) @ costs)

        chosen = value(choice.ratios[0, i])
        assert chosen <= value(target[0, i])
        # No single further leg can be dropped with profit.
        kept = np.flatnonzero(choice.kept[0, i])
        for leg in kept:
            inside = np.setdiff1d(kept, [leg])
            trial = np.zeros(10)
            trial[inside] = np.linalg.solve(
                covariance[np.ix_(inside, inside)], covariance[inside] @ target[0, i]
            )
            assert value(trial) >= chosen - 1e-15


def test_leg_cap_against_bounded_least_squares(french: pd.DataFrame) -> None:
    returns, factors = _french(french, "1990", "1999")
    hedge = hedge_ratios(returns, factors, HedgeRule(leg_cap=0.4))
    centred = factors - factors.mean(axis=0)
    for i, column in enumerate(returns.T):
        found = optimize.lsq_linear(centred, column - column.mean(), (-0.4, 0.4), method="bvls", tol=1e-14).x
        np.testing.assert_allclose(hedge.ratios[i], found, atol=1e-9)
    assert hedge.capped.any()


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10_000), st.integers(1, 6), st.floats(0.05, 3.0), st.sampled_from([None, 0.3, 1.0]))
def test_capped_ratios_satisfy_the_optimality_conditions(
    seed: int, K: int, gross: float, leg: float | None
) -> None:
    # Karush-Kuhn-Tucker: the gradient is balanced by one price of gross exposure and by leg caps that bind.
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(K, K)) + 0.5 * np.eye(K)
    metric = root @ root.T + 0.05 * np.eye(K)
    target = rng.normal(size=(1, 1, K)) * 1.5
    cap = np.inf if leg is None else leg
    found, changed = nearest_within(target, metric[None], np.array(cap), gross)
    h, b = found[0, 0], target[0, 0]
    assert np.abs(h).sum() <= gross + 1e-9
    assert np.abs(h).max() <= cap + 1e-12
    pull = metric @ (b - h)
    if not changed[0, 0]:
        np.testing.assert_array_equal(h, b)
        return
    free = (np.abs(h) > 1e-9) & (np.abs(h) < cap - 1e-9)
    price = float((pull * np.sign(h))[free].mean()) if free.any() else float("nan")
    scale = np.abs(metric).max() * np.abs(b).max()
    if free.any():
        np.testing.assert_allclose((pull * np.sign(h))[free], price, atol=1e-7 * scale)
        assert price >= -1e-7 * scale
        if np.abs(h).sum() < gross - 1e-7:
            assert abs(price) <= 1e-6 * scale
        assert (np.abs(pull[np.abs(h) <= 1e-9]) <= price + 1e-6 * scale).all()
        assert ((pull * np.sign(h))[np.abs(h) >= cap - 1e-9] >= price - 1e-6 * scale).all()


def test_gross_cap_against_sequential_quadratic_programming(french: pd.DataFrame) -> None:
    returns, factors = _french(french, "1990", "1999")
    rule = HedgeRule(gross_cap=0.9, leg_cap=0.7)
    hedge = hedge_ratios(returns, factors, rule)
    centred = factors - factors.mean(axis=0)
    for i, column in enumerate(returns.T):
        own = column - column.mean()

        def ssr(sides: np.ndarray, own: np.ndarray = own) -> float:
            return float(((own - centred @ (sides[:4] - sides[4:])) ** 2).sum() * 100)

        best = optimize.minimize(
            ssr,
            np.full(8, 0.05),
            bounds=[(0, 0.7)] * 8,
            constraints=[{"type": "ineq", "fun": lambda s: 0.9 - s.sum()}],
            method="SLSQP",
            options={"ftol": 1e-15, "maxiter": 1000},
        ).x
        np.testing.assert_allclose(hedge.ratios[i], best[:4] - best[4:], atol=2e-5)
        mine = ((own - centred @ hedge.ratios[i]) ** 2).sum() * 100
        assert mine <= ssr(best) + 1e-9
    assert hedge.gross.max() <= 0.9 + 1e-9


def test_caps_that_bind_together_are_solved() -> None:
    # Two legs at 0.5 use up a gross cap of 1: no leg is free to set the price of gross exposure.
    metric = np.array([[2.0, 0.3, 0.1], [0.3, 1.0, 0.2], [0.1, 0.2, 1.0]])
    found, _ = nearest_within(np.array([[[2.0, -1.5, 0.1]]]), metric[None], np.array(0.5), 1.0)
    np.testing.assert_allclose(found[0, 0], [0.5, -0.5, 0.0], atol=1e-15)


def test_nearly_collinear_legs_under_a_cap_are_still_solved() -> None:
    rng = np.random.default_rng(8)
    x = rng.normal(size=(200, 1))
    factors = np.column_stack([x, x + 1e-6 * rng.normal(size=(200, 1))])
    metric = np.cov(factors.T)
    target = np.array([[[5.0, -3.0]]])
    found, _ = nearest_within(target, metric[None], np.array(np.inf), 1.0)
    # Both legs are the same asset but for a millionth: 2 units wanted, 1 allowed.
    assert np.abs(found).sum() == pytest.approx(1.0, abs=1e-6)
    assert found.sum() == pytest.approx(1.0, abs=1e-6)


def test_dropped_legs_stay_dropped_under_caps(french: pd.DataFrame) -> None:
    returns, factors = _french(french, "1990", "1999")
    costs = (4e-4, 3e-4, 2e-4, 1e-4)
    free = hedge_ratios(returns, factors, HedgeRule(leg_costs=costs))
    capped = hedge_ratios(returns, factors, HedgeRule(leg_costs=costs, gross_cap=0.8))
    np.testing.assert_array_equal(capped.ratios[free.ratios == 0], 0.0)
    assert capped.gross.max() <= 0.8 + 1e-9


def test_mimicking_portfolio_is_the_projection_on_the_base(french: pd.DataFrame) -> None:
    returns, factors = _french(french, "1960", "1999")
    rng = np.random.default_rng(2)
    macro = (0.5 * factors[:, 0] - 0.2 * factors[:, 2] + rng.normal(0, 0.05, len(factors)))[:, None]
    found = mimicking_portfolios(macro, returns)
    fit = sm.OLS(macro[:, 0], sm.add_constant(returns)).fit()
    np.testing.assert_allclose(found.weights[0], fit.params[1:], atol=1e-11)
    assert found.r2[0] == pytest.approx(fit.rsquared, abs=1e-12)
    assert found.tests[0].value == pytest.approx(fit.fvalue, rel=1e-9)
    assert found.tests[0].pvalue == pytest.approx(fit.f_pvalue, rel=1e-6)
    # One unit of the portfolio moves one for one with the spanned part of the factor.
    own = found.returns[:, 0]
    assert np.cov(own, macro[:, 0])[0, 1] / own.var(ddof=1) == pytest.approx(1.0, abs=1e-10)
    # No other portfolio of the base is more correlated with it.
    best = np.corrcoef(own, macro[:, 0])[0, 1]
    for seed in range(5):
        other = returns @ (found.weights[0] + 0.02 * np.random.default_rng(seed).normal(size=12))
        assert np.corrcoef(other, macro[:, 0])[0, 1] < best
    np.testing.assert_allclose(found.on(returns[:7]), found.returns[:7])
    np.testing.assert_allclose(found.in_base(np.array([[2.0]])), 2.0 * found.weights)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"gross_cap": 0.0}, "admits no hedge"),
        ({"leg_cap": -1.0}, "admits no hedge"),
        ({"leg_cap": float("nan")}, "admits no hedge"),
        ({"leg_costs": (1e-4, -1e-4)}, "costs of zero or more"),
        ({"ridge": -0.1}, "ridge penalty"),
        ({"risk_aversion": 0.0}, "risk aversion"),
        ({"beta": HedgeBeta.DIMSON, "dimson_lags": 0}, "at least one lag"),
    ],
)
def test_rules_that_cannot_be_followed_are_refused(change: dict[str, object], words: str) -> None:
    with pytest.raises(SettingError, match=words):
        HedgeRule(**change)  # type: ignore[arg-type]


def test_samples_that_cannot_be_hedged_are_refused() -> None:
    returns, factors = _random(1, 30, 2, 2)
    with pytest.raises(EstimationError, match="has 3 rows"):
        hedge_ratios(returns[:3], factors[:3])
    still = factors.copy()
    still[:, 1] = 0.01
    with pytest.raises(EstimationError, match="'SMB' is constant"):
        hedge_ratios(returns, still, names=["MktRF", "SMB"])
    gap = factors.copy()
    gap[4, 0] = np.nan
    with pytest.raises(EstimationError, match="missing or infinite"):
        hedge_ratios(returns, gap)
    with pytest.raises(EstimationError, match="at least two assets"):
        hedge_ratios(returns[:, :1], factors, HedgeRule(beta=HedgeBeta.VASICEK))
    with pytest.raises(EstimationError, match="3 leg costs for 2 factors"):
        hedge_ratios(returns, factors, HedgeRule(leg_costs=(1e-4,) * 3))
    with pytest.raises(EstimationError, match="does not move"):
        mimicking_portfolios(np.ones((30, 1)), factors)


def test_an_asset_that_the_legs_replicate_is_hedged_to_nothing() -> None:
    _, factors = _random(1, 30, 2, 2)
    hedge = hedge_ratios((factors @ np.array([0.5, -2.0]))[:, None], factors)
    np.testing.assert_allclose(hedge.ratios, [[0.5, -2.0]], atol=1e-12)
    assert hedge.effectiveness[0] == pytest.approx(1.0, abs=1e-12)
    assert hedge.volatility[0] < 1e-15
    flat = hedge_ratios(np.zeros((30, 1)), factors)
    assert np.isnan(flat.effectiveness[0])
    np.testing.assert_array_equal(flat.ratios, 0.0)
