"""What a walked hedge promised beside what it delivered, and where the difference came from.

All quantities are decimal per period. Arrays in, frozen results out.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields

import numpy as np
import numpy.typing as npt

from soffit.errors import EstimationError
from soffit.estimate.regression import ErrorChoice, LeastSquares, factor_moments, least_squares
from soffit.estimate.statistic import NotApplicable
from soffit.hedge.walk_forward import WalkForward

__all__ = ["Delivery", "Promise", "VarianceGap", "WalkReport", "report_walk"]

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

_BLOCKS_FOR_ERROR = 8  # fewer blocks give no usable error of the drift


@dataclass(frozen=True, eq=False)
class Promise:
    """What was promised in sample, one value an asset, shape (N,) each.

    Parameters
    ----------
    alpha : ndarray
        Mean hedged return.
    volatility : ndarray
        Volatility of the hedged return, corrected for the degrees of freedom.
    effectiveness : ndarray
        Share of the variance removed.
    """

    alpha: Floats
    volatility: Floats
    effectiveness: Floats

    @property
    def appraisal(self) -> Floats:
        """Appraisal ratio, alpha over volatility."""
        return _ratio(self.alpha, self.volatility)


@dataclass(frozen=True, eq=False)
class Delivery:
    """What the hedge delivered on dates that its ratios had not seen.

    Parameters
    ----------
    mean, volatility : ndarray, shape (N,)
        Of the hedged return; the volatility has divisor n − 1.
    effectiveness : ndarray, shape (N,)
        1 − var(hedged)/var(unhedged) over the same dates.
    unhedged_mean, unhedged_volatility : ndarray, shape (N,)
        Of the unhedged return over the same dates.
    alpha, alpha_error : ndarray, shape (N,)
        Intercept of the hedged return on the legs, and its standard error: what is left after the exposure that
        the hedge failed to remove.
    beta, beta_error : ndarray, shape (N, K)
        Residual betas of the hedged return and their standard errors.
    sigma : ndarray, shape (N,)
        Residual volatility in that regression, divisor n − K − 1.
    theta2 : ndarray, shape (N,)
        Squared Sharpe ratio of the legs' best combination over the asset's hedged dates.
    periods : ndarray of int, shape (N,)
        Hedged periods n.
    """

    mean: Floats
    volatility: Floats
    effectiveness: Floats
    unhedged_mean: Floats
    unhedged_volatility: Floats
    alpha: Floats
    alpha_error: Floats
    beta: Floats
    beta_error: Floats
    sigma: Floats
    theta2: Floats
    periods: Ints

    @property
    def ratio(self) -> Floats:
        """Sharpe ratio of the hedged return as it came, shape (N,)."""
        return _ratio(self.mean, self.volatility)

    @property
    def appraisal(self) -> Floats:
        """Appraisal ratio α/σ after the residual betas, shape (N,)."""
        return _ratio(self.alpha, self.sigma)


@dataclass(frozen=True, eq=False)
class VarianceGap:
    """Why the delivered variance differs from the promised one, shape (N,) each.

    ``delivered = promised + residual_risk + estimation + drift + holding + rule``, exactly.

    Parameters
    ----------
    promised : ndarray
        Average residual variance of the windows, plain betas.
    residual_risk : ndarray
        How much larger the residual variance was in the hedged periods than in the windows before them.
    estimation : ndarray
        What estimation error adds when betas are constant: the average of σ²·f'S⁻¹f, the textbook variance of a
        prediction.
    drift : ndarray
        The rest of the plain hedge's delivered variance at the ratios as traded: betas that moved between estimation
        and use. Zero on average when betas are constant; a negative value is sampling noise.
    drift_error : ndarray
        Standard error of `drift` from its spread over blocks of time; NaN with fewer than eight blocks.
    holding : ndarray
        What the drift of the hedge ratios themselves between re-hedges added; zero when every period is re-hedged.
    rule : ndarray
        Delivered variance of the rule in use less that of plain betas: what shrinkage, lags, dropped legs and caps
        added or saved.
    delivered : ndarray
        Delivered variance, divisor n − 1.
    blocks : ndarray of int
        Number of blocks of time.

    Notes
    -----
    The residual variance of the hedged periods comes from regressions of the unhedged return on the legs within
    blocks of successive hedged periods, with divisor n − K − 1 in each, so that betas may differ from block to
    block. Under constant betas and independent errors the residual variance of both kinds is unbiased and a hedged
    return's variance is σ²(1 + f'S⁻¹f); the excess of the delivered variance over these two is the drift.
    """

    promised: Floats
    residual_risk: Floats
    estimation: Floats
    drift: Floats
    drift_error: Floats
    holding: Floats
    rule: Floats
    delivered: Floats
    blocks: Ints


@dataclass(frozen=True, eq=False)
class WalkReport:
    """Promise against delivery for N assets.

    Parameters
    ----------
    promised : Promise
        Average of what each hedge showed in its own window, weighted by the periods that it was held.
    hindsight : Promise
        The hedge with the constant betas that fit the hedged periods best: known only afterwards.
    hindsight_beta : ndarray, shape (N, K)
        Those betas.
    delivered : Delivery
        What came.
    gap : VarianceGap
        Where the difference in variance came from.
    short : ndarray of bool, shape (N,)
        Assets with too few hedged periods to report on: all their numbers are NaN.
    least : int
        How many hedged periods a report needs.
    """

    promised: Promise
    hindsight: Promise
    hindsight_beta: Floats
    delivered: Delivery
    gap: VarianceGap
    short: npt.NDArray[np.bool_]
    least: int

    @property
    def missing(self) -> NotApplicable | None:
        """Why some assets have no numbers; None when all have."""
        if not self.short.any():
            return None
        return NotApplicable(
            "Promise against delivery",
            f"{int(self.short.sum())} of {len(self.short)} assets have fewer than {self.least} hedged periods",
        )


def report_walk(
    walk: WalkForward,
    *,
    choice: ErrorChoice | None = None,
    block: int | None = None,
    names: Sequence[str] = (),
) -> WalkReport:
    """Hold a walked hedge against its promise.

    Parameters
    ----------
    walk : WalkForward
        The walked hedge.
    choice : ErrorChoice, optional
        Standard errors of the residual alphas and betas; classical by default.
    block : int, optional
        Least number of periods in a block of the variance decomposition; by default half the window, and at least
        three times the number of coefficients.
    names : sequence of str
        Factor names, for messages.

    Raises
    ------
    EstimationError
        If no asset has enough hedged periods, or a block has no degrees of freedom.
    """
    width = walk.factors.shape[1]
    least = width + 3
    length = max(walk.schedule.window // 2, 3 * (width + 1)) if block is None else block
    if length < width + 2:
        raise EstimationError(
            f"Blocks of {length} periods for {width} legs", allowed=f"at least {width + 2} periods"
        )
    count = walk.returns.shape[1]
    short = walk.delivered.sum(axis=0) < least
    if short.all():
        raise EstimationError(
            f"No asset has {least} hedged periods",
            remedy="use a longer sample, a shorter window or fewer legs",
        )
    store: dict[str, Floats] = {}
    for assets, rows in _groups(walk, short):
        for key, values in _on_rows(walk, assets, rows, choice, length, names).items():
            if key not in store:
                store[key] = np.full((count, *values.shape[1:]), np.nan)
            store[key][assets] = values
    return _assembled(store, short, least)


def _groups(walk: WalkForward, short: npt.NDArray[np.bool_]) -> Iterator[tuple[Ints, Ints]]:
    """Assets that share their hedged periods, with those periods."""
    patterns, which = np.unique(walk.delivered[:, ~short], axis=1, return_inverse=True)
    assets = np.flatnonzero(~short)
    for group in range(patterns.shape[1]):
        yield assets[which.ravel() == group], np.flatnonzero(patterns[:, group])


def _on_rows(
    walk: WalkForward, assets: Ints, rows: Ints, choice: ErrorChoice | None, length: int, names: Sequence[str]
) -> dict[str, Floats]:
    """Every number of the report for assets that share their hedged periods, first axis the asset."""
    factors = walk.factors[rows]
    raw = walk.returns[np.ix_(rows, assets)]
    hedged = walk.hedged[np.ix_(rows, assets)]
    window = walk.held_by[rows]
    left = least_squares(hedged, factors, choice=choice, names=names)
    hindsight = least_squares(raw, factors, names=names)
    total, variance = raw.var(axis=0, ddof=1), hedged.var(axis=0, ddof=1)
    promised = walk.promised_variance[np.ix_(window, assets)].mean(axis=0)
    promised_total = walk.promised_total[np.ix_(window, assets)].mean(axis=0)
    freedom = (walk.periods[window] - factors.shape[1] - 1)[:, None] / (walk.periods[window] - 1)[:, None]
    promised_kept = (walk.promised_variance[np.ix_(window, assets)] * freedom).mean(axis=0)
    whole = np.full(len(assets), float(len(rows)))
    return {
        "promise_alpha": walk.promised_mean[np.ix_(window, assets)].mean(axis=0),
        "promise_volatility": np.sqrt(promised),
        "promise_effectiveness": 1.0 - _ratio(promised_kept, promised_total),
        "hindsight_alpha": hindsight.coefficients[:, 0],
        "hindsight_volatility": hindsight.sigma,
        "hindsight_effectiveness": hindsight.r2,
        "hindsight_beta": hindsight.coefficients[:, 1:],
        "mean": hedged.mean(axis=0),
        "volatility": np.sqrt(variance),
        "effectiveness": 1.0 - _ratio(variance, total),
        "unhedged_mean": raw.mean(axis=0),
        "unhedged_volatility": np.sqrt(total),
        **_residual(left),
        "theta2": np.full(len(assets), factor_moments(factors).theta2),
        "periods": whole,
        **_gap(walk, assets, rows, raw, hedged, length),
    }


def _residual(fit: LeastSquares) -> dict[str, Floats]:
    return {
        "alpha": fit.coefficients[:, 0],
        "alpha_error": fit.errors[:, 0],
        "beta": fit.coefficients[:, 1:],
        "beta_error": fit.errors[:, 1:],
        "sigma": fit.sigma,
    }


def _gap(
    walk: WalkForward, assets: Ints, rows: Ints, raw: Floats, hedged: Floats, length: int
) -> dict[str, Floats]:
    plain = walk.hedged_steady[np.ix_(rows, assets)]
    moved = walk.hedged_plain[np.ix_(rows, assets)]
    window = walk.held_by[rows]
    promised = walk.plain_variance[np.ix_(window, assets)]
    estimation = promised * walk.leverage[rows][:, None]
    apart = (plain - plain.mean(axis=0)) ** 2 * (len(rows) / (len(rows) - 1))
    blocks = np.array_split(np.arange(len(rows)), max(1, len(rows) // length))
    residual = np.stack([least_squares(raw[block], walk.factors[rows[block]]).sigma ** 2 for block in blocks])
    share = np.array([len(block) for block in blocks], dtype=float)[:, None] / len(rows)
    excess = np.stack([(apart[block] - estimation[block]).mean(axis=0) for block in blocks]) - residual
    after = (share * residual).sum(axis=0)
    drift = (share * excess).sum(axis=0)
    error = np.full(len(assets), np.nan)
    if len(blocks) >= _BLOCKS_FOR_ERROR:
        spread = ((share * (excess - drift)) ** 2).sum(axis=0)
        error = np.sqrt(spread * len(blocks) / (len(blocks) - 1))
    steady, moving, delivered = (values.var(axis=0, ddof=1) for values in (plain, moved, hedged))
    return {
        "gap_promised": promised.mean(axis=0),
        "gap_residual_risk": after - promised.mean(axis=0),
        "gap_estimation": estimation.mean(axis=0),
        "gap_drift": drift,
        "gap_drift_error": error,
        "gap_holding": moving - steady,
        "gap_rule": delivered - moving,
        "gap_delivered": delivered,
        "gap_blocks": np.full(len(assets), float(len(blocks))),
    }


def _assembled(store: dict[str, Floats], short: npt.NDArray[np.bool_], least: int) -> WalkReport:
    def whole(key: str) -> Ints:
        return np.nan_to_num(store[key], nan=0.0).astype(np.int64)

    delivered = {field.name: store[field.name] for field in fields(Delivery) if field.name != "periods"}
    gap = {field.name: store["gap_" + field.name] for field in fields(VarianceGap) if field.name != "blocks"}
    return WalkReport(
        promised=Promise(*(store["promise_" + field.name] for field in fields(Promise))),
        hindsight=Promise(*(store["hindsight_" + field.name] for field in fields(Promise))),
        hindsight_beta=store["hindsight_beta"],
        delivered=Delivery(**delivered, periods=whole("periods")),
        gap=VarianceGap(**gap, blocks=whole("gap_blocks")),
        short=short,
        least=least,
    )


def _ratio(above: Floats, below: Floats) -> Floats:
    """Quotient, NaN where the divisor is zero."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(below > 0, above / below, np.nan)
