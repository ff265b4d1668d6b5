"""What stands beside the joint test: labels, units, and what is computed once."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from linearmodels.asset_pricing import TradedFactorModel
from statsmodels.stats.diagnostic import acorr_ljungbox

from soffit.demo import demo_study
from soffit.errors import SettingError
from soffit.estimate.statistic import NotApplicable
from soffit.settings import CeilingForm, Histories
from soffit.study import Study


@pytest.fixture(scope="module")
def study() -> Study:
    return demo_study()


@pytest.fixture(scope="module")
def crowd() -> Study:
    """More assets than periods."""
    rng = np.random.default_rng(5)
    dates = pd.date_range("2019-01-31", periods=48, freq="ME")
    factors = pd.DataFrame(rng.normal(0.005, 0.04, (48, 2)), dates, ["First", "Second"])
    noise = rng.normal(0, 0.03, (48, 60))
    assets = pd.DataFrame(factors.to_numpy() @ rng.normal(1, 0.3, (2, 60)) + noise, dates)
    assets.columns = [f"Asset {i:02d}" for i in range(60)]
    return Study.open(assets, factors=factors, excess=True)


def test_wald_tests_of_a_study_are_those_of_linearmodels(study: Study) -> None:
    block = study.joint_test().block
    tests = study.changed(lag_rule="fixed", lags=4).wald()
    white = TradedFactorModel(block.returns, block.factors).fit(debiased=False)
    kernel = TradedFactorModel(block.returns, block.factors).fit(
        cov_type="kernel", debiased=False, kernel="bartlett", bandwidth=4
    )
    assert tests.lags == 4
    assert tests.robust.value == pytest.approx(white.j_statistic.stat, rel=1e-9)
    assert tests.hac.value == pytest.approx(kernel.j_statistic.stat, rel=1e-9)


def test_results_are_computed_once_and_follow_the_settings(study: Study) -> None:
    assert study.wald() is study.changed(ceiling=0.5).wald()
    assert study.large_n() is study.changed(lags=2, lag_rule="fixed").large_n()
    assert study.power() is not study.changed(power_sharpe=1.5).power()
    robust, hac = study.wald_sizes()
    assert 0.0 < robust.actual < hac.actual < 0.5
    assert study.wald_sizes() is study.changed(ceiling=0.5).wald_sizes()


def test_assumptions_are_those_of_the_joint_block(study: Study) -> None:
    assumptions = study.assumptions()
    assert list(assumptions.table.index) == list(assumptions.assets)
    assert not set(study.joint_test().left_out) & set(assumptions.table.index)
    fit = study.joint_test().fit
    expected = acorr_ljungbox(fit.residuals[:, 3], lags=[assumptions.checks.lags])["lb_pvalue"].iloc[0]
    assert assumptions.table["ljung_box_p"].iloc[3] == pytest.approx(expected, rel=1e-9)
    holm = assumptions.table["jarque_bera_holm"]
    assert (holm >= assumptions.table["jarque_bera_p"]).all()
    assert assumptions.summary.loc["Jarque-Bera", "after_holm"] == (holm <= 0.05).sum()
    assert (
        assumptions.summary.loc["Jarque-Bera", "alone"] == (assumptions.table["jarque_bera_p"] <= 0.05).sum()
    )


def test_power_is_annual_outside_and_per_period_inside(study: Study) -> None:
    power = study.changed(power_sharpe=1.4).power()
    assert power.against == 1.4
    assert power.power == pytest.approx(float(power.grs.at(1.4 / np.sqrt(12))), rel=1e-12)
    assert float(power.at(power.detectable)) == pytest.approx(0.8, rel=1e-9)
    assert power.factors_sharpe == pytest.approx(study.joint_test().factors_sharpe, rel=1e-12)
    assert isinstance(power.periods_needed, int)


def test_alphas_under_the_ceiling_are_annual_and_one_weight_shrinks_them(study: Study) -> None:
    result = study.alpha_under_ceiling(1.2)
    table = result.table
    np.testing.assert_allclose(table["shrunk"], result.weight * table["alpha"], rtol=1e-12)
    np.testing.assert_allclose(table["alpha"], study.regression().alpha[table.index], rtol=1e-9)
    room = np.sqrt(1.2**2 - study.joint_test().factors_sharpe ** 2)
    np.testing.assert_allclose(table["bound"], room * study.regression().sigma[table.index], rtol=1e-9)
    assert (table["bounded"].abs() <= table["bound"]).all()
    together = study.joint_test().combined_sharpe ** 2 - study.joint_test().factors_sharpe ** 2
    np.testing.assert_allclose(table["nearest"], table["alpha"] * room / np.sqrt(together), rtol=1e-9)
    alone = study.alpha_under_ceiling(1.2, CeilingForm.ALONE)
    np.testing.assert_allclose(alone.table["bound"] / table["bound"], 1.2 / room, rtol=1e-9)


def test_the_settings_ceiling_is_the_default(study: Study) -> None:
    named, default = study.alpha_under_ceiling(1.3), study.changed(ceiling=1.3).alpha_under_ceiling()
    pd.testing.assert_frame_equal(named.table, default.table)
    assert default.ceiling == 1.3
    with pytest.raises(SettingError, match="ceiling"):
        study.alpha_under_ceiling(-1.0)


def test_ceilings_of_a_slider_agree_with_single_ones(study: Study) -> None:
    result = study.alpha_under_ceiling(1.2)
    assert float(result.weights(1.2)) == pytest.approx(result.weight, rel=1e-14)
    grid = np.array([1.0, 1.2, 2.0])
    np.testing.assert_allclose(
        result.log_bayes_factors(grid), [float(result.log_bayes_factors(s)) for s in grid], rtol=1e-13
    )
    around = result.log_bayes_factors(np.array([0.99, 1.0, 1.01]) * result.best_supported)
    assert around[1] < min(around[0], around[2])


def test_below_the_factors_nothing_is_defined(study: Study) -> None:
    result = study.alpha_under_ceiling(0.2)
    assert isinstance(result.weight, NotApplicable)
    table = result.table
    assert table[["shrunk", "bound", "bounded", "nearest"]].isna().all().all()
    assert table["alpha"].notna().all()


def test_more_assets_than_periods(crowd: Study) -> None:
    assert isinstance(crowd.wald().classical, NotApplicable)
    assert isinstance(crowd.wald_sizes()[0], NotApplicable)
    assert isinstance(crowd.power().power, NotApplicable)
    assert crowd.power().periods_needed > 62
    assert crowd.large_n().test.pvalue > 0.01
    result = crowd.alpha_under_ceiling(1.5)
    assert result.table["shrunk_low"].notna().all()
    assert result.table["nearest"].isna().all()
    assert isinstance(result.log_bayes_factors(1.5), NotApplicable)


def test_own_histories_use_the_joint_block(study: Study) -> None:
    own = study.changed(histories=Histories.OWN)
    assert len(own.alpha_under_ceiling().table) == own.joint_test().alphas.count


def test_large_samples_are_not_simulated_while_a_person_waits() -> None:
    rng = np.random.default_rng(0)
    dates = pd.date_range("1990-01-31", periods=400, freq="ME")
    factors = pd.DataFrame(rng.normal(0.005, 0.04, (400, 1)), dates, ["First"])
    assets = pd.DataFrame(rng.normal(0, 0.03, (400, 40)), dates, [f"Asset {i}" for i in range(40)])
    robust, hac = Study.open(assets, factors=factors, excess=True).wald_sizes()
    assert isinstance(robust, NotApplicable)
    assert isinstance(hac, NotApplicable)
    assert "take too long" in hac.reason
