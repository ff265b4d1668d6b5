"""Sharpe ratios with labels and annual units: every factor and asset, the factors together, and differences."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.errors import SettingError, nearest
from soffit.estimate.sharpe import (
    SharpeErrors,
    SharpeRatios,
    aggregation_factor,
    annual_ratio,
    autocorrelations,
    sharpe_ratios,
)
from soffit.estimate.sharpe_difference import (
    DifferenceErrors,
    SharpeDifference,
    bootstrap_difference,
    sharpe_difference,
)
from soffit.estimate.squared_sharpe import SquaredSharpe, squared_sharpe
from soffit.estimate.statistic import Interval, NotApplicable, TestStatistic
from soffit.estimate.track_record import deflated_benchmark, minimum_track_record, probabilistic_sharpe
from soffit.settings import Histories, Settings
from soffit.study.joint_test import JointTest
from soffit.study.sample import Sample

__all__ = ["SharpeGap", "SharpeTable"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class SharpeTable:
    """Sharpe ratios of every factor and asset, and of the factors' best combination.

    Ratios of single series divide by the standard deviation with T − 1, as the trade does; the factors' best
    combination divides by T, as the joint test does. All properties are annual.

    Parameters
    ----------
    sample : Sample
        What was measured.
    names : tuple of str
        The factors, then the assets.
    ratios : SharpeRatios
        The same series per period.
    autocorrelation : ndarray, shape (L, n)
        Autocorrelations to lag L.
    squared : SquaredSharpe
        The factors' best combination, per period.
    tests : int
        Number of trials that deflated ratios assume: the larger of the number of assets and the trials stated.
    level : float
        Coverage of the intervals.
    """

    sample: Sample
    names: tuple[str, ...]
    ratios: SharpeRatios
    autocorrelation: Floats
    squared: SquaredSharpe
    tests: int
    level: float

    @classmethod
    def of(cls, sample: Sample, joint: JointTest, settings: Settings) -> SharpeTable:
        """Measure the series of a sample, over the rows that its regressions use.

        Raises
        ------
        EstimationError
            If there are too few rows, or more fixed lags than rows.
        """
        values, own = _series(sample)
        periods = np.isfinite(values).sum(axis=0)
        # Autocorrelations beyond a quarter of the sample say nothing (common practice, after Box and Jenkins).
        depth = max(min(sample.periods_per_year - 1, int(periods.min()) // 4), 1)
        alphas = joint.alphas
        return cls(
            sample=sample,
            names=(*sample.factor_names, *(str(name) for name in sample.assets)),
            ratios=sharpe_ratios(values, lag_rule=settings.lag_rule, lags=settings.lags, own_history=own),
            autocorrelation=autocorrelations(values, depth, own_history=own),
            squared=squared_sharpe(alphas.theta_f2, alphas.width, alphas.periods, settings.level),
            tests=max(len(sample.assets), settings.trials),
            level=settings.level,
        )

    @property
    def _root(self) -> float:
        return float(np.sqrt(self.sample.periods_per_year))

    @cached_property
    def ratio(self) -> pd.Series[float]:
        """Sharpe ratios; NaN for a constant series."""
        return pd.Series(
            annual_ratio(self.ratios.ratio, self.sample.periods_per_year), index=list(self.names)
        )

    @property
    def factors(self) -> float:
        """Sharpe ratio of the factors' best combination, in sample."""
        return self.squared.ratio * self._root

    @property
    def factors_unbiased(self) -> float | NotApplicable:
        """Root of the unbiased squared Sharpe ratio of the factors; zero where that is negative."""
        value = self.squared.unbiased
        return value if isinstance(value, NotApplicable) else float(np.sqrt(max(value, 0.0))) * self._root

    @property
    def factors_interval(self) -> Interval | NotApplicable:
        """Exact interval of the factors' best Sharpe ratio."""
        found = self.squared.ratio_interval
        if isinstance(found, NotApplicable):
            return found
        return Interval(found.low * self._root, found.high * self._root, found.level)

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row a series, annual.

        Columns: role (factor or asset); mean, volatility (decimal); sharpe; error, low, high (HAC);
        exact_low, exact_high (noncentral t); error_normal (Lo), error_iid (Mertens); aggregated (times
        Lo's η from the sample autocorrelations instead of √m); autocorrelation (first); skewness, kurtosis;
        above_zero (probabilistic Sharpe ratio at zero); deflated (of the assets, at the best of `tests` skill-less
        trials); record (years that the probabilistic ratio needs to reach the level); lags; periods.
        """
        m, root, found = self.sample.periods_per_year, self._root, self.ratios
        moments = found.moments
        low, high = found.interval(self.level)
        exact_low, exact_high = found.exact_interval(self.level)
        columns: dict[str, npt.ArrayLike] = {
            "role": ["factor"] * len(self.sample.factor_names) + ["asset"] * len(self.sample.assets),
            "mean": moments.mean * m,
            "volatility": moments.deviation * root,
            "sharpe": self.ratio.to_numpy(),
            "error": found.error() * root,
            "low": low * root,
            "high": high * root,
            "exact_low": exact_low * root,
            "exact_high": exact_high * root,
            "error_normal": found.error(SharpeErrors.IID_NORMAL) * root,
            "error_iid": found.error(SharpeErrors.IID) * root,
            "aggregated": found.ratio * aggregation_factor(m, self.autocorrelation),
            "autocorrelation": self.autocorrelation[0],
            "skewness": moments.skewness,
            "kurtosis": moments.kurtosis,
            **self._track_records(),
            "lags": found.lags,
            "periods": moments.periods,
        }
        return pd.DataFrame(columns, index=list(self.names))

    def _track_records(self) -> dict[str, Floats]:
        moments, ratio = self.ratios.moments, self.ratios.ratio
        shape = {"skewness": moments.skewness, "kurtosis": moments.kurtosis}
        above = probabilistic_sharpe(ratio, moments.periods, **shape)
        # Without skill a ratio varies across trials by its sampling variance, 1/(T − 1).
        hurdle = deflated_benchmark(self.tests, 1.0) / np.sqrt(moments.periods - 1.0)
        deflated = probabilistic_sharpe(ratio, moments.periods, benchmark=hurdle, **shape)
        deflated[: len(self.sample.factor_names)] = np.nan
        confidence = max(self.level, 0.5 + 1e-9)
        record = minimum_track_record(ratio, confidence=confidence, **shape) / self.sample.periods_per_year
        return {
            "above_zero": above,
            "deflated": deflated,
            "record": np.where(np.isnan(ratio), np.nan, record),
        }


@dataclass(frozen=True, eq=False)
class SharpeGap:
    """The Sharpe ratio of one series less that of another; annual.

    Over the common sample, or under own histories over the rows that both have.

    Parameters
    ----------
    first, second : str
        The series.
    found : SharpeDifference
        The same per period, divisor T.
    bootstrap : TestStatistic or NotApplicable
        Studentised block bootstrap test of equal ratios.
    level : float
        Coverage of the interval.
    periods_per_year : int
        m.
    """

    first: str
    second: str
    found: SharpeDifference
    bootstrap: TestStatistic | NotApplicable
    level: float
    periods_per_year: int

    @classmethod
    def of(cls, sample: Sample, first: str, second: str, settings: Settings) -> SharpeGap:
        """Compare two series of a sample, factors or assets.

        Raises
        ------
        SettingError
            If a name is not a factor or asset of the sample.
        EstimationError
            If the two share too few rows.
        """
        known = [*sample.factor_names, *(str(name) for name in sample.assets)]
        for name in (first, second):
            if name not in known:
                raise SettingError(
                    f"There is no factor or asset '{name}' in this sample", remedy=nearest(name, known)
                )
        values = _series(sample)[0][:, [known.index(first), known.index(second)]]
        values = values[np.isfinite(values).all(axis=1)]
        return cls(
            first=first,
            second=second,
            found=sharpe_difference(
                values[:, 0], values[:, 1], lag_rule=settings.lag_rule, lags=settings.lags
            ),
            bootstrap=bootstrap_difference(
                values[:, 0],
                values[:, 1],
                draws=settings.bootstrap_draws,
                seed=settings.seed,
                lag_rule=settings.lag_rule,
                lags=settings.lags,
            ),
            level=settings.level,
            periods_per_year=sample.periods_per_year,
        )

    @property
    def difference(self) -> float:
        """First less second, a year."""
        return float(annual_ratio(self.found.difference[0], self.periods_per_year))

    @property
    def interval(self) -> Interval:
        """Asymptotic interval with HAC errors, a year."""
        low, high = self.found.interval(self.level)
        bounds = annual_ratio(np.array([low[0], high[0]]), self.periods_per_year)
        return Interval(float(bounds[0]), float(bounds[1]), self.level)

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row a test of equal ratios: statistic, error (annual), p."""
        rows = {}
        for label, kind in (
            ("Jobson-Korkie-Memmel", DifferenceErrors.MEMMEL),
            ("Ledoit-Wolf HAC", DifferenceErrors.HAC),
        ):
            error = float(annual_ratio(self.found.error(kind)[0], self.periods_per_year))
            rows[label] = {
                "statistic": float(self.found.z(kind)[0]),
                "error": error,
                "p": float(self.found.pvalues(kind)[0]),
            }
        boot = self.bootstrap
        there = not isinstance(boot, NotApplicable)
        rows["Ledoit-Wolf bootstrap"] = {
            "statistic": boot.value if there else float("nan"),
            "error": float("nan"),
            "p": boot.pvalue if there else float("nan"),
        }
        return pd.DataFrame.from_dict(rows, orient="index")


def _series(sample: Sample) -> tuple[Floats, bool]:
    """Factors then assets over the rows in use, and whether some of them may be missing."""
    if sample.histories is Histories.COMMON:
        block = sample.common
        return np.column_stack([block.factors, block.returns]), False
    return np.column_stack([sample.factors.to_numpy(dtype=float), sample.returns.to_numpy(dtype=float)]), True
