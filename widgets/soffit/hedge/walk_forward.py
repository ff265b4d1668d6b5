"""Walk-forward hedges: estimate on a window, trade after it, hold, and see what was delivered.

A hedge ratio never sees the return it hedges: a window ends `lag` whole periods before the first return that its
ratios hedge. All quantities are decimal per period. Arrays in, frozen results out.

What published work says about the distance between promise and delivery: a regression's R² overstates, and a
single hold-out understates, the risk that a hedge removes (Lien 2006; Dahlgran 2009); the factor loadings of
industries are estimated imprecisely and do not stand still (Fama and French 1997); betas from short windows vary over
time, though by too little to explain large alphas (Lewellen and Nagel 2006); and estimation error is one reason why
refined hedge ratios seldom beat a simple one out of sample (Wang, Wu and Yang 2015).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from soffit.errors import EstimationError, SettingError
from soffit.estimate.rolling import RollingRegression, rolling_betas
from soffit.hedge.weights import Bools, Floats, HedgeRule, WindowMoments, apply_rule, dimson_design
from soffit.settings import HedgeBeta, WindowKind

__all__ = ["WalkForward", "WalkSchedule", "walk_forward"]

Ints = npt.NDArray[np.int64]


@dataclass(frozen=True)
class WalkSchedule:
    """When hedges are estimated, traded and estimated again.

    Parameters
    ----------
    kind : WindowKind
        Rolling or expanding window.
    window : int
        Periods in the window, or in the first expanding one.
    hold : int
        Periods a hedge is held before it is estimated again.
    lag : int
        Whole periods between the end of the window and the first period hedged.

    Raises
    ------
    SettingError
        For a window or holding period below one, or a negative lag.
    """

    kind: WindowKind = WindowKind.ROLLING
    window: int = 60
    hold: int = 1
    lag: int = 0

    def __post_init__(self) -> None:
        for label, value, least in (
            ("window", self.window, 1),
            ("holding period", self.hold, 1),
            ("lag", self.lag, 0),
        ):
            if value < least:
                raise SettingError(f"A {label} of {value} periods", allowed=f"at least {least}")


@dataclass(frozen=True, eq=False)
class WalkForward:
    """A hedge walked through the sample: W hedges of N assets on K legs, D hedged periods.

    Parameters
    ----------
    rule : HedgeRule
        How ratios followed from the windows.
    schedule : WalkSchedule
        When.
    ends : ndarray of int, shape (W,)
        Position of the last period in each window.
    starts : ndarray of int, shape (W,)
        Position of the first period that each hedge holds.
    periods : ndarray of int, shape (W,)
        Length of each window.
    rows : ndarray of int, shape (D,)
        Positions of the hedged periods.
    held_by : ndarray of int, shape (D,)
        Which of the W hedges is held in each hedged period.
    targets : ndarray, shape (W, N, K)
        Ratios as estimated and traded to.
    plain : ndarray, shape (W, N, K)
        Least-squares betas of the same windows.
    in_force : ndarray, shape (D, N, K)
        Ratios held in each period; within a holding period they drift with the legs' and the asset's returns.
    in_force_plain : ndarray, shape (D, N, K)
        The same for the plain betas.
    closing : ndarray, shape (W, N, K)
        Ratios to which each hedge has drifted by the end of its last period.
    returns, factors : ndarray, shape (D, N) and (D, K)
        Unhedged returns and leg returns in the hedged periods.
    promised_mean, promised_variance, promised_total : ndarray, shape (W, N)
        Mean and variance of the hedged return, and variance of the unhedged one, in each window; divisor n − K − 1
        for the hedged, n − 1 for the unhedged.
    plain_variance : ndarray, shape (W, N)
        Residual variance σ² of the plain betas in each window.
    leverage : ndarray, shape (D,)
        f'S⁻¹f of the period's factor returns, S the demeaned sum of squares of the window in force: what a unit of
        residual variance adds by estimation error alone.
    capped : ndarray of bool, shape (W, N)
        Where a cap changed the ratios.

    Notes
    -----
    Where an asset lacks a return inside a window, or in the period, its numbers are NaN.
    """

    rule: HedgeRule
    schedule: WalkSchedule
    ends: Ints
    starts: Ints
    periods: Ints
    rows: Ints
    held_by: Ints
    targets: Floats
    plain: Floats
    in_force: Floats
    in_force_plain: Floats
    closing: Floats
    returns: Floats
    factors: Floats
    promised_mean: Floats
    promised_variance: Floats
    promised_total: Floats
    plain_variance: Floats
    leverage: Floats
    capped: Bools

    @cached_property
    def hedged(self) -> Floats:
        """Delivered hedged returns, shape (D, N)."""
        return _less_hedge(self.returns, self.in_force, self.factors)

    @cached_property
    def hedged_plain(self) -> Floats:
        """Hedged returns that the plain betas would have delivered, shape (D, N)."""
        if self.in_force_plain is self.in_force:
            return self.hedged
        return _less_hedge(self.returns, self.in_force_plain, self.factors)

    @cached_property
    def hedged_steady(self) -> Floats:
        """Hedged returns of the plain betas if ratios did not drift between re-hedges, shape (D, N)."""
        if len(self.starts) == len(self.rows):
            return self.hedged_plain
        return _less_hedge(self.returns, self.plain[self.held_by], self.factors)

    @cached_property
    def opening(self) -> Floats:
        """Ratios just before each re-hedge, after the drift since the last one: zero at the start, (W, N, K)."""
        before = np.zeros_like(self.targets)
        before[1:] = self.closing[:-1]
        # An asset that comes back after missing periods opens its hedge anew.
        return np.where(np.isfinite(before), before, 0.0)

    @cached_property
    def trades(self) -> Floats:
        """Absolute change in each ratio at each re-hedge, the first one from zero, shape (W, N, K)."""
        return np.abs(self.targets - self.opening)

    @cached_property
    def delivered(self) -> Bools:
        """Whether an asset has a hedged return in a period, shape (D, N)."""
        return np.isfinite(self.hedged)


def walk_forward(
    returns: Floats,
    factors: Floats,
    rule: HedgeRule | None = None,
    schedule: WalkSchedule | None = None,
    *,
    risk_free: Floats | None = None,
    names: Sequence[str] = (),
) -> WalkForward:
    """Walk a hedge through the sample without look-ahead.

    Parameters
    ----------
    returns : ndarray, shape (T, N)
        Excess returns, decimal per period. NaN marks a missing return.
    factors : ndarray, shape (T, K)
        Excess returns of the hedge legs, without gaps.
    rule : HedgeRule, optional
        How ratios follow from a window; plain betas by default.
    schedule : WalkSchedule, optional
        When; 60 periods rolling, re-estimated every period, by default.
    risk_free : ndarray, shape (T,), optional
        Risk-free returns, which the asset's value earns on top of its excess return while ratios drift.
    names : sequence of str
        Factor names, for messages.

    Raises
    ------
    EstimationError
        If the window leaves no degrees of freedom or no period to hedge, a factor return is missing, a leg does
        not move within a window, or an asset loses its whole value inside a holding period.

    Notes
    -----
    The hedged return of a period is ``r − h'f`` with h the ratios in force, per unit of the asset's value at the
    period's start. Between re-hedges nothing is traded: a leg's notional grows with its own return and the asset
    with its total return, so the ratio moves by (1 + f)/(1 + r).
    """
    rule, schedule = rule or HedgeRule(), schedule or WalkSchedule()
    returns, factors = np.asarray(returns, dtype=float), np.asarray(factors, dtype=float)
    rates = np.zeros(len(returns)) if risk_free is None else np.asarray(risk_free, dtype=float)
    _check(returns, factors, rates, rule, schedule, names)
    fit = rolling_betas(
        returns,
        factors,
        schedule.window,
        expanding=schedule.kind is WindowKind.EXPANDING,
        step=schedule.hold,
        names=names,
    )
    # Windows that end too late leave nothing to hedge; the rest come first.
    used = slice(int((fit.ends + schedule.lag + 1 < len(returns)).sum()))
    starts = fit.ends[used] + schedule.lag + 1
    rows = np.arange(starts[0], len(returns), dtype=np.int64)
    held_by = (rows - starts[0]) // schedule.hold
    gram, centre = _factor_windows(factors, fit, used)
    targets, capped = _targets(returns, factors, rule, schedule, fit, used, gram, names)
    plain = targets if rule.is_plain else fit.beta[used]
    growth = (1.0 + factors[rows])[:, None, :] / _asset_growth(returns, rates, rows, schedule.hold)[
        :, :, None
    ]
    in_force, closing = _drift(targets, growth, held_by)
    in_force_plain = in_force if rule.is_plain else _drift(plain, growth, held_by)[0]
    return WalkForward(
        rule=rule,
        schedule=schedule,
        ends=fit.ends[used],
        starts=starts,
        periods=fit.periods[used],
        rows=rows,
        held_by=held_by,
        targets=targets,
        plain=plain,
        in_force=in_force,
        in_force_plain=in_force_plain,
        closing=closing,
        returns=returns[rows],
        factors=factors[rows],
        **_promises(fit, used, targets, gram, centre),
        leverage=np.einsum("dk,dk->d", factors[rows], _solved(gram[held_by], factors[rows])),
        capped=capped,
    )


def _less_hedge(returns: Floats, ratios: Floats, factors: Floats) -> Floats:
    """``r − h'f`` in each period, shape (D, N)."""
    return np.asarray(returns - (ratios @ factors[:, :, None])[:, :, 0], dtype=float)


