"""Are the alphas jointly zero? The test of Gibbons, Ross and Shanken (1989) and what it rests on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg, stats

from soffit.estimate.regression import Regression
from soffit.estimate.statistic import Distribution, Family, NotApplicable, TestStatistic

__all__ = ["JointAlphas", "grs_from_sharpe", "grs_statistic", "joint_alphas"]

Floats = npt.NDArray[np.float64]

_DEPENDENT = 1e-9


@dataclass(frozen=True, eq=False)
class JointAlphas:
    """The alphas taken together.

    Parameters
    ----------
    count, width, periods : int
        N, K and T.
    theta_f2 : float
        Squared Sharpe ratio of the factors' best combination, per period, in sample.
    quadratic : float or NotApplicable
        Q = α'Σ⁻¹α with Σ = E'E/T; what the assets add to the squared Sharpe ratio.
    grs : TestStatistic or NotApplicable
        F(N, T − N − K) under zero alphas.
    """

    count: int
    width: int
    periods: int
    theta_f2: float
    quadratic: float | NotApplicable
    grs: TestStatistic | NotApplicable

    @property
    def df(self) -> tuple[int, int]:
        """Degrees of freedom of the GRS statistic, N and T − N − K."""
        return self.count, self.periods - self.count - self.width

    @property
    def theta_star2(self) -> float | NotApplicable:
        """Squared Sharpe ratio of the best portfolio of factors and assets: θf² + Q."""
        if isinstance(self.quadratic, NotApplicable):
            return self.quadratic
        return self.theta_f2 + self.quadratic


def joint_alphas(regression: Regression) -> JointAlphas:
    """Test that all alphas of a regression are zero.

    Parameters
    ----------
    regression : Regression
        All assets over one sample.

    Returns
    -------
    JointAlphas
        With the statistic, or the reason why there is none.

    Notes
    -----
    Gibbons, Ross and Shanken (1989), Econometrica 57: F = (T − N − K)/N · Q/(1 + θf²), exact for normal
    residuals that are independent over time. Q comes from the triangular root of the residuals, not from an
    inverted covariance matrix, so that nearly collinear assets keep their digits.
    """
    count, width, periods = regression.count, regression.width, regression.periods
    theta_f2 = regression.factors.theta2
    quadratic = _quadratic(regression)
    if isinstance(quadratic, NotApplicable):
        grs: TestStatistic | NotApplicable = NotApplicable("The GRS test", quadratic.reason)
    else:
        value = grs_statistic(quadratic, theta_f2, count, width, periods)
        law = Distribution(Family.F, (float(count), float(periods - count - width)))
        null = "all alphas are zero"
        grs = TestStatistic("GRS", value, null, law, law.sf(value), "gibbons-ross-shanken-1989")
    return JointAlphas(count, width, periods, theta_f2, quadratic, grs)


def _quadratic(regression: Regression) -> float | NotApplicable:
    name = "The joint Sharpe ratio of factors and assets"
    count, width, periods = regression.count, regression.width, regression.periods
    if count >= periods - width:
        return NotApplicable(
            name,
            f"{count:,} assets leave no degrees of freedom in {periods:,} periods with {width} factors; "
            f"it needs N < T − K = {periods - width:,}",
        )
    scale = np.linalg.norm(regression.residuals, axis=0)
    if not scale.all():
        which = int(np.flatnonzero(scale == 0)[0]) + 1
        return NotApplicable(name, f"the factors replicate asset {which} exactly, so it has no residual risk")
    _, root = np.linalg.qr(regression.residuals / scale)
    pivots = np.abs(np.diag(root))
    if pivots.min() < _DEPENDENT:
        which = int(pivots.argmin()) + 1
        return NotApplicable(
            name,
            f"the residual of asset {which} is a combination of other assets' residuals; leave one out",
        )
    half = linalg.solve_triangular(root, regression.alpha / scale, trans="T")
    return float(periods * half @ half)


def grs_statistic(quadratic: float, theta_f2: float, count: int, width: int, periods: int) -> float:
    """GRS statistic from Q = α'Σ⁻¹α and θf², both per period with divisor T."""
    return (periods - count - width) / count * quadratic / (1.0 + theta_f2)


def grs_from_sharpe(theta_star: float, theta_f: float, count: int, width: int, periods: int) -> TestStatistic:
    """GRS test from published per-period Sharpe ratios of the best portfolio and of the factors."""
    value = grs_statistic(theta_star**2 - theta_f**2, theta_f**2, count, width, periods)
    df = (count, periods - count - width)
    law = Distribution(Family.F, (float(df[0]), float(df[1])))
    pvalue = float(stats.f.sf(value, *df))
    return TestStatistic("GRS", value, "all alphas are zero", law, pvalue, "gibbons-ross-shanken-1989")
