"""What the joint test takes for granted about residuals, checked for every asset at once.

Autocorrelation (Ljung and Box), heteroskedasticity related to the factors (Breusch and Pagan) and
departure from the normal (Jarque and Bera). One row of results an asset.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from soffit.errors import EstimationError
from soffit.estimate.statistic import Distribution, Family, NotApplicable, TestStatistic

__all__ = [
    "AssetTests",
    "ResidualChecks",
    "breusch_pagan",
    "default_portmanteau_lags",
    "jarque_bera",
    "ljung_box",
    "residual_checks",
]

Floats = npt.NDArray[np.float64]

_NO_RESIDUAL = "the factors explain this asset exactly, so there are no residuals to test"


@dataclass(frozen=True, eq=False)
class AssetTests:
    """One test, once for each of N assets, against the same chi-squared distribution.

    Parameters
    ----------
    name : str
        The trade's name of the test.
    null : str
        The null hypothesis in words.
    statistic, pvalue : ndarray, shape (N,)
        NaN where the test does not exist; :meth:`one` gives the reason.
    df : int
        Degrees of freedom.
    source : str
        Key of the published source.
    reason : str
        Why the test exists for no asset; empty if it exists for those with residuals.
    """

    name: str
    null: str
    statistic: Floats
    pvalue: Floats
    df: int
    source: str
    reason: str = ""

    @property
    def exists(self) -> npt.NDArray[np.bool_]:
        """Assets for which there is a number, shape (N,)."""
        return np.isfinite(self.statistic)

    def one(self, asset: int) -> TestStatistic | NotApplicable:
        """Result of the asset at this position."""
        value = float(self.statistic[asset])
        if not np.isfinite(value):
            return NotApplicable(self.name, self.reason or _NO_RESIDUAL)
        law = Distribution(Family.CHI2, (float(self.df),))
        return TestStatistic(self.name, value, self.null, law, float(self.pvalue[asset]), self.source)

    def rejections(self, level: float = 0.05) -> int:
        """How many assets reject, each taken alone, at this significance level."""
        return int(np.sum(self.pvalue[self.exists] <= level))


@dataclass(frozen=True, eq=False)
class ResidualChecks:
    """The three checks of one set of regressions.

    Parameters
    ----------
    autocorrelation : AssetTests
        Ljung and Box.
    heteroskedasticity : AssetTests
        Breusch and Pagan, in Koenker's form.
    normality : AssetTests
        Jarque and Bera.
    lags : int
        Lags in the Ljung-Box statistic.
    """

    autocorrelation: AssetTests
    heteroskedasticity: AssetTests
    normality: AssetTests
    lags: int


def default_portmanteau_lags(T: int) -> int:
    """Lags of a Ljung-Box test if none is asked for: ``min(10, T // 5)``, at least one (common practice)."""
    return max(1, min(10, T // 5))


def residual_checks(residuals: Floats, factors: Floats, *, lags: int | None = None) -> ResidualChecks:
    """Run the three checks.

    Parameters
    ----------
    residuals : ndarray, shape (T, N)
        Residuals of regressions with a constant.
    factors : ndarray, shape (T, K)
        The regressors without the constant.
    lags : int, optional
        Lags of the Ljung-Box statistic; :func:`default_portmanteau_lags` if None.

    Returns
    -------
    ResidualChecks

    Raises
    ------
    EstimationError
        If shapes do not agree, a value is not finite or `lags` is below one.
    """
    used = default_portmanteau_lags(len(residuals)) if lags is None else lags
    return ResidualChecks(
        ljung_box(residuals, used), breusch_pagan(residuals, factors), jarque_bera(residuals), used
    )


def ljung_box(residuals: Floats, lags: int) -> AssetTests:
    """Ljung-Box test of no autocorrelation up to a lag.

    Parameters
    ----------
    residuals : ndarray, shape (T, N)
        Residuals; their mean is removed.
    lags : int
        Number of autocorrelations.

    Returns
    -------
    AssetTests
        ``T(T+2) Σ_j r_j²/(T−j)`` against chi-squared with `lags` degrees of freedom. No degrees are taken
        off for the regressors, which are not lagged residuals.

    Raises
    ------
    EstimationError
        If a value is not finite or `lags` is below one.

    References
    ----------
    Ljung and Box (1978), Biometrika 65, 297-303.
    """
    e = _checked(residuals)
    if lags < 1:
        raise EstimationError(f"A Ljung-Box test with {lags} lags was asked for", allowed="one lag or more")
    T = len(e)
    name, null = "Ljung-Box", f"no autocorrelation of the residuals up to lag {lags}"
    if lags >= T:
        return _absent(
            name, null, e, lags, "ljung-box-1978", f"{lags} autocorrelations cannot be had from {T} periods"
        )
    centred, usable = _standardised(e)
    statistic = np.zeros(e.shape[1])
    for j in range(1, lags + 1):
        r = (centred[j:] * centred[:-j]).mean(axis=0) * (T - j) / T
        statistic += r**2 / (T - j)
    return _against_chi2(name, null, T * (T + 2.0) * statistic, usable, lags, "ljung-box-1978")


def breusch_pagan(residuals: Floats, factors: Floats) -> AssetTests:
    """Breusch-Pagan test of a residual variance that does not move with the factors, in Koenker's form.

    Parameters
    ----------
    residuals : ndarray, shape (T, N)
        Residuals of regressions with a constant.
    factors : ndarray, shape (T, K)
        The regressors without the constant.

    Returns
    -------
    AssetTests
        ``T R²`` of the squared residuals on the factors, against chi-squared with K degrees of freedom.
        Koenker's form keeps its size where residuals are not normal.

    Raises
    ------
    EstimationError
        If shapes do not agree or a value is not finite.

    References
    ----------
    Breusch and Pagan (1979), Econometrica 47, 1287-1294; Koenker (1981), Journal of Econometrics 17, 107-112.
    """
    e, f = _checked(residuals), np.asarray(factors, dtype=np.float64)
    if f.ndim != 2 or len(f) != len(e) or not np.isfinite(f).all():
        raise EstimationError(
            f"Factors of shape {f.shape} came for residuals of shape {e.shape}",
            allowed="finite factors, one row a period",
        )
    T, K = f.shape
    name, null = "Breusch-Pagan", "the residual variance does not depend on the factors"
    if K == 0:
        return _absent(
            name, null, e, K, "koenker-1981", "there is no factor that the variance could depend on"
        )
    if T <= K + 1:
        return _absent(
            name, null, e, K, "koenker-1981", f"{T} periods are too few for {K} factors and a constant"
        )
    standard, usable = _standardised(e, centre=False)
    squares = standard**2
    squares = squares - squares.mean(axis=0)
    total = (squares**2).sum(axis=0)
    # Squared residuals that do not move at all have no R²: the test then sees no heteroskedasticity.
    steady = total <= 1e-24 * T
    basis, _ = np.linalg.qr(f - f.mean(axis=0))
    explained = ((basis.T @ squares) ** 2).sum(axis=0)
    share = np.divide(explained, total, out=np.zeros_like(total), where=~steady)
    return _against_chi2(name, null, T * share, usable, K, "koenker-1981")


def jarque_bera(residuals: Floats) -> AssetTests:
    """Jarque-Bera test of normality.

    Parameters
    ----------
    residuals : ndarray, shape (T, N)
        Residuals; their mean is removed.

    Returns
    -------
    AssetTests
        ``T/6 (skewness² + (kurtosis − 3)²/4)`` against chi-squared with two degrees of freedom.

    Raises
    ------
    EstimationError
        If a value is not finite.

    References
    ----------
    Jarque and Bera (1987), International Statistical Review 55, 163-172.
    """
    e = _checked(residuals)
    T = len(e)
    name, null = "Jarque-Bera", "the residuals are normal"
    if T < 4:
        return _absent(
            name, null, e, 2, "jarque-bera-1987", f"{T} periods say nothing about skewness and kurtosis"
        )
    z, usable = _standardised(e)
    skewness, excess = (z**3).mean(axis=0), (z**4).mean(axis=0) - 3.0
    return _against_chi2(name, null, T / 6.0 * (skewness**2 + excess**2 / 4.0), usable, 2, "jarque-bera-1987")


def _standardised(e: Floats, *, centre: bool = True) -> tuple[Floats, npt.NDArray[np.bool_]]:
    """Residuals over their root mean square, and which assets have any."""
    x = e - e.mean(axis=0) if centre else e
    size = np.abs(e).max(axis=0)
    # What is left of a constant after its mean is removed is rounding, not a residual.
    usable = np.abs(x).max(axis=0) > 1e-13 * size
    scaled = x / np.where(size > 0.0, size, 1.0)
    spread = np.sqrt((scaled**2).mean(axis=0))
    return scaled / np.where(usable, spread, 1.0), usable


def _against_chi2(
    name: str, null: str, statistic: Floats, usable: npt.NDArray[np.bool_], df: int, source: str
) -> AssetTests:
    kept = np.where(usable, statistic, np.nan)
    return AssetTests(name, null, kept, np.asarray(special.chdtrc(df, kept), dtype=np.float64), df, source)


def _absent(name: str, null: str, e: Floats, df: int, source: str, reason: str) -> AssetTests:
    nothing = np.full(e.shape[1], np.nan)
    return AssetTests(name, null, nothing, nothing.copy(), df, source, reason)


def _checked(residuals: Floats) -> Floats:
    e = np.asarray(residuals, dtype=np.float64)
    if e.ndim != 2 or 0 in e.shape:
        raise EstimationError(
            f"Residuals of shape {e.shape} came", allowed="one row a period and one column an asset"
        )
    if not np.isfinite(e).all():
        raise EstimationError("A residual is not finite", remedy="estimate on a common sample first")
    return e
