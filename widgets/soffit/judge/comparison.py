"""Sets of factors side by side, and what each factor adds to the others.

Everything is decimal per period. All sets are held against the same assets over the same sample; otherwise
their figures could not be compared.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from soffit.errors import EstimationError, InputError, nearest
from soffit.estimate.noncentral import nct_interval
from soffit.estimate.regression import ErrorChoice, Regression, regress
from soffit.estimate.sharpe import long_run_error
from soffit.estimate.squared_sharpe import SquaredSharpe, squared_sharpe, unbiased_squared_sharpe
from soffit.estimate.statistic import Distribution, Family, NotApplicable, TestStatistic
from soffit.judge.ceiling import AlphaTable
from soffit.judge.joint import JointAlphas, joint_alphas
from soffit.settings import CeilingForm

__all__ = [
    "FactorSet",
    "Spanning",
    "compare_factor_sets",
    "equal_squared_sharpe",
    "spanning_regressions",
]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class FactorSet:
    """One set of factors, as a model of the assets.

    Parameters
    ----------
    name : str
        Name of the set.
    factors : tuple of str
        Its factors.
    regression : Regression
        The assets on these factors.
    sharpe : SquaredSharpe
        Squared Sharpe ratio of the factors' best combination.
    joint : JointAlphas
        Test that all alphas are zero.
    excluded : TestStatistic or NotApplicable
        GRS test that the set prices the factors of the other sets that it lacks.
    """

    name: str
    factors: tuple[str, ...]
    regression: Regression
    sharpe: SquaredSharpe
    joint: JointAlphas
    excluded: TestStatistic | NotApplicable

    @property
    def mean_abs_alpha(self) -> float:
        """Mean |α| per period."""
        return float(np.abs(self.regression.alpha).mean())

    @property
    def alpha_share(self) -> float | NotApplicable:
        """Mean |α| over mean |mean excess return| (Fama and French 2015 take deviations; here plain means)."""
        unexplained = float(np.abs(self.regression.mean).mean())
        if unexplained == 0.0:
            return NotApplicable("The share of mean returns left over", "every asset's mean return is zero")
        return self.mean_abs_alpha / unexplained

    @cached_property
    def mean_r2(self) -> float:
        """Mean R² over the assets that vary."""
        r2 = self.regression.r2
        known = np.isfinite(r2)
        return float(r2[known].mean()) if known.any() else float("nan")

    @cached_property
    def alphas(self) -> AlphaTable:
        """The alphas as the ceiling takes them, per period."""
        fit, count = self.regression, self.regression.count
        return AlphaTable(
            alpha=fit.alpha,
            sigma=fit.sigma,
            r2=fit.r2,
            total=fit.total,
            t_scale=np.full(count, fit.t_scale),
            df=np.full(count, float(fit.fit.df)),
            theta_f=np.full(count, fit.factors.theta),
        )

    def needed(self, form: CeilingForm) -> float | NotApplicable:
        """Lowest ceiling that would sustain the estimated alphas, per period.

        Parameters
        ----------
        form : CeilingForm
            Which portfolio the ceiling binds: the largest of the assets' needs when taken one by one, θ* when taken
            together.
        """
        if form is CeilingForm.TOGETHER:
            return self.needed_together
        return float(self.alphas.needed(form).max())

    @property
    def needed_together(self) -> float | NotApplicable:
        """Ceiling that all alphas need together, per period: θ*."""
        star = self.joint.theta_star2
        return star if isinstance(star, NotApplicable) else float(np.sqrt(star))


@dataclass(frozen=True, eq=False)
class Spanning:
    """Regressions of each factor on the others.

    Parameters
    ----------
    regressions : tuple of Regression
        One for each factor, on all the others.
    level : float
        Coverage of the intervals.
    """

    regressions: tuple[Regression, ...]
    level: float

    def _each(self, values: list[float]) -> Floats:
        return np.array(values, dtype=float)

    @property
    def alpha(self) -> Floats:
        """What each factor earns beyond the others, per period, shape (K,)."""
        return self._each([float(each.alpha[0]) for each in self.regressions])

    @property
    def alpha_error(self) -> Floats:
        """Standard errors of the alphas, shape (K,)."""
        return self._each([float(each.alpha_error[0]) for each in self.regressions])

    @property
    def t(self) -> Floats:
        """Ratios of the alphas to their errors, shape (K,)."""
        return self._each([float(each.fit.t[0, 0]) for each in self.regressions])

    @property
    def pvalues(self) -> Floats:
        """Two-sided p-values of zero alphas, shape (K,)."""
        return self._each([float(each.fit.pvalues[0, 0]) for each in self.regressions])

    @property
    def r2(self) -> Floats:
        """Share of each factor's variance that the others explain, shape (K,)."""
        return self._each([float(each.r2[0]) for each in self.regressions])

    @property
    def appraisal(self) -> Floats:
        """Appraisal ratios per period, shape (K,)."""
        return self._each([float(each.appraisal[0]) for each in self.regressions])

    @cached_property
    def appraisal_interval(self) -> tuple[Floats, Floats]:
        """Exact intervals of the true appraisal ratios under normal residuals; two arrays of shape (K,)."""
        df = self._each([float(each.fit.df) for each in self.regressions])
        scale = self._each([each.t_scale for each in self.regressions])
        low, high = nct_interval(self.appraisal * scale, df, self.level)
        return low / scale, high / scale

    @property
    def contribution(self) -> Floats:
        """What each factor adds to the others' squared Sharpe ratio in sample, per period, shape (K,).

        ``θf²(all) − θf²(others) = α²/(e'e/T)``: the square of the appraisal ratio with divisor T.
        """
        added = [
            float(each.alpha[0] ** 2 / (each.residuals[:, 0] @ each.residuals[:, 0] / each.periods))
            for each in self.regressions
        ]
        return self._each(added)


