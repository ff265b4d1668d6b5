"""Factor sets compared and spanning regressions: identities, degenerate sets, and a size by simulation."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from tests.universes import SIZE_VALUE

from soffit.errors import EstimationError, InputError
from soffit.estimate.regression import ErrorChoice, factor_moments, regress
from soffit.estimate.statistic import NotApplicable
from soffit.judge.comparison import compare_factor_sets, equal_squared_sharpe, spanning_regressions
from soffit.judge.joint import joint_alphas
from soffit.settings import CeilingForm, ErrorType

NAMES = ["MktRF", "SMB", "HML", "Mom"]
SETS = {"CAPM": ["MktRF"], "three": NAMES[:3], "four": NAMES, "none": []}


@pytest.fixture(scope="module")
def arrays(french: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    returns = french[SIZE_VALUE].sub(french["RF"], axis=0).to_numpy()
    return returns, french[NAMES].to_numpy()


def test_every_column_against_its_definition(arrays: tuple[np.ndarray, np.ndarray]) -> None:
    returns, factors = arrays
    found = {each.name: each for each in compare_factor_sets(returns, factors, NAMES, SETS)}
    assert list(found) == list(SETS)
    T, N = returns.shape
    for name, members in SETS.items():
        each = found[name]
        assert each.factors == tuple(members)
        X = np.column_stack([np.ones(T), factors[:, [NAMES.index(member) for member in members]]])
        coefficients = np.linalg.lstsq(X, returns, rcond=None)[0]
        alpha, residual = coefficients[0], returns - X @ coefficients
        np.testing.assert_allclose(each.mean_abs_alpha, np.abs(alpha).mean(), rtol=1e-9)
        np.testing.assert_allclose(
            each.alpha_share, np.abs(alpha).mean() / np.abs(returns.mean(axis=0)).mean()
        )
        r2 = 1 - residual.var(axis=0) / returns.var(axis=0)
        np.testing.assert_allclose(each.mean_r2, r2.mean(), rtol=1e-9, atol=1e-12)
        sigma = np.sqrt((residual**2).sum(axis=0) / (T - X.shape[1]))
        largest = np.abs(alpha / sigma).max()
        assert each.needed(CeilingForm.ALONE) == pytest.approx(largest)
        together = np.sqrt(largest**2 + each.sharpe.plug_in)
        assert each.needed(CeilingForm.ON_FACTORS) == pytest.approx(together)
        quadratic = alpha @ np.linalg.solve(residual.T @ residual / T, alpha)
        assert each.needed(CeilingForm.TOGETHER) == pytest.approx(np.sqrt(each.sharpe.plug_in + quadratic))
        K = len(members)
        assert each.joint.grs.value == pytest.approx((T - N - K) / N * quadratic / (1 + each.sharpe.plug_in))
    assert found["none"].alpha_share == pytest.approx(1.0)
    assert found["none"].sharpe.unbiased == 0.0


def test_excluded_factors_carry_the_difference_of_squared_ratios(
    arrays: tuple[np.ndarray, np.ndarray],
) -> None:
    # GRS identity: what the excluded factors add is θ²(all) − θ²(set), whatever the assets are.
    returns, factors = arrays
    found = {each.name: each for each in compare_factor_sets(returns, factors, NAMES, SETS)}
    T = len(returns)
    whole = found["four"].sharpe.plug_in
    for name, left in (("CAPM", 3), ("three", 1), ("none", 4)):
        own = found[name].sharpe.plug_in
        df = T - left - len(SETS[name])
        expected = df / left * (whole - own) / (1 + own)
        assert found[name].excluded.value == pytest.approx(expected, rel=1e-9)
        assert found[name].excluded.distribution.df == (left, df)
    assert isinstance(found["four"].excluded, NotApplicable)
    few = compare_factor_sets(returns[:, :2], factors, NAMES, SETS)
    assert few[0].excluded.value == pytest.approx(found["CAPM"].excluded.value, rel=1e-12)


def test_spanning_regressions_split_the_squared_sharpe_ratio(arrays: tuple[np.ndarray, np.ndarray]) -> None:
    _, factors = arrays
    found = spanning_regressions(factors, NAMES, level=0.9)
    whole = factor_moments(factors).theta2
    for k in range(4):
        others = np.delete(factors, k, axis=1)
        alone = regress(factors[:, [k]], others)
        assert found.alpha[k] == pytest.approx(alone.alpha[0])
        assert found.t[k] == pytest.approx(alone.fit.t[0, 0])
        assert found.pvalues[k] == pytest.approx(alone.fit.pvalues[0, 0])
        assert found.contribution[k] == pytest.approx(whole - factor_moments(others).theta2, rel=1e-8)
        # One asset: the squared classical t ratio is the GRS statistic.
        assert found.t[k] ** 2 == pytest.approx(joint_alphas(alone).grs.value)
        low, high = found.appraisal_interval
        scale = alone.t_scale
        df = len(factors) - 4
        assert stats.nct.sf(found.t[k], df, low[k] * scale) == pytest.approx(0.05, rel=1e-6)
        assert stats.nct.cdf(found.t[k], df, high[k] * scale) == pytest.approx(0.05, rel=1e-6)
    robust = spanning_regressions(factors, NAMES, choice=ErrorChoice(ErrorType.HAC))
    np.testing.assert_allclose(robust.alpha, found.alpha)
    assert not np.allclose(robust.alpha_error, found.alpha_error)


def test_a_single_factor_spans_from_nothing(arrays: tuple[np.ndarray, np.ndarray]) -> None:
    _, factors = arrays
    found = spanning_regressions(factors[:, :1], NAMES[:1])
    assert found.alpha[0] == pytest.approx(factors[:, 0].mean())
    assert found.t[0] == pytest.approx(stats.ttest_1samp(factors[:, 0], 0.0).statistic)
    assert found.contribution[0] == pytest.approx(factor_moments(factors[:, :1]).theta2)


def test_redundant_and_unknown_factors_are_refused(arrays: tuple[np.ndarray, np.ndarray]) -> None:
    returns, factors = arrays
    doubled = np.column_stack([factors, factors[:, 0] + factors[:, 1]])
    with pytest.raises(EstimationError, match="combination of the other"):
        spanning_regressions(doubled, [*NAMES, "Sum"])
    with pytest.raises(InputError, match="names 'Smb'.*did you mean 'SMB'"):
        compare_factor_sets(returns, factors, NAMES, {"small": ["Smb"]})
    with pytest.raises(InputError, match="twice"):
        compare_factor_sets(returns, factors, NAMES, {"double": ["SMB", "SMB"]})
    with pytest.raises(InputError, match="factor_sets"):
        compare_factor_sets(returns, factors, NAMES, {})


def test_more_assets_than_periods_leaves_the_averages(arrays: tuple[np.ndarray, np.ndarray]) -> None:
    returns, factors = arrays
    found = compare_factor_sets(returns[:10], factors[:10], NAMES, {"three": NAMES[:3]})[0]
    assert isinstance(found.joint.grs, NotApplicable)
    assert isinstance(found.needed(CeilingForm.TOGETHER), NotApplicable)
    assert np.isfinite(found.mean_abs_alpha)


def test_an_asset_that_is_a_factor_needs_no_ceiling(arrays: tuple[np.ndarray, np.ndarray]) -> None:
    _, factors = arrays
    found = compare_factor_sets(factors[:, [0]], factors, NAMES, {"CAPM": ["MktRF"]})[0]
    assert found.needed(CeilingForm.ALONE) == pytest.approx(0.0, abs=1e-9)
    assert found.mean_r2 == pytest.approx(1.0)
    assert isinstance(found.joint.grs, NotApplicable)


def test_no_mean_return_and_no_variation() -> None:
    flat = compare_factor_sets(np.zeros((20, 2)), np.zeros((20, 0)), [], {"none": []})[0]
    assert isinstance(flat.alpha_share, NotApplicable)
    assert np.isnan(flat.mean_r2)


def test_difference_of_squared_sharpe_ratios_of_one_factor_each() -> None:
    # With one factor a set, θ² = SR²: the influence is 2 SR times that of the ratio.
    rng = np.random.default_rng(3)
    f = rng.normal([0.3, 0.1], 1.0, (400, 2))
    found = equal_squared_sharpe(f[:, :1], f[:, 1:])
    z = (f - f.mean(axis=0)) / f.std(axis=0)
    ratio = f.mean(axis=0) / f.std(axis=0)
    influence = 2 * ratio * (z - 0.5 * ratio * (z**2 - 1))
    gap = influence[:, 0] - influence[:, 1]
    unbiased = ratio**2 * (400 - 3) / 400 - 1 / 400
    assert found.value == pytest.approx((unbiased[0] - unbiased[1]) / np.sqrt((gap**2).sum()) * 400)
    assert found.pvalue == pytest.approx(2 * stats.norm.sf(abs(found.value)))
    assert isinstance(equal_squared_sharpe(f, 2.0 * f), NotApplicable)
    assert isinstance(equal_squared_sharpe(f[:4], f[:4, :1]), NotApplicable)
    with_lags = equal_squared_sharpe(f[:, :1], f[:, 1:], lags=4)
    assert with_lags.value != pytest.approx(found.value)


@pytest.mark.simulation
def test_size_of_the_test_of_equal_squared_sharpe_ratios() -> None:
    # Sets (1, 2) and (1, 3) with equal true squared ratios: 5% ± 3.3 Monte Carlo errors of 0.0063.
    rng = np.random.default_rng(10)
    rejected = 0
    for _ in range(1200):
        f = rng.normal([0.15, 0.2, 0.2], 1.0, (600, 3))
        rejected += equal_squared_sharpe(f[:, :2], f[:, [0, 2]]).pvalue < 0.05
    assert abs(rejected / 1200 - 0.05) < 0.021
