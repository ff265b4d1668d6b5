"""What alpha the analyst may use under a Sharpe ceiling.

Three answers, all decimal per period and all conditional on the factors' sample moments:

* a prior that expects the ceiling to be reached, and the alphas and odds that follow from it;
* a hard bound on each alpha, all values within it equally likely beforehand;
* the nearest alphas that satisfy the joint ceiling.

With ``a = (1 + θf²)/T`` the estimates are ``α̂ | Σ ~ N(α, aΣ)``. The prior is ``α | Σ ~ N(0, kΣ)`` with
``k = (s² − θf²)/N``, under which ``E[α'Σ⁻¹α] = s² − θf²``: the squared Sharpe ratio expected of the best
combination is the ceiling's.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from soffit.errors import SettingError
from soffit.estimate.regression import Regression
from soffit.estimate.statistic import NotApplicable
from soffit.judge.ceiling import bound_factor
from soffit.judge.joint import JointAlphas
from soffit.judge.truncated import TruncatedNormal
from soffit.settings import CeilingForm

__all__ = [
    "BoundedAlphas",
    "CeilingPrior",
    "IntervalBasis",
    "ShrunkAlphas",
    "bounded_alphas",
    "nearest_alphas",
    "prior_scale",
    "shrunk_alphas",
]

Floats = npt.NDArray[np.float64]

_BELOW_FACTORS = (
    "the factors alone already reach a Sharpe ratio above the ceiling in this sample; raise the ceiling or leave out "
    "factors"
)


class IntervalBasis(StrEnum):
    """Which posterior the intervals of shrunk alphas come from."""

    TOGETHER = "all assets together"
    ALONE = "each asset alone"


def prior_scale(ceiling: npt.ArrayLike, theta_f2: float, count: int) -> Floats:
    """Prior variance of an alpha over its residual variance.

    Parameters
    ----------
    ceiling : array_like
        s, per period; one or many.
    theta_f2 : float
        Squared Sharpe ratio of the factors' best combination, per period.
    count : int
        N.

    Returns
    -------
    ndarray
        ``k = (s² − θf²)/N``; NaN where s < θf, since the factors alone break such a ceiling.

    Raises
    ------
    SettingError
        If a ceiling is negative or not finite.

    References
    ----------
    Pástor and Stambaugh (1999, 2000) and MacKinlay (1995) for priors that tie alpha to residual risk; Barillas and
    Shanken (2018), Journal of Finance 73, for this k.
    """
    s = np.asarray(ceiling, dtype=np.float64)
    room = [
        float(bound_factor(float(value), np.sqrt(theta_f2), CeilingForm.ON_FACTORS)) ** 2
        for value in s.ravel()
    ]
    return np.asarray(room, dtype=np.float64).reshape(s.shape) / count


@dataclass(frozen=True, eq=False)
class CeilingPrior:
    """What the joint test says under a prior calibrated to a ceiling, for any ceiling.

    Parameters
    ----------
    joint : JointAlphas
        The alphas taken together.
    """

    joint: JointAlphas

    @property
    def error_scale(self) -> float:
        """``a = (1 + θf²)/T``: sampling variance of an alpha over its residual variance."""
        return (1.0 + self.joint.theta_f2) / self.joint.periods

    def weight(self, ceiling: npt.ArrayLike) -> Floats:
        """Share of each estimated alpha that is kept, ``k/(k + a)``; NaN where s < θf.

        One weight for all assets, between 0 (at s = θf) and 1.
        """
        k = prior_scale(ceiling, self.joint.theta_f2, self.joint.count)
        return np.asarray(k / (k + self.error_scale))

    def log_bayes_factor(self, ceiling: npt.ArrayLike) -> Floats | NotApplicable:
        """Log of the Bayes factor for zero alphas against the prior at a ceiling.

        Parameters
        ----------
        ceiling : array_like
            s, per period; one or many.

        Returns
        -------
        ndarray or NotApplicable
            Positive where the data favour zero alphas; 0 at s = θf, where the two say the same; NaN where s < θf.

        Notes
        -----
        ``BF = (1 + W/T)^{−(T−K)/2} (1 + k/a)^{N/2} (1 + a/(a+k) W/T)^{(T−K)/2}`` with ``W/T = Q/(1 + θf²)``, for the
        diffuse prior ``|Σ|^{−(N+1)/2}`` on the residual covariance. Barillas and Shanken (2018), Journal of Finance
        73, 715-754. The exponents are those of that prior with K slopes integrated out; a test compares it with
        Monte Carlo integration over the inverse-Wishart posterior.
        """
        if isinstance(self.joint.quadratic, NotApplicable):
            return NotApplicable("The Bayes factor", self.joint.quadratic.reason)
        ratio = prior_scale(ceiling, self.joint.theta_f2, self.joint.count) / self.error_scale
        spread = self.joint.quadratic / (1.0 + self.joint.theta_f2)
        power = (self.joint.periods - self.joint.width) / 2.0
        return np.asarray(
            power * (np.log1p(spread / (1.0 + ratio)) - np.log1p(spread))
            + self.joint.count / 2.0 * np.log1p(ratio)
        )

    def probability_of_zero(self, ceiling: npt.ArrayLike, prior_odds: float = 1.0) -> Floats | NotApplicable:
        """Posterior probability that all alphas are zero.

        Parameters
        ----------
        ceiling : array_like
            s, per period; one or many.
        prior_odds : float
            Odds on zero alphas before the data.

        Raises
        ------
        SettingError
            If the odds are not a positive number.
        """
        if not (np.isfinite(prior_odds) and prior_odds > 0.0):
            raise SettingError(f"The prior odds are {prior_odds!r}", allowed="a finite number above zero")
        log_factor = self.log_bayes_factor(ceiling)
        if isinstance(log_factor, NotApplicable):
            return NotApplicable("The posterior probability of zero alphas", log_factor.reason)
        return np.asarray(special.expit(log_factor + np.log(prior_odds)))

    @property
    def best_supported(self) -> float | NotApplicable:
        """Ceiling per period whose prior the data support most against zero alphas.

        The Bayes factor is lowest where ``k/a`` is the GRS statistic less one. It is θf where the statistic is one
        or less: then the data favour zero alphas over the prior at every ceiling.
        """
        if isinstance(self.joint.grs, NotApplicable):
            return NotApplicable("The best supported ceiling", self.joint.grs.reason)
        k = self.error_scale * max(self.joint.grs.value - 1.0, 0.0)
        return float(np.sqrt(self.joint.theta_f2 + self.joint.count * k))


@dataclass(frozen=True, eq=False)
class ShrunkAlphas:
    """Posterior alphas under the prior at one ceiling.

    Parameters
    ----------
    ceiling : float
        s, per period.
    weight : float
        Share of each estimate that is kept.
    mean : ndarray, shape (N,)
        Posterior means.
    low, high : ndarray, shape (N,)
        Equal-tailed credible intervals; a point at zero where the weight is zero.
    level : float
        Their probability.
    df : float
        Degrees of freedom of the posterior t distribution.
    basis : IntervalBasis
        All assets together where T − K − N + 1 is one or more, each asset alone otherwise.
    """

    ceiling: float
    weight: float
    mean: Floats
    low: Floats
    high: Floats
    level: float
    df: float
    basis: IntervalBasis


def shrunk_alphas(
    regression: Regression, ceiling: float, *, level: float = 0.95
) -> ShrunkAlphas | NotApplicable:
    """Posterior alphas under the prior calibrated to a ceiling.

    Parameters
    ----------
    regression : Regression
        All assets over one sample.
    ceiling : float
        s, per period.
    level : float
        Probability of the intervals.

    Returns
    -------
    ShrunkAlphas or NotApplicable
        Not applicable where s < θf: the factors alone break such a ceiling.

    Raises
    ------
    SettingError
        If the ceiling or the level is out of range.

    Notes
    -----
    With the diffuse prior ``|Σ|^{−(N+1)/2}`` and flat slopes, ``Σ | data`` is inverse Wishart with T − K degrees of
    freedom and scale ``S = E'E + α̂α̂'/(a+k)``, and each alpha is ``w α̂_i`` plus a t variable with T − K − N + 1
    degrees of freedom and scale ``√(w a S_ii/(T − K − N + 1))``. Where assets outnumber the degrees of freedom each
    asset is taken alone, which leaves T − K of them. An asset without residual risk has prior and posterior zero.
    """
    _refuse_bad_level(level)
    theta_f2, count, periods = regression.factors.theta2, regression.count, regression.periods
    k = float(prior_scale(ceiling, theta_f2, count))
    if np.isnan(k):
        return NotApplicable("The alphas under this ceiling", _BELOW_FACTORS)
    a = (1.0 + theta_f2) / periods
    weight = k / (k + a)
    alpha = np.where(regression.spanned, 0.0, regression.alpha)
    df = periods - regression.width - count + 1
    basis = IntervalBasis.TOGETHER if df >= 1 else IntervalBasis.ALONE
    if basis is IntervalBasis.ALONE:
        df = periods - regression.width
    squares = (regression.residuals**2).sum(axis=0) + alpha**2 / (a + k)
    half = stats.t.ppf(0.5 + level / 2.0, df) * np.sqrt(weight * a * squares / df)
    mean = weight * alpha
    return ShrunkAlphas(float(ceiling), weight, mean, mean - half, mean + half, level, float(df), basis)


@dataclass(frozen=True, eq=False)
class BoundedAlphas:
    """Posterior alphas under a flat prior within a hard bound.

    Parameters
    ----------
    bound : ndarray, shape (N,)
        Largest |α| that the ceiling sustains; NaN where the factors alone break it.
    mean, spread : ndarray, shape (N,)
        Posterior means and standard deviations; NaN where undefined.
    low, high : ndarray, shape (N,)
        Equal-tailed credible intervals, within the bound.
    inside : ndarray, shape (N,)
        Log of the probability that an alpha lies within its bound when nothing bounds it beforehand.
    level : float
        Probability of the intervals.
    """

    bound: Floats
    mean: Floats
    spread: Floats
    low: Floats
    high: Floats
    inside: Floats
    level: float


def bounded_alphas(alpha: Floats, error: Floats, bound: Floats, *, level: float = 0.95) -> BoundedAlphas:
    """Posterior of alphas that cannot exceed a bound.

    Parameters
    ----------
    alpha, error : ndarray, shape (N,)
        Estimates and standard errors.
    bound : ndarray, shape (N,)
        Largest |α|; zero pins an alpha to zero, NaN leaves it undefined.
    level : float
        Probability of the intervals.

    Returns
    -------
    BoundedAlphas

    Raises
    ------
    SettingError
        If the level is out of range.

    Notes
    -----
    A normal likelihood times a flat prior on ``[−bound, bound]`` is a truncated normal distribution; see
    :class:`soffit.judge.truncated.TruncatedNormal` for how far out it holds.
    """
    _refuse_bad_level(level)
    law = TruncatedNormal(alpha, error, bound)
    tail = (1.0 - level) / 2.0
    return BoundedAlphas(
        bound=law.bound,
        mean=law.mean,
        spread=law.spread,
        low=law.quantile(tail),
        high=law.quantile(1.0 - tail),
        inside=law.log_mass,
        level=level,
    )


def nearest_alphas(regression: Regression, joint: JointAlphas, ceiling: float) -> Floats | NotApplicable:
    """Alphas nearest to the estimates that satisfy the joint ceiling.

    Parameters
    ----------
    regression : Regression
        All assets over one sample.
    joint : JointAlphas
        The joint test of the same regression.
    ceiling : float
        s, per period.

    Returns
    -------
    ndarray, shape (N,) or NotApplicable
        ``α̂ · min(1, √((s² − θf²)/Q))``, nearest in the metric of the residual covariance.

    Raises
    ------
    SettingError
        If the ceiling is negative or not finite.
    """
    name = "The nearest alphas under this ceiling"
    room = float(bound_factor(ceiling, np.sqrt(joint.theta_f2), CeilingForm.TOGETHER))
    if np.isnan(room):
        return NotApplicable(name, _BELOW_FACTORS)
    if isinstance(joint.quadratic, NotApplicable):
        return NotApplicable(name, joint.quadratic.reason)
    excess = np.sqrt(joint.quadratic)
    return regression.alpha * (1.0 if excess <= room else room / excess)


def _refuse_bad_level(level: float) -> None:
    if not 0.0 < level < 1.0:
        raise SettingError(f"The interval level is {level!r}", allowed="a number between 0 and 1")
