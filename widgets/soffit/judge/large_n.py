"""The joint test of zero alphas for many assets, even more of them than periods.

It sums the squared t ratios of single assets, so it inverts no N×N covariance matrix, and corrects
the variance of the sum for residuals that are correlated across assets.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from soffit.errors import SettingError
from soffit.estimate.regression import Regression
from soffit.estimate.statistic import Distribution, Family, NotApplicable, TestStatistic

__all__ = ["LargeN", "SquaredCorrelations", "large_n_test", "residual_correlations"]

Floats = npt.NDArray[np.float64]

_NAME = "The large-N test"
_BLOCK = 1000  # assets whose correlations are held at once: 80 MB against 10,000 others
_SMALLEST_DF = 7  # the third moment of a squared t ratio exists above six degrees of freedom


@dataclass(frozen=True)
class SquaredCorrelations:
    """How correlated the residuals are across assets, as the test needs it.

    Parameters
    ----------
    thresholded : float
        ``(N − 1) ρ̄²`` over the pairs that pass the multiple-testing threshold, as published.
    unbiased : float
        The same over all pairs, less what sampling error alone adds to a squared correlation.
    cubes : float
        Estimate of ``tr(R³)/N`` for the residual correlation matrix R; 1 for uncorrelated residuals.
    passing : int
        Number of pairs that pass the threshold.
    """

    thresholded: float
    unbiased: float
    cubes: float
    passing: int


@dataclass(frozen=True, eq=False)
class LargeN:
    """Large-N test of zero alphas, in two versions.

    Parameters
    ----------
    test : TestStatistic or NotApplicable
        The one to rely on: correlations without the bias of sampling error, and a chi-squared reference with the
        skewness of the sum.
    published : TestStatistic or NotApplicable
        As published: thresholded correlations and the normal distribution, one-sided.
    mean_square_t : float
        Average squared t ratio; ``(T−K−1)/(T−K−3)`` is expected under the null. NaN where a t ratio is missing.
    correlations : SquaredCorrelations or NotApplicable
        What the correction rests on.
    count : int
        N.
    """

    test: TestStatistic | NotApplicable
    published: TestStatistic | NotApplicable
    mean_square_t: float
    correlations: SquaredCorrelations | NotApplicable
    count: int

    @property
    def effective_count(self) -> float | NotApplicable:
        """Number of uncorrelated assets whose sum of squared t ratios would vary as much."""
        if isinstance(self.correlations, NotApplicable):
            return self.correlations
        return self.count / (1.0 + self.correlations.unbiased)


def large_n_test(regression: Regression, *, threshold_level: float = 0.05) -> LargeN:
    """Test zero alphas of many assets by their squared t ratios.

    Parameters
    ----------
    regression : Regression
        All assets over one sample; N may exceed T.
    threshold_level : float
        Size of the multiple test that decides which residual correlations count, in the published version.

    Returns
    -------
    LargeN
        With the reason in place of a statistic where an asset has no residual risk, or where fewer than seven
        degrees of freedom leave a squared t ratio without a third moment.

    Raises
    ------
    SettingError
        If the level is not between 0 and 1.

    Notes
    -----
    With ``v = T − K − 1``, a squared t ratio has mean ``v/(v−2)`` and variance ``2 (v/(v−2))² (v−1)/(v−4)``; the
    variance of the sum is taken to be N times that, times ``1 + (N−1) ρ̄²``. The published test keeps in ρ̄² the
    pairs with ``v ρ̂² ≥ Φ⁻¹(1 − p/(2(N−1)))²`` and refers the standardised sum to the normal distribution.

    Measured rejections at 5% under zero alphas with normal residuals, K = 3 (Monte Carlo error in brackets), for
    blocks of ten assets correlated at 0.5 and for correlations ``0.5^|i−j|``:

    =====  ===  ==================  ====================  ====================
    N      T    residuals           as published          the one to rely on
    =====  ===  ==================  ====================  ====================
    100    60   blocks              7.5% (0.3)            4.7% (0.3)
    100    60   0.5^|i-j|           7.2% (0.3)            5.0% (0.3)
    100    240  blocks              6.5% (0.3)            5.2% (0.3)
    100    240  0.5^|i-j|           6.5% (0.3)            5.2% (0.3)
    500    60   blocks              8.2% (0.3)            5.0% (0.3)
    500    60   0.5^|i-j|           7.8% (0.3)            5.2% (0.3)
    500    240  blocks              5.2% (0.4)            4.6% (0.4)
    500    240  0.5^|i-j|           6.0% (0.4)            5.3% (0.4)
    =====  ===  ==================  ====================  ====================

    The published version rejects a true null too often in short samples because moderate correlations fall below
    its threshold, and because the sum is skewed. So `test` takes all pairs less their sampling bias, and matches
    the first three moments of the sum to a chi-squared distribution. That combination has no published source;
    it stands on the sizes above.

    No N×N matrix is held: sums over all pairs come from the T×T matrix of products over assets, the threshold
    works in blocks of 1,000 assets.

    References
    ----------
    Pesaran and Yamagata (2012, 2024), Journal of Financial Econometrics 22, 407-460. Bias of squared correlations:
    Bai and Saranadasa (1996), Statistica Sinica 6. Matching three moments: Pearson (1959), Biometrika 46.
    """
    if not 0.0 < threshold_level < 1.0:
        raise SettingError(f"The threshold level is {threshold_level!r}", allowed="a number between 0 and 1")
    count, df = regression.count, regression.fit.df
    t = regression.classical_t
    missing = _missing(regression)
    if missing:
        nothing = NotApplicable(_NAME, missing)
        return LargeN(nothing, nothing, float(np.mean(t**2)), nothing, count)
    correlations = residual_correlations(regression.residuals, df, threshold_level)
    mean, spread = _moments_of_squared_t(df)
    mean_square = float(np.mean(t**2))
    plain = (mean_square - mean) / spread * np.sqrt(count)
    return LargeN(
        test=_skewed(plain, correlations, count, df),
        published=_normal(plain, correlations),
        mean_square_t=mean_square,
        correlations=correlations,
        count=count,
    )


def residual_correlations(residuals: Floats, df: int, threshold_level: float = 0.05) -> SquaredCorrelations:
    """Sums of powers of the residual correlations over all pairs of assets.

    Parameters
    ----------
    residuals : ndarray, shape (T, N)
        Residuals, none of them zero throughout.
    df : int
        T − K − 1.
    threshold_level : float
        Size of the multiple test over pairs.

    Returns
    -------
    SquaredCorrelations
    """
    unit = residuals / np.linalg.norm(residuals, axis=0)
    count = unit.shape[1]
    if count == 1:
        return SquaredCorrelations(0.0, 0.0, 1.0, 0)
    squares, cubes = _power_sums(unit)
    # A squared correlation of independent residuals is 1/df on average: that much is not correlation.
    unbiased = max(df / (df - 1.0) * ((squares - count) / count - (count - 1.0) / df), 0.0)
    scale = df**4 / ((df - 1.0) * (df - 2.0) * (df + 2.0) * (df + 4.0))
    third = scale * (cubes - 3.0 / df * squares * count + 2.0 / df**2 * count**3) / count
    # tr(R³) tr(R) ≥ tr(R²)² whatever R is; the estimate is held to it.
    third = max(third, (1.0 + unbiased) ** 2)
    cut = special.ndtri(1.0 - threshold_level / (2.0 * (count - 1.0))) ** 2 / df
    total, passing = _over_threshold(unit, float(cut))
    return SquaredCorrelations(2.0 * total / count, float(unbiased), float(third), passing)


def _power_sums(unit: Floats) -> tuple[float, float]:
    """tr(R²) and tr(R³) of ``R = U'U``, from whichever of U'U and UU' is the smaller."""
    T, count = unit.shape
    product = unit @ unit.T if count > T else unit.T @ unit
    square = product @ product
    return float(np.sum(product**2)), float(np.sum(square * product))