def compare_factor_sets(
    returns: Floats,
    factors: Floats,
    names: Sequence[str],
    sets: Mapping[str, Sequence[str]],
    *,
    choice: ErrorChoice | None = None,
    level: float = 0.95,
) -> tuple[FactorSet, ...]:
    """Hold several sets of factors against the same assets.

    Parameters
    ----------
    returns : ndarray, shape (T, N)
        Excess returns of the assets, decimal per period.
    factors : ndarray, shape (T, K)
        Excess returns of every factor that is in any set.
    names : sequence of str
        Names of the columns of `factors`.
    sets : mapping of str to sequence of str
        Named sets; a set may be empty.
    choice : ErrorChoice, optional
        Standard errors of the regressions.
    level : float
        Coverage of the intervals.

    Returns
    -------
    tuple of FactorSet
        In the order of `sets`.

    Raises
    ------
    InputError
        If there is no set, or a set names an unknown factor or one factor twice.
    EstimationError
        If a regression cannot be run.

    References
    ----------
    Barillas and Shanken (2017), Review of Financial Studies 30: which of several models of traded factors is best
    does not depend on the assets, only on how well each prices the other models' factors. Fama and French (2015),
    Journal of Financial Economics 116, for the averages over assets.
    """
    columns = _columns(names, sets)
    union = sorted({column for each in columns.values() for column in each})
    out = []
    for name, chosen in columns.items():
        picked = factors[:, chosen]
        labels = tuple(names[column] for column in chosen)
        regression = regress(returns, picked, choice=choice, names=labels)
        out.append(
            FactorSet(
                name=name,
                factors=labels,
                regression=regression,
                sharpe=squared_sharpe(regression.factors.theta2, len(chosen), len(returns), level),
                joint=joint_alphas(regression),
                excluded=_excluded(factors, chosen, [c for c in union if c not in chosen], labels),
            )
        )
    return tuple(out)


def spanning_regressions(
    factors: Floats, names: Sequence[str], *, choice: ErrorChoice | None = None, level: float = 0.95
) -> Spanning:
    """Regress each factor on all the others.

    Parameters
    ----------
    factors : ndarray, shape (T, K)
        Excess returns of traded factors, decimal per period. With a single factor there are no others: its
        alpha is its mean.
    names : sequence of str
        Their names.
    choice : ErrorChoice, optional
        Standard errors.
    level : float
        Coverage of the intervals.

    Returns
    -------
    Spanning

    Raises
    ------
    EstimationError
        If a factor is a combination of the others, or there are too few periods.
    """
    regressions = []
    for k, name in enumerate(names):
        others = [j for j in range(len(names)) if j != k]
        fitted = regress(factors[:, [k]], factors[:, others], choice=choice, names=[names[j] for j in others])
        if fitted.spanned[0]:
            raise EstimationError(
                f"'{name}' is a combination of the other factors in this sample",
                remedy="leave it out of the factors",
            )
        regressions.append(fitted)
    return Spanning(tuple(regressions), level)


