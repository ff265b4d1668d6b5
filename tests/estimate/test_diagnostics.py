"""Residual checks: held to statsmodels, and to slow loops written from the formulas."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.diagnostic import acorr_ljungbox, het_breuschpagan
from statsmodels.stats.stattools import jarque_bera as sm_jarque_bera

from soffit.errors import EstimationError
from soffit.estimate.diagnostics import (
    breusch_pagan,
    default_portmanteau_lags,
    jarque_bera,
    ljung_box,
    residual_checks,
)
from soffit.estimate.statistic import NotApplicable, TestStatistic


def sample(T: int = 120, N: int = 6, K: int = 2, seed: int = 7) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    f = rng.normal(0.005, 0.04, (T, K))
    noise = rng.standard_t(5, (T, N)) * 0.02 * (1 + 4 * np.abs(f[:, :1]))
    noise[1:] += 0.3 * noise[:-1]
    x = np.column_stack([np.ones(T), f])
    return noise - x @ np.linalg.lstsq(x, noise, rcond=None)[0], f


@pytest.mark.parametrize("lags", [1, 5, 12])
def test_ljung_box_equals_statsmodels(lags: int) -> None:
    e, _ = sample()
    mine = ljung_box(e, lags)
    for i in range(e.shape[1]):
        theirs = acorr_ljungbox(e[:, i], lags=[lags])
        assert mine.statistic[i] == pytest.approx(theirs["lb_stat"].iloc[0], rel=1e-11)
        assert mine.pvalue[i] == pytest.approx(theirs["lb_pvalue"].iloc[0], rel=1e-10)


def test_breusch_pagan_equals_statsmodels() -> None:
    e, f = sample(K=3)
    x = np.column_stack([np.ones(len(f)), f])
    mine = breusch_pagan(e, f)
    for i in range(e.shape[1]):
        statistic, pvalue, _, _ = het_breuschpagan(e[:, i], x, robust=True)
        assert mine.statistic[i] == pytest.approx(statistic, rel=1e-10)
        assert mine.pvalue[i] == pytest.approx(pvalue, rel=1e-9)


def test_jarque_bera_equals_statsmodels() -> None:
    e, _ = sample()
    mine = jarque_bera(e)
    statistic, pvalue, _, _ = sm_jarque_bera(e, axis=0)
    np.testing.assert_allclose(mine.statistic, statistic, rtol=1e-11)
    np.testing.assert_allclose(mine.pvalue, pvalue, rtol=1e-10)


def test_ljung_box_by_the_formula() -> None:
    # Ljung and Box (1978), equation 1.2, written as loops.
    e, _ = sample(T=30, N=1)
    x = e[:, 0] - e[:, 0].mean()
    total = 0.0
    for lag in range(1, 5):
        r = sum(x[t] * x[t - lag] for t in range(lag, 30)) / sum(v * v for v in x)
        total += r * r / (30 - lag)
    assert ljung_box(e, 4).statistic[0] == pytest.approx(30 * 32 * total, rel=1e-12)


@given(scale=st.floats(1e-140, 1e60), seed=st.integers(0, 50))
@settings(max_examples=25, deadline=None)
def test_units_do_not_matter(scale: float, seed: int) -> None:
    e, f = sample(T=40, N=2, seed=seed)
    here, there = residual_checks(e, f), residual_checks(e * scale, f)
    for a, b in (
        (here.autocorrelation, there.autocorrelation),
        (here.heteroskedasticity, there.heteroskedasticity),
        (here.normality, there.normality),
    ):
        np.testing.assert_allclose(a.statistic, b.statistic, rtol=1e-9)


def test_an_asset_alone_gives_what_it_gives_among_others() -> None:
    e, f = sample()
    together, alone = residual_checks(e, f), residual_checks(e[:, 2:3], f)
    assert together.normality.statistic[2] == pytest.approx(alone.normality.statistic[0], rel=1e-13)
    assert together.heteroskedasticity.pvalue[2] == pytest.approx(
        alone.heteroskedasticity.pvalue[0], rel=1e-12
    )


def test_an_asset_without_residuals_has_a_reason_and_spoils_no_other() -> None:
    e, f = sample()
    e[:, 1] = 0.0
    checks = residual_checks(e, f)
    for test in (checks.autocorrelation, checks.heteroskedasticity, checks.normality):
        nothing = test.one(1)
        assert isinstance(nothing, NotApplicable)
        assert "explain this asset exactly" in nothing.reason
        assert isinstance(test.one(0), TestStatistic)
        assert test.exists.sum() == e.shape[1] - 1


def test_squares_that_do_not_move_show_no_heteroskedasticity() -> None:
    f = np.random.default_rng(0).normal(size=(8, 1))
    e = np.tile([[0.01], [-0.01]], (4, 1))
    assert breusch_pagan(e, f).statistic[0] == 0.0
    assert breusch_pagan(e, f).pvalue[0] == 1.0


@pytest.mark.parametrize(
    ("test", "words"),
    [
        (lambda e, f: ljung_box(e, len(e)), "autocorrelations cannot be had"),
        (lambda e, f: breusch_pagan(e, f[:, :0]), "no factor"),
        (lambda e, f: breusch_pagan(e[:3], f[:3]), "too few"),
        (lambda e, f: jarque_bera(e[:3]), "say nothing"),
    ],
)
def test_a_sample_without_the_test_says_why(test, words: str) -> None:
    e, f = sample()
    result = test(e, f)
    assert not result.exists.any()
    assert words in result.one(0).reason
    assert result.rejections() == 0


def test_default_lags() -> None:
    # min(10, T/5): common practice, no source.
    assert [default_portmanteau_lags(T) for T in (3, 24, 60, 800)] == [1, 4, 10, 10]


def test_refusals() -> None:
    e, f = sample()
    with pytest.raises(EstimationError, match="0 lags"):
        ljung_box(e, 0)
    with pytest.raises(EstimationError, match="not finite"):
        jarque_bera(np.where(np.arange(6) == 1, np.nan, e))
    with pytest.raises(EstimationError, match="came for residuals"):
        breusch_pagan(e, f[:-1])
    with pytest.raises(EstimationError, match="one column an asset"):
        jarque_bera(e[:, 0])


@pytest.mark.simulation
def test_sizes_under_normal_independent_residuals() -> None:
    # 5% within four Monte Carlo errors; Jarque-Bera is known to be somewhat undersized at T = 240.
    rng = np.random.default_rng(11)
    T, N = 240, 4000
    f = rng.normal(size=(T, 2))
    x = np.column_stack([np.ones(T), f])
    e = rng.normal(size=(T, N))
    e -= x @ np.linalg.lstsq(x, e, rcond=None)[0]
    checks = residual_checks(e, f, lags=6)
    error = 4 * np.sqrt(0.05 * 0.95 / N)
    assert abs(checks.autocorrelation.rejections() / N - 0.05) < error
    assert abs(checks.heteroskedasticity.rejections() / N - 0.05) < error
    assert 0.02 < checks.normality.rejections() / N < 0.05 + error


def test_many_assets_raise_no_warning() -> None:
    e, f = sample(T=60, N=10_000)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        checks = residual_checks(e, f)
    assert checks.normality.statistic.shape == (10_000,)
    law = checks.normality.one(3)
    assert isinstance(law, TestStatistic)
    assert law.pvalue == pytest.approx(stats.chi2(2).sf(law.value), rel=1e-10)
