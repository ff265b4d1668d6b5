"""Costs of the walked hedge with labels, and the ceiling held against what is left."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.hedge.costs import CostRates, HedgeCosts, hedge_costs
from soffit.judge.ceiling import AlphaTable, AssetVerdicts
from soffit.settings import CeilingForm
from soffit.study.hedge_walk import HedgeWalk

__all__ = ["WalkCosts"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class WalkCosts:
    """Gross and net alpha of every walked hedge.

    The table is annual; `costs` holds the same per period.

    Parameters
    ----------
    walk : HedgeWalk
        The walked hedge.
    rates : CostRates
        Costs per period and unit.
    costs : HedgeCosts
        Costs and alphas per period.
    level : float
        Coverage of intervals.
    """

    walk: HedgeWalk
    rates: CostRates
    costs: HedgeCosts
    level: float

    @classmethod
    def of(cls, walk: HedgeWalk, rates: CostRates, short: tuple[str, ...], level: float) -> WalkCosts:
        """Charge costs to a walked hedge; `short` names the assets held short."""
        below = np.array([str(name) in short for name in walk.sample.assets], dtype=bool)
        return cls(walk, rates, hedge_costs(walk.walk, walk.report, rates, short=below), level)

    @property
    def periods_per_year(self) -> int:
        """Periods in a year, m."""
        return self.walk.periods_per_year

    @cached_property
    def net_alphas(self) -> AlphaTable:
        """Net alphas per period as a ceiling takes them, for the assets that have one."""
        there = ~self.walk.report.short
        came = self.walk.report.delivered
        total = came.unhedged_volatility[there]
        sigma = came.sigma[there]
        with np.errstate(divide="ignore", invalid="ignore"):
            r2 = np.where(total > 0, 1.0 - (sigma / total) ** 2, np.nan)
        return AlphaTable(
            alpha=self.costs.net_alpha[there],
            sigma=sigma,
            r2=r2,
            total=total,
            t_scale=self.costs.t_scale[there],
            df=(came.periods - self.walk.walk.factors.shape[1] - 1)[there].astype(float),
            theta_f=np.sqrt(came.theta2[there]),
            level=self.level,
        )

    def verdicts(self, ceiling: float, form: CeilingForm) -> AssetVerdicts:
        """Hold an annual ceiling against the net alphas, costs taken as known."""
        return self.net_alphas.at(ceiling / np.sqrt(self.periods_per_year), form)

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row an asset, decimal a year.

        Columns: side; turnover (units of all legs traded a year); leg_trading, asset_trading, borrow, financing,
        cost (their sum); gross_alpha, net_alpha; net_appraisal (annual), net_t; break_even_multiple (how many times
        the costs the gross alpha pays for), break_even_half_spread (on every leg, decimal per unit; NaN where nothing
        breaks even).
        """
        m, costs = self.periods_per_year, self.costs
        columns: dict[str, npt.ArrayLike] = {
            "side": np.where(costs.short, "short", "long"),
            "turnover": costs.turnover.sum(axis=1) * m,
            "leg_trading": costs.leg_trading.sum(axis=1) * m,
            "asset_trading": costs.asset_trading * m,
            "borrow": costs.borrow * m,
            "financing": costs.financing * m,
            "cost": costs.total * m,
            "gross_alpha": costs.gross_alpha * m,
            "net_alpha": costs.net_alpha * m,
            "net_appraisal": costs.net_appraisal * np.sqrt(m),
            "net_t": costs.net_t,
            "break_even_multiple": costs.break_even_multiple,
            "break_even_half_spread": costs.break_even_half_spread,
        }
        out = pd.DataFrame(columns, index=self.walk.sample.assets)
        numbers = [name for name in out if name != "side"]
        out.loc[self.walk.report.short, numbers] = np.nan
        return out

    def under(self, ceiling: float, form: CeilingForm) -> pd.DataFrame:
        """Net alphas under an annual ceiling, one row an asset that has one.

        Columns: net_alpha, bound (decimal a year), needed (annual), status, p (exact, of ``|AR|`` at most the bound).
        """
        m = self.periods_per_year
        found = self.verdicts(ceiling, form)
        columns: dict[str, npt.ArrayLike] = {
            "net_alpha": self.net_alphas.alpha * m,
            "bound": found.bound * m,
            "needed": self.net_alphas.needed(form) * np.sqrt(m),
            "status": [str(status) for status in found.status],
            "p": found.pvalues,
        }
        return pd.DataFrame(columns, index=self.walk.sample.assets[~self.walk.report.short])

    def ladder(self, asset: str) -> pd.Series[float]:
        """Alpha of one asset after each cost in turn, decimal a year: gross first, net last."""
        row = self.table.loc[self.walk.sample.assets[self.walk.position(asset)]]
        left = float(row["gross_alpha"])
        steps = {"gross": left}
        for name, words in (
            ("leg_trading", "after trading the legs"),
            ("asset_trading", "after trading the asset"),
            ("borrow", "after borrow fees"),
            ("financing", "after financing: net"),
        ):
            left -= float(row[name])
            steps[words] = left
        return pd.Series(steps, name=asset)
