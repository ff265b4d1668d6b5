"""What a walked hedge costs: trading, borrowing and financing, and the alpha that is left.

Rates are decimal per period and per unit; a half-spread is decimal per unit traded. Arrays in, frozen results out.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum
from functools import cached_property

import numpy as np
import numpy.typing as npt

from soffit.errors import SettingError
from soffit.hedge.delivery import WalkReport
from soffit.hedge.walk_forward import WalkForward

__all__ = ["CostRates", "HedgeCosts", "LegKind", "hedge_costs"]

Floats = npt.NDArray[np.float64]


class LegKind(StrEnum):
    """What is held in a hedge leg, which decides what it costs to carry."""

    CASH = "cash"  # a fund or basket: a short pays the borrow fee, a long is financed
    LONG_SHORT = "long-short"  # a long-short portfolio: one side is short whichever way it is held
    DERIVATIVE = "derivative"  # a future or swap: its carry is in its own return


@dataclass(frozen=True, eq=False)
class CostRates:
    """Costs of trading and holding, decimal.

    Parameters
    ----------
    leg_half_spreads : ndarray, shape (K,)
        Paid on each unit of a leg traded.
    asset_half_spreads : ndarray, shape (N,)
        Paid on each unit of the asset, once when the position is opened and once when it is closed.
    financing : float
        Spread over the risk-free rate on borrowed money, per period.
    borrow : float
        Fee on short positions, per period.
    kinds : tuple of LegKind
        What each leg is; one kind a leg.
    borrowed : float
        Share of the asset's value bought with borrowed money, 0 to 1; a long asset is paid for in full by default.

    Raises
    ------
    SettingError
        For a negative or missing cost, or a borrowed share outside 0 to 1.
    """

    leg_half_spreads: Floats
    asset_half_spreads: Floats
    financing: float
    borrow: float
    kinds: tuple[LegKind, ...]
    borrowed: float = 0.0

    def __post_init__(self) -> None:
        for label, values in (("hedge leg", self.leg_half_spreads), ("asset", self.asset_half_spreads)):
            bad = np.atleast_1d(~(np.isfinite(values) & (values >= 0)))
            if bad.any():
                place = int(np.flatnonzero(bad)[0])
                raise SettingError(
                    f"The half-spread of {label} {place + 1} is {values[place]:g}",
                    allowed="zero or a positive number",
                )
        for label, rate in (("financing spread", self.financing), ("borrow fee", self.borrow)):
            if not (math.isfinite(rate) and rate >= 0):
                raise SettingError(f"The {label} is {rate:g}", allowed="zero or a positive number")
        if not 0.0 <= self.borrowed <= 1.0:
            raise SettingError(f"The borrowed share is {self.borrowed:g}", allowed="0 to 1")
        if len(self.kinds) != len(self.leg_half_spreads):
            raise SettingError(
                f"{len(self.kinds)} kinds for {len(self.leg_half_spreads)} legs", allowed="one a leg"
            )


@dataclass(frozen=True, eq=False)
class HedgeCosts:
    """Gross and net alpha of N walked hedges. Averages are over each asset's hedged periods.

    Parameters
    ----------
    turnover : ndarray, shape (N, K)
        Units of each leg traded a period, opening and closing included.
    leg_trading : ndarray, shape (N, K)
        Cost of that turnover a period.
    asset_trading, borrow, financing : ndarray, shape (N,)
        The other costs a period.
    gross_alpha : ndarray, shape (N,)
        Delivered alpha of the position before costs: the intercept after residual betas, its sign changed for a
        short asset.
    sigma : ndarray, shape (N,)
        Residual volatility of the delivered hedge.
    t_scale : ndarray, shape (N,)
        √(n/(1 + θ̂f²)): an appraisal ratio times this is the classical t ratio of its alpha.
    short : ndarray of bool, shape (N,)
        Assets held short with the legs long.
    """

    turnover: Floats
    leg_trading: Floats
    asset_trading: Floats
    borrow: Floats
    financing: Floats
    gross_alpha: Floats
    sigma: Floats
    t_scale: Floats
    short: npt.NDArray[np.bool_]

    @cached_property
    def total(self) -> Floats:
        """All costs a period, shape (N,)."""
        legs: Floats = self.leg_trading.sum(axis=1)
        return legs + self.asset_trading + self.borrow + self.financing

    @cached_property
    def net_alpha(self) -> Floats:
        """Gross alpha less all costs, shape (N,)."""
        return self.gross_alpha - self.total

    @cached_property
    def net_appraisal(self) -> Floats:
        """Net alpha over residual volatility, shape (N,); NaN where the hedge leaves no residual."""
        return np.divide(
            self.net_alpha, self.sigma, out=np.full_like(self.sigma, np.nan), where=self.sigma > 0
        )

    @cached_property
    def net_t(self) -> Floats:
        """Classical t ratio of the net alpha, costs taken as known, shape (N,)."""
        return self.net_appraisal * self.t_scale

    @cached_property
    def break_even_multiple(self) -> Floats:
        """How many times all costs the gross alpha pays for, shape (N,).

        Infinite without costs; NaN where the gross alpha is not positive, so that nothing breaks even.
        """
        with np.errstate(divide="ignore", invalid="ignore"):
            multiple = np.where(self.total > 0, self.gross_alpha / self.total, np.inf)
        return np.where(self.gross_alpha > 0, multiple, np.nan)

    @cached_property
    def break_even_half_spread(self) -> Floats:
        """Half-spread on every leg at which the net alpha is zero, the other costs as they are, shape (N,).

        Infinite where nothing is traded; NaN where the other costs alone take the alpha.
        """
        left = self.gross_alpha - self.asset_trading - self.borrow - self.financing
        traded = self.turnover.sum(axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            spread = np.where(traded > 0, left / traded, np.inf)
        return np.where(left > 0, spread, np.nan)


def hedge_costs(
    walk: WalkForward, report: WalkReport, rates: CostRates, *, short: npt.NDArray[np.bool_] | None = None
) -> HedgeCosts:
    """Charge costs to a walked hedge.

    Parameters
    ----------
    walk : WalkForward
        The walked hedge.
    report : WalkReport
        What it delivered.
    rates : CostRates
        Costs.
    short : ndarray of bool, shape (N,), optional
        Assets held short, with their hedge legs long; all long by default.

    Raises
    ------
    SettingError
        If the rates do not match the legs or the assets.

    Notes
    -----
    Turnover of a leg is the change from the ratio to which the last hedge drifted, the opening trade and the closing
    trade at the end of the sample included. Carry accrues on the ratios in force.
    """
    count, width = walk.returns.shape[1], walk.factors.shape[1]
    if len(rates.leg_half_spreads) != width or len(rates.asset_half_spreads) != count:
        raise SettingError(
            f"Costs for {len(rates.leg_half_spreads)} legs and {len(rates.asset_half_spreads)} assets",
            allowed=f"{width} legs and {count} assets",
        )
    below = np.zeros(count, dtype=bool) if short is None else np.asarray(short, dtype=bool)
    if below.shape != (count,):
        raise SettingError(f"Sides for {below.size} assets", allowed=f"one for each of the {count} assets")
    side = np.where(below, -1.0, 1.0)
    held = walk.delivered
    periods = np.maximum(held.sum(axis=0), 1).astype(float)
    turnover = _turnover(walk) / periods[:, None]
    borrow, financing = _carry(walk, rates, side, held)
    spreads = np.asarray(rates.asset_half_spreads, dtype=float)
    asset_borrow = np.where(below, rates.borrow, 0.0)
    asset_financing = np.where(below, 0.0, rates.borrowed * rates.financing)
    return HedgeCosts(
        turnover=turnover,
        leg_trading=turnover * np.asarray(rates.leg_half_spreads, dtype=float),
        asset_trading=2.0 * spreads / periods,
        borrow=borrow / periods + asset_borrow,
        financing=financing / periods + asset_financing,
        gross_alpha=side * report.delivered.alpha,
        sigma=report.delivered.sigma,
        t_scale=np.sqrt(report.delivered.periods / (1.0 + report.delivered.theta2)),
        short=below,
    )


def _turnover(walk: WalkForward) -> Floats:
    """Units of each leg traded over the whole walk, shape (N, K)."""
    traded = np.nansum(walk.trades, axis=0)
    # A hedge is closed when the sample ends, or where the asset's returns stop.
    alive = np.asarray(np.isfinite(walk.targets).all(axis=2), dtype=bool)
    resumed = np.zeros_like(alive)
    whole = np.asarray(np.isfinite(walk.closing).all(axis=2), dtype=bool)
    resumed[:-1] = alive[1:] & whole[:-1]
    ends = alive & ~resumed
    closed = np.where(np.isfinite(walk.closing), walk.closing, walk.targets)
    return np.asarray(traded + np.where(ends[:, :, None], np.abs(closed), 0.0).sum(axis=0), dtype=float)


def _carry(
    walk: WalkForward, rates: CostRates, side: Floats, held: npt.NDArray[np.bool_]
) -> tuple[Floats, Floats]:
    """Borrow fees and financing of the legs over the whole walk, shape (N,) each."""
    sold = np.where(held[:, :, None], walk.in_force, 0.0) * side[:, None]
    short, long = np.maximum(sold, 0.0).sum(axis=0), np.maximum(-sold, 0.0).sum(axis=0)
    cash = np.array([kind is LegKind.CASH for kind in rates.kinds], dtype=float)
    both = np.array([kind is LegKind.LONG_SHORT for kind in rates.kinds], dtype=float)
    return rates.borrow * (short @ cash + (short + long) @ both), rates.financing * (long @ cash)
