"""How much a Sharpe ratio proves: probabilistic and deflated ratios, and the record length they need.

Ratios are per period. Kurtosis is Pearson's: 3 for the normal.
"""

from __future__ import annotations

from enum import StrEnum

import numpy as np
import numpy.typing as npt
from scipy import special

from soffit.errors import InputError

__all__ = [
    "ExpectedMaximum",
    "deflated_benchmark",
    "deflated_sharpe",
    "expected_maximum",
    "minimum_track_record",
    "probabilistic_sharpe",
]

Floats = npt.NDArray[np.float64]

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(512)


class ExpectedMaximum(StrEnum):
    """How the expected maximum of n standard normals is computed."""

    EXACT = "exact"
    APPROXIMATE = "Bailey and Lopez de Prado approximation"


def probabilistic_sharpe(
    ratio: npt.ArrayLike,
    periods: npt.ArrayLike,
    *,
    skewness: npt.ArrayLike = 0.0,
    kurtosis: npt.ArrayLike = 3.0,
    benchmark: npt.ArrayLike = 0.0,
) -> Floats:
    """Probability that the true Sharpe ratio lies above a benchmark.

    Parameters
    ----------
    ratio : array_like
        Observed Sharpe ratios per period.
    periods : array_like
        Returns in each record, 2 or more.
    skewness, kurtosis : array_like
        Standardised moments of the returns.
    benchmark : array_like
        Ratios per period to be beaten. All arguments broadcast.

    Returns
    -------
    ndarray
        ``Φ((SR − SR₀)√(T−1)/√(1 − γ₃ SR + (γ₄−1) SR²/4))``.

    Raises
    ------
    InputError
        If a record is shorter than two periods, or no distribution has the given moments.

    References
    ----------
    Bailey and Lopez de Prado (2012), Journal of Risk 15(2), 3-44.
    """
    sr, count = np.asarray(ratio, dtype=float), np.asarray(periods, dtype=float)
    if (count < 2).any():
        raise InputError("A track record has fewer than two periods", allowed="two or more")
    spread = _spread(sr, skewness, kurtosis)
    score = (sr - np.asarray(benchmark, dtype=float)) * np.sqrt(count - 1.0) / np.sqrt(spread)
    return np.asarray(special.ndtr(score), dtype=float)


def minimum_track_record(
    ratio: npt.ArrayLike,
    *,
    skewness: npt.ArrayLike = 0.0,
    kurtosis: npt.ArrayLike = 3.0,
    benchmark: npt.ArrayLike = 0.0,
    confidence: float = 0.95,
) -> Floats:
    """Periods needed before the probabilistic Sharpe ratio reaches a confidence.

    Parameters
    ----------
    ratio, skewness, kurtosis, benchmark : array_like
        As in :func:`probabilistic_sharpe`.
    confidence : float
        One-sided confidence.

    Returns
    -------
    ndarray
        ``1 + (1 − γ₃ SR + (γ₄−1) SR²/4) (z/(SR − SR₀))²`` periods; infinite where the ratio does not exceed
        the benchmark.

    Raises
    ------
    InputError
        If the confidence is not between one half and one, or no distribution has the given moments.

    References
    ----------
    Bailey and Lopez de Prado (2012), Journal of Risk 15(2), 3-44.
    """
    if not 0.5 < confidence < 1.0:
        raise InputError(f"The confidence is {confidence!r}", allowed="a number between 0.5 and 1")
    sr = np.asarray(ratio, dtype=float)
    spread = _spread(sr, skewness, kurtosis)
    gap = sr - np.asarray(benchmark, dtype=float)
    above = np.where(gap > 0.0, gap, np.nan)
    length = 1.0 + spread * (float(special.ndtri(confidence)) / above) ** 2
    return np.asarray(np.where(gap <= 0.0, np.inf, length), dtype=float)


