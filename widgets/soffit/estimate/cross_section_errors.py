"""Standard errors of prices of risk: what each of them allows for.

All quantities are decimal per period. Covariances are of the estimate itself: already divided by T.
"""

from __future__ import annotations

from enum import StrEnum

import numpy as np
import numpy.typing as npt
from scipy import linalg

from soffit.errors import EstimationError
from soffit.estimate.hac import long_run_covariance, newey_west_lags
from soffit.estimate.second_pass import SecondPassParts, covariance_root
from soffit.estimate.statistic import Distribution, Family, NotApplicable, TestStatistic
from soffit.settings import LagRule, Reference, SecondPass

__all__ = [
    "PremiumError",
    "fama_macbeth_covariance",
    "newey_west_covariance",
    "premium_lags",
    "premium_tests",
    "robust_influence",
    "shanken_covariance",
    "wald_test",
]

Floats = npt.NDArray[np.float64]


class PremiumError(StrEnum):
    """Standard errors of a price of risk."""

    FAMA_MACBETH = "Fama-MacBeth"
    NEWEY_WEST = "Newey-West"
    SHANKEN = "Shanken"
    ROBUST = "misspecification-robust"


SOURCES = {
    PremiumError.FAMA_MACBETH: "fama-macbeth-1973",
    PremiumError.NEWEY_WEST: "newey-west-1987",
    PremiumError.SHANKEN: "shanken-1992",
    PremiumError.ROBUST: "kan-robotti-shanken-2013",
}


def fama_macbeth_covariance(slopes: Floats) -> Floats:
    """Covariance of mean slopes from their own scatter, divisor T(T − 1).

    Parameters
    ----------
    slopes : ndarray, shape (T, P)
        Period-by-period premia.

    Returns
    -------
    ndarray, shape (P, P)

    Raises
    ------
    EstimationError
        If there are fewer than two periods.

    References
    ----------
    Fama and MacBeth (1973), Journal of Political Economy 81, 607-636.
    """
    T = len(slopes)
    if T < 2:
        raise EstimationError(
            f"Fama-MacBeth errors need two cross-sections; {T} came",
            remedy="use a longer sample or a shorter beta window",
        )
    centred = slopes - slopes.mean(axis=0)
    return np.asarray(centred.T @ centred / (T * (T - 1.0)))


def newey_west_covariance(slopes: Floats, lags: int) -> Floats:
    """Covariance of mean slopes that allows for autocorrelation: Bartlett weights, divisor T.

    Parameters
    ----------
    slopes : ndarray, shape (T, P)
        Period-by-period premia.
    lags : int
        Number of lags, below T.

    Returns
    -------
    ndarray, shape (P, P)

    Raises
    ------
    EstimationError
        If the lags do not fit the sample.

    References
    ----------
    Newey and West (1987), Econometrica 55, 703-708.
    """
    return long_run_covariance(slopes - slopes.mean(axis=0), lags) / len(slopes)


def premium_lags(slopes: Floats, lags: int | LagRule, constant: bool) -> int:
    """Newey-West lags of mean slopes.

    Parameters
    ----------
    slopes : ndarray, shape (T, P)
        Period-by-period premia, the constant's first if there is one.
    lags : int or LagRule
        The number, or the rule. The automatic rule adds up the premia in units of their own scatter, the
        constant left out.
    constant : bool
        Whether there is a constant.

    Returns
    -------
    int

    Raises
    ------
    EstimationError
        If the number does not fit the sample.
    """
    T = len(slopes)
    if not isinstance(lags, LagRule):
        return newey_west_lags(LagRule.FIXED, T, fixed=lags)
    if lags is not LagRule.AUTOMATIC:
        return newey_west_lags(lags, T)
    centred = slopes[:, int(constant) :] - slopes[:, int(constant) :].mean(axis=0)
    scatter = centred.std(axis=0)
    return newey_west_lags(lags, T, moments=centred / np.where(scatter > 0.0, scatter, 1.0))


def shanken_covariance(parts: SecondPassParts) -> Floats:
    """Covariance of premia that allows for betas being estimates, under iid residuals and a right model.

    Parameters
    ----------
    parts : SecondPassParts
        The two-pass estimate.

    Returns
    -------
    ndarray, shape (P, P)
        ``[(1 + c) A Σ A' + Ω]/T`` with Ω in the block of the factors; all moments with divisor T.

    References
    ----------
    Shanken (1992), Review of Financial Studies 5, 1-33.
    """
    covariance = (1.0 + parts.inflation) * parts.residual_part
    first = int(parts.constant)
    covariance[first:, first:] += parts.factor_covariance
    return covariance / parts.periods


