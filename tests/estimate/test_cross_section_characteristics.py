"""Premia of characteristics against a loop and linearmodels, unbalanced panels, and what is refused."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from linearmodels.panel import FamaMacBeth
from numpy.testing import assert_allclose

from soffit.errors import EstimationError
from soffit.estimate.characteristics import characteristic_premia
from soffit.estimate.cross_section import PremiumError, two_pass
from soffit.estimate.statistic import NotApplicable, TestStatistic

FM, NW = PremiumError.FAMA_MACBETH, PremiumError.NEWEY_WEST


def panel(seed: int, T: int = 24, N: int = 15) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    draw = np.random.default_rng(seed)
    period, asset = np.repeat(np.arange(T), N), np.tile(np.arange(N), T)
    x = draw.normal(size=(T * N, 2)) * np.array([1.0, 5.0])
    y = 0.01 + x @ np.array([0.004, -0.001]) + 0.05 * draw.normal(size=T * N)
    return y, x, period, asset


@pytest.mark.parametrize("constant", [True, False])
@pytest.mark.parametrize("weighted", [True, False])
def test_an_unbalanced_panel_equals_a_loop(constant: bool, weighted: bool) -> None:
    y, x, period, asset = panel(1)
    draw = np.random.default_rng(2)
    kept = draw.permutation(len(y))[: int(0.8 * len(y))]
    y, x, period, asset = y[kept].copy(), x[kept].copy(), period[kept], asset[kept]
    y[3], x[7, 1] = np.nan, np.nan
    w = draw.uniform(0.5, 2.0, len(y)) if weighted else None
    got = characteristic_premia(y, x, period, asset, constant=constant, weights=w, lags=2)
    slopes, counts = [], []
    for t in range(24):
        rows = (period == t) & np.isfinite(y) & np.isfinite(x).all(axis=1)
        Z = np.column_stack([np.ones(rows.sum()), x[rows]]) if constant else x[rows]
        W = np.diag(w[rows]) if weighted else np.eye(rows.sum())
        slopes.append(np.linalg.solve(Z.T @ W @ Z, Z.T @ W @ y[rows]))
        counts.append(rows.sum())
    slopes = np.array(slopes)
    assert_allclose(got.slopes, slopes, rtol=1e-8, atol=1e-12)
    assert_allclose(got.standard_errors(FM), slopes.std(axis=0, ddof=1) / np.sqrt(24), rtol=1e-8)
    assert list(got.counts) == counts
    assert got.incomplete == 2
    assert got.skipped == ()


def test_errors_and_r2_equal_linearmodels() -> None:
    """Independent library: linearmodels FamaMacBeth, called the way its documentation does."""
    y, x, period, asset = panel(3)
    index = pd.MultiIndex.from_arrays([asset, period])
    X = pd.DataFrame(x, index=index, columns=["size", "value"])
    X.insert(0, "const", 1.0)
    model = FamaMacBeth(pd.DataFrame({"y": y}, index=index), X)
    plain, kernel = model.fit(), model.fit(cov_type="kernel", bandwidth=3, debiased=False)
    got = characteristic_premia(y, x, period, asset, lags=3)
    assert_allclose(got.premia, plain.params, rtol=1e-9)
    assert_allclose(got.standard_errors(FM), plain.std_errors, rtol=1e-9)
    assert_allclose(got.standard_errors(NW), kernel.std_errors, rtol=1e-9)
    assert_allclose(got.average_r2, plain.avg_rsquared, rtol=1e-9)
    assert_allclose([t.pvalue for t in got.tests(FM)], plain.pvalues, rtol=1e-6)
    assert all(isinstance(t, TestStatistic) for t in got.tests(NW))
    missing = got.standard_errors(PremiumError.SHANKEN)
    assert isinstance(missing, NotApplicable)
    assert isinstance(got.tests(PremiumError.ROBUST)[0], NotApplicable)


def test_betas_as_characteristics_equal_the_two_pass_estimate() -> None:
    draw = np.random.default_rng(4)
    F = 0.04 * draw.normal(size=(80, 2))
    R = F @ draw.normal(1.0, 0.5, size=(2, 7)) + 0.02 * draw.normal(size=(80, 7))
    pair = two_pass(R, F)
    got = characteristic_premia(
        R.ravel(), np.tile(pair.betas, (80, 1)), np.repeat(np.arange(80), 7), np.tile(np.arange(7), 80)
    )
    assert_allclose(got.slopes, pair.slopes, rtol=1e-8, atol=1e-12)


@given(st.integers(0, 10_000), st.floats(1e-9, 1e9))
@settings(max_examples=15, deadline=None)
def test_units_of_characteristics_and_order_of_rows_do_not_matter(seed: int, scale: float) -> None:
    y, x, period, asset = panel(seed, T=8)
    order = np.random.default_rng(seed).permutation(len(y))
    plain = characteristic_premia(y, x, period, asset)
    other = characteristic_premia(y[order], (x * np.array([scale, 1.0]))[order], period[order], asset[order])
    unit = np.array([1.0, 1.0 / scale, 1.0])
    assert_allclose(other.premia, plain.premia * unit, rtol=1e-7)
    assert_allclose(other.standard_errors(FM), plain.standard_errors(FM) * unit, rtol=1e-7)


@pytest.mark.parametrize("constant", [True, False])
def test_a_common_factor_is_recognised_and_sent_to_prices_of_risk(constant: bool) -> None:
    y, x, period, asset = panel(5)
    market = np.random.default_rng(6).normal(size=24)
    mixed = np.column_stack([x[:, 0], market[period]])
    with pytest.raises(EstimationError, match="'MktRF' has the same value for every asset") as error:
        characteristic_premia(y, mixed, period, asset, constant=constant, names=("size", "MktRF"))
    assert "prices of risk" in error.value.remedy
    assert "rank" not in str(error.value)


def test_a_column_of_one_value_repeats_the_constant() -> None:
    y, x, period, asset = panel(7)
    x[:, 1] = 3.0
    with pytest.raises(EstimationError, match=r"'flag' has one value.*repeats the constant"):
        characteristic_premia(y, x, period, asset, names=("size", "flag"))
    assert len(characteristic_premia(y, x, period, asset, constant=False).premia) == 2


def test_periods_without_a_cross_section_are_listed_with_reasons() -> None:
    y, x, period, asset = panel(8)
    keep = ~((period == 4) & (asset > 1))
    y, x, period, asset = y[keep], x[keep], period[keep], asset[keep]
    x[period == 9, 1] = 2.5
    x[period == 10, 1] = 2.0 * x[period == 10, 0]
    y[period == 11] = np.nan
    got = characteristic_premia(y, x, period, asset, names=("size", "value"))
    reasons = {s.period: s.reason for s in got.skipped}
    assert reasons == {
        4: "2 assets for 3 premia",
        9: "'value' does not vary, or repeats the other characteristics",
        10: "'value' does not vary, or repeats the other characteristics",
        11: "no asset has all its values",
    }
    assert list(got.periods) == [t for t in range(24) if t not in reasons]
    assert len(got.slopes) == 20


def test_other_refusals_say_what_to_do() -> None:
    y, x, period, asset = panel(9)
    one = asset == 0
    with pytest.raises(
        EstimationError, match=r"0 of 24 periods.*1 asset for 3 premia.*fewer characteristics"
    ):
        characteristic_premia(y[one], x[one], period[one], asset[one])
    with pytest.raises(EstimationError, match="more than once"):
        characteristic_premia(y, x, period, np.zeros_like(asset))
    with pytest.raises(EstimationError, match="zero or negative"):
        characteristic_premia(y, x, period, asset, weights=np.zeros(len(y)))
    with pytest.raises(EstimationError, match="infinite"):
        characteristic_premia(np.full_like(y, np.inf), x, period, asset)
    with pytest.raises(EstimationError, match="one row an asset"):
        characteristic_premia(y[1:], x, period, asset)
    with pytest.raises(EstimationError, match="at least one"):
        characteristic_premia(y, x[:, :0], period, asset)
    with pytest.raises(EstimationError, match="0 of 24 periods"):
        characteristic_premia(np.full_like(y, np.nan), x, period, asset)
