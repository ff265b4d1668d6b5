"""The walked hedge with labels: promise beside delivery, and the path of each asset."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.estimate.regression import ErrorChoice
from soffit.estimate.rolling import rolling_betas
from soffit.estimate.statistic import NotApplicable
from soffit.hedge.delivery import WalkReport, report_walk
from soffit.hedge.walk_forward import WalkForward, WalkSchedule, walk_forward
from soffit.hedge.weights import HedgeRule
from soffit.settings import Histories
from soffit.study.hedge_settings import known_names
from soffit.study.sample import Sample

__all__ = ["HedgeWalk"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class HedgeWalk:
    """A hedge walked through the sample without look-ahead.

    Tables are annual; `walk` and `report` hold the same per period.

    Parameters
    ----------
    sample : Sample
        What is hedged.
    dates : DatetimeIndex
        The T period ends that the walk ran over.
    walk : WalkForward
        Ratios and hedged returns.
    report : WalkReport
        Promise against delivery.
    """

    sample: Sample
    dates: pd.DatetimeIndex
    walk: WalkForward
    report: WalkReport

    @classmethod
    def of(
        cls,
        sample: Sample,
        rule: HedgeRule,
        schedule: WalkSchedule,
        choice: ErrorChoice,
        risk_free: pd.Series[float] | None,
    ) -> HedgeWalk:
        """Walk a hedge through a sample.

        Raises
        ------
        EstimationError
            If the sample is too short for the window, or no asset has enough hedged periods.
        """
        if sample.histories is Histories.COMMON:
            block = sample.common
            dates, returns, factors = block.dates, block.returns, block.factors
        else:
            dates = pd.DatetimeIndex(sample.returns.index)
            returns, factors = sample.returns.to_numpy(), sample.factors.to_numpy()
        rates = None if risk_free is None else np.asarray(risk_free.reindex(dates), dtype=np.float64)
        names = sample.factor_names
        walk = walk_forward(returns, factors, rule, schedule, risk_free=rates, names=names)
        return cls(sample, dates, walk, report_walk(walk, choice=choice, names=names))

    @property
    def periods_per_year(self) -> int:
        """Periods in a year, m."""
        return self.sample.periods_per_year

    @property
    def hedged_dates(self) -> pd.DatetimeIndex:
        """Period ends of the hedged periods."""
        return self.dates[self.walk.rows]

    def position(self, asset: str) -> int:
        """Column of an asset.

        Raises
        ------
        SettingError
            For an unknown asset, with the nearest known one.
        """
        names = [str(name) for name in self.sample.assets]
        return names.index(known_names([asset], names, "asset")[0])

    @property
    def missing(self) -> NotApplicable | None:
        """Why some assets have no numbers; None when all have."""
        return self.report.missing

    @cached_property
    def table(self) -> pd.DataFrame:
        """Promise against delivery, one row an asset, annual.

        Columns: promised_alpha, promised_volatility, promised_effectiveness, promised_appraisal (averages over the
        windows); mean, volatility, effectiveness, ratio (delivered hedged return); alpha, alpha_error, t, appraisal
        (after residual betas); beta of each factor and its error; hindsight_alpha, hindsight_volatility,
        hindsight_effectiveness (constant betas fitted afterwards); unhedged_mean, unhedged_volatility; periods.
        """
        m, root = self.periods_per_year, np.sqrt(self.periods_per_year)
        promised, came, behind = self.report.promised, self.report.delivered, self.report.hindsight
        with np.errstate(divide="ignore", invalid="ignore"):
            t = np.where(came.alpha_error > 0, came.alpha / came.alpha_error, np.nan)
        columns: dict[str, npt.ArrayLike] = {
            "promised_alpha": promised.alpha * m,
            "promised_volatility": promised.volatility * root,
            "promised_effectiveness": promised.effectiveness,
            "promised_appraisal": promised.appraisal * root,
            "mean": came.mean * m,
            "volatility": came.volatility * root,
            "effectiveness": came.effectiveness,
            "ratio": came.ratio * root,
            "alpha": came.alpha * m,
            "alpha_error": came.alpha_error * m,
            "t": t,
            "appraisal": came.appraisal * root,
        }
        for position, name in enumerate(self.sample.factor_names):
            columns[f"beta {name}"] = came.beta[:, position]
            columns[f"error {name}"] = came.beta_error[:, position]
        columns |= {
            "hindsight_alpha": behind.alpha * m,
            "hindsight_volatility": behind.volatility * root,
            "hindsight_effectiveness": behind.effectiveness,
            "unhedged_mean": came.unhedged_mean * m,
            "unhedged_volatility": came.unhedged_volatility * root,
            "periods": came.periods,
        }
        return pd.DataFrame(columns, index=self.sample.assets)

    @cached_property
    def gap(self) -> pd.DataFrame:
        """Why delivered variance differs from promised variance, one row an asset.

        Columns: promised, delivered (volatility, decimal a year); whole, residual_risk, estimation, drift, holding,
        rule (shares of the promised variance; the five parts add up to the whole); drift_t (drift over its standard
        error, NaN with fewer than eight blocks of time).
        """
        gap, root = self.report.gap, np.sqrt(self.periods_per_year)
        with np.errstate(divide="ignore", invalid="ignore"):
            base = np.where(gap.promised > 0, gap.promised, np.nan)
            columns = {
                "promised": np.sqrt(gap.promised) * root,
                "delivered": np.sqrt(gap.delivered) * root,
                "whole": (gap.delivered - gap.promised) / base,
                "residual_risk": gap.residual_risk / base,
                "estimation": gap.estimation / base,
                "drift": gap.drift / base,
                "holding": gap.holding / base,
                "rule": gap.rule / base,
                "drift_t": np.where(gap.drift_error > 0, gap.drift / gap.drift_error, np.nan),
            }
        return pd.DataFrame(columns, index=self.sample.assets)

    def ratios(self, asset: str) -> pd.DataFrame:
        """Hedge ratios of one asset in force in each hedged period, D×K."""
        held = self.walk.in_force[:, self.position(asset), :]
        return pd.DataFrame(held, index=self.hedged_dates, columns=list(self.sample.factor_names))

    def path(self, asset: str) -> pd.DataFrame:
        """Returns of one asset in the hedged periods, decimal per period.

        Columns: unhedged; promised (hedged with the constant betas that fit these periods best, known only
        afterwards); delivered. Periods without a hedge are left out.
        """
        i = self.position(asset)
        behind = self.walk.returns[:, i] - self.walk.factors @ self.report.hindsight_beta[i]
        columns = {
            "unhedged": self.walk.returns[:, i],
            "promised": behind,
            "delivered": self.walk.hedged[:, i],
        }
        return pd.DataFrame(columns, index=self.hedged_dates)[self.walk.delivered[:, i]]

    def residual_betas(self, asset: str) -> tuple[pd.DataFrame, pd.DataFrame] | NotApplicable:
        """Betas that one asset's hedged return still has, over rolling windows of the schedule's length.

        Returns
        -------
        tuple of DataFrame, or NotApplicable
            Betas and their classical standard errors, one row a window's last date, one column a factor; not
            applicable where the asset has fewer hedged periods than a window.
        """
        i, window = self.position(asset), self.walk.schedule.window
        rows = self.walk.delivered[:, i]
        if rows.sum() < window:
            return NotApplicable(
                f"Rolling residual betas of {asset}",
                f"it has {int(rows.sum())} hedged periods, fewer than a window of {window}",
            )
        fit = rolling_betas(
            self.walk.hedged[rows][:, [i]], self.walk.factors[rows], window, names=self.sample.factor_names
        )
        dates, names = self.hedged_dates[rows][fit.ends], list(self.sample.factor_names)
        return (
            pd.DataFrame(fit.beta[:, 0], index=dates, columns=names),
            pd.DataFrame(fit.beta_error[:, 0], index=dates, columns=names),
        )
