"""Least squares for many assets at once: one QR factorisation serves them all.

All quantities are decimal per period. Arrays in, a frozen result out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy import linalg, stats

from soffit.errors import EstimationError
from soffit.estimate.hac import newey_west_lags_each
from soffit.settings import ErrorType, LagRule, Reference

__all__ = [
    "ErrorChoice",
    "FactorMoments",
    "LeastSquares",
    "Regression",
    "factor_moments",
    "least_squares",
    "regress",
]

Floats = npt.NDArray[np.float64]

# A column whose part orthogonal to the others is smaller than this share of its length is taken to be
# a combination of them; certified ill-conditioned designs (NIST Longley, Wampler) stay well above it.
_COLLINEAR = 1e-10
# Residuals smaller than this share of the data's length are rounding, not risk.
_ROUNDING = 1e-13


@dataclass(frozen=True)
class ErrorChoice:
    """Which standard errors to compute.

    Parameters
    ----------
    kind : ErrorType
        Classical, HC0 to HC3, or HAC with Bartlett weights.
    lag_rule : LagRule
        How HAC lags are chosen.
    lags : int
        The number of lags under a fixed rule.
    reference : Reference
        Distribution of t ratios under robust errors; classical errors always use Student's t.
    small_sample : bool
        Whether HAC variances carry the factor T/(T − P); HC1 carries it by definition.
    """

    kind: ErrorType = ErrorType.CLASSICAL
    lag_rule: LagRule = LagRule.RULE_OF_THUMB
    lags: int = 0
    reference: Reference = Reference.STUDENT_T
    small_sample: bool = True


@dataclass(frozen=True, eq=False)
class LeastSquares:
    """Coefficients and errors of N regressions on the same P regressors.

    Parameters
    ----------
    coefficients, errors : ndarray, shape (N, P)
        Estimates and their standard errors.
    residuals : ndarray, shape (T, N)
        What the regressors leave.
    sigma : ndarray, shape (N,)
        Residual standard deviation, divisor T − P.
    r2, adjusted_r2 : ndarray, shape (N,)
        Centred when there is a constant, uncentred otherwise.
    df : int
        T − P.
    lags : ndarray of int, shape (N,)
        HAC lags used for each regression; zeros otherwise.
    choice : ErrorChoice
        Which errors these are.
    """

    coefficients: Floats
    errors: Floats
    residuals: Floats
    sigma: Floats
    r2: Floats
    adjusted_r2: Floats
    df: int
    lags: npt.NDArray[np.int64]
    choice: ErrorChoice

    @cached_property
    def t(self) -> Floats:
        """Ratios of estimates to standard errors; NaN where a regression leaves no residual."""
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = self.coefficients / self.errors
        return np.where(self.errors > 0, ratio, np.nan)

    @property
    def uses_t(self) -> bool:
        """Whether p-values refer to Student's t rather than the normal."""
        return self.choice.kind is ErrorType.CLASSICAL or self.choice.reference is Reference.STUDENT_T

    @cached_property
    def pvalues(self) -> Floats:
        """Two-sided p-values of zero coefficients, from t(T − P) or the normal."""
        law = stats.t(self.df) if self.uses_t else stats.norm()
        return np.asarray(2.0 * law.sf(np.abs(self.t)), dtype=float)

    def half_width(self, level: float) -> Floats:
        """Half-widths of symmetric confidence intervals, shape (N, P)."""
        law = stats.t(self.df) if self.uses_t else stats.norm()
        return np.asarray(self.errors * law.ppf(0.5 + level / 2.0), dtype=float)


def least_squares(
    y: Floats,
    x: Floats,
    *,
    constant: bool = True,
    choice: ErrorChoice | None = None,
    names: Sequence[str] = (),
) -> LeastSquares:
    """Regress every column of `y` on a constant and the columns of `x`.

    Parameters
    ----------
    y : ndarray, shape (T, N)
        Dependent variables.
    x : ndarray, shape (T, K)
        Regressors; K may be zero.
    constant : bool
        Whether a constant comes first among the regressors.
    choice : ErrorChoice, optional
        Which standard errors; classical by default.
    names : sequence of str
        Names of the columns of `x`, for messages.

    Returns
    -------
    LeastSquares
        One row a column of `y`; P = K + 1 with a constant.

    Raises
    ------
    EstimationError
        If there are too few rows, a value is not finite, or the regressors are collinear.

    Notes
    -----
    HC0: White (1980); HC1 to HC3: MacKinnon and White (1985); HAC: Newey and West (1987) with Bartlett
    weights 1 − j/(L + 1).
    """
    choice = choice or ErrorChoice()
    y, x = _checked(y, x)
    rows = len(y)
    design = np.column_stack([np.ones(rows), x]) if constant else x
    width = design.shape[1]
    if rows < width + 1:
        raise EstimationError(
            f"A regression on {width} coefficients has {rows} rows",
            allowed=f"at least {width + 1} rows",
            remedy="use a longer sample or fewer factors",
        )
    scale = np.linalg.norm(design, axis=0)
    q, r = np.linalg.qr(design / np.where(scale > 0, scale, 1.0))
    _refuse_collinear(r, scale, names, constant)
    coefficients = linalg.solve_triangular(r, q.T @ y)
    residuals = y - (design / scale) @ coefficients
    # One step of refinement keeps the digits that an ill-conditioned design would lose.
    coefficients += linalg.solve_triangular(r, q.T @ residuals)
    residuals = y - (design / scale) @ coefficients
    total = y - y.mean(axis=0) if constant else y
    residuals[:, np.linalg.norm(residuals, axis=0) <= _ROUNDING * np.linalg.norm(y, axis=0)] = 0.0
    ssr, tss = (residuals**2).sum(axis=0), (total**2).sum(axis=0)
    df = rows - width
    sigma = np.sqrt(ssr / df)
    with np.errstate(divide="ignore", invalid="ignore"):
        r2 = np.where(tss > 0, 1.0 - ssr / tss, np.nan)
    bread = linalg.solve_triangular(r, np.eye(width)) / scale[:, None]
    errors, lags = _standard_errors(design, residuals, bread, q, sigma, choice, constant)
    return LeastSquares(
        coefficients=(coefficients / scale[:, None]).T.copy(),
        errors=errors,
        residuals=residuals,
        sigma=sigma,
        r2=r2,
        adjusted_r2=1.0 - (1.0 - r2) * (rows - constant) / df,
        df=df,
        lags=lags,
        choice=choice,
    )


