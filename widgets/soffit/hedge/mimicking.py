"""Mimicking portfolios: what to trade for a factor that cannot be bought.

Sources: Breeden, Gibbons and Litzenberger (1989) and Lamont (2001). Arrays in, frozen results out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

from soffit.errors import EstimationError
from soffit.estimate.regression import least_squares
from soffit.estimate.statistic import Distribution, Family, TestStatistic

__all__ = ["MimickingPortfolios", "mimicking_portfolios"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class MimickingPortfolios:
    """Portfolios of traded base assets that follow non-traded factors most closely.

    Parameters
    ----------
    weights : ndarray, shape (J, P)
        Weights of the P base assets; one unit moves one for one with the spanned part of the factor.
    r2 : ndarray, shape (J,)
        Share of the factor's variance that the base assets span.
    tests : tuple of TestStatistic
        Whether the base spans the factor at all: F test of zero weights.
    returns : ndarray, shape (T, J)
        Excess returns of the portfolios over the estimation sample.
    """

    weights: Floats
    r2: Floats
    tests: tuple[TestStatistic, ...]
    returns: Floats

    def on(self, base: Floats) -> Floats:
        """Returns of the portfolios, weights as estimated, on other dates' base returns, shape (T', J)."""
        return np.asarray(np.asarray(base, dtype=float) @ self.weights.T, dtype=float)

    def in_base(self, ratios: Floats) -> Floats:
        """Hedge ratios on the factors as ratios on the base assets, shape (N, J) to (N, P)."""
        return np.asarray(np.asarray(ratios, dtype=float) @ self.weights, dtype=float)


def mimicking_portfolios(
    nontraded: Floats, base: Floats, *, names: Sequence[str] = ()
) -> MimickingPortfolios:
    """Project non-traded factors on traded base assets.

    Parameters
    ----------
    nontraded : ndarray, shape (T, J)
        Factors that cannot be bought, in their own units.
    base : ndarray, shape (T, P)
        Excess returns of the base assets.
    names : sequence of str
        Names of the base assets, for messages.

    Raises
    ------
    EstimationError
        If the sample is too short, a value is missing, the base assets are collinear, or a factor does not move.

    Notes
    -----
    The weights are the slopes of a regression on a constant and the base returns: the portfolio of maximum
    correlation (Breeden, Gibbons and Litzenberger 1989), as an economic tracking portfolio (Lamont 2001).
    """
    nontraded, base = np.asarray(nontraded, dtype=float), np.asarray(base, dtype=float)
    fit = least_squares(nontraded, base, names=names)
    if not np.isfinite(fit.r2).all():
        still = int(np.flatnonzero(~np.isfinite(fit.r2))[0])
        raise EstimationError(
            f"Non-traded factor {still + 1} does not move in this sample",
            remedy="leave it out or use a longer sample",
        )
    weights = fit.coefficients[:, 1:]
    width = base.shape[1]
    law = Distribution(Family.F, (float(width), float(fit.df)))
    tests = []
    for share in fit.r2:
        value = float("inf") if share >= 1.0 else float(share / width / ((1.0 - share) / fit.df))
        tests.append(
            TestStatistic(
                "Spanning F",
                value,
                "no base asset moves with the factor",
                law,
                float(stats.f(width, fit.df).sf(value)),
                "breeden-gibbons-litzenberger-1989",
            )
        )
    return MimickingPortfolios(weights, fit.r2, tuple(tests), base @ weights.T)