def expected_maximum(n: npt.ArrayLike, method: ExpectedMaximum = ExpectedMaximum.EXACT) -> Floats:
    """Expected largest of n independent standard normals.

    Parameters
    ----------
    n : array_like of int
        Numbers of draws, 1 or more.
    method : ExpectedMaximum
        The integral ``∫ x n φ(x) Φ(x)^{n−1} dx``, or the approximation of Bailey and Lopez de Prado (2014),
        which is 2.3% high at n = 10 and 0.9% high at n = 100.

    Returns
    -------
    ndarray
        Zero for one draw.

    Raises
    ------
    InputError
        If a number of draws is below 1.
    """
    draws = np.asarray(n, dtype=float)
    if draws.size and not (np.isfinite(draws).all() and float(draws.min()) >= 1.0):
        raise InputError("A number of draws is below one or not finite", allowed="one or more")
    out = np.zeros(draws.shape)
    several = draws > 1.0
    many = draws[several]
    if method is ExpectedMaximum.APPROXIMATE:
        gamma = float(np.euler_gamma)
        out[several] = (gamma - 1.0) * special.ndtri(1.0 / many) - gamma * special.ndtri(1.0 / (many * np.e))
        return out
    centre = -special.ndtri(1.0 / many)  # the largest of n lies within a few units of its 1 − 1/n quantile
    low, high = np.minimum(centre - 12.0, -9.0), centre + 12.0
    half = 0.5 * (high - low)
    x = 0.5 * (high + low)[:, None] + half[:, None] * _NODES
    log_density = np.log(many)[:, None] - 0.5 * x * x - 0.5 * np.log(2.0 * np.pi)
    log_density = log_density + (many - 1.0)[:, None] * special.log_ndtr(x)
    out[several] = ((x * np.exp(log_density)) @ _WEIGHTS) * half
    return out


def deflated_benchmark(
    trials: int, ratio_variance: float, method: ExpectedMaximum = ExpectedMaximum.EXACT
) -> float:
    """The Sharpe ratio that the best of many skill-less trials is expected to show.

    Parameters
    ----------
    trials : int
        Independent trials, 1 or more.
    ratio_variance : float
        Variance of the Sharpe ratios across the trials, per period.
    method : ExpectedMaximum
        How the expected maximum is computed.

    Returns
    -------
    float
        Per period: ``√V · E[max of n normals]``; zero for a single trial.

    Raises
    ------
    InputError
        If the variance is negative or not finite, or there is no trial.
    """
    if not (np.isfinite(ratio_variance) and ratio_variance >= 0.0):
        raise InputError(
            f"The variance of the trials' Sharpe ratios is {ratio_variance!r}", allowed="zero or above"
        )
    return float(np.sqrt(ratio_variance) * expected_maximum(trials, method))


def deflated_sharpe(
    ratio: npt.ArrayLike,
    periods: npt.ArrayLike,
    *,
    trials: int,
    ratio_variance: float,
    skewness: npt.ArrayLike = 0.0,
    kurtosis: npt.ArrayLike = 3.0,
    method: ExpectedMaximum = ExpectedMaximum.EXACT,
) -> Floats:
    """Probability that a Sharpe ratio picked as the best of many trials reflects more than the picking.

    Parameters
    ----------
    ratio, periods, skewness, kurtosis : array_like
        As in :func:`probabilistic_sharpe`.
    trials : int
        Independent trials among which this was chosen.
    ratio_variance : float
        Variance of the Sharpe ratios across the trials, per period.
    method : ExpectedMaximum
        How the expected maximum is computed; the source uses the approximation.

    Returns
    -------
    ndarray
        The probabilistic Sharpe ratio at :func:`deflated_benchmark`.

    Raises
    ------
    InputError
        As the two functions it joins.

    References
    ----------
    Bailey and Lopez de Prado (2014), Journal of Portfolio Management 40(5), 94-107.
    """
    hurdle = deflated_benchmark(trials, ratio_variance, method)
    return probabilistic_sharpe(ratio, periods, skewness=skewness, kurtosis=kurtosis, benchmark=hurdle)


def _spread(sr: Floats, skewness: npt.ArrayLike, kurtosis: npt.ArrayLike) -> Floats:
    skew, tails = np.asarray(skewness, dtype=float), np.asarray(kurtosis, dtype=float)
    spread = np.asarray(1.0 - skew * sr + 0.25 * (tails - 1.0) * sr * sr, dtype=float)
    if (spread <= 0.0).any():
        raise InputError(
            "The skewness and kurtosis give the Sharpe ratio no positive variance",
            allowed="moments with a kurtosis above 1 + skewness²",
            remedy="use Pearson's kurtosis, which is 3 for the normal, not the excess over it",
        )
    return spread
