"""Do betas get paid: prices of risk from a cross-section of returns each period.

All quantities are decimal per period.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg

from soffit.errors import EstimationError
from soffit.estimate.cross_section_errors import (
    SOURCES,
    PremiumError,
    fama_macbeth_covariance,
    newey_west_covariance,
    premium_lags,
    premium_tests,
    robust_influence,
    shanken_covariance,
    wald_test,
)
from soffit.estimate.cross_section_fit import cross_sectional_r2, pricing_error_tests
from soffit.estimate.regression import Regression, regress
from soffit.estimate.rolling import rolling_betas
from soffit.estimate.second_pass import (
    SecondPassParts,
    design_of,
    inverse_risk,
    no_inverse,
    project,
    returns_root,
)
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.settings import LagRule, Reference, SecondPass

__all__ = ["PremiumError", "TwoPass", "two_pass"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class TwoPass:
    """Prices of risk of K factors from N assets; P = K + 1 premia with a constant, which comes first.

    Parameters
    ----------
    second_pass : SecondPass
        Weighting of the cross-section.
    constant : bool
        Whether the first premium is the zero-beta return.
    window : int or None
        Periods of the rolling beta window; None for full-sample betas.
    first : int
        Position of the first period that is priced; 0 for full-sample betas.
    slopes : ndarray, shape (S, P)
        Premia of each priced period.
    betas : ndarray, shape (N, K)
        Full-sample betas, or the mean of the rolling ones.
    mean : ndarray, shape (N,)
        Mean excess returns over the priced periods.
    errors_by_period : ndarray, shape (S, N)
        What each cross-section leaves of the returns.
    factor_means : ndarray, shape (K,)
        Mean factors over the priced periods.
    covariances : mapping of PremiumError to ndarray, shape (P, P), or NotApplicable
        Covariances of the premia.
    gap_covariances : mapping of PremiumError to ndarray, shape (K, K), or NotApplicable
        Covariances of premia less factor means.
    r2_ols, r2_gls : float or NotApplicable
        Cross-sectional R² of the OLS and of the GLS regression of mean returns on betas, whichever
        `second_pass` is. With rolling betas the OLS one is of the mean errors of the second pass taken.
    first_pass_r2 : float or NotApplicable
        Share of the assets' pooled variance that the factors explain over time.
    pricing_chi2, pricing_f : TestStatistic or NotApplicable
        Pricing-error tests with Shanken's correction.
    inflation : float or NotApplicable
        Shanken's c.
    lags : int
        Lags of the Newey-West errors.
    """

    second_pass: SecondPass
    constant: bool
    window: int | None
    first: int
    slopes: Floats
    betas: Floats
    mean: Floats
    errors_by_period: Floats
    factor_means: Floats
    covariances: Mapping[PremiumError, Floats | NotApplicable]
    gap_covariances: Mapping[PremiumError, Floats | NotApplicable]
    r2_ols: float | NotApplicable
    r2_gls: float | NotApplicable
    first_pass_r2: float | NotApplicable
    pricing_chi2: TestStatistic | NotApplicable
    pricing_f: TestStatistic | NotApplicable
    inflation: float | NotApplicable
    lags: int

    @property
    def premia(self) -> Floats:
        """Prices of risk, the constant's first, shape (P,)."""
        return np.asarray(self.slopes.mean(axis=0))

    @property
    def prices(self) -> Floats:
        """Prices of risk of the factors alone, shape (K,)."""
        return self.premia[int(self.constant) :]

    @property
    def pricing_errors(self) -> Floats:
        """Mean of what the cross-sections leave, shape (N,)."""
        return np.asarray(self.errors_by_period.mean(axis=0))

    @property
    def fitted(self) -> Floats:
        """Mean returns that betas and premia imply, shape (N,)."""
        return self.mean - self.pricing_errors

    @property
    def periods(self) -> int:
        """S, the number of cross-sections."""
        return len(self.slopes)

    @property
    def gaps(self) -> Floats:
        """Prices of risk less factor means, shape (K,): zero for traded factors in a model that holds."""
        return self.prices - self.factor_means

    def standard_errors(self, kind: PremiumError) -> Floats | NotApplicable:
        """Standard errors of the premia, shape (P,)."""
        covariance = self.covariances[kind]
        return covariance if isinstance(covariance, NotApplicable) else np.sqrt(np.diag(covariance))

    def gap_errors(self, kind: PremiumError) -> Floats | NotApplicable:
        """Standard errors of premia less factor means, shape (K,)."""
        covariance = self.gap_covariances[kind]
        return covariance if isinstance(covariance, NotApplicable) else np.sqrt(np.diag(covariance))

    def tests(
        self, kind: PremiumError, reference: Reference = Reference.NORMAL
    ) -> tuple[TestStatistic | NotApplicable, ...]:
        """Tests that each premium is zero, P of them."""
        covariance = self.covariances[kind]
        if isinstance(covariance, NotApplicable):
            return (covariance,) * len(self.premia)
        null = "the price of risk is zero"
        return premium_tests(self.premia, covariance, kind, self.periods, reference, null)

    def gap_tests(
        self, kind: PremiumError, reference: Reference = Reference.NORMAL
    ) -> tuple[TestStatistic | NotApplicable, ...]:
        """Tests that each price of risk equals its factor's mean, K of them."""
        covariance = self.gap_covariances[kind]
        if isinstance(covariance, NotApplicable):
            return (covariance,) * len(self.gaps)
        null = "the price of risk is the factor's mean"
        return premium_tests(self.gaps, covariance, kind, self.periods, reference, null)

    def gap_test(self, kind: PremiumError) -> TestStatistic | NotApplicable:
        """Joint test that every price of risk equals its factor's mean."""
        covariance, name = self.gap_covariances[kind], "Prices of risk equal factor means, χ²"
        if isinstance(covariance, NotApplicable):
            return NotApplicable(name, covariance.reason)
        return wald_test(
            self.gaps, covariance, name, "every price of risk is its factor's mean", SOURCES[kind]
        )