def _check(
    returns: Floats,
    factors: Floats,
    rates: Floats,
    rule: HedgeRule,
    schedule: WalkSchedule,
    names: Sequence[str],
) -> None:
    periods, width = factors.shape
    if len(rates) != len(returns) or not np.isfinite(rates).all():
        raise EstimationError(
            "The risk-free returns do not cover the sample", remedy="give one finite rate a period"
        )
    if not np.isfinite(factors).all():
        bad = int(np.flatnonzero(~np.isfinite(factors).all(axis=0))[0])
        gaps = int((~np.isfinite(factors[:, bad])).sum())
        label = f"'{names[bad]}'" if bad < len(names) else f"number {bad + 1}"
        raise EstimationError(
            f"Factor {label} is missing in {gaps} of {periods} periods",
            allowed="hedge legs with a return in every period",
            remedy="shorten the sample to where the factor exists, or hedge without it",
        )
    lost = rule.dimson_lags * (width + 1) if rule.beta is HedgeBeta.DIMSON else 0
    least = width + 2 + lost
    if schedule.window < least:
        raise EstimationError(
            f"A window of {schedule.window} periods is too short for {width} hedge legs"
            + (f" with {rule.dimson_lags} Dimson lags" if lost else ""),
            allowed=f"at least {least} periods",
            remedy="use a longer window or fewer legs",
        )
    need = schedule.window + schedule.lag + 1
    if periods < need:
        raise EstimationError(
            f"A sample of {periods} periods leaves nothing to hedge after a window of {schedule.window} and a lag of "
            f"{schedule.lag}",
            allowed=f"at least {need} periods",
            remedy="use a shorter window or a longer sample",
        )