def _checked(y: Floats, x: Floats) -> tuple[Floats, Floats]:
    y, x = np.asarray(y, dtype=float), np.asarray(x, dtype=float)
    if y.ndim != 2 or x.ndim != 2 or len(y) != len(x):
        raise EstimationError(
            f"The arrays have shapes {y.shape} and {x.shape}",
            allowed="two tables with the same number of rows",
        )
    if not (np.isfinite(y).all() and np.isfinite(x).all()):
        raise EstimationError(
            "A value that is missing or infinite reached a regression",
            allowed="finite numbers",
            remedy="estimate on a common sample, or each asset on its own history",
        )
    return y, x


def _refuse_collinear(r: Floats, scale: Floats, names: Sequence[str], constant: bool) -> None:
    bad = np.flatnonzero((np.abs(np.diag(r)) < _COLLINEAR) | (scale == 0))
    if not len(bad):
        return
    column = int(bad[0]) - constant
    label = f"'{names[column]}'" if 0 <= column < len(names) else f"regressor {column + 1}"
    raise EstimationError(
        f"{label} is constant or a combination of the other regressors in this sample",
        remedy="leave it out, or use a sample in which it moves by itself",
    )


def _standard_errors(
    design: Floats,
    residuals: Floats,
    bread: Floats,
    q: Floats,
    sigma: Floats,
    choice: ErrorChoice,
    constant: bool,
) -> tuple[Floats, npt.NDArray[np.int64]]:
    """Standard errors, shape (N, P), and the lags used; `bread` is a root of (X'X)⁻¹, shape (P, P)."""
    rows, count = residuals.shape
    lags = np.zeros(count, dtype=np.int64)
    if choice.kind is ErrorType.CLASSICAL:
        return sigma[:, None] * np.linalg.norm(bread, axis=1)[None, :], lags
    # Work with the orthonormal columns: (X'X)⁻¹ X' = bread q', so a sandwich is bread (q' e e' q) bread'.
    weighted = residuals
    if choice.kind in (ErrorType.HC2, ErrorType.HC3):
        leverage = np.clip((q**2).sum(axis=1), 0.0, 1.0)
        power = 0.5 if choice.kind is ErrorType.HC2 else 1.0
        spare = np.where(1.0 - leverage > 1e-12, 1.0 - leverage, np.inf)  # such a residual is zero anyway
        weighted = residuals / spare[:, None] ** power
    meat = _meat(q, weighted, 0)
    if choice.kind is ErrorType.HAC:
        lags = _lags(design, residuals, choice, constant)
        for lag in range(1, int(lags.max(initial=0)) + 1):
            share = np.clip(1.0 - lag / (lags + 1.0), 0.0, None)
            side = _meat(q, weighted, lag)
            meat += share[:, None, None] * (side + side.transpose(0, 2, 1))
    if choice.kind is ErrorType.HC1 or (choice.kind is ErrorType.HAC and choice.small_sample):
        meat *= rows / (rows - design.shape[1])
    variance = np.einsum("pa,nab,pb->np", bread, meat, bread)
    return np.sqrt(np.clip(variance, 0.0, None)), lags


def _meat(q: Floats, residuals: Floats, lag: int) -> Floats:
    rows, width = q.shape
    products = (q[lag:, :, None] * q[: rows - lag, None, :]).reshape(rows - lag, width * width)
    return np.asarray(
        ((residuals[lag:] * residuals[: rows - lag]).T @ products).reshape(-1, width, width), dtype=float
    )


