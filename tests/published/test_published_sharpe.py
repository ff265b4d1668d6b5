"""Sharpe ratios against published and independently computed values.

Evidence grades: A, printed number or other software, reproduced here by separate code; B, printed number recalled
from memory and reproduced; C, regenerated from the published formula, so that passing proves the arithmetic only.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from soffit.estimate.noncentral import nct_interval
from soffit.estimate.sharpe import (
    SharpeErrors,
    aggregation_factor,
    annual_ratio,
    autocorrelations,
    iid_error,
    return_moments,
    sharpe_ratios,
)
from soffit.estimate.sharpe_difference import memmel_error, sharpe_difference
from soffit.estimate.track_record import (
    ExpectedMaximum,
    deflated_benchmark,
    deflated_sharpe,
    expected_maximum,
    minimum_track_record,
    probabilistic_sharpe,
)
from soffit.settings import LagRule


# NIST StRD, univariate summary statistics: certified to 15 digits. Evidence A.
@pytest.mark.parametrize(
    ("name", "mean", "deviation", "autocorrelation"),
    [
        ("lew", -177.435, 277.332168044316, -0.307304800605679),
        ("mavro", 2.001856, 0.000429123454003053, 0.937989183438248),
    ],
)
def test_nist_univariate(
    checks_data: Path, name: str, mean: float, deviation: float, autocorrelation: float
) -> None:
    x = np.loadtxt(checks_data / f"nist_{name}.txt")
    found = return_moments(x)
    np.testing.assert_allclose(found.mean, mean, rtol=1e-11)
    np.testing.assert_allclose(found.deviation, deviation, rtol=1e-11)
    np.testing.assert_allclose(autocorrelations(x, 1), autocorrelation, rtol=1e-11)


def test_lo_table_1() -> None:
    # Lo (2002), Financial Analysts Journal 58(4), Table 1, rows 0.50, 1.00, 2.00 and 3.00. Evidence C.
    printed = [
        [0.306, 0.217, 0.177, 0.153, 0.137, 0.095, 0.067, 0.047],
        [0.354, 0.250, 0.204, 0.177, 0.158, 0.110, 0.077, 0.055],
        [0.500, 0.354, 0.289, 0.250, 0.224, 0.155, 0.110, 0.077],
        [0.677, 0.479, 0.391, 0.339, 0.303, 0.210, 0.148, 0.105],
    ]
    found = iid_error(np.array([[0.5], [1.0], [2.0], [3.0]]), [12, 24, 36, 48, 60, 125, 250, 500])
    np.testing.assert_allclose(found, printed, atol=0.00051)


# Lo (2002), equation 20 and Table 2: η(q) of AR(1) returns. Evidence C (rows 0.9 and 0 were recalled and agree).
@pytest.mark.parametrize(
    ("rho", "printed"),
    [
        (0.9, [1.03, 1.05, 1.07, 1.10, 1.21, 1.41, 1.60, 1.77, 2.67, 3.70]),
        (0.2, [1.29, 1.52, 1.73, 2.07, 2.88, 4.04, 4.93, 5.68, 9.14, 12.92]),
        (0.0, [1.41, 1.73, 2.00, 2.45, 3.46, 4.90, 6.00, 6.93, 11.18, 15.81]),
        (-0.2, [1.58, 1.99, 2.33, 2.90, 4.17, 5.95, 7.31, 8.45, 13.67, 19.35]),
    ],
)
def test_lo_table_2(rho: float, printed: list[float]) -> None:
    horizons = [2, 3, 4, 6, 12, 24, 36, 48, 125, 250]
    found = [float(aggregation_factor(q, rho ** np.arange(1, q))) for q in horizons]
    np.testing.assert_allclose(found, printed, atol=0.0051)


def test_probabilistic_sharpe_of_a_hedge_fund() -> None:
    # Bailey and Lopez de Prado (2012), Journal of Risk 15(2): monthly 0.458, 24 months. Evidence B.
    found = probabilistic_sharpe(0.458, 24, skewness=-2.448, kurtosis=10.164)
    np.testing.assert_allclose(found, 0.913, atol=0.0006)
    np.testing.assert_allclose(probabilistic_sharpe(0.458, 24), 0.982, atol=0.0006)


@pytest.mark.parametrize(("m", "years"), [(252, 2.73), (52, 2.83), (12, 3.24)])
def test_minimum_record_of_normal_returns(m: int, years: float) -> None:
    # Bailey and Lopez de Prado (2012): annual 2 against 1 at 95%. Evidence B.
    found = minimum_track_record(2 / np.sqrt(m), benchmark=1 / np.sqrt(m), confidence=0.95)
    np.testing.assert_allclose(found / m, years, atol=0.006)


def test_minimum_record_of_hedge_fund_like_returns() -> None:
    # Bailey and Lopez de Prado (2012): skewness −0.72, kurtosis 5.78, monthly. Evidence B.
    root = np.sqrt(12)
    found = minimum_track_record(2 / root, benchmark=1 / root, skewness=-0.72, kurtosis=5.78)
    np.testing.assert_allclose(found / 12, 4.99, atol=0.006)


def test_deflated_sharpe_of_a_hundred_trials() -> None:
    # Bailey and Lopez de Prado (2014), Journal of Portfolio Management 40(5), numerical example. Evidence B.
    chosen = {"trials": 100, "ratio_variance": 0.5 / 250, "method": ExpectedMaximum.APPROXIMATE}
    np.testing.assert_allclose(deflated_benchmark(*chosen.values()), 0.1132, atol=6e-5)
    found = deflated_sharpe(2.5 / np.sqrt(250), 1250, skewness=-3, kurtosis=10, **chosen)
    np.testing.assert_allclose(found, 0.9004, atol=6e-5)


def test_expected_maximum_of_normals() -> None:
    # Tippett (1925), Harter (1961): tables of normal order statistics. Evidence B.
    found = expected_maximum([2, 5, 10, 20, 50, 100, 1000])
    printed = [0.56419, 1.16296, 1.53875, 1.86748, 2.24907, 2.50759, 3.24144]
    np.testing.assert_allclose(found, printed, atol=6e-6)


def test_us_market_of_the_arch_documentation() -> None:
    # arch documentation, bootstrap examples: Mkt-RF 1926 to 2018, per cent a month. Evidence A.
    from arch.data import frenchdata

    found = sharpe_ratios(frenchdata.load().iloc[:, 0].to_numpy())
    np.testing.assert_allclose(found.moments.mean, 0.659946, atol=6e-7)
    np.testing.assert_allclose(found.moments.deviation, 5.327524, atol=6e-7)
    np.testing.assert_allclose(found.ratio, 0.123875, atol=6e-7)
    np.testing.assert_allclose(annual_ratio(found.ratio, 12), 0.429115, atol=6e-7)


def test_market_row_of_fama_and_french(french: pd.DataFrame) -> None:
    # Fama and French (2015), Journal of Financial Economics 116, Table 4 panel A: 0.50, 4.49, t 2.74. Evidence B.
    found = sharpe_ratios(100 * french.loc["1963-07":"2013-12", "MktRF"].to_numpy())
    np.testing.assert_allclose(found.moments.mean, 0.50, atol=0.006)
    np.testing.assert_allclose(found.moments.deviation, 4.49, atol=0.006)
    np.testing.assert_allclose(found.t, 2.74, atol=0.006)


def test_mertens_error_against_r(french: pd.DataFrame) -> None:
    # R car::deltaMethod on the sample moments (m, m2); ratio with divisor T. Evidence A.
    names = ["MktRF", "HML", "SMB"]
    found = sharpe_ratios(french.loc["1949-01":"2017-03", names].to_numpy(), ddof=0)
    np.testing.assert_allclose(
        found.ratio, [0.15228021774759, 0.12934392891179, 0.056015914718543], rtol=1e-7
    )
    expected = [0.036741093452883, 0.0347770234242, 0.034514359115458]
    np.testing.assert_allclose(found.error(SharpeErrors.IID), expected, rtol=1e-7)


@pytest.mark.parametrize(
    ("mean1", "mean2", "sd1", "sd2", "rho", "T", "error", "z"),
    [
        (0.0065, 0.0045, 0.042, 0.03, 0.6, 120, 0.08240491898372, 0.057786656678171),
        (0.01, 0.004, 0.05, 0.045, 0.85, 240, 0.036003829243076, 3.0860914921287),
    ],
)
def test_memmel_error_against_r(
    mean1: float, mean2: float, sd1: float, sd2: float, rho: float, T: int, error: float, z: float
) -> None:
    # Memmel (2003); R car::deltaMethod with the normal-theory covariance of the moments. Evidence A.
    found = float(memmel_error(mean1 / sd1, mean2 / sd2, rho, T))
    np.testing.assert_allclose(found, error, rtol=1e-9)
    np.testing.assert_allclose((mean1 / sd1 - mean2 / sd2) / found, z, rtol=1e-9)


def test_ledoit_wolf_error_against_r(french: pd.DataFrame) -> None:
    # Ledoit and Wolf (2008); R sandwich::NeweyWest(lag = 5) and car::deltaMethod. Evidence A.
    pair = french.loc["1949-01":"2017-03", ["MktRF", "HML"]].to_numpy()
    iid = sharpe_difference(pair[:, 0], pair[:, 1], lag_rule=LagRule.FIXED, lags=0)
    hac = sharpe_difference(pair[:, 0], pair[:, 1], lag_rule=LagRule.FIXED, lags=5)
    np.testing.assert_allclose(iid.difference, 0.0229362888358, rtol=1e-8)
    np.testing.assert_allclose(iid.hac, 0.055379564553601, rtol=1e-8)
    np.testing.assert_allclose(hac.hac, 0.059534826071845, rtol=1e-8)


def test_noncentral_t_interval_of_mbess() -> None:
    # MBESS documentation: conf.limits.nct(ncp = 2.83, df = 126); R pt(ncp) confirms both limits. Evidence B.
    low, high = nct_interval(2.83, 126, 0.95)
    np.testing.assert_allclose([float(low), float(high)], [0.8337502, 4.815359], atol=6e-7)
