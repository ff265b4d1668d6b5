"""Newey-West errors, lag rules and bandwidths against published output."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm

from soffit.estimate.hac import (
    Kernel,
    andrews_bandwidth,
    newey_west_bandwidth,
    newey_west_lags,
    rule_of_thumb_lags,
    stock_watson_lags,
)
from soffit.estimate.regression import ErrorChoice, LeastSquares, least_squares
from soffit.settings import ErrorType, LagRule

# Greene (1993), investment data: US national accounts 1964-1982, real, as distributed with R"s sandwich.
INVESTMENT = np.array(
    [
        [133.84636526041, 876.322660436993, 2.01518766568997],
        [152.635825712749, 929.397525551372, 1.85503366772021],
        [163.757165190203, 984.887962480459, 1.27245831091986],
        [155.325069567417, 1011.38375917025, 1.19364773319437],
        [161.497455779016, 1058.15362248607, 0.758279787503155],
        [172.024426777279, 1087.68291277797, 0.720981342379455],
        [157.681793329688, 1085.51120831055, 0.580717824634178],
        [173.315279658369, 1122.3830850953, -0.106331328594858],
        [195.0, 1185.9, 0.344182897614827],
        [217.304964539007, 1254.27895981087, 0.68999999999999],
        [198.731317344456, 1246.26346889121, -0.992695035460986],
        [163.844502742666, 1231.57643691867, -3.05656934306569],
        [194.87683240139, 1298.17137675684, 0.292908816281112],
        [231.417350946091, 1369.72509817922, -0.365902977180004],
        [257.013694987369, 1438.57199840447, 0.0555016065690905],
        [258.842246970995, 1479.50067311223, 1.63753224305278],
        [225.255016253783, 1475.00280237642, 2.59119691592217],
        [243.363738854156, 1513.83622014964, 4.0488532675709],
        [200.357695282289, 1485.40216550657, 5.00380649789895],
    ]
)


def hac(y: np.ndarray, x: np.ndarray, lags: int, *, small_sample: bool) -> LeastSquares:
    choice = ErrorChoice(ErrorType.HAC, LagRule.FIXED, lags, small_sample=small_sample)
    return least_squares(y[:, None], x, choice=choice)


@pytest.fixture(scope="module")
def macro() -> tuple[np.ndarray, np.ndarray]:
    """Quarterly growth of real investment on growth of real GDP and the lagged real interest rate."""
    d = sm.datasets.macrodata.load_pandas().data
    growth = 400 * np.diff(np.log(d[["realinv", "realgdp"]].to_numpy()), axis=0)
    return growth[:, 0], np.column_stack([growth[:, 1], d["realint"].to_numpy()[:-1]])


def test_stata_newey_on_macro_data(macro) -> None:
    # Stata: newey g_realinv g_realgdp L.realint, lag(4), as carried in statsmodels" test suite.
    y, x = macro
    fit = hac(y, x, 4, small_sample=True)
    np.testing.assert_allclose(
        fit.coefficients[0], [-9.4816727746549, 4.3742216647032, -0.61399696947899], rtol=1e-9
    )
    np.testing.assert_allclose(
        fit.errors[0], [1.1859338087713, 0.33125644884286, 0.29582347593197], rtol=1e-9
    )
    plain = hac(y, x, 4, small_sample=False)
    np.testing.assert_allclose(plain.errors[0], [1.17709443, 0.32878742, 0.29361855], rtol=1e-7)


def test_stata_robust_on_macro_data(macro) -> None:
    # Stata: regress ..., vce(robust), as carried in statsmodels" test suite.
    y, x = macro
    fit = least_squares(y[:, None], x, choice=ErrorChoice(ErrorType.HC1))
    np.testing.assert_allclose(
        fit.errors[0], [1.3690593206013, 0.32355452428856, 0.32772840315987], rtol=1e-9
    )
    assert fit.r2[0] == pytest.approx(0.6769775594319385, rel=1e-9)
    assert fit.sigma[0] == pytest.approx(10.7037959322668, rel=1e-9)


def test_newey_west_on_the_investment_equation() -> None:
    # Zeileis (2004), J. Statistical Software 11(10), section 5.2: -12.5336 (18.9583), 0.1691 (0.0168),
    # -1.0014 (3.3424); further digits from R sandwich 3.0-2.
    fit = hac(INVESTMENT[:, 0], INVESTMENT[:, 1:], 4, small_sample=False)
    np.testing.assert_allclose(fit.coefficients[0], [-12.5336005909, 0.1691364542, -1.0014380134], rtol=1e-8)
    np.testing.assert_allclose(fit.errors[0], [18.9582981318, 0.01675078586, 3.34237535268], rtol=1e-8)
    adjusted = hac(INVESTMENT[:, 0], INVESTMENT[:, 1:], 3, small_sample=True)
    np.testing.assert_allclose(adjusted.errors[0], [22.66538343754, 0.02067849249, 3.66414166373], rtol=1e-8)


def test_automatic_bandwidths_on_the_investment_equation() -> None:
    # R sandwich 3.0-2: bwNeweyWest and bwAndrews with prewhite = FALSE.
    fit = least_squares(INVESTMENT[:, :1], INVESTMENT[:, 1:])
    moments = INVESTMENT[:, 1:] * fit.residuals
    assert newey_west_bandwidth(moments) == pytest.approx(1.4203054138, rel=1e-6)
    assert newey_west_lags(LagRule.AUTOMATIC, 19, moments=moments) == 1
    assert andrews_bandwidth(moments, Kernel.BARTLETT) == pytest.approx(2.2754953721, rel=1e-6)
    assert andrews_bandwidth(moments, Kernel.PARZEN) == pytest.approx(5.1203258458, rel=1e-6)
    assert andrews_bandwidth(moments, Kernel.QUADRATIC_SPECTRAL) == pytest.approx(2.5436171942, rel=1e-6)


def test_lag_rules() -> None:
    # Newey and West (1994), floor(4 (T/100)^(2/9)); Stock and Watson, 0.75 T^(1/3).
    samples = (60, 120, 240, 342, 600, 819)
    assert [rule_of_thumb_lags(T) for T in samples] == [3, 4, 4, 5, 5, 6]
    assert [stock_watson_lags(T) for T in samples] == [2, 3, 4, 5, 6, 7]


@pytest.mark.parametrize(
    ("asset", "factors", "span", "lags", "hc1", "nw", "nw_adjusted"),
    [
        (
            "NoDur",
            ("MktRF",),
            ("1949-01", "2017-03"),
            6,
            [0.00080407364210603, 0.024935489345716],
            [0.00100454321179, 0.036981795448662],
            [0.0010057720112852, 0.037027033135848],
        ),
        (
            "Enrgy",
            ("MktRF", "SMB", "HML"),
            ("1949-01", "2017-03"),
            6,
            [0.0013422654839303, 0.036552564917638, 0.055528615760423, 0.065038471571469],
            [0.0013544246379754, 0.03977167149966, 0.06365799917374, 0.087828228874046],
            [0.0013577443111853, 0.039869151232888, 0.063814023915554, 0.08804349446379],
        ),
        (
            "S1V1",
            ("MktRF", "SMB", "HML"),
            ("1963-07", "1991-12"),
            4,
            [0.0010796213209157, 0.025986955692375, 0.044744961376069, 0.05094017783835],
            [0.0011407065488411, 0.02481220525745, 0.051054259590596, 0.057538343727559],
            [0.0011474364393769, 0.024958591219295, 0.051355467275239, 0.057877805927801],
        ),
    ],
)
def test_french_portfolios_equal_r(asset, factors, span, lags, hc1, nw, nw_adjusted) -> None:
    # R 4.2.2 lm with sandwich 3.0-2: vcovHC and NeweyWest(prewhite = FALSE, adjust = FALSE and TRUE).
    from linearmodels.datasets import french

    data = french.load().set_index("dates").loc[span[0] : span[1]]
    y, x = (data[asset] - data["RF"]).to_numpy(), data[list(factors)].to_numpy()
    np.testing.assert_allclose(hac(y, x, lags, small_sample=False).errors[0], nw, rtol=1e-9)
    np.testing.assert_allclose(hac(y, x, lags, small_sample=True).errors[0], nw_adjusted, rtol=1e-9)
    robust = least_squares(y[:, None], x, choice=ErrorChoice(ErrorType.HC1))
    np.testing.assert_allclose(robust.errors[0], hc1, rtol=1e-9)