def equal_squared_sharpe(first: Floats, second: Floats, *, lags: int = 0) -> TestStatistic | NotApplicable:
    """Test that two sets of factors, neither within the other, have equal squared Sharpe ratios.

    Parameters
    ----------
    first, second : ndarray, shape (T, K1) and (T, K2)
        Excess returns of the factors of each set, decimal per period.
    lags : int
        Bartlett lags of the long-run variance.

    Returns
    -------
    TestStatistic or NotApplicable
        The standard normal ratio of the difference of the bias-adjusted squared Sharpe ratios to its error. Not
        applicable where the difference has no sampling error, as for equal sets, or where there are too few
        periods for the adjustment.

    Notes
    -----
    With ``u_t = μ̂'Ω̂⁻¹(f_t − μ̂)``, a squared Sharpe ratio has the influence ``2u_t − u_t² + θ̂²``. For nested sets the
    GRS test of the factors left out is the exact test, and this one does not hold.

    References
    ----------
    Barillas, Kan, Robotti and Shanken (2020), Journal of Financial and Quantitative Analysis 55, 1840-1874.
    """
    name = "Difference of squared Sharpe ratios"
    periods = len(first)
    widest = max(first.shape[1], second.shape[1])
    if periods <= widest + 2:
        return NotApplicable(name, f"{periods} periods are too few for {widest} factors")
    values, influences = [], []
    for factors in (first, second):
        theta2, influence = _squared_sharpe_influence(factors)
        values.append(unbiased_squared_sharpe(theta2, factors.shape[1], periods))
        influences.append(influence)
    gap = influences[0] - influences[1]
    if float(np.abs(gap).max(initial=0.0)) < 1e-12:
        return NotApplicable(name, "the two sets have the same best combination")
    error = float(long_run_error(gap[:, None], np.array([lags]), np.array([periods]))[0])
    ratio = (values[0] - values[1]) / error
    law = Distribution(Family.NORMAL)
    return TestStatistic(
        name,
        ratio,
        "the two sets of factors have equal squared Sharpe ratios",
        law,
        law.two_sided(ratio),
        "barillas-kan-robotti-shanken-2020",
    )


def _squared_sharpe_influence(factors: Floats) -> tuple[float, Floats]:
    periods, width = factors.shape
    if width == 0:
        return 0.0, np.zeros(periods)
    mean = factors.mean(axis=0)
    centred = factors - mean
    weights = np.linalg.solve(centred.T @ centred / periods, mean)
    theta2 = float(mean @ weights)
    u = centred @ weights
    return theta2, 2.0 * u - u * u + theta2


def _columns(names: Sequence[str], sets: Mapping[str, Sequence[str]]) -> dict[str, list[int]]:
    if not sets:
        raise InputError("No set of factors came", remedy="name at least one in the setting 'factor_sets'")
    out: dict[str, list[int]] = {}
    for label, members in sets.items():
        for member in members:
            if member not in names:
                raise InputError(
                    f"The factor set '{label}' names '{member}', which is not a factor here",
                    remedy=nearest(member, names),
                )
        if len(set(members)) < len(members):
            raise InputError(f"The factor set '{label}' names a factor twice", remedy="name each factor once")
        out[label] = [list(names).index(member) for member in members]
    return out


def _excluded(
    factors: Floats, chosen: list[int], rest: list[int], labels: tuple[str, ...]
) -> TestStatistic | NotApplicable:
    if not rest:
        return NotApplicable(
            "The test of the excluded factors", "the set holds every factor of the other sets"
        )
    return joint_alphas(regress(factors[:, rest], factors[:, chosen], names=labels)).grs
