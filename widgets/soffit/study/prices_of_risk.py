"""Prices of risk with labels and annual units: premia beside factor means, fit and pricing errors."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from soffit.errors import SettingError, nearest
from soffit.estimate.cross_section import PremiumError, TwoPass, two_pass
from soffit.estimate.cross_section_errors import wald_test
from soffit.estimate.cross_section_fit import R2Interval, r2_interval
from soffit.estimate.cross_section_gmm import gmm_pricing_test
from soffit.estimate.rank import Identification, identification
from soffit.estimate.statistic import NotApplicable, TestStatistic
from soffit.intake import Panel
from soffit.settings import BetaWindow, ErrorType, LagRule, Reference, Settings
from soffit.study.sample import Block, Sample

__all__ = ["CONSTANT", "PricesOfRisk", "newey_west_choice"]

Floats = npt.NDArray[np.float64]

CONSTANT = "constant"


def newey_west_choice(settings: Settings) -> int | LagRule:
    """Newey-West lags of mean slopes that the settings ask for."""
    return settings.lags if settings.lag_rule is LagRule.FIXED else settings.lag_rule


@dataclass(frozen=True, eq=False)
class PricesOfRisk:
    """Prices of risk by the two-pass method.

    Premia, means and pricing errors of the properties below are annual decimals; `fit` holds the same per
    period.

    Parameters
    ----------
    sample : Sample
        What was priced.
    block : Block
        Rows and assets of the cross-sections.
    factor_values : ndarray, shape (T, K)
        Factors that were priced: the traded ones, then those of `non_traded`.
    non_traded : tuple of str
        Names of the non-traded factors among them.
    fit : TwoPass
        The estimate.
    identification : Identification
        Whether the betas identify the prices.
    settings : Settings
        Level, reference distribution, error type, bootstrap draws and seed.
    """

    sample: Sample
    block: Block
    factor_values: Floats
    non_traded: tuple[str, ...]
    fit: TwoPass
    identification: Identification
    settings: Settings

    @classmethod
    def of(
        cls, sample: Sample, settings: Settings, panel: Panel, non_traded: Sequence[str] = ()
    ) -> PricesOfRisk:
        """Estimate by the settings.

        Parameters
        ----------
        sample : Sample
            The part of the panel that the settings choose.
        settings : Settings
            Every choice.
        panel : Panel
            Where non-traded factors come from.
        non_traded : sequence of str
            Non-traded factors to price beside the traded ones.

        Raises
        ------
        EstimationError
            If the prices are not identified or the weighting does not exist; see
            :func:`soffit.estimate.cross_section.two_pass`.
        SettingError
            If a named factor is not in the panel.
        """
        block = sample.joint_block
        factors = block.factors
        if non_traded:
            block, factors = _with_non_traded(block, panel, non_traded)
        names = (*sample.factor_names, *non_traded)
        choice = settings.cross_section
        fit = two_pass(
            block.returns,
            factors,
            second_pass=choice.second_pass,
            constant=choice.constant,
            window=choice.window if choice.betas is BetaWindow.ROLLING else None,
            lags=newey_west_choice(settings),
            names=names,
        )
        rank = identification(block.returns, factors, constant=choice.constant, names=names)
        return cls(sample, block, factors, tuple(non_traded), fit, rank, settings)

    @property
    def periods_per_year(self) -> int:
        """Periods in a year, m."""
        return self.sample.periods_per_year

    @property
    def factor_names(self) -> tuple[str, ...]:
        """Names of the K factors, the non-traded ones last."""
        return (*self.sample.factor_names, *self.non_traded)

    @property
    def premium_names(self) -> tuple[str, ...]:
        """Names of the P premia, the constant first if there is one."""
        return (CONSTANT, *self.factor_names) if self.fit.constant else self.factor_names

    @property
    def assets(self) -> pd.Index:
        """Names of the assets that were priced."""
        return self.sample.assets[self.block.positions]

    @property
    def left_out(self) -> tuple[str, ...]:
        """Assets left out because their histories are shorter."""
        return self.sample.left_out(self.block)

    @property
    def dates(self) -> pd.DatetimeIndex:
        """Periods that were priced."""
        return self.block.dates[self.fit.first :]

    @property
    def headline(self) -> PremiumError:
        """Errors that the sentence and the figure use: Shanken's, or Newey-West's where betas roll."""
        return PremiumError.SHANKEN if self.fit.window is None else PremiumError.NEWEY_WEST

    @property
    def reference(self) -> Reference:
        """Reference distribution of the t ratios; Fama-MacBeth's always refer to Student's t."""
        return self.settings.reference

    @cached_property
    def premia(self) -> pd.Series[float]:
        """Prices of risk, the constant's first, decimal a year."""
        return pd.Series(self.fit.premia * self.periods_per_year, index=self.premium_names, name="premium")

    @cached_property
    def slopes(self) -> pd.DataFrame:
        """Premia of each priced period, decimal per period."""
        return pd.DataFrame(self.fit.slopes, index=self.dates, columns=list(self.premium_names))

    @cached_property
    def useless(self) -> tuple[str, ...]:
        """Factors whose betas do not differ across assets beyond noise at 1 − level."""
        found = self.identification.useless(1.0 - self.settings.level)
        return tuple(self.factor_names[k] for k in found)

    @cached_property
    def identified(self) -> bool | NotApplicable:
        """Whether the rank tests of the betas reject that they cannot tell the factors apart."""
        return self.identification.identified(1.0 - self.settings.level)

    def tests(self, kind: PremiumError) -> dict[str, TestStatistic | NotApplicable]:
        """Tests that each premium is zero, by name."""
        return dict(zip(self.premium_names, self.fit.tests(kind, self.reference), strict=True))

    @cached_property
    def gap_test(self) -> TestStatistic | NotApplicable:
        """Joint test that the prices of the traded factors are their means, with the headline errors."""
        covariance = self.fit.gap_covariances[self.headline]
        name, traded = "Prices of risk are factor means, χ²", len(self.sample.factor_names)
        if isinstance(covariance, NotApplicable):
            return NotApplicable(name, covariance.reason)
        if not traded:
            return NotApplicable(name, "no factor is traded")
        null = "every price of risk is its factor's mean"
        source = "shanken-1992" if self.fit.window is None else "newey-west-1987"
        return wald_test(self.fit.gaps[:traded], covariance[:traded, :traded], name, null, source)

    @cached_property
    def gmm(self) -> TestStatistic | NotApplicable:
        """GMM test of the pricing errors, with Newey-West lags where the settings ask for HAC errors."""
        if self.fit.window is not None:
            return NotApplicable(
                "Pricing errors, GMM", "it is known for full-sample betas only, and these betas roll"
            )
        return gmm_pricing_test(
            self.block.returns,
            self.factor_values,
            second_pass=self.fit.second_pass,
            constant=self.fit.constant,
            lags=self.fit.lags if self.settings.error_type is ErrorType.HAC else 0,
        )

    @cached_property
    def r2_ols(self) -> R2Interval | NotApplicable:
        """OLS cross-sectional R² with its bootstrap interval."""
        return self._r2(generalised=False)

    @cached_property
    def r2_gls(self) -> R2Interval | NotApplicable:
        """GLS cross-sectional R² with its bootstrap interval."""
        return self._r2(generalised=True)

    def _r2(self, *, generalised: bool) -> R2Interval | NotApplicable:
        if self.fit.window is not None:
            return NotApplicable(
                "Interval of the cross-sectional R²",
                "it is known for full-sample betas only, and these betas roll",
            )
        return r2_interval(
            self.block.returns,
            self.factor_values,
            self.fit.betas,
            constant=self.fit.constant,
            generalised=generalised,
            draws=self.settings.bootstrap_draws,
            level=self.settings.level,
            seed=self.settings.seed,
        )

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row a premium, annual.

        Columns: premium; error, t and p of each kind of error (``"error Shanken"`` and so on); low and high
        of the headline interval; factor_mean, gap, gap_t, gap_p (headline errors; traded factors only);
        spread_f, spread_p (betas differ across assets). NaN where a number does not exist.
        """
        m, names = self.periods_per_year, list(self.premium_names)
        columns: dict[str, npt.ArrayLike] = {"premium": self.premia.to_numpy()}
        for kind in PremiumError:
            errors, tests = self.fit.standard_errors(kind), self.fit.tests(kind, self.reference)
            columns[f"error {kind}"] = (
                np.full(len(names), np.nan) if isinstance(errors, NotApplicable) else errors * m
            )
            columns[f"t {kind}"] = [_value(test) for test in tests]
            columns[f"p {kind}"] = [_pvalue(test) for test in tests]
        frame = pd.DataFrame(columns, index=names)
        half = frame[f"error {self.headline}"] * self._quantile
        frame["low"], frame["high"] = frame["premium"] - half, frame["premium"] + half
        traded = list(self.sample.factor_names)
        gaps = self.fit.gap_tests(self.headline, self.reference)[: len(traded)]
        later = {
            "factor_mean": self.fit.factor_means[: len(traded)] * m,
            "gap": self.fit.gaps[: len(traded)] * m,
            "gap_t": [_value(test) for test in gaps],
            "gap_p": [_pvalue(test) for test in gaps],
        }
        frame = frame.join(pd.DataFrame(later, index=traded))
        spread = self.identification.spread
        return frame.join(
            pd.DataFrame(
                {"spread_f": [_value(t) for t in spread], "spread_p": [_pvalue(t) for t in spread]},
                index=list(self.factor_names),
            )
        )

    @property
    def _quantile(self) -> float:
        """Quantile of the headline reference distribution that belongs to the level."""
        tests = [t for t in self.fit.tests(self.headline, self.reference) if isinstance(t, TestStatistic)]
        return tests[0].distribution.ppf(0.5 + self.settings.level / 2.0) if tests else float("nan")

    @cached_property
    def asset_table(self) -> pd.DataFrame:
        """One row an asset: mean, fitted, error (decimal a year) and the betas."""
        m = self.periods_per_year
        frame = pd.DataFrame(
            {"mean": self.fit.mean * m, "fitted": self.fit.fitted * m, "error": self.fit.pricing_errors * m},
            index=self.assets,
        )
        for position, name in enumerate(self.factor_names):
            frame[f"beta {name}"] = self.fit.betas[:, position]
        return frame

    @property
    def statistics(self) -> dict[str, TestStatistic | NotApplicable]:
        """Tests of the model as a whole, by name."""
        return {
            "Pricing errors, F": self.fit.pricing_f,
            "Pricing errors, χ²": self.fit.pricing_chi2,
            "Pricing errors, GMM": self.gmm,
            "Prices of risk are factor means": self.gap_test,
            "Rank of betas, Cragg–Donald": self.identification.cragg_donald,
            "Rank of betas, Kleibergen–Paap": self.identification.kleibergen_paap,
        }


def _value(test: TestStatistic | NotApplicable) -> float:
    return float("nan") if isinstance(test, NotApplicable) else test.value


def _pvalue(test: TestStatistic | NotApplicable) -> float:
    return float("nan") if isinstance(test, NotApplicable) else test.pvalue


def _with_non_traded(block: Block, panel: Panel, names: Sequence[str]) -> tuple[Block, Floats]:
    """Cut a block to the periods in which the non-traded factors exist, and put them beside the traded ones."""
    known = [str(name) for name in panel.non_traded.columns]
    for name in names:
        if name not in known:
            hint = nearest(name, known) if known else "give it the role 'non-traded' when the data are opened"
            raise SettingError(f"There is no non-traded factor '{name}' in this panel", remedy=hint)
    extra = panel.non_traded.loc[block.dates, list(names)].to_numpy(dtype=float)
    rows = np.isfinite(extra).all(axis=1)
    cut = Block(block.dates[rows], block.positions, block.returns[rows], block.factors[rows])
    return cut, np.column_stack([cut.factors, extra[rows]])
