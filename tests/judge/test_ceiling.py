"""The ceiling: bounds, exact p-values, status, the joint curve, and its edges."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy import stats

from soffit.errors import SettingError
from soffit.estimate.regression import regress
from soffit.estimate.statistic import NotApplicable
from soffit.judge.ceiling import AlphaTable, JointCeiling, Status, bound_factor
from soffit.judge.joint import joint_alphas
from soffit.judge.multiplicity import Adjustment
from soffit.settings import CeilingForm

FORMS = list(CeilingForm)


def _fit(seed: int = 1, periods: int = 120, count: int = 6, width: int = 2, alpha: float = 0.002):  # type: ignore[no-untyped-def]
    draw = np.random.default_rng(seed)
    factors = draw.normal(0.005, 0.04, (periods, width))
    returns = draw.normal(0, alpha, count) + factors @ draw.normal(1, 0.3, (width, count))
    return regress(returns + draw.normal(0, 0.02, (periods, count)), factors)


def _table(fit, level: float = 0.95) -> AlphaTable:  # type: ignore[no-untyped-def]
    each = np.ones(fit.count)
    return AlphaTable(
        fit.alpha,
        fit.sigma,
        fit.r2,
        fit.total,
        each * fit.t_scale,
        each * fit.fit.df,
        each * fit.factors.theta,
        level,
    )


def test_bounds_by_their_formulas() -> None:
    fit = _fit()
    table, s, theta = _table(fit), 0.3, fit.factors.theta
    np.testing.assert_allclose(table.at(s, CeilingForm.ALONE).bound, s * fit.sigma, rtol=1e-14)
    np.testing.assert_allclose(
        table.at(s, CeilingForm.ALONE).bound, s * fit.total * np.sqrt(1 - fit.r2), rtol=1e-12
    )
    on_top = fit.sigma * np.sqrt(s**2 - theta**2)
    np.testing.assert_allclose(table.at(s, CeilingForm.ON_FACTORS).bound, on_top, rtol=1e-12)
    np.testing.assert_allclose(table.at(s, CeilingForm.TOGETHER).bound, on_top, rtol=1e-12)
    np.testing.assert_allclose(table.needed(CeilingForm.ALONE), np.abs(fit.alpha / fit.sigma), rtol=1e-14)
    np.testing.assert_allclose(
        table.needed(CeilingForm.ON_FACTORS), np.sqrt((fit.alpha / fit.sigma) ** 2 + theta**2), rtol=1e-14
    )


def test_largest_single_alpha_of_the_joint_ellipsoid() -> None:
    # max α_i subject to α'Σ⁻¹α ≤ c is √(c Σ_ii): found here by a numerical search over directions.
    draw = np.random.default_rng(8)
    root = draw.normal(0, 1, (3, 3)) + 2 * np.eye(3)
    sigma, room = root @ root.T, 0.4
    directions = draw.normal(0, 1, (200_000, 3))
    scale = np.sqrt(room / np.einsum("ij,jk,ik->i", directions, np.linalg.inv(sigma), directions))
    best = (directions * scale[:, None]).max(axis=0)
    np.testing.assert_allclose(best, np.sqrt(room * np.diag(sigma)), rtol=2e-3)


@pytest.mark.parametrize("form", FORMS)
def test_exact_pvalues_by_scipy(form: CeilingForm) -> None:
    # P(|t'| ≥ |t|) under the noncentral t with noncentrality at the bound (Johnson and Kotz; scipy's nct).
    fit = _fit()
    verdicts = _table(fit).at(0.35, form)
    shift = verdicts.factor * fit.t_scale
    t = np.abs(fit.classical_t)
    expected = stats.nct.sf(t, fit.fit.df, shift) + stats.nct.cdf(-t, fit.fit.df, shift)
    np.testing.assert_allclose(verdicts.pvalues, expected, rtol=1e-8)


def test_pvalue_at_zero_ceiling_is_the_t_test() -> None:
    fit = _fit()
    np.testing.assert_allclose(
        _table(fit).at(0.0, CeilingForm.ALONE).pvalues, fit.fit.pvalues[:, 0], rtol=1e-9
    )


@settings(max_examples=50, deadline=None)
@given(seed=st.integers(0, 10_000), low=st.floats(0, 1), more=st.floats(0, 1), form=st.sampled_from(FORMS))
def test_status_is_monotone_in_the_ceiling(seed: int, low: float, more: float, form: CeilingForm) -> None:
    order = {Status.UNDEFINED: -1, Status.OUTSIDE: 0, Status.STRADDLES: 1, Status.INSIDE: 2}
    table = _table(_fit(seed))
    first, second = table.at(low, form), table.at(low + more, form)
    assert all(order[b] >= order[a] for a, b in zip(first.status, second.status, strict=True))
    assert (~second.exceeds | first.exceeds | np.isnan(first.factor)).all()
    defined = ~np.isnan(first.pvalues)
    assert (second.pvalues[defined] >= first.pvalues[defined] - 1e-9).all()


@settings(max_examples=50, deadline=None)
@given(seed=st.integers(0, 10_000), s=st.floats(0, 1.5), form=st.sampled_from(FORMS))
def test_status_agrees_with_the_interval_and_the_bound(seed: int, s: float, form: CeilingForm) -> None:
    table = _table(_fit(seed))
    verdicts = table.at(s, form)
    low, high = table.interval
    for asset, status in enumerate(verdicts.status):
        room = verdicts.factor[asset]
        if np.isnan(room):
            assert status is Status.UNDEFINED
            continue
        assume(min(abs(abs(low[asset]) - room), abs(abs(high[asset]) - room)) > 1e-9)
        if -room <= low[asset] and high[asset] <= room:
            assert status is Status.INSIDE
        elif low[asset] > room or high[asset] < -room:
            assert status is Status.OUTSIDE
        else:
            assert status is Status.STRADDLES


def test_joint_curve_starts_at_grs_and_rises_to_one() -> None:
    fit = _fit(alpha=0.006)
    joint = joint_alphas(fit)
    ceiling = JointCeiling(joint)
    grid = np.linspace(0.0, 3.0, 61)
    curve = ceiling.pvalue(grid)
    theta = fit.factors.theta
    np.testing.assert_allclose(curve[grid <= theta], joint.grs.pvalue, rtol=1e-9)
    assert ceiling.pvalue(theta) == pytest.approx(joint.grs.pvalue, rel=1e-9)
    assert (np.diff(curve) >= -1e-12).all()
    assert curve[-1] > 0.9999


def test_joint_pvalue_by_scipy() -> None:
    # 1 − F(GRS; N, T−N−K, λ(s)), noncentral F from scipy where it is accurate (small λ).
    fit = _fit()
    joint = joint_alphas(fit)
    s = 0.3
    shift = fit.periods * (s**2 - joint.theta_f2) / (1 + joint.theta_f2)
    expected = stats.ncf.sf(joint.grs.value, *joint.df, shift)
    assert JointCeiling(joint).pvalue(s) == pytest.approx(expected, rel=1e-9)


def test_lowest_ceiling_and_interval_invert_the_curve() -> None:
    joint = joint_alphas(_fit(alpha=0.006))
    ceiling = JointCeiling(joint, 0.95)
    assert ceiling.pvalue(ceiling.lowest) == pytest.approx(0.05, abs=1e-8)
    assert ceiling.pvalue(ceiling.interval.low) == pytest.approx(0.025, abs=1e-8)
    assert ceiling.pvalue(ceiling.interval.high) == pytest.approx(0.975, abs=1e-8)


def test_nothing_rejected_gives_the_factors_own_ratio() -> None:
    draw = np.random.default_rng(11)
    factors = draw.normal(0.005, 0.04, (120, 2))
    noise = draw.normal(0, 0.02, (120, 3))
    noise -= noise.mean(axis=0)
    joint = joint_alphas(regress(noise, factors))
    assert joint.grs.pvalue > 0.05
    assert JointCeiling(joint).lowest == pytest.approx(np.sqrt(joint.theta_f2), rel=1e-12)


def test_ceiling_below_the_factors_is_undefined_on_top_but_not_alone() -> None:
    fit = _fit()
    table, theta = _table(fit), fit.factors.theta
    below = table.at(0.5 * theta, CeilingForm.ON_FACTORS)
    assert set(below.status) == {Status.UNDEFINED}
    assert np.isnan(below.bound).all()
    assert np.isnan(below.pvalues).all()
    assert np.isnan(below.adjusted(Adjustment.HOLM)).all()
    assert Status.UNDEFINED not in set(table.at(0.5 * theta, CeilingForm.ALONE).status)
    # At exactly the factors' own ratio nothing is left for any asset: the bound is zero, not undefined.
    at = table.at(theta, CeilingForm.ON_FACTORS)
    np.testing.assert_allclose(at.bound, 0.0, atol=1e-12)
    np.testing.assert_allclose(at.pvalues, fit.fit.pvalues[:, 0], rtol=1e-6)


def test_adjustments_by_hand() -> None:
    # Holm (1979): the j-th smallest p-value times N − j + 1, made monotone.
    verdicts = _table(_fit(alpha=0.01)).at(0.2, CeilingForm.ON_FACTORS)
    order = np.argsort(verdicts.pvalues)
    expected = np.empty(len(order))
    running = 0.0
    for rank, position in enumerate(order):
        running = max(running, min(1.0, (len(order) - rank) * verdicts.pvalues[position]))
        expected[position] = running
    np.testing.assert_allclose(verdicts.adjusted(Adjustment.HOLM), expected, rtol=1e-12)
    # Three times as many trials as assets: the smallest p-value times all of them (Holm's first step).
    more = verdicts.adjusted(Adjustment.HOLM, trials=3 * len(order))
    assert more.min() == pytest.approx(min(1.0, 3 * len(order) * verdicts.pvalues.min()))
    harmonic = sum(1 / rank for rank in range(1, len(order) + 1))
    smallest = verdicts.pvalues.min() * len(order) * harmonic
    assert verdicts.adjusted(Adjustment.BENJAMINI_YEKUTIELI).min() <= min(1.0, smallest) + 1e-12


@pytest.mark.parametrize("bad", [-0.1, float("nan"), float("inf")])
def test_bad_ceilings_are_refused(bad: float) -> None:
    with pytest.raises(SettingError, match="zero or above"):
        bound_factor(bad, 0.1, CeilingForm.ALONE)
    with pytest.raises(SettingError):
        JointCeiling(joint_alphas(_fit())).pvalue(bad)


def test_one_asset_one_factor() -> None:
    fit = _fit(count=1, width=1)
    table, joint = _table(fit), joint_alphas(fit)
    ceiling = JointCeiling(joint)
    s = 1.3 * fit.factors.theta
    # One asset: the joint p-value is the exact two-sided one of the asset on top of the factors.
    assert ceiling.pvalue(s) == pytest.approx(table.at(s, CeilingForm.ON_FACTORS).pvalues[0], rel=1e-7)


def test_replicated_asset_needs_nothing_or_everything() -> None:
    fit = _fit()
    sigma, alpha = fit.sigma.copy(), fit.alpha.copy()
    sigma[:2], alpha[0], alpha[1] = 0.0, 0.0, 0.001
    each = np.ones(fit.count)
    table = AlphaTable(
        alpha, sigma, fit.r2, fit.total, each * fit.t_scale, each * fit.fit.df, each * fit.factors.theta
    )
    verdicts = table.at(0.5, CeilingForm.ALONE)
    assert list(verdicts.status[:2]) == [Status.INSIDE, Status.OUTSIDE]
    assert verdicts.pvalues[:2].tolist() == [1.0, 0.0]
    assert np.isinf(table.needed(CeilingForm.ALONE)[1])


def test_no_joint_curve_without_grs() -> None:
    draw = np.random.default_rng(2)
    joint = joint_alphas(regress(draw.normal(0, 0.04, (24, 23)), draw.normal(0, 0.04, (24, 1))))
    ceiling = JointCeiling(joint)
    for found in (ceiling.pvalue(0.3), ceiling.lowest, ceiling.interval, ceiling.fits(0.3)):
        assert isinstance(found, NotApplicable)


@pytest.mark.simulation
def test_size_of_the_exact_pvalue_at_the_bound() -> None:
    # A true appraisal ratio exactly at the ceiling is rejected at 5% in about 5% of samples.
    draw = np.random.default_rng(99)
    periods, draws, s, sigma = 60, 4_000, 0.25, 0.03
    factor = draw.normal(0.005, 0.04, (periods, 1))
    returns = s * sigma + factor + draw.normal(0, sigma, (periods, draws))
    rejected = (_table(regress(returns, factor)).at(s, CeilingForm.ALONE).pvalues < 0.05).mean()
    assert rejected == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / draws))
