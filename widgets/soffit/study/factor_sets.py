"""Factor sets side by side, with labels and annual units, and what each factor adds to the others."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations

import numpy as np
import pandas as pd

from soffit.errors import SettingError, nearest
from soffit.estimate.hac import newey_west_lags
from soffit.estimate.regression import regress
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.intake import Panel
from soffit.judge.ceiling import JointCeiling
from soffit.judge.comparison import (
    FactorSet,
    Spanning,
    compare_factor_sets,
    equal_squared_sharpe,
    spanning_regressions,
)
from soffit.judge.joint import joint_alphas
from soffit.settings import CeilingForm, ErrorType, LagRule, Settings
from soffit.study.factor_regression import error_choice
from soffit.study.sample import Block, Sample

__all__ = ["FactorSets"]

# With more factors than this, sets that grow by one factor at a time are too many to name on one's own.
_MOST_GROWING = 6


@dataclass(frozen=True, eq=False)
class FactorSets:
    """Sets of factors held against the same assets over the same sample. Annual throughout.

    Parameters
    ----------
    block : Block
        Rows and assets in use.
    names : tuple of str
        Factors that are in any set, in the panel's order.
    sets : tuple of FactorSet
        The sets, per period.
    spanning : Spanning
        Each factor on all the others, per period.
    values : ndarray, shape (T, len(names))
        Excess returns of those factors.
    level : float
        Coverage of intervals; 1 − size of tests.
    lags : int
        Bartlett lags in tests between sets.
    periods_per_year : int
        m.
    """

    block: Block
    names: tuple[str, ...]
    sets: tuple[FactorSet, ...]
    spanning: Spanning
    values: np.ndarray[tuple[int, int], np.dtype[np.float64]]
    level: float
    lags: int
    periods_per_year: int

    @classmethod
    def of(cls, panel: Panel, sample: Sample, block: Block, settings: Settings) -> FactorSets:
        """Compare the sets that the settings name, or sets that grow by one factor at a time if they name none.

        Raises
        ------
        SettingError
            If a set names a factor that the panel lacks, or there is no factor at all.
        EstimationError
            If a regression cannot be run, or a factor is a combination of the others.
        """
        known = [str(name) for name in panel.factors.columns]
        chosen = settings.factor_sets or growing_sets(sample.factor_names)
        if not chosen:
            raise SettingError(
                "There is no factor, so there are no factor sets to compare",
                remedy="give the panel traded factors",
            )
        for label, members in chosen.items():
            for member in members:
                if member not in known:
                    raise SettingError(
                        f"The factor set '{label}' names '{member}', which the panel lacks",
                        remedy=nearest(member, known),
                    )
        names = tuple(name for name in known if any(name in members for members in chosen.values()))
        frame = panel.factors.loc[block.dates]
        frame.columns = pd.Index(known)
        values = frame[list(names)].to_numpy(dtype=float)
        choice = error_choice(settings)
        lags = 0
        if settings.error_type is ErrorType.HAC:
            # The automatic rule needs moment series; between sets the rule of thumb stands in for it.
            rule = LagRule.FIXED if settings.lag_rule is LagRule.FIXED else LagRule.RULE_OF_THUMB
            lags = newey_west_lags(rule, len(values), fixed=settings.lags)
        return cls(
            block=block,
            names=names,
            sets=compare_factor_sets(
                block.returns, values, names, chosen, choice=choice, level=settings.level
            ),
            spanning=spanning_regressions(values, names, choice=choice, level=settings.level),
            values=values,
            level=settings.level,
            lags=lags,
            periods_per_year=sample.periods_per_year,
        )

    @property
    def _root(self) -> float:
        return float(np.sqrt(self.periods_per_year))

    def _annual(self, value: float | NotApplicable) -> float:
        return _known(value) * self._root

    def _row(self, each: FactorSet) -> dict[str, object]:
        grs, excluded = each.joint.grs, each.excluded
        unbiased, interval = _known(each.sharpe.unbiased), each.sharpe.ratio_interval
        low, high = (np.nan, np.nan) if isinstance(interval, NotApplicable) else (interval.low, interval.high)
        return {
            "factors": ", ".join(each.factors) or "none",
            "width": len(each.factors),
            "sharpe": self._annual(each.sharpe.ratio),
            "sharpe_unbiased": self._annual(float(np.sqrt(np.maximum(unbiased, 0.0)))),
            "sharpe_low": self._annual(low),
            "sharpe_high": self._annual(high),
            "grs": _value(grs),
            "p": _pvalue(grs),
            "excluded": _value(excluded),
            "excluded_p": _pvalue(excluded),
            "mean_abs_alpha": each.mean_abs_alpha * self.periods_per_year,
            "alpha_share": _known(each.alpha_share),
            "mean_r2": each.mean_r2,
            "needed_alone": self._annual(each.needed(CeilingForm.ALONE)),
            "needed_on_factors": self._annual(each.needed(CeilingForm.ON_FACTORS)),
            "needed_together": self._annual(each.needed(CeilingForm.TOGETHER)),
            "lowest": self._annual(JointCeiling(each.joint, self.level).lowest),
        }

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row a set, annual.

        Columns: factors, width (K); sharpe (in sample), sharpe_unbiased, sharpe_low, sharpe_high (exact
        interval); grs, p (alphas of the assets); excluded, excluded_p (GRS of the other sets' factors on this set);
        mean_abs_alpha (decimal), alpha_share (of mean |mean excess return|), mean_r2; needed_alone,
        needed_on_factors (the largest of the assets), needed_together; lowest (ceiling not rejected). NaN where
        a number does not exist.
        """
        return pd.DataFrame.from_dict({each.name: self._row(each) for each in self.sets}, orient="index")

    @cached_property
    def spanning_table(self) -> pd.DataFrame:
        """One row a factor, on all the others.

        Columns: alpha, alpha_error (decimal a year), t, p, r2, appraisal, appraisal_low, appraisal_high (annual,
        exact interval), contribution (to the annual squared Sharpe ratio, in sample).
        """
        found, m = self.spanning, self.periods_per_year
        low, high = found.appraisal_interval
        columns = {
            "alpha": found.alpha * m,
            "alpha_error": found.alpha_error * m,
            "t": found.t,
            "p": found.pvalues,
            "r2": found.r2,
            "appraisal": found.appraisal * self._root,
            "appraisal_low": low * self._root,
            "appraisal_high": high * self._root,
            "contribution": found.contribution * m,
        }
        return pd.DataFrame(columns, index=list(self.names))

    @cached_property
    def pairs(self) -> pd.DataFrame:
        """One row a pair of sets with different factors.

        Columns: first, second; difference (first less second, bias-adjusted squared Sharpe ratios, annual); test
        (GRS of the factors left out where one set is within the other, else the normal test of Barillas, Kan,
        Robotti and Shanken 2020); distribution, statistic, p.
        """
        rows = []
        for first, second in combinations(self.sets, 2):
            if set(first.factors) == set(second.factors):
                continue
            test = self._between(first, second)
            gap = _known(first.sharpe.unbiased) - _known(second.sharpe.unbiased)
            rows.append(
                {
                    "first": first.name,
                    "second": second.name,
                    "difference": gap * self.periods_per_year,
                    "test": test.name,
                    "distribution": "" if isinstance(test, NotApplicable) else test.distribution.label,
                    "statistic": _value(test),
                    "p": _pvalue(test),
                }
            )
        columns = ["first", "second", "difference", "test", "distribution", "statistic", "p"]
        return pd.DataFrame(rows, columns=columns)

    def _between(self, first: FactorSet, second: FactorSet) -> TestStatistic | NotApplicable:
        own, other = set(first.factors), set(second.factors)
        if own < other or other < own:
            small, large = sorted((own, other), key=len)
            rest = [self.names.index(name) for name in self.names if name in large - small]
            held = [self.names.index(name) for name in self.names if name in small]
            return joint_alphas(regress(self.values[:, rest], self.values[:, held])).grs
        sides = (
            self.values[:, [self.names.index(name) for name in each.factors]] for each in (first, second)
        )
        return equal_squared_sharpe(*sides, lags=self.lags)

    @property
    def best(self) -> str:
        """Name of the set with the highest bias-adjusted squared Sharpe ratio."""
        return max(self.sets, key=lambda each: np.nan_to_num(_known(each.sharpe.unbiased), nan=-np.inf)).name


def growing_sets(names: tuple[str, ...]) -> Mapping[str, tuple[str, ...]]:
    """Sets that grow by one factor at a time; the first and all of them where there are many."""
    sizes = range(1, len(names) + 1) if len(names) <= _MOST_GROWING else (1, len(names))

    def label(size: int) -> str:
        if size <= 3:
            return " + ".join(names[:size])
        return f"all {size} factors" if size == len(names) else f"first {size} factors"

    return {label(size): names[:size] for size in sizes}


def _known(value: float | NotApplicable) -> float:
    return float("nan") if isinstance(value, NotApplicable) else float(value)


def _value(test: TestStatistic | NotApplicable) -> float:
    return float("nan") if isinstance(test, NotApplicable) else test.value


def _pvalue(test: TestStatistic | NotApplicable) -> float:
    return float("nan") if isinstance(test, NotApplicable) else test.pvalue
