"""Sharpe ratios, many alphas and factor sets with labels: annual units, histories, settings that matter."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from tests.universes import INDUSTRIES

from soffit.errors import SettingError
from soffit.estimate.regression import factor_moments, regress
from soffit.estimate.sharpe import SharpeErrors, aggregation_factor, autocorrelations, sharpe_ratios
from soffit.estimate.statistic import NotApplicable
from soffit.estimate.track_record import expected_maximum, minimum_track_record, probabilistic_sharpe
from soffit.judge.multiplicity import Adjustment, adjusted_pvalues
from soffit.settings import ErrorType, Histories
from soffit.study import Study

FACTORS = ["MktRF", "SMB", "HML", "Mom"]


@pytest.fixture(scope="module")
def frame(french: pd.DataFrame) -> pd.DataFrame:
    return french.loc["1963-07":"1991-12"]


@pytest.fixture(scope="module")
def us(frame: pd.DataFrame) -> Study:
    return Study.open(frame[[*INDUSTRIES, "RF"]], frame[FACTORS], risk_free="RF")


@pytest.fixture(scope="module")
def ragged(frame: pd.DataFrame) -> Study:
    returns = frame[INDUSTRIES[:4]].sub(frame["RF"], axis=0)
    returns.iloc[:200, 1] = np.nan
    return Study.open(returns, frame[FACTORS[:2]], excess=True)


def test_sharpe_table_is_the_per_period_result_in_annual_units(us: Study, frame: pd.DataFrame) -> None:
    excess = frame[INDUSTRIES].sub(frame["RF"], axis=0)
    values = np.column_stack([frame[FACTORS], excess])
    plain = sharpe_ratios(values)
    found = us.sharpe_ratios()
    table, root = found.table, np.sqrt(12)
    assert list(table.index) == [*FACTORS, *INDUSTRIES]
    np.testing.assert_allclose(table["sharpe"], plain.ratio * root)
    np.testing.assert_allclose(table["sharpe"], values.mean(axis=0) / values.std(axis=0, ddof=1) * root)
    np.testing.assert_allclose(table["error"], plain.hac_error * root)
    np.testing.assert_allclose(table["error_iid"], plain.error(SharpeErrors.IID) * root)
    np.testing.assert_allclose(table["error_normal"], np.sqrt((1 + plain.ratio**2 / 2) / len(values)) * root)
    np.testing.assert_allclose(table["low"], table["sharpe"] - 1.959963984540054 * table["error"])
    low, high = plain.exact_interval(0.95)
    np.testing.assert_allclose(table["exact_low"], low * root)
    np.testing.assert_allclose(table["exact_high"], high * root)
    rho = autocorrelations(values, 11)
    np.testing.assert_allclose(table["aggregated"], plain.ratio * aggregation_factor(12, rho))
    moments = {"skewness": plain.moments.skewness, "kurtosis": plain.moments.kurtosis}
    np.testing.assert_allclose(table["above_zero"], probabilistic_sharpe(plain.ratio, 342, **moments))
    np.testing.assert_allclose(table["record"], minimum_track_record(plain.ratio, **moments) / 12)
    hurdle = expected_maximum(12) / np.sqrt(341)
    deflated = probabilistic_sharpe(plain.ratio, 342, benchmark=hurdle, **moments)
    np.testing.assert_allclose(table["deflated"].iloc[4:], deflated[4:])
    assert table["deflated"].iloc[:4].isna().all()


def test_factors_together_agree_with_the_joint_test(us: Study, frame: pd.DataFrame) -> None:
    found = us.sharpe_ratios()
    assert found.factors == pytest.approx(us.joint_test().factors_sharpe, rel=1e-12)
    theta2 = factor_moments(frame[FACTORS].to_numpy()).theta2
    assert found.factors_unbiased == pytest.approx(np.sqrt((theta2 * (342 - 6) / 342 - 4 / 342) * 12))
    bound = found.factors_interval
    shift = 342 * bound.low**2 / 12
    assert stats.ncf.sf(theta2 * 338 / 4, 4, 338, shift) == pytest.approx(0.025, rel=1e-6)
    assert bound.low < found.factors < bound.high


def test_more_trials_deflate_more_and_share_the_rest(us: Study) -> None:
    few, many = us.sharpe_ratios(), us.changed(trials=500).sharpe_ratios()
    assert (many.tests, few.tests) == (500, 12)
    assert (many.table["deflated"].iloc[4:] < few.table["deflated"].iloc[4:]).all()
    np.testing.assert_array_equal(many.table["sharpe"], few.table["sharpe"])
    assert us.sharpe_ratios() is few
    assert us.changed(ceiling=2.0).sharpe_ratios() is few


def test_own_history_measures_each_series_on_its_own_rows(ragged: Study, frame: pd.DataFrame) -> None:
    own = ragged.changed(histories=Histories.OWN).sharpe_ratios().table
    common = ragged.changed(histories=Histories.COMMON).sharpe_ratios().table
    assert list(own["periods"]) == [342, 342, 342, 142, 342, 342]
    assert (common["periods"] == 142).all()
    np.testing.assert_allclose(
        own.loc["Durbl"].iloc[1:].astype(float), common.loc["Durbl"].iloc[1:].astype(float)
    )
    market = frame["MktRF"]
    assert own.loc["MktRF", "sharpe"] == pytest.approx(market.mean() / market.std() * np.sqrt(12))
    assert common.loc["MktRF", "sharpe"] != pytest.approx(own.loc["MktRF", "sharpe"])


def test_difference_of_two_series(us: Study, ragged: Study, frame: pd.DataFrame) -> None:
    settings = {"bootstrap_draws": 199}
    gap = us.changed(settings).sharpe_difference("Mom", "MktRF")
    ratios = frame[["Mom", "MktRF"]].mean() / frame[["Mom", "MktRF"]].std(ddof=0) * np.sqrt(12)
    assert gap.difference == pytest.approx(ratios["Mom"] - ratios["MktRF"])
    assert gap.difference in gap.interval
    assert list(gap.table.index) == ["Jobson-Korkie-Memmel", "Ledoit-Wolf HAC", "Ledoit-Wolf bootstrap"]
    hac = gap.table.loc["Ledoit-Wolf HAC"]
    assert hac["statistic"] == pytest.approx(gap.difference / hac["error"])
    assert gap.bootstrap.pvalue == us.changed(settings).sharpe_difference("Mom", "MktRF").bootstrap.pvalue
    own = ragged.changed(settings, histories=Histories.OWN).sharpe_difference("Durbl", "NoDur")
    assert own.found.periods == 142
    same = us.changed(settings).sharpe_difference("Mom", "Mom")
    assert isinstance(same.bootstrap, NotApplicable)
    assert same.table["p"].isna().all()
    with pytest.raises(SettingError, match="did you mean 'MktRF'"):
        us.sharpe_difference("Mom", "Mkt")


def test_many_alphas_adjust_the_regression_pvalues(us: Study) -> None:
    pvalues = us.regression().table["p"]
    plain, stated = us.many_alphas(), us.changed(trials=80).many_alphas()
    for found, trials in ((plain, 1), (stated, 80)):
        for column, method in (("p_holm", Adjustment.HOLM), ("p_by", Adjustment.BENJAMINI_YEKUTIELI)):
            np.testing.assert_allclose(found.table[column], adjusted_pvalues(pvalues, method, trials=trials))
    df = us.regression().pieces[0][1].fit.df
    assert stated.hurdle == pytest.approx(stats.t.isf(0.05 / 160, df))
    assert plain.single_hurdle == pytest.approx(stats.t.isf(0.025, df))
    assert stated.stepwise_hurdles[0] == pytest.approx(stated.hurdle)
    assert set(stated.names(Adjustment.HOLM)) <= set(plain.names(Adjustment.HOLM)) <= set(plain.names())
    assert plain.summary.loc["unadjusted", "rejected"] == len(plain.names())
    normal = us.changed(error_type=ErrorType.HC1, reference="normal").many_alphas()
    assert normal.hurdle == pytest.approx(stats.norm.isf(0.05 / 24))
    assert isinstance(plain.share, NotApplicable)


def test_hurdles_follow_each_history(ragged: Study) -> None:
    found = ragged.changed(histories=Histories.OWN).many_alphas()
    table = found.table
    assert table.loc["Durbl", "hurdle"] == pytest.approx(stats.t.isf(0.05 / 8, 142 - 3))
    assert table.loc["NoDur", "hurdle"] == pytest.approx(stats.t.isf(0.05 / 8, 342 - 3))
    assert found.hurdle == table["hurdle"].max()


def test_growing_sets_when_none_is_named(us: Study) -> None:
    found = us.factor_sets()
    assert list(found.table.index) == ["MktRF", "MktRF + SMB", "MktRF + SMB + HML", "all 4 factors"]
    assert len(found.pairs) == 6
    assert (found.pairs["test"] == "GRS").all()
    whole = found.table.loc["all 4 factors"]
    joint = us.joint_test()
    assert whole["grs"] == pytest.approx(joint.grs.value)
    assert whole["sharpe"] == pytest.approx(joint.factors_sharpe)
    assert whole["needed_together"] == pytest.approx(joint.combined_sharpe)
    assert whole["lowest"] == pytest.approx(us.ceiling_map().lowest)
    assert whole["mean_abs_alpha"] == pytest.approx(us.regression().alpha.abs().mean())
    assert whole["mean_r2"] == pytest.approx(us.regression().table["r2"].mean())
    assert np.isnan(whole["excluded"])
    assert found.best == found.table["sharpe_unbiased"].idxmax()


def test_named_sets_may_use_factors_outside_the_regression(us: Study, frame: pd.DataFrame) -> None:
    sets = {"market": ("MktRF",), "value": ("MktRF", "HML"), "momentum": ("MktRF", "Mom"), "none": ()}
    found = us.changed(factors=("MktRF",), factor_sets=sets).factor_sets()
    assert found.names == ("MktRF", "HML", "Mom")
    assert list(found.table.index) == list(sets)
    assert found.table.loc["none", "sharpe"] == 0.0
    kinds = found.pairs.set_index(["first", "second"])["distribution"]
    assert kinds["value", "momentum"] == "normal"
    assert kinds["market", "value"] == "F(1, 340)"
    excess = frame[INDUSTRIES].sub(frame["RF"], axis=0).to_numpy()
    plain = regress(excess, frame[["MktRF", "Mom"]].to_numpy())
    assert found.table.loc["momentum", "mean_abs_alpha"] == pytest.approx(np.abs(plain.alpha).mean() * 12)
    spanning = found.spanning_table
    alone = regress(frame[["Mom"]].to_numpy(), frame[["MktRF", "HML"]].to_numpy())
    assert spanning.loc["Mom", "alpha"] == pytest.approx(alone.alpha[0] * 12)
    assert spanning.loc["Mom", "appraisal"] == pytest.approx(alone.appraisal[0] * np.sqrt(12))
    theta = {name: factor_moments(frame[list(members)].to_numpy()).theta2 for name, members in sets.items()}
    added = factor_moments(frame[["MktRF", "HML", "Mom"]].to_numpy()).theta2 - theta["value"]
    assert spanning.loc["Mom", "contribution"] == pytest.approx(added * 12)
    lagged = us.changed(factor_sets=sets, error_type=ErrorType.HAC).factor_sets()
    assert lagged.lags > 0
    nested, apart = 0, 3
    assert lagged.pairs["statistic"].iloc[nested] == pytest.approx(found.pairs["statistic"].iloc[nested])
    assert lagged.pairs["statistic"].iloc[apart] != pytest.approx(found.pairs["statistic"].iloc[apart])


def test_unknown_factor_and_no_factor_are_refused(us: Study, frame: pd.DataFrame) -> None:
    with pytest.raises(SettingError, match="did you mean 'HML'"):
        us.changed(factor_sets={"value": ("Hml",)}).factor_sets()
    bare = Study.open(frame[INDUSTRIES[:3]].sub(frame["RF"], axis=0), excess=True)
    with pytest.raises(SettingError, match="no factor"):
        bare.factor_sets()
    alone = bare.sharpe_ratios()
    assert alone.factors == 0.0
    assert list(alone.table["role"]) == ["asset"] * 3
    assert bare.many_alphas().tests.count == 3
