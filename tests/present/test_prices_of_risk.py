"""The exhibits of prices of risk and characteristics show what was computed."""

from __future__ import annotations

import re

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose
from tests.universes import SIZE_VALUE

from soffit.present.exhibits import build
from soffit.present.exhibits import characteristics as characteristics_exhibit
from soffit.present.plain import table_text
from soffit.present.sources import SOURCES
from soffit.present.spec import Exhibit, Line, Points, Role, Segments
from soffit.present.wording.prices_of_risk import prices_finding
from soffit.settings import BetaWindow
from soffit.study import Study

FF3 = ["MktRF", "SMB", "HML"]


@pytest.fixture(scope="module")
def study(french: pd.DataFrame) -> Study:
    frame = french.loc["1949-01":"2017-03"]
    opened = Study.open(frame[[*SIZE_VALUE, "RF"]], frame[FF3], risk_free="RF")
    return opened.changed(bootstrap_draws=499)


@pytest.fixture(scope="module")
def exhibit(study: Study) -> Exhibit:
    return build("prices-of-risk", study)


def _mark(figure, key):  # type: ignore[no-untyped-def]
    return next(mark for mark in figure.marks if mark.key == key)


def test_points_lie_at_fitted_and_realised_means_with_the_line_of_equality(
    study: Study, exhibit: Exhibit
) -> None:
    figure, table = exhibit.figures[0], study.prices_of_risk().asset_table
    points: Points = _mark(figure, "assets")
    assert_allclose(points.x, table["fitted"])
    assert_allclose(points.y, table["mean"])
    assert points.names == tuple(table.index)
    assert points.selectable
    line: Line = _mark(figure, "equal")
    assert_allclose(line.x, line.y)
    assert figure.x.limits == figure.y.limits == (line.x[0], line.x[-1])
    assert "S1V1: mean 4.12% a year, fitted 6.55%, error −2.43%" in points.hover
    assert "−2.43% a year (S1V1)" in figure.alt


def test_each_price_stands_beside_its_factors_mean(study: Study, exhibit: Exhibit) -> None:
    figure, table = exhibit.figures[1], study.prices_of_risk().table.loc[FF3]
    prices, means = _mark(figure, "premia"), _mark(figure, "means")
    intervals: Segments = _mark(figure, "intervals")
    assert figure.y.categories == tuple(FF3)
    assert_allclose(prices.x, table["premium"])
    assert_allclose(means.x, table["factor_mean"])
    assert_allclose(np.round(prices.y), np.round(means.y))
    assert_allclose(intervals.low, table["low"])
    assert_allclose(intervals.high, table["high"])
    assert prices.roles != means.roles == (Role.FACTORS,)
    assert {prices.label, means.label} == {"price of risk", "factor mean"}


def test_finding_has_the_numbers_of_the_result(study: Study, exhibit: Exhibit) -> None:
    text, prices = exhibit.finding.text, study.prices_of_risk()
    assert "2 of 3 prices of risk differ from zero (MktRF and HML)" in text
    assert "2 differ from their factors' means: MktRF −11.43% a year against 7.74%" in text
    assert f"Betas explain {prices.fit.r2_ols:.0%} of differences in mean returns (95% interval " in text
    assert "pricing errors are not all zero (F(5, 811), p < 0.0001)" in text
    assert "not identified" not in text


def test_tables_show_every_error_that_exists(exhibit: Exhibit, study: Study) -> None:
    text = table_text(exhibit.tables[0])
    for name in ("Fama–MacBeth", "Newey–West", "Shanken", "misspecification-robust"):
        assert f"t ({name})" in text
    assert re.search(r"MktRF +−11\.43% +4\.65% +−2\.52 +−2\.33 +−2\.46 +−2\.31", text)
    rolling = build("prices-of-risk", study.changed({"cross_section.betas": BetaWindow.ROLLING}))
    assert "Shanken" not in table_text(rolling.tables[0])
    assert "betas from the 60 months before" in rolling.sample
    assert "Newey–West errors, 6 lags" in rolling.sample
    assert any("Shanken errors: it is known for full-sample betas only" in note for note in rolling.notes)
    assert "shanken-1992" not in rolling.sources
    assert set(rolling.sources) <= set(SOURCES)
    assert "there is no test of the pricing errors" in rolling.finding.text
    assert "T = 759 months priced" in rolling.sample


def test_r2_table_shows_intervals(exhibit: Exhibit, study: Study) -> None:
    frame, prices = exhibit.tables[2].frame, study.prices_of_risk()
    assert_allclose(
        frame.loc["OLS"], [prices.fit.r2_ols, prices.r2_ols.interval.low, prices.r2_ols.interval.high]
    )
    assert_allclose(
        frame.loc["GLS"], [prices.fit.r2_gls, prices.r2_gls.interval.low, prices.r2_gls.interval.high]
    )


def test_a_useless_factor_is_called_that_in_finding_and_cautions(french: pd.DataFrame) -> None:
    frame = french.loc["1990-01":"2009-12"]
    noise = pd.Series(0.03 * np.random.default_rng(4).normal(size=240), index=frame.index, name="Noise")
    factors = pd.concat([frame["MktRF"], noise], axis=1)
    study = Study.open(frame[SIZE_VALUE].sub(frame["RF"], axis=0), factors, excess=True)
    study = study.changed(bootstrap_draws=99)
    exhibit = build("prices-of-risk", study)
    warning = (
        "The betas on Noise do not differ across assets beyond noise: its price of risk is not identified."
    )
    assert warning in exhibit.finding.text
    assert warning in exhibit.cautions
    assert any("rank tests do not reject" in caution for caution in exhibit.cautions)


def test_words_without_a_constant(study: Study) -> None:
    prices = study.changed({"cross_section.constant": False}).prices_of_risk()
    assert "of mean returns (95% interval" in prices_finding(prices).text
    assert "differences in" not in prices_finding(prices).text


def test_characteristics_exhibit(study: Study) -> None:
    returns = study.sample().returns
    momentum = returns.rolling(12).sum()
    priced = study.characteristics({"momentum": momentum})
    exhibit = characteristics_exhibit.exhibit(study, priced)
    table = exhibit.tables[0]
    assert_allclose(table.frame["premium"], priced.premia)
    assert all(column.key in table.frame for column in table.columns)
    t = priced.table.loc["momentum", "t Fama-MacBeth"]
    assert f"1 of 1 characteristic is paid: momentum (t {t:.2f})" in exhibit.finding.text
    assert "characteristics 1 month before the return" in exhibit.sample
    assert "11 months without a cross-section" in exhibit.sample
    assert exhibit.notes == (
        "no cross-section in 11 months (1949-02 to 1949-12): no asset has all its values",
    )
    assert set(exhibit.sources) <= set(SOURCES)
