"""The order ticket from a study's latest hedge, and mimicking portfolios for factors that cannot be bought."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import date

import numpy as np
import pandas as pd

from soffit.errors import EstimationError, SettingError, nearest
from soffit.estimate.statistic import TestStatistic
from soffit.hedge.mimicking import MimickingPortfolios, mimicking_portfolios
from soffit.hedge.ticket import Instrument, Rounding, Ticket, hedge_ticket
from soffit.hedge.walk_forward import WalkSchedule
from soffit.intake import Panel
from soffit.study.hedge_ratios import FactorHedge
from soffit.study.hedge_settings import known_names

__all__ = ["Mimicking", "longest_age", "make_mimicking", "make_ticket"]


def longest_age(schedule: WalkSchedule, periods_per_year: int) -> int:
    """Calendar days that estimates may be old: holding period, lag, and one period for the data to arrive."""
    return math.ceil((schedule.hold + schedule.lag + 1) * 365.25 / periods_per_year)


def make_ticket(
    hedge: FactorHedge,
    schedule: WalkSchedule,
    notionals: Mapping[str, float],
    instruments: Mapping[str, Instrument],
    *,
    as_of: date,
    rounding: Rounding,
    currency: str,
) -> Ticket:
    """Turn the latest hedge ratios of some assets into orders.

    Parameters
    ----------
    hedge : FactorHedge
        Hedge from the latest window.
    schedule : WalkSchedule
        How long such a hedge is held.
    notionals : mapping of str to float
        Money in each asset, negative where short.
    instruments : mapping of str to Instrument
        What is traded for each factor; a factor that no asset needs may be left out.
    as_of : date
        Date of the ticket.
    rounding : Rounding
        How contracts are rounded.
    currency : str
        Currency of the notionals.

    Raises
    ------
    SettingError
        For an unknown asset or factor, or a leg without an instrument.
    EstimationError
        If the estimates are stale for the date.
    """
    names = [str(name) for name in hedge.sample.assets]
    assets = known_names(notionals, names, "asset")
    if not assets:
        raise SettingError("The ticket names no asset", allowed="at least one asset with its notional")
    known_names(instruments, hedge.sample.factor_names, "hedge leg")
    ratios = hedge.ratios.loc[list(assets)]
    legs = [str(leg) for leg in ratios if leg in instruments or (ratios[leg] != 0).any()]
    for leg in legs:
        if leg not in instruments:
            raise SettingError(
                f"The leg '{leg}' has no instrument",
                allowed=f"an instrument for each of {', '.join(legs)}",
                remedy="say what is traded for it, or drop the factor from the hedge",
            )
    through = hedge.estimated_through[list(assets)].min()
    positions = [names.index(asset) for asset in assets]
    block = next(block for block, _ in hedge.pieces if positions[0] in block.positions)
    columns = [hedge.sample.factor_names.index(leg) for leg in legs]
    covariance = np.atleast_2d(np.cov(block.factors[:, columns].T))
    return hedge_ticket(
        assets,
        np.array([float(notionals[asset]) for asset in assets]),
        ratios[legs].to_numpy(),
        legs,
        [instruments[leg] for leg in legs],
        as_of=as_of,
        estimated_through=through.date(),
        longest_age=longest_age(schedule, hedge.periods_per_year),
        covariance=covariance,
        rounding=rounding,
        currency=currency,
    )


@dataclass(frozen=True, eq=False)
class Mimicking:
    """Portfolios of traded base assets that follow non-traded factors.

    Parameters
    ----------
    weights : DataFrame, J×P
        Weights of the base assets, one row a non-traded factor.
    r2 : Series
        Share of each factor's variance that the base spans.
    tests : dict of str to TestStatistic
        Whether the base spans the factor at all.
    returns : DataFrame
        Excess returns of the portfolios on every date on which the base assets have returns, decimal per period; a
        study can be opened with them as traded factors.
    periods : int
        Periods in which the weights were estimated.
    portfolios : MimickingPortfolios
        The same without labels.
    """

    weights: pd.DataFrame
    r2: pd.Series[float]
    tests: dict[str, TestStatistic]
    returns: pd.DataFrame
    periods: int
    portfolios: MimickingPortfolios


def make_mimicking(panel: Panel, factors: Iterable[str] | None, base: Iterable[str]) -> Mimicking:
    """Project a panel's non-traded factors on traded series.

    Parameters
    ----------
    panel : Panel
        Where the series are.
    factors : iterable of str, optional
        Non-traded factors; all of them if None.
    base : iterable of str
        Names of assets or traded factors that the portfolios may hold.

    Raises
    ------
    SettingError
        For an unknown name, or a panel without non-traded factors.
    EstimationError
        If too few periods have all the series.
    """
    known = [str(name) for name in panel.non_traded]
    if not known:
        raise SettingError(
            "This panel has no non-traded factor", remedy="give one at intake with the role for it"
        )
    wanted = known_names(known if factors is None else factors, known, "non-traded factor")
    traded = panel.assets.join(panel.factors)
    names = [str(name) for name in base]
    for name in names:
        if name not in traded:
            raise SettingError(f"There is no asset or factor '{name}'", remedy=nearest(name, traded.columns))
    table, target = traded[names], panel.non_traded[list(wanted)]
    rows = table.notna().all(axis=1) & target.notna().all(axis=1)
    if rows.sum() < len(names) + 2:
        raise EstimationError(
            f"Only {int(rows.sum())} periods have all of the factors and base assets",
            allowed=f"at least {len(names) + 2}",
            remedy="use fewer base assets",
        )
    found = mimicking_portfolios(target[rows].to_numpy(), table[rows].to_numpy(), names=names)
    there = table.dropna()
    return Mimicking(
        weights=pd.DataFrame(found.weights, index=list(wanted), columns=names),
        r2=pd.Series(found.r2, index=list(wanted), name="r2"),
        tests=dict(zip(wanted, found.tests, strict=True)),
        returns=pd.DataFrame(found.on(there.to_numpy()), index=there.index, columns=list(wanted)),
        periods=int(rows.sum()),
        portfolios=found,
    )
