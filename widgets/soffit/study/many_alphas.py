"""Many alphas at once, with labels: adjusted p-values, hurdles, and the share of true zeros."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import pandas as pd

from soffit.estimate.statistic import NotApplicable
from soffit.judge.multiplicity import (
    USUAL,
    Adjustment,
    Hurdle,
    ManyTests,
    NullShare,
    many_tests,
    stepwise_t_hurdles,
)
from soffit.settings import Settings
from soffit.study.factor_regression import FactorRegression

__all__ = ["ManyAlphas"]

_COLUMNS = {
    Adjustment.BONFERRONI: "p_bonferroni",
    Adjustment.HOLM: "p_holm",
    Adjustment.BENJAMINI_HOCHBERG: "p_bh",
    Adjustment.BENJAMINI_YEKUTIELI: "p_by",
}


@dataclass(frozen=True, eq=False)
class ManyAlphas:
    """The alphas' p-values adjusted for the number of tests.

    Parameters
    ----------
    regression : FactorRegression
        The alphas.
    tests : ManyTests
        Their p-values, adjusted.
    """

    regression: FactorRegression
    tests: ManyTests

    @classmethod
    def of(cls, regression: FactorRegression, settings: Settings) -> ManyAlphas:
        """Adjust the p-values of a regression; the number of tests is the larger of N and the trials stated."""
        pvalues = regression.table["p"].to_numpy(dtype=float)
        return cls(regression, many_tests(pvalues, trials=settings.trials, level=settings.level))

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row an asset: alpha (decimal a year), t, p, p_bonferroni, p_holm, p_bh, p_by, hurdle.

        `hurdle` is the absolute t ratio that the asset must pass under Bonferroni, in its own distribution.
        """
        out = self.regression.table[["alpha", "t", "p"]].copy()
        for method in USUAL:
            out[_COLUMNS[method]] = self.tests.adjusted[method]
        out["hurdle"] = self._hurdles(Hurdle.BONFERRONI)
        return out

    def _hurdles(self, kind: Hurdle) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
        def one(df: float | None) -> float:
            return self.tests.hurdle(kind, df=df)

        uses_t = self.regression.pieces[0][1].fit.uses_t
        return self.regression.per_asset(
            lambda _, fit: np.full(fit.count, one(float(fit.fit.df) if uses_t else None))
        )

    @property
    def hurdle(self) -> float:
        """Absolute t ratio that a single alpha must pass under Bonferroni; the largest if it differs."""
        return float(self.table["hurdle"].max())

    @cached_property
    def single_hurdle(self) -> float:
        """Absolute t ratio that would do for a single test; the largest if it differs."""
        half = self.regression.per_asset(lambda _, fit: fit.fit.half_width(self.tests.level)[:, 0])
        error = self.regression.per_asset(lambda _, fit: fit.alpha_error)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = half / error
        return float(np.nanmax(np.where(error > 0.0, ratio, np.nan), initial=0.0))

    @cached_property
    def stepwise_hurdles(self) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
        """Absolute t ratios that the largest, second largest, … must pass under Benjamini and Hochberg.

        On the fewest degrees of freedom of any asset.
        """
        fits = [fit.fit for _, fit in self.regression.pieces]
        df = float(min(fit.df for fit in fits)) if fits[0].uses_t else None
        return stepwise_t_hurdles(self.tests.count, self.tests.tests, self.tests.level, df=df)

    def names(self, method: Adjustment | None = None) -> tuple[str, ...]:
        """Assets whose alpha differs from zero, the largest |t| first; unadjusted if no method is named."""
        table = self.table.loc[self.tests.rejected(method)]
        return tuple(str(name) for name in table["t"].abs().sort_values(ascending=False, kind="stable").index)

    @property
    def share(self) -> NullShare | NotApplicable:
        """Estimated share of true zero alphas among those at hand."""
        return self.tests.share

    @cached_property
    def summary(self) -> pd.DataFrame:
        """One row a method: what it controls, its count of rejections and which."""
        rows = {
            "unadjusted": {
                "controls": "each test alone",
                "rejected": int(self.tests.rejected().sum()),
                "names": ", ".join(self.names()),
            }
        }
        for method in USUAL:
            rows[str(method)] = {
                "controls": method.controls,
                "rejected": int(self.tests.rejected(method).sum()),
                "names": ", ".join(self.names(method)),
            }
        return pd.DataFrame.from_dict(rows, orient="index")