def two_pass(
    returns: Floats,
    factors: Floats,
    *,
    second_pass: SecondPass = SecondPass.OLS,
    constant: bool = True,
    window: int | None = None,
    lags: int | LagRule = LagRule.RULE_OF_THUMB,
    names: Sequence[str] = (),
) -> TwoPass:
    """Estimate prices of risk in two passes: betas over time, then a cross-section each period.

    Parameters
    ----------
    returns : ndarray, shape (T, N)
        Excess returns, decimal per period.
    factors : ndarray, shape (T, K)
        Factors, traded or not.
    second_pass : SecondPass
        OLS; WLS with inverse residual variances; GLS with the inverse covariance of returns, which gives the
        same premia as the residuals' but exists also when a factor is among the assets.
    constant : bool
        Whether the cross-section has a free zero-beta return.
    window : int, optional
        Periods of a rolling beta window, which ends in the period before the one it prices. Full-sample betas
        if None.
    lags : int or LagRule
        Newey-West lags, or the rule that chooses them.
    names : sequence of str
        Factor names, for messages.

    Returns
    -------
    TwoPass

    Raises
    ------
    EstimationError
        If there are fewer assets than premia, the sample is too short, the betas cannot tell the factors
        apart, or the weighting does not exist for this sample; each with what to do.

    References
    ----------
    Fama and MacBeth (1973); Shanken (1992); Kan, Robotti and Shanken (2013).
    """
    returns, factors = np.asarray(returns, dtype=float), np.asarray(factors, dtype=float)
    _refuse_too_few(returns, factors, constant)
    if window is None:
        return _full_sample(returns, factors, second_pass, constant, lags, names)
    return _rolling(returns, factors, second_pass, constant, window, lags, names)


