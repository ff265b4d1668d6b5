"""Hedge ratios: how much of each factor to sell against one unit of an asset.

Ratios are the factor's sold notional per unit of the asset's value: a ratio of 1.1 on the market means 1.1 short
for 1 long. All quantities are decimal per period. Arrays in, frozen results out.

Sources: minimum variance, Johnson (1960) and Ederington (1979); shrinkage across assets, Vasicek (1973) with the
prior variance of true betas that Lally (1998) asks for; lagged betas, Dimson (1979); ridge, Hoerl and Kennard (1970).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from soffit.errors import EstimationError, SettingError
from soffit.estimate.regression import LeastSquares, least_squares
from soffit.hedge.quadratic import LegChoice, nearest_within, select_legs
from soffit.settings import HedgeBeta

__all__ = [
    "BetaPrior",
    "HedgeRatios",
    "HedgeRule",
    "WindowMoments",
    "apply_rule",
    "beta_prior",
    "dimson_design",
    "hedge_ratios",
]

Floats = npt.NDArray[np.float64]
Bools = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class HedgeRule:
    """How hedge ratios follow from one estimation window.

    Parameters
    ----------
    beta : HedgeBeta
        Plain, Vasicek-shrunk, Dimson or ridge betas.
    dimson_lags : int
        Lagged factor returns in the Dimson sum.
    ridge : float
        Ridge penalty as a share of the factors' average sum of squares in the window.
    gross_cap, leg_cap : float, optional
        Largest sum of absolute ratios, and largest absolute ratio of one leg.
    leg_costs : tuple of float, optional
        Cost per period of one unit of each leg, decimal. Given, a leg is held only if it pays for itself.
    risk_aversion : float
        Price of variance: a variance of v is worth ``risk_aversion / 2 * v`` a period.

    Raises
    ------
    SettingError
        For a negative penalty, cost or cap, a risk aversion of zero or below, fewer than one Dimson lag, or a cap
        that admits no hedge at all.
    """

    beta: HedgeBeta = HedgeBeta.PLAIN
    dimson_lags: int = 1
    ridge: float = 0.1
    gross_cap: float | None = None
    leg_cap: float | None = None
    leg_costs: tuple[float, ...] | None = None
    risk_aversion: float = 3.0

    def __post_init__(self) -> None:
        if self.beta is HedgeBeta.DIMSON and self.dimson_lags < 1:
            raise SettingError(f"Dimson betas with {self.dimson_lags} lags", allowed="at least one lag")
        if not (math.isfinite(self.ridge) and self.ridge >= 0):
            raise SettingError(f"The ridge penalty is {self.ridge:g}", allowed="zero or a positive number")
        if not (math.isfinite(self.risk_aversion) and self.risk_aversion > 0):
            raise SettingError(f"The risk aversion is {self.risk_aversion:g}", allowed="a positive number")
        for label, cap in (("gross cap", self.gross_cap), ("leg cap", self.leg_cap)):
            if cap is not None and not cap > 0:
                raise SettingError(
                    f"A {label} of {cap:g} admits no hedge",
                    allowed="a positive cap, or none",
                    remedy="leave the cap empty, or report the unhedged asset instead",
                )
        for cost in self.leg_costs or ():
            if not (math.isfinite(cost) and cost >= 0):
                raise SettingError(f"A leg cost of {cost:g}", allowed="costs of zero or more")

    @property
    def is_plain(self) -> bool:
        """Whether the rule takes the least-squares betas as they are."""
        return (
            self.beta is HedgeBeta.PLAIN
            and self.gross_cap is None
            and self.leg_cap is None
            and self.leg_costs is None
        )


@dataclass(frozen=True, eq=False)
class WindowMoments:
    """What a rule needs of W estimation windows.

    Parameters
    ----------
    beta : ndarray, shape (W, N, K)
        Least-squares betas.
    beta_variance : ndarray, shape (W, N, K)
        Their classical sampling variances.
    gram : ndarray, shape (W, K, K)
        Demeaned sums of squares and products of the factors.
    periods : ndarray of int, shape (W,)
        Rows in each window.
    lagged : ndarray, shape (W, N, K), optional
        Dimson sums, where the rule asks for them.
    """

    beta: Floats
    beta_variance: Floats
    gram: Floats
    periods: npt.NDArray[np.int64]
    lagged: Floats | None = None


@dataclass(frozen=True, eq=False)
class HedgeRatios:
    """Hedge ratios of N assets on K factors from one sample, with what they promise in that sample.

    Parameters
    ----------
    ratios : ndarray, shape (N, K)
        Sold notional of each factor per unit of the asset.
    beta, beta_error : ndarray, shape (N, K)
        Plain least-squares betas and their classical standard errors.
    mean : ndarray, shape (N,)
        Mean hedged return; the alpha when the ratios are the plain betas.
    volatility : ndarray, shape (N,)
        Volatility of the hedged return, divisor T − K − 1: the plain hedge's equals the regression's σ.
    effectiveness : ndarray, shape (N,)
        1 − var(hedged)/var(unhedged) (Ederington 1979); R² when the ratios are the plain betas.
    legs : LegChoice or None
        What each leg saves and costs, where legs were chosen.
    capped : ndarray of bool, shape (N,)
        Whether a cap changed the asset's ratios.
    periods : int
        T.
    """

    ratios: Floats
    beta: Floats
    beta_error: Floats
    mean: Floats
    volatility: Floats
    effectiveness: Floats
    legs: LegChoice | None
    capped: Bools
    periods: int

    @property
    def gross(self) -> Floats:
        """Sum of absolute ratios, shape (N,)."""
        return np.asarray(np.abs(self.ratios).sum(axis=1), dtype=float)


@dataclass(frozen=True, eq=False)
class BetaPrior:
    """Where betas lie across assets, which Vasicek shrinkage pulls each one towards.

    Parameters
    ----------
    centre : ndarray, shape (W, K)
        Mean beta.
    variance : ndarray, shape (W, K)
        Variance of the true betas: the spread of the estimates less their average sampling variance, zero where the
        spread is all noise.
    """

    centre: Floats
    variance: Floats


def beta_prior(beta: Floats, variance: Floats) -> BetaPrior:
    """Estimate the prior from the cross-section of each window.

    Parameters
    ----------
    beta, variance : ndarray, shape (W, N, K)
        Estimates and their sampling variances; NaN where an asset is not in a window.

    Raises
    ------
    EstimationError
        If a window has a single asset.
    """
    known = np.isfinite(beta)
    counts = known.sum(axis=1)
    if beta.shape[1] < 2 or (counts == 1).any():
        raise EstimationError(
            "Vasicek shrinkage needs a cross-section of at least two assets in every window",
            remedy="add assets, or use plain or ridge betas",
        )
    many = np.maximum(counts, 2)
    centre = np.where(known, beta, 0.0).sum(axis=1) / many
    spread = np.where(known, (beta - centre[:, None, :]) ** 2, 0.0).sum(axis=1) / (many - 1)
    noise = np.where(known, variance, 0.0).sum(axis=1) / many
    return BetaPrior(centre, np.maximum(spread - noise, 0.0))


def apply_rule(
    moments: WindowMoments, rule: HedgeRule, prior: BetaPrior | None = None
) -> tuple[Floats, LegChoice | None, Bools]:
    """Turn the estimates of W windows into hedge ratios.

    Parameters
    ----------
    moments : WindowMoments
        Estimates.
    rule : HedgeRule
        The rule.
    prior : BetaPrior, optional
        What Vasicek shrinkage pulls towards; estimated from these assets if None.

    Returns
    -------
    ratios : ndarray, shape (W, N, K)
    legs : LegChoice or None
        Saving and cost of each leg, shape (W, N, K) each, where the rule chooses legs.
    capped : ndarray of bool, shape (W, N)

    Raises
    ------
    EstimationError
        If Vasicek shrinkage is asked with fewer than two assets, or the leg costs do not match the factors.
    """
    windows, count, width = moments.beta.shape
    metric = moments.gram
    if rule.beta is HedgeBeta.VASICEK:
        prior = prior or beta_prior(moments.beta, moments.beta_variance)
        ratios = _shrunk(moments.beta, moments.beta_variance, prior)
    elif rule.beta is HedgeBeta.DIMSON:
        if moments.lagged is None:
            raise EstimationError("The Dimson sums were not estimated")
        ratios = moments.lagged
    elif rule.beta is HedgeBeta.RIDGE and width:
        penalty = rule.ridge * np.trace(metric, axis1=1, axis2=2) / width
        metric = metric + penalty[:, None, None] * np.eye(width)
        ratios = np.swapaxes(np.linalg.solve(metric, moments.gram @ np.swapaxes(moments.beta, 1, 2)), 1, 2)
    else:
        ratios = moments.beta
    legs: LegChoice | None = None
    kept = np.ones(ratios.shape, dtype=bool)
    if rule.leg_costs is not None:
        if len(rule.leg_costs) != width:
            raise EstimationError(
                f"{len(rule.leg_costs)} leg costs for {width} factors", allowed="one cost a factor"
            )
        covariance = metric / (moments.periods - 1)[:, None, None]
        legs = select_legs(ratios, covariance, np.array(rule.leg_costs), rule.risk_aversion)
        ratios, kept = legs.ratios, legs.kept
    capped = np.zeros((windows, count), dtype=bool)
    if rule.leg_cap is not None or rule.gross_cap is not None:
        bounds = np.where(kept, np.inf if rule.leg_cap is None else rule.leg_cap, 0.0)
        ratios, capped = nearest_within(ratios, metric, bounds, rule.gross_cap)
    return ratios, legs, capped


def _shrunk(beta: Floats, variance: Floats, prior: BetaPrior) -> Floats:
    """Precision-weighted mean of each beta and the prior's centre, shape (W, N, K)."""
    spread = prior.variance[:, None, :]
    with np.errstate(invalid="ignore", divide="ignore"):
        # A beta known without error stays as it is.
        weight = np.where(spread + variance > 0, spread / (spread + variance), 1.0)
    return np.asarray(weight * beta + (1.0 - weight) * prior.centre[:, None, :], dtype=float)


