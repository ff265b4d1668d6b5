"""Is one Sharpe ratio larger than another? Errors and tests of the difference of two ratios.

Ratios are per period, with standard deviations of divisor T.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt
from scipy import special

from soffit.errors import EstimationError, InputError
from soffit.estimate.hac import newey_west_lags_each
from soffit.estimate.sharpe import long_run_error, sharpe_influence, sharpe_ratios
from soffit.estimate.statistic import Distribution, Family, NotApplicable, TestStatistic
from soffit.settings import LagRule

__all__ = [
    "DifferenceErrors",
    "SharpeDifference",
    "bootstrap_difference",
    "memmel_error",
    "sharpe_difference",
]

Floats = npt.NDArray[np.float64]

_CHUNK = 2_000_000  # resampled returns held at once


class DifferenceErrors(StrEnum):
    """Which sampling error of a difference of Sharpe ratios."""

    MEMMEL = "iid normal"
    HAC = "HAC"


@dataclass(frozen=True, eq=False)
class SharpeDifference:
    """Differences of N pairs of Sharpe ratios per period.

    Parameters
    ----------
    first, second : ndarray, shape (N,)
        The ratios, divisor T.
    correlation : ndarray, shape (N,)
        Correlations of the pairs.
    memmel, hac : ndarray, shape (N,)
        Standard errors: Jobson and Korkie (1981) as corrected by Memmel (2003), and the delta method with
        Bartlett weights (Ledoit and Wolf 2008). NaN where a series is constant; zero where the two are the
        same series, up to a positive multiple.
    lags : ndarray of int, shape (N,)
        Newey-West lags.
    periods : int
        T.
    """

    first: Floats
    second: Floats
    correlation: Floats
    memmel: Floats
    hac: Floats
    lags: npt.NDArray[np.int64]
    periods: int

    @property
    def difference(self) -> Floats:
        """First minus second, shape (N,)."""
        return self.first - self.second

    def error(self, kind: DifferenceErrors = DifferenceErrors.HAC) -> Floats:
        """Standard errors of the chosen kind, shape (N,)."""
        return self.memmel if kind is DifferenceErrors.MEMMEL else self.hac

    def z(self, kind: DifferenceErrors = DifferenceErrors.HAC) -> Floats:
        """Differences over their errors, shape (N,); NaN where the error is zero."""
        error = self.error(kind)
        return np.where(error > 0.0, self.difference / np.where(error > 0.0, error, 1.0), np.nan)

    def pvalues(self, kind: DifferenceErrors = DifferenceErrors.HAC) -> Floats:
        """Two-sided normal p-values of equal ratios, shape (N,)."""
        return np.asarray(2.0 * special.ndtr(-np.abs(self.z(kind))), dtype=float)

    def interval(self, level: float, kind: DifferenceErrors = DifferenceErrors.HAC) -> tuple[Floats, Floats]:
        """Asymptotic intervals of the differences at a coverage `level`; two arrays of shape (N,)."""
        half = float(special.ndtri(0.5 + 0.5 * level)) * self.error(kind)
        return self.difference - half, self.difference + half


def memmel_error(
    first: npt.ArrayLike, second: npt.ArrayLike, correlation: npt.ArrayLike, periods: npt.ArrayLike
) -> Floats:
    """Standard error of the difference of two Sharpe ratios under iid normal returns.

    Parameters
    ----------
    first, second : array_like
        Sharpe ratios per period.
    correlation : array_like
        Correlation of the two series.
    periods : array_like
        T. All arguments broadcast.

    Returns
    -------
    ndarray
        ``√((2 − 2ρ + (SR₁² + SR₂² − 2 SR₁ SR₂ ρ²)/2)/T)``.

    References
    ----------
    Jobson and Korkie (1981), Journal of Finance 36, 889-908; Memmel (2003), Finance Letters 1, 21-23.
    """
    a, b = np.asarray(first, dtype=float), np.asarray(second, dtype=float)
    rho = np.asarray(correlation, dtype=float)
    variance = 2.0 - 2.0 * rho + 0.5 * (a * a + b * b - 2.0 * a * b * rho * rho)
    return np.asarray(np.sqrt(np.maximum(variance, 0.0) / np.asarray(periods, dtype=float)), dtype=float)


def sharpe_difference(
    first: Floats, second: Floats, *, lag_rule: LagRule = LagRule.RULE_OF_THUMB, lags: int = 0
) -> SharpeDifference:
    """Differences of the Sharpe ratios of pairs of series over one sample.

    Parameters
    ----------
    first, second : ndarray, shape (T, N) or (T,)
        Excess returns, decimal per period, complete. A single series is paired with each of the others.
    lag_rule : LagRule
        How the lags of the HAC error are chosen.
    lags : int
        The number of lags under a fixed rule; zero gives the error of independent returns of any shape.

    Returns
    -------
    SharpeDifference

    Raises
    ------
    InputError
        If the shapes do not pair, or a value is missing or infinite.
    EstimationError
        If there are too few periods.
    """
    one, two = _paired(first, second)
    a, b = sharpe_ratios(one, ddof=0), sharpe_ratios(two, ddof=0)
    periods = len(one)
    flat = np.isnan(a.ratio) | np.isnan(b.ratio)
    correlation = np.clip((_standardised(one) * _standardised(two)).mean(axis=0), -1.0, 1.0)
    gap = sharpe_influence(one) - sharpe_influence(two)
    # Two series that are multiples of each other leave rounding where there is exactly nothing.
    gap[:, np.abs(gap).max(axis=0) < 1e-12] = 0.0
    used = newey_west_lags_each(lag_rule, periods, fixed=lags, combined=gap)
    hac = long_run_error(gap, used, np.full(gap.shape[1], periods))
    return SharpeDifference(
        first=a.ratio,
        second=b.ratio,
        correlation=np.where(flat, np.nan, correlation),
        memmel=memmel_error(a.ratio, b.ratio, correlation, periods),
        hac=np.where(flat, np.nan, hac),
        lags=used,
        periods=periods,
    )


def bootstrap_difference(
    first: Floats,
    second: Floats,
    *,
    draws: int,
    seed: int,
    block: int | None = None,
    lag_rule: LagRule = LagRule.RULE_OF_THUMB,
    lags: int = 0,
) -> TestStatistic | NotApplicable:
    """Studentised circular block bootstrap test that two Sharpe ratios are equal.

    Parameters
    ----------
    first, second : ndarray, shape (T,)
        Excess returns, decimal per period, complete.
    draws : int
        Bootstrap samples.
    seed : int
        Seed of the draws.
    block : int, optional
        Block length; the whole number nearest to T^(1/3) if not given (common practice: the rate is Hall,
        Horowitz and Jing's (1995), the constant has no source).
    lag_rule, lags
        Lags of the HAC error that studentises the sample's own difference.

    Returns
    -------
    TestStatistic or NotApplicable
        The absolute studentised difference with a two-sided bootstrap p-value
        ``(1 + #{d* >= d})/(1 + draws)``; not applicable where the difference has no sampling error.

    Raises
    ------
    InputError
        If more than one pair came, or fewer than one draw.
    EstimationError
        If the block length does not fit: a resample needs at least two whole blocks.

    References
    ----------
    Ledoit and Wolf (2008), Journal of Empirical Finance 15, 850-859, sections 3.2.2 and 3.2.3; Bartlett weights
    here where they use the quadratic-spectral kernel with prewhitening.
    """
    name = "Difference of Sharpe ratios, studentised bootstrap"
    one, two = _paired(first, second)
    if one.shape[1] != 1:
        raise InputError(f"{one.shape[1]} pairs of series came", allowed="one pair at a time")
    if draws < 1:
        raise InputError(f"{draws} bootstrap draws were asked for", allowed="one or more")
    periods = len(one)
    length = max(1, round(periods ** (1.0 / 3.0))) if block is None else block
    if not 1 <= length <= periods // 2:
        raise EstimationError(
            f"Blocks of {length} periods came for a sample of {periods}",
            allowed=f"1 to {periods // 2}",
            remedy="choose a shorter block or use a longer sample",
        )
    sample = sharpe_difference(one, two, lag_rule=lag_rule, lags=lags)
    observed, error = float(sample.difference[0]), float(sample.hac[0])
    if not error > 0.0:
        return NotApplicable(name, "the two series are constant or multiples of each other")
    statistic = abs(observed) / error
    rng = np.random.default_rng(seed)
    exceeding = 0
    step = max(1, _CHUNK // periods)
    for begin in range(0, draws, step):
        rows = _circular_blocks(rng, min(step, draws - begin), periods, length)
        resampled = _studentised(one[rows, 0].T, two[rows, 0].T, length, observed)
        exceeding += int((resampled >= statistic).sum())
    return TestStatistic(
        name=name,
        value=statistic,
        null="the two Sharpe ratios are equal",
        distribution=Distribution(Family.BOOTSTRAP),
        pvalue=(1.0 + exceeding) / (1.0 + draws),
        source="ledoit-wolf-2008",
    )


def _circular_blocks(
    rng: np.random.Generator, draws: int, periods: int, length: int
) -> npt.NDArray[np.int64]:
    """Row numbers of circular block resamples, shape (draws, periods)."""
    blocks = -(-periods // length)
    starts = rng.integers(0, periods, size=(draws, blocks))
    rows = (starts[:, :, None] + np.arange(length)) % periods
    return rows.reshape(draws, blocks * length)[:, :periods]


def _studentised(one: Floats, two: Floats, length: int, centre: float) -> Floats:
    """``|Δ* − Δ|/s(Δ*)`` of resamples in columns; the error is that natural to blocks (Götze and Künsch 1996)."""
    periods = len(one)
    a, b = (
        sharpe_ratios(one, ddof=0, lag_rule=LagRule.FIXED),
        sharpe_ratios(two, ddof=0, lag_rule=LagRule.FIXED),
    )
    gap = sharpe_influence(one) - sharpe_influence(two)
    whole = periods // length
    sums = gap[: whole * length].reshape(whole, length, -1).sum(axis=1)
    error = np.sqrt((sums**2).mean(axis=0) / length / periods)
    distance = np.abs(a.ratio - b.ratio - centre)
    # A resample without variation tells nothing; it counts as exceeding, which is the cautious side.
    usable = (error > 0.0) & np.isfinite(distance)
    return np.where(usable, distance / np.where(usable, error, 1.0), np.inf)


def _paired(first: Floats, second: Floats) -> tuple[Floats, Floats]:
    one, two = np.asarray(first, dtype=float), np.asarray(second, dtype=float)
    one, two = (side[:, None] if side.ndim == 1 else side for side in (one, two))
    fits = one.ndim == 2 and two.ndim == 2 and len(one) == len(two)
    if not (fits and (one.shape[1] == two.shape[1] or 1 in (one.shape[1], two.shape[1]))):
        raise InputError(
            f"Returns of shapes {np.shape(first)} and {np.shape(second)} do not pair",
            allowed="the same number of periods, and equal numbers of series or a single one on one side",
        )
    wide = max(one.shape[1], two.shape[1])
    return np.broadcast_to(one, (len(one), wide)), np.broadcast_to(two, (len(two), wide))


def _standardised(values: Floats) -> Floats:
    centred = values - values.mean(axis=0)
    spread = np.sqrt((centred**2).mean(axis=0))
    return np.asarray(centred / np.where(spread > 0.0, spread, 1.0), dtype=float)