def _full_sample(
    returns: Floats,
    factors: Floats,
    second_pass: SecondPass,
    constant: bool,
    lags: int | LagRule,
    names: Sequence[str],
) -> TwoPass:
    T = len(returns)
    first_pass = regress(returns, factors, names=names)
    mean, betas = first_pass.mean, first_pass.beta
    centred = returns - mean
    root = returns_root(centred)
    parts = _parts(returns, factors, first_pass, second_pass, constant, root, names)
    lags = premium_lags(parts.slopes, lags, constant)
    influence = robust_influence(parts)
    residual_part, k = parts.residual_part, int(constant)
    gap_series = parts.slopes[:, k:] - factors
    covariances: dict[PremiumError, Floats | NotApplicable] = {
        PremiumError.FAMA_MACBETH: fama_macbeth_covariance(parts.slopes),
        PremiumError.NEWEY_WEST: newey_west_covariance(parts.slopes, lags),
        PremiumError.SHANKEN: shanken_covariance(parts),
        PremiumError.ROBUST: newey_west_covariance(influence, 0),
    }
    gaps: dict[PremiumError, Floats | NotApplicable] = {
        PremiumError.FAMA_MACBETH: fama_macbeth_covariance(gap_series),
        PremiumError.NEWEY_WEST: newey_west_covariance(gap_series, lags),
        PremiumError.SHANKEN: (1.0 + parts.inflation) * residual_part[k:, k:] / T,
        PremiumError.ROBUST: newey_west_covariance(influence[:, k:] - parts.centred_factors, 0),
    }
    design = design_of(betas[None], constant)[0]
    chi2, f = pricing_error_tests(parts, betas, mean)
    r2_gls: float | NotApplicable = (
        NotApplicable("GLS R²", no_inverse(returns.shape[1], T))
        if root is None
        else cross_sectional_r2(mean, betas, constant=constant, root=root)
    )
    return TwoPass(
        second_pass=second_pass,
        constant=constant,
        window=None,
        first=0,
        slopes=parts.slopes,
        betas=betas,
        mean=mean,
        errors_by_period=returns - parts.slopes @ design.T,
        factor_means=factors.mean(axis=0),
        covariances=covariances,
        gap_covariances=gaps,
        r2_ols=cross_sectional_r2(mean, betas, constant=constant),
        r2_gls=r2_gls,
        first_pass_r2=1.0 - float((first_pass.residuals**2).sum() / (centred**2).sum()),
        pricing_chi2=chi2,
        pricing_f=f,
        inflation=parts.inflation,
        lags=lags,
    )


def _parts(
    returns: Floats,
    factors: Floats,
    first_pass: Regression,
    second_pass: SecondPass,
    constant: bool,
    root: Floats | None,
    names: Sequence[str],
) -> SecondPassParts:
    """Run the cross-sections on full-sample betas."""
    T, N = returns.shape
    design = design_of(first_pass.beta[None], constant)
    weights, lower = None, None
    if second_pass is SecondPass.WLS:
        weights = inverse_risk(np.sqrt((first_pass.residuals**2).mean(axis=0))[None])
    elif second_pass is SecondPass.GLS:
        if root is None:
            raise EstimationError(
                f"A GLS cross-section needs the inverse of the returns' covariance: {no_inverse(N, T)}",
                remedy="use OLS or WLS, fewer assets, or portfolios of them",
            )
        lower = root
    projections, inverses = project(design, constant, names, weights=weights, root=lower)
    projection = projections[0]
    slopes = returns @ projection.T
    errors = first_pass.mean - design[0] @ slopes.mean(axis=0)
    if weights is not None:
        weighted = errors * weights[0] ** 2
    elif lower is not None:
        weighted = linalg.cho_solve((lower, True), errors)
    else:
        weighted = errors
    return SecondPassParts(
        second_pass=second_pass,
        constant=constant,
        slopes=slopes,
        projection=projection,
        inverse=inverses[0],
        weighted_errors=weighted,
        residuals=first_pass.residuals,
        centred_returns=returns - first_pass.mean,
        centred_factors=factors - factors.mean(axis=0),
    )


