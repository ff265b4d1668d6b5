"""How many lags a Newey-West error takes, and the long-run covariance it is made of.

A moment series is ``x_t e_t``: a regressor times the residual. It is not centred, because least squares
has already made its mean zero.
"""

from __future__ import annotations

import math
from enum import StrEnum

import numpy as np
import numpy.typing as npt

from soffit.errors import EstimationError
from soffit.settings import LagRule

__all__ = [
    "Kernel",
    "andrews_bandwidth",
    "bartlett_weights",
    "long_run_covariance",
    "newey_west_bandwidth",
    "newey_west_lags",
    "newey_west_lags_each",
    "rule_of_thumb_lags",
    "stock_watson_lags",
]

Floats = npt.NDArray[np.float64]


class Kernel(StrEnum):
    """Kernels whose plug-in bandwidth Andrews (1991) gives."""

    BARTLETT = "Bartlett"
    PARZEN = "Parzen"
    QUADRATIC_SPECTRAL = "quadratic spectral"


def rule_of_thumb_lags(T: int) -> int:
    """Lags ``floor(4 (T/100)^(2/9))``.

    Parameters
    ----------
    T : int
        Number of periods.

    Returns
    -------
    int
        At most ``T - 1``.

    References
    ----------
    Newey and West (1994), Review of Economic Studies 61: the length they use for Bartlett pilot
    autocovariances; common practice as a lag count.
    """
    return min(math.floor(4.0 * math.pow(_periods(T) / 100.0, 2.0 / 9.0)), T - 1)


def stock_watson_lags(T: int) -> int:
    """Lags ``floor(0.75 T^(1/3))``, the rule of Stock and Watson's textbook.

    Parameters
    ----------
    T : int
        Number of periods.

    Returns
    -------
    int
        At most ``T - 1``.
    """
    # The tiny lift keeps exact cubes (T = 64, 512) from falling below their whole number in floating point.
    return min(math.floor(0.75 * math.pow(_periods(T), 1.0 / 3.0) + 1e-12), T - 1)


def newey_west_bandwidth(moments: Floats) -> float:
    """Automatic Bartlett bandwidth of Newey and West (1994), without prewhitening.

    Parameters
    ----------
    moments : ndarray, shape (T, q) or (T,)
        Moment series ``x_t e_t`` of the slopes. The intercept's is left out unless there is no other.
        The series are added up with unit weights, as the source does, so they should be of comparable scale.

    Returns
    -------
    float
        Bandwidth in periods; 0 where every moment is zero. ``floor`` of it is the number of lags.

    Raises
    ------
    EstimationError
        If there is no moment series or a value is not finite.

    References
    ----------
    Newey and West (1994), Review of Economic Studies 61, 631-653. The conventions are those of
    ``bwNeweyWest`` in R's sandwich.
    """
    return float(_bandwidths(_checked(moments).sum(axis=1)[:, None])[0])


def newey_west_lags(rule: LagRule, T: int, *, fixed: int = 0, moments: Floats | None = None) -> int:
    """Number of Newey-West lags under a rule.

    Parameters
    ----------
    rule : LagRule
        Fixed, rule of thumb, or automatic.
    T : int
        Number of periods.
    fixed : int
        The number under ``LagRule.FIXED``.
    moments : ndarray, shape (T, q), optional
        Moment series of the slopes, for ``LagRule.AUTOMATIC``.

    Returns
    -------
    int
        Between 0 and ``T - 1``.

    Raises
    ------
    EstimationError
        If the fixed number does not fit the sample, or the automatic rule got no moments.
    """
    if rule is LagRule.AUTOMATIC:
        if moments is None:
            raise EstimationError(
                "The automatic Newey-West lag got no moment series",
                remedy="pass the series x_t e_t of the slopes, one column a regressor",
            )
        if len(moments) != T:
            raise EstimationError(
                f"The automatic Newey-West lag got {len(moments)} rows of moments for {T} periods",
                allowed="one row of moments a period",
            )
        return min(math.floor(newey_west_bandwidth(moments)), T - 1)
    if rule is LagRule.RULE_OF_THUMB:
        return rule_of_thumb_lags(T)
    return _fitting(fixed, T)


def newey_west_lags_each(rule: LagRule, T: int, *, fixed: int = 0, combined: Floats) -> npt.NDArray[np.int64]:
    """Number of Newey-West lags of many regressions on the same regressors.

    Parameters
    ----------
    rule : LagRule
        Fixed, rule of thumb, or automatic.
    T : int
        Number of periods.
    fixed : int
        The number under ``LagRule.FIXED``.
    combined : ndarray, shape (T, N)
        Per asset the sum over the slopes of its moment series: ``(Σ_k x_tk) e_ti``. Only its width is used
        unless the rule is automatic.

    Returns
    -------
    ndarray of int, shape (N,)
        One number an asset.
    """
    n = combined.shape[1]
    if rule is not LagRule.AUTOMATIC:
        return np.full(n, newey_west_lags(rule, T, fixed=fixed), dtype=np.int64)
    return np.minimum(np.floor(_bandwidths(_checked(combined))), T - 1).astype(np.int64)


