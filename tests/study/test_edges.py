"""The whole study at its edges: one period a year, the shortest sample, ten thousand assets, odd ceilings."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from soffit.errors import EstimationError, SettingError
from soffit.estimate.statistic import NotApplicable
from soffit.present.exhibits import build
from soffit.settings import CeilingForm
from soffit.study import Study


def _study(periods: int, count: int, freq: str, seed: int = 4) -> Study:
    draw = np.random.default_rng(seed)
    dates = pd.date_range("1960-12-31", periods=periods, freq=freq)
    factors = pd.DataFrame(draw.normal(0.02, 0.05, (periods, 1)), dates, ["Market"])
    noise = draw.normal(0.0, 0.03, (periods, count))
    returns = pd.DataFrame(factors.to_numpy() + noise, dates, [f"Fund {i:05d}" for i in range(count)])
    return Study.open(returns, factors, excess=True, units="decimal", progress=False)


def test_one_period_a_year_is_annualised_by_one() -> None:
    study = _study(40, 3, "YE")
    table = study.regression().table
    pieces = study.regression().pieces[0][1]
    np.testing.assert_array_equal(table["alpha"], pieces.alpha)
    np.testing.assert_array_equal(table["sigma"], pieces.sigma)
    assert study.ceiling(0.5).verdicts.ceiling == 0.5
    assert "T = 40 years" in build("ceiling", study).sample


@pytest.mark.parametrize(("periods", "works"), [(3, False), (4, True), (5, True)])
def test_the_shortest_sample(periods: int, works: bool) -> None:
    # One factor: alpha, beta and one degree of freedom need four periods with one to spare for the errors.
    study = _study(periods, 1, "ME")
    if not works:
        with pytest.raises(EstimationError, match="rows"):
            study.ceiling()
        return
    verdict = study.ceiling(3.0, CeilingForm.ALONE)
    assert len(verdict.table) == 1
    assert 0.0 <= float(verdict.table["p"].iloc[0]) <= 1.0


def test_ten_thousand_assets_have_verdicts_and_no_joint_test() -> None:
    study = _study(120, 10_000, "ME")
    verdict = study.ceiling(1.0)
    assert len(verdict.table) == 10_000
    assert isinstance(verdict.pvalue, NotApplicable)
    exhibit = build("ceiling", study)
    assert "There is no joint test: 10,000 assets leave no degrees of freedom" in exhibit.finding.text


@pytest.mark.parametrize("bad", [-0.5, float("nan"), float("inf")])
def test_bad_ceilings_are_refused_by_the_settings(bad: float) -> None:
    with pytest.raises(SettingError, match="'ceiling' is"):
        _study(60, 2, "ME").ceiling(bad)


def test_a_ceiling_at_the_factors_own_ratio_leaves_no_room() -> None:
    study = _study(240, 3, "ME")
    verdict = study.ceiling(study.joint_test().factors_sharpe)
    assert not verdict.facts.undefined
    np.testing.assert_allclose(verdict.bound, 0.0, atol=1e-6)
    assert set(verdict.status) <= {"straddles", "outside"}