def _over_threshold(unit: Floats, cut: float) -> tuple[float, int]:
    """Sum and number of the squared correlations above `cut`, each pair once."""
    count = unit.shape[1]
    total, passing = 0.0, 0
    for start in range(0, count, _BLOCK):
        stop = min(start + _BLOCK, count)
        squares = (unit[:, start:stop].T @ unit[:, start:]) ** 2
        squares[np.tril_indices(stop - start)] = 0.0
        kept = squares >= cut
        total += float(squares[kept].sum())
        passing += int(kept.sum())
    return total, passing


def _moments_of_squared_t(df: int) -> tuple[float, float]:
    mean = df / (df - 2.0)
    return mean, float(mean * np.sqrt(2.0 * (df - 1.0) / (df - 4.0)))


def _skewness_of_squared_t(df: int) -> float:
    """Skewness of F(1, df); √8 in the limit."""
    return float(df * np.sqrt(8.0 * (df - 4.0)) / ((df - 6.0) * np.sqrt(df - 1.0)))


def _skewed(plain: float, correlations: SquaredCorrelations, count: int, df: int) -> TestStatistic:
    inflation = 1.0 + correlations.unbiased
    skewness = correlations.cubes / (inflation**1.5 * np.sqrt(count)) * _skewness_of_squared_t(df)
    freedom = 8.0 / skewness**2
    value = float(max(freedom + plain / np.sqrt(inflation) * np.sqrt(2.0 * freedom), 0.0))
    law = Distribution(Family.CHI2, (float(freedom),))
    return TestStatistic("Large-N", value, "all alphas are zero", law, law.sf(value), "pesaran-yamagata-2024")


def _normal(plain: float, correlations: SquaredCorrelations) -> TestStatistic:
    value = float(plain / np.sqrt(1.0 + correlations.thresholded))
    law = Distribution(Family.NORMAL)
    return TestStatistic(
        "Pesaran-Yamagata", value, "all alphas are zero", law, law.sf(value), "pesaran-yamagata-2024"
    )


def _missing(regression: Regression) -> str:
    spanned = int(regression.spanned.sum())
    if spanned:
        which = int(np.flatnonzero(regression.spanned)[0]) + 1
        return (
            f"the factors replicate {spanned:,} of {regression.count:,} assets exactly (the first is asset {which}), "
            "and these have no t ratio; leave them out"
        )
    if regression.fit.df < _SMALLEST_DF:
        return (
            f"{regression.periods} periods with {regression.width} factors leave {regression.fit.df} degrees of "
            f"freedom; it needs T − K − 1 of {_SMALLEST_DF} or more"
        )
    return ""
