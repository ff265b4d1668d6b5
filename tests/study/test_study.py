"""The study: computed once, shared on change, right on unequal histories."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from tests.universes import INDUSTRIES

from soffit.errors import EstimationError, SettingError
from soffit.estimate.regression import regress
from soffit.estimate.statistic import NotApplicable
from soffit.settings import CeilingForm, Histories, Settings
from soffit.study import Study, factor_regression


@pytest.fixture
def us(french: pd.DataFrame) -> Study:
    frame = french.loc["1949-01":"2017-03"]
    return Study.open(frame[[*INDUSTRIES, "RF"]], frame[["MktRF"]], risk_free="RF")


@pytest.fixture
def ragged(french: pd.DataFrame) -> Study:
    frame = french.loc["1990-01":"2009-12"]
    returns = frame[INDUSTRIES[:5]].sub(frame["RF"], axis=0)
    returns.iloc[:150, 2] = np.nan
    returns.iloc[-30:, 4] = np.nan
    return Study.open(returns, frame[["MktRF", "SMB"]], excess=True)


def test_us_industries_give_the_known_numbers(us: Study) -> None:
    # Computed independently on linearmodels' French data, 1949-01 to 2017-03.
    verdict = us.ceiling(0.75)
    joint = us.joint_test()
    assert joint.grs.value == pytest.approx(2.672, abs=5e-4)
    assert joint.grs.pvalue == pytest.approx(0.00158, abs=5e-6)
    assert joint.factors_sharpe == pytest.approx(0.528, abs=5e-4)
    assert joint.combined_sharpe == pytest.approx(0.876, abs=5e-4)
    assert verdict.pvalue == pytest.approx(0.422, abs=5e-4)
    assert verdict.lowest == pytest.approx(0.617, abs=5e-4)


def test_annual_table_is_the_per_period_result_times_m(us: Study, french: pd.DataFrame) -> None:
    frame = french.loc["1949-01":"2017-03"]
    plain = regress(frame[INDUSTRIES].sub(frame["RF"], axis=0).to_numpy(), frame[["MktRF"]].to_numpy())
    table = us.regression().table
    np.testing.assert_allclose(table["alpha"], plain.alpha * 12, rtol=1e-9)
    np.testing.assert_allclose(table["alpha_error"], plain.alpha_error * 12, rtol=1e-9)
    np.testing.assert_allclose(table["sigma"], plain.sigma * np.sqrt(12), rtol=1e-9)
    np.testing.assert_allclose(table["appraisal"], plain.appraisal * np.sqrt(12), rtol=1e-9)
    np.testing.assert_allclose(table["beta MktRF"], plain.beta[:, 0], rtol=1e-9)
    assert list(table.index) == INDUSTRIES
    assert (table["periods"] == 819).all()


def test_bound_in_annual_units(us: Study) -> None:
    verdict = us.ceiling(0.8, CeilingForm.ALONE)
    np.testing.assert_allclose(verdict.bound, 0.8 * us.regression().sigma, rtol=1e-12)
    on_top = us.ceiling(0.8, CeilingForm.ON_FACTORS)
    room = np.sqrt(0.8**2 - us.joint_test().factors_sharpe ** 2)
    np.testing.assert_allclose(on_top.bound, room * us.regression().sigma, rtol=1e-12)
    needed = np.hypot(us.regression().appraisal, us.joint_test().factors_sharpe)
    np.testing.assert_allclose(on_top.needed, needed, rtol=1e-12)


def test_facts_of_the_whole_slider_agree_with_single_verdicts(us: Study) -> None:
    grid = np.arange(0.0, 3.01, 0.1)
    for form in CeilingForm:
        for s, facts in zip(grid, us.ceiling_map().facts(grid, form), strict=True):
            verdict = us.ceiling_map().at(s, form)
            if facts.undefined:
                assert set(verdict.status) == {"undefined"}
                continue
            assert set(facts.exceeding) == set(verdict.needed.index[verdict.verdicts.exceeds])
            assert facts.outside == (verdict.status == "outside").sum()
            assert facts.pvalue == pytest.approx(verdict.pvalue)
            assert list(facts.exceeding) == sorted(facts.exceeding, key=lambda name: -verdict.needed[name])


def test_results_are_computed_once_and_shared(us: Study, monkeypatch: pytest.MonkeyPatch) -> None:
    calls: list[int] = []

    def counted(*args: object, **kwargs: object) -> object:
        calls.append(1)
        return regress(*args, **kwargs)  # type: ignore[arg-type]

    monkeypatch.setattr(factor_regression, "regress", counted)
    first = us.regression()
    assert us.regression() is first
    lower = us.changed(ceiling=0.5)
    assert lower.regression() is first
    assert lower.ceiling().map is us.ceiling().map
    assert len(calls) == 1
    assert us.changed(error_type="HC1").regression() is not first
    assert len(calls) == 2
    assert us.changed(ceiling=us.settings.ceiling) is us


def test_kept_is_shared_by_changed_studies(us: Study) -> None:
    us.changed(ceiling=0.5).kept.append("exhibit")
    assert us.kept == ["exhibit"]


def test_window_and_chosen_series(us: Study) -> None:
    cut = us.changed(start="1963-07-01", end="1991-12-01", assets=("Enrgy", "Utils"))
    block = cut.sample().common
    assert f"{block.dates[0]:%Y-%m} {block.dates[-1]:%Y-%m}" == "1963-07 1991-12"
    assert list(cut.regression().table.index) == ["Enrgy", "Utils"]
    with pytest.raises(SettingError, match="no asset 'Enrgi'.*'Enrgy'"):
        us.changed(assets=("Enrgi",)).sample()
    with pytest.raises(SettingError, match="no factor 'SMB'"):
        us.changed(factors=("SMB",)).sample()
    with pytest.raises(SettingError, match="No rows lie between"):
        us.changed(start="2030-01-01").sample()


def test_common_sample_uses_rows_that_all_assets_have(ragged: Study) -> None:
    table = ragged.regression().table
    assert (table["periods"] == 240 - 150 - 30).all()


def test_own_histories_equal_one_regression_each(ragged: Study) -> None:
    own = ragged.changed(histories=Histories.OWN)
    panel = ragged.panel
    table = own.regression().table
    assert table["periods"].tolist() == [240, 240, 90, 240, 210]
    for name in panel.assets.columns:
        there = panel.assets[name].notna()
        alone = regress(panel.assets.loc[there, [name]].to_numpy(), panel.factors.loc[there].to_numpy())
        assert table.loc[name, "alpha"] == pytest.approx(alone.alpha[0] * 12, rel=1e-10)
        low, high = own.regression().alphas.interval
        assert low[list(table.index).index(name)] < alone.appraisal[0] < high[list(table.index).index(name)]
    assert own.regression().residuals.notna().sum().tolist() == [240, 240, 90, 240, 210]


def test_joint_test_on_own_histories_names_what_it_leaves_out(ragged: Study) -> None:
    joint = ragged.changed(histories=Histories.OWN).joint_test()
    # 4 assets × 210 rows beat 3 × 240 and 5 × 60.
    assert joint.left_out == (INDUSTRIES[2],)
    assert joint.block.returns.shape == (210, 4)


def test_short_histories_are_refused_with_a_remedy(ragged: Study) -> None:
    frame = ragged.panel.assets.copy()
    frame.iloc[:-3, 0] = np.nan
    study = Study.open(frame, ragged.panel.factors, excess=True)
    with pytest.raises(EstimationError, match="share only 0 rows"):
        study.regression()
    with pytest.raises(EstimationError, match="'NoDur' has 3 values"):
        study.changed(histories=Histories.OWN).regression()


def test_more_assets_than_periods_still_gives_per_asset_results(french: pd.DataFrame) -> None:
    frame = french.loc["2016-06":"2017-03"]
    study = Study.open(frame[INDUSTRIES], frame[["MktRF"]], excess=True, settings=Settings(ceiling=0.9))
    assert isinstance(study.joint_test().grs, NotApplicable)
    verdict = study.ceiling()
    assert isinstance(verdict.pvalue, NotApplicable)
    assert verdict.table["status"].isin(["inside", "straddles", "outside", "undefined"]).all()


def test_settings_from_a_file(french: pd.DataFrame, tmp_path: Path) -> None:
    file = Settings(ceiling=0.7).save(tmp_path / "study.toml")
    study = Study.open(french[INDUSTRIES], french[["MktRF"]], excess=True, settings=file)
    assert study.settings.ceiling == 0.7
    assert "ceiling 0.7 a year" in repr(study)


def test_a_study_remembers_its_files_so_that_a_pack_can_be_audited(tmp_path: Path) -> None:
    from soffit.demo import demo_frames
    from soffit.memo import Pack, verify, write

    returns, factors = demo_frames()
    paths = tmp_path / "returns.csv", tmp_path / "factors.csv"
    returns.to_csv(paths[0])
    factors.to_csv(paths[1])
    study = Study.open(paths[0], paths[1], risk_free="Cash", progress=False).changed(ceiling=0.9)
    assert study.opened_from["options"] == {"risk_free": "Cash", "progress": False}
    pack = Pack(study).keep("joint")
    write(pack, tmp_path / "memo", ["md"])
    assert verify(tmp_path / "memo").ok
    assert Pack(Study.open(returns, factors, risk_free="Cash", progress=False)).inputs is None
