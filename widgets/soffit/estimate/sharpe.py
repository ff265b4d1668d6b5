"""Sharpe ratios of one or many series, and how surely they are known.

Everything is per period: excess returns go in, ratios and their errors come out. :func:`annual_ratio` and
:func:`aggregation_factor` are the only roads to another horizon, and both are explicit.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy import special

from soffit.errors import EstimationError, InputError
from soffit.estimate.hac import newey_west_lags_each
from soffit.estimate.noncentral import nct_interval
from soffit.settings import LagRule

__all__ = [
    "ReturnMoments",
    "SharpeErrors",
    "SharpeRatios",
    "aggregation_factor",
    "annual_ratio",
    "autocorrelations",
    "iid_error",
    "long_run_error",
    "mertens_error",
    "return_moments",
    "sharpe_influence",
    "sharpe_ratios",
]

Floats = npt.NDArray[np.float64]
Counts = npt.NDArray[np.int64]

# A spread smaller than this share of the largest return is rounding, not risk.
_ROUNDING = 1e-13


class SharpeErrors(StrEnum):
    """Which sampling error of a Sharpe ratio."""

    IID_NORMAL = "iid normal"
    IID = "iid, any skewness and kurtosis"
    HAC = "HAC"


@dataclass(frozen=True, eq=False)
class ReturnMoments:
    """Moments of N return series.

    Parameters
    ----------
    periods : ndarray of int, shape (N,)
        Returns in each series.
    mean : ndarray, shape (N,)
        Means per period.
    deviation : ndarray, shape (N,)
        Standard deviations per period, divisor ``periods − ddof``; zero for a constant series.
    skewness, kurtosis : ndarray, shape (N,)
        Third and fourth standardised moments, divisor T; the normal's kurtosis is 3. NaN where constant.
    ddof : int
        Degrees of freedom taken off in `deviation`.
    """

    periods: Counts
    mean: Floats
    deviation: Floats
    skewness: Floats
    kurtosis: Floats
    ddof: int


@dataclass(frozen=True, eq=False)
class SharpeRatios:
    """Sharpe ratios of N series per period, with their sampling errors.

    Parameters
    ----------
    moments : ReturnMoments
        Moments of the series.
    hac_error : ndarray, shape (N,)
        Standard error that allows for non-normality and serial dependence.
    lags : ndarray of int, shape (N,)
        Newey-West lags of each.
    """

    moments: ReturnMoments
    hac_error: Floats
    lags: Counts

    @cached_property
    def ratio(self) -> Floats:
        """Mean over standard deviation per period, shape (N,); NaN where a series is constant."""
        flat = self.moments.deviation == 0.0
        return np.where(flat, np.nan, self.moments.mean / np.where(flat, 1.0, self.moments.deviation))

    @cached_property
    def t(self) -> Floats:
        """Student t ratios of the means, shape (N,)."""
        periods = self.moments.periods
        # The t ratio divides by T − 1 whatever the ratio itself divides by.
        scale = np.sqrt(np.maximum(periods - 1, 0) / np.maximum(periods - self.moments.ddof, 1))
        return self.ratio * np.sqrt(periods) * scale

    def error(self, kind: SharpeErrors = SharpeErrors.HAC) -> Floats:
        """Standard errors of the ratios, per period.

        Parameters
        ----------
        kind : SharpeErrors
            Lo (2002) for independent normal returns, Mertens (2002) for independent ones, or HAC.

        Returns
        -------
        ndarray, shape (N,)
        """
        if kind is SharpeErrors.IID_NORMAL:
            return iid_error(self.ratio, self.moments.periods)
        if kind is SharpeErrors.IID:
            return mertens_error(
                self.ratio, self.moments.skewness, self.moments.kurtosis, self.moments.periods
            )
        return self.hac_error

    def interval(self, level: float, kind: SharpeErrors = SharpeErrors.HAC) -> tuple[Floats, Floats]:
        """Asymptotic intervals: the ratio plus and minus a normal quantile times its error.

        Parameters
        ----------
        level : float
            Coverage.
        kind : SharpeErrors
            Which error.

        Returns
        -------
        low, high : ndarray, shape (N,)
        """
        half = float(special.ndtri(0.5 + 0.5 * level)) * self.error(kind)
        return self.ratio - half, self.ratio + half

    def exact_interval(self, level: float) -> tuple[Floats, Floats]:
        """Exact intervals under independent normal returns, from the noncentral t.

        Parameters
        ----------
        level : float
            Coverage.

        Returns
        -------
        low, high : ndarray, shape (N,)
            Bounds for the true ratio; NaN for a constant series or one with fewer than two returns.
        """
        periods = self.moments.periods
        known = (periods > 1) & np.isfinite(self.t)
        low, high = np.full(len(periods), np.nan), np.full(len(periods), np.nan)
        if known.any():
            bounds = nct_interval(self.t[known], periods[known] - 1.0, level)
            low[known], high[known] = (bound / np.sqrt(periods[known]) for bound in bounds)
        return low, high


def return_moments(returns: Floats, *, ddof: int = 1, own_history: bool = False) -> ReturnMoments:
    """Mean, standard deviation, skewness and kurtosis of one or many series.

    Parameters
    ----------
    returns : ndarray, shape (T, N) or (T,)
        Returns, decimal per period.
    ddof : int
        Degrees of freedom taken off in the standard deviation.
    own_history : bool
        Whether a missing value means that the series has no return then. Otherwise it is refused.

    Returns
    -------
    ReturnMoments

    Raises
    ------
    InputError
        If a value is infinite, or missing where that is refused.
    EstimationError
        If there are too few periods.
    """
    values, seen = _checked(returns, own_history, ddof)
    moments, _ = _moments(values, seen, ddof)
    return moments


def sharpe_ratios(
    excess: Floats,
    *,
    ddof: int = 1,
    lag_rule: LagRule = LagRule.RULE_OF_THUMB,
    lags: int = 0,
    own_history: bool = False,
) -> SharpeRatios:
    """Sharpe ratios of one or many series with the errors of Lo (2002) and Mertens (2002).

    Parameters
    ----------
    excess : ndarray, shape (T, N) or (T,)
        Excess returns, decimal per period.
    ddof : int
        Degrees of freedom taken off in the standard deviation: 1 as the trade does, 0 as the joint tests do.
    lag_rule : LagRule
        How the lags of the HAC error are chosen.
    lags : int
        The number of lags under a fixed rule.
    own_history : bool
        Whether a missing value means that the series has no return then. Otherwise it is refused. Under HAC
        a gap inside a history counts as a zero moment (Parzen 1963), so that lags stay calendar lags.

    Returns
    -------
    SharpeRatios

    Raises
    ------
    InputError
        If a value is infinite, or missing where that is refused.
    EstimationError
        If there are too few periods, or more lags than periods.
    """
    values, seen = _checked(excess, own_history, ddof)
    moments, influence = _moments(values, seen, ddof)
    used = _lags(influence, seen, lag_rule, lags)
    error = long_run_error(influence, used, moments.periods)
    # The influence is that of the ratio with divisor T; the reported ratio may divide by T − 1.
    shrink = np.sqrt(np.maximum(moments.periods - ddof, 0) / np.maximum(moments.periods, 1))
    error = np.where(moments.deviation > 0.0, error * shrink, np.nan)
    return SharpeRatios(moments, error, used)


def sharpe_influence(excess: Floats) -> Floats:
    """Influence of each period on the Sharpe ratio (divisor T).

    Parameters
    ----------
    excess : ndarray, shape (T, N) or (T,)
        Excess returns, decimal per period, complete.

    Returns
    -------
    ndarray, shape (T, N)
        ``ψ_t = z_t − (SR/2)(z_t² − 1)`` with ``z`` the standardised return. Its long-run variance over T is
        the delta-method variance of the ratio, and that of a difference of two series that of the
        difference of their ratios. Zero for a constant series.
    """
    values, seen = _checked(excess, False, 0)
    return _moments(values, seen, 0)[1]


def long_run_error(influence: Floats, lags: Counts, periods: Counts) -> Floats:
    """Delta-method standard errors from influences, with Bartlett weights.

    Parameters
    ----------
    influence : ndarray, shape (T, N)
        Influence of each period on each estimate; zero where a series has no value.
    lags : ndarray of int, shape (N,)
        Newey-West lags of each.
    periods : ndarray of int, shape (N,)
        Values in each series.

    Returns
    -------
    ndarray, shape (N,)
        ``√(LRV/T)``.

    References
    ----------
    Newey and West (1987), Econometrica 55, 703-708.
    """
    total = (influence**2).sum(axis=0)
    for lag in range(1, int(lags.max(initial=0)) + 1):
        weight = np.clip(1.0 - lag / (lags + 1.0), 0.0, None)
        total += 2.0 * weight * (influence[lag:] * influence[:-lag]).sum(axis=0)
    return np.asarray(np.sqrt(np.maximum(total, 0.0)) / np.maximum(periods, 1), dtype=float)


def iid_error(ratio: npt.ArrayLike, periods: npt.ArrayLike) -> Floats:
    """Standard error of a Sharpe ratio under independent normal returns: ``√((1 + SR²/2)/T)``.

    Parameters
    ----------
    ratio : array_like
        Sharpe ratios per period.
    periods : array_like
        Numbers of periods; broadcasts with `ratio`.

    Returns
    -------
    ndarray

    References
    ----------
    Lo (2002), Financial Analysts Journal 58(4), 36-52.
    """
    return mertens_error(ratio, 0.0, 3.0, periods)


def mertens_error(
    ratio: npt.ArrayLike, skewness: npt.ArrayLike, kurtosis: npt.ArrayLike, periods: npt.ArrayLike
) -> Floats:
    """Standard error of a Sharpe ratio under independent returns of any distribution.

    Parameters
    ----------
    ratio : array_like
        Sharpe ratios per period.
    skewness, kurtosis : array_like
        Standardised moments; the normal's kurtosis is 3.
    periods : array_like
        Numbers of periods.

    Returns
    -------
    ndarray
        ``√((1 − γ₃ SR + (γ₄ − 1) SR²/4)/T)``.

    References
    ----------
    Mertens (2002), Comments on variance of the IID estimator in Lo (2002), University of Basel.
    """
    sr, skew = np.asarray(ratio, dtype=float), np.asarray(skewness, dtype=float)
    tails, count = np.asarray(kurtosis, dtype=float), np.asarray(periods, dtype=float)
    # Sample moments obey γ₄ >= 1 + γ₃², which keeps this at zero or above but for rounding.
    spread = np.maximum(1.0 - skew * sr + 0.25 * (tails - 1.0) * sr * sr, 0.0)
    return np.asarray(np.sqrt(spread / count), dtype=float)


def autocorrelations(returns: Floats, lags: int, *, own_history: bool = False) -> Floats:
    """Sample autocorrelations with the full-sample mean and the full-sample sum of squares.

    Parameters
    ----------
    returns : ndarray, shape (T, N) or (T,)
        Returns.
    lags : int
        Highest lag.
    own_history : bool
        Whether a missing value means that the series has no return then; products over a gap are left out.
        Otherwise it is refused.

    Returns
    -------
    ndarray, shape (lags, N)
        Lags 1 to `lags`; NaN for a constant series.

    Raises
    ------
    InputError
        If a value is missing or infinite.
    EstimationError
        If there are not more periods than lags.
    """
    values, seen = _checked(returns, own_history, 0)
    if not 0 <= lags < len(values):
        raise EstimationError(
            f"Autocorrelations to lag {lags} were asked of {len(values)} periods",
            allowed=f"0 to {len(values) - 1}",
            remedy="ask for fewer lags or use a longer sample",
        )
    filled = np.where(seen, values, 0.0)
    mean = filled.sum(axis=0) / np.maximum(seen.sum(axis=0), 1)
    centred = np.where(seen, filled - mean, 0.0)
    flat = np.abs(centred).max(axis=0) <= _ROUNDING * np.abs(filled).max(axis=0)
    total = np.where(flat, np.nan, (centred**2).sum(axis=0))
    out = np.empty((lags, values.shape[1]))
    for lag in range(1, lags + 1):
        out[lag - 1] = (centred[lag:] * centred[:-lag]).sum(axis=0) / total
    return out


def aggregation_factor(q: int, autocorrelation: npt.ArrayLike) -> Floats:
    """What a one-period Sharpe ratio is multiplied by to hold over `q` periods: Lo's η(q).

    Parameters
    ----------
    q : int
        Periods added up.
    autocorrelation : array_like, shape (L,) or (L, N)
        Autocorrelations of the one-period returns from lag 1. Lags beyond the last given count as zero;
        lags from q on are not used.

    Returns
    -------
    ndarray, shape () or (N,)
        ``q/√(q + 2 Σ_{k<q} (q − k) ρ_k)``; √q without autocorrelation. NaN where the given autocorrelations
        imply a variance that is not positive.

    Raises
    ------
    InputError
        If `q` is below 1.

    References
    ----------
    Lo (2002), Financial Analysts Journal 58(4), equation 20.
    """
    if q < 1:
        raise InputError(f"A Sharpe ratio over {q} periods was asked for", allowed="1 period or more")
    rho = np.asarray(autocorrelation, dtype=float)[: q - 1]
    weight = q - np.arange(1.0, len(rho) + 1.0)
    variance = q + 2.0 * np.tensordot(weight, rho, axes=(0, 0))
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(variance > 0.0, q / np.sqrt(variance), np.nan), dtype=float)


def annual_ratio(ratio: npt.ArrayLike, periods_per_year: int) -> Floats:
    """A Sharpe or appraisal ratio a year, for returns without serial dependence: times ``√m``.

    Parameters
    ----------
    ratio : array_like
        Ratios, errors or bounds per period.
    periods_per_year : int
        m.

    Returns
    -------
    ndarray
    """
    return np.asarray(np.asarray(ratio, dtype=float) * np.sqrt(periods_per_year), dtype=float)


def _checked(returns: Floats, own_history: bool, ddof: int) -> tuple[Floats, npt.NDArray[np.bool_]]:
    values = np.asarray(returns, dtype=float)
    values = values[:, None] if values.ndim == 1 else values
    if values.ndim != 2:
        raise InputError(
            f"Returns of shape {values.shape} came", allowed="one row a period and one column a series"
        )
    if np.isinf(values).any():
        raise InputError("A return is infinite", remedy="correct the value at its source")
    seen = np.isfinite(values)
    if not (own_history or seen.all()):
        column = int(np.argmin(seen.all(axis=0)))
        raise InputError(
            f"Series {column + 1} has {int((~seen[:, column]).sum())} missing returns",
            remedy="use a common sample, or each series on its own history",
        )
    if len(values) < ddof + 1:
        raise EstimationError(
            f"Moments were asked of {len(values)} periods",
            allowed=f"{ddof + 1} or more",
            remedy="use a longer sample",
        )
    return values, seen


def _moments(values: Floats, seen: npt.NDArray[np.bool_], ddof: int) -> tuple[ReturnMoments, Floats]:
    """Moments of each column, and the influence of each period on its Sharpe ratio."""
    periods = seen.sum(axis=0)
    count = np.maximum(periods, 1)
    filled = np.where(seen, values, 0.0)
    mean = filled.sum(axis=0) / count
    # A second pass takes out the rounding of the first: long series of large values keep their digits.
    mean = mean + np.where(seen, filled - mean, 0.0).sum(axis=0) / count
    centred = np.where(seen, filled - mean, 0.0)
    flat = np.abs(centred).max(axis=0, initial=0.0) <= _ROUNDING * np.abs(filled).max(axis=0, initial=0.0)
    spread = np.sqrt((centred**2).sum(axis=0) / count)
    scale = np.where(flat, 1.0, spread)
    z = centred / scale
    squared = z * z
    third, fourth = (squared * z).sum(axis=0) / count, (squared * squared).sum(axis=0) / count
    enough = periods > ddof
    stretch = np.sqrt(count / np.maximum(periods - ddof, 1))
    moments = ReturnMoments(
        periods=periods.astype(np.int64),
        mean=np.where(periods > 0, mean, np.nan),
        deviation=np.where(enough, np.where(flat, 0.0, spread * stretch), np.nan),
        skewness=np.where(flat | ~enough, np.nan, third),
        kurtosis=np.where(flat | ~enough, np.nan, fourth),
        ddof=ddof,
    )
    influence = z - 0.5 * (mean / scale) * (squared - 1.0)
    return moments, np.where(seen & ~flat, influence, 0.0)


def _lags(influence: Floats, seen: npt.NDArray[np.bool_], rule: LagRule, fixed: int) -> Counts:
    """Newey-West lags of each column, from its own span."""
    periods = len(seen)
    first = np.argmax(seen, axis=0)
    last = periods - 1 - np.argmax(seen[::-1], axis=0)
    used = np.zeros(seen.shape[1], dtype=np.int64)
    spans, member = np.unique(np.stack([first, last]), axis=1, return_inverse=True)
    for place, (start, end) in enumerate(spans.T):
        columns = np.flatnonzero((member.ravel() == place) & seen.any(axis=0))
        if columns.size:
            combined = influence[start : end + 1, columns]
            used[columns] = newey_west_lags_each(rule, len(combined), fixed=fixed, combined=combined)
    return used
