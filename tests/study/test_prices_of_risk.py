"""Prices of risk and premia of characteristics through the study: labels, annual units, alignment, memory."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose
from tests.universes import SIZE_VALUE

from soffit.errors import EstimationError, InputError, SettingError
from soffit.estimate.characteristics import characteristic_premia
from soffit.estimate.cross_section import PremiumError, two_pass
from soffit.estimate.cross_section_gmm import gmm_pricing_test
from soffit.estimate.rank import identification
from soffit.estimate.statistic import NotApplicable
from soffit.settings import BetaWindow, ErrorType, Histories, LagRule, Reference, SecondPass
from soffit.study import Study

FF3 = ["MktRF", "SMB", "HML"]
FM, NW, SHANKEN, ROBUST = PremiumError


@pytest.fixture(scope="module")
def frame(french: pd.DataFrame) -> pd.DataFrame:
    return french.loc["1990-01":"2009-12"]


@pytest.fixture(scope="module")
def study(frame: pd.DataFrame) -> Study:
    return Study.open(frame[[*SIZE_VALUE, "RF"]], frame[FF3], risk_free="RF", settings=None).changed(
        bootstrap_draws=199
    )


@pytest.fixture(scope="module")
def arrays(frame: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    return frame[SIZE_VALUE].sub(frame["RF"], axis=0).to_numpy(), frame[FF3].to_numpy()


@pytest.mark.parametrize("constant", [True, False])
@pytest.mark.parametrize("kind", list(SecondPass))
def test_table_is_the_estimate_a_year(
    study: Study, arrays: tuple[np.ndarray, np.ndarray], kind: SecondPass, constant: bool
) -> None:
    choices = {"cross_section.second_pass": kind, "cross_section.constant": constant}
    prices = study.changed(choices).prices_of_risk()
    plain = two_pass(*arrays, second_pass=kind, constant=constant)
    assert list(prices.table.index) == (["constant"] if constant else []) + FF3
    assert_allclose(prices.table["premium"], plain.premia * 12, rtol=1e-9)
    for error in PremiumError:
        assert_allclose(prices.table[f"error {error}"], plain.standard_errors(error) * 12, rtol=1e-8)
        assert_allclose(prices.table[f"t {error}"], plain.premia / plain.standard_errors(error), rtol=1e-8)
    factors = prices.table.loc[FF3]
    assert_allclose(factors["factor_mean"], arrays[1].mean(axis=0) * 12, rtol=1e-9)
    assert_allclose(factors["gap"], factors["premium"] - factors["factor_mean"], rtol=1e-9, atol=1e-12)
    assert_allclose(factors["gap_t"], plain.gaps / plain.gap_errors(SHANKEN), rtol=1e-7)
    spread = identification(*arrays, constant=constant).spread
    assert_allclose(factors["spread_f"], [test.value for test in spread], rtol=1e-8)
    assert_allclose(prices.gap_test.value, plain.gap_test(SHANKEN).value, rtol=1e-7)
    if constant:
        assert np.isnan(
            prices.table.loc["constant", ["factor_mean", "gap_t", "spread_p"]].astype(float)
        ).all()


def test_intervals_use_the_level_and_the_reference(study: Study) -> None:
    normal = study.changed(level=0.9, reference=Reference.NORMAL).prices_of_risk().table
    assert_allclose(
        normal["high"] - normal["premium"], 1.6448536269514722 * normal["error Shanken"], rtol=1e-9
    )
    student = study.changed(level=0.9, reference=Reference.STUDENT_T).prices_of_risk().table
    assert (student["high"] > normal["high"]).all()


def test_assets_realised_and_fitted(study: Study, arrays: tuple[np.ndarray, np.ndarray]) -> None:
    table, plain = study.prices_of_risk().asset_table, two_pass(*arrays)
    assert list(table.index) == SIZE_VALUE
    assert_allclose(table["mean"], arrays[0].mean(axis=0) * 12, rtol=1e-9)
    assert_allclose(table["fitted"] + table["error"], table["mean"], rtol=1e-12)
    assert_allclose(table["beta HML"], plain.betas[:, 2], rtol=1e-9)


def test_rolling_betas_price_what_comes_after_them(
    study: Study, arrays: tuple[np.ndarray, np.ndarray]
) -> None:
    rolling = study.changed({"cross_section.betas": BetaWindow.ROLLING, "cross_section.window": 36})
    prices = rolling.prices_of_risk()
    assert prices.headline is NW
    assert prices.dates[0] == prices.block.dates[36]
    assert len(prices.slopes) == 240 - 36
    assert_allclose(prices.premia, two_pass(*arrays, window=36).premia * 12, rtol=1e-9)
    assert prices.table["error Shanken"].isna().all()
    assert isinstance(prices.r2_ols, NotApplicable)
    half = prices.table["high"] - prices.table["premium"]
    assert (half > 1.9 * prices.table[f"error {NW}"]).all()


def test_lag_settings_reach_the_errors(study: Study) -> None:
    fixed = study.changed(lag_rule=LagRule.FIXED, lags=11).prices_of_risk()
    automatic = study.changed(lag_rule=LagRule.AUTOMATIC).prices_of_risk()
    assert fixed.fit.lags == 11
    assert automatic.fit.lags >= 0
    assert study.prices_of_risk().fit.lags == 4


def test_gmm_takes_lags_with_hac_errors(study: Study, arrays: tuple[np.ndarray, np.ndarray]) -> None:
    plain = study.prices_of_risk().statistics["Pricing errors, GMM"]
    assert_allclose(plain.value, gmm_pricing_test(*arrays).value, rtol=1e-8)
    lagged = study.changed(error_type=ErrorType.HAC, lag_rule=LagRule.FIXED, lags=5).prices_of_risk()
    assert_allclose(lagged.gmm.value, gmm_pricing_test(*arrays, lags=5).value, rtol=1e-8)
    rolling = study.changed({"cross_section.betas": BetaWindow.ROLLING}).prices_of_risk()
    assert isinstance(rolling.gmm, NotApplicable)


def test_computed_once_for_what_it_depends_on(study: Study) -> None:
    assert study.changed(ceiling=2.0).prices_of_risk() is study.prices_of_risk()
    assert study.changed(seed=7).prices_of_risk() is not study.prices_of_risk()
    interval = study.prices_of_risk().r2_ols
    assert study.prices_of_risk().r2_ols is interval


def test_short_histories_are_left_out_and_named(frame: pd.DataFrame) -> None:
    returns = frame[SIZE_VALUE].sub(frame["RF"], axis=0)
    returns.iloc[:200, 3] = np.nan
    study = Study.open(returns, frame[FF3], excess=True).changed(histories=Histories.OWN, bootstrap_draws=99)
    prices = study.prices_of_risk()
    assert prices.left_out == (SIZE_VALUE[3],)
    assert SIZE_VALUE[3] not in prices.asset_table.index


def test_a_non_traded_factor_has_a_price_and_no_gap(frame: pd.DataFrame) -> None:
    draw = np.random.default_rng(1)
    news = pd.DataFrame({"News": draw.normal(size=240)}, index=frame.index)
    news.iloc[:5] = np.nan
    study = Study.open(
        frame[SIZE_VALUE].sub(frame["RF"], axis=0),
        frame[["MktRF"]].join(news),
        excess=True,
        roles={"News": "non-traded factor"},
    ).changed(bootstrap_draws=99)
    prices = study.prices_of_risk(non_traded=("News",))
    assert list(prices.table.index) == ["constant", "MktRF", "News"]
    assert np.isnan(prices.table.loc["News", "gap"])
    assert len(prices.dates) == 235
    assert prices.gap_test.distribution.df == (1.0,)
    # Noise is a useless factor, and is named.
    assert prices.useless == ("News",)
    assert prices.identified is False
    with pytest.raises(SettingError, match="'News'"):
        study.prices_of_risk(non_traded=("Nws",))


def test_more_factors_than_assets_are_refused_with_a_remedy(frame: pd.DataFrame) -> None:
    study = Study.open(frame[[*SIZE_VALUE[:3], "RF"]], frame[FF3], risk_free="RF")
    with pytest.raises(EstimationError, match="add test assets"):
        study.prices_of_risk()


def sizes(study: Study, seed: int = 2) -> pd.DataFrame:
    draw = np.random.default_rng(seed)
    returns = study.sample().returns
    return pd.DataFrame(draw.normal(size=returns.shape), index=returns.index, columns=returns.columns)


def test_characteristics_explain_the_return_that_follows(study: Study) -> None:
    size, value = sizes(study), sizes(study, 3)
    got = study.characteristics({"size": size, "value": value})
    returns = study.sample().returns.to_numpy()
    T, N = returns.shape
    x = np.stack([size.to_numpy()[:-1], value.to_numpy()[:-1]], axis=2).reshape(-1, 2)
    want = characteristic_premia(
        returns[1:].ravel(), x, np.repeat(np.arange(T - 1), N), np.tile(np.arange(N), T - 1)
    )
    assert list(got.table.index) == ["constant", "size", "value"]
    assert_allclose(got.table["premium"], want.premia * 12, rtol=1e-9)
    assert_allclose(got.table[f"error {FM}"], want.standard_errors(FM) * 12, rtol=1e-9)
    assert_allclose(got.table[f"t {NW}"], want.premia / want.standard_errors(NW), rtol=1e-9)
    assert got.dates[0] == study.sample().returns.index[1]
    assert got.outside == N  # the last month's characteristics have no return after them
    same = study.characteristics({"size": size, "value": value}, lag=0)
    assert not np.allclose(same.premia, got.premia)


def test_long_and_wide_tables_and_any_day_of_the_month_give_the_same(study: Study) -> None:
    size = sizes(study)
    wide = study.characteristics({"size": size})
    long = size.rename_axis(index="month", columns="name").stack().to_frame("size")
    assert study.characteristics(long) is wide  # the same content is computed once
    early = size.copy()
    early.index = early.index.to_period("M").to_timestamp() + pd.Timedelta(days=14)
    assert_allclose(study.characteristics({"size": early}).premia, wide.premia)
    swapped = long.swaplevel()
    assert_allclose(study.characteristics(swapped).premia, wide.premia)
    periods = size.set_axis(size.index.to_period("M"))
    assert_allclose(study.characteristics({"size": periods}).premia, wide.premia)


def test_what_does_not_match_is_counted(study: Study) -> None:
    size = sizes(study)
    size["Stranger"] = 1.0
    size.iloc[3, 0] = np.nan
    before = size.iloc[:1].copy()
    before.index = [pd.Timestamp("1980-01-31")]
    got = study.characteristics({"size": pd.concat([before, size])})
    assert got.unmatched == ("Stranger",)
    assert got.outside == 9 + 9
    assert got.fit.incomplete == 1
    gap = sizes(study)
    gap.iloc[10] = np.nan
    skipped = study.characteristics({"size": gap}).skipped
    assert list(skipped.index) == [study.sample().returns.index[11]]


def test_common_factors_are_sent_to_prices_of_risk(study: Study, frame: pd.DataFrame) -> None:
    with pytest.raises(InputError, match=r"common factors, not characteristics.*prices_of_risk"):
        study.characteristics(frame[FF3])
    same = sizes(study)
    same.loc[:, :] = frame["MktRF"].to_numpy()[:, None]
    with pytest.raises(EstimationError, match=r"'MktRF' has the same value for every asset.*prices of risk"):
        study.characteristics({"MktRF": same})


def test_other_tables_are_refused_with_the_way_to_mend_them(study: Study, frame: pd.DataFrame) -> None:
    size = sizes(study)
    with pytest.raises(InputError, match=r"wrap a single characteristic as \{'size': frame\}"):
        study.characteristics(size)
    with pytest.raises(InputError, match="none of the study's assets as columns"):
        study.characteristics({"size": frame[FF3]})
    with pytest.raises(InputError, match="came as int"):
        study.characteristics({"size": 3})
    with pytest.raises(InputError, match="No characteristic came"):
        study.characteristics({})
    with pytest.raises(InputError, match="came as list"):
        study.characteristics([1, 2])
    with pytest.raises(InputError, match="before it is known"):
        study.characteristics({"size": size}, lag=-1)
    with pytest.raises(InputError, match="dated inside the sample"):
        study.characteristics({"size": size.set_axis(size.index - pd.DateOffset(years=40))})
    twice = pd.concat([size, size.set_axis(size.index - pd.Timedelta(days=2))])
    with pytest.raises(InputError, match="two rows of characteristics for the month to 1990-01-31"):
        study.characteristics({"size": twice})
    long = size.rename_axis(index="month", columns="name").stack().to_frame("size")
    with pytest.raises(InputError, match="is not a number"):
        study.characteristics(long.assign(size="large"))
    undated = long.set_axis(long.index.set_levels(range(240), level=0))
    with pytest.raises(InputError, match="no level of dates"):
        study.characteristics(undated)
    strangers = long.rename(index=lambda name: f"X{name}", level=1)
    with pytest.raises(InputError, match="None of the assets"):
        study.characteristics(strangers)
