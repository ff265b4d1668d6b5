"""Factor regressions with labels; the edge where rates become annual."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.estimate.regression import ErrorChoice, Regression, regress
from soffit.judge.ceiling import AlphaTable
from soffit.settings import Settings
from soffit.study.sample import Block, Sample

__all__ = ["FactorRegression", "error_choice"]

Floats = npt.NDArray[np.float64]


def error_choice(settings: Settings) -> ErrorChoice:
    """The standard errors that the settings ask for."""
    return ErrorChoice(settings.error_type, settings.lag_rule, settings.lags, settings.reference)


@dataclass(frozen=True, eq=False)
class FactorRegression:
    """Regressions of every asset on the factors.

    Alphas, means and volatilities of the properties below are annual decimals; Sharpe and appraisal ratios
    are annual. `pieces` holds the same per period.

    Parameters
    ----------
    sample : Sample
        What was regressed.
    choice : ErrorChoice
        Which standard errors.
    level : float
        Coverage of the intervals.
    pieces : tuple of (Block, Regression)
        One a block of rows; a single one on the common sample.
    """

    sample: Sample
    choice: ErrorChoice
    level: float
    pieces: tuple[tuple[Block, Regression], ...]

    @classmethod
    def of(cls, sample: Sample, settings: Settings) -> FactorRegression:
        """Estimate by the settings.

        Raises
        ------
        EstimationError
            If a block has too few rows or the factors are collinear in it.
        """
        choice = error_choice(settings)
        pieces = tuple(
            (block, regress(block.returns, block.factors, choice=choice, names=sample.factor_names))
            for block in sample.blocks
        )
        return cls(sample, choice, settings.level, pieces)

    def per_asset(self, value: Callable[[Block, Regression], npt.ArrayLike]) -> Floats:
        """Gather a quantity from the pieces into the order of the assets, shape (N,) or (N, …)."""
        parts = [np.asarray(value(block, piece), dtype=float) for block, piece in self.pieces]
        first = parts[0]
        out = np.empty((len(self.sample.assets), *first.shape[1:]))
        for (block, _), part in zip(self.pieces, parts, strict=True):
            out[block.positions] = part
        return out

    def _series(self, values: npt.ArrayLike, name: str) -> pd.Series[float]:
        return pd.Series(np.asarray(values), index=self.sample.assets, name=name)

    @property
    def periods_per_year(self) -> int:
        """Periods in a year, m."""
        return self.sample.periods_per_year

    @cached_property
    def alphas(self) -> AlphaTable:
        """The alphas per period, as the ceiling takes them."""
        return AlphaTable(
            alpha=self.per_asset(lambda _, r: r.alpha),
            sigma=self.per_asset(lambda _, r: r.sigma),
            r2=self.per_asset(lambda _, r: r.r2),
            total=self.per_asset(lambda _, r: r.total),
            t_scale=self.per_asset(lambda _, r: np.full(r.count, r.t_scale)),
            df=self.per_asset(lambda _, r: np.full(r.count, r.fit.df)),
            theta_f=self.per_asset(lambda _, r: np.full(r.count, r.factors.theta)),
            level=self.level,
        )

    @cached_property
    def alpha(self) -> pd.Series[float]:
        """Alphas, decimal a year."""
        return self._series(self.alphas.alpha * self.periods_per_year, "alpha")

    @cached_property
    def beta(self) -> pd.DataFrame:
        """Betas, N×K."""
        values = self.per_asset(lambda _, r: r.beta)
        return pd.DataFrame(values, index=self.sample.assets, columns=list(self.sample.factor_names))

    @cached_property
    def sigma(self) -> pd.Series[float]:
        """Residual volatilities, decimal a year."""
        return self._series(self.alphas.sigma * np.sqrt(self.periods_per_year), "sigma")

    @cached_property
    def appraisal(self) -> pd.Series[float]:
        """Appraisal ratios, annual."""
        return self._series(self.alphas.appraisal * np.sqrt(self.periods_per_year), "appraisal")

    @cached_property
    def residuals(self) -> pd.DataFrame:
        """Residuals, T×N, decimal per period; NaN where an asset is not in its block."""
        out = pd.DataFrame(np.nan, index=self.sample.returns.index, columns=self.sample.assets)
        for block, piece in self.pieces:
            rows = out.index.get_indexer(block.dates)
            out.iloc[rows, block.positions] = piece.residuals
        return out

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row an asset.

        Columns: mean, alpha, alpha_error, alpha_low, alpha_high (decimal a year); t, p; beta of each factor
        and its standard error; sigma, total (decimal a year); r2, adjusted_r2; appraisal, appraisal_low,
        appraisal_high (annual, exact interval); periods, first, last, lags.
        """
        m, root = self.periods_per_year, np.sqrt(self.periods_per_year)
        half = self.per_asset(lambda _, r: r.fit.half_width(self.level)[:, 0]) * m
        low, high = self.alphas.interval
        errors = self.per_asset(lambda _, r: r.fit.errors)
        columns: dict[str, npt.ArrayLike] = {
            "mean": self.per_asset(lambda _, r: r.mean) * m,
            "alpha": self.alpha,
            "alpha_error": errors[:, 0] * m,
            "alpha_low": self.alpha.to_numpy() - half,
            "alpha_high": self.alpha.to_numpy() + half,
            "t": self.per_asset(lambda _, r: r.fit.t[:, 0]),
            "p": self.per_asset(lambda _, r: r.fit.pvalues[:, 0]),
        }
        for position, name in enumerate(self.sample.factor_names):
            columns[f"beta {name}"] = self.beta.iloc[:, position]
            columns[f"error {name}"] = errors[:, position + 1]
        columns |= {
            "sigma": self.sigma,
            "total": self.alphas.total * root,
            "r2": self.alphas.r2,
            "adjusted_r2": self.per_asset(lambda _, r: r.fit.adjusted_r2),
            "appraisal": self.appraisal,
            "appraisal_low": low * root,
            "appraisal_high": high * root,
            "periods": self.per_asset(lambda b, _: np.full(len(b.positions), len(b.dates))).astype(int),
            "first": self._dates(0),
            "last": self._dates(-1),
            "lags": self.per_asset(lambda _, r: r.fit.lags).astype(int),
        }
        return pd.DataFrame(columns, index=self.sample.assets)

    def _dates(self, position: int) -> npt.NDArray[np.datetime64]:
        out = np.empty(len(self.sample.assets), dtype="datetime64[ns]")
        for block, _ in self.pieces:
            out[block.positions] = block.dates[position].to_datetime64()
        return out
