"""The ceiling with labels and annual units: a map that any ceiling can be read off, and one reading."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.estimate.statistic import Interval, NotApplicable
from soffit.judge.ceiling import AssetVerdicts, JointCeiling, Status, bound_factor
from soffit.judge.multiplicity import Adjustment
from soffit.settings import CeilingForm
from soffit.study.factor_regression import FactorRegression
from soffit.study.joint_test import JointTest

__all__ = ["CeilingFacts", "CeilingMap", "CeilingVerdict"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class CeilingFacts:
    """What a sentence about one ceiling needs; Sharpe ratios are annual.

    Parameters
    ----------
    ceiling : float
        S.
    form : CeilingForm
        Which portfolio the ceiling binds.
    count : int
        Number of assets.
    exceeding : tuple of str
        Assets whose estimated alpha does not fit, the furthest out first.
    outside : int
        How many of them do not fit with their whole interval.
    undefined : bool
        Whether the factors alone break the ceiling, so that no alpha can be judged on top of them.
    pvalue : float or NotApplicable
        Joint p-value of a best Sharpe ratio of S or less.
    fits_together : bool or NotApplicable
        Whether the estimated alphas together satisfy the ceiling.
    lowest : float or NotApplicable
        Lowest ceiling not rejected.
    rejects_zero : bool
        Whether the GRS test rejects zero alphas at this size.
    size : float
        Size of the test, 1 − level.
    factors : float
        Sharpe ratio of the factors' best combination.
    """

    ceiling: float
    form: CeilingForm
    count: int
    exceeding: tuple[str, ...]
    outside: int
    undefined: bool
    pvalue: float | NotApplicable
    fits_together: bool | NotApplicable
    lowest: float | NotApplicable
    rejects_zero: bool
    size: float
    factors: float


@dataclass(frozen=True, eq=False)
class CeilingMap:
    """All that the alphas say about ceilings, before one is named. Annual throughout.

    Parameters
    ----------
    regression : FactorRegression
        The alphas.
    joint : JointTest
        The alphas together.
    trials : int
        Strategies or specifications tried in all; enters the adjusted p-values.
    """

    regression: FactorRegression
    joint: JointTest
    trials: int = 1
    _known_pvalues: dict[bytes, Floats | NotApplicable] = field(default_factory=dict, repr=False)

    @property
    def _root(self) -> float:
        return float(np.sqrt(self.regression.periods_per_year))

    @cached_property
    def joint_ceiling(self) -> JointCeiling:
        """The joint test of a ceiling, per period."""
        return JointCeiling(self.joint.alphas, self.regression.level)

    @cached_property
    def lowest(self) -> float | NotApplicable:
        """Lowest annual ceiling that the data do not reject at 1 − level."""
        value = self.joint_ceiling.lowest
        return value if isinstance(value, NotApplicable) else value * self._root

    @cached_property
    def interval(self) -> Interval | NotApplicable:
        """Interval of the best annual Sharpe ratio of factors and assets."""
        found = self.joint_ceiling.interval
        if isinstance(found, NotApplicable):
            return found
        return Interval(found.low * self._root, found.high * self._root, found.level)

    def needed(self, form: CeilingForm) -> pd.Series[float]:
        """Lowest annual ceiling that would sustain each estimated alpha."""
        values = self.regression.alphas.needed(form) * self._root
        return pd.Series(values, index=self.regression.sample.assets, name="needed ceiling")

    def thresholds(self, form: CeilingForm) -> tuple[Floats, Floats, Floats]:
        """Annual ceilings at which the assets change status.

        Returns
        -------
        defined_from, outside_below, inside_from : ndarray, shape (N,)
            Undefined for S < `defined_from`; then outside for S < `outside_below`, inside for
            S ≥ `inside_from`, straddling between.
        """
        below, inside = self.regression.alphas.thresholds(form)
        theta = self.regression.alphas.theta_f * (form is not CeilingForm.ALONE)
        return theta * self._root, below * self._root, inside * self._root

    def factor(self, ceilings: npt.ArrayLike, form: CeilingForm) -> Floats:
        """Largest annual appraisal ratio that each annual ceiling sustains; NaN where undefined."""
        theta = self.joint.factors_sharpe
        each = [bound_factor(float(s), theta, form) for s in np.atleast_1d(np.asarray(ceilings, dtype=float))]
        return np.array(each, dtype=float)

    def pvalues(self, ceilings: npt.ArrayLike) -> Floats | NotApplicable:
        """Joint p-values of annual ceilings; those of a whole slider are kept, since they take a moment."""
        values = np.asarray(ceilings, dtype=float)
        key = values.tobytes()
        if key not in self._known_pvalues:
            found = self.joint_ceiling.pvalue(values / self._root)
            if len(values) == 1:
                return found
            self._known_pvalues[key] = found
        return self._known_pvalues[key]

    def at(self, ceiling: float, form: CeilingForm) -> CeilingVerdict:
        """Read the map at one annual ceiling.

        Raises
        ------
        SettingError
            If the ceiling is negative or not a number.
        """
        return CeilingVerdict(self, float(ceiling), self.regression.alphas.at(ceiling / self._root, form))

    def facts(self, ceilings: Sequence[float] | Floats, form: CeilingForm) -> list[CeilingFacts]:
        """What a sentence needs at each of many annual ceilings; quick enough for every step of a slider."""
        ceilings = np.asarray(ceilings, dtype=float)
        needed = self.needed(form).to_numpy()
        order = np.argsort(-needed, kind="stable")
        names = [str(name) for name in self.regression.sample.assets[order]]
        ranked = -needed[order]
        below_sorted = np.sort(self.thresholds(form)[1])
        defined = 0.0 if form is CeilingForm.ALONE else self.joint.factors_sharpe
        exceeding = np.searchsorted(ranked, -ceilings, side="left")
        outside = len(needed) - np.searchsorted(below_sorted, ceilings, side="right")
        pvalues = self.pvalues(ceilings)
        star, grs = self.joint.combined_sharpe, self.joint.grs
        size = 1.0 - self.regression.level
        return [
            CeilingFacts(
                ceiling=float(s),
                form=form,
                count=len(needed),
                exceeding=tuple(names[: exceeding[i]]),
                outside=int(outside[i]),
                undefined=bool(s < defined * (1.0 - 1e-12)),
                pvalue=pvalues if isinstance(pvalues, NotApplicable) else float(pvalues[i]),
                fits_together=star if isinstance(star, NotApplicable) else bool(star <= s * (1.0 + 1e-12)),
                lowest=self.lowest,
                rejects_zero=not isinstance(grs, NotApplicable) and grs.pvalue < size,
                size=size,
                factors=self.joint.factors_sharpe,
            )
            for i, s in enumerate(ceilings)
        ]


@dataclass(frozen=True, eq=False)
class CeilingVerdict:
    """Every alpha under one ceiling, with labels; annual.

    Parameters
    ----------
    map : CeilingMap
        What it was read off.
    ceiling : float
        S, annual.
    verdicts : AssetVerdicts
        The same per period, without labels.
    """

    map: CeilingMap
    ceiling: float
    verdicts: AssetVerdicts

    @property
    def form(self) -> CeilingForm:
        """Which portfolio the ceiling binds."""
        return self.verdicts.form

    def _series(self, values: npt.ArrayLike, name: str) -> pd.Series[float]:
        return pd.Series(np.asarray(values), index=self.map.regression.sample.assets, name=name)

    @cached_property
    def needed(self) -> pd.Series[float]:
        """Lowest ceiling that would sustain each estimated alpha."""
        return self.map.needed(self.form)

    @cached_property
    def bound(self) -> pd.Series[float]:
        """Largest |α| that this ceiling sustains, decimal a year; NaN where undefined."""
        return self._series(self.verdicts.bound * self.map.regression.periods_per_year, "bound")

    @cached_property
    def status(self) -> pd.Series[str]:
        """Inside, straddles, outside or undefined."""
        return self._series([str(status) for status in self.verdicts.status], "status")  # type: ignore[return-value]

    @cached_property
    def pvalue(self) -> float | NotApplicable:
        """Joint p-value of a best Sharpe ratio of S or less."""
        values = self.map.pvalues([self.ceiling])
        return values if isinstance(values, NotApplicable) else float(values[0])

    @cached_property
    def fits_together(self) -> bool | NotApplicable:
        """Whether the estimated alphas together satisfy ``α'Σ⁻¹α ≤ s² − θf²``."""
        return self.facts.fits_together

    @property
    def lowest(self) -> float | NotApplicable:
        """Lowest ceiling that the data do not reject at 1 − level."""
        return self.map.lowest

    @cached_property
    def facts(self) -> CeilingFacts:
        """What a sentence needs."""
        return self.map.facts([self.ceiling], self.form)[0]

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row an asset, annual.

        Columns: alpha, alpha_low, alpha_high, sigma, r2, appraisal, appraisal_low, appraisal_high, needed,
        bound, status, p (exact, of ``|AR|`` at most the bound), p_holm, p_by, periods.
        """
        regression = self.map.regression.table
        kept = [
            "alpha",
            "alpha_low",
            "alpha_high",
            "sigma",
            "r2",
            "appraisal",
            "appraisal_low",
            "appraisal_high",
        ]
        out = regression[kept].copy()
        out["needed"] = self.needed
        out["bound"] = self.bound
        out["status"] = self.status
        out["p"] = self.verdicts.pvalues
        out["p_holm"] = self.verdicts.adjusted(Adjustment.HOLM, trials=self.map.trials)
        out["p_by"] = self.verdicts.adjusted(Adjustment.BENJAMINI_YEKUTIELI, trials=self.map.trials)
        out["periods"] = regression["periods"]
        return out

    def count(self, status: Status) -> int:
        """How many assets have a status."""
        return int((self.status == str(status)).sum())