def dimson_design(factors: Floats, lags: int) -> Floats:
    """Factors beside their own lags, the first `lags` rows lost, shape (T − lags, K·(lags + 1)).

    Columns come factor by factor within a lag: all current returns, then all returns lagged once, and so on.
    """
    rows = len(factors)
    return np.column_stack([factors[lags - lag : rows - lag] for lag in range(lags + 1)])


def hedge_ratios(
    returns: Floats,
    factors: Floats,
    rule: HedgeRule | None = None,
    *,
    fit: LeastSquares | None = None,
    prior: BetaPrior | None = None,
    names: Sequence[str] = (),
) -> HedgeRatios:
    """Hedge ratios of N assets from one sample.

    Parameters
    ----------
    returns : ndarray, shape (T, N)
        Excess returns, decimal per period, without gaps.
    factors : ndarray, shape (T, K)
        Excess returns of the hedge legs.
    rule : HedgeRule, optional
        How ratios follow from the estimates; plain betas by default.
    fit : LeastSquares, optional
        The classical regression of these returns on these factors, where it is there already.
    prior : BetaPrior, optional
        What Vasicek shrinkage pulls towards; estimated from these assets if None.
    names : sequence of str
        Factor names, for messages.

    Raises
    ------
    EstimationError
        If the sample is too short, a value is missing, a leg does not move or repeats the others, or the rule does
        not fit the data.
    """
    rule = rule or HedgeRule()
    returns, factors = np.asarray(returns, dtype=float), np.asarray(factors, dtype=float)
    fit = fit or least_squares(returns, factors, names=names)
    rows, width = factors.shape
    beta, error = fit.coefficients[:, 1:], fit.errors[:, 1:]
    lagged: Floats | None = None
    if rule.beta is HedgeBeta.DIMSON:
        lagged = _dimson_sums(returns, factors, rule.dimson_lags, names)[None]
    centred = factors - factors.mean(axis=0)
    moments = WindowMoments(
        beta[None], error[None] ** 2, (centred.T @ centred)[None], np.array([rows], dtype=np.int64), lagged
    )
    ratios, legs, capped = apply_rule(moments, rule, prior)
    hedged = returns - factors @ ratios[0].T
    mean = hedged.mean(axis=0)
    ssr = ((hedged - mean) ** 2).sum(axis=0)
    tss = ((returns - returns.mean(axis=0)) ** 2).sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        effectiveness = np.where(tss > 0, 1.0 - ssr / tss, np.nan)
    return HedgeRatios(
        ratios=ratios[0],
        beta=beta,
        beta_error=error,
        mean=mean,
        volatility=np.sqrt(ssr / (rows - width - 1)),
        effectiveness=effectiveness,
        legs=None if legs is None else legs.first,
        capped=capped[0],
        periods=rows,
    )


def _dimson_sums(returns: Floats, factors: Floats, lags: int, names: Sequence[str]) -> Floats:
    width = factors.shape[1]
    labels = [f"{name} lagged {lag}" if lag else name for lag in range(lags + 1) for name in names]
    fit = least_squares(returns[lags:], dimson_design(factors, lags), names=labels)
    return np.asarray(fit.coefficients[:, 1:].reshape(-1, lags + 1, width).sum(axis=1), dtype=float)