def robust_influence(parts: SecondPassParts) -> Floats:
    """Influence of each period on the premia, whether or not the model prices the assets.

    Parameters
    ----------
    parts : SecondPassParts
        The two-pass estimate.

    Returns
    -------
    ndarray, shape (T, P)
        Series with mean zero whose long-run covariance over T is the covariance of the premia.

    Notes
    -----
    With ``γ_t`` the slopes, ``φ_t`` the slopes less the factors, ``w_t = λ'Ω⁻¹(f_t − μ)``,
    ``u_t = e'W(R_t − R̄)`` and ``z_t`` stacking ``u_t Ω⁻¹(f_t − μ)`` under the constant's zero,

        h_t = (γ_t − γ) − (φ_t − φ) w_t + (Z'WZ)⁻¹ z_t + weight_t

    where ``weight_t`` is the part that comes from an estimated W: nothing for OLS, ``−(γ_t − γ) u_t`` for
    GLS with W the inverse covariance of returns, and ``−A (ε_t² ∘ We)`` for WLS with W the inverse
    residual variances.

    References
    ----------
    Kan, Robotti and Shanken (2013), Journal of Finance 68, 2617-2649.
    """
    first = int(parts.constant)
    slopes = parts.slopes - parts.premia
    factors = np.column_stack([np.zeros((parts.periods, first)), parts.centred_factors])
    scaled = np.linalg.solve(parts.factor_covariance, parts.centred_factors.T).T
    w = scaled @ parts.premia[first:]
    u = parts.centred_returns @ parts.weighted_errors
    z = np.column_stack([np.zeros((parts.periods, first)), scaled * u[:, None]])
    influence = slopes - (slopes - factors) * w[:, None] + z @ parts.inverse
    if parts.second_pass is SecondPass.GLS:
        influence -= slopes * u[:, None]
    elif parts.second_pass is SecondPass.WLS:
        influence -= (parts.residuals**2 * parts.weighted_errors) @ parts.projection.T
    return np.asarray(influence - influence.mean(axis=0))


def premium_tests(
    estimates: Floats, covariance: Floats, kind: PremiumError, periods: int, reference: Reference, null: str
) -> tuple[TestStatistic | NotApplicable, ...]:
    """Test each estimate against zero.

    Parameters
    ----------
    estimates : ndarray, shape (P,)
        Premia, or premia less factor means.
    covariance : ndarray, shape (P, P)
        Their covariance.
    kind : PremiumError
        Which errors these are. Fama-MacBeth's always refer to t(T − 1).
    periods : int
        T, the number of cross-sections.
    reference : Reference
        Reference distribution of the other errors.
    null : str
        The null hypothesis in words.

    Returns
    -------
    tuple of TestStatistic or NotApplicable
        One an estimate; not applicable where the standard error is zero.
    """
    student = kind is PremiumError.FAMA_MACBETH or reference is Reference.STUDENT_T
    law = Distribution(Family.STUDENT_T, (periods - 1.0,)) if student else Distribution(Family.NORMAL)
    out: list[TestStatistic | NotApplicable] = []
    for value, error in zip(estimates, np.sqrt(np.diag(covariance)), strict=True):
        if error == 0.0:
            out.append(NotApplicable("t ratio", "the standard error is zero: the sample leaves no doubt"))
            continue
        t = float(value / error)
        out.append(TestStatistic(f"t ratio ({kind})", t, null, law, law.two_sided(t), SOURCES[kind]))
    return tuple(out)


def wald_test(
    estimates: Floats, covariance: Floats, name: str, null: str, source: str
) -> TestStatistic | NotApplicable:
    """Test that all the estimates are zero, against chi-squared.

    Parameters
    ----------
    estimates : ndarray, shape (K,)
        What is zero under the null.
    covariance : ndarray, shape (K, K)
        Its covariance.
    name, null, source : str
        Labels of the statistic.

    Returns
    -------
    TestStatistic or NotApplicable
        Not applicable where the covariance is singular.
    """
    root = covariance_root(covariance)
    if root is None:
        return NotApplicable(name, "the estimates' covariance is singular: they do not err one by one")
    scaled = linalg.solve_triangular(root, estimates, lower=True)
    value, law = float(scaled @ scaled), Distribution(Family.CHI2, (float(len(estimates)),))
    return TestStatistic(name, value, null, law, law.sf(value), source)
