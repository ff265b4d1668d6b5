"""The Sharpe ceiling held against the alphas.

A market whose best Sharpe ratio is s sustains ``|α| ≤ s σ`` for an asset hedged with its own betas, and
``|α| ≤ σ √(s² − θf²)`` on top of what the factors already earn; all assets together satisfy
``α'Σ⁻¹α ≤ s² − θf²``. Everything here is decimal per period; everything is conditional on the factors'
sample moments, as the GRS test is.

The bound is the volatility bound of Hansen and Jagannathan (1991) turned around; limits on Sharpe ratios as
limits on deviations from a factor model go back to Ross (1976), MacKinlay (1995) and Cochrane and
Saá-Requejo (2000).
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from functools import cached_property

import numpy as np
import numpy.typing as npt

from soffit.errors import SettingError
from soffit.estimate.noncentral import ncf_interval, ncf_lambda_at, ncf_sf, nct_abs_sf, nct_interval
from soffit.estimate.statistic import Interval, NotApplicable
from soffit.judge.joint import JointAlphas
from soffit.judge.multiplicity import Adjustment, adjusted_pvalues
from soffit.settings import CeilingForm

__all__ = ["AlphaTable", "AssetVerdicts", "JointCeiling", "Status", "bound_factor", "largest_sharpe"]

Floats = npt.NDArray[np.float64]


class Status(StrEnum):
    """How an alpha stands to a ceiling, sampling error counted."""

    INSIDE = "inside"
    STRADDLES = "straddles"
    OUTSIDE = "outside"
    UNDEFINED = "undefined"


def bound_factor(ceiling: float, theta_f: npt.ArrayLike, form: CeilingForm) -> Floats:
    """Largest appraisal ratio that a ceiling sustains, per period.

    Parameters
    ----------
    ceiling : float
        s, per period.
    theta_f : array_like
        Sharpe ratio of the factors' best combination, per period.
    form : CeilingForm
        Which portfolio the ceiling binds. Taken together, the largest alpha that one asset may have is the
        same as on top of the factors.

    Returns
    -------
    ndarray
        s, or √(s² − θf²); NaN where s < θf, since the factors alone break such a ceiling.

    Raises
    ------
    SettingError
        If the ceiling is negative or not a number.
    """
    _refuse_bad_ceiling(ceiling)
    theta = np.asarray(theta_f, dtype=float)
    if form is CeilingForm.ALONE:
        return np.full(theta.shape, float(ceiling))
    room = ceiling**2 - theta**2
    # A ceiling typed as the factors' own ratio must not become undefined by a rounding of the square.
    room = np.where(np.abs(room) <= 1e-12 * max(ceiling**2, 1e-300), 0.0, room)
    return np.sqrt(np.where(room >= 0, room, np.nan))


def _refuse_bad_ceiling(ceiling: float) -> None:
    if not (np.isfinite(ceiling) and ceiling >= 0):
        raise SettingError(f"The Sharpe ceiling is {ceiling!r}", allowed="a finite number, zero or above")


@dataclass(frozen=True, eq=False)
class AlphaTable:
    """The alphas with what any ceiling needs to know of them; independent of the ceiling.

    Parameters
    ----------
    alpha, sigma, r2, total : ndarray, shape (N,)
        Intercepts, residual and total volatilities per period, and R².
    t_scale : ndarray, shape (N,)
        √(T/(1 + θf²)) of each asset's own sample.
    df : ndarray, shape (N,)
        T − K − 1.
    theta_f : ndarray, shape (N,)
        Sharpe ratio of the factors over each asset's own sample, per period.
    level : float
        Coverage of the intervals.
    """

    alpha: Floats
    sigma: Floats
    r2: Floats
    total: Floats
    t_scale: Floats
    df: Floats
    theta_f: Floats
    level: float = 0.95

    @cached_property
    def appraisal(self) -> Floats:
        """α/σ per period; ±inf for an alpha without residual risk, 0 where neither is there."""
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = self.alpha / self.sigma
        # Without residual risk, an alpha below rounding is none.
        nothing = (self.sigma == 0) & (np.abs(self.alpha) <= 1e-12 * np.maximum(self.total, 1e-300))
        return np.where(nothing, 0.0, ratio)

    @cached_property
    def interval(self) -> tuple[Floats, Floats]:
        """Exact intervals of the true appraisal ratios, by inversion of the noncentral t distribution."""
        risky = self.sigma > 0
        low, high = self.appraisal.copy(), self.appraisal.copy()
        if risky.any():
            t = self.appraisal[risky] * self.t_scale[risky]
            below, above = nct_interval(t, self.df[risky], self.level)
            low[risky], high[risky] = below / self.t_scale[risky], above / self.t_scale[risky]
        return low, high

    def needed(self, form: CeilingForm) -> Floats:
        """Lowest ceiling that would sustain each estimated alpha, per period, shape (N,)."""
        return self._in_form(np.abs(self.appraisal), form)

    def thresholds(self, form: CeilingForm) -> tuple[Floats, Floats]:
        """Ceilings at which each asset's status changes, per period.

        Returns
        -------
        outside_below, inside_from : ndarray, shape (N,)
            Outside for s < `outside_below`, inside for s ≥ `inside_from`, straddling between them.
        """
        low, high = self.interval
        smallest = np.where((low <= 0) & (high >= 0), 0.0, np.minimum(np.abs(low), np.abs(high)))
        largest = np.maximum(np.abs(low), np.abs(high))
        return self._in_form(smallest, form), self._in_form(largest, form)

    def _in_form(self, ratio: Floats, form: CeilingForm) -> Floats:
        return ratio if form is CeilingForm.ALONE else np.sqrt(ratio**2 + self.theta_f**2)

    def at(self, ceiling: float, form: CeilingForm) -> AssetVerdicts:
        """Hold one ceiling against every alpha.

        Parameters
        ----------
        ceiling : float
            s, per period.
        form : CeilingForm
            Which portfolio the ceiling binds.
        """
        return AssetVerdicts(self, float(ceiling), form, bound_factor(ceiling, self.theta_f, form))


@dataclass(frozen=True, eq=False)
class AssetVerdicts:
    """Each alpha under one ceiling.

    Parameters
    ----------
    table : AlphaTable
        The alphas.
    ceiling : float
        s, per period.
    form : CeilingForm
        Which portfolio the ceiling binds.
    factor : ndarray, shape (N,)
        Largest appraisal ratio the ceiling sustains; NaN where the factors alone break it.
    """

    table: AlphaTable
    ceiling: float
    form: CeilingForm
    factor: Floats

    @cached_property
    def bound(self) -> Floats:
        """Largest |α| that the ceiling sustains, per period; NaN where undefined."""
        return self.factor * self.table.sigma

    @cached_property
    def status(self) -> npt.NDArray[np.object_]:
        """A :class:`Status` for each asset."""
        below, inside = self.table.thresholds(self.form)
        codes = np.select(
            [np.isnan(self.factor), self.ceiling < below, self.ceiling >= inside], [0, 1, 2], default=3
        )
        names = (Status.UNDEFINED, Status.OUTSIDE, Status.INSIDE, Status.STRADDLES)
        return np.fromiter((names[code] for code in codes), dtype=object, count=len(codes))

    @cached_property
    def exceeds(self) -> npt.NDArray[np.bool_]:
        """Whether the estimated alpha itself, sampling error aside, is above the bound."""
        return np.asarray(self.table.needed(self.form) > self.ceiling) & ~np.isnan(self.factor)

    @cached_property
    def pvalues(self) -> Floats:
        """Exact p-values of ``|AR| ≤ bound``: P(|t'| ≥ |t|) at the bound's noncentrality, or NaN."""
        table = self.table
        p = np.full(len(self.factor), np.nan)
        p[(table.sigma == 0) & ~np.isnan(self.factor)] = 1.0
        p[(table.sigma == 0) & (np.abs(table.appraisal) > self.factor)] = 0.0
        usable = (table.sigma > 0) & ~np.isnan(self.factor)
        if usable.any():
            t = table.appraisal[usable] * table.t_scale[usable]
            p[usable] = nct_abs_sf(np.abs(t), table.df[usable], self.factor[usable] * table.t_scale[usable])
        return p

    def adjusted(self, method: Adjustment, *, trials: int = 1) -> Floats:
        """P-values adjusted over the assets, or over `trials` where more than the assets were tried."""
        return adjusted_pvalues(self.pvalues, method, trials=trials)


def largest_sharpe(theta_f2: float, noncentrality: float, periods: int) -> float:
    """θ* per period from the noncentrality λ = T(θ*² − θf²)/(1 + θf²) of the GRS statistic."""
    return float(np.sqrt(theta_f2 + noncentrality * (1.0 + theta_f2) / periods))


@dataclass(frozen=True, eq=False)
class JointCeiling:
    """The ceiling held against all alphas together.

    Parameters
    ----------
    joint : JointAlphas
        The joint test.
    level : float
        1 − size of the test, and coverage of the interval.
    """

    joint: JointAlphas
    level: float = 0.95

    def noncentrality(self, ceiling: npt.ArrayLike) -> Floats:
        """λ(s) = T max(s² − θf², 0)/(1 + θf²)."""
        s = np.asarray(ceiling, dtype=float)
        room = np.maximum(s**2 - self.joint.theta_f2, 0.0)
        return self.joint.periods * room / (1.0 + self.joint.theta_f2)

    def pvalue(self, ceiling: npt.ArrayLike) -> Floats | NotApplicable:
        """p(s) of H0: θ*² ≤ s², for one ceiling or many, per period.

        At s ≤ θf it is the p-value of the GRS test; it rises to 1 with s.
        """
        grs = self.joint.grs
        if isinstance(grs, NotApplicable):
            return grs
        for s in np.atleast_1d(np.asarray(ceiling, dtype=float)):
            _refuse_bad_ceiling(float(s))
        return ncf_sf(grs.value, *self.joint.df, self.noncentrality(ceiling))

    @cached_property
    def lowest(self) -> float | NotApplicable:
        """Lowest ceiling per period that is not rejected at 1 − level; θf if none above it is."""
        grs = self.joint.grs
        if isinstance(grs, NotApplicable):
            return grs
        shift = ncf_lambda_at(grs.value, *self.joint.df, 1.0 - self.level)
        return largest_sharpe(self.joint.theta_f2, shift, self.joint.periods)

    @cached_property
    def interval(self) -> Interval | NotApplicable:
        """Equal-tailed interval of θ*, per period, by inversion of the noncentral F distribution."""
        grs = self.joint.grs
        if isinstance(grs, NotApplicable):
            return grs
        low, high = ncf_interval(grs.value, *self.joint.df, self.level)
        theta_f2, periods = self.joint.theta_f2, self.joint.periods
        return Interval(
            largest_sharpe(theta_f2, low, periods), largest_sharpe(theta_f2, high, periods), self.level
        )

    def fits(self, ceiling: float) -> bool | NotApplicable:
        """Whether the estimated alphas together satisfy ``α'Σ⁻¹α ≤ s² − θf²``."""
        star = self.joint.theta_star2
        if isinstance(star, NotApplicable):
            return star
        return bool(star <= ceiling**2 * (1.0 + 1e-12))
