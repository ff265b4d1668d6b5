"""An invented desk: fourteen strategies and four traded factors, twenty years of months, a fixed seed.

Every name and number is made up. The true alphas are known, so that a reader can see what the estimates make of
them: one could not survive any sane ceiling, one series is smoothed, and one history is short.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from soffit.settings import Histories, Settings
from soffit.study import Study

__all__ = ["STRATEGIES", "Strategy", "demo_frames", "demo_study", "true_alphas"]

_SEED = 71_003
_MONTHS = 240
_FIRST = "2005-01"
_FACTORS = ("Equity", "Duration", "Carry", "Trend")
# Annual Sharpe ratios and volatilities of the factors, and their correlations.
_SHARPE = np.array([0.45, 0.30, 0.35, 0.30])
_VOLATILITY = np.array([0.155, 0.055, 0.070, 0.090])
_CORRELATION = np.array(
    [
        [1.00, -0.15, 0.35, -0.10],
        [-0.15, 1.00, 0.05, 0.15],
        [0.35, 0.05, 1.00, -0.10],
        [-0.10, 0.15, -0.10, 1.00],
    ]
)


@dataclass(frozen=True)
class Strategy:
    """An invented strategy.

    Parameters
    ----------
    name : str
        Invented name.
    alpha : float
        True alpha, decimal a year.
    sigma : float
        True residual volatility, decimal a year.
    betas : tuple of float
        Loadings on Equity, Duration, Carry and Trend.
    months : int
        Length of its history, up to the last month.
    smoothing : tuple of float
        Weights of the current and earlier months in a reported return; they add up to one.
    """

    name: str
    alpha: float
    sigma: float
    betas: tuple[float, float, float, float]
    months: int = _MONTHS
    smoothing: tuple[float, ...] = (1.0,)


STRATEGIES: tuple[Strategy, ...] = (
    Strategy("Alder Large Cap", 0.000, 0.022, (0.98, 0.02, 0.00, 0.00)),
    Strategy("Birch Small Cap", 0.005, 0.075, (1.12, -0.10, 0.10, -0.05)),
    Strategy("Cedar Dividend", 0.004, 0.040, (0.82, 0.20, 0.05, 0.00)),
    Strategy("Damson Growth", -0.010, 0.060, (1.20, -0.15, -0.10, 0.05)),
    Strategy("Elder Quality", 0.012, 0.034, (0.88, 0.10, -0.05, 0.05)),
    Strategy("Fir Long-Short", 0.020, 0.062, (0.35, 0.00, 0.10, 0.10)),
    Strategy("Hazel Market Neutral", 0.018, 0.045, (0.03, 0.02, 0.05, 0.05)),
    Strategy(
        "Juniper Private Credit", 0.010, 0.050, (0.45, -0.05, 0.40, -0.05), smoothing=(0.45, 0.33, 0.22)
    ),
    Strategy("Larch Steady Income", 0.046, 0.021, (0.12, 0.15, 0.25, 0.00)),
    Strategy("Maple Macro", 0.015, 0.085, (0.15, 0.30, 0.20, 0.45)),
    Strategy("Oak Government Bond", 0.001, 0.008, (0.00, 0.95, 0.01, 0.00)),
    Strategy("Poplar Convertible", -0.004, 0.048, (0.50, 0.10, 0.35, -0.05)),
    Strategy("Rowan Event", 0.030, 0.070, (0.40, 0.00, 0.20, 0.00), months=84),
    Strategy("Sorrel Futures", 0.008, 0.065, (-0.02, 0.20, 0.05, 0.95)),
)


def true_alphas() -> pd.Series[float]:
    """True alphas of the strategies, decimal a year."""
    return pd.Series({strategy.name: strategy.alpha for strategy in STRATEGIES}, name="true alpha")


def demo_frames() -> tuple[pd.DataFrame, pd.DataFrame]:
    """Generate the scenario's returns.

    Returns
    -------
    returns : DataFrame, 240×15
        Returns of the strategies before the cash return is taken off, and ``Cash``, decimal a month; blank
        before a strategy's first month.
    factors : DataFrame, 240×4
        Excess returns of the traded factors, decimal a month.
    """
    draw = np.random.default_rng(_SEED)
    dates = pd.period_range(_FIRST, periods=_MONTHS, freq="M").to_timestamp(how="end").normalize()
    root = np.linalg.cholesky(_CORRELATION)
    shocks = draw.standard_t(8, size=(_MONTHS, 4)) / np.sqrt(8 / 6) @ root.T
    monthly = _VOLATILITY / np.sqrt(12)
    factors = shocks * monthly + _SHARPE * _VOLATILITY / 12
    cash = 0.0015 + 0.0012 * np.sin(np.arange(_MONTHS) / 38.0)
    columns: dict[str, np.ndarray[tuple[int], np.dtype[np.float64]]] = {}
    for strategy in STRATEGIES:
        residual = draw.standard_t(8, size=_MONTHS) / np.sqrt(8 / 6) * strategy.sigma / np.sqrt(12)
        excess = strategy.alpha / 12 + factors @ np.array(strategy.betas) + residual
        reported = np.convolve(excess, strategy.smoothing)[:_MONTHS] + cash
        reported[: _MONTHS - strategy.months] = np.nan
        columns[strategy.name] = reported
    returns = pd.DataFrame({**columns, "Cash": cash}, index=dates).round(8)
    returns.index.name = "month"
    return returns, pd.DataFrame(factors, index=dates.rename("month"), columns=list(_FACTORS)).round(8)


def demo_study(settings: Settings | None = None) -> Study:
    """Open the scenario as a study, each strategy on its own history unless `settings` say otherwise."""
    returns, factors = demo_frames()
    chosen = settings or Settings(histories=Histories.OWN)
    return Study.open(returns, factors, risk_free="Cash", settings=chosen)