def _factor_windows(factors: Floats, fit: RollingRegression, used: slice) -> tuple[Floats, Floats]:
    """Demeaned sums of squares (W, K, K) and means (W, K) of the factors in each window."""
    width = factors.shape[1]
    spans = list(zip(fit.ends[used], fit.periods[used], strict=True))
    gram, centre = np.empty((len(spans), width, width)), np.empty((len(spans), width))
    for place, (end, periods) in enumerate(spans):
        inside = factors[end + 1 - periods : end + 1]
        centre[place] = inside.mean(axis=0)
        apart = inside - centre[place]
        gram[place] = apart.T @ apart
    return gram, centre


def _targets(
    returns: Floats,
    factors: Floats,
    rule: HedgeRule,
    schedule: WalkSchedule,
    fit: RollingRegression,
    used: slice,
    gram: Floats,
    names: Sequence[str],
) -> tuple[Floats, Bools]:
    if rule.is_plain:
        return fit.beta[used], np.zeros((len(gram), returns.shape[1]), dtype=bool)
    lagged: Floats | None = None
    if rule.beta is HedgeBeta.DIMSON:
        # Lags stay inside the window: its first rows serve as lags only.
        lags, width = rule.dimson_lags, factors.shape[1]
        wide = rolling_betas(
            returns[lags:],
            dimson_design(factors, lags),
            schedule.window - lags,
            expanding=schedule.kind is WindowKind.EXPANDING,
            step=schedule.hold,
            names=[f"{name} lagged {lag}" if lag else name for lag in range(lags + 1) for name in names],
        ).beta[used]
        lagged = wide.reshape(*wide.shape[:2], lags + 1, width).sum(axis=2)
    moments = WindowMoments(fit.beta[used], fit.beta_error[used] ** 2, gram, fit.periods[used], lagged)
    targets, _, capped = apply_rule(moments, rule)
    return targets, capped