def _lags(design: Floats, residuals: Floats, choice: ErrorChoice, constant: bool) -> npt.NDArray[np.int64]:
    slopes = design[:, 1:] if constant and design.shape[1] > 1 else design
    combined = slopes.sum(axis=1)[:, None] * residuals
    return newey_west_lags_each(choice.lag_rule, len(residuals), fixed=choice.lags, combined=combined)


@dataclass(frozen=True, eq=False)
class FactorMoments:
    """Sample moments of the factors.

    Parameters
    ----------
    mean : ndarray, shape (K,)
        Means per period.
    covariance : ndarray, shape (K, K)
        Covariances, divisor T.
    theta2 : float
        Squared Sharpe ratio of their best combination, per period, in sample: μ'Ω⁻¹μ.
    """

    mean: Floats
    covariance: Floats
    theta2: float

    @property
    def theta(self) -> float:
        """Sharpe ratio of the factors' best combination, per period, in sample."""
        return float(np.sqrt(self.theta2))


def factor_moments(factors: Floats, names: Sequence[str] = ()) -> FactorMoments:
    """Means, covariances (divisor T) and best squared Sharpe ratio of traded factors, shape (T, K)."""
    factors = np.asarray(factors, dtype=float)
    rows, width = factors.shape
    mean = factors.mean(axis=0)
    centred = factors - mean
    covariance = centred.T @ centred / rows
    if width == 0:
        return FactorMoments(mean, covariance, 0.0)
    scale = np.linalg.norm(centred, axis=0)
    _, root = np.linalg.qr(centred / np.where(scale > 0, scale, 1.0))
    _refuse_collinear(root, scale, names, False)
    half = linalg.solve_triangular(root, mean / scale, trans="T")
    return FactorMoments(mean, covariance, float(rows * half @ half))


@dataclass(frozen=True, eq=False)
class Regression:
    """Regressions of N assets on K traded factors over one sample of T periods.

    Parameters
    ----------
    fit : LeastSquares
        Coefficients with the constant first, and their errors.
    total : ndarray, shape (N,)
        Total volatility of each asset, divisor T − K − 1 like the residual's, so that
        ``sigma == total * sqrt(1 - r2)``.
    mean : ndarray, shape (N,)
        Mean excess returns.
    factors : FactorMoments
        Moments of the factors over the same sample.
    periods : int
        T.
    """

    fit: LeastSquares
    total: Floats
    mean: Floats
    factors: FactorMoments
    periods: int

    @property
    def alpha(self) -> Floats:
        """Intercepts, shape (N,)."""
        return self.fit.coefficients[:, 0]

    @property
    def alpha_error(self) -> Floats:
        """Standard errors of the intercepts, shape (N,)."""
        return self.fit.errors[:, 0]

    @property
    def beta(self) -> Floats:
        """Slopes, shape (N, K)."""
        return self.fit.coefficients[:, 1:]

    @property
    def sigma(self) -> Floats:
        """Residual standard deviations, shape (N,)."""
        return self.fit.sigma

    @property
    def r2(self) -> Floats:
        """Shares of variance explained, shape (N,)."""
        return self.fit.r2

    @property
    def residuals(self) -> Floats:
        """Residuals, shape (T, N)."""
        return self.fit.residuals

    @property
    def count(self) -> int:
        """N."""
        return len(self.alpha)

    @property
    def width(self) -> int:
        """K."""
        return int(self.beta.shape[1])

    @cached_property
    def spanned(self) -> npt.NDArray[np.bool_]:
        """Assets that the factors replicate exactly: no residual, hence no appraisal ratio."""
        return np.asarray(self.sigma == 0.0)

    @cached_property
    def appraisal(self) -> Floats:
        """Appraisal ratios α/σ per period (Treynor and Black 1973), shape (N,); NaN where spanned."""
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(self.spanned, np.nan, self.alpha / self.sigma)

    @property
    def t_scale(self) -> float:
        """√(T/(1 + θ̂f²)): an appraisal ratio times this is the classical t ratio of its alpha."""
        return float(np.sqrt(self.periods / (1.0 + self.factors.theta2)))

    @cached_property
    def classical_t(self) -> Floats:
        """Classical t ratios of the alphas, whatever the error type, shape (N,)."""
        return self.appraisal * self.t_scale


def regress(
    returns: Floats, factors: Floats, *, choice: ErrorChoice | None = None, names: Sequence[str] = ()
) -> Regression:
    """Regress N assets' excess returns on K traded factors.

    Parameters
    ----------
    returns : ndarray, shape (T, N)
        Excess returns, decimal per period.
    factors : ndarray, shape (T, K)
        Excess returns of traded factors; K may be zero.
    choice : ErrorChoice, optional
        Which standard errors.
    names : sequence of str
        Factor names, for messages.

    Raises
    ------
    EstimationError
        As :func:`least_squares` does.
    """
    returns, factors = np.asarray(returns, dtype=float), np.asarray(factors, dtype=float)
    fit = least_squares(returns, factors, choice=choice, names=names)
    mean = returns.mean(axis=0)
    total = np.sqrt(((returns - mean) ** 2).sum(axis=0) / fit.df)
    return Regression(fit, total, mean, factor_moments(factors, names), len(returns))
