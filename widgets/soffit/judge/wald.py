"""Asymptotic Wald tests of zero alphas, beside the exact one, and how often they cry wolf.

Three covariances of the alphas: classical, robust to heteroskedasticity (White) and to autocorrelation as well
(Newey and West). All three are chi-squared only as T grows with N fixed; with N/T not small they reject far too
often, and the numbers here say how often.
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt
from scipy import linalg, special, stats

from soffit.errors import EstimationError
from soffit.estimate.hac import newey_west_lags
from soffit.estimate.regression import Regression
from soffit.estimate.statistic import Distribution, Family, NotApplicable, TestStatistic
from soffit.estimate.steps import Progress, Steps, drained
from soffit.judge.joint import JointAlphas
from soffit.settings import LagRule

__all__ = [
    "LINEARMODELS_BYTES",
    "OverRejection",
    "WaldEngine",
    "WaldTests",
    "alpha_influence",
    "classical_wald",
    "exact_size",
    "linearmodels_bytes",
    "linearmodels_wald",
    "robust_wald",
    "simulated_size",
    "size_steps",
    "wald_lags",
    "wald_tests",
]

Floats = npt.NDArray[np.float64]

LINEARMODELS_BYTES = 128 * 2**20
"""Working memory up to which the robust tests go through linearmodels, in bytes."""

_NULL = "all alphas are zero"
_COPIES = 4.2  # M×M arrays linearmodels holds at its peak, M = N(K+1)+K; measured at N = 2,000, K = 6
_DEPENDENT = 1e-9
_TELL = 0.03  # seconds between two words of progress


class WaldEngine(StrEnum):
    """What computed the robust tests; both give the same numbers."""

    LINEARMODELS = "linearmodels"
    BATCHED = "batched"


@dataclass(frozen=True)
class OverRejection:
    """How often a test rejects zero alphas that are truly zero, under normal residuals.

    Parameters
    ----------
    nominal : float
        The size the test claims.
    actual : float
        The size it has with this N, T and these factors.
    error : float
        Monte Carlo standard error of `actual`; zero where it is exact.
    """

    nominal: float
    actual: float
    error: float = 0.0


@dataclass(frozen=True, eq=False)
class WaldTests:
    """Asymptotic tests of zero alphas.

    Parameters
    ----------
    classical : TestStatistic or NotApplicable
        ``T Q/(1 + θf²)``, for residuals independent over time with one covariance.
    robust : TestStatistic or NotApplicable
        With White's covariance of the alphas.
    hac : TestStatistic or NotApplicable
        With Newey and West's covariance of the alphas.
    lags : int
        Lags of the latter.
    debiased : bool
        Whether the two robust covariances are divided by T − K − 1 in place of T.
    engine : WaldEngine
        What computed the robust tests.
    classical_size : OverRejection or NotApplicable
        Exact size of the classical test under normal residuals.
    """

    classical: TestStatistic | NotApplicable
    robust: TestStatistic | NotApplicable
    hac: TestStatistic | NotApplicable
    lags: int
    debiased: bool
    engine: WaldEngine
    classical_size: OverRejection | NotApplicable


def wald_tests(
    regression: Regression,
    joint: JointAlphas,
    factors: Floats,
    *,
    lags: int,
    debiased: bool = False,
    nominal: float = 0.05,
    memory: int = LINEARMODELS_BYTES,
) -> WaldTests:
    """Run the three tests.

    Parameters
    ----------
    regression : Regression
        All assets over one sample.
    joint : JointAlphas
        The joint test of the same regression.
    factors : ndarray, shape (T, K)
        The factors of that regression.
    lags : int
        Newey-West lags; :func:`wald_lags` applies a rule.
    debiased : bool
        Whether the robust covariances are divided by T − K − 1 in place of T, as linearmodels does by default.
    nominal : float
        Size at which over-rejection is stated.
    memory : int
        Bytes that linearmodels may take; above it the batched engine computes the same numbers.

    Returns
    -------
    WaldTests
        With reasons where there is no test.
    """
    need = linearmodels_bytes(regression.count, regression.width)
    engine = WaldEngine.LINEARMODELS if regression.width and need <= memory else WaldEngine.BATCHED
    compute = linearmodels_wald if engine is WaldEngine.LINEARMODELS else robust_wald
    if isinstance(joint.quadratic, NotApplicable):
        reason = joint.quadratic.reason
        robust: TestStatistic | NotApplicable = NotApplicable(_name(0), reason)
        hac: TestStatistic | NotApplicable = NotApplicable(_name(max(lags, 1)), reason)
    else:
        robust = compute(regression, factors, lags=0, debiased=debiased)
        if lags >= joint.periods:
            hac = NotApplicable(_name(lags), f"{lags} lags do not fit into {joint.periods} periods")
        else:
            hac = compute(regression, factors, lags=lags, debiased=debiased) if lags else robust
    return WaldTests(
        classical=classical_wald(joint),
        robust=robust,
        hac=hac,
        lags=lags,
        debiased=debiased,
        engine=engine,
        classical_size=exact_size(joint.count, joint.width, joint.periods, nominal),
    )


def classical_wald(joint: JointAlphas) -> TestStatistic | NotApplicable:
    """Wald test ``T Q/(1 + θf²)`` against chi-squared with N degrees of freedom.

    References
    ----------
    Campbell, Lo and MacKinlay (1997), The Econometrics of Financial Markets, equation 5.3.22.
    """
    if isinstance(joint.quadratic, NotApplicable):
        return NotApplicable("The Wald test", joint.quadratic.reason)
    value = joint.periods * joint.quadratic / (1.0 + joint.theta_f2)
    law = Distribution(Family.CHI2, (float(joint.count),))
    return TestStatistic("Wald", value, _NULL, law, law.sf(value), "campbell-lo-mackinlay-1997")


def robust_wald(
    regression: Regression, factors: Floats, *, lags: int = 0, debiased: bool = False
) -> TestStatistic | NotApplicable:
    """Wald test with White's or Newey and West's covariance of the alphas, in memory of order T·N.

    Parameters
    ----------
    regression : Regression
        All assets over one sample.
    factors : ndarray, shape (T, K)
        The factors of that regression; K may be zero.
    lags : int
        Newey-West lags; zero for White's covariance.
    debiased : bool
        Whether the covariance is divided by T − K − 1 in place of T.

    Returns
    -------
    TestStatistic or NotApplicable

    Raises
    ------
    EstimationError
        If the lags do not fit the sample.

    Notes
    -----
    An alpha is a weighted sum of residuals, ``α̂_i − α_i = Σ_t w_t ε_it`` with one set of weights for all assets,
    so its covariance needs the series ``w_t e_it`` only and not the N(K+1) moments of all coefficients. A Bartlett
    sum is the sum of squares of moving sums: ``Σ_j (1 − j/(L+1)) Γ_j`` over both signs of j equals
    ``Σ_s m_s m_s'/(L+1)`` with ``m_s`` the sum of L + 1 neighbours, zeros beyond the ends. The statistic then
    comes from a triangular root, and the covariance is never formed or inverted.

    References
    ----------
    White (1980), Econometrica 48; Newey and West (1987), Econometrica 55.
    """
    name = _name(lags)
    if regression.count >= regression.periods - regression.width:
        return NotApplicable(
            name,
            f"the covariance of {regression.count:,} alphas has rank {regression.fit.df:,} at most with "
            f"{regression.periods:,} periods",
        )
    moments = alpha_influence(factors)[:, None] * regression.residuals
    value = _quadratic(regression.alpha, _bartlett_root(moments, lags))
    if value is None:
        return NotApplicable(
            name, "an asset has no residual risk, or one that other assets' residuals make up"
        )
    if debiased:
        value *= regression.fit.df / regression.periods
    return _against_chi2(name, value, regression.count, lags)


def linearmodels_wald(
    regression: Regression,
    factors: Floats,
    *,
    lags: int = 0,
    debiased: bool = False,
    memory: int | None = None,
) -> TestStatistic | NotApplicable:
    """Compute the test of :func:`robust_wald` through linearmodels' TradedFactorModel.

    Parameters
    ----------
    regression, factors, lags, debiased
        As in :func:`robust_wald`; there must be a factor.
    memory : int, optional
        Bytes it may take; no limit if None.

    Returns
    -------
    TestStatistic or NotApplicable
        Refused, with the reason, where it would take more memory than allowed.

    Raises
    ------
    EstimationError
        If linearmodels refuses the data.
    """
    name = _name(lags)
    need = linearmodels_bytes(regression.count, regression.width)
    if regression.width == 0:
        return NotApplicable(name, "linearmodels has no model without factors")
    if memory is not None and need > memory:
        return NotApplicable(
            name,
            f"linearmodels would take about {need / 2**30:.1f} GB for {regression.count:,} assets and "
            f"{regression.width} factors; the batched engine gives the same number",
        )
    from linearmodels.asset_pricing import TradedFactorModel

    returns = regression.alpha + factors @ regression.beta.T + regression.residuals
    options: dict[str, str | float] = {"kernel": "bartlett", "bandwidth": lags} if lags else {}
    try:
        fit = TradedFactorModel(returns, factors).fit(
            cov_type="kernel" if lags else "robust", debiased=debiased, **options
        )
    except ValueError as error:
        raise EstimationError(
            f"linearmodels refuses these returns ({error})",
            remedy="leave out constant, repeated or exactly replicated series",
        ) from error
    return _against_chi2(name, float(fit.j_statistic.stat), regression.count, lags)


def linearmodels_bytes(count: int, width: int) -> int:
    """Memory that TradedFactorModel takes for N assets and K factors, in bytes, about."""
    moments = count * (width + 1) + width
    return int(_COPIES * 8 * moments**2)


def alpha_influence(factors: Floats) -> Floats:
    """Weights ``w_t`` with ``α̂ = Σ_t w_t r_t`` in a regression on a constant and the factors.

    Parameters
    ----------
    factors : ndarray, shape (T, K)
        The factors; K may be zero.

    Returns
    -------
    ndarray, shape (T,)
        ``(1 − (f_t − μ)'Ω⁻¹μ)/T``: they sum to one and are orthogonal to the factors.
    """
    f = np.asarray(factors, dtype=np.float64)
    T = len(f)
    mean = f.mean(axis=0)
    basis, root = np.linalg.qr(f - mean)
    return (
        np.asarray(1.0 / T - basis @ linalg.solve_triangular(root, mean, trans="T"))
        if f.shape[1]
        else np.full(T, 1.0 / T)
    )


def wald_lags(rule: LagRule, regression: Regression, factors: Floats, *, fixed: int = 0) -> int:
    """Newey-West lags of the joint test under a rule.

    Parameters
    ----------
    rule : LagRule
        The automatic rule takes the sum of all slopes' moment series ``f_tk e_ti``, each over its own root mean
        square so that no asset counts more for being more volatile.
    regression : Regression
        All assets over one sample.
    factors : ndarray, shape (T, K)
        The factors of that regression.
    fixed : int
        The number under the fixed rule; :func:`wald_tests` says so if the sample is too short for it.
    """
    if rule is LagRule.FIXED:
        return fixed
    if rule is LagRule.RULE_OF_THUMB:
        return newey_west_lags(rule, regression.periods)
    e = regression.residuals
    f = factors if factors.shape[1] else np.ones((len(e), 1))
    size = np.sqrt((f**2).T @ e**2)
    weight = np.divide(1.0, size, out=np.zeros_like(size), where=size > 0.0)
    return newey_west_lags(rule, regression.periods, moments=(f * (e @ weight.T)).sum(axis=1))


def exact_size(count: int, width: int, periods: int, nominal: float = 0.05) -> OverRejection | NotApplicable:
    """Exact size of the classical Wald test under normal residuals.

    Parameters
    ----------
    count, width, periods : int
        N, K and T.
    nominal : float
        The size it claims.

    Notes
    -----
    The statistic is ``T N/(T − N − K)`` times the GRS statistic, whose distribution is known exactly.
    """
    df = periods - count - width
    if df < 1:
        return NotApplicable(
            "The size of the Wald test",
            f"{count:,} assets leave no degrees of freedom in {periods:,} periods",
        )
    critical = float(special.chdtri(count, nominal))
    return OverRejection(nominal, float(stats.f.sf(critical * df / (periods * count), count, df)))


def simulated_size(
    factors: Floats,
    count: int,
    *,
    lags: int = 0,
    debiased: bool = False,
    nominal: float = 0.05,
    draws: int = 500,
    seed: int = 20240229,
) -> OverRejection | NotApplicable:
    """Size of a robust Wald test with these factors under normal residuals, by simulation.

    Parameters
    ----------
    factors : ndarray, shape (T, K)
        The factors, held as they are.
    count : int
        N.
    lags, debiased
        As in :func:`robust_wald`.
    nominal : float
        The size the test claims.
    draws : int
        Number of simulated samples.
    seed : int
        Seed of the draws.

    Notes
    -----
    The statistic does not change when the assets are recombined, so under normal residuals that are independent over
    time its distribution does not depend on their covariance: one simulation with unit variances serves all (Dufour
    and Khalaf 2002, Journal of Econometrics 106).
    """
    steps = size_steps(factors, count, lags=lags, debiased=debiased, nominal=nominal, draws=draws, seed=seed)
    return drained(steps)


def size_steps(
    factors: Floats, count: int, *, lags: int, debiased: bool, nominal: float, draws: int, seed: int
) -> Steps[OverRejection | NotApplicable]:
    """Steps of :func:`simulated_size`, a few draws each."""
    T, width = factors.shape
    if count >= T - width:
        return NotApplicable(
            "The size of the Wald test", f"{count:,} assets leave no degrees of freedom in {T:,} periods"
        )
    rng = np.random.default_rng(seed)
    basis, _ = np.linalg.qr(np.column_stack([np.ones(T), factors]))
    influence = alpha_influence(factors)
    critical = float(special.chdtri(count, nominal)) * (T / (T - width - 1) if debiased else 1.0)
    rejected = 0
    told = time.monotonic()
    for draw in range(draws):
        if time.monotonic() - told > _TELL:
            yield Progress(draw, draws, f"Simulating the size of the test: {_name(lags)}")
            told = time.monotonic()
        noise = rng.standard_normal((T, count))
        alpha = influence @ noise
        residuals = noise - basis @ (basis.T @ noise)
        value = _quadratic(alpha, _bartlett_root(influence[:, None] * residuals, lags))
        rejected += value is not None and value > critical
    share = rejected / draws
    return OverRejection(nominal, share, float(np.sqrt(max(share * (1.0 - share), 1.0 / draws) / draws)))


def _bartlett_root(moments: Floats, lags: int) -> Floats:
    """A matrix M with ``M'M = Σ_t m_t m_t' + Σ_j (1 − j/(L+1)) Σ_t (m_t m_{t−j}' + m_{t−j} m_t')``."""
    T = len(moments)
    if not 0 <= lags < T:
        raise EstimationError(
            f"{lags} Newey-West lags came for {T} periods",
            allowed=f"0 to {T - 1}",
            remedy="choose fewer lags or the rule of thumb",
        )
    if lags == 0:
        return moments
    padded = np.zeros((T + 2 * lags, moments.shape[1]))
    padded[lags : lags + T] = moments
    # Moving sums by addition, not by differences of running totals, which would cancel.
    total = padded[: T + lags].copy()
    for j in range(1, lags + 1):
        total += padded[j : j + T + lags]
    return np.asarray(total / np.sqrt(lags + 1.0))


def _quadratic(alpha: Floats, root: Floats) -> float | None:
    """``α'(M'M)⁻¹α``, or None where M'M is singular."""
    scale = np.linalg.norm(root, axis=0)
    if not scale.all():
        return None
    r = np.linalg.qr(root / scale, mode="r")
    if np.abs(np.diag(r)).min() < _DEPENDENT:
        return None
    half = linalg.solve_triangular(r, alpha / scale, trans="T")
    return float(half @ half)


def _name(lags: int) -> str:
    return f"Wald, HAC with {lags} lags" if lags else "Wald, heteroskedasticity-robust"


def _against_chi2(name: str, value: float, count: int, lags: int) -> TestStatistic:
    law = Distribution(Family.CHI2, (float(count),))
    return TestStatistic(name, value, _NULL, law, law.sf(value), "newey-west-1987" if lags else "white-1980")