def _asset_growth(returns: Floats, rates: Floats, rows: Ints, hold: int) -> Floats:
    """1 + total return in the hedged periods, shape (D, N)."""
    growth = 1.0 + returns[rows] + rates[rows, None]
    if (growth <= 0).any():
        period, asset = np.argwhere(growth <= 0)[0]
        raise EstimationError(
            f"Asset {asset + 1} loses its whole value in period {rows[period] + 1}",
            allowed="returns above −100%",
            remedy="check the units of the returns",
        )
    return np.asarray(growth, dtype=float)


def _drift(targets: Floats, growth: Floats, held_by: Ints) -> tuple[Floats, Floats]:
    """Ratios in force in each period (D, N, K), and those at the end of each holding period (W, N, K)."""
    first = np.flatnonzero(np.diff(held_by, prepend=-1))
    last = np.append(first[1:], len(held_by)) - 1
    if len(first) == len(held_by):
        return targets, targets * growth
    in_force = np.empty((len(held_by), *targets.shape[1:]))
    for window, (start, stop) in enumerate(zip(first, last, strict=True)):
        in_force[start] = targets[window]
        for row in range(start, stop):
            in_force[row + 1] = in_force[row] * growth[row]
    return in_force, in_force[last] * growth[last]


def _promises(
    fit: RollingRegression, used: slice, targets: Floats, gram: Floats, centre: Floats
) -> dict[str, Floats]:
    """Moments that each hedge shows in its own window."""
    beta, sigma = fit.beta[used], fit.sigma[used]
    periods, df = fit.periods[used][:, None], fit.df[used][:, None]
    explained = np.einsum("wnk,wnk->wn", beta @ gram, beta)
    gap = targets - beta
    missed = np.einsum("wnk,wnk->wn", gap @ gram, gap)
    return {
        "promised_mean": fit.alpha[used] - np.einsum("wnk,wk->wn", gap, centre),
        "promised_variance": sigma**2 + missed / df,
        "promised_total": (explained + sigma**2 * df) / (periods - 1),
        "plain_variance": sigma**2,
    }


def _solved(gram: Floats, factors: Floats) -> Floats:
    """S⁻¹f for each hedged period, shape (D, K)."""
    return np.asarray(np.linalg.solve(gram, factors[:, :, None])[:, :, 0], dtype=float)
