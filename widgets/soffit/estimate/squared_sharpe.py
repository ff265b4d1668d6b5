"""The squared Sharpe ratio of the best combination of factors: plug-in, unbiased, and exact interval."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from soffit.errors import EstimationError
from soffit.estimate.noncentral import ncf_interval
from soffit.estimate.statistic import Interval, NotApplicable

__all__ = ["SquaredSharpe", "squared_sharpe", "unbiased_squared_sharpe"]


@dataclass(frozen=True)
class SquaredSharpe:
    """Squared Sharpe ratio per period of the best combination of K traded factors.

    Parameters
    ----------
    plug_in : float
        In-sample value ``μ̂'Ω̂⁻¹μ̂`` with divisor T; biased up.
    unbiased : float or NotApplicable
        Unbiased under normal returns; it can be negative.
    interval : Interval or NotApplicable
        Exact interval under independent normal returns.
    width : int
        K.
    periods : int
        T.
    """

    plug_in: float
    unbiased: float | NotApplicable
    interval: Interval | NotApplicable
    width: int
    periods: int

    @property
    def ratio(self) -> float:
        """In-sample Sharpe ratio of the best combination, per period."""
        return float(np.sqrt(self.plug_in))

    @property
    def ratio_interval(self) -> Interval | NotApplicable:
        """Interval of the Sharpe ratio itself, per period."""
        if isinstance(self.interval, NotApplicable):
            return self.interval
        return Interval(
            float(np.sqrt(self.interval.low)), float(np.sqrt(self.interval.high)), self.interval.level
        )


def unbiased_squared_sharpe(plug_in: float, width: int, periods: int) -> float:
    """Unbiased estimate of a squared Sharpe ratio under normal returns.

    Parameters
    ----------
    plug_in : float
        ``μ̂'Ω̂⁻¹μ̂`` per period with divisor T.
    width : int
        K, number of factors.
    periods : int
        T.

    Returns
    -------
    float
        ``θ̂²(T−K−2)/T − K/T``: from ``E[θ̂²] = (K + Tθ²)/(T−K−2)``. Negative when the factors earn less than
        noise would.

    Raises
    ------
    EstimationError
        If T is not above K + 2: the plug-in then has no mean.

    References
    ----------
    Jobson and Korkie (1980), Journal of the American Statistical Association 75, 544-554.
    """
    if periods <= width + 2:
        raise EstimationError(
            f"An unbiased squared Sharpe ratio was asked of {width} factors over {periods} periods",
            allowed=f"more than {width + 2} periods",
            remedy="use a longer sample or fewer factors",
        )
    return plug_in * (periods - width - 2.0) / periods - width / periods


def squared_sharpe(plug_in: float, width: int, periods: int, level: float = 0.95) -> SquaredSharpe:
    """All that a sample says of the squared Sharpe ratio of K factors.

    Parameters
    ----------
    plug_in : float
        ``μ̂'Ω̂⁻¹μ̂`` per period with divisor T.
    width : int
        K; zero gives a squared Sharpe ratio of exactly zero.
    periods : int
        T.
    level : float
        Coverage of the interval.

    Returns
    -------
    SquaredSharpe
        The interval inverts ``θ̂²(T−K)/K ~ F(K, T−K; Tθ²)``.

    References
    ----------
    Hotelling (1931), Annals of Mathematical Statistics 2, 360-378; Jobson and Korkie (1980).
    """
    name = "Squared Sharpe ratio of the factors"
    if width == 0:
        return SquaredSharpe(0.0, 0.0, Interval(0.0, 0.0, level), 0, periods)
    short = f"{width} factors over {periods} periods leave no degrees of freedom"
    unbiased: float | NotApplicable = NotApplicable(f"{name}, unbiased", short)
    interval: Interval | NotApplicable = NotApplicable(f"{name}, interval", short)
    if periods > width + 2:
        unbiased = unbiased_squared_sharpe(plug_in, width, periods)
    if periods > width:
        low, high = ncf_interval(plug_in * (periods - width) / width, width, periods - width, level)
        interval = Interval(low / periods, high / periods, level)
    return SquaredSharpe(plug_in, unbiased, interval, width, periods)