def andrews_bandwidth(moments: Floats, kernel: Kernel = Kernel.BARTLETT) -> float:
    """Plug-in bandwidth of Andrews (1991) from an AR(1) fitted to each moment series.

    Parameters
    ----------
    moments : ndarray, shape (T, q) or (T,)
        Moment series ``x_t e_t`` of the slopes, with unit weights.
    kernel : Kernel
        The kernel the bandwidth is for.

    Returns
    -------
    float
        Bandwidth in periods; 0 where every moment is constant.

    Raises
    ------
    EstimationError
        If fewer than four periods came, or an AR(1) coefficient reaches one.

    References
    ----------
    Andrews (1991), Econometrica 59, 817-858, equations 6.2 and 6.4. The conventions are those of
    ``bwAndrews`` in R's sandwich.
    """
    v = _checked(moments)
    T = len(v)
    if T < 4:
        raise EstimationError(
            f"An AR(1) cannot be fitted to {T} periods",
            allowed="four periods or more",
            remedy="use fixed lags",
        )
    lagged, led = v[:-1] - v[:-1].mean(axis=0), v[1:] - v[1:].mean(axis=0)
    spread = (lagged**2).sum(axis=0)
    moving = spread > 0.0
    rho = (lagged * led).sum(axis=0)[moving] / spread[moving]
    if not rho.size:
        return 0.0
    if (np.abs(rho) >= 1.0).any():
        raise EstimationError(
            f"A moment series has an AR(1) coefficient of {rho[np.abs(rho).argmax()]:.3f}",
            allowed="coefficients between -1 and 1",
            remedy="use fixed lags or the rule of thumb",
        )
    s4 = ((led[:, moving] - rho * lagged[:, moving]) ** 2).mean(axis=0) ** 2
    weight = (s4 / (1.0 - rho) ** 4).sum()
    if weight == 0.0:
        return 0.0
    if kernel is Kernel.BARTLETT:
        curvature = (4.0 * rho**2 * s4 / ((1.0 - rho) ** 6 * (1.0 + rho) ** 2)).sum() / weight
        return float(1.1447 * (T * curvature) ** (1.0 / 3.0))
    curvature = (4.0 * rho**2 * s4 / (1.0 - rho) ** 8).sum() / weight
    constant = 2.6614 if kernel is Kernel.PARZEN else 1.3221
    return float(constant * (T * curvature) ** 0.2)


def bartlett_weights(lags: int) -> Floats:
    """Bartlett weights ``1 - j/(lags + 1)`` for ``j = 0 … lags``; shape (lags + 1,)."""
    return 1.0 - np.arange(lags + 1) / (lags + 1.0)


def long_run_covariance(moments: Floats, lags: int) -> Floats:
    """Bartlett long-run covariance of moment series.

    Parameters
    ----------
    moments : ndarray, shape (T, q)
        Moment series, not centred.
    lags : int
        Number of lags; 0 gives the heteroskedasticity-robust covariance.

    Returns
    -------
    ndarray, shape (q, q)
        ``Γ_0 + Σ_j (1 − j/(lags+1)) (Γ_j + Γ_j')`` with ``Γ_j = Σ_t m_t m_{t−j}'/T``; positive semi-definite.

    Raises
    ------
    EstimationError
        If the number of lags does not fit the sample.

    References
    ----------
    Newey and West (1987), Econometrica 55, 703-708.
    """
    m = _checked(moments)
    T = len(m)
    weights = bartlett_weights(_fitting(lags, T))
    total = m.T @ m
    for j in range(1, lags + 1):
        cross = m[j:].T @ m[:-j]
        total += weights[j] * (cross + cross.T)
    return total / T


def _bandwidths(series: Floats) -> Floats:
    """Newey-West 1994 Bartlett bandwidth of each column."""
    T, n = series.shape
    peak = np.abs(series).max(axis=0, initial=0.0)
    h = series / np.where(peak > 0.0, peak, 1.0)  # the bandwidth is scale-free; this keeps squares in range
    s0, s1 = (h**2).sum(axis=0), np.zeros(n)
    for j in range(1, rule_of_thumb_lags(T) + 1):
        cross = 2.0 * (h[j:] * h[:-j]).sum(axis=0)
        s0, s1 = s0 + cross, s1 + j * cross
    ratio = np.divide(s1, s0, out=np.full(n, np.inf), where=s0 != 0.0)
    ratio[peak == 0.0] = 0.0
    return np.asarray(1.1447 * np.cbrt(ratio**2 * T))


def _checked(moments: Floats) -> Floats:
    m = np.asarray(moments, dtype=np.float64)
    m = m[:, None] if m.ndim == 1 else m
    if m.ndim != 2 or 0 in m.shape:
        raise EstimationError(
            f"Moments of shape {m.shape} came",
            allowed="one row a period and at least one column",
            remedy="for a regression on the constant alone pass the constant's own moment, the residual",
        )
    if not np.isfinite(m).all():
        raise EstimationError(
            "A moment series has a value that is not finite", remedy="drop incomplete periods first"
        )
    return m


def _fitting(lags: int, T: int) -> int:
    if not 0 <= lags < _periods(T):
        raise EstimationError(
            f"{lags} Newey-West lags came for {T} periods",
            allowed=f"0 to {T - 1}",
            remedy="choose fewer lags or the rule of thumb",
        )
    return lags


def _periods(T: int) -> int:
    if T < 1:
        raise EstimationError(f"A sample of {T} periods came", allowed="one period or more")
    return T