def _rolling(
    returns: Floats,
    factors: Floats,
    second_pass: SecondPass,
    constant: bool,
    window: int,
    lags: int | LagRule,
    names: Sequence[str],
) -> TwoPass:
    T = len(returns)
    if window > T - 2:
        raise EstimationError(
            f"A beta window of {window} periods leaves {max(T - window, 0)} of {T} periods to price",
            allowed=f"windows of {T - 2} periods or less",
            remedy="choose a shorter window or a longer sample",
        )
    # The last period prices but enters no window: nothing comes after it.
    first_pass = rolling_betas(returns[:-1], factors[:-1], window, names=names)
    priced, faced = returns[window:], factors[window:]
    k = int(constant)
    design = design_of(first_pass.beta, constant)
    if second_pass is SecondPass.GLS:
        projection = _rolling_gls(returns, design, constant, window, names)
    else:
        weights = inverse_risk(first_pass.sigma) if second_pass is SecondPass.WLS else None
        projection = project(design, constant, names, weights=weights)[0]
    slopes = np.einsum("spn,sn->sp", projection, priced)
    errors = priced - np.einsum("snp,sp->sn", design, slopes)
    lags = premium_lags(slopes, lags, constant)
    gap_series = slopes[:, k:] - faced
    mean, left = priced.mean(axis=0), errors.mean(axis=0)
    total = float(((mean - mean.mean() if constant else mean) ** 2).sum())
    covariances: dict[PremiumError, Floats | NotApplicable] = {
        PremiumError.FAMA_MACBETH: fama_macbeth_covariance(slopes),
        PremiumError.NEWEY_WEST: newey_west_covariance(slopes, lags),
    }
    gaps: dict[PremiumError, Floats | NotApplicable] = {
        PremiumError.FAMA_MACBETH: fama_macbeth_covariance(gap_series),
        PremiumError.NEWEY_WEST: newey_west_covariance(gap_series, lags),
    }
    for kind in (PremiumError.SHANKEN, PremiumError.ROBUST):
        covariances[kind] = gaps[kind] = _full_only(f"{kind} errors")
    return TwoPass(
        second_pass=second_pass,
        constant=constant,
        window=window,
        first=window,
        slopes=slopes,
        betas=first_pass.beta.mean(axis=0),
        mean=mean,
        errors_by_period=errors,
        factor_means=faced.mean(axis=0),
        covariances=covariances,
        gap_covariances=gaps,
        r2_ols=(
            1.0 - float((left**2).sum()) / total
            if total > 0.0
            else NotApplicable("Cross-sectional R²", "mean returns leave nothing to explain")
        ),
        r2_gls=_full_only("GLS R²"),
        first_pass_r2=_full_only("First-pass R²"),
        pricing_chi2=_full_only("Pricing errors, χ² with Shanken's correction"),
        pricing_f=_full_only("Pricing errors, F with Shanken's correction"),
        inflation=_full_only("Shanken's c"),
        lags=lags,
    )


def _rolling_gls(
    returns: Floats, design: Floats, constant: bool, window: int, names: Sequence[str]
) -> Floats:
    projection = np.empty((len(design), design.shape[2], design.shape[1]))
    for s in range(len(design)):
        past = returns[s : s + window]
        root = returns_root(past - past.mean(axis=0))
        if root is None:
            raise EstimationError(
                f"A GLS cross-section needs the inverse of the returns' covariance in each window: "
                f"{no_inverse(returns.shape[1], window)}",
                remedy="use OLS or WLS, a longer window, fewer assets, or portfolios of them",
            )
        projection[s] = project(design[s : s + 1], constant, names, root=root, after=window + s)[0][0]
    return projection


def _full_only(name: str) -> NotApplicable:
    return NotApplicable(name, "it is known for full-sample betas only, and these betas roll")


def _refuse_too_few(returns: Floats, factors: Floats, constant: bool) -> None:
    if returns.ndim != 2 or factors.ndim != 2 or len(returns) != len(factors):
        raise EstimationError(
            f"The arrays have shapes {returns.shape} and {factors.shape}",
            allowed="two tables with the same number of rows",
        )
    N, K = returns.shape[1], factors.shape[1]
    if K == 0:
        raise EstimationError("Prices of risk need a factor; none came", remedy="name at least one factor")
    if K + int(constant) > N:
        raise EstimationError(
            f"{K + int(constant)} premia cannot be estimated from {N} assets",
            allowed=f"{K + int(constant)} assets or more for {K} factors"
            + (" and a constant" if constant else ""),
            remedy="add test assets, use fewer factors" + (" or leave the constant out" if constant else ""),
        )
